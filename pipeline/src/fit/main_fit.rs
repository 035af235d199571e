//! The fit of the smoothed hyperbola to one response of one cell: curve parameters and extra SD together.

use super::extra_sd::Settling;
use super::objective::{Chart, Levels, Objective, Point, evaluate};
use super::solver::{Solution, SolverOptions, cholesky_solve, minimise};
use super::starts::starts;

/// Number of curve parameters.
pub const PARAMETERS: usize = 4;

/// Starts followed to the end of a short search before the best is polished.
const STARTS_FOLLOWED: usize = 4;

/// Squared distance, in standard deviations, below which two ends of the short search are the same minimum.
const SAME: f64 = 0.05;

/// Rise of the weighted sum of squares, beyond twice the best, above which a start is not followed further.
const HOPELESS: f64 = 10.0;

/// Variance of ln noise SD above which the search also tries a smaller and a larger noise.
const LOOSE_NOISE: f64 = 0.1;

/// Smallest and largest noise SD, as a fraction of the range of drives.
const NOISE_BOUNDS: [f64; 2] = [1e-3, 10.0];
/// Smallest and largest initial gain, as a multiple of peak rate over range of drives. The largest is that of a step:
/// a half-rise so small that nothing in the data tells it from zero.
const GAIN_BOUNDS: [f64; 2] = [1e-4, 1e6];
/// Largest 1/max rate, as a multiple of 1/peak rate.
const CEILING_BOUND: f64 = 10.0;
/// Smallest threshold: this many ranges of drives below the smallest drive.
const THRESHOLD_BELOW: f64 = 10.0;
/// Largest threshold: this many ranges of drives above the largest drive. A weak cell whose noise alone makes it fire
/// has its threshold up there.
const THRESHOLD_ABOVE: f64 = 1.0;

/// What the fit found. Parameters are in the chart [`Chart::Ceiling`].
#[derive(Clone, Debug)]
pub struct MainFit {
    /// The minimum at the final weights.
    pub solution: Solution<4>,
    /// The minimum with the ceiling at infinity (1/max rate held at 0), at the same weights.
    pub ramp: Solution<4>,
    /// Points grouped by drive with the final weights.
    pub levels: Levels,
    /// Extra variance w^2, Hz^2.
    pub extra_variance: f64,
    /// Points minus parameters.
    pub degrees: f64,
    /// Bounds of the search.
    pub options: SolverOptions<4>,
    /// Whether the solver and the extra variance converged together.
    pub converged: bool,
    /// Passes of the curve over all levels.
    pub evaluations: u64,
}

/// How the extra variance is set.
#[derive(Clone, Copy, Debug, PartialEq)]
pub enum Scatter {
    /// Estimated with the curve: sum r^2/(e^2 + w^2) = points - parameters.
    Estimated,
    /// Held at this w^2, Hz^2.
    Held(f64),
}

/// Fits the smoothed hyperbola to `points`, sorted by drive.
///
/// `None` when there are no more points than parameters, fewer than four distinct drives, or no rate above zero.
pub fn fit(points: &[Point], scatter: Scatter) -> Option<MainFit> {
    let peak = points.iter().map(|p| p.rate).fold(0.0, f64::max);
    let first = match scatter {
        // Only ranks the starts and is replaced at once.
        Scatter::Estimated => (0.05 * peak).powi(2),
        Scatter::Held(variance) => variance,
    };
    let levels = Levels::new(points, first);
    if points.len() <= PARAMETERS || levels.drives.len() < PARAMETERS || !(peak > 0.0) {
        return None;
    }
    let options = bounds(&levels, peak);
    let search = Search {
        points,
        scatter,
        options,
        variance: first,
        evaluations: 0,
        residuals: Vec::new(),
    };
    let starts = starts(&levels);
    let rough = SolverOptions {
        decrease_tolerance: 1e-3,
        max_iterations: 12,
        ..options
    };
    let few_nodes = Objective {
        levels: &levels,
        chart: Chart::Ceiling,
        rough: true,
    };
    let mut followed: Vec<Solution<4>> = starts
        .iter()
        .take(STARTS_FOLLOWED)
        .map(|start| minimise(&few_nodes, *start, &rough))
        .collect();
    followed.sort_by(|a, b| a.cost().total_cmp(&b.cost()));
    let best = *followed.first()?;
    // A start that ended elsewhere, and not hopelessly above, may win once the weights are right.
    let hopeless = 2.0 * best.cost() + HOPELESS;
    let rivals: Vec<[f64; 4]> = followed
        .iter()
        .skip(1)
        .filter(|f| f.cost() < hopeless && far_apart(f, &best))
        .map(|f| f.parameters)
        .collect();
    let ramp_start = starts.iter().copied().find(|s| s[1] == 0.0);
    Some(search.finish(levels, best, &rivals, ramp_start))
}

