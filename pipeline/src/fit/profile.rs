//! Profile-likelihood intervals (Bates & Watts 1988, chapter 6; Venzon & Moolgavkar 1988): all values of one
//! parameter whose cost, with the other parameters optimised anew, exceeds the minimum by no more than a limit.

use super::solver::{
    LeastSquares, NormalSums, Solution, SolverOptions, cholesky, cholesky_solve, minimise, solve_factored,
};

/// Where one side of an interval ends.
#[derive(Clone, Copy, Debug, PartialEq)]
pub enum Side<const P: usize> {
    /// The profile crosses the limit here.
    Closed(f64),
    /// The profile is still below the limit at the parameter's bound.
    Open,
    /// A better minimum was met on the way: the fit has to start again from it.
    Better([f64; P]),
    /// The profile could not be followed.
    Lost,
}

/// The profile meets its limit when the square root of the rise is this close to the root of the limit, relatively.
const TOLERANCE: f64 = 1e-5;

/// Follows the profile of parameter `index` from the minimum `best` downwards (`direction` < 0) or upwards, to where
/// the cost has risen by `limit`. Bounds are those of `options`; `evaluations` counts passes over the points.
pub fn profile_side<const P: usize, L: LeastSquares<P>>(
    problem: &L,
    best: &Solution<P>,
    options: &SolverOptions<P>,
    index: usize,
    direction: f64,
    limit: f64,
    evaluations: &mut u64,
) -> Side<P> {
    let wall = if direction < 0.0 {
        options.lower[index]
    } else {
        options.upper[index]
    };
    let start = best.parameters[index];
    if start == wall {
        return Side::Open;
    }
    let root_limit = limit.sqrt();
    let mut held = *options;
    held.fixed[index] = true;
    held.decrease_tolerance = options.decrease_tolerance.max(1e-7);
    held.max_iterations = options.max_iterations.min(60);
    held.initial_damping = 1e-6;
    let Some(scale) = standard_deviation(best, index) else {
        return Side::Lost;
    };
    match direct(problem, best, options, index, direction, limit, evaluations) {
        Direct::Closed(value) => return Side::Closed(value),
        Direct::Better(point) => return Side::Better(point),
        Direct::Unsettled => {}
    }
    // The square root of the rise is nearly a straight line in the parameter: Newton on it, inside a bracket.
    let (mut inside, mut outside) = (start, f64::NAN);
    let mut at = *best;
    let mut next = start + direction * (scale * root_limit).min(options.stride[index]);
    for _ in 0..60 {
        if (next - wall) * direction >= 0.0 {
            next = wall;
        }
        let trial = carry(&at, index, next, options);
        let found = minimise(problem, trial, &held);
        *evaluations += found.evaluations;
        if !found.cost().is_finite() {
            return Side::Lost;
        }
        let rise = found.cost() - best.cost();
        if rise < -1e-7 * best.cost() - 1e-12 {
            return Side::Better(found.parameters);
        }
        let root = rise.max(0.0).sqrt();
        if (root - root_limit).abs() <= TOLERANCE * root_limit {
            return Side::Closed(next);
        }
        if root < root_limit {
            if next == wall {
                return Side::Open;
            }
            inside = next;
            // The valley is followed from inside: a point beyond the limit may lie in another one.
            at = found;
        } else {
            outside = next;
        }
        // d(cost)/d(parameter) of the profile is the partial derivative at its optimum.
        let slope = -found.sums.gradient[index] / root.max(f64::MIN_POSITIVE);
        let newton = next + (root_limit - root) / slope;
        let newton_ok = newton.is_finite() && slope * direction > 0.0;
        let before = next;
        next = if outside.is_nan() {
            let reach = 4.0 * (inside - start).abs();
            let far = inside + direction * reach;
            if newton_ok && (newton - inside) * direction > 0.0 && (newton - far) * direction < 0.0 {
                newton
            } else {
                far
            }
        } else if newton_ok && (newton - inside) * direction > 0.0 && (newton - outside) * direction < 0.0 {
            newton
        } else {
            0.5 * (inside + outside)
        };
        if !outside.is_nan() && (outside - inside).abs() <= 1e-13 * (outside.abs() + inside.abs()) {
            return Side::Closed(next);
        }
        if next == before {
            return Side::Closed(next);
        }
    }
    Side::Lost
}

enum Direct<const P: usize> {
    Closed(f64),
    Better([f64; P]),
    Unsettled,
}

/// Iterations granted to the direct search; it settles in four to seven or not at all.
const DIRECT_ITERATIONS: usize = 16;

/// Longest step, as a multiple of the first.
const REACH: f64 = 1.5;

