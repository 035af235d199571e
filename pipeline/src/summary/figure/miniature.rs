//! A response without axes, as small as a stamp: points, curve and band.

use super::canvas::{CURVE, Canvas, PALE, POINT, solid};
use super::panel::{Frame, Panel, Role, draw_band, drive_range, rate_range};
use super::scale::Scale;

/// Draws the response within `frame`, each axis from end to end of the data.
pub(super) fn draw_miniature(canvas: &mut Canvas, panel: &Panel, frame: Frame) {
    let (top_rate, _) = rate_range(panel, false);
    let (low, high) = drive_range(panel);
    let (right, bottom) = (frame.left + frame.width, frame.top + frame.height);
    let x = Scale::new(low, high, frame.left, right);
    let y = Scale::new(0.0, top_rate, bottom - 2.0, frame.top + 2.0);
    if !panel.points.is_empty() {
        canvas.line((frame.left, y.at(0.0)), (right, y.at(0.0)), solid(PALE, 0.4));
    }
    draw_band(canvas, panel, &x, &y);
    let at = |wanted: &dyn Fn(Role) -> bool| -> Vec<(f64, f64)> {
        panel
            .points
            .iter()
            .filter(|point| wanted(point.role))
            .map(|point| (x.clamped(point.drive), y.clamped(point.rate)))
            .collect()
    };
    canvas.circles(&at(&|role| role != Role::LeftOut), 1.5, solid(POINT, 0.7));
    canvas.crosses(&at(&|role| role == Role::LeftOut), 1.5, solid(POINT, 0.8));
    let curve: Vec<(f64, f64)> = panel
        .curve
        .iter()
        .map(|p| (x.clamped(p.drive), y.clamped(p.rate_hz)))
        .collect();
    canvas.path(&curve, solid(CURVE, 1.3));
}
