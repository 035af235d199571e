//! The fit of any rate function to the points of one response: the rivals by a search of their own, the main one by
//! [`main_fit`].
//!
//! Every rival is searched in units of its own cell (drives over their range, rates over the peak), with the same
//! weights and the same equation for the extra variance as the main fit.
//!
//! A curve with a kink at a free threshold has a cost that is smooth between neighbouring drives only, with a local
//! minimum in many of these gaps and some minima exactly on a drive, where the slope may even be infinite. So each gap
//! is a bounded problem of its own; one start or more lies in every gap that can hold the minimum, the best few are
//! followed, and a search that ends on a drive is continued on its other side.

use super::extra_sd::extra_variance;
use super::main_fit::{self, MainFit, Scatter, covariance};
use super::objective::{Chart, Levels, Point, evaluate};
use super::rival_starts::{Start, Starts};
use super::solver::{LeastSquares, NormalSums, Solution, SolverOptions, minimise};
use crate::curve::hill::Hill;
use crate::curve::hyperbola::GainCeiling;
use crate::curve::logistic::Logistic;
use crate::curve::ramp::Ramp;
use crate::curve::refractory_integrator::RefractoryIntegrator;
use crate::curve::smoothed_ramp::SmoothedRamp;
use crate::curve::square_root::SquareRoot;
use crate::curve::{Curve, RateFunction, Units};

/// Most parameters that a curve has.
pub const MOST_PARAMETERS: usize = 4;

/// Starts, in different gaps where there are gaps, that are followed to a local minimum.
const STARTS_FOLLOWED: usize = 5;

/// Rise of the cost beyond twice the best above which a gap holds no start worth following.
const HOPELESS: f64 = 10.0;

/// A rough search that ends above the best by more than this factor is not taken to its minimum.
const PROMISING: f64 = 1.15;

/// Times that the search may switch to another local minimum once the weights have changed.
const SWITCHES: usize = 6;

/// Rounds of curve and extra variance before the fit gives up.
const ROUNDS: usize = 200;

/// The extra variance has settled once it moves by less than this fraction of the total variance.
const SETTLED: f64 = 1e-7;

/// Why a curve has no fit to a cell.
#[derive(Clone, Debug, PartialEq, thiserror::Error)]
pub enum Unfitted {
    /// No more points than parameters.
    #[error("{points} steps; {curve} has {} parameters and needs {needed} steps", needed - 1)]
    TooFewPoints {
        /// The curve.
        curve: Curve,
        /// Points there are.
        points: usize,
        /// Points it takes.
        needed: usize,
    },
    /// Fewer distinct drives than parameters.
    #[error("{levels} distinct drives; {curve} has {needed} parameters and needs as many")]
    TooFewLevels {
        /// The curve.
        curve: Curve,
        /// Distinct drives there are.
        levels: usize,
        /// Distinct drives it takes.
        needed: usize,
    },
    /// All rates are zero.
    #[error("no step has a rate above zero")]
    NoRate,
    /// The curve is defined for positive drives only, and too few are.
    #[error("{curve} counts drive from rest and needs {needed} distinct drives above zero, of which there are {levels}")]
    TooFewPositiveDrives {
        /// The curve.
        curve: Curve,
        /// Distinct positive drives.
        levels: usize,
        /// Distinct positive drives it takes.
        needed: usize,
    },
    /// A number that is not finite, a standard error that is not positive, or scales that no arithmetic holds.
    #[error("drive {drive}, rate {rate} Hz, standard error {se} Hz: not a point that a curve can be fitted to")]
    BadPoint {
        /// Drive.
        drive: f64,
        /// Rate, Hz.
        rate: f64,
        /// Standard error, Hz.
        se: f64,
    },
    /// The points are not sorted by drive.
    #[error("the points are not in order of drive")]
    NotSorted,
    /// Search and extra variance did not come to rest together.
    #[error("the search for the best {curve} did not settle in {evaluations} passes over the points")]
    NotSettled {
        /// The curve.
        curve: Curve,
        /// Passes over the points.
        evaluations: u64,
    },
}

impl Unfitted {
    /// Passes over the points that were made before the curve was given up.
    pub fn evaluations(&self) -> u64 {
        match self {
            Self::NotSettled { evaluations, .. } => *evaluations,
            _ => 0,
        }
    }
}

