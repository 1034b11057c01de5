//! A first field model that needs no lone line: all traces at once against the pattern of five peaks, on a grid over
//! coil constant, residual field, transverse field and width. A matched filter, so that a grid point costs a few
//! table look-ups per trace. Refines nothing: the stages do that.

use super::super::field::Model;
use super::super::shapes::{ORDERS, tilt_weights};
use super::super::start::Polarity;
use super::ScanOptions;
use super::look::Averaged;

/// Most points that take part, evenly spread over the currents.
const MOST_POINTS: usize = 25;
/// Steps of the filter's tables per width.
const TABLE: f64 = 6.0;
/// Steps of the grid per width, as a displacement of the line.
const GRID: f64 = 2.5;
/// Ratio of neighbouring trial widths.
const RATIO: f64 = 1.5;
/// Most grid points of one width; a grid that would be larger is made coarser.
const MOST_MODELS: f64 = 40_000.0;

/// The model and the width, Hz, with the highest gain in chi-square among widths from `narrowest` to `widest`.
pub(super) fn search(
    currents: &[f64],
    traces: &[Vec<Averaged>],
    (narrowest, widest): (f64, f64),
    options: &ScanOptions,
) -> Option<(Model, f64)> {
    if !(narrowest > 0.0 && widest >= narrowest) {
        return None;
    }
    let chosen = choose(currents);
    let mut best: Option<(f64, Model, f64)> = None;
    let mut width = narrowest;
    while width <= widest * RATIO.sqrt() {
        let filters: Vec<Filter> = chosen
            .iter()
            .filter_map(|&i| Filter::new(currents[i], traces.get(i)?, width, options))
            .collect();
        if let Some((gain, model)) = best_model(&filters, width, options)
            && best.as_ref().is_none_or(|(most, ..)| gain > *most)
        {
            best = Some((gain, model, width));
        }
        width *= RATIO;
    }
    best.map(|(_, model, width)| (model, width))
}

/// Indices of at most [`MOST_POINTS`] points, evenly spread in the order of current.
fn choose(currents: &[f64]) -> Vec<usize> {
    let mut order: Vec<usize> = (0..currents.len()).collect();
    order.sort_by(|a, b| currents[*a].total_cmp(&currents[*b]));
    let count = order.len().min(MOST_POINTS);
    (0..count)
        .map(|i| order[i * (order.len() - 1) / (count - 1).max(1)])
        .collect()
}

/// The correlation of one trace with a Lorentzian of the trial width, as a function of its centre.
struct Filter {
    current: f64,
    low: f64,
    step: f64,
    /// Integral of (signal - mean) times the line, V Hz.
    table: Vec<f64>,
    /// Width of the window, Hz.
    window: f64,
    /// Variance of a sample times the spacing of samples, V^2 Hz: turns integrals into chi-square.
    noise: f64,
    width: f64,
}

impl Filter {
    fn new(current: f64, traces: &[Averaged], width: f64, options: &ScanOptions) -> Option<Self> {
        let trace = traces.first()?;
        let ends = trace.detuning.iter().fold((f64::MAX, f64::MIN), |ends, x| {
            (ends.0.min(*x), ends.1.max(*x))
        });
        let window = ends.1 - ends.0;
        if !(window.is_finite() && window > 0.0) {
            return None;
        }
        let bins = binned(traces, ends, width / TABLE);
        let step = window / bins.len() as f64;
        let mean = bins.iter().map(|bin| bin.0).sum::<f64>() / bins.len() as f64;
        let sign = match options.line.polarity {
            Polarity::Dip => -1.0,
            Polarity::Peak | Polarity::Either => 1.0,
        };
        let place = |i: usize| ends.0 + (i as f64 + 0.5) * step;
        let table = (0..bins.len())
            .map(|centre| {
                let terms = bins.iter().enumerate().map(|(i, bin)| {
                    let u = 2.0 * (place(i) - place(centre)) / width;
                    sign * (bin.0 - mean) / (1.0 + u * u)
                });
                terms.sum::<f64>() * step
            })
            .collect();
        Some(Self {
            current,
            low: place(0),
            step,
            table,
            window,
            noise: noise(&bins) * step,
            width,
        })
    }

    fn at(&self, centre: f64) -> f64 {
        let place = ((centre - self.low) / self.step).round();
        if place < 0.0 {
            return 0.0;
        }
        self.table.get(place as usize).copied().unwrap_or(0.0)
    }

