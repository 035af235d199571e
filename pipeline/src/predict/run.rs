//! The rate under a drive, from a rate function with adaptation and a time constant of the rate.
//!
//! Without adaptation the rate relaxes linearly, tau dr/dt = F(t) - r with F = f0(drive). Over a stretch on which F is
//! a straight line F0 + m t the solution is exact for any length:
//!
//! ```text
//! r(h) = F0 + (r0 - F0) e^(-h/tau) + m (h - tau (1 - e^(-h/tau))),   int r dt = int F dt - tau (r(h) - r0)
//! ```
//!
//! A constant drive has constant F: one stretch to the next time asked for. On a ramp of the drive F bends; the stretch
//! is halved until F at a quarter, half and three quarters of it is within the tolerance of the straight line. r is an
//! average of past F with positive weights that sum to one, so its error is no larger than F's from its straight lines:
//! the largest found is returned. With adaptation the equations of [`crate::curve::adapting`] are integrated.

use super::drive::{Drive, Piece};
use crate::curve::adapting::Adapting;
use crate::curve::rate_function::RateFunction;

/// Halvings of a ramp beyond which the curve counts as a step.
const DEEPEST: u32 = 30;
/// Smallest tolerance, Hz: the number of stretches grows as its inverse root.
const LEAST_TOLERANCE: f64 = 1e-8;
/// Steps of the integration that a run may take.
const MOST_STEPS: f64 = 2e8;

/// What is run.
#[derive(Clone, Debug)]
pub struct RateModel {
    /// The rate function: the onset curve where there is adaptation.
    pub curve: RateFunction,
    /// Strength of adaptation, drive units per Hz; 0 for none.
    pub alpha: f64,
    /// Time constant of adaptation, seconds; not used where `alpha` is 0.
    pub tau_a_s: f64,
    /// Time constant of the rate, seconds; 0 for a rate that follows at once.
    pub tau_rate_s: f64,
}

/// Why a model cannot be run.
#[derive(Clone, Copy, Debug, PartialEq, thiserror::Error)]
pub enum RunError {
    /// A parameter out of range.
    #[error(
        "alpha {alpha}, tau_a {tau_a_s} s, tau_rate {tau_rate_s} s: alpha and tau_rate must be 0 or more, tau_a above 0"
    )]
    BadModel {
        /// Strength of adaptation.
        alpha: f64,
        /// Time constant of adaptation, seconds.
        tau_a_s: f64,
        /// Time constant of the rate, seconds.
        tau_rate_s: f64,
    },
    /// The tolerance is not positive, or below what rounding allows.
    #[error("tolerance {tolerance_hz} Hz: must be {LEAST_TOLERANCE} Hz or more")]
    BadTolerance {
        /// The tolerance, Hz.
        tolerance_hz: f64,
    },
    /// Times that do not ascend.
    #[error(
        "time {index} is {time_s} s: times must be finite, in order, and not before the start at {start_s} s"
    )]
    BadTime {
        /// 0-based time.
        index: usize,
        /// Its value, seconds.
        time_s: f64,
        /// The start, seconds.
        start_s: f64,
    },
    /// Time constants far too short for the length of the run.
    #[error(
        "{length_s} s in steps of {step_s} s are more than {MOST_STEPS} steps: split the run, or check the time constants"
    )]
    TooLong {
        /// Length of the run, seconds.
        length_s: f64,
        /// Step of the integration, seconds.
        step_s: f64,
    },
}

/// Rate and expected spikes at the times asked for.
#[derive(Clone, Debug, PartialEq)]
pub struct Predicted {
    /// Rate, Hz; at a jump of the drive, without a time constant of the rate, the value after it.
    pub rates_hz: Vec<f64>,
    /// Integral of the rate since the start: expected spikes.
    pub counts: Vec<f64>,
    /// Bound of the rate's error from halving ramps, Hz; 0 for constant pieces; `None` with adaptation, where steps are
    /// an eighth of the shortest decay time.
    pub error_hz: Option<f64>,
}

