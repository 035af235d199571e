//! Onset and steady rates of the same steps fitted together: the onset curve f0 and the strength of adaptation.
//!
//! Model (Benda & Herz 2003, *Neural Comput* 15:2523, with adaptation proportional to the rate): f = f0(I - A),
//! tau_a dA/dt = alpha f - A, f0 the smoothed hyperbola. The settled rate solves finf = f0(I - alpha finf), hence
//!
//! ```text
//! dfinf/dp = (df0/dp)/(1 + alpha f0'),   dfinf/dalpha = -f0' finf/(1 + alpha f0'),   all at I - alpha finf
//! ```
//!
//! No window of a recording shows f0 or finf pure. The first interval ends when some adaptation has come in already:
//! 1/x_1 is the mean rate over that interval, below f0(I) (with f0 60 Hz, finf 20 Hz and tau_eff 50 ms it is 53 Hz), and
//! taken for f0(I) it makes alpha too small and the onset curve too flat. Every point therefore carries `remaining`, the
//! part of the onset's excess that its window still sees: its rate is w f0(I) + (1 - w) finf(I). With w = 1 for onset and
//! 0 for steady rates the windows are taken as pure; [`super::adaptation_time`] works w out.
//!
//! Without noise the steady curve keeps threshold and max rate R of the onset curve; its initial gain is 1/(1/gain + alpha)
//! and it reaches R/2 at half_rise + alpha R/2 above threshold.

use super::estimates::{Estimate, t_quantile};
use super::extra_sd::Settling;
use super::main_fit::{self, Scatter, covariance};
use super::objective::{Chart, Levels, Point, evaluate};
use super::profile::{Side, SideSearch};
use super::solver::{LeastSquares, NormalSums, Solution, SolverOptions, minimise};
use super::starts::starts;
use crate::curve::adapting::steady;
use crate::curve::rate_function::RateFunction;
use crate::rates::Response;

/// Number of parameters: four of the onset curve, and alpha.
pub const PARAMETERS: usize = 5;
/// Strengths of adaptation tried as starts, as multiples of 1/initial gain.
const STRENGTHS: [f64; 4] = [0.0, 0.3, 1.0, 3.0];
/// Curves tried as starts.
const CURVES: usize = 4;
/// Largest alpha, as a multiple of range of drives over peak rate.
const STRONGEST: f64 = 100.0;
/// Rounds of weights and curve, and of starting again from a better minimum.
const ROUNDS: usize = 200;
const RESTARTS: usize = 4;
/// Squared residual, in units of the standard error, below which a point lies on the curve to rounding.
const EXACT: f64 = 1e-14;

/// A rate of one step and what it shows of the onset.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct AdaptationPoint {
    /// The step it belongs to.
    pub step: usize,
    /// `Onset` or `Steady`.
    pub response: Response,
    /// Drive, rate and standard error.
    pub point: Point,
    /// Part of f0 - finf that the window still sees, 0 to 1.
    pub remaining: f64,
}

/// Why adaptation could not be measured.
#[derive(Clone, Copy, Debug, PartialEq, thiserror::Error)]
pub enum NoAdaptation {
    /// Too few steps with an onset rate from an interval.
    #[error("{found} steps have a first interval, {needed} are needed for an onset curve")]
    FewOnset {
        /// Such steps.
        found: usize,
        /// Limit.
        needed: usize,
    },
    /// Too few steps with a steady rate from an interval.
    #[error("{found} steps have an interval in their steady part, {needed} are needed for a steady curve")]
    FewSteady {
        /// Such steps.
        found: usize,
        /// Limit.
        needed: usize,
    },
    /// Too few levels.
    #[error("{found} levels of drive, {needed} are needed")]
    FewLevels {
        /// Distinct drives.
        found: usize,
        /// Limit.
        needed: usize,
    },
    /// A number that is not finite, a standard error that is not positive, or spikes out of order or outside their step.
    #[error(
        "a drive, time, rate or standard error is not a number that can be used, or spikes are not in order"
    )]
    BadNumber,
    /// The first interval's rate has no finite mean for firing this irregular.
    #[error("interval CV {cv:.2} is above {limit}: one interval tells too little of the onset rate")]
    Irregular {
        /// CV once adaptation is taken out.
        cv: f64,
        /// Limit.
        limit: f64,
    },
    /// The search did not settle.
    #[error("the joint fit of onset and steady rates did not converge")]
    NotConverged,
}

