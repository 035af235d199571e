//! Cells stepped in excitatory conductance at several levels of inhibition: one joint fit over all of them.
//!
//! [`membrane`] is the relation between leak, inhibition and threshold, [`form`] the three ways in which inhibition may
//! enter the rate function; the fits themselves follow the main fit in everything else: the same curve, chart,
//! solver, extra SD and profile intervals.
//!
//! The relation is that of a membrane held *at* V_t. A cell that fires is reset and spends its time below, and a fit
//! over all its rates finds a potential between the middle of reset and threshold, where the curve far above threshold
//! points, and V_t itself. In simulated integrate-and-fire cells it lay 0.75 mV below V_t for resets of 1 to 3 mV and
//! 1.7 mV for 8 to 15 mV, more than the intervals tell (`fixtures/effective_threshold`).

pub mod form;
mod intervals;
mod joint;
pub mod membrane;
mod search;
mod starts;

pub use form::Form;
pub use intervals::JointEstimates;
pub use membrane::{Membrane, MembraneError};

use form::Law;
use joint::{Joint, evaluate};
use search::Found;

use super::main_fit::{covariance, spread};
use super::objective::{Chart, Point};
use crate::recording::CellConstants;

/// One rate to fit.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct InhibitionPoint {
    /// Excitatory conductance, nS.
    pub g_exc: f64,
    /// Inhibitory conductance, nS.
    pub g_inh: f64,
    /// Rate, Hz.
    pub rate: f64,
    /// Its standard error, Hz.
    pub se: f64,
}

/// Why a form is not fitted.
#[derive(Clone, Debug, PartialEq, thiserror::Error)]
pub enum Unfit {
    /// The relation needs membrane constants, all in order.
    #[error("{0}")]
    Membrane(#[from] MembraneError),
    /// A number that is not finite, a conductance or a rate below zero, a standard error not above zero.
    #[error("point {}: {name} = {value} is not {limit}: leave the step out, or correct it", index + 1)]
    BadPoint {
        /// Index of the point as given.
        index: usize,
        /// Which of its numbers.
        name: &'static str,
        /// The value.
        value: f64,
        /// What it should be.
        limit: &'static str,
    },
    /// No rate above zero.
    #[error(
        "no rate above 0 Hz on any of {points} steps: without spikes there is no threshold; step to larger g_exc"
    )]
    Silent {
        /// Number of points.
        points: usize,
    },
    /// No more points than parameters.
    #[error("{points} steps are too few for {parameters} parameters and the scatter between steps: at least {} are needed", parameters + 1)]
    TooFewPoints {
        /// Number of points.
        points: usize,
        /// Parameters of the form.
        parameters: usize,
    },
    /// Fewer distinct pairs of g_exc and g_inh than parameters, or fewer than four drives once collapsed.
    #[error(
        "{levels} distinct pairs of g_exc and g_inh are too few for {parameters} parameters: step to at least {parameters}, four of them apart in g_exc"
    )]
    TooFewLevels {
        /// Distinct pairs.
        levels: usize,
        /// Parameters of the form.
        parameters: usize,
    },
    /// Only one inhibition level fires, or there is only one.
    #[error(
        "only {firing} of {levels} levels of g_inh has a rate above 0 Hz: what inhibition does needs at least 2"
    )]
    OneInhibitionLevel {
        /// Levels with a rate above zero.
        firing: usize,
        /// Levels.
        levels: usize,
    },
}

/// Rate at one conductance and the standard error of the fitted curve there.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct CurveRate {
    /// Rate, Hz.
    pub rate: f64,
    /// Standard error by the delta method, Hz; `None` where the covariance is not known.
    pub se: Option<f64>,
}