/// Newton's method for the end of the interval and the other parameters together (Venzon & Moolgavkar 1988): one
/// pass over the points a step instead of a minimisation, but it may fail where the valley bends.
fn direct<const P: usize, L: LeastSquares<P>>(
    problem: &L,
    best: &Solution<P>,
    options: &SolverOptions<P>,
    index: usize,
    direction: f64,
    limit: f64,
    evaluations: &mut u64,
) -> Direct<P> {
    let target = best.cost() + limit;
    let mut at = best.parameters;
    let mut sums = best.sums;
    let mut reach = f64::INFINITY;
    for iteration in 0..DIRECT_ITERATIONS {
        let free: [bool; P] = std::array::from_fn(|i| {
            i != index
                && !options.fixed[i]
                && sums.curvature[i][i] > 0.0
                && !(at[i] <= options.lower[i] && sums.gradient[i] <= 0.0)
                && !(at[i] >= options.upper[i] && sums.gradient[i] >= 0.0)
        });
        let mut system = [[0.0; P]; P];
        let (mut pull, mut tie) = ([0.0; P], [0.0; P]);
        for i in 0..P {
            if !free[i] {
                system[i][i] = 1.0;
                continue;
            }
            pull[i] = sums.gradient[i];
            tie[i] = sums.curvature[i][index];
            for j in 0..=i {
                if free[j] {
                    system[i][j] = sums.curvature[i][j];
                }
            }
            system[i][i] *= 1.0 + 1e-12;
        }
        let Some(factor) = cholesky(&system) else {
            return Direct::Unsettled;
        };
        let shift = solve_factored(&factor, &pull);
        let slope = solve_factored(&factor, &tie);
        let (mut gain, mut gradient, mut curvature) =
            (0.0, sums.gradient[index], sums.curvature[index][index]);
        for i in 0..P {
            if free[i] {
                gain += sums.gradient[i] * shift[i];
                gradient -= sums.curvature[i][index] * shift[i];
                curvature -= sums.curvature[i][index] * slope[i];
            }
        }
        // The profile's quadratic model: cost - gain - 2 gradient d + curvature d^2 = target.
        let excess = sums.cost - gain - target;
        let root = gradient * gradient - curvature * excess;
        if !(curvature > 0.0) {
            return Direct::Unsettled;
        }
        // A model that never comes down to the target asks for its own minimum.
        let mut step = (gradient + direction * root.max(0.0).sqrt()) / curvature;
        if iteration == 0 {
            reach = REACH * step.abs();
        }
        step = step.clamp(-reach, reach);
        let settled = iteration > 0
            && (sums.cost - target).abs() <= DIRECT_TOLERANCE * limit
            && gain <= DIRECT_TOLERANCE * limit;
        if settled {
            return Direct::Closed(at[index] + step);
        }
        let before = (at, sums);
        let mut moves = [0.0; P];
        for i in 0..P {
            if free[i] {
                moves[i] = shift[i] - slope[i] * step;
            }
        }
        moves[index] = step;
        let mut part = 1.0_f64;
        for i in 0..P {
            part = part.min(options.stride[i] / moves[i].abs());
        }
        let least = 0.02 * part;
        loop {
            at = std::array::from_fn(|i| {
                (before.0[i] + part * moves[i])
                    .max(options.lower[i])
                    .min(options.upper[i])
            });
            let inside = (at[index] - best.parameters[index]) * direction > 0.0
                && at[index] > options.lower[index]
                && at[index] < options.upper[index];
            if inside {
                sums = NormalSums::default();
                problem.accumulate(&at, &mut sums);
                *evaluations += 1;
                if sums.cost < best.cost() + 20.0 * limit {
                    break;
                }
            }
            part *= 0.4;
            if !(part >= least) {
                return Direct::Unsettled;
            }
        }
        if sums.cost < best.cost() * (1.0 - 1e-7) - 1e-12 {
            return Direct::Better(at);
        }
        sums.curvature = sums.symmetric();
    }
    Direct::Unsettled
}

/// Rise and remaining gain within this fraction of the limit: the last step then carries the end to about its square.
const DIRECT_TOLERANCE: f64 = 1e-4;

/// Standard deviation of one parameter from the curvature at the minimum, its free companions included.
fn standard_deviation<const P: usize>(best: &Solution<P>, index: usize) -> Option<f64> {
    let mut unit = [0.0; P];
    unit[index] = 1.0;
    let curvature = &best.sums.curvature;
    let mut scaled = [[0.0; P]; P];
    let d: [f64; P] = std::array::from_fn(|i| {
        if curvature[i][i] > 0.0 {
            curvature[i][i].sqrt()
        } else {
            1.0
        }
    });
    for i in 0..P {
        for j in 0..P {
            scaled[i][j] = curvature[i][j] / (d[i] * d[j]);
        }
        // A companion that the data say nothing about must not spoil the others.
        scaled[i][i] += 1e-12;
    }
    let column = cholesky_solve(&scaled, &unit)?;
    let variance = column[index] / (d[index] * d[index]);
    (variance > 0.0 && variance.is_finite()).then(|| variance.sqrt())
}

/// Moves parameter `index` to `value` and the others along the valley that the curvature at `from` describes.
fn carry<const P: usize>(
    from: &Solution<P>,
    index: usize,
    value: f64,
    options: &SolverOptions<P>,
) -> [f64; P] {
    let shift = value - from.parameters[index];
    let curvature = &from.sums.curvature;
    let mut system = [[0.0; P]; P];
    let mut right = [0.0; P];
    for i in 0..P {
        if i == index || options.fixed[i] || !(curvature[i][i] > 0.0) {
            system[i][i] = 1.0;
            continue;
        }
        right[i] = -curvature[i][index] * shift;
        for j in 0..=i {
            if j != index && !options.fixed[j] && curvature[j][j] > 0.0 {
                system[i][j] = curvature[i][j];
            }
        }
        system[i][i] *= 1.0 + 1e-9;
    }
    let moves = cholesky_solve(&system, &right).unwrap_or([0.0; P]);
    std::array::from_fn(|i| {
        if i == index {
            value
        } else {
            (from.parameters[i] + moves[i])
                .max(options.lower[i])
                .min(options.upper[i])
        }
    })
}
