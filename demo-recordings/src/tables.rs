//! From recorded cells to the text of the files of each set, in the two styles the sets are written in.

use crate::Made;
use crate::faults::{self, Fault, Row, insert};
use crate::survey::{Quirk, Recorded, stated_inhibition};
use crate::writer::SetFile;

/// Folder of the set of current steps.
pub const CURRENT_SET: &str = "veltmoor-current";
/// Folder of the set of conductance steps.
pub const CONDUCTANCE_SET: &str = "veltmoor-conductance";

const CURRENT_SETTINGS: &str = r#"# Current steps, one step a sweep. Times in ms, currents in nA; headers as the rig's own export wrote them.
name = "Veltmoor survey, current steps (simulated)"

[tables]
spikes = ["day1/spikes.csv", "day2/spikes.csv.gz"]

[columns.spikes]
cell = "neuron"
sweep = "trace"
time = "spike_time"

[columns.protocol]
cell = "neuron"
sweep = "trace"

[columns.cells]
cell = "neuron"
group = "kind"

[units]
time = "ms"
current = "nA"
"#;

const CONDUCTANCE_SETTINGS: &str = r#"# Conductance steps on one time line a cell. The headers carry the units, the files have their default names.
name = "Veltmoor survey, conductance steps (simulated)"
"#;

/// Lays out the set of current steps: CSV, sweeps, two spike files, ms and nA, headers of its own.
///
/// # Errors
/// As [`crate::make`].
pub fn lay_out_current_set(cells: &[Recorded], made: &mut Made) -> anyhow::Result<()> {
    made.files.push(SetFile::plain(
        format!("{CURRENT_SET}/recording.toml"),
        CURRENT_SETTINGS.to_owned(),
    ));

    let spikes = |day: u32, line: fn(&str, u32, f64) -> String| -> Vec<Row> {
        let cells = cells.iter().filter(|cell| cell.day == day);
        cells
            .flat_map(|cell| {
                cell.spikes.iter().map(move |&(sweep, time_ms)| Row {
                    cell: cell.id.clone(),
                    text: line(&cell.id, sweep.unwrap_or(0), time_ms),
                })
            })
            .collect()
    };
    let day1 = spikes(1, |id, sweep, time_ms| format!("{id},{sweep},{time_ms:.2}"));
    let day2 = spikes(2, |id, sweep, time_ms| format!("{time_ms:.2},{id},{sweep}"));
    table(
        made,
        CURRENT_SET,
        "day1/spikes.csv",
        "neuron,trace,spike_time",
        &day1,
        faults::CURRENT_SPIKES_DAY1,
    )?;
    table(
        made,
        CURRENT_SET,
        "day2/spikes.csv.gz",
        "spike_time,neuron,trace",
        &day2,
        faults::CURRENT_SPIKES_DAY2,
    )?;

    let mut protocol = Vec::new();
    for cell in cells {
        for (i, step) in cell.steps.iter().enumerate() {
            let current_na = step.input.current_pa / 1000.0;
            // Every second half of the cell with mixed drive is conductance, and only there may both be 0.
            let conductance = cell.quirk == Quirk::MixedDrive && i >= cell.steps.len() / 2;
            let drive = if conductance {
                format!(",{:.2}", step.input.g_exc_ns)
            } else {
                format!("{current_na:.3},")
            };
            protocol.push(Row {
                cell: cell.id.clone(),
                text: format!(
                    "{},{},{},{},{drive}",
                    cell.id,
                    step.sweep.unwrap_or(0),
                    step.onset_ms,
                    step.offset_ms
                ),
            });
        }
    }
    let header = "neuron,trace,onset,offset,current_nA,g_exc_nS";
    table(
        made,
        CURRENT_SET,
        "protocol.csv",
        header,
        &protocol,
        faults::CURRENT_PROTOCOL,
    )?;

    let described = (0..)
        .zip(cells)
        .filter(|(_, cell)| cell.quirk != Quirk::NotInTable);
    let rows: Vec<Row> = described
        .map(|(i, cell): (u32, _)| {
            let m = cell.cell.membrane;
            // Spike threshold was read off for two cells of three.
            let threshold = if i % 3 == 2 {
                String::new()
            } else {
                format!("{:.1}", m.v_threshold_mv)
            };
            Row {
                cell: cell.id.clone(),
                text: format!(
                    "{},{},{},{},{:.1},{:.1},{threshold},{:.0}",
                    cell.id,
                    cell.kind.name(),
                    cell.day,
                    180 + i * 37 % 210,
                    m.g_leak_ns,
                    m.e_leak_mv,
                    m.capacitance_pf
                ),
            }
        })
        .collect();
    let header = "neuron,kind,day,depth_um,g_leak,e_leak,v_threshold,capacitance";
    table(
        made,
        CURRENT_SET,
        "cells.csv",
        header,
        &rows,
        faults::CURRENT_CELLS,
    )
}

