//! The logistic curve: a sigmoid without a threshold, symmetric about its midpoint.
//!
//! ```text
//! rate = max_rate / (1 + exp(-(drive - midpoint)/scale))
//! ```
//!
//! Verhulst (1838, *Correspondance mathematique et physique* 10:113); as a neuron's rate function Wilson & Cowan
//! (1972, *Biophys. J.* 12:1).
//!
//! Cells that hardly bend leave max rate and midpoint undetermined: they grow together, and in the limit the curve is
//! an exponential. The chart has that limit as its ordinary boundary point:
//!
//! ```text
//! rate = 1/(c + e),  e = exp(-(drive - reference)/scale),   chart (c, reference, ln scale)
//! c = 1/max_rate,    midpoint = reference - scale ln c
//! ```
//!
//! `reference` is the drive at which the exponential would reach one unit of rate. Limits: drive -> infinity gives
//! max rate, drive -> -infinity zero, scale -> 0 a step at the midpoint.

use super::{Curve, Rate, RateFunction, Units, bounded, tame_exp};

/// The logistic curve in the chart (c, reference, ln scale).
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Logistic {
    ceiling: f64,
    reference: f64,
    per_scale: f64,
}

impl RateFunction<3> for Logistic {
    const CURVE: Curve = Curve::Logistic;
    const THRESHOLD: Option<usize> = None;

    #[inline(always)]
    fn new(parameters: &[f64; 3]) -> Self {
        let [ceiling, reference, ln_scale] = *parameters;
        Self {
            ceiling,
            reference,
            per_scale: tame_exp(-ln_scale),
        }
    }

    #[inline(always)]
    fn at(&self, drive: f64) -> Rate<3> {
        let w = bounded((drive - self.reference) * self.per_scale);
        let e = tame_exp(-w);
        let rate = 1.0 / (self.ceiling + e);
        // df/dw, in which the curve's two ends stay exact.
        let slope = rate * (e * rate);
        Rate::bounded(rate, [-rate * rate, -slope * self.per_scale, -slope * w])
    }

    fn natural(parameters: &[f64; 3], units: Units) -> [f64; 3] {
        let [ceiling, reference, ln_scale] = *parameters;
        let scale = ln_scale.exp();
        [
            units.rate / ceiling,
            units.drive * (reference - scale * ceiling.ln()),
            units.drive * scale,
        ]
    }
}

#[cfg(test)]
mod tests {
    use super::super::testing::{always_finite, derivatives_match};
    use super::*;

    #[test]
    fn derivatives_match_differences() {
        for parameters in [[0.0, 1.1, -1.2], [0.02, 0.3, -2.0], [0.9, -0.4, 0.5]] {
            derivatives_match::<3, Logistic>(parameters, &[-0.5, 0.1, 0.4, 1.0, 2.0]);
        }
    }

    #[test]
    fn closed_form_and_limits() {
        let (max, midpoint, scale): (f64, f64, f64) = (80.0, 250.0, 60.0);
        let c = 1.0 / max;
        let chart = [c, midpoint + scale * c.ln(), scale.ln()];
        let natural = Logistic::natural(
            &chart,
            Units {
                drive: 1.0,
                rate: 1.0,
            },
        );
        for (found, wanted) in natural.iter().zip([max, midpoint, scale]) {
            assert!((found / wanted - 1.0).abs() < 1e-13);
        }
        let curve = Logistic::new(&chart);
        for drive in [-300.0, 0.0, 250.0, 310.0, 900.0] {
            let wanted = max / (1.0 + (-(drive - midpoint) / scale).exp());
            assert!((curve.at(drive).rate / wanted - 1.0).abs() < 1e-12, "{drive}");
        }
        assert!((curve.at(250.0).rate - 40.0).abs() < 1e-12);
        assert!((curve.at(1e9).rate - max).abs() < 1e-12);
        assert!(curve.at(-1e9).rate < 1e-100);
        // Without a ceiling: an exponential.
        let free = Logistic::new(&[0.0, 100.0, scale.ln()]);
        assert!((free.at(160.0).rate - std::f64::consts::E).abs() < 1e-12);
        assert_eq!(
            Logistic::natural(
                &[0.0, 1.0, 0.0],
                Units {
                    drive: 1.0,
                    rate: 1.0
                }
            )[0],
            f64::INFINITY
        );
    }

    #[test]
    fn finite_everywhere() {
        always_finite::<3, Logistic>([
            &[0.0, 1e-9, 1.0, 10.0],
            &[-1e6, 0.0, 1.0, 1e300],
            &[-700.0, -7.0, 0.0, 700.0],
        ]);
    }
}
