//! Rate functions: one a file, with value, gradient, limits and citation.

pub mod hyperbola;
pub mod quadrature;
pub mod smoothed_hyperbola;
pub mod smoothed_ramp;
mod vector_exp;
