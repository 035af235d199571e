//! One response of one cell: points, curve and band, threshold, ceiling.

use super::canvas::{
    Anchor, BAND, CURVE, Canvas, Font, INK, PALE, POINT, Stroke, fit_text, font, solid, text_width,
};
use super::scale::{Scale, ticks};
use crate::assess::{Ceiling, CellResult, CurvePoint, Estimate, ResponseResult, Severity, Status};
use crate::rates::{Response, fit_se};

/// What the fit made of a step.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub(super) enum Role {
    /// Used with its full weight, or drawn without a fit.
    Used,
    /// Used with less than half of the weight that its standard error gives it.
    Downweighted,
    /// Not used.
    LeftOut,
}

/// What the fitted curve leaves of a rate, Hz.
#[derive(Clone, Copy, Debug)]
pub(super) struct Residual {
    pub hz: f64,
    /// Standard deviation that the fit expects of it.
    pub sd: f64,
}

/// A rate at a drive.
#[derive(Clone, Copy, Debug)]
pub(super) struct PlotPoint {
    pub drive: f64,
    pub rate: f64,
    pub se: f64,
    pub role: Role,
    pub residual: Option<Residual>,
}

/// Another rate function fitted to the same points.
#[derive(Clone, Debug)]
pub(super) struct Rival {
    pub curve: &'static str,
    /// AICc weight, where it is known.
    pub weight: Option<f64>,
    pub points: Vec<(f64, f64)>,
}

/// What a panel shows, and no more: a light copy that outlives the cell.
#[derive(Clone, Debug)]
pub(super) struct Panel {
    pub unit: &'static str,
    pub response: Response,
    pub status: Status,
    pub ceiling: Option<Ceiling>,
    /// The flag that makes a fitted response unusable.
    pub rejected_by: Option<&'static str>,
    pub points: Vec<PlotPoint>,
    /// One of so many steps is drawn.
    pub thinned_by: usize,
    /// The fitted curve up to the largest drive that the fit used.
    pub curve: Vec<CurvePoint>,
    /// The curve beyond it, where no step supports it.
    pub beyond: Vec<CurvePoint>,
    pub rivals: Vec<Rival>,
    /// Largest drive of any step.
    pub drive_max: Option<f64>,
    /// Largest mean rate over a level.
    pub peak_rate: Option<f64>,
    max_rate: Estimate,
    threshold: Estimate,
}

/// Fraction of its full weight below which a step counts as down-weighted.
const DOWNWEIGHTED: f64 = 0.5;

/// The curve at a drive between its first and its last, by straight lines between the drives of its grid.
fn curve_at(curve: &[CurvePoint], drive: f64) -> Option<CurvePoint> {
    let after = curve.partition_point(|point| point.drive < drive);
    let next = curve.get(after)?;
    if next.drive == drive {
        return Some(*next);
    }
    let before = curve.get(after.checked_sub(1)?)?;
    let part = (drive - before.drive) / (next.drive - before.drive);
    let between = |a: f64, b: f64| a + part * (b - a);
    Some(CurvePoint {
        drive,
        rate_hz: between(before.rate_hz, next.rate_hz),
        lo_hz: before.lo_hz.zip(next.lo_hz).map(|(a, b)| between(a, b)),
        hi_hz: before.hi_hz.zip(next.hi_hz).map(|(a, b)| between(a, b)),
    })
}

/// Every so many points of a curve and its last.
fn thinned(curve: Vec<CurvePoint>, most: usize) -> Vec<CurvePoint> {
    let last = curve.len().saturating_sub(1);
    let stride = last.div_ceil(most.max(1)).max(1);
    curve
        .into_iter()
        .enumerate()
        .filter_map(|(i, point)| (i % stride == 0 || i == last).then_some(point))
        .collect()
}

