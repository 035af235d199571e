//! The threshold-linear rate.
//!
//! ```text
//! rate = gain * (drive - threshold) above the threshold, 0 at or below it
//! ```
//!
//! Hartline & Ratliff (1957, *J. Gen. Physiol.* 40:357). It is the smoothed ramp without noise and the hyperbola
//! without a ceiling. Chart (ln gain, threshold). The derivative by the threshold jumps from 0 to -gain at it; far
//! above, the rate grows without limit.

use super::{Curve, Rate, RateFunction, Units, bounded, tame_exp};

/// The ramp in the chart (ln gain, threshold).
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Ramp {
    gain: f64,
    threshold: f64,
}

impl RateFunction<2> for Ramp {
    const CURVE: Curve = Curve::Ramp;
    const THRESHOLD: Option<usize> = Some(1);

    #[inline(always)]
    fn new(parameters: &[f64; 2]) -> Self {
        Self {
            gain: tame_exp(parameters[0]),
            threshold: parameters[1],
        }
    }

    #[inline(always)]
    fn at(&self, drive: f64) -> Rate<2> {
        let above = bounded(drive - self.threshold);
        if above <= 0.0 {
            return Rate::SILENT;
        }
        let rate = self.gain * above;
        Rate::bounded(rate, [rate, -self.gain])
    }

    fn natural(parameters: &[f64; 2], units: Units) -> [f64; 2] {
        [
            parameters[0].exp() * units.rate / units.drive,
            units.drive * parameters[1],
        ]
    }
}

#[cfg(test)]
mod tests {
    use super::super::testing::{always_finite, derivatives_match};
    use super::*;

    #[test]
    fn derivatives_values_and_limits() {
        derivatives_match::<2, Ramp>([-0.4, 0.3], &[-1.0, 0.2, 0.4, 5.0]);
        let curve = Ramp::new(&[0.25_f64.ln(), 100.0]);
        assert!((curve.at(180.0).rate - 20.0).abs() < 1e-13);
        assert_eq!(curve.at(100.0), Rate::SILENT);
        let natural = Ramp::natural(
            &[0.0, 0.5],
            Units {
                drive: 400.0,
                rate: 80.0,
            },
        );
        assert_eq!(natural, [0.2, 200.0]);
    }

    #[test]
    fn finite_everywhere() {
        always_finite::<2, Ramp>([&[-700.0, 0.0, 20.0, 700.0], &[-1e300, 0.0, 1.0]]);
    }
}
