//! How fast the rate of one step goes from where it begins to where it settles: tau_eff.
//!
//! ```text
//! f(t) = finf + (f_on - finf) exp(-t/tau_eff),   t from the step's onset
//! ```
//!
//! An interval shows the integral of the rate: u_i = int f over interval i has mean 1 for any renewal process in the
//! cell's own time, whatever its regularity, while the mean of 1/x_i exceeds the rate (by a factor 1/(1 - CV^2) for gamma
//! intervals). The fit therefore compares u with 1, by the deviance of the gamma distribution
//!
//! ```text
//! D = sum 2 (u_i - 1 - ln u_i)      minimised as a sum of squares of its signed roots
//! ```
//!
//! which is weighted least squares on the intervals with weights 1/(CV x)^2 taken from the curve rather than from the
//! noisy intervals themselves, and the maximum of the likelihood for gamma intervals (McCullagh & Nelder 1989,
//! *Generalized Linear Models*, chapter 8). No interval's rate is ascribed to a point in time: long intervals early in a
//! step do not blur the decay. CV^2 is Pearson's, sum (u - 1)^2/(n - 3).
//!
//! The first spike's latency is left out: what a cell has to integrate before its first spike is not known.

use super::estimates::{Estimate, t_quantile};
use super::main_fit::covariance;
use super::profile::{Side, SideSearch};
use super::solver::{LeastSquares, NormalSums, Solution, SolverOptions, minimise};

/// Fewest intervals that a step needs.
pub const INTERVALS_NEEDED: usize = 5;
/// Time constants tried as starts, as fractions of the time from onset to the last spike.
const STARTS: [f64; 5] = [0.02, 0.06, 0.15, 0.4, 1.0];
/// Shortest and longest tau_eff of the search: a fraction of the shortest interval, and of the time to the last spike.
const BOUNDS: [f64; 2] = [0.2, 20.0];
/// Largest ratio of a rate to the mean rate, either way.
const WIDEST: f64 = 50.0;
/// Squared CV below which intervals are as regular as spike times are exact; keeps limits of profiles above rounding.
const LEAST_DISPERSION: f64 = 1e-8;

/// Why a step has no tau_eff.
#[derive(Clone, Copy, Debug, PartialEq, thiserror::Error)]
pub enum NoDecay {
    /// Too few intervals.
    #[error("{found} intervals, {needed} are needed")]
    FewIntervals {
        /// Intervals of the step.
        found: usize,
        /// Limit.
        needed: usize,
    },
    /// Times that do not ascend from the onset.
    #[error("spike times do not ascend from the onset on")]
    Unsorted,
    /// A constant rate fits as well.
    #[error("the rate does not change over the step beyond chance: a constant rate fits as well")]
    Constant,
    /// The change is too slow for the step or too fast for its intervals: the interval of tau_eff does not close.
    #[error("the rate changes, but how fast is not determined: the interval of tau_eff does not close")]
    Open,
    /// The search did not settle.
    #[error("the fit of the exponential did not converge")]
    NotConverged,
}

/// The decay of one step.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Decay {
    /// Rate at the onset, Hz: what adaptation has not touched yet.
    pub onset_rate: Estimate,
    /// Rate it settles at, Hz.
    pub settled_rate: Estimate,
    /// Time constant, seconds, with profile interval.
    pub tau_eff_s: Estimate,
    /// Squared CV of the intervals once the decay is taken out.
    pub dispersion: f64,
    /// Intervals.
    pub intervals: usize,
    /// F test of the decay against a constant rate: (D_constant - D)/(2 CV^2).
    pub f_constant: f64,
    /// Standard error of ln tau_eff.
    pub ln_tau_se: Option<f64>,
}

/// What came of one step.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct StepDecay {
    /// The best exponential, also where it is not better than a constant; `None` where it could not be fitted.
    pub decay: Option<Decay>,
    /// Why `decay` gives no time constant to rely on; `None` where it does.
    pub reason: Option<NoDecay>,
}

