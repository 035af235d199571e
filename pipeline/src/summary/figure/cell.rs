//! The figure of one cell: its responses side by side.

use super::canvas::{Anchor, CURVE, Canvas, Font, PALE, fit_text, font, solid, text_width, wrap_text};
use super::legend::{Mark, draw_legend, legend_height};
use super::panel::{Frame, Panel, PanelStyle, draw_panel, rival_stroke, weight_of};
use super::residual::{draw_residuals, has_off_scale};
use crate::assess::{CellResult, ResponseResult, Status};
use crate::curve::Curve;
use crate::summary::numbers::{count_text, estimate_text};
use crate::summary::text::{ID_LENGTH, visible};

const LEFT: f64 = 56.0;
const WIDTH: f64 = 258.0;
const RIGHT: f64 = 24.0;
const HEIGHT: f64 = 200.0;
/// Height of the residuals and the room above them.
const RESIDUAL: f64 = 84.0;
const RESIDUAL_GAP: f64 = 14.0;
/// Height of a line of the key to the rate functions.
const KEY_LINE: f64 = 14.0;
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
    drive_labels: true,
    verdict_dashes: false,
};

const RESIDUAL_STYLE: PanelStyle = PanelStyle {
    radius: 2.6,
    y_ticks: 3,
    ..STYLE
};

/// One SVG document for a cell: a panel for each response with step rates and standard errors, the fitted rate
/// function and its 95 % band, threshold and ceiling with their 95 % intervals, verdict and parameters in words; below
/// it the residuals. With `draw_rivals` the other rate functions that the response has are drawn as well, with their
/// AICc weights.
///
/// `None` for a cell without steps or responses.
pub fn cell_figure(cell: &CellResult, draw_rivals: bool) -> Option<String> {
    if cell.steps.is_empty() || cell.responses.is_empty() {
        return None;
    }
    let panels: Vec<Panel> = cell
        .responses
        .iter()
        .map(|response| {
            let panel = Panel::new(cell, response, MOST_POINTS, 400);
            if draw_rivals {
                panel.with_rivals(response)
            } else {
                panel
            }
        })
        .collect();
    let panel_width = LEFT + WIDTH + RIGHT;
    let width = 2.0 * EDGE + panel_width * panels.len() as f64;
    let mut marks = vec![Mark::Used];
    if panels.iter().any(Panel::has_unused) {
        marks.push(Mark::Unused);
    }
    if panels.iter().any(Panel::has_downweighted) {
        marks.push(Mark::Downweighted);
    }
    if panels.iter().any(Panel::has_curve) {
        marks.push(Mark::Curve);
    }
    if panels.iter().any(|panel| panel.beyond.len() > 1) {
        marks.push(Mark::Beyond);
    }
    if panels.iter().any(Panel::has_threshold) {
        marks.push(Mark::Threshold);
    }
    if panels.iter().any(Panel::has_ceiling) {
        marks.push(Mark::Ceiling);
    }
    let below = if panels.iter().any(Panel::has_residuals) {
        marks.push(Mark::Residual);
        if panels.iter().any(has_off_scale) {
            marks.push(Mark::OffScale);
        }
        RESIDUAL_GAP + RESIDUAL
    } else {
        0.0
    };
    let inner = width - 4.0 * EDGE;
    let key_top = PLOT_TOP + HEIGHT + below + 46.0;
    let key_lines = panels
        .iter()
        .map(|panel| panel.rivals.len())
        .max()
        .filter(|rivals| *rivals > 0)
        .map_or(0, |rivals| rivals + 2);
    let legend_top = key_top + KEY_LINE * key_lines as f64 + if key_lines > 0 { 8.0 } else { 0.0 };
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
        let mut heading = Font {
            bold: true,
            ..font(11.5)
        };
        let text = format!("{}: {}", panel.response.name(), panel.verdict());
        // A long verdict is set smaller before it is cut.
        heading.size *= (header_width / text_width(&text, &heading)).clamp(0.83, 1.0);
        let text = fit_text(&text, &heading, header_width);
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
        let residuals = panel.has_residuals();
        let style = PanelStyle {
            drive_labels: !residuals,
            ..STYLE
        };
        draw_panel(&mut canvas, panel, frame, &style);
        let name = Font {
            anchor: Anchor::Middle,
            ..font(11.0)
        };
        let middle = (frame.left + 0.5 * WIDTH, PLOT_TOP + 0.5 * HEIGHT);
        let mut foot = PLOT_TOP + HEIGHT;
        if residuals {
            let frame = Frame {
                top: foot + RESIDUAL_GAP,
                height: RESIDUAL,
                ..frame
            };
            draw_residuals(&mut canvas, panel, frame, &RESIDUAL_STYLE);
            canvas.rotated_text(
                (start + 18.0, frame.top + 0.5 * RESIDUAL),
                "residual (Hz)",
                name,
                -90.0,
            );
            foot += RESIDUAL_GAP + RESIDUAL;
        }
        canvas.text(
            (middle.0, foot + 33.0),
            &format!("{} ({})", drive_name(cell), panel.unit),
            name,
        );
        canvas.rotated_text((start + 18.0, middle.1), "rate (Hz)", name, -90.0);
        draw_key(
            &mut canvas,
            panel,
            response,
            (start + EDGE, key_top),
            header_width,
        );
    }
    draw_legend(&mut canvas, &marks, (2.0 * EDGE, legend_top), inner);
    Some(canvas.finish())
}

/// The rate functions drawn, each with its line and its AICc weight.
fn draw_key(canvas: &mut Canvas, panel: &Panel, response: &ResponseResult, at: (f64, f64), width: f64) {
    if panel.rivals.is_empty() {
        return;
    }
    let small = font(10.0);
    let pale = Font {
        colour: PALE,
        ..small
    };
    canvas.text((at.0, at.1 + 10.0), "rate functions, AICc weight", pale);
    let main = (
        Curve::SmoothedHyperbola.name(),
        weight_of(response, Curve::SmoothedHyperbola.name()),
        solid(CURVE, STYLE.line),
    );
    let rivals = panel
        .rivals
        .iter()
        .map(|rival| (rival.curve, rival.weight, rival_stroke(rival.curve)));
    for (line, (curve, weight, stroke)) in std::iter::once(main).chain(rivals).enumerate() {
        let y = at.1 + 10.0 + KEY_LINE * (line as f64 + 1.0);
        canvas.line((at.0, y - 3.5), (at.0 + 34.0, y - 3.5), stroke);
        let text = match weight {
            Some(weight) if weight < 0.001 => format!("{curve}, below 0.001"),
            Some(weight) => format!("{curve}, {weight:.3}"),
            None => format!("{curve}, no weight"),
        };
        canvas.text((at.0 + 42.0, y), &fit_text(&text, &small, width - 42.0), small);
    }
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
