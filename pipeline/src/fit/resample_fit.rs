//! The fit of a resample: the main fit's objective, searched from the full fit to the accuracy a bootstrap needs.
//!
//! A resample differs from the data by about a standard error, so its minimum lies near the full fit's. Gauss-Newton
//! steps with damping lead there; the extra variance is solved anew after every accepted step. The search ends once
//! the next step promises to lower the cost by no more than [`PROMISE`], that is, once it is within a thirtieth of a
//! standard error of the minimum, and that step is still made. A thousand resamples place a 95 % bound no closer than
//! a twelfth of a standard error, so more would be wasted.

use super::main_fit::{MainFit, PARAMETERS, Scatter};
use super::objective::{Chart, Each, EachDrive, Point};
use super::solver::{NormalSums, SolverOptions, cholesky_solve};
use crate::curve::smoothed_hyperbola::vectorised;

/// The search has arrived once its next step promises to lower the cost by this much or less. The cost is in squared
/// standard deviations, so the parameters are then within sqrt(0.001) = 0.03 standard errors.
const PROMISE: f64 = 1e-3;
/// What a search may leave unearned after `pass` passes. One that takes long moves along a valley, in a parameter that
/// its resample hardly determines: in the end a tenth of a standard error will do.
fn tolerance(pass: u32) -> f64 {
    match pass {
        0..44 => PROMISE,
        _ => 10.0 * PROMISE,
    }
}

/// The extra variance has settled once it moves by less than this fraction of the total variance.
const SETTLED: f64 = 0.01;
/// Passes of the curve after which the search gives up.
const PASSES: u32 = 60;
/// Accepted steps in a row that each gained less than the promise asked for: a valley without a floor.
const STALLED: u32 = 6;
/// Longest step in 1/max rate and threshold, as a multiple of the stride of the search.
const STRIDE: f64 = 1.5;
/// Longest last step, which no pass follows, as a multiple of the stride of the search.
const LAST_STRIDE: f64 = 0.2;
/// What is left at least of 1/gain and of the noise variance after one step, and the inverse of how far they may grow.
const LEFT: f64 = 0.05;

/// Rates and squared standard errors of a resample, one a point in the order of the points. A point that is left out
/// has an infinite variance.
#[derive(Clone, Debug, Default)]
pub(super) struct Sample {
    pub(super) rates: Vec<f64>,
    pub(super) variances: Vec<f64>,
}

/// Where a search ended.
#[derive(Clone, Copy, Debug, PartialEq)]
pub(super) struct Refit {
    /// In the chart `Ceiling`.
    pub(super) parameters: [f64; 4],
    /// Extra variance, Hz^2.
    pub(super) variance: f64,
}

#[derive(Clone, Debug, Default)]
struct AtLevels {
    rates: Vec<f64>,
    derivatives: Vec<[f64; 4]>,
}

impl Each for &mut AtLevels {
    #[inline(always)]
    fn each(&mut self, index: usize, rate: f64, derivatives: &[f64; 4]) {
        self.rates[index] = rate;
        self.derivatives[index] = *derivatives;
    }
}

/// Fits resamples of one set of points, again and again, without allocating.
#[derive(Clone, Debug)]
pub(super) struct ResampleFit<'a> {
    fit: &'a MainFit,
    scatter: Scatter,
    level_of_point: Vec<usize>,
    options: SolverOptions<4>,
    /// Evaluate the curve with few nodes.
    rough: bool,
    now: AtLevels,
    next: AtLevels,
    totals: Vec<f64>,
    means: Vec<f64>,
    /// Passes of the curve so far.
    pub(super) passes: u64,
}

impl<'a> ResampleFit<'a> {
    /// Prepares for resamples of the points that `fit` was fitted to.
    pub(super) fn new(fit: &'a MainFit, scatter: Scatter, rough: bool) -> Self {
        let levels = fit.levels.drives.len();
        let at = AtLevels {
            rates: vec![0.0; levels],
            derivatives: vec![[0.0; 4]; levels],
        };
        Self {
            fit,
            scatter,
            level_of_point: fit.levels.level_of_point().collect(),
            options: fit.options,
            rough,
            now: at.clone(),
            next: at,
            totals: vec![0.0; levels],
            means: vec![0.0; levels],
            passes: 0,
        }
    }

