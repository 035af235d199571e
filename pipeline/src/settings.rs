//! Every analysis setting with its default. Each is a key of `[analysis]` in `recording.toml` and a flag of the
//! command line; the values used are written to `run.json`.

use serde::de::Visitor;
use serde::{Deserialize, Deserializer, Serialize};

use crate::curve::Curve;
use crate::fit::BootstrapKind;
use crate::rates::Response;

/// Which cells get a figure of their own. Contact sheets and the other figures of the set show all cells.
#[derive(Clone, Copy, Debug, Default, PartialEq, Eq, Serialize)]
#[serde(rename_all = "kebab-case")]
pub enum CellFigures {
    /// Every cell with steps.
    #[default]
    All,
    /// Cells with a flag of severity caution or reject, or with a response without a usable fit.
    Flagged,
    /// No figure at all, not even of the set.
    None,
}

/// By hand, so that `figures = true` is told what to write instead.
impl<'de> Deserialize<'de> for CellFigures {
    fn deserialize<D: Deserializer<'de>>(deserializer: D) -> Result<Self, D::Error> {
        struct Word;
        impl Visitor<'_> for Word {
            type Value = CellFigures;

            fn expecting(&self, formatter: &mut std::fmt::Formatter<'_>) -> std::fmt::Result {
                formatter.write_str("\"all\", \"flagged\" or \"none\"")
            }

            fn visit_str<E: serde::de::Error>(self, word: &str) -> Result<CellFigures, E> {
                match word {
                    "all" => Ok(CellFigures::All),
                    "flagged" => Ok(CellFigures::Flagged),
                    "none" => Ok(CellFigures::None),
                    other => Err(E::unknown_variant(other, &["all", "flagged", "none"])),
                }
            }
        }
        deserializer.deserialize_str(Word)
    }
}

/// The analysis settings of one run.
#[derive(Clone, Debug, PartialEq, Serialize, Deserialize)]
#[serde(default, deny_unknown_fields)]
pub struct Analysis {
    /// Which parts of a step get a rate and a fit.
    pub responses: Vec<Response>,
    /// The last part of a step that counts as `steady`, as a fraction of its length (0 to 1).
    pub steady_fraction: f64,
    /// Refractoriness constant R of LvR, seconds (Shinomoto et al. 2009: 5 ms).
    pub lvr_refractory_s: f64,
    /// Whether profile intervals are computed; without them intervals are null and `open` rests on the ramp fit.
    pub profiles: bool,
    /// Which cells get a figure of their own; with `none` no figure is drawn at all.
    pub figures: CellFigures,
    /// Whether the figure of a cell also shows the other rate functions fitted to it.
    pub draw_rivals: bool,
    /// Steps with a rate from intervals below which a response is `silent`.
    pub min_interval_steps: usize,
    /// Upper over lower bound of max rate above which a closed ceiling is `loose`.
    pub loose_ratio: f64,
    /// Mean rate above the peak level, as a fraction of the peak, below which a cell may be `declining`.
    pub declining_fraction: f64,
    /// Standard errors by which at least two levels above the peak must fall short of it.
    pub declining_se: f64,
    /// Mean rate on the last level, as a fraction of the peak, below which a cell is `declining` by that alone.
    pub declining_last_fraction: f64,
    /// Levels below which a cell has too few (flag `few-levels`).
    pub few_levels: usize,
    /// Spikes below which a response has too few (flag `few-spikes`).
    pub few_spikes: usize,
    /// Interval in seconds below which two spikes may be one (flag `short-interval`).
    pub short_interval_s: f64,
    /// Fraction of a cell's spikes outside steps above which it fires on its own (flag `spikes-outside`).
    pub outside_fraction: f64,
    /// Steady over onset rate at the largest drive below which adaptation is strong (flag `strong-adaptation`).
    pub adaptation_fraction: f64,
    /// Interval CV above which firing is irregular (flag `irregular`).
    pub irregular_cv: f64,
    /// Part of a step that may pass in silence after its last spike, as a multiple of the mean interval, before firing
    /// counts as stopped (flag `stops-early`).
    pub stop_intervals: f64,
    /// Change of the rate over the recording, as a fraction of the mean rate, above which repeats drift (flag `drift`).
    pub drift_fraction: f64,
    /// p of no drift below which such a change is believed.
    pub drift_p: f64,
    /// Lack-of-fit p below which the curve misses the level means (flag `lack-of-fit`).
    pub lack_of_fit_p: f64,
    /// AICc by which another rate function must be better (flag `rival-better`).
    pub rival_aicc: f64,
    /// Standard errors by which a level's mean rate must fall below that of a smaller drive (flag `non-monotone`).
    pub non_monotone_se: f64,
    /// Duplicate spike times dropped above which a cell is flagged (flag `duplicates-dropped`).
    pub duplicate_spikes: usize,
    /// Steps that the robust fit may cut to less than half of their weight without a flag (flag `down-weighted`).
    pub down_weighted_steps: usize,
    /// Rate functions fitted to every cell; the smoothed hyperbola always is.
    pub curves: Vec<Curve>,
    /// Whether every level is also predicted from the fit without it, for each rate function.
    pub leave_one_out: bool,
    /// Resamples of the bootstrap; 0 is none.
    pub bootstrap: usize,
    /// How the rates of a resample are drawn.
    pub bootstrap_kind: BootstrapKind,
    /// Seed of all random numbers, together with each cell's name.
    pub seed: u64,
    /// Whether steps far from the curve lose weight (Tukey's biweight).
    pub robust: bool,
    /// Number of drives in the grid of `curves.parquet`, per cell and response.
    pub curve_points: usize,
}

