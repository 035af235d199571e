//! The ramp: rate in proportion to the drive above a threshold, without noise.
//!
//! ```text
//! rate = gain * (drive - threshold) above the threshold, 0 at or below it
//! ```
//!
//! The threshold-linear cell (common practice); the smoothed ramp's limit for noise SD 0. Two parameters, so at least
//! two drives above threshold.

/// Rate (Hz) at `drive` (pA or nS) and its derivatives by `parameters` = (ln gain in Hz per drive unit, threshold). At
/// the threshold itself the derivatives are those of the silent side: zero.
#[inline]
pub fn ramp(drive: f64, parameters: &[f64; 2]) -> (f64, [f64; 2]) {
    let [ln_gain, threshold] = *parameters;
    let above = drive - threshold;
    if above <= 0.0 {
        return (0.0, [0.0; 2]);
    }
    let gain = ln_gain.exp();
    let rate = gain * above;
    (rate, [rate, -gain])
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::curve::smoothed_ramp;

    #[test]
    fn known_values_and_the_limit_of_the_smoothed_ramp() {
        let p = [(0.4_f64).ln(), 50.0];
        assert_eq!(ramp(50.0, &p), (0.0, [0.0; 2]));
        assert_eq!(ramp(-1e9, &p).0, 0.0);
        let (rate, slopes) = ramp(150.0, &p);
        assert!((rate - 40.0).abs() < 1e-12 && (slopes[0] - 40.0).abs() < 1e-12);
        assert!((slopes[1] + 0.4).abs() < 1e-12);
        let smoothed = 0.4 * smoothed_ramp::ramp(100.0, 1e-3).value;
        assert!((smoothed - rate).abs() < 1e-12);
    }
}
