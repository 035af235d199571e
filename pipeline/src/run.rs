//! The whole line, from a folder of tables to a result folder. The only module that knows every other.

use std::path::{Path, PathBuf};
use std::sync::atomic::{AtomicBool, Ordering};

use rayon::prelude::*;

use crate::assess::flags::{Evidence, raise};
use crate::assess::goodness::{FittedCurve, goodness, set_weights};
use crate::assess::verdict::{decline, peak_rate};
use crate::assess::{Ceiling, CellResult, CurvePoint, ResponseResult, Severity, Status};
use crate::curve::{Curve, SMOOTHED_HYPERBOLA, SMOOTHED_RAMP};
use crate::fit::main_fit::{self, MainFit, Scatter};
use crate::fit::objective::{Chart, Levels, evaluate};
use crate::fit::solver::Solution;
use crate::fit::{Estimates, Point, RivalFit, estimates, fit_rival, leave_one_level_out, t_quantile};
use crate::rates::{CellCv, Response, StepRate, cell_interval_cv, fit_se, step_rates};
use crate::recording::{CellRecording, DriveKind, ReadError, ReadOptions, RecordingSet, read};
use crate::settings::{Analysis, SettingsError};
use crate::steps::meet;
use crate::summary::SummaryBuilder;
use crate::summary::figure::{FigureNames, OVERVIEW_FILE, cell_figure};
use crate::tables::{Counts, Provenance, ResultFolder, TableContext, Tables, WriteError, WrittenTable};

/// Cells analysed, written and forgotten together: memory does not grow with the set's results.
const CELLS_AT_ONCE: usize = 1024;

/// In a set of more cells than this, a cell without a single interval gets no figure.
const CELLS_ALL_DRAWN: usize = 5000;

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
    let draw = settings.figures && !job.rates_only;

    let context = TableContext {
        drive_kinds: set.drive_kinds(),
        carried_columns: set.carried_columns.clone(),
        rates_only: job.rates_only,
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
    // In a very large set a picture of nothing is not worth its file.
    let draw_all = cells.len() <= CELLS_ALL_DRAWN;
    let mut cells = cells.into_iter();
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
        let analysed: Vec<(CellResult, Option<String>)> = batch
            .par_iter()
            .zip(figure_names)
            .map(
                |(cell, figure)| -> Result<(CellResult, Option<String>), RunError> {
                    if stopped() {
                        return Err(RunError::Interrupted);
                    }
                    let result = analyse_cell(cell, &settings, job.rates_only);
                    let shows = draw_all
                        || result
                            .responses
                            .iter()
                            .flat_map(|r| &r.rates)
                            .any(|r| r.intervals > 0);
                    let mut drawn = None;
                    if let Some(name) = figure.filter(|_| shows)
                        && let Some(svg) = cell_figure(&result)
                    {
                        write_text(&figures.join(&name), &svg)?;
                        drawn = Some(name);
                    }
                    (job.progress)(Progress::Done(1));
                    Ok((result, drawn))
                },
            )
            .collect::<Result<_, _>>()?;
        drop(batch);
        let (results, drawn): (Vec<CellResult>, Vec<Option<String>>) = analysed.into_iter().unzip();
        tables.write(&results)?;
        counts.add(&results);
        for (result, figure) in results.iter().zip(&drawn) {
            summary.add(result, figure.as_deref());
        }
    }

    (job.progress)(Progress::Finishing);
    let written = tables.finish()?;
    if !job.rates_only {
        if let Some(svg) = draw.then(|| summary.overview_figure()).flatten() {
            write_text(&figures.join(OVERVIEW_FILE), &svg)?;
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

/// Fewest steps that a four-parameter curve is fitted to.
const FEWEST_STEPS: usize = 6;
/// Fewest distinct drives.
const FEWEST_LEVELS: usize = 4;

/// Rates and, unless `rates_only`, fits and verdicts of one cell.
pub fn analyse_cell(cell: &CellRecording, settings: &Analysis, rates_only: bool) -> CellResult {
    let met = meet(cell);
    let spans: Vec<(f64, f64, &[f64])> = cell
        .steps
        .iter()
        .zip(&met.of_step)
        .map(|(step, spikes)| (step.onset_s, step.offset_s, *spikes))
        .collect();
    let cell_cv = cell_interval_cv(&met.of_step);
    let responses = settings
        .responses
        .iter()
        .map(|response| {
            let rates = step_rates(&spans, *response, cell_cv.cv, settings);
            let case = Case {
                cell,
                spikes: &met.of_step,
                outside: met.outside,
                cell_cv,
                settings,
            };
            case.response(*response, rates, rates_only)
        })
        .collect();
    CellResult {
        id: cell.id.clone(),
        group: cell.group.clone(),
        drive_kind: cell.drive_kind,
        carried: cell.carried.clone(),
        sweep_names: cell.sweeps.iter().map(|s| s.name.clone()).collect(),
        steps: cell.steps.clone(),
        spikes_outside: met.outside,
        responses,
    }
}

/// One cell on its way through fit and assessment.
struct Case<'a> {
    cell: &'a CellRecording,
    spikes: &'a [&'a [f64]],
    outside: usize,
    cell_cv: CellCv,
    settings: &'a Analysis,
}