impl Default for Analysis {
    fn default() -> Self {
        Self {
            responses: vec![Response::Whole, Response::Steady, Response::Onset],
            steady_fraction: 0.5,
            lvr_refractory_s: 0.005,
            profiles: true,
            figures: CellFigures::All,
            draw_rivals: false,
            min_interval_steps: 3,
            loose_ratio: 1.5,
            declining_fraction: 0.85,
            declining_se: 3.0,
            declining_last_fraction: 0.5,
            few_levels: 6,
            few_spikes: 5,
            short_interval_s: 0.001,
            outside_fraction: 0.2,
            adaptation_fraction: 0.5,
            irregular_cv: 1.0,
            stop_intervals: 5.0,
            drift_fraction: 0.1,
            drift_p: 0.01,
            lack_of_fit_p: 0.01,
            rival_aicc: 10.0,
            non_monotone_se: 4.0,
            duplicate_spikes: 0,
            down_weighted_steps: 0,
            curves: Curve::ALL.to_vec(),
            leave_one_out: true,
            bootstrap: 0,
            bootstrap_kind: BootstrapKind::Parametric,
            seed: 1,
            robust: false,
            curve_points: 101,
        }
    }
}

/// A setting outside its allowed range.
#[derive(Clone, Debug, PartialEq, thiserror::Error)]
#[error("{key} = {value} is outside {limit}\n  set it under [analysis] in recording.toml or with --{}", key.replace('_', "-"))]
pub struct SettingsError {
    /// The setting's key.
    pub key: &'static str,
    /// The value given.
    pub value: String,
    /// The allowed range in words.
    pub limit: &'static str,
}

impl Analysis {
    /// Checks every setting against its range.
    ///
    /// # Errors
    /// The first setting that is out of range, with its limit.
    pub fn validate(&self) -> Result<(), SettingsError> {
        let err = |key, value: String, limit| Err(SettingsError { key, value, limit });
        if self.responses.is_empty() {
            return err("responses", "[]".into(), "at least one of whole, steady, onset");
        }
        let mut seen = self.responses.clone();
        seen.sort();
        seen.dedup();
        if seen.len() != self.responses.len() {
            return err("responses", format!("{:?}", self.responses), "each response once");
        }
        if !(self.steady_fraction > 0.0 && self.steady_fraction <= 1.0) {
            return err("steady_fraction", self.steady_fraction.to_string(), "(0, 1]");
        }
        if !(self.lvr_refractory_s >= 0.0 && self.lvr_refractory_s < 1.0) {
            return err("lvr_refractory_s", self.lvr_refractory_s.to_string(), "[0, 1) s");
        }
        if self.min_interval_steps < 1 {
            return err(
                "min_interval_steps",
                self.min_interval_steps.to_string(),
                "1 or more",
            );
        }
        if !(self.loose_ratio > 1.0 && self.loose_ratio.is_finite()) {
            return err("loose_ratio", self.loose_ratio.to_string(), "above 1, finite");
        }
        for (key, value) in [
            ("declining_fraction", self.declining_fraction),
            ("declining_last_fraction", self.declining_last_fraction),
        ] {
            if !(value > 0.0 && value < 1.0) {
                return err(key, value.to_string(), "(0, 1)");
            }
        }
        if !(self.declining_se > 0.0 && self.declining_se.is_finite()) {
            return err("declining_se", self.declining_se.to_string(), "above 0, finite");
        }
        for (key, value) in [
            ("short_interval_s", self.short_interval_s),
            ("outside_fraction", self.outside_fraction),
            ("adaptation_fraction", self.adaptation_fraction),
            ("irregular_cv", self.irregular_cv),
            ("stop_intervals", self.stop_intervals),
            ("drift_fraction", self.drift_fraction),
            ("rival_aicc", self.rival_aicc),
            ("non_monotone_se", self.non_monotone_se),
        ] {
            if !(value >= 0.0 && value.is_finite()) {
                return err(key, value.to_string(), "0 or more, finite");
            }
        }
        for (key, value) in [("drift_p", self.drift_p), ("lack_of_fit_p", self.lack_of_fit_p)] {
            if !(0.0..=1.0).contains(&value) {
                return err(key, value.to_string(), "[0, 1]");
            }
        }
        if self.bootstrap > 0 && !(100..=1_000_000).contains(&self.bootstrap) {
            return err(
                "bootstrap",
                self.bootstrap.to_string(),
                "0 (none) or 100 to 1000000",
            );
        }
        if self.curves.is_empty() {
            return err("curves", "[]".into(), "at least one rate function");
        }
        if !(2..=10_001).contains(&self.curve_points) {
            return err("curve_points", self.curve_points.to_string(), "2 to 10001");
        }
        Ok(())
    }
}

#[cfg(test)]
mod tests {
    #![allow(clippy::unwrap_used)]
    use super::*;

    #[test]
    fn defaults_are_valid_and_limits_out_of_range_are_named() {
        assert_eq!(Analysis::default().validate(), Ok(()));
        let refused = |change: fn(&mut Analysis)| {
            let mut settings = Analysis::default();
            change(&mut settings);
            settings.validate().unwrap_err().key
        };
        assert_eq!(refused(|s| s.drift_fraction = -0.1), "drift_fraction");
        assert_eq!(refused(|s| s.drift_p = 1.5), "drift_p");
        assert_eq!(refused(|s| s.lack_of_fit_p = f64::NAN), "lack_of_fit_p");
        assert_eq!(refused(|s| s.rival_aicc = f64::INFINITY), "rival_aicc");
        assert_eq!(refused(|s| s.non_monotone_se = -1.0), "non_monotone_se");
    }
}