/// Runs `model` under `drive` from rest at `start_s` (rest: settled under the drive's rest value) to the ascending
/// `times_s`, each at `start_s` or later.
///
/// # Errors
/// Parameters out of range, times out of order, a run too long for its time constants.
pub fn predict(
    model: &RateModel,
    drive: &Drive,
    start_s: f64,
    times_s: &[f64],
    tolerance_hz: f64,
) -> Result<Predicted, RunError> {
    let mut before = start_s;
    for (index, time_s) in times_s.iter().enumerate() {
        if !(time_s.is_finite() && *time_s >= before) {
            return Err(RunError::BadTime {
                index,
                time_s: *time_s,
                start_s,
            });
        }
        before = *time_s;
    }
    let RateModel {
        alpha,
        tau_a_s,
        tau_rate_s,
        ..
    } = *model;
    let bad = RunError::BadModel {
        alpha,
        tau_a_s,
        tau_rate_s,
    };
    if !(alpha >= 0.0 && alpha.is_finite() && tau_rate_s >= 0.0 && tau_rate_s.is_finite()) {
        return Err(bad);
    }
    if alpha > 0.0 {
        let cell = Adapting::new(model.curve.clone(), alpha, tau_a_s, tau_rate_s).ok_or(bad)?;
        let length_s = before - start_s;
        if length_s / cell.step_s() > MOST_STEPS {
            return Err(RunError::TooLong {
                length_s,
                step_s: cell.step_s(),
            });
        }
        return Ok(with_adaptation(&cell, drive, start_s, times_s));
    }
    if !(tolerance_hz >= LEAST_TOLERANCE) {
        return Err(RunError::BadTolerance { tolerance_hz });
    }
    let mut relaxing = Relaxing {
        curve: &model.curve,
        tau: tau_rate_s,
        rate: model.curve.at(drive.rest()).rate,
        count: 0.0,
        tolerance: tolerance_hz,
        error: 0.0,
    };
    let mut predicted = Predicted {
        rates_hz: Vec::with_capacity(times_s.len()),
        counts: Vec::with_capacity(times_s.len()),
        error_hz: None,
    };
    let mut at = start_s;
    for time in times_s {
        for piece in drive.between(at, *time) {
            relaxing.piece(&piece);
        }
        at = *time;
        predicted.rates_hz.push(if tau_rate_s > 0.0 {
            relaxing.rate
        } else {
            model.curve.at(drive.at(at)).rate
        });
        predicted.counts.push(relaxing.count);
    }
    predicted.error_hz = Some(relaxing.error);
    Ok(predicted)
}

fn with_adaptation(cell: &Adapting, drive: &Drive, start_s: f64, times_s: &[f64]) -> Predicted {
    let mut state = cell.at_rest(drive.rest());
    let mut at = start_s;
    let (mut rates_hz, mut counts) = (Vec::new(), Vec::new());
    for time in times_s {
        for p in drive.between(at, *time) {
            cell.advance(&mut state, p.from, p.to, p.end_s - p.start_s);
        }
        at = *time;
        rates_hz.push(if cell.tau_rate_s() > 0.0 {
            state.rate
        } else {
            cell.curve.at(drive.at(at) - state.adaptation).rate
        });
        counts.push(state.count);
    }
    Predicted {
        rates_hz,
        counts,
        error_hz: None,
    }
}

/// The linear relaxation.
struct Relaxing<'a> {
    curve: &'a RateFunction,
    tau: f64,
    rate: f64,
    count: f64,
    tolerance: f64,
    error: f64,
}

impl Relaxing<'_> {
    fn piece(&mut self, p: &Piece) {
        let length = p.end_s - p.start_s;
        let first = self.curve.at(p.from).rate;
        if p.from == p.to {
            self.stretch(first, first, length);
        } else {
            let last = self.curve.at(p.to).rate;
            self.halve([p.from, p.to], [first, last], length, 0);
        }
    }

    fn halve(&mut self, drives: [f64; 2], targets: [f64; 2], length: f64, depth: u32) {
        let along = |part: f64| drives[0] + part * (drives[1] - drives[0]);
        let middle = self.curve.at(along(0.5)).rate;
        let miss = |part: f64, rate: f64| (rate - targets[0] - part * (targets[1] - targets[0])).abs();
        let error = miss(0.5, middle)
            .max(miss(0.25, self.curve.at(along(0.25)).rate))
            .max(miss(0.75, self.curve.at(along(0.75)).rate));
        // The first cuts are always made: a threshold may hide between the places looked at.
        if depth >= 4 && (error <= self.tolerance || depth >= DEEPEST) {
            self.error = self.error.max(error);
            self.stretch(targets[0], targets[1], length);
        } else {
            let half = along(0.5);
            self.halve([drives[0], half], [targets[0], middle], 0.5 * length, depth + 1);
            self.halve([half, drives[1]], [middle, targets[1]], 0.5 * length, depth + 1);
        }
    }

    /// A stretch on which the target is a straight line.
    fn stretch(&mut self, first: f64, last: f64, h: f64) {
        let target = 0.5 * (first + last) * h;
        if self.tau == 0.0 {
            self.rate = last;
            self.count += target;
            return;
        }
        let fallen = -(-h / self.tau).exp_m1();
        let slope = (last - first) / h;
        let next = self.rate + (first - self.rate) * fallen + slope * (h - self.tau * fallen);
        self.count += target - self.tau * (next - self.rate);
        self.rate = next;
    }
}

#[cfg(test)]
mod tests {
    #![allow(clippy::unwrap_used)]
    use super::*;
    use crate::predict::drive::Between;

    fn model(tau_rate_s: f64, alpha: f64) -> RateModel {
        RateModel {
            curve: RateFunction::from_reported(100.0, 200.0, 100.0, 20.0).unwrap(),
            alpha,
            tau_a_s: 0.1,
            tau_rate_s,
        }
    }

    fn piece(start_s: f64, end_s: f64, from: f64, to: f64) -> Piece {
        Piece {
            start_s,
            end_s,
            from,
            to,
        }
    }

