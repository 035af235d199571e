//! Flags about the levels of drive.

use super::{Evidence, Flag, Severity, flag};
use crate::rates::RateFrom;

pub(super) fn few_levels(e: &Evidence<'_>) -> Option<Flag> {
    if e.levels >= e.settings.few_levels || e.steps.is_empty() {
        return None;
    }
    flag(
        "few-levels",
        Severity::Caution,
        e.levels as f64,
        e.settings.few_levels as f64,
        format!(
            "only {} different drives were used for a curve of four parameters",
            e.levels
        ),
    )
}

pub(super) fn no_silent_level(e: &Evidence<'_>) -> Option<Flag> {
    e.estimates?;
    let used = || e.rates.iter().filter(|r| r.used);
    if used().any(|r| r.rate_from == RateFrom::Silent) {
        return None;
    }
    flag(
        "no-silent-level",
        Severity::Caution,
        None,
        None,
        "the cell fired at every drive: the threshold lies below them all and is extrapolated".into(),
    )
}

pub(super) fn below_half_rise(e: &Evidence<'_>) -> Option<Flag> {
    let estimates = e.estimates?;
    let half = estimates.threshold.value? + estimates.half_rise.value?;
    let largest = e
        .rates
        .iter()
        .filter(|r| r.used)
        .filter_map(|r| e.steps.get(r.step).map(|s| s.drive))
        .fold(f64::NEG_INFINITY, f64::max);
    if largest >= half {
        return None;
    }
    flag(
        "below-half-rise",
        Severity::Caution,
        largest,
        half,
        format!(
            "no drive reached half of the fitted maximum rate ({half:.4} {} needed)",
            e.drive_unit
        ),
    )
}
