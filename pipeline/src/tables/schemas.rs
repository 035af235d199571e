//! The columns of every result table, in one place.

use std::sync::Arc;

use super::columns::{Column as C, Table, Unit, When};
use crate::assess::{Ceiling, CellResult, CurvePoint, Flag, Goodness, ResponseResult};
use crate::fit::{Bootstrap, BootstrapInterval};
use crate::rates::StepRate;
use crate::recording::{DriveKind, ProtocolStep, RefusedRow};

/// Version of the tables below; raised whenever a column is renamed, removed or changes its meaning.
pub(super) const SCHEMA_VERSION: u32 = 1;

const HZ: Unit = Unit::Of("Hz");
const SECOND: Unit = Unit::Of("s");
const MILLIVOLT: Unit = Unit::Of("mV");

const CELL: &str = "Name of the cell";
const RESPONSE: &str = "Part of the step that the rate describes: whole, steady or onset";
const SE: &str = "Standard error (delta method); null: not estimated";
const LO: &str = "Lower bound of the 95 % profile interval; -inf: open; null: not estimated";
const HI: &str = "Upper bound of the 95 % profile interval; inf: open; null: not estimated";
const PERCENTILE: &str = "End of the 95 % percentile interval of the bootstrap; infinite: open";
const BCA: &str =
    "End of the 95 % BCa interval of the bootstrap (Efron 1987); infinite: open; null: not estimated";
const V_THRESHOLD: &str =
    "Effective threshold potential of the cell under conductance; not estimated yet by this version";

/// `parameters.parquet`: one row for a cell and response.
pub(super) struct Parameters;

#[derive(Clone, Copy)]
pub(super) struct ResponseRow<'a> {
    pub(super) cell: &'a CellResult,
    pub(super) response: &'a ResponseResult,
}

impl ResponseRow<'_> {
    fn boot(&self, of: impl Fn(&Bootstrap) -> BootstrapInterval) -> Option<BootstrapInterval> {
        self.response.bootstrap.as_ref().map(of)
    }
}

