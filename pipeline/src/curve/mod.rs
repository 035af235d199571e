//! Rate functions: one a file, with value, gradient, limits and citation.

pub mod adapting;
pub mod hill;
pub mod hyperbola;
pub mod logistic;
pub mod quadrature;
pub mod ramp;
pub mod rate_function;
pub mod refractory_integrator;
pub mod smoothed_hyperbola;
pub mod smoothed_ramp;
pub mod square_root;
mod vector_exp;

use serde::{Deserialize, Serialize};

/// The rate functions that a cell can be fitted with.
#[derive(Clone, Copy, Debug, PartialEq, Eq, Hash, PartialOrd, Ord, Serialize, Deserialize)]
#[serde(rename_all = "kebab-case")]
pub enum Curve {
    /// The main one: saturating hyperbola with input noise averaged in ([`smoothed_hyperbola`]).
    SmoothedHyperbola,
    /// The same without noise ([`hyperbola`]).
    Hyperbola,
    /// Threshold-linear with input noise averaged in ([`smoothed_ramp`]).
    SmoothedRamp,
    /// Threshold-linear ([`ramp`]).
    Ramp,
    /// Logistic ([`logistic`]).
    Logistic,
    /// Hyperbolic ratio with a free exponent and a free threshold ([`hill`]).
    Hill,
    /// Leaky integrate-and-fire with refractory time ([`refractory_integrator`]).
    RefractoryIntegrator,
    /// Square root above a threshold ([`square_root`]).
    SquareRoot,
}

impl Curve {
    /// All of them, the main one first.
    pub const ALL: [Self; 8] = [
        Self::SmoothedHyperbola,
        Self::Hyperbola,
        Self::SmoothedRamp,
        Self::Ramp,
        Self::Logistic,
        Self::Hill,
        Self::RefractoryIntegrator,
        Self::SquareRoot,
    ];

    /// Name in tables, settings and on the command line.
    pub const fn name(self) -> &'static str {
        match self {
            Self::SmoothedHyperbola => "smoothed-hyperbola",
            Self::Hyperbola => "hyperbola",
            Self::SmoothedRamp => "smoothed-ramp",
            Self::Ramp => "ramp",
            Self::Logistic => "logistic",
            Self::Hill => "hill",
            Self::RefractoryIntegrator => "refractory-integrator",
            Self::SquareRoot => "square-root",
        }
    }

    /// The curve of that name, spelled as [`Curve::name`] does.
    pub fn from_name(name: &str) -> Option<Self> {
        Self::ALL.into_iter().find(|curve| curve.name() == name)
    }

    /// Number of parameters, the extra SD not counted.
    pub const fn parameters(self) -> usize {
        self.parameter_names().len()
    }

    /// Fewest points (steps) that determine it and leave one to judge it by.
    pub const fn fewest_points(self) -> usize {
        self.parameters() + 1
    }

    /// Names of its parameters. A name that ends in `_Hz` or `_s` has that unit, `exponent` none, `gain` is in Hz per
    /// drive unit (for `square-root`: Hz per square root of a drive unit); all others are in the unit of the drive.
    pub const fn parameter_names(self) -> &'static [&'static str] {
        match self {
            Self::SmoothedHyperbola => &["max_rate_Hz", "half_rise", "threshold", "noise_sd"],
            Self::Hyperbola => &["max_rate_Hz", "half_rise", "threshold"],
            Self::SmoothedRamp => &["gain", "threshold", "noise_sd"],
            Self::Ramp | Self::SquareRoot => &["gain", "threshold"],
            Self::Logistic => &["max_rate_Hz", "midpoint", "scale"],
            Self::Hill => &["max_rate_Hz", "half_rise", "threshold", "exponent"],
            Self::RefractoryIntegrator => &["refractory_s", "time_constant_s", "rheobase"],
        }
    }
}

impl std::fmt::Display for Curve {
    fn fmt(&self, f: &mut std::fmt::Formatter<'_>) -> std::fmt::Result {
        f.write_str(self.name())
    }
}

/// Rate of a curve at one drive, with its gradient.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Rate<const P: usize> {
    /// Rate, in the unit of rate that the parameters were given in.
    pub rate: f64,
    /// Derivatives by the parameters of the curve's chart. At a threshold itself, where the curve has a kink, those of
    /// the silent side: zero.
    pub derivatives: [f64; P],
}

impl<const P: usize> Rate<P> {
    /// Below threshold: nothing, and no slope.
    const SILENT: Self = Self {
        rate: 0.0,
        derivatives: [0.0; P],
    };

