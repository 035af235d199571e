//! Time rescaling (Brown, Barbieri, Ventura, Kass & Frank 2002, *Neural Comput* 14:325): if spikes are Poisson with the
//! predicted rate, the integrals z of the rate over the intervals are exponential, and u = 1 - exp(-z) uniform.
//!
//! A stretch of recording that ends cuts off its last interval, and long intervals are cut off more often: from short
//! stretches the complete intervals are too short on average. Given that an interval is complete, z lies below what was
//! left, Z, when it began; u = (1 - exp(-z))/(1 - exp(-Z)) is then uniform (Wiener 2003, *Neural Comput* 15:2565).

use super::kolmogorov::{distance_from_uniform, p_value};

/// What is done about the end of each stretch.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub enum Truncation {
    /// Nothing: Brown et al. 2002 as it stands, for long stretches.
    Ignored,
    /// Each interval is judged given that it is complete.
    Corrected,
}

/// One stretch of recording without gaps: the integral of the rate since its start.
#[derive(Clone, Debug, PartialEq)]
pub struct Stretch {
    /// At each spike, ascending.
    pub at_spikes: Vec<f64>,
    /// At the end of the stretch.
    pub at_end: f64,
}

/// The test.
#[derive(Clone, Debug, PartialEq)]
pub struct Rescaled {
    /// Rescaled intervals in order, stretch by stretch; uniform on 0 to 1 under the predicted rate.
    pub intervals: Vec<f64>,
    /// Kolmogorov-Smirnov distance from the uniform distribution.
    pub distance: f64,
    /// Its p-value.
    pub p_value: f64,
    /// Correlation of neighbours within a stretch, of their normal scores; `None` for fewer than 3 pairs. Intervals are
    /// independent under the predicted rate.
    pub neighbours: Option<f64>,
    /// Mean of the integrals z; 1 under the predicted rate, above where the prediction is too high.
    pub mean: f64,
}

/// Rescales the intervals within each stretch (none across a gap) and tests them. `None` without a complete interval, or
/// where the integrals do not ascend from 0 to the end of their stretch.
pub fn rescale(stretches: &[Stretch], truncation: Truncation) -> Option<Rescaled> {
    let (mut intervals, mut pairs, mut total) = (Vec::new(), Vec::new(), 0.0);
    for s in stretches {
        let mut before = None;
        for w in s.at_spikes.windows(2) {
            let (z, left) = (w[1] - w[0], s.at_end - w[0]);
            if !(z >= 0.0 && left >= z && left.is_finite() && w[0] >= 0.0) {
                return None;
            }
            total += z;
            let mut u = -(-z).exp_m1();
            if truncation == Truncation::Corrected {
                // A rate of zero to the end under a spike: nothing is possible, so u is at its end.
                u = if left > 0.0 { u / -(-left).exp_m1() } else { 1.0 };
            }
            let u = u.clamp(0.0, 1.0);
            intervals.push(u);
            if let Some(before) = before {
                pairs.push([before, u]);
            }
            before = Some(u);
        }
    }
    let distance = distance_from_uniform(&intervals)?;
    Some(Rescaled {
        p_value: p_value(distance, intervals.len()),
        distance,
        neighbours: correlation_of_scores(&pairs),
        mean: total / intervals.len() as f64,
        intervals,
    })
}

/// Correlation of the normal scores of pairs.
fn correlation_of_scores(pairs: &[[f64; 2]]) -> Option<f64> {
    use statrs::distribution::{ContinuousCDF, Normal};
    if pairs.len() < 3 {
        return None;
    }
    let normal = Normal::standard();
    let score = |u: f64| normal.inverse_cdf(u.clamp(1e-12, 1.0 - 1e-12));
    let scores: Vec<[f64; 2]> = pairs.iter().map(|[a, b]| [score(*a), score(*b)]).collect();
    let n = scores.len() as f64;
    let mean = [0, 1].map(|k| scores.iter().map(|s| s[k]).sum::<f64>() / n);
    let (mut own, mut other, mut cross) = (0.0, 0.0, 0.0);
    for s in &scores {
        let (x, y) = (s[0] - mean[0], s[1] - mean[1]);
        own += x * x;
        other += y * y;
        cross += x * y;
    }
    let r = cross / (own * other).sqrt();
    r.is_finite().then_some(r)
}