/// Takes `fit` to the minimum that lies near `better`, a point in the chart `Ceiling` found to cost less.
pub(super) fn refit_from(points: &[Point], scatter: Scatter, fit: &mut MainFit, better: [f64; 4]) {
    let mut search = Search {
        points,
        scatter,
        options: fit.options,
        variance: fit.extra_variance,
        evaluations: fit.evaluations,
        residuals: Vec::new(),
    };
    let levels = std::mem::take(&mut fit.levels);
    let best = search.minimise(&levels, better, &fit.options);
    *fit = search.finish(
        levels,
        best,
        &[fit.solution.parameters],
        Some(fit.ramp.parameters),
    );
}

/// Whether two minima differ by more than the solver's tolerance could explain.
fn far_apart(a: &Solution<4>, b: &Solution<4>) -> bool {
    let curvature = &b.sums.curvature;
    let mut distance = 0.0;
    for i in 0..4 {
        for j in 0..4 {
            distance +=
                (a.parameters[i] - b.parameters[i]) * curvature[i][j] * (a.parameters[j] - b.parameters[j]);
        }
    }
    // NaN counts as far.
    !(distance <= SAME)
}

fn bounds(levels: &Levels, peak: f64) -> SolverOptions<4> {
    let (lowest, highest) = (levels.drives[0], levels.drives[levels.drives.len() - 1]);
    let range = highest - lowest;
    let [flattest, steepest] = GAIN_BOUNDS.map(|g| range / (g * peak));
    let noise = NOISE_BOUNDS.map(|n| (n * range).ln());
    SolverOptions {
        lower: [steepest, 0.0, lowest - THRESHOLD_BELOW * range, noise[0]],
        upper: [
            flattest,
            CEILING_BOUND / peak,
            highest + THRESHOLD_ABOVE * range,
            noise[1],
        ],
        decrease_tolerance: 1e-11,
        step_tolerance: 1e-12,
        max_iterations: 400,
        stride: [0.5 * range / peak, 0.5 / peak, 0.25 * range, 1.0],
        ..SolverOptions::default()
    }
}

struct Search<'a> {
    points: &'a [Point],
    scatter: Scatter,
    options: SolverOptions<4>,
    variance: f64,
    evaluations: u64,
    residuals: Vec<f64>,
}

impl Search<'_> {
    /// From a good start to the final fit: the extra variance changes the weights, and with them which minimum is
    /// lowest, so the rivals are looked at again after it has settled.
    fn finish(
        mut self,
        mut levels: Levels,
        mut best: Solution<4>,
        rivals: &[[f64; 4]],
        ramp_start: Option<[f64; 4]>,
    ) -> MainFit {
        let options = self.options;
        let mut converged = false;
        let mut ramp = best;
        for _ in 0..6 {
            converged = self.settle(&mut levels, &mut best, &options, PARAMETERS);
            ramp = self.ramp(&levels, &best, ramp_start);
            let mut improved = false;
            // Well above the best, the ramp leads back to where the search came from.
            let ramp_rival = (ramp.cost() < best.cost() + HOPELESS).then_some(&ramp.parameters);
            // A noise SD below the spacing of the levels is known loosely and may have a second minimum.
            let loose = covariance(&best).is_none_or(|c| c[3][3] > LOOSE_NOISE || best.at_bound[3]);
            let other_noise: Vec<[f64; 4]> = [-1.0, 1.0]
                .iter()
                .filter(|_| loose)
                .map(|shift| {
                    let mut start = best.parameters;
                    start[3] += shift;
                    start
                })
                .collect();
            for rival in rivals.iter().chain(ramp_rival).chain(&other_noise) {
                let found = self.minimise(&levels, *rival, &options);
                if found.cost() < best.cost() * (1.0 - 1e-8) - 1e-14 {
                    best = found;
                    improved = true;
                }
            }
            if !improved {
                break;
            }
        }
        MainFit {
            solution: best,
            ramp,
            levels,
            extra_variance: self.variance,
            degrees: (self.points.len() - PARAMETERS) as f64,
            options,
            converged,
            evaluations: self.evaluations,
        }
    }

    fn minimise(&mut self, levels: &Levels, start: [f64; 4], options: &SolverOptions<4>) -> Solution<4> {
        let found = minimise(
            &Objective {
                levels,
                chart: Chart::Ceiling,
                rough: false,
            },
            start,
            options,
        );
        self.evaluations += found.evaluations;
        found
    }

    /// Alternates between the curve at given weights and the extra variance at a given curve until both stand still.
    fn settle(
        &mut self,
        levels: &mut Levels,
        best: &mut Solution<4>,
        options: &SolverOptions<4>,
        parameters: usize,
    ) -> bool {
        if let Scatter::Held(_) = self.scatter {
            *best = self.minimise(levels, best.parameters, options);
            return best.converged;
        }
        let degrees = (self.points.len() - parameters) as f64;
        let mut settling = Settling::new(self.points.iter().map(|p| p.se), degrees);
        for round in 0..200 {
            // Early rounds need no more than a good direction; the last ones are exact.
            let limited = SolverOptions {
                initial_damping: if round == 0 { 1e-4 } else { 1e-7 },
                max_iterations: if round < 3 { 3 } else { options.max_iterations },
                ..*options
            };
            *best = self.minimise(levels, best.parameters, &limited);
            self.set_residuals(levels, best);
            let change = settling.change(&self.residuals, self.variance);
            self.variance = settling.advance(round, self.variance, change);
            levels.reweigh(self.points, self.variance);
            if change.settled {
                let exact = SolverOptions {
                    initial_damping: 1e-7,
                    ..*options
                };
                *best = self.minimise(levels, best.parameters, &exact);
                return best.converged;
            }
        }
        false
    }

    fn set_residuals(&mut self, levels: &Levels, at: &Solution<4>) {
        let mut fitted = vec![0.0; levels.drives.len()];
        evaluate(Chart::Ceiling, &at.parameters, &levels.drives, |i, f, _| {
            fitted[i] = f
        });
        self.evaluations += 1;
        self.residuals.clear();
        self.residuals.extend(
            self.points
                .iter()
                .zip(levels.level_of_point())
                .map(|(p, l)| p.rate - fitted[l]),
        );
    }

    /// The same objective with the ceiling at infinity.
    fn ramp(&mut self, levels: &Levels, near: &Solution<4>, extra: Option<[f64; 4]>) -> Solution<4> {
        let mut options = self.options;
        options.fixed[1] = true;
        let mut best: Option<Solution<4>> = None;
        for mut start in std::iter::once(near.parameters).chain(extra) {
            start[1] = 0.0;
            let found = self.minimise(levels, start, &options);
            if best.as_ref().is_none_or(|b| found.cost() < b.cost()) {
                best = Some(found);
            }
        }
        best.unwrap_or(*near)
    }
}