impl Table for Parameters {
    type Row<'a> = ResponseRow<'a>;
    const NAME: &'static str = "parameters";
    const CARRIES: bool = true;
    #[rustfmt::skip]
    const COLUMNS: &'static [C<Self>] = &[
        C::text("cell", CELL, |r| Some(&r.cell.id.0)),
        C::text("group", "Group of the cell from the cell table", |r| r.cell.group.as_deref()),
        C::text("response", RESPONSE, |r| Some(r.response.response.name())),
        C::text("status", "Why there is a fit or none, in one word: fitted, not-converged, silent, too-few-levels, no-steps or refused", |r| Some(r.response.status.name())),
        C::text("reason", "The status in a sentence", |r| Some(&r.response.reason)),
        C::text("drive", "Kind of drive: current or conductance", |r| Some(r.cell.drive_kind.name())),
        C::text("drive_unit", "SI symbol of the drive of this row", |r| Some(r.cell.drive_kind.unit())),
        C::count("steps", "Steps used by the fit, or that would have been", |r| r.response.steps as u64),
        C::count("levels", "Distinct drives among those steps", |r| r.response.levels as u64),
        C::count("spikes", "Spikes inside the response windows of all steps", |r| r.response.spikes as u64),
        C::real("drive_min", Unit::Drive, "Smallest drive used", |r| r.response.drive_min),
        C::real("drive_max", Unit::Drive, "Largest drive used", |r| r.response.drive_max),
        C::real("peak_rate_Hz", HZ, "Largest mean rate over the steps of one drive", |r| r.response.peak_rate_hz),
        C::real("max_rate_Hz", HZ, "Max rate: ceiling that the fitted rate approaches", |r| r.response.max_rate.value),
        C::real("max_rate_Hz_se", HZ, SE, |r| r.response.max_rate.se),
        C::real("max_rate_Hz_lo", HZ, LO, |r| r.response.max_rate.lo),
        C::real("max_rate_Hz_hi", HZ, HI, |r| r.response.max_rate.hi),
        C::real("half_rise", Unit::Drive, "Half-rise: drive above threshold at which a noise-free cell fires at half its max rate", |r| r.response.half_rise.value),
        C::real("half_rise_se", Unit::Drive, SE, |r| r.response.half_rise.se),
        C::real("half_rise_lo", Unit::Drive, LO, |r| r.response.half_rise.lo),
        C::real("half_rise_hi", Unit::Drive, HI, |r| r.response.half_rise.hi),
        C::real("threshold", Unit::Drive, "Threshold: drive at which a noise-free cell starts to fire", |r| r.response.threshold.value),
        C::real("threshold_se", Unit::Drive, SE, |r| r.response.threshold.se),
        C::real("threshold_lo", Unit::Drive, LO, |r| r.response.threshold.lo),
        C::real("threshold_hi", Unit::Drive, HI, |r| r.response.threshold.hi),
        C::real("noise_sd", Unit::Drive, "Standard deviation of the Gaussian input noise", |r| r.response.noise_sd.value),
        C::real("noise_sd_se", Unit::Drive, SE, |r| r.response.noise_sd.se),
        C::real("noise_sd_lo", Unit::Drive, LO, |r| r.response.noise_sd.lo),
        C::real("noise_sd_hi", Unit::Drive, HI, |r| r.response.noise_sd.hi),
        C::real("initial_gain", Unit::HzPerDrive, "Initial gain: max rate over half-rise, the slope of a noise-free cell at threshold", |r| r.response.initial_gain.value),
        C::real("initial_gain_se", Unit::HzPerDrive, SE, |r| r.response.initial_gain.se),
        C::real("initial_gain_lo", Unit::HzPerDrive, LO, |r| r.response.initial_gain.lo),
        C::real("initial_gain_hi", Unit::HzPerDrive, HI, |r| r.response.initial_gain.hi),
        C::<Self>::real("v_threshold_mV", MILLIVOLT, V_THRESHOLD, |_| None).when(When::Kind(DriveKind::Conductance)),
        C::<Self>::real("v_threshold_mV_se", MILLIVOLT, "Standard error of v_threshold_mV; not estimated yet by this version", |_| None).when(When::Kind(DriveKind::Conductance)),
        C::<Self>::real("v_threshold_mV_lo", MILLIVOLT, "Lower 95 % bound of v_threshold_mV; not estimated yet by this version", |_| None).when(When::Kind(DriveKind::Conductance)),
        C::<Self>::real("v_threshold_mV_hi", MILLIVOLT, "Upper 95 % bound of v_threshold_mV; not estimated yet by this version", |_| None).when(When::Kind(DriveKind::Conductance)),
        C::<Self>::real("max_rate_Hz_percentile_lo", HZ, PERCENTILE, |r| r.boot(|b| b.max_rate).map(|i| i.percentile[0])).when(When::Bootstrap),
        C::<Self>::real("max_rate_Hz_percentile_hi", HZ, PERCENTILE, |r| r.boot(|b| b.max_rate).map(|i| i.percentile[1])).when(When::Bootstrap),
        C::<Self>::real("max_rate_Hz_bca_lo", HZ, BCA, |r| r.boot(|b| b.max_rate).and_then(|i| i.bca).map(|i| i[0])).when(When::Bootstrap),
        C::<Self>::real("max_rate_Hz_bca_hi", HZ, BCA, |r| r.boot(|b| b.max_rate).and_then(|i| i.bca).map(|i| i[1])).when(When::Bootstrap),
        C::<Self>::real("half_rise_percentile_lo", Unit::Drive, PERCENTILE, |r| r.boot(|b| b.half_rise).map(|i| i.percentile[0])).when(When::Bootstrap),
        C::<Self>::real("half_rise_percentile_hi", Unit::Drive, PERCENTILE, |r| r.boot(|b| b.half_rise).map(|i| i.percentile[1])).when(When::Bootstrap),
        C::<Self>::real("half_rise_bca_lo", Unit::Drive, BCA, |r| r.boot(|b| b.half_rise).and_then(|i| i.bca).map(|i| i[0])).when(When::Bootstrap),
        C::<Self>::real("half_rise_bca_hi", Unit::Drive, BCA, |r| r.boot(|b| b.half_rise).and_then(|i| i.bca).map(|i| i[1])).when(When::Bootstrap),
        C::<Self>::real("threshold_percentile_lo", Unit::Drive, PERCENTILE, |r| r.boot(|b| b.threshold).map(|i| i.percentile[0])).when(When::Bootstrap),
        C::<Self>::real("threshold_percentile_hi", Unit::Drive, PERCENTILE, |r| r.boot(|b| b.threshold).map(|i| i.percentile[1])).when(When::Bootstrap),
        C::<Self>::real("threshold_bca_lo", Unit::Drive, BCA, |r| r.boot(|b| b.threshold).and_then(|i| i.bca).map(|i| i[0])).when(When::Bootstrap),
        C::<Self>::real("threshold_bca_hi", Unit::Drive, BCA, |r| r.boot(|b| b.threshold).and_then(|i| i.bca).map(|i| i[1])).when(When::Bootstrap),
        C::<Self>::real("noise_sd_percentile_lo", Unit::Drive, PERCENTILE, |r| r.boot(|b| b.noise_sd).map(|i| i.percentile[0])).when(When::Bootstrap),
        C::<Self>::real("noise_sd_percentile_hi", Unit::Drive, PERCENTILE, |r| r.boot(|b| b.noise_sd).map(|i| i.percentile[1])).when(When::Bootstrap),
        C::<Self>::real("noise_sd_bca_lo", Unit::Drive, BCA, |r| r.boot(|b| b.noise_sd).and_then(|i| i.bca).map(|i| i[0])).when(When::Bootstrap),
        C::<Self>::real("noise_sd_bca_hi", Unit::Drive, BCA, |r| r.boot(|b| b.noise_sd).and_then(|i| i.bca).map(|i| i[1])).when(When::Bootstrap),
        C::<Self>::real("initial_gain_percentile_lo", Unit::HzPerDrive, PERCENTILE, |r| r.boot(|b| b.initial_gain).map(|i| i.percentile[0])).when(When::Bootstrap),
        C::<Self>::real("initial_gain_percentile_hi", Unit::HzPerDrive, PERCENTILE, |r| r.boot(|b| b.initial_gain).map(|i| i.percentile[1])).when(When::Bootstrap),
        C::<Self>::real("initial_gain_bca_lo", Unit::HzPerDrive, BCA, |r| r.boot(|b| b.initial_gain).and_then(|i| i.bca).map(|i| i[0])).when(When::Bootstrap),
        C::<Self>::real("initial_gain_bca_hi", Unit::HzPerDrive, BCA, |r| r.boot(|b| b.initial_gain).and_then(|i| i.bca).map(|i| i[1])).when(When::Bootstrap),
        C::<Self>::real("resamples", Unit::One, "Resamples of the bootstrap; null: no bootstrap for this row", |r| r.response.bootstrap.as_ref().map(|b| b.resamples as f64)).when(When::Bootstrap),
        C::<Self>::real("resamples_failed", Unit::One, "Resamples whose fit did not converge, left out of the intervals", |r| r.response.bootstrap.as_ref().map(|b| b.failed as f64)).when(When::Bootstrap),
        C::real("reached", Unit::One, "Fitted rate at the largest drive used over max rate", |r| r.response.reached),
        C::real("extra_sd_Hz", HZ, "Extra SD: standard deviation between steps beyond interval noise", |r| r.response.extra_sd_hz),
        C::real("between_sd_Hz", HZ, "Part of the extra SD between repeats of a level; null where none repeats", |r| r.response.repeats.and_then(|x| x.between_sd_hz)),
        C::real("misfit_sd_Hz", HZ, "Part of the extra SD that repeats do not explain: level means about the curve", |r| r.response.repeats.and_then(|x| x.misfit_sd_hz)),
        C::real("drift_percent", Unit::Of("%"), "Change of the rate from the first repeat presented to the last, per cent of the mean rate", |r| r.response.repeats.and_then(|x| x.drift_percent)),
        C::real("drift_p", Unit::One, "Two-sided p-value of no drift", |r| r.response.repeats.and_then(|x| x.drift_p)),
        C::real("interval_cv", Unit::One, "Coefficient of variation of the cell's intervals on which the standard errors of its rates rest", |r| r.response.interval_cv),
        C::text("ceiling", "Verdict on the maximum: resolved, loose, open, declining or silent", |r| r.response.ceiling.map(Ceiling::name)),
        C::truth("usable", "Converged, ceiling resolved or loose, and no flag of severity reject", |r| r.response.usable),
        C::flag_names("flags", "Names of the flags raised; flags.parquet has their figures", |r| &r.response.flags),
        C::reals("covariance", Unit::None, "Covariance, 16 values row-major, of ln max rate, ln half-rise, threshold, ln noise SD; null: not estimated", |r| r.response.covariance.as_ref().map(|c| c.as_slice())),
    ];

    fn carried<'a>(row: &'a ResponseRow<'a>) -> Option<&'a [Option<Arc<str>>]> {
        Some(&row.cell.carried)
    }
}

