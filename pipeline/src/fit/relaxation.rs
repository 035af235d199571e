//! How fast the rate follows its target at the onset of steps: tau_rate dr/dt = f(I) - r.
//!
//! Under a constant drive r(t) = F + (r_before - F) exp(-t/tau_rate), with r_before the rate before the step. One tau_rate is
//! fitted to all steps of a cell, the target F of each step free, by the deviance of [`super::decay`] over the intervals.
//! Where the cell adapts, onset and steady rates differ and the rate falls instead of rising: the cell is then refused
//! with that reason, since the two changes over time cannot be told apart from intervals alone.
//!
//! The first spike of a step is the most telling one and the least certain: it comes when the integral of the rate
//! passes what was left to go at the onset, a full unit for a cell at rest that integrates its input, anything between
//! 0 and 1 for one that fires already or by chance. [`FirstSpike`] says which is meant; left out is the cautious choice.

use super::decay::{INTERVALS_NEEDED, LineSearch, deviance_root};
use super::estimates::{Estimate, t_quantile};

/// What the time from the onset to the first spike counts for.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub enum FirstSpike {
    /// Nothing: intervals between spikes only.
    LeftOut,
    /// A full interval: the cell starts from rest and integrates.
    FullInterval,
}

/// One step: rate before it, and its spikes.
#[derive(Clone, Copy, Debug)]
pub struct Onset<'a> {
    /// Rate before the step, Hz; 0 for a silent cell.
    pub rate_before_hz: f64,
    /// Spikes, seconds from the onset, ascending.
    pub spikes_s: &'a [f64],
}

/// Why there is no tau_rate.
#[derive(Clone, Copy, Debug, PartialEq, thiserror::Error)]
pub enum NoRelaxation {
    /// Too few steps.
    #[error("{found} steps have {INTERVALS_NEEDED} intervals or more, {needed} are needed")]
    FewSteps {
        /// Such steps.
        found: usize,
        /// Limit.
        needed: usize,
    },
    /// The rate is there at once, or falls: a time constant of zero is not excluded.
    #[error(
        "intervals show no slow rise of the rate after the onset: it follows within {within_s:.4} s, or adapts"
    )]
    AtOnce {
        /// Upper end of the interval of tau_rate, seconds; the shortest tried where no rise at all fits best.
        within_s: f64,
    },
    /// The time constant is as long as the steps.
    #[error("the rate has not settled by the end of the steps: the time constant is not determined")]
    NotSettled,
}

/// The time constant of the rate.
#[derive(Clone, Debug, PartialEq)]
pub struct Relaxation {
    /// tau_rate, seconds, with profile interval; its upper end may be infinite.
    pub tau_rate_s: Estimate,
    /// Target rate of each step, Hz, in the order given; `None` for a step with too few intervals.
    pub targets_hz: Vec<Option<f64>>,
    /// Squared CV of the intervals in the fitted rate's own time.
    pub dispersion: f64,
}

/// Shortest and longest tau_rate of the search: a part of the shortest interval, the longest time to a last spike.
const SHORTEST: f64 = 0.02;
const LONGEST: f64 = 1.0;

/// Integral of exp(-t/tau) from a to b.
fn faded(a: f64, b: f64, tau: f64) -> f64 {
    tau * (-a / tau).exp() * -(-(b - a) / tau).exp_m1()
}

struct Problem<'a> {
    steps: Vec<(f64, Vec<[f64; 2]>)>,
    given: &'a [Onset<'a>],
}

impl Problem<'_> {
    /// Target of one step at this tau: the root of sum (u - 1) dlnu/dF = 0, by Newton steps on ln F.
    fn target(before: f64, intervals: &[[f64; 2]], tau: f64) -> f64 {
        let length: f64 = intervals.iter().map(|[a, b]| b - a).sum();
        let mut target = intervals.len() as f64 / length;
        for _ in 0..60 {
            let (mut pull, mut curvature) = (0.0, 0.0);
            for [a, b] in intervals {
                let fade = faded(*a, *b, tau);
                let part = target * ((b - a) - fade);
                let u = part + before * fade;
                pull += part * (1.0 / u - 1.0);
                curvature += (part / u) * (part / u);
            }
            let step = (pull / curvature).clamp(-1.0, 1.0);
            target *= step.exp();
            if step.abs() < 1e-12 {
                break;
            }
        }
        target
    }

    fn sums(&self, ln_tau: f64) -> [f64; 2] {
        let tau = ln_tau.exp();
        let mut sums = [0.0; 2];
        for (before, intervals) in &self.steps {
            let target = Self::target(*before, intervals, tau);
            for [a, b] in intervals {
                let fade = faded(*a, *b, tau);
                let u = target * ((b - a) - fade) + before * fade;
                let root = deviance_root(u).0;
                sums[0] += root * root;
                sums[1] += (u - 1.0) * (u - 1.0);
            }
        }
        sums
    }
}

