//! The map: signal over coil current and two-photon detuning, with its colour bar, the centres and the field law.
//! Owns the upper panel; never the axis of the current, which it shares.

use std::collections::BTreeMap;
use std::fmt::Write;

use super::axis::{Axis, range};
use super::canvas::{Anchor, Canvas, Pen, short};
use super::marks::{CROWDED, Fate, error_bar, mark, radius, thinned};
use super::{Frame, KILOHERTZ, LABEL, MILLIAMPERE, TICK, said_in, vertical_axis};
use crate::report::palette::{INK, viridis};
use crate::report::picture::PicturePoint;

/// Cells over the height of the map: a cell of 1.3 pixels is finer than the eye wants.
const ROWS: usize = 360;
/// Most columns; points closer than that are averaged.
const COLUMNS: f64 = 400.0;
/// Steps of colour: coarse enough that neighbours of one colour are drawn as one cell.
const SHADES: f64 = 100.0;

/// The upper panel, ready to be drawn.
pub struct Map {
    detuning: (f64, f64),
    signal: Option<(f64, f64)>,
    /// Signal values lie beyond the colour bar: below, above.
    beyond: (bool, bool),
    field_line: Vec<(f64, f64)>,
}

impl Map {
    /// Looks at the data once for the ranges. Colours span the points without a flag, so that one lost
    /// lock does not bleach the map.
    pub fn new(points: &[&PicturePoint], field_line: &[(f64, f64)]) -> Self {
        let signals = |keep: &dyn Fn(&PicturePoint) -> bool| {
            let points = points.iter().filter(|point| keep(point));
            range(points.flat_map(|point| cleaned(point).into_iter().map(|(_, signal)| signal)))
        };
        let all = signals(&|_| true);
        let signal = signals(&|point| !point.flagged).or(all);
        let beyond = match (all, signal) {
            (Some(all), Some(shown)) => (all.0 < shown.0, all.1 > shown.1),
            _ => (false, false),
        };
        let swept = points.iter().flat_map(|point| cleaned(point));
        let swept = range(swept.map(|(detuning, _)| detuning));
        let centres = points.iter().filter_map(|point| point.centre);
        let centres = centres.map(|(centre, _)| centre);
        let law = field_line.iter().map(|(_, hertz)| *hertz);
        let detuning = swept
            .or_else(|| range(centres.chain(law)))
            .unwrap_or((-KILOHERTZ, KILOHERTZ));
        Self {
            detuning: (detuning.0 / KILOHERTZ, detuning.1 / KILOHERTZ),
            signal,
            beyond,
            field_line: field_line.to_vec(),
        }
    }

    /// Texts of the vertical axis, for the room they need.
    pub fn detuning_labels(&self) -> Vec<String> {
        let axis = Axis::new(self.detuning.0, self.detuning.1, 0.0, 1.0);
        axis.ticks(8).into_iter().map(|(_, text)| text).collect()
    }

