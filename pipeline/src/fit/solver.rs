//! Least squares by the Levenberg-Marquardt method with bounds, as an argmin solver.
//!
//! The solver knows nothing of rate functions: a problem adds its residuals and their derivatives into
//! [`NormalSums`], one pass an evaluation, and nothing is allocated while it runs. Damping and step control follow
//! Madsen, Nielsen & Tingleff (2004, *Methods for Non-linear Least Squares Problems*, section 3.2); the scaling by
//! the largest column norm met so far is that of More (1978, *The Levenberg-Marquardt algorithm*). Bounds are kept
//! by projection: a parameter that rests on its bound and would leave it is held for that step.

use argmin::core::{Error, Executor, IterState, KV, Problem, Solver, State, TerminationReason};

/// Sums that one pass over all points leaves behind: everything a Gauss-Newton step needs.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct NormalSums<const P: usize> {
    /// Sum of squared weighted residuals.
    pub cost: f64,
    /// J'r: minus half the gradient of the cost.
    pub gradient: [f64; P],
    /// J'J; only the lower triangle is summed, [`NormalSums::symmetric`] fills the rest.
    pub curvature: [[f64; P]; P],
}

impl<const P: usize> Default for NormalSums<P> {
    fn default() -> Self {
        Self {
            cost: 0.0,
            gradient: [0.0; P],
            curvature: [[0.0; P]; P],
        }
    }
}

impl<const P: usize> NormalSums<P> {
    /// Adds one point: `residual` = (y - f)/sd and `derivatives` = (df/dp)/sd.
    #[inline(always)]
    pub fn add(&mut self, residual: f64, derivatives: &[f64; P]) {
        self.cost += residual * residual;
        for i in 0..P {
            self.gradient[i] += derivatives[i] * residual;
            for j in 0..=i {
                self.curvature[i][j] += derivatives[i] * derivatives[j];
            }
        }
    }

    /// J'J with both triangles filled.
    pub fn symmetric(&self) -> [[f64; P]; P] {
        let mut full = self.curvature;
        for i in 0..P {
            for j in i + 1..P {
                full[i][j] = self.curvature[j][i];
            }
        }
        full
    }

    fn is_finite(&self) -> bool {
        self.cost.is_finite()
            && self.gradient.iter().all(|g| g.is_finite())
            && self.curvature.iter().flatten().all(|c| c.is_finite())
    }
}

/// A weighted least-squares problem in `P` parameters.
pub trait LeastSquares<const P: usize> {
    /// Adds residual and derivatives of every point at `parameters` into `sums`, which arrive zeroed.
    ///
    /// Non-finite sums tell the solver that the point is outside the domain; it then shortens its step.
    fn accumulate(&self, parameters: &[f64; P], sums: &mut NormalSums<P>);
}

impl<const P: usize, L: LeastSquares<P>> LeastSquares<P> for &L {
    fn accumulate(&self, parameters: &[f64; P], sums: &mut NormalSums<P>) {
        (**self).accumulate(parameters, sums);
    }
}

/// Bounds, held parameters and stopping rules.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct SolverOptions<const P: usize> {
    /// Lower bounds.
    pub lower: [f64; P],
    /// Upper bounds.
    pub upper: [f64; P],
    /// Parameters held at their start.
    pub fixed: [bool; P],
    /// Converged once the decrease of the cost that a Gauss-Newton step promises is below this fraction of it.
    pub decrease_tolerance: f64,
    /// Converged once every step is below this fraction of its parameter.
    pub step_tolerance: f64,
    /// Iterations after which the solver gives up.
    pub max_iterations: u64,
    /// Longest step of a profile in each parameter, where curvature alone would leap further than it can be trusted.
    pub stride: [f64; P],
    /// First damping, as a fraction of the largest curvature.
    pub initial_damping: f64,
    /// Curvature added to every step, in absolute terms. It moves no minimum; it keeps a parameter that the points
    /// hardly feel from leaping, and ends the search once moving that parameter gains too little to follow it.
    pub ridge: [f64; P],
}

impl<const P: usize> SolverOptions<P> {
    /// The ridge that charges `cost` for a move of one stride; none where the stride has no limit.
    pub fn ridge_of(&self, cost: f64) -> [f64; P] {
        std::array::from_fn(|i| cost / (self.stride[i] * self.stride[i]))
    }
}