/// The joint fit.
#[derive(Clone, Debug)]
pub struct AdaptationFit {
    /// The minimum in (1/initial gain, 1/max rate, threshold, ln noise SD, alpha).
    pub solution: Solution<PARAMETERS>,
    /// Strength of adaptation alpha, drive units per Hz; its interval is a profile's.
    pub alpha: Estimate,
    /// Initial gain of the onset curve, Hz per drive unit.
    pub onset_gain: Estimate,
    /// Initial gain of the steady curve, 1/(1/gain + alpha), Hz per drive unit.
    pub steady_gain: Estimate,
    /// Max rate, Hz, common to both curves; `None` without a ceiling.
    pub max_rate: Estimate,
    /// Half-rise of the onset curve, drive units; `None` without a ceiling.
    pub onset_half_rise: Estimate,
    /// Drive above threshold at which the noise-free steady curve reaches half of max rate; `None` without a ceiling.
    pub steady_half_rise: Estimate,
    /// Threshold, drive units, common to both.
    pub threshold: Estimate,
    /// Noise SD, drive units.
    pub noise_sd: Estimate,
    /// Covariance of the five parameters in the order of `solution`, rows of those on a bound zero; `None` where the
    /// points do not determine them.
    pub covariance: Option<[[f64; PARAMETERS]; PARAMETERS]>,
    /// Extra variance beyond the standard errors, Hz^2.
    pub extra_variance: f64,
    /// Points minus parameters.
    pub degrees: f64,
    /// Fitted rate of each point, Hz, in the order given.
    pub fitted: Vec<f64>,
    /// Whether curve and extra variance converged together.
    pub converged: bool,
    /// Passes over the points.
    pub evaluations: u64,
}

impl AdaptationFit {
    /// The onset curve, to be run. `None` only if the parameters overflow.
    pub fn curve(&self) -> Option<RateFunction> {
        curve_of(&self.solution.parameters)
    }

    /// Alpha, drive units per Hz.
    pub fn strength(&self) -> f64 {
        self.solution.parameters[4]
    }

    /// finf/f0 at `drive`: 1 without adaptation. `None` where f0 is zero.
    pub fn adaptation_ratio(&self, drive: f64) -> Option<f64> {
        let curve = self.curve()?;
        let onset = curve.at(drive).rate;
        (onset > 0.0).then(|| steady(&curve, self.strength(), drive).rate / onset)
    }
}

/// The onset curve of parameters in the order of [`AdaptationFit::solution`].
pub fn curve_of(parameters: &[f64; PARAMETERS]) -> Option<RateFunction> {
    let [inverse_gain, ceiling, threshold, ln_noise, _] = *parameters;
    RateFunction::new(inverse_gain, ceiling, threshold, ln_noise.exp())
}

struct Problem<'a> {
    points: &'a [AdaptationPoint],
    drives: &'a [f64],
    variance: f64,
}

impl Problem<'_> {
    /// Calls `each(index, rate, derivatives)` for all points.
    fn evaluate(&self, parameters: &[f64; PARAMETERS], mut each: impl FnMut(usize, f64, &[f64; PARAMETERS])) {
        let [g, c, threshold, ln_noise, alpha] = *parameters;
        let four = [g, c, threshold, ln_noise];
        let Some(curve) = curve_of(parameters) else {
            for i in 0..self.points.len() {
                each(i, f64::NAN, &[f64::NAN; PARAMETERS]);
            }
            return;
        };
        let mut onset = vec![(0.0, [0.0; 4]); self.drives.len()];
        evaluate(Chart::Ceiling, &four, self.drives, |i, f, d| onset[i] = (f, *d));
        let at_rest: Vec<f64> = self
            .drives
            .iter()
            .map(|drive| drive - alpha * steady(&curve, alpha, *drive).rate)
            .collect();
        evaluate(Chart::Ceiling, &four, &at_rest, |i, f, d| {
            let slope = -d[2];
            let share = 1.0 / (1.0 + alpha * slope);
            let w = self.points[i].remaining;
            let (f0, d0) = &onset[i];
            let mut derivatives = [0.0; PARAMETERS];
            for k in 0..4 {
                derivatives[k] = w * d0[k] + (1.0 - w) * share * d[k];
            }
            derivatives[4] = -(1.0 - w) * share * slope * f;
            each(i, w * f0 + (1.0 - w) * f, &derivatives);
        });
    }
}

