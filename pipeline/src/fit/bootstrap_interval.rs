//! Intervals from bootstrap replicates: percentile and BCa.

use statrs::distribution::{ContinuousCDF, Normal};

/// Both intervals of one quantity, on the scale of its replicates.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct ReplicateInterval {
    /// Percentile interval (Efron & Tibshirani 1993, section 13.3).
    pub percentile: [f64; 2],
    /// BCa interval; `None` without an acceleration and where [`bca_levels`] has no answer.
    pub bca: Option<[f64; 2]>,
}

/// Lower and upper level of a 95 % interval.
pub const TAILS: [f64; 2] = [0.025, 0.975];

/// Percentile and BCa intervals of an estimate from its bootstrap `replicates` at the levels `tails`; `acceleration` is that of BCa, see
/// [`acceleration`], without which there is no BCa interval. Sorts the replicates. `None` without replicates, or where
/// one is not a number.
pub fn intervals(
    estimate: f64,
    replicates: &mut [f64],
    acceleration: Option<f64>,
    tails: [f64; 2],
) -> Option<ReplicateInterval> {
    if replicates.is_empty() || !estimate.is_finite() || replicates.iter().any(|r| r.is_nan()) {
        return None;
    }
    replicates.sort_by(f64::total_cmp);
    let at = |levels: [f64; 2]| levels.map(|level| quantile(replicates, level));
    Some(ReplicateInterval {
        percentile: at(tails),
        bca: acceleration
            .and_then(|a| bca_levels(estimate, replicates, a, tails))
            .map(at),
    })
}

/// The two levels of the bootstrap distribution that bound the BCa interval whose nominal levels are `tails` (Efron 1987, *JASA* 82:171; Efron &
/// Tibshirani 1993, equations 14.10 and 14.14).
///
/// The bias correction counts replicates that tie with the estimate half. `None` where all replicates lie on one side
/// of the estimate, so that it is not defined, or where the correction by the acceleration `a` is too large for use.
pub fn bca_levels(estimate: f64, replicates: &[f64], a: f64, tails: [f64; 2]) -> Option<[f64; 2]> {
    let normal = Normal::standard();
    let below = replicates.iter().filter(|r| **r < estimate).count() as f64;
    let ties = replicates.iter().filter(|r| **r == estimate).count() as f64;
    let part = (below + 0.5 * ties) / replicates.len() as f64;
    if !(part > 0.0 && part < 1.0) {
        return None;
    }
    let bias = normal.inverse_cdf(part);
    let levels = tails.map(|tail| {
        let z = bias + normal.inverse_cdf(tail);
        normal.cdf(bias + z / (1.0 - a * z))
    });
    // Beyond 1/a the corrected level turns back: the correction is too large to be used.
    let usable = tails
        .iter()
        .all(|tail| a * (bias + normal.inverse_cdf(*tail)) < 1.0);
    (usable && levels[0] < levels[1]).then_some(levels)
}

/// Acceleration from jackknife values: sum d^3/(6 (sum d^2)^(3/2)), d = mean - value (Efron & Tibshirani 1993,
/// equation 14.15). `None` where they do not vary.
pub fn acceleration(jackknife: &[f64]) -> Option<f64> {
    let mean = jackknife.iter().sum::<f64>() / jackknife.len() as f64;
    let (mut square, mut cube) = (0.0, 0.0);
    for value in jackknife {
        let d = mean - value;
        square += d * d;
        cube += d * d * d;
    }
    let a = cube / (6.0 * square.powf(1.5));
    a.is_finite().then_some(a)
}

/// Quantile of ascending `sorted` values, interpolated between neighbours: (n - 1) `level` from the first on (Hyndman
/// & Fan 1996, definition 7). Not a number without values.
pub fn quantile(sorted: &[f64], level: f64) -> f64 {
    let Some(last) = sorted.len().checked_sub(1) else {
        return f64::NAN;
    };
    let position = level.clamp(0.0, 1.0) * last as f64;
    let below = position.floor() as usize;
    let above = (below + 1).min(last);
    let part = position - below as f64;
    sorted[below] + part * (sorted[above] - sorted[below])
}

#[cfg(test)]
mod tests {
    #![allow(clippy::unwrap_used)]
    use super::*;

    #[test]
    fn a_symmetric_distribution_needs_no_correction() {
        let mut replicates: Vec<f64> = (0..=1000).map(f64::from).collect();
        let jackknife: Vec<f64> = (0..=20).map(f64::from).collect();
        let found = intervals(500.0, &mut replicates, acceleration(&jackknife), TAILS).unwrap();
        assert_eq!(found.percentile, [25.0, 975.0]);
        let bca = found.bca.unwrap();
        assert!(
            (bca[0] - 25.0).abs() < 1e-6 && (bca[1] - 975.0).abs() < 1e-6,
            "{bca:?}"
        );
    }

    #[test]
    fn an_estimate_outside_its_replicates_has_no_bca() {
        let mut replicates = [1.0, 2.0, 3.0];
        let found = intervals(5.0, &mut replicates, Some(0.01), TAILS).unwrap();
        assert_eq!(found.bca, None);
        assert!(intervals(5.0, &mut [], Some(0.0), TAILS).is_none());
        assert!(intervals(5.0, &mut [1.0, f64::NAN], Some(0.0), TAILS).is_none());
        assert_eq!(acceleration(&[2.0, 2.0, 2.0]), None);
        assert_eq!(acceleration(&[]), None);
    }

    #[test]
    fn quantiles_interpolate() {
        assert_eq!(quantile(&[1.0, 2.0, 4.0], 0.75), 3.0);
        assert_eq!(quantile(&[1.0, 2.0, 4.0], 1.0), 4.0);
        assert_eq!(quantile(&[7.0], 0.3), 7.0);
        assert!(quantile(&[], 0.5).is_nan());
    }
}
