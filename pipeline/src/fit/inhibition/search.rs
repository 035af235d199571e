//! The search for the best curve of one form, together with the extra SD: the alternation of
//! [`crate::fit::main_fit`], over all inhibition levels.

use super::form::Law;
use super::joint::{Joint, Objective, evaluate};
use crate::fit::extra_sd::Settling;
use crate::fit::objective::{Chart, Point};
use crate::fit::solver::{Solution, SolverOptions, minimise};

/// Starts that are followed to the end after the short search.
const FOLLOWED: usize = 5;

/// Bounds as in the main fit, in units of the range of drives and of the peak rate.
const NOISE_BOUNDS: [f64; 2] = [1e-3, 10.0];
const GAIN_BOUNDS: [f64; 2] = [1e-4, 1e6];
const CEILING_BOUND: f64 = 10.0;
const THRESHOLD_BELOW: f64 = 10.0;
const THRESHOLD_ABOVE: f64 = 1.0;
/// Largest slope either way, in ranges of drives per range of inhibition.
const SLOPE_BOUND: f64 = 10.0;
/// Largest b, as a multiple of 1/largest inhibition.
const DIVISION_BOUND: f64 = 1e3;
/// What a move of one stride is charged, in units of the cost: little against any interval, where the rise is 4.
const STRIDE_CHARGE: f64 = 1e-4;
/// Longest step of a profile in V_t, mV.
const POTENTIAL_STRIDE: f64 = 5.0;

/// The best curve of one form.
#[derive(Clone, Debug)]
pub(super) struct Found<const P: usize> {
    pub(super) law: Law,
    /// The minimum at the final weights.
    pub(super) solution: Solution<P>,
    /// The minimum with 1/max rate held at 0, at the same weights.
    pub(super) ramp: Solution<P>,
    /// The points, with the final weights.
    pub(super) joint: Joint,
    pub(super) extra_variance: f64,
    /// Points minus parameters.
    pub(super) degrees: f64,
    pub(super) options: SolverOptions<P>,
    pub(super) converged: bool,
    pub(super) evaluations: u64,
}

/// Searches from `starts`; `None` without any.
pub(super) fn search<const P: usize>(
    law: Law,
    points: &[Point],
    joint: &Joint,
    starts: &[[f64; P]],
) -> Option<Found<P>> {
    let peak = points.iter().map(|p| p.rate).fold(0.0, f64::max);
    let options = bounds(&law, joint, peak);
    let mut joint = joint.clone();
    let variance = (0.05 * peak).powi(2);
    joint.reweigh(points, variance);
    let mut search = Search {
        law,
        points,
        variance,
        evaluations: 0,
    };
    let short = SolverOptions {
        decrease_tolerance: 1e-3,
        max_iterations: 15,
        ..options
    };
    let mut followed: Vec<Solution<P>> = starts
        .iter()
        .map(|start| search.minimise(&joint, *start, &short, true))
        .filter(|found| found.cost().is_finite())
        .collect();
    followed.sort_by(|a, b| a.cost().total_cmp(&b.cost()));
    let best = *followed.first()?;
    let rivals: Vec<[f64; P]> = followed
        .iter()
        .skip(1)
        .take(FOLLOWED - 1)
        .map(|f| f.parameters)
        .collect();
    Some(search.finish(joint, best, &rivals, &options))
}

/// Takes `found` to the minimum near `better`, a point in the chart `Ceiling` that costs less.
pub(super) fn again_from<const P: usize>(points: &[Point], found: &mut Found<P>, better: [f64; P]) {
    let mut search = Search {
        law: found.law,
        points,
        variance: found.extra_variance,
        evaluations: found.evaluations,
    };
    let joint = found.joint.clone();
    let best = search.minimise(&joint, better, &found.options, false);
    *found = search.finish(
        joint,
        best,
        &[found.solution.parameters, found.ramp.parameters],
        &found.options,
    );
}

