//! A fit that sweeps gone wrong cannot pull away: Tukey's biweight by iteratively reweighted fits.
//!
//! Every point gets a factor (1 - (u/c)^2)^2, zero beyond c = 4.685 (Beaton & Tukey 1974, *Technometrics* 16:147; the
//! constant gives 95 % efficiency when all errors are Gaussian), u its residual over sqrt(e^2 + w^2). The extra SD w
//! comes from the median absolute value of the residuals, which half of the points cannot move. Since the biweight
//! forgets a point it has once excluded, a bounded weight that excludes nobody, 1/(1 + (u/2.385)^2) (Cauchy errors),
//! finds neighbourhood and w first; the biweight then works at that w, so that every round lowers one and the same
//! objective (an MM-estimate: Yohai 1987, *Ann. Statist.* 15:642).
//!
//! What then goes on to the usual fit, profiles and goodness are points whose total variance is (e^2 + w^2)/factor and
//! an extra variance held at w^2: the same weights, so the same curve. Their intervals take the factors as known. For
//! Gaussian errors they are a little too wide (the mean factor is 0.91, while the biweight loses 5 % of the
//! information, so by 2 % in SD); for a cell with outliers they say how well the *other* points determine the curve,
//! and say nothing about the chance that the wrong ones were taken for outliers. R^2 and lack of fit of such points
//! are those of the data with the outliers' weight taken away.

use super::extra_sd::extra_variance;
use super::main_fit::{self, MainFit, PARAMETERS, Scatter};
use super::objective::{Chart, Point, evaluate};

/// Residual, in standard deviations, beyond which the biweight leaves a point out.
const BIWEIGHT: f64 = 4.685;
/// Scale of the bounded weight that comes first: 95 % efficient as well.
const CAUCHY: f64 = 2.385;
/// Median absolute value of a standard normal.
const NORMAL_MEDIAN: f64 = 0.674_489_750_196_081_7;
/// Expected u^2 (1 - (u/c)^2)^2 of a standard normal u, within c = 4.685: what weighted squares fall short of 1.
const CONSISTENCY: f64 = 0.757_8;
/// Largest change of any factor at which the weights have settled.
const SETTLED: f64 = 1e-4;
/// Fits with bounded weights before the biweight, and all in all.
const ROUNDS: [usize; 2] = [12, 60];

/// Weights of a robust fit. All slices run over the points given.
#[derive(Clone, Debug, PartialEq)]
pub struct Robust {
    /// Weight factor of each point, 0 (left out) to 1.
    pub factors: Vec<f64>,
    /// Extra variance w^2 of the points that are not outliers, Hz^2.
    pub extra_variance: f64,
    /// Whether the factors settled; otherwise they are those of the last round and not to be used.
    pub converged: bool,
    /// Fits made.
    pub rounds: usize,
}

impl Robust {
    /// Indices of the points whose factor is below `limit`; 0.5 is the usual one to report.
    pub fn below(&self, limit: f64) -> Vec<usize> {
        (0..self.factors.len())
            .filter(|i| self.factors[*i] < limit)
            .collect()
    }

    /// The points to fit with [`Scatter::Held`] of [`Robust::extra_variance`], and the index of each among those given:
    /// standard errors such that se^2 + w^2 is (e^2 + w^2)/factor. Points with factor 0 are left out.
    pub fn reweighted(&self, points: &[Point]) -> (Vec<Point>, Vec<usize>) {
        reweighted(points, &self.factors, self.extra_variance)
    }
}

/// Finds the weights of the smoothed hyperbola's robust fit to `points`, sorted by drive.
///
/// `None` when the plain fit has no answer, or the points that are left at some round have none.
pub fn robust(points: &[Point]) -> Option<Robust> {
    let mut fit = main_fit::fit(points, Scatter::Estimated)?;
    let mut factors = vec![1.0; points.len()];
    let mut variance = fit.extra_variance;
    let mut converged = false;
    let mut rounds = 1;
    let mut residuals = residuals(points, &fit);
    let mut gone_before: Option<f64> = None;
    while rounds < ROUNDS[1] {
        let bounded = rounds < ROUNDS[0];
        if bounded {
            variance = median_variance(points, &residuals);
        }
        let next: Vec<f64> = points
            .iter()
            .zip(&residuals)
            .map(|(p, r)| {
                let squared = r * r / (p.se * p.se + variance);
                if bounded {
                    1.0 / (1.0 + squared / (CAUCHY * CAUCHY))
                } else {
                    (1.0 - squared / (BIWEIGHT * BIWEIGHT)).max(0.0).powi(2)
                }
            })
            .collect();
        let change = next
            .iter()
            .zip(&factors)
            .map(|(a, b)| (a - b).abs())
            .fold(0.0, f64::max);
        if bounded || gone_before.is_none() {
            factors = next;
        } else if change <= SETTLED {
            factors = next;
            converged = true;
            break;
        } else {
            // Once in the biweight, half steps rest where whole ones hop to and fro.
            let hops = gone_before.is_some_and(|before| change > 0.7 * before);
            let part = if hops { 0.5 } else { 1.0 };
            for (factor, next) in factors.iter_mut().zip(&next) {
                *factor += part * (next - *factor);
                if *factor < 1e-9 {
                    *factor = 0.0;
                }
            }
        }
        gone_before = (!bounded).then_some(change);
        let (weighted, _) = reweighted(points, &factors, variance);
        fit = main_fit::fit(&weighted, Scatter::Held(variance))?;
        rounds += 1;
        residuals = self::residuals(points, &fit);
    }
    // The median uses a third of what the residuals know about their scale; now that the outliers are known, the
    // others' weighted squares tell it better: sum factor r^2/(e^2 + w^2) = (points kept - 4) times what the biweight
    // leaves of a Gaussian's squares.
    let weighted: Vec<f64> = residuals
        .iter()
        .zip(&factors)
        .map(|(r, f)| r * f.sqrt())
        .collect();
    let errors: Vec<f64> = points.iter().map(|p| p.se).collect();
    let kept = factors.iter().filter(|f| **f > 0.0).count();
    let degrees = CONSISTENCY * kept.saturating_sub(PARAMETERS) as f64;
    let refined = extra_variance(&weighted, &errors, degrees);
    if converged {
        variance = refined;
    }
    Some(Robust {
        factors,
        extra_variance: variance,
        converged,
        rounds,
    })
}