/// The intervals that count, or `None` for a step that has too few or whose times do not ascend from the onset.
fn counted(onset: &Onset<'_>, first: FirstSpike) -> Option<Vec<[f64; 2]>> {
    let spikes = onset.spikes_s;
    let good = spikes.len() > INTERVALS_NEEDED
        && onset.rate_before_hz >= 0.0
        && onset.rate_before_hz.is_finite()
        && spikes[0] > 0.0
        && spikes[spikes.len() - 1].is_finite()
        && spikes.windows(2).all(|w| w[1] > w[0]);
    good.then(|| {
        let start = (first == FirstSpike::FullInterval).then_some([0.0, spikes[0]]);
        start
            .into_iter()
            .chain(spikes.windows(2).map(|w| [w[0], w[1]]))
            .collect()
    })
}

/// Fits one time constant of the rate to the onsets of a cell's steps.
///
/// # Errors
/// Fewer than two steps with enough intervals, a rate that is there at once (or falls), one that has not settled: why.
pub fn fit_relaxation(onsets: &[Onset<'_>], first: FirstSpike) -> Result<Relaxation, NoRelaxation> {
    const NEEDED: usize = 2;
    let steps: Vec<(f64, Vec<[f64; 2]>)> = onsets
        .iter()
        .filter_map(|onset| Some((onset.rate_before_hz, counted(onset, first)?)))
        .collect();
    let found = steps.len();
    if found < NEEDED {
        return Err(NoRelaxation::FewSteps {
            found,
            needed: NEEDED,
        });
    }
    let all = || steps.iter().flat_map(|(_, intervals)| intervals.iter());
    let shortest = all().map(|[a, b]| b - a).fold(f64::INFINITY, f64::min);
    let longest = all().map(|[_, b]| *b).fold(0.0, f64::max);
    let count = all().count();
    let (low, high) = ((SHORTEST * shortest).ln(), (LONGEST * longest).ln());
    let problem = Problem { steps, given: onsets };
    let search = LineSearch {
        cost: |ln_tau: f64| problem.sums(ln_tau)[0],
        low,
        high,
    };
    let Some(best) = search.minimum(None, 1e-8) else {
        return Err(if problem.sums(low)[0] <= problem.sums(high)[0] {
            NoRelaxation::AtOnce { within_s: low.exp() }
        } else {
            NoRelaxation::NotSettled
        });
    };
    let [deviance, pearson] = problem.sums(best);
    let degrees = count as f64 - found as f64 - 1.0;
    let dispersion = (pearson / degrees).max(1e-8);
    let t = t_quantile(degrees);
    let target = deviance + t * t * dispersion;
    let [lo, hi] = [low, high].map(|bound| search.end(best, target, bound));
    let tau = best.exp();
    if lo.is_none() {
        let within_s = hi.map_or(f64::INFINITY, f64::exp);
        return Err(NoRelaxation::AtOnce { within_s });
    }
    let targets_hz = problem
        .given
        .iter()
        .map(|onset| {
            counted(onset, first).map(|intervals| Problem::target(onset.rate_before_hz, &intervals, tau))
        })
        .collect();
    Ok(Relaxation {
        tau_rate_s: Estimate {
            value: Some(tau),
            se: lo.zip(hi).map(|(lo, hi)| tau * 0.5 * (hi - lo) / t),
            lo: lo.map(f64::exp),
            hi: Some(hi.map_or(f64::INFINITY, f64::exp)),
        },
        targets_hz,
        dispersion,
    })
}

#[cfg(test)]
mod tests {
    #![allow(clippy::unwrap_used)]
    use super::*;
    use rand::SeedableRng;
    use rand_chacha::ChaCha8Rng;
    use rand_distr::{Distribution, Gamma};

    /// Spikes where the integral of F (1 - exp(-t/tau)) passes the running sum of `marks`.
    fn train(target: f64, tau: f64, length: f64, mut mark: impl FnMut() -> f64) -> Vec<f64> {
        let count = |t: f64| target * t + target * tau * (-t / tau).exp_m1();
        let (mut spikes, mut sum) = (Vec::new(), mark());
        while sum < count(length) {
            let (mut low, mut high) = (0.0, length);
            for _ in 0..70 {
                let middle = 0.5 * (low + high);
                if count(middle) < sum {
                    low = middle;
                } else {
                    high = middle;
                }
            }
            spikes.push(0.5 * (low + high));
            sum += mark();
        }
        spikes
    }

    #[test]
    fn an_exact_rise_gives_its_time_constant_and_targets_back() {
        for first in [FirstSpike::LeftOut, FirstSpike::FullInterval] {
            for tau in [0.02, 0.05] {
                let trains: Vec<Vec<f64>> = [30.0, 60.0, 90.0]
                    .map(|target| train(target, tau, 0.8, || 1.0))
                    .into();
                let onsets: Vec<Onset> = trains
                    .iter()
                    .map(|spikes| Onset {
                        rate_before_hz: 0.0,
                        spikes_s: spikes,
                    })
                    .collect();
                let found = fit_relaxation(&onsets, first).unwrap();
                assert!((found.tau_rate_s.value.unwrap() / tau - 1.0).abs() < 1e-4);
                for (target, truth) in found.targets_hz.iter().zip([30.0, 60.0, 90.0]) {
                    assert!((target.unwrap() / truth - 1.0).abs() < 1e-5);
                }
            }
        }
    }

    #[test]
    fn intervals_cover_with_irregular_firing() {
        let mut rng = ChaCha8Rng::seed_from_u64(5);
        let gamma = Gamma::new(25.0, 1.0 / 25.0).unwrap();
        let (mut hits, mut taus) = (0, Vec::new());
        for _ in 0..60 {
            let trains: Vec<Vec<f64>> = (1..13)
                .map(|i| train(10.0 * f64::from(i), 0.04, 1.0, || gamma.sample(&mut rng)))
                .collect();
            let onsets: Vec<Onset> = trains
                .iter()
                .map(|spikes| Onset {
                    rate_before_hz: 0.0,
                    spikes_s: spikes,
                })
                .collect();
            let tau = fit_relaxation(&onsets, FirstSpike::FullInterval)
                .unwrap()
                .tau_rate_s;
            hits += usize::from(tau.lo.unwrap() <= 0.04 && 0.04 <= tau.hi.unwrap());
            taus.push(tau.value.unwrap());
        }
        taus.sort_by(f64::total_cmp);
        println!("covered {hits} of 60, median {}", taus[30]);
        assert!(hits >= 53);
        assert!((taus[30] / 0.04 - 1.0).abs() < 0.05);
    }

    #[test]
    fn a_rate_that_is_there_at_once_is_said_to_be() {
        let steady: Vec<f64> = (1..30).map(|i| 0.02 * f64::from(i)).collect();
        let onset = Onset {
            rate_before_hz: 0.0,
            spikes_s: &steady,
        };
        let found = fit_relaxation(&[onset; 3], FirstSpike::LeftOut);
        assert!(
            matches!(found, Err(NoRelaxation::AtOnce { within_s }) if within_s < 0.005),
            "{found:?}"
        );
        // A rate that falls.
        let falling: Vec<f64> = (1..30)
            .map(|i| 0.01 * f64::from(i) * (1.0 + 0.03 * f64::from(i)))
            .collect();
        let onset = Onset {
            rate_before_hz: 0.0,
            spikes_s: &falling,
        };
        assert!(matches!(
            fit_relaxation(&[onset; 3], FirstSpike::LeftOut),
            Err(NoRelaxation::AtOnce { .. })
        ));
        assert_eq!(
            fit_relaxation(&[onset], FirstSpike::FullInterval),
            Err(NoRelaxation::FewSteps { found: 1, needed: 2 })
        );
    }
}