    /// The level of each point.
    pub(super) fn level_of_point(&self) -> &[usize] {
        &self.level_of_point
    }

    /// Whether there are enough points at enough levels for a fit.
    fn enough(&self, sample: &Sample) -> bool {
        let (mut points, mut levels, mut last) = (0, 0, usize::MAX);
        for (variance, level) in sample.variances.iter().zip(&self.level_of_point) {
            if variance.is_finite() {
                points += 1;
                levels += usize::from(*level != last);
                last = *level;
            }
        }
        points > PARAMETERS && levels >= PARAMETERS
    }

    /// Fits `sample`; `None` if the search did not arrive, or too few points are left.
    pub(super) fn fit(&mut self, sample: &Sample) -> Option<Refit> {
        if !self.enough(sample) {
            return None;
        }
        let finite = || sample.variances.iter().filter(|v| v.is_finite());
        let count = finite().count() as f64;
        let noise = finite().sum::<f64>() / count;
        let degrees = count - PARAMETERS as f64;
        let estimated = self.scatter == Scatter::Estimated;
        let mut x = self.fit.solution.parameters;
        let mut variance = self.fit.extra_variance;
        self.pass(&x, false);
        if estimated {
            variance = self.extra_variance(sample, degrees, variance, noise);
        }
        let mut settled = !estimated;
        self.weigh(sample, variance);
        let mut sums = self.sums();
        let mut damping = 1e-4;
        let mut stalled = 0;
        let mut raised = false;
        for pass in 0..PASSES {
            let enough = tolerance(pass);
            let free = self.free(&x, &sums);
            if !free.contains(&true) {
                return Some(Refit {
                    parameters: x,
                    variance,
                });
            }
            // The promise without regard to bounds: a parameter that wants to leave is first taken to its bound.
            let held = free.map(|f| (!f).then_some(0.0));
            if settled
                && let Some(step) = damped(&sums, &held, 0.0)
                && promised(&sums, &step) <= enough
            {
                // A long step for so little is one along a valley, where the quadratic model holds no further.
                let short = (0..4).all(|i| {
                    let stride = if i == 0 { x[0] } else { self.options.stride[i] };
                    step[i].abs() <= LAST_STRIDE * stride
                });
                let parameters = if short { self.moved(&x, &step) } else { x };
                return Some(Refit { parameters, variance });
            }
            if stalled >= STALLED {
                return Some(Refit {
                    parameters: x,
                    variance,
                });
            }
            let Some(step) = self.step(&x, &sums, &free, damping) else {
                damping = 10.0 * damping.max(1e-4);
                if damping > 1e12 {
                    return None;
                }
                continue;
            };
            let trial = self.moved(&x, &step);
            if trial == x {
                return settled.then_some(Refit {
                    parameters: x,
                    variance,
                });
            }
            self.pass(&trial, true);
            let cost = self.cost_of_next();
            if cost < sums.cost {
                let gain = sums.cost - cost;
                stalled = if gain < enough { stalled + 1 } else { 0 };
                // A damping that had to be raised is not lowered at once.
                if !raised {
                    damping *= 0.1;
                }
                raised = false;
                x = trial;
                std::mem::swap(&mut self.now, &mut self.next);
                if estimated {
                    let before = variance;
                    variance = self.extra_variance(sample, degrees, variance, noise);
                    settled = (variance - before).abs() <= SETTLED * (variance + noise);
                    self.weigh(sample, variance);
                }
                sums = self.sums();
            } else {
                // Too little to gain for the accuracy of the curve to tell.
                if promised(&sums, &step) <= enough {
                    if settled {
                        return Some(Refit {
                            parameters: x,
                            variance,
                        });
                    }
                    settled = true;
                }
                damping = 10.0 * damping.max(1e-4);
                raised = true;
                if !(damping < 1e12) {
                    return None;
                }
            }
        }
        None
    }

