//! The figure of one cell: its responses side by side.

use super::canvas::{Anchor, Canvas, Font, PALE, fit_text, font, wrap_text};
use super::legend::{Mark, draw_legend, legend_height};
use super::panel::{Frame, Panel, PanelStyle, draw_panel};
use crate::assess::{CellResult, ResponseResult, Status};
use crate::summary::numbers::{count_text, estimate_text};
use crate::summary::text::{ID_LENGTH, visible};

const LEFT: f64 = 56.0;
const WIDTH: f64 = 258.0;
const RIGHT: f64 = 24.0;
const HEIGHT: f64 = 200.0;
const EDGE: f64 = 10.0;
const HEADER_TOP: f64 = 68.0;
const PLOT_TOP: f64 = 146.0;
/// Most steps drawn in one panel; with more, every second, third ... is drawn and the figure says so.
const MOST_POINTS: usize = 2000;

const STYLE: PanelStyle = PanelStyle {
    label: 10.0,
    radius: 3.2,
    line: 1.8,
    x_ticks: 6,
    y_ticks: 5,
    headroom: 18.0,
    strip: 18.0,
    large: true,
};

/// One SVG document for a cell: a panel for each response with step rates and standard errors, the fitted rate
/// function and its 95 % band, threshold and ceiling with their 95 % intervals, verdict and parameters in words.
///
/// `None` for a cell without steps or responses.
pub fn cell_figure(cell: &CellResult) -> Option<String> {
    if cell.steps.is_empty() || cell.responses.is_empty() {
        return None;
    }
    let panels: Vec<Panel> = cell
        .responses
        .iter()
        .map(|response| Panel::new(cell, response, MOST_POINTS, 400))
        .collect();
    let panel_width = LEFT + WIDTH + RIGHT;
    let width = 2.0 * EDGE + panel_width * panels.len() as f64;
    let mut marks = vec![Mark::Used];
    if panels.iter().any(Panel::has_unused) {
        marks.push(Mark::Unused);
    }
    if panels.iter().any(Panel::has_curve) {
        marks.push(Mark::Curve);
    }
    if panels.iter().any(Panel::has_threshold) {
        marks.push(Mark::Threshold);
    }
    if panels.iter().any(Panel::has_ceiling) {
        marks.push(Mark::Ceiling);
    }
    let inner = width - 4.0 * EDGE;
    let legend_top = PLOT_TOP + HEIGHT + 46.0;
    let height = legend_top + legend_height(&marks, inner) + EDGE;

    let id = visible(&cell.id.0, ID_LENGTH);
    let mut canvas = Canvas::new(width, height, &format!("Rate functions of cell {id}"));
    let title = Font {
        bold: true,
        ..font(15.0)
    };
    canvas.text(
        (2.0 * EDGE, 26.0),
        &fit_text(&format!("Cell {id}"), &title, inner),
        title,
    );
    let subtitle = Font {
        colour: PALE,
        ..font(11.0)
    };
    canvas.text(
        (2.0 * EDGE, 44.0),
        &fit_text(&subtitle_text(cell, &panels), &subtitle, inner),
        subtitle,
    );

    for (i, (panel, response)) in panels.iter().zip(&cell.responses).enumerate() {
        let start = EDGE + panel_width * i as f64;
        let header_width = panel_width - 2.0 * EDGE;
        let heading = Font {
            bold: true,
            ..font(11.5)
        };
        let text = fit_text(
            &format!("{}: {}", panel.response.name(), panel.verdict()),
            &heading,
            header_width,
        );
        canvas.text((start + EDGE, HEADER_TOP), &text, heading);
        let small = Font {
            colour: PALE,
            ..font(10.0)
        };
        for (line, text) in header_lines(panel, response, &small, header_width)
            .iter()
            .enumerate()
        {
            canvas.text(
                (start + EDGE, HEADER_TOP + 15.0 + 14.0 * line as f64),
                text,
                small,
            );
        }
        let frame = Frame {
            left: start + LEFT,
            top: PLOT_TOP,
            width: WIDTH,
            height: HEIGHT,
        };
        draw_panel(&mut canvas, panel, frame, &STYLE);
        let name = Font {
            anchor: Anchor::Middle,
            ..font(11.0)
        };
        let middle = (frame.left + 0.5 * WIDTH, PLOT_TOP + 0.5 * HEIGHT);
        canvas.text(
            (middle.0, PLOT_TOP + HEIGHT + 33.0),
            &format!("{} ({})", drive_name(cell), panel.unit),
            name,
        );
        canvas.rotated_text((start + 18.0, middle.1), "rate (Hz)", name, -90.0);
    }
    draw_legend(&mut canvas, &marks, (2.0 * EDGE, legend_top), inner);
    Some(canvas.finish())
}

fn drive_name(cell: &CellResult) -> &'static str {
    match cell.drive_kind {
        crate::recording::DriveKind::Current => "current",
        crate::recording::DriveKind::Conductance => "excitatory conductance",
    }
}

fn subtitle_text(cell: &CellResult, panels: &[Panel]) -> String {
    let mut parts = Vec::new();
    if let Some(group) = cell.group.as_deref().filter(|group| !group.trim().is_empty()) {
        parts.push(format!("group {}", visible(group, ID_LENGTH)));
    }
    parts.push(format!("{} steps", count_text(cell.steps.len() as u64)));
    if let Some(thinned) = panels
        .iter()
        .map(|panel| panel.thinned_by)
        .max()
        .filter(|by| *by > 1)
    {
        parts.push(format!("one step in {thinned} drawn"));
    }
    parts.join(", ")
}

/// Up to four lines under the heading: the parameters, or why there are none.
fn header_lines(panel: &Panel, response: &ResponseResult, small: &Font, width: f64) -> Vec<String> {
    if response.status != Status::Fitted {
        return wrap_text(&visible(&response.reason, 300), small, width, 4);
    }
    let unit = panel.unit;
    let reached = response
        .reached
        .filter(|reached| reached.is_finite())
        .map_or_else(String::new, |reached| {
            format!(", {} % reached", fixed_percent(reached))
        });
    [
        ("max rate", &response.max_rate, "Hz", reached.as_str()),
        ("half-rise", &response.half_rise, unit, ""),
        ("threshold", &response.threshold, unit, ""),
        ("noise SD", &response.noise_sd, unit, ""),
    ]
    .iter()
    .map(|(name, estimate, unit, more)| {
        fit_text(
            &format!("{name} {} {unit}{more}", short_estimate(estimate)),
            small,
            width,
        )
    })
    .collect()
}

/// A fraction in whole percent.
fn fixed_percent(fraction: f64) -> String {
    format!("{:.0}", 100.0 * fraction.clamp(0.0, 10.0))
}

/// As in the tables, but an open value says only its one bound, and minus signs are set as such.
fn short_estimate(estimate: &crate::assess::Estimate) -> String {
    estimate_text(estimate)
        .replace(", no upper bound)", ")")
        .replace('-', "\u{2212}")
}
