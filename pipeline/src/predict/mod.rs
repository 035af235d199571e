//! A fitted rate function run through any drive, and its rate against recorded spikes. Pure computing: no files.

pub mod compare;
pub mod drive;
pub mod kolmogorov;
pub mod ramp;
pub mod rescaling;
pub mod run;

pub use compare::{Comparison, binned, compare_binned, compare_smoothed, smoothed};
pub use drive::{Between, Drive, DriveError, Piece};
pub use ramp::{RampPoint, ramp_points};
pub use rescaling::{Rescaled, Stretch, Truncation, rescale};
pub use run::{Predicted, RateModel, RunError, predict};
