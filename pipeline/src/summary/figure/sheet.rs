//! Contact sheets: every cell of a set as a stamp whose frame, ground and symbol tell the verdict.

use super::canvas::{Anchor, CURVE, Canvas, Font, PALE, POINT, fit_name, fit_text, font, solid, text_width};
use super::mark::{Glance, draw_symbol, draw_tile};
use super::miniature::draw_miniature;
use super::panel::{Frame, Panel};
use super::{FigureFile, worth_drawing};
use crate::assess::{CellResult, Status};
use crate::recording::RecordingSet;
use crate::summary::numbers::{count_text, significant_text};
use crate::summary::text::{ID_LENGTH, id_visible, visible};

/// Cells on a page.
pub(super) const CELLS_A_PAGE: usize = 48;
const COLUMNS: usize = 8;
const WIDTH: f64 = 126.0;
const HEIGHT: f64 = 96.0;
const GAP: f64 = 8.0;
const EDGE: f64 = 14.0;
const TITLE: f64 = 56.0;
/// Height of the line with symbol and name, and of the line with numbers.
const HEAD: f64 = 17.0;
const FOOT: f64 = 15.0;

struct Stamp {
    id: String,
    panel: Option<Panel>,
    status: Status,
}

impl Stamp {
    fn glance(&self) -> Glance {
        self.panel.as_ref().map_or(Glance::NoFit, Glance::of)
    }

    /// Peak rate and largest drive, or why there is no fit.
    fn foot(&self) -> String {
        match &self.panel {
            Some(panel) if panel.status == Status::Fitted => {
                let drive = panel.drive_max.map_or_else(String::new, |drive| {
                    format!(", to {} {}", significant_text(drive), panel.unit)
                });
                let peak = panel.peak_rate.map_or_else(
                    || "no rate".into(),
                    |peak| format!("{} Hz", significant_text(peak)),
                );
                format!("{peak}{drive}")
            }
            _ => self.status.name().into(),
        }
    }
}

/// Collects cells and hands out a page whenever it is full, so that memory does not grow with the set.
pub(in crate::summary) struct ContactSheets {
    set: String,
    cells_in_set: usize,
    /// Number of the next page, from 1.
    page: usize,
    /// Cells on pages handed out.
    before: u64,
    stamps: Vec<Stamp>,
    files: Vec<String>,
}

impl ContactSheets {
    /// Sheets of `set`, to which no cell has been added yet.
    pub(in crate::summary) fn new(set: &RecordingSet) -> Self {
        Self {
            set: visible(&set.name, ID_LENGTH),
            cells_in_set: set.cells.len(),
            page: 1,
            before: 0,
            stamps: Vec::new(),
            files: Vec::new(),
        }
    }

    /// Adds the next cell by its first response; the page that it completes, if it does. In a very large set a cell
    /// without a single interval is passed over.
    pub(in crate::summary) fn add(&mut self, cell: &CellResult) -> Option<FigureFile> {
        if !worth_drawing(cell, self.cells_in_set) {
            return None;
        }
        let first = cell.responses.first();
        self.stamps.push(Stamp {
            id: id_visible(&cell.id.0),
            panel: first
                .filter(|_| !cell.steps.is_empty())
                .map(|first| Panel::new(cell, first, 60, 50)),
            status: first.map_or(Status::NoSteps, |first| first.status),
        });
        if self.stamps.len() < CELLS_A_PAGE {
            return None;
        }
        self.close()
    }

    /// The last page, where cells are left for it.
    pub(in crate::summary) fn close(&mut self) -> Option<FigureFile> {
        if self.stamps.is_empty() {
            return None;
        }
        let file = FigureFile {
            name: sheet_file(self.page),
            svg: self.svg(),
        };
        self.page += 1;
        self.before += self.stamps.len() as u64;
        self.stamps.clear();
        self.files.push(file.name.clone());
        Some(file)
    }

    /// Files of the pages handed out.
    pub(in crate::summary) fn files(&self) -> &[String] {
        &self.files
    }

    /// Cells on the pages handed out.
    pub(in crate::summary) fn shown(&self) -> u64 {
        self.before
    }

