//! Profile-likelihood intervals (Bates & Watts 1988, chapter 6; Venzon & Moolgavkar 1988): all values of one
//! parameter whose cost, with the other parameters optimised anew, exceeds the minimum by no more than a limit.

use super::solver::{
    LeastSquares, NormalSums, Solution, SolverOptions, cholesky, cholesky_solve, minimise, solve_factored,
};

/// Where one side of an interval ends.
#[derive(Clone, Copy, Debug, PartialEq)]
pub enum Side<const P: usize> {
    /// The profile crosses the limit here: all parameters at the crossing.
    Closed([f64; P]),
    /// The profile is still below the limit at the parameter's bound.
    Open,
    /// A better minimum was met on the way: the fit has to start again from it.
    Better([f64; P]),
    /// The profile could not be followed.
    Lost,
}

/// The profile meets its limit when the square root of the rise is this close to the root of the limit, relatively.
const TOLERANCE: f64 = 1e-5;

/// What a move of one stride is charged, as a fraction of the limit, so that a companion the points hardly feel does
/// not leap. Where a stride would gain less than a few thousandths of the limit, the companion stays.
const STRIDE_CHARGE: f64 = 1e-2;

/// One side of one parameter's profile.
#[derive(Clone, Copy, Debug)]
pub struct SideSearch<'a, const P: usize, L> {
    /// The least squares.
    pub problem: &'a L,
    /// Their minimum.
    pub best: &'a Solution<P>,
    /// Bounds, strides and tolerances.
    pub options: &'a SolverOptions<P>,
    /// The parameter that is held.
    pub index: usize,
    /// Below zero for the lower end.
    pub direction: f64,
    /// Rise of the cost at the end.
    pub limit: f64,
}