/// Signed root of 2 (u - 1 - ln u) and its derivative by u.
pub(super) fn deviance_root(u: f64) -> (f64, f64) {
    let e = u - 1.0;
    if e.abs() < 1e-3 {
        // 2 (u - 1 - ln u) = e^2 (1 - 2e/3 + e^2/2 - ...).
        let root = e * (1.0 - e / 3.0 + 7.0 * e * e / 36.0);
        return (root, 1.0 - 2.0 * e / 3.0 + 7.0 * e * e / 12.0);
    }
    let root = (2.0 * (e - u.ln())).max(0.0).sqrt().copysign(e);
    (root, e / (u * root))
}

/// Intervals of one step in the chart (ln f_on, ln finf, ln tau).
struct Problem<'a> {
    spikes: &'a [f64],
}

/// Integral of exp(-t/tau) from a to b and its derivative by ln tau.
fn integral(a: f64, b: f64, tau: f64) -> (f64, f64) {
    let (ea, x) = ((-a / tau).exp(), (b - a) / tau);
    let lost = -(-x).exp_m1();
    let value = tau * ea * lost;
    // d/dln tau = value + a e^(-a/tau) - b e^(-b/tau).
    (value, value + ea * (a * lost - (b - a) * (-x).exp()))
}

impl LeastSquares<3> for Problem<'_> {
    fn accumulate(&self, parameters: &[f64; 3], sums: &mut NormalSums<3>) {
        let [on, settled, tau] = parameters.map(f64::exp);
        for pair in self.spikes.windows(2) {
            let (part, by_ln_tau) = integral(pair[0], pair[1], tau);
            let length = pair[1] - pair[0];
            let u = settled * length + (on - settled) * part;
            let (root, slope) = deviance_root(u);
            // Residual = observed - model, so derivatives carry the sign of -root.
            sums.add(
                -root,
                &[
                    slope * on * part,
                    slope * settled * (length - part),
                    slope * (on - settled) * by_ln_tau,
                ],
            );
        }
    }
}

