//! Lines, areas, circles and text in pixels, with as many decimals as a screen can show.
//!
//! The `svg` crate escapes `& < >` in text and also quotes in attributes, and sorts attributes, so the bytes are
//! always the same. What it does not do is done here: characters that XML 1.0 forbids are written out, and every
//! number has at most two decimals.

use svg::node::Node;
use svg::node::element::{Circle, Element, Line, Path, Rectangle, Text, Title};

use crate::summary::text::visible;

/// Measured points (Okabe-Ito blue).
pub(super) const POINT: &str = "#0072B2";
/// The fitted curve (Okabe-Ito vermilion).
pub(super) const CURVE: &str = "#D55E00";
/// The band of the curve.
pub(super) const BAND: &str = "#C8C8C8";
/// Axes, text, threshold and ceiling.
pub(super) const INK: &str = "#222222";
/// Secondary text.
pub(super) const PALE: &str = "#555555";

const FONT: &str = "DejaVu Sans, Arial, sans-serif";

/// A number with at most two decimals; what is not finite becomes 0, which no caller lets happen.
fn number(value: f64) -> String {
    if !value.is_finite() {
        return "0".into();
    }
    let text = format!("{value:.2}");
    let text = text.trim_end_matches('0').trim_end_matches('.');
    if text == "-0" { "0".into() } else { text.into() }
}

/// Colour, width and dashes of a line.
#[derive(Clone, Copy)]
pub(super) struct Stroke {
    pub colour: &'static str,
    pub width: f64,
    pub dashes: Option<&'static str>,
}

/// A solid line.
pub(super) const fn solid(colour: &'static str, width: f64) -> Stroke {
    Stroke {
        colour,
        width,
        dashes: None,
    }
}

/// Where a text stands relative to its point.
#[derive(Clone, Copy)]
pub(super) enum Anchor {
    Start,
    Middle,
    End,
}

/// Size, weight, colour and anchor of a text.
#[derive(Clone, Copy)]
pub(super) struct Font {
    pub size: f64,
    pub bold: bool,
    pub colour: &'static str,
    pub anchor: Anchor,
}

/// A regular font, anchored at its start.
pub(super) const fn font(size: f64) -> Font {
    Font {
        size,
        bold: false,
        colour: INK,
        anchor: Anchor::Start,
    }
}

/// Width of a text in pixels, on the safe side for the fonts asked for (DejaVu Sans is the widest of them).
pub(super) fn text_width(text: &str, font: &Font) -> f64 {
    let ems: f64 = text
        .chars()
        .map(|c| match c {
            'i' | 'j' | 'l' | '.' | ',' | ':' | ';' | '\'' | '|' | 'I' | ' ' => 0.34,
            'f' | 't' | 'r' | '(' | ')' | '[' | ']' | '/' | '\\' | '-' | '"' | '!' => 0.43,
            'm' | 'w' | 'M' | 'W' | '@' | '%' | '\u{2026}' => 1.0,
            'A'..='Z' | '+' | '=' | '<' | '>' | '#' | '~' | '\u{2212}' | '\u{b1}' | '&' => 0.8,
            c if c.is_ascii() => 0.645,
            c if u32::from(c) < 0x1100 => 0.8,
            _ => 1.1,
        })
        .sum();
    ems * font.size * if font.bold { 1.12 } else { 1.0 }
}

/// The text, cut with an ellipsis where it would be wider than `width`.
pub(super) fn fit_text(text: &str, font: &Font, width: f64) -> String {
    if text_width(text, font) <= width {
        return text.to_string();
    }
    let mut cut = String::new();
    for c in text.chars() {
        cut.push(c);
        if text_width(&cut, font) + text_width("…", font) > width {
            cut.pop();
            break;
        }
    }
    cut.push('…');
    cut
}

/// The text, cut in its middle where it would be wider than `width`: names often differ at their ends alone.
pub(super) fn fit_name(text: &str, font: &Font, width: f64) -> String {
    if text_width(text, font) <= width {
        return text.to_string();
    }
    let characters: Vec<char> = text.chars().collect();
    let cut = |kept: usize| -> String {
        let (head, tail) = (kept - kept / 2, kept / 2);
        let mut name: String = characters.iter().take(head).collect();
        name.push('…');
        name.extend(characters.iter().skip(characters.len().saturating_sub(tail)));
        name
    };
    (0..characters.len())
        .rev()
        .map(cut)
        .find(|name| text_width(name, font) <= width)
        .unwrap_or_else(|| "…".into())
}