/// The least cost of the relation at the weights of a wider form: from where the relation lay at its own weights, and
/// from the wider form's curve. `None` where no search converged.
pub(super) fn cost_at_weights(law: &Law, wider: &mut Found<5>, near: [f64; 4]) -> Option<f64> {
    let points = wider.joint.groups.iter().flat_map(|g| &g.levels.rates);
    let peak = points.copied().fold(0.0, f64::max);
    let options = SolverOptions {
        // A statistic needs three digits.
        decrease_tolerance: 1e-7,
        ..bounds::<4>(law, &wider.joint, peak)
    };
    let objective = Objective {
        joint: &wider.joint,
        law,
        chart: Chart::Ceiling,
        rough: false,
    };
    let [q, c, third, noise, fifth] = wider.solution.parameters;
    let mut starts = vec![near];
    match (wider.law, law.membrane()) {
        (Law::FreeSlope, Some(m)) => {
            for group in &wider.joint.groups {
                let potential = m.steady_potential(third + fifth * group.g_inh, group.g_inh);
                if potential > m.e_inh_mv() && potential < m.e_exc_mv() {
                    starts.push([q, c, potential, noise]);
                }
            }
        }
        _ => starts.push([q, c, third, noise]),
    }
    let mut least: Option<f64> = None;
    for start in starts {
        let found = minimise(&objective, start, &options);
        wider.evaluations += found.evaluations;
        if found.converged && least.is_none_or(|l| found.cost() < l) {
            least = Some(found.cost());
        }
    }
    least
}

fn bounds<const P: usize>(law: &Law, joint: &Joint, peak: f64) -> SolverOptions<P> {
    let drives = || joint.groups.iter().flat_map(|g| &g.levels.drives).copied();
    let (lowest, highest) = (
        drives().fold(f64::INFINITY, f64::min),
        drives().fold(f64::NEG_INFINITY, f64::max),
    );
    let range = highest - lowest;
    let inhibition = |index: Option<usize>| index.and_then(|i| joint.groups.get(i)).map_or(0.0, |g| g.g_inh);
    let (least, most) = (inhibition(Some(0)), inhibition(joint.groups.len().checked_sub(1)));
    let [flattest, steepest] = GAIN_BOUNDS.map(|g| range / (g * peak));
    let noise = NOISE_BOUNDS.map(|n| (n * range).ln());
    let threshold = [
        lowest - THRESHOLD_BELOW * range,
        highest + THRESHOLD_ABOVE * range,
    ];
    let (third, stride) = match law.membrane() {
        Some(m) => {
            // At or below E_inh inhibition would lower the threshold: not the relation any more.
            let lower = m.steady_potential(threshold[0], most);
            let lower = if lower > m.e_inh_mv() && threshold[0] + m.g_leak_ns() + most > 0.0 {
                lower
            } else {
                m.e_inh_mv()
            };
            // Half the way to E_exc at least: with E_leak below E_inh the former may lie below the lower bound.
            let upper = m
                .steady_potential(threshold[1], least)
                .max(0.5 * (lower + m.e_exc_mv()));
            ([lower, upper], POTENTIAL_STRIDE)
        }
        None => (threshold, 0.25 * range),
    };
    let span = most - least;
    let (fifth, fifth_stride) = match law {
        // Not present, and never read.
        Law::Relation(_) => ([0.0, 0.0], f64::INFINITY),
        Law::FreeSlope => (
            [-SLOPE_BOUND * range / span, SLOPE_BOUND * range / span],
            0.25 * range / span,
        ),
        Law::Divisive(_) => ([0.0, DIVISION_BOUND / most], 1.0 / most),
    };
    let pick = |four: [f64; 4], fifth: f64| std::array::from_fn(|i| four.get(i).copied().unwrap_or(fifth));
    let options = SolverOptions {
        lower: pick([steepest, 0.0, third[0], noise[0]], fifth[0]),
        upper: pick([flattest, CEILING_BOUND / peak, third[1], noise[1]], fifth[1]),
        decrease_tolerance: 1e-11,
        step_tolerance: 1e-12,
        max_iterations: 400,
        stride: pick([0.5 * range / peak, 0.5 / peak, stride, 1.0], fifth_stride),
        ..SolverOptions::default()
    };
    // A noise SD below the spacing of the levels leaves kinks, across which it and the threshold leap to and fro.
    SolverOptions {
        ridge: options.ridge_of(STRIDE_CHARGE),
        ..options
    }
}

struct Search<'a> {
    law: Law,
    points: &'a [Point],
    variance: f64,
    evaluations: u64,
}

