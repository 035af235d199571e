//! Results as files: Parquet tables, `run.json`, and the folder that holds them.
//!
//! ```text
//! schemas      the columns of every table, with unit, description and where the value comes from
//! columns      what a column is; which sets it is written for
//! writer       one Parquet file, row by row, in bounded memory
//! folder       a result folder that is never half-written
//! provenance   run.json
//! ```
//!
//! A new column is one line in `schemas`. Each column's unit is told in its name, in the field metadata, and for the
//! whole file under `halfrise.columns` and `PANDAS_ATTRS`, both in the Arrow schema and in the file's key-values,
//! because every reader keeps a different one. The bytes depend on the rows alone: there is no clock and no path in
//! them.

mod columns;
mod error;
mod folder;
mod provenance;
mod schemas;
mod writer;

#[cfg(test)]
mod tests;

use std::path::Path;

use serde::Serialize;

pub use columns::TableContext;
pub use error::{WriteError, WriteErrorClass};
pub use folder::ResultFolder;
pub use provenance::{Counts, Provenance, RUN_FILE};

use crate::assess::CellResult;
use crate::recording::{InputFile, RefusedRow};
use columns::Table;
use schemas::{
    CurveRow, Curves, FlagRow, Flags, GoodnessRow, GoodnessTable, Parameters, Refused, RefusedView,
    ResponseRow, StepRow, Steps,
};
use writer::TableWriter;

/// A table that has been written.
#[derive(Clone, Debug, PartialEq, Eq, Serialize)]
pub struct WrittenTable {
    /// File name without `.parquet`.
    pub name: &'static str,
    /// Its rows.
    pub rows: u64,
}

/// The result tables of one run, being written.
///
/// Rows go out in the order they are handed over, so cells must come in the order of the set. Files are complete only
/// after [`Tables::finish`].
pub struct Tables {
    fitted: Option<FittedTables>,
    steps: TableWriter<Steps>,
    refused: TableWriter<Refused>,
}

/// The tables that need a fit.
struct FittedTables {
    parameters: TableWriter<Parameters>,
    goodness: TableWriter<GoodnessTable>,
    curves: TableWriter<Curves>,
    flags: TableWriter<Flags>,
}

impl Tables {
    /// Creates the table files in `dir`, which must exist.
    ///
    /// # Errors
    /// A file cannot be created; the error names it.
    pub fn create(dir: &Path, context: &TableContext) -> Result<Self, WriteError> {
        let fitted = if context.rates_only {
            None
        } else {
            Some(FittedTables {
                parameters: TableWriter::create(dir, context)?,
                goodness: TableWriter::create(dir, context)?,
                curves: TableWriter::create(dir, context)?,
                flags: TableWriter::create(dir, context)?,
            })
        };
        Ok(Self {
            fitted,
            steps: TableWriter::create(dir, context)?,
            refused: TableWriter::create(dir, context)?,
        })
    }

    /// Adds the rows of some cells.
    ///
    /// # Errors
    /// A file cannot be written, or a result contradicts itself: a cell without any response (every cell has its row),
    /// a rate of a step the cell does not have, carried columns of another number than the set's.
    pub fn write(&mut self, cells: &[CellResult]) -> Result<(), WriteError> {
        for cell in cells {
            if let Some(fitted) = &mut self.fitted {
                fitted.write(cell)?;
            }
            for rate in cell.responses.iter().flat_map(|response| &response.rates) {
                let Some(step) = cell.steps.get(rate.step) else {
                    return Err(self.steps.internal(format!(
                        "cell {}: a rate of step {} where the cell has {} steps",
                        cell.id,
                        rate.step,
                        cell.steps.len()
                    )));
                };
                self.steps.push(&StepRow { cell, step, rate })?;
            }
        }
        Ok(())
    }

    /// Adds refused rows; `inputs` are the set's files that [`RefusedRow::file`] points into.
    ///
    /// # Errors
    /// The file cannot be written, or a row names a file that is not among `inputs`.
    pub fn write_refused(&mut self, rows: &[RefusedRow], inputs: &[InputFile]) -> Result<(), WriteError> {
        for refused in rows {
            let Some(input) = inputs.get(refused.file) else {
                return Err(self.refused.internal(format!(
                    "a refused row of file {} where the set has {} files",
                    refused.file,
                    inputs.len()
                )));
            };
            let file = provenance::relative(&input.path);
            self.refused.push(&RefusedView { refused, file })?;
        }
        Ok(())
    }

    /// Completes every file and says how many rows each has.
    ///
    /// # Errors
    /// A file cannot be written; a full disk mostly shows here.
    pub fn finish(self) -> Result<Vec<WrittenTable>, WriteError> {
        fn done<T: Table>(writer: TableWriter<T>) -> Result<WrittenTable, WriteError> {
            let rows = writer.finish()?;
            Ok(WrittenTable { name: T::NAME, rows })
        }
        let mut tables = Vec::new();
        if let Some(fitted) = self.fitted {
            tables.push(done(fitted.parameters)?);
            tables.push(done(fitted.goodness)?);
            tables.push(done(fitted.curves)?);
            tables.push(done(fitted.flags)?);
        }
        tables.push(done(self.steps)?);
        tables.push(done(self.refused)?);
        Ok(tables)
    }
}

impl FittedTables {
    fn write(&mut self, cell: &CellResult) -> Result<(), WriteError> {
        if cell.responses.is_empty() {
            let cause = format!("cell {} has no response, and so would have no row", cell.id);
            return Err(self.parameters.internal(cause));
        }
        for response in &cell.responses {
            self.parameters.push(&ResponseRow { cell, response })?;
            for goodness in &response.goodness {
                self.goodness.push(&GoodnessRow {
                    cell,
                    response,
                    goodness,
                })?;
            }
            for &point in &response.curve {
                self.curves.push(&CurveRow {
                    cell,
                    response,
                    point,
                })?;
            }
            for flag in &response.flags {
                self.flags.push(&FlagRow { cell, response, flag })?;
            }
        }
        Ok(())
    }
}