/// The fit of one form to all inhibition levels.
#[derive(Clone, Debug)]
pub struct FormFit {
    /// Which form.
    pub form: Form,
    /// Its parameters.
    pub estimates: JointEstimates,
    /// Extra variance, Hz^2.
    pub extra_variance: f64,
    /// Points minus parameters.
    pub degrees: f64,
    /// Weighted sum of squares at the minimum.
    pub cost: f64,
    /// Least weighted sum of squares of the relation at this form's weights; `None` for the relation itself, and where
    /// it could not be fitted.
    pub relation_cost: Option<f64>,
    /// Whether the solver and the extra variance converged; if not, no number is to be reported.
    pub converged: bool,
    /// Passes of the curve over all points.
    pub evaluations: u64,
    /// The points in [`InhibitionFit::order`], with g_exc - threshold(g_inh) for drive: the axis on which all levels
    /// lie on one curve (except for the divisive form).
    pub points: Vec<Point>,
    /// Fitted rate of each of them, Hz.
    pub fitted: Vec<f64>,
    /// Share of its level's own weight in each point's fitted value, 0 to 1; empty where the covariance is not known.
    pub leverage: Vec<f64>,
    curve: Curve,
}

#[derive(Clone, Debug)]
enum Curve {
    Four(Law, [f64; 4], Option<[[f64; 4]; 4]>),
    Five(Law, [f64; 5], Option<[[f64; 5]; 5]>),
}

impl FormFit {
    /// The fitted curve at one inhibition (nS) over excitatory conductances (nS).
    pub fn rates(&self, g_inh: f64, g_exc: &[f64]) -> Vec<CurveRate> {
        match &self.curve {
            Curve::Four(law, at, c) => rates(law, at, c.as_ref(), g_inh, g_exc),
            Curve::Five(law, at, c) => rates(law, at, c.as_ref(), g_inh, g_exc),
        }
    }
}

fn rates<const P: usize>(
    law: &Law,
    at: &[f64; P],
    covariance: Option<&[[f64; P]; P]>,
    g_inh: f64,
    g_exc: &[f64],
) -> Vec<CurveRate> {
    let mut rates = Vec::with_capacity(g_exc.len());
    evaluate(law, Chart::Ceiling, at, g_inh, g_exc, |_, rate, derivatives| {
        rates.push(CurveRate {
            rate,
            se: covariance.map(|c| spread(c, derivatives).sqrt()),
        });
    });
    rates
}

/// All three forms fitted to one cell.
#[derive(Clone, Debug)]
pub struct InhibitionFit {
    /// The inhibition levels, nS, ascending.
    pub inhibition_levels: Vec<f64>,
    /// Index, into the points as given, of each fitted point: sorted by g_inh, then g_exc.
    pub order: Vec<usize>,
    /// Inhibition moves the threshold as the membrane equation says.
    pub relation: Result<FormFit, Unfit>,
    /// Inhibition moves the threshold by a slope of its own.
    pub free_slope: Result<FormFit, Unfit>,
    /// As the relation, and inhibition divides the gain.
    pub divisive: Result<FormFit, Unfit>,
}

impl InhibitionFit {
    /// The fit of one form, or why there is none.
    pub fn of(&self, form: Form) -> &Result<FormFit, Unfit> {
        match form {
            Form::Relation => &self.relation,
            Form::FreeSlope => &self.free_slope,
            Form::Divisive => &self.divisive,
        }
    }
}

