//! Values, standard errors and profile intervals of one form, as they are reported.

use super::form::{Form, Law};
use super::joint::Objective;
use super::search::{Found, again_from};
use crate::fit::estimates::{Estimate, t_quantile};
use crate::fit::main_fit::covariance;
use crate::fit::objective::{Chart, Point};
use crate::fit::profile::{Side, SideSearch};
use crate::fit::solver::{LeastSquares, NormalSums, Solution, SolverOptions};

/// Rounds of starting again from a better minimum that a profile ran into.
const RESTARTS: usize = 4;
/// Noise SD that the nearest level still feels, as a fraction of the gap between levels.
const FELT: f64 = 0.5;

/// The reported parameters of one form. Drive is excitatory conductance in nS; what depends on inhibition stands at
/// g_inh = 0.
#[derive(Clone, Debug, Default, PartialEq)]
pub struct JointEstimates {
    /// Max rate, Hz; the same at every inhibition.
    pub max_rate: Estimate,
    /// Half-rise, nS.
    pub half_rise: Estimate,
    /// Effective threshold, nS.
    pub threshold: Estimate,
    /// Noise SD, nS.
    pub noise_sd: Estimate,
    /// Initial gain, Hz per nS.
    pub initial_gain: Estimate,
    /// Spike threshold potential V_t, mV; not estimated by the free slope.
    pub v_threshold: Estimate,
    /// Threshold per nS of inhibition: the parameter of the free slope; in the other forms the one that V_t implies.
    pub slope: Estimate,
    /// Divisive factor b, 1/nS: the half-rise grows by 1 + b g_inh. Estimated by the divisive form alone. Its lower
    /// end is 0 where no division is within the limit.
    pub divisive: Estimate,
    /// Covariance, row-major, of ln max rate, ln half-rise, threshold, ln noise SD and, in forms that have one, the
    /// fifth parameter (slope or b): 4 x 4 or 5 x 5. `None` where not all are determined.
    pub covariance: Option<Vec<f64>>,
    /// The smoothed ramp is within the limit: max rate has no upper bound.
    pub ceiling_open: bool,
    /// Names of the parameters that rest on a bound of the search.
    pub at_bound: Vec<&'static str>,
}

/// Estimates and, if asked for, profile intervals; the fit itself is improved when a profile meets a better minimum.
pub(super) fn estimates<const P: usize>(
    points: &[Point],
    found: &mut Found<P>,
    profiles: bool,
) -> JointEstimates {
    for _ in 0..RESTARTS {
        match attempt(found, profiles) {
            Ok(estimates) => return estimates,
            Err(better) => again_from(points, found, better),
        }
    }
    found.converged = false;
    attempt(found, false).unwrap_or_default()
}

