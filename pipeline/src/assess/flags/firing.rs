//! Flags about the spikes themselves.

use super::{Evidence, Flag, Severity, flag};
use crate::rates::{RateFrom, Response};

fn spikes_in_windows(e: &Evidence<'_>) -> usize {
    e.rates.iter().map(|r| r.spikes).sum()
}

/// Shortest interval inside any step, seconds.
fn shortest_interval(e: &Evidence<'_>) -> Option<f64> {
    e.rates
        .iter()
        .filter_map(|r| r.min_interval_s)
        .min_by(f64::total_cmp)
}

pub(super) fn few_spikes(e: &Evidence<'_>) -> Option<Flag> {
    let spikes = spikes_in_windows(e);
    if spikes >= e.settings.few_spikes || e.steps.is_empty() {
        return None;
    }
    flag(
        "few-spikes",
        Severity::Reject,
        spikes as f64,
        e.settings.few_spikes as f64,
        format!("only {spikes} spikes in all steps"),
    )
}

pub(super) fn short_interval(e: &Evidence<'_>) -> Option<Flag> {
    let shortest = shortest_interval(e)?;
    if shortest >= e.settings.short_interval_s {
        return None;
    }
    flag(
        "short-interval",
        Severity::Caution,
        shortest,
        e.settings.short_interval_s,
        format!(
            "two spikes {:.3} ms apart: one spike detected twice, or two cells",
            shortest * 1e3
        ),
    )
}

pub(super) fn faster_than_intervals(e: &Evidence<'_>) -> Option<Flag> {
    // The lower bound where there is one: the ceiling itself lies above every rate measured.
    let estimate = e.estimates?.max_rate;
    let max_rate = estimate
        .lo
        .or(estimate.value)
        .filter(|_| estimate.value.is_some())?;
    let limit = 1.0 / shortest_interval(e)?;
    if max_rate <= limit {
        return None;
    }
    // A ceiling lies above what was measured; far above, it is an extrapolation beyond what the cell can do.
    let severity = if max_rate > 2.0 * limit {
        Severity::Caution
    } else {
        Severity::Note
    };
    flag(
        "faster-than-intervals",
        severity,
        max_rate,
        limit,
        format!(
            "the fitted maximum is {max_rate:.1} Hz at the least, more than the shortest interval allows ({limit:.1} Hz)"
        ),
    )
}

/// A burst that stops gives a high interval rate over the part of the step in which it lasted.
pub(super) fn stops_early(e: &Evidence<'_>) -> Option<Flag> {
    if e.response != Response::Whole {
        return None;
    }
    let stopped = |rate: &&crate::rates::StepRate| -> Option<f64> {
        let last = e.step_spikes.get(rate.step)?.last()?;
        let silence = rate.window_end_s - last;
        // Three intervals or more, and at least half of the step in silence.
        let enough = rate.intervals >= 3 && silence > 0.5 * (rate.window_end_s - rate.window_start_s);
        enough.then_some(silence * rate.rate_hz)
    };
    let steps: Vec<f64> = e
        .rates
        .iter()
        .filter(|r| r.used)
        .filter_map(|r| stopped(&r))
        .filter(|waited| *waited > e.settings.stop_intervals)
        .collect();
    let longest = steps.iter().copied().max_by(f64::total_cmp)?;
    let used = e.rates.iter().filter(|r| r.used).count();
    let severity = if 4 * steps.len() > used {
        Severity::Reject
    } else {
        Severity::Caution
    };
    flag(
        "stops-early",
        severity,
        longest,
        e.settings.stop_intervals,
        format!(
            "in {} {} firing stopped before half time; the interval rate tells of the burst, not of the step \
             (the steady response shows it)",
            steps.len(),
            if steps.len() == 1 { "step" } else { "steps" }
        ),
    )
}

pub(super) fn strong_adaptation(e: &Evidence<'_>) -> Option<Flag> {
    if e.response != Response::Whole {
        return None;
    }
    // Last over first instantaneous rate at the largest drive that has one.
    let (_, ratio) = e
        .rates
        .iter()
        .filter(|r| r.used && r.intervals >= 4)
        .filter_map(|r| Some((e.steps.get(r.step)?.drive, r.adaptation_ratio?)))
        .max_by(|a, b| a.0.total_cmp(&b.0))?;
    if ratio >= e.settings.adaptation_fraction {
        return None;
    }
    flag(
        "strong-adaptation",
        Severity::Note,
        ratio,
        e.settings.adaptation_fraction,
        format!(
            "at the largest drive the rate falls to {:.0} % of its first value within the step",
            100.0 * ratio
        ),
    )
}

pub(super) fn irregular(e: &Evidence<'_>) -> Option<Flag> {
    if e.cell_cv.steps == 0 || e.cell_cv.cv <= e.settings.irregular_cv {
        return None;
    }
    flag(
        "irregular",
        Severity::Note,
        e.cell_cv.cv,
        e.settings.irregular_cv,
        format!(
            "intervals are irregular (CV {:.2}): single rates are uncertain",
            e.cell_cv.cv
        ),
    )
}

pub(super) fn spikes_outside(e: &Evidence<'_>) -> Option<Flag> {
    let inside: usize = e.step_spikes.iter().map(|s| s.len()).sum();
    let all = inside + e.spikes_outside;
    let fraction = e.spikes_outside as f64 / all as f64;
    if all == 0 || fraction <= e.settings.outside_fraction {
        return None;
    }
    let silent = e.rates.iter().filter(|r| r.rate_from == RateFrom::Silent).count();
    flag(
        "spikes-outside",
        Severity::Caution,
        fraction,
        e.settings.outside_fraction,
        format!(
            "{:.0} % of the spikes lie outside every step ({silent} steps are silent): the cell fires on its own, or \
             the protocol is shifted",
            100.0 * fraction
        ),
    )
}

pub(super) fn duplicates_dropped(e: &Evidence<'_>) -> Option<Flag> {
    let dropped = e.duplicate_spikes;
    if dropped <= e.settings.duplicate_spikes {
        return None;
    }
    let spikes = if dropped == 1 {
        "1 spike time was there twice and is".to_owned()
    } else {
        format!("{dropped} spike times were there more than once and are")
    };
    flag(
        "duplicates-dropped",
        Severity::Note,
        dropped as f64,
        e.settings.duplicate_spikes as f64,
        format!("{spikes} counted once: look at the spike detection or the export"),
    )
}
