//! Flags about the levels of drive.

use super::{Ceiling, Evidence, Flag, Severity, flag};
use crate::assess::verdict::level_means;
use crate::fit::Point;
use crate::rates::{RateFrom, fit_se};

pub(super) fn few_levels(e: &Evidence<'_>) -> Option<Flag> {
    if e.levels >= e.settings.few_levels || e.estimates.is_none() {
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
            "no drive reached half of the fitted maximum rate ({half:.1} {} needed)",
            e.drive_unit
        ),
    )
}

/// The largest fall from the mean rate of any level to that of one at a larger drive. A cell that falls at its largest
/// drives for good is `declining` and not flagged a second time.
///
/// The scatter of a mean beyond interval noise is that between repeats, where levels repeat. Otherwise it is read off
/// neighbouring levels, which in a cell of few levels takes a single low one for scatter.
pub(super) fn non_monotone(e: &Evidence<'_>) -> Option<Flag> {
    if e.ceiling == Some(Ceiling::Declining) {
        return None;
    }
    let between = e.repeats.and_then(|r| r.between_sd_hz);
    let mut points: Vec<Point> = e
        .rates
        .iter()
        .filter(|r| r.used)
        .filter_map(|r| {
            Some(Point {
                drive: e.steps.get(r.step)?.drive,
                rate: r.rate_hz,
                se: fit_se(r).hypot(between.unwrap_or(0.0)),
            })
        })
        .collect();
    points.sort_by(|a, b| a.drive.total_cmp(&b.drive));
    let means = level_means(&points, between.is_none());
    let mut worst: Option<(f64, f64, f64)> = None;
    for (i, low) in means.iter().enumerate() {
        for high in &means[..i] {
            let fall = (high.rate - low.rate) / high.se.hypot(low.se);
            if fall > worst.map_or(e.settings.non_monotone_se, |w| w.0) {
                worst = Some((fall, high.drive, low.drive));
            }
        }
    }
    let (fall, from, to) = worst?;
    flag(
        "non-monotone",
        Severity::Caution,
        fall,
        e.settings.non_monotone_se,
        format!(
            "the cell fired less at {to:.1} {unit} than at {from:.1} {unit}, by {fall:.1} standard errors, though the \
             drive was larger",
            unit = e.drive_unit
        ),
    )
}

pub(super) fn drift(e: &Evidence<'_>) -> Option<Flag> {
    let repeats = e.repeats?;
    let (percent, p) = repeats.drift_percent.zip(repeats.drift_p)?;
    let limit = 100.0 * e.settings.drift_fraction;
    if !(p < e.settings.drift_p && percent.abs() > limit) {
        return None;
    }
    let way = if percent < 0.0 { "fell" } else { "rose" };
    flag(
        "drift",
        Severity::Caution,
        percent,
        limit,
        format!(
            "at repeated drives the rate {way} by {:.0} % from the first sweep to the last (p = {p:.1e}): the cell or the \
             seal changed during the recording",
            percent.abs()
        ),
    )
}