impl Panel {
    /// The panel of a response with at most about `most` points and `most_curve` points of the curve, without rivals.
    pub(super) fn new(cell: &CellResult, response: &ResponseResult, most: usize, most_curve: usize) -> Self {
        let mut curve: Vec<CurvePoint> = response
            .curve
            .iter()
            .filter(|point| point.drive.is_finite() && point.rate_hz.is_finite())
            .copied()
            .collect();
        let fitted = response.status == Status::Fitted;
        let extra = finite(response.extra_sd_hz).unwrap_or(0.0);
        let thinned_by = response.rates.len().div_ceil(most.max(1)).max(1);
        let points = response
            .rates
            .iter()
            .step_by(thinned_by)
            .filter_map(|rate| {
                let drive = cell.steps.get(rate.step)?.drive;
                let se = if rate.rate_se_hz.is_finite() {
                    rate.rate_se_hz.max(0.0)
                } else {
                    0.0
                };
                let expected = fit_se(rate).hypot(extra);
                let weight = finite(rate.weight).filter(|weight| *weight > 0.0);
                // Without a fit there is nothing a step could have been left out of.
                let role = if fitted && !rate.used {
                    Role::LeftOut
                } else if weight.is_some_and(|weight| weight * expected * expected < DOWNWEIGHTED) {
                    Role::Downweighted
                } else {
                    Role::Used
                };
                let residual = match role {
                    Role::LeftOut => curve_at(&curve, drive).map(|fit| Residual {
                        hz: rate.rate_hz - fit.rate_hz,
                        sd: se,
                    }),
                    Role::Downweighted => rate.residual_hz.map(|hz| Residual { hz, sd: expected }),
                    Role::Used => rate.residual_hz.map(|hz| Residual {
                        hz,
                        sd: weight.map_or(se, |weight| 1.0 / weight.sqrt()),
                    }),
                };
                (drive.is_finite() && rate.rate_hz.is_finite()).then_some(PlotPoint {
                    drive,
                    rate: rate.rate_hz,
                    se,
                    role,
                    residual: residual.filter(|r| fitted && r.hz.is_finite() && r.sd.is_finite()),
                })
            })
            .collect();
        let mut beyond = Vec::new();
        if let Some(last_used) = finite(response.drive_max)
            && let Some(end) = curve.last()
            && last_used < end.drive
            && let Some(border) = curve_at(&curve, last_used)
        {
            let within = curve.partition_point(|point| point.drive < last_used);
            beyond.push(border);
            beyond.extend(
                curve
                    .split_off(within)
                    .into_iter()
                    .filter(|p| p.drive > last_used),
            );
            curve.push(border);
        }
        Self {
            unit: cell.drive_kind.unit(),
            response: response.response,
            status: response.status,
            ceiling: response.ceiling,
            rejected_by: response
                .flags
                .iter()
                .find(|flag| flag.severity == Severity::Reject)
                .filter(|_| fitted && !response.usable)
                .map(|flag| flag.flag),
            points,
            thinned_by,
            curve: thinned(curve, most_curve),
            beyond: thinned(beyond, most_curve),
            rivals: Vec::new(),
            drive_max: cell
                .steps
                .iter()
                .map(|step| step.drive)
                .filter(|drive| drive.is_finite())
                .max_by(f64::total_cmp),
            peak_rate: finite(response.peak_rate_hz),
            max_rate: response.max_rate,
            threshold: response.threshold,
        }
    }

    /// The same panel with the other rate functions of the response up to the largest drive used, those with the
    /// largest AICc weight first.
    pub(super) fn with_rivals(mut self, response: &ResponseResult) -> Self {
        let last_used = finite(response.drive_max).unwrap_or(f64::INFINITY);
        self.rivals = response
            .rivals
            .iter()
            .map(|rival| Rival {
                curve: rival.curve,
                weight: weight_of(response, rival.curve),
                points: response
                    .curve
                    .iter()
                    .zip(&rival.rates_hz)
                    .map(|(point, rate)| (point.drive, *rate))
                    .filter(|(drive, rate)| *drive <= last_used && drive.is_finite() && rate.is_finite())
                    .collect(),
            })
            .collect();
        let known = |rival: &Rival| rival.weight.unwrap_or(-1.0);
        self.rivals
            .sort_by(|a, b| known(b).total_cmp(&known(a)).then(a.curve.cmp(b.curve)));
        self
    }