/// The text broken at blanks into at most `lines` lines of `width`; the last is cut with an ellipsis.
pub(super) fn wrap_text(text: &str, font: &Font, width: f64, lines: usize) -> Vec<String> {
    let mut wrapped: Vec<String> = Vec::new();
    let mut rest: Vec<&str> = text.split(' ').filter(|word| !word.is_empty()).collect();
    while !rest.is_empty() && wrapped.len() < lines {
        if wrapped.len() + 1 == lines {
            wrapped.push(fit_text(&rest.join(" "), font, width));
            break;
        }
        let fitting = (1..=rest.len())
            .take_while(|&n| {
                rest.get(..n)
                    .is_some_and(|words| text_width(&words.join(" "), font) <= width)
            })
            .count()
            .max(1);
        let line: Vec<&str> = rest.drain(..fitting).collect();
        wrapped.push(fit_text(&line.join(" "), font, width));
    }
    wrapped
}

/// An SVG document under construction; the origin is the top left corner, y runs down.
pub(super) struct Canvas {
    document: svg::Document,
}

impl Canvas {
    /// A white sheet; `title` is read by screen readers and shown by browsers.
    pub(super) fn new(width: f64, height: f64, title: &str) -> Self {
        let document = svg::Document::new()
            .set("viewBox", format!("0 0 {} {}", number(width), number(height)))
            .set("width", number(width))
            .set("height", number(height))
            .set("role", "img")
            .set("font-family", FONT);
        let mut canvas = Self { document };
        canvas.append(Title::new(visible(title, 200)));
        canvas.append(
            Rectangle::new()
                .set("width", number(width))
                .set("height", number(height))
                .set("fill", "#FFFFFF"),
        );
        canvas
    }

    fn append<T: Into<Element>>(&mut self, element: T) {
        let element: Element = element.into();
        self.document.append(element);
    }

    pub(super) fn line(&mut self, from: (f64, f64), to: (f64, f64), stroke: Stroke) {
        let mut line = Line::new()
            .set("x1", number(from.0))
            .set("y1", number(from.1))
            .set("x2", number(to.0))
            .set("y2", number(to.1))
            .set("stroke", stroke.colour)
            .set("stroke-width", number(stroke.width));
        if let Some(dashes) = stroke.dashes {
            line = line.set("stroke-dasharray", dashes);
        }
        self.append(line);
    }

    /// A line through `points`.
    pub(super) fn path(&mut self, points: &[(f64, f64)], stroke: Stroke) {
        if points.len() < 2 {
            return;
        }
        let mut path = Path::new()
            .set("d", path_data(points))
            .set("fill", "none")
            .set("stroke", stroke.colour)
            .set("stroke-width", number(stroke.width))
            .set("stroke-linejoin", "round");
        if let Some(dashes) = stroke.dashes {
            path = path.set("stroke-dasharray", dashes);
        }
        self.append(path);
    }

    /// The filled area within `points`.
    pub(super) fn area(&mut self, points: &[(f64, f64)], colour: &'static str, opacity: f64) {
        if points.len() < 3 {
            return;
        }
        let area = Path::new()
            .set("d", path_data(points) + "Z")
            .set("fill", colour)
            .set("fill-opacity", number(opacity));
        self.append(area);
    }

    /// An open circle.
    pub(super) fn circle(&mut self, centre: (f64, f64), radius: f64, stroke: Stroke) {
        self.append(
            Circle::new()
                .set("cx", number(centre.0))
                .set("cy", number(centre.1))
                .set("r", number(radius))
                .set("fill", "none")
                .set("stroke", stroke.colour)
                .set("stroke-width", number(stroke.width)),
        );
    }

    /// Open circles in one element, so that hundreds of them stay light.
    pub(super) fn circles(&mut self, centres: &[(f64, f64)], radius: f64, stroke: Stroke) {
        if centres.is_empty() {
            return;
        }
        let (r, across) = (number(radius), number(2.0 * radius));
        let mut data = String::with_capacity(centres.len() * 48);
        for (x, y) in centres {
            data.push_str(&format!(
                "M{} {}a{r} {r} 0 1 0 {across} 0a{r} {r} 0 1 0 -{across} 0",
                number(x - radius),
                number(*y)
            ));
        }
        self.append(
            Path::new()
                .set("d", data)
                .set("fill", "none")
                .set("stroke", stroke.colour)
                .set("stroke-width", number(stroke.width)),
        );
    }

    /// A filled circle.
    pub(super) fn disc(&mut self, centre: (f64, f64), radius: f64, colour: &'static str) {
        self.append(
            Circle::new()
                .set("cx", number(centre.0))
                .set("cy", number(centre.1))
                .set("r", number(radius))
                .set("fill", colour),
        );
    }

