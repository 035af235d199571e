//! The leaky integrate-and-fire neuron with an absolute refractory time, without noise.
//!
//! ```text
//! rate = 1/(refractory + time_constant * ln(drive/(drive - rheobase)))  for drive > rheobase > 0, else 0
//! ```
//!
//! The membrane starts at rest after each spike (reset = rest), so drive is counted from rest: a drive of zero is no
//! input. Lapicque (1907, *J. Physiol. Pathol. Gen.* 9:620); with the refractory time Stein (1967, *Biophys. J.* 7:37);
//! Dayan & Abbott (2001, *Theoretical Neuroscience*, chapter 5).
//!
//! Chart, with two ordinary boundary points: no refractory time (no ceiling) and no rheobase (a membrane that does not
//! leak, where the curve is a hyperbola through zero):
//!
//! ```text
//! rate = 1/(refractory + m/gain),  m = ln(drive/(drive - rheobase))/rheobase  (1/drive for rheobase 0)
//! chart (refractory, ln gain, rheobase),   gain = 1/(time_constant * rheobase)
//! ```
//!
//! `gain` is the slope far above the rheobase without refractory time, in rate per drive. Far above, the rate tends to
//! 1/refractory. Towards the rheobase it falls to zero only as 1/ln: the slope is infinite there, and the derivatives
//! at the rheobase itself are given as those of the silent side.

use super::{Curve, Rate, RateFunction, Units, bounded, tame_exp};

/// The curve in the chart (refractory, ln gain, rheobase); a rheobase below zero counts as zero.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct RefractoryIntegrator {
    refractory: f64,
    per_gain: f64,
    rheobase: f64,
}

/// Below this rheobase/drive the series is exact and the difference of logarithms is not.
const SMALL: f64 = 0.01;

impl RefractoryIntegrator {
    /// m and dm/drheobase at a drive above the rheobase.
    #[inline(always)]
    fn leak(drive: f64, rheobase: f64) -> (f64, f64) {
        let q = rheobase / drive;
        if q < SMALL {
            // m = (1 + q/2 + q^2/3 + ...)/drive, dm/drheobase = (1/2 + 2q/3 + 3q^2/4 + ...)/drive^2.
            let (mut sum, mut slope) = (0.0, 0.0);
            for k in (1..=8).rev() {
                let k = f64::from(k);
                sum = sum * q + 1.0 / k;
                slope = slope * q + k / (k + 1.0);
            }
            return (sum / drive, slope / drive / drive);
        }
        let m = -(-q).ln_1p() / rheobase;
        (m, (1.0 / (drive - rheobase) - m) / rheobase)
    }
}

impl RateFunction<3> for RefractoryIntegrator {
    const CURVE: Curve = Curve::RefractoryIntegrator;
    const THRESHOLD: Option<usize> = Some(2);

    #[inline(always)]
    fn new(parameters: &[f64; 3]) -> Self {
        Self {
            refractory: parameters[0],
            per_gain: tame_exp(-parameters[1]),
            rheobase: parameters[2].max(0.0),
        }
    }

    #[inline(always)]
    fn at(&self, drive: f64) -> Rate<3> {
        if drive <= self.rheobase {
            return Rate::SILENT;
        }
        let (m, by_rheobase) = Self::leak(drive, self.rheobase);
        let time = bounded(m * self.per_gain);
        let rate = bounded(1.0 / (self.refractory + time));
        // Share of the interval that is integration: no overflow where both are huge.
        let share = (time * rate).min(1.0);
        let leak = if m > 0.0 { bounded(by_rheobase / m) } else { 0.0 };
        Rate::bounded(rate, [-rate * rate, rate * share, -rate * share * leak])
    }

    fn natural(parameters: &[f64; 3], units: Units) -> [f64; 3] {
        let [refractory, ln_gain, rheobase] = *parameters;
        [
            refractory / units.rate,
            1.0 / (ln_gain.exp() * rheobase * units.rate),
            rheobase * units.drive,
        ]
    }
}

#[cfg(test)]
mod tests {
    use super::super::testing::{always_finite, derivatives_match};
    use super::*;

    #[test]
    fn derivatives_match_differences() {
        for parameters in [[0.0, 0.4, 0.2], [0.5, -0.3, 0.001], [0.9, 1.0, 0.34]] {
            derivatives_match::<3, RefractoryIntegrator>(parameters, &[0.1, 0.36, 0.6, 1.0, 4.0]);
        }
    }

    #[test]
    fn closed_form_and_limits() {
        let (refractory, tau, rheobase): (f64, f64, f64) = (0.004, 0.02, 200.0);
        let chart = [refractory, -(tau * rheobase).ln(), rheobase];
        let natural = RefractoryIntegrator::natural(
            &chart,
            Units {
                drive: 1.0,
                rate: 1.0,
            },
        );
        for (found, wanted) in natural.iter().zip([refractory, tau, rheobase]) {
            assert!((found / wanted - 1.0).abs() < 1e-13);
        }
        let curve = RefractoryIntegrator::new(&chart);
        for drive in [200.0001, 250.0, 400.0, 1e4, 1e7] {
            let wanted = 1.0 / (refractory + tau * (drive / (drive - rheobase)).ln());
            assert!((curve.at(drive).rate / wanted - 1.0).abs() < 1e-9, "{drive}");
        }
        assert_eq!(curve.at(200.0), Rate::SILENT);
        assert_eq!(curve.at(-500.0), Rate::SILENT);
        assert!((curve.at(1e15).rate - 250.0).abs() < 1e-6);
        // Series and logarithm meet.
        let (low, high) = (
            RefractoryIntegrator::leak(100.0, 0.9999999),
            RefractoryIntegrator::leak(100.0, 1.0000001),
        );
        assert!((low.0 / high.0 - 1.0).abs() < 1e-8 && (low.1 / high.1 - 1.0).abs() < 1e-7);
        // No rheobase: the hyperbola through zero.
        let free = RefractoryIntegrator::new(&[0.01, 0.5_f64.ln(), 0.0]);
        assert!((free.at(200.0).rate - 100.0 / (1.0 + 1.0)).abs() < 1e-12);
    }

    #[test]
    fn finite_everywhere() {
        always_finite::<3, RefractoryIntegrator>([
            &[0.0, 1e-9, 1.0, 1e6],
            &[-700.0, 0.0, 20.0, 700.0],
            &[-1.0, 0.0, 1e-300, 1.0, 1e300],
        ]);
    }
}
