//! The logistic curve: symmetric about its middle, without a threshold.
//!
//! ```text
//! rate = max_rate / (1 + exp(-(drive - middle)/width))
//! ```
//!
//! Verhulst 1838; in rate models Wilson & Cowan 1972. Three parameters.

/// Rate (Hz) at `drive` (pA or nS) and its derivatives by `parameters` = (ln max rate in Hz, middle, ln width), the
/// latter two in the unit of the drive.
#[inline]
pub fn logistic(drive: f64, parameters: &[f64; 3]) -> (f64, [f64; 3]) {
    let [ln_max_rate, middle, ln_width] = *parameters;
    let width = ln_width.exp();
    let u = (drive - middle) / width;
    // Both halves without overflow.
    let e = (-u.abs()).exp();
    let (share, rest) = if u >= 0.0 {
        (1.0 / (1.0 + e), e / (1.0 + e))
    } else {
        (e / (1.0 + e), 1.0 / (1.0 + e))
    };
    let rate = ln_max_rate.exp() * share;
    let slope = rate * rest;
    // u exp(-|u|) vanishes where u itself is beyond all bounds.
    let by_width = if u.abs() < 800.0 { -slope * u } else { 0.0 };
    (rate, [rate, -slope / width, by_width])
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn known_values_symmetry_and_limits() {
        let p = [(80.0_f64).ln(), 200.0, (40.0_f64).ln()];
        assert!((logistic(200.0, &p).0 - 40.0).abs() < 1e-12);
        assert!((logistic(240.0, &p).0 - 80.0 / (1.0 + (-1.0_f64).exp())).abs() < 1e-12);
        assert!((logistic(300.0, &p).0 + logistic(100.0, &p).0 - 80.0).abs() < 1e-12);
        for drive in [-1e300, -1e9, 1e9, 1e300] {
            let (rate, slopes) = logistic(drive, &p);
            assert!(
                rate.is_finite() && slopes.iter().all(|s| s.is_finite()),
                "{drive}"
            );
        }
        let step = logistic(201.0, &[p[0], 200.0, -600.0]);
        assert!((step.0 - 80.0).abs() < 1e-12 && step.1.iter().all(|s| s.is_finite()));
    }

    #[test]
    fn derivatives_match_differences() {
        let p = [(80.0_f64).ln(), 200.0, (40.0_f64).ln()];
        for drive in [-50.0, 180.0, 205.0, 500.0] {
            let (_, slopes) = logistic(drive, &p);
            for k in 0..3 {
                let step = [1e-6, 1e-4, 1e-6][k];
                let (mut up, mut down) = (p, p);
                up[k] += step;
                down[k] -= step;
                let slope = (logistic(drive, &up).0 - logistic(drive, &down).0) / (2.0 * step);
                assert!(
                    (slope - slopes[k]).abs() < 1e-6 * slopes[k].abs().max(1e-3),
                    "{drive} {k}"
                );
            }
        }
    }
}
