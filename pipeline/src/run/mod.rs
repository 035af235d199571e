//! The whole line, from a folder of tables to a result folder. The only module that knows every other.

mod cell;

use std::path::{Path, PathBuf};
use std::sync::atomic::{AtomicBool, Ordering};

use rayon::prelude::*;

use crate::assess::{CellResult, Status};
use crate::recording::{CellRecording, DriveKind, ReadError, ReadOptions, RecordingSet, read};
use crate::settings::{Analysis, CellFigures, SettingsError};
use crate::summary::SummaryBuilder;
use crate::summary::figure::{FigureNames, cell_figure, gets_figure};
use crate::tables::{Counts, Provenance, ResultFolder, TableContext, Tables, WriteError, WrittenTable};

pub use cell::analyse_cell;

/// Cells analysed together. The results of a batch are written and forgotten while the next is analysed: memory does
/// not grow with the set's results.
const CELLS_AT_ONCE: usize = 256;

/// What to do.
pub struct Job<'a> {
    /// The recording set's folder.
    pub set: &'a Path,
    /// The result folder; `None` for `reports/<name of the set's folder>`.
    pub out: Option<&'a Path>,
    /// Replace an existing result folder.
    pub overwrite: bool,
    /// Stop after the rates.
    pub rates_only: bool,
    /// Changes to the settings after `recording.toml` has been read.
    pub adjust: &'a (dyn Fn(&mut Analysis) + Sync),
    /// Once true, the run stops and leaves earlier results as they were.
    pub cancel: &'a AtomicBool,
    /// Told of every stage.
    pub progress: &'a (dyn Fn(Progress) + Sync),
}

/// How far a run is.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub enum Progress {
    /// Tables are being read and checked.
    Reading,
    /// This many cells will be analysed.
    Cells(u64),
    /// This many more cells are done.
    Done(u64),
    /// The summary is being written and the folder put in place.
    Finishing,
}

/// What a finished run says of itself.
#[derive(Clone, Debug, PartialEq)]
pub struct Outcome {
    /// Where the results are.
    pub folder: PathBuf,
    /// The set, without its cells.
    pub set: SetFacts,
    /// Counts over cells, verdicts, flags and refused rows.
    pub counts: Counts,
    /// Tables written.
    pub tables: Vec<WrittenTable>,
    /// Cell and response pairs without a fit.
    pub unfitted: u64,
    /// Cell and response pairs with one.
    pub fitted: u64,
}

/// Facts about the set that outlive its cells.
#[derive(Clone, Debug, PartialEq)]
pub struct SetFacts {
    /// Its name.
    pub name: String,
    /// Row counts: spikes, protocol, cells.
    pub rows: Vec<(&'static str, crate::recording::RowCounts)>,
}

impl SetFacts {
    /// The facts of `set`.
    pub fn of(set: &RecordingSet) -> Self {
        let mut rows = vec![("spikes", set.spike_rows), ("protocol", set.protocol_rows)];
        rows.extend(set.cell_rows.map(|rows| ("cells", rows)));
        Self {
            name: set.name.clone(),
            rows,
        }
    }

