//! Reading a recording set: files, columns, units, and every rule that refuses a row or a cell.
//!
//! ```text
//! set_file    recording.toml: names, columns, units, settings
//! files       which files feed which table
//! text        CSV, TSV: unpack, check the encoding, parse as text    \
//! columnar    Parquet, Arrow: check the frame, read the columns       > polars data frames, a batch at a time
//! columns     headers -> our columns, units                          /
//! batch       columns -> codes of names, numbers in s, pA, nS, mV, pF
//! spikes, protocol, cells    one table each: rows that stand on their own, rows refused
//! assemble    the tables meet: sweeps, steps, spikes per cell; rows that do not fit are refused; the sums must hold
//! ```
//!
//! What makes a file unusable as a whole is a [`ReadError`]; what costs one row or one cell is a rule of [`rules`] and
//! ends in [`RecordingSet::refused`]. Cells and sweeps travel as integer codes from the first batch on, given out per
//! distinct name, so nothing below handles text row by row. The result depends neither on the number of threads nor,
//! save for which of two conflicting rows is the earlier, on the order of the rows.

mod assemble;
mod batch;
mod cells;
mod columnar;
mod columns;
mod error;
mod files;
mod guard;
mod model;
mod names;
mod natural;
mod protocol;
pub mod rules;
mod set_file;
mod spikes;
mod table;
mod text;
mod units;

#[cfg(test)]
mod tests;

use std::path::Path;
use std::sync::atomic::AtomicBool;

pub use error::{ErrorClass, Problem, ReadError};
pub use model::*;
pub use natural::natural;

use assemble::{Tables, assemble};
use names::{Groups, Names};
use set_file::{SET_FILE, SetFile};
use table::{Context, sha256};

/// What the caller of [`read`] decides.
#[derive(Clone, Copy, Debug, Default)]
pub struct ReadOptions<'a> {
    /// Looked at between batches; once true, reading ends with [`ReadError::Interrupted`].
    pub cancel: Option<&'a AtomicBool>,
}

/// Reads and checks a recording set.
///
/// `folder` holds the tables and, where there is one, `recording.toml`. Times come out in s, currents in pA,
/// conductances in nS, potentials in mV, capacitances in pF.
///
/// # Errors
/// [`ErrorClass::Io`] where a file cannot be read, [`ErrorClass::Settings`] where `recording.toml` is at fault,
/// [`ErrorClass::Data`] where a table is at fault as a whole. Rows and cells at fault are no error: they are listed in
/// [`RecordingSet::refused`].
pub fn read(folder: &Path, options: &ReadOptions<'_>) -> Result<RecordingSet, ReadError> {
    check_folder(folder)?;
    let read = SetFile::read(folder)?;
    let mut inputs = Vec::new();
    let set = match read {
        None => SetFile::default(),
        Some((set, bytes)) => {
            inputs.push(InputFile {
                table: None,
                path: SET_FILE.into(),
                sha256: sha256(&bytes),
                rows: 0,
            });
            set
        }
    };
    let files = files::find(folder, &set)?;
    let mut context = Context {
        set: &set,
        cancel: options.cancel,
        inputs,
        notes: Vec::new(),
        refused: Vec::new(),
        time_units: Vec::new(),
    };
    let (mut cell_names, mut sweep_names, mut groups) =
        (Names::default(), Names::default(), Groups::default());
    let spikes = spikes::read(
        &files,
        &mut context,
        &mut cell_names,
        &mut sweep_names,
        &mut groups,
    )?;
    let protocol = protocol::read(
        &files,
        &mut context,
        &mut cell_names,
        &mut sweep_names,
        &mut groups,
    )?;
    let cells = cells::read(&files, &mut context, &mut cell_names)?;
    let carried_columns = cells.carried.clone();
    let tables = Tables {
        spikes,
        protocol,
        cells,
        cell_names,
        sweep_names,
        groups,
    };
    let assembled = assemble(tables, &mut context)?;
    let Context {
        inputs,
        notes,
        mut refused,
        ..
    } = context;
    refused.sort_by_key(|row| (row.table, row.file, row.row));
    let name = set.name.clone().unwrap_or_else(|| folder_name(folder));
    Ok(RecordingSet {
        name,
        folder: folder.to_path_buf(),
        has_sweeps: assembled.has_sweeps,
        inputs,
        carried_columns,
        cells: assembled.cells,
        refused,
        spike_rows: assembled.spike_rows,
        protocol_rows: assembled.protocol_rows,
        cell_rows: assembled.cell_rows,
        analysis: set.analysis,
        notes,
    })
}

fn check_folder(folder: &Path) -> Result<(), ReadError> {
    let name = folder.display().to_string();
    match std::fs::metadata(folder) {
        Ok(metadata) if metadata.is_dir() => Ok(()),
        Ok(_) => Err(ReadError::Io(Problem::of_file(
            name,
            "is a file, not a folder",
            "give the folder that holds the spike table and the protocol",
        ))),
        Err(error) if error.kind() == std::io::ErrorKind::NotFound => Err(ReadError::Io(Problem::of_file(
            name,
            "there is no such folder",
            "give the folder that holds the spike table and the protocol",
        ))),
        Err(error) => Err(ReadError::Io(Problem::of_file(
            name,
            format!("cannot be opened: {error}"),
            "check its permissions",
        ))),
    }
}

/// The last part of a path, also of one such as `.`.
fn folder_name(folder: &Path) -> String {
    let full = std::fs::canonicalize(folder).unwrap_or_else(|_| folder.to_path_buf());
    full.file_name().map_or_else(
        || "recording set".to_owned(),
        |name| name.to_string_lossy().into_owned(),
    )
}
