//! Prediction of every level from a fit without it.
//!
//! The fit is made anew for each level with the weights as they were. It starts from where the curvature of the full
//! fit says that the minimum moves when the level goes (one Gauss-Newton step), so that most refits need one or two
//! passes.

use super::objective::Levels;
use super::solver::{Solution, SolverOptions, cholesky_solve};

/// A refit has arrived when the decrease still promised is below this fraction of the cost: its parameters are then
/// within a hundredth of their standard errors.
const ARRIVED: f64 = 1e-5;

/// Iterations granted to a refit.
const ITERATIONS: u64 = 40;

/// The rates of all levels, each predicted by the fit without that level.
#[derive(Clone, Debug, PartialEq)]
pub struct LeftOut {
    /// Predicted rate of each level, Hz; `None` where a refit did not converge.
    pub rates: Option<Vec<f64>>,
    /// Passes over the levels.
    pub evaluations: u64,
}

/// Predicts each level from the others.
///
/// `rate` gives the curve and its derivatives at a drive; `minimise` fits it to levels from a start.
pub fn leave_one_level_out<const P: usize>(
    levels: &Levels,
    full: &Solution<P>,
    options: &SolverOptions<P>,
    rate: impl Fn(f64, &[f64; P]) -> (f64, [f64; P]),
    minimise: impl Fn(&Levels, [f64; P], &SolverOptions<P>) -> Solution<P>,
) -> LeftOut {
    let options = SolverOptions {
        decrease_tolerance: ARRIVED,
        max_iterations: ITERATIONS,
        initial_damping: 1e-7,
        ..*options
    };
    let mut without = levels.clone();
    let mut rates = Vec::with_capacity(levels.drives.len());
    let mut evaluations = 1;
    for (k, drive) in levels.drives.iter().enumerate() {
        let weight = levels.root_weights[k];
        let (at, slopes) = rate(*drive, &full.parameters);
        let start = downdated(
            full,
            &options,
            weight * (levels.rates[k] - at),
            &slopes.map(|s| weight * s),
        );
        without.root_weights[k] = 0.0;
        let found = minimise(&without, start, &options);
        without.root_weights[k] = weight;
        evaluations += found.evaluations;
        let predicted = rate(*drive, &found.parameters).0;
        if !(found.converged && predicted.is_finite()) {
            return LeftOut {
                rates: None,
                evaluations,
            };
        }
        rates.push(predicted);
    }
    LeftOut {
        rates: Some(rates),
        evaluations,
    }
}

/// Where the minimum goes, to first order, when the point with this weighted residual and gradient is taken away.
fn downdated<const P: usize>(
    full: &Solution<P>,
    options: &SolverOptions<P>,
    residual: f64,
    slopes: &[f64; P],
) -> [f64; P] {
    let curvature = &full.sums.curvature;
    let held = |i: usize| options.fixed[i] || full.at_bound[i] || !(curvature[i][i] > 0.0);
    let mut system = [[0.0; P]; P];
    let mut right = [0.0; P];
    for i in 0..P {
        if held(i) {
            system[i][i] = 1.0;
            continue;
        }
        right[i] = -slopes[i] * residual;
        for j in 0..=i {
            if !held(j) {
                system[i][j] = curvature[i][j] - slopes[i] * slopes[j];
            }
        }
        system[i][i] += 1e-9 * curvature[i][i];
    }
    let Some(moves) = cholesky_solve(&system, &right) else {
        return full.parameters;
    };
    std::array::from_fn(|i| {
        // A level that alone carries a parameter would send it anywhere.
        let stride = options.stride[i];
        let to = full.parameters[i] + moves[i].clamp(-stride, stride);
        if held(i) {
            full.parameters[i]
        } else {
            to.max(options.lower[i]).min(options.upper[i])
        }
    })
}
