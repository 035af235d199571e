//! What the fits say about each cell: verdict, goodness of fit, flags.

pub mod flags;
pub mod goodness;
pub mod inhibition;
pub mod repeats;
pub mod verdict;

use std::sync::Arc;

use repeats::Repeats;

use crate::fit::Bootstrap;
pub use crate::fit::Estimate;
use crate::rates::{Response, StepRate};
use crate::recording::{CellId, DriveKind, ProtocolStep};

/// Why a response has a fit, or has none, in one word.
#[derive(Clone, Copy, Debug, PartialEq, Eq, Hash, PartialOrd, Ord)]
pub enum Status {
    /// Fitted and converged.
    Fitted,
    /// The solver stopped before it met its tolerance; no number is reported.
    NotConverged,
    /// Too few steps with a rate from intervals.
    Silent,
    /// Fewer usable steps or levels than a four-parameter curve needs.
    TooFewLevels,
    /// No protocol step was accepted.
    NoSteps,
    /// The whole cell was refused.
    Refused,
}

impl Status {
    /// `fitted`, `not-converged`, `silent`, `too-few-levels`, `no-steps` or `refused`.
    pub fn name(self) -> &'static str {
        match self {
            Self::Fitted => "fitted",
            Self::NotConverged => "not-converged",
            Self::Silent => "silent",
            Self::TooFewLevels => "too-few-levels",
            Self::NoSteps => "no-steps",
            Self::Refused => "refused",
        }
    }
}

/// What the data say about the maximum rate.
#[derive(Clone, Copy, Debug, PartialEq, Eq, Hash, PartialOrd, Ord)]
pub enum Ceiling {
    /// Upper and lower bound of max rate within the loose ratio.
    Resolved,
    /// Closed, but wider than that.
    Loose,
    /// The data do not tell the curve from the smoothed ramp: no upper bound.
    Open,
    /// The rate falls at high drive: depolarisation block or failing clamp.
    Declining,
    /// Too few steps with a rate from intervals.
    Silent,
}

impl Ceiling {
    /// `resolved`, `loose`, `open`, `declining` or `silent`.
    pub fn name(self) -> &'static str {
        match self {
            Self::Resolved => "resolved",
            Self::Loose => "loose",
            Self::Open => "open",
            Self::Declining => "declining",
            Self::Silent => "silent",
        }
    }
}

/// How serious a flag is.
#[derive(Clone, Copy, Debug, PartialEq, Eq, Hash, PartialOrd, Ord)]
pub enum Severity {
    /// Worth knowing.
    Note,
    /// Look before use.
    Caution,
    /// Not usable.
    Reject,
}

impl Severity {
    /// `note`, `caution` or `reject`.
    pub fn name(self) -> &'static str {
        match self {
            Self::Note => "note",
            Self::Caution => "caution",
            Self::Reject => "reject",
        }
    }
}

/// A named reason to look at a cell.
#[derive(Clone, Debug, PartialEq)]
pub struct Flag {
    /// Stable name.
    pub flag: &'static str,
    /// How serious it is.
    pub severity: Severity,
    /// The figure that raised it.
    pub value: Option<f64>,
    /// The limit it crossed.
    pub limit: Option<f64>,
    /// A sentence in plain words.
    pub message: String,
}

/// Goodness of fit of one rate function to one response of one cell. `None` is not estimated.
#[derive(Clone, Debug, PartialEq)]
pub struct Goodness {
    /// Name of the rate function.
    pub curve: &'static str,
    /// Number of its parameters, extra SD not counted.
    pub parameters: usize,
    /// Steps it was fitted to.
    pub steps: usize,
    /// Gaussian log-likelihood.
    pub log_likelihood: Option<f64>,
    /// Corrected Akaike criterion (Hurvich & Tsai 1989).
    pub aicc: Option<f64>,
    /// Akaike weight over the rate functions tried.
    pub aicc_weight: Option<f64>,
    /// Bayesian information criterion.
    pub bic: Option<f64>,
    /// Root mean square residual, Hz.
    pub rmse_hz: Option<f64>,
    /// 1 - residual over total sum of squares, unweighted.
    pub r2: Option<f64>,
    /// Weighted sum of squares (interval noise alone) over degrees of freedom.
    pub reduced_chi2: Option<f64>,
    /// Lack-of-fit F against pure error.
    pub lack_of_fit_f: Option<f64>,
    /// Its p-value.
    pub lack_of_fit_p: Option<f64>,
    /// Runs test of residual signs by drive, two-sided p.
    pub runs_p: Option<f64>,
    /// Leave-one-level-out RMSE, Hz.
    pub loo_rmse_hz: Option<f64>,
    /// Whether the solver converged.
    pub converged: bool,
    /// `fitted`, or why the curve has no fit.
    pub reason: String,
    /// Evaluations of the curve over all points.
    pub evaluations: u64,
}

