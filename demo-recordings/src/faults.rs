//! The rows made bad on purpose, so that the demo also shows what is refused and why.
//!
//! Every one is an extra row: no good row is damaged, and none of them has spikes or steps that hang on it. `reason` is
//! the word the program under demonstration gives for the row.

use anyhow::{Context, bail};

/// A good row, or a row of a file to be: the cell it is about, and its text.
#[derive(Clone, Debug, PartialEq)]
pub struct Row {
    /// The cell.
    pub cell: String,
    /// The line, without its end.
    pub text: String,
}

/// What a bad row says.
#[derive(Clone, Copy, Debug)]
pub enum Text {
    /// This.
    Is(&'static str),
    /// The same as the row before it.
    Again,
}

/// A bad row: behind which good row it stands, and what it says.
#[derive(Clone, Copy, Debug)]
pub struct Fault {
    /// The cell of that good row.
    pub cell: &'static str,
    /// Which of that cell's rows in the file, from 1.
    pub behind: usize,
    /// The bad row.
    pub text: Text,
    /// Why it is refused, in one word.
    pub reason: &'static str,
    /// The same for people.
    pub what: &'static str,
}

/// A bad row in its file.
#[derive(Clone, Debug, PartialEq)]
pub struct Placed {
    /// Path of the file below this crate's folder.
    pub file: String,
    /// Row, from 1, the header not counted.
    pub row: usize,
    /// The line.
    pub text: String,
    /// Why it is refused, in one word.
    pub reason: &'static str,
    /// The same for people.
    pub what: &'static str,
}

const fn fault(
    cell: &'static str,
    behind: usize,
    text: Text,
    reason: &'static str,
    what: &'static str,
) -> Fault {
    Fault {
        cell,
        behind,
        text,
        reason,
        what,
    }
}

use Text::{Again, Is};

/// In the first day's spike table under current: `neuron,trace,spike_time`, ms.
pub const CURRENT_SPIKES_DAY1: &[Fault] = &[
    fault("A-01", 12, Is("A-01,8,"), "missing-value", "no time"),
    fault("A-01", 200, Is("A-01,9,n/a"), "not-a-number", "text for a time"),
    fault("A-02", 30, Is("A-02,7,NaN"), "non-finite", "NaN for a time"),
    fault("A-02", 31, Is("A-02,7,inf"), "non-finite", "an infinite time"),
    fault(
        "A-03",
        5,
        Is("A-03,6,-12.40"),
        "negative-time",
        "before the sweep's start",
    ),
    fault(
        "A-04",
        40,
        Is("A-77,3,412.55"),
        "unknown-cell",
        "no protocol for this cell",
    ),
    fault(
        "A-05",
        60,
        Is("A-05,99,388.10"),
        "unknown-sweep",
        "no protocol for this sweep",
    ),
    fault("A-06", 100, Again, "duplicate-spike", "repeats the row above it"),
    fault("A-08", 20, Is(",14,250.75"), "missing-cell", "no cell"),
    fault("A-08", 25, Is("A-08,,262.30"), "missing-sweep", "no sweep"),
];

/// In the second day's: `spike_time,neuron,trace`, ms.
pub const CURRENT_SPIKES_DAY2: &[Fault] = &[
    fault("B-01", 300, Again, "duplicate-spike", "repeats the row above it"),
    fault(
        "B-02",
        50,
        Is("4O2.15,B-02,11"),
        "not-a-number",
        "the letter O in a number",
    ),
    fault("B-03", 33, Is(",B-03,12"), "missing-value", "no time"),
    fault(
        "B-04",
        77,
        Is("355.20,B-04,30,artefact"),
        "ragged-row",
        "a field more than the header has",
    ),
    fault(
        "B-07",
        9,
        Is("501.00,b-07,9"),
        "unknown-cell",
        "cell names are told apart by case",
    ),
    fault(
        "B-08",
        15,
        Is("501.00,B-08,0"),
        "unknown-sweep",
        "sweeps are numbered from 1",
    ),
];

/// In the protocol under current: `neuron,trace,onset,offset,current_nA,g_exc_nS`, ms.
pub const CURRENT_PROTOCOL: &[Fault] = &[
    fault(
        "A-01",
        40,
        Is("A-01,41,700,100,0.300,"),
        "offset-not-after-onset",
        "onset and offset swapped",
    ),
    fault(
        "A-02",
        4,
        Again,
        "duplicate-protocol-row",
        "repeats the row above it",
    ),
    fault(
        "A-02",
        40,
        Is("A-02,41,100,100,0.300,"),
        "offset-not-after-onset",
        "a step without length",
    ),
    fault(
        "A-03",
        8,
        Is("A-03,8,500,900,0.100,"),
        "overlapping-steps",
        "begins within the step of sweep 8",
    ),
    fault("A-03", 42, Is("A-03,43,,700,0.300,"), "missing-value", "no onset"),
    fault(
        "A-04",
        32,
        Is("A-04,33,100,900,max,"),
        "not-a-number",
        "text for a current",
    ),
    fault(
        "A-05",
        54,
        Is("A-05,55,100,900,NaN,"),
        "non-finite",
        "NaN for a current",
    ),
    fault(
        "A-06",
        40,
        Is("A-06,41,-50,700,0.300,"),
        "negative-time",
        "begins before the sweep does",
    ),
    fault(
        "B-01",
        42,
        Is("B-01,43,100,700,,"),
        "no-drive",
        "neither current nor conductance",
    ),
    fault(
        "B-02",
        40,
        Is("B-02,41,100,700,0.300,4.00"),
        "two-drives",
        "both current and conductance",
    ),
    fault(
        "B-03",
        5,
        Is("B-03,5,100,900,0.555,"),
        "duplicate-step",
        "another current for the step above it",
    ),
    fault("B-04", 54, Is(",55,100,900,0.300,"), "missing-cell", "no cell"),
    fault(
        "B-04",
        54,
        Is("B-04,,100,900,0.300,"),
        "missing-sweep",
        "no sweep",
    ),
];

/// In the cell table under current: `neuron,kind,day,depth_um,g_leak,e_leak,v_threshold,capacitance`.
pub const CURRENT_CELLS: &[Fault] = &[
    fault(
        "A-12",
        1,
        Is("A-12,flint,1,310,8.4,-68.0,-46.1,70"),
        "duplicate-cell",
        "a second row for the cell",
    ),
    fault(
        "B-05",
        1,
        Is("B-16,tarn,2,275,ca. 9,-71.2,,150"),
        "not-a-number",
        "text for a leak conductance",
    ),
    fault(
        "B-15",
        1,
        Is("B-16,tarn,2,275,-9.1,-71.2,,150"),
        "not-positive",
        "a negative leak conductance",
    ),
];

/// In the spike table under conductance: `cell`, `time_s`.
pub const CONDUCTANCE_SPIKES: &[Fault] = &[
    fault("G-01", 100, Is("G-01\t"), "missing-value", "no time"),
    fault("G-02", 50, Is("G-02\tlost"), "not-a-number", "text for a time"),
    fault("G-03", 80, Is("G-03\tnan"), "non-finite", "NaN for a time"),
    fault(
        "G-04",
        1,
        Is("G-04\t-0.0310"),
        "negative-time",
        "before the time line's start",
    ),
    fault("G-05", 60, Again, "duplicate-spike", "repeats the row above it"),
    fault(
        "G-06",
        70,
        Is("G-66\t12.4417"),
        "unknown-cell",
        "no protocol for this cell",
    ),
    fault("G-07", 70, Is("\t12.4417"), "missing-cell", "no cell"),
];

/// In the protocol under conductance: `cell`, `onset_s`, `offset_s`, `g_exc_nS`, `g_inh_nS`.
pub const CONDUCTANCE_PROTOCOL: &[Fault] = &[
    fault(
        "G-01",
        9,
        Again,
        "duplicate-protocol-row",
        "repeats the row above it",
    ),
    fault(
        "G-02",
        3,
        Is("G-02\t3.100\t3.500\t9.60\t4.0"),
        "overlapping-steps",
        "begins within the step above it",
    ),
    fault(
        "G-03",
        36,
        Is("G-03\t44.400\t43.600\t3.00\t"),
        "offset-not-after-onset",
        "onset and offset swapped",
    ),
    fault(
        "G-04",
        38,
        Is("G-04\t46.000\t46.800\t-0.75\t"),
        "negative-conductance",
        "a conductance below zero",
    ),
    fault(
        "G-05",
        36,
        Is("G-05\t44.000\t44.800\t\t0.0"),
        "missing-value",
        "no excitatory conductance",
    ),
    fault(
        "G-06",
        34,
        Is("G-06\t44.000\t\t3.60\t8.0"),
        "missing-value",
        "no offset",
    ),
    fault(
        "G-07",
        36,
        Is("G-07\t44.000\t44.800\tinf\t5.0"),
        "non-finite",
        "an infinite conductance",
    ),
    fault(
        "G-08",
        36,
        Is("G-08\t-0.400\t0.300\t2.70\t2.0"),
        "negative-time",
        "begins before the time line does",
    ),
    fault(
        "G-09",
        2,
        Is("G-09\t1.600\t2.400\t5.25\t4.0"),
        "duplicate-step",
        "another drive for the step above it",
    ),
];

/// In the cell table under conductance: `cell`, `group`, `g_leak_nS`, `e_leak_mV`, `e_exc_mV`, `e_inh_mV`,
/// `v_threshold_mV`, `capacitance_pF`.
pub const CONDUCTANCE_CELLS: &[Fault] = &[fault(
    "G-27",
    1,
    Is("G-28\ttarn\t9.2\t-70.8\t0\t-76\t\t0"),
    "not-positive",
    "no capacitance is 0",
)];

/// The rows of a file with its bad rows between them; the bad ones are appended to `placed`.
///
/// # Errors
/// A bad row behind a row that is not there, or a repeat that would not be behind a good row.
pub fn insert(
    file: &str,
    rows: &[Row],
    faults: &[Fault],
    placed: &mut Vec<Placed>,
) -> anyhow::Result<Vec<String>> {
    let mut anchored = Vec::with_capacity(faults.len());
    for fault in faults {
        let anchor = rows
            .iter()
            .enumerate()
            .filter(|(_, row)| row.cell == fault.cell)
            .nth(fault.behind - 1)
            .map(|(index, _)| index)
            .with_context(|| {
                format!(
                    "{file}: {} has no row {} to put a bad row behind",
                    fault.cell, fault.behind
                )
            })?;
        anchored.push((anchor, fault));
    }
    if anchored.windows(2).any(|pair| pair[1].0 < pair[0].0) {
        bail!("{file}: the bad rows are not listed in the order of the file");
    }
    let mut lines = Vec::with_capacity(rows.len() + faults.len());
    let mut waiting = anchored.into_iter().peekable();
    for (index, row) in rows.iter().enumerate() {
        lines.push(row.text.clone());
        while let Some((_, fault)) = waiting.next_if(|(anchor, _)| *anchor == index) {
            let text = match fault.text {
                Is(text) => text.to_owned(),
                Again => row.text.clone(),
            };
            lines.push(text.clone());
            placed.push(Placed {
                file: file.to_owned(),
                row: lines.len(),
                text,
                reason: fault.reason,
                what: fault.what,
            });
        }
    }
    Ok(lines)
}

/// The bad rows as a Markdown table; a tab is shown as `⇥`.
pub fn markdown(faults: &[Placed]) -> String {
    let mut table =
        String::from("| file | row | the row | reason | in words |\n| --- | ---: | --- | --- | --- |\n");
    for fault in faults {
        let Placed {
            file,
            row,
            text,
            reason,
            what,
        } = fault;
        let text = text.replace('\t', "⇥");
        table.push_str(&format!("| {file} | {row} | `{text}` | {reason} | {what} |\n"));
    }
    table
}

#[cfg(test)]
mod tests {
    #![allow(clippy::unwrap_used)]
    use super::*;

