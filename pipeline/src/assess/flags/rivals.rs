//! Flags about the shape of the curve: does it fit, and would another fit better?

use super::{Ceiling, Evidence, Flag, Severity, Status, flag};

/// Name of the rate function whose parameters are reported.
const MAIN: &str = "smoothed-hyperbola";
/// Rate functions that the main one becomes at a bound of its parameters: they cannot fit better than it does, only
/// with fewer parameters.
const NESTED: [&str; 3] = ["smoothed-ramp", "hyperbola", "ramp"];

pub(super) fn lack_of_fit(e: &Evidence<'_>) -> Option<Flag> {
    if e.status != Status::Fitted {
        return None;
    }
    let main = e.goodness.iter().find(|g| g.curve == MAIN)?;
    let p = main.lack_of_fit_p.filter(|p| *p < e.settings.lack_of_fit_p)?;
    flag(
        "lack-of-fit",
        Severity::Caution,
        p,
        e.settings.lack_of_fit_p,
        format!(
            "the mean rates lie further from the fitted curve than repeats of a level lie from each other (p = {p:.1e}): \
             the cell does not follow this curve"
        ),
    )
}

/// A nested curve counts as a rival only while the main curve's ceiling is closed: where it is open, that the ramp does
/// as well is what `open` says. Of nested curves only a better likelihood counts, since with few steps the price of a
/// parameter alone exceeds any limit.
pub(super) fn rival_better(e: &Evidence<'_>) -> Option<Flag> {
    if e.status != Status::Fitted {
        return None;
    }
    let main = e.goodness.iter().find(|g| g.curve == MAIN)?;
    let (aicc, likelihood) = main.aicc.zip(main.log_likelihood)?;
    let (gain, rival) = e
        .goodness
        .iter()
        .filter(|g| g.curve != MAIN && g.converged)
        .filter(|g| {
            let fits_better = g.log_likelihood.is_some_and(|l| l > likelihood);
            !NESTED.contains(&g.curve) || (fits_better && e.ceiling != Some(Ceiling::Open))
        })
        .filter_map(|g| Some((aicc - g.aicc?, g.curve)))
        .max_by(|a, b| a.0.total_cmp(&b.0))
        .filter(|(gain, _)| *gain > e.settings.rival_aicc)?;
    flag(
        "rival-better",
        Severity::Caution,
        gain,
        e.settings.rival_aicc,
        format!(
            "the {rival} curve describes the rates clearly better (AICc lower by {gain:.1}): read the parameters of the \
             smoothed hyperbola with care"
        ),
    )
}

/// Most steps named in the message.
const NAMED: usize = 12;

pub(super) fn down_weighted(e: &Evidence<'_>) -> Option<Flag> {
    let count = e.down_weighted.len();
    if count <= e.settings.down_weighted_steps {
        return None;
    }
    let step = |index: &usize| {
        e.steps
            .get(*index)
            .map(|step| format!("{} {} (step {})", step.drive, e.drive_unit, index + 1))
    };
    let mut named: Vec<String> = e.down_weighted.iter().take(NAMED).filter_map(step).collect();
    if count > NAMED {
        named.push(format!("{} more", count - NAMED));
    }
    flag(
        "down-weighted",
        Severity::Note,
        count as f64,
        e.settings.down_weighted_steps as f64,
        format!(
            "{count} of {} steps lie so far from the rest that the robust fit gives them less than half of their weight: {}",
            e.rates.len(),
            named.join(", ")
        ),
    )
}
