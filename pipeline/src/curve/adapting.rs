//! A rate function with spike-frequency adaptation (Benda & Herz 2003, *Neural Comput* 15:2523) and, if wanted, a time
//! constant of the rate itself.
//!
//! ```text
//! tau_rate dr/dt = f0(I - A) - r       (r = f0(I - A) without tau_rate)
//! tau_a    dA/dt = alpha r - A         A in the unit of the drive, alpha in drive units per Hz
//! ```
//!
//! At rest r = finf(I) = f0(I - alpha finf), so finf' = f0'/(1 + alpha f0'); near it the rate moves with
//! tau_eff = tau_a/(1 + alpha f0') = tau_a finf'/f0', both slopes f0' at I - A.

use super::rate_function::RateFunction;

/// Where the rate settles under a constant drive.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Steady {
    /// Rate, Hz: the solution of f = f0(I - alpha f).
    pub rate: f64,
    /// Slope f0' at I - A, Hz per drive unit.
    pub onset_slope: f64,
    /// Slope finf' of the steady curve, Hz per drive unit.
    pub slope: f64,
}

impl Steady {
    /// finf'/f0' = 1/(1 + alpha f0'): tau_eff as a fraction of tau_a.
    pub fn time_ratio(&self, alpha: f64) -> f64 {
        1.0 / (1.0 + alpha * self.onset_slope)
    }
}

/// Solves f = f0(I - alpha f) at `drive` for `alpha` >= 0 (drive units per Hz).
///
/// The right side falls with f, so there is one solution, between 0 and f0(I): Newton steps inside that bracket.
pub fn steady(curve: &RateFunction, alpha: f64, drive: f64) -> Steady {
    let mut at = curve.at(drive);
    let (mut low, mut high) = (0.0, at.rate);
    let mut rate = at.rate / (1.0 + alpha * at.slope);
    if alpha > 0.0 {
        for _ in 0..100 {
            at = curve.at(drive - alpha * rate);
            let miss = rate - at.rate;
            if miss > 0.0 {
                high = rate;
            } else {
                low = rate;
            }
            let newton = rate - miss / (1.0 + alpha * at.slope);
            // Newton doubles its digits: the step after one this short is lost in rounding.
            let done = (newton - rate).abs() <= 1e-9 * high;
            let next = if done || (newton > low && newton < high) {
                newton
            } else {
                0.5 * (low + high)
            };
            rate = next.max(0.0);
            if done || high - low <= 1e-15 * high {
                break;
            }
        }
        at = curve.at(drive - alpha * rate);
    }
    Steady {
        rate,
        onset_slope: at.slope,
        slope: at.slope / (1.0 + alpha * at.slope),
    }
}

/// Steps of the integration in the time in which the fastest part of the system falls to 1/e.
const STEPS_PER_DECAY: f64 = 8.0;
/// Fastest part that is resolved, in units of 1/tau_a + 1/tau_rate. A curve that rises as a step under adaptation
/// settles faster than anything measured; there the integration keeps the longer step.
const FASTEST: f64 = 512.0;

/// Change of A in a step, as a fraction of A, below which it has settled.
const AT_REST: f64 = 1e-10;

/// An adapting cell.
#[derive(Clone, Debug)]
pub struct Adapting {
    /// The onset curve f0.
    pub curve: RateFunction,
    /// Strength of adaptation, drive units per Hz.
    alpha: f64,
    /// Time constant of adaptation, seconds.
    tau_a_s: f64,
    /// Time constant of the rate, seconds; 0 for a rate that follows at once.
    tau_rate_s: f64,
    /// Longest step of the integration, seconds.
    step_s: f64,
}

/// Where an adapting cell is.
#[derive(Clone, Copy, Debug, Default, PartialEq)]
pub struct State {
    /// Adaptation A, drive units.
    pub adaptation: f64,
    /// Rate r, Hz. Without a time constant of the rate it is set by each integration, to the value at its end.
    pub rate: f64,
    /// Integral of the rate since the start: expected spikes.
    pub count: f64,
}

impl Adapting {
    /// `alpha` in drive units per Hz, time constants in seconds. `None` unless alpha is finite and not negative,
    /// `tau_a_s` finite and positive, and `tau_rate_s` finite and not negative (0: the rate follows at once).
    pub fn new(curve: RateFunction, alpha: f64, tau_a_s: f64, tau_rate_s: f64) -> Option<Self> {
        let good = alpha.is_finite()
            && alpha >= 0.0
            && tau_a_s.is_finite()
            && tau_a_s > 0.0
            && tau_rate_s.is_finite()
            && tau_rate_s >= 0.0;
        let strength = alpha * curve.initial_gain();
        let (plain, fastest) = if tau_rate_s > 0.0 {
            let plain = 1.0 / tau_a_s + 1.0 / tau_rate_s;
            (plain, plain + (strength / (tau_a_s * tau_rate_s)).sqrt())
        } else {
            (1.0 / tau_a_s, (1.0 + strength) / tau_a_s)
        };
        let step_s = 1.0 / (STEPS_PER_DECAY * fastest.min(FASTEST * plain));
        (good && step_s > 0.0).then_some(Self {
            curve,
            alpha,
            tau_a_s,
            tau_rate_s,
            step_s,
        })
    }