    /// Whether some steps are drawn as not used.
    pub(super) fn has_unused(&self) -> bool {
        self.points.iter().any(|point| point.role == Role::LeftOut)
    }

    /// Whether some steps are drawn as down-weighted.
    pub(super) fn has_downweighted(&self) -> bool {
        self.points.iter().any(|point| point.role == Role::Downweighted)
    }

    /// Whether a fitted curve is drawn.
    pub(super) fn has_curve(&self) -> bool {
        self.curve.len() > 1
    }

    /// Whether any residual is known.
    pub(super) fn has_residuals(&self) -> bool {
        self.points
            .iter()
            .any(|point| point.residual.is_some() && point.role != Role::LeftOut)
    }

    /// Whether the ceiling is drawn as a line.
    pub(super) fn has_ceiling(&self) -> bool {
        rate_range(self, true).1.is_some()
    }

    /// Whether a threshold is marked.
    pub(super) fn has_threshold(&self) -> bool {
        finite(self.threshold.value).is_some()
    }

    /// The verdict, with the flag that makes the fit unusable; or why there is no fit.
    pub(super) fn verdict(&self) -> String {
        let word = match (self.status, self.ceiling) {
            (Status::Fitted, Some(verdict)) => verdict.name(),
            (Status::Fitted, None) => "fitted",
            (status, _) => status.name(),
        };
        match self.rejected_by {
            Some(flag) => format!("{word}, not usable: {flag}"),
            None => word.into(),
        }
    }

    /// Dashes that go with the verdict where panels are small: solid only where the ceiling is resolved.
    pub(super) fn dashes(&self) -> Option<&'static str> {
        verdict_dashes(self.ceiling)
    }
}

/// AICc weight of a rate function in the goodness of a response.
pub(super) fn weight_of(response: &ResponseResult, curve: &str) -> Option<f64> {
    response
        .goodness
        .iter()
        .find(|goodness| goodness.curve == curve)
        .and_then(|goodness| finite(goodness.aicc_weight))
}

/// Line style of a verdict in the overview.
pub(super) fn verdict_dashes(ceiling: Option<Ceiling>) -> Option<&'static str> {
    match ceiling {
        Some(Ceiling::Resolved) | None => None,
        Some(Ceiling::Loose) => Some("8 3"),
        Some(Ceiling::Open) => Some("4 2.5"),
        Some(Ceiling::Declining) => Some("1.5 2"),
        Some(Ceiling::Silent) => Some("1 4"),
    }
}

/// The rectangle of a panel between its axes, pixels.
#[derive(Clone, Copy)]
pub(super) struct Frame {
    pub left: f64,
    pub top: f64,
    pub width: f64,
    pub height: f64,
}

/// Sizes of a panel's marks.
#[derive(Clone, Copy)]
pub(super) struct PanelStyle {
    pub label: f64,
    pub radius: f64,
    pub line: f64,
    pub x_ticks: usize,
    pub y_ticks: usize,
    /// Room above the highest value, for a note.
    pub headroom: f64,
    /// Room below 0 Hz, for the threshold.
    pub strip: f64,
    /// Whether notes are written and the curve is drawn beyond the steps used as well.
    pub large: bool,
    /// Whether the dashes of the curve tell the verdict.
    pub verdict_dashes: bool,
    /// Whether the drive axis carries its numbers.
    pub drive_labels: bool,
}

/// Most the ceiling may stand above the data to be drawn rather than named.
const CEILING_IN_SIGHT: f64 = 1.6;
/// Highest rate of the axis where no step has a rate, Hz.
const SILENT_RANGE: f64 = 5.0;

