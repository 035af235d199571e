//! The fit of the noise-free hyperbola by weighted least squares.

use super::estimates::t_quantile;
use super::main_fit::covariance;
use super::objective::Point;
use super::profile::{Side, SideSearch};
use super::solver::{LeastSquares, NormalSums, Solution, SolverOptions, minimise};
use crate::curve::hyperbola::hyperbola;

/// Half-rises tried for every threshold start: powers of this from 2^-8 to 2^8 times the range above the threshold.
const HALF_RISE_STEPS: std::ops::RangeInclusive<i32> = -8..=8;
/// Smallest and largest half-rise and max rate, as multiples of the range of drives and of the peak rate.
const SEARCH_BOUNDS: [f64; 2] = [1e-9, 1e9];
/// A profile still below its limit at these multiples is open. Inside the bounds of the search, so that the other of
/// the two, which grows along, has room.
const PROFILE_BOUNDS: [f64; 2] = [1e-6, 1e6];
/// Smallest threshold: this many ranges of drives below the smallest drive.
const THRESHOLD_BELOW: f64 = 10.0;
/// Starts, of different thresholds, that are followed to their minimum.
const STARTS_FOLLOWED: usize = 8;

/// What is estimated, in the order of [`HyperbolaFit::solution`].
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub enum Parameter {
    /// Max rate, Hz.
    MaxRate,
    /// Half-rise, drive units.
    HalfRise,
    /// Threshold, drive units.
    Threshold,
}

impl Parameter {
    fn index(self) -> usize {
        match self {
            Self::MaxRate => 0,
            Self::HalfRise => 1,
            Self::Threshold => 2,
        }
    }
}

/// How sure the standard errors of the points are.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub enum Errors {
    /// They are the scatter itself: estimates' errors follow from them alone.
    Absolute,
    /// They tell the points' relative precision only: the residual SD scales them.
    Relative,
}

/// The best hyperbola, and what its intervals need.
#[derive(Clone, Debug)]
pub struct HyperbolaFit {
    /// Max rate, Hz.
    pub max_rate: f64,
    /// Half-rise, drive units.
    pub half_rise: f64,
    /// Threshold, drive units; the one given, if it was held.
    pub threshold: f64,
    /// Points minus estimated parameters, at least 1.
    pub degrees: f64,
    /// sqrt(cost/degrees): the residual SD in units of the points' standard errors. In Hz where these are all 1.
    pub residual_sd: f64,
    /// The minimum, in (ln max rate, ln half-rise, threshold).
    pub solution: Solution<3>,
    options: SolverOptions<3>,
    profile_bounds: [[f64; 2]; 2],
    points: Vec<Point>,
}

impl HyperbolaFit {
    /// Standard errors of max rate (Hz), half-rise and threshold (drive units) from the curvature at the minimum; 0 for
    /// a held threshold and for a parameter on a bound of the search. `None` where the points do not determine them.
    pub fn standard_errors(&self, errors: Errors) -> Option<[f64; 3]> {
        let c = covariance(&self.held())?;
        let scale = match errors {
            Errors::Absolute => 1.0,
            Errors::Relative => self.residual_sd,
        };
        let by_log = [self.max_rate, self.half_rise, 1.0];
        Some(std::array::from_fn(|i| scale * by_log[i] * c[i][i].sqrt()))
    }

    /// Correlation of the estimates of max rate and half-rise. `None` where the points do not determine them.
    pub fn correlation(&self) -> Option<f64> {
        let c = covariance(&self.held())?;
        let r = c[0][1] / (c[0][0] * c[1][1]).sqrt();
        r.is_finite().then_some(r)
    }

    /// Lower and upper end of the 95 % profile interval of one parameter (Bates & Watts 1988, chapter 6: Student's t
    /// on the signed root of the rise). An end is infinite, or 0 for the lower one of max rate and half-rise, where
    /// the profile stays below the limit, and `None` where it could not be followed or a better minimum was met.
    pub fn interval(&self, parameter: Parameter, errors: Errors) -> [Option<f64>; 2] {
        let index = parameter.index();
        if self.options.fixed[index] {
            return [None; 2];
        }
        let t = t_quantile(self.degrees);
        let limit = match errors {
            Errors::Absolute => t * t,
            Errors::Relative => (t * self.residual_sd).powi(2),
        };
        let problem = Problem { points: &self.points };
        let mut options = self.options;
        if let Some(&[lower, upper]) = self.profile_bounds.get(index) {
            options.lower[index] = lower;
            options.upper[index] = upper;
        }
        let at = self.solution.parameters[index];
        [-1.0, 1.0].map(|direction| {
            let beyond = if direction < 0.0 {
                at <= options.lower[index]
            } else {
                at >= options.upper[index]
            };
            let end = if beyond {
                direction * f64::INFINITY
            } else {
                let search = SideSearch {
                    problem: &problem,
                    best: &self.solution,
                    options: &options,
                    index,
                    direction,
                    limit,
                };
                match search.follow(&mut 0) {
                    Side::Closed(end) => end[index],
                    Side::Open => direction * f64::INFINITY,
                    Side::Better(_) | Side::Lost => return None,
                }
            };
            Some(if parameter == Parameter::Threshold {
                end
            } else {
                end.exp()
            })
        })
    }

