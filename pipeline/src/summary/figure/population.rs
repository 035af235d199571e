//! Distributions of the four parameters: a panel each, a row for all cells and for each group.

use super::canvas::{Anchor, BAND, CURVE, Canvas, Font, INK, PALE, fit_text, font, solid, text_width};
use super::panel::{Frame, PanelStyle, draw_drive_axis, triangle};
use super::scale::Scale;
use super::{FigureFile, POPULATION_FILE};
use crate::recording::DriveKind;
use crate::summary::numbers::{count_text, significant_text};
use crate::summary::population::{PARAMETERS, Population, Row, quantile, unit_of};

/// Most groups drawn; the table has more.
const GROUPS: usize = 8;
/// Most cells drawn one by one; more are drawn as a histogram.
const MOST_DOTS: usize = 150;
/// Bars of a histogram.
const BINS: usize = 36;

const EDGE: f64 = 14.0;
const NAMES: f64 = 118.0;
const WIDTH: f64 = 200.0;
const GAP: f64 = 22.0;
const ROW: f64 = 40.0;
/// Height of a row's dots or bars; the quartiles stand below them.
const SWARM: f64 = 26.0;
const RADIUS: f64 = 2.2;

const STYLE: PanelStyle = PanelStyle {
    label: 9.5,
    radius: RADIUS,
    line: 1.0,
    x_ticks: 5,
    y_ticks: 0,
    headroom: 0.0,
    strip: 0.0,
    large: false,
    drive_labels: true,
    verdict_dashes: false,
};

/// The figure of all kinds of drive that have usable cells, one below the other; `None` without any.
pub(in crate::summary) fn population_figure(population: &Population, response: &str) -> Option<FigureFile> {
    let blocks: Vec<(DriveKind, Vec<Row>, usize)> = [DriveKind::Current, DriveKind::Conductance]
        .into_iter()
        .map(|kind| {
            let (rows, left_out) = population.rows(kind, GROUPS);
            (kind, rows, left_out)
        })
        .filter(|(_, rows, _)| !rows.is_empty())
        .collect();
    if blocks.is_empty() {
        return None;
    }
    let width = 2.0 * EDGE + NAMES + 4.0 * WIDTH + 3.0 * GAP;
    let block_height = |rows: usize| 26.0 + ROW * rows as f64 + 44.0;
    let height = 38.0
        + blocks
            .iter()
            .map(|(_, rows, _)| block_height(rows.len()))
            .sum::<f64>()
        + 30.0;
    let mut canvas = Canvas::new(width, height, "Parameters of the usable cells");
    let title = Font {
        bold: true,
        ..font(13.0)
    };
    let text = format!("Parameters of the usable cells, response {response}");
    canvas.text((EDGE, 22.0), &text, title);
    let mut top = 38.0;
    let (mut dots, mut bars) = (false, false);
    for (kind, rows, left_out) in &blocks {
        let all = rows.first().map_or(0, |row| row.cells);
        let one_by_one = all <= MOST_DOTS;
        dots |= one_by_one;
        bars |= !one_by_one;
        let steps = match kind {
            DriveKind::Current => "current steps",
            DriveKind::Conductance => "conductance steps",
        };
        let mut head = format!("{steps} ({})", kind.unit());
        if *left_out > 0 {
            head.push_str(&format!(", the {GROUPS} largest of {} groups", GROUPS + left_out));
        }
        canvas.text((EDGE, top + 12.0), &head, font(11.0));
        let first_row = top + 26.0;
        draw_names(&mut canvas, rows, first_row);
        for parameter in 0..PARAMETERS.len() {
            let frame = Frame {
                left: EDGE + NAMES + (WIDTH + GAP) * parameter as f64,
                top: first_row,
                width: WIDTH,
                height: ROW * rows.len() as f64,
            };
            draw_parameter(&mut canvas, *kind, rows, parameter, frame, one_by_one);
        }
        top += block_height(rows.len());
    }
    let groups = blocks.iter().any(|(_, rows, _)| rows.len() > 1);
    draw_key(&mut canvas, top + 10.0, dots, bars, groups);
    Some(FigureFile {
        name: POPULATION_FILE.into(),
        svg: canvas.finish(),
    })
}

fn draw_names(canvas: &mut Canvas, rows: &[Row], top: f64) {
    for (i, row) in rows.iter().enumerate() {
        let y = top + ROW * i as f64;
        let name = Font {
            bold: row.group.is_none(),
            ..font(10.0)
        };
        let text = row.group.as_deref().unwrap_or("all");
        canvas.text((EDGE, y + 16.0), &fit_text(text, &name, NAMES - 14.0), name);
        let count = Font {
            colour: PALE,
            ..font(9.0)
        };
        let cells = if row.cells == 1 { "cell" } else { "cells" };
        canvas.text(
            (EDGE, y + 28.0),
            &format!("{} {cells}", count_text(row.cells as u64)),
            count,
        );
    }
}

