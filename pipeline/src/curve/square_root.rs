//! The square root above a threshold: the rate near a saddle-node on an invariant circle.
//!
//! ```text
//! rate = gain * sqrt(drive - threshold) above the threshold, 0 at or below it
//! ```
//!
//! Ermentrout & Kopell (1986, *SIAM J. Appl. Math.* 46:233); Ermentrout (1996, *Neural Comput.* 8:979). Chart
//! (ln gain, threshold). The slope is infinite at the threshold itself, where the derivatives are given as those of
//! the silent side, and the rate grows without limit far above it.

use super::{Curve, Rate, RateFunction, Units, bounded, tame_exp};

/// The square root in the chart (ln gain, threshold); gain is in rate per square root of drive.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct SquareRoot {
    gain: f64,
    threshold: f64,
}

impl RateFunction<2> for SquareRoot {
    const CURVE: Curve = Curve::SquareRoot;
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
        let root = above.sqrt();
        let rate = self.gain * root;
        Rate::bounded(rate, [rate, -0.5 * self.gain / root])
    }

    fn natural(parameters: &[f64; 2], units: Units) -> [f64; 2] {
        [
            parameters[0].exp() * units.rate / units.drive.sqrt(),
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
        derivatives_match::<2, SquareRoot>([-0.4, 0.3], &[-1.0, 0.2, 0.4, 5.0]);
        let curve = SquareRoot::new(&[3.0_f64.ln(), 100.0]);
        assert!((curve.at(181.0).rate - 27.0).abs() < 1e-13);
        assert_eq!(curve.at(100.0), Rate::SILENT);
        let natural = SquareRoot::natural(
            &[0.0, 0.5],
            Units {
                drive: 400.0,
                rate: 80.0,
            },
        );
        assert_eq!(natural, [4.0, 200.0]);
    }

    #[test]
    fn finite_everywhere() {
        always_finite::<2, SquareRoot>([&[-700.0, 0.0, 20.0, 700.0], &[-1e300, 0.0, 1.0]]);
    }
}
