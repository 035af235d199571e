//! What repeated levels tell: drift over the recording, and how much of the scatter is there between repeats.

use statrs::distribution::{ContinuousCDF, StudentsT};

use crate::fit::{Point, extra_variance};

/// What the repeated levels of one response say. `None` is not estimated.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Repeats {
    /// Levels with more than one step.
    pub levels: usize,
    /// Steps at those levels.
    pub steps: usize,
    /// Change of the rate from the first step presented to the last, per cent of the mean rate; steps at repeated
    /// levels that fired at least once.
    pub drift_percent: Option<f64>,
    /// Two-sided p of no drift.
    pub drift_p: Option<f64>,
    /// SD between repeats of a level beyond interval noise, Hz.
    pub between_sd_hz: Option<f64>,
    /// SD of the level means about the curve that scatter between repeats does not explain, Hz: the curve's misfit.
    /// Its square and that of `between_sd_hz` add up to the square of the extra SD, unless the repeats scatter more
    /// than the points about the curve; then it is 0.
    pub misfit_sd_hz: Option<f64>,
}

/// Looks at the repeated levels of `points`, sorted by drive, with the extra variance of their fit, Hz^2.
///
/// `presented` gives each point's place in the order of presentation. `None` where no level repeats.
pub fn repeats(points: &[Point], presented: &[usize], fitted_variance: f64) -> Option<Repeats> {
    let mut start = 0;
    let mut repeated = Vec::new();
    let (mut residuals, mut errors, mut degrees) = (Vec::new(), Vec::new(), 0_usize);
    for level in points.chunk_by(|a, b| a.drive == b.drive) {
        let range = start..start + level.len();
        start = range.end;
        if level.len() > 1 && presented.len() >= range.end {
            degrees += level.len() - 1;
            repeated.push(range);
        }
    }
    if repeated.is_empty() {
        return None;
    }
    let between = pure_variance(points, &repeated, degrees, &mut residuals, &mut errors);
    let drift = drift(points, presented, &repeated, between.unwrap_or(0.0));
    Some(Repeats {
        levels: repeated.len(),
        steps: repeated.iter().map(ExactSizeIterator::len).sum(),
        drift_percent: drift.map(|(percent, _)| percent),
        drift_p: drift.map(|(_, p)| p),
        between_sd_hz: between.map(f64::sqrt),
        misfit_sd_hz: between.map(|v| (fitted_variance - v).max(0.0).sqrt()),
    })
}

/// v >= 0 that solves sum (y - level mean)^2/(e^2 + v) = n - L over the repeated levels, the means weighted with the
/// same variances; zero where even v = 0 leaves the sum below. `None` where means and variance do not settle.
fn pure_variance(
    points: &[Point],
    repeated: &[std::ops::Range<usize>],
    degrees: usize,
    residuals: &mut Vec<f64>,
    errors: &mut Vec<f64>,
) -> Option<f64> {
    errors.clear();
    errors.extend(repeated.iter().flat_map(|r| &points[r.clone()]).map(|p| p.se));
    let noise = errors.iter().map(|e| e * e).sum::<f64>() / errors.len() as f64;
    let mut variance = 0.0;
    for _ in 0..200 {
        residuals.clear();
        for range in repeated {
            let level = &points[range.clone()];
            let mean = weighted_mean(level.iter().map(|p| (1.0 / (p.se * p.se + variance), p.rate)));
            residuals.extend(level.iter().map(|p| p.rate - mean));
        }
        let next = extra_variance(residuals, errors, degrees as f64);
        let change = (next - variance).abs();
        variance = next;
        if change <= 1e-10 * (variance + noise) {
            return Some(variance);
        }
    }
    None
}

fn weighted_mean(values: impl Iterator<Item = (f64, f64)>) -> f64 {
    let (mut weight, mut sum) = (0.0, 0.0);
    for (w, y) in values {
        weight += w;
        sum += w * y;
    }
    sum / weight
}

/// Change from the first presentation to the last in per cent of the mean rate, and its two-sided p.
///
/// Weighted least squares of the rates with a mean of its own for each level and one slope over the order of
/// presentation: rates and order both enter as deviations from their level's weighted means, and the slope over its
/// standard error follows Student's t with n - L - 1 degrees of freedom. A level at which the cell never fired has no
/// rate to drift and is left out.
fn drift(
    points: &[Point],
    presented: &[usize],
    repeated: &[std::ops::Range<usize>],
    between: f64,
) -> Option<(f64, f64)> {
    let mut deviations: Vec<[f64; 3]> = Vec::new();
    let (mut levels, mut total) = (0, 0.0);
    for range in repeated {
        let level = &points[range.clone()];
        let order = &presented[range.clone()];
        if level.iter().all(|p| p.rate == 0.0) {
            continue;
        }
        levels += 1;
        let weights = || level.iter().map(|p| 1.0 / (p.se * p.se + between));
        let mean = weighted_mean(weights().zip(level.iter().map(|p| p.rate)));
        let middle = weighted_mean(weights().zip(order.iter().map(|o| *o as f64)));
        for ((p, o), w) in level.iter().zip(order).zip(weights()) {
            total += p.rate;
            deviations.push([w, *o as f64 - middle, p.rate - mean]);
        }
    }
    let mean_rate = total / deviations.len() as f64;
    let degrees = deviations.len().checked_sub(levels + 1).filter(|d| *d > 0)? as f64;
    let (mut square, mut cross) = (0.0, 0.0);
    for [w, t, y] in &deviations {
        square += w * t * t;
        cross += w * t * y;
    }
    let slope = cross / square;
    let left: f64 = deviations
        .iter()
        .map(|[w, t, y]| w * (y - slope * t).powi(2))
        .sum();
    let ratio = slope / (left / degrees / square).sqrt();
    let p = 2.0 * StudentsT::new(0.0, 1.0, degrees).ok()?.sf(ratio.abs());
    let first = presented.iter().min()?;
    let last = presented.iter().max()?;
    let percent = 100.0 * slope * (last - first) as f64 / mean_rate;
    (percent.is_finite() && p.is_finite()).then_some((percent, p))
}