    /// The solution with a held threshold counted among the parameters that do not move.
    fn held(&self) -> Solution<3> {
        let mut solution = self.solution;
        for (bound, fixed) in solution.at_bound.iter_mut().zip(self.options.fixed) {
            *bound |= fixed;
        }
        solution
    }
}

struct Problem<'a> {
    points: &'a [Point],
}

impl LeastSquares<3> for Problem<'_> {
    fn accumulate(&self, parameters: &[f64; 3], sums: &mut NormalSums<3>) {
        for p in self.points {
            let at = hyperbola(p.drive, parameters);
            sums.add((p.rate - at.rate) / p.se, &at.derivatives.map(|d| d / p.se));
        }
    }
}

/// Fits the noise-free hyperbola to `points` with weights 1/se^2, the threshold free or held at `held_threshold`.
///
/// `None` where the question has no answer: a number that is not finite or a standard error that is not positive, no
/// more points than parameters, fewer distinct drives above the held threshold (or at all) than parameters, or no
/// rate above zero. The kinks of the cost in a free threshold make many minima; one start lies between every two
/// neighbouring drives, and the best few are followed.
pub fn fit_hyperbola(points: &[Point], held_threshold: Option<f64>) -> Option<HyperbolaFit> {
    let usable = |p: &Point| p.drive.is_finite() && p.rate.is_finite() && p.se.is_finite() && p.se > 0.0;
    if !points.iter().all(usable) || held_threshold.is_some_and(|t| !t.is_finite()) {
        return None;
    }
    let mut drives: Vec<f64> = points.iter().map(|p| p.drive).collect();
    drives.sort_by(f64::total_cmp);
    drives.dedup();
    let parameters = if held_threshold.is_some() { 2 } else { 3 };
    let telling = drives
        .iter()
        .filter(|d| held_threshold.is_none_or(|t| **d > t))
        .count();
    let peak = points.iter().map(|p| p.rate).fold(0.0, f64::max);
    if telling < parameters || points.len() <= parameters || peak <= 0.0 {
        return None;
    }
    let (lowest, highest) = (*drives.first()?, *drives.last()?);
    let lowest = held_threshold.map_or(lowest, |t| t.min(lowest));
    let range = highest - lowest;
    let thresholds = match held_threshold {
        Some(held) => vec![held],
        None => threshold_starts(&drives, range),
    };
    let bounds = |factors: [f64; 2], unit: f64| factors.map(|factor| (factor * unit).ln());
    let (max_rate, half_rise) = (bounds(SEARCH_BOUNDS, peak), bounds(SEARCH_BOUNDS, range));
    let options = SolverOptions {
        lower: [max_rate[0], half_rise[0], lowest - THRESHOLD_BELOW * range],
        upper: [max_rate[1], half_rise[1], highest],
        fixed: [false, false, held_threshold.is_some()],
        ..SolverOptions::default()
    };
    let mut starts: Vec<(f64, [f64; 3])> = thresholds
        .iter()
        .filter_map(|threshold| best_start(points, *threshold, highest))
        .collect();
    starts.sort_by(|a, b| a.0.total_cmp(&b.0));
    let problem = Problem { points };
    let solution = starts
        .iter()
        .take(STARTS_FOLLOWED)
        .map(|(_, start)| minimise(&problem, *start, &options))
        .min_by(|a, b| a.cost().total_cmp(&b.cost()))?;
    let degrees = (points.len() - parameters) as f64;
    Some(HyperbolaFit {
        max_rate: solution.parameters[0].exp(),
        half_rise: solution.parameters[1].exp(),
        threshold: solution.parameters[2],
        degrees,
        residual_sd: (solution.cost() / degrees).sqrt(),
        solution,
        options,
        profile_bounds: [bounds(PROFILE_BOUNDS, peak), bounds(PROFILE_BOUNDS, range)],
        points: points.to_vec(),
    })
}

/// Below the lowest drive at four distances, and between every two neighbours (ascending `drives`).
fn threshold_starts(drives: &[f64], range: f64) -> Vec<f64> {
    let below = [2.0, 0.5, 0.1, 0.01].map(|part| drives[0] - part * range);
    below
        .into_iter()
        .chain(drives.windows(2).map(|pair| 0.5 * (pair[0] + pair[1])))
        .collect()
}

