//! The steady membrane equation at the spike threshold: what leak and inhibition ask of excitation.
//!
//! A point neuron with leak, excitatory and inhibitory conductance rests at the spike threshold potential V_t when
//!
//! ```text
//! 0 = g_leak (E_leak - V_t) + g_exc (E_exc - V_t) + g_inh (E_inh - V_t) + I
//! ```
//!
//! Solved for g_exc at I = 0 it gives the effective threshold, solved for I without synaptic conductance the rheobase.
//! Conductances in nS times potentials in mV are currents in pA.

use crate::fit::Estimate;
use crate::recording::CellConstants;

/// Why membrane constants, or a potential, cannot be used.
#[derive(Clone, Debug, PartialEq, thiserror::Error)]
pub enum MembraneError {
    /// Some constants are not given.
    #[error("{} not known: give {} in the cell table, or for the whole set in recording.toml", names.join(", "), if names.len() == 1 { "it" } else { "them" })]
    Missing {
        /// Their names, as columns of the cell table.
        names: Vec<&'static str>,
    },
    /// A constant is not a finite number.
    #[error("{name} = {value} is not a finite number: correct it in the cell table")]
    NotFinite {
        /// The constant.
        name: &'static str,
        /// Its value.
        value: f64,
    },
    /// The leak conductance is zero or negative.
    #[error("g_leak = {value} nS is not above 0 nS: correct it in the cell table, or check its unit")]
    LeakNotPositive {
        /// The value, nS.
        value: f64,
    },
    /// Two reversal potentials are out of order.
    #[error(
        "{name} = {value} mV is not below e_exc = {limit} mV: correct the reversal potentials in the cell table, or check their units"
    )]
    OutOfOrder {
        /// The one that must be lower.
        name: &'static str,
        /// Its value, mV.
        value: f64,
        /// The excitatory reversal potential, mV.
        limit: f64,
    },
    /// A spike threshold potential is outside the reversal potentials.
    #[error(
        "spike threshold potential {value} mV is not between e_inh = {lowest} mV and e_exc = {highest} mV: the membrane cannot be held there by inhibition and excitation; correct the potentials in the cell table"
    )]
    ThresholdOutside {
        /// The potential, mV.
        value: f64,
        /// Inhibitory reversal potential, mV.
        lowest: f64,
        /// Excitatory reversal potential, mV.
        highest: f64,
    },
    /// A conductance is negative or not finite.
    #[error(
        "inhibitory conductance {value} nS is not a finite number of 0 nS or more: correct g_inh in the protocol"
    )]
    BadInhibition {
        /// The value, nS.
        value: f64,
    },
}

/// Leak conductance and reversal potentials of one cell, checked: leak above zero, E_leak and E_inh below E_exc.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Membrane {
    g_leak_ns: f64,
    e_leak_mv: f64,
    e_exc_mv: f64,
    e_inh_mv: f64,
}

impl Membrane {
    /// Takes leak conductance (nS) and the reversal potentials of leak, excitation and inhibition (mV).
    ///
    /// # Errors
    /// A value that is not finite, a leak that is not positive, E_leak or E_inh not below E_exc.
    pub fn new(g_leak_ns: f64, e_leak_mv: f64, e_exc_mv: f64, e_inh_mv: f64) -> Result<Self, MembraneError> {
        for (name, value) in [
            ("g_leak", g_leak_ns),
            ("e_leak", e_leak_mv),
            ("e_exc", e_exc_mv),
            ("e_inh", e_inh_mv),
        ] {
            if !value.is_finite() {
                return Err(MembraneError::NotFinite { name, value });
            }
        }
        check_leak(g_leak_ns)?;
        for (name, value) in [("e_leak", e_leak_mv), ("e_inh", e_inh_mv)] {
            if value >= e_exc_mv {
                return Err(MembraneError::OutOfOrder {
                    name,
                    value,
                    limit: e_exc_mv,
                });
            }
        }
        Ok(Self {
            g_leak_ns,
            e_leak_mv,
            e_exc_mv,
            e_inh_mv,
        })
    }

    /// The same from the cell table.
    ///
    /// # Errors
    /// All constants that are missing, else as [`Membrane::new`].
    pub fn from_constants(constants: &CellConstants) -> Result<Self, MembraneError> {
        match (
            constants.g_leak_ns,
            constants.e_leak_mv,
            constants.e_exc_mv,
            constants.e_inh_mv,
        ) {
            (Some(g_leak), Some(e_leak), Some(e_exc), Some(e_inh)) => Self::new(g_leak, e_leak, e_exc, e_inh),
            (g_leak, e_leak, e_exc, e_inh) => Err(missing(&[
                ("g_leak", g_leak),
                ("e_leak", e_leak),
                ("e_exc", e_exc),
                ("e_inh", e_inh),
            ])),
        }
    }

