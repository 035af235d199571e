//! Flags: named reasons to look at a cell. Each is one small function in the file of its family; a new flag is one
//! new function and one line in [`ALL`].

mod firing;
mod fit;
mod levels;
mod rivals;
#[cfg(test)]
mod tests;

use super::repeats::Repeats;
use super::{Ceiling, Flag, Goodness, Severity, Status};
use crate::fit::Estimates;
use crate::rates::{CellCv, Response, StepRate};
use crate::recording::ProtocolStep;
use crate::settings::Analysis;

/// What the flags of one response are judged on.
#[derive(Clone, Copy, Debug)]
pub struct Evidence<'a> {
    /// Which response.
    pub response: Response,
    /// Unit of the drive: `pA` or `nS`.
    pub drive_unit: &'static str,
    /// The cell's steps.
    pub steps: &'a [ProtocolStep],
    /// Spike times of each step, seconds.
    pub step_spikes: &'a [&'a [f64]],
    /// Rates of this response, one a step.
    pub rates: &'a [StepRate],
    /// Spikes outside every step.
    pub spikes_outside: usize,
    /// Interval CV of the cell.
    pub cell_cv: CellCv,
    /// Whether there is a fit.
    pub status: Status,
    /// Verdict about the ceiling.
    pub ceiling: Option<Ceiling>,
    /// The reported parameters, where there is a fit.
    pub estimates: Option<&'a Estimates>,
    /// Distinct drives used.
    pub levels: usize,
    /// Goodness of fit of every rate function tried, the main one first; empty without a fit.
    pub goodness: &'a [Goodness],
    /// What repeated levels say; `None` where none repeats or there is no fit.
    pub repeats: Option<Repeats>,
    /// Duplicate spike times of the cell that were dropped on reading.
    pub duplicate_spikes: usize,
    /// Steps whose weight the robust fit has cut to less than half, as places in `steps`.
    pub down_weighted: &'a [usize],
    /// Settings with the limits.
    pub settings: &'a Analysis,
}

type Rule = fn(&Evidence<'_>) -> Option<Flag>;

/// Every flag, in the order in which they are reported.
const ALL: &[Rule] = &[
    fit::not_converged,
    fit::touched_bound,
    fit::ceiling_declining,
    fit::ceiling_open,
    fit::ceiling_loose,
    levels::few_levels,
    levels::no_silent_level,
    levels::below_half_rise,
    levels::non_monotone,
    levels::drift,
    rivals::lack_of_fit,
    rivals::rival_better,
    rivals::down_weighted,
    firing::few_spikes,
    firing::short_interval,
    firing::faster_than_intervals,
    firing::stops_early,
    firing::strong_adaptation,
    firing::irregular,
    firing::spikes_outside,
    firing::duplicates_dropped,
];

/// All flags that the evidence raises.
pub fn raise(evidence: &Evidence<'_>) -> Vec<Flag> {
    ALL.iter().filter_map(|rule| rule(evidence)).collect()
}

fn flag(
    name: &'static str,
    severity: Severity,
    value: impl Into<Option<f64>>,
    limit: impl Into<Option<f64>>,
    message: String,
) -> Option<Flag> {
    Some(Flag {
        flag: name,
        severity,
        value: value.into(),
        limit: limit.into(),
        message,
    })
}