pub(super) fn finite(number: Option<f64>) -> Option<f64> {
    number.filter(|n| n.is_finite())
}

/// Highest rate shown and, where it is in sight and to be drawn, the ceiling.
pub(super) fn rate_range(panel: &Panel, with_ceiling: bool) -> (f64, Option<f64>) {
    let data = panel.points.iter().map(|p| p.rate).fold(0.0, f64::max);
    let limit = if data > 0.0 { 1.3 * data } else { f64::INFINITY };
    let bars = panel
        .points
        .iter()
        .map(|p| (p.rate + p.se).min(limit))
        .fold(data, f64::max);
    let curve = panel
        .curve
        .iter()
        .map(|p| p.rate_hz.min(limit))
        .fold(bars, f64::max);
    let band = panel
        .curve
        .iter()
        .filter_map(|p| finite(p.hi_hz))
        .map(|hi| hi.min(1.2 * curve));
    let mut top = band.fold(curve, f64::max);
    let ceiling =
        finite(panel.max_rate.value).filter(|c| with_ceiling && *c > 0.0 && *c <= CEILING_IN_SIGHT * curve);
    if let Some(ceiling) = ceiling {
        let hi = finite(panel.max_rate.hi).map_or(ceiling, |hi| hi.min(1.25 * ceiling.max(curve)));
        top = top.max(ceiling).max(hi);
    }
    // A cell that never fires is drawn as such, not as bars that fill the panel.
    let least = if data > 0.0 {
        f64::MIN_POSITIVE
    } else {
        SILENT_RANGE
    };
    (
        if top.is_finite() {
            top.max(least)
        } else {
            SILENT_RANGE
        },
        ceiling,
    )
}

/// Lowest and highest drive shown.
pub(super) fn drive_range(panel: &Panel) -> (f64, f64) {
    let drives = || {
        panel
            .points
            .iter()
            .map(|p| p.drive)
            .chain(panel.curve.iter().chain(&panel.beyond).map(|p| p.drive))
    };
    let (mut low, mut high) = drives().fold((f64::INFINITY, f64::NEG_INFINITY), |(low, high), d| {
        (low.min(d), high.max(d))
    });
    if !(low.is_finite() && high.is_finite()) {
        return (0.0, 1.0);
    }
    if high <= low {
        let half = (0.2 * low.abs()).max(1.0);
        (low, high) = (low - half, high + half);
    }
    let span = high - low;
    let (start, end) = (low, high);
    let mut include = |value: Option<f64>, reach: f64| {
        if let Some(value) = finite(value)
            && value >= start - reach * span
            && value <= end + reach * span
        {
            low = low.min(value);
            high = high.max(value);
        }
    };
    include(panel.threshold.value, 0.5);
    include(panel.threshold.lo, 0.25);
    include(panel.threshold.hi, 0.25);
    let padding = 0.05 * (high - low);
    (low - padding, high + padding)
}