impl Search<'_> {
    fn minimise<const P: usize>(
        &mut self,
        joint: &Joint,
        start: [f64; P],
        options: &SolverOptions<P>,
        rough: bool,
    ) -> Solution<P> {
        let objective = Objective {
            joint,
            law: &self.law,
            chart: Chart::Ceiling,
            rough,
        };
        let found = minimise(&objective, start, options);
        self.evaluations += found.evaluations;
        found
    }

    /// The extra variance changes the weights, and with them which minimum is lowest: the rivals are looked at again
    /// after it has settled.
    fn finish<const P: usize>(
        mut self,
        mut joint: Joint,
        mut best: Solution<P>,
        rivals: &[[f64; P]],
        options: &SolverOptions<P>,
    ) -> Found<P> {
        let mut converged = false;
        let mut ramp = best;
        for _ in 0..6 {
            converged = self.settle(&mut joint, &mut best, options);
            ramp = self.ramp(&joint, &best, rivals, options);
            let mut others = rivals.to_vec();
            others.push(ramp.parameters);
            // A noise SD below the spacing of the levels may have a second minimum.
            for shift in [-1.0, 1.0] {
                let mut start = best.parameters;
                start[3] += shift;
                others.push(start);
            }
            let mut improved = false;
            for rival in others {
                let found = self.minimise(&joint, rival, options, false);
                if found.cost() < best.cost() * (1.0 - 1e-8) - 1e-14 {
                    best = found;
                    improved = true;
                }
            }
            if !improved {
                break;
            }
            // Should the rounds run out here, the weights are not those of this minimum.
            converged = false;
        }
        Found {
            law: self.law,
            solution: best,
            ramp,
            joint,
            extra_variance: self.variance,
            degrees: (self.points.len() - P) as f64,
            options: *options,
            converged,
            evaluations: self.evaluations,
        }
    }

    /// Alternates between the curve at given weights and the extra variance at a given curve until both stand still.
    fn settle<const P: usize>(
        &mut self,
        joint: &mut Joint,
        best: &mut Solution<P>,
        options: &SolverOptions<P>,
    ) -> bool {
        let degrees = (self.points.len() - P) as f64;
        let mut settling = Settling::new(self.points.iter().map(|p| p.se), degrees);
        for round in 0..200 {
            let limited = SolverOptions {
                initial_damping: if round == 0 { 1e-4 } else { 1e-7 },
                max_iterations: if round < 3 { 4 } else { options.max_iterations },
                ..*options
            };
            *best = self.minimise(joint, best.parameters, &limited, false);
            let residuals: Vec<f64> = fitted(&self.law, joint, best)
                .iter()
                .zip(self.points)
                .map(|(f, p)| p.rate - f)
                .collect();
            self.evaluations += 1;
            let change = settling.change(&residuals, self.variance);
            self.variance = settling.advance(round, self.variance, change);
            joint.reweigh(self.points, self.variance);
            if change.settled {
                let exact = SolverOptions {
                    initial_damping: 1e-7,
                    ..*options
                };
                *best = self.minimise(joint, best.parameters, &exact, false);
                return best.converged;
            }
        }
        false
    }

    /// The same objective with the ceiling at infinity.
    fn ramp<const P: usize>(
        &mut self,
        joint: &Joint,
        near: &Solution<P>,
        rivals: &[[f64; P]],
        options: &SolverOptions<P>,
    ) -> Solution<P> {
        let mut options = *options;
        options.fixed[1] = true;
        let mut start = near.parameters;
        start[1] = 0.0;
        let mut best = self.minimise(joint, start, &options, false);
        for rival in rivals.iter().filter(|r| r[1] == 0.0) {
            let found = self.minimise(joint, *rival, &options, false);
            if found.cost() < best.cost() {
                best = found;
            }
        }
        best
    }
}

/// Fitted rate of every point, Hz, in the order of the points.
pub(super) fn fitted<const P: usize>(law: &Law, joint: &Joint, at: &Solution<P>) -> Vec<f64> {
    let mut rates = Vec::new();
    for group in &joint.groups {
        let mut of_level = vec![0.0; group.levels.drives.len()];
        evaluate(
            law,
            Chart::Ceiling,
            &at.parameters,
            group.g_inh,
            &group.levels.drives,
            |i, rate, _| of_level[i] = rate,
        );
        rates.extend(group.levels.level_of_point().map(|l| of_level[l]));
    }
    rates
}
