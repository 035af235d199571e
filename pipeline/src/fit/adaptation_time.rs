//! Adaptation of one cell, from the spikes of its steps: joint fit, tau_eff of every step, tau_a of the cell.
//!
//! What the windows of onset and steady rates still see of the onset depends on tau_a, and tau_a is estimated with the
//! curve and alpha: they are found in turn until they stand still.
//!
//! tau_a has two estimates. The relation tau_eff = tau_a finf'/f0' (Benda & Herz 2003), step by step, holds near the
//! steady state; where f0' changes on the way there, the decay is no exponential and the relation is off. The full
//! equations of [`crate::curve::adapting`] have no such limit: with curve and alpha as fitted, tau_a is where the integral
//! of their rate over every interval comes closest to 1 (deviance of [`super::decay`]), each step's rate scaled freely so
//! that only the change over time counts. Rate, alpha and the two over-determine the model: where the estimates of tau_a
//! disagree, it does not describe the cell.
//!
//! A cell is taken to be rested, A = 0, at the onset of every step: steps have to be further apart than a few tau_a.

use super::adaptation::{AdaptationFit, AdaptationPoint, NoAdaptation, PARAMETERS, curve_of, fit_near};
use super::decay::{CommonDecay, LineSearch, StepDecay, deviance_root, fit_decay};
use super::estimates::{Estimate, t_quantile};
use super::objective::Point;
use crate::curve::adapting::{Adapting, State, steady};
use crate::curve::rate_function::RateFunction;
use crate::rates::{RateFrom, Response, StepRate, cell_interval_cv, fit_se, step_rates};
use crate::settings::Analysis;

/// Squared CV of one interval above which its rate is of no use: the mean of 1/x grows as 1/(1 - CV^2).
const LARGEST_DISPERSION: f64 = 0.5;
/// Fewest intervals of a step that tells tau_a.
const INTERVALS_FOR_TAU: usize = 3;
/// Rounds of curve and time constant, and the relative change at which they have settled.
const ROUNDS: usize = 12;
const SETTLED: f64 = 1e-4;
/// tau_a tried: from this part of the shortest interval to this many of the longest step.
const SHORTEST: f64 = 0.3;
const LONGEST: f64 = 20.0;

/// One step of a cell.
#[derive(Clone, Copy, Debug)]
pub struct Train<'a> {
    /// Drive, pA or nS.
    pub drive: f64,
    /// Onset, seconds.
    pub onset_s: f64,
    /// Offset, seconds, after the onset.
    pub offset_s: f64,
    /// Spikes of the step, seconds in the same time base, ascending.
    pub spikes_s: &'a [f64],
}

impl Train<'_> {
    /// Finite numbers, an offset after the onset, and ascending spikes between the two.
    fn usable(&self) -> bool {
        let inside = |t: &f64| *t >= self.onset_s && *t <= self.offset_s;
        self.drive.is_finite()
            && self.onset_s.is_finite()
            && self.offset_s.is_finite()
            && self.offset_s > self.onset_s
            && self.spikes_s.iter().all(inside)
            && self.spikes_s.windows(2).all(|w| w[1] > w[0])
    }
}

/// Why tau_a could not be estimated.
#[derive(Clone, Copy, Debug, PartialEq, thiserror::Error)]
pub enum NoTimeConstant {
    /// There is no adaptation to time.
    #[error("alpha is not above zero: no adaptation to time")]
    NoStrength,
    /// No curve and alpha to start from.
    #[error("no joint fit of onset and steady rates")]
    NoFit,
    /// Too few steps that tell it.
    #[error("{found} steps tell the change over time, {needed} are needed")]
    FewSteps {
        /// Such steps.
        found: usize,
        /// Limit.
        needed: usize,
    },
    /// The search ends at its bound.
    #[error("the change over time fits best with a time constant outside {low_s:.4} to {high_s:.1} s")]
    OutOfRange {
        /// Shortest tried, seconds.
        low_s: f64,
        /// Longest tried, seconds.
        high_s: f64,
    },
}