impl LeastSquares<PARAMETERS> for Problem<'_> {
    fn accumulate(&self, parameters: &[f64; PARAMETERS], sums: &mut NormalSums<PARAMETERS>) {
        self.evaluate(parameters, |i, rate, derivatives| {
            let p = &self.points[i].point;
            let root = 1.0 / (p.se * p.se + self.variance).sqrt();
            sums.add(root * (p.rate - rate), &derivatives.map(|d| root * d));
        });
    }
}

/// Fits onset curve and alpha to `points`.
///
/// # Errors
/// Fewer than 4 rates above zero of either response, fewer than 4 levels, a number that is not finite or a standard error
/// that is not positive, or no convergence: why, in words.
pub fn fit_adaptation(points: &[AdaptationPoint]) -> Result<AdaptationFit, NoAdaptation> {
    fit_near(points, None)
}

/// [`fit_adaptation`] from a minimum of nearly the same points, if there is one, in place of the search for starts.
pub(super) fn fit_near(
    points: &[AdaptationPoint],
    near: Option<&AdaptationFit>,
) -> Result<AdaptationFit, NoAdaptation> {
    const NEEDED: usize = 4;
    let usable = |p: &AdaptationPoint| {
        let Point { drive, rate, se } = p.point;
        drive.is_finite()
            && rate.is_finite()
            && se.is_finite()
            && se > 0.0
            && (0.0..=1.0).contains(&p.remaining)
    };
    if !points.iter().all(usable) {
        return Err(NoAdaptation::BadNumber);
    }
    let of = |response| -> Vec<Point> {
        let mut list: Vec<Point> = points
            .iter()
            .filter(|p| p.response == response)
            .map(|p| p.point)
            .collect();
        list.sort_by(|a, b| a.drive.total_cmp(&b.drive));
        list
    };
    let firing = |response| {
        points
            .iter()
            .filter(|p| p.response == response && p.point.rate > 0.0)
            .count()
    };
    let found = firing(Response::Onset);
    if found < NEEDED {
        return Err(NoAdaptation::FewOnset {
            found,
            needed: NEEDED,
        });
    }
    let found = firing(Response::Steady);
    if found < NEEDED {
        return Err(NoAdaptation::FewSteady {
            found,
            needed: NEEDED,
        });
    }
    let drives: Vec<f64> = points.iter().map(|p| p.point.drive).collect();
    let mut levels = drives.clone();
    levels.sort_by(f64::total_cmp);
    levels.dedup();
    if levels.len() < NEEDED {
        return Err(NoAdaptation::FewLevels {
            found: levels.len(),
            needed: NEEDED,
        });
    }
    let (lowest, highest) = (levels[0], levels[levels.len() - 1]);
    let peak = points.iter().map(|p| p.point.rate).fold(0.0, f64::max);
    // The silent steps tell the onset curve's threshold too, and stand among the steady points only.
    let mut onset = of(Response::Onset);
    onset.extend(of(Response::Steady).into_iter().filter(|p| p.rate == 0.0));
    onset.sort_by(|a, b| a.drive.total_cmp(&b.drive));

    let mut search = Search {
        points,
        drives,
        options: bounds(lowest, highest, peak),
        variance: (0.05 * peak).powi(2),
        evaluations: 0,
    };
    let (mut best, mut rivals) = match near {
        Some(near) => {
            search.variance = near.extra_variance;
            (near.solution, Vec::new())
        }
        None => search.starts(&onset)?,
    };
    for _ in 0..RESTARTS {
        let mut converged = search.settle(&mut best);
        // The weights have changed: another start may lie lower now, or the ramp.
        let mut ramp = best.parameters;
        ramp[1] = 0.0;
        for start in rivals.iter().chain([&ramp]) {
            let options = search.options;
            let other = search.minimise(*start, &options);
            if other.converged && other.cost() < best.cost() * (1.0 - 1e-7) - 1e-12 {
                best = other;
                converged = search.settle(&mut best);
            }
        }
        if !converged {
            continue;
        }
        match search.report(&best) {
            Ok(fit) => return Ok(fit),
            Err(better) => rivals = vec![better],
        }
    }
    Err(NoAdaptation::NotConverged)
}