    fn row(cell: &str, text: &str) -> Row {
        Row {
            cell: cell.to_owned(),
            text: text.to_owned(),
        }
    }

    #[test]
    fn bad_rows_go_where_they_are_put() {
        let rows = [row("a", "a1"), row("b", "b1"), row("a", "a2")];
        let faults = [
            fault("b", 1, Again, "again", ""),
            fault("b", 1, Is("x"), "x", ""),
            fault("a", 2, Is("y"), "y", ""),
        ];
        let mut placed = Vec::new();
        let lines = insert("f", &rows, &faults, &mut placed).unwrap();
        assert_eq!(lines, ["a1", "b1", "b1", "x", "a2", "y"]);
        let at: Vec<_> = placed.iter().map(|placed| (placed.row, placed.reason)).collect();
        assert_eq!(at, [(3, "again"), (4, "x"), (6, "y")]);
    }

    #[test]
    fn mistakes_in_the_lists_are_errors() {
        let rows = [row("a", "a1"), row("b", "b1")];
        let missing = [fault("a", 2, Again, "", "")];
        assert!(insert("f", &rows, &missing, &mut Vec::new()).is_err());
        let unordered = [fault("b", 1, Again, "", ""), fault("a", 1, Again, "", "")];
        assert!(insert("f", &rows, &unordered, &mut Vec::new()).is_err());
    }
}
