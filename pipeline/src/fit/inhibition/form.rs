//! How inhibition enters the rate function: the three forms that are fitted to all inhibition levels at once.
//!
//! ```text
//! relation    threshold = g_thr(g_inh; V_t)                                     (q, c, V_t, ln noise)
//! free-slope  threshold = t0 + slope g_inh                                      (q, c, t0,  ln noise, slope)
//! divisive    threshold = g_thr(g_inh; V_t), 1/gain = q (1 + b g_inh), b >= 0   (q, c, V_t, ln noise, b)
//! ```
//!
//! with q = 1/initial gain at g_inh = 0 and c = 1/max rate, the chart of [`crate::fit::objective`].
//!
//! In the divisive form the half-rise grows with inhibition, by 1 + b g_inh, and the ceiling stays. Both choices lower
//! the initial gain by the same factor, so near the threshold they are one; they part near the ceiling, and there the
//! membrane decides: a ceiling comes from the refractory period, which a synaptic conductance does not lengthen, while
//! the drive that brings a cell to half of it is counted against everything that opposes excitation. (Rescaling the
//! drive is what Carandini & Heeger 1994 call normalisation; Holt & Koch 1997 show why a steady shunt alone should
//! *not* do it to rates, which makes `relation` the hypothesis to test.) In the chart of 1/gain the factor enters
//! linearly, and the smoothed ramp stays the boundary c = 0 of every form.

use super::membrane::Membrane;
use crate::fit::objective::Chart;

/// A way in which inhibition enters.
#[derive(Clone, Copy, Debug, PartialEq, Eq, Hash, PartialOrd, Ord)]
pub enum Form {
    /// It moves the threshold as the membrane equation says; one parameter V_t.
    Relation,
    /// It moves the threshold in proportion, by a slope of its own.
    FreeSlope,
    /// As the relation, and it divides the gain as well.
    Divisive,
}

impl Form {
    /// All forms, the simplest first.
    pub const ALL: [Self; 3] = [Self::Relation, Self::FreeSlope, Self::Divisive];

    /// `relation`, `free-slope` or `divisive`.
    pub fn name(self) -> &'static str {
        match self {
            Self::Relation => "relation",
            Self::FreeSlope => "free-slope",
            Self::Divisive => "divisive",
        }
    }

    /// Number of its parameters, extra SD not counted.
    pub fn parameters(self) -> usize {
        match self {
            Self::Relation => 4,
            Self::FreeSlope | Self::Divisive => 5,
        }
    }
}

/// A form with what it needs to know of the cell.
#[derive(Clone, Copy, Debug)]
pub(super) enum Law {
    Relation(Membrane),
    FreeSlope,
    Divisive(Membrane),
}

/// The parameters of one inhibition level's curve, and their derivatives by the form's own.
#[derive(Clone, Copy, Debug)]
pub(super) struct Local<const P: usize> {
    pub(super) parameters: [f64; 4],
    pub(super) by: [[f64; P]; 4],
}

impl Law {
    pub(super) fn form(&self) -> Form {
        match self {
            Self::Relation(_) => Form::Relation,
            Self::FreeSlope => Form::FreeSlope,
            Self::Divisive(_) => Form::Divisive,
        }
    }

    pub(super) fn membrane(&self) -> Option<&Membrane> {
        match self {
            Self::Relation(m) | Self::Divisive(m) => Some(m),
            Self::FreeSlope => None,
        }
    }

    /// Threshold at `g_inh` for the form's third and fifth parameter.
    pub(super) fn threshold(&self, third: f64, fifth: f64, g_inh: f64) -> f64 {
        match self {
            Self::Relation(m) | Self::Divisive(m) => m.threshold_at(g_inh, third),
            Self::FreeSlope => third + fifth * g_inh,
        }
    }

    /// The curve of one inhibition level.
    pub(super) fn local<const P: usize>(&self, chart: Chart, parameters: &[f64; P], g_inh: f64) -> Local<P> {
        let mut local = Local {
            parameters: [parameters[0], parameters[1], parameters[2], parameters[3]],
            by: [[0.0; P]; 4],
        };
        for i in 0..4 {
            local.by[i][i] = 1.0;
        }
        let fifth = parameters.get(4).copied().unwrap_or(0.0);
        local.parameters[2] = self.threshold(parameters[2], fifth, g_inh);
        match self {
            Self::Relation(m) | Self::Divisive(m) => {
                local.by[2][2] = m.threshold_slope_at(g_inh, parameters[2])
            }
            Self::FreeSlope => {
                if let Some(by) = local.by[2].get_mut(4) {
                    *by = g_inh;
                }
            }
        }
        if let Self::Divisive(_) = self {
            let grown = 1.0 + fifth * g_inh;
            local.parameters[0] *= grown;
            local.by[0][0] = grown;
            if let Some(by) = local.by[0].get_mut(4) {
                *by = parameters[0] * g_inh;
            }
            // The second parameter of the other chart, 1/half-rise, shrinks as the half-rise grows.
            if chart == Chart::HalfRise {
                local.parameters[1] /= grown;
                local.by[1][1] = 1.0 / grown;
                if let Some(by) = local.by[1].get_mut(4) {
                    *by = -parameters[1] * g_inh / (grown * grown);
                }
            }
        }
        local
    }
}
