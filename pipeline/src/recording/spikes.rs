//! The spike table: one group code and one time a row, in the order of the rows.

use super::batch::{BadValue, codes, numbers};
use super::columns::SPIKES;
use super::error::ReadError;
use super::files::TableFile;
use super::model::TableKind;
use super::names::{Groups, Names};
use super::rules;
use super::table::{Context, Refusal, Span, one_per_row, read_table};

/// Group code of a row that is refused already.
pub const REFUSED: u32 = u32::MAX;

/// The spike table as read: two numbers a row, so that millions of rows stay small.
#[derive(Default)]
pub struct Spikes {
    /// Code of cell and sweep, or [`REFUSED`].
    pub group: Vec<u32>,
    /// Time in seconds.
    pub time: Vec<f64>,
    /// Which rows stand in which file.
    pub spans: Vec<Span>,
}

/// Reads the spike table.
///
/// # Errors
/// See [`read_table`].
pub fn read(
    files: &[TableFile],
    context: &mut Context<'_>,
    cells: &mut Names,
    sweeps: &mut Names,
    groups: &mut Groups,
) -> Result<Spikes, ReadError> {
    let mut spikes = Spikes::default();
    let spans = read_table(TableKind::Spikes, files, context, |origin, batch, context| {
        let mut bad = Vec::new();
        let (cell, (sweep, time)) = rayon::join(
            || codes(&batch, 0, origin.file, cells),
            || {
                let sweep = codes(&batch, 1, origin.file, sweeps);
                let unit = origin.units[2];
                let time = numbers(&batch, 2, SPIKES[2].name, unit, true, origin.file, &mut bad);
                (sweep, time)
            },
        );
        let (cell, sweep, time) = (cell?, sweep?, time?);
        for (row, &time) in time.iter().enumerate() {
            if time < 0.0 {
                bad.push(BadValue {
                    row,
                    column: Some("time"),
                    value: Some(time.to_string()),
                    rule: rules::NEGATIVE_TIME,
                });
            }
        }
        let bad = one_per_row(&batch, &cell, bad);
        let mut next = bad.into_iter().peekable();
        spikes.group.reserve(batch.rows);
        for row in 0..batch.rows {
            let pair = (cell[row], sweep[row]);
            if let Some(bad) = next.next_if(|bad| bad.row == row) {
                spikes.group.push(REFUSED);
                let refusal = Refusal {
                    table: TableKind::Spikes,
                    at: (origin.input, origin.first + row as u64 + 1),
                    group: pair,
                    column: bad.column,
                    value: bad.value,
                    rule: bad.rule,
                    detail: None,
                };
                context.refused.push(refusal.into_row(cells, sweeps));
            } else {
                spikes.group.push(groups.code(pair.0, pair.1));
            }
        }
        if spikes.time.is_empty() {
            spikes.time = time;
        } else {
            spikes.time.extend_from_slice(&time);
        }
        Ok(())
    })?;
    spikes.spans = spans;
    Ok(spikes)
}