    /// Draws the panel and its colour bar.
    pub fn draw(&self, canvas: &mut Canvas, points: &[&PicturePoint], current: Axis, frame: Frame) {
        let detuning = Axis::new(self.detuning.0, self.detuning.1, frame.bottom, frame.top);
        let size = (frame.right - frame.left, frame.bottom - frame.top);
        canvas.raw(r#"<clipPath id="map-panel">"#);
        canvas.rect((frame.left, frame.top), size, "");
        canvas.raw("</clipPath>");
        // A place that was not measured is grey, which no value of the map is.
        canvas.rect((frame.left, frame.top), size, r##"fill="#e9e9e9""##);
        canvas.raw(r#"<g clip-path="url(#map-panel)">"#);
        if let Some(signal) = self.signal {
            let shade = Axis::new(signal.0, signal.1, 0.0, 1.0);
            cells(canvas, points, current, detuning, shade);
        }
        self.law(canvas, current, detuning);
        centres(canvas, points, current, detuning);
        canvas.raw("</g>");
        match self.signal {
            Some(signal) => colour_bar(canvas, signal, self.beyond, frame),
            None => said_in(canvas, frame, "no signal was recorded"),
        }
        vertical_axis(canvas, detuning, frame, 8, "two-photon detuning (kHz)");
    }

    fn law(&self, canvas: &mut Canvas, current: Axis, detuning: Axis) {
        let pieces = self
            .field_line
            .split(|(amperes, hertz)| !(amperes.is_finite() && hertz.is_finite()));
        let place = |(amperes, hertz): &(f64, f64)| {
            let x = current.at(amperes / MILLIAMPERE);
            (x, detuning.at(hertz / KILOHERTZ))
        };
        let strokes: Vec<Vec<_>> = pieces
            .map(|piece| piece.iter().map(place).collect())
            .collect();
        // Light on dark: seen on every colour of the map.
        let round = r#"stroke-linejoin="round""#;
        let casing = format!(r#"stroke="{INK}" stroke-width="4" stroke-opacity="0.55" {round}"#);
        canvas.path(&strokes, &casing);
        let line = format!(r##"stroke="#ffffff" stroke-width="1.8" {round} class="field-law""##);
        canvas.path(&strokes, &line);
    }
}

fn cleaned(point: &PicturePoint) -> Vec<(f64, f64)> {
    let sweep = point.sweep.as_ref();
    sweep.map(|sweep| sweep.sorted()).unwrap_or_default()
}

/// One column per current; several points at one current are averaged.
fn cells(
    canvas: &mut Canvas,
    points: &[&PicturePoint],
    current: Axis,
    detuning: Axis,
    shade: Axis,
) {
    let width = current.at(current.high()) - current.at(current.low());
    let mut columns: BTreeMap<i64, Vec<&PicturePoint>> = BTreeMap::new();
    for point in points {
        let share = (current.at(point.current / MILLIAMPERE) - current.at(current.low())) / width;
        let column = (share * COLUMNS).round() as i64;
        columns.entry(column).or_default().push(point);
    }
    let middles: Vec<f64> = columns
        .values()
        .map(|points| {
            let sum: f64 = points.iter().map(|point| point.current).sum();
            current.at(sum / points.len() as f64 / MILLIAMPERE)
        })
        .collect();
    let edges = edges(&middles, current);
    // Path data by colour: one element per colour keeps the file small.
    let mut paths: BTreeMap<u32, String> = BTreeMap::new();
    for (points, (left, right)) in columns.values().zip(edges) {
        column(&mut paths, points, (left, right), detuning, shade);
    }
    canvas.raw(r#"<g shape-rendering="crispEdges">"#);
    for (colour, data) in paths {
        let colour = viridis(f64::from(colour) / SHADES);
        canvas.raw(&format!(r#"<path fill="{colour}" d="{data}"/>"#));
    }
    canvas.raw("</g>");
}

/// Left and right edge of each column: halfway to its neighbours, but no wider than three times the
/// usual, so that a stretch that was not measured stays empty.
fn edges(middles: &[f64], current: Axis) -> Vec<(f64, f64)> {
    let mut gaps: Vec<f64> = middles.windows(2).map(|pair| pair[1] - pair[0]).collect();
    gaps.sort_by(f64::total_cmp);
    let whole = current.at(current.high()) - current.at(current.low());
    let usual = gaps.get(gaps.len() / 2).copied().unwrap_or(whole / 8.0);
    let half = |gap: Option<f64>| gap.unwrap_or(f64::INFINITY).min(3.0 * usual) / 2.0;
    let gap = |index: usize| Some(middles.get(index + 1)? - middles.get(index)?);
    let columns = middles.iter().enumerate().map(|(index, middle)| {
        let before = index.checked_sub(1).and_then(gap);
        let behind = gap(index);
        // The outermost columns are as wide outward as inward.
        let left = half(before.or(behind).or(Some(usual)));
        let right = half(behind.or(before).or(Some(usual)));
        (middle - left, middle + right)
    });
    columns.collect()
}

/// Appends the cells of one column, neighbours of one colour joined.
fn column(
    paths: &mut BTreeMap<u32, String>,
    points: &[&PicturePoint],
    (left, right): (f64, f64),
    detuning: Axis,
    shade: Axis,
) {
    let mut sums = vec![(0.0, 0u32); ROWS];
    for point in points {
        add_rows(&mut sums, &cleaned(point), detuning);
    }
    let colours: Vec<Option<u32>> = sums
        .iter()
        .map(|(sum, count)| {
            let fraction = shade.at(sum / f64::from((*count).max(1))).clamp(0.0, 1.0);
            (*count > 0).then_some((fraction * SHADES).round() as u32)
        })
        .collect();
    let edge = |row: usize| detuning.at(detuning.low() + row_height(detuning) * row as f64);
    let mut row = 0;
    for run in colours.chunk_by(|one, other| one == other) {
        if let Some(Some(colour)) = run.first() {
            let (below, above) = (edge(row), edge(row + run.len()));
            let data = paths.entry(*colour).or_default();
            let width = short(right - left);
            let (x, y, height) = (short(left), short(above), short(below - above));
            let _ = write!(data, "M{x} {y}h{width}v{height}h-{width}z");
        }
        row += run.len();
    }
}

/// Adds one sweep to the rows that its own range covers: the mean of the samples in a row, or between two
/// samples the straight line.
fn add_rows(sums: &mut [(f64, u32)], samples: &[(f64, f64)], detuning: Axis) {
    let height = row_height(detuning);
    let (Some(first), Some(last)) = (samples.first(), samples.last()) else {
        return;
    };
    // Half a sample step beyond each end, as the columns do; a lone sample fills a row.
    let step = (last.0 - first.0) / (samples.len() - 1).max(1) as f64;
    let reach = (step / 2.0).max(height * KILOHERTZ / 2.0);
    let mut next = 0;
    for (row, (sum, count)) in sums.iter_mut().enumerate() {
        let low = (detuning.low() + height * row as f64) * KILOHERTZ;
        let high = low + height * KILOHERTZ;
        let middle = (low + high) / 2.0;
        while samples.get(next).is_some_and(|sample| sample.0 < low) {
            next += 1;
        }
        let inside = samples[next..].iter().take_while(|sample| sample.0 < high);
        let (total, many) = inside.fold((0.0, 0u32), |(total, many), sample| {
            (total + sample.1, many + 1)
        });
        let value = if many > 0 {
            total / f64::from(many)
        } else if middle < first.0 - reach || middle > last.0 + reach {
            continue;
        } else {
            between(samples, next, middle)
        };
        *sum += value;
        *count += 1;
    }
}

fn between(samples: &[(f64, f64)], next: usize, at: f64) -> f64 {
    let behind = samples[next.min(samples.len() - 1)];
    let before = samples[next.saturating_sub(1).min(samples.len() - 1)];
    let span = behind.0 - before.0;
    if span <= 0.0 {
        return behind.1;
    }
    let share = ((at - before.0) / span).clamp(0.0, 1.0);
    before.1 + share * (behind.1 - before.1)
}

/// Height of a row, kHz.
fn row_height(detuning: Axis) -> f64 {
    (detuning.high() - detuning.low()) / ROWS as f64
}

fn centres(canvas: &mut Canvas, points: &[&PicturePoint], current: Axis, detuning: Axis) {
    let (points, _) = thinned(points);
    let size = radius(points.len());
    for point in &points {
        let Some((centre, _)) = point.centre.filter(|(centre, _)| centre.is_finite()) else {
            continue;
        };
        let place = (
            current.at(point.current / MILLIAMPERE),
            detuning.at(centre / KILOHERTZ),
        );
        if let Some(sigma) = point.sigma() {
            let half = place.1 - detuning.at((centre + sigma) / KILOHERTZ);
            // Shorter than the mark it would only thicken the rim.
            if half > size {
                error_bar(
                    canvas,
                    place,
                    half,
                    r##"stroke="#ffffff" stroke-width="3.6""##,
                );
                error_bar(
                    canvas,
                    place,
                    half,
                    &format!(r#"stroke="{INK}" stroke-width="1.6""#),
                );
            }
        }
        let fate = Fate::of(point);
        // Rims that touch would be a black band over the line that they mark.
        if points.len() > CROWDED && fate == Fate::Used {
            canvas.circle(place, 1.2, r##"fill="#ffffff""##);
        } else {
            mark(canvas, place, size, fate, true);
        }
    }
}

/// The colour bar with unit and label; a pointed end says that values lie beyond.
fn colour_bar(canvas: &mut Canvas, signal: (f64, f64), beyond: (bool, bool), frame: Frame) {
    let (unit, scale) = match signal.0.abs().max(signal.1.abs()) {
        size if size < 1e-4 => ("µV", 1e-6),
        size if size < 0.1 => ("mV", 1e-3),
        _ => ("V", 1.0),
    };
    let (left, width) = (frame.right + 20.0, 20.0);
    let (top, bottom) = (frame.top + 16.0, frame.bottom - 16.0);
    let axis = Axis::new(signal.0 / scale, signal.1 / scale, bottom, top);
    let steps = 128;
    let height = (bottom - top) / f64::from(steps);
    canvas.raw(r#"<g shape-rendering="crispEdges">"#);
    for step in 0..steps {
        let colour = viridis((f64::from(step) + 0.5) / f64::from(steps));
        let y = bottom - height * f64::from(step + 1);
        canvas.rect(
            (left, y),
            (width, height + 0.5),
            &format!(r#"fill="{colour}""#),
        );
    }
    canvas.raw("</g>");
    let tip = |low: bool| if low { (bottom, 14.0) } else { (top, -14.0) };
    for (here, low) in [(beyond.0, true), (beyond.1, false)] {
        if here {
            let ((y, way), colour) = (tip(low), viridis(if low { 0.0 } else { 1.0 }));
            canvas.raw(&format!(
                r#"<path d="M{} {}h{width}l-10 {way}z" fill="{colour}" stroke="{INK}"/>"#,
                short(left),
                short(y)
            ));
        }
    }
    let ink = format!(r#"stroke="{INK}" stroke-width="1.2""#);
    canvas.rect(
        (left, top),
        (width, bottom - top),
        &format!("fill=\"none\" {ink}"),
    );
    for (place, text) in axis.ticks(6) {
        let y = axis.at(place);
        canvas.line((left + width, y), (left + width + 5.0, y), &ink);
        let pen = Pen {
            anchor: Anchor::Start,
            ..TICK
        };
        canvas.text((left + width + 9.0, y + 6.0), pen, &text);
    }
    let middle = (frame.top + frame.bottom) / 2.0;
    let label = format!("mean signal ({unit})");
    canvas.text_upwards((super::WIDTH - 18.0, middle), LABEL, &label);
}