/// A rate function fitted to the points of one response.
#[derive(Clone, Debug)]
pub struct RivalFit {
    /// Which curve.
    pub curve: Curve,
    /// Estimates in natural units, in the order of [`Curve::parameter_names`]; infinite where the best curve has no
    /// ceiling or no leak.
    pub values: Vec<f64>,
    /// Names of the parameters that rest on a limit of the search, infinite ones included. A threshold that rests on
    /// one of the drives, where the cost has a kink, is not among them.
    pub at_bound: Vec<&'static str>,
    /// Fitted rate of each point, Hz.
    pub fitted: Vec<f64>,
    /// Leverage of its level for each point: the share of the level's own mean in its fitted value, 0 to 1. Empty
    /// where the points do not determine the parameters. For a threshold that rests on a drive it is that of the
    /// curve with the threshold held.
    pub leverage: Vec<f64>,
    /// Extra variance, Hz^2.
    pub extra_variance: f64,
    /// Weighted sum of squares, sum (rate - curve)^2/(se^2 + extra variance).
    pub cost: f64,
    /// Whether search and extra variance came to rest. Always so for a rival; the main fit may not have.
    pub converged: bool,
    /// Passes of the curve over the levels.
    pub evaluations: u64,
    /// Chart parameters (unused ones zero), in `units`.
    pub(super) chart: [f64; MOST_PARAMETERS],
    pub(super) units: Units,
    /// Settings of the last search, for refits from here.
    pub(super) held: [bool; MOST_PARAMETERS],
    pub(super) main: Option<SolverOptions<4>>,
}

