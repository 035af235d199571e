//! Where the search begins: a coarse, data-driven grid, none of it random.
//!
//! For every combination of threshold, noise and half-rise the best scale is a linear problem; a cheap stand-in for
//! the curve (the smoothed ramp put through the hyperbola) ranks the combinations.

use super::objective::Levels;

/// Noise SD tried, as a fraction of the range of drives.
const NOISE: [f64; 3] = [0.01, 0.05, 0.15];
/// Half-rise tried, as a fraction of the drives above threshold; infinite is the ramp.
const HALF_RISE: [f64; 4] = [0.2, 0.7, 2.5, f64::INFINITY];
/// Fractions of the peak rate at whose first crossing a threshold is tried.
const CROSSING: [f64; 3] = [0.03, 0.12, 0.3];
/// Thresholds tried below the smallest drive when that already fires, as a fraction of the range of drives.
const BELOW: [f64; 3] = [0.05, 0.3, 1.0];

/// Starts in the chart `Ceiling`, best first, at most one for each pair of threshold and noise.
pub fn starts(levels: &Levels) -> Vec<[f64; 4]> {
    let (Some(lowest), Some(highest)) = (levels.drives.first(), levels.drives.last()) else {
        return Vec::new();
    };
    let range = highest - lowest;
    let peak = levels.rates.iter().copied().fold(0.0, f64::max);
    if !(range > 0.0 && peak > 0.0) {
        return Vec::new();
    }
    let mut ranked: Vec<(f64, [f64; 4])> = Vec::new();
    let mut ramps = vec![0.0; levels.drives.len()];
    for threshold in thresholds(levels, peak, range) {
        for noise in NOISE.map(|n| n * range) {
            for (ramp, drive) in ramps.iter_mut().zip(&levels.drives) {
                *ramp = cheap_ramp((drive - threshold) / noise) * noise;
            }
            let mut best: Option<(f64, [f64; 4])> = None;
            for half_rise in HALF_RISE.map(|k| k * (highest - threshold)) {
                let (mut cross, mut square, mut total) = (0.0, 0.0, 0.0);
                let shape = |ramp: f64| {
                    if half_rise.is_finite() {
                        ramp / (half_rise + ramp)
                    } else {
                        ramp
                    }
                };
                for ((ramp, rate), root) in ramps.iter().zip(&levels.rates).zip(&levels.root_weights) {
                    let (f, y) = (root * shape(*ramp), root * rate);
                    cross += f * y;
                    square += f * f;
                    total += y * y;
                }
                if !(cross > 0.0 && square > 0.0) {
                    continue;
                }
                let scale = cross / square;
                let cost = total - scale * cross;
                let (inverse_gain, ceiling) = if half_rise.is_finite() {
                    (half_rise / scale, 1.0 / scale)
                } else {
                    (1.0 / scale, 0.0)
                };
                if best.is_none_or(|(least, _)| cost < least) {
                    best = Some((cost, [inverse_gain, ceiling, threshold, noise.ln()]));
                }
            }
            ranked.extend(best);
        }
    }
    ranked.sort_by(|a, b| a.0.total_cmp(&b.0));
    ranked.into_iter().map(|(_, start)| start).collect()
}

/// Candidate thresholds: where the level means first cross fractions of the peak, or below all drives.
pub(super) fn thresholds(levels: &Levels, peak: f64, range: f64) -> Vec<f64> {
    let crossing = |fraction: f64| -> f64 {
        let target = fraction * peak;
        let at = levels.rates.iter().position(|rate| *rate >= target).unwrap_or(0);
        if at == 0 {
            return levels.drives[0];
        }
        let (low, high) = (levels.rates[at - 1], levels.rates[at]);
        let part = if high > low {
            (target - low) / (high - low)
        } else {
            0.0
        };
        levels.drives[at - 1] + part * (levels.drives[at] - levels.drives[at - 1])
    };
    let mut list: Vec<f64> = CROSSING.map(crossing).to_vec();
    if levels.rates[0] > 0.03 * peak {
        list.extend(BELOW.map(|below| levels.drives[0] - below * range));
    }
    list.dedup();
    list
}

/// E\[(w + X)+\] to a few per cent, by a logistic stand-in for the normal distribution.
fn cheap_ramp(w: f64) -> f64 {
    const SHARPNESS: f64 = 1.702;
    if w * SHARPNESS > 30.0 {
        w
    } else {
        (w * SHARPNESS).exp().ln_1p() / SHARPNESS
    }
}
