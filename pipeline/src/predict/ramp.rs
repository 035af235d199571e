//! Rates along a ramp of the drive: each interval's rate against the drive at its middle.

use super::drive::Piece;

/// One interval on a ramp.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct RampPoint {
    /// Drive at the middle of the interval: its mean over the interval, pA or nS.
    pub drive: f64,
    /// Instantaneous rate 1/x, Hz.
    pub rate: f64,
    /// Its standard error, rate times the interval CV, Hz.
    pub se: f64,
    /// Start and end of the interval, seconds.
    pub start_s: f64,
    /// See `start_s`.
    pub end_s: f64,
    /// Change of the drive over the interval, in its unit: how finely the ramp shows the curve.
    pub drive_change: f64,
}

/// The intervals of ascending `spikes_s` that lie whole within the ramp `piece`, with the cell's interval CV.
///
/// Empty where `piece` has no length or `interval_cv` is not a number from 0 up. 1/x exceeds the rate on average by
/// about CV^2 of it where firing is irregular, and a ramp that rises faster than the rate can follow, or adapts, shifts
/// the curve along the drive: rising and falling ramps together tell.
pub fn ramp_points(spikes_s: &[f64], piece: &Piece, interval_cv: f64) -> Vec<RampPoint> {
    let slope = (piece.to - piece.from) / (piece.end_s - piece.start_s);
    if !(slope.is_finite() && interval_cv >= 0.0 && interval_cv.is_finite()) {
        return Vec::new();
    }
    spikes_s
        .windows(2)
        .filter(|w| w[0] >= piece.start_s && w[1] < piece.end_s && w[1] > w[0])
        .map(|w| {
            let rate = 1.0 / (w[1] - w[0]);
            RampPoint {
                drive: piece.from + slope * (0.5 * (w[0] + w[1]) - piece.start_s),
                rate,
                se: rate * interval_cv,
                start_s: w[0],
                end_s: w[1],
                drive_change: slope * (w[1] - w[0]),
            }
        })
        .collect()
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn spikes_of_a_straight_line_lie_on_it() {
        // Rate 0.1 Hz/pA above 100 pA; the drive rises by 200 pA/s from 0: integral 10 (t - 0.5)^2 from 0.5 s on.
        let spikes: Vec<f64> = (1..60).map(|k| 0.5 + (f64::from(k) / 10.0).sqrt()).collect();
        let piece = Piece {
            start_s: 0.0,
            end_s: 2.5,
            from: 0.0,
            to: 500.0,
        };
        let points = ramp_points(&spikes, &piece, 0.1);
        assert_eq!(points.len(), 38);
        for p in &points {
            // The mean rate over an interval is that at its middle.
            assert!((p.rate - 0.1 * (p.drive - 100.0)).abs() < 1e-9, "{p:?}");
            assert!((p.se - 0.1 * p.rate).abs() < 1e-12);
            assert!((p.drive_change - 200.0 / p.rate).abs() < 1e-9);
        }
        let flat = Piece { end_s: 0.0, ..piece };
        assert!(ramp_points(&spikes, &flat, 0.1).is_empty());
        assert!(ramp_points(&spikes, &piece, f64::NAN).is_empty());
    }
}
