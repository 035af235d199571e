//! The square root: the rate of a cell that starts to fire through a saddle-node on an invariant circle.
//!
//! ```text
//! rate = scale * sqrt(drive - threshold) above the threshold, 0 at or below it
//! ```
//!
//! Near such an onset the period grows as the inverse root of the distance to threshold (Ermentrout 1996; Strogatz
//! 1994, section 4.3). Two parameters. The slope is infinite at the threshold.

/// Rate (Hz) at `drive` (pA or nS) and its derivatives by `parameters` = (ln scale in Hz per root of the drive unit,
/// threshold). At or below the threshold all are zero.
#[inline]
pub fn square_root(drive: f64, parameters: &[f64; 2]) -> (f64, [f64; 2]) {
    let [ln_scale, threshold] = *parameters;
    let above = drive - threshold;
    if above <= 0.0 {
        return (0.0, [0.0; 2]);
    }
    let rate = ln_scale.exp() * above.sqrt();
    (rate, [rate, -0.5 * rate / above])
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn known_values_and_slopes() {
        let p = [(3.0_f64).ln(), 50.0];
        assert_eq!(square_root(50.0, &p), (0.0, [0.0; 2]));
        let (rate, slopes) = square_root(150.0, &p);
        assert!((rate - 30.0).abs() < 1e-12);
        let up = square_root(150.0, &[p[0], 50.001]).0;
        let down = square_root(150.0, &[p[0], 49.999]).0;
        assert!(((up - down) / 0.002 - slopes[1]).abs() < 1e-9);
        let (_, slopes) = square_root(50.0 + 1e-14, &p);
        assert!(slopes.iter().all(|s| s.is_finite()));
    }
}
