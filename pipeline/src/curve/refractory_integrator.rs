//! The leaky integrate-and-fire cell with a refractory period, without noise.
//!
//! ```text
//! rate = 1/(t_ref + tau ln(drive/(drive - threshold))) above the threshold (> 0), 0 at or below it
//! ```
//!
//! The membrane starts at rest after every spike, so that the drive sets both the asymptote and the threshold (Stein
//! 1967; Dayan & Abbott 2001, section 5.4). Three parameters. The slope is infinite at the threshold; far above it the
//! rate approaches 1/t_ref.

/// Rate (Hz) at `drive` (pA or nS) and its derivatives by `parameters` = (ln tau in s, t_ref in s, threshold). At or
/// below the threshold all are zero; a threshold at or below 0 is taken as just above it.
#[inline]
pub fn refractory_integrator(drive: f64, parameters: &[f64; 3]) -> (f64, [f64; 3]) {
    let [ln_tau, t_ref, threshold] = *parameters;
    let threshold = threshold.max(f64::MIN_POSITIVE);
    let above = drive - threshold;
    if above <= 0.0 {
        return (0.0, [0.0; 3]);
    }
    let tau = ln_tau.exp();
    let charging = tau * (threshold / above).ln_1p();
    let period = t_ref + charging;
    if period <= 0.0 {
        // Without refractoriness and far above threshold: beyond every rate.
        return (f64::INFINITY, [f64::NAN; 3]);
    }
    let rate = 1.0 / period;
    let square = rate * rate;
    (rate, [-square * charging, -square, -square * tau / above])
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn known_values_and_the_ceiling() {
        let p = [(0.02_f64).ln(), 0.002, 100.0];
        assert_eq!(refractory_integrator(100.0, &p), (0.0, [0.0; 3]));
        let expected = 1.0 / (0.002 + 0.02 * (2.0_f64).ln());
        assert!((refractory_integrator(200.0, &p).0 - expected).abs() < 1e-12 * expected);
        assert!((refractory_integrator(1e12, &p).0 - 500.0).abs() < 1e-6);
        assert!(
            refractory_integrator(100.0 + 1e-13, &p)
                .1
                .iter()
                .all(|s| s.is_finite())
        );
    }

    #[test]
    fn derivatives_match_differences() {
        let p = [(0.02_f64).ln(), 0.002, 100.0];
        for drive in [101.0, 150.0, 900.0] {
            let (_, slopes) = refractory_integrator(drive, &p);
            for k in 0..3 {
                let step = [1e-6, 1e-8, 1e-5][k];
                let (mut up, mut down) = (p, p);
                up[k] += step;
                down[k] -= step;
                let slope = (refractory_integrator(drive, &up).0 - refractory_integrator(drive, &down).0)
                    / (2.0 * step);
                assert!((slope - slopes[k]).abs() < 1e-5 * slopes[k].abs(), "{drive} {k}");
            }
        }
    }
}