fn bounds(lowest: f64, highest: f64, peak: f64) -> SolverOptions<PARAMETERS> {
    let range = highest - lowest;
    let natural = range / peak;
    SolverOptions {
        lower: [
            1e-6 * natural,
            0.0,
            lowest - 10.0 * range,
            (1e-3 * range).ln(),
            0.0,
        ],
        upper: [
            1e4 * natural,
            10.0 / peak,
            highest + range,
            (10.0 * range).ln(),
            STRONGEST * natural,
        ],
        decrease_tolerance: 1e-11,
        step_tolerance: 1e-12,
        max_iterations: 400,
        stride: [0.5 * natural, 0.5 / peak, 0.25 * range, 1.0, 0.5 * natural],
        ..SolverOptions::default()
    }
}

struct Search<'a> {
    points: &'a [AdaptationPoint],
    drives: Vec<f64>,
    options: SolverOptions<PARAMETERS>,
    variance: f64,
    evaluations: u64,
}

impl Search<'_> {
    fn problem(&self) -> Problem<'_> {
        Problem {
            points: self.points,
            drives: &self.drives,
            variance: self.variance,
        }
    }

    fn minimise(
        &mut self,
        start: [f64; PARAMETERS],
        options: &SolverOptions<PARAMETERS>,
    ) -> Solution<PARAMETERS> {
        let found = minimise(&self.problem(), start, options);
        self.evaluations += found.evaluations;
        found
    }

    /// The best of a grid of curves and strengths after a short search, and the next three.
    fn starts(
        &mut self,
        onset: &[Point],
    ) -> Result<(Solution<PARAMETERS>, Vec<[f64; PARAMETERS]>), NoAdaptation> {
        let rough = SolverOptions {
            decrease_tolerance: 1e-3,
            max_iterations: 15,
            ..self.options
        };
        let mut curves: Vec<[f64; 4]> = starts(&Levels::new(onset, self.variance))
            .into_iter()
            .take(CURVES - 1)
            .collect();
        curves.extend(main_fit::fit(onset, Scatter::Estimated).map(|fit| fit.solution.parameters));
        let mut candidates: Vec<Solution<PARAMETERS>> = Vec::new();
        for curve in curves {
            for strength in STRENGTHS {
                let start = [curve[0], curve[1], curve[2], curve[3], strength * curve[0]];
                candidates.push(self.minimise(start, &rough));
            }
        }
        candidates.sort_by(|a, b| a.cost().total_cmp(&b.cost()));
        let best = *candidates.first().ok_or(NoAdaptation::NotConverged)?;
        let rivals: Vec<[f64; PARAMETERS]> =
            candidates.iter().skip(1).take(3).map(|c| c.parameters).collect();
        Ok((best, rivals))
    }

    fn fitted(&self, parameters: &[f64; PARAMETERS]) -> Vec<f64> {
        let mut fitted = vec![0.0; self.points.len()];
        self.problem().evaluate(parameters, |i, f, _| fitted[i] = f);
        fitted
    }

    fn degrees(&self) -> f64 {
        self.points.len() as f64 - PARAMETERS as f64
    }

    /// Curve at given weights and extra variance at a given curve, in turn until both stand still.
    fn settle(&mut self, best: &mut Solution<PARAMETERS>) -> bool {
        let mut settling = Settling::new(self.points.iter().map(|p| p.point.se), self.degrees());
        let options = SolverOptions {
            initial_damping: 1e-6,
            ..self.options
        };
        for round in 0..ROUNDS {
            *best = self.minimise(best.parameters, &options);
            let residuals: Vec<f64> = self
                .fitted(&best.parameters)
                .iter()
                .zip(self.points)
                .map(|(f, p)| p.point.rate - f)
                .collect();
            let change = settling.change(&residuals, self.variance);
            if change.settled {
                // Points that lie on the curve to rounding leave the solver nothing to go by.
                return best.converged || best.cost() < EXACT * self.points.len() as f64;
            }
            self.variance = settling.advance(round, self.variance, change);
        }
        false
    }

    /// Values, standard errors, the profile of alpha; `Err` is a better minimum met on the way.
    fn report(&mut self, best: &Solution<PARAMETERS>) -> Result<AdaptationFit, [f64; PARAMETERS]> {
        let [g, c, threshold, ln_noise, alpha] = best.parameters;
        let covariance = covariance(best);
        // Standard error of a function with this gradient in the five parameters.
        let se = |gradient: [f64; PARAMETERS]| {
            let c = covariance?;
            let mut sum = 0.0;
            for i in 0..PARAMETERS {
                for j in 0..PARAMETERS {
                    sum += gradient[i] * c[i][j] * gradient[j];
                }
            }
            Some(sum.sqrt()).filter(|se| *se > 0.0)
        };
        let estimate = |value: f64, gradient: [f64; PARAMETERS]| Estimate {
            value: Some(value),
            se: se(gradient),
            lo: None,
            hi: None,
        };
        let (gain, steady_gain) = (1.0 / g, 1.0 / (g + alpha));
        let by_ceiling = |value: f64, gradient: [f64; PARAMETERS]| {
            if c > 0.0 {
                estimate(value, gradient)
            } else {
                Estimate::default()
            }
        };
        let mut alpha_estimate = estimate(alpha, [0.0, 0.0, 0.0, 0.0, 1.0]);
        let t = t_quantile(self.degrees());
        let mut evaluations = 0;
        for (direction, end) in [(-1.0, &mut alpha_estimate.lo), (1.0, &mut alpha_estimate.hi)] {
            let problem = self.problem();
            let search = SideSearch {
                problem: &problem,
                best,
                options: &self.options,
                index: 4,
                direction,
                limit: t * t,
            };
            *end = match search.follow(&mut evaluations) {
                Side::Closed(at) => Some(at[4]),
                // Adaptation cannot be negative: the data do not exclude none.
                Side::Open if direction < 0.0 => Some(0.0),
                Side::Open => Some(f64::INFINITY),
                Side::Better(point) => return Err(point),
                Side::Lost => None,
            };
        }
        self.evaluations += evaluations;
        let noise_free = ln_noise <= self.options.lower[3];
        Ok(AdaptationFit {
            solution: *best,
            alpha: alpha_estimate,
            onset_gain: estimate(gain, [gain * gain, 0.0, 0.0, 0.0, 0.0]),
            steady_gain: estimate(
                steady_gain,
                [
                    steady_gain * steady_gain,
                    0.0,
                    0.0,
                    0.0,
                    steady_gain * steady_gain,
                ],
            ),
            max_rate: by_ceiling(1.0 / c, [0.0, 1.0 / (c * c), 0.0, 0.0, 0.0]),
            onset_half_rise: by_ceiling(g / c, [1.0 / c, g / (c * c), 0.0, 0.0, 0.0]),
            steady_half_rise: by_ceiling(
                (g + 0.5 * alpha) / c,
                [1.0 / c, (g + 0.5 * alpha) / (c * c), 0.0, 0.0, 0.5 / c],
            ),
            threshold: estimate(threshold, [0.0, 0.0, 1.0, 0.0, 0.0]),
            noise_sd: if noise_free {
                Estimate::default()
            } else {
                estimate(ln_noise.exp(), [0.0, 0.0, 0.0, ln_noise.exp(), 0.0])
            },
            covariance,
            extra_variance: self.variance,
            degrees: self.degrees(),
            fitted: self.fitted(&best.parameters),
            converged: true,
            evaluations: self.evaluations,
        })
    }
}

