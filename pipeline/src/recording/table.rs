//! One table: its files read one after the other, whatever their format, batch by batch.

use std::path::Path;
use std::sync::atomic::{AtomicBool, Ordering};

use sha2::{Digest, Sha256};

use super::batch::{BadValue, Batch, has_decimal_comma};
use super::columnar::ColumnarFile;
use super::columns::{Matched, match_headers, specs};
use super::error::{Problem, ReadError};
use super::files::{Format, TableFile};
use super::model::{InputFile, RefusedRow, TableKind};
use super::names::{MISSING, Names};
use super::rules::{self, Rule};
use super::set_file::{SET_FILE, SetFile};
use super::text::TextFile;
use super::units::{Quantity, Unit};

/// What is gathered while the tables are read.
pub struct Context<'a> {
    /// `recording.toml`, or its defaults.
    pub set: &'a SetFile,
    /// Set by the caller to stop the reading.
    pub cancel: Option<&'a AtomicBool>,
    /// Every file read so far.
    pub inputs: Vec<InputFile>,
    /// Sentences for the summary.
    pub notes: Vec<String>,
    /// Rows refused so far.
    pub refused: Vec<RefusedRow>,
    /// Unit in which each table's times came, by its first file.
    pub time_units: Vec<(TableKind, &'static str)>,
}

impl Context<'_> {
    /// Fails once the caller has asked to stop.
    ///
    /// # Errors
    /// `Interrupted`.
    pub fn check_cancel(&self) -> Result<(), ReadError> {
        match self.cancel {
            Some(cancel) if cancel.load(Ordering::Relaxed) => Err(ReadError::Interrupted),
            _ => Ok(()),
        }
    }
}

/// A batch and where it comes from.
pub struct Origin<'a> {
    /// The file's name in messages.
    pub file: &'a str,
    /// Index of the file among the inputs.
    pub input: usize,
    /// Rows of the file before this batch.
    pub first: u64,
    /// Unit of each of our columns.
    pub units: &'a [Option<Unit>],
    /// Headers of the columns carried.
    pub others: &'a [String],
}

/// The rows of one file within its table.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub struct Span {
    /// Index of the file among the inputs.
    pub input: usize,
    /// Rows of the table before this file.
    pub first: u64,
    /// Whether the file has a sweep column.
    pub has_sweep: bool,
}

/// The file and the 1-based row number of a row counted from 0 through all files of its table.
pub fn locate(spans: &[Span], row: u64) -> (usize, u64) {
    let at = spans.partition_point(|span| span.first <= row);
    match at.checked_sub(1).and_then(|at| spans.get(at)) {
        Some(span) => (span.input, row - span.first + 1),
        None => (0, row + 1),
    }
}

/// SHA-256 in lower-case hex.
pub fn sha256(bytes: &[u8]) -> String {
    Sha256::digest(bytes)
        .iter()
        .map(|byte| format!("{byte:02x}"))
        .collect()
}

fn read_bytes(path: &Path, name: &str) -> Result<Vec<u8>, ReadError> {
    let bytes = std::fs::read(path).map_err(|error| {
        ReadError::Io(Problem::of_file(
            name,
            format!("cannot be read: {error}"),
            "check that it is a file and that you may read it",
        ))
    })?;
    if bytes.is_empty() {
        return Err(ReadError::Data(Problem::of_file(
            name,
            "is empty (0 bytes)",
            "export the table again, or remove the file",
        )));
    }
    Ok(bytes)
}

enum Source {
    Text(TextFile),
    Columnar(ColumnarFile),
}