fn residuals(points: &[Point], fit: &MainFit) -> Vec<f64> {
    let drives: Vec<f64> = points.iter().map(|p| p.drive).collect();
    let mut residuals = vec![0.0; points.len()];
    evaluate(Chart::Ceiling, &fit.solution.parameters, &drives, |i, rate, _| {
        residuals[i] = points[i].rate - rate
    });
    residuals
}

fn reweighted(points: &[Point], factors: &[f64], variance: f64) -> (Vec<Point>, Vec<usize>) {
    points
        .iter()
        .zip(factors)
        .enumerate()
        .filter(|(_, (_, factor))| **factor > 0.0)
        .map(|(i, (p, factor))| {
            // e^2 + (e^2 + w^2)(1/factor - 1): without cancellation, and e itself at factor 1.
            let square = p.se * p.se + (p.se * p.se + variance) * (1.0 / factor - 1.0);
            let se = square.sqrt();
            (Point { se, ..*p }, i)
        })
        .unzip()
}

/// w^2 >= 0 for which the median of |r|/sqrt(e^2 + w^2) is that of as many Gaussian residuals with four parameters
/// taken out. Silent steps where the curve is silent too are left aside: their residuals of nothing say nothing about
/// the scatter of rates, and in a cell that is silent half of the time would be the median.
fn median_variance(points: &[Point], residuals: &[f64]) -> f64 {
    let telling: Vec<(f64, f64)> = points
        .iter()
        .zip(residuals)
        .filter(|(p, r)| p.rate != 0.0 || r.abs() > p.se)
        .map(|(p, r)| (p.se * p.se, r * r))
        .collect();
    let count = telling.len() as f64;
    if !(count > PARAMETERS as f64) {
        return 0.0;
    }
    let target = NORMAL_MEDIAN * NORMAL_MEDIAN * (count - PARAMETERS as f64) / count;
    let mut squares = vec![0.0; telling.len()];
    let mut median = |variance: f64| {
        for (square, (e2, r2)) in squares.iter_mut().zip(&telling) {
            *square = r2 / (e2 + variance);
        }
        squares.sort_by(f64::total_cmp);
        let middle = squares.len() / 2;
        if squares.len() % 2 == 1 {
            squares[middle]
        } else {
            0.5 * (squares[middle - 1] + squares[middle])
        }
    };
    if median(0.0) <= target {
        return 0.0;
    }
    let (mut low, mut high) = (0.0, telling.iter().map(|t| t.1).fold(0.0, f64::max) / target);
    for _ in 0..100 {
        let middle = 0.5 * (low + high);
        if median(middle) > target {
            low = middle;
        } else {
            high = middle;
        }
        if high - low <= 1e-10 * high {
            break;
        }
    }
    0.5 * (low + high)
}

#[cfg(test)]
mod tests {
    #![allow(clippy::unwrap_used)]
    use rand::SeedableRng;
    use rand_chacha::ChaCha8Rng;
    use rand_distr::{Distribution, StandardNormal};

    use super::*;

    const TRUTH: [f64; 4] = [100.0, 150.0, 120.0, 25.0];

    /// 40 steps from 0 to 700 pA about the curve of `TRUTH`: 3 % and half a hertz of noise, extra SD 1 Hz.
    fn points(seed: u64) -> Vec<Point> {
        let mut rng = ChaCha8Rng::seed_from_u64(seed);
        let drives: Vec<f64> = (0..40).map(|i| f64::from(i) * 700.0 / 39.0).collect();
        let parameters = [TRUTH[1] / TRUTH[0], 1.0 / TRUTH[0], TRUTH[2], TRUTH[3].ln()];
        let mut points = Vec::new();
        evaluate(Chart::Ceiling, &parameters, &drives, |i, rate, _| {
            let se = 0.5 + 0.03 * rate;
            let normal: f64 = StandardNormal.sample(&mut rng);
            let silent = rate < 0.5;
            points.push(Point {
                drive: drives[i],
                rate: if silent {
                    0.0
                } else {
                    rate + normal * se.hypot(1.0)
                },
                se,
            });
        });
        points
    }