#[cfg(test)]
mod tests {
    #![allow(clippy::unwrap_used)]
    use super::*;

    const TRUTH: [f64; 5] = [2.0, 0.01, 60.0, 2.995732273553991, 1.5];

    fn points(truth: &[f64; 5], ripple: f64) -> Vec<AdaptationPoint> {
        let curve = curve_of(truth).unwrap();
        let mut list = Vec::new();
        for i in 0..20 {
            let drive = 40.0 * f64::from(i);
            let (f0, finf) = (curve.at(drive).rate, steady(&curve, truth[4], drive).rate);
            for (response, w) in [(Response::Onset, 0.85), (Response::Steady, 0.03)] {
                let sign = f64::from((i * 7 + i32::from(w > 0.5) * 3) % 5 - 2);
                let rate = w * f0 + (1.0 - w) * finf;
                list.push(AdaptationPoint {
                    step: i as usize,
                    response,
                    point: Point {
                        drive,
                        rate: rate * (1.0 + ripple * sign),
                        se: 0.3 + 0.02 * rate,
                    },
                    remaining: w,
                });
            }
        }
        list
    }

    #[test]
    fn derivatives_match_differences() {
        let points = points(&TRUTH, 0.0);
        let drives: Vec<f64> = points.iter().map(|p| p.point.drive).collect();
        let problem = Problem {
            points: &points,
            drives: &drives,
            variance: 0.0,
        };
        let mut at = vec![[0.0; 5]; points.len()];
        problem.evaluate(&TRUTH, |i, _, d| at[i] = *d);
        for k in 0..5 {
            let step = [1e-6, 1e-8, 1e-4, 1e-6, 1e-6][k];
            let (mut up, mut down) = (vec![0.0; points.len()], vec![0.0; points.len()]);
            for (list, sign) in [(&mut up, 1.0), (&mut down, -1.0)] {
                let mut p = TRUTH;
                p[k] += sign * step;
                problem.evaluate(&p, |i, f, _| list[i] = f);
            }
            for i in 0..points.len() {
                let slope = (up[i] - down[i]) / (2.0 * step);
                assert!(
                    (slope - at[i][k]).abs() < 1e-4 * at[i][k].abs().max(1e-2),
                    "{k} {i}: {slope} {}",
                    at[i][k]
                );
            }
        }
    }

