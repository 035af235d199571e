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

use super::extra_sd::Settling;
use super::gaps::{Cost, Gap, Rival, descend, ends, gap_of, minimise_in_gap};
use super::main_fit::{self, MainFit, Scatter, covariance, spread};
use super::objective::{Chart, Levels, Point, evaluate};
use super::rival_starts::Start;
use super::solver::{LeastSquares, NormalSums, Solution, SolverOptions, cholesky_solve, minimise};
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
const STARTS_FOLLOWED: usize = 4;

/// The same for curves without a kink, which have fewer minima.
const SMOOTH_STARTS_FOLLOWED: usize = 3;

/// Rise of the cost beyond twice the best above which a gap holds no start worth following.
const HOPELESS: f64 = 10.0;

/// A rough search that promises no more than this factor of the best is not taken to its minimum.
const PROMISING: f64 = 1.15;

/// Times that the search may switch to another local minimum once the weights have changed.
const SWITCHES: usize = 6;

/// Rounds of curve and extra variance before the fit gives up.
const ROUNDS: usize = 200;

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
    #[error(
        "{curve} counts drive from rest and needs {needed} distinct drives above zero, of which there are {levels}"
    )]
    TooFewPositiveDrives {
        /// The curve.
        curve: Curve,
        /// Distinct positive drives.
        levels: usize,
        /// Distinct positive drives it takes.
        needed: usize,
    },
    /// A number that is not finite, a standard error that is not positive, or scales that no arithmetic holds.
    #[error(
        "drive {drive}, rate {rate} Hz, standard error {se} Hz: not a point that a curve can be fitted to"
    )]
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
        let (fitted, leverage): (Vec<f64>, Vec<f64>) =
            main.levels.level_of_point().map(|l| at_level[l]).unzip();
        debug_assert_eq!(fitted.len(), points.len());
        Self {
            curve: Curve::SmoothedHyperbola,
            values: vec![1.0 / p[1], p[0] / p[1], p[2], p[3].exp()],
            at_bound: (0..4).filter(|i| held[*i]).map(|i| of_chart[i]).collect(),
            fitted,
            leverage: if covariance.is_some() {
                leverage
            } else {
                Vec::new()
            },
            extra_variance: main.extra_variance,
            cost: main.solution.cost(),
            converged: main.converged,
            evaluations: main.evaluations,
            chart: p,
            units: Units {
                drive: 1.0,
                rate: 1.0,
            },
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
                if promised(&followed[i]) < best.cost() * PROMISING {
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
            let spread: f64 = self
                .points
                .iter()
                .map(|p| (p.se * p.se + self.variance).ln())
                .sum();
            settled.push((-0.5 * (best.cost() + spread), best, self.variance, converged));
            // The settled weights may favour another minimum.
            followed.retain(|f| !same(f, &best));
            followed.push(best);
            self.follow::<R>(&mut followed);
            let mut improved = false;
            for i in 0..followed.len() {
                if same(&followed[i], &best) || !(promised(&followed[i]) < best.cost() * PROMISING) {
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
        let met: Vec<(usize, f64)> = match R::THRESHOLD {
            Some(index) => known
                .iter()
                .map(|f| (gap_of(drives, f.parameters[index]), f.cost()))
                .collect(),
            None => Vec::new(),
        };
        for start in self.starts::<R>() {
            // A gap with a better place than this start has been looked at.
            let in_known_gap = |index: usize| {
                let gap = gap_of(&self.levels.drives, start.parameters[index]);
                let cost = start.cost + self.levels.within;
                met.iter().any(|(known, least)| *known == gap && *least <= cost)
            };
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
            all.truncate(SMOOTH_STARTS_FOLLOWED);
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
        let degrees = (self.points.len() - P) as f64;
        let mut settling = Settling::new(self.points.iter().map(|p| p.se), degrees);
        for round in 0..ROUNDS {
            let limited = SolverOptions {
                decrease_tolerance: 1e-8,
                initial_damping: if round == 0 { 1e-4 } else { 1e-7 },
                max_iterations: if round < 3 { 3 } else { self.options.max_iterations },
                ..self.options
            };
            *best = self.inside::<R>(best.parameters, &limited);
            self.set_residuals::<R>(&best.parameters);
            let change = settling.change(&self.residuals, self.variance);
            self.variance = settling.advance(round, self.variance, change);
            self.levels.reweigh(self.points, self.variance);
            if change.settled {
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
                settling.restart();
            }
        }
        false
    }

    fn set_residuals<R: Rival<P>>(&mut self, parameters: &[f64; P]) {
        let curve = R::new(parameters);
        self.evaluations += 1;
        self.fitted.clear();
        self.fitted
            .extend(self.levels.drives.iter().map(|d| curve.at(*d).rate));
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
        let squares: f64 = at_level
            .iter()
            .zip(&levels.rates)
            .zip(&levels.root_weights)
            .map(|(((fitted, _), rate), root)| (root * (rate - fitted / units.rate)).powi(2))
            .sum();
        let (fitted, leverage): (Vec<f64>, Vec<f64>) = levels.level_of_point().map(|l| at_level[l]).unzip();
        let close = |index: usize| {
            // As close below a drive as the search goes: the points ask for a jump.
            let limits = [self.options.lower[index], self.options.upper[index]];
            Gap::new(index, limits, &levels.drives, gap_of(&levels.drives, p[index]))
                .is_some_and(|gap| gap.is_closest(p[index]))
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
            at_bound: (0..P)
                .filter(|i| on_limit(*i))
                .map(|i| names[R::NAMED[i]])
                .collect(),
            fitted,
            leverage: if covariance.is_some() {
                leverage
            } else {
                Vec::new()
            },
            extra_variance: self.variance * units.rate * units.rate,
            cost: levels.within + squares,
            converged: true,
            evaluations: self.evaluations,
            chart: std::array::from_fn(pad),
            units,
            held: std::array::from_fn(|i| i < P && solution.at_bound[i]),
            main: None,
        }
    }
}

/// The cost that the next Gauss-Newton step from the end of a rough search, or from a minimum at other weights,
/// promises.
fn promised<const P: usize>(found: &Solution<P>) -> f64 {
    let step = cholesky_solve(&found.sums.curvature, &found.sums.gradient);
    let decrease: f64 = step.map_or(f64::INFINITY, |step| {
        step.iter().zip(&found.sums.gradient).map(|(s, g)| s * g).sum()
    });
    found.cost() - decrease
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

#[cfg(test)]
mod tests {
    #![allow(clippy::unwrap_used)]
    use super::*;

    /// 30 levels twice, from a hyperbola, with a fixed ripple; drives from `first` on.
    fn points(first: f64, scale: f64) -> Vec<Point> {
        (0..60)
            .map(|i| {
                let x = f64::from(i / 2) * 20.0;
                let clean = if x > 110.0 {
                    90.0 * (x - 110.0) / (x + 40.0)
                } else {
                    0.0
                };
                let ripple = if clean > 0.0 {
                    f64::from(i * 7 % 11 - 5) * 0.3
                } else {
                    0.0
                };
                Point {
                    drive: first + scale * x,
                    rate: (clean + ripple).max(0.0),
                    se: 0.5 + 0.05 * f64::from(i % 4),
                }
            })
            .collect()
    }

    #[test]
    fn the_extra_variance_solves_its_equation_and_the_fitted_rates_are_the_curves() {
        let points = points(0.0, 1.0);
        for curve in Curve::ALL {
            let fit = fit_rival(curve, &points, Scatter::Estimated).unwrap();
            let sum: f64 = points
                .iter()
                .zip(&fit.fitted)
                .map(|(p, f)| (p.rate - f).powi(2) / (p.se * p.se + fit.extra_variance))
                .sum();
            let degrees = (points.len() - curve.parameters()) as f64;
            assert!((sum / degrees - 1.0).abs() < 1e-5, "{curve}: {sum} for {degrees}");
            assert!((sum / fit.cost - 1.0).abs() < 1e-9, "{curve}");
            for (p, f) in points.iter().zip(&fit.fitted) {
                assert!(
                    (fit.rate_at(p.drive) - f).abs() <= 1e-9 * (1.0 + f),
                    "{curve} at {}",
                    p.drive
                );
            }
            // Leverages of the levels sum to the parameters that are free to move.
            let leverage: f64 = fit.leverage.iter().step_by(2).sum();
            assert!(
                leverage > 0.9 && leverage < curve.parameters() as f64 + 1e-6,
                "{curve}: {leverage}"
            );
            // At the weights it settled on, a search from scratch finds nothing better.
            let held = fit_rival(curve, &points, Scatter::Held(fit.extra_variance)).unwrap();
            assert!(
                held.cost >= fit.cost * (1.0 - 1e-6),
                "{curve}: {} {}",
                held.cost,
                fit.cost
            );
        }
    }

    #[test]
    fn the_unit_of_drive_does_not_matter() {
        // The refractory integrator counts drive from rest, so the zero stays.
        for curve in Curve::ALL.into_iter().skip(1) {
            let small = fit_rival(curve, &points(0.0, 1e-3), Scatter::Estimated).unwrap();
            let large = fit_rival(curve, &points(0.0, 1e6), Scatter::Estimated).unwrap();
            for (a, b) in small.fitted.iter().zip(&large.fitted) {
                assert!((a - b).abs() < 1e-5 * (1.0 + a), "{curve}: {a} {b}");
            }
        }
    }

    #[test]
    fn a_threshold_under_a_silent_drive_settles_on_it() {
        // Silent to 100, then far above what a root that started at 100 would reach: the kink is the minimum.
        let points: Vec<Point> = (0..12)
            .map(|i| {
                let drive = f64::from(i) * 20.0;
                let rate = if drive > 100.0 {
                    4.0 * (drive - 80.0).sqrt()
                } else {
                    0.0
                };
                Point { drive, rate, se: 0.3 }
            })
            .collect();
        let fit = fit_rival(Curve::SquareRoot, &points, Scatter::Held(0.0)).unwrap();
        let threshold = fit.values[1];
        assert_eq!(fit.fitted[5], 0.0);
        assert!((threshold - 100.0).abs() < 1e-9, "{threshold}");
        assert!(fit.at_bound.is_empty());
    }

    #[test]
    fn every_refusal_says_why() {
        let good = points(0.0, 1.0);
        let reason = |curve, points: &[Point]| {
            fit_rival(curve, points, Scatter::Estimated)
                .unwrap_err()
                .to_string()
        };
        for curve in Curve::ALL {
            assert!(
                reason(curve, &[]).starts_with("0 steps"),
                "{}",
                reason(curve, &[])
            );
            let silent: Vec<Point> = good.iter().map(|p| Point { rate: 0.0, ..*p }).collect();
            assert_eq!(reason(curve, &silent), "no step has a rate above zero");
            let one_level: Vec<Point> = good.iter().map(|p| Point { drive: 5.0, ..*p }).collect();
            assert!(reason(curve, &one_level).starts_with("1 distinct drives"));
            let mut backwards = good.clone();
            backwards.reverse();
            assert!(reason(curve, &backwards).contains("order"));
            for bad in [f64::NAN, f64::INFINITY, 0.0, -1.0, 1e-300] {
                let mut points = good.clone();
                points[7].se = bad;
                assert!(reason(curve, &points).contains("not a point"), "{curve} {bad}");
            }
        }
        let negative = points(-2000.0, 1.0);
        assert!(reason(Curve::RefractoryIntegrator, &negative).contains("above zero"));
        assert!(fit_rival(Curve::Hill, &negative, Scatter::Estimated).is_ok());
    }

    #[test]
    fn wild_points_never_panic() {
        // Jumps, constants, single spikes of rate, falling rates, few levels.
        let shapes: [fn(f64) -> f64; 7] = [
            |x| if x > 0.5 { 50.0 } else { 0.0 },
            |_| 30.0,
            |x| if (x - 0.5).abs() < 0.05 { 80.0 } else { 0.0 },
            |x| 100.0 * (1.0 - x),
            |x| 1e-9 * x,
            |x| 1e9 * x * x * x,
            |x| 20.0 + 10.0 * (40.0 * x).sin(),
        ];
        let (mut fitted, mut unsettled, mut exact) = (0, 0, 0);
        for ((shape, noise), count) in shapes
            .into_iter()
            .flat_map(|shape| [(shape, 0.0), (shape, 0.01)])
            .flat_map(|case| [5, 6, 9, 31].map(|count| (case, count)))
        {
            for (se, first) in [(1e-6, 0.0), (0.3, 0.0), (1e4, 0.0), (0.3, -3.0), (0.3, 1e5)] {
                let points: Vec<Point> = (0..count)
                    .map(|i| {
                        let x = f64::from(i) / f64::from(count - 1);
                        let rate = shape(x) * (1.0 + noise * f64::from(i * 7 % 5 - 2));
                        Point {
                            drive: first + x,
                            rate,
                            se,
                        }
                    })
                    .collect();
                for curve in Curve::ALL.into_iter().skip(1) {
                    for scatter in [Scatter::Estimated, Scatter::Held(0.0)] {
                        match fit_rival(curve, &points, scatter) {
                            Ok(fit) => {
                                fitted += 1;
                                assert!(fit.fitted.iter().all(|f| f.is_finite()), "{curve}");
                                assert!(fit.values.iter().all(|v| !v.is_nan()), "{curve} {:?}", fit.values);
                                assert!(fit.rate_at(-1e9).is_finite() && fit.rate_at(1e9).is_finite());
                            }
                            // Where the limit of a curve meets the points exactly, its valley has no floor.
                            Err(Unfitted::NotSettled { .. }) if noise == 0.0 => exact += 1,
                            Err(Unfitted::NotSettled { .. }) => {
                                unsettled += 1;
                                println!("{curve} {count} {se} {first} {} {scatter:?}", shape(0.3));
                            }
                            Err(Unfitted::TooFewPositiveDrives { .. }) => assert!(first < 0.0),
                            Err(Unfitted::NoRate) => {
                                assert_eq!(points.iter().map(|p| p.rate).fold(0.0, f64::max), 0.0)
                            }
                            Err(reason) => assert!(count <= 5, "{curve}: {reason}"),
                        }
                    }
                }
            }
        }
        println!("{fitted} fitted, {unsettled} not settled, {exact} not settled on points without noise");
        assert!(unsettled * 100 <= fitted, "{unsettled}");
    }
}
