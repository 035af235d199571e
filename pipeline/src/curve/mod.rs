//! Rate functions: one a file, with value, gradient, limits and citation.

pub mod quadrature;
pub mod smoothed_hyperbola;
mod vector_exp;