    /// Rows refused in all tables.
    pub fn refused(&self) -> u64 {
        self.rows.iter().map(|(_, rows)| rows.refused).sum()
    }
}

/// Why a run ended without results.
#[derive(Debug, thiserror::Error)]
pub enum RunError {
    /// The set could not be read.
    #[error(transparent)]
    Read(#[from] ReadError),
    /// A setting is out of range.
    #[error(transparent)]
    Settings(#[from] SettingsError),
    /// The results could not be written; earlier ones are as they were.
    #[error(transparent)]
    Write(#[from] WriteError),
    /// The caller asked to stop.
    #[error("interrupted\n  earlier results are as they were")]
    Interrupted,
}

/// Where results go when the user does not say: `reports/<name of the set's folder>`.
pub fn default_folder(set: &Path) -> PathBuf {
    let absolute = std::fs::canonicalize(set).unwrap_or_else(|_| set.to_path_buf());
    let name = absolute
        .file_name()
        .map_or_else(|| "set".into(), std::ffi::OsStr::to_os_string);
    Path::new("reports").join(name)
}

/// Reads a set, analyses every cell and writes the result folder.
///
/// # Errors
/// The set as a whole cannot be read, a setting is out of range, the results cannot be written, or `cancel` was set.
/// Cells that cannot be fitted are no error: they have their row with the reason.
pub fn run(job: &Job<'_>) -> Result<Outcome, RunError> {
    let stopped = || job.cancel.load(Ordering::Relaxed);
    let out = job.out.map_or_else(|| default_folder(job.set), Path::to_path_buf);
    // A taken folder is said before the work, not after it; but for a set that is not there nothing is created.
    if !job.set.is_dir() {
        read(
            job.set,
            &ReadOptions {
                cancel: Some(job.cancel),
            },
        )?;
    }
    // Replacing the folder would take the set away with it, whatever its files are called.
    if let (Ok(set), Ok(place)) = (std::fs::canonicalize(job.set), std::fs::canonicalize(&out))
        && set.starts_with(&place)
    {
        return Err(RunError::Write(WriteError::Exists {
            path: out,
            cause: format!("holds the recording set {} itself", job.set.display()),
            remedy: "choose a folder outside the set with --out".into(),
        }));
    }
    let folder = ResultFolder::prepare(&out, job.overwrite)?;
    (job.progress)(Progress::Reading);
    let mut set = match read(
        job.set,
        &ReadOptions {
            cancel: Some(job.cancel),
        },
    ) {
        Err(ReadError::Interrupted) => return Err(RunError::Interrupted),
        other => other?,
    };
    (job.adjust)(&mut set.analysis);
    set.analysis.validate()?;
    let settings = set.analysis.clone();
    let draw = settings.figures != CellFigures::None && !job.rates_only;

    let context = TableContext {
        drive_kinds: set.drive_kinds(),
        carried_columns: set.carried_columns.clone(),
        rates_only: job.rates_only,
        bootstrap: settings.bootstrap > 0,
    };
    let mut tables = Tables::create(folder.path(), &context)?;
    tables.write_refused(&set.refused, &set.inputs)?;
    let mut counts = Counts::default();
    counts.add_refused(&set.refused);
    let mut summary = SummaryBuilder::new(&set, &settings);
    let mut names = FigureNames::new();
    let figures = folder.path().join("figures");
    if draw {
        std::fs::create_dir_all(&figures)
            .map_err(|e| WriteError::of_io(&figures, "cannot be created", &e))?;
    }

    let cells = std::mem::take(&mut set.cells);
    (job.progress)(Progress::Cells(cells.len() as u64));
    let in_set = cells.len();
    let mut cells = cells.into_iter();
    let mut keep = |analysed: Analysed| -> Result<(), RunError> {
        let (results, drawn): (Vec<CellResult>, Vec<Option<String>>) = analysed.into_iter().unzip();
        tables.write(&results)?;
        counts.add(&results);
        if job.rates_only {
            return Ok(());
        }
        for (result, figure) in results.iter().zip(&drawn) {
            if let Some(page) = summary.add(result, figure.as_deref()) {
                write_text(&figures.join(&page.name), &page.svg)?;
            }
        }
        Ok(())
    };
    let mut finished: Analysed = Vec::new();
    loop {
        let batch: Vec<CellRecording> = cells.by_ref().take(CELLS_AT_ONCE).collect();
        if batch.is_empty() {
            break;
        }
        if stopped() {
            return Err(RunError::Interrupted);
        }
        let figure_names: Vec<Option<String>> = batch
            .iter()
            .map(|cell| (draw && !cell.steps.is_empty()).then(|| names.name(&cell.id.0)))
            .collect();
        let one = |(cell, figure): (CellRecording, Option<String>)| -> Result<_, RunError> {
            if stopped() {
                return Err(RunError::Interrupted);
            }
            let result = analyse_cell(&cell, &settings, job.rates_only);
            let mut drawn = None;
            if let Some(name) = figure.filter(|_| gets_figure(&result, in_set, settings.figures))
                && let Some(svg) = cell_figure(&result, settings.draw_rivals)
            {
                write_text(&figures.join(&name), &svg)?;
                drawn = Some(name);
            }
            (job.progress)(Progress::Done(1));
            Ok((result, drawn))
        };
        let before = std::mem::take(&mut finished);
        let (analysed, kept) = rayon::join(
            || {
                batch
                    .into_par_iter()
                    .zip(figure_names)
                    .map(one)
                    .collect::<Result<Analysed, RunError>>()
            },
            || keep(before),
        );
        kept?;
        finished = analysed?;
    }
    keep(finished)?;

    (job.progress)(Progress::Finishing);
    let written = tables.finish()?;
    if !job.rates_only {
        for figure in summary.closing_figures() {
            write_text(&figures.join(&figure.name), &figure.svg)?;
        }
        write_text(&folder.path().join("summary.md"), &summary.finish())?;
    }
    Provenance::new(&set, &settings, counts.clone(), written.clone()).write(folder.path())?;
    if stopped() {
        return Err(RunError::Interrupted);
    }
    folder.commit()?;
    let (mut fitted, mut pairs) = (0, 0);
    for response in counts.responses.values() {
        fitted += response.status.get(Status::Fitted.name()).copied().unwrap_or(0);
        pairs += response.status.values().sum::<u64>();
    }
    Ok(Outcome {
        folder: out,
        set: SetFacts::of(&set),
        counts,
        tables: written,
        unfitted: pairs - fitted,
        fitted,
    })
}

/// What is known of each cell of a batch, with its figure's file.
type Analysed = Vec<(CellResult, Option<String>)>;

fn write_text(path: &Path, text: &str) -> Result<(), WriteError> {
    std::fs::write(path, text).map_err(|e| WriteError::of_io(path, "cannot be written", &e))
}

/// Kinds of drive in words, for messages.
pub fn drive_words(kinds: &[DriveKind]) -> String {
    let words: Vec<String> = kinds
        .iter()
        .map(|k| format!("{} ({})", k.name(), k.unit()))
        .collect();
    words.join(" and ")
}