/// `goodness.parquet`: one row for a cell, response and rate function tried.
pub(super) struct GoodnessTable;

#[derive(Clone, Copy)]
pub(super) struct GoodnessRow<'a> {
    pub(super) cell: &'a CellResult,
    pub(super) response: &'a ResponseResult,
    pub(super) goodness: &'a Goodness,
}

impl Table for GoodnessTable {
    type Row<'a> = GoodnessRow<'a>;
    const NAME: &'static str = "goodness";
    #[rustfmt::skip]
    const COLUMNS: &'static [C<Self>] = &[
        C::text("cell", CELL, |r| Some(&r.cell.id.0)),
        C::text("response", RESPONSE, |r| Some(r.response.response.name())),
        C::text("curve", "Name of the rate function", |r| Some(r.goodness.curve)),
        C::count("parameters", "Parameters of the rate function, extra SD not counted", |r| r.goodness.parameters as u64),
        C::count("steps", "Steps it was fitted to", |r| r.goodness.steps as u64),
        C::real("log_likelihood", Unit::One, "Gaussian log-likelihood", |r| r.goodness.log_likelihood),
        C::real("aicc", Unit::One, "Corrected Akaike information criterion (Hurvich & Tsai 1989)", |r| r.goodness.aicc),
        C::real("aicc_weight", Unit::One, "Akaike weight over the rate functions tried", |r| r.goodness.aicc_weight),
        C::real("bic", Unit::One, "Bayesian information criterion", |r| r.goodness.bic),
        C::real("rmse_Hz", HZ, "Root mean square residual", |r| r.goodness.rmse_hz),
        C::real("r2", Unit::One, "1 - residual over total sum of squares, unweighted", |r| r.goodness.r2),
        C::real("reduced_chi2", Unit::One, "Sum of squares weighted by interval noise alone, over degrees of freedom", |r| r.goodness.reduced_chi2),
        C::real("lack_of_fit_f", Unit::One, "F of lack of fit against pure error", |r| r.goodness.lack_of_fit_f),
        C::real("lack_of_fit_p", Unit::One, "p-value of lack_of_fit_f", |r| r.goodness.lack_of_fit_p),
        C::real("runs_p", Unit::One, "Two-sided p-value of the runs test of residual signs by drive", |r| r.goodness.runs_p),
        C::real("loo_rmse_Hz", HZ, "Root mean square error with one level left out at a time", |r| r.goodness.loo_rmse_hz),
        C::truth("converged", "Whether the solver converged", |r| r.goodness.converged),
        C::text("reason", "fitted, or why the rate function has no fit", |r| Some(&r.goodness.reason)),
        C::count("evaluations", "Evaluations of the rate function over all steps", |r| r.goodness.evaluations),
    ];
}