/// Draws a panel with its axes and tick labels, without axis names.
pub(super) fn draw_panel(canvas: &mut Canvas, panel: &Panel, frame: Frame, style: &PanelStyle) {
    let (top_rate, ceiling) = rate_range(panel, true);
    let (low, high) = drive_range(panel);
    let (right, bottom) = (frame.left + frame.width, frame.top + frame.height);
    let x = Scale::new(low, high, frame.left, right);
    let y = Scale::new(0.0, top_rate, bottom - style.strip, frame.top + style.headroom);

    draw_drive_axis(canvas, &x, frame, style, (low, high));
    draw_value_axis(canvas, &y, frame, style, (0.0, top_rate));
    draw_band(canvas, panel, &x, &y);
    draw_points(canvas, panel, &x, &y, style);
    for rival in &panel.rivals {
        // Where it leaves the panel it is broken off rather than drawn along the edge.
        for run in rival.points.split(|(_, rate)| !y.holds(*rate)) {
            let line: Vec<(f64, f64)> = run.iter().map(|(d, r)| (x.clamped(*d), y.at(*r))).collect();
            canvas.path(&line, rival_stroke(rival.curve));
        }
    }
    let curve: Vec<(f64, f64)> = panel
        .curve
        .iter()
        .map(|p| (x.clamped(p.drive), y.clamped(p.rate_hz)))
        .collect();
    let dashes = if style.verdict_dashes {
        panel.dashes()
    } else {
        None
    };
    canvas.path(
        &curve,
        Stroke {
            colour: CURVE,
            width: style.line,
            dashes,
        },
    );
    if style.large {
        let beyond: Vec<(f64, f64)> = panel
            .beyond
            .iter()
            .take_while(|p| y.holds(p.rate_hz))
            .map(|p| (x.clamped(p.drive), y.at(p.rate_hz)))
            .collect();
        canvas.path(&beyond, BEYOND);
    }
    draw_threshold(canvas, panel, &x, bottom, style);
    draw_ceiling(canvas, panel, ceiling, &y, frame, style);
    if style.large {
        draw_notes(canvas, panel, ceiling, frame, style);
    }
}

/// The fitted curve where no step supports it.
pub(super) const BEYOND: Stroke = Stroke {
    colour: CURVE,
    width: 1.1,
    dashes: Some("3 3"),
};

/// Colour and dashes of another rate function: the palette's colours that points and fit do not have, each with
/// dashes of its own.
pub(super) fn rival_stroke(curve: &str) -> Stroke {
    let (colour, dashes) = match curve {
        "hyperbola" => ("#009E73", "7 2.5"),
        "smoothed-ramp" => ("#E69F00", "2.5 2"),
        "ramp" => ("#E69F00", "8 2 2 2"),
        "logistic" => ("#CC79A7", "4.5 2"),
        "hill" => ("#56B4E9", "9 2"),
        "refractory-integrator" => ("#000000", "1.5 2.5"),
        "square-root" => ("#009E73", "5 2 1.5 2 1.5 2"),
        _ => ("#56B4E9", "3 1.5"),
    };
    Stroke {
        colour,
        width: 1.1,
        dashes: Some(dashes),
    }
}

/// The axis at the foot of a frame.
pub(super) fn draw_drive_axis(
    canvas: &mut Canvas,
    x: &Scale,
    frame: Frame,
    style: &PanelStyle,
    (low, high): (f64, f64),
) {
    let axis = solid(INK, 0.8);
    let (right, bottom) = (frame.left + frame.width, frame.top + frame.height);
    let length = 0.4 * style.label;
    let label = Font {
        anchor: Anchor::Middle,
        ..font(style.label)
    };
    canvas.line((frame.left, bottom), (right, bottom), axis);
    // Fewer ticks where the labels would touch.
    let shown = (1..=style.x_ticks)
        .rev()
        .map(|wanted| ticks(low, high, wanted))
        .find(|shown| {
            let widest = shown
                .iter()
                .map(|(_, text)| text_width(text, &label))
                .fold(0.0, f64::max);
            match (shown.first(), shown.get(1)) {
                (Some((a, _)), Some((b, _))) => x.at(*b) - x.at(*a) > widest + 0.6 * style.label,
                _ => true,
            }
        });
    for (value, text) in shown.unwrap_or_default() {
        let at = x.at(value);
        canvas.line((at, bottom), (at, bottom + length), axis);
        if style.drive_labels {
            canvas.text((at, bottom + length + 1.05 * style.label), &text, label);
        }
    }
}

