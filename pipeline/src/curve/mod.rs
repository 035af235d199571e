//! Rate functions: one a file, with value, gradient, limits and citation.

pub mod adapting;
pub mod hyperbola;
pub mod quadrature;
pub mod rate_function;
pub mod smoothed_hyperbola;
pub mod smoothed_ramp;
mod vector_exp;

/// Name of the main rate function in the tables.
pub const SMOOTHED_HYPERBOLA: &str = "smoothed-hyperbola";
/// Name of the smoothed ramp in the tables.
pub const SMOOTHED_RAMP: &str = "smoothed-ramp";