/// `steps.parquet`: one row for a step and response.
pub(super) struct Steps;

#[derive(Clone, Copy)]
pub(super) struct StepRow<'a> {
    pub(super) cell: &'a CellResult,
    pub(super) step: &'a ProtocolStep,
    pub(super) rate: &'a StepRate,
}

impl StepRow<'_> {
    fn drive_of(&self, kind: DriveKind) -> Option<f64> {
        (self.cell.drive_kind == kind).then_some(self.step.drive)
    }
}

impl Table for Steps {
    type Row<'a> = StepRow<'a>;
    const NAME: &'static str = "steps";
    #[rustfmt::skip]
    const COLUMNS: &'static [C<Self>] = &[
        C::text("cell", CELL, |r| Some(&r.cell.id.0)),
        C::text("sweep", "Name of the sweep; null on a continuous time line", |r| r.cell.sweep_names.get(r.step.sweep)?.as_deref()),
        C::text("step", "The protocol's own label of the step, else its place within the sweep", |r| Some(&r.step.step)),
        C::real("onset_s", SECOND, "Start of the step, in the sweep's time base", |r| Some(r.step.onset_s)),
        C::real("offset_s", SECOND, "End of the step, in the sweep's time base", |r| Some(r.step.offset_s)),
        C::<Self>::real("current_pA", Unit::Of("pA"), "Injected current; null for a cell driven by conductance", |r| r.drive_of(DriveKind::Current)).when(When::Kind(DriveKind::Current)),
        C::<Self>::real("g_exc_nS", Unit::Of("nS"), "Excitatory conductance; null for a cell driven by current", |r| r.drive_of(DriveKind::Conductance)).when(When::Kind(DriveKind::Conductance)),
        C::real("g_inh_nS", Unit::Of("nS"), "Inhibitory conductance, where the protocol gives one", |r| r.step.g_inh_ns),
        C::real("drive", Unit::Drive, "Drive: pA for a cell driven by current, nS for one driven by conductance", |r| Some(r.step.drive)),
        C::text("response", RESPONSE, |r| Some(r.rate.response.name())),
        C::real("window_start_s", SECOND, "Start of the response window, in the sweep's time base", |r| Some(r.rate.window_start_s)),
        C::real("window_end_s", SECOND, "End of the response window, in the sweep's time base", |r| Some(r.rate.window_end_s)),
        C::count("spikes", "Spikes in the window", |r| r.rate.spikes as u64),
        C::count("intervals", "Intervals the rate rests on", |r| r.rate.intervals as u64),
        C::real("rate_Hz", HZ, "Rate", |r| Some(r.rate.rate_hz)),
        C::real("rate_se_Hz", HZ, "Standard error of the rate", |r| Some(r.rate.rate_se_hz)),
        C::text("rate_from", "What the rate was taken from: intervals, one-spike or silent", |r| Some(r.rate.rate_from.name())),
        C::real("first_spike_latency_s", SECOND, "First spike after onset, counted from onset", |r| r.rate.first_spike_latency_s),
        C::real("min_interval_s", SECOND, "Shortest interval in the window", |r| r.rate.min_interval_s),
        C::real("cv", Unit::One, "Coefficient of variation of the intervals (sample SD)", |r| r.rate.cv),
        C::real("cv2", Unit::One, "CV2 of the intervals (Holt et al. 1996)", |r| r.rate.cv2),
        C::real("lv", Unit::One, "LV of the intervals (Shinomoto, Shima & Tanji 2003)", |r| r.rate.lv),
        C::real("lvr", Unit::One, "LvR of the intervals (Shinomoto et al. 2009)", |r| r.rate.lvr),
        C::real("adaptation_ratio", Unit::One, "Last instantaneous rate over the first", |r| r.rate.adaptation_ratio),
        C::truth("used", "Whether the fit used this step", |r| r.rate.used),
        C::<Self>::real("fitted_Hz", HZ, "Fitted rate at the step's drive", |r| r.rate.fitted_hz).when(When::Fitted),
        C::<Self>::real("residual_Hz", HZ, "Rate minus fitted rate", |r| r.rate.residual_hz).when(When::Fitted),
        C::<Self>::real("weight", Unit::Of("1/Hz^2"), "Weight of the step in the fit", |r| r.rate.weight).when(When::Fitted),
    ];
}