impl<const P: usize, L: LeastSquares<P>> SideSearch<'_, P, L> {
    fn wall(&self) -> f64 {
        if self.direction < 0.0 {
            self.options.lower[self.index]
        } else {
            self.options.upper[self.index]
        }
    }

    fn ridge(&self) -> [f64; P] {
        self.options.ridge_of(STRIDE_CHARGE * self.limit)
    }

    /// Options of a search with the parameter held.
    fn held(&self) -> SolverOptions<P> {
        let mut held = *self.options;
        held.fixed[self.index] = true;
        held.decrease_tolerance = held.decrease_tolerance.max(1e-7);
        held.max_iterations = held.max_iterations.min(60);
        held.initial_damping = 1e-6;
        held.ridge = self.ridge();
        held
    }

    fn is_better(&self, cost: f64) -> bool {
        let least = self.best.cost();
        cost < least - 1e-7 * least - 1e-12
    }

    /// Follows the profile from the minimum to where the cost has risen by the limit. `evaluations` counts passes over
    /// the points.
    pub fn follow(&self, evaluations: &mut u64) -> Side<P> {
        if self.best.parameters[self.index] == self.wall() {
            return Side::Open;
        }
        match self.direct(self.best.parameters, self.best.sums, evaluations) {
            Some(side) => side,
            None => self.nested(self.best, evaluations),
        }
    }

    /// Whether another branch of the profile reaches further than `end`: the companions are optimised anew from
    /// `elsewhere`, and where that costs less than the limit the profile is followed on from there.
    pub fn follow_from(&self, end: [f64; P], elsewhere: [f64; P], evaluations: &mut u64) -> Side<P> {
        let mut start = elsewhere;
        start[self.index] = end[self.index];
        let mut held = self.held();
        held.decrease_tolerance = 1e-3 * self.limit / self.best.cost().max(f64::MIN_POSITIVE);
        held.max_iterations = BRANCH_ITERATIONS;
        let found = minimise(self.problem, start, &held);
        *evaluations += found.evaluations;
        if !found.cost().is_finite() || found.cost() >= self.best.cost() + (1.0 - BRANCH_GAIN) * self.limit {
            return Side::Closed(end);
        }
        if self.is_better(found.cost()) {
            return Side::Better(found.parameters);
        }
        match self.direct(found.parameters, found.sums, evaluations) {
            Some(side) => side,
            None => self.nested(&found, evaluations),
        }
    }

    /// A minimisation for every value tried: slow, and never far off.
    fn nested(&self, from: &Solution<P>, evaluations: &mut u64) -> Side<P> {
        let (best, options, index, direction) = (self.best, self.options, self.index, self.direction);
        let wall = self.wall();
        let held = self.held();
        let root_limit = self.limit.sqrt();
        let Some(scale) = standard_deviation(from, index, &held.ridge) else {
            return Side::Lost;
        };
        // The square root of the rise is nearly a straight line in the parameter: Newton on it, inside a bracket.
        let start = from.parameters[index];
        let (mut inside, mut outside) = (start, None);
        let mut at = *from;
        let mut end = from.parameters;
        let mut next = start + direction * (scale * root_limit).min(options.stride[index]);
        for _ in 0..60 {
            if (next - wall) * direction >= 0.0 {
                next = wall;
            }
            let trial = carry(&at, index, next, &held);
            let mut found = minimise(self.problem, trial, &held);
            *evaluations += found.evaluations;
            if !(found.cost() <= best.cost() + self.limit) {
                // Beyond the end, or carried into another valley: the companions as they were decide.
                let mut plain = at.parameters;
                plain[index] = next;
                let other = minimise(self.problem, plain, &held);
                *evaluations += other.evaluations;
                if other.cost() < found.cost() {
                    found = other;
                }
            }
            if !found.cost().is_finite() {
                return Side::Lost;
            }
            if self.is_better(found.cost()) {
                return Side::Better(found.parameters);
            }
            let root = (found.cost() - best.cost()).max(0.0).sqrt();
            if (root - root_limit).abs() <= TOLERANCE * root_limit {
                return Side::Closed(found.parameters);
            }
            if root < root_limit {
                if next == wall {
                    return Side::Open;
                }
                inside = next;
                // The valley is followed from inside: a point beyond the limit may lie in another one.
                at = found;
            } else {
                outside = Some(next);
                end = found.parameters;
            }
            // d(cost)/d(parameter) of the profile is the partial derivative at its optimum.
            let slope = -found.sums.gradient[index] / root.max(f64::MIN_POSITIVE);
            let newton = next + (root_limit - root) / slope;
            let newton_ok =
                newton.is_finite() && slope * direction > 0.0 && (newton - inside) * direction > 0.0;
            let before = next;
            next = match outside {
                None => {
                    let reach = 4.0 * (inside - start).abs();
                    let far = inside + direction * reach;
                    if newton_ok && (newton - far) * direction < 0.0 {
                        newton
                    } else {
                        far
                    }
                }
                Some(outside) if newton_ok && (newton - outside) * direction < 0.0 => newton,
                Some(outside) => 0.5 * (inside + outside),
            };
            // A jump of the profile: it crosses the limit without ever being near it.
            if let Some(outside) = outside
                && (outside - inside).abs() <= 1e-9 * (outside.abs() + inside.abs())
            {
                return Side::Closed(end);
            }
            if next == before {
                return Side::Closed(found.parameters);
            }
        }
        Side::Lost
    }

    /// Newton's method for the end of the interval and the other parameters together (Venzon & Moolgavkar 1988): one
    /// pass over the points a step instead of a minimisation. Steps to and fro are cut. `None` where the valley bends too much for it.
    fn direct(&self, from: [f64; P], sums: NormalSums<P>, evaluations: &mut u64) -> Option<Side<P>> {
        let (best, options, index, direction) = (self.best, self.options, self.index, self.direction);
        let wall = self.wall();
        let target = best.cost() + self.limit;
        let mut at = from;
        let mut model = self.model(&at, &sums)?;
        let (mut reach, mut trust, mut last) = (f64::INFINITY, 1.0_f64, 0.0);
        for iteration in 0..DIRECT_ITERATIONS {
            // The profile's quadratic model: cost - gain - 2 gradient d + curvature d^2 = target. One that never comes
            // down to the target asks for its own minimum.
            let excess = model.cost - model.gain - target;
            let root = model.gradient * model.gradient - model.curvature * excess;
            let mut step = (model.gradient + direction * root.max(0.0).sqrt()) / model.curvature;
            // Numbers near the largest there is: sums have overflowed.
            if !step.is_finite() {
                return None;
            }
            if iteration == 0 {
                reach = REACH * step.abs();
            }
            step = step.clamp(-reach, reach);
            let settled = model.gain <= DIRECT_TOLERANCE * self.limit;
            if settled && iteration > 0 && (model.cost - target).abs() <= DIRECT_TOLERANCE * self.limit {
                return Some(Side::Closed(model.moved(&at, options, index, step, 1.0)));
            }
            if (at[index] + step - wall) * direction >= 0.0 {
                if at[index] == wall && settled && model.cost < target {
                    return Some(Side::Open);
                }
                step = wall - at[index];
            }
            let to_wall = step == wall - at[index];
            trust = if step * last < 0.0 && model.miss > CLOSE {
                0.5 * trust
            } else {
                (2.0 * trust).min(1.0)
            };
            last = step;
            let mut part = trust;
            for i in 0..P {
                let width = if i == index {
                    step
                } else {
                    model.shift[i] - model.slope[i] * step
                };
                part = part.min(options.stride[i] / width.abs());
            }
            let whole = part;
            let (before, old) = (at, model);
            loop {
                at = old.moved(&before, options, index, step, part);
                if part == 1.0 && to_wall {
                    at[index] = wall;
                }
                if (at[index] - best.parameters[index]) * direction > 0.0 {
                    let mut sums = NormalSums::default();
                    self.problem.accumulate(&at, &mut sums);
                    *evaluations += 1;
                    if self.is_better(sums.cost) {
                        return Some(Side::Better(at));
                    }
                    sums.curvature = sums.symmetric();
                    if sums.cost < best.cost() + 20.0 * self.limit
                        && let Some(found) = self.model(&at, &sums)
                    {
                        model = found;
                        break;
                    }
                }
                part *= 0.4;
                if !(part >= 0.02 * whole) {
                    return None;
                }
            }
            if part == 1.0 && model.miss < 0.5 * old.miss {
                reach *= 2.0;
            }
        }
        None
    }

    /// The quadratic model of the profile around `at`; `None` where it has no minimum.
    fn model(&self, at: &[f64; P], sums: &NormalSums<P>) -> Option<Model<P>> {
        let (options, index) = (self.options, self.index);
        let ridge = self.ridge();
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
            system[i][i] += ridge[i] + 1e-12 * system[i][i];
        }
        let factor = cholesky(&system)?;
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
        let rise = (sums.cost - gain - self.best.cost()).max(0.0);
        let miss = (rise / self.limit).sqrt() - 1.0;
        (curvature > 0.0).then(|| Model {
            cost: sums.cost,
            shift,
            slope,
            gain,
            gradient,
            curvature,
            miss: miss.abs() + (gain / self.limit).sqrt(),
        })
    }
}

