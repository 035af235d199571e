//! The smoothed ramp: threshold-linear rate with Gaussian input noise averaged in.
//!
//! ```text
//! rate = gain * E[(x + sigma X)+] = gain * (x Phi(x/sigma) + sigma phi(x/sigma)),   x = drive - threshold
//! ```
//!
//! It is what the smoothed hyperbola becomes when max rate and half-rise grow without bound at a fixed initial gain:
//! the curve of a cell without a ceiling in sight (threshold-linear cell in Gaussian noise: Hansel & van Vreeswijk
//! 2002).

use std::f64::consts::{FRAC_1_SQRT_2, PI};

use libm::erfc;

use super::{Curve, Rate, RateFunction, Units, bounded, tame_exp};

/// Value and moments of the smoothed ramp at one drive, per unit of gain.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Ramp {
    /// E\[(x + sigma X)+\], drive units.
    pub value: f64,
    /// P(x + sigma X > 0): minus the derivative by the threshold.
    pub above: f64,
    /// sigma phi(x/sigma): the derivative by ln sigma.
    pub spread: f64,
    /// E\[((x + sigma X)+)^2\], drive units squared.
    pub square: f64,
}

/// The ramp at `x` = drive - threshold for noise SD `sigma` > 0, both in drive units.
pub fn ramp(x: f64, sigma: f64) -> Ramp {
    let w = x / sigma;
    let above = 0.5 * erfc(-w * FRAC_1_SQRT_2);
    let spread = sigma * (-0.5 * w * w).exp() / (2.0 * PI).sqrt();
    // Far below the threshold the two terms cancel to rounding noise of either sign; the value itself is positive.
    let value = (x * above + spread).max(0.0);
    let square = ((x * x + sigma * sigma) * above + x * spread).max(0.0);
    Ramp {
        value,
        above,
        spread,
        square,
    }
}

/// The curve in the chart (ln gain, threshold, ln noise SD).
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct SmoothedRamp {
    gain: f64,
    threshold: f64,
    noise: f64,
}

impl RateFunction<3> for SmoothedRamp {
    const CURVE: Curve = Curve::SmoothedRamp;
    const THRESHOLD: Option<usize> = None;

    #[inline(always)]
    fn new(parameters: &[f64; 3]) -> Self {
        Self {
            gain: tame_exp(parameters[0]),
            threshold: parameters[1],
            noise: tame_exp(parameters[2]),
        }
    }

    #[inline(always)]
    fn at(&self, drive: f64) -> Rate<3> {
        let x = bounded(drive - self.threshold);
        if !(x.abs() <= 40.0 * self.noise) {
            // Out of the noise's reach: the ramp, or nothing at all.
            if x < 0.0 {
                return Rate::SILENT;
            }
            let rate = bounded(self.gain * x);
            return Rate::bounded(rate, [rate, -self.gain, 0.0]);
        }
        let r = ramp(x, self.noise);
        let rate = bounded(self.gain * r.value);
        Rate::bounded(rate, [rate, -self.gain * r.above, self.gain * r.spread])
    }

    fn natural(parameters: &[f64; 3], units: Units) -> [f64; 3] {
        [
            parameters[0].exp() * units.rate / units.drive,
            units.drive * parameters[1],
            units.drive * parameters[2].exp(),
        ]
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn the_prepared_curve_is_the_same_and_always_finite() {
        use super::super::testing::{always_finite, derivatives_match};
        derivatives_match::<3, SmoothedRamp>([-0.4, 0.3, -2.0], &[0.1, 0.3, 0.4, 5.0]);
        always_finite::<3, SmoothedRamp>([
            &[-700.0, 0.0, 20.0, 700.0],
            &[-1e300, 0.0, 1.0],
            &[-700.0, -3.0, 0.0, 700.0],
        ]);
        let at = SmoothedRamp::new(&[0.2_f64.ln(), 100.0, 25.0_f64.ln()]).at(110.0);
        let r = ramp(10.0, 25.0);
        assert!((at.rate - 0.2 * r.value).abs() < 1e-13);
        assert!((at.derivatives[2] - 0.2 * r.spread).abs() < 1e-13);
    }

    #[test]
    fn derivatives_match_differences() {
        for (x, sigma) in [(-30.0, 20.0), (0.0, 5.0), (40.0, 25.0), (300.0, 10.0)] {
            let r = ramp(x, sigma);
            let e = 1e-4;
            let by_x = (ramp(x + e, sigma).value - ramp(x - e, sigma).value) / (2.0 * e);
            let by_ln = (ramp(x, sigma * (1.0 + e)).value - ramp(x, sigma * (1.0 - e)).value) / (2.0 * e);
            assert!((by_x - r.above).abs() < 1e-7);
            assert!((by_ln - r.spread).abs() < 1e-6 * sigma);
            let by_x = (ramp(x + e, sigma).square - ramp(x - e, sigma).square) / (2.0 * e);
            assert!((by_x - 2.0 * r.value).abs() < 1e-5 * (1.0 + x.abs()));
        }
    }
}
