//! The figure of a set: one small panel a cell.

use super::canvas::{Anchor, Canvas, Font, PALE, fit_name, fit_text, font, wrap_text};
use super::legend::{Mark, draw_legend, legend_height};
use super::panel::{Frame, Panel, PanelStyle, draw_panel};
use crate::assess::{Ceiling, CellResult};
use crate::recording::RecordingSet;
use crate::summary::numbers::count_text;
use crate::summary::text::{ID_LENGTH, id_visible, visible};

/// Most cells drawn.
const MOST_CELLS: u64 = 60;
const COLUMNS: usize = 6;
const LEFT: f64 = 32.0;
const WIDTH: f64 = 128.0;
const RIGHT: f64 = 18.0;
/// Room for the name and a verdict of one line, and of two.
const HEAD: f64 = 30.0;
const TALL_HEAD: f64 = 41.0;
const HEIGHT: f64 = 88.0;
const FOOT: f64 = 22.0;
const EDGE: f64 = 10.0;
/// Room left of the first column for the name of the rate axis.
const AXIS: f64 = 16.0;
const TITLE: f64 = 54.0;

const STYLE: PanelStyle = PanelStyle {
    label: 9.0,
    radius: 1.7,
    line: 1.5,
    x_ticks: 3,
    y_ticks: 3,
    headroom: 3.0,
    strip: 9.0,
    large: false,
    drive_labels: true,
    verdict_dashes: true,
};

struct Digest {
    id: String,
    panel: Panel,
}

/// Collects the overview figure of a set: at most 60 cells, spread evenly over the set where it has more.
pub struct Overview {
    set: String,
    /// Cells with steps in the set.
    expected: u64,
    seen: u64,
    drawn: Vec<Digest>,
}

impl Overview {
    /// An overview of `set`, to which no cell has been added yet.
    pub fn new(set: &RecordingSet) -> Self {
        let expected = set.cells.iter().filter(|cell| !cell.steps.is_empty()).count() as u64;
        Self {
            set: visible(&set.name, ID_LENGTH),
            expected,
            seen: 0,
            drawn: Vec::new(),
        }
    }

    /// Looks at the next cell, in the order of the set. Cells without steps or responses are passed over.
    pub fn add(&mut self, cell: &CellResult) {
        let Some(first) = cell.responses.first().filter(|_| !cell.steps.is_empty()) else {
            return;
        };
        let place = u128::from(self.seen);
        self.seen += 1;
        let (most, all) = (u128::from(MOST_CELLS), u128::from(self.expected.max(1)));
        // The cell is drawn where place * most / all moves on to the next whole number.
        let chosen = all <= most || place == 0 || place * most / all != (place - 1) * most / all;
        if chosen && (self.drawn.len() as u64) < MOST_CELLS {
            self.drawn.push(Digest {
                id: id_visible(&cell.id.0),
                panel: Panel::new(cell, first, 80, 50),
            });
        }
    }

    /// Whether no cell is drawn.
    pub fn is_empty(&self) -> bool {
        self.drawn.is_empty()
    }