/// `curves.parquet`: one row for a cell, response and drive of the grid.
pub(super) struct Curves;

#[derive(Clone, Copy)]
pub(super) struct CurveRow<'a> {
    pub(super) cell: &'a CellResult,
    pub(super) response: &'a ResponseResult,
    pub(super) point: CurvePoint,
}

impl Table for Curves {
    type Row<'a> = CurveRow<'a>;
    const NAME: &'static str = "curves";
    #[rustfmt::skip]
    const COLUMNS: &'static [C<Self>] = &[
        C::text("cell", CELL, |r| Some(&r.cell.id.0)),
        C::text("response", RESPONSE, |r| Some(r.response.response.name())),
        C::real("drive", Unit::Drive, "Drive", |r| Some(r.point.drive)),
        C::text("drive_unit", "SI symbol of the drive of this row", |r| Some(r.cell.drive_kind.unit())),
        C::real("fitted_Hz", HZ, "Fitted rate at this drive", |r| Some(r.point.rate_hz)),
        C::real("fitted_lo_Hz", HZ, "Lower bound of the 95 % band of the fitted rate; null: not estimated", |r| r.point.lo_hz),
        C::real("fitted_hi_Hz", HZ, "Upper bound of the 95 % band of the fitted rate; null: not estimated", |r| r.point.hi_hz),
    ];
}