    /// Gain in chi-square over a flat line of the best height of the pattern; 0 where the best is negative.
    ///
    /// The overlap of two Lorentzians of width w at a distance d is (pi w / 4) / (1 + (d / w)^2).
    fn gain(&self, spacing: f64, weights: &[f64; 5], offset: f64, handedness: f64) -> f64 {
        let found: f64 = ORDERS
            .iter()
            .zip(weights)
            .map(|(q, weight)| weight * self.at(offset + handedness * q * spacing))
            .sum();
        if found <= 0.0 {
            return 0.0;
        }
        let mut square = 0.0;
        for (i, one) in weights.iter().enumerate() {
            for (j, other) in weights.iter().enumerate() {
                let distance = (ORDERS[i] - ORDERS[j]) * spacing / self.width;
                square += one * other / (1.0 + distance * distance);
            }
        }
        let pi = std::f64::consts::PI;
        let area = 0.5 * pi * self.width;
        let square = 0.25 * pi * self.width * square - area * area / self.window;
        if square <= 0.0 || self.noise <= 0.0 {
            return 0.0;
        }
        found * found / square / self.noise
    }
}

/// Mean signal in equal bins of at most `size`, over all traces of a point; empty bins take their neighbour's.
fn binned(traces: &[Averaged], ends: (f64, f64), size: f64) -> Vec<(f64, usize)> {
    let count = ((ends.1 - ends.0) / size).ceil().clamp(8.0, 4096.0) as usize;
    let mut bins = vec![(0.0, 0_usize); count];
    let scale = count as f64 / (ends.1 - ends.0);
    for trace in traces {
        for (x, y) in trace.detuning.iter().zip(&trace.signal) {
            let place = (((x - ends.0) * scale) as usize).min(count - 1);
            bins[place].0 += y;
            bins[place].1 += 1;
        }
    }
    let mut last = 0.0;
    for bin in &mut bins {
        if bin.1 > 0 {
            bin.0 /= bin.1 as f64;
            last = bin.0;
        } else {
            bin.0 = last;
        }
    }
    bins
}

/// Variance of a bin from the differences of neighbours.
fn noise(bins: &[(f64, usize)]) -> f64 {
    let squares = bins.windows(2).map(|pair| (pair[1].0 - pair[0].0).powi(2));
    squares.sum::<f64>() / (2.0 * (bins.len() - 1) as f64)
}

fn best_model(filters: &[Filter], width: f64, options: &ScanOptions) -> Option<(f64, Model)> {
    let field = &options.field;
    let reach = filters.iter().map(|f| f.current.abs()).fold(0.0, f64::max);
    let window = filters.iter().map(|f| f.window).fold(0.0, f64::max);
    if reach <= 0.0 || window <= 0.0 {
        return None;
    }
    // Steps that move the line by a part of its width.
    let by_field = width / GRID / field.zeeman.slope;
    let farthest = 0.5 * window / field.zeeman.slope;
    let constants = field.tolerance * field.nominal.abs() * reach / by_field;
    let models = (2.0 * constants + 1.0) * (2.0 * farthest / by_field) * (farthest / by_field);
    let coarser = (models / MOST_MODELS).cbrt().max(1.0);
    let step = by_field * coarser;
    let constants = (constants / coarser).ceil() as i64;
    let fields = (farthest / step).ceil() as i64;
    let mut best: Option<(f64, Model)> = None;
    for constant in -constants..=constants {
        let constant = field.nominal + constant as f64 * step / reach;
        for residual in -fields..=fields {
            for across in 0..=fields {
                let model = Model {
                    constant,
                    residual: residual as f64 * step,
                    squared: (across as f64 * step).powi(2),
                    offset: 0.0,
                };
                let gain = total(filters, &model, options);
                if best.as_ref().is_none_or(|(most, _)| gain > *most) {
                    best = Some((gain, model));
                }
            }
        }
    }
    best.filter(|(gain, _)| *gain > 0.0)
}

fn total(filters: &[Filter], model: &Model, options: &ScanOptions) -> f64 {
    let field = &options.field;
    filters
        .iter()
        .map(|filter| {
            let (magnitude, cosine) = model.physical(model.axial(filter.current));
            let (spacing, _) = field.zeeman.spacing(magnitude);
            let (weights, _) = tilt_weights(cosine);
            filter.gain(spacing, &weights, model.offset, field.handedness)
        })
        .sum()
}