    #[test]
    fn finds_what_made_the_points() {
        for truth in [
            TRUTH,
            [1.0, 0.004, 100.0, 1.0, 0.2],
            [3.0, 0.0, 10.0, 2.0, 4.0],
            [2.0, 0.01, 60.0, 3.0, 0.0],
        ] {
            let fit = fit_adaptation(&points(&truth, 0.0)).unwrap();
            for k in [0, 2, 4] {
                assert!(
                    (fit.solution.parameters[k] - truth[k]).abs() < 1e-4 * (0.1 + truth[k]),
                    "{truth:?} {:?}",
                    fit.solution.parameters
                );
            }
            assert_eq!(fit.extra_variance, 0.0);
        }
    }

    #[test]
    fn intervals_hold_the_estimate_and_none_is_not_excluded_without_adaptation() {
        let fit = fit_adaptation(&points(&TRUTH, 0.03)).unwrap();
        let (alpha, lo, hi) = (fit.strength(), fit.alpha.lo.unwrap(), fit.alpha.hi.unwrap());
        assert!(
            lo > 0.0 && lo < alpha && alpha < hi && hi < 3.0,
            "{lo} {alpha} {hi}"
        );
        assert!(lo < 1.5 && 1.5 < hi);
        let se = fit.alpha.se.unwrap();
        // Nearly quadratic: the profile is within a third of the plain interval.
        let t = t_quantile(fit.degrees);
        assert!(((hi - lo) / (2.0 * t * se) - 1.0).abs() < 0.35);
        let steady_half = fit.steady_half_rise.value.unwrap();
        let onset_half = fit.onset_half_rise.value.unwrap();
        assert!(
            (steady_half - onset_half - 0.5 * alpha * fit.max_rate.value.unwrap()).abs() < 1e-9 * steady_half
        );
        let [low, high] = [200.0, 700.0].map(|drive| fit.adaptation_ratio(drive).unwrap());
        assert!(low < 0.8 && low < high && high < 1.0, "{low} {high}");

        let none = fit_adaptation(&points(&[2.0, 0.01, 60.0, 3.0, 0.0], 0.03)).unwrap();
        assert_eq!(none.alpha.lo, Some(0.0));
        assert!(none.alpha.hi.unwrap() < 0.5);
    }

    #[test]
    fn says_why_not() {
        let mut points = points(&TRUTH, 0.0);
        let few: Vec<_> = points
            .iter()
            .filter(|p| p.response == Response::Steady || p.step < 3)
            .copied()
            .collect();
        let error = fit_adaptation(&few).unwrap_err();
        assert!(
            matches!(error, NoAdaptation::FewOnset { found, .. } if found < 4 ),
            "{error}"
        );
        assert_eq!(
            fit_adaptation(&[]).unwrap_err(),
            NoAdaptation::FewOnset { found: 0, needed: 4 }
        );
        points[3].point.se = 0.0;
        assert_eq!(fit_adaptation(&points).unwrap_err(), NoAdaptation::BadNumber);
    }
}