/// A quadratic model of the profile: d is the move of the held parameter.
#[derive(Clone, Copy, Debug)]
struct Model<const P: usize> {
    cost: f64,
    /// Moves of the companions to their optimum at d = 0; zero for those that may not move.
    shift: [f64; P],
    /// What they lose of it for a unit of d.
    slope: [f64; P],
    /// Decrease of the cost by `shift`.
    gain: f64,
    /// Half the slope of the profile, downwards.
    gradient: f64,
    /// Half its second derivative.
    curvature: f64,
    /// How far the point is from the end of the interval: in roots of the rise, plus what the companions could gain.
    miss: f64,
}

impl<const P: usize> Model<P> {
    /// The parameters after `part` of the move by `step`, within the bounds.
    fn moved(
        &self,
        at: &[f64; P],
        options: &SolverOptions<P>,
        index: usize,
        step: f64,
        part: f64,
    ) -> [f64; P] {
        std::array::from_fn(|i| {
            let width = if i == index {
                step
            } else {
                self.shift[i] - self.slope[i] * step
            };
            if width == 0.0 {
                at[i]
            } else {
                (at[i] + part * width).max(options.lower[i]).min(options.upper[i])
            }
        })
    }
}

/// A point this close to the end needs no caution.
const CLOSE: f64 = 0.05;

/// Iterations granted to the direct search; it settles in four to seven or not at all.
const DIRECT_ITERATIONS: usize = 16;

/// Longest step, as a multiple of the first.
const REACH: f64 = 1.5;

/// Rise and remaining gain within this fraction of the limit: the last step then carries the end to about its square.
const DIRECT_TOLERANCE: f64 = 1e-4;

/// Iterations granted to the look at another branch.
const BRANCH_ITERATIONS: u64 = 15;

/// Another branch is followed where it lies below the limit by more than this fraction of it.
const BRANCH_GAIN: f64 = 3e-3;

/// Standard deviation of one parameter from the curvature and the ridge at the minimum, its companions free.
fn standard_deviation<const P: usize>(best: &Solution<P>, index: usize, ridge: &[f64; P]) -> Option<f64> {
    let mut unit = [0.0; P];
    unit[index] = 1.0;
    let curvature = &best.sums.curvature;
    let mut scaled = [[0.0; P]; P];
    let d: [f64; P] = std::array::from_fn(|i| {
        let sum = curvature[i][i] + ridge[i];
        if sum > 0.0 { sum.sqrt() } else { 1.0 }
    });
    for i in 0..P {
        for j in 0..P {
            scaled[i][j] = curvature[i][j] / (d[i] * d[j]);
        }
        // A companion that the data say nothing about must not spoil the others.
        scaled[i][i] += 1e-12 + ridge[i] / (d[i] * d[i]);
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
        system[i][i] += options.ridge[i] + 1e-9 * system[i][i];
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