    /// (ln gain, 1/max, threshold, ln noise) of the robust fit and of the plain one.
    fn both(points: &[Point]) -> (MainFit, MainFit, Robust) {
        let plain = main_fit::fit(points, Scatter::Estimated).unwrap();
        let robust = robust(points).unwrap();
        assert!(robust.converged);
        let (weighted, _) = robust.reweighted(points);
        let fit = main_fit::fit(&weighted, Scatter::Held(robust.extra_variance)).unwrap();
        (plain, fit, robust)
    }

    fn max_rate(fit: &MainFit) -> f64 {
        1.0 / fit.solution.parameters[1]
    }

    #[test]
    fn a_gross_outlier_moves_the_plain_fit_and_not_the_robust_one() {
        for seed in 0..20 {
            let clean = points(seed);
            let (plain, robust, _) = both(&clean);
            let mut spoilt = clean.clone();
            // A sweep whose spikes were lost, near the top.
            spoilt[36].rate = 5.0;
            spoilt[36].se = 0.65;
            let (plain_spoilt, robust_spoilt, weights) = both(&spoilt);
            assert_eq!(weights.factors[36], 0.0, "{seed}");
            assert_eq!(weights.below(0.5).iter().filter(|i| **i == 36).count(), 1);
            let moved = (max_rate(&robust_spoilt) / max_rate(&robust)).ln().abs();
            let plainly = (max_rate(&plain_spoilt) / max_rate(&plain)).ln().abs();
            assert!(moved < 0.08 && plainly > 0.15, "{seed}: {moved} {plainly}");
        }
    }

    #[test]
    fn clean_data_change_little() {
        let (mut shifts, mut down, mut ratio) = (Vec::new(), 0, 0.0);
        for seed in 0..40 {
            let points = points(seed);
            let (plain, robust, weights) = both(&points);
            let covariance = plain.covariance().unwrap();
            for i in 0..4 {
                let shift = robust.solution.parameters[i] - plain.solution.parameters[i];
                shifts.push(shift.abs() / covariance[i][i].sqrt());
            }
            down += weights.below(0.5).len();
            ratio += (robust.covariance().unwrap()[0][0] / covariance[0][0]).sqrt() / 40.0;
        }
        shifts.sort_by(f64::total_cmp);
        println!(
            "shifts {} {}, {down} below half, SE ratio {ratio}",
            shifts[80], shifts[152]
        );
        assert!(shifts[80] < 0.3 && shifts[152] < 1.0);
        // A Gaussian point is below half beyond 2.54 SD: 1.1 %, of 1600 points less those that are silent.
        assert!(down < 40, "{down}");
        assert!((0.9..1.2).contains(&ratio), "{ratio}");
    }

    #[test]
    fn every_spoilt_sweep_is_found() {
        let mut missed = 0;
        for seed in 0..20 {
            let mut points = points(seed);
            for (i, factor) in [(20, 0.4), (26, 1.7), (31, 0.3), (38, 0.5)] {
                points[i].rate *= factor;
            }
            let weights = robust(&points).unwrap();
            assert!(weights.converged);
            let below = weights.below(0.5);
            missed += [20, 26, 31, 38].iter().filter(|i| !below.contains(i)).count();
        }
        assert!(missed <= 2, "{missed} of 80 missed");
    }

    #[test]
    fn reweighted_points_have_the_weights_asked_for() {
        let points = points(3);
        let mut weights = robust(&points).unwrap();
        weights.factors[7] = 0.0;
        let (kept, index) = weights.reweighted(&points);
        assert_eq!(kept.len(), 39);
        for (p, i) in kept.iter().zip(&index) {
            let total = points[*i].se.powi(2) + weights.extra_variance;
            let got = p.se * p.se + weights.extra_variance;
            assert!((got * weights.factors[*i] / total - 1.0).abs() < 1e-12);
            assert!(p.se >= points[*i].se);
        }
    }

    #[test]
    fn the_consistency_constant_is_its_integral() {
        let (mut sum, step) = (0.0, 1e-4);
        let mut u: f64 = step / 2.0;
        while u < BIWEIGHT {
            let density = (-0.5 * u * u).exp() / (2.0 * std::f64::consts::PI).sqrt();
            sum += 2.0 * step * density * u * u * (1.0 - (u / BIWEIGHT).powi(2)).powi(2);
            u += step;
        }
        assert!((sum - CONSISTENCY).abs() < 1e-4, "{sum}");
    }

    #[test]
    fn too_few_points_have_no_answer() {
        assert_eq!(robust(&points(1)[..3]), None);
        assert_eq!(robust(&[]), None);
    }
}