    fn pass(&mut self, parameters: &[f64; 4], into_next: bool) {
        self.passes += 1;
        vectorised(EachDrive {
            chart: Chart::Ceiling,
            rough: self.rough,
            parameters,
            drives: &self.fit.levels.drives,
            each: if into_next { &mut self.next } else { &mut self.now },
        });
    }

    /// Solves sum r^2/(e^2 + v) = degrees for v >= 0 at the current curve. Newton steps on the reciprocal of the sum,
    /// which is concave: from either side they land below the root and rise to it.
    fn extra_variance(&self, sample: &Sample, degrees: f64, start: f64, noise: f64) -> f64 {
        let mut variance = start;
        for _ in 0..50 {
            let (mut sum, mut slope) = (0.0, 0.0);
            for ((rate, e2), level) in sample
                .rates
                .iter()
                .zip(&sample.variances)
                .zip(&self.level_of_point)
            {
                let residual = rate - self.now.rates[*level];
                let inverse = 1.0 / (e2 + variance);
                let share = residual * residual * inverse;
                sum += share;
                slope += share * inverse;
            }
            let step = (sum / degrees - 1.0) * sum / slope;
            if !step.is_finite() {
                return 0.0;
            }
            let before = variance;
            variance = (variance + step).max(0.0);
            if (variance - before).abs() <= 0.1 * SETTLED * (variance + noise) {
                break;
            }
        }
        variance
    }

    /// Weighted means and summed weights of the levels.
    fn weigh(&mut self, sample: &Sample, variance: f64) {
        self.totals.fill(0.0);
        self.means.fill(0.0);
        for ((rate, e2), level) in sample
            .rates
            .iter()
            .zip(&sample.variances)
            .zip(&self.level_of_point)
        {
            let weight = 1.0 / (e2 + variance);
            self.totals[*level] += weight;
            self.means[*level] += weight * rate;
        }
        for (mean, total) in self.means.iter_mut().zip(&self.totals) {
            if *total > 0.0 {
                *mean /= total;
            }
        }
    }

    /// Sums at the current curve; the scatter within levels, which no curve changes, is left out of the cost.
    fn sums(&self) -> NormalSums<4> {
        let mut sums = NormalSums::default();
        for level in 0..self.totals.len() {
            let total = self.totals[level];
            let residual = self.means[level] - self.now.rates[level];
            sums.cost += total * residual * residual;
            let d = &self.now.derivatives[level];
            for i in 0..4 {
                let weighted = total * d[i];
                sums.gradient[i] += weighted * residual;
                for j in 0..=i {
                    sums.curvature[i][j] += weighted * d[j];
                }
            }
        }
        sums.curvature = sums.symmetric();
        sums
    }

    fn cost_of_next(&self) -> f64 {
        let mut cost = 0.0;
        for level in 0..self.totals.len() {
            let residual = self.means[level] - self.next.rates[level];
            cost += self.totals[level] * residual * residual;
        }
        cost
    }

    /// Parameters not pressed against a bound.
    fn free(&self, x: &[f64; 4], sums: &NormalSums<4>) -> [bool; 4] {
        let o = &self.options;
        std::array::from_fn(|i| {
            let g = sums.gradient[i];
            !(o.fixed[i] || (x[i] <= o.lower[i] && g <= 0.0) || (x[i] >= o.upper[i] && g >= 0.0))
        })
    }