fn attempt<const P: usize>(found: &mut Found<P>, profiles: bool) -> Result<JointEstimates, [f64; P]> {
    let at = found.solution.parameters;
    let (gain, noise) = (1.0 / at[0], at[3].exp());
    let t = t_quantile(found.degrees);
    let limit = t * t;
    let cost = found.solution.cost();
    let rise = found.ramp.cost() - cost;
    if rise < -1e-7 * cost - 1e-12 {
        return Err(found.ramp.parameters);
    }
    let ceiling_open = at[1] <= 0.0 || rise <= limit;
    let c = covariance(&found.solution);
    let se = |index: usize| c.map(|c| c[index][index].sqrt()).filter(|se| *se > 0.0);
    let mut e = JointEstimates {
        ceiling_open,
        at_bound: bounds_touched(found),
        ..JointEstimates::default()
    };
    e.initial_gain.value = Some(gain);
    e.initial_gain.se = se(0).map(|se| gain * gain * se);
    if at[3] > found.options.lower[3] {
        e.noise_sd.value = Some(noise);
        e.noise_sd.se = se(3).map(|se| noise * se);
    }
    let third = Estimate {
        value: Some(at[2]),
        se: se(2),
        ..Estimate::default()
    };
    let fifth = at.get(4).map(|value| Estimate {
        value: Some(*value),
        se: se(4),
        ..Estimate::default()
    });
    if !ceiling_open {
        e.max_rate.value = Some(1.0 / at[1]);
        e.max_rate.se = se(1).map(|se| se / (at[1] * at[1]));
        e.half_rise.value = Some(1.0 / (at[1] * gain));
        if let Some(c) = c {
            let reported = reported_covariance(&found.law, &at, &c);
            e.half_rise.se = Some(reported[P + 1].sqrt() / (at[1] * gain)).filter(|se| *se > 0.0);
            if !found.solution.at_bound.contains(&true) {
                e.covariance = Some(reported);
            }
        }
    }
    if !profiles {
        name_third_and_fifth(&mut e, &found.law, third, fifth);
        return Ok(e);
    }

    let mut evaluations = 0;
    {
        let objective = Objective {
            joint: &found.joint,
            law: &found.law,
            chart: Chart::Ceiling,
            rough: false,
        };
        let mut side = |index, direction| {
            end(
                &objective,
                &found.solution,
                &found.options,
                index,
                direction,
                limit,
                &mut evaluations,
            )
        };
        e.initial_gain.lo = side(0, 1.0)?.map(|q| 1.0 / q);
        e.initial_gain.hi = side(0, -1.0)?.map(|q| if q > 0.0 { 1.0 / q } else { f64::INFINITY });
        e.noise_sd.lo = side(3, -1.0)?.map(f64::exp);
        e.noise_sd.hi = side(3, 1.0)?.map(f64::exp);
        e.max_rate.lo = side(1, 1.0)?.map(|c| 1.0 / c);
        e.max_rate.hi = if ceiling_open {
            Some(f64::INFINITY)
        } else {
            side(1, -1.0)?.map(|c| if c > 0.0 { 1.0 / c } else { f64::INFINITY })
        };
        let third = Estimate {
            lo: side(2, -1.0)?,
            hi: side(2, 1.0)?,
            ..third
        };
        let fifth = match fifth {
            Some(fifth) => Some(Estimate {
                lo: side(4, -1.0)?,
                hi: side(4, 1.0)?,
                ..fifth
            }),
            None => None,
        };
        name_third_and_fifth(&mut e, &found.law, third, fifth);
    }
    {
        let objective = Objective {
            joint: &found.joint,
            law: &found.law,
            chart: Chart::HalfRise,
            rough: false,
        };
        let (best, options) = in_half_rise_chart(found, &objective);
        let mut side = |direction| {
            end(&objective, &best, &options, 1, direction, limit, &mut evaluations).map_err(|mut point| {
                point[1] *= point[0];
                point
            })
        };
        e.half_rise.lo = side(1.0)?.map(|k| 1.0 / k);
        e.half_rise.hi = if ceiling_open {
            Some(f64::INFINITY)
        } else {
            side(-1.0)?.map(|k| if k > 0.0 { 1.0 / k } else { f64::INFINITY })
        };
    }
    found.evaluations += evaluations;
    Ok(e)
}

/// The third and fifth parameter under their names, and what follows from them. Threshold at g_inh = 0 and slope rise
/// with V_t alone, so the ends of the profile of V_t are the ends of theirs.
fn name_third_and_fifth(e: &mut JointEstimates, law: &Law, third: Estimate, fifth: Option<Estimate>) {
    match law.membrane() {
        None => {
            e.threshold = third;
            e.slope = fifth.unwrap_or_default();
        }
        Some(m) => {
            e.v_threshold = third;
            let at = third.value.unwrap_or(f64::NAN);
            e.threshold = through(&third, |v| m.threshold_at(0.0, v), m.threshold_slope_at(0.0, at));
            e.slope = through(&third, |v| m.per_inhibition_at(v), m.per_inhibition_slope_at(at));
            if let (Form::Divisive, Some(mut b)) = (law.form(), fifth) {
                // Zero is the smallest b there is, not an end that was not found.
                b.lo = b.lo.map(|lo| lo.max(0.0));
                e.divisive = b;
            }
        }
    }
}

/// An estimate seen through a rising function; open ends stay open.
fn through(from: &Estimate, function: impl Fn(f64) -> f64, slope: f64) -> Estimate {
    let end = |x: f64| if x.is_finite() { function(x) } else { x };
    Estimate {
        value: from.value.map(&function),
        se: from.se.map(|se| se * slope),
        lo: from.lo.map(end),
        hi: from.hi.map(end),
    }
}

