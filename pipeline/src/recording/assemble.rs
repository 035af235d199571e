//! The three tables meet: every cell gets its sweeps, steps and spikes, and every row is accounted for.
//!
//! Rows are counted into place by their group codes (one pass to count, one to fill), which takes time in proportion
//! to the rows whatever their order, and nothing beyond the result. Each sweep is then sorted on its own where it is
//! not sorted already.

use std::sync::Arc;

use rayon::prelude::*;

use super::cells::Cells;
use super::error::{Problem, ReadError};
use super::model::{
    CellConstants, CellId, CellRecording, CellRefusal, DriveKind, ProtocolStep, RefusedRow, RowCounts, Sweep,
    TableKind,
};
use super::names::{Groups, MISSING, Names};
use super::protocol::{Protocol, StepRow, disjoint};
use super::rules::{self, Rule};
use super::set_file::SET_FILE;
use super::spikes::{REFUSED, Spikes};
use super::table::{Context, Refusal, Span, locate, shown_name};

/// The tables as read, and the names they share.
pub struct Tables {
    /// The spike table.
    pub spikes: Spikes,
    /// The protocol.
    pub protocol: Protocol,
    /// The cell table.
    pub cells: Cells,
    /// Names of the cells.
    pub cell_names: Names,
    /// Names of the sweeps.
    pub sweep_names: Names,
    /// Pairs of cell and sweep.
    pub groups: Groups,
}

/// What comes out.
pub struct Assembled {
    /// The cells in natural order.
    pub cells: Vec<CellRecording>,
    /// Whether the tables have sweeps.
    pub has_sweeps: bool,
    /// Counts of the spike table.
    pub spike_rows: RowCounts,
    /// Counts of the protocol.
    pub protocol_rows: RowCounts,
    /// Counts of the cell table.
    pub cell_rows: Option<RowCounts>,
}