    /// Strength of adaptation, drive units per Hz.
    pub fn alpha(&self) -> f64 {
        self.alpha
    }

    /// Time constant of adaptation, seconds.
    pub fn tau_a_s(&self) -> f64 {
        self.tau_a_s
    }

    /// Time constant of the rate, seconds; 0 for none.
    pub fn tau_rate_s(&self) -> f64 {
        self.tau_rate_s
    }

    /// Longest step of the integration, seconds.
    pub fn step_s(&self) -> f64 {
        self.step_s
    }

    /// The state at rest under a constant `drive`, with a count of 0.
    pub fn at_rest(&self, drive: f64) -> State {
        let rate = steady(&self.curve, self.alpha, drive).rate;
        State {
            adaptation: self.alpha * rate,
            rate,
            count: 0.0,
        }
    }

    /// Moves `state` on by `duration` seconds under a drive that goes in a straight line from `from` to `to`.
    ///
    /// Classical Runge-Kutta steps of at most an eighth of the shortest decay time: each is off by less than
    /// (1/8)^5/120 = 3e-7 of what moves in it, as long as the noise smooths the threshold over the way A goes in a step.
    pub fn advance(&self, state: &mut State, from: f64, to: f64, duration: f64) {
        if !(duration > 0.0) {
            return;
        }
        let steps = (duration / self.step_s).ceil().max(1.0);
        let h = duration / steps;
        let per_step = (to - from) / steps;
        for i in 0..steps as u64 {
            let begin = from + per_step * i as f64;
            let drives = [begin, begin + 0.5 * per_step, begin + per_step];
            if self.tau_rate_s > 0.0 {
                self.coupled_step(state, drives, h);
            } else {
                let before = state.adaptation;
                self.instant_step(state, drives, h);
                // At rest nothing moves any more: the rest of a long step is a straight line.
                if per_step == 0.0 && (state.adaptation - before).abs() <= AT_REST * before.abs() {
                    let rate = self.curve.at(to - state.adaptation).rate;
                    state.count += rate * (duration - h * (i + 1) as f64);
                    break;
                }
            }
        }
        if self.tau_rate_s == 0.0 {
            state.rate = self.curve.at(to - state.adaptation).rate;
        }
    }

    /// One step where the rate follows at once: A and the count move.
    fn instant_step(&self, state: &mut State, [begin, middle, end]: [f64; 3], h: f64) {
        let a = state.adaptation;
        let slope = |a: f64, drive: f64| {
            let rate = self.curve.at(drive - a).rate;
            ((self.alpha * rate - a) / self.tau_a_s, rate)
        };
        let (k1, r1) = slope(a, begin);
        let (k2, r2) = slope(a + 0.5 * h * k1, middle);
        let (k3, r3) = slope(a + 0.5 * h * k2, middle);
        let (k4, r4) = slope(a + h * k3, end);
        state.adaptation = a + h / 6.0 * (k1 + 2.0 * (k2 + k3) + k4);
        state.count += h / 6.0 * (r1 + 2.0 * (r2 + r3) + r4);
    }

    /// One step where the rate has its own time constant.
    fn coupled_step(&self, state: &mut State, [begin, middle, end]: [f64; 3], h: f64) {
        let (a, r) = (state.adaptation, state.rate);
        let slope = |a: f64, r: f64, drive: f64| {
            (
                (self.alpha * r - a) / self.tau_a_s,
                (self.curve.at(drive - a).rate - r) / self.tau_rate_s,
            )
        };
        let (a1, r1) = slope(a, r, begin);
        let (a2, r2) = slope(a + 0.5 * h * a1, r + 0.5 * h * r1, middle);
        let (a3, r3) = slope(a + 0.5 * h * a2, r + 0.5 * h * r2, middle);
        let (a4, r4) = slope(a + h * a3, r + h * r3, end);
        state.adaptation = a + h / 6.0 * (a1 + 2.0 * (a2 + a3) + a4);
        state.rate = r + h / 6.0 * (r1 + 2.0 * (r2 + r3) + r4);
        // The same rule for the integral of r over the step.
        state.count += h * (r + h / 6.0 * (r1 + r2 + r3));
    }
}