/// What one step says of adaptation.
#[derive(Clone, Debug)]
pub struct StepAdaptation {
    /// Steady rate over onset rate as measured, with delta-method SE; `None` without an onset interval.
    pub ratio: Option<Estimate>,
    /// The exponential of the step's rate.
    pub decay: StepDecay,
    /// Fitted rate at the onset, f0(I), Hz.
    pub onset_fitted_hz: Option<f64>,
    /// Fitted settled rate, finf(I), Hz.
    pub steady_fitted_hz: Option<f64>,
    /// tau_eff that tau_a and the fitted slopes imply, seconds.
    pub tau_eff_expected_s: Option<f64>,
}

/// Adaptation of one cell.
#[derive(Clone, Debug)]
pub struct CellAdaptation {
    /// Joint fit of curve and alpha, or why there is none.
    pub fit: Result<AdaptationFit, NoAdaptation>,
    /// The points of that fit, corrected for what their windows see; empty without one.
    pub points: Vec<AdaptationPoint>,
    /// One entry a step, in the order given.
    pub steps: Vec<StepAdaptation>,
    /// tau_a from the full equations, seconds; the interval includes what alpha leaves open.
    pub tau_a_s: Result<Estimate, NoTimeConstant>,
    /// tau_a from the relation tau_eff = tau_a finf'/f0', seconds: one tau_a for the exponentials of all
    /// steps, curve and alpha held.
    pub tau_a_by_relation_s: Result<Estimate, NoTimeConstant>,
    /// Fitted finf/f0 at the largest drive.
    pub adaptation_ratio: Option<f64>,
    /// Interval CV once adaptation is taken out.
    pub interval_cv: f64,
    /// Rounds of curve and tau_a; whether they stood still at the end.
    pub rounds: usize,
    /// See `rounds`.
    pub settled: bool,
}