impl RivalFit {
    /// Names and estimates, in natural units.
    pub fn parameters(&self) -> impl Iterator<Item = (&'static str, f64)> + '_ {
        self.curve
            .parameter_names()
            .iter()
            .copied()
            .zip(self.values.iter().copied())
    }

    /// Fitted rate in Hz at any drive.
    pub fn rate_at(&self, drive: f64) -> f64 {
        fn at<const P: usize, R: RateFunction<P>>(fit: &RivalFit, drive: f64) -> f64 {
            let parameters: [f64; P] = std::array::from_fn(|i| fit.chart[i]);
            R::new(&parameters).at(drive / fit.units.drive).rate * fit.units.rate
        }
        match self.curve {
            Curve::SmoothedHyperbola => {
                let mut rate = f64::NAN;
                evaluate(Chart::Ceiling, &self.chart, &[drive], |_, f, _| rate = f);
                rate
            }
            Curve::Hyperbola => at::<3, GainCeiling>(self, drive),
            Curve::SmoothedRamp => at::<3, SmoothedRamp>(self, drive),
            Curve::Ramp => at::<2, Ramp>(self, drive),
            Curve::Logistic => at::<3, Logistic>(self, drive),
            Curve::Hill => at::<4, Hill>(self, drive),
            Curve::RefractoryIntegrator => at::<3, RefractoryIntegrator>(self, drive),
            Curve::SquareRoot => at::<2, SquareRoot>(self, drive),
        }
    }

    /// The main fit in the same form. `points` are those it was fitted to.
    pub fn of_main(points: &[Point], main: &MainFit) -> Self {
        let p = main.solution.parameters;
        let mut at_level = vec![(0.0, 0.0); main.levels.drives.len()];
        let covariance = main.covariance();
        evaluate(Chart::Ceiling, &p, &main.levels.drives, |i, rate, derivatives| {
            let variance = covariance.map_or(0.0, |c| spread(&c, derivatives));
            at_level[i] = (rate, variance * main.levels.root_weights[i].powi(2));
        });
        let held = main.solution.at_bound;
        let names = Curve::SmoothedHyperbola.parameter_names();
        // The chart's (gain, ceiling) are max rate and half-rise: a gain at its limit is told as the half-rise's.
        let of_chart = [names[1], names[0], names[2], names[3]];
        let (fitted, leverage): (Vec<f64>, Vec<f64>) = main.levels.level_of_point().map(|l| at_level[l]).unzip();
        debug_assert_eq!(fitted.len(), points.len());
        Self {
            curve: Curve::SmoothedHyperbola,
            values: vec![1.0 / p[1], 1.0 / (p[0].exp() * p[1]), p[2], p[3].exp()],
            at_bound: (0..4).filter(|i| held[*i]).map(|i| of_chart[i]).collect(),
            fitted,
            leverage: if covariance.is_some() { leverage } else { Vec::new() },
            extra_variance: main.extra_variance,
            cost: main.solution.cost(),
            converged: main.converged,
            evaluations: main.evaluations,
            chart: p,
            units: Units { drive: 1.0, rate: 1.0 },
            held,
            main: Some(main.options),
        }
    }
}

/// Fits `curve` to `points`, which must be sorted by drive; the extra variance estimated with it or held, as in
/// [`main_fit::fit`].
///
/// # Errors
/// In words why the curve has no fit: too few points or drives for its parameters, no rate above zero, points that are
/// not numbers or not in order, or a search that did not settle.
pub fn fit_rival(curve: Curve, points: &[Point], scatter: Scatter) -> Result<RivalFit, Unfitted> {
    match curve {
        Curve::SmoothedHyperbola => {
            check(curve, points)?;
            let main = main_fit::fit(points, scatter).ok_or(Unfitted::NoRate)?;
            if main.converged {
                Ok(RivalFit::of_main(points, &main))
            } else {
                Err(Unfitted::NotSettled {
                    curve,
                    evaluations: main.evaluations,
                })
            }
        }
        Curve::Hyperbola => fit_as::<3, GainCeiling>(points, scatter),
        Curve::SmoothedRamp => fit_as::<3, SmoothedRamp>(points, scatter),
        Curve::Ramp => fit_as::<2, Ramp>(points, scatter),
        Curve::Logistic => fit_as::<3, Logistic>(points, scatter),
        Curve::Hill => fit_as::<4, Hill>(points, scatter),
        Curve::RefractoryIntegrator => fit_as::<3, RefractoryIntegrator>(points, scatter),
        Curve::SquareRoot => fit_as::<2, SquareRoot>(points, scatter),
    }
}

/// What every curve asks of the points; the units of the search.
fn check(curve: Curve, points: &[Point]) -> Result<Units, Unfitted> {
    let (needed, parameters) = (curve.fewest_points(), curve.parameters());
    if points.len() < needed {
        return Err(Unfitted::TooFewPoints {
            curve,
            points: points.len(),
            needed,
        });
    }
    let peak = points.iter().map(|p| p.rate).fold(0.0, f64::max);
    let lowest = points.iter().map(|p| p.drive).fold(f64::INFINITY, f64::min);
    let highest = points.iter().map(|p| p.drive).fold(f64::NEG_INFINITY, f64::max);
    let range = highest - lowest;
    let sane = |value: f64| value.abs() < 1e100;
    for p in points {
        let relative = if peak > 0.0 { p.se / peak } else { p.se };
        if !(sane(p.drive) && sane(p.rate) && relative > 1e-100 && relative < 1e100) {
            return Err(Unfitted::BadPoint {
                drive: p.drive,
                rate: p.rate,
                se: p.se,
            });
        }
    }
    if !points.is_sorted_by(|a, b| a.drive <= b.drive) {
        return Err(Unfitted::NotSorted);
    }
    let distinct = |above: f64| {
        points
            .chunk_by(|a, b| a.drive == b.drive)
            .filter(|level| level[0].drive > above)
            .count()
    };
    let levels = distinct(f64::NEG_INFINITY);
    // Drives so close together that their ratio to the range is lost are one drive.
    if levels < parameters || !(range > 1e-100) || !(range > 1e-12 * lowest.abs().max(highest.abs())) {
        return Err(Unfitted::TooFewLevels {
            curve,
            levels,
            needed: parameters,
        });
    }
    if !(peak > 1e-100) {
        return Err(Unfitted::NoRate);
    }
    if curve == Curve::RefractoryIntegrator && distinct(0.0) < parameters {
        return Err(Unfitted::TooFewPositiveDrives {
            curve,
            levels: distinct(0.0),
            needed: parameters,
        });
    }
    Ok(Units {
        drive: range,
        rate: peak,
    })
}

/// A rival as the search needs it.
pub(super) trait Rival<const P: usize>: RateFunction<P> + Starts<P> {}

impl<const P: usize, R: RateFunction<P> + Starts<P>> Rival<P> for R {}

fn fit_as<const P: usize, R: Rival<P>>(points: &[Point], scatter: Scatter) -> Result<RivalFit, Unfitted> {
    let units = check(R::CURVE, points)?;
    let scaled = scale_points(points, units);
    let first = match scatter {
        // Only ranks the starts and is replaced at once.
        Scatter::Estimated => 0.05_f64.powi(2),
        Scatter::Held(variance) => variance / units.rate.powi(2),
    };
    let levels = Levels::new(&scaled, first);
    let mut search = Search::<P> {
        estimated: matches!(scatter, Scatter::Estimated),
        points: &scaled,
        options: options::<P, R>(&levels),
        variance: first,
        levels,
        evaluations: 0,
        fitted: Vec::new(),
        residuals: Vec::new(),
    };
    let not_settled = |evaluations| Unfitted::NotSettled {
        curve: R::CURVE,
        evaluations,
    };
    let Some((solution, converged)) = search.run::<R>() else {
        return Err(not_settled(search.evaluations));
    };
    if !converged {
        return Err(not_settled(search.evaluations));
    }
    Ok(search.report::<R>(&solution, units))
}

/// Drives over their range, rates and errors over the peak.
pub(super) fn scale_points(points: &[Point], units: Units) -> Vec<Point> {
    points
        .iter()
        .map(|p| Point {
            drive: p.drive / units.drive,
            rate: p.rate / units.rate,
            se: p.se / units.rate,
        })
        .collect()
}

/// Limits and stopping rules of a search without regard to gaps, in units of the cell.
pub(super) fn options<const P: usize, R: Rival<P>>(levels: &Levels) -> SolverOptions<P> {
    let (lowest, highest) = ends(levels);
    let (lower, upper) = R::bounds(lowest, highest);
    SolverOptions {
        lower,
        upper,
        decrease_tolerance: 1e-11,
        step_tolerance: 1e-12,
        max_iterations: 200,
        ..SolverOptions::default()
    }
}

/// Lowest and highest drive.
pub(super) fn ends(levels: &Levels) -> (f64, f64) {
    match (levels.drives.first(), levels.drives.last()) {
        (Some(first), Some(last)) => (*first, *last),
        _ => (0.0, 0.0),
    }
}

/// The weighted sum of squares of one curve over levels.
pub(super) struct Cost<'a, R> {
    pub(super) levels: &'a Levels,
    pub(super) curve: std::marker::PhantomData<R>,
}

