//! Where the searches of the rival curves begin, and their limits. Drives are in units of their range, rates in units
//! of the peak. None is random.

use super::objective::Levels;
use super::starts::thresholds;
use crate::curve::RateFunction;
use crate::curve::hill::Hill;
use crate::curve::hyperbola::GainCeiling;
use crate::curve::logistic::Logistic;
use crate::curve::ramp::Ramp;
use crate::curve::refractory_integrator::RefractoryIntegrator;
use crate::curve::smoothed_ramp::SmoothedRamp;
use crate::curve::square_root::SquareRoot;

/// A place to start from, with its weighted sum of squares (between levels).
#[derive(Clone, Copy, Debug)]
pub(super) struct Start<const P: usize> {
    pub(super) cost: f64,
    pub(super) parameters: [f64; P],
}

/// Starts and limits of one curve.
pub(super) trait Starts<const P: usize> {
    /// Where in a gap between two drives a threshold is tried, as a part of the gap.
    const PARTS: &'static [f64];
    /// Whether the slope at the threshold is infinite, so that the threshold is searched by the logarithm of its
    /// distance from the drive above.
    const INFINITE_SLOPE: bool;
    /// For each chart parameter the index of the natural one whose limit it is.
    const NAMED: [usize; P];
    /// Lower and upper limits of the chart's parameters for drives from `lowest` to `highest`.
    fn bounds(lowest: f64, highest: f64) -> ([f64; P], [f64; P]);
    /// Adds starts with this threshold (or all of them, for a curve without a kink).
    fn starts(levels: &Levels, threshold: f64, into: &mut Vec<Start<P>>);
}

/// Smallest and largest initial gain, as in the main fit: peak rate over range of drives times these.
const GAIN: [f64; 2] = [1e-4, 1e6];
/// Largest 1/max rate.
const CEILING: f64 = 10.0;
/// Smallest threshold, below the lowest drive.
const BELOW: f64 = 10.0;
/// Smallest and largest noise SD.
const NOISE: [f64; 2] = [1e-3, 10.0];
/// Smallest and largest scale of the logistic curve.
const SCALE: [f64; 2] = [1e-3, 10.0];
/// Smallest and largest exponent.
const EXPONENT: [f64; 2] = [0.1, 100.0];
/// Limits of the distance at which a power law reaches the peak rate.
const POWER_REACH: [f64; 2] = [1e-6, 1e6];
/// Gain of the square root.
const ROOT_GAIN: [f64; 2] = [1e-4, 1e4];

/// Best factor of a shape and the cost that leaves.
struct Linear {
    cross: f64,
    square: f64,
    total: f64,
}

impl Linear {
    /// Fits `factor * shape(level index, drive)` to the levels.
    #[inline(always)]
    fn fit(levels: &Levels, shape: impl Fn(usize, f64) -> f64) -> Option<(f64, f64)> {
        let mut sums = Self {
            cross: 0.0,
            square: 0.0,
            total: 0.0,
        };
        for (i, ((drive, rate), root)) in levels
            .drives
            .iter()
            .zip(&levels.rates)
            .zip(&levels.root_weights)
            .enumerate()
        {
            let (f, y) = (root * shape(i, *drive), root * rate);
            sums.cross += f * y;
            sums.square += f * f;
            sums.total += y * y;
        }
        let factor = sums.cross / sums.square;
        (factor > 0.0 && factor.is_finite()).then_some((factor, sums.total - factor * sums.cross))
    }
}

/// Half-rises tried, as parts of the drives above the threshold; none at all comes first.
const HALF_RISES: [f64; 4] = [0.08, 0.3, 1.0, 3.0];

impl Starts<2> for Ramp {
    const PARTS: &'static [f64] = &[0.0, 0.5];
    const INFINITE_SLOPE: bool = false;
    const NAMED: [usize; 2] = [0, 1];

    fn bounds(lowest: f64, highest: f64) -> ([f64; 2], [f64; 2]) {
        ([GAIN[0].ln(), lowest - BELOW], [GAIN[1].ln(), highest])
    }

    fn starts(levels: &Levels, threshold: f64, into: &mut Vec<Start<2>>) {
        if let Some((gain, cost)) = Linear::fit(levels, |_, drive| (drive - threshold).max(0.0)) {
            into.push(Start {
                cost,
                parameters: [gain.ln(), threshold],
            });
        }
    }
}

impl Starts<2> for SquareRoot {
    const PARTS: &'static [f64] = &[0.0, 0.4, 0.8, 0.97];
    const INFINITE_SLOPE: bool = true;
    const NAMED: [usize; 2] = [0, 1];