#[cfg(test)]
mod tests {
    #![allow(clippy::unwrap_used)]
    use super::*;

    #[test]
    fn steady_rate_of_the_line_and_the_hyperbola() {
        // f0 = a (I - I0): finf = a (I - I0)/(1 + alpha a), time ratio 1/(1 + alpha a). 100 Hz/nA, 0.2, 0.02, 1 nA.
        let line = RateFunction::new(0.01, 0.0, 0.2, 0.0).unwrap();
        let s = steady(&line, 0.02, 1.0);
        assert!((s.rate - 80.0 / 3.0).abs() < 1e-12 && (s.time_ratio(0.02) - 1.0 / 3.0).abs() < 1e-12);
        // Hyperbola: the smaller root of alpha f^2 - f (x + k + alpha R) + R x = 0.
        let (r, k, alpha, x): (f64, f64, f64, f64) = (100.0, 200.0, 3.0, 350.0);
        let curve = RateFunction::from_reported(r, k, 50.0, 0.0).unwrap();
        let b = x + k + alpha * r;
        let root = (b - (b * b - 4.0 * alpha * r * x).sqrt()) / (2.0 * alpha);
        assert!((steady(&curve, alpha, 400.0).rate - root).abs() < 1e-11);
        assert_eq!(steady(&curve, alpha, 10.0).rate, 0.0);
        assert!((steady(&curve, 0.0, 400.0).rate - curve.at(400.0).rate).abs() < 1e-12);
    }

    #[test]
    fn a_line_adapts_along_its_exponential() {
        let line = RateFunction::new(0.01, 0.0, 0.2, 0.0).unwrap();
        let cell = Adapting::new(line, 0.02, 0.1, 0.0).unwrap();
        let (finf, f0, tau) = (80.0 / 3.0, 80.0, 0.1 / 3.0);
        let mut state = State::default();
        let mut t = 0.0;
        for piece in [0.001, 0.02, 0.05, 0.3] {
            cell.advance(&mut state, 1.0, 1.0, piece);
            t += piece;
            let decay = (-t / tau).exp();
            let count = finf * t + (f0 - finf) * tau * (1.0 - decay);
            assert!((state.rate - finf - (f0 - finf) * decay).abs() < 1e-4, "{t}");
            assert!((state.count - count).abs() < 1e-5, "{t}");
        }
        let rest = cell.at_rest(1.0);
        assert!((rest.rate - finf).abs() < 1e-9 && (rest.adaptation - 0.02 * finf).abs() < 1e-12);
    }

    #[test]
    fn half_the_step_gives_the_same() {
        for tau_rate in [0.0, 0.004] {
            let curve = RateFunction::from_reported(100.0, 200.0, 50.0, 20.0).unwrap();
            let cell = Adapting::new(curve, 4.0, 0.1, tau_rate).unwrap();
            let mut finer = cell.clone();
            finer.step_s /= 4.0;
            let (mut a, mut b) = (State::default(), State::default());
            for (from, to, duration) in [(300.0, 300.0, 0.013), (300.0, 0.0, 0.2), (0.0, 500.0, 0.31)] {
                cell.advance(&mut a, from, to, duration);
                finer.advance(&mut b, from, to, duration);
                assert!((a.rate - b.rate).abs() < 1e-4, "{tau_rate}: {a:?} {b:?}");
                assert!((a.count - b.count).abs() < 1e-5);
            }
        }
    }

    #[test]
    fn a_long_step_ends_in_a_straight_line() {
        let curve = RateFunction::from_reported(100.0, 200.0, 50.0, 20.0).unwrap();
        let cell = Adapting::new(curve, 2.0, 0.1, 0.0).unwrap();
        let (mut long, mut pieces) = (State::default(), State::default());
        cell.advance(&mut long, 400.0, 400.0, 1e5);
        for _ in 0..50 {
            cell.advance(&mut pieces, 400.0, 400.0, 0.1);
        }
        let rest = cell.at_rest(400.0);
        assert!((long.rate - rest.rate).abs() < 1e-7 && (pieces.rate - rest.rate).abs() < 1e-7);
        let expected = pieces.count + rest.rate * (1e5 - 5.0);
        assert!((long.count / expected - 1.0).abs() < 1e-8);
    }

    #[test]
    fn bad_numbers_are_refused() {
        let curve = RateFunction::from_reported(100.0, 200.0, 50.0, 20.0).unwrap();
        for (alpha, tau, tau_rate) in [
            (-1.0, 0.1, 0.0),
            (1.0, 0.0, 0.0),
            (1.0, 0.1, -0.1),
            (f64::NAN, 0.1, 0.0),
        ] {
            assert!(Adapting::new(curve.clone(), alpha, tau, tau_rate).is_none());
        }
    }
}