    /// The figure as an SVG document; `None` where no cell has steps.
    pub fn figure(&self) -> Option<String> {
        let first = self.drawn.first()?;
        let columns = self.drawn.len().clamp(3, COLUMNS);
        let rows = self.drawn.len().div_ceil(columns);
        let cell_width = LEFT + WIDTH + RIGHT;
        let small = Font {
            colour: PALE,
            ..font(9.0)
        };
        let room = WIDTH + 0.5 * RIGHT;
        let tall = self
            .drawn
            .iter()
            .any(|d| wrap_text(&d.panel.verdict(), &small, room, 2).len() > 1);
        let head = if tall { TALL_HEAD } else { HEAD };
        let cell_height = head + HEIGHT + FOOT;
        let width = 2.0 * EDGE + AXIS + cell_width * columns as f64;
        let inner = width - 2.0 * EDGE - AXIS;
        let mut marks = vec![Mark::Used];
        if self.drawn.iter().any(|d| d.panel.has_unused()) {
            marks.push(Mark::Unused);
        }
        if self.drawn.iter().any(|d| d.panel.has_downweighted()) {
            marks.push(Mark::Downweighted);
        }
        for verdict in [
            Ceiling::Resolved,
            Ceiling::Loose,
            Ceiling::Open,
            Ceiling::Declining,
        ] {
            if self
                .drawn
                .iter()
                .any(|d| d.panel.has_curve() && d.panel.ceiling == Some(verdict))
            {
                marks.push(Mark::Verdict(verdict));
            }
        }
        if self.drawn.iter().any(|d| d.panel.has_curve()) {
            marks.push(Mark::Band);
        }
        if self.drawn.iter().any(|d| d.panel.has_threshold()) {
            marks.push(Mark::Threshold);
        }
        if self.drawn.iter().any(|d| d.panel.has_ceiling()) {
            marks.push(Mark::Ceiling);
        }
        let grid_bottom = TITLE + cell_height * rows as f64;
        let legend_top = grid_bottom + 26.0;
        let height = legend_top + legend_height(&marks, inner) + EDGE;
        let left = EDGE + AXIS;

        let mut canvas = Canvas::new(width, height, &format!("Rate functions of {}", self.set));
        let title = Font {
            bold: true,
            ..font(15.0)
        };
        canvas.text(
            (left, 24.0),
            &fit_text(&format!("Rate functions of {}", self.set), &title, inner),
            title,
        );
        let subtitle = Font {
            colour: PALE,
            ..font(11.0)
        };
        canvas.text(
            (left, 42.0),
            &fit_text(&self.subtitle(), &subtitle, inner),
            subtitle,
        );

        let mixed = self.drawn.iter().any(|d| d.panel.unit != first.panel.unit);
        for (i, digest) in self.drawn.iter().enumerate() {
            let start = left + cell_width * (i % columns) as f64;
            let top = TITLE + cell_height * (i / columns) as f64;
            let frame = Frame {
                left: start + LEFT,
                top: top + head,
                width: WIDTH,
                height: HEIGHT,
            };
            let name = Font {
                bold: true,
                ..font(9.0)
            };
            canvas.text((frame.left, top + 14.0), &fit_name(&digest.id, &name, room), name);
            let verdict = if mixed {
                format!("{}, {}", digest.panel.verdict(), digest.panel.unit)
            } else {
                digest.panel.verdict()
            };
            for (line, text) in wrap_text(&verdict, &small, room, 2).iter().enumerate() {
                canvas.text((frame.left, top + 25.0 + 10.5 * line as f64), text, small);
            }
            draw_panel(&mut canvas, &digest.panel, frame, &STYLE);
        }
        let axis = Font {
            anchor: Anchor::Middle,
            ..font(11.0)
        };
        let drive = if mixed {
            "drive (unit above each panel)".into()
        } else {
            format!("drive ({})", first.panel.unit)
        };
        canvas.text(
            (
                left + 0.5 * cell_width * columns.min(self.drawn.len()) as f64,
                grid_bottom + 14.0,
            ),
            &drive,
            axis,
        );
        canvas.rotated_text(
            (EDGE + 11.0, 0.5 * (TITLE + grid_bottom)),
            "rate (Hz)",
            axis,
            -90.0,
        );
        draw_legend(&mut canvas, &marks, (left, legend_top), inner);
        Some(canvas.finish())
    }

    fn subtitle(&self) -> String {
        let response = self.drawn.first().map_or("whole", |d| d.panel.response.name());
        let drawn = self.drawn.len() as u64;
        let cells = if drawn >= self.seen {
            let plural = if drawn == 1 { "cell" } else { "cells" };
            format!("{} {plural} with steps", count_text(drawn))
        } else {
            format!(
                "{drawn} of {} cells with steps, spread evenly over their order",
                count_text(self.seen)
            )
        };
        format!("response {response}; {cells}; each panel has its own axes")
    }
}