    /// An open diamond.
    pub(super) fn diamond(&mut self, (x, y): (f64, f64), radius: f64, stroke: Stroke) {
        let corners = [
            (x, y - radius),
            (x + radius, y),
            (x, y + radius),
            (x - radius, y),
            (x, y - radius),
            (x + radius, y),
        ];
        self.path(&corners, stroke);
    }

    /// A diagonal cross.
    pub(super) fn cross(&mut self, centre: (f64, f64), radius: f64, stroke: Stroke) {
        self.crosses(&[centre], radius, stroke);
    }

    /// Diagonal crosses in one element.
    pub(super) fn crosses(&mut self, centres: &[(f64, f64)], radius: f64, stroke: Stroke) {
        if centres.is_empty() {
            return;
        }
        let mut data = String::with_capacity(centres.len() * 48);
        for (x, y) in centres {
            data.push_str(&format!(
                "M{} {}L{} {}M{} {}L{} {}",
                number(x - radius),
                number(y - radius),
                number(x + radius),
                number(y + radius),
                number(x - radius),
                number(y + radius),
                number(x + radius),
                number(y - radius)
            ));
        }
        self.append(
            Path::new()
                .set("d", data)
                .set("fill", "none")
                .set("stroke", stroke.colour)
                .set("stroke-width", number(stroke.width)),
        );
    }

    /// A text on the baseline at `at`.
    pub(super) fn text(&mut self, at: (f64, f64), text: &str, font: Font) {
        self.rotated_text(at, text, font, 0.0);
    }

    /// A text turned clockwise by `degrees` about `at`.
    pub(super) fn rotated_text(&mut self, at: (f64, f64), text: &str, font: Font, degrees: f64) {
        let mut element = Text::new(visible(text, 400))
            .set("x", number(at.0))
            .set("y", number(at.1))
            .set("font-size", number(font.size))
            .set("fill", font.colour);
        if font.bold {
            element = element.set("font-weight", "bold");
        }
        match font.anchor {
            Anchor::Start => {}
            Anchor::Middle => element = element.set("text-anchor", "middle"),
            Anchor::End => element = element.set("text-anchor", "end"),
        }
        if degrees != 0.0 {
            element = element.set(
                "transform",
                format!("rotate({} {} {})", number(degrees), number(at.0), number(at.1)),
            );
        }
        self.append(element);
    }

    /// The document, ending with a line feed.
    pub(super) fn finish(self) -> String {
        format!("{}\n", self.document)
    }
}

fn path_data(points: &[(f64, f64)]) -> String {
    let mut data = String::with_capacity(points.len() * 14);
    for (i, (x, y)) in points.iter().enumerate() {
        data.push(if i == 0 { 'M' } else { 'L' });
        data.push_str(&number(*x));
        data.push(' ');
        data.push_str(&number(*y));
    }
    data
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn numbers_have_two_decimals_at_most() {
        assert_eq!(number(1.0), "1");
        assert_eq!(number(1.005_1), "1.01");
        assert_eq!(number(-0.001), "0");
        assert_eq!(number(-12.5), "-12.5");
        assert_eq!(number(100.0), "100");
        assert_eq!(number(f64::NAN), "0");
    }

    #[test]
    fn names_are_cut_in_their_middle() {
        let small = font(10.0);
        let names = ["rig A, slice 12, neuron 7", "rig A, slice 12, neuron 8"];
        let cut = names.map(|name| fit_name(name, &small, 70.0));
        assert_ne!(cut[0], cut[1]);
        for name in &cut {
            assert!(text_width(name, &small) <= 70.0 && name.starts_with("rig") && name.contains('…'));
        }
        assert_eq!(fit_name("A-01", &small, 70.0), "A-01");
        assert_eq!(fit_name("A-01", &small, 1.0), "…");
    }

    #[test]
    fn text_is_cut_and_wrapped_to_its_width() {
        let small = font(10.0);
        let cut = fit_text(&"x".repeat(300), &small, 100.0);
        assert!(text_width(&cut, &small) <= 100.0 && cut.ends_with('…') && cut.chars().count() > 10);
        let lines = wrap_text(
            "one two three four five six seven eight nine ten",
            &small,
            80.0,
            3,
        );
        assert_eq!(lines.len(), 3);
        assert!(lines.iter().all(|line| text_width(line, &small) <= 80.0));
        assert!(lines.last().is_some_and(|line| line.ends_with('…')));
        assert_eq!(wrap_text("short", &small, 80.0, 3), ["short"]);
    }
}
