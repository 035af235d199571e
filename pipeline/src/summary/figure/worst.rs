//! The cells to distrust first, with a small figure each, in two rows of five.

use super::FigureFile;
use super::WORST_FILE;
use super::canvas::{Anchor, Canvas, Font, PALE, fit_name, font, wrap_text};
use super::legend::{Mark, draw_legend, legend_height};
use super::mark::{Glance, draw_symbol};
use super::panel::{Frame, Panel, PanelStyle, draw_panel};
use crate::assess::{CellResult, Severity};
use crate::summary::text::id_visible;

/// Cells shown.
pub(in crate::summary) const WORST: usize = 10;
const COLUMNS: usize = 5;
const LEFT: f64 = 40.0;
const WIDTH: f64 = 150.0;
const RIGHT: f64 = 20.0;
const HEAD: f64 = 62.0;
const HEIGHT: f64 = 104.0;
const FOOT: f64 = 42.0;
const EDGE: f64 = 10.0;

const STYLE: PanelStyle = PanelStyle {
    label: 9.5,
    radius: 2.0,
    line: 1.5,
    x_ticks: 4,
    y_ticks: 4,
    headroom: 4.0,
    strip: 10.0,
    large: false,
    drive_labels: true,
    verdict_dashes: false,
};

/// A cell of the strip.
pub(in crate::summary) struct WorstCell {
    id: String,
    flags: String,
    panel: Panel,
}

impl WorstCell {
    /// The cell by its first response; `None` without steps or responses, and where no step of it holds an interval:
    /// rows of zeros tell nothing that the word does not.
    pub(in crate::summary) fn new(cell: &CellResult) -> Option<Self> {
        let first = cell.responses.first().filter(|_| !cell.steps.is_empty())?;
        if first.rates.iter().all(|rate| rate.intervals == 0) {
            return None;
        }
        let mut names: Vec<&str> = Vec::new();
        for severity in [Severity::Reject, Severity::Caution] {
            let flags = cell.responses.iter().flat_map(|response| &response.flags);
            for flag in flags.filter(|flag| flag.severity == severity) {
                if !names.contains(&flag.flag) {
                    names.push(flag.flag);
                }
            }
        }
        let panel = Panel::new(cell, first, 100, 60);
        Some(Self {
            id: id_visible(&cell.id.0),
            flags: names.join(", "),
            panel,
        })
    }
}

/// The strip as a figure, worst first; `None` without cells.
pub(in crate::summary) fn worst_figure(cells: &[&WorstCell]) -> Option<FigureFile> {
    let first = cells.first()?;
    let cells = cells.get(..WORST).unwrap_or(cells);
    let columns = cells.len().clamp(3, COLUMNS);
    let rows = cells.len().div_ceil(columns);
    let (cell_width, cell_height) = (LEFT + WIDTH + RIGHT, HEAD + HEIGHT + FOOT);
    let width = 2.0 * EDGE + cell_width * columns as f64;
    let inner = width - 2.0 * EDGE;
    let any = |test: &dyn Fn(&Panel) -> bool| cells.iter().any(|cell| test(&cell.panel));
    let mut marks = vec![Mark::Used];
    if any(&Panel::has_unused) {
        marks.push(Mark::Unused);
    }
    if any(&Panel::has_downweighted) {
        marks.push(Mark::Downweighted);
    }
    if any(&Panel::has_curve) {
        marks.push(Mark::Curve);
    }
    if any(&Panel::has_threshold) {
        marks.push(Mark::Threshold);
    }
    if any(&Panel::has_ceiling) {
        marks.push(Mark::Ceiling);
    }
    let title_height = 30.0;
    let legend_top = title_height + cell_height * rows as f64 + 4.0;
    let height = legend_top + legend_height(&marks, inner) + EDGE;
    let mut canvas = Canvas::new(width, height, "Cells to distrust first");
    let title = Font {
        bold: true,
        ..font(13.0)
    };
    let text = format!(
        "Cells to distrust first, response {}",
        first.panel.response.name()
    );
    canvas.text((EDGE, 20.0), &text, title);
    for (i, cell) in cells.iter().enumerate() {
        let start = EDGE + cell_width * (i % columns) as f64;
        let top = title_height + cell_height * (i / columns) as f64;
        draw_cell(&mut canvas, i + 1, cell, (start, top));
    }
    draw_legend(&mut canvas, &marks, (EDGE, legend_top), inner);
    Some(FigureFile {
        name: WORST_FILE.into(),
        svg: canvas.finish(),
    })
}

fn draw_cell(canvas: &mut Canvas, place: usize, cell: &WorstCell, (start, top): (f64, f64)) {
    let room = LEFT + WIDTH + RIGHT - 12.0;
    let name = Font {
        bold: true,
        ..font(11.0)
    };
    let number = format!("{place}.");
    canvas.text((start, top + 13.0), &number, name);
    draw_symbol(canvas, Glance::of(&cell.panel), (start + 30.0, top + 9.0), 4.6);
    canvas.text(
        (start + 40.0, top + 13.0),
        &fit_name(&cell.id, &name, room - 40.0),
        name,
    );
    // Verdict first, then the flags as far as there is room.
    let small = font(9.5);
    let mut lines = wrap_text(&cell.panel.verdict(), &small, room, 2);
    let pale = Font {
        colour: PALE,
        ..small
    };
    let left = 3_usize.saturating_sub(lines.len());
    let verdict_lines = lines.len();
    if !cell.flags.is_empty() {
        lines.extend(wrap_text(&format!("flags: {}", cell.flags), &pale, room, left));
    }
    for (line, text) in lines.iter().enumerate() {
        let font = if line < verdict_lines { small } else { pale };
        canvas.text((start, top + 27.0 + 12.0 * line as f64), text, font);
    }
    let frame = Frame {
        left: start + LEFT,
        top: top + HEAD,
        width: WIDTH,
        height: HEIGHT,
    };
    draw_panel(canvas, &cell.panel, frame, &STYLE);
    let axis = Font {
        anchor: Anchor::Middle,
        ..font(9.5)
    };
    canvas.text(
        (frame.left + 0.5 * WIDTH, frame.top + HEIGHT + 27.0),
        &format!("drive ({})", cell.panel.unit),
        axis,
    );
    canvas.rotated_text((start + 9.0, frame.top + 0.5 * HEIGHT), "rate (Hz)", axis, -90.0);
}
