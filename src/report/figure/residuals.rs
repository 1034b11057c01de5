//! The lower panel: what the centres differ from the field law by, with error bars and the band of their scatter.
//! Owns the panel and the legend beside it; never the axis of the current.

use super::axis::{Axis, range};
use super::canvas::{Anchor, Canvas, Pen};
use super::marks::{CROWDED, Fate, beyond, error_bar, mark, radius, thinned};
use super::{Frame, KILOHERTZ, MILLIAMPERE, said_in, vertical_axis};
use crate::report::palette::{FAINT, FLAG, INK, POINT};
use crate::report::picture::PicturePoint;
use crate::report::wording::significant;

const LEGEND: Pen = Pen::new(15.0, Anchor::Start);

/// The lower panel, ready to be drawn.
pub struct Residuals {
    /// Half the range of the axis, in `unit`.
    half: f64,
    /// Standard deviation of the residuals that entered the fit, Hz; `None` with fewer than two.
    scatter: Option<f64>,
    unit: &'static str,
    scale: f64,
    any: bool,
}

impl Residuals {
    /// Looks at the data once. The range follows the points that were used: one that was left out may be
    /// far away, and is then marked at the edge.
    pub fn new(points: &[&PicturePoint]) -> Self {
        let of = |keep: &dyn Fn(&PicturePoint) -> bool| -> Vec<(f64, f64)> {
            let points = points.iter().filter(|point| keep(point));
            points
                .filter_map(|point| Some((point.residual()?, point.sigma().unwrap_or(0.0))))
                .collect()
        };
        let all = of(&|_| true);
        let used = of(&|point| point.used);
        let shown = if used.is_empty() { &all } else { &used };
        let squares: f64 = used.iter().map(|(residual, _)| residual * residual).sum();
        let scatter = (used.len() > 1).then(|| (squares / used.len() as f64).sqrt());
        let scatter = scatter.filter(|scatter| scatter.is_finite());
        let ends = shown.iter().map(|(residual, _)| residual.abs());
        let farthest = range(ends).map_or(0.0, |(_, high)| high);
        // One hopeless error bar must not flatten the others.
        let mut sigmas: Vec<f64> = shown.iter().map(|(_, sigma)| *sigma).collect();
        sigmas.sort_by(f64::total_cmp);
        let usual = sigmas.get(sigmas.len() / 2).copied().unwrap_or(0.0);
        let bars = shown.iter();
        let bars = bars.map(|(residual, sigma)| residual.abs() + sigma.min(4.0 * usual));
        let reach = range(bars).map_or(0.0, |(_, high)| high);
        let half = reach.max(farthest).max(scatter.unwrap_or(0.0)) * 1.15;
        let half = if half > 0.0 { half } else { 1.0 };
        let (unit, scale) = match half {
            half if half < 1.0 => ("mHz", 1e-3),
            half if half < 2e4 => ("Hz", 1.0),
            _ => ("kHz", KILOHERTZ),
        };
        Self {
            half: half / scale,
            scatter,
            unit,
            scale,
            any: !all.is_empty(),
        }
    }

    /// Texts of the vertical axis, for the room they need.
    pub fn labels(&self) -> Vec<String> {
        let axis = Axis::new(-self.half, self.half, 0.0, 1.0);
        axis.ticks(4).into_iter().map(|(_, text)| text).collect()
    }

    /// Draws the panel and the legend of both panels.
    pub fn draw(&self, canvas: &mut Canvas, points: &[&PicturePoint], current: Axis, frame: Frame) {
        let axis = Axis::new(-self.half, self.half, frame.bottom, frame.top);
        if let Some(scatter) = self.scatter {
            let (top, bottom) = (
                axis.at(scatter / self.scale),
                axis.at(-scatter / self.scale),
            );
            let size = (frame.right - frame.left, bottom - top);
            let style = format!(r#"fill="{POINT}" fill-opacity="0.14" class="scatter-band""#);
            canvas.rect((frame.left, top), size, &style);
        }
        let zero = axis.at(0.0);
        let style = format!(r#"stroke="{FAINT}" stroke-width="1.4" stroke-dasharray="7 5""#);
        canvas.line((frame.left, zero), (frame.right, zero), &style);
        if self.any {
            self.points(canvas, points, current, axis, frame);
        } else {
            let above = Frame {
                bottom: zero - 14.0,
                ..frame
            };
            said_in(canvas, above, "no residuals: the field law was not fitted");
        }
        vertical_axis(canvas, axis, frame, 4, &format!("residual ({})", self.unit));
        self.legend(canvas, points, frame);
    }

    fn points(
        &self,
        canvas: &mut Canvas,
        points: &[&PicturePoint],
        current: Axis,
        axis: Axis,
        frame: Frame,
    ) {
        let (points, _) = thinned(points);
        let size = radius(points.len());
        for point in &points {
            let Some(residual) = point.residual() else {
                continue;
            };
            let fate = Fate::of(point);
            let x = current.at(point.current / MILLIAMPERE);
            let value = residual / self.scale;
            if !axis.holds(value) {
                let up = value > 0.0;
                let edge = if up { frame.top } else { frame.bottom };
                beyond(canvas, (x, edge), up, fate);
                continue;
            }
            let y = axis.at(value);
            if let Some(sigma) = point.sigma() {
                let ends = [value + sigma / self.scale, value - sigma / self.scale];
                let [top, bottom] = ends.map(|end| axis.at(end.clamp(axis.low(), axis.high())));
                let colour = if point.flagged { FLAG } else { INK };
                let crowded = points.len() > CROWDED;
                // Of many points the bars would hide everything: thin, pale and without caps.
                let (width, ink) = if crowded { (0.6, 0.35) } else { (1.3, 1.0) };
                let style =
                    format!(r#"stroke="{colour}" stroke-width="{width}" stroke-opacity="{ink}""#);
                if !crowded && top - frame.top > 0.5 && frame.bottom - bottom > 0.5 {
                    error_bar(canvas, (x, y), (bottom - top) / 2.0, &style);
                } else {
                    canvas.line((x, top), (x, bottom), &style);
                }
            }
            mark(canvas, (x, y), size, fate, false);
        }
    }

    fn legend(&self, canvas: &mut Canvas, points: &[&PicturePoint], frame: Frame) {
        let left = frame.right + 22.0;
        let mut y = frame.top + 12.0;
        let mut row = |canvas: &mut Canvas, words: &str| {
            canvas.text((left + 30.0, y + 5.0), LEGEND, words);
            y += 26.0;
            (left + 10.0, y - 26.0)
        };
        for fate in [Fate::Used, Fate::UsedFlagged, Fate::LeftOut, Fate::Flagged] {
            let any = points
                .iter()
                .any(|point| point.centre.is_some() && Fate::of(point) == fate);
            if any {
                let place = row(canvas, fate.words());
                mark(canvas, place, 5.0, fate, false);
            }
        }
        if let Some(scatter) = self.scatter {
            let scatter = significant(scatter / self.scale, 2);
            let (x, y) = row(canvas, &format!("±1σ: {scatter} {}", self.unit));
            let style = format!(r#"fill="{POINT}" fill-opacity="0.14" stroke="{POINT}""#);
            canvas.rect((x - 10.0, y - 8.0), (20.0, 16.0), &style);
        }
        let (_, every) = thinned(points);
        if every > 1 {
            row(canvas, &format!("1 in {every} shown"));
        }
    }
}
