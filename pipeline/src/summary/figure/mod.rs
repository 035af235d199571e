//! Figures as SVG, drawn with one vocabulary.
//!
//! ```text
//! canvas     lines, areas, circles, text in pixels, over the `svg` crate
//! scale      drive or rate -> pixels, ticks at round numbers
//! panel      one response of one cell: points, curve, band, threshold, ceiling
//! legend     what the marks mean
//! cell       the responses of one cell side by side
//! overview   many cells, one small panel each
//! ```
//!
//! Measured points are blue open circles, the fit is vermilion, its band grey (Okabe & Ito's colours, which people
//! with colour-vision deficiencies can tell apart). Same cell, same bytes.

mod canvas;
mod cell;
mod file_name;
mod legend;
mod overview;
mod panel;
mod scale;

pub use cell::cell_figure;
pub use file_name::{FigureNames, OVERVIEW_FILE, figure_file_name};
pub use overview::Overview;
