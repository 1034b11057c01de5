//! Draws a coil scan as one SVG: the map of the signal with centres and field law, the residuals, the answer.
//! Owns the layout and the order of painting; the panels are in `figure/`. Whatever the data, it draws something.

mod axis;
mod canvas;
mod caption;
mod map;
mod marks;
mod residuals;

use super::palette::{FAINT, INK};
use super::picture::{PicturePoint, ScanPicture};
use axis::{Axis, range};
use canvas::{Anchor, Canvas, Pen, fold, text_width};

/// Width of the drawing in pixels; every other measure follows from it. At 180 mm of print one pixel is 0.15 mm.
const WIDTH: f64 = 1200.0;
/// Right of the plots: colour bar above, legend below.
const GUTTER: f64 = 172.0;
const MAP_HEIGHT: f64 = 460.0;
const RESIDUAL_HEIGHT: f64 = 170.0;
const GAP: f64 = 22.0;

const TICK: Pen = Pen::new(17.0, Anchor::Middle);
const LABEL: Pen = Pen::new(18.0, Anchor::Middle);
const TITLE: Pen = Pen {
    bold: true,
    ..Pen::new(22.0, Anchor::Start)
};

const MILLIAMPERE: f64 = 1e-3;
const KILOHERTZ: f64 = 1e3;

/// A rectangle of the drawing, in pixels.
#[derive(Debug, Clone, Copy)]
struct Frame {
    left: f64,
    right: f64,
    top: f64,
    bottom: f64,
}

/// The figure of a coil scan as SVG text.
///
/// Points may come in any order, with any step between their currents, each with its own detuning range;
/// points without a finite current are left out. Nothing here fails: what is missing is said in the drawing.
pub fn figure(picture: &ScanPicture) -> String {
    let points = sorted(&picture.points);
    let mut canvas = Canvas::default();
    let title = if picture.title.trim().is_empty() {
        "Coil scan"
    } else {
        picture.title.trim()
    };
    let mut top = 20.0;
    for line in fold(title, TITLE, WIDTH - 48.0, 2) {
        top += 26.0;
        canvas.text((24.0, top - 6.0), TITLE, &line);
    }
    let map = map::Map::new(&points, &picture.field_line);
    let residuals = residuals::Residuals::new(&points);
    let left = 56.0
        + widest(&map.detuning_labels())
            .max(widest(&residuals.labels()))
            .max(50.0);
    let upper = Frame {
        left,
        right: WIDTH - GUTTER,
        top: top + 8.0,
        bottom: top + 8.0 + MAP_HEIGHT,
    };
    let lower = Frame {
        top: upper.bottom + GAP,
        bottom: upper.bottom + GAP + RESIDUAL_HEIGHT,
        ..upper
    };
    let current = current_axis(&points, upper);
    map.draw(&mut canvas, &points, current, upper);
    residuals.draw(&mut canvas, &points, current, lower);
    current_labels(&mut canvas, current, upper, lower);
    let bottom = caption::draw(&mut canvas, picture, lower.bottom + 92.0, WIDTH);
    canvas.finish(WIDTH, bottom + 16.0, title)
}

/// The points with a finite current, rising.
fn sorted(points: &[PicturePoint]) -> Vec<&PicturePoint> {
    let mut points: Vec<&PicturePoint> = points
        .iter()
        .filter(|point| point.current.is_finite())
        .collect();
    points.sort_by(|left, right| left.current.total_cmp(&right.current));
    points
}

/// Currents in mA, half a step wider than the points at each end so that the columns fit.
fn current_axis(points: &[&PicturePoint], frame: Frame) -> Axis {
    let currents: Vec<f64> = points
        .iter()
        .map(|point| point.current / MILLIAMPERE)
        .collect();
    let Some((low, high)) = range(currents.iter().copied()) else {
        return Axis::new(-1.0, 1.0, frame.left, frame.right);
    };
    if low == high {
        let half = (low.abs() * 0.05).max(0.5);
        return Axis::new(low - half, high + half, frame.left, frame.right);
    }
    let step = |mut pairs: Box<dyn Iterator<Item = f64> + '_>| {
        let step = pairs.find(|step| *step > 0.0).unwrap_or(0.0);
        (step / 2.0)
            .min((high - low) / 10.0)
            .max((high - low) / 200.0)
    };
    let steps = || currents.windows(2).map(|pair| pair[1] - pair[0]);
    let first = step(Box::new(steps()));
    let last = step(Box::new(steps().rev()));
    Axis::new(low - first, high + last, frame.left, frame.right)
}

/// Ticks on both panels, text and label below the lower one only: they share the axis.
fn current_labels(canvas: &mut Canvas, current: Axis, upper: Frame, lower: Frame) {
    for (place, text) in current.ticks(9) {
        let x = current.at(place);
        for frame in [upper, lower] {
            let style = format!(r#"stroke="{INK}" stroke-width="1.2""#);
            canvas.line((x, frame.bottom), (x, frame.bottom + 6.0), &style);
        }
        canvas.text((x, lower.bottom + 25.0), TICK, &text);
    }
    let middle = (lower.left + lower.right) / 2.0;
    canvas.text((middle, lower.bottom + 54.0), LABEL, "coil current (mA)");
}

/// Border, ticks, their text and the label of a vertical axis on the left.
fn vertical_axis(canvas: &mut Canvas, axis: Axis, frame: Frame, count: usize, label: &str) {
    for (place, text) in axis.ticks(count) {
        let y = axis.at(place);
        let style = format!(r#"stroke="{INK}" stroke-width="1.2""#);
        canvas.line((frame.left - 6.0, y), (frame.left, y), &style);
        let pen = Pen {
            anchor: Anchor::End,
            ..TICK
        };
        canvas.text((frame.left - 10.0, y + 6.0), pen, &text);
    }
    let size = (frame.right - frame.left, frame.bottom - frame.top);
    let style = format!(r#"fill="none" stroke="{INK}" stroke-width="1.2""#);
    canvas.rect((frame.left, frame.top), size, &style);
    let middle = (frame.top + frame.bottom) / 2.0;
    canvas.text_upwards((30.0, middle), LABEL, label);
}

/// A sentence in the middle of an empty panel.
fn said_in(canvas: &mut Canvas, frame: Frame, text: &str) {
    let middle = (
        (frame.left + frame.right) / 2.0,
        (frame.top + frame.bottom) / 2.0,
    );
    let pen = Pen {
        colour: FAINT,
        ..LABEL
    };
    canvas.text(middle, pen, text);
}

fn widest(labels: &[String]) -> f64 {
    let widths = labels.iter().map(|label| text_width(label, TICK));
    widths.fold(0.0, f64::max)
}

#[cfg(test)]
mod tests;
