//! The Hill curve above a threshold: the hyperbola with an exponent.
//!
//! ```text
//! rate = max_rate * u^n/(1 + u^n),  u = (drive - threshold)/half_rise > 0,  and 0 at or below the threshold
//! ```
//!
//! Hill 1910; for rates Naka & Rushton 1966. Four parameters: the threshold is free, as in the main fit. At the
//! threshold the slope is infinite for n < 1.

/// Rate (Hz) at `drive` (pA or nS) and its derivatives by `parameters` = (ln max rate in Hz, ln half-rise, threshold,
/// ln n), half-rise and threshold in the unit of the drive. At or below the threshold all are zero.
#[inline]
pub fn hill(drive: f64, parameters: &[f64; 4]) -> (f64, [f64; 4]) {
    let [ln_max_rate, ln_half_rise, threshold, ln_exponent] = *parameters;
    let above = drive - threshold;
    if above <= 0.0 {
        return (0.0, [0.0; 4]);
    }
    let exponent = ln_exponent.exp();
    let ln_u = above.ln() - ln_half_rise;
    let power = exponent * ln_u;
    let e = (-power.abs()).exp();
    let (share, rest) = if power >= 0.0 {
        (1.0 / (1.0 + e), e / (1.0 + e))
    } else {
        (e / (1.0 + e), 1.0 / (1.0 + e))
    };
    let rate = ln_max_rate.exp() * share;
    let slope = rate * rest;
    (
        rate,
        [rate, -exponent * slope, -exponent * slope / above, power * slope],
    )
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::curve::hyperbola::hyperbola;

    #[test]
    fn with_exponent_one_it_is_the_hyperbola() {
        let p = [(90.0_f64).ln(), (150.0_f64).ln(), 40.0, 0.0];
        let three = [p[0], p[1], p[2]];
        for drive in [-10.0, 40.0, 41.0, 190.0, 1e6] {
            let (rate, slopes) = hill(drive, &p);
            let other = hyperbola(drive, &three);
            assert!((rate - other.rate).abs() < 1e-12);
            for k in 0..3 {
                assert!((slopes[k] - other.derivatives[k]).abs() < 1e-12 * slopes[k].abs().max(1.0));
            }
        }
    }

    #[test]
    fn half_at_the_half_rise_and_finite_everywhere() {
        for exponent in [0.3_f64, 2.0, 15.0] {
            let p = [(90.0_f64).ln(), (150.0_f64).ln(), 40.0, exponent.ln()];
            assert!((hill(190.0, &p).0 - 45.0).abs() < 1e-12);
            for drive in [40.0 + 1e-13, 41.0, 1e12, 1e300] {
                let (rate, slopes) = hill(drive, &p);
                assert!(
                    rate.is_finite() && slopes.iter().all(|s| s.is_finite()),
                    "{drive}"
                );
            }
            let (_, slopes) = hill(130.0, &p);
            for k in 0..4 {
                let step = [1e-6, 1e-6, 1e-4, 1e-6][k];
                let (mut up, mut down) = (p, p);
                up[k] += step;
                down[k] -= step;
                let slope = (hill(130.0, &up).0 - hill(130.0, &down).0) / (2.0 * step);
                assert!(
                    (slope - slopes[k]).abs() < 1e-6 * slopes[k].abs().max(1e-3),
                    "{exponent} {k}"
                );
            }
        }
    }
}