#[cfg(test)]
mod tests {
    #![allow(clippy::unwrap_used)]
    use super::*;
    use rand::{RngExt, SeedableRng};
    use rand_chacha::ChaCha8Rng;

    /// Integral of the rate 30 + 25 sin(7 t) Hz.
    fn integral(t: f64) -> f64 {
        30.0 * t + 25.0 / 7.0 * (1.0 - (7.0 * t).cos())
    }

    /// Poisson stretches of that rate by thinning, each of `length` seconds, as integrals of `scale` times the rate
    /// (`flat`: of its mean).
    fn stretches(rng: &mut ChaCha8Rng, count: usize, length: f64, scale: f64, flat: bool) -> Vec<Stretch> {
        let believed = |t: f64| scale * if flat { 30.0 * t } else { integral(t) };
        (0..count)
            .map(|_| {
                let (mut at_spikes, mut t) = (Vec::new(), 0.0);
                loop {
                    t += -(1.0 - rng.random::<f64>()).ln() / 55.0;
                    if t >= length {
                        break;
                    }
                    if rng.random::<f64>() * 55.0 < 30.0 + 25.0 * (7.0 * t).sin() {
                        at_spikes.push(believed(t));
                    }
                }
                Stretch {
                    at_spikes,
                    at_end: believed(length),
                }
            })
            .collect()
    }

    fn p_values(stretch: (usize, f64), scale: f64, flat: bool, truncation: Truncation) -> Vec<f64> {
        let mut rng = ChaCha8Rng::seed_from_u64(11);
        (0..400)
            .map(|_| {
                let stretches = stretches(&mut rng, stretch.0, stretch.1, scale, flat);
                rescale(&stretches, truncation).unwrap().p_value
            })
            .collect()
    }

    #[test]
    fn the_right_rate_gives_uniform_p_values() {
        for stretch in [(1, 8.0), (60, 0.15)] {
            let p = p_values(stretch, 1.0, false, Truncation::Corrected);
            let distance = distance_from_uniform(&p).unwrap();
            let uniform = p_value(distance, p.len());
            let rejected = p.iter().filter(|p| **p < 0.05).count();
            println!("{stretch:?}: p of p {uniform:.3}, {rejected} of 400 below 0.05");
            assert!(uniform > 0.01);
            assert!((8..=34).contains(&rejected));
        }
        // Uncorrected, short stretches look too fast.
        let p = p_values((200, 0.1), 1.0, false, Truncation::Ignored);
        let rejected = p.iter().filter(|p| **p < 0.05).count();
        println!("uncorrected: {rejected} of 400");
        assert!(rejected > 350);
    }

    #[test]
    fn a_wrong_rate_is_rejected() {
        for (scale, flat) in [(1.4, false), (0.7, false), (1.0, true)] {
            let p = p_values((1, 20.0), scale, flat, Truncation::Corrected);
            let rejected = p.iter().filter(|p| **p < 0.05).count();
            println!("{scale} {flat}: {rejected} of 400");
            assert!(rejected > 320, "{rejected}");
        }
    }

    #[test]
    fn no_interval_goes_across_a_gap() {
        let stretches = [
            Stretch {
                at_spikes: vec![0.5, 1.5],
                at_end: 3.0,
            },
            Stretch {
                at_spikes: vec![0.2],
                at_end: 1.0,
            },
            Stretch {
                at_spikes: vec![0.0, 1.0],
                at_end: 1.0,
            },
        ];
        let found = rescale(&stretches, Truncation::Ignored).unwrap();
        let u = 1.0 - (-1.0_f64).exp();
        assert_eq!(found.intervals, [u, u]);
        assert_eq!(found.mean, 1.0);
        let corrected = rescale(&stretches, Truncation::Corrected).unwrap();
        assert!((corrected.intervals[0] - u / (1.0 - (-2.5_f64).exp())).abs() < 1e-15);
        assert_eq!(corrected.intervals[1], 1.0);
        assert_eq!(rescale(&stretches[1..2], Truncation::Ignored), None);
        let backwards = [Stretch {
            at_spikes: vec![1.0, 0.5],
            at_end: 2.0,
        }];
        assert_eq!(rescale(&backwards, Truncation::Ignored), None);
    }
}
