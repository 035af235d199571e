//! Between-step scatter beyond interval noise.

/// The extra variance w^2 >= 0 that solves sum r_j^2/(e_j^2 + w^2) = `degrees`, zero where even w = 0 leaves the sum
/// below it.
///
/// This is the restricted (REML-like) moment equation of methods for an additive variance; for a constant mean it is
/// the estimator of Paule & Mandel (1982, *J. Res. NBS* 87:377). `residuals` and `standard_errors` share their unit
/// (Hz here), the result has its square. `degrees` = points - parameters, positive; otherwise the result is 0. Newton
/// steps on the reciprocal of the sum, which is concave and rising in w^2, approach the root from below.
pub fn extra_variance(residuals: &[f64], standard_errors: &[f64], degrees: f64) -> f64 {
    let mut variance = 0.0;
    if !(degrees > 0.0) {
        return variance;
    }
    for _ in 0..200 {
        let (mut sum, mut slope) = (0.0, 0.0);
        for (r, e) in residuals.iter().zip(standard_errors) {
            let inverse = 1.0 / (e * e + variance);
            sum += r * r * inverse;
            slope += r * r * inverse * inverse;
        }
        let step = (sum / degrees - 1.0) * sum / slope;
        if !(step > 1e-15 * variance) || !step.is_finite() {
            break;
        }
        variance += step;
    }
    variance
}

/// The extra variance has settled once it moves by less than this fraction of the total variance.
const SETTLED: f64 = 1e-7;

/// The extra variance while it is found in turn with a curve: a curve at given weights, the variance at a given curve.
#[derive(Clone, Debug)]
pub(super) struct Settling {
    standard_errors: Vec<f64>,
    interval_variance: f64,
    degrees: f64,
    last_change: f64,
}

/// How the extra variance wants to move.
#[derive(Clone, Copy, Debug)]
pub(super) struct Change {
    change: f64,
    /// By so little that curve and variance stand still together.
    pub(super) settled: bool,
}

impl Settling {
    /// For points with these standard errors; `degrees` = points - parameters.
    pub(super) fn new(standard_errors: impl Iterator<Item = f64>, degrees: f64) -> Self {
        let standard_errors: Vec<f64> = standard_errors.collect();
        let squares = standard_errors.iter().map(|e| e * e).sum::<f64>();
        Self {
            interval_variance: squares / standard_errors.len() as f64,
            standard_errors,
            degrees,
            last_change: f64::INFINITY,
        }
    }

    /// The change from `variance` to the one that belongs to `residuals`.
    pub(super) fn change(&self, residuals: &[f64], variance: f64) -> Change {
        let target = extra_variance(residuals, &self.standard_errors, self.degrees);
        let change = target - variance;
        Change {
            change,
            settled: change.abs() <= SETTLED * (target + self.interval_variance),
        }
    }

    /// The variance after `change` in round `round`, from 0. Changes shrink by a steady factor: the sum of those to come
    /// is taken at once (Aitken), which also brings to rest a minimum that hops to and fro with the weights.
    pub(super) fn advance(&mut self, round: usize, variance: f64, Change { change, .. }: Change) -> f64 {
        let ratio = if round > 1 {
            (change / self.last_change).clamp(-0.9, 0.6)
        } else {
            0.0
        };
        self.last_change = change;
        let step = if ratio.is_finite() {
            change / (1.0 - ratio)
        } else {
            change
        };
        (variance + step).max(0.0)
    }

    /// Forgets the last change: the curve has jumped to another minimum.
    pub(super) fn restart(&mut self) {
        self.last_change = f64::INFINITY;
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn solves_its_equation_or_is_zero() {
        let r = [3.0, -1.0, 4.0, -2.0, 0.5, 6.0];
        let e = [0.1, 1.0, 2.0, 0.01, 3.0, 0.5];
        let v = extra_variance(&r, &e, 4.0);
        let sum: f64 = r.iter().zip(e).map(|(r, e)| r * r / (e * e + v)).sum();
        assert!(v > 0.0 && (sum - 4.0).abs() < 1e-10);
        assert_eq!(extra_variance(&r, &[100.0; 6], 4.0), 0.0);
        assert_eq!(extra_variance(&r, &e, 0.0), 0.0);
        assert_eq!(extra_variance(&[0.0; 6], &e, 4.0), 0.0);
    }
}
