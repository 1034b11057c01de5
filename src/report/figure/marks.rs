//! The marks of a point, the same in both panels and in the legend.
//! Owns their look; never their place.

use super::canvas::Canvas;
use crate::report::palette::{FLAG, INK, POINT};
use crate::report::picture::PicturePoint;

/// Most marks in a panel; of more points every n-th is marked.
const MOST: usize = 1000;

/// Above this many the marks of a panel touch.
pub const CROWDED: usize = 200;

/// What became of a point.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum Fate {
    /// Entered the field law.
    Used,
    /// Entered the field law although it carries a flag.
    UsedFlagged,
    /// Carries a flag and was left out.
    Flagged,
    /// Has a centre, but was left out.
    LeftOut,
}

impl Fate {
    /// What became of this point.
    pub fn of(point: &PicturePoint) -> Self {
        match (point.used, point.flagged) {
            (true, false) => Self::Used,
            (true, true) => Self::UsedFlagged,
            (false, true) => Self::Flagged,
            (false, false) => Self::LeftOut,
        }
    }

    /// Its words in the legend.
    pub fn words(self) -> &'static str {
        match self {
            Self::Used => "used",
            Self::UsedFlagged => "used, flagged",
            Self::Flagged => "flagged",
            Self::LeftOut => "left out",
        }
    }
}

/// Every n-th of more points than can be told apart.
pub fn thinned<'a>(points: &[&'a PicturePoint]) -> (Vec<&'a PicturePoint>, usize) {
    let every = points.len().div_ceil(MOST).max(1);
    (points.iter().copied().step_by(every).collect(), every)
}

/// Radius of a mark for this many points.
pub fn radius(points: usize) -> f64 {
    match points {
        0..=60 => 4.5,
        61..=150 => 3.5,
        _ => 2.2,
    }
}

/// A mark at a place. On the map it is light with a dark rim, to be seen on every colour.
pub fn mark(canvas: &mut Canvas, place: (f64, f64), radius: f64, fate: Fate, on_map: bool) {
    let fill = match (fate, on_map) {
        (Fate::Used, true) => "#ffffff",
        (Fate::Used, false) => POINT,
        (Fate::UsedFlagged, _) => FLAG,
        (Fate::LeftOut, true) => "#9a9a9a",
        (Fate::LeftOut, false) => "#ffffff",
        (Fate::Flagged, _) => return cross(canvas, place, radius, on_map),
    };
    let rim = if on_map || fate != Fate::LeftOut {
        INK
    } else {
        POINT
    };
    let style = format!(r#"fill="{fill}" stroke="{rim}" stroke-width="1.2""#);
    canvas.circle(place, radius, &style);
}

/// An error bar of half length `half` pixels.
pub fn error_bar(canvas: &mut Canvas, (x, y): (f64, f64), half: f64, style: &str) {
    let cap = 3.5;
    let strokes = [
        vec![(x, y - half), (x, y + half)],
        vec![(x - cap, y - half), (x + cap, y - half)],
        vec![(x - cap, y + half), (x + cap, y + half)],
    ];
    canvas.path(&strokes, style);
}

/// A mark at the edge of a panel for a value beyond it.
pub fn beyond(canvas: &mut Canvas, (x, edge): (f64, f64), up: bool, fate: Fate) {
    let colour = match fate {
        Fate::Used | Fate::LeftOut => POINT,
        Fate::UsedFlagged | Fate::Flagged => FLAG,
    };
    let (tip, foot) = if up { (3.0, 13.0) } else { (-3.0, -13.0) };
    canvas.raw(&format!(
        r#"<path d="M{} {}l6 {}h-12z" fill="{colour}" class="beyond"/>"#,
        super::canvas::short(x),
        super::canvas::short(edge + tip),
        foot - tip
    ));
}

fn cross(canvas: &mut Canvas, (x, y): (f64, f64), radius: f64, on_map: bool) {
    let strokes = [
        vec![(x - radius, y - radius), (x + radius, y + radius)],
        vec![(x - radius, y + radius), (x + radius, y - radius)],
    ];
    if on_map {
        canvas.path(&strokes, r##"stroke="#ffffff" stroke-width="5.5""##);
    }
    canvas.path(&strokes, &format!(r#"stroke="{FLAG}" stroke-width="2.8""#));
}