#[cfg(test)]
mod tests {
    #![allow(clippy::unwrap_used)]
    use rand::SeedableRng;
    use rand_chacha::ChaCha8Rng;
    use rand_distr::{Distribution, StandardNormal};

    use super::*;

    /// Six levels shown in turn, `rounds` times; rates fall by `fall` of themselves from first to last presentation.
    fn cell(seed: u64, rounds: usize, scatter: f64, misfit: f64, fall: f64) -> (Vec<Point>, Vec<usize>) {
        let mut rng = ChaCha8Rng::seed_from_u64(seed);
        let mut normal = || -> f64 { StandardNormal.sample(&mut rng) };
        let last = (6 * rounds - 1) as f64;
        let (mut points, mut presented) = (Vec::new(), Vec::new());
        for level in 0..6 {
            let shift = misfit * normal();
            for round in 0..rounds {
                let place = 6 * round + level;
                let rate = 40.0 * (1.0 - fall * place as f64 / last) + shift;
                points.push(Point {
                    drive: level as f64,
                    rate: rate + 1.0_f64.hypot(scatter) * normal(),
                    se: 1.0,
                });
                presented.push(place);
            }
        }
        (points, presented)
    }

    #[test]
    fn a_falling_rate_is_a_drift_of_its_size() {
        let (points, presented) = cell(1, 5, 0.5, 0.0, 0.3);
        let found = repeats(&points, &presented, 0.25).unwrap();
        assert_eq!((found.levels, found.steps), (6, 30));
        // 30 % of 40 Hz over a mean of 34 Hz.
        let percent = found.drift_percent.unwrap();
        assert!((percent + 35.3).abs() < 8.0, "{percent}");
        assert!(found.drift_p.unwrap() < 1e-6);
    }

    #[test]
    fn without_drift_p_is_uniform() {
        let mut p: Vec<f64> = (0..1000)
            .map(|seed| {
                let (points, presented) = cell(seed, 3, 2.0, 5.0, 0.0);
                repeats(&points, &presented, 4.0).unwrap().drift_p.unwrap()
            })
            .collect();
        p.sort_by(f64::total_cmp);
        let distance = p
            .iter()
            .enumerate()
            .map(|(i, p)| (p - (i as f64 + 0.5) / 1000.0).abs() + 0.0005)
            .fold(0.0, f64::max);
        // Kolmogorov's 1 % point, 1.63/sqrt(n).
        assert!(distance < 1.63 / 1000_f64.sqrt(), "{distance}");
    }

    #[test]
    fn the_slope_is_that_of_ordinary_least_squares_by_hand() {
        // One level, order 0, 1, 2, 3, rates 10, 12, 11, 15: slope 1.4, residual sum of squares 14 - 9.8 = 4.2,
        // t = 1.4/sqrt(2.1/5) = 2.160247 on 2 degrees of freedom, p = 1 - t/sqrt(2 + t^2) = 0.1633.
        let points: Vec<Point> = [10.0, 12.0, 11.0, 15.0]
            .map(|rate| Point {
                drive: 1.0,
                rate,
                se: 1.0,
            })
            .to_vec();
        let found = repeats(&points, &[0, 1, 2, 3], 0.0).unwrap();
        assert!((found.drift_percent.unwrap() - 100.0 * 1.4 * 3.0 / 12.0).abs() < 1e-9);
        let t = 1.4 / (2.1_f64 / 5.0).sqrt();
        assert!((found.drift_p.unwrap() - (1.0 - t / (2.0 + t * t).sqrt())).abs() < 1e-9);
        // Sum of squares about the mean 14 = 3 (1 + v): v = 11/3.
        assert!((found.between_sd_hz.unwrap().powi(2) - 11.0 / 3.0).abs() < 1e-9);
    }

    #[test]
    fn scatter_is_split_between_repeats_and_misfit() {
        let (mut between, mut misfit) = (0.0, 0.0);
        for seed in 0..200 {
            let (points, presented) = cell(seed, 6, 2.0, 3.0, 0.0);
            // What a constant as the curve leaves: between 4 and misfit 9 Hz^2.
            let found = repeats(&points, &presented, 13.0).unwrap();
            between += found.between_sd_hz.unwrap().powi(2) / 200.0;
            misfit += found.misfit_sd_hz.unwrap().powi(2) / 200.0;
        }
        assert!((between - 4.0).abs() < 0.4, "{between}");
        assert!((misfit - 9.0).abs() < 0.4, "{misfit}");
    }

    #[test]
    fn no_repeats_no_answer_and_silent_levels_do_not_drift() {
        let single: Vec<Point> = (0..5)
            .map(|i| Point {
                drive: f64::from(i),
                rate: 3.0,
                se: 1.0,
            })
            .collect();
        assert_eq!(repeats(&single, &[0, 1, 2, 3, 4], 1.0), None);
        let silent = vec![
            Point {
                drive: 0.0,
                rate: 0.0,
                se: 0.5,
            };
            5
        ];
        let found = repeats(&silent, &[0, 1, 2, 3, 4], 1.0).unwrap();
        assert_eq!((found.drift_percent, found.drift_p), (None, None));
        assert_eq!(found.between_sd_hz, Some(0.0));
        assert_eq!(found.misfit_sd_hz, Some(1.0));
    }
}