    fn svg(&self) -> String {
        let columns = self.stamps.len().clamp(4, COLUMNS);
        let rows = self.stamps.len().div_ceil(columns);
        let width = 2.0 * EDGE + columns as f64 * (WIDTH + GAP) - GAP;
        let inner = width - 2.0 * EDGE;
        let key_top = TITLE + rows as f64 * (HEIGHT + GAP) + 8.0;
        let entries = self.key();
        let places = key_places(&entries, inner);
        let key_rows = places.last().map_or(1, |(row, _)| row + 1);
        // One more row explains the marks.
        let height = key_top + (key_rows as f64 + 1.0) * KEY_ROW + EDGE;
        let name = format!("Contact sheet {} of {}", self.page, self.set);
        let mut canvas = Canvas::new(width, height, &name);
        let title = Font {
            bold: true,
            ..font(15.0)
        };
        canvas.text((EDGE, 26.0), &fit_text(&name, &title, inner), title);
        let subtitle = Font {
            colour: PALE,
            ..font(11.0)
        };
        canvas.text(
            (EDGE, 44.0),
            &fit_text(&self.subtitle(), &subtitle, inner),
            subtitle,
        );
        for (i, stamp) in self.stamps.iter().enumerate() {
            let tile = Frame {
                left: EDGE + (WIDTH + GAP) * (i % columns) as f64,
                top: TITLE + (HEIGHT + GAP) * (i / columns) as f64,
                width: WIDTH,
                height: HEIGHT,
            };
            draw_stamp(&mut canvas, stamp, tile);
        }
        for ((glance, text), (row, offset)) in entries.iter().zip(&places) {
            let (x, y) = (EDGE + offset, key_top + (*row as f64 + 0.5) * KEY_ROW);
            let tile = Frame {
                left: x,
                top: y - 7.0,
                width: KEY_TILE,
                height: 14.0,
            };
            draw_tile(&mut canvas, *glance, tile);
            draw_symbol(&mut canvas, *glance, (x + 0.5 * KEY_TILE, y), 4.5);
            canvas.text((x + KEY_TILE + 6.0, y + 3.8), text, font(10.0));
        }
        self.marks_line(&mut canvas, key_top + (key_rows as f64 + 0.5) * KEY_ROW, inner);
        canvas.finish()
    }

    fn subtitle(&self) -> String {
        let response = self
            .stamps
            .iter()
            .find_map(|stamp| stamp.panel.as_ref())
            .map_or("whole", |panel| panel.response.name());
        let (from, to) = (self.before + 1, self.before + self.stamps.len() as u64);
        let which = if from == to {
            format!("cell {}", count_text(from))
        } else {
            format!("cells {} to {}", count_text(from), count_text(to))
        };
        let of = if self.cells_in_set > super::CELLS_ALL_DRAWN {
            "those with an interval".into()
        } else {
            count_text(self.cells_in_set as u64)
        };
        format!("response {response}; {which} of {of}; each stamp has its own axes, from 0 Hz to its peak")
    }

    /// Every verdict with its number of cells on this page.
    fn key(&self) -> Vec<(Glance, String)> {
        Glance::ALL
            .into_iter()
            .map(|glance| {
                let cells = self
                    .stamps
                    .iter()
                    .filter(|stamp| stamp.glance() == glance)
                    .count();
                (glance, format!("{} ({cells})", glance.text()))
            })
            .collect()
    }

    fn marks_line(&self, canvas: &mut Canvas, y: f64, inner: f64) {
        let small = Font {
            colour: PALE,
            ..font(10.0)
        };
        canvas.circles(&[(EDGE + 4.0, y)], 1.8, solid(POINT, 0.9));
        canvas.text((EDGE + 12.0, y + 3.8), "step", small);
        let cross = EDGE + 50.0;
        canvas.crosses(&[(cross, y)], 1.8, solid(POINT, 0.9));
        canvas.text((cross + 8.0, y + 3.8), "left out", small);
        let curve = EDGE + 112.0;
        canvas.line((curve, y), (curve + 20.0, y), solid(CURVE, 1.3));
        let rest = "fit, in grey its 95 % band; below: peak rate, largest drive";
        canvas.text(
            (curve + 26.0, y + 3.8),
            &fit_text(rest, &small, inner - 138.0),
            small,
        );
    }
}

const KEY_ROW: f64 = 22.0;
const KEY_TILE: f64 = 30.0;

fn key_places(entries: &[(Glance, String)], width: f64) -> Vec<(usize, f64)> {
    let (mut row, mut offset) = (0, 0.0);
    entries
        .iter()
        .map(|(_, text)| {
            let needed = KEY_TILE + 6.0 + text_width(text, &font(10.0));
            if offset > 0.0 && offset + needed > width {
                row += 1;
                offset = 0.0;
            }
            let place = (row, offset);
            offset += needed + 20.0;
            place
        })
        .collect()
}

fn draw_stamp(canvas: &mut Canvas, stamp: &Stamp, tile: Frame) {
    let glance = stamp.glance();
    draw_tile(canvas, glance, tile);
    draw_symbol(canvas, glance, (tile.left + 10.0, tile.top + 9.5), 4.6);
    let name = Font {
        bold: true,
        ..font(9.5)
    };
    let id = fit_name(&stamp.id, &name, WIDTH - 24.0);
    canvas.text((tile.left + 19.0, tile.top + 13.0), &id, name);
    if let Some(panel) = &stamp.panel {
        let frame = Frame {
            left: tile.left + 5.0,
            top: tile.top + HEAD,
            width: WIDTH - 10.0,
            height: HEIGHT - HEAD - FOOT,
        };
        draw_miniature(canvas, panel, frame);
    }
    let small = Font {
        anchor: Anchor::Middle,
        ..font(9.0)
    };
    let foot = fit_text(&stamp.foot(), &small, WIDTH - 6.0);
    canvas.text((tile.left + 0.5 * WIDTH, tile.top + HEIGHT - 4.5), &foot, small);
}

/// File name of a page, counted from 1.
pub(super) fn sheet_file(page: usize) -> String {
    format!("sheet-{page:02}.svg")
}
