//! The hyperbolic ratio with a free exponent above a free threshold.
//!
//! ```text
//! rate = max_rate * u^n/(1 + u^n),  u = (drive - threshold)/half_rise > 0,  and 0 at or below the threshold
//! ```
//!
//! Hill (1910, *J. Physiol.* 40:iv); for the responses of neurons Naka & Rushton (1966, *J. Physiol.* 185:536), with
//! the exponent free Albrecht & Hamilton (1982, *J. Neurophysiol.* 48:217). **The threshold is a free parameter**, not
//! taken from another fit: four parameters in all. With exponent 1 it is the hyperbola.
//!
//! Chart, with the power law without a ceiling as its boundary point c = 0:
//!
//! ```text
//! rate = 1/(c + e),  e = ((drive - threshold)/q)^-n,   chart (c, ln q, threshold, ln n)
//! c = 1/max_rate,    half_rise = q c^(-1/n)
//! ```
//!
//! `q` is the distance from the threshold at which the power law would reach one unit of rate. At the threshold the
//! slope is zero for n > 1, finite for n = 1 and infinite for n < 1. Far above it the rate tends to max rate.

use super::{Curve, Rate, RateFunction, Units, bounded, tame_exp};

/// The curve in the chart (c, ln q, threshold, ln n).
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Hill {
    ceiling: f64,
    ln_q: f64,
    threshold: f64,
    exponent: f64,
}

impl RateFunction<4> for Hill {
    const CURVE: Curve = Curve::Hill;
    const THRESHOLD: Option<usize> = Some(2);

    #[inline(always)]
    fn new(parameters: &[f64; 4]) -> Self {
        let [ceiling, ln_q, threshold, ln_exponent] = *parameters;
        Self {
            ceiling,
            ln_q,
            threshold,
            exponent: tame_exp(ln_exponent),
        }
    }

    #[inline(always)]
    fn at(&self, drive: f64) -> Rate<4> {
        let above = bounded(drive - self.threshold);
        if above <= 0.0 {
            return Rate::SILENT;
        }
        let n = self.exponent;
        let power = bounded(n * (above.ln() - self.ln_q));
        let e = tame_exp(-power);
        let rate = 1.0 / (self.ceiling + e);
        // Derivative by `power`.
        let slope = rate * (e * rate);
        Rate::bounded(
            rate,
            [-rate * rate, -slope * n, -slope * n / above, slope * power],
        )
    }

    fn natural(parameters: &[f64; 4], units: Units) -> [f64; 4] {
        let [ceiling, ln_q, threshold, ln_exponent] = *parameters;
        let exponent = ln_exponent.exp();
        [
            units.rate / ceiling,
            units.drive * (ln_q - ceiling.ln() / exponent).exp(),
            units.drive * threshold,
            exponent,
        ]
    }
}

#[cfg(test)]
mod tests {
    use super::super::testing::{always_finite, derivatives_match};
    use super::*;

    #[test]
    fn derivatives_match_differences() {
        for parameters in [
            [0.0, 0.4, 0.2, 0.5],
            [0.02, -0.3, 0.1, -0.4],
            [0.9, -1.0, -0.6, 1.2],
        ] {
            derivatives_match::<4, Hill>(parameters, &[-0.9, 0.35, 0.6, 1.0, 4.0]);
        }
    }

    #[test]
    fn closed_form_and_limits() {
        let (max, half, threshold, n): (f64, f64, f64, f64) = (120.0, 150.0, 70.0, 2.5);
        let chart = [1.0 / max, half.ln() - max.ln() / n, threshold, n.ln()];
        let natural = Hill::natural(
            &chart,
            Units {
                drive: 1.0,
                rate: 1.0,
            },
        );
        for (found, wanted) in natural.iter().zip([max, half, threshold, n]) {
            assert!((found / wanted - 1.0).abs() < 1e-13);
        }
        let curve = Hill::new(&chart);
        for drive in [71.0, 100.0, 220.0, 500.0, 3000.0] {
            let power = ((drive - threshold) / half).powf(n);
            assert!((curve.at(drive).rate / (max * power / (1.0 + power)) - 1.0).abs() < 1e-12);
        }
        assert_eq!(curve.at(70.0), Rate::SILENT);
        assert_eq!(curve.at(-1e300), Rate::SILENT);
        assert!((curve.at(1e12).rate - max).abs() < 1e-9);
        // Exponent 1: the hyperbola.
        let plain = Hill::new(&[1.0 / max, half.ln() - max.ln(), threshold, 0.0]);
        let same = super::super::hyperbola::hyperbola(300.0, &[max.ln(), half.ln(), threshold]);
        assert!((plain.at(300.0).rate - same.rate).abs() < 1e-12 * max);
    }

    #[test]
    fn finite_everywhere() {
        always_finite::<4, Hill>([
            &[0.0, 1e-9, 1.0, 10.0],
            &[-700.0, -7.0, 0.0, 700.0],
            &[-1e300, 0.0, 1.0],
            &[-700.0, -2.0, 0.0, 4.0, 700.0],
        ]);
    }
}
