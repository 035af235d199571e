//! Statistics of one series of intervals. Every function takes intervals in seconds, all positive, in time order,
//! and gives `None` where the series is too short for it.

/// Interval rate of one response window, in Hz: `(n - 1) / (t_n - t_1)`.
///
/// `spikes` are the window's spike times in seconds, ascending. `None` with fewer than two spikes: before the
/// second spike no interval, and so no rate, exists.
pub fn interval_rate(spikes: &[f64]) -> Option<f64> {
    let (first, last) = (spikes.first()?, spikes.last()?);
    (spikes.len() > 1 && last > first).then(|| (spikes.len() - 1) as f64 / (last - first))
}

/// Mean of the intervals, seconds; `None` for an empty series.
fn mean(intervals: &[f64]) -> Option<f64> {
    (!intervals.is_empty()).then(|| intervals.iter().sum::<f64>() / intervals.len() as f64)
}

/// Coefficient of variation: sample SD (divisor n - 1) over mean. Needs 2 intervals.
pub fn cv(intervals: &[f64]) -> Option<f64> {
    if intervals.len() < 2 {
        return None;
    }
    let mean = mean(intervals)?;
    let squares: f64 = intervals.iter().map(|x| (x - mean) * (x - mean)).sum();
    Some((squares / (intervals.len() - 1) as f64).sqrt() / mean)
}

/// Coefficient of variation about the straight line through the intervals against their number: residual SD
/// (divisor n - 2) over mean. Needs 3 intervals. A steady drift, such as adaptation, does not inflate it.
pub fn detrended_cv(intervals: &[f64]) -> Option<f64> {
    let n = intervals.len();
    if n < 3 {
        return None;
    }
    let mean = mean(intervals)?;
    let middle = (n - 1) as f64 / 2.0;
    let (mut cross, mut spread) = (0.0, 0.0);
    for (i, x) in intervals.iter().enumerate() {
        let offset = i as f64 - middle;
        cross += offset * (x - mean);
        spread += offset * offset;
    }
    let slope = cross / spread;
    let squares: f64 = intervals
        .iter()
        .enumerate()
        .map(|(i, x)| {
            let residual = x - mean - slope * (i as f64 - middle);
            residual * residual
        })
        .sum();
    Some((squares / (n - 2) as f64).sqrt() / mean)
}

/// Mean over the n - 1 pairs of neighbouring intervals; `None` without a pair.
fn over_pairs(intervals: &[f64], term: impl Fn(f64, f64) -> f64) -> Option<f64> {
    let pairs = intervals.len().checked_sub(1).filter(|pairs| *pairs > 0)?;
    Some(intervals.windows(2).map(|w| term(w[0], w[1])).sum::<f64>() / pairs as f64)
}

/// CV2 = mean of 2|x_(i+1) - x_i|/(x_(i+1) + x_i) (Holt, Softky, Koch & Douglas 1996). Needs 2 intervals.
pub fn cv2(intervals: &[f64]) -> Option<f64> {
    over_pairs(intervals, |a, b| 2.0 * (b - a).abs() / (a + b))
}

/// LV = 3/(n-1) sum ((x_i - x_(i+1))/(x_i + x_(i+1)))^2 over the n - 1 pairs (Shinomoto, Shima & Tanji 2003). Needs
/// 2 intervals.
pub fn lv(intervals: &[f64]) -> Option<f64> {
    over_pairs(intervals, |a, b| 3.0 * ((a - b) / (a + b)).powi(2))
}

/// LvR = 3/(n-1) sum (1 - 4 x_i x_(i+1)/(x_i + x_(i+1))^2)(1 + 4R/(x_i + x_(i+1))) (Shinomoto et al. 2009), with the
/// refractoriness constant R in seconds. Needs 2 intervals. R = 0 gives LV.
pub fn lvr(intervals: &[f64], refractory_s: f64) -> Option<f64> {
    over_pairs(intervals, |a, b| {
        let sum = a + b;
        3.0 * ((a - b) / sum).powi(2) * (1.0 + 4.0 * refractory_s / sum)
    })
}

#[cfg(test)]
mod tests {
    #![allow(clippy::unwrap_used)]
    use super::*;

    #[test]
    fn a_rate_needs_two_spikes() {
        assert_eq!(interval_rate(&[]), None);
        assert_eq!(interval_rate(&[0.3]), None);
        assert_eq!(interval_rate(&[0.25, 0.5]), Some(4.0));
        assert_eq!(interval_rate(&[0.25, 0.3, 0.75]), Some(4.0));
    }

    #[test]
    fn detrending_takes_a_straight_line_out() {
        let line: Vec<f64> = (0..10).map(|i| 0.01 + 0.002 * f64::from(i)).collect();
        assert!(detrended_cv(&line).unwrap() < 1e-12);
        assert!(cv(&line).unwrap() > 0.2);
        assert_eq!(detrended_cv(&line[..2]), None);
    }

    #[test]
    fn lvr_without_refractoriness_is_lv() {
        let x = [0.012, 0.015, 0.011, 0.02];
        assert!((lvr(&x, 0.0).unwrap() - lv(&x).unwrap()).abs() < 1e-15);
        assert_eq!(lv(&x[..1]), None);
        assert_eq!(cv2(&[]), None);
    }
}