fn bounds_touched<const P: usize>(found: &Found<P>) -> Vec<&'static str> {
    let (at, lower, upper) = (
        &found.solution.parameters,
        &found.options.lower,
        &found.options.upper,
    );
    let (third, fifth) = match found.law.form() {
        Form::Relation => ("v_threshold", ""),
        Form::FreeSlope => ("threshold", "slope"),
        Form::Divisive => ("v_threshold", "divisive"),
    };
    ["initial_gain", "max_rate", third, "noise_sd", fifth]
        .into_iter()
        .take(P)
        .enumerate()
        .filter(|(i, name)| {
            // A ceiling at infinity and no division at all are answers, not bounds of the search.
            let answer = *i == 1 || *name == "divisive";
            at[*i] >= upper[*i] || (at[*i] <= lower[*i] && !answer)
        })
        .map(|(_, name)| name)
        .collect()
}

/// From the chart to (ln max rate, ln half-rise, threshold at g_inh = 0, ln noise SD, fifth).
fn reported_covariance<const P: usize>(law: &Law, at: &[f64; P], c: &[[f64; P]; P]) -> Vec<f64> {
    let mut to = [[0.0; P]; P];
    for (i, row) in to.iter_mut().enumerate() {
        row[i] = 1.0;
    }
    // ln R = -ln c, ln K = ln q - ln c.
    to[0] = [0.0; P];
    to[0][1] = -1.0 / at[1];
    to[1][0] = 1.0 / at[0];
    to[1][1] = -1.0 / at[1];
    if let Some(m) = law.membrane() {
        to[2][2] = m.threshold_slope_at(0.0, at[2]);
    }
    let mut reported = vec![0.0; P * P];
    for i in 0..P {
        for j in 0..P {
            for k in 0..P {
                for l in 0..P {
                    reported[P * i + j] += to[i][k] * c[k][l] * to[j][l];
                }
            }
        }
    }
    reported
}

/// One end of a profile: its value, infinite where open, `None` where it could not be found; `Err` is a better
/// minimum.
fn end<const P: usize>(
    objective: &Objective<'_>,
    best: &Solution<P>,
    options: &SolverOptions<P>,
    index: usize,
    direction: f64,
    limit: f64,
    evaluations: &mut u64,
) -> Result<Option<f64>, [f64; P]> {
    let search = SideSearch {
        problem: objective,
        best,
        options,
        index,
        direction,
        limit,
    };
    let mut side = search.follow(evaluations);
    // A noise SD that no level feels has lost its slope: a wider one may reach further.
    if let Side::Closed(at) = side
        && index != 3
    {
        let felt = (FELT * gap_at(objective, &at)).ln();
        if at[3] < felt {
            let mut wider = at;
            wider[3] = felt;
            side = search.follow_from(at, wider, evaluations);
        }
    }
    match side {
        Side::Closed(at) => Ok(Some(at[index])),
        Side::Open => Ok(Some(direction * f64::INFINITY)),
        Side::Lost => Ok(None),
        Side::Better(point) => Err(point),
    }
}

/// Gap between the two levels on either side of the threshold, over all inhibition levels as one curve.
fn gap_at<const P: usize>(objective: &Objective<'_>, at: &[f64; P]) -> f64 {
    let fifth = at.get(4).copied().unwrap_or(0.0);
    let (mut above, mut below) = (f64::INFINITY, f64::INFINITY);
    for group in &objective.joint.groups {
        let threshold = objective.law.threshold(at[2], fifth, group.g_inh);
        for drive in &group.levels.drives {
            let distance = drive - threshold;
            if distance >= 0.0 {
                above = above.min(distance);
            } else {
                below = below.min(-distance);
            }
        }
    }
    let gap = above + below;
    // All levels on one side: the noise is not looked for.
    if gap.is_finite() { gap } else { 0.0 }
}

/// The same minimum in the chart of the half-rise.
fn in_half_rise_chart<const P: usize>(
    found: &Found<P>,
    objective: &Objective<'_>,
) -> (Solution<P>, SolverOptions<P>) {
    let mut best = found.solution;
    best.parameters[1] /= best.parameters[0];
    best.sums = NormalSums::default();
    objective.accumulate(&best.parameters, &mut best.sums);
    best.sums.curvature = best.sums.symmetric();
    let mut options = found.options;
    let drives = || found.joint.groups.iter().flat_map(|g| &g.levels.drives).copied();
    let range = drives().fold(f64::NEG_INFINITY, f64::max) - drives().fold(f64::INFINITY, f64::min);
    options.upper[1] = (1e3 / range).max(best.parameters[1]);
    options.stride[1] = 2.0 / range;
    best.at_bound[1] = best.parameters[1] <= 0.0;
    (best, options)
}