/// The axis on the left of a frame.
pub(super) fn draw_value_axis(
    canvas: &mut Canvas,
    y: &Scale,
    frame: Frame,
    style: &PanelStyle,
    (low, high): (f64, f64),
) {
    let axis = solid(INK, 0.8);
    let length = 0.4 * style.label;
    canvas.line(
        (frame.left, frame.top),
        (frame.left, frame.top + frame.height),
        axis,
    );
    let label = Font {
        anchor: Anchor::End,
        ..font(style.label)
    };
    for (value, text) in ticks(low, high, style.y_ticks) {
        let at = y.at(value);
        canvas.line((frame.left - length, at), (frame.left, at), axis);
        canvas.text(
            (frame.left - length - 0.25 * style.label, at + 0.36 * style.label),
            &text,
            label,
        );
    }
}

/// The band, in one piece for each run of the grid where both bounds are known.
pub(super) fn draw_band(canvas: &mut Canvas, panel: &Panel, x: &Scale, y: &Scale) {
    let mut upper: Vec<(f64, f64)> = Vec::new();
    let mut lower: Vec<(f64, f64)> = Vec::new();
    let mut flush = |upper: &mut Vec<(f64, f64)>, lower: &mut Vec<(f64, f64)>| {
        upper.extend(lower.drain(..).rev());
        canvas.area(upper, BAND, 0.75);
        upper.clear();
    };
    for point in &panel.curve {
        match (
            point.lo_hz.filter(|b| !b.is_nan()),
            point.hi_hz.filter(|b| !b.is_nan()),
        ) {
            (Some(lo), Some(hi)) => {
                lower.push((x.clamped(point.drive), y.clamped(lo)));
                upper.push((x.clamped(point.drive), y.clamped(hi)));
            }
            _ => flush(&mut upper, &mut lower),
        }
    }
    flush(&mut upper, &mut lower);
}

fn draw_points(canvas: &mut Canvas, panel: &Panel, x: &Scale, y: &Scale, style: &PanelStyle) {
    for point in &panel.points {
        let at = (x.clamped(point.drive), y.clamped(point.rate));
        if point.role == Role::LeftOut {
            canvas.cross(at, 0.8 * style.radius, solid(POINT, 0.9));
            continue;
        }
        // The bar starts at the circle's edge, so that circles stay open.
        let (high, low) = (y.clamped(point.rate + point.se), y.clamped(point.rate - point.se));
        if at.1 - high > style.radius {
            canvas.line((at.0, at.1 - style.radius), (at.0, high), solid(POINT, 0.8));
        }
        if low - at.1 > style.radius {
            canvas.line((at.0, at.1 + style.radius), (at.0, low), solid(POINT, 0.8));
        }
        let line = solid(POINT, if style.large { 1.1 } else { 0.8 });
        if point.role == Role::Downweighted {
            canvas.diamond(at, 1.25 * style.radius, line);
        } else {
            canvas.circle(at, style.radius, line);
        }
    }
}

/// A filled triangle with its tip at a point.
pub(super) fn triangle(canvas: &mut Canvas, tip: (f64, f64), towards: (f64, f64), size: f64) {
    let (x, y) = tip;
    let (dx, dy) = towards;
    let base = (x - dx * size, y - dy * size);
    let half = 0.6 * size;
    canvas.area(
        &[
            tip,
            (base.0 - dy * half, base.1 + dx * half),
            (base.0 + dy * half, base.1 - dx * half),
        ],
        INK,
        1.0,
    );
}

/// A tick on the drive axis with the interval as a whisker; what lies off the axis ends in an arrow head.
fn draw_threshold(canvas: &mut Canvas, panel: &Panel, x: &Scale, bottom: f64, style: &PanelStyle) {
    let Some(value) = finite(panel.threshold.value) else {
        return;
    };
    let at = bottom - 0.45 * style.strip;
    let half = 0.32 * style.strip;
    // Small panels have no room for caps.
    let (thin, thick) = if style.large { (1.2, 1.6) } else { (0.8, 1.0) };
    if let (Some(lo), Some(hi)) = (
        panel.threshold.lo.filter(|b| !b.is_nan()),
        panel.threshold.hi.filter(|b| !b.is_nan()),
    ) {
        canvas.line((x.clamped(lo), at), (x.clamped(hi), at), solid(INK, thin));
        for (bound, towards) in [(lo, -1.0), (hi, 1.0)] {
            let end = x.clamped(bound);
            if x.holds(bound) {
                if style.large {
                    canvas.line((end, at - 0.6 * half), (end, at + 0.6 * half), solid(INK, thin));
                }
            } else {
                triangle(canvas, (end, at), (towards, 0.0), 1.2 * half);
            }
        }
    }
    if x.holds(value) {
        canvas.line((x.at(value), bottom), (x.at(value), at - half), solid(INK, thick));
    } else {
        let towards = if x.at(value) < x.clamped(value) { -1.0 } else { 1.0 };
        triangle(canvas, (x.clamped(value), at), (towards, 0.0), 1.2 * half);
    }
}

