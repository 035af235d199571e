//! Figures as SVG, drawn with one vocabulary.
//!
//! ```text
//! canvas     lines, areas, circles, text in pixels, over the `svg` crate
//! scale      drive or rate -> pixels, ticks at round numbers
//! panel      one response of one cell: points, curve, band, threshold, ceiling
//! legend     what the marks mean
//! residual   what the curve leaves of the rates, below a panel
//! mark       a verdict as shape and colour
//! miniature  a panel without axes
//! cell       the responses of one cell side by side
//! sheet      every cell as a stamp, 48 a page
//! worst      the cells to distrust first
//! population distributions of the parameters
//! overview   many cells, one small panel each
//! ```
//!
//! Measured points are blue open circles, the fit is vermilion, its band grey (Okabe & Ito's colours, which people
//! with colour-vision deficiencies can tell apart). Same cell, same bytes.

mod canvas;
mod cell;
mod file_name;
mod legend;
mod mark;
mod miniature;
mod overview;
mod panel;
mod population;
mod residual;
mod scale;
mod sheet;
mod worst;

use crate::assess::{CellResult, Severity};
use crate::settings::CellFigures;

pub use cell::cell_figure;
pub use file_name::{FigureNames, OVERVIEW_FILE, POPULATION_FILE, WORST_FILE, figure_file_name};
pub use overview::Overview;
pub(super) use population::population_figure;
pub(super) use sheet::ContactSheets;
pub(super) use worst::{WORST, WorstCell, worst_figure};

/// In a set of more cells than this, a cell without a single interval is not drawn.
pub const CELLS_ALL_DRAWN: usize = 5000;

/// A figure to be written into `figures/`.
#[derive(Clone, Debug, PartialEq, Eq)]
pub struct FigureFile {
    /// File name within the folder.
    pub name: String,
    /// The SVG document.
    pub svg: String,
}

/// Whether a cell shows anything worth a place in the figures: in a very large set a picture of nothing is not.
pub fn worth_drawing(cell: &CellResult, cells_in_set: usize) -> bool {
    cells_in_set <= CELLS_ALL_DRAWN
        || cell
            .responses
            .iter()
            .flat_map(|response| &response.rates)
            .any(|rate| rate.intervals > 0)
}

/// Whether a cell asks for a look: a flag of severity caution or reject, or a response without a usable fit.
pub fn is_flagged(cell: &CellResult) -> bool {
    cell.responses.iter().any(|response| {
        !response.usable
            || response
                .flags
                .iter()
                .any(|flag| flag.severity >= Severity::Caution)
    })
}

/// Whether a cell of a set of so many cells gets a figure of its own.
pub fn gets_figure(cell: &CellResult, cells_in_set: usize, figures: CellFigures) -> bool {
    let asked = match figures {
        CellFigures::All => true,
        CellFigures::Flagged => is_flagged(cell),
        CellFigures::None => false,
    };
    asked && worth_drawing(cell, cells_in_set)
}