/// Fits the exponential to the spikes of one step: `spikes` in seconds from the onset, ascending.
pub fn fit_decay(spikes: &[f64]) -> StepDecay {
    let none = |reason| StepDecay {
        decay: None,
        reason: Some(reason),
    };
    let n = spikes.len().saturating_sub(1);
    if n < INTERVALS_NEEDED {
        return none(NoDecay::FewIntervals {
            found: n,
            needed: INTERVALS_NEEDED,
        });
    }
    let (first, last) = (spikes[0], spikes[n]);
    let ascending = spikes.windows(2).all(|w| w[1] > w[0]) && first >= 0.0 && last.is_finite();
    if !ascending {
        return none(NoDecay::Unsorted);
    }
    let mean = n as f64 / (last - first);
    let shortest = spikes
        .windows(2)
        .map(|w| w[1] - w[0])
        .fold(f64::INFINITY, f64::min);
    let problem = Problem { spikes };
    let options = SolverOptions {
        lower: [
            (mean / WIDEST).ln(),
            (mean / WIDEST).ln(),
            (BOUNDS[0] * shortest).ln(),
        ],
        upper: [
            (mean * WIDEST).ln(),
            (mean * WIDEST).ln(),
            (BOUNDS[1] * last).ln(),
        ],
        decrease_tolerance: 1e-10,
        step_tolerance: 1e-10,
        max_iterations: 200,
        stride: [1.0, 1.0, 0.7],
        ..SolverOptions::default()
    };
    let quarter = (n / 4).max(1);
    let early = quarter as f64 / (spikes[quarter] - first);
    let late = quarter as f64 / (last - spikes[n - quarter]);
    let Some(mut best) = STARTS
        .iter()
        .map(|part| minimise(&problem, [early.ln(), late.ln(), (part * last).ln()], &options))
        .filter(|found| found.converged && found.cost().is_finite())
        .min_by(|a, b| a.cost().total_cmp(&b.cost()))
    else {
        return none(NoDecay::NotConverged);
    };
    let degrees = (n - 3) as f64;
    for _ in 0..3 {
        let pearson: f64 = integrals(spikes, &best).map(|u| (u - 1.0) * (u - 1.0)).sum();
        let dispersion = (pearson / degrees).max(LEAST_DISPERSION);
        // A constant rate: u = mean x, for which the u have mean 1.
        let constant: f64 = spikes
            .windows(2)
            .map(|w| -2.0 * ((w[1] - w[0]) * mean).ln())
            .sum();
        let t = t_quantile(degrees);
        let limit = t * t * dispersion;
        let mut ends = [None; 2];
        let mut better = None;
        let mut open = false;
        for (end, direction) in ends.iter_mut().zip([-1.0, 1.0]) {
            let search = SideSearch {
                problem: &problem,
                best: &best,
                options: &options,
                index: 2,
                direction,
                limit,
            };
            match search.follow(&mut 0) {
                Side::Closed(at) => *end = Some(at[2].exp()),
                Side::Open => {
                    open = true;
                    *end = Some(if direction < 0.0 { 0.0 } else { f64::INFINITY });
                }
                Side::Better(point) => better = Some(point),
                Side::Lost => {}
            }
        }
        if let Some(point) = better {
            best = minimise(&problem, point, &options);
            continue;
        }
        let ln_se = covariance(&best).map(|c| [0, 1, 2].map(|i| (dispersion * c[i][i]).sqrt()));
        let estimate = |i: usize| {
            let value = best.parameters[i].exp();
            Estimate {
                value: Some(value),
                se: ln_se.map(|se| value * se[i]).filter(|se| *se > 0.0),
                lo: None,
                hi: None,
            }
        };
        let f_constant = (constant - best.cost()) / (2.0 * dispersion);
        let decay = Decay {
            onset_rate: estimate(0),
            settled_rate: estimate(1),
            tau_eff_s: Estimate {
                lo: ends[0],
                hi: ends[1],
                ..estimate(2)
            },
            dispersion,
            intervals: n,
            f_constant,
            ln_tau_se: ln_se.map(|se| se[2]).filter(|se| *se > 0.0 && se.is_finite()),
        };
        let reason = if !(f_constant > f_quantile_2(degrees)) {
            Some(NoDecay::Constant)
        } else if open || decay.ln_tau_se.is_none() {
            Some(NoDecay::Open)
        } else if ends.contains(&None) {
            Some(NoDecay::NotConverged)
        } else {
            None
        };
        return StepDecay {
            decay: Some(decay),
            reason,
        };
    }
    none(NoDecay::NotConverged)
}

/// u of every interval under a solution.
fn integrals<'a>(spikes: &'a [f64], at: &Solution<3>) -> impl Iterator<Item = f64> + 'a {
    let [on, settled, tau] = at.parameters.map(f64::exp);
    spikes
        .windows(2)
        .map(move |w| settled * (w[1] - w[0]) + (on - settled) * integral(w[0], w[1], tau).0)
}

/// Exponentials of many steps whose time constants are known multiples of one: tau_s = factor_s tau.
#[derive(Clone, Debug, Default)]
pub struct CommonDecay<'a> {
    steps: Vec<(&'a [f64], f64)>,
    intervals: usize,
    shortest: f64,
    longest: f64,
}

impl<'a> CommonDecay<'a> {
    /// Adds the spikes of a step, seconds from its onset, and its factor. A step of fewer than [`INTERVALS_NEEDED`]
    /// intervals, of times that do not ascend from the onset, or with a factor that is not positive, is passed over.
    pub fn add(&mut self, spikes: &'a [f64], factor: f64) {
        let n = spikes.len().saturating_sub(1);
        let good = n >= INTERVALS_NEEDED
            && factor > 0.0
            && spikes[0] >= 0.0
            && spikes[n].is_finite()
            && spikes.windows(2).all(|w| w[1] > w[0]);
        if !good {
            return;
        }
        let shortest = spikes
            .windows(2)
            .map(|w| w[1] - w[0])
            .fold(f64::INFINITY, f64::min);
        let first = self.steps.is_empty();
        self.shortest = if first {
            shortest
        } else {
            shortest.min(self.shortest)
        };
        self.longest = self.longest.max(spikes[n] / factor);
        self.intervals += n;
        self.steps.push((spikes, factor));
    }