/// The fitted curve at one drive with its 95 % band.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct CurvePoint {
    /// Drive, in the cell's drive unit.
    pub drive: f64,
    /// Fitted rate, Hz.
    pub rate_hz: f64,
    /// Lower bound of the 95 % band, Hz.
    pub lo_hz: Option<f64>,
    /// Upper bound of the 95 % band, Hz.
    pub hi_hz: Option<f64>,
}

/// One of the other rate functions fitted to a response.
#[derive(Clone, Debug, PartialEq)]
pub struct RivalCurve {
    /// Name of the rate function, as in [`Goodness::curve`].
    pub curve: &'static str,
    /// Its fitted rates, Hz, at the drives of [`ResponseResult::curve`].
    pub rates_hz: Vec<f64>,
}

/// Everything found about one response of one cell.
#[derive(Clone, Debug, PartialEq)]
pub struct ResponseResult {
    /// Which response.
    pub response: Response,
    /// Why it has a fit or none.
    pub status: Status,
    /// The same in a sentence.
    pub reason: String,
    /// Steps used by the fit (or that would have been).
    pub steps: usize,
    /// Distinct drives among them.
    pub levels: usize,
    /// Spikes inside the response windows of all steps.
    pub spikes: usize,
    /// Smallest drive used.
    pub drive_min: Option<f64>,
    /// Largest drive used.
    pub drive_max: Option<f64>,
    /// Largest mean rate over a level, Hz.
    pub peak_rate_hz: Option<f64>,
    /// Ceiling, Hz.
    pub max_rate: Estimate,
    /// Drive above threshold at half the ceiling, drive units.
    pub half_rise: Estimate,
    /// Drive where a noise-free cell starts, drive units.
    pub threshold: Estimate,
    /// SD of the Gaussian input noise, drive units.
    pub noise_sd: Estimate,
    /// Max rate / half-rise, Hz per drive unit.
    pub initial_gain: Estimate,
    /// Fitted rate at the largest drive used over max rate.
    pub reached: Option<f64>,
    /// Between-step SD beyond interval noise, Hz.
    pub extra_sd_hz: Option<f64>,
    /// The cell's interval CV that the standard errors rest on.
    pub interval_cv: Option<f64>,
    /// Verdict about the maximum.
    pub ceiling: Option<Ceiling>,
    /// Converged, `resolved` or `loose`, no flag of severity `reject`.
    pub usable: bool,
    /// Flags raised.
    pub flags: Vec<Flag>,
    /// Covariance, row-major, of ln max rate, ln half-rise, threshold, ln noise SD.
    pub covariance: Option<[f64; 16]>,
    /// One entry per rate function tried.
    pub goodness: Vec<Goodness>,
    /// Bootstrap intervals, where asked for.
    pub bootstrap: Option<Bootstrap>,
    /// What repeated levels say.
    pub repeats: Option<Repeats>,
    /// Fitted rate and band on a grid of drives; empty without a fit.
    pub curve: Vec<CurvePoint>,
    /// The other rate functions on the same grid; empty where none was fitted or none is to be drawn.
    pub rivals: Vec<RivalCurve>,
    /// One entry per step of the cell, in the order of [`CellResult::steps`].
    pub rates: Vec<StepRate>,
}

/// Everything found about one cell.
#[derive(Clone, Debug, PartialEq)]
pub struct CellResult {
    /// The cell's name.
    pub id: CellId,
    /// Its group.
    pub group: Option<Arc<str>>,
    /// Kind of drive.
    pub drive_kind: DriveKind,
    /// Carried-through columns of the cell table.
    pub carried: Vec<Option<Arc<str>>>,
    /// Names of the sweeps, indexed by [`ProtocolStep::sweep`].
    pub sweep_names: Vec<Option<Arc<str>>>,
    /// The cell's steps.
    pub steps: Vec<ProtocolStep>,
    /// Spikes outside every step.
    pub spikes_outside: usize,
    /// One entry per response analysed, in the order of the settings.
    pub responses: Vec<ResponseResult>,
}