    /// Leak conductance, nS.
    pub fn g_leak_ns(&self) -> f64 {
        self.g_leak_ns
    }

    /// Leak reversal potential, mV.
    pub fn e_leak_mv(&self) -> f64 {
        self.e_leak_mv
    }

    /// Excitatory reversal potential, mV.
    pub fn e_exc_mv(&self) -> f64 {
        self.e_exc_mv
    }

    /// Inhibitory reversal potential, mV.
    pub fn e_inh_mv(&self) -> f64 {
        self.e_inh_mv
    }

    /// Checks that a spike threshold potential (mV) lies between E_inh and E_exc.
    ///
    /// # Errors
    /// One that does not, or is not finite.
    pub fn check_threshold(&self, v_t_mv: f64) -> Result<(), MembraneError> {
        if v_t_mv > self.e_inh_mv && v_t_mv < self.e_exc_mv {
            return Ok(());
        }
        Err(MembraneError::ThresholdOutside {
            value: v_t_mv,
            lowest: self.e_inh_mv,
            highest: self.e_exc_mv,
        })
    }

    /// The effective threshold without its checks: what the fit evaluates within its bounds.
    pub(super) fn threshold_at(&self, g_inh: f64, v_t: f64) -> f64 {
        (g_inh * (self.e_inh_mv - v_t) + self.g_leak_ns * (self.e_leak_mv - v_t)) / (v_t - self.e_exc_mv)
    }

    /// Its derivative by V_t, nS per mV:
    /// [g_leak (E_exc - E_leak) + g_inh (E_exc - E_inh)]/(E_exc - V_t)^2, above zero.
    pub(super) fn threshold_slope_at(&self, g_inh: f64, v_t: f64) -> f64 {
        let below = self.e_exc_mv - v_t;
        (self.g_leak_ns * (self.e_exc_mv - self.e_leak_mv) + g_inh * (self.e_exc_mv - self.e_inh_mv))
            / (below * below)
    }

    /// Threshold per nS of inhibition without its checks.
    pub(super) fn per_inhibition_at(&self, v_t: f64) -> f64 {
        (v_t - self.e_inh_mv) / (self.e_exc_mv - v_t)
    }

    /// Its derivative by V_t, per mV: (E_exc - E_inh)/(E_exc - V_t)^2, above zero.
    pub(super) fn per_inhibition_slope_at(&self, v_t: f64) -> f64 {
        let below = self.e_exc_mv - v_t;
        (self.e_exc_mv - self.e_inh_mv) / (below * below)
    }

    /// The steady potential (mV) under `g_exc` and `g_inh` (nS): the mean of the reversal potentials, weighted by
    /// conductance. It is V_t where `g_exc` is the effective threshold. Not finite where the conductances sum to zero
    /// (a negative g_exc, which extrapolation can ask for).
    pub(super) fn steady_potential(&self, g_exc: f64, g_inh: f64) -> f64 {
        (self.g_leak_ns * self.e_leak_mv + g_inh * self.e_inh_mv + g_exc * self.e_exc_mv)
            / (self.g_leak_ns + g_inh + g_exc)
    }
}