    /// Steps taken in.
    pub fn steps(&self) -> usize {
        self.steps.len()
    }

    /// Shortest and longest tau of the search, seconds.
    pub fn range(&self) -> (f64, f64) {
        (BOUNDS[0] * self.shortest, BOUNDS[1] * self.longest)
    }

    /// Deviance and Pearson's sum at one ln tau, onset and settled rate of every step at their best.
    fn sums(&self, ln_tau: f64) -> [f64; 2] {
        let mut sums = [0.0; 2];
        for (spikes, factor) in &self.steps {
            let n = spikes.len() - 1;
            let ln_mean = (n as f64 / (spikes[n] - spikes[0])).ln();
            let options = SolverOptions {
                lower: [ln_mean - WIDEST.ln(), ln_mean - WIDEST.ln(), f64::NEG_INFINITY],
                upper: [ln_mean + WIDEST.ln(), ln_mean + WIDEST.ln(), f64::INFINITY],
                fixed: [false, false, true],
                decrease_tolerance: 1e-9,
                step_tolerance: 1e-9,
                max_iterations: 60,
                ..SolverOptions::default()
            };
            let found = minimise(
                &Problem { spikes },
                [ln_mean + 0.1, ln_mean, ln_tau + factor.ln()],
                &options,
            );
            sums[0] += found.cost();
            sums[1] += integrals(spikes, &found)
                .map(|u| (u - 1.0) * (u - 1.0))
                .sum::<f64>();
        }
        sums
    }

    /// The common tau in seconds with its profile interval, an end 0 or infinite where the profile does not close.
    /// `None` without steps, or where the best tau is a bound of the search.
    pub fn estimate(&self) -> Option<Estimate> {
        let degrees = self.intervals as f64 - 2.0 * self.steps.len() as f64 - 1.0;
        if self.steps.is_empty() || !(degrees > 0.0) {
            return None;
        }
        let (low, high) = (self.range().0.ln(), self.range().1.ln());
        let search = LineSearch {
            cost: |ln_tau: f64| self.sums(ln_tau)[0],
            low,
            high,
        };
        let best = search.minimum(None, 1e-4)?;
        let [deviance, pearson] = self.sums(best);
        let t = t_quantile(degrees);
        let target = deviance + t * t * (pearson / degrees).max(LEAST_DISPERSION);
        let [lo, hi] = [low, high].map(|bound| search.end(best, target, bound));
        let tau = best.exp();
        Some(Estimate {
            value: Some(tau),
            se: lo.zip(hi).map(|(lo, hi)| tau * 0.5 * (hi - lo) / t),
            lo: Some(lo.map_or(0.0, f64::exp)),
            hi: Some(hi.map_or(f64::INFINITY, f64::exp)),
        })
    }
}

/// A cost along one line.
pub(super) struct LineSearch<F> {
    pub(super) cost: F,
    pub(super) low: f64,
    pub(super) high: f64,
}

