//! What the marks mean, in a row that wraps.

use super::canvas::{BAND, CURVE, Canvas, INK, PALE, POINT, Stroke, font, solid, text_width};
use super::panel::{BEYOND, triangle, verdict_dashes};
use crate::assess::Ceiling;

/// One entry.
#[derive(Clone, Copy)]
pub(super) enum Mark {
    /// A step used by the fit.
    Used,
    /// A step that was not.
    Unused,
    /// A step used with less than half its weight.
    Downweighted,
    /// What the fit leaves of a step.
    Residual,
    /// A residual that the panel is too low for.
    OffScale,
    /// The fitted curve with its band.
    Curve,
    /// The curve beyond the steps used.
    Beyond,
    /// The band alone.
    Band,
    /// The threshold with its interval.
    Threshold,
    /// The ceiling with its interval.
    Ceiling,
    /// The curve in the style of a verdict.
    Verdict(Ceiling),
}

impl Mark {
    fn text(self) -> &'static str {
        match self {
            Self::Used => "rate of a step ± 1 SE",
            Self::Unused => "step not used by the fit",
            Self::Downweighted => "step with less than half its weight",
            Self::Residual => "residual ± 1 SD as the fit weighs it",
            Self::OffScale => "residual beyond the axis",
            Self::Curve => "fitted rate function, 95 % band",
            Self::Beyond => "the same beyond the steps used",
            Self::Band => "95 % band",
            Self::Threshold => "threshold, 95 % interval",
            Self::Ceiling => "ceiling, 95 % interval",
            Self::Verdict(verdict) => verdict.name(),
        }
    }
}

const SIZE: f64 = 10.0;
const SYMBOL: f64 = 24.0;
const GAP: f64 = 18.0;
/// Height of a row.
pub(super) const ROW: f64 = 18.0;

/// Rows that the marks need within `width`: for each mark its row and offset.
fn places(marks: &[Mark], width: f64) -> Vec<(usize, f64)> {
    let (mut row, mut offset) = (0, 0.0);
    marks
        .iter()
        .map(|mark| {
            let needed = SYMBOL + 6.0 + text_width(mark.text(), &font(SIZE));
            if offset > 0.0 && offset + needed > width {
                row += 1;
                offset = 0.0;
            }
            let place = (row, offset);
            offset += needed + GAP;
            place
        })
        .collect()
}

/// Height of the legend within `width`.
pub(super) fn legend_height(marks: &[Mark], width: f64) -> f64 {
    places(marks, width)
        .last()
        .map_or(0.0, |(row, _)| (*row as f64 + 1.0) * ROW)
}

/// Draws the legend with its top left corner at `at`.
pub(super) fn draw_legend(canvas: &mut Canvas, marks: &[Mark], at: (f64, f64), width: f64) {
    for (mark, (row, offset)) in marks.iter().zip(places(marks, width)) {
        let x = at.0 + offset;
        let y = at.1 + (row as f64 + 0.5) * ROW;
        let middle = x + 0.5 * SYMBOL;
        let end = x + SYMBOL;
        match mark {
            Mark::Used | Mark::Residual => {
                canvas.line((middle, y - 8.0), (middle, y - 3.2), solid(POINT, 0.8));
                canvas.line((middle, y + 3.2), (middle, y + 8.0), solid(POINT, 0.8));
                canvas.circle((middle, y), 3.2, solid(POINT, 1.1));
            }
            Mark::Unused => canvas.cross((middle, y), 2.6, solid(POINT, 0.9)),
            Mark::Downweighted => canvas.diamond((middle, y), 4.0, solid(POINT, 1.1)),
            Mark::OffScale => triangle(canvas, (middle, y + 3.0), (0.0, 1.0), 5.5),
            Mark::Beyond => canvas.line((x, y), (end, y), BEYOND),
            Mark::Curve => {
                canvas.area(
                    &[(x, y - 5.0), (end, y - 5.0), (end, y + 5.0), (x, y + 5.0)],
                    BAND,
                    0.75,
                );
                canvas.line((x, y), (end, y), solid(CURVE, 1.8));
            }
            Mark::Band => {
                canvas.area(
                    &[(x, y - 5.0), (end, y - 5.0), (end, y + 5.0), (x, y + 5.0)],
                    BAND,
                    0.75,
                );
            }
            Mark::Threshold => {
                canvas.line((x + 2.0, y), (end - 2.0, y), solid(INK, 1.2));
                for cap in [x + 2.0, end - 2.0] {
                    canvas.line((cap, y - 2.5), (cap, y + 2.5), solid(INK, 1.2));
                }
                canvas.line((middle, y - 5.0), (middle, y + 6.0), solid(INK, 1.6));
            }
            Mark::Ceiling => {
                canvas.line(
                    (x, y),
                    (end - 5.0, y),
                    Stroke {
                        dashes: Some("5 3"),
                        ..solid(PALE, 0.9)
                    },
                );
                canvas.line((end - 3.0, y - 7.0), (end - 3.0, y + 7.0), solid(INK, 1.2));
                for cap in [y - 7.0, y + 7.0] {
                    canvas.line((end - 6.0, cap), (end, cap), solid(INK, 1.2));
                }
            }
            Mark::Verdict(verdict) => {
                let stroke = Stroke {
                    dashes: verdict_dashes(Some(*verdict)),
                    ..solid(CURVE, 1.6)
                };
                canvas.line((x, y), (end, y), stroke);
            }
        }
        canvas.text((end + 6.0, y + 0.36 * SIZE), mark.text(), font(SIZE));
    }
}
