//! How well a rate function fits: likelihood, information criteria, lack of fit, runs of residuals.

use statrs::distribution::{ContinuousCDF, FisherSnedecor};
use statrs::function::factorial::ln_binomial;

use super::Goodness;
use crate::curve::Curve;
use crate::fit::Point;

/// A fitted curve as the measures need it. All slices run over the points, sorted by drive.
#[derive(Clone, Copy, Debug)]
pub struct FittedCurve<'a> {
    /// Name of the rate function.
    pub curve: &'static str,
    /// Number of its parameters.
    pub parameters: usize,
    /// The points.
    pub points: &'a [Point],
    /// Fitted rate at each point, Hz.
    pub fitted: &'a [f64],
    /// Extra variance, Hz^2.
    pub extra_variance: f64,
    /// Leave-one-level-out RMSE, Hz ([`crate::fit::leave_one_level_out`]); `None` where a refit has no answer.
    pub loo_rmse_hz: Option<f64>,
    /// Whether the search converged.
    pub converged: bool,
    /// Passes of the curve over the points.
    pub evaluations: u64,
}

/// All measures of one fitted curve; the Akaike weight is set by [`set_weights`]. A fit that did not converge has
/// none.
pub fn goodness(fit: &FittedCurve<'_>) -> Goodness {
    let n = fit.points.len();
    let mut out = Goodness {
        converged: fit.converged,
        evaluations: fit.evaluations,
        ..unmeasured(fit.curve, fit.parameters, n, "fitted")
    };
    if !fit.converged {
        out.reason = "the search for the best curve did not settle".into();
        return out;
    }
    if n <= fit.parameters {
        out.reason = format!(
            "{n} steps are too few to measure a fit of {} parameters",
            fit.parameters
        );
        return out;
    }
    let residuals: Vec<f64> = fit
        .points
        .iter()
        .zip(fit.fitted)
        .map(|(p, f)| p.rate - f)
        .collect();
    let squares: f64 = residuals.iter().map(|r| r * r).sum();
    let mean = fit.points.iter().map(|p| p.rate).sum::<f64>() / n as f64;
    let total: f64 = fit.points.iter().map(|p| (p.rate - mean).powi(2)).sum();
    let chi2: f64 = residuals
        .iter()
        .zip(fit.points)
        .map(|(r, p)| (r / p.se).powi(2))
        .sum();
    let log_likelihood = log_likelihood(&residuals, fit.points);
    out.log_likelihood = Some(log_likelihood);
    // The extra SD is a parameter as well.
    let counted = fit.parameters + 1;
    out.aicc = aicc(log_likelihood, counted, n);
    out.bic = Some(bic(log_likelihood, counted, n));
    out.rmse_hz = Some((squares / n as f64).sqrt());
    out.r2 = (total > 0.0).then(|| 1.0 - squares / total);
    out.reduced_chi2 = Some(chi2 / (n - fit.parameters) as f64);
    if let Some((f, p)) = lack_of_fit(fit) {
        out.lack_of_fit_f = Some(f);
        out.lack_of_fit_p = Some(p);
    }
    out.runs_p = runs_p(&residuals);
    out.loo_rmse_hz = fit.loo_rmse_hz;
    out
}

/// The row of a rate function that could not be fitted to `steps` steps, with the reason.
pub fn not_fitted(curve: Curve, steps: usize, reason: &str) -> Goodness {
    unmeasured(curve.name(), curve.parameters(), steps, reason)
}

fn unmeasured(curve: &'static str, parameters: usize, steps: usize, reason: &str) -> Goodness {
    Goodness {
        curve,
        parameters,
        steps,
        log_likelihood: None,
        aicc: None,
        aicc_weight: None,
        bic: None,
        rmse_hz: None,
        r2: None,
        reduced_chi2: None,
        lack_of_fit_f: None,
        lack_of_fit_p: None,
        runs_p: None,
        loo_rmse_hz: None,
        converged: false,
        reason: reason.into(),
        evaluations: 0,
    }
}

/// Gaussian log-likelihood of the residuals with variances se^2 + v, v >= 0 set where it is largest.
pub fn log_likelihood(residuals: &[f64], points: &[Point]) -> f64 {
    let score = |v: f64| -> f64 {
        residuals
            .iter()
            .zip(points)
            .map(|(r, p)| {
                let inverse = 1.0 / (p.se * p.se + v);
                (r * r * inverse - 1.0) * inverse
            })
            .sum()
    };
    let mut variance = 0.0;
    if score(0.0) > 0.0 {
        let (mut low, mut high) = (0.0, residuals.iter().map(|r| r * r).fold(0.0, f64::max));
        for _ in 0..60 {
            variance = 0.5 * (low + high);
            if high - low <= 1e-12 * high {
                break;
            }
            if score(variance) > 0.0 {
                low = variance
            } else {
                high = variance
            }
        }
    }
    residuals
        .iter()
        .zip(points)
        .map(|(r, p)| {
            let v = p.se * p.se + variance;
            -0.5 * (r * r / v + (2.0 * std::f64::consts::PI * v).ln())
        })
        .sum()
}

/// AICc = -2 lnL + 2K + 2K(K+1)/(n-K-1) (Hurvich & Tsai 1989); `None` for n <= K + 1.
pub fn aicc(log_likelihood: f64, counted: usize, n: usize) -> Option<f64> {
    let (k, n) = (counted as f64, n as f64);
    (n > k + 1.0).then(|| -2.0 * log_likelihood + 2.0 * k + 2.0 * k * (k + 1.0) / (n - k - 1.0))
}

/// BIC = -2 lnL + K ln n (Schwarz 1978).
pub fn bic(log_likelihood: f64, counted: usize, n: usize) -> f64 {
    -2.0 * log_likelihood + counted as f64 * (n as f64).ln()
}

