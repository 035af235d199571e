//! What the fitted curve leaves of each rate, against drive.

use super::canvas::{Canvas, PALE, POINT, solid};
use super::panel::{
    Frame, Panel, PanelStyle, PlotPoint, Role, draw_drive_axis, draw_value_axis, drive_range, triangle,
};
use super::scale::Scale;

/// Most that steps left out may widen the range that the steps used ask for.
const WIDEN: f64 = 2.0;

/// Largest residual shown, Hz, in either direction.
fn reach(panel: &Panel) -> f64 {
    let largest = |wanted: &dyn Fn(&PlotPoint) -> bool| {
        panel
            .points
            .iter()
            .filter(|point| wanted(point))
            .filter_map(|point| point.residual)
            .map(|residual| residual.hz.abs() + residual.sd)
            .filter(|size| size.is_finite())
            .fold(0.0, f64::max)
    };
    let used = largest(&|point| point.role == Role::Used);
    let all = largest(&|_| true);
    let shown = if used > 0.0 { all.min(WIDEN * used) } else { all };
    if shown > 0.0 { 1.08 * shown } else { 1.0 }
}

/// Whether some residual lies beyond the axis.
pub(super) fn has_off_scale(panel: &Panel) -> bool {
    let reach = reach(panel);
    panel.has_residuals()
        && panel
            .points
            .iter()
            .filter_map(|point| point.residual)
            .any(|residual| residual.hz.abs() > reach)
}

/// Draws the residuals in `frame` with the drive axis of the panel's curve, without axis names.
pub(super) fn draw_residuals(canvas: &mut Canvas, panel: &Panel, frame: Frame, style: &PanelStyle) {
    let reach = reach(panel);
    let (low, high) = drive_range(panel);
    let (right, bottom) = (frame.left + frame.width, frame.top + frame.height);
    let x = Scale::new(low, high, frame.left, right);
    let y = Scale::new(-reach, reach, bottom - 3.0, frame.top + 3.0);
    draw_drive_axis(canvas, &x, frame, style, (low, high));
    draw_value_axis(canvas, &y, frame, style, (-reach, reach));
    canvas.line((frame.left, y.at(0.0)), (right, y.at(0.0)), solid(PALE, 0.8));
    for point in &panel.points {
        let Some(residual) = point.residual else {
            continue;
        };
        let at = (x.clamped(point.drive), y.clamped(residual.hz));
        if !y.holds(residual.hz) {
            // Off the scale: an arrow head at the edge.
            triangle(canvas, at, (0.0, -residual.hz.signum()), 2.0 * style.radius);
            continue;
        }
        if point.role == Role::LeftOut {
            canvas.cross(at, 0.8 * style.radius, solid(POINT, 0.9));
            continue;
        }
        let (high, low) = (
            y.clamped(residual.hz + residual.sd),
            y.clamped(residual.hz - residual.sd),
        );
        if at.1 - high > style.radius {
            canvas.line((at.0, at.1 - style.radius), (at.0, high), solid(POINT, 0.8));
        }
        if low - at.1 > style.radius {
            canvas.line((at.0, at.1 + style.radius), (at.0, low), solid(POINT, 0.8));
        }
        if point.role == Role::Downweighted {
            canvas.diamond(at, 1.25 * style.radius, solid(POINT, 1.1));
        } else {
            canvas.circle(at, style.radius, solid(POINT, 1.1));
        }
    }
}