/// A dashed line at the ceiling, its interval as a whisker in the right margin.
fn draw_ceiling(
    canvas: &mut Canvas,
    panel: &Panel,
    ceiling: Option<f64>,
    y: &Scale,
    frame: Frame,
    style: &PanelStyle,
) {
    let Some(value) = ceiling else {
        return;
    };
    let right = frame.left + frame.width;
    let at = y.at(value);
    canvas.line(
        (frame.left, at),
        (right, at),
        Stroke {
            dashes: Some("5 3"),
            ..solid(PALE, 0.9)
        },
    );
    if let (Some(lo), Some(hi)) = (
        panel.max_rate.lo.filter(|b| !b.is_nan()),
        panel.max_rate.hi.filter(|b| !b.is_nan()),
    ) {
        let margin = right + 0.9 * style.label;
        let cap = 0.3 * style.label;
        canvas.line((margin, y.clamped(lo)), (margin, y.clamped(hi)), solid(INK, 1.2));
        for (bound, towards) in [(lo, 1.0), (hi, -1.0)] {
            let end = y.clamped(bound);
            if y.holds(bound) {
                canvas.line((margin - cap, end), (margin + cap, end), solid(INK, 1.2));
            } else {
                triangle(canvas, (margin, end), (0.0, towards), 1.6 * cap);
            }
        }
        canvas.line(
            (margin - 1.4 * cap, at),
            (margin + 1.4 * cap, at),
            solid(INK, 1.8),
        );
    }
}

/// What the panel cannot show, in words above the data.
fn draw_notes(canvas: &mut Canvas, panel: &Panel, ceiling: Option<f64>, frame: Frame, style: &PanelStyle) {
    let mut notes: Vec<String> = Vec::new();
    let mut above = false;
    if panel.status == Status::Fitted {
        if panel.ceiling == Some(Ceiling::Declining) {
            notes.push("rate falls at high drive".into());
        }
        if panel.ceiling == Some(Ceiling::Open) {
            notes.push("no ceiling in sight".into());
            above = true;
        } else if let Some(value) = finite(panel.max_rate.value)
            && ceiling.is_none()
        {
            notes.push(format!(
                "ceiling at {} Hz",
                crate::summary::numbers::significant_text(value)
            ));
            above = true;
        }
    } else {
        notes.push(format!("no fit: {}", panel.status.name()));
    }
    if notes.is_empty() {
        return;
    }
    let label = Font {
        anchor: Anchor::End,
        colour: PALE,
        ..font(style.label)
    };
    let right = frame.left + frame.width;
    let room = if above { 1.2 * style.label } else { 0.0 };
    let text = fit_text(&notes.join("; "), &label, frame.width - room - 4.0);
    canvas.text((right - room, frame.top + style.label), &text, label);
    if above {
        let at = right - 0.45 * style.label;
        canvas.line(
            (at, frame.top + 1.1 * style.label),
            (at, frame.top + 0.5 * style.label),
            solid(INK, 1.2),
        );
        triangle(
            canvas,
            (at, frame.top + 0.05 * style.label),
            (0.0, -1.0),
            0.6 * style.label,
        );
    }
}