/// `flags.parquet`: one row for a flag raised.
pub(super) struct Flags;

#[derive(Clone, Copy)]
pub(super) struct FlagRow<'a> {
    pub(super) cell: &'a CellResult,
    pub(super) response: &'a ResponseResult,
    pub(super) flag: &'a Flag,
}

impl Table for Flags {
    type Row<'a> = FlagRow<'a>;
    const NAME: &'static str = "flags";
    #[rustfmt::skip]
    const COLUMNS: &'static [C<Self>] = &[
        C::text("cell", CELL, |r| Some(&r.cell.id.0)),
        C::text("response", RESPONSE, |r| Some(r.response.response.name())),
        C::text("flag", "Name of the flag", |r| Some(r.flag.flag)),
        C::text("severity", "How serious it is: note, caution or reject", |r| Some(r.flag.severity.name())),
        C::real("value", Unit::None, "The figure that raised it, in the unit that the message gives", |r| r.flag.value),
        C::real("limit", Unit::None, "The limit it crossed, in the unit of the value", |r| r.flag.limit),
        C::text("message", "The flag in a sentence", |r| Some(&r.flag.message)),
    ];
}

/// `refused.parquet`: one row for an input row that is not used.
pub(super) struct Refused;

#[derive(Clone, Copy)]
pub(super) struct RefusedView<'a> {
    pub(super) refused: &'a RefusedRow,
    pub(super) file: &'a str,
}

impl Table for Refused {
    type Row<'a> = RefusedView<'a>;
    const NAME: &'static str = "refused";
    #[rustfmt::skip]
    const COLUMNS: &'static [C<Self>] = &[
        C::text("table", "Table of the set: spikes, protocol or cells", |r| Some(r.refused.table.name())),
        C::text("file", "File below the set's folder", |r| Some(r.file)),
        C::count("row", "Row in the file, 1-based, header excluded", |r| r.refused.row),
        C::text("cell", "Name of the cell, where the row gives one", |r| r.refused.cell.as_deref()),
        C::text("column", "Column at fault, where one is", |r| r.refused.column),
        C::text("value", "Value at fault, as text", |r| r.refused.value.as_deref()),
        C::text("reason", "Name of the rule that refused the row", |r| Some(r.refused.reason)),
        C::text("message", "The reason in a sentence, with the limit and the remedy", |r| Some(&r.refused.message)),
    ];
}