/// Quartile ranges beyond the quartiles at which a value is far out (the outer fence of Tukey 1977).
const FAR_OUT: f64 = 3.0;

/// Range of the axis: that of the values that are not far out, with room at the ends for those that are.
fn range(ascending: &[f64]) -> Option<(f64, f64)> {
    let (lowest, highest) = (*ascending.first()?, *ascending.last()?);
    let (lower, upper) = (quantile(ascending, 0.25)?, quantile(ascending, 0.75)?);
    let fence = FAR_OUT * (upper - lower);
    let within = |value: &&f64| **value >= lower - fence && **value <= upper + fence;
    let mut low = ascending.iter().find(within).copied().unwrap_or(lowest);
    let mut high = ascending.iter().rev().find(within).copied().unwrap_or(highest);
    if !(high > low) {
        let half = (0.2 * low.abs()).max(1e-3);
        (low, high) = (low - half, high + half);
    }
    let span = high - low;
    let room = |far_out: bool| if far_out { 0.3 * span } else { 0.05 * span };
    let (start, end) = (low - room(lowest < low), high + room(highest > high));
    // No axis below zero where no value is.
    Some((if lowest >= 0.0 { start.max(0.0) } else { start }, end))
}

fn draw_parameter(
    canvas: &mut Canvas,
    kind: DriveKind,
    rows: &[Row],
    parameter: usize,
    frame: Frame,
    one_by_one: bool,
) {
    let none = Vec::new();
    let all = rows
        .first()
        .and_then(|row| row.values.get(parameter))
        .unwrap_or(&none);
    let axis = Font {
        anchor: Anchor::Middle,
        ..font(10.5)
    };
    let name = PARAMETERS.get(parameter).copied().unwrap_or_default();
    canvas.text(
        (frame.left + 0.5 * frame.width, frame.top + frame.height + 31.0),
        &format!("{name} ({})", unit_of(parameter, kind)),
        axis,
    );
    let Some((low, high)) = range(all) else {
        let pale = Font { colour: PALE, ..axis };
        canvas.text(
            (frame.left + 0.5 * frame.width, frame.top + 16.0),
            "not determined",
            pale,
        );
        return;
    };
    let x = Scale::new(low, high, frame.left, frame.left + frame.width);
    draw_drive_axis(canvas, &x, frame, &STYLE, (low, high));
    // The median of all cells, to compare the groups with.
    if rows.len() > 1
        && let Some(median) = quantile(all, 0.5)
    {
        let at = x.at(median);
        canvas.line((at, frame.top), (at, frame.top + frame.height), solid(BAND, 0.8));
    }
    for (i, row) in rows.iter().enumerate() {
        let Some(values) = row.values.get(parameter).filter(|values| !values.is_empty()) else {
            continue;
        };
        let top = frame.top + ROW * i as f64;
        if one_by_one {
            draw_dots(canvas, values, &x, top);
        } else {
            draw_bars(canvas, values, (low, high), &x, top);
        }
        draw_quartiles(canvas, values, &x, top + SWARM + 6.0);
    }
}

/// Dots side by side, set off from the middle where they would touch.
fn draw_dots(canvas: &mut Canvas, ascending: &[f64], x: &Scale, top: f64) {
    const SHIFTS: [f64; 5] = [0.0, 1.0, -1.0, 2.0, -2.0];
    let middle = top + 0.5 * SWARM;
    let step = 2.0 * RADIUS + 0.2;
    let mut last = [f64::NEG_INFINITY; 5];
    let mut places = Vec::with_capacity(ascending.len());
    let (mut left, mut right) = (Vec::new(), Vec::new());
    for &value in ascending {
        if !x.holds(value) {
            if x.at(value) < x.clamped(value) {
                left.push(value);
            } else {
                right.push(value);
            }
            continue;
        }
        let at = x.at(value);
        let free = last
            .iter()
            .position(|before| at - before >= step)
            // Where all are taken, the one whose last dot is farthest back.
            .or_else(|| {
                (0..last.len()).min_by(|a, b| {
                    let before = |lane: &usize| last.get(*lane).copied().unwrap_or(f64::INFINITY);
                    before(a).total_cmp(&before(b))
                })
            })
            .unwrap_or(0);
        if let (Some(before), Some(shift)) = (last.get_mut(free), SHIFTS.get(free)) {
            *before = at;
            places.push((at, middle + shift * step));
        }
    }
    canvas.circles(&places, RADIUS, solid(CURVE, 1.0));
    // Far out: an arrow head with the value, or with the number of values and the farthest.
    let label = |values: &[f64], farthest: Option<f64>| {
        let text = farthest.map_or_else(String::new, significant_text);
        if values.len() > 1 {
            format!("{} to {text}", values.len())
        } else {
            text
        }
    };
    let small = font(9.0);
    if let Some(value) = left.first() {
        let at = x.clamped(*value);
        triangle(canvas, (at, middle), (-1.0, 0.0), 7.0);
        canvas.text(
            (at + 9.0, middle + 3.2),
            &label(&left, left.first().copied()),
            small,
        );
    }
    if let Some(value) = right.last() {
        let at = x.clamped(*value);
        triangle(canvas, (at, middle), (1.0, 0.0), 7.0);
        let end = Font {
            anchor: Anchor::End,
            ..small
        };
        canvas.text(
            (at - 9.0, middle + 3.2),
            &label(&right, right.last().copied()),
            end,
        );
    }
}