/// What becomes of the spikes of a group.
#[derive(Clone, Copy)]
enum Fate {
    /// Index of the cell, index of the sweep within it.
    Placed(u32, u32),
    Refused(&'static Rule),
}

/// Brings the tables together. Refused rows and notes go into `context`.
///
/// # Errors
/// `Data` where the tables do not fit each other as a whole; `Internal` where the rows do not add up.
pub fn assemble(mut tables: Tables, context: &mut Context<'_>) -> Result<Assembled, ReadError> {
    let has_sweeps = settle_sweeps(&mut tables, context)?;
    context.check_cancel()?;

    let order = tables.cell_names.in_natural_order();
    let mut place = vec![0_u32; order.len()];
    for (at, &code) in order.iter().enumerate() {
        place[code as usize] = at as u32;
    }
    let mut cells = empty_cells(&mut tables, &order, &place);
    let groups = named_groups(&tables, &place, has_sweeps);
    let steps_used = place_steps(&mut tables, context, &mut cells, &groups, &place, has_sweeps);
    context.check_cancel()?;

    let fates = fates(&tables, &cells, &groups, &place, has_sweeps);
    let spikes_rows = tables.spikes.group.len() as u64;
    refuse_strangers(&tables, context, &fates)?;
    place_spikes(&tables, context, &mut cells, &fates);
    context.check_cancel()?;
    let spikes_used = cells.par_iter().map(spikes_in_steps).sum::<u64>();
    let placed = cells
        .par_iter()
        .map(|cell| cell.spikes_s.len() as u64)
        .sum::<u64>();
    if spikes_used == 0 && placed > 0 {
        check_time_unit(&cells, context)?;
    }
    note_cells_without_protocol(&tables, context, &order, &groups);

    let refused_in = |table| context.refused.iter().filter(|row| row.table == table).count() as u64;
    let spike_rows = RowCounts {
        rows: spikes_rows,
        used: spikes_used,
        outside_steps: placed - spikes_used,
        refused: refused_in(TableKind::Spikes),
    };
    let protocol_rows = RowCounts {
        rows: tables.protocol.total,
        used: steps_used,
        outside_steps: 0,
        refused: refused_in(TableKind::Protocol),
    };
    let cell_rows = tables.cells.total.map(|rows| RowCounts {
        rows,
        used: tables.cells.rows.len() as u64,
        outside_steps: 0,
        refused: refused_in(TableKind::Cells),
    });
    check_sum(TableKind::Spikes, spike_rows)?;
    check_sum(TableKind::Protocol, protocol_rows)?;
    if let Some(counts) = cell_rows {
        check_sum(TableKind::Cells, counts)?;
    }
    Ok(Assembled {
        cells,
        has_sweeps,
        spike_rows,
        protocol_rows,
        cell_rows,
    })
}

/// `rows = used + outside steps + refused`, or a fault of this program.
fn check_sum(table: TableKind, counts: RowCounts) -> Result<(), ReadError> {
    if counts.rows == counts.used + counts.outside_steps + counts.refused {
        return Ok(());
    }
    Err(ReadError::Internal {
        table: table.name(),
        rows: counts.rows,
        used: counts.used,
        outside: counts.outside_steps,
        refused: counts.refused,
    })
}

/// Whether the set has sweeps; rows without one are refused where it has.
fn settle_sweeps(tables: &mut Tables, context: &mut Context<'_>) -> Result<bool, ReadError> {
    let pairs = tables.groups.pairs();
    let has_sweep = |group: u32| group != REFUSED && pairs[group as usize].1 != MISSING;
    // A column that is empty from top to bottom is no column: some exports always write one.
    let column = |spans: &[Span]| spans.first().is_some_and(|span| span.has_sweep);
    let in_spikes = column(&tables.spikes.spans) && tables.spikes.group.iter().any(|&group| has_sweep(group));
    let in_protocol =
        column(&tables.protocol.spans) && tables.protocol.named.iter().any(|&group| has_sweep(group));
    for (spans, filled) in [
        (&tables.spikes.spans, in_spikes),
        (&tables.protocol.spans, in_protocol),
    ] {
        if let Some(span) = spans.first().filter(|span| span.has_sweep && !filled) {
            let file = &context.inputs[span.input].path;
            context
                .notes
                .push(format!("{file}: the sweep column is empty and counts as absent"));
        }
    }
    let any_spikes = tables.spikes.group.iter().any(|&group| group != REFUSED);
    let any_protocol = !tables.protocol.named.is_empty();
    if in_spikes != in_protocol && any_spikes && any_protocol {
        let file = |spans: &[Span]| {
            spans
                .first()
                .map(|span| context.inputs[span.input].path.clone())
                .unwrap_or_default()
        };
        let (spikes, protocol) = (file(&tables.spikes.spans), file(&tables.protocol.spans));
        let (with, without) = if in_spikes {
            (spikes, protocol)
        } else {
            (protocol, spikes)
        };
        return Err(ReadError::Data(Problem::of_file(
            without.clone(),
            format!("has no sweep column, but {with} has sweeps, so times cannot be matched"),
            format!(
                "add the sweep column to {without}; or, where time runs on through the whole recording, remove it from {with}"
            ),
        )));
    }
    let has_sweeps = in_spikes || in_protocol;
    if has_sweeps {
        let rows = std::mem::take(&mut tables.protocol.rows);
        let (kept, without): (Vec<StepRow>, Vec<StepRow>) = rows
            .into_iter()
            .partition(|row| pairs[row.group as usize].1 != MISSING);
        tables.protocol.rows = kept;
        for row in without {
            let refusal = refuse_step(tables, &row, rules::MISSING_SWEEP, None);
            context.refused.push(refusal);
        }
    }
    Ok(has_sweeps)
}

fn refuse_step(tables: &Tables, row: &StepRow, rule: &'static Rule, detail: Option<&str>) -> RefusedRow {
    let column = (rule == rules::MISSING_SWEEP).then_some("sweep");
    Refusal {
        table: TableKind::Protocol,
        at: locate(&tables.protocol.spans, row.row),
        group: tables.groups.pairs()[row.group as usize],
        column,
        value: None,
        rule,
        detail,
    }
    .into_row(&tables.cell_names, &tables.sweep_names)
}

/// One recording a cell, with what the cell table says and nothing else yet.
fn empty_cells(tables: &mut Tables, order: &[u32], place: &[u32]) -> Vec<CellRecording> {
    let width = tables.cells.carried.len();
    let mut cells: Vec<CellRecording> = order
        .iter()
        .filter_map(|&code| tables.cell_names.name(code))
        .map(|name| CellRecording {
            id: CellId(Arc::clone(name)),
            group: None,
            drive_kind: DriveKind::Current,
            constants: CellConstants::default(),
            carried: vec![None; width],
            sweeps: Vec::new(),
            steps: Vec::new(),
            spikes_s: Vec::new(),
            duplicate_spikes: 0,
            refusal: None,
        })
        .collect();
    for row in &mut tables.cells.rows {
        let cell = &mut cells[place[row.cell as usize] as usize];
        cell.group = row.group.take();
        cell.constants = row.constants;
        cell.carried = std::mem::take(&mut row.carried);
    }
    cells
}

/// Groups the protocol names, in the order of their cells and, within a cell, of their sweeps.
struct NamedGroups {
    /// Group codes in order.
    order: Vec<u32>,
    /// Whether a group is among them, by group code.
    named: Vec<bool>,
    /// Whether the protocol names a cell at all, by cell code.
    cell_named: Vec<bool>,
}

fn named_groups(tables: &Tables, place: &[u32], has_sweeps: bool) -> NamedGroups {
    let pairs = tables.groups.pairs();
    let mut sweep_rank = vec![0_u32; tables.sweep_names.len()];
    for (rank, &code) in tables.sweep_names.in_natural_order().iter().enumerate() {
        sweep_rank[code as usize] = rank as u32;
    }
    let mut named = vec![false; pairs.len()];
    let mut cell_named = vec![false; place.len()];
    for &group in &tables.protocol.named {
        let (cell, sweep) = pairs[group as usize];
        cell_named[cell as usize] = true;
        named[group as usize] = !has_sweeps || sweep != MISSING;
    }
    let mut order: Vec<u32> = (0..pairs.len() as u32)
        .filter(|&group| named[group as usize])
        .collect();
    order.par_sort_unstable_by_key(|&group| {
        let (cell, sweep) = pairs[group as usize];
        (
            place[cell as usize],
            sweep_rank.get(sweep as usize).copied().unwrap_or(0),
        )
    });
    NamedGroups {
        order,
        named,
        cell_named,
    }
}

/// Gives every cell its sweeps and steps; returns the number of protocol rows used.
fn place_steps(
    tables: &mut Tables,
    context: &mut Context<'_>,
    cells: &mut [CellRecording],
    groups: &NamedGroups,
    place: &[u32],
    has_sweeps: bool,
) -> u64 {
    let pairs = tables.groups.pairs().to_vec();
    // Rows of each group, in the order of the rows.
    let mut rows = std::mem::take(&mut tables.protocol.rows);
    let mut position = vec![u32::MAX; pairs.len()];
    for (at, &group) in groups.order.iter().enumerate() {
        position[group as usize] = at as u32;
    }
    rows.sort_by_key(|row| position[row.group as usize]);
    let mut rows = rows.into_iter().peekable();
    let mut used = 0;
    let mut at = 0;
    while at < groups.order.len() {
        let cell_code = pairs[groups.order[at] as usize].0;
        let mut steps: Vec<(usize, Vec<StepRow>)> = Vec::new();
        let cell = &mut cells[place[cell_code as usize] as usize];
        while let Some(&group) = groups
            .order
            .get(at)
            .filter(|&&group| pairs[group as usize].0 == cell_code)
        {
            let mut of_sweep = Vec::new();
            while let Some(row) = rows.next_if(|row| row.group == group) {
                of_sweep.push(row);
            }
            let (kept, refused) = disjoint(of_sweep, &tables.protocol.spans);
            for (row, rule, what) in refused {
                let refusal = refuse_step(tables, &row, rule, Some(&what));
                context.refused.push(refusal);
            }
            let name = has_sweeps
                .then(|| tables.sweep_names.name(pairs[group as usize].1).cloned())
                .flatten();
            steps.push((cell.sweeps.len(), kept));
            cell.sweeps.push(Sweep { name, spikes: 0..0 });
            at += 1;
        }
        if let Some(row) = steps.iter().flat_map(|(_, rows)| rows).next() {
            cell.drive_kind = row.kind;
        }
        if let Some((rule, detail)) = refuse_cell(&steps) {
            for row in steps.iter().flat_map(|(_, rows)| rows) {
                let refusal = refuse_step(tables, row, rule, Some(&detail));
                context.refused.push(refusal);
            }
            cell.refusal = Some(CellRefusal {
                rule: rule.name,
                sentence: format!("{detail}; {}", rule.remedy),
            });
            cell.sweeps.clear();
            continue;
        }
        for (sweep, rows) in steps {
            for (index, row) in rows.into_iter().enumerate() {
                let step = match tables.protocol.labels.name(row.label) {
                    Some(label) => Arc::clone(label),
                    None => (index + 1).to_string().into(),
                };
                cell.steps.push(ProtocolStep {
                    sweep,
                    step,
                    onset_s: row.onset,
                    offset_s: row.offset,
                    drive: row.drive,
                    g_inh_ns: Some(row.g_inh).filter(|g_inh| !g_inh.is_nan()),
                });
                used += 1;
            }
        }
    }
    used
}

/// The rule a whole cell breaks, and what is wrong.
fn refuse_cell(steps: &[(usize, Vec<StepRow>)]) -> Option<(&'static Rule, String)> {
    let rows = || steps.iter().flat_map(|(_, rows)| rows);
    let currents = rows().filter(|row| row.kind == DriveKind::Current).count();
    let conductances = rows().count() - currents;
    if currents > 0 && conductances > 0 {
        let detail = format!("the cell has {currents} current steps and {conductances} conductance steps");
        return Some((rules::MIXED_DRIVE, detail));
    }
    // A row without g_inh has no inhibition.
    let inhibition = |row: &StepRow| if row.g_inh.is_nan() { 0.0 } else { row.g_inh };
    let (mut low, mut high) = (f64::INFINITY, f64::NEG_INFINITY);
    for row in rows() {
        low = low.min(inhibition(row));
        high = high.max(inhibition(row));
    }
    (high > low).then(|| {
        let detail = format!(
            "g_inh goes from {low} nS to {high} nS, and {}",
            rules::VARYING_INHIBITION.what
        );
        (rules::VARYING_INHIBITION, detail)
    })
}

/// What becomes of the spikes of every group.
fn fates(
    tables: &Tables,
    cells: &[CellRecording],
    groups: &NamedGroups,
    place: &[u32],
    has_sweeps: bool,
) -> Vec<Fate> {
    let pairs = tables.groups.pairs();
    let mut fates: Vec<Fate> = pairs
        .iter()
        .enumerate()
        .map(|(group, &(cell, sweep))| {
            let recording = &cells[place[cell as usize] as usize];
            Fate::Refused(if has_sweeps && sweep == MISSING {
                rules::MISSING_SWEEP
            } else if !groups.cell_named[cell as usize] {
                rules::UNKNOWN_CELL
            } else if let Some(rule) = recording
                .refusal
                .as_ref()
                .and_then(|refusal| rules::rule(refusal.rule))
            {
                rule
            } else if groups.named[group] {
                return Fate::Placed(place[cell as usize], 0);
            } else {
                rules::UNKNOWN_SWEEP
            })
        })
        .collect();
    // Sweeps were pushed in the order of the groups, so a group's place within its cell is its turn.
    let mut turn = 0;
    let mut last = None;
    for &group in &groups.order {
        let cell = pairs[group as usize].0;
        turn = if last == Some(cell) { turn + 1 } else { 0 };
        last = Some(cell);
        if let Fate::Placed(_, sweep) = &mut fates[group as usize] {
            *sweep = turn;
        }
    }
    fates
}

/// Lists the spikes that no protocol row asks for, after making sure that they are not all of them.
fn refuse_strangers(tables: &Tables, context: &mut Context<'_>, fates: &[Fate]) -> Result<(), ReadError> {
    let spikes = &tables.spikes;
    let pairs = tables.groups.pairs();
    let mut present = vec![false; fates.len()];
    for &group in &spikes.group {
        if group != REFUSED {
            present[group as usize] = true;
        }
    }
    let groups = || (0..fates.len()).filter(|&group| present[group]);
    let broken = |group: usize| match fates[group] {
        Fate::Placed(..) => None,
        Fate::Refused(rule) => Some(rule),
    };
    if groups().all(|group| broken(group).is_none()) {
        return Ok(());
    }
    let all = |rule: &'static Rule| groups().all(|group| broken(group) == Some(rule));
    let file = |spans: &[Span]| {
        spans
            .first()
            .map(|span| context.inputs[span.input].path.clone())
            .unwrap_or_default()
    };
    if !tables.protocol.named.is_empty() && (all(rules::UNKNOWN_CELL) || all(rules::UNKNOWN_SWEEP)) {
        let by_cell = all(rules::UNKNOWN_CELL);
        let name = |group: usize| {
            let (cell, sweep) = pairs[group];
            let name = if by_cell {
                tables.cell_names.name(cell)
            } else {
                tables.sweep_names.name(sweep)
            };
            name.map(|name| shown_name(name)).unwrap_or_default()
        };
        let in_spikes = examples(groups().map(name));
        let in_protocol = examples(tables.protocol.named.iter().map(|&group| name(group as usize)));
        let word = if by_cell { "cell" } else { "sweep" };
        return Err(ReadError::Data(Problem::of_file(
            file(&spikes.spans),
            format!(
                "not one {word} of the spike table is in the protocol: spikes have {in_spikes}, the protocol has {in_protocol}"
            ),
            format!("write the names alike in both tables; [columns] in {SET_FILE} chooses another column"),
        )));
    }
    for (row, &group) in spikes.group.iter().enumerate() {
        if group == REFUSED {
            continue;
        }
        let Fate::Refused(rule) = fates[group as usize] else {
            continue;
        };
        let pair = pairs[group as usize];
        let (column, value) = if rule == rules::UNKNOWN_SWEEP {
            (
                Some("sweep"),
                tables.sweep_names.name(pair.1).map(|name| name.to_string()),
            )
        } else if rule == rules::MISSING_SWEEP {
            (Some("sweep"), None)
        } else {
            (None, None)
        };
        let refusal = Refusal {
            table: TableKind::Spikes,
            at: locate(&spikes.spans, row as u64),
            group: pair,
            column,
            value,
            rule,
            detail: Some(rule.what),
        };
        context
            .refused
            .push(refusal.into_row(&tables.cell_names, &tables.sweep_names));
    }
    Ok(())
}

/// The first few distinct names.
fn examples(names: impl Iterator<Item = String>) -> String {
    let mut first: Vec<String> = Vec::new();
    for name in names {
        if first.len() == 3 {
            break;
        }
        if !first.contains(&name) {
            first.push(name);
        }
    }
    first.join(", ")
}

/// Fills every cell's spikes, sorts each sweep and refuses spikes that repeat another's time.
fn place_spikes(tables: &Tables, context: &mut Context<'_>, cells: &mut [CellRecording], fates: &[Fate]) {
    let spikes = &tables.spikes;
    let mut count = vec![0_usize; fates.len()];
    for &group in &spikes.group {
        if group != REFUSED {
            count[group as usize] += 1;
        }
    }
    let mut cursor = vec![0_usize; fates.len()];
    let mut target = vec![u32::MAX; fates.len()];
    // Sweep by sweep within a cell: ranges are laid out in two passes, lengths first.
    for (group, fate) in fates.iter().enumerate() {
        if let Fate::Placed(cell, sweep) = *fate {
            cells[cell as usize].sweeps[sweep as usize].spikes = 0..count[group];
        }
    }
    for cell in cells.iter_mut() {
        let mut start = 0;
        for sweep in &mut cell.sweeps {
            let length = sweep.spikes.len();
            sweep.spikes = start..start + length;
            start += length;
        }
        cell.spikes_s = vec![0.0; start];
    }
    for (group, fate) in fates.iter().enumerate() {
        if let Fate::Placed(cell, sweep) = *fate {
            target[group] = cell;
            cursor[group] = cells[cell as usize].sweeps[sweep as usize].spikes.start;
        }
    }
    for (&group, &time) in spikes.group.iter().zip(&spikes.time) {
        if group == REFUSED || target[group as usize] == u32::MAX {
            continue;
        }
        let group = group as usize;
        cells[target[group] as usize].spikes_s[cursor[group]] = time;
        cursor[group] += 1;
    }
    let repeated: Vec<(u32, u32)> = cells
        .par_iter_mut()
        .enumerate()
        .flat_map_iter(|(index, cell)| {
            let mut repeated = Vec::new();
            for (at, sweep) in cell.sweeps.iter().enumerate() {
                let times = &mut cell.spikes_s[sweep.spikes.clone()];
                if !times.is_sorted() {
                    times.sort_unstable_by(f64::total_cmp);
                }
                if times.windows(2).any(|pair| pair[0] == pair[1]) {
                    repeated.push((index as u32, at as u32));
                }
            }
            repeated
        })
        .collect();
    if !repeated.is_empty() {
        refuse_repeats(tables, context, cells, fates, &repeated);
    }
}

/// Refuses, in the sweeps listed, every spike whose time an earlier row has.
fn refuse_repeats(
    tables: &Tables,
    context: &mut Context<'_>,
    cells: &mut [CellRecording],
    fates: &[Fate],
    repeated: &[(u32, u32)],
) {
    let spikes = &tables.spikes;
    let concerned: Vec<bool> = fates
        .iter()
        .map(|fate| matches!(*fate, Fate::Placed(cell, sweep) if repeated.binary_search(&(cell, sweep)).is_ok()))
        .collect();
    let mut rows: Vec<(u32, f64, u64)> = spikes
        .group
        .iter()
        .zip(&spikes.time)
        .enumerate()
        .filter(|(_, (group, _))| **group != REFUSED && concerned[**group as usize])
        .map(|(row, (group, time))| (*group, *time, row as u64))
        .collect();
    rows.par_sort_unstable_by(|a, b| a.0.cmp(&b.0).then(a.1.total_cmp(&b.1)).then(a.2.cmp(&b.2)));
    for pair in rows.windows(2) {
        let ((group, time, _), (next_group, next_time, row)) = (pair[0], pair[1]);
        if group != next_group || time != next_time {
            continue;
        }
        let detail = format!("time {time} s: {}", rules::DUPLICATE_SPIKE.what);
        let refusal = Refusal {
            table: TableKind::Spikes,
            at: locate(&spikes.spans, row),
            group: tables.groups.pairs()[group as usize],
            column: Some("time"),
            value: Some(time.to_string()),
            rule: rules::DUPLICATE_SPIKE,
            detail: Some(&detail),
        };
        context
            .refused
            .push(refusal.into_row(&tables.cell_names, &tables.sweep_names));
    }
    let mut concerned: Vec<u32> = repeated.iter().map(|(cell, _)| *cell).collect();
    concerned.dedup();
    for cell in concerned {
        let cell = &mut cells[cell as usize];
        let mut kept = Vec::with_capacity(cell.spikes_s.len());
        for sweep in &mut cell.sweeps {
            let start = kept.len();
            for &time in &cell.spikes_s[sweep.spikes.clone()] {
                if kept.len() == start || kept.last() != Some(&time) {
                    kept.push(time);
                }
            }
            sweep.spikes = start..kept.len();
        }
        cell.duplicate_spikes = cell.spikes_s.len() - kept.len();
        cell.spikes_s = kept;
    }
}

/// Number of a cell's spikes inside its steps.
fn spikes_in_steps(cell: &CellRecording) -> u64 {
    cell.steps
        .iter()
        .map(|step| cell.spikes_in(step).len() as u64)
        .sum()
}

/// Every spike lies outside every step: stops where another unit of time would put most of them inside.
fn check_time_unit(cells: &[CellRecording], context: &Context<'_>) -> Result<(), ReadError> {
    let total: u64 = cells.par_iter().map(|cell| cell.spikes_s.len() as u64).sum();
    let inside = |factor: f64| -> u64 {
        cells
            .par_iter()
            .map(|cell| {
                let mut inside = 0;
                for step in &cell.steps {
                    let spikes = &cell.spikes_s[cell.sweeps[step.sweep].spikes.clone()];
                    let before = |limit: f64| spikes.partition_point(|&time| time * factor < limit);
                    inside += before(step.offset_s).saturating_sub(before(step.onset_s)) as u64;
                }
                inside
            })
            .sum()
    };
    let latest = |values: &mut dyn Iterator<Item = f64>| values.fold(0.0, f64::max);
    let latest_spike = latest(&mut cells.iter().flat_map(|cell| cell.spikes_s.iter().copied()));
    let latest_offset = latest(
        &mut cells
            .iter()
            .flat_map(|cell| cell.steps.iter().map(|step| step.offset_s)),
    );
    for (factor, table, smaller) in [
        (1e-3, TableKind::Spikes, 1000),
        (1e3, TableKind::Protocol, 1000),
        (1e-6, TableKind::Spikes, 1_000_000),
        (1e6, TableKind::Protocol, 1_000_000),
    ] {
        // Steps that start at 0 would take in nearly anything made small enough, so the largest times must agree too.
        let ratio = latest_spike * factor / latest_offset;
        let fitting = inside(factor);
        if fitting * 2 <= total || !(1.0 / 30.0..=30.0).contains(&ratio) {
            continue;
        }
        let range = |values: &mut dyn Iterator<Item = f64>| {
            let (low, high) = values.fold((f64::INFINITY, f64::NEG_INFINITY), |(low, high), value| {
                (low.min(value), high.max(value))
            });
            format!("{low} s to {high} s")
        };
        let spikes = range(&mut cells.iter().flat_map(|cell| cell.spikes_s.iter().copied()));
        let steps = range(
            &mut cells
                .iter()
                .flat_map(|cell| cell.steps.iter().flat_map(|step| [step.onset_s, step.offset_s])),
        );
        let file = |wanted| {
            context
                .inputs
                .iter()
                .find(|input| input.table == Some(wanted))
                .map(|input| input.path.clone())
                .unwrap_or_default()
        };
        let read_as = context
            .time_units
            .iter()
            .find(|(of, _)| *of == table)
            .map_or("s", |(_, unit)| unit);
        let name = table.name();
        let remedy = match (read_as, smaller) {
            ("s", 1000) => Some("ms"),
            ("s", _) | ("ms", 1000) => Some("us"),
            _ => None,
        }
        .map_or_else(
            || format!("check the unit of the times of {}, which were read as {read_as}", file(table)),
            |unit| {
                format!(
                    "the times of {} were read as {read_as}; if they are in {unit}, add to {SET_FILE} (and take any other \
                     unit out of the header):\n[units.{name}]\ntime = {unit:?}",
                    file(table)
                )
            },
        );
        return Err(ReadError::Data(Problem::of_file(
            file(table),
            format!(
                "no spike lies inside a step: spikes run from {spikes}, the steps of the protocol from {steps}; with the \
                 times of the {name} table {smaller} times smaller, {fitting} of {total} spikes would"
            ),
            remedy,
        )));
    }
    Ok(())
}

/// Cells that are read but have nothing to analyse are named, never passed over.
fn note_cells_without_protocol(
    tables: &Tables,
    context: &mut Context<'_>,
    order: &[u32],
    groups: &NamedGroups,
) {
    let without: Vec<&str> = order
        .iter()
        .filter(|&&code| !groups.cell_named[code as usize])
        .filter_map(|&code| tables.cell_names.name(code))
        .map(|name| &**name)
        .collect();
    const SHOWN: usize = 10;
    if without.is_empty() {
        return;
    }
    let mut list = without
        .iter()
        .take(SHOWN)
        .map(|name| shown_name(name))
        .collect::<Vec<_>>()
        .join(", ");
    if without.len() > SHOWN {
        list.push_str(&format!(" and {} more", without.len() - SHOWN));
    }
    let count = without.len();
    let cells = if count == 1 {
        "1 cell has".to_owned()
    } else {
        format!("{count} cells have")
    };
    context.notes.push(format!(
        "{cells} no row in the protocol and so no step to analyse: {list}"
    ));
}
