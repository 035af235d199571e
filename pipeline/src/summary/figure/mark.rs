//! The verdict of a response as a shape and a colour, to be taken in without reading.

use super::canvas::{Canvas, INK, Stroke, solid};
use super::panel::{Frame, Panel};
use crate::assess::{Ceiling, Status};

/// What is seen at a glance. The order is that of distrust, least first.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub(super) enum Glance {
    /// Fitted, ceiling resolved, or fitted without a verdict.
    Resolved,
    /// Fitted, ceiling closed but wide.
    Loose,
    /// Fitted, no ceiling in sight.
    Open,
    /// Fitted below the fall of the rate.
    Declining,
    /// Fitted, and a flag says not to use it.
    Rejected,
    /// No fit.
    NoFit,
}

impl Glance {
    /// All of them, in the order of the key.
    pub(super) const ALL: [Self; 6] = [
        Self::Resolved,
        Self::Loose,
        Self::Open,
        Self::Declining,
        Self::Rejected,
        Self::NoFit,
    ];

    /// That of a panel.
    pub(super) fn of(panel: &Panel) -> Self {
        if panel.status != Status::Fitted {
            return Self::NoFit;
        }
        if panel.rejected_by.is_some() {
            return Self::Rejected;
        }
        match panel.ceiling {
            Some(Ceiling::Resolved) | None => Self::Resolved,
            Some(Ceiling::Loose) => Self::Loose,
            Some(Ceiling::Open) => Self::Open,
            Some(Ceiling::Declining) => Self::Declining,
            Some(Ceiling::Silent) => Self::NoFit,
        }
    }

    /// What the key says.
    pub(super) fn text(self) -> &'static str {
        match self {
            Self::Resolved => "resolved",
            Self::Loose => "loose",
            Self::Open => "open",
            Self::Declining => "declining",
            Self::Rejected => "rejected by a flag",
            Self::NoFit => "no fit",
        }
    }

    /// Colour of symbol and frame (Okabe-Ito, but for the blue of points and the vermilion of fits).
    fn colour(self) -> &'static str {
        match self {
            Self::Resolved => "#009E73",
            Self::Loose => "#56B4E9",
            Self::Open => "#E69F00",
            Self::Declining => "#CC79A7",
            Self::Rejected | Self::NoFit => INK,
        }
    }

    /// Colour and opacity of the ground: the less to be trusted, the darker, so that a grey print tells as much.
    fn ground(self) -> Option<(&'static str, f64)> {
        match self {
            Self::Resolved => None,
            Self::Loose => Some(("#56B4E9", 0.14)),
            Self::Open => Some(("#E69F00", 0.22)),
            Self::Declining => Some(("#CC79A7", 0.34)),
            Self::Rejected => Some(("#000000", 0.10)),
            Self::NoFit => Some(("#000000", 0.20)),
        }
    }

    fn frame_stroke(self) -> Stroke {
        let (width, dashes) = match self {
            Self::Resolved => (0.8, None),
            Self::Loose => (1.4, Some("9 3")),
            Self::Open => (1.6, None),
            Self::Declining => (1.6, Some("2 2")),
            Self::Rejected => (2.4, None),
            Self::NoFit => (0.8, None),
        };
        Stroke {
            colour: self.colour(),
            width,
            dashes,
        }
    }
}

/// The ground of a tile and the line about it. That of an open ceiling has no upper side.
pub(super) fn draw_tile(canvas: &mut Canvas, glance: Glance, tile: Frame) {
    let (left, top) = (tile.left, tile.top);
    let (right, bottom) = (tile.left + tile.width, tile.top + tile.height);
    let corners = [(left, top), (left, bottom), (right, bottom), (right, top)];
    if let Some((colour, opacity)) = glance.ground() {
        canvas.area(&corners, colour, opacity);
    }
    let mut line = corners.to_vec();
    if glance != Glance::Open {
        line.push((left, top));
        line.push((left, bottom));
    }
    canvas.path(&line, glance.frame_stroke());
}

/// The symbol of a verdict: disc, half disc, triangle up, triangle down, square with a cross, bar. Light colours have a
/// dark outline.
pub(super) fn draw_symbol(canvas: &mut Canvas, glance: Glance, (x, y): (f64, f64), r: f64) {
    let colour = glance.colour();
    let outline = solid(INK, 0.7);
    let mut triangle = |tip: f64, base: f64| {
        let corners = [(x, y + tip), (x + r, y + base), (x - r, y + base)];
        canvas.area(&corners, colour, 1.0);
        let [first, second, third] = corners;
        canvas.path(&[first, second, third, first, second], outline);
    };
    match glance {
        Glance::Resolved => {
            canvas.disc((x, y), 0.85 * r, colour);
            canvas.circle((x, y), 0.85 * r, outline);
        }
        Glance::Loose => {
            // The lower half, as a polygon fine enough for its size.
            let half: Vec<(f64, f64)> = (0..=12)
                .map(|i| f64::from(i) * std::f64::consts::PI / 12.0)
                .map(|angle| (x + 0.85 * r * angle.cos(), y + 0.85 * r * angle.sin()))
                .collect();
            canvas.area(&half, colour, 1.0);
            canvas.circle((x, y), 0.85 * r, outline);
        }
        Glance::Open => triangle(-r, 0.8 * r),
        Glance::Declining => triangle(r, -0.8 * r),
        Glance::Rejected => {
            let s = 0.95 * r;
            canvas.area(
                &[(x - s, y - s), (x + s, y - s), (x + s, y + s), (x - s, y + s)],
                colour,
                1.0,
            );
            canvas.cross((x, y), 0.55 * r, solid("#FFFFFF", 1.5));
        }
        Glance::NoFit => canvas.line((x - r, y), (x + r, y), solid(colour, 2.6)),
    }
}
