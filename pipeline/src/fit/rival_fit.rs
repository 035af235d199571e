//! Fits of the rival rate functions to the levels and weights of the main fit.
//!
//! Every rival sees the same points with the same weights 1/(e^2 + w^2). A free threshold makes the cost of a curve
//! without noise fall apart into pieces between neighbouring drives, with a minimum in several of them, and for curves
//! that start with an infinite slope also exactly at a drive whose level is silent. So starts lie between and at the
//! drives around the onset, each with its best scale, and the best few are followed.

use super::leave_one_out::{LeftOut, leave_one_level_out};
use super::main_fit::covariance;
use super::objective::Levels;
use super::solver::{LeastSquares, NormalSums, Solution, SolverOptions, minimise};
use crate::curve::Curve;
use crate::curve::hill::hill;
use crate::curve::hyperbola::hyperbola;
use crate::curve::logistic::logistic;
use crate::curve::ramp::ramp;
use crate::curve::refractory_integrator::refractory_integrator;
use crate::curve::square_root::square_root;

/// Starts followed to their minimum, of those with a free threshold and of those with one held at a drive.
const FOLLOWED: [usize; 2] = [5, 2];
/// Most thresholds tried.
const THRESHOLDS: usize = 10;
/// Thresholds below the smallest drive that are tried when that already fires, as fractions of the range of drives.
const BELOW: [f64; 3] = [0.05, 0.3, 1.0];
/// Smallest threshold: this many ranges below the smallest drive.
const THRESHOLD_BELOW: f64 = 10.0;
/// Half-rises and widths tried, as fractions of the drives above threshold.
const WIDTHS: [f64; 4] = [0.05, 0.2, 0.7, 3.0];
/// Hill exponents tried.
const EXPONENTS: [f64; 3] = [0.6, 1.5, 4.0];
/// Smallest and largest exponent.
const EXPONENT_BOUNDS: [f64; 2] = [0.05, 50.0];
/// Smallest and largest scale in Hz, half-rise and width, as multiples of the peak rate and the range of drives.
const WIDE: [f64; 2] = [1e-6, 1e6];

/// One rate function with parameters found.
#[derive(Clone, Debug, PartialEq)]
pub struct RivalFit {
    /// Which.
    pub curve: Curve,
    /// Name and value of each parameter: rates in Hz, drives in the unit of the drive, times in s.
    pub values: Vec<(&'static str, f64)>,
    /// Names of the parameters that ended on a bound of the search.
    pub at_bound: Vec<&'static str>,
    /// Fitted rate of each level, Hz.
    pub level_rates: Vec<f64>,
    /// Leverage of each level, 0 to 1; empty where the curvature is singular.
    pub leverage: Vec<f64>,
    /// Weighted sum of squares.
    pub cost: f64,
    /// Rates of the levels predicted without them; not computed unless asked for.
    pub left_out: Option<LeftOut>,
    /// Whether the search met its tolerance.
    pub converged: bool,
    /// Passes over the levels.
    pub evaluations: u64,
    chart: Chart,
}

/// Parameters in the chart of the search.
#[derive(Clone, Copy, Debug, PartialEq)]
enum Chart {
    Hyperbola([f64; 3]),
    Ramp([f64; 2]),
    Logistic([f64; 3]),
    Hill([f64; 4]),
    RefractoryIntegrator([f64; 3]),
    SquareRoot([f64; 2]),
}

impl RivalFit {
    /// The fitted rate in Hz at `drive` (pA or nS).
    pub fn rate_at(&self, drive: f64) -> f64 {
        match &self.chart {
            Chart::Hyperbola(p) => hyperbola(drive, p).rate,
            Chart::Ramp(p) => ramp(drive, p).0,
            Chart::Logistic(p) => logistic(drive, p).0,
            Chart::Hill(p) => hill(drive, p).0,
            Chart::RefractoryIntegrator(p) => refractory_integrator(drive, p).0,
            Chart::SquareRoot(p) => square_root(drive, p).0,
        }
    }
}

/// Why a rate function has no fit.
#[derive(Clone, Debug, PartialEq, Eq, thiserror::Error)]
pub enum NoRival {
    /// The curve belongs to the main fit and comes with it.
    #[error("the curve is part of the main fit")]
    Main,
    /// Fewer distinct drives than parameters.
    #[error("{levels} drives for {parameters} parameters")]
    TooFewLevels {
        /// Distinct drives.
        levels: usize,
        /// Parameters.
        parameters: usize,
    },
    /// All rates are zero.
    #[error("no rate above zero")]
    Silent,
    /// A curve that needs positive drives was asked of a cell without rates there.
    #[error("no rate at a positive drive")]
    NoPositiveDrive,
}

/// Fits `curve` to `levels` with the weights they carry.
///
/// # Errors
/// The question has no answer: see [`NoRival`]. A search that did not settle is no error; it says so.
pub fn fit_rival(curve: Curve, levels: &Levels, leave_out: bool) -> Result<RivalFit, NoRival> {
    let (parameters, count) = (curve.parameters(), levels.drives.len());
    let peak = levels.rates.iter().copied().fold(0.0, f64::max);
    if count < parameters || count < 2 {
        return Err(NoRival::TooFewLevels {
            levels: count,
            parameters,
        });
    }
    if !(peak > 0.0) {
        return Err(NoRival::Silent);
    }
    let ground = Ground::new(levels, peak, leave_out);
    match curve {
        Curve::SmoothedHyperbola | Curve::SmoothedRamp => Err(NoRival::Main),
        Curve::Hyperbola => Ok(ground.hyperbola()),
        Curve::Ramp => Ok(ground.ramp()),
        Curve::Logistic => Ok(ground.logistic()),
        Curve::Hill => Ok(ground.hill()),
        Curve::RefractoryIntegrator => ground.refractory_integrator(),
        Curve::SquareRoot => Ok(ground.square_root()),
    }
}

/// What all fits of one cell share.
struct Ground<'a> {
    levels: &'a Levels,
    peak: f64,
    range: f64,
    lowest: f64,
    highest: f64,
    /// Thresholds to start from: between drives, and at them.
    between: Vec<f64>,
    at_drives: Vec<f64>,
    leave_out: bool,
}