impl<'a, R> Cost<'a, R> {
    pub(super) fn new(levels: &'a Levels) -> Self {
        Self {
            levels,
            curve: std::marker::PhantomData,
        }
    }
}

impl<R> Cost<'_, R> {
    #[inline(always)]
    fn pass<const P: usize>(&self, parameters: &[f64; P], sums: &mut NormalSums<P>)
    where
        R: RateFunction<P>,
    {
        let l = self.levels;
        sums.cost = l.within;
        let curve = R::new(parameters);
        for ((drive, rate), w) in l.drives.iter().zip(&l.rates).zip(&l.root_weights) {
            let at = curve.at(*drive);
            sums.add(w * (rate - at.rate), &at.derivatives.map(|d| w * d));
        }
    }

    /// A parameter that changes nothing here (a noise SD far below the spacing of the drives, a threshold below an all
    /// but flat curve) would make the curvature singular and no step could be judged. Neither the cost nor its gradient
    /// is touched, so the minimum stays where it is.
    #[inline(always)]
    fn support<const P: usize>(&self, sums: &mut NormalSums<P>) {
        let floor = CURVATURE_FLOOR * self.levels.root_weights.iter().map(|w| w * w).sum::<f64>();
        for i in 0..P {
            sums.curvature[i][i] += floor;
        }
    }
}

impl<const P: usize, R: RateFunction<P>> LeastSquares<P> for Cost<'_, R> {
    #[inline]
    fn accumulate(&self, parameters: &[f64; P], sums: &mut NormalSums<P>) {
        self.pass(parameters, sums);
        self.support(sums);
    }
}

/// Least curvature of a parameter, as a fraction of what it has where one unit of it changes every rate by the peak.
const CURVATURE_FLOOR: f64 = 1e-13;

/// The gap (index of the drive above it) in which a threshold lies; one that is on a drive belongs to the gap above.
fn gap_of(drives: &[f64], threshold: f64) -> usize {
    drives.partition_point(|d| *d <= threshold).min(drives.len() - 1)
}

/// A threshold within one gap, searched as t = ln(drive above the gap - threshold): the slope of a curve that rises
/// infinitely fast is finite in t, and the valley of a steep curve, whose gain and threshold keep the rate of one
/// drive, is straight.
#[derive(Clone, Copy)]
struct Gap {
    index: usize,
    bottom: f64,
    top: f64,
    /// Limits of t.
    t: [f64; 2],
}

/// Closest that a threshold comes to the drive above it, in gaps; on it, it belongs to the next gap.
const CLOSEST: f64 = 1e-9;