/// Lays out the set of conductance steps: tab-separated, one time line a cell, s and nS, units in the headers.
///
/// # Errors
/// As [`crate::make`].
pub fn lay_out_conductance_set(cells: &[Recorded], made: &mut Made) -> anyhow::Result<()> {
    made.files.push(SetFile::plain(
        format!("{CONDUCTANCE_SET}/recording.toml"),
        CONDUCTANCE_SETTINGS.to_owned(),
    ));

    let mut spikes = Vec::new();
    let mut protocol = Vec::new();
    for cell in cells {
        spikes.extend(cell.spikes.iter().map(|&(_, time_ms)| Row {
            cell: cell.id.clone(),
            text: format!("{}\t{:.4}", cell.id, time_ms / 1000.0),
        }));
        protocol.extend(cell.steps.iter().map(|step| {
            let inhibition =
                stated_inhibition(cell, step).map_or(String::new(), |g_inh| format!("{g_inh:.1}"));
            Row {
                cell: cell.id.clone(),
                text: format!(
                    "{}\t{:.3}\t{:.3}\t{:.2}\t{inhibition}",
                    cell.id,
                    step.onset_ms / 1000.0,
                    step.offset_ms / 1000.0,
                    step.input.g_exc_ns
                ),
            }
        }));
    }
    table(
        made,
        CONDUCTANCE_SET,
        "spikes.tsv.gz",
        "cell\ttime_s",
        &spikes,
        faults::CONDUCTANCE_SPIKES,
    )?;
    let header = "cell\tonset_s\toffset_s\tg_exc_nS\tg_inh_nS";
    table(
        made,
        CONDUCTANCE_SET,
        "protocol.tsv",
        header,
        &protocol,
        faults::CONDUCTANCE_PROTOCOL,
    )?;

    let described = (0..)
        .zip(cells)
        .filter(|(_, cell)| cell.quirk != Quirk::NotInTable);
    let rows: Vec<Row> = described
        .map(|(i, cell): (u32, _)| {
            let m = cell.cell.membrane;
            let threshold = if i % 4 == 3 {
                String::new()
            } else {
                format!("{:.1}", m.v_threshold_mv)
            };
            Row {
                cell: cell.id.clone(),
                text: format!(
                    "{}\t{}\t{:.1}\t{:.1}\t{:.0}\t{:.0}\t{threshold}\t{:.0}",
                    cell.id,
                    cell.kind.name(),
                    m.g_leak_ns,
                    m.e_leak_mv,
                    cell.cell.e_exc_mv,
                    cell.cell.e_inh_mv,
                    m.capacitance_pf
                ),
            }
        })
        .collect();
    let header = "cell\tgroup\tg_leak_nS\te_leak_mV\te_exc_mV\te_inh_mV\tv_threshold_mV\tcapacitance_pF";
    table(
        made,
        CONDUCTANCE_SET,
        "cells.tsv",
        header,
        &rows,
        faults::CONDUCTANCE_CELLS,
    )
}

fn table(
    made: &mut Made,
    set: &str,
    name: &str,
    header: &str,
    rows: &[Row],
    faults: &[Fault],
) -> anyhow::Result<()> {
    let path = format!("{set}/{name}");
    let lines = insert(&path, rows, faults, &mut made.faults)?;
    let mut text = String::from(header);
    for line in lines {
        text.push('\n');
        text.push_str(&line);
    }
    text.push('\n');
    made.files.push(if name.ends_with(".gz") {
        SetFile::gzipped(path, &text)
    } else {
        SetFile::plain(path, text)
    });
    Ok(())
}

#[cfg(test)]
mod tests {
    #![allow(clippy::unwrap_used)]
    use std::collections::HashSet;

    use super::*;
    use crate::{make, survey};

    /// Rounding to the resolution of the files must not make two spikes one, and no repeat but the listed ones exists.
    #[test]
    fn only_the_listed_rows_repeat() {
        let made = make().unwrap();
        for file in made.files.iter().filter(|file| !file.path.ends_with(".toml")) {
            let text = file.text().unwrap();
            let mut seen = HashSet::new();
            let repeats = text.lines().filter(|line| !seen.insert(*line)).count();
            let listed = made.faults.iter().filter(|fault| fault.file == file.path);
            let listed = listed.filter(|fault| fault.what.starts_with("repeats")).count();
            assert_eq!(repeats, listed, "{}", file.path);
        }
    }

    #[test]
    fn every_spike_and_step_has_its_row() {
        let made = make().unwrap();
        let rows = |path: &str| {
            made.files
                .iter()
                .find(|file| file.path == path)
                .unwrap()
                .text()
                .unwrap()
                .lines()
                .count()
        };
        let bad = |path: &str| made.faults.iter().filter(|fault| fault.file == path).count();
        let good = |path: &str| rows(path) - 1 - bad(path);
        let current = survey::current_set();
        let conductance = survey::conductance_set();
        let spikes = |cells: &[Recorded]| cells.iter().map(|cell| cell.spikes.len()).sum::<usize>();
        let steps = |cells: &[Recorded]| cells.iter().map(|cell| cell.steps.len()).sum::<usize>();
        assert_eq!(
            good("veltmoor-current/day1/spikes.csv") + good("veltmoor-current/day2/spikes.csv.gz"),
            spikes(&current)
        );
        assert_eq!(good("veltmoor-current/protocol.csv"), steps(&current));
        assert_eq!(good("veltmoor-current/cells.csv"), current.len() - 1);
        assert_eq!(good("veltmoor-conductance/spikes.tsv.gz"), spikes(&conductance));
        assert_eq!(good("veltmoor-conductance/protocol.tsv"), steps(&conductance));
        assert_eq!(good("veltmoor-conductance/cells.tsv"), conductance.len() - 1);
    }
}