impl Case<'_> {
    fn response(&self, response: Response, mut rates: Vec<StepRate>, rates_only: bool) -> ResponseResult {
        let (settings, steps) = (self.settings, &self.cell.steps);
        // Steps in order of drive; repeats keep the order of the protocol.
        let mut order: Vec<usize> = (0..steps.len()).collect();
        order.sort_by(|a, b| steps[*a].drive.total_cmp(&steps[*b].drive));
        let mut points: Vec<Point> = order
            .iter()
            .map(|i| Point {
                drive: steps[*i].drive,
                rate: rates[*i].rate_hz,
                se: fit_se(&rates[*i]),
            })
            .collect();
        let peak = peak_rate(&points);
        let with_intervals = rates.iter().filter(|r| r.intervals > 0).count();
        let declining = decline(&points, settings);
        if let Some(decline) = &declining {
            let keep = points.partition_point(|p| p.drive <= decline.peak_drive);
            points.truncate(keep);
            order.truncate(keep);
        }
        for i in &order {
            rates[*i].used = true;
        }
        let levels = points.chunk_by(|a, b| a.drive == b.drive).count();
        let spikes = rates.iter().map(|r| r.spikes).sum();
        let mut result = ResponseResult {
            response,
            status: Status::Fitted,
            reason: String::new(),
            steps: points.len(),
            levels,
            spikes,
            drive_min: points.first().map(|p| p.drive),
            drive_max: points.last().map(|p| p.drive),
            peak_rate_hz: peak,
            max_rate: Default::default(),
            half_rise: Default::default(),
            threshold: Default::default(),
            noise_sd: Default::default(),
            initial_gain: Default::default(),
            reached: None,
            extra_sd_hz: None,
            interval_cv: (self.cell_cv.steps > 0).then_some(self.cell_cv.cv),
            ceiling: None,
            usable: false,
            flags: Vec::new(),
            covariance: None,
            goodness: Vec::new(),
            curve: Vec::new(),
            rates: Vec::new(),
        };
        let mut found: Option<(MainFit, Estimates)> = None;
        if let Some(refusal) = &self.cell.refusal {
            result.status = Status::Refused;
            result.reason = refusal.sentence.clone();
        } else if steps.is_empty() {
            result.status = Status::NoSteps;
            result.reason = "no protocol step of this cell could be used".into();
        } else if with_intervals < settings.min_interval_steps {
            result.status = Status::Silent;
            result.ceiling = Some(Ceiling::Silent);
            result.reason = format!(
                "{with_intervals} steps hold two spikes or more; {} are needed for a curve",
                settings.min_interval_steps
            );
        } else if points.len() < FEWEST_STEPS || levels < FEWEST_LEVELS {
            result.status = Status::TooFewLevels;
            result.reason = format!(
                "{} steps at {levels} drives{}; a curve of four parameters needs {FEWEST_STEPS} steps at \
                 {FEWEST_LEVELS} drives",
                points.len(),
                if declining.is_some() {
                    " up to the peak"
                } else {
                    ""
                }
            );
        } else if !rates_only {
            match main_fit::fit(&points, Scatter::Estimated) {
                Some(mut fit) => {
                    let estimates = estimates(&points, Scatter::Estimated, &mut fit, settings.profiles);
                    self.take_fit(&mut result, &points, &order, &mut rates, &fit, &estimates);
                    found = Some((fit, estimates));
                }
                None => {
                    result.status = Status::Silent;
                    result.ceiling = Some(Ceiling::Silent);
                    result.reason = "no step below the falling part holds a rate".into();
                }
            }
        }
        if declining.is_some() && matches!(result.status, Status::Fitted | Status::TooFewLevels) {
            result.ceiling = Some(Ceiling::Declining);
        }
        let fitted = result.status == Status::Fitted && found.is_some();
        if result.status != Status::Fitted {
            for rate in &mut rates {
                rate.used = false;
            }
        }
        if !rates_only && !matches!(result.status, Status::Refused | Status::NoSteps) {
            let evidence = Evidence {
                response,
                drive_unit: self.cell.drive_kind.unit(),
                steps,
                step_spikes: self.spikes,
                rates: &rates,
                spikes_outside: self.outside,
                cell_cv: self.cell_cv,
                status: result.status,
                ceiling: result.ceiling,
                estimates: found.as_ref().map(|(_, e)| e).filter(|_| fitted),
                levels,
                settings,
            };
            result.flags = raise(&evidence);
        }
        result.usable = fitted
            && matches!(result.ceiling, Some(Ceiling::Resolved | Ceiling::Loose))
            && result.flags.iter().all(|f| f.severity != Severity::Reject);
        result.rates = rates;
        result
    }

    fn take_fit(
        &self,
        result: &mut ResponseResult,
        points: &[Point],
        order: &[usize],
        rates: &mut [StepRate],
        fit: &MainFit,
        estimates: &Estimates,
    ) {
        let ramp = main_fit::fit_ramp(points, Scatter::Estimated, fit);
        result.goodness = vec![
            measure(
                SMOOTHED_HYPERBOLA,
                4,
                points,
                &fit.levels,
                &fit.solution,
                fit.extra_variance,
                leave_one_level_out(&RivalFit::of_main(points, fit), points)
                    .ok()
                    .map(|left_out| left_out.rmse_hz),
                fit.converged,
                fit.evaluations,
            ),
            measure(
                SMOOTHED_RAMP,
                3,
                points,
                &ramp.levels,
                &ramp.solution,
                ramp.extra_variance,
                fit_rival(Curve::SmoothedRamp, points, Scatter::Held(ramp.extra_variance))
                    .ok()
                    .and_then(|held| leave_one_level_out(&held, points).ok())
                    .map(|left_out| left_out.rmse_hz),
                ramp.converged,
                ramp.evaluations,
            ),
        ];
        set_weights(&mut result.goodness);
        if !fit.converged {
            result.status = Status::NotConverged;
            result.reason = "the search for the best curve did not settle".into();
            return;
        }
        result.reason = "fitted".into();
        let e = estimates;
        (result.max_rate, result.half_rise, result.threshold) = (e.max_rate, e.half_rise, e.threshold);
        (result.noise_sd, result.initial_gain, result.covariance) =
            (e.noise_sd, e.initial_gain, e.covariance);
        result.extra_sd_hz = Some(fit.extra_variance.sqrt());
        result.ceiling = Some(self.ceiling(fit, e));
        let fitted = at_points(&fit.solution, &fit.levels);
        for ((i, point), f) in order.iter().zip(points).zip(&fitted) {
            rates[*i].fitted_hz = Some(*f);
            rates[*i].residual_hz = Some(point.rate - f);
            rates[*i].weight = Some(1.0 / (point.se * point.se + fit.extra_variance));
        }
        if let (Some(top), Some(max)) = (fitted.last(), e.max_rate.value) {
            result.reached = Some(top / max);
        }
        result.curve = self.curve(fit);
    }

    fn ceiling(&self, fit: &MainFit, e: &Estimates) -> Ceiling {
        if e.ceiling_open || e.max_rate.hi == Some(f64::INFINITY) {
            return Ceiling::Open;
        }
        let ratio = match (e.max_rate.lo, e.max_rate.hi, e.max_rate.value, e.max_rate.se) {
            (Some(lo), Some(hi), _, _) => hi / lo,
            // Without profiles: the interval of ln max rate by the delta method.
            (_, _, Some(max), Some(se)) if !self.settings.profiles => {
                (2.0 * t_quantile(fit.degrees) * se / max).exp()
            }
            // A bound that could not be found is no reason for trust.
            _ => f64::INFINITY,
        };
        if ratio > self.settings.loose_ratio {
            Ceiling::Loose
        } else {
            Ceiling::Resolved
        }
    }

    /// The fitted curve and its 95 % band (delta method) on an even grid over all drives of the cell.
    fn curve(&self, fit: &MainFit) -> Vec<CurvePoint> {
        let drives = || self.cell.steps.iter().map(|s| s.drive);
        let lowest = drives().fold(f64::INFINITY, f64::min);
        let highest = drives().fold(f64::NEG_INFINITY, f64::max);
        let count = self.settings.curve_points;
        let grid: Vec<f64> = (0..count)
            .map(|i| {
                let part = i as f64 / (count - 1) as f64;
                lowest * (1.0 - part) + highest * part
            })
            .collect();
        let covariance = fit.band_covariance();
        let t = t_quantile(fit.degrees);
        let mut curve = Vec::with_capacity(count);
        evaluate(
            Chart::Ceiling,
            &fit.solution.parameters,
            &grid,
            |i, rate, derivatives| {
                let half = covariance.map(|c| t * spread(&c, derivatives).sqrt());
                curve.push(CurvePoint {
                    drive: grid[i],
                    rate_hz: rate,
                    lo_hz: half.map(|h| (rate - h).max(0.0)),
                    hi_hz: half.map(|h| rate + h),
                });
            },
        );
        curve
    }
}