impl Gap {
    /// Gap number `number` within `limits`; `None` where they leave nothing of it.
    fn new(index: usize, limits: [f64; 2], drives: &[f64], number: usize) -> Option<Self> {
        let bottom = if number > 0 { limits[0].max(drives[number - 1]) } else { limits[0] };
        let top = limits[1].min(drives[number]);
        (top > bottom).then(|| Self {
            index,
            bottom,
            top,
            t: [(CLOSEST * (top - bottom)).ln(), (top - bottom).ln()],
        })
    }

    fn threshold(&self, t: f64) -> f64 {
        if t >= self.t[1] {
            self.bottom
        } else {
            (self.top - t.exp()).max(self.bottom)
        }
    }

    /// t of a threshold; one on the drive above, where t has no value, starts a little below it.
    fn t_of(&self, threshold: f64) -> f64 {
        if threshold <= self.bottom {
            return self.t[1];
        }
        let below = self.top - threshold;
        if below > 0.0 {
            below.ln().clamp(self.t[0], self.t[1])
        } else {
            self.t[1] - 7.0
        }
    }
}

/// A search allowed this many iterations that still has not converged crawls along a bent valley.
const CRAWLING: u64 = 60;

/// The cost with the threshold replaced by t.
struct InGap<'a, 'b, R> {
    cost: &'a Cost<'b, R>,
    gap: Gap,
}

impl<const P: usize, R: RateFunction<P>> LeastSquares<P> for InGap<'_, '_, R> {
    #[inline]
    fn accumulate(&self, parameters: &[f64; P], sums: &mut NormalSums<P>) {
        let index = self.gap.index;
        let mut natural = *parameters;
        natural[index] = self.gap.threshold(parameters[index]);
        self.cost.pass(&natural, sums);
        let slope = -parameters[index].exp();
        sums.gradient[index] *= slope;
        for i in 0..P {
            if i < index {
                sums.curvature[index][i] *= slope;
            } else if i == index {
                sums.curvature[i][i] *= slope * slope;
            } else {
                sums.curvature[i][index] *= slope;
            }
        }
        self.cost.support(sums);
    }
}

/// Down to the minimum within one gap. The solution is in the chart of the curve.
fn minimise_in_gap<const P: usize, R: Rival<P>>(
    cost: &Cost<'_, R>,
    gap: Gap,
    start: [f64; P],
    options: &SolverOptions<P>,
    evaluations: &mut u64,
) -> Solution<P> {
    let index = gap.index;
    let mut inside = *options;
    if !R::INFINITE_SLOPE {
        (inside.lower[index], inside.upper[index]) = (gap.bottom, gap.top);
        let found = minimise(cost, start, &inside);
        *evaluations += found.evaluations;
        // A search that its options cut short has not failed.
        if found.converged || options.max_iterations < CRAWLING {
            return found;
        }
    }
    (inside.lower[index], inside.upper[index]) = (gap.t[0], gap.t[1]);
    let mut from = start;
    from[index] = gap.t_of(start[index]);
    let mut found = minimise(&InGap { cost, gap }, from, &inside);
    found.parameters[index] = gap.threshold(found.parameters[index]);
    // Sums by the threshold itself.
    found.sums = NormalSums::default();
    cost.accumulate(&found.parameters, &mut found.sums);
    found.sums.curvature = found.sums.symmetric();
    *evaluations += found.evaluations + 1;
    found
}

/// From `start` down to a minimum: the threshold of a curve with a kink is kept between two drives, and where the
/// search ends on one of them it goes on in the next gap for as long as that lowers the cost. `drives` are those that
/// have weight.
pub(super) fn descend<const P: usize, R: Rival<P>>(
    cost: &Cost<'_, R>,
    drives: &[f64],
    start: [f64; P],
    options: &SolverOptions<P>,
    evaluations: &mut u64,
) -> Solution<P> {
    let Some(index) = R::THRESHOLD else {
        let found = minimise(cost, start, options);
        *evaluations += found.evaluations;
        return found;
    };
    let limits = [options.lower[index], options.upper[index]];
    let mut number = gap_of(drives, start[index]);
    let Some(mut gap) = Gap::new(index, limits, drives, number) else {
        let found = minimise(cost, start, options);
        *evaluations += found.evaluations;
        return found;
    };
    let mut best = minimise_in_gap(cost, gap, start, options, evaluations);
    // Each move lowers the cost or finishes an unfinished search; the gaps bound their number.
    for _ in 0..drives.len() {
        let at = best.parameters[index];
        let on_top = gap.top - at <= 1e-6 * (gap.top - gap.bottom);
        let (next, from) = if on_top && number + 1 < drives.len() {
            (number + 1, gap.top)
        } else if at <= gap.bottom && number > 0 {
            (number - 1, gap.bottom)
        } else {
            break;
        };
        let Some(next_gap) = Gap::new(index, limits, drives, next) else {
            break;
        };
        let mut start = best.parameters;
        start[index] = from;
        let found = minimise_in_gap(cost, next_gap, start, options, evaluations);
        let margin = 1e-12 * best.cost();
        // Seen from above, the side on which the drive is silent, a kink is a minimum or is none.
        let settles = next > number && found.converged && !best.converged && found.cost() <= best.cost() + margin;
        if !(found.cost() < best.cost() - margin || settles) {
            break;
        }
        (best, gap, number) = (found, next_gap, next);
    }
    best
}