/// Fits all forms that the constants and the points allow; each of the others says why it is not. Profile intervals
/// are computed with `profiles`. The order of `points` does not matter.
pub fn fit_inhibition(
    points: &[InhibitionPoint],
    constants: &CellConstants,
    profiles: bool,
) -> InhibitionFit {
    let mut order: Vec<usize> = (0..points.len()).collect();
    // The rate and its error only make the sums independent of the order given.
    order.sort_by(|a, b| {
        let (a, b) = (&points[*a], &points[*b]);
        a.g_inh
            .total_cmp(&b.g_inh)
            .then(a.g_exc.total_cmp(&b.g_exc))
            .then(a.rate.total_cmp(&b.rate))
            .then(a.se.total_cmp(&b.se))
    });
    // -0 and 0 are one level.
    let sorted: Vec<InhibitionPoint> = order
        .iter()
        .map(|i| InhibitionPoint {
            g_inh: points[*i].g_inh + 0.0,
            ..points[*i]
        })
        .collect();
    let mut inhibition_levels: Vec<f64> = sorted.iter().map(|p| p.g_inh).collect();
    inhibition_levels.dedup();
    let all = |why: Unfit| InhibitionFit {
        inhibition_levels: inhibition_levels.clone(),
        order: order.clone(),
        relation: Err(why.clone()),
        free_slope: Err(why.clone()),
        divisive: Err(why),
    };
    if let Err(why) = check_points(points) {
        return all(why);
    }
    if !sorted.iter().any(|p| p.rate > 0.0) {
        return all(Unfit::Silent { points: points.len() });
    }
    let as_points: Vec<Point> = sorted
        .iter()
        .map(|p| Point {
            drive: p.g_exc,
            rate: p.rate,
            se: p.se,
        })
        .collect();
    let joint = Joint::new(&sorted, &as_points, 0.0);
    let levels: usize = joint.groups.iter().map(|g| g.levels.drives.len()).sum();
    let enough = |form: Form| -> Result<(), Unfit> {
        let parameters = form.parameters();
        if points.len() <= parameters {
            return Err(Unfit::TooFewPoints {
                points: points.len(),
                parameters,
            });
        }
        if levels < parameters {
            return Err(Unfit::TooFewLevels { levels, parameters });
        }
        let firing = joint
            .groups
            .iter()
            .filter(|g| g.levels.rates.iter().any(|rate| *rate > 0.0))
            .count();
        if form != Form::Relation && firing < 2 {
            return Err(Unfit::OneInhibitionLevel {
                firing,
                levels: joint.groups.len(),
            });
        }
        Ok(())
    };
    let membrane = Membrane::from_constants(constants);
    let collapsed = starts::collapsed(&sorted, &joint, membrane.as_ref().ok());
    let too_few = |form: Form| Unfit::TooFewLevels {
        levels,
        parameters: form.parameters(),
    };

    let relation = match (&membrane, enough(Form::Relation)) {
        (Err(why), _) => Err(why.clone().into()),
        (_, Err(why)) => Err(why),
        (Ok(m), Ok(())) => {
            let law = Law::Relation(*m);
            search::search::<4>(law, &as_points, &joint, &starts::starts(&law, &joint, &collapsed))
                .ok_or_else(|| too_few(Form::Relation))
        }
    };
    let base = relation.as_ref().ok().map(|found| found.solution.parameters);
    let free_slope = enough(Form::FreeSlope).and_then(|()| {
        let law = Law::FreeSlope;
        let mut starts = starts::starts::<5>(&law, &joint, &collapsed);
        // The relation is one point of this form.
        if let (Some([q, c, v, noise]), Ok(m)) = (base, &membrane) {
            starts.push([q, c, m.threshold_at(0.0, v), noise, m.per_inhibition_at(v)]);
        }
        search::search::<5>(law, &as_points, &joint, &starts).ok_or_else(|| too_few(Form::FreeSlope))
    });
    let divisive = match (&membrane, enough(Form::Divisive)) {
        (Err(why), _) => Err(why.clone().into()),
        (_, Err(why)) => Err(why),
        (Ok(m), Ok(())) => {
            let law = Law::Divisive(*m);
            let mut starts = starts::starts::<5>(&law, &joint, &collapsed);
            if let Some(at) = base {
                starts.push(starts::start(at, 0.0));
            }
            search::search::<5>(law, &as_points, &joint, &starts).ok_or_else(|| too_few(Form::Divisive))
        }
    };
    let base_law = relation
        .as_ref()
        .ok()
        .map(|found| (found.law, found.solution.parameters));
    InhibitionFit {
        relation: relation.map(|mut found| {
            let (estimates, covariance) = finish(&as_points, &mut found, profiles);
            let curve = Curve::Four(found.law, found.solution.parameters, covariance);
            form_fit(&as_points, &found, estimates, covariance, curve, None)
        }),
        free_slope: free_slope.map(|found| five(&as_points, found, base_law.as_ref(), profiles)),
        divisive: divisive.map(|found| five(&as_points, found, base_law.as_ref(), profiles)),
        inhibition_levels,
        order,
    }
}

