//! Rate functions of many neurons from spike times and stimulus protocols.
//!
//! The data walks through this crate in one direction, a folder a room:
//!
//! ```text
//! recording/  ->  steps/  ->  rates/  ->  curve/ + fit/  ->  assess/  ->  tables/  ->  summary/
//!  read, units,   spikes      intervals    rate functions,    verdict,     Arrow       Markdown,
//!  columns,       meet the    statistics   objective, solver, goodness,    schemas,    SVG
//!  refusals       protocol    responses    profiles           flags        Parquet
//! ```
//!
//! Beside the line stands [`predict`]: a fitted cell run through any input, compared with its spikes.
//!
//! [`run`] is the only place that knows the whole line; no room uses a later one. This crate computes and
//! writes files: it never prints, never exits, and knows nothing of the command line.

pub mod assess;
pub mod curve;
pub mod fit;
pub mod predict;
pub mod rates;
pub mod recording;
pub mod run;
pub mod settings;
pub mod steps;
pub mod summary;
pub mod tables;