fn missing(constants: &[(&'static str, Option<f64>)]) -> MembraneError {
    MembraneError::Missing {
        names: constants
            .iter()
            .filter(|(_, value)| value.is_none())
            .map(|(name, _)| *name)
            .collect(),
    }
}

fn check_leak(g_leak_ns: f64) -> Result<(), MembraneError> {
    if g_leak_ns > 0.0 {
        Ok(())
    } else {
        Err(MembraneError::LeakNotPositive { value: g_leak_ns })
    }
}

fn check_inhibition(g_inh_ns: f64) -> Result<(), MembraneError> {
    if g_inh_ns >= 0.0 && g_inh_ns.is_finite() {
        Ok(())
    } else {
        Err(MembraneError::BadInhibition { value: g_inh_ns })
    }
}

/// A value and its derivative by the spike threshold potential.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct ByThreshold {
    /// The value.
    pub value: f64,
    /// Its derivative by V_t, per mV.
    pub by_v_t: f64,
}

/// The effective threshold (nS): the excitatory conductance that just holds the membrane at V_t (mV) against leak and
/// `g_inh_ns`, [g_inh (E_inh - V_t) + g_leak (E_leak - V_t)]/(V_t - E_exc). Negative for a cell whose leak alone takes
/// it beyond V_t.
///
/// # Errors
/// An inhibitory conductance that is negative or not finite, V_t outside (E_inh, E_exc).
pub fn effective_threshold(
    g_inh_ns: f64,
    v_t_mv: f64,
    membrane: &Membrane,
) -> Result<ByThreshold, MembraneError> {
    check_inhibition(g_inh_ns)?;
    membrane.check_threshold(v_t_mv)?;
    Ok(ByThreshold {
        value: membrane.threshold_at(g_inh_ns, v_t_mv),
        by_v_t: membrane.threshold_slope_at(g_inh_ns, v_t_mv),
    })
}

/// Threshold per nS of inhibition, (V_t - E_inh)/(E_exc - V_t), without unit.
///
/// # Errors
/// V_t outside (E_inh, E_exc).
pub fn threshold_per_inhibition(v_t_mv: f64, membrane: &Membrane) -> Result<ByThreshold, MembraneError> {
    membrane.check_threshold(v_t_mv)?;
    Ok(ByThreshold {
        value: membrane.per_inhibition_at(v_t_mv),
        by_v_t: membrane.per_inhibition_slope_at(v_t_mv),
    })
}

/// Rheobase (pA): the current that just holds the membrane at V_t, g_leak (V_t - E_leak).
///
/// # Errors
/// A leak that is not positive, a potential that is not finite.
pub fn rheobase(g_leak_ns: f64, e_leak_mv: f64, v_t_mv: f64) -> Result<f64, MembraneError> {
    check_passive(g_leak_ns, e_leak_mv)?;
    if !v_t_mv.is_finite() {
        return Err(MembraneError::NotFinite {
            name: "v_threshold",
            value: v_t_mv,
        });
    }
    Ok(g_leak_ns * (v_t_mv - e_leak_mv))
}

/// The spike threshold potential (mV) that a fitted current threshold (pA) implies: V_t = E_leak + I_t/g_leak, with
/// standard error and interval. Leak and E_leak are taken as exact; an open end stays open.
///
/// # Errors
/// Constants of the cell table that are missing or not usable.
pub fn threshold_potential_from_rheobase(
    threshold: &Estimate,
    constants: &CellConstants,
) -> Result<Estimate, MembraneError> {
    let (Some(g_leak), Some(e_leak)) = (constants.g_leak_ns, constants.e_leak_mv) else {
        return Err(missing(&[
            ("g_leak", constants.g_leak_ns),
            ("e_leak", constants.e_leak_mv),
        ]));
    };
    check_passive(g_leak, e_leak)?;
    let potential = |current: f64| e_leak + current / g_leak;
    Ok(Estimate {
        value: threshold.value.map(potential),
        se: threshold.se.map(|se| se / g_leak),
        lo: threshold.lo.map(potential),
        hi: threshold.hi.map(potential),
    })
}

fn check_passive(g_leak_ns: f64, e_leak_mv: f64) -> Result<(), MembraneError> {
    for (name, value) in [("g_leak", g_leak_ns), ("e_leak", e_leak_mv)] {
        if !value.is_finite() {
            return Err(MembraneError::NotFinite { name, value });
        }
    }
    check_leak(g_leak_ns)
}

#[cfg(test)]
mod tests {
    #![allow(clippy::unwrap_used)]
    use super::*;

    #[test]
    fn worked_numbers_are_exact() {
        let m = Membrane::new(10.0, -70.0, 0.0, -75.0).unwrap();
        assert_eq!(effective_threshold(0.0, -50.0, &m).unwrap().value, 4.0);
        assert_eq!(threshold_per_inhibition(-50.0, &m).unwrap().value, 0.5);
        assert_eq!(effective_threshold(10.0, -50.0, &m).unwrap().value, 9.0);
        assert_eq!(rheobase(10.0, -70.0, -50.0), Ok(200.0));
        // A second membrane, with E_inh at -80 mV, and a pure shunt.
        let m = Membrane::new(10.0, -70.0, 0.0, -80.0).unwrap();
        for (g_inh, expected) in [(0.0, 4.0), (5.0, 7.0), (10.0, 10.0), (20.0, 16.0), (50.0, 34.0)] {
            assert_eq!(effective_threshold(g_inh, -50.0, &m).unwrap().value, expected);
        }
        let shunt = Membrane::new(10.0, -70.0, 0.0, -70.0).unwrap();
        for (g_inh, expected) in [(0.0, 4.0), (5.0, 6.0), (10.0, 8.0), (20.0, 12.0), (50.0, 24.0)] {
            assert_eq!(effective_threshold(g_inh, -50.0, &shunt).unwrap().value, expected);
        }
    }

    #[test]
    fn derivatives_match_differences_and_the_steady_potential_inverts() {
        let m = Membrane::new(8.0, -68.0, 5.0, -77.0).unwrap();
        for v in [-60.0, -48.5, -30.0] {
            for g in [0.0, 3.0, 40.0] {
                let at = effective_threshold(g, v, &m).unwrap();
                let e = 1e-4;
                let slope = (m.threshold_at(g, v + e) - m.threshold_at(g, v - e)) / (2.0 * e);
                assert!((slope / at.by_v_t - 1.0).abs() < 1e-7);
                assert!((m.steady_potential(at.value, g) - v).abs() < 1e-11);
                let per = threshold_per_inhibition(v, &m).unwrap();
                assert!((m.threshold_at(0.0, v) + g * per.value - at.value).abs() < 1e-12 * (1.0 + at.value));
                let slope = (m.per_inhibition_at(v + e) - m.per_inhibition_at(v - e)) / (2.0 * e);
                assert!((slope / per.by_v_t - 1.0).abs() < 1e-7);
            }
        }
    }

    #[test]
    fn the_rheobase_carries_its_interval_to_the_potential() {
        let constants = CellConstants {
            g_leak_ns: Some(10.0),
            e_leak_mv: Some(-70.0),
            ..CellConstants::default()
        };
        let current = Estimate {
            value: Some(200.0),
            se: Some(5.0),
            lo: Some(190.0),
            hi: Some(f64::INFINITY),
        };
        let v = threshold_potential_from_rheobase(&current, &constants).unwrap();
        assert_eq!(
            (v.value, v.se, v.lo, v.hi),
            (Some(-50.0), Some(0.5), Some(-51.0), Some(f64::INFINITY))
        );
        let error = threshold_potential_from_rheobase(&current, &CellConstants::default()).unwrap_err();
        assert!(
            error
                .to_string()
                .starts_with("g_leak, e_leak not known: give them")
        );
    }

    #[test]
    fn what_cannot_be_is_said_with_value_limit_and_remedy() {
        let text = |result: Result<Membrane, MembraneError>| result.unwrap_err().to_string();
        assert!(text(Membrane::new(0.0, -70.0, 0.0, -75.0)).contains("g_leak = 0 nS is not above 0 nS"));
        assert!(text(Membrane::new(-3.0, -70.0, 0.0, -75.0)).contains("-3 nS"));
        assert!(text(Membrane::new(f64::NAN, -70.0, 0.0, -75.0)).contains("g_leak = NaN"));
        assert!(
            text(Membrane::new(10.0, 5.0, 0.0, -75.0)).contains("e_leak = 5 mV is not below e_exc = 0 mV")
        );
        assert!(text(Membrane::new(10.0, -70.0, -80.0, -75.0)).contains("not below e_exc = -80 mV"));
        assert!(text(Membrane::new(10.0, -70.0, 0.0, 0.0)).contains("e_inh = 0 mV"));
        let one = CellConstants {
            g_leak_ns: Some(10.0),
            e_leak_mv: Some(-70.0),
            e_exc_mv: Some(0.0),
            ..CellConstants::default()
        };
        assert_eq!(
            text(Membrane::from_constants(&one)),
            "e_inh not known: give it in the cell table, or for the whole set in recording.toml"
        );
        let m = Membrane::new(10.0, -70.0, 0.0, -75.0).unwrap();
        for v in [-75.0, -90.0, 0.0, 20.0, f64::NAN] {
            assert!(effective_threshold(1.0, v, &m).is_err());
            assert!(threshold_per_inhibition(v, &m).is_err());
        }
        for g in [-1.0, f64::NAN, f64::INFINITY] {
            let text = effective_threshold(g, -50.0, &m).unwrap_err().to_string();
            assert!(text.contains("0 nS or more"), "{text}");
        }
        assert!(rheobase(10.0, -70.0, f64::NAN).is_err());
        assert!(rheobase(-1.0, -70.0, -50.0).is_err());
    }
}