/// One curve's part in the search.
struct Plan<const P: usize> {
    curve: Curve,
    names: [&'static str; P],
    /// Which parameter is the threshold.
    threshold: Option<usize>,
    lower: [f64; P],
    upper: [f64; P],
    stride: [f64; P],
    /// Starts; the first parameter is the logarithm of the scale where `scaled`, and is replaced by the best.
    starts: Vec<[f64; P]>,
    scaled: bool,
    /// Whether a minimum may lie with the threshold exactly at a drive.
    kinked: bool,
    at: fn(f64, &[f64; P]) -> (f64, [f64; P]),
    chart: fn([f64; P]) -> Chart,
    /// Natural values of the parameters.
    natural: fn(&[f64; P]) -> [f64; P],
}

struct Problem<'a, const P: usize> {
    levels: &'a Levels,
    at: fn(f64, &[f64; P]) -> (f64, [f64; P]),
}

impl<const P: usize> LeastSquares<P> for Problem<'_, P> {
    fn accumulate(&self, parameters: &[f64; P], sums: &mut NormalSums<P>) {
        let l = self.levels;
        sums.cost = l.within;
        for ((drive, rate), root) in l.drives.iter().zip(&l.rates).zip(&l.root_weights) {
            let (fitted, slopes) = (self.at)(*drive, parameters);
            sums.add(root * (rate - fitted), &slopes.map(|s| root * s));
        }
    }
}

impl<'a> Ground<'a> {
    fn new(levels: &'a Levels, peak: f64, leave_out: bool) -> Self {
        let (lowest, highest) = (levels.drives[0], levels.drives[levels.drives.len() - 1]);
        let range = highest - lowest;
        let first = |fraction: f64| {
            levels
                .rates
                .iter()
                .position(|r| *r > fraction * peak)
                .unwrap_or(0)
        };
        // From two levels below the first rate to the level of half the peak.
        let (from, to) = (first(0.0).saturating_sub(2), first(0.5).max(1));
        let middles: Vec<f64> = levels.drives[from..=to]
            .windows(2)
            .map(|pair| 0.5 * (pair[0] + pair[1]))
            .collect();
        let every = middles.len().div_ceil(THRESHOLDS).max(1);
        let mut between: Vec<f64> = middles.into_iter().step_by(every).collect();
        if levels.rates[0] > 0.0 {
            between.extend(BELOW.map(|below| lowest - below * range));
        }
        let at_drives = levels.drives[from..to].to_vec();
        Self {
            levels,
            peak,
            range,
            lowest,
            highest,
            between,
            at_drives,
            leave_out,
        }
    }

