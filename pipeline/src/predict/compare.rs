//! Predicted against recorded rate: in bins, or both smoothed by the same Gaussian kernel.

/// How well one series of rates follows another.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Comparison {
    /// Pairs of rates.
    pub count: usize,
    /// Explained variance, 1 - sum (recorded - predicted)^2/sum (recorded - mean)^2: 1 at best, 0 for the mean rate,
    /// below for worse. `None` where the recorded rate does not vary.
    pub explained_variance: Option<f64>,
    /// Pearson's correlation; `None` where either does not vary.
    pub correlation: Option<f64>,
    /// Root mean squared difference, Hz.
    pub rmse_hz: f64,
    /// Mean of predicted minus recorded rate, Hz.
    pub bias_hz: f64,
}

impl Comparison {
    /// Compares pairs of rates in Hz. `None` for none, for unequal numbers, or a rate that is not finite.
    pub fn new(recorded_hz: &[f64], predicted_hz: &[f64]) -> Option<Self> {
        let n = recorded_hz.len();
        let finite = recorded_hz.iter().chain(predicted_hz).all(|r| r.is_finite());
        if n == 0 || n != predicted_hz.len() || !finite {
            return None;
        }
        let mean = |list: &[f64]| list.iter().sum::<f64>() / n as f64;
        let (recorded, predicted) = (mean(recorded_hz), mean(predicted_hz));
        let (mut own, mut other, mut cross, mut missed) = (0.0, 0.0, 0.0, 0.0);
        for (y, f) in recorded_hz.iter().zip(predicted_hz) {
            own += (y - recorded) * (y - recorded);
            other += (f - predicted) * (f - predicted);
            cross += (y - recorded) * (f - predicted);
            missed += (y - f) * (y - f);
        }
        // What rounding leaves of a constant series is no variation.
        let varies = |sum: f64, mean: f64| sum > 1e-24 * n as f64 * mean * mean && sum > 0.0;
        let recorded_varies = varies(own, recorded);
        Some(Self {
            count: n,
            explained_variance: recorded_varies.then(|| 1.0 - missed / own),
            correlation: (recorded_varies && varies(other, predicted))
                .then(|| (cross / (own.sqrt() * other.sqrt())).clamp(-1.0, 1.0)),
            rmse_hz: (missed / n as f64).sqrt(),
            bias_hz: predicted - recorded,
        })
    }
}

/// Recorded and predicted rate per bin, Hz: spikes and expected spikes between neighbouring `edges_s`, over the width.
///
/// `edges_s` ascend; `counts` are the expected spikes since the start at each edge ([`super::Predicted::counts`]). `None`
/// for fewer than two edges, unequal numbers or edges that do not ascend.
pub fn binned(spikes_s: &[f64], edges_s: &[f64], counts: &[f64]) -> Option<[Vec<f64>; 2]> {
    if edges_s.len() < 2 || edges_s.len() != counts.len() || !edges_s.windows(2).all(|w| w[1] > w[0]) {
        return None;
    }
    let before = |t: f64| spikes_s.partition_point(|s| *s < t);
    let widths = || edges_s.windows(2).map(|w| w[1] - w[0]);
    let recorded = edges_s
        .windows(2)
        .zip(widths())
        .map(|(w, width)| (before(w[1]) - before(w[0])) as f64 / width)
        .collect();
    let predicted = counts
        .windows(2)
        .zip(widths())
        .map(|(w, width)| (w[1] - w[0]) / width)
        .collect();
    Some([recorded, predicted])
}

/// [`binned`] and compared. `None` under the conditions of either.
pub fn compare_binned(spikes_s: &[f64], edges_s: &[f64], counts: &[f64]) -> Option<Comparison> {
    let [recorded, predicted] = binned(spikes_s, edges_s, counts)?;
    Comparison::new(&recorded, &predicted)
}

/// Kernel SDs beyond which the kernel counts as zero.
const REACH: f64 = 6.0;