/// The best of a grid of half-rises at one threshold, each with its best max rate, which enters linearly.
fn best_start(points: &[Point], threshold: f64, highest: f64) -> Option<(f64, [f64; 3])> {
    let reach = highest - threshold;
    HALF_RISE_STEPS
        .filter_map(|step| {
            let ln_half_rise = reach.ln() + f64::from(step) * std::f64::consts::LN_2;
            let (mut cross, mut square, mut total) = (0.0, 0.0, 0.0);
            for p in points {
                let shape = hyperbola(p.drive, &[0.0, ln_half_rise, threshold]).rate / p.se;
                let rate = p.rate / p.se;
                cross += shape * rate;
                square += shape * shape;
                total += rate * rate;
            }
            let max_rate = cross / square;
            (max_rate > 0.0 && max_rate.is_finite())
                .then(|| (total - cross * max_rate, [max_rate.ln(), ln_half_rise, threshold]))
        })
        .min_by(|a, b| a.0.total_cmp(&b.0))
}

#[cfg(test)]
mod tests {
    #![allow(clippy::unwrap_used)]
    use super::*;

    fn points(truth: [f64; 3], ripple: f64) -> Vec<Point> {
        let parameters = [truth[0].ln(), truth[1].ln(), truth[2]];
        (0..14)
            .map(|i| {
                let drive = f64::from(i) * 50.0;
                let rate = hyperbola(drive, &parameters).rate;
                let shift = if rate > 0.0 {
                    ripple * f64::from(i % 3 - 1)
                } else {
                    0.0
                };
                Point {
                    drive,
                    rate: rate + shift,
                    se: 0.5 + 0.1 * f64::from(i % 4),
                }
            })
            .collect()
    }

    #[test]
    fn finds_the_curve_that_made_the_points() {
        for truth in [[80.0, 120.0, 130.0], [200.0, 2000.0, 20.0], [40.0, 10.0, -60.0]] {
            let fit = fit_hyperbola(&points(truth, 0.0), None).unwrap();
            let found = [fit.max_rate, fit.half_rise, fit.threshold];
            for (value, truth) in found.iter().zip(truth) {
                assert!((value - truth).abs() < 1e-6 * truth.abs(), "{found:?}");
            }
        }
    }

    #[test]
    fn intervals_hold_the_estimate_and_scale_with_the_scatter() {
        let truth = [80.0, 120.0, 130.0];
        let points = points(truth, 0.8);
        let fit = fit_hyperbola(&points, None).unwrap();
        let relative = fit.standard_errors(Errors::Relative).unwrap();
        let absolute = fit.standard_errors(Errors::Absolute).unwrap();
        for (parameter, value) in [
            (Parameter::MaxRate, fit.max_rate),
            (Parameter::HalfRise, fit.half_rise),
            (Parameter::Threshold, fit.threshold),
        ] {
            let [low, high] = fit.interval(parameter, Errors::Relative).map(Option::unwrap);
            assert!(low < value && value < high, "{parameter:?} {low} {value} {high}");
            let i = parameter.index();
            assert!((relative[i] / absolute[i] / fit.residual_sd - 1.0).abs() < 1e-12);
        }
    }

    #[test]
    fn a_straight_line_has_no_upper_end_of_its_max_rate() {
        let line: Vec<Point> = (0..10)
            .map(|i| Point {
                drive: f64::from(i),
                rate: 5.0 * f64::from(i) + 0.1 * f64::from(i % 2),
                se: 1.0,
            })
            .collect();
        let fit = fit_hyperbola(&line, Some(0.0)).unwrap();
        assert_eq!(
            fit.interval(Parameter::MaxRate, Errors::Absolute)[1],
            Some(f64::INFINITY)
        );
        assert_eq!(fit.interval(Parameter::Threshold, Errors::Absolute), [None, None]);
    }

    #[test]
    fn questions_without_an_answer() {
        let good = points([80.0, 120.0, 130.0], 0.0);
        let silent: Vec<Point> = good.iter().map(|p| Point { rate: 0.0, ..*p }).collect();
        assert!(fit_hyperbola(&silent, None).is_none());
        assert!(fit_hyperbola(&[], None).is_none());
        assert!(fit_hyperbola(&good[..3], None).is_none());
        assert!(fit_hyperbola(&good, Some(1e6)).is_none());
        assert!(fit_hyperbola(&good, Some(f64::NAN)).is_none());
        for bad in [f64::NAN, f64::INFINITY, 0.0, -1.0] {
            let mut points = good.clone();
            points[5].se = bad;
            assert!(fit_hyperbola(&points, None).is_none());
        }
    }
}