impl<F: Fn(f64) -> f64> LineSearch<F> {
    /// The place of the least cost: the best of a grid, or `near`, then golden section around it. `None` at either end.
    pub(super) fn minimum(&self, near: Option<f64>, tolerance: f64) -> Option<f64> {
        const GRID: usize = 20;
        if !(self.low < self.high && self.low.is_finite() && self.high.is_finite()) {
            return None;
        }
        let width = (self.high - self.low) / GRID as f64;
        let centre = near.or_else(|| {
            (0..=GRID)
                .map(|i| self.low + width * i as f64)
                .map(|x| ((self.cost)(x), x))
                .min_by(|a, b| a.0.total_cmp(&b.0))
                .map(|(_, x)| x)
        })?;
        let (mut low, mut high) = ((centre - width).max(self.low), (centre + width).min(self.high));
        let golden = 0.5 * (5.0_f64.sqrt() - 1.0);
        let (mut a, mut b) = (high - golden * (high - low), low + golden * (high - low));
        let (mut at_a, mut at_b) = ((self.cost)(a), (self.cost)(b));
        while high - low > tolerance {
            if at_a < at_b {
                (high, b, at_b) = (b, a, at_a);
                a = high - golden * (high - low);
                at_a = (self.cost)(a);
            } else {
                (low, a, at_a) = (a, b, at_b);
                b = low + golden * (high - low);
                at_b = (self.cost)(b);
            }
        }
        let best = 0.5 * (low + high);
        (best > self.low + 2.0 * tolerance && best < self.high - 2.0 * tolerance).then_some(best)
    }

    /// Where the cost reaches `target` on the way from `best` to `bound`; `None` where it stays below.
    pub(super) fn end(&self, best: f64, target: f64, bound: f64) -> Option<f64> {
        let (mut inside, mut step) = (best, 0.05 * (bound - best).signum());
        let mut outside = loop {
            let next = inside + step;
            if (next - bound) * step >= 0.0 {
                if (self.cost)(bound) < target {
                    return None;
                }
                break bound;
            }
            if (self.cost)(next) >= target {
                break next;
            }
            inside = next;
            step *= 2.0;
        };
        while (outside - inside).abs() > 1e-4 {
            let middle = 0.5 * (inside + outside);
            if (self.cost)(middle) < target {
                inside = middle;
            } else {
                outside = middle;
            }
        }
        Some(0.5 * (inside + outside))
    }
}

/// 95 % quantile of F with 2 and `degrees` degrees of freedom, in closed form: P(F > x) = (1 + 2x/m)^(-m/2).
fn f_quantile_2(degrees: f64) -> f64 {
    0.5 * degrees * (0.05_f64.powf(-2.0 / degrees) - 1.0)
}

#[cfg(test)]
pub(super) mod tests {
    #![allow(clippy::unwrap_used)]
    use super::*;
    use rand::SeedableRng;
    use rand_chacha::ChaCha8Rng;
    use rand_distr::{Distribution, Gamma};

    /// Spikes where the integral of the exponential passes the running sum of `marks`, up to `length`.
    fn train(on: f64, settled: f64, tau: f64, length: f64, mut mark: impl FnMut() -> f64) -> Vec<f64> {
        let count = |t: f64| settled * t + (on - settled) * tau * -(-t / tau).exp_m1();
        let (mut spikes, mut target) = (Vec::new(), mark());
        while target < count(length) {
            let (mut low, mut high) = (0.0, length);
            for _ in 0..80 {
                let middle = 0.5 * (low + high);
                if count(middle) < target {
                    low = middle;
                } else {
                    high = middle;
                }
            }
            spikes.push(0.5 * (low + high));
            target += mark();
        }
        spikes
    }

    #[test]
    fn spike_times_of_the_relaxation_worked_by_hand_give_its_numbers_back() {
        // finf 20, f_on 60 Hz, tau 50 ms: the integral passes 1..5 at these times.
        let spikes = train(60.0, 20.0, 0.05, 1.0, || 1.0);
        let known = [0.018741126, 0.042630275, 0.073152776, 0.110885755, 0.154546010];
        for (spike, known) in spikes.iter().zip(known) {
            assert!((spike - known).abs() < 1e-9);
        }
        // The first interval alone gives less than the onset rate.
        assert!(1.0 / (spikes[1] - spikes[0]) < 42.0);
        let found = fit_decay(&spikes);
        assert_eq!(found.reason, None);
        let decay = found.decay.unwrap();
        assert!((decay.tau_eff_s.value.unwrap() - 0.05).abs() < 1e-6);
        assert!((decay.onset_rate.value.unwrap() - 60.0).abs() < 1e-3);
        assert!((decay.settled_rate.value.unwrap() - 20.0).abs() < 1e-4);
    }