    fn scale_bounds(&self) -> [f64; 2] {
        WIDE.map(|w| (w * self.peak).ln())
    }

    fn width_bounds(&self) -> [f64; 2] {
        WIDE.map(|w| (w * self.range).ln())
    }

    fn threshold_bounds(&self) -> [f64; 2] {
        [self.lowest - THRESHOLD_BELOW * self.range, self.highest]
    }

    fn thresholds(&self) -> impl Iterator<Item = f64> + '_ {
        self.between.iter().chain(&self.at_drives).copied()
    }

    fn hyperbola(&self) -> RivalFit {
        let (scale, width, threshold) = (self.scale_bounds(), self.width_bounds(), self.threshold_bounds());
        let mut starts = Vec::new();
        for t in self.thresholds() {
            starts.extend(WIDTHS.map(|w| [0.0, (w * (self.highest - t)).ln(), t]));
        }
        self.search(&Plan {
            curve: Curve::Hyperbola,
            names: ["max_rate", "half_rise", "threshold"],
            threshold: Some(2),
            lower: [scale[0], width[0], threshold[0]],
            upper: [scale[1], width[1], threshold[1]],
            stride: [1.0, 1.0, 0.25 * self.range],
            starts,
            scaled: true,
            kinked: false,
            at: |drive, p| {
                let at = hyperbola(drive, p);
                (at.rate, at.derivatives)
            },
            chart: Chart::Hyperbola,
            natural: |p| [p[0].exp(), p[1].exp(), p[2]],
        })
    }

    fn ramp(&self) -> RivalFit {
        let threshold = self.threshold_bounds();
        let gain = WIDE.map(|w| (w * self.peak / self.range).ln());
        self.search(&Plan {
            curve: Curve::Ramp,
            names: ["gain", "threshold"],
            threshold: Some(1),
            lower: [gain[0], threshold[0]],
            upper: [gain[1], threshold[1]],
            stride: [1.0, 0.25 * self.range],
            starts: self.thresholds().map(|t| [0.0, t]).collect(),
            scaled: true,
            kinked: false,
            at: ramp,
            chart: Chart::Ramp,
            natural: |p| [p[0].exp(), p[1]],
        })
    }

    fn square_root(&self) -> RivalFit {
        let threshold = self.threshold_bounds();
        let scale = WIDE.map(|w| (w * self.peak / self.range.sqrt()).ln());
        self.search(&Plan {
            curve: Curve::SquareRoot,
            names: ["scale", "threshold"],
            threshold: Some(1),
            lower: [scale[0], threshold[0]],
            upper: [scale[1], threshold[1]],
            stride: [1.0, 0.25 * self.range],
            starts: self.thresholds().map(|t| [0.0, t]).collect(),
            scaled: true,
            kinked: true,
            at: square_root,
            chart: Chart::SquareRoot,
            natural: |p| [p[0].exp(), p[1]],
        })
    }

    fn logistic(&self) -> RivalFit {
        let (scale, width) = (self.scale_bounds(), self.width_bounds());
        let mut starts = Vec::new();
        for part in [0.1, 0.3, 0.5, 0.7, 1.0, 2.0] {
            let middle = self.lowest + part * self.range;
            starts.extend(WIDTHS.map(|w| [0.0, middle, (0.5 * w * self.range).ln()]));
        }
        self.search(&Plan {
            curve: Curve::Logistic,
            names: ["max_rate", "middle", "width"],
            threshold: None,
            lower: [scale[0], self.lowest - 10.0 * self.range, width[0]],
            upper: [scale[1], self.highest + 10.0 * self.range, width[1]],
            stride: [1.0, 0.25 * self.range, 1.0],
            starts,
            scaled: true,
            kinked: false,
            at: logistic,
            chart: Chart::Logistic,
            natural: |p| [p[0].exp(), p[1], p[2].exp()],
        })
    }

    fn hill(&self) -> RivalFit {
        let (scale, width, threshold) = (self.scale_bounds(), self.width_bounds(), self.threshold_bounds());
        let exponent = EXPONENT_BOUNDS.map(f64::ln);
        let mut starts = Vec::new();
        for t in self.thresholds() {
            for n in EXPONENTS {
                starts.extend(
                    WIDTHS[1..]
                        .iter()
                        .map(|w| [0.0, (w * (self.highest - t)).ln(), t, n.ln()]),
                );
            }
        }
        self.search(&Plan {
            curve: Curve::Hill,
            names: ["max_rate", "half_rise", "threshold", "exponent"],
            threshold: Some(2),
            lower: [scale[0], width[0], threshold[0], exponent[0]],
            upper: [scale[1], width[1], threshold[1], exponent[1]],
            stride: [1.0, 1.0, 0.25 * self.range, 0.5],
            starts,
            scaled: true,
            kinked: true,
            at: hill,
            chart: Chart::Hill,
            natural: |p| [p[0].exp(), p[1].exp(), p[2], p[3].exp()],
        })
    }

    fn refractory_integrator(&self) -> Result<RivalFit, NoRival> {
        let l = self.levels;
        if !l.drives.iter().zip(&l.rates).any(|(d, r)| *d > 0.0 && *r > 0.0) {
            return Err(NoRival::NoPositiveDrive);
        }
        let least = 1e-6 * self.highest;
        let mut starts = Vec::new();
        let first = l
            .drives
            .iter()
            .copied()
            .find(|d| *d > 0.0)
            .unwrap_or(self.highest);
        let close = [0.02, 0.3, 0.9].map(|part| part * first);
        for t in self.thresholds().filter(|t| *t > least).chain(close) {
            // 1/rate = t_ref + tau L is a straight line in L.
            let (mut s, mut sx, mut sy, mut sxx, mut sxy) = (0.0, 0.0, 0.0, 0.0, 0.0);
            for ((d, r), root) in l.drives.iter().zip(&l.rates).zip(&l.root_weights) {
                if *d > t && *r > 0.0 {
                    let (x, y, w) = ((t / (d - t)).ln_1p(), 1.0 / r, (root * r * r).powi(2));
                    (s, sx, sy) = (s + w, sx + w * x, sy + w * y);
                    (sxx, sxy) = (sxx + w * x * x, sxy + w * x * y);
                }
            }
            let slope = (s * sxy - sx * sy) / (s * sxx - sx * sx);
            let free = if slope.is_finite() && slope > 0.0 {
                slope
            } else {
                sy / sx
            };
            let t_ref = (sy - free * sx) / s;
            let (tau, t_ref) = if t_ref >= 0.0 {
                (free, t_ref)
            } else {
                (sy / sx, 0.0)
            };
            if tau.is_finite() && tau > 0.0 && t_ref.is_finite() {
                starts.push([tau.ln(), t_ref, t]);
            }
        }
        let tau = [1e-6 / self.peak, 1e6 / self.peak].map(f64::ln);
        Ok(self.search(&Plan {
            curve: Curve::RefractoryIntegrator,
            names: ["tau", "t_ref", "threshold"],
            threshold: Some(2),
            lower: [tau[0], 0.0, least],
            upper: [tau[1], 1e3 / self.peak, self.highest],
            stride: [1.0, 0.5 / self.peak, 0.25 * self.range],
            starts,
            scaled: false,
            kinked: true,
            at: refractory_integrator,
            chart: Chart::RefractoryIntegrator,
            natural: |p| [p[0].exp(), p[1], p[2]],
        }))
    }

    /// Ranks the starts, follows the best and takes the lowest minimum.
    fn search<const P: usize>(&self, plan: &Plan<P>) -> RivalFit {
        let l = self.levels;
        let problem = Problem {
            levels: l,
            at: plan.at,
        };
        let options = SolverOptions {
            lower: plan.lower,
            upper: plan.upper,
            stride: plan.stride,
            decrease_tolerance: 1e-11,
            step_tolerance: 1e-12,
            max_iterations: 200,
            ..SolverOptions::default()
        };
        let held_at_drive = |p: &[f64; P]| {
            plan.threshold
                .is_some_and(|t| self.at_drives.iter().any(|d| *d == p[t]))
        };
        let mut ranked: Vec<(f64, [f64; P])> = plan
            .starts
            .iter()
            .filter(|start| plan.kinked || !held_at_drive(start))
            .filter_map(|start| self.scaled(plan, *start))
            .collect();
        let mut evaluations = ranked.len() as u64;
        ranked.sort_by(|a, b| a.0.total_cmp(&b.0));
        let mut best: Option<(Solution<P>, SolverOptions<P>)> = None;
        let mut left = FOLLOWED;
        for (_, start) in &ranked {
            let held = held_at_drive(start);
            let left = &mut left[usize::from(held)];
            if *left == 0 {
                continue;
            }
            *left -= 1;
            let mut options = options;
            if let (true, Some(t)) = (held, plan.threshold) {
                options.fixed[t] = true;
            }
            let found = minimise(&problem, *start, &options);
            evaluations += found.evaluations;
            if best.as_ref().is_none_or(|(b, _)| found.cost() < b.cost()) {
                best = Some((found, options));
            }
        }
        let Some((mut best, mut options)) = best else {
            return self.nothing(plan, evaluations);
        };
        // A minimum in a kink of the cost: the search ran up against the drive and cannot go on; at the drive itself it
        // is regular.
        if let (Some(t), true) = (plan.threshold, plan.kinked) {
            let from = best.parameters[t];
            let near = l
                .drives
                .iter()
                .copied()
                .min_by(|a, b| (a - from).abs().total_cmp(&(b - from).abs()));
            if let Some(drive) = near.filter(|d| !options.fixed[t] && *d >= plan.lower[t]) {
                let mut held = options;
                held.fixed[t] = true;
                let mut start = best.parameters;
                start[t] = drive;
                let found = minimise(&problem, start, &held);
                evaluations += found.evaluations;
                if found.converged && found.cost() <= best.cost() * (1.0 + 1e-12) {
                    (best, options) = (found, held);
                }
            }
        }
        self.finish(plan, &best, &options, evaluations)
    }

    /// A start with its best scale, and its cost.
    fn scaled<const P: usize>(&self, plan: &Plan<P>, mut start: [f64; P]) -> Option<(f64, [f64; P])> {
        let l = self.levels;
        let (mut cross, mut square, mut total) = (0.0, 0.0, 0.0);
        for ((drive, rate), root) in l.drives.iter().zip(&l.rates).zip(&l.root_weights) {
            let (f, y) = (root * (plan.at)(*drive, &start).0, root * rate);
            cross += f * y;
            square += f * f;
            total += y * y;
        }
        let scale = if plan.scaled { cross / square } else { 1.0 };
        if !(scale > 0.0 && scale.is_finite()) {
            return None;
        }
        if plan.scaled {
            start[0] += scale.ln();
        }
        let cost = total - 2.0 * scale * cross + scale * scale * square;
        cost.is_finite().then_some((cost, start))
    }

    fn nothing<const P: usize>(&self, plan: &Plan<P>, evaluations: u64) -> RivalFit {
        RivalFit {
            curve: plan.curve,
            values: Vec::new(),
            at_bound: Vec::new(),
            level_rates: Vec::new(),
            leverage: Vec::new(),
            cost: f64::INFINITY,
            left_out: None,
            converged: false,
            evaluations,
            chart: (plan.chart)([0.0; P]),
        }
    }

    fn finish<const P: usize>(
        &self,
        plan: &Plan<P>,
        best: &Solution<P>,
        options: &SolverOptions<P>,
        mut evaluations: u64,
    ) -> RivalFit {
        let l = self.levels;
        let mut held = *best;
        for (bound, fixed) in held.at_bound.iter_mut().zip(options.fixed) {
            *bound |= fixed;
        }
        let covariance = covariance(&held);
        let (mut level_rates, mut leverage) = (Vec::new(), Vec::new());
        for (drive, root) in l.drives.iter().zip(&l.root_weights) {
            let (rate, slopes) = (plan.at)(*drive, &best.parameters);
            level_rates.push(rate);
            if let Some(c) = &covariance {
                let mut sum = 0.0;
                for i in 0..P {
                    for j in 0..P {
                        sum += slopes[i] * c[i][j] * slopes[j];
                    }
                }
                leverage.push((sum * root * root).clamp(0.0, 1.0));
            }
        }
        let left_out = (self.leave_out && best.converged).then(|| {
            leave_one_level_out(l, best, options, plan.at, |levels, start, options| {
                minimise(&Problem { levels, at: plan.at }, start, options)
            })
        });
        evaluations += left_out.as_ref().map_or(0, |left| left.evaluations);
        let natural = (plan.natural)(&best.parameters);
        RivalFit {
            curve: plan.curve,
            values: plan.names.into_iter().zip(natural).collect(),
            at_bound: (0..P)
                .filter(|i| best.at_bound[*i] && Some(*i) != plan.threshold)
                .map(|i| plan.names[i])
                .collect(),
            level_rates,
            leverage,
            cost: best.cost(),
            left_out,
            converged: best.converged,
            evaluations,
            chart: (plan.chart)(best.parameters),
        }
    }
}