impl<const P: usize> Default for SolverOptions<P> {
    fn default() -> Self {
        Self {
            lower: [f64::NEG_INFINITY; P],
            upper: [f64::INFINITY; P],
            fixed: [false; P],
            decrease_tolerance: 1e-22,
            step_tolerance: 1e-14,
            max_iterations: 2000,
            stride: [f64::INFINITY; P],
            initial_damping: 1e-3,
            ridge: [0.0; P],
        }
    }
}

/// Where the solver stopped.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Solution<const P: usize> {
    /// Parameters of the smallest cost met.
    pub parameters: [f64; P],
    /// The sums there (both triangles of the curvature filled).
    pub sums: NormalSums<P>,
    /// Whether a stopping rule was met, rather than the limit of iterations or a domain without finite values.
    pub converged: bool,
    /// Parameters that rest on a bound.
    pub at_bound: [bool; P],
    /// Iterations made.
    pub iterations: u64,
    /// Passes over the points.
    pub evaluations: u64,
}

impl<const P: usize> Solution<P> {
    /// Sum of squared weighted residuals at the solution.
    pub fn cost(&self) -> f64 {
        self.sums.cost
    }
}

type LmState<const P: usize> = IterState<[f64; P], (), (), (), (), f64>;

/// The solver itself; its working values live here, argmin's state carries parameters and cost.
struct LevenbergMarquardt<const P: usize> {
    options: SolverOptions<P>,
    sums: NormalSums<P>,
    scale: [f64; P],
    damping: f64,
    growth: f64,
    converged: bool,
    evaluations: u64,
    /// Accepted steps in a row that each gained less than the tolerance.
    stalled: u32,
}

/// A valley without a floor, such as a noise SD that sinks to nothing, promises more for ever: after this many steps in
/// a row that each lowered the cost by less than the tolerance the search has arrived.
const STALLED_STEPS: u32 = 8;

impl<const P: usize> LevenbergMarquardt<P> {
    fn evaluate<L: LeastSquares<P>>(
        &mut self,
        problem: &mut Problem<L>,
        parameters: &[f64; P],
    ) -> Result<NormalSums<P>, Error> {
        self.evaluations += 1;
        problem.problem("residual_count", |p| {
            let mut sums = NormalSums::default();
            p.accumulate(parameters, &mut sums);
            Ok(sums)
        })
    }

    fn rescale(&mut self) {
        for i in 0..P {
            let norm = self.sums.curvature[i][i].sqrt();
            self.scale[i] = norm.max(self.scale[i]);
        }
    }

    /// Parameters that may move: not fixed, and not pressed against a bound.
    fn free(&self, x: &[f64; P]) -> [bool; P] {
        let o = &self.options;
        std::array::from_fn(|i| {
            let g = self.sums.gradient[i];
            !(o.fixed[i] || (x[i] <= o.lower[i] && g <= 0.0) || (x[i] >= o.upper[i] && g >= 0.0))
        })
    }

    /// Solves (A + damping D^2) step = g over the free parameters; A is scaled by D first.
    fn step(&self, free: &[bool; P], damping: f64) -> Option<[f64; P]> {
        let d: [f64; P] = std::array::from_fn(|i| if self.scale[i] > 0.0 { self.scale[i] } else { 1.0 });
        let mut a = [[0.0; P]; P];
        let mut b = [0.0; P];
        for i in 0..P {
            if !free[i] {
                a[i][i] = 1.0;
                continue;
            }
            b[i] = self.sums.gradient[i] / d[i];
            for j in 0..=i {
                if free[j] {
                    a[i][j] = self.sums.curvature[i][j] / (d[i] * d[j]);
                }
            }
            a[i][i] += damping + self.options.ridge[i] / (d[i] * d[i]);
        }
        let mut step = cholesky_solve(&a, &b)?;
        for i in 0..P {
            step[i] /= d[i];
        }
        Some(step)
    }

    /// An undamped step from where the cost no longer tells better from worse: it is flat to rounding around its
    /// minimum, over some 1e-8 of the parameters, while the gradient still points. Accepted if the step after it
    /// promises a quarter or less, and the cost is the same to rounding.
    fn polish<L: LeastSquares<P>>(
        &mut self,
        problem: &mut Problem<L>,
        x: &[f64; P],
        free: &[bool; P],
    ) -> Result<Option<([f64; P], NormalSums<P>)>, Error> {
        let Some(step) = self.step(free, 0.0) else {
            return Ok(None);
        };
        let o = &self.options;
        let trial: [f64; P] = std::array::from_fn(|i| {
            if free[i] {
                (x[i] + step[i]).clamp(o.lower[i], o.upper[i])
            } else {
                x[i]
            }
        });
        let promise = dot(&step, &self.sums.gradient);
        let cost = self.sums.cost;
        let before = self.sums;
        let sums = self.evaluate(problem, &trial)?;
        if !(sums.is_finite() && sums.cost <= cost * (1.0 + ROUNDING_FLOOR)) {
            return Ok(None);
        }
        self.sums = sums;
        let next = self.step(free, 0.0).map(|step| dot(&step, &sums.gradient));
        self.sums = before;
        Ok(next
            .is_some_and(|next| next <= 0.25 * promise)
            .then_some((trial, sums)))
    }
}