/// Measures adaptation of one cell from `trains`, its steps. `settings` gives the steady part of a step.
pub fn cell_adaptation(trains: &[Train<'_>], settings: &Analysis) -> CellAdaptation {
    let relative: Vec<Vec<f64>> = trains
        .iter()
        .map(|t| t.spikes_s.iter().map(|s| s - t.onset_s).collect())
        .collect();
    let decays: Vec<StepDecay> = relative.iter().map(|spikes| fit_decay(spikes)).collect();
    let interval_cv = pooled_cv(&decays).unwrap_or_else(|| {
        let all: Vec<&[f64]> = trains.iter().map(|t| t.spikes_s).collect();
        cell_interval_cv(&all).cv
    });
    let windows: Vec<(f64, f64, &[f64])> = trains
        .iter()
        .map(|t| (t.onset_s, t.offset_s, t.spikes_s))
        .collect();
    let onset = step_rates(&windows, Response::Onset, interval_cv, settings);
    let steady_rates = step_rates(&windows, Response::Steady, interval_cv, settings);
    let dispersion = interval_cv * interval_cv;

    let mut steps: Vec<StepAdaptation> = decays
        .iter()
        .zip(onset.iter().zip(&steady_rates))
        .map(|(decay, (on, late))| StepAdaptation {
            ratio: ratio(on, late, dispersion),
            decay: *decay,
            onset_fitted_hz: None,
            steady_fitted_hz: None,
            tau_eff_expected_s: None,
        })
        .collect();
    let mut cell = CellAdaptation {
        fit: Err(NoAdaptation::Irregular {
            cv: interval_cv,
            limit: LARGEST_DISPERSION.sqrt(),
        }),
        points: Vec::new(),
        steps: Vec::new(),
        tau_a_s: Err(NoTimeConstant::NoFit),
        tau_a_by_relation_s: Err(NoTimeConstant::NoFit),
        adaptation_ratio: None,
        interval_cv,
        rounds: 0,
        settled: false,
    };
    if !trains.iter().all(Train::usable) {
        cell.fit = Err(NoAdaptation::BadNumber);
        cell.steps = steps;
        return cell;
    }
    if dispersion > LARGEST_DISPERSION {
        cell.steps = steps;
        return cell;
    }

    let mut measured: Vec<Measured> = onset
        .iter()
        .chain(&steady_rates)
        .filter(|r| r.response == Response::Steady || r.rate_from == RateFrom::Intervals)
        .map(|r| Measured::new(r, &trains[r.step], &relative[r.step], dispersion))
        .collect();
    let typical = typical_tau(&decays);
    for m in &mut measured {
        let own = decays[m.point.step]
            .decay
            .filter(|_| decays[m.point.step].reason.is_none())
            .and_then(|d| d.tau_eff_s.value);
        if let Some(tau) = own.or(typical) {
            m.point.remaining = mean_decay(m.window, tau);
        }
    }
    let timed = Timed::new(trains, &relative);
    let mut last: Option<[f64; 2]> = None;
    for round in 1..=ROUNDS {
        cell.rounds = round;
        cell.points = measured.iter().map(|m| m.point).collect();
        let before = cell.fit.as_ref().ok();
        let fit = match fit_near(&cell.points, before) {
            Ok(fit) => fit,
            Err(error) => {
                cell.fit = Err(error);
                cell.points.clear();
                cell.steps = steps;
                return cell;
            }
        };
        let found = timed.best(&fit, last.map(|l| l[1]));
        let tau = found.ok();
        cell.tau_a_s = found.map(|tau| Estimate {
            value: Some(tau),
            ..Estimate::default()
        });
        let model = timed.model(&fit, tau);
        for (m, fitted) in measured.iter_mut().zip(&fit.fitted) {
            m.update(*fitted, dispersion, model.as_ref());
        }
        let now = [fit.strength(), tau.unwrap_or(0.0)];
        cell.fit = Ok(fit);
        cell.settled = last.is_some_and(|last| {
            last.iter()
                .zip(now)
                .all(|(a, b)| (a - b).abs() <= SETTLED * b.abs())
        });
        last = Some(now);
        if cell.settled {
            break;
        }
    }
    if let (Ok(fit), Some(tau)) = (&cell.fit, cell.tau_a_s.ok().and_then(|e| e.value)) {
        cell.tau_a_s = timed.estimate(fit, tau);
    }
    if let (Ok(fit), Ok(tau)) = (&mut cell.fit, &cell.tau_a_s) {
        widen_alpha(fit, &measured, dispersion, &timed, tau);
    }
    if let Ok(fit) = &cell.fit {
        let tau = cell.tau_a_s.ok().and_then(|e| e.value);
        if let Some(curve) = fit.curve() {
            for (step, train) in steps.iter_mut().zip(trains) {
                let settled = steady(&curve, fit.strength(), train.drive);
                step.onset_fitted_hz = Some(curve.at(train.drive).rate);
                step.steady_fitted_hz = Some(settled.rate);
                step.tau_eff_expected_s = tau.map(|tau| tau * settled.time_ratio(fit.strength()));
            }
        }
        cell.tau_a_by_relation_s = by_relation(fit, trains, &relative);
        cell.adaptation_ratio = trains
            .iter()
            .map(|t| t.drive)
            .reduce(f64::max)
            .and_then(|drive| fit.adaptation_ratio(drive));
    }
    cell.steps = steps;
    cell
}

/// Adds to alpha's standard error and interval what tau_a leaves open through the windows' remaining parts: the fit is
/// repeated with tau_a one standard error shorter and longer.
fn widen_alpha(
    fit: &mut AdaptationFit,
    measured: &[Measured],
    dispersion: f64,
    timed: &Timed<'_>,
    tau: &Estimate,
) {
    let (Some(value), Some(se)) = (tau.value, tau.se) else {
        return;
    };
    let at = |sign: f64| {
        let model = timed.model(fit, Some(value * (sign * se / value).exp()));
        let points: Vec<AdaptationPoint> = measured
            .iter()
            .zip(&fit.fitted)
            .map(|(m, fitted)| {
                let mut m = *m;
                m.update(*fitted, dispersion, model.as_ref());
                m.point
            })
            .collect();
        fit_near(&points, Some(fit)).ok().map(|fit| fit.strength())
    };
    let (Some(down), Some(up)) = (at(-1.0), at(1.0)) else {
        return;
    };
    let shift = 0.5 * (up - down).abs();
    let others = t_quantile(fit.degrees) * shift;
    let alpha = fit.strength();
    fit.alpha.se = fit.alpha.se.map(|se| se.hypot(shift));
    fit.alpha.lo = fit
        .alpha
        .lo
        .map(|lo| (alpha - (alpha - lo).hypot(others)).max(0.0));
    fit.alpha.hi = fit.alpha.hi.map(|hi| alpha + (hi - alpha).hypot(others));
}

/// Root of the pooled Pearson dispersion of the steps' exponentials.
fn pooled_cv(decays: &[StepDecay]) -> Option<f64> {
    let (mut sum, mut degrees) = (0.0, 0.0);
    for decay in decays.iter().filter_map(|d| d.decay) {
        let free = decay.intervals as f64 - 3.0;
        sum += free * decay.dispersion;
        degrees += free;
    }
    (degrees > 0.0).then(|| (sum / degrees).sqrt())
}

/// Median tau_eff of the steps that determine theirs.
fn typical_tau(decays: &[StepDecay]) -> Option<f64> {
    let mut taus: Vec<f64> = decays
        .iter()
        .filter(|d| d.reason.is_none())
        .filter_map(|d| d.decay?.tau_eff_s.value)
        .collect();
    taus.sort_by(f64::total_cmp);
    taus.get(taus.len() / 2).copied()
}

fn ratio(onset: &StepRate, late: &StepRate, dispersion: f64) -> Option<Estimate> {
    if onset.rate_from != RateFrom::Intervals {
        return None;
    }
    let value = late.rate_hz / onset.rate_hz;
    let part = fit_se(late) / onset.rate_hz;
    Some(Estimate {
        value: Some(value),
        se: Some(part.hypot(value * dispersion.sqrt())),
        lo: None,
        hi: None,
    })
}

/// Mean of exp(-t/tau) over a window.
fn mean_decay([from, to]: [f64; 2], tau: f64) -> f64 {
    let x = (to - from) / tau;
    if x > 0.0 {
        (-from / tau).exp() * -(-x).exp_m1() / x
    } else {
        (-from / tau).exp()
    }
}

/// A point with what its correction needs.
#[derive(Clone, Copy)]
struct Measured {
    point: AdaptationPoint,
    /// First and last spike of the window, or the window itself without an interval: seconds from the onset.
    window: [f64; 2],
    intervals: usize,
    /// Resolution of one count, Hz.
    floor: f64,
}

impl Measured {
    fn new(rate: &StepRate, train: &Train<'_>, spikes: &[f64], dispersion: f64) -> Self {
        let start = rate.window_start_s - train.onset_s;
        let end = rate.window_end_s - train.onset_s;
        let mut window = [start, end];
        let mut value = rate.rate_hz;
        if rate.rate_from == RateFrom::Intervals {
            let first = match rate.response {
                Response::Onset => 0,
                _ => spikes.len() - rate.spikes,
            };
            window = [spikes[first], spikes[first + rate.intervals]];
            // The mean of (n - 1)/(t_n - t_1) over gamma intervals exceeds the rate by this factor.
            value *= 1.0 - dispersion / rate.intervals as f64;
        }
        Self {
            point: AdaptationPoint {
                step: rate.step,
                response: rate.response,
                point: Point {
                    drive: train.drive,
                    rate: value,
                    se: fit_se(rate),
                },
                remaining: if rate.response == Response::Onset {
                    1.0
                } else {
                    0.0
                },
            },
            window,
            intervals: rate.intervals,
            floor: 1.0 / (12.0_f64.sqrt() * (end - start)),
        }
    }

    /// Standard error from the fitted rather than the measured rate, which would give the low ones too much weight; what
    /// the window sees from the full equations.
    fn update(&mut self, fitted: f64, dispersion: f64, model: Option<&Adapting>) {
        if self.intervals > 0 {
            let noise = fitted * (dispersion / self.intervals as f64).sqrt();
            self.point.point.se = noise.hypot(self.floor);
        }
        let Some(cell) = model else {
            return;
        };
        let drive = self.point.point.drive;
        let f0 = cell.curve.at(drive).rate;
        let settled = steady(&cell.curve, cell.alpha(), drive).rate;
        if !(f0 - settled > 1e-6 * f0) {
            return;
        }
        let [from, to] = self.window;
        let mut state = State::default();
        cell.advance(&mut state, drive, drive, from);
        let before = state.count;
        cell.advance(&mut state, drive, drive, to - from);
        let mean = (state.count - before) / (to - from);
        if mean.is_finite() {
            self.point.remaining = ((mean - settled) / (f0 - settled)).clamp(0.0, 1.0);
        }
    }
}

/// The steps that tell tau_a.
struct Timed<'a> {
    steps: Vec<(f64, &'a [f64])>,
    drives: [f64; 2],
    low: f64,
    high: f64,
}

impl<'a> Timed<'a> {
    fn new(trains: &[Train<'_>], relative: &'a [Vec<f64>]) -> Self {
        let steps: Vec<(f64, &[f64])> = trains
            .iter()
            .zip(relative)
            .filter(|(_, spikes)| {
                spikes.len() > INTERVALS_FOR_TAU && spikes[0] >= 0.0 && spikes.windows(2).all(|w| w[1] > w[0])
            })
            .map(|(t, spikes)| (t.drive, spikes.as_slice()))
            .collect();
        let shortest = steps
            .iter()
            .flat_map(|(_, s)| s.windows(2).map(|w| w[1] - w[0]))
            .fold(f64::INFINITY, f64::min);
        let longest = trains.iter().map(|t| t.offset_s - t.onset_s).fold(0.0, f64::max);
        let bound = |pick: fn(f64, f64) -> f64| trains.iter().map(|t| t.drive).reduce(pick).unwrap_or(0.0);
        Self {
            steps,
            drives: [bound(f64::min), bound(f64::max)],
            low: SHORTEST * shortest,
            high: LONGEST * longest,
        }
    }

    /// Deviance and Pearson's sum with this curve, alpha and time constant.
    fn sums(&self, curve: &RateFunction, alpha: f64, tau: f64) -> [f64; 2] {
        let Some(cell) = Adapting::new(curve.clone(), alpha, tau, 0.0) else {
            return [f64::INFINITY; 2];
        };
        let mut sums = [0.0; 2];
        let mut integrals = Vec::new();
        for (drive, spikes) in &self.steps {
            integrals.clear();
            let mut state = State::default();
            let (mut at, mut before) = (0.0, 0.0);
            for (i, spike) in spikes.iter().enumerate() {
                cell.advance(&mut state, *drive, *drive, spike - at);
                if i > 0 {
                    integrals.push(state.count - before);
                }
                (at, before) = (*spike, state.count);
            }
            let scale = integrals.len() as f64 / integrals.iter().sum::<f64>();
            for u in &integrals {
                let u = scale * u;
                let root = deviance_root(u).0;
                sums[0] += root * root;
                sums[1] += (u - 1.0) * (u - 1.0);
            }
        }
        sums
    }

    fn curve(&self, parameters: &[f64; PARAMETERS]) -> Option<RateFunction> {
        let curve = curve_of(parameters)?;
        let [low, high] = self.drives;
        let deepest = parameters[4] * curve.at(high).rate;
        Some(curve.tabulated(low - deepest, high))
    }

    /// The cell as fitted, if it has a time constant.
    fn model(&self, fit: &AdaptationFit, tau: Option<f64>) -> Option<Adapting> {
        Adapting::new(self.curve(&fit.solution.parameters)?, fit.strength(), tau?, 0.0)
    }

    /// The best tau_a, seconds, looked for around `near` if that is given and positive.
    fn best(&self, fit: &AdaptationFit, near: Option<f64>) -> Result<f64, NoTimeConstant> {
        const NEEDED: usize = 2;
        let alpha = fit.strength();
        if !(alpha > 0.0) {
            return Err(NoTimeConstant::NoStrength);
        }
        let found = self.steps.len();
        if found < NEEDED {
            return Err(NoTimeConstant::FewSteps {
                found,
                needed: NEEDED,
            });
        }
        let curve = self
            .curve(&fit.solution.parameters)
            .ok_or(NoTimeConstant::NoFit)?;
        let search = LineSearch {
            cost: |ln_tau: f64| self.sums(&curve, alpha, ln_tau.exp())[0],
            low: self.low.ln(),
            high: self.high.ln(),
        };
        let near = near.filter(|tau| *tau > 0.0).map(f64::ln);
        search
            .minimum(near, 1e-5)
            .map(f64::exp)
            .ok_or(NoTimeConstant::OutOfRange {
                low_s: self.low,
                high_s: self.high,
            })
    }

    /// The best tau_a of a fit with standard error and interval.
    fn estimate(&self, fit: &AdaptationFit, tau: f64) -> Result<Estimate, NoTimeConstant> {
        let (alpha, parameters, best) = (fit.strength(), fit.solution.parameters, tau.ln());
        let found = self.steps.len();
        let curve = self.curve(&parameters).ok_or(NoTimeConstant::NoFit)?;
        let (low, high) = (self.low.ln(), self.high.ln());
        let search = LineSearch {
            cost: |ln_tau: f64| self.sums(&curve, alpha, ln_tau.exp())[0],
            low,
            high,
        };
        let [deviance, pearson] = self.sums(&curve, alpha, best.exp());
        let intervals: usize = self.steps.iter().map(|(_, s)| s.len() - 1).sum();
        let degrees = intervals as f64 - found as f64 - 1.0;
        let dispersion = (pearson / degrees).max(1e-8);
        let t = t_quantile(degrees);
        let target = deviance + t * t * dispersion;
        let own = [low, high].map(|bound| search.end(best, target, bound));
        // What alpha leaves open: the best tau_a at alpha one standard error up and down, the curve following.
        let shift = fit.covariance.filter(|c| c[4][4] > 0.0).map(|c| {
            let se = c[4][4].sqrt();
            let moved = [-1.0, 1.0].map(|sign| {
                let mut p: [f64; PARAMETERS] = std::array::from_fn(|i| parameters[i] + sign * c[i][4] / se);
                p[1] = p[1].max(0.0);
                p[4] = p[4].max(0.0);
                let curve = self.curve(&p)?;
                let search = LineSearch {
                    cost: |ln_tau: f64| self.sums(&curve, p[4], ln_tau.exp())[0],
                    low,
                    high,
                };
                search.minimum(Some(best), 1e-3)
            });
            match moved {
                [Some(down), Some(up)] => 0.5 * (up - down).abs(),
                _ => 0.0,
            }
        });
        let shift = shift.unwrap_or(0.0);
        let others = t_quantile(fit.degrees) * shift;
        let reach = |end: Option<f64>| end.map(|end| (end - best).abs().hypot(others));
        let se = match own {
            [Some(lo), Some(hi)] => Some(tau * (0.5 * (hi - lo) / t).hypot(shift)),
            _ => None,
        };
        Ok(Estimate {
            value: Some(tau),
            se,
            lo: Some(reach(own[0]).map_or(0.0, |r| (best - r).exp())),
            hi: Some(reach(own[1]).map_or(f64::INFINITY, |r| (best + r).exp())),
        })
    }
}

/// Best common tau_a of exponentials with tau_eff = tau_a finf'/f0' in every step, onset and settled rate free in each.
fn by_relation(
    fit: &AdaptationFit,
    trains: &[Train<'_>],
    relative: &[Vec<f64>],
) -> Result<Estimate, NoTimeConstant> {
    const NEEDED: usize = 2;
    let alpha = fit.strength();
    if !(alpha > 0.0) {
        return Err(NoTimeConstant::NoStrength);
    }
    let curve = fit.curve().ok_or(NoTimeConstant::NoFit)?;
    let mut common = CommonDecay::default();
    for (train, spikes) in trains.iter().zip(relative) {
        common.add(spikes, steady(&curve, alpha, train.drive).time_ratio(alpha));
    }
    let found = common.steps();
    if found < NEEDED {
        return Err(NoTimeConstant::FewSteps {
            found,
            needed: NEEDED,
        });
    }
    let (low, high) = common.range();
    common.estimate().ok_or(NoTimeConstant::OutOfRange {
        low_s: low,
        high_s: high,
    })
}

#[cfg(test)]
mod tests {
    #![allow(clippy::unwrap_used)]
    use super::*;
    use crate::curve::smoothed_hyperbola::evaluate;
    use rand::SeedableRng;
    use rand_chacha::ChaCha8Rng;
    use rand_distr::{Distribution, Gamma};

    /// Max rate 110 Hz, half-rise 180, threshold 60, noise 15 pA; steps of 20 us with A exact for the step's rate.
    /// The rate is read from a table of 1/8 pA, in a straight line between its entries.
    fn rate_table() -> impl Fn(f64) -> f64 {
        let at = |x: f64| 110.0 * evaluate((x - 60.0) / 180.0, 15.0 / 180.0).h;
        let table: Vec<f64> = (0..12_000).map(|i| at(-700.0 + 0.125 * f64::from(i))).collect();
        move |x| {
            let place = (x + 700.0) * 8.0;
            let i = place as usize;
            table[i] + (place - i as f64) * (table[i + 1] - table[i])
        }
    }

    fn spikes(
        rate_at: &impl Fn(f64) -> f64,
        drive: f64,
        alpha: f64,
        tau: f64,
        length: f64,
        mut mark: impl FnMut() -> f64,
    ) -> Vec<f64> {
        let dt = 2e-5;
        let keep = (-dt / tau).exp();
        let (mut a, mut t, mut count, mut target) = (0.0, 0.0, 0.0, mark());
        let mut list = Vec::new();
        while t < length {
            let rate = rate_at(drive - a);
            let next = count + rate * dt;
            while next > target {
                list.push(t + dt * (target - count) / (next - count));
                target += mark();
            }
            a = alpha * rate + (a - alpha * rate) * keep;
            count = next;
            t += dt;
        }
        list
    }

    fn cell(alpha: f64, tau: f64, repeats: usize, shape: Option<f64>, seed: u64) -> CellAdaptation {
        let mut rng = ChaCha8Rng::seed_from_u64(seed);
        let gamma = Gamma::new(shape.unwrap_or(1.0), 1.0 / shape.unwrap_or(1.0)).unwrap();
        let rate_at = rate_table();
        let mut all = Vec::new();
        for i in 0..16 * repeats {
            let drive = 45.0 * (i / repeats) as f64;
            // A deterministic cell starts each step at its own phase.
            let mut first = Some((0.5 + i as f64 * 0.618_034).fract());
            all.push((
                drive,
                spikes(&rate_at, drive, alpha, tau, 1.0, || match shape {
                    Some(_) => gamma.sample(&mut rng),
                    None => first.take().unwrap_or(1.0),
                }),
            ));
        }
        let trains: Vec<Train> = all
            .iter()
            .map(|(drive, spikes)| Train {
                drive: *drive,
                onset_s: 0.0,
                offset_s: 1.0,
                spikes_s: spikes,
            })
            .collect();
        cell_adaptation(&trains, &Analysis::default())
    }

    #[test]
    fn a_regular_cell_gives_alpha_and_tau_back() {
        for (alpha, tau) in [(1.5, 0.1), (4.0, 0.15), (0.7, 0.06)] {
            let cell = cell(alpha, tau, 1, None, 0);
            let fit = cell.fit.as_ref().unwrap();
            let (a, t) = (fit.strength(), cell.tau_a_s.unwrap());
            let relation = cell.tau_a_by_relation_s.unwrap().value.unwrap();
            println!(
                "alpha {alpha}: {a:.4} [{:.3}, {:.3}]; tau {tau}: {:.4} [{:.4}, {:.4}], relation {relation:.4}; cv {:.4}, {} rounds {}",
                fit.alpha.lo.unwrap(),
                fit.alpha.hi.unwrap(),
                t.value.unwrap(),
                t.lo.unwrap(),
                t.hi.unwrap(),
                cell.interval_cv,
                cell.rounds,
                cell.settled
            );
            assert!((a / alpha - 1.0).abs() < 0.1);
            assert!((t.value.unwrap() / tau - 1.0).abs() < 0.1);
            // Near the steady state the relation is exact; under strong adaptation the decay is no exponential.
            assert!((relation / tau - 1.0).abs() < if alpha < 2.0 { 0.1 } else { 0.3 });
            assert!(cell.settled);
        }
    }

    #[test]
    fn irregular_cells_give_them_back_too() {
        let (alpha, tau) = (2.0, 0.12);
        let (mut alphas, mut taus, mut relations, mut hits) = (vec![], vec![], vec![], [0; 3]);
        for seed in 0..24 {
            let cell = cell(alpha, tau, 2, Some(64.0), seed);
            let fit = cell.fit.as_ref().unwrap();
            let (t, r) = (cell.tau_a_s.unwrap(), cell.tau_a_by_relation_s.unwrap());
            let inside =
                |e: &Estimate, truth: f64| usize::from(e.lo.unwrap() <= truth && truth <= e.hi.unwrap());
            hits[0] += inside(&fit.alpha, alpha);
            hits[1] += inside(&t, tau);
            hits[2] += inside(&r, tau);
            alphas.push(fit.strength() / alpha);
            taus.push(t.value.unwrap() / tau);
            relations.push(r.value.unwrap() / tau);
        }
        for (name, list) in [
            ("alpha", &mut alphas),
            ("tau", &mut taus),
            ("relation", &mut relations),
        ] {
            list.sort_by(f64::total_cmp);
            println!("{name}: {:.3} .. {:.3} .. {:.3}", list[0], list[12], list[23]);
        }
        println!("covered {hits:?} of 24");
        for (list, limit) in [(alphas, 0.1), (taus, 0.1), (relations, 0.2)] {
            assert!((list[12] - 1.0).abs() < limit);
        }
        assert!(hits.iter().all(|h| *h >= 20));
    }

    #[test]
    fn without_adaptation_there_is_no_time_constant_and_a_reason() {
        let cell = cell(0.0, 0.1, 2, Some(16.0), 7);
        let fit = cell.fit.as_ref().unwrap();
        assert!(fit.alpha.lo.unwrap() < 0.1, "{:?}", fit.alpha);
        let nothing = cell_adaptation(&[], &Analysis::default());
        assert!(nothing.fit.is_err());
        assert!(matches!(nothing.tau_a_s, Err(NoTimeConstant::NoFit)));
    }

    #[test]
    fn nothing_in_the_input_makes_it_panic() {
        let good: Vec<f64> = (1..30).map(|i| 0.03 * f64::from(i)).collect();
        let mut backwards = good.clone();
        backwards.reverse();
        let cases: [(f64, f64, Vec<f64>); 8] = [
            (f64::NAN, 1.0, good.clone()),
            (f64::INFINITY, 1.0, good.clone()),
            (100.0, f64::INFINITY, good.clone()),
            (100.0, -1.0, good.clone()),
            (100.0, 1.0, backwards),
            (100.0, 1.0, vec![f64::NAN; 9]),
            (100.0, 1.0, vec![0.5; 9]),
            (100.0, 1.0, [&good[..], &[f64::INFINITY]].concat()),
        ];
        for (drive, offset_s, spikes) in &cases {
            let mut trains: Vec<Train> = (0..12)
                .map(|i| Train {
                    drive: 40.0 * f64::from(i),
                    onset_s: 0.0,
                    offset_s: 1.0,
                    spikes_s: if i > 2 { &good } else { &[] },
                })
                .collect();
            trains[7] = Train {
                drive: *drive,
                onset_s: 0.0,
                offset_s: *offset_s,
                spikes_s: spikes,
            };
            let found = cell_adaptation(&trains, &Analysis::default());
            assert_eq!(found.steps.len(), 12);
            assert_eq!(found.fit.unwrap_err(), NoAdaptation::BadNumber);
        }
    }

    #[test]
    fn poisson_firing_is_refused() {
        let cell = cell(1.0, 0.1, 2, Some(1.0), 7);
        assert!(
            matches!(cell.fit, Err(NoAdaptation::Irregular { .. })),
            "{:?}",
            cell.interval_cv
        );
    }
}