    fn bounds(lowest: f64, highest: f64) -> ([f64; 2], [f64; 2]) {
        ([ROOT_GAIN[0].ln(), lowest - BELOW], [ROOT_GAIN[1].ln(), highest])
    }

    fn starts(levels: &Levels, threshold: f64, into: &mut Vec<Start<2>>) {
        if let Some((gain, cost)) = Linear::fit(levels, |_, drive| (drive - threshold).max(0.0).sqrt()) {
            into.push(Start {
                cost,
                parameters: [gain.ln(), threshold],
            });
        }
    }
}

impl Starts<3> for GainCeiling {
    const PARTS: &'static [f64] = &[0.0, 0.5];
    const INFINITE_SLOPE: bool = false;
    const NAMED: [usize; 3] = [1, 0, 2];

    fn bounds(lowest: f64, highest: f64) -> ([f64; 3], [f64; 3]) {
        (
            [GAIN[0].ln(), 0.0, lowest - BELOW],
            [GAIN[1].ln(), CEILING, highest],
        )
    }

    fn starts(levels: &Levels, threshold: f64, into: &mut Vec<Start<3>>) {
        if let Some((gain, cost)) = Linear::fit(levels, |_, drive| (drive - threshold).max(0.0)) {
            into.push(Start {
                cost,
                parameters: [gain.ln(), 0.0, threshold],
            });
        }
        let reach = super::gaps::ends(levels).1 - threshold;
        for half in HALF_RISES.map(|part| part * reach) {
            let shape = |_, drive: f64| {
                let above = (drive - threshold).max(0.0);
                above / (above + half)
            };
            if let Some((max_rate, cost)) = Linear::fit(levels, shape) {
                into.push(Start {
                    cost,
                    parameters: [(max_rate / half).ln(), 1.0 / max_rate, threshold],
                });
            }
        }
    }
}

/// Exponents tried.
const EXPONENTS: [f64; 4] = [0.7, 1.3, 2.5, 6.0];
/// Half-rises tried with them.
const HILL_HALF_RISES: [f64; 3] = [0.15, 0.5, 1.5];

impl Starts<4> for Hill {
    const PARTS: &'static [f64] = &[0.5];
    const INFINITE_SLOPE: bool = false;
    const NAMED: [usize; 4] = [0, 1, 2, 3];

    fn bounds(lowest: f64, highest: f64) -> ([f64; 4], [f64; 4]) {
        (
            [0.0, POWER_REACH[0].ln(), lowest - BELOW, EXPONENT[0].ln()],
            [CEILING, POWER_REACH[1].ln(), highest, EXPONENT[1].ln()],
        )
    }

    fn starts(levels: &Levels, threshold: f64, into: &mut Vec<Start<4>>) {
        let reach = super::gaps::ends(levels).1 - threshold;
        if !(reach > 0.0) {
            return;
        }
        let logs: Vec<f64> = levels
            .drives
            .iter()
            .map(|drive| ((drive - threshold).max(0.0) / reach).ln())
            .collect();
        let mut powers = vec![0.0; logs.len()];
        for n in EXPONENTS {
            for (power, log) in powers.iter_mut().zip(&logs) {
                *power = (n * log).exp();
            }
            let mut keep = |found: Option<(f64, f64)>, half: Option<f64>| {
                let Some((factor, cost)) = found else {
                    return;
                };
                // factor (x/reach)^n is the power law; factor u^n/(1+u^n) the saturating curve.
                let (ceiling, ln_q) = match half {
                    Some(half) => (1.0 / factor, (half * reach).ln() - factor.ln() / n),
                    None => (0.0, reach.ln() - factor.ln() / n),
                };
                into.push(Start {
                    cost,
                    parameters: [ceiling, ln_q, threshold, n.ln()],
                });
            };
            keep(Linear::fit(levels, |i, _| powers[i]), None);
            for half in HILL_HALF_RISES {
                let at_half = half.powf(n);
                keep(
                    Linear::fit(levels, |i, _| powers[i] / (at_half + powers[i])),
                    Some(half),
                );
            }
        }
    }
}

impl Starts<3> for RefractoryIntegrator {
    const PARTS: &'static [f64] = &[0.0, 0.5, 0.95];
    const INFINITE_SLOPE: bool = true;
    const NAMED: [usize; 3] = [0, 1, 2];

    fn bounds(_lowest: f64, highest: f64) -> ([f64; 3], [f64; 3]) {
        // Drive is counted from rest: the unit of gain is peak rate over range all the same.
        ([0.0, GAIN[0].ln(), 0.0], [CEILING, GAIN[1].ln(), highest])
    }