fn five(
    points: &[Point],
    mut found: Found<5>,
    relation: Option<&(Law, [f64; 4])>,
    profiles: bool,
) -> FormFit {
    let (estimates, covariance) = finish(points, &mut found, profiles);
    let curve = Curve::Five(found.law, found.solution.parameters, covariance);
    let relation_cost = relation.and_then(|(law, near)| search::cost_at_weights(law, &mut found, *near));
    form_fit(points, &found, estimates, covariance, curve, relation_cost)
}

/// Estimates, and the covariance for the band: a noise SD that the data do not determine within a factor of e is held.
fn finish<const P: usize>(
    points: &[Point],
    found: &mut Found<P>,
    profiles: bool,
) -> (JointEstimates, Option<[[f64; P]; P]>) {
    let estimates = intervals::estimates(points, found, profiles);
    let full = covariance(&found.solution);
    if full.is_some_and(|c| c[3][3] <= 1.0) {
        return (estimates, full);
    }
    let mut held = found.solution;
    held.at_bound[3] = true;
    (estimates, covariance(&held))
}

fn form_fit<const P: usize>(
    as_points: &[Point],
    found: &Found<P>,
    estimates: JointEstimates,
    covariance: Option<[[f64; P]; P]>,
    curve: Curve,
    relation_cost: Option<f64>,
) -> FormFit {
    let at = &found.solution.parameters;
    let fifth = at.get(4).copied().unwrap_or(0.0);
    let mut points = Vec::with_capacity(as_points.len());
    let mut leverage = Vec::new();
    for group in &found.joint.groups {
        let threshold = found.law.threshold(at[2], fifth, group.g_inh);
        points.extend(as_points[group.points.clone()].iter().map(|p| Point {
            drive: p.drive - threshold,
            ..*p
        }));
        if let Some(c) = &covariance {
            let mut of_level = vec![0.0; group.levels.drives.len()];
            let weights = &group.levels.root_weights;
            evaluate(
                &found.law,
                Chart::Ceiling,
                at,
                group.g_inh,
                &group.levels.drives,
                |i, _, derivatives| of_level[i] = weights[i] * weights[i] * spread(c, derivatives),
            );
            leverage.extend(group.levels.level_of_point().map(|l| of_level[l]));
        }
    }
    FormFit {
        form: found.law.form(),
        estimates,
        extra_variance: found.extra_variance,
        degrees: found.degrees,
        cost: found.solution.cost(),
        relation_cost,
        converged: found.converged,
        evaluations: found.evaluations,
        points,
        fitted: search::fitted(&found.law, &found.joint, &found.solution),
        leverage,
        curve,
    }
}

fn check_points(points: &[InhibitionPoint]) -> Result<(), Unfit> {
    for (index, p) in points.iter().enumerate() {
        let checks = [
            (
                "g_exc",
                p.g_exc,
                p.g_exc.is_finite() && p.g_exc >= 0.0,
                "a finite number of 0 nS or more",
            ),
            (
                "g_inh",
                p.g_inh,
                p.g_inh.is_finite() && p.g_inh >= 0.0,
                "a finite number of 0 nS or more",
            ),
            (
                "rate",
                p.rate,
                p.rate.is_finite() && p.rate >= 0.0,
                "a finite number of 0 Hz or more",
            ),
            (
                "standard error",
                p.se,
                p.se.is_finite() && p.se > 0.0,
                "a finite number above 0 Hz",
            ),
        ];
        for (name, value, good, limit) in checks {
            if !good {
                return Err(Unfit::BadPoint {
                    index,
                    name,
                    value,
                    limit,
                });
            }
        }
    }
    Ok(())
}

#[cfg(test)]
pub(crate) mod tests;
