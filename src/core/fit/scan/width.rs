//! Linewidth and contrast of a scan, at a named point, and how the width changes along the scan.

use super::super::Estimate;
use super::super::field::{FieldFit, MERGED_UNTIL, Model, RESOLVED_FROM};
use super::super::line::{LineFit, LineShape, fit_line};
use super::super::shapes::{ORDERS, tilt_weights};
use super::look::{Averaged, PointSeen};
use super::{LineOptions, ScanOptions, ScanPoint};

/// Share of the strongest peak from which the named point's line counts as dominated by it.
const DOMINATED_FROM: f64 = 0.5;

/// Width and contrast where they were taken.
pub(super) struct Named {
    pub current: f64,
    pub linewidth: Estimate,
    pub contrast: Option<Estimate>,
}

/// Chooses the point by the field model alone, never by the height of a peak, which would bias both answers.
pub(super) fn name(
    points: &[ScanPoint],
    traces: &[Vec<Averaged>],
    seen: &[PointSeen],
    model: &Model,
    options: &ScanOptions,
) -> Option<Named> {
    let candidates = (0..points.len()).filter(|i| seen[*i].observation.is_some());
    let apart = candidates.clone().filter(|i| {
        let (magnitude, cosine) = model.physical(model.axial(points[*i].current));
        let (weights, _) = tilt_weights(cosine);
        let spacing = options.field.zeeman.spacing(magnitude).0;
        let fwhm = seen[*i].fwhm.map_or(f64::INFINITY, |w| w.value);
        weights[0].max(weights[4]) >= DOMINATED_FROM && spacing >= RESOLVED_FROM * fwhm
    });
    let distance = |i: &usize| model.axial(points[*i].current).abs();
    let chosen = apart
        .min_by(|a, b| distance(a).total_cmp(&distance(b)))
        .or_else(|| candidates.max_by(|a, b| distance(a).total_cmp(&distance(b))))?;
    at(
        points[chosen].current,
        &traces[chosen],
        seen[chosen].fwhm?,
        model,
        options,
    )
}

/// Fits the strongest peak with its neighbours.
fn at(
    current: f64,
    traces: &[Averaged],
    fwhm: Estimate,
    model: &Model,
    options: &ScanOptions,
) -> Option<Named> {
    let (magnitude, cosine) = model.physical(model.axial(current));
    let (spacing, _) = options.field.zeeman.spacing(magnitude);
    let (weights, _) = tilt_weights(cosine);
    let q = if cosine < 0.0 { -2.0 } else { 2.0 };
    let h = options.field.handedness;
    let expected = model.offset + h * q * spacing;
    let resolved = spacing >= RESOLVED_FROM * fwhm.value;
    let neighbours = ORDERS
        .iter()
        .zip(weights)
        .filter(|(o, w)| resolved && **o != q && *w > 1e-3);
    let line = LineOptions {
        neighbours: neighbours.map(|(o, _)| h * (o - q) * spacing).collect(),
        centre_within: (spacing > MERGED_UNTIL * fwhm.value)
            .then_some((expected - fwhm.value, expected + fwhm.value)),
        noise: None,
        shape: match options.line.shape {
            LineShape::Mixed => LineShape::Lorentzian,
            other => other,
        },
        ..options.line.clone()
    };
    let fits: Vec<LineFit> = traces
        .iter()
        .filter_map(|t| fit_line(&t.detuning, &t.signal, &line).ok())
        .collect();
    let peaks = || fits.iter().filter_map(LineFit::peak);
    let linewidth = fwhm;
    Some(Named {
        current,
        linewidth,
        contrast: mean(peaks().filter_map(|p| p.contrast)),
    })
}

fn mean(values: impl Iterator<Item = Estimate>) -> Option<Estimate> {
    let (weight, sum) = values
        .map(|v| (v.sigma.powi(-2), v.value))
        .fold((0.0, 0.0), |(w, s), (p, v)| (w + p, s + p * v));
    (weight > 0.0 && weight.is_finite()).then(|| Estimate {
        value: sum / weight,
        sigma: weight.powf(-0.5),
    })
}

/// Slope of the width against the distance from the null current, by weighted least squares; Hz/A.
pub(super) fn trend(
    points: &[ScanPoint],
    seen: &[PointSeen],
    field: &FieldFit,
) -> Option<Estimate> {
    let (mut w, mut wx, mut wy, mut wxx, mut wxy) = (0.0, 0.0, 0.0, 0.0, 0.0);
    for (point, s) in points.iter().zip(seen) {
        if let (Some(fwhm), Some(_)) = (s.fwhm, s.observation) {
            let (x, p) = (
                (point.current - field.null_current.value).abs(),
                fwhm.sigma.powi(-2),
            );
            (w, wx, wy) = (w + p, wx + p * x, wy + p * fwhm.value);
            (wxx, wxy) = (wxx + p * x * x, wxy + p * x * fwhm.value);
        }
    }
    let determinant = w * wxx - wx * wx;
    (determinant > 1e-9 * w * wxx).then(|| Estimate {
        value: (w * wxy - wx * wy) / determinant,
        sigma: (w / determinant).sqrt(),
    })
}
