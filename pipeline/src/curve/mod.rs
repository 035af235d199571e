//! Rate functions: one a file, with value, gradient, limits and citation; and the list of them.

pub mod hill;
pub mod hyperbola;
pub mod logistic;
pub mod quadrature;
pub mod ramp;
pub mod refractory_integrator;
pub mod smoothed_hyperbola;
pub mod smoothed_ramp;
pub mod square_root;
mod vector_exp;

use serde::{Deserialize, Serialize};

/// A rate function by name.
#[derive(Clone, Copy, Debug, PartialEq, Eq, Hash, PartialOrd, Ord, Serialize, Deserialize)]
#[serde(rename_all = "kebab-case")]
pub enum Curve {
    /// The main one: [`smoothed_hyperbola`].
    SmoothedHyperbola,
    /// [`hyperbola`]: without noise.
    Hyperbola,
    /// [`smoothed_ramp`]: without a ceiling.
    SmoothedRamp,
    /// [`ramp`]: without noise and ceiling.
    Ramp,
    /// [`logistic`].
    Logistic,
    /// [`hill`].
    Hill,
    /// [`refractory_integrator`].
    RefractoryIntegrator,
    /// [`square_root`].
    SquareRoot,
}

impl Curve {
    /// Every rate function, the main one first.
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

    /// Its name in settings and tables.
    pub fn name(self) -> &'static str {
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

    /// Number of its parameters, extra SD not counted.
    pub fn parameters(self) -> usize {
        match self {
            Self::SmoothedHyperbola | Self::Hill => 4,
            Self::Hyperbola | Self::SmoothedRamp | Self::Logistic | Self::RefractoryIntegrator => 3,
            Self::Ramp | Self::SquareRoot => 2,
        }
    }

    /// The rate function of that name.
    pub fn from_name(name: &str) -> Option<Self> {
        Self::ALL.into_iter().find(|curve| curve.name() == name)
    }
}

#[cfg(test)]
mod tests {
    #![allow(clippy::unwrap_used)]
    use super::*;

    #[test]
    fn names_lead_back() {
        for curve in Curve::ALL {
            assert_eq!(Curve::from_name(curve.name()), Some(curve));
        }
        assert_eq!(Curve::from_name("step"), None);
    }
}