    #[test]
    fn a_step_relaxes_along_its_exponential() {
        let m = model(0.02, 0.0);
        let drive = Drive::new(vec![piece(0.1, 0.6, 300.0, 300.0)], 0.0).unwrap();
        let times: Vec<f64> = (0..80).map(|i| 0.01 * f64::from(i)).collect();
        let found = predict(&m, &drive, 0.0, &times, 0.01).unwrap();
        let (low, high) = (m.curve.at(0.0).rate, m.curve.at(300.0).rate);
        for (t, r) in times.iter().zip(&found.rates_hz) {
            let exact = if *t < 0.1 {
                low
            } else if *t < 0.6 {
                high + (low - high) * (-(t - 0.1) / 0.02).exp()
            } else {
                let at_end = high + (low - high) * (-25.0_f64).exp();
                low + (at_end - low) * (-(t - 0.6) / 0.02).exp()
            };
            assert!((r - exact).abs() < 1e-9, "{t}: {r} {exact}");
        }
        // Integral = F T - tau (r - r0).
        let expected = high * 0.5 - 0.02 * (high - low) * (1.0 - (-25.0_f64).exp());
        assert!((found.counts[60] - found.counts[10] - expected).abs() < 1e-9);
        assert_eq!(found.error_hz, Some(0.0));
    }

    #[test]
    fn ramps_keep_within_the_bound_they_give() {
        let drive = Drive::new(
            vec![piece(0.0, 1.0, 0.0, 800.0), piece(1.0, 1.5, 800.0, -50.0)],
            0.0,
        )
        .unwrap();
        let times: Vec<f64> = (0..=170).map(|i| 0.01 * f64::from(i)).collect();
        for tau in [0.0, 0.003, 0.05] {
            let m = model(tau, 0.0);
            let coarse = predict(&m, &drive, 0.0, &times, 0.05).unwrap();
            let fine = predict(&m, &drive, 0.0, &times, 1e-5).unwrap();
            let bound = coarse.error_hz.unwrap();
            assert!(bound > 0.0 && bound <= 0.05);
            for i in 0..times.len() {
                assert!((coarse.rates_hz[i] - fine.rates_hz[i]).abs() <= 1.1 * bound + 2e-5);
                assert!((coarse.counts[i] - fine.counts[i]).abs() <= (1.1 * bound + 2e-5) * 1.7);
            }
        }
    }

    #[test]
    fn a_waveform_asked_often_or_seldom_gives_the_same() {
        let times: Vec<f64> = (0..2001).map(|i| 5e-4 * f64::from(i)).collect();
        let wave: Vec<f64> = times
            .iter()
            .map(|t| 200.0 + 150.0 * (12.0 * t).sin() + 80.0 * (71.0 * t).cos())
            .collect();
        let drive = Drive::sampled(&times, &wave, Between::Straight, 0.0, 1.5).unwrap();
        for (tau, alpha) in [(0.0, 0.0), (0.01, 0.0), (0.0, 2.0), (0.01, 2.0)] {
            let m = model(tau, alpha);
            let often = predict(&m, &drive, 0.0, &times, 1e-3).unwrap();
            let seldom = predict(&m, &drive, 0.0, &[0.25, 0.5, 0.9], 1e-3).unwrap();
            for (i, at) in [500, 1000, 1800].into_iter().enumerate() {
                assert!(
                    (often.rates_hz[at] - seldom.rates_hz[i]).abs() < 2e-3,
                    "{tau} {alpha}"
                );
                assert!((often.counts[at] - seldom.counts[i]).abs() < 2e-3);
            }
        }
    }

    #[test]
    fn weak_adaptation_joins_none() {
        let drive = Drive::new(vec![piece(0.0, 1.0, 0.0, 500.0)], 0.0).unwrap();
        let times = [0.1, 0.5, 1.0, 1.1];
        for tau in [0.0, 0.01] {
            let without = predict(&model(tau, 0.0), &drive, 0.0, &times, 1e-4).unwrap();
            let weak = predict(&model(tau, 1e-7), &drive, 0.0, &times, 1e-4).unwrap();
            for i in 0..4 {
                assert!((without.rates_hz[i] - weak.rates_hz[i]).abs() < 1e-2, "{tau} {i}");
                assert!((without.counts[i] - weak.counts[i]).abs() < 1e-3);
            }
        }
    }

    #[test]
    fn what_cannot_be_run_says_why() {
        let drive = Drive::new(Vec::new(), 0.0).unwrap();
        let m = model(0.0, 0.0);
        assert!(matches!(
            predict(&m, &drive, 0.0, &[0.2, 0.1], 0.01),
            Err(RunError::BadTime { index: 1, .. })
        ));
        assert!(matches!(
            predict(&m, &drive, 0.0, &[-0.1], 0.01),
            Err(RunError::BadTime { index: 0, .. })
        ));
        assert!(matches!(
            predict(&model(0.0, -1.0), &drive, 0.0, &[1.0], 0.01),
            Err(RunError::BadModel { .. })
        ));
        assert!(matches!(
            predict(&m, &drive, 0.0, &[1.0], 0.0),
            Err(RunError::BadTolerance { .. })
        ));
        assert!(matches!(
            predict(&model(1e-12, 1.0), &drive, 0.0, &[1.0], 0.01),
            Err(RunError::TooLong { .. })
        ));
    }
}
