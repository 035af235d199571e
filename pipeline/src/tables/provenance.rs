//! `run.json`: what made the results beside it, without a clock and without a path of the machine.

use std::collections::BTreeMap;
use std::fs::{self, File};
use std::io::{self, BufWriter, Write};
use std::path::Path;

use serde::Serialize;

use super::WrittenTable;
use super::error::WriteError;
use crate::assess::{Ceiling, CellResult, Status};
use crate::rates::Response;
use crate::recording::{InputFile, RecordingSet, RefusedRow, RowCounts};
use crate::settings::Analysis;

/// Name of the provenance file; a folder with one of ours may be replaced.
pub const RUN_FILE: &str = "run.json";
const PROGRAM: &str = "halfrise";

/// Counts over the results, gathered cell by cell while they pass.
#[derive(Clone, Debug, Default, PartialEq, Serialize)]
pub struct Counts {
    /// Cells, refused ones included.
    pub cells: u64,
    /// Per response: its cells by status, by verdict, and how many are usable.
    pub responses: BTreeMap<Response, ResponseCounts>,
    /// Flags raised, by name.
    pub flags: BTreeMap<String, u64>,
    /// Refused rows, by reason.
    pub refused: BTreeMap<String, u64>,
}

/// Counts of one response.
#[derive(Clone, Debug, PartialEq, Serialize)]
pub struct ResponseCounts {
    /// Cells by status, all statuses named.
    pub status: BTreeMap<&'static str, u64>,
    /// Cells by verdict on the maximum, all verdicts named.
    pub ceiling: BTreeMap<&'static str, u64>,
    /// Cells without a verdict.
    pub no_verdict: u64,
    /// Usable cells.
    pub usable: u64,
}

impl Default for ResponseCounts {
    fn default() -> Self {
        let status = [
            Status::Fitted,
            Status::NotConverged,
            Status::Silent,
            Status::TooFewLevels,
            Status::NoSteps,
            Status::Refused,
        ];
        let ceiling = [
            Ceiling::Resolved,
            Ceiling::Loose,
            Ceiling::Open,
            Ceiling::Declining,
            Ceiling::Silent,
        ];
        Self {
            status: status.iter().map(|status| (status.name(), 0)).collect(),
            ceiling: ceiling.iter().map(|ceiling| (ceiling.name(), 0)).collect(),
            no_verdict: 0,
            usable: 0,
        }
    }
}

impl Counts {
    /// Counts some cells.
    pub fn add(&mut self, cells: &[CellResult]) {
        for cell in cells {
            self.cells += 1;
            for result in &cell.responses {
                let counts = self.responses.entry(result.response).or_default();
                *counts.status.entry(result.status.name()).or_default() += 1;
                match result.ceiling {
                    Some(ceiling) => *counts.ceiling.entry(ceiling.name()).or_default() += 1,
                    None => counts.no_verdict += 1,
                }
                counts.usable += u64::from(result.usable);
                for flag in &result.flags {
                    *self.flags.entry(flag.flag.to_owned()).or_default() += 1;
                }
            }
        }
    }

    /// Counts some refused rows.
    pub fn add_refused(&mut self, rows: &[RefusedRow]) {
        for row in rows {
            *self.refused.entry(row.reason.to_owned()).or_default() += 1;
        }
    }
}

/// Row counts of the set's tables.
#[derive(Clone, Debug, PartialEq, Serialize)]
struct TableRows {
    spikes: RowCounts,
    protocol: RowCounts,
    cells: Option<RowCounts>,
}

/// The content of `run.json`.
#[derive(Clone, Debug, PartialEq, Serialize)]
pub struct Provenance {
    program: &'static str,
    version: &'static str,
    name: String,
    settings: Analysis,
    inputs: Vec<InputFile>,
    rows: TableRows,
    counts: Counts,
    /// Always null: nothing random is drawn.
    seed: Option<u64>,
    tables: Vec<WrittenTable>,
}

impl Provenance {
    /// Gathers the facts: of the set its name, input files and row counts (its cells may be gone by then), the
    /// settings used, the counts over the results, the tables written.
    pub fn new(set: &RecordingSet, settings: &Analysis, counts: Counts, tables: Vec<WrittenTable>) -> Self {
        let inputs = set.inputs.iter().map(|input| InputFile {
            path: relative(&input.path).to_owned(),
            ..input.clone()
        });
        Self {
            program: PROGRAM,
            version: env!("CARGO_PKG_VERSION"),
            name: set.name.clone(),
            settings: settings.clone(),
            inputs: inputs.collect(),
            rows: TableRows {
                spikes: set.spike_rows,
                protocol: set.protocol_rows,
                cells: set.cell_rows,
            },
            counts,
            seed: (settings.bootstrap > 0).then_some(settings.seed),
            tables,
        }
    }

    /// Writes `run.json` into `dir`.
    ///
    /// # Errors
    /// The file cannot be created or written.
    pub fn write(&self, dir: &Path) -> Result<(), WriteError> {
        let path = dir.join(RUN_FILE);
        let failed = |error: io::Error| WriteError::of_io(&path, "cannot be written", &error);
        let mut file = BufWriter::new(File::create(&path).map_err(failed)?);
        serde_json::to_writer_pretty(&mut file, self).map_err(|error| failed(error.into()))?;
        file.write_all(b"\n").map_err(failed)?;
        file.flush().map_err(failed)
    }
}

/// An input's path as results may show it: below the set's folder; of a file elsewhere its name alone.
pub(super) fn relative(path: &str) -> &str {
    let absolute = path.starts_with('/') || path.get(1..2) == Some(":") || path.starts_with('\\');
    if absolute {
        path.rsplit(['/', '\\']).next().unwrap_or(path)
    } else {
        path
    }
}

/// Whether the file at `path` is a `run.json` of this program.
pub(super) fn written_by_us(path: &Path) -> io::Result<bool> {
    let bytes = fs::read(path)?;
    Ok(serde_json::from_slice::<serde_json::Value>(&bytes)
        .is_ok_and(|value| value.get("program").and_then(serde_json::Value::as_str) == Some(PROGRAM)))
}
