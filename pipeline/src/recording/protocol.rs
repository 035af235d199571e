//! The protocol: every row a step, checked on its own and then against the other steps of its sweep.

use super::batch::{BadValue, codes, numbers};
use super::columns::PROTOCOL;
use super::error::ReadError;
use super::files::TableFile;
use super::model::{DriveKind, TableKind};
use super::names::{Groups, Names};
use super::rules::{self, Rule};
use super::table::{Context, Refusal, Span, locate, one_per_row, read_table};

/// Two steps may share this much time, in seconds, without being called overlapping: sums such as 0.1 + 0.2 end a
/// step a little after the next one's written start.
const ROUNDING_S: f64 = 1e-9;

/// One row of the protocol that stands on its own.
#[derive(Clone, Debug)]
pub struct StepRow {
    /// Code of cell and sweep.
    pub group: u32,
    /// Seconds.
    pub onset: f64,
    /// Seconds.
    pub offset: f64,
    /// pA or nS.
    pub drive: f64,
    /// Which of the two.
    pub kind: DriveKind,
    /// nS; NaN where the protocol has none.
    pub g_inh: f64,
    /// Code of the step's label.
    pub label: u32,
    /// Row of the table, from 0.
    pub row: u64,
}

/// The protocol as read.
#[derive(Default)]
pub struct Protocol {
    /// Rows that stand on their own, in the order of the rows.
    pub rows: Vec<StepRow>,
    /// Code of cell and sweep of every row that names a cell, refused or not.
    pub named: Vec<u32>,
    /// Labels of the steps.
    pub labels: Names,
    /// Which rows stand in which file.
    pub spans: Vec<Span>,
    /// Number of rows.
    pub total: u64,
}

/// Reads the protocol.
///
/// # Errors
/// See [`read_table`].
pub fn read(
    files: &[TableFile],
    context: &mut Context<'_>,
    cells: &mut Names,
    sweeps: &mut Names,
    groups: &mut Groups,
) -> Result<Protocol, ReadError> {
    let mut protocol = Protocol::default();
    let spans = read_table(TableKind::Protocol, files, context, |origin, batch, context| {
        let file = origin.file;
        let cell = codes(&batch, 0, file, cells)?;
        let sweep = codes(&batch, 1, file, sweeps)?;
        let label = codes(&batch, 7, file, &mut protocol.labels)?;
        let mut bad = Vec::new();
        let mut column = |index: usize, required: bool| {
            numbers(
                &batch,
                index,
                PROTOCOL[index].name,
                origin.units[index],
                required,
                file,
                &mut bad,
            )
        };
        let onset = column(2, true)?;
        let offset = column(3, true)?;
        let current = column(4, false)?;
        let g_exc = column(5, false)?;
        let g_inh = column(6, false)?;
        let (has_current, has_g_exc) = (batch.ours[4].is_some(), batch.ours[5].is_some());
        let mut bad = one_per_row(&batch, &cell, bad).into_iter().peekable();
        for row in 0..batch.rows {
            let group = (cell[row], sweep[row]);
            if cell[row] != super::names::MISSING {
                protocol.named.push(groups.code(group.0, group.1));
            }
            let step = StepRow {
                group: 0,
                onset: onset[row],
                offset: offset[row],
                drive: if current[row].is_nan() {
                    g_exc[row]
                } else {
                    current[row]
                },
                kind: if current[row].is_nan() {
                    DriveKind::Conductance
                } else {
                    DriveKind::Current
                },
                g_inh: g_inh[row],
                label: label[row],
                row: protocol.total + row as u64,
            };
            let fault = match bad.next_if(|bad| bad.row == row) {
                Some(bad) => Some((bad, None)),
                None => fault(row, &step, g_exc[row], current[row], has_current, has_g_exc),
            };
            match fault {
                None => protocol.rows.push(StepRow {
                    group: groups.code(group.0, group.1),
                    ..step
                }),
                Some((bad, detail)) => {
                    let refusal = Refusal {
                        table: TableKind::Protocol,
                        at: (origin.input, origin.first + row as u64 + 1),
                        group,
                        column: bad.column,
                        value: bad.value,
                        rule: bad.rule,
                        detail: detail.as_deref(),
                    };
                    context.refused.push(refusal.into_row(cells, sweeps));
                }
            }
        }
        protocol.total += batch.rows as u64;
        Ok(())
    })?;
    protocol.spans = spans;
    Ok(protocol)
}

