//! Is the membrane relation right for this cell? The free slope and the divisive form against it.

use statrs::distribution::{ChiSquared, ContinuousCDF};

use super::goodness::{FittedCurve, goodness, set_weights};
use super::{Estimate, Goodness};
use crate::fit::inhibition::{Form, FormFit, InhibitionFit};

/// Likelihood-ratio test of a wider form against the relation, one parameter more.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct LikelihoodRatio {
    /// 2 (ln L of the wider form - ln L of the relation), never below zero.
    pub statistic: f64,
    /// Probability of a statistic at least as large were the relation true.
    pub p: f64,
}

/// What one cell says about inhibition: a row of the inhibition table, and its goodness rows. `None` and empty
/// estimates are what could not be estimated; the fits say why.
#[derive(Clone, Debug, PartialEq)]
pub struct InhibitionAssessment {
    /// Goodness of each form that was fitted, named by the form, with Akaike weights over these.
    pub goodness: Vec<Goodness>,
    /// Threshold per nS of inhibition that V_t implies, from the relation.
    pub slope_expected: Estimate,
    /// Threshold per nS of inhibition that the free slope found.
    pub slope_found: Estimate,
    /// Free slope against relation.
    pub slope_test: Option<LikelihoodRatio>,
    /// Divisive factor b, 1/nS.
    pub divisive: Estimate,
    /// Divisive form against relation; b = 0 lies on the boundary.
    pub divisive_test: Option<LikelihoodRatio>,
    /// AICc of the free slope minus that of the relation: below zero speaks for a slope of its own.
    pub slope_aicc_gain: Option<f64>,
    /// AICc of the divisive form minus that of the relation.
    pub divisive_aicc_gain: Option<f64>,
}

/// Assesses the three fits of one cell. A fit that did not converge counts as none.
pub fn assess(fit: &InhibitionFit) -> InhibitionAssessment {
    let mut rows: Vec<Goodness> = Form::ALL
        .into_iter()
        .filter_map(|form| fit.of(form).as_ref().ok())
        .map(measure)
        .collect();
    set_weights(&mut rows);
    let row = |form: Form| rows.iter().find(|g| g.curve == form.name() && g.converged);
    let converged = |form: Form| fit.of(form).as_ref().ok().filter(|f| f.converged);
    let test = |form: Form| {
        let wider = row(form)?.log_likelihood?;
        let relation = row(Form::Relation)?.log_likelihood?;
        likelihood_ratio(2.0 * (wider - relation), form == Form::Divisive)
    };
    let gain = |form: Form| Some(row(form)?.aicc? - row(Form::Relation)?.aicc?);
    let slope = |form: Form| converged(form).map(|f| f.estimates.slope).unwrap_or_default();
    InhibitionAssessment {
        slope_expected: slope(Form::Relation),
        slope_found: slope(Form::FreeSlope),
        slope_test: test(Form::FreeSlope),
        divisive: converged(Form::Divisive)
            .map(|f| f.estimates.divisive)
            .unwrap_or_default(),
        divisive_test: test(Form::Divisive),
        slope_aicc_gain: gain(Form::FreeSlope),
        divisive_aicc_gain: gain(Form::Divisive),
        goodness: rows,
    }
}

/// Chi-squared with one degree of freedom; where the narrower form lies on the `boundary` of the wider one, half of
/// it and half a point mass at zero (Self & Liang 1987, *J. Am. Stat. Assoc.* 82:605, case 5). `None` for a statistic
/// that is not a number.
pub fn likelihood_ratio(statistic: f64, boundary: bool) -> Option<LikelihoodRatio> {
    if statistic.is_nan() {
        return None;
    }
    let statistic = statistic.max(0.0);
    let tail = ChiSquared::new(1.0).ok()?.sf(statistic);
    let p = match (boundary, statistic > 0.0) {
        (true, true) => 0.5 * tail,
        (true, false) => 1.0,
        (false, _) => tail,
    };
    Some(LikelihoodRatio { statistic, p })
}

fn measure(fit: &FormFit) -> Goodness {
    goodness(&FittedCurve {
        curve: fit.form.name(),
        parameters: fit.form.parameters(),
        points: &fit.points,
        fitted: &fit.fitted,
        leverage: &fit.leverage,
        extra_variance: fit.extra_variance,
        converged: fit.converged,
        evaluations: fit.evaluations,
    })
}