/// Cholesky factor of the lower triangle `a`; `None` unless positive definite.
pub fn cholesky<const P: usize>(a: &[[f64; P]; P]) -> Option<[[f64; P]; P]> {
    let mut l = [[0.0; P]; P];
    for i in 0..P {
        for j in 0..=i {
            let mut sum = a[i][j];
            for k in 0..j {
                sum -= l[i][k] * l[j][k];
            }
            if i == j {
                if !(sum > 0.0 && sum.is_finite()) {
                    return None;
                }
                l[i][i] = sum.sqrt();
            } else {
                l[i][j] = sum / l[j][j];
            }
        }
    }
    Some(l)
}

/// Solves a x = b for a symmetric positive definite `a` (lower triangle read); `None` unless positive definite.
pub fn cholesky_solve<const P: usize>(a: &[[f64; P]; P], b: &[f64; P]) -> Option<[f64; P]> {
    Some(solve_factored(&cholesky(a)?, b))
}

/// Solves L L' x = b for the lower triangular factor that [`cholesky`] gives.
pub fn solve_factored<const P: usize>(l: &[[f64; P]; P], b: &[f64; P]) -> [f64; P] {
    let mut x = *b;
    for i in 0..P {
        for k in 0..i {
            x[i] -= l[i][k] * x[k];
        }
        x[i] /= l[i][i];
    }
    for i in (0..P).rev() {
        for k in i + 1..P {
            x[i] -= l[k][i] * x[k];
        }
        x[i] /= l[i][i];
    }
    x
}

/// Step sizes below this, relative to the cost, are lost in rounding: a promised decrease this small that does not
/// come true means the floor is reached.
const ROUNDING_FLOOR: f64 = 1e-12;

impl<const P: usize, L: LeastSquares<P>> Solver<L, LmState<P>> for LevenbergMarquardt<P> {
    fn name(&self) -> &str {
        "Levenberg-Marquardt with bounds"
    }

    fn init(
        &mut self,
        problem: &mut Problem<L>,
        state: LmState<P>,
    ) -> Result<(LmState<P>, Option<KV>), Error> {
        let start = state.get_param().copied().unwrap_or([0.0; P]);
        self.sums = self.evaluate(problem, &start)?;
        self.rescale();
        let cost = self.sums.cost;
        let state = state.param(start).cost(cost);
        if self.sums.is_finite() {
            Ok((state, None))
        } else {
            Ok((
                state.terminate_with(TerminationReason::SolverExit("start outside the domain".into())),
                None,
            ))
        }
    }

