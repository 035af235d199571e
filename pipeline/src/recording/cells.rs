//! The cell table: group, membrane constants and columns carried through.

use std::sync::Arc;

use super::batch::{BadValue, as_text, codes, numbers};
use super::columns::CELLS;
use super::error::ReadError;
use super::files::TableFile;
use super::model::{CellConstants, TableKind};
use super::names::{MISSING, Names};
use super::rules;
use super::table::{Context, Refusal, one_per_row, read_table};

/// What the cell table says of one cell.
pub struct CellRow {
    /// Code of the cell.
    pub cell: u32,
    /// Its group.
    pub group: Option<Arc<str>>,
    /// Its membrane constants.
    pub constants: CellConstants,
    /// One entry for every carried column.
    pub carried: Vec<Option<Arc<str>>>,
}

/// The cell table as read.
#[derive(Default)]
pub struct Cells {
    /// One row a cell.
    pub rows: Vec<CellRow>,
    /// Names of the carried columns.
    pub carried: Vec<String>,
    /// Number of rows; `None` where the set has no cell table.
    pub total: Option<u64>,
}

/// Reads the cell table, where there is one.
///
/// # Errors
/// See [`read_table`].
pub fn read(files: &[TableFile], context: &mut Context<'_>, cells: &mut Names) -> Result<Cells, ReadError> {
    let mut table = Cells::default();
    let mut texts = Names::default();
    let mut described: Vec<bool> = Vec::new();
    let no_sweeps = Names::default();
    let mut total = 0;
    let spans = read_table(TableKind::Cells, files, context, |origin, batch, context| {
        let file = origin.file;
        let cell = codes(&batch, 0, file, cells)?;
        let group = codes(&batch, 1, file, &mut texts)?;
        let mut bad = Vec::new();
        let mut columns = Vec::with_capacity(CELLS.len() - 2);
        for (index, spec) in CELLS.iter().enumerate().skip(2) {
            let values = numbers(
                &batch,
                index,
                spec.name,
                origin.units[index],
                false,
                file,
                &mut bad,
            )?;
            if matches!(spec.name, "g_leak" | "capacitance") {
                bad.extend(values.iter().enumerate().filter(|(_, value)| **value <= 0.0).map(
                    |(row, value)| BadValue {
                        row,
                        column: Some(spec.name),
                        value: Some(value.to_string()),
                        rule: rules::NOT_POSITIVE,
                    },
                ));
            }
            columns.push(values);
        }
        // Files may carry different columns; a column is known by its header.
        let mut places = Vec::with_capacity(origin.others.len());
        for header in origin.others {
            let place = table
                .carried
                .iter()
                .position(|name| name == header)
                .unwrap_or_else(|| {
                    table.carried.push(header.clone());
                    table.carried.len() - 1
                });
            places.push(place);
        }
        let mut carried = Vec::with_capacity(batch.others.len());
        for column in &batch.others {
            carried.push(as_text(column, file)?);
        }
        described.resize(cells.len(), false);
        let mut bad = one_per_row(&batch, &cell, bad).into_iter().peekable();
        for row in 0..batch.rows {
            let code = cell[row];
            let mut fault = bad.next_if(|bad| bad.row == row);
            let mut detail = None;
            if fault.is_none() && std::mem::replace(&mut described[code as usize], true) {
                fault = Some(BadValue {
                    row,
                    column: Some("cell"),
                    value: None,
                    rule: rules::DUPLICATE_CELL,
                });
                detail = Some(rules::DUPLICATE_CELL.what.to_owned());
            } else if let Some(fault) = &fault
                && code != MISSING
            {
                let value = fault.value.as_deref().unwrap_or_default();
                let column = fault
                    .column
                    .map(|column| format!("{column} = {value:?}: "))
                    .unwrap_or_default();
                detail = Some(format!(
                    "{column}{}, so the cell is analysed without its group, constants and further columns",
                    fault.rule.what
                ));
            }
            if let Some(bad) = fault {
                let refusal = Refusal {
                    table: TableKind::Cells,
                    at: (origin.input, origin.first + row as u64 + 1),
                    group: (code, MISSING),
                    column: bad.column,
                    value: bad.value,
                    rule: bad.rule,
                    detail: detail.as_deref(),
                };
                context.refused.push(refusal.into_row(cells, &no_sweeps));
                continue;
            }
            let value = |index: usize| Some(columns[index][row]).filter(|value| !value.is_nan());
            let mut further = vec![None; table.carried.len()];
            for (place, column) in places.iter().zip(&carried) {
                let text = column.str().ok().and_then(|text| text.get(row)).map(str::trim);
                if let Some(text) = text.filter(|text| !text.is_empty()) {
                    let code = texts.code(text);
                    further[*place] = texts.name(code).cloned();
                }
            }
            table.rows.push(CellRow {
                cell: code,
                group: texts.name(group[row]).cloned(),
                constants: CellConstants {
                    g_leak_ns: value(0),
                    e_leak_mv: value(1),
                    e_exc_mv: value(2),
                    e_inh_mv: value(3),
                    v_threshold_mv: value(4),
                    capacitance_pf: value(5),
                },
                carried: further,
            });
        }
        total += batch.rows as u64;
        Ok(())
    })?;
    table.total = (!spans.is_empty()).then_some(total);
    let width = table.carried.len();
    for row in &mut table.rows {
        row.carried.resize(width, None);
    }
    Ok(table)
}
