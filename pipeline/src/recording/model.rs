//! What a recording set is once it has been read and checked: plain structs, one per cell.

use std::ops::Range;
use std::path::PathBuf;
use std::sync::Arc;

use serde::{Deserialize, Serialize};

use crate::settings::Analysis;

/// Name of a cell, as text, exactly as the tables give it.
#[derive(Clone, Debug, PartialEq, Eq, Hash, PartialOrd, Ord)]
pub struct CellId(pub Arc<str>);

impl std::fmt::Display for CellId {
    fn fmt(&self, f: &mut std::fmt::Formatter<'_>) -> std::fmt::Result {
        f.write_str(&self.0)
    }
}

/// What drives the cells of a set: injected current or excitatory conductance.
#[derive(Clone, Copy, Debug, PartialEq, Eq, Hash, Serialize, Deserialize)]
#[serde(rename_all = "lowercase")]
pub enum DriveKind {
    /// Injected current, pA.
    Current,
    /// Excitatory conductance, nS.
    Conductance,
}

impl DriveKind {
    /// `current` or `conductance`.
    pub fn name(self) -> &'static str {
        match self {
            Self::Current => "current",
            Self::Conductance => "conductance",
        }
    }

    /// SI symbol of the drive: `pA` or `nS`.
    pub fn unit(self) -> &'static str {
        match self {
            Self::Current => "pA",
            Self::Conductance => "nS",
        }
    }
}

/// One row of the protocol: a stretch of constant input within a sweep.
#[derive(Clone, Debug, PartialEq)]
pub struct ProtocolStep {
    /// Index into [`CellRecording::sweeps`].
    pub sweep: usize,
    /// The protocol's own label of the step, else its 1-based place within the sweep by onset.
    pub step: Arc<str>,
    /// Start, seconds in the sweep's time base.
    pub onset_s: f64,
    /// End, seconds in the sweep's time base; after `onset_s`.
    pub offset_s: f64,
    /// Drive in pA (current) or nS (excitatory conductance).
    pub drive: f64,
    /// Inhibitory conductance in nS, where the protocol gives one.
    pub g_inh_ns: Option<f64>,
}

/// One sweep of one cell, and where its spikes are.
#[derive(Clone, Debug, PartialEq)]
pub struct Sweep {
    /// The sweep's name; `None` on a continuous time line.
    pub name: Option<Arc<str>>,
    /// Range of [`CellRecording::spikes_s`] that belongs to this sweep, ascending.
    pub spikes: Range<usize>,
}

/// Membrane constants from the cell table, where given.
#[derive(Clone, Copy, Debug, Default, PartialEq)]
pub struct CellConstants {
    /// Leak conductance, nS.
    pub g_leak_ns: Option<f64>,
    /// Leak reversal potential, mV.
    pub e_leak_mv: Option<f64>,
    /// Excitatory reversal potential, mV.
    pub e_exc_mv: Option<f64>,
    /// Inhibitory reversal potential, mV.
    pub e_inh_mv: Option<f64>,
    /// Spike threshold potential, mV.
    pub v_threshold_mv: Option<f64>,
    /// Membrane capacitance, pF.
    pub capacitance_pf: Option<f64>,
}

/// Why a whole cell is not analysed: the rule's stable name and a sentence.
#[derive(Clone, Debug, PartialEq, Eq)]
pub struct CellRefusal {
    /// Stable name from the list of rules.
    pub rule: &'static str,
    /// A sentence with the values, the limit and the remedy.
    pub sentence: String,
}

/// Everything read of one cell.
#[derive(Clone, Debug, PartialEq)]
pub struct CellRecording {
    /// The cell's name.
    pub id: CellId,
    /// Group from the cell table.
    pub group: Option<Arc<str>>,
    /// Kind of drive of its protocol (of its first step where it mixes them); current for a cell without any step.
    pub drive_kind: DriveKind,
    /// Membrane constants from the cell table.
    pub constants: CellConstants,
    /// Further columns of the cell table for this cell, in table order, same keys for every cell of the set.
    pub carried: Vec<Option<Arc<str>>>,
    /// The sweeps, in natural order of their names (numbers by value), or the one continuous time line.
    pub sweeps: Vec<Sweep>,
    /// The protocol steps accepted, sorted by sweep, then onset.
    pub steps: Vec<ProtocolStep>,
    /// All accepted spike times in seconds, sweep by sweep, ascending within a sweep.
    pub spikes_s: Vec<f64>,
    /// Spikes refused because an earlier row has the same time.
    pub duplicate_spikes: usize,
    /// Set when the whole cell is refused; its rows are then in the refused table.
    pub refusal: Option<CellRefusal>,
}