    /// Damped Gauss-Newton step. A parameter that it would carry past a bound, or further than one step may, goes that
    /// far, and the others are solved for again.
    fn step(&self, x: &[f64; 4], sums: &NormalSums<4>, free: &[bool; 4], damping: f64) -> Option<[f64; 4]> {
        let o = &self.options;
        // In the noise variance, as in `moved`.
        let lowest = [
            (o.lower[0] - x[0]).max((LEFT - 1.0) * x[0]),
            (o.lower[1] - x[1]).max(-STRIDE * o.stride[1]),
            (o.lower[2] - x[2]).max(-STRIDE * o.stride[2]),
            0.5 * (2.0 * (o.lower[3] - x[3])).exp_m1().max(LEFT - 1.0),
        ];
        let highest = [
            (o.upper[0] - x[0]).min((1.0 / LEFT - 1.0) * x[0]),
            (o.upper[1] - x[1]).min(STRIDE * o.stride[1]),
            (o.upper[2] - x[2]).min(STRIDE * o.stride[2]),
            0.5 * (2.0 * (o.upper[3] - x[3])).exp_m1().min(1.0 / LEFT - 1.0),
        ];
        let mut held: [Option<f64>; 4] = free.map(|f| (!f).then_some(0.0));
        let mut step = damped(sums, &held, damping)?;
        for _ in 0..4 {
            // The worst offender first: the others may come back once it is held.
            let beyond = |i: usize| {
                let (low, high) = (lowest[i], highest[i]);
                let over = (step[i] / if step[i] < 0.0 { low } else { high }).abs();
                (held[i].is_none() && (step[i] < low || step[i] > high)).then_some((over, i))
            };
            let Some((_, i)) = (0..4).filter_map(beyond).max_by(|a, b| a.0.total_cmp(&b.0)) else {
                break;
            };
            held[i] = Some(step[i].max(lowest[i]).min(highest[i]));
            step = damped(sums, &held, damping)?;
        }
        Some(step)
    }

    /// Where `step` leads, within the bounds. One boundary that a search runs into is that of vanishing noise, and the
    /// curve is smooth there in the noise variance, not in its logarithm: a step `d` in ln noise SD is made as variance
    /// (1 + 2 d), which for small steps is the same.
    fn moved(&self, x: &[f64; 4], step: &[f64; 4]) -> [f64; 4] {
        let o = &self.options;
        let moved = [
            x[0] + step[0],
            x[1] + step[1],
            x[2] + step[2],
            x[3] + 0.5 * (2.0 * step[3]).ln_1p(),
        ];
        std::array::from_fn(|i| moved[i].max(o.lower[i]).min(o.upper[i]))
    }
}

/// Solves for the step of the parameters that are not `held` at a displacement.
fn damped(sums: &NormalSums<4>, held: &[Option<f64>; 4], damping: f64) -> Option<[f64; 4]> {
    let scale: [f64; 4] = std::array::from_fn(|i| {
        let norm = sums.curvature[i][i].sqrt();
        if norm > 0.0 { norm } else { 1.0 }
    });
    let mut a = [[0.0; 4]; 4];
    let mut b = [0.0; 4];
    for i in 0..4 {
        if held[i].is_some() {
            a[i][i] = 1.0;
            continue;
        }
        let mut pull = sums.gradient[i];
        for j in 0..4 {
            match held[j] {
                Some(displacement) => pull -= sums.curvature[i][j] * displacement,
                None => a[i][j] = sums.curvature[i][j] / (scale[i] * scale[j]),
            }
        }
        a[i][i] += damping;
        b[i] = pull / scale[i];
    }
    let solved = cholesky_solve(&a, &b)?;
    let step: [f64; 4] = std::array::from_fn(|i| held[i].unwrap_or(solved[i] / scale[i]));
    step.iter().all(|s| s.is_finite()).then_some(step)
}

/// Decrease of the cost that the quadratic model promises for `step`.
fn promised(sums: &NormalSums<4>, step: &[f64; 4]) -> f64 {
    let mut decrease = 0.0;
    for i in 0..4 {
        decrease += 2.0 * step[i] * sums.gradient[i];
        for j in 0..4 {
            decrease -= step[i] * sums.curvature[i][j] * step[j];
        }
    }
    decrease
}

/// The points of `sample` that are not left out.
pub(super) fn points_of(points: &[Point], sample: &Sample) -> Vec<Point> {
    points
        .iter()
        .zip(sample.rates.iter().zip(&sample.variances))
        .filter(|(_, (_, variance))| variance.is_finite())
        .map(|(point, (rate, variance))| Point {
            drive: point.drive,
            rate: *rate,
            se: variance.sqrt(),
        })
        .collect()
}