    /// The same with numbers beyond the range of the format at its ends, so that nothing finite becomes infinite.
    fn bounded(rate: f64, derivatives: [f64; P]) -> Self {
        Self {
            rate: bounded(rate),
            derivatives: derivatives.map(bounded),
        }
    }
}

/// Units of drive and rate as multiples of the drive's own unit and of 1 Hz.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Units {
    /// Drive.
    pub drive: f64,
    /// Rate.
    pub rate: f64,
}

/// A rate function prepared for one set of parameters, in the chart that its file describes.
///
/// For every finite drive and parameters, value and derivatives are finite.
pub trait RateFunction<const P: usize>: Copy {
    /// Which curve it is.
    const CURVE: Curve;
    /// Index of the threshold below which the rate is zero, for curves with such a kink.
    const THRESHOLD: Option<usize>;
    /// The curve for `parameters` of the chart.
    fn new(parameters: &[f64; P]) -> Self;
    /// Rate and derivatives by the chart's parameters at `drive`.
    fn at(&self, drive: f64) -> Rate<P>;
    /// Parameters named by [`Curve::parameter_names`], for chart parameters in `units`. Infinite where the chart's
    /// boundary point is a limit (no ceiling).
    fn natural(parameters: &[f64; P], units: Units) -> [f64; P];
}

/// Clamps into the finite numbers; what is not a number stays so.
pub(crate) fn bounded(value: f64) -> f64 {
    value.clamp(-f64::MAX, f64::MAX)
}

/// exp with its argument kept within +-300: results and their squares and reciprocals stay finite.
pub(crate) fn tame_exp(x: f64) -> f64 {
    x.clamp(-300.0, 300.0).exp()
}

#[cfg(test)]
pub(crate) mod testing {
    //! What every curve is tested for.
    #![allow(clippy::panic)]
    use super::*;

    /// Derivatives against central differences, relative to the largest derivative met.
    pub fn derivatives_match<const P: usize, R: RateFunction<P>>(parameters: [f64; P], drives: &[f64]) {
        for drive in drives {
            let at = R::new(&parameters).at(*drive);
            for k in 0..P {
                let step = 1e-5 * parameters[k].abs().max(0.1);
                let (mut up, mut down) = (parameters, parameters);
                up[k] += step;
                down[k] -= step;
                let slope = (R::new(&up).at(*drive).rate - R::new(&down).at(*drive).rate) / (2.0 * step);
                let scale = at.derivatives[k].abs().max(1e-3 * at.rate.abs()).max(1e-9);
                assert!(
                    (slope - at.derivatives[k]).abs() < 1e-5 * scale,
                    "{} {drive} parameter {k}: {slope} against {}",
                    R::CURVE,
                    at.derivatives[k]
                );
            }
        }
    }

    /// Finite for any finite drive and parameters; not a number for a drive that is none.
    pub fn always_finite<const P: usize, R: RateFunction<P>>(extremes: [&[f64]; P]) {
        let drives = [
            0.0,
            1e-300,
            -1e-300,
            1.0,
            1.0 + f64::EPSILON,
            -1.0,
            1e9,
            -1e9,
            1e300,
            -1e300,
            f64::MAX,
            f64::MIN,
        ];
        let count: usize = extremes.iter().map(|e| e.len()).product();
        for combination in 0..count {
            let mut rest = combination;
            let parameters: [f64; P] = std::array::from_fn(|i| {
                let value = extremes[i][rest % extremes[i].len()];
                rest /= extremes[i].len();
                value
            });
            let curve = R::new(&parameters);
            for drive in drives {
                let at = curve.at(drive);
                assert!(
                    at.rate.is_finite() && at.rate >= 0.0 && at.derivatives.iter().all(|d| d.is_finite()),
                    "{} {parameters:?} {drive}: {at:?}",
                    R::CURVE
                );
            }
            assert!(curve.at(f64::NAN).rate.is_nan());
        }
    }
}

#[cfg(test)]
mod tests {
    #![allow(clippy::unwrap_used)]
    use super::*;

    #[test]
    fn names_lead_back_and_are_what_settings_spell() {
        for curve in Curve::ALL {
            assert_eq!(Curve::from_name(curve.name()), Some(curve));
            assert_eq!(curve.to_string(), curve.name());
            let named: Result<Curve, serde::de::value::Error> =
                Curve::deserialize(serde::de::value::StrDeserializer::new(curve.name()));
            assert_eq!(named.unwrap(), curve);
        }
        assert_eq!(Curve::from_name("Logistic"), None);
        assert_eq!(Curve::ALL.map(Curve::parameters), [4, 3, 3, 2, 3, 4, 3, 2]);
    }
}
