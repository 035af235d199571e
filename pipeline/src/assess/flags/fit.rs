//! Flags about the fit and the ceiling.

use super::{Ceiling, Evidence, Flag, Severity, Status, flag};

pub(super) fn not_converged(e: &Evidence<'_>) -> Option<Flag> {
    if e.status != Status::NotConverged {
        return None;
    }
    flag(
        "not-converged",
        Severity::Reject,
        None,
        None,
        "the search for the best curve did not settle, so no parameter is reported".into(),
    )
}

pub(super) fn touched_bound(e: &Evidence<'_>) -> Option<Flag> {
    let at = &e.estimates?.at_bound;
    if at.is_empty() {
        return None;
    }
    let message = if at.as_slice() == ["noise_sd"] {
        "the curve bends at threshold as sharply as the levels can show: the noise SD is too small to be measured".into()
    } else {
        format!(
            "{} ended on the bound of the search: the data do not determine it",
            at.join(", ")
        )
    };
    flag("touched-bound", Severity::Caution, None, None, message)
}

pub(super) fn ceiling_open(e: &Evidence<'_>) -> Option<Flag> {
    if e.ceiling != Some(Ceiling::Open) {
        return None;
    }
    flag(
        "ceiling-open",
        Severity::Caution,
        None,
        None,
        "the rate still climbs at the largest drive: the maximum rate and the half-rise are not determined, the \
         initial gain is; larger drives would tell"
            .into(),
    )
}

pub(super) fn ceiling_loose(e: &Evidence<'_>) -> Option<Flag> {
    if e.ceiling != Some(Ceiling::Loose) {
        return None;
    }
    let max = e.estimates?.max_rate;
    let ratio = max.hi.zip(max.lo).map(|(hi, lo)| hi / lo);
    flag(
        "ceiling-loose",
        Severity::Note,
        ratio,
        e.settings.loose_ratio,
        "the maximum rate is bounded on both sides, but only loosely".into(),
    )
}

pub(super) fn ceiling_declining(e: &Evidence<'_>) -> Option<Flag> {
    if e.ceiling != Some(Ceiling::Declining) {
        return None;
    }
    let left_out = e.rates.iter().filter(|r| !r.used).count();
    flag(
        "ceiling-declining",
        Severity::Caution,
        left_out as f64,
        None,
        format!(
            "the rate falls at high drive (depolarisation block or a failing clamp); {left_out} steps above the peak \
             were left out of the fit"
        ),
    )
}