    fn next_iter(
        &mut self,
        problem: &mut Problem<L>,
        state: LmState<P>,
    ) -> Result<(LmState<P>, Option<KV>), Error> {
        let x = state.get_param().copied().unwrap_or([0.0; P]);
        let cost = self.sums.cost;
        let free = self.free(&x);
        let stop = |solver: &mut Self, state: LmState<P>, converged: bool| {
            solver.converged = converged;
            let reason = if converged {
                TerminationReason::SolverConverged
            } else {
                TerminationReason::SolverExit("no step lowers the cost".into())
            };
            Ok((state.param(x).cost(cost).terminate_with(reason), None))
        };
        if cost == 0.0 || !free.contains(&true) {
            return stop(self, state, true);
        }
        if self.stalled >= STALLED_STEPS {
            return stop(self, state, true);
        }
        // What an undamped step promises: the Newton decrement, scale free.
        let promise = self
            .step(&free, 0.0)
            .map(|newton| dot(&newton, &self.sums.gradient));
        if promise.is_some_and(|p| p <= self.options.decrease_tolerance * cost) {
            return stop(self, state, true);
        }
        loop {
            let Some(step) = self.step(&free, self.damping) else {
                self.damping = (self.damping * self.growth).max(1e-14);
                self.growth *= 2.0;
                if self.damping > 1e60 {
                    return stop(self, state, false);
                }
                continue;
            };
            let o = &self.options;
            let trial: [f64; P] = std::array::from_fn(|i| {
                if free[i] {
                    (x[i] + step[i]).clamp(o.lower[i], o.upper[i])
                } else {
                    x[i]
                }
            });
            let moved: [f64; P] = std::array::from_fn(|i| trial[i] - x[i]);
            if (0..P).all(|i| moved[i].abs() <= o.step_tolerance * x[i].abs()) {
                let floor = promise.is_some_and(|p| p <= ROUNDING_FLOOR.sqrt() * cost)
                    || self.damping < 1.0
                    || moved.iter().all(|m| *m == 0.0);
                return stop(self, state, floor);
            }
            // Decrease the quadratic model promises for the step as clipped.
            let mut predicted = 2.0 * dot(&moved, &self.sums.gradient);
            for i in 0..P {
                predicted -= moved[i] * moved[i] * self.sums.curvature[i][i];
                for j in 0..i {
                    predicted -= 2.0 * moved[i] * moved[j] * self.sums.curvature[i][j];
                }
            }
            let sums = self.evaluate(problem, &trial)?;
            let actual = cost - sums.cost;
            if sums.is_finite() && actual > 0.0 && predicted > 0.0 {
                let gain = actual / predicted;
                self.sums = sums;
                self.stalled = if actual <= self.options.decrease_tolerance * cost {
                    self.stalled + 1
                } else {
                    0
                };
                self.rescale();
                self.damping *= (1.0 - (2.0 * gain - 1.0).powi(3)).max(1.0 / 3.0);
                self.growth = 2.0;
                return Ok((state.param(trial).cost(sums.cost), None));
            }
            if sums.is_finite()
                && predicted.abs() <= ROUNDING_FLOOR * cost
                && promise.is_some_and(|p| p <= ROUNDING_FLOOR.sqrt() * cost)
            {
                return match self.polish(problem, &x, &free)? {
                    Some((polished, sums)) => {
                        self.sums = sums;
                        Ok((state.param(polished).cost(sums.cost), None))
                    }
                    None => stop(self, state, true),
                };
            }
            self.damping *= self.growth;
            self.growth *= 2.0;
            if !self.damping.is_finite() || self.damping > 1e60 {
                return stop(self, state, false);
            }
        }
    }
}

fn dot<const P: usize>(a: &[f64; P], b: &[f64; P]) -> f64 {
    (0..P).map(|i| a[i] * b[i]).sum()
}

/// Minimises the sum of squared weighted residuals from `start` (clipped into the bounds).
///
/// Never fails: a search that met no stopping rule returns its best point with `converged` false.
pub fn minimise<const P: usize, L: LeastSquares<P>>(
    problem: &L,
    start: [f64; P],
    options: &SolverOptions<P>,
) -> Solution<P> {
    let start: [f64; P] = std::array::from_fn(|i| {
        if options.fixed[i] {
            start[i]
        } else {
            start[i].max(options.lower[i]).min(options.upper[i])
        }
    });
    let solver = LevenbergMarquardt {
        options: *options,
        sums: NormalSums::default(),
        scale: [0.0; P],
        damping: options.initial_damping,
        growth: 2.0,
        converged: false,
        evaluations: 0,
        stalled: 0,
    };
    let run = Executor::new(problem, solver)
        .configure(|state| {
            state
                .param(start)
                .max_iters(options.max_iterations)
                .target_cost(f64::NEG_INFINITY)
                .counting(false)
        })
        .ctrlc(false)
        .timer(false)
        .run();
    match run {
        Ok(result) => {
            let parameters = result.state.get_param().copied().unwrap_or(start);
            let mut sums = result.solver.sums;
            sums.curvature = sums.symmetric();
            Solution {
                parameters,
                sums,
                converged: result.solver.converged,
                at_bound: std::array::from_fn(|i| {
                    !options.fixed[i]
                        && (parameters[i] <= options.lower[i] || parameters[i] >= options.upper[i])
                }),
                iterations: result.state.get_iter(),
                evaluations: result.solver.evaluations,
            }
        }
        // The executor itself only fails when the problem or solver returns an error, which neither does.
        Err(_) => Solution {
            parameters: start,
            sums: NormalSums {
                cost: f64::INFINITY,
                ..NormalSums::default()
            },
            converged: false,
            at_bound: [false; P],
            iterations: 0,
            evaluations: 0,
        },
    }
}
