//! What the data say about the ceiling.

use crate::fit::Point;
use crate::settings::Analysis;

/// Mean rate of one level and its standard error, Hz.
#[derive(Clone, Copy, Debug, PartialEq)]
pub(super) struct LevelMean {
    pub(super) drive: f64,
    pub(super) rate: f64,
    pub(super) se: f64,
}

/// Median of a squared standard normal, which turns a median of squares into a variance.
const MEDIAN_CHI2: f64 = 0.454_936_423_119_572_8;

/// Level means with standard errors that hold the scatter between steps as well as interval noise; without
/// `with_scatter`, what the points' standard errors say alone.
///
/// The scatter is read off the second differences of neighbouring level means, whose variance is six times that of a
/// mean when the curve is smooth; taking their median keeps a real fall of the rate out of it.
pub(super) fn level_means(points: &[Point], with_scatter: bool) -> Vec<LevelMean> {
    let mut means: Vec<(LevelMean, f64)> = Vec::new();
    let mut i = 0;
    while i < points.len() {
        let same = points[i..]
            .iter()
            .take_while(|p| p.drive == points[i].drive)
            .count();
        let (mut rate, mut square) = (0.0, 0.0);
        for p in &points[i..i + same] {
            rate += p.rate;
            square += p.se * p.se;
        }
        let count = same as f64;
        means.push((
            LevelMean {
                drive: points[i].drive,
                rate: rate / count,
                se: square.sqrt() / count,
            },
            count,
        ));
        i += same;
    }
    let mut excess: Vec<f64> = means
        .windows(3)
        .map(|w| {
            let [(a, _), (b, _), (c, _)] = [w[0], w[1], w[2]];
            let bend = a.rate - 2.0 * b.rate + c.rate;
            let noise = a.se * a.se + 4.0 * b.se * b.se + c.se * c.se;
            (bend * bend / MEDIAN_CHI2 - noise) / 6.0
        })
        .collect();
    excess.sort_by(f64::total_cmp);
    let median = excess.get(excess.len() / 2).filter(|_| with_scatter);
    let scatter = median.copied().unwrap_or(0.0).max(0.0);
    means
        .into_iter()
        .map(|(m, _)| LevelMean {
            se: (m.se * m.se + scatter).sqrt(),
            ..m
        })
        .collect()
}

/// Where the rate peaks before it falls, and how far it falls.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Decline {
    /// Drive of the level with the largest mean rate; steps above it are not to be fitted.
    pub peak_drive: f64,
    /// Smallest mean rate above the peak level over the peak.
    pub fraction: f64,
}

/// Whether the rate falls at high drive: mean rates above the peak level below `declining_fraction` of the peak by
/// more than `declining_se` standard errors on at least two levels, or below `declining_last_fraction` of it on the
/// last. `points` are sorted by drive.
pub fn decline(points: &[Point], settings: &Analysis) -> Option<Decline> {
    let means = level_means(points, true);
    let peak_at = means
        .iter()
        .enumerate()
        .max_by(|(_, a), (_, b)| a.rate.total_cmp(&b.rate))
        .map(|(i, _)| i)?;
    let peak = means[peak_at];
    let above = &means[peak_at + 1..];
    let last = above.last()?;
    if !(peak.rate > 0.0) {
        return None;
    }
    let floor = settings.declining_fraction * peak.rate;
    let below = above
        .iter()
        .filter(|m| {
            let se = m.se.hypot(settings.declining_fraction * peak.se);
            floor - m.rate > settings.declining_se * se
        })
        .count();
    let fell = below >= 2 || last.rate < settings.declining_last_fraction * peak.rate;
    let lowest = above.iter().map(|m| m.rate).fold(f64::INFINITY, f64::min);
    fell.then_some(Decline {
        peak_drive: peak.drive,
        fraction: lowest / peak.rate,
    })
}

/// Largest mean rate over the levels of `points` (sorted by drive), Hz.
pub fn peak_rate(points: &[Point]) -> Option<f64> {
    level_means(points, true)
        .iter()
        .map(|m| m.rate)
        .max_by(f64::total_cmp)
}

#[cfg(test)]
mod tests {
    #![allow(clippy::unwrap_used)]
    use super::*;

    fn points(rates: &[f64], se: f64) -> Vec<Point> {
        rates
            .iter()
            .enumerate()
            .map(|(i, r)| Point {
                drive: 50.0 * i as f64,
                rate: *r,
                se,
            })
            .collect()
    }

    #[test]
    fn a_block_is_declining_and_a_noisy_plateau_is_not() {
        let settings = Analysis::default();
        let block = points(&[0.0, 10.0, 30.0, 45.0, 52.0, 40.0, 20.0, 2.0], 1.0);
        let found = decline(&block, &settings).unwrap();
        assert_eq!(found.peak_drive, 200.0);
        assert!((found.fraction - 2.0 / 52.0).abs() < 1e-12);
        // Scatter of 8 Hz that interval noise of 1 Hz does not explain.
        let plateau = points(&[0.0, 22.0, 30.0, 52.0, 43.0, 60.0, 44.0, 58.0, 46.0, 57.0], 1.0);
        assert_eq!(decline(&plateau, &settings), None);
        assert_eq!(decline(&points(&[0.0, 5.0, 10.0, 20.0], 1.0), &settings), None);
    }

    #[test]
    fn one_low_last_level_is_enough() {
        let settings = Analysis::default();
        assert!(decline(&points(&[0.0, 10.0, 30.0, 45.0, 52.0, 20.0], 1.0), &settings).is_some());
        assert_eq!(
            decline(&points(&[0.0, 10.0, 30.0, 45.0, 52.0, 44.0], 1.0), &settings),
            None
        );
        assert_eq!(decline(&points(&[0.0, 0.0], 1.0), &settings), None);
    }
}