/// What is wrong with a row whose values are all numbers or absent.
fn fault(
    row: usize,
    step: &StepRow,
    g_exc: f64,
    current: f64,
    has_current: bool,
    has_g_exc: bool,
) -> Option<(BadValue, Option<String>)> {
    let bad = |column: Option<&'static str>, value: Option<f64>, rule: &'static Rule| BadValue {
        row,
        column,
        value: value.map(|value| value.to_string()),
        rule,
    };
    if step.onset < 0.0 {
        return Some((bad(Some("onset"), Some(step.onset), rules::NEGATIVE_TIME), None));
    }
    if step.offset < 0.0 {
        return Some((bad(Some("offset"), Some(step.offset), rules::NEGATIVE_TIME), None));
    }
    if step.offset <= step.onset {
        let detail = format!("offset {} s is not after onset {} s", step.offset, step.onset);
        let rule = rules::OFFSET_NOT_AFTER_ONSET;
        return Some((bad(Some("offset"), Some(step.offset), rule), Some(detail)));
    }
    if !current.is_nan() && !g_exc.is_nan() {
        let detail = format!("current {current} pA and g_exc {g_exc} nS are both given");
        return Some((bad(None, None, rules::TWO_DRIVES), Some(detail)));
    }
    if step.drive.is_nan() {
        return Some(match (has_current, has_g_exc) {
            (true, false) => (bad(Some("current"), None, rules::MISSING_VALUE), None),
            (false, true) => (bad(Some("g_exc"), None, rules::MISSING_VALUE), None),
            _ => (bad(None, None, rules::NO_DRIVE), None),
        });
    }
    if g_exc < 0.0 {
        return Some((bad(Some("g_exc"), Some(g_exc), rules::NEGATIVE_CONDUCTANCE), None));
    }
    if step.g_inh < 0.0 {
        return Some((
            bad(Some("g_inh"), Some(step.g_inh), rules::NEGATIVE_CONDUCTANCE),
            None,
        ));
    }
    None
}

/// Settles which steps of one sweep are kept: in the order of the rows, a step that meets an earlier one is refused.
///
/// `rows` are the rows of one group in row order. Gives the kept rows by onset, and every refused row with its rule
/// and what is wrong.
pub fn disjoint(rows: Vec<StepRow>, spans: &[Span]) -> (Vec<StepRow>, Vec<(StepRow, &'static Rule, String)>) {
    let mut kept: Vec<StepRow> = Vec::with_capacity(rows.len());
    let mut refused = Vec::new();
    for row in rows {
        let at = kept.partition_point(|other| other.onset <= row.onset);
        let before = at.checked_sub(1).and_then(|before| kept.get(before));
        let meets = |other: &&StepRow| {
            let shared = row.offset.min(other.offset) - row.onset.max(other.onset);
            let shortest = (row.offset - row.onset).min(other.offset - other.onset);
            shared > ROUNDING_S.min(1e-3 * shortest)
        };
        match before.filter(meets).or_else(|| kept.get(at).filter(meets)) {
            None => kept.insert(at, row),
            Some(other) => {
                let (_, earlier) = locate(spans, other.row);
                let same_file = locate(spans, other.row).0 == locate(spans, row.row).0;
                let earlier = if same_file {
                    format!("row {earlier}")
                } else {
                    format!("row {earlier} of an earlier file")
                };
                let same_time = other.onset == row.onset && other.offset == row.offset;
                let same_inhibition =
                    other.g_inh == row.g_inh || (other.g_inh.is_nan() && row.g_inh.is_nan());
                let (rule, what) =
                    if same_time && other.drive == row.drive && other.kind == row.kind && same_inhibition {
                        (
                            rules::DUPLICATE_PROTOCOL_ROW,
                            format!("the row repeats {earlier}"),
                        )
                    } else if same_time {
                        let what = format!(
                            "drive {} for the step of {earlier}, which has drive {}",
                            row.drive, other.drive
                        );
                        (rules::DUPLICATE_STEP, what)
                    } else {
                        let what = format!(
                            "step {} s to {} s overlaps the step {} s to {} s of {earlier}",
                            row.onset, row.offset, other.onset, other.offset
                        );
                        (rules::OVERLAPPING_STEPS, what)
                    };
                refused.push((row, rule, what));
            }
        }
    }
    for at in 1..kept.len() {
        let next = kept[at].onset;
        // No more than rounding, by the test above: a spike must not belong to two steps.
        kept[at - 1].offset = kept[at - 1].offset.min(next);
    }
    (kept, refused)
}