impl MainFit {
    /// 1/max rate of the solution is zero: the best curve is the smoothed ramp itself.
    pub fn is_ramp(&self) -> bool {
        self.solution.parameters[1] <= 0.0
    }

    /// Covariance of the chart's parameters from the expected information, (J'WJ)^-1, with parameters that rest on a
    /// bound held. `None` when the information is singular.
    pub fn covariance(&self) -> Option<[[f64; 4]; 4]> {
        covariance(&self.solution)
    }

    /// The same for the band of the curve: a noise SD that the data do not determine within a factor of e is held,
    /// since the delta method would carry its meaningless variance to the threshold.
    pub fn band_covariance(&self) -> Option<[[f64; 4]; 4]> {
        let full = self.covariance();
        if full.is_some_and(|c| c[3][3] <= 1.0) {
            return full;
        }
        let mut held = self.solution;
        held.at_bound[3] = true;
        covariance(&held)
    }
}

/// Variance d' C d of a quantity with derivatives d, never below zero.
pub fn spread<const P: usize>(covariance: &[[f64; P]; P], derivatives: &[f64; P]) -> f64 {
    let mut sum = 0.0;
    for i in 0..P {
        for j in 0..P {
            sum += derivatives[i] * covariance[i][j] * derivatives[j];
        }
    }
    sum.max(0.0)
}

/// Inverse of the curvature over the parameters that are not at a bound; rows of the others are zero. `None` unless
/// positive definite with a condition the numbers can carry.
pub fn covariance<const P: usize>(solution: &Solution<P>) -> Option<[[f64; P]; P]> {
    let a = &solution.sums.curvature;
    // A ceiling at infinity is a regular boundary: its column still belongs to the information.
    let held = solution.at_bound;
    let d: [f64; P] = std::array::from_fn(|i| a[i][i].sqrt());
    if (0..P).any(|i| !held[i] && !(d[i] > 0.0 && d[i].is_finite())) {
        return None;
    }
    let scaled: [[f64; P]; P] = std::array::from_fn(|i| {
        std::array::from_fn(|j| {
            if held[i] || held[j] {
                f64::from(u8::from(i == j))
            } else {
                a[i][j] / (d[i] * d[j])
            }
        })
    });
    let mut inverse = [[0.0; P]; P];
    for j in 0..P {
        if held[j] {
            continue;
        }
        let mut unit = [0.0; P];
        unit[j] = 1.0;
        let column = cholesky_solve(&scaled, &unit)?;
        for i in 0..P {
            if !held[i] {
                inverse[i][j] = column[i] / (d[i] * d[j]);
            }
        }
        // A scaled variance this large means that rounding decides the number.
        if !(column[j] < 1e13) {
            return None;
        }
    }
    // Symmetric to the last bit.
    for i in 0..P {
        for j in 0..i {
            let mean = 0.5 * (inverse[i][j] + inverse[j][i]);
            inverse[i][j] = mean;
            inverse[j][i] = mean;
        }
    }
    Some(inverse)
}