    #[test]
    fn a_rising_rate_has_a_time_constant_too() {
        let decay = fit_decay(&train(10.0, 80.0, 0.1, 1.0, || 1.0));
        assert_eq!(decay.reason, None);
        assert!((decay.decay.unwrap().tau_eff_s.value.unwrap() - 0.1).abs() < 1e-5);
    }

    #[test]
    fn intervals_cover_and_the_middle_of_the_estimates_is_right() {
        let mut rng = ChaCha8Rng::seed_from_u64(3);
        let gamma = Gamma::new(16.0, 1.0 / 16.0).unwrap();
        let (mut hits, mut closed, mut taus) = (0, 0, Vec::new());
        for _ in 0..300 {
            let spikes = train(120.0, 40.0, 0.1, 1.5, || gamma.sample(&mut rng));
            let found = fit_decay(&spikes);
            let decay = found.decay.unwrap();
            let tau = decay.tau_eff_s;
            hits += usize::from(tau.lo.unwrap() <= 0.1 && 0.1 <= tau.hi.unwrap());
            closed += usize::from(found.reason.is_none());
            taus.push(tau.value.unwrap());
        }
        taus.sort_by(f64::total_cmp);
        println!("covered {hits}, closed {closed} of 300, median {}", taus[150]);
        assert!((276..=295).contains(&hits), "{hits}");
        assert!(closed > 270);
        assert!((taus[150] - 0.1).abs() < 0.006);
    }

    #[test]
    fn a_constant_rate_is_said_to_be_one() {
        let mut rng = ChaCha8Rng::seed_from_u64(4);
        let gamma = Gamma::new(9.0, 1.0 / 9.0).unwrap();
        let mut constant = 0;
        for _ in 0..200 {
            let spikes = train(50.0, 50.0, 0.1, 1.0, || gamma.sample(&mut rng));
            let found = fit_decay(&spikes);
            constant += usize::from(found.reason == Some(NoDecay::Constant));
        }
        println!("constant: {constant} of 200");
        assert!(constant >= 180);
        let exact: Vec<f64> = (1..40).map(|i| 0.02 * f64::from(i)).collect();
        assert!(fit_decay(&exact).reason.is_some());
    }

    #[test]
    fn bad_input_gets_a_reason() {
        assert_eq!(
            fit_decay(&[0.1, 0.2]).reason,
            Some(NoDecay::FewIntervals { found: 1, needed: 5 })
        );
        for bad in [
            [0.1, 0.2, 0.15, 0.4, 0.5, 0.6],
            [-0.1, 0.2, 0.3, 0.4, 0.5, 0.6],
            [0.1, 0.2, 0.3, 0.4, 0.5, f64::NAN],
        ] {
            assert_eq!(fit_decay(&bad).reason, Some(NoDecay::Unsorted));
        }
    }

    #[test]
    fn roots_of_the_deviance() {
        for u in [0.01, 0.5, 0.9995, 1.0005, 1.002, 3.0] {
            let (root, slope) = deviance_root(u);
            assert!((root * root - 2.0 * (u - 1.0 - f64::ln(u))).abs() < 1e-10 * (1.0 + root * root));
            let h = 1e-6 * u;
            let by_difference = (deviance_root(u + h).0 - deviance_root(u - h).0) / (2.0 * h);
            assert!(
                (slope - by_difference).abs() < 1e-5 * slope,
                "{u}: {slope} {by_difference}"
            );
        }
        let (a, b, tau) = (0.03, 0.08, 0.05);
        let by_difference = (integral(a, b, tau * 1.00001).0 - integral(a, b, tau * 0.99999).0) / 2e-5;
        assert!((integral(a, b, tau).1 - by_difference).abs() < 1e-9);
    }
}