struct Search<'a, const P: usize> {
    estimated: bool,
    points: &'a [Point],
    options: SolverOptions<P>,
    variance: f64,
    levels: Levels,
    evaluations: u64,
    fitted: Vec<f64>,
    residuals: Vec<f64>,
}

impl<const P: usize> Search<'_, P> {
    fn descend<R: Rival<P>>(&mut self, start: [f64; P], options: &SolverOptions<P>) -> Solution<P> {
        descend(
            &Cost::<R>::new(&self.levels),
            &self.levels.drives,
            start,
            options,
            &mut self.evaluations,
        )
    }

    /// The best minimum and whether it came to rest; `None` without any start.
    fn run<R: Rival<P>>(&mut self) -> Option<(Solution<P>, bool)> {
        let options = self.options;
        let mut followed: Vec<Solution<P>> = Vec::new();
        self.follow::<R>(&mut followed);
        let mut best = *followed.first()?;
        if !self.estimated {
            for i in 0..followed.len() {
                if followed[i].cost() < best.cost() * PROMISING {
                    let found = self.descend::<R>(followed[i].parameters, &options);
                    if found.cost() < best.cost() || (i == 0 && found.cost() <= best.cost()) {
                        best = found;
                    }
                }
            }
            return Some((best, best.converged));
        }
        // Settled minima with the likelihood of their residuals, each at its own weights.
        let mut settled: Vec<(f64, Solution<P>, f64, bool)> = Vec::new();
        let mut converged = false;
        for _ in 0..SWITCHES {
            converged = self.settle::<R>(&mut best);
            if settled.iter().any(|(_, s, _, _)| same(s, &best)) {
                // Two minima, each the better one at the other's weights: the likelier of them stays.
                let (_, solution, variance, rested) = settled
                    .iter()
                    .max_by(|a, b| a.0.total_cmp(&b.0))
                    .map(|(l, s, v, r)| (*l, *s, *v, *r))?;
                self.variance = variance;
                self.levels.reweigh(self.points, variance);
                return Some((solution, rested));
            }
            let spread: f64 = self.points.iter().map(|p| (p.se * p.se + self.variance).ln()).sum();
            settled.push((-0.5 * (best.cost() + spread), best, self.variance, converged));
            // The settled weights may favour another minimum.
            followed.retain(|f| !same(f, &best));
            followed.push(best);
            self.follow::<R>(&mut followed);
            let mut improved = false;
            for i in 0..followed.len() {
                if same(&followed[i], &best) || !(followed[i].cost() < best.cost() * PROMISING) {
                    continue;
                }
                let found = self.descend::<R>(followed[i].parameters, &options);
                followed[i] = found;
                if found.cost() < best.cost() * (1.0 - 1e-8) - 1e-14 {
                    best = found;
                    improved = true;
                }
            }
            if !improved {
                break;
            }
        }
        Some((best, converged))
    }

    /// Roughly to a minimum from every start that leads to none of those `known`, at the present weights; all of them
    /// in order of cost.
    fn follow<R: Rival<P>>(&mut self, known: &mut Vec<Solution<P>>) {
        let rough = SolverOptions {
            decrease_tolerance: 3e-3,
            max_iterations: 12,
            ..self.options
        };
        for f in known.iter_mut() {
            // Costs at the present weights.
            let mut sums = NormalSums::default();
            Cost::<R>::new(&self.levels).accumulate(&f.parameters, &mut sums);
            sums.curvature = sums.symmetric();
            f.sums = sums;
            self.evaluations += 1;
        }
        let again = !known.is_empty();
        if again && R::THRESHOLD.is_none() {
            // Without a kink the weights do not make new minima.
            known.sort_by(|a, b| a.cost().total_cmp(&b.cost()));
            return;
        }
        let drives = &self.levels.drives;
        let met: Vec<usize> = match R::THRESHOLD {
            Some(index) => known.iter().map(|f| gap_of(drives, f.parameters[index])).collect(),
            None => Vec::new(),
        };
        for start in self.starts::<R>() {
            let in_known_gap = |index: usize| met.contains(&gap_of(&self.levels.drives, start.parameters[index]));
            if again && R::THRESHOLD.is_some_and(in_known_gap) {
                continue;
            }
            let found = self.inside::<R>(start.parameters, &rough);
            if !known.iter().any(|f| same(f, &found)) {
                known.push(found);
            }
        }
        known.sort_by(|a, b| a.cost().total_cmp(&b.cost()));
        known.truncate(2 * STARTS_FOLLOWED);
    }

    /// Down to the minimum within the gap of `start`.
    fn inside<R: Rival<P>>(&mut self, start: [f64; P], options: &SolverOptions<P>) -> Solution<P> {
        let drives = &self.levels.drives;
        let cost = Cost::<R>::new(&self.levels);
        let gap = R::THRESHOLD.and_then(|index| {
            let limits = [options.lower[index], options.upper[index]];
            Gap::new(index, limits, drives, gap_of(drives, start[index]))
        });
        if let Some(gap) = gap {
            return minimise_in_gap(&cost, gap, start, options, &mut self.evaluations);
        }
        let found = minimise(&cost, start, options);
        self.evaluations += found.evaluations;
        found
    }

    /// The best start of each gap, or of the whole, the best few of them in order.
    fn starts<R: Rival<P>>(&self) -> Vec<Start<P>> {
        let mut all: Vec<Start<P>> = Vec::new();
        let levels = &self.levels;
        let Some(index) = R::THRESHOLD else {
            R::starts(levels, f64::NAN, &mut all);
            all.sort_by(|a, b| a.cost.total_cmp(&b.cost));
            all.truncate(STARTS_FOLLOWED);
            return all;
        };
        let (lower, upper) = (self.options.lower[index], self.options.upper[index]);
        let (mut silent, mut least) = (0.0, f64::INFINITY);
        for gap in 0..levels.drives.len() {
            if gap > 0 {
                silent += (levels.root_weights[gap - 1] * levels.rates[gap - 1]).powi(2);
            }
            // Below the threshold the curve is zero: this much cost no start in this gap or above it can avoid.
            if silent > 2.0 * least + HOPELESS {
                break;
            }
            let mut here: Vec<Start<P>> = Vec::new();
            let top = levels.drives[gap];
            if gap == 0 {
                for below in [3.0, 1.0, 0.3, 0.1, 0.02] {
                    let threshold = (top - below).max(lower);
                    if threshold < top {
                        R::starts(levels, threshold, &mut here);
                    }
                }
            } else {
                let bottom = levels.drives[gap - 1].max(lower);
                for part in R::PARTS {
                    let threshold = bottom + part * (top - bottom);
                    if top > bottom && threshold <= upper {
                        R::starts(levels, threshold, &mut here);
                    }
                }
            }
            if let Some(best) = here.into_iter().min_by(|a, b| a.cost.total_cmp(&b.cost)) {
                least = least.min(best.cost);
                all.push(best);
            }
        }
        all.sort_by(|a, b| a.cost.total_cmp(&b.cost));
        all.truncate(STARTS_FOLLOWED);
        all
    }

    /// Alternates between the curve at given weights and the extra variance at a given curve until both stand still.
    fn settle<R: Rival<P>>(&mut self, best: &mut Solution<P>) -> bool {
        let errors: Vec<f64> = self.points.iter().map(|p| p.se).collect();
        let interval_variance = errors.iter().map(|e| e * e).sum::<f64>() / errors.len() as f64;
        let degrees = (self.points.len() - P) as f64;
        let mut last_change = f64::INFINITY;
        for round in 0..ROUNDS {
            let limited = SolverOptions {
                decrease_tolerance: 1e-8,
                initial_damping: if round == 0 { 1e-4 } else { 1e-7 },
                max_iterations: if round < 3 { 3 } else { self.options.max_iterations },
                ..self.options
            };
            *best = self.inside::<R>(best.parameters, &limited);
            self.set_residuals::<R>(&best.parameters);
            let target = extra_variance(&self.residuals, &errors, degrees);
            let change = target - self.variance;
            // The sum of the changes to come, which shrink by a steady factor (Aitken); it also brings to rest a
            // minimum that hops to and fro with the weights.
            let ratio = if round > 1 {
                (change / last_change).clamp(-0.9, 0.6)
            } else {
                0.0
            };
            last_change = change;
            let step = if ratio.is_finite() { change / (1.0 - ratio) } else { change };
            self.variance = (self.variance + step).max(0.0);
            self.levels.reweigh(self.points, self.variance);
            if change.abs() <= SETTLED * (target + interval_variance) {
                let exact = SolverOptions {
                    initial_damping: 1e-7,
                    ..self.options
                };
                let here = R::THRESHOLD.map(|index| best.parameters[index]);
                *best = self.descend::<R>(best.parameters, &exact);
                let moved = R::THRESHOLD.zip(here).is_some_and(|(index, here)| {
                    gap_of(&self.levels.drives, here) != gap_of(&self.levels.drives, best.parameters[index])
                });
                // In another gap the extra variance is another.
                if !moved {
                    return best.converged;
                }
                last_change = f64::INFINITY;
            }
        }
        false
    }

    fn set_residuals<R: Rival<P>>(&mut self, parameters: &[f64; P]) {
        let curve = R::new(parameters);
        self.evaluations += 1;
        self.fitted.clear();
        self.fitted.extend(self.levels.drives.iter().map(|d| curve.at(*d).rate));
        self.residuals.clear();
        self.residuals.extend(
            self.points
                .iter()
                .zip(self.levels.level_of_point())
                .map(|(p, l)| p.rate - self.fitted[l]),
        );
    }

    fn report<R: Rival<P>>(&self, solution: &Solution<P>, units: Units) -> RivalFit {
        let levels = &self.levels;
        let p = solution.parameters;
        let curve = R::new(&p);
        let covariance = covariance(solution);
        let at_level: Vec<(f64, f64)> = levels
            .drives
            .iter()
            .zip(&levels.root_weights)
            .map(|(drive, root)| {
                let at = curve.at(*drive);
                let variance = covariance.map_or(0.0, |c| spread(&c, &at.derivatives));
                (at.rate * units.rate, variance * root * root)
            })
            .collect();
        let (fitted, leverage): (Vec<f64>, Vec<f64>) = levels.level_of_point().map(|l| at_level[l]).unzip();
        let close = |index: usize| {
            // As close below a drive as the search goes: the points ask for a jump.
            let limits = [self.options.lower[index], self.options.upper[index]];
            Gap::new(index, limits, &levels.drives, gap_of(&levels.drives, p[index]))
                .is_some_and(|gap| gap.top - p[index] <= 1.01 * CLOSEST * (gap.top - gap.bottom))
        };
        let on_limit = |i: usize| {
            p[i] <= self.options.lower[i]
                || p[i] >= self.options.upper[i]
                || (R::THRESHOLD == Some(i) && R::INFINITE_SLOPE && close(i))
        };
        let names = R::CURVE.parameter_names();
        let pad = |i: usize| if i < P { p[i] } else { 0.0 };
        RivalFit {
            curve: R::CURVE,
            values: R::natural(&p, units).to_vec(),
            at_bound: (0..P).filter(|i| on_limit(*i)).map(|i| names[R::NAMED[i]]).collect(),
            fitted,
            leverage: if covariance.is_some() { leverage } else { Vec::new() },
            extra_variance: self.variance * units.rate * units.rate,
            cost: solution.cost(),
            converged: true,
            evaluations: self.evaluations,
            chart: std::array::from_fn(pad),
            units,
            held: std::array::from_fn(|i| i < P && solution.at_bound[i]),
            main: None,
        }
    }
}

/// Whether two ends of a search are the same minimum, to what a rough search can tell.
fn same<const P: usize>(a: &Solution<P>, b: &Solution<P>) -> bool {
    let mut distance = 0.0;
    for i in 0..P {
        for j in 0..P {
            let d = (a.parameters[i] - b.parameters[i]) * (a.parameters[j] - b.parameters[j]);
            distance += d * b.sums.curvature[i][j];
        }
    }
    // A threshold on a drive carries no curvature of that drive's point: the positions must agree too.
    distance <= 1e-3 && (0..P).all(|i| (a.parameters[i] - b.parameters[i]).abs() <= 1e-2)
}

/// d' C d, never below zero.
pub(super) fn spread<const P: usize>(covariance: &[[f64; P]; P], derivatives: &[f64; P]) -> f64 {
    let mut sum = 0.0;
    for i in 0..P {
        for j in 0..P {
            sum += derivatives[i] * covariance[i][j] * derivatives[j];
        }
    }
    sum.max(0.0)
}
