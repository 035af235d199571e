//! From rates to a rate function: objective, solver, extra SD, profiles.

pub mod adaptation;
pub mod adaptation_time;
pub mod bootstrap;
pub mod bootstrap_interval;
pub mod decay;
mod estimates;
mod extra_sd;
mod gaps;
pub mod hyperbola_fit;
pub mod inhibition;
pub mod leave_one_out;
pub mod main_fit;
pub mod objective;
mod profile;
pub mod relaxation;
mod resample_fit;
pub mod rival_fit;
mod rival_starts;
pub mod robust;
pub mod solver;
mod starts;

pub use bootstrap::{Bootstrap, BootstrapInterval, BootstrapKind, BootstrapSettings, bootstrap};
pub use estimates::{Estimate, Estimates, estimates, t_quantile};
pub use extra_sd::extra_variance;
pub use hyperbola_fit::{HyperbolaFit, fit_hyperbola};
pub use inhibition::{InhibitionFit, InhibitionPoint, fit_inhibition};
pub use leave_one_out::{LeftOut, NotPredicted, leave_one_level_out};
pub use objective::Point;
pub use profile::{Side, SideSearch};
pub use rival_fit::{RivalFit, Unfitted, fit_rival};
pub use robust::{Robust, robust};