/// Reads every file of one table and gives its batches to `each`, in order.
///
/// # Errors
/// Whatever makes a file unreadable as a whole, a table without a row, and what `each` returns.
pub fn read_table(
    table: TableKind,
    files: &[TableFile],
    context: &mut Context<'_>,
    mut each: impl FnMut(&Origin<'_>, Batch, &mut Context<'_>) -> Result<(), ReadError>,
) -> Result<Vec<Span>, ReadError> {
    let mut spans: Vec<Span> = Vec::new();
    let mut total = 0;
    for file in files.iter().filter(|file| file.table == table) {
        context.check_cancel()?;
        let raw = read_bytes(&file.path, &file.name)?;
        let sum = sha256(&raw);
        let source = match file.format {
            Format::Text { .. } => Source::Text(TextFile::open(file, raw, context.set)?),
            Format::Parquet | Format::Arrow => Source::Columnar(ColumnarFile::open(file, raw)?),
        };
        let headers = match &source {
            Source::Text(text) => &text.headers,
            Source::Columnar(columnar) => &columnar.headers,
        };
        let matched = match_headers(file, headers, context.set)?;
        context.notes.extend(matched.notes.iter().cloned());
        let has_sweep = specs(table)
            .iter()
            .position(|spec| spec.name == "sweep")
            .is_some_and(|at| matched.positions[at].is_some());
        let time = specs(table)
            .iter()
            .position(|spec| spec.quantity == Some(Quantity::Time));
        if let Some(unit) = time.and_then(|at| matched.units[at])
            && spans.is_empty()
        {
            context.time_units.push((table, unit.symbol));
        }
        let input = context.inputs.len();
        context.inputs.push(InputFile {
            table: Some(table),
            path: file.name.clone(),
            sha256: sum,
            rows: 0,
        });
        let rows = read_file(file, &source, headers, matched, input, context, &mut each)?;
        context.inputs[input].rows = rows;
        spans.push(Span {
            input,
            first: total,
            has_sweep,
        });
        total += rows;
    }
    if let Some(span) = spans.first()
        && total == 0
    {
        let name = context.inputs[span.input].path.clone();
        return Err(ReadError::Data(Problem::of_file(
            name,
            format!("has a header but no row: the {} table is empty", table.name()),
            match table {
                TableKind::Cells => "fill it, or remove the file: a set needs no cell table",
                _ => "export the table again",
            },
        )));
    }
    if let Some(span) = spans
        .windows(2)
        .find(|pair| pair[0].has_sweep != pair[1].has_sweep)
    {
        let (with, without) = if span[0].has_sweep {
            (span[0], span[1])
        } else {
            (span[1], span[0])
        };
        return Err(ReadError::Data(Problem::of_file(
            context.inputs[without.input].path.clone(),
            format!(
                "has no sweep column, but {} has one",
                context.inputs[with.input].path
            ),
            "give every file of the table a sweep column, or none; [columns] in recording.toml maps other headers",
        )));
    }
    Ok(spans)
}

fn read_file(
    file: &TableFile,
    source: &Source,
    headers: &[String],
    matched: Matched,
    input: usize,
    context: &mut Context<'_>,
    each: &mut impl FnMut(&Origin<'_>, Batch, &mut Context<'_>) -> Result<(), ReadError>,
) -> Result<u64, ReadError> {
    let carry = file.table == TableKind::Cells;
    let mut others: Vec<usize> = if carry { matched.others.clone() } else { Vec::new() };
    others.retain(|&position| !headers[position].is_empty());
    if let Source::Columnar(columnar) = source {
        let unreadable = others
            .iter()
            .copied()
            .filter(|&position| !columnar.readable(position));
        for position in unreadable {
            context.notes.push(format!(
                "{}: column {:?} of type {} is not carried through; store it as text to keep it",
                file.name,
                headers[position],
                columnar.type_name(position)
            ));
        }
        others.retain(|&position| columnar.readable(position));
    }
    let other_names: Vec<String> = others.iter().map(|&position| headers[position].clone()).collect();
    let mut first = 0;
    let mut origin = |rows: usize| {
        let origin = Origin {
            file: &file.name,
            input,
            first,
            units: &matched.units,
            others: &other_names,
        };
        first += rows as u64;
        origin
    };
    match source {
        Source::Text(text) => {
            let mut blank = 0;
            text.for_each(|rows| {
                context.check_cancel()?;
                blank += rows.blank;
                let columns = rows.frame.columns();
                let batch = Batch {
                    rows: rows.frame.height(),
                    ours: matched
                        .positions
                        .iter()
                        .map(|at| at.map(|at| columns[at].clone()))
                        .collect(),
                    others: others.iter().map(|&at| columns[at].clone()).collect(),
                    ragged: rows.ragged,
                    decimal_comma: text.decimal_comma,
                };
                let origin = origin(batch.rows);
                check_decimal_commas(&batch, &origin, file)?;
                each(&origin, batch, context)
            })?;
            if blank > 0 {
                context
                    .notes
                    .push(format!("{}: {blank} blank lines left out", file.name));
            }
        }
        Source::Columnar(columnar) => {
            let mut positions: Vec<usize> = matched.positions.iter().flatten().copied().collect();
            let own = positions.len();
            positions.extend(&others);
            columnar.for_each(&positions, |frame| {
                context.check_cancel()?;
                let columns = frame.columns();
                let mut next = 0;
                let ours = matched
                    .positions
                    .iter()
                    .map(|at| {
                        at.map(|_| {
                            next += 1;
                            columns[next - 1].clone()
                        })
                    })
                    .collect();
                let batch = Batch {
                    rows: frame.height(),
                    ours,
                    others: columns[own..].to_vec(),
                    ragged: Vec::new(),
                    decimal_comma: false,
                };
                let origin = origin(batch.rows);
                drop(frame);
                each(&origin, batch, context)
            })?;
        }
    }
    Ok(first)
}

