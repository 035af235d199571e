//! The saturating hyperbola without noise: the smoothed hyperbola's limit for noise SD 0.
//!
//! ```text
//! rate = max_rate * u/(1+u),  u = (drive - threshold)/half_rise > 0,  and 0 at or below the threshold
//! ```
//!
//! The rectangular hyperbola (Michaelis & Menten 1913; for rates Naka & Rushton 1966 with exponent 1), shifted to a
//! threshold.

/// Rate at one drive and its derivatives.
#[derive(Clone, Copy, Debug, Default, PartialEq)]
pub struct Hyperbola {
    /// Rate, Hz.
    pub rate: f64,
    /// Derivatives by ln max rate (Hz), ln half-rise (Hz) and threshold (Hz per drive unit). At the threshold itself,
    /// where the curve has a kink, those of the silent side: zero.
    pub derivatives: [f64; 3],
}

/// The hyperbola at `drive` (pA or nS) for `parameters` = (ln max rate in Hz, ln half-rise, threshold), the latter two
/// in the unit of the drive.
#[inline]
pub fn hyperbola(drive: f64, parameters: &[f64; 3]) -> Hyperbola {
    let [ln_max_rate, ln_half_rise, threshold] = *parameters;
    let above = drive - threshold;
    if above <= 0.0 {
        return Hyperbola::default();
    }
    let (max_rate, half_rise) = (ln_max_rate.exp(), ln_half_rise.exp());
    let inverse = 1.0 / (above + half_rise);
    let rate = max_rate * (above * inverse);
    let missing = half_rise * inverse;
    Hyperbola {
        rate,
        derivatives: [rate, -rate * missing, -max_rate * missing * inverse],
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn derivatives_match_differences() {
        let p = [(90.0_f64).ln(), (150.0_f64).ln(), 40.0];
        for drive in [41.0, 100.0, 800.0] {
            let at = hyperbola(drive, &p);
            for k in 0..3 {
                let (mut up, mut down) = (p, p);
                let step = [1e-5, 1e-5, 1e-4][k];
                up[k] += step;
                down[k] -= step;
                let slope = (hyperbola(drive, &up).rate - hyperbola(drive, &down).rate) / (2.0 * step);
                assert!(
                    (slope - at.derivatives[k]).abs() < 1e-6 * at.derivatives[k].abs(),
                    "{drive} {k}"
                );
            }
        }
    }

    #[test]
    fn known_values() {
        let p = [(90.0_f64).ln(), (150.0_f64).ln(), 40.0];
        assert_eq!(hyperbola(40.0, &p), Hyperbola::default());
        assert_eq!(hyperbola(-1e9, &p), Hyperbola::default());
        assert!((hyperbola(190.0, &p).rate - 45.0).abs() < 1e-12);
        assert!((hyperbola(1e12, &p).rate - 90.0).abs() < 1e-6);
        assert!(hyperbola(f64::NAN, &p).rate.is_nan());
    }
}