/// A histogram as one outline; what lies beyond the axis is counted into its end bars.
fn draw_bars(canvas: &mut Canvas, ascending: &[f64], (low, high): (f64, f64), x: &Scale, top: f64) {
    let mut counts = [0usize; BINS];
    for value in ascending {
        let place = ((value - low) / (high - low) * BINS as f64).clamp(0.0, BINS as f64 - 1.0);
        if let Some(count) = counts.get_mut(place as usize) {
            *count += 1;
        }
    }
    let most = counts.iter().copied().max().unwrap_or(1).max(1) as f64;
    let base = top + SWARM + 1.0;
    let edge = |bin: usize| x.at(low + (high - low) * bin as f64 / BINS as f64);
    let mut outline = vec![(edge(0), base)];
    for (bin, count) in counts.iter().enumerate() {
        let y = base - (SWARM - 3.0) * *count as f64 / most;
        outline.push((edge(bin), y));
        outline.push((edge(bin + 1), y));
    }
    outline.push((edge(BINS), base));
    canvas.area(&outline, CURVE, 0.55);
}

/// A bar from the lower to the upper quartile with a tick at the median.
fn draw_quartiles(canvas: &mut Canvas, ascending: &[f64], x: &Scale, y: f64) {
    let (Some(lower), Some(median), Some(upper)) = (
        quantile(ascending, 0.25),
        quantile(ascending, 0.5),
        quantile(ascending, 0.75),
    ) else {
        return;
    };
    if ascending.len() > 2 {
        canvas.line((x.clamped(lower), y), (x.clamped(upper), y), solid(PALE, 2.4));
    }
    let at = x.clamped(median);
    canvas.line((at, y - 4.0), (at, y + 4.0), solid(INK, 2.2));
}

fn draw_key(canvas: &mut Canvas, y: f64, dots: bool, bars: bool, groups: bool) {
    let small = font(10.0);
    let mut x = EDGE;
    let mut say = |canvas: &mut Canvas, symbol: f64, text: &str| {
        canvas.text((x + symbol + 6.0, y + 3.6), text, small);
        let start = x;
        x += symbol + 6.0 + text_width(text, &small) + 20.0;
        start
    };
    if dots {
        let at = say(canvas, 8.0, "a usable cell");
        canvas.circles(&[(at + 4.0, y)], RADIUS, solid(CURVE, 1.0));
    }
    if bars {
        let at = say(
            canvas,
            16.0,
            "number of usable cells, each row by its own scale, those beyond the axis in its end bars",
        );
        canvas.area(
            &[
                (at, y + 5.0),
                (at, y - 1.0),
                (at + 8.0, y - 1.0),
                (at + 8.0, y - 6.0),
                (at + 16.0, y - 6.0),
                (at + 16.0, y + 5.0),
            ],
            CURVE,
            0.55,
        );
    }
    let at = say(canvas, 24.0, "quartiles and median");
    canvas.line((at, y), (at + 24.0, y), solid(PALE, 2.4));
    canvas.line((at + 11.0, y - 4.0), (at + 11.0, y + 4.0), solid(INK, 2.2));
    if groups {
        let at = say(canvas, 6.0, "median of all");
        canvas.line((at + 3.0, y - 7.0), (at + 3.0, y + 7.0), solid(BAND, 1.2));
    }
    if dots {
        let at = say(canvas, 8.0, "beyond the axis, with its value");
        triangle(canvas, (at + 7.0, y), (1.0, 0.0), 7.0);
    }
}