/// d' C d, never below zero.
fn spread(covariance: &[[f64; 4]; 4], derivatives: &[f64; 4]) -> f64 {
    let mut sum = 0.0;
    for i in 0..4 {
        for j in 0..4 {
            sum += derivatives[i] * covariance[i][j] * derivatives[j];
        }
    }
    sum.max(0.0)
}

/// Fitted rate of every point, in the order of the points.
fn at_points(solution: &Solution<4>, levels: &Levels) -> Vec<f64> {
    let mut at_level = vec![0.0; levels.drives.len()];
    evaluate(
        Chart::Ceiling,
        &solution.parameters,
        &levels.drives,
        |i, rate, _| at_level[i] = rate,
    );
    levels.level_of_point().map(|l| at_level[l]).collect()
}

#[allow(clippy::too_many_arguments)]
fn measure(
    curve: &'static str,
    parameters: usize,
    points: &[Point],
    levels: &Levels,
    solution: &Solution<4>,
    extra_variance: f64,
    loo_rmse_hz: Option<f64>,
    converged: bool,
    evaluations: u64,
) -> crate::assess::Goodness {
    let mut fitted = vec![0.0; levels.drives.len()];
    evaluate(
        Chart::Ceiling,
        &solution.parameters,
        &levels.drives,
        |i, rate, _| fitted[i] = rate,
    );
    let spread_out = |values: &[f64]| -> Vec<f64> { levels.level_of_point().map(|l| values[l]).collect() };
    goodness(&FittedCurve {
        curve,
        parameters,
        points,
        fitted: &spread_out(&fitted),
        loo_rmse_hz,
        extra_variance,
        converged,
        evaluations,
    })
}
