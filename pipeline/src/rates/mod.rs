//! Intervals of one step and response window -> rate, its standard error, interval statistics.

mod instantaneous;
mod intervals;
mod windows;

use serde::{Deserialize, Serialize};

pub use instantaneous::{IntervalRate, interval_rates};
pub use intervals::{cv, cv2, detrended_cv, interval_rate, lv, lvr};
pub use windows::{CellCv, cell_interval_cv, fit_se, step_rates};

/// The part of a step that a rate describes.
#[derive(Clone, Copy, Debug, PartialEq, Eq, Hash, PartialOrd, Ord, Serialize, Deserialize)]
#[serde(rename_all = "lowercase")]
pub enum Response {
    /// The whole step.
    Whole,
    /// Its last part, once the rate has settled.
    Steady,
    /// The first interval.
    Onset,
}

impl Response {
    /// `whole`, `steady` or `onset`.
    pub fn name(self) -> &'static str {
        match self {
            Self::Whole => "whole",
            Self::Steady => "steady",
            Self::Onset => "onset",
        }
    }
}

/// What a step's rate was taken from.
#[derive(Clone, Copy, Debug, PartialEq, Eq, Hash, Serialize)]
#[serde(rename_all = "kebab-case")]
pub enum RateFrom {
    /// Two spikes or more.
    Intervals,
    /// One spike: 1/T.
    OneSpike,
    /// None: 0.
    Silent,
}

impl RateFrom {
    /// `intervals`, `one-spike` or `silent`.
    pub fn name(self) -> &'static str {
        match self {
            Self::Intervals => "intervals",
            Self::OneSpike => "one-spike",
            Self::Silent => "silent",
        }
    }
}

/// Rate and interval statistics of one step and response.
#[derive(Clone, Debug, PartialEq)]
pub struct StepRate {
    /// Index into the cell's steps.
    pub step: usize,
    /// Which part of the step.
    pub response: Response,
    /// Window, seconds in the sweep's time base.
    pub window_start_s: f64,
    /// Window end, seconds.
    pub window_end_s: f64,
    /// Spikes in the window.
    pub spikes: usize,
    /// Intervals the rate rests on.
    pub intervals: usize,
    /// Rate, Hz.
    pub rate_hz: f64,
    /// Its standard error, Hz.
    pub rate_se_hz: f64,
    /// What the rate was taken from.
    pub rate_from: RateFrom,
    /// First spike after onset, seconds from onset.
    pub first_spike_latency_s: Option<f64>,
    /// Shortest interval in the window, seconds.
    pub min_interval_s: Option<f64>,
    /// Coefficient of variation of the intervals (sample SD).
    pub cv: Option<f64>,
    /// CV2 (Holt et al. 1996).
    pub cv2: Option<f64>,
    /// LV (Shinomoto, Shima & Tanji 2003).
    pub lv: Option<f64>,
    /// LvR (Shinomoto et al. 2009).
    pub lvr: Option<f64>,
    /// Last instantaneous rate over the first.
    pub adaptation_ratio: Option<f64>,
    /// Whether the fit used this step.
    pub used: bool,
    /// Fitted rate, Hz.
    pub fitted_hz: Option<f64>,
    /// Rate minus fitted rate, Hz.
    pub residual_hz: Option<f64>,
    /// Weight in the fit, 1/Hz^2.
    pub weight: Option<f64>,
}
