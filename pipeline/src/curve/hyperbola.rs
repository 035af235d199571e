//! The saturating hyperbola without noise: the smoothed hyperbola's limit for noise SD 0.
//!
//! ```text
//! rate = max_rate * u/(1+u),  u = (drive - threshold)/half_rise > 0,  and 0 at or below the threshold
//! ```
//!
//! The rectangular hyperbola (Michaelis & Menten 1913; for rates Naka & Rushton 1966 with exponent 1), shifted to a
//! threshold.

use super::{Curve, Rate, RateFunction, Units, bounded, tame_exp};

/// The curve in a chart that has the ramp as its ordinary boundary point c = 0:
///
/// ```text
/// rate = 1/(c + e),  e = 1/(gain (drive - threshold)),   chart (ln gain, c, threshold)
/// c = 1/max_rate,    half_rise = 1/(gain c)
/// ```
///
/// For cells that hardly bend, max rate and half-rise grow together and this chart stays well conditioned.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct GainCeiling {
    gain: f64,
    ceiling: f64,
    threshold: f64,
}

impl RateFunction<3> for GainCeiling {
    const CURVE: Curve = Curve::Hyperbola;
    const THRESHOLD: Option<usize> = Some(2);

    #[inline(always)]
    fn new(parameters: &[f64; 3]) -> Self {
        Self {
            gain: tame_exp(parameters[0]),
            ceiling: parameters[1],
            threshold: parameters[2],
        }
    }

    #[inline(always)]
    fn at(&self, drive: f64) -> Rate<3> {
        let above = bounded(drive - self.threshold);
        if above <= 0.0 {
            return Rate::SILENT;
        }
        let ramp = bounded(self.gain * above);
        // The share of the rise still missing, 1/(1 + c ramp).
        let missing = 1.0 / (1.0 + bounded(self.ceiling * ramp));
        let rate = bounded(ramp * missing);
        Rate::bounded(
            rate,
            [rate * missing, -rate * rate, -self.gain * missing * missing],
        )
    }

    fn natural(parameters: &[f64; 3], units: Units) -> [f64; 3] {
        let [ln_gain, ceiling, threshold] = *parameters;
        [
            units.rate / ceiling,
            units.drive / (ln_gain.exp() * ceiling),
            units.drive * threshold,
        ]
    }
}

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
    fn the_other_chart_is_the_same_curve() {
        use super::super::testing::{always_finite, derivatives_match};
        derivatives_match::<3, GainCeiling>([0.3, 0.6, 0.2], &[-1.0, 0.3, 0.8, 5.0]);
        derivatives_match::<3, GainCeiling>([0.3, 1e-3, 0.2], &[-1.0, 0.3, 0.8, 5.0]);
        always_finite::<3, GainCeiling>([
            &[-700.0, 0.0, 20.0, 700.0],
            &[0.0, 1e-9, 1.0, 10.0],
            &[-1e300, 0.0, 1.0],
        ]);
        let chart = [(90.0_f64 / 150.0).ln(), 1.0 / 90.0, 40.0];
        let natural = GainCeiling::natural(
            &chart,
            Units {
                drive: 1.0,
                rate: 1.0,
            },
        );
        for (found, wanted) in natural.iter().zip([90.0, 150.0, 40.0]) {
            assert!((found / wanted - 1.0_f64).abs() < 1e-13);
        }
        let p = [(90.0_f64).ln(), (150.0_f64).ln(), 40.0];
        for drive in [-10.0, 40.0, 41.0, 190.0, 1e5] {
            let (a, b) = (GainCeiling::new(&chart).at(drive).rate, hyperbola(drive, &p).rate);
            assert!((a - b).abs() < 1e-13 * 90.0, "{drive}");
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