impl CellRecording {
    /// The spikes of a step of this cell: those with onset <= t < offset, ascending, seconds.
    ///
    /// Empty for a step that names a sweep this cell does not have.
    pub fn spikes_in(&self, step: &ProtocolStep) -> &[f64] {
        let spikes = self
            .sweeps
            .get(step.sweep)
            .and_then(|sweep| self.spikes_s.get(sweep.spikes.clone()))
            .unwrap_or_default();
        let start = spikes.partition_point(|&time| time < step.onset_s);
        let end = spikes.partition_point(|&time| time < step.offset_s);
        spikes.get(start..end).unwrap_or_default()
    }
}

/// Which table of a set a row belongs to.
#[derive(Clone, Copy, Debug, PartialEq, Eq, Hash, PartialOrd, Ord, Serialize)]
#[serde(rename_all = "lowercase")]
pub enum TableKind {
    /// Spike times.
    Spikes,
    /// Stimulus protocol.
    Protocol,
    /// Cell table.
    Cells,
}

impl TableKind {
    /// `spikes`, `protocol` or `cells`.
    pub fn name(self) -> &'static str {
        match self {
            Self::Spikes => "spikes",
            Self::Protocol => "protocol",
            Self::Cells => "cells",
        }
    }
}

/// One input row that is not used.
#[derive(Clone, Debug, PartialEq)]
pub struct RefusedRow {
    /// The table it stands in.
    pub table: TableKind,
    /// Index into [`RecordingSet::inputs`].
    pub file: usize,
    /// Row number, 1-based, header excluded.
    pub row: u64,
    /// The cell, where the row names one.
    pub cell: Option<Arc<str>>,
    /// Our name of the column at fault, where one is.
    pub column: Option<&'static str>,
    /// The value at fault, as text.
    pub value: Option<String>,
    /// The rule's stable name.
    pub reason: &'static str,
    /// A sentence with the limit and the remedy.
    pub message: String,
}

/// One input file.
#[derive(Clone, Debug, PartialEq, Serialize)]
pub struct InputFile {
    /// Which table it feeds; `None` for `recording.toml`.
    pub table: Option<TableKind>,
    /// Path below the set's folder, with `/`.
    pub path: String,
    /// SHA-256 of the file's bytes, lower-case hex.
    pub sha256: String,
    /// Rows read, header excluded.
    pub rows: u64,
}

/// Row counts of one table: `rows = used + outside_steps + refused`.
#[derive(Clone, Copy, Debug, Default, PartialEq, Eq, Serialize)]
pub struct RowCounts {
    /// Rows read.
    pub rows: u64,
    /// Rows used: spikes inside a step, steps analysed, cells described.
    pub used: u64,
    /// Spikes outside every step (baseline): counted, not refused. Zero for the other tables.
    pub outside_steps: u64,
    /// Rows refused.
    pub refused: u64,
}

/// A recording set, read and checked.
#[derive(Clone, Debug)]
pub struct RecordingSet {
    /// Name from `recording.toml`, else the folder's name.
    pub name: String,
    /// The set's folder.
    pub folder: PathBuf,
    /// Whether any table has a `sweep` column.
    pub has_sweeps: bool,
    /// Every file read, `recording.toml` first where there is one, then spikes, protocol, cells.
    pub inputs: Vec<InputFile>,
    /// Names of the carried-through columns of the cell table.
    pub carried_columns: Vec<String>,
    /// The cells in natural order of their names, refused cells included.
    pub cells: Vec<CellRecording>,
    /// Refused rows, sorted by table, file, row.
    pub refused: Vec<RefusedRow>,
    /// Row counts of the spike table.
    pub spike_rows: RowCounts,
    /// Row counts of the protocol table.
    pub protocol_rows: RowCounts,
    /// Row counts of the cell table; `None` where the set has none.
    pub cell_rows: Option<RowCounts>,
    /// Settings after `recording.toml` (the command line is applied later).
    pub analysis: Analysis,
    /// What was noticed and settled while reading, in sentences for the summary (units found in headers and so on).
    pub notes: Vec<String>,
}

impl RecordingSet {
    /// The kinds of drive of the cells that have steps, current first, each once.
    pub fn drive_kinds(&self) -> Vec<DriveKind> {
        [DriveKind::Current, DriveKind::Conductance]
            .into_iter()
            .filter(|kind| {
                self.cells
                    .iter()
                    .any(|cell| !cell.steps.is_empty() && cell.drive_kind == *kind)
            })
            .collect()
    }
}