/// Recorded and predicted rate at the middle of each bin, Hz, both smoothed by a Gaussian kernel of SD `sigma_s`.
///
/// The recorded rate is a sum of kernels at the spikes between the first and last edge, the predicted one the expected
/// spikes of each bin spread likewise; both are divided by the part of the kernel that lies between the first and last
/// edge, so neither sinks towards the ends. Bins should be no wider than half the SD. `None` under the conditions of
/// [`binned`], or for a `sigma_s` that is not positive.
pub fn smoothed(spikes_s: &[f64], edges_s: &[f64], counts: &[f64], sigma_s: f64) -> Option<[Vec<f64>; 2]> {
    let [_, expected] = binned(spikes_s, edges_s, counts)?;
    if !(sigma_s > 0.0 && sigma_s.is_finite()) {
        return None;
    }
    let (start, end) = (*edges_s.first()?, *edges_s.last()?);
    // Part of a kernel around `t` below `x`.
    let below = |x: f64, t: f64| 0.5 * libm::erfc(-(x - t) / sigma_s * std::f64::consts::FRAC_1_SQRT_2);
    let middles: Vec<f64> = edges_s.windows(2).map(|w| 0.5 * (w[0] + w[1])).collect();
    let mut recorded = Vec::with_capacity(middles.len());
    let mut predicted = Vec::with_capacity(middles.len());
    for t in &middles {
        let mass = below(end, *t) - below(start, *t);
        let (from, to) = (t - REACH * sigma_s, t + REACH * sigma_s);
        let first = spikes_s.partition_point(|s| *s < from.max(start));
        let last = spikes_s.partition_point(|s| *s < to.min(end));
        let density: f64 = spikes_s
            .get(first..last)
            .unwrap_or_default()
            .iter()
            .map(|s| {
                let x = (s - t) / sigma_s;
                (-0.5 * x * x).exp()
            })
            .sum();
        recorded.push(density / (sigma_s * (2.0 * std::f64::consts::PI).sqrt()) / mass);
        let first = edges_s.partition_point(|e| *e < from).saturating_sub(1);
        let last = edges_s.partition_point(|e| *e < to).min(expected.len());
        let sum: f64 = (first..last)
            .map(|i| expected[i] * (below(edges_s[i + 1], *t) - below(edges_s[i], *t)))
            .sum();
        predicted.push(sum / mass);
    }
    Some([recorded, predicted])
}

/// [`smoothed`] and compared. `None` under the conditions of either.
pub fn compare_smoothed(
    spikes_s: &[f64],
    edges_s: &[f64],
    counts: &[f64],
    sigma_s: f64,
) -> Option<Comparison> {
    let [recorded, predicted] = smoothed(spikes_s, edges_s, counts, sigma_s)?;
    Comparison::new(&recorded, &predicted)
}

#[cfg(test)]
mod tests {
    #![allow(clippy::unwrap_used)]
    use super::*;

    #[test]
    fn known_figures() {
        let c = Comparison::new(&[1.0, 2.0, 3.0, 4.0], &[1.0, 3.0, 2.0, 5.0]).unwrap();
        // Sums by hand: own 5, other 8.75, cross 5.5, missed 3.
        assert!((c.explained_variance.unwrap() - 0.4).abs() < 1e-15);
        assert!((c.correlation.unwrap() - 5.5 / (5.0_f64 * 8.75).sqrt()).abs() < 1e-15);
        assert!((c.rmse_hz - 0.75_f64.sqrt()).abs() < 1e-15 && (c.bias_hz - 0.25).abs() < 1e-15);
        let flat = Comparison::new(&[0.1 + 0.2, 0.3], &[1.0, 2.0]).unwrap();
        assert_eq!((flat.explained_variance, flat.correlation), (None, None));
        assert_eq!(Comparison::new(&[], &[]), None);
        assert_eq!(Comparison::new(&[1.0], &[f64::NAN]), None);
    }

    #[test]
    fn bins_count_a_spike_on_an_edge_once() {
        let [recorded, predicted] =
            binned(&[0.0, 0.1, 0.15, 0.2], &[0.0, 0.1, 0.2], &[0.0, 1.0, 3.0]).unwrap();
        assert!((recorded[0] - 10.0).abs() < 1e-9 && (recorded[1] - 20.0).abs() < 1e-9);
        assert!((predicted[0] - 10.0).abs() < 1e-9 && (predicted[1] - 20.0).abs() < 1e-9);
        assert_eq!(binned(&[], &[0.0, 0.0], &[0.0, 0.0]), None);
    }

    #[test]
    fn smoothing_keeps_a_constant_rate_to_the_ends() {
        let edges: Vec<f64> = (0..=200).map(|i| 0.005 * f64::from(i)).collect();
        let counts: Vec<f64> = edges.iter().map(|t| 40.0 * t).collect();
        let spikes: Vec<f64> = (0..40).map(|i| 0.025 * (f64::from(i) + 0.5)).collect();
        let [recorded, predicted] = smoothed(&spikes, &edges, &counts, 0.05).unwrap();
        for (r, p) in recorded.iter().zip(&predicted) {
            assert!((p - 40.0).abs() < 1e-6 && (r - 40.0).abs() < 0.5, "{r} {p}");
        }
        // One spike: the kernel's height.
        let [one, _] = smoothed(&[0.5], &[0.0, 0.499, 0.501, 1.0], &[0.0; 4], 0.05).unwrap();
        assert!((one[1] - 1.0 / (0.05 * (2.0 * std::f64::consts::PI).sqrt())).abs() < 1e-9);
        assert_eq!(smoothed(&[0.5], &[0.0, 1.0], &[0.0; 2], 0.0), None);
    }
}