/// Stops at a file whose required numbers all have decimal commas, instead of refusing every row of it.
fn check_decimal_commas(batch: &Batch, origin: &Origin<'_>, file: &TableFile) -> Result<(), ReadError> {
    if batch.decimal_comma || origin.first > 0 {
        return Ok(());
    }
    for (spec, column) in specs(file.table).iter().zip(&batch.ours) {
        let (Some(_), Some(column), true) = (spec.quantity, column, spec.required) else {
            continue;
        };
        let Ok(text) = column.str() else { continue };
        let mut seen = text
            .iter()
            .flatten()
            .filter(|field| !field.trim().is_empty())
            .peekable();
        let Some(&example) = seen.peek() else { continue };
        // Whole numbers have no mark at all, so one comma is enough, but nothing may contradict it.
        let (mut commas, mut contradicted) = (0_u64, false);
        for field in seen.take(10_000) {
            if has_decimal_comma(field) {
                commas += 1;
            } else if field.contains('.') || field.trim().parse::<f64>().is_err() {
                contradicted = true;
            }
        }
        if commas > 0 && !contradicted {
            let example = text
                .iter()
                .flatten()
                .find(|field| has_decimal_comma(field))
                .unwrap_or(example);
            return Err(ReadError::Data(Problem::of_file(
                file.name.clone(),
                format!(
                    "the numbers of {} have decimal commas, such as {example:?}",
                    spec.name
                ),
                format!("to read them so, add to {SET_FILE}:\n[tables]\ndecimal = \",\""),
            )));
        }
    }
    Ok(())
}

/// Adds the rows with surplus fields and the rows without a cell to the bad values of a batch, then keeps one per
/// row: surplus fields first, then the cell, then the columns in their order.
pub fn one_per_row(batch: &Batch, cells: &[u32], values: Vec<BadValue>) -> Vec<BadValue> {
    let mut bad: Vec<BadValue> = batch
        .ragged
        .iter()
        .map(|(row, field)| BadValue {
            row: *row,
            column: None,
            value: Some(field.clone()),
            rule: rules::RAGGED_ROW,
        })
        .collect();
    bad.extend(
        cells
            .iter()
            .enumerate()
            .filter(|(_, code)| **code == MISSING)
            .map(|(row, _)| BadValue {
                row,
                column: Some("cell"),
                value: None,
                rule: rules::MISSING_CELL,
            }),
    );
    bad.extend(values);
    bad.sort_by_key(|value| value.row);
    bad.dedup_by_key(|value| value.row);
    bad
}

/// A name as it is shown in a message: one line, not too long.
pub fn shown_name(name: &str) -> String {
    const SHOWN: usize = 60;
    let mut shown: String = name
        .chars()
        .take(SHOWN)
        .flat_map(|c| {
            if c.is_control() {
                c.escape_default().collect::<Vec<_>>()
            } else {
                vec![c]
            }
        })
        .collect();
    if name.chars().nth(SHOWN).is_some() {
        shown.push_str("...");
    }
    shown
}

/// The cell and the sweep of a row in brackets, where it has them.
pub fn place(cell: Option<&str>, sweep: Option<&str>) -> String {
    match (cell, sweep) {
        (Some(cell), Some(sweep)) => format!(" (cell {}, sweep {})", shown_name(cell), shown_name(sweep)),
        (Some(cell), None) => format!(" (cell {})", shown_name(cell)),
        (None, Some(sweep)) => format!(" (sweep {})", shown_name(sweep)),
        (None, None) => String::new(),
    }
}

/// A refused row, from the rule and what is at fault.
pub struct Refusal<'a> {
    /// The table.
    pub table: TableKind,
    /// File and 1-based row number.
    pub at: (usize, u64),
    /// Codes of cell and sweep.
    pub group: (u32, u32),
    /// Our name of the column at fault.
    pub column: Option<&'static str>,
    /// The value at fault.
    pub value: Option<String>,
    /// The rule.
    pub rule: &'static Rule,
    /// What is wrong with this very row, where that says more than the rule's own words.
    pub detail: Option<&'a str>,
}

impl Refusal<'_> {
    /// The row as it is listed.
    pub fn into_row(self, cells: &Names, sweeps: &Names) -> RefusedRow {
        let (cell, sweep) = (cells.name(self.group.0), sweeps.name(self.group.1));
        let place = place(cell.map(|name| &**name), sweep.map(|name| &**name));
        let what = match (self.detail, self.column, &self.value) {
            (Some(detail), ..) => detail.to_owned(),
            (None, Some(column), Some(value)) => {
                format!("{column} = {:?}: {}", shown_name(value), self.rule.what)
            }
            (None, Some(column), None) if self.rule != rules::MISSING_CELL => {
                format!("{column}: {}", self.rule.what)
            }
            _ => self.rule.what.to_owned(),
        };
        RefusedRow {
            table: self.table,
            file: self.at.0,
            row: self.at.1,
            cell: cell.cloned(),
            column: self.column,
            value: self.value,
            reason: self.rule.name,
            message: format!("{what}{place}; {}", self.rule.remedy),
        }
    }
}
