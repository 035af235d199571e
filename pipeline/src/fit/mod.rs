//! From rates to a rate function: objective, solver, extra SD, profiles.

pub mod adaptation;
pub mod adaptation_time;
pub mod decay;
mod estimates;
mod extra_sd;
pub mod hyperbola_fit;
pub mod main_fit;
pub mod objective;
mod profile;
pub mod relaxation;
pub mod solver;
mod starts;

pub use estimates::{Estimate, Estimates, estimates, t_quantile};
pub use extra_sd::extra_variance;
pub use hyperbola_fit::{HyperbolaFit, fit_hyperbola};
pub use objective::Point;
pub use profile::{Side, SideSearch};