    fn starts(levels: &Levels, threshold: f64, into: &mut Vec<Start<3>>) {
        // 1/rate is linear in the refractory time and 1/gain: weights by the delta method.
        let unit = Self::new(&[0.0, 0.0, threshold]);
        let times: Vec<f64> = levels
            .drives
            .iter()
            .map(|drive| 1.0 / unit.at(*drive).rate)
            .collect();
        let (mut n, mut sm, mut smm, mut st, mut smt) = (0.0, 0.0, 0.0, 0.0, 0.0);
        for ((m, rate), root) in times.iter().zip(&levels.rates).zip(&levels.root_weights) {
            if !(m.is_finite() && *rate > 0.02) {
                continue;
            }
            let time = 1.0 / rate;
            let w = (root * rate * rate).powi(2);
            n += w;
            sm += w * m;
            smm += w * m * m;
            st += w * time;
            smt += w * m * time;
        }
        let determinant = n * smm - sm * sm;
        let free = (
            (smm * st - sm * smt) / determinant,
            (n * smt - sm * st) / determinant,
        );
        let through_zero = (0.0, smt / smm);
        for (refractory, per_gain) in [free, through_zero] {
            if refractory >= 0.0 && per_gain > 0.0 && per_gain.is_finite() {
                // Below the threshold the time is infinite and the rate zero.
                let cost = times
                    .iter()
                    .zip(&levels.rates)
                    .zip(&levels.root_weights)
                    .map(|((m, rate), root)| (root * (rate - 1.0 / (refractory + m * per_gain))).powi(2))
                    .sum();
                into.push(Start {
                    cost,
                    parameters: [refractory, -per_gain.ln(), threshold],
                });
                return;
            }
        }
    }
}

/// Midpoints tried, in ranges of drive above the lowest.
const MIDPOINTS: [f64; 6] = [0.1, 0.3, 0.5, 0.7, 0.95, 1.4];
/// Scales tried.
const SCALES: [f64; 4] = [0.02, 0.07, 0.18, 0.5];

impl Starts<3> for Logistic {
    const PARTS: &'static [f64] = &[];
    const INFINITE_SLOPE: bool = false;
    const NAMED: [usize; 3] = [0, 1, 2];

    fn bounds(lowest: f64, highest: f64) -> ([f64; 3], [f64; 3]) {
        (
            [0.0, lowest - BELOW, SCALE[0].ln()],
            [CEILING, highest + BELOW, SCALE[1].ln()],
        )
    }

    fn starts(levels: &Levels, _threshold: f64, into: &mut Vec<Start<3>>) {
        let (lowest, _) = super::gaps::ends(levels);
        let half_way = thresholds(levels, 1.0, 1.0).into_iter().skip(2).take(1);
        for midpoint in MIDPOINTS.iter().map(|m| lowest + m).chain(half_way) {
            for scale in SCALES {
                let shape = |_, drive: f64| 1.0 / (1.0 + (-(drive - midpoint) / scale).exp());
                if let Some((max_rate, cost)) = Linear::fit(levels, shape) {
                    let ceiling = 1.0 / max_rate;
                    into.push(Start {
                        cost,
                        parameters: [ceiling, midpoint + scale * ceiling.ln(), scale.ln()],
                    });
                }
            }
        }
    }
}

/// Noise SDs tried.
const NOISES: [f64; 4] = [0.003, 0.02, 0.07, 0.2];

impl Starts<3> for SmoothedRamp {
    const PARTS: &'static [f64] = &[];
    const INFINITE_SLOPE: bool = false;
    const NAMED: [usize; 3] = [0, 1, 2];

    fn bounds(lowest: f64, highest: f64) -> ([f64; 3], [f64; 3]) {
        (
            [GAIN[0].ln(), lowest - BELOW, NOISE[0].ln()],
            [GAIN[1].ln(), highest + 1.0, NOISE[1].ln()],
        )
    }

    fn starts(levels: &Levels, _threshold: f64, into: &mut Vec<Start<3>>) {
        for threshold in thresholds(levels, 1.0, 1.0) {
            for noise in NOISES {
                let parameters = [0.0, threshold, f64::ln(noise)];
                let unit = Self::new(&parameters);
                if let Some((gain, cost)) = Linear::fit(levels, |_, drive| unit.at(drive).rate) {
                    into.push(Start {
                        cost,
                        parameters: [gain.ln(), threshold, noise.ln()],
                    });
                }
            }
        }
    }
}