/// Akaike weights over the rate functions of one response.
pub fn set_weights(all: &mut [Goodness]) {
    let Some(least) = all.iter().filter_map(|g| g.aicc).min_by(f64::total_cmp) else {
        return;
    };
    let share = |aicc: f64| (-0.5 * (aicc - least)).exp();
    let sum: f64 = all.iter().filter_map(|g| g.aicc).map(share).sum();
    for g in all {
        g.aicc_weight = g.aicc.map(|a| share(a) / sum);
    }
}

/// F of the scatter about the curve against pure error within levels, with p; `None` without repeats or with no more
/// levels than parameters. Sums of squares carry the weights 1/(se^2 + extra variance).
///
/// A level at which neither the cell nor the curve fires is left out, with its degrees of freedom: a silent step has no
/// scatter, and counting such levels as perfect fits without error drew p away from uniform in simulated cells.
fn lack_of_fit(fit: &FittedCurve<'_>) -> Option<(f64, f64)> {
    let (mut pure, mut about, mut levels, mut steps) = (0.0, 0.0, 0_usize, 0_usize);
    let mut start = 0;
    while start < fit.points.len() {
        let count = fit.points[start..]
            .iter()
            .take_while(|p| p.drive == fit.points[start].drive)
            .count();
        let silent = |p: &Point| p.rate == 0.0 && fit.fitted[start] < p.se;
        if fit.points[start..start + count].iter().all(silent) {
            start += count;
            continue;
        }
        steps += count;
        let (mut weight, mut sum) = (0.0, 0.0);
        for p in &fit.points[start..start + count] {
            let w = 1.0 / (p.se * p.se + fit.extra_variance);
            weight += w;
            sum += w * p.rate;
        }
        let mean = sum / weight;
        for p in &fit.points[start..start + count] {
            pure += (p.rate - mean).powi(2) / (p.se * p.se + fit.extra_variance);
        }
        about += weight * (mean - fit.fitted[start]).powi(2);
        levels += 1;
        start += count;
    }
    let between = levels.checked_sub(fit.parameters).filter(|d| *d > 0)? as f64;
    let within = (steps - levels) as f64;
    if !(within > 0.0 && pure > 0.0) {
        return None;
    }
    let f = (about / between) / (pure / within);
    let p = FisherSnedecor::new(between, within).ok()?.sf(f);
    (f.is_finite() && p.is_finite()).then_some((f, p))
}

/// Runs test of residual signs in order of drive (Wald & Wolfowitz 1940), exact and two-sided; residuals of zero are
/// left out. `None` when all have one sign.
pub fn runs_p(residuals: &[f64]) -> Option<f64> {
    let signs: Vec<bool> = residuals
        .iter()
        .filter(|r| **r != 0.0)
        .map(|r| *r > 0.0)
        .collect();
    let up = signs.iter().filter(|s| **s).count() as u64;
    let down = signs.len() as u64 - up;
    if up == 0 || down == 0 {
        return None;
    }
    let runs = 1 + signs.windows(2).filter(|w| w[0] != w[1]).count() as u64;
    let all = ln_binomial(up + down, up);
    let ways = |a: u64, b: u64| {
        if b > a {
            f64::NEG_INFINITY
        } else {
            ln_binomial(a, b)
        }
    };
    let probability = |r: u64| -> f64 {
        if r.is_multiple_of(2) {
            let k = r / 2 - 1;
            2.0 * (ways(up - 1, k) + ways(down - 1, k) - all).exp()
        } else {
            let k = r / 2;
            (ways(up - 1, k) + ways(down - 1, k - 1) - all).exp()
                + (ways(up - 1, k - 1) + ways(down - 1, k) - all).exp()
        }
    };
    let few: f64 = (2..=runs).map(probability).sum();
    let many: f64 = (runs..=up + down).map(probability).sum();
    Some((2.0 * few.min(many)).min(1.0))
}

#[cfg(test)]
mod tests {
    #![allow(clippy::unwrap_used)]
    use super::*;

    #[test]
    fn runs_test_is_exact_for_a_small_series() {
        // 2 up and 2 down in 2 runs: probabilities of 2, 3, 4 runs are 1/3, 1/3, 1/3.
        let p = runs_p(&[1.0, 2.0, -1.0, -2.0]).unwrap();
        assert!((p - 2.0 / 3.0).abs() < 1e-12);
        assert_eq!(runs_p(&[1.0, 2.0]), None);
        let regular: Vec<f64> = (0..20).map(|i| if i % 2 == 0 { 1.0 } else { -1.0 }).collect();
        assert!(runs_p(&regular).unwrap() < 1e-4);
    }

    #[test]
    fn the_likelihood_is_largest_at_its_own_variance() {
        let residuals = [1.0, -2.0, 0.5, 3.0, -1.5];
        let points = [1e-6; 5].map(|se| Point {
            drive: 0.0,
            rate: 0.0,
            se,
        });
        // Without interval noise the variance is the mean square.
        let v: f64 = residuals.iter().map(|r| r * r).sum::<f64>() / 5.0;
        let exact = -2.5 * ((2.0 * std::f64::consts::PI * v).ln() + 1.0);
        assert!((log_likelihood(&residuals, &points) - exact).abs() < 1e-9);
    }

    #[test]
    fn aicc_needs_points() {
        assert_eq!(aicc(0.0, 5, 6), None);
        assert!((aicc(-44.63548432, 3, 12).unwrap() - 98.27096865).abs() < 1e-7);
        assert!((bic(-44.63548432, 3, 12) - 96.72568860).abs() < 1e-7);
    }
}
