//! Which of the five peaks a centre belongs to: by prediction, never by height. And a first model to predict from.

use super::law::{Law, Model, Observation};
use super::{FieldOptions, FieldPoint, FitError, LONE_WEIGHT, MERGED_UNTIL, RESOLVED_FROM, Regime};
use crate::fit::shapes::{ORDERS, tilt_weights};

/// A peak of less weight is not expected to be seen.
const LEAST_WEIGHT: f64 = 1e-3;
/// A centre further than this share of the spacing from the nearest prediction belongs to no peak.
const NEAREST_WITHIN: f64 = 0.35;
/// Points from which trial pairs are taken.
const TRIAL_POINTS: usize = 14;
/// Trial transverse fields, from none to beyond the largest field seen.
const TRIAL_TRANSVERSE: usize = 14;
/// Most models handed on.
const STARTS: usize = 10;
/// A point costs no more than this in a trial: wrong peaks must not vote.
const MOST_COST: f64 = 25.0;

/// First models that need only the nominal coil constant, best first, at least one: every pair of points, with
/// either peak q = +-1, +-2 and a trial transverse field, fixes k and B0; trials that most points agree with win.
pub(in crate::fit) fn find_starts(
    points: &[FieldPoint],
    options: &FieldOptions,
) -> Result<Vec<Model>, FitError> {
    let mut order: Vec<&FieldPoint> = points.iter().collect();
    order.sort_by(|a, b| a.current.total_cmp(&b.current));
    let count = order.len().min(TRIAL_POINTS);
    let trial: Vec<&FieldPoint> = (0..count)
        .map(|i| order[i * (order.len() - 1) / (count - 1).max(1)])
        .collect();
    let largest =
        points.iter().map(|p| p.centre.abs()).fold(0.0, f64::max) * 2.0 / options.zeeman.slope;
    let span = order.last().map_or(0.0, |p| p.current) - order.first().map_or(0.0, |p| p.current);
    let mut trials: Vec<(f64, Model)> = Vec::new();
    for (i, first) in trial.iter().enumerate() {
        for second in &trial[i + 1..] {
            if second.current - first.current < 0.25 * span {
                continue;
            }
            for model in candidates(first, second, largest, options) {
                trials.push((points.iter().map(|p| cost(p, &model, options)).sum(), model));
            }
        }
    }
    trials.sort_by(|a, b| a.0.total_cmp(&b.0));
    let mut starts: Vec<Model> = Vec::new();
    for (_, model) in &trials {
        if starts.len() < STARTS && starts.iter().all(|s| differ(s, model, largest)) {
            starts.push(*model);
        }
    }
    if starts.is_empty() {
        return Err(FitError::Undetermined {
            what: "the coil constant",
            remedy: "no pair of lines fits the nominal constant within its tolerance: check nominal constant and window",
        });
    }
    Ok(starts)
}

/// Are these two models far enough apart to be worth a trial each?
fn differ(a: &Model, b: &Model, largest: f64) -> bool {
    (a.constant / b.constant - 1.0).abs() > 0.06
        || (a.residual - b.residual).abs() > 0.05 * largest
        || (a.squared.max(0.0).sqrt() - b.squared.max(0.0).sqrt()).abs() > 0.15 * largest
}

fn candidates<'a>(
    first: &'a FieldPoint,
    second: &'a FieldPoint,
    largest: f64,
    options: &'a FieldOptions,
) -> impl Iterator<Item = Model> + 'a {
    let magnitude = move |p: &FieldPoint, q: f64| {
        options.handedness * p.centre * 2.0 / (q * options.zeeman.slope)
    };
    let transverse = (0..TRIAL_TRANSVERSE).map(move |i| match i {
        0 => 0.0,
        _ => largest * 0.02 * 50f64.powf((i - 1) as f64 / (TRIAL_TRANSVERSE - 2) as f64),
    });
    transverse.flat_map(move |t| {
        [(2.0, 2.0), (2.0, 1.0), (1.0, 2.0), (1.0, 1.0)]
            .into_iter()
            .filter_map(move |(q1, q2)| {
                let axial = |m: f64| (m * m - t * t).max(0.0).sqrt().copysign(m);
                let (b1, b2) = (axial(magnitude(first, q1)), axial(magnitude(second, q2)));
                let constant = (b2 - b1) / (second.current - first.current);
                let off = (constant / options.nominal - 1.0).abs();
                let residual = b1 - constant * first.current;
                (off <= options.tolerance).then_some(Model {
                    constant,
                    residual,
                    squared: t * t,
                    offset: 0.0,
                })
            })
    })
}

/// -2 log likelihood of a centre, robustly: which peak it is is not known, heavier ones are likelier.
fn cost(point: &FieldPoint, model: &Model, options: &FieldOptions) -> f64 {
    let axial = model.axial(point.current);
    let (magnitude, cosine) = model.physical(axial);
    let (spacing, _) = options.zeeman.spacing(magnitude);
    let sigma = point.sigma.hypot(0.15 * point.fwhm);
    let seen = options.handedness * point.centre;
    let cost = |predicted: f64, weight: f64| {
        ((seen - predicted) / sigma).powi(2) - 2.0 * (weight + 1e-4).ln()
    };
    let merged = if spacing < point.fwhm {
        cost(2.0 * cosine * spacing, 1.0)
    } else {
        MOST_COST
    };
    let (weights, _) = tilt_weights(cosine);
    let peaks = ORDERS
        .iter()
        .zip(weights)
        .map(|(q, w)| cost(q * spacing, w));
    peaks.fold(merged, f64::min).min(MOST_COST)
}

/// How each point enters the law under a model.
pub(super) fn regimes(points: &[FieldPoint], model: &Model, options: &FieldOptions) -> Vec<Regime> {
    points.iter().map(|p| regime(p, model, options)).collect()
}

fn regime(point: &FieldPoint, model: &Model, options: &FieldOptions) -> Regime {
    let axial = model.axial(point.current);
    let (magnitude, cosine) = model.physical(axial);
    let (spacing, _) = options.zeeman.spacing(magnitude);
    let ratio = spacing / point.fwhm;
    if ratio < MERGED_UNTIL {
        return Regime::Merged;
    }
    let (weights, _) = tilt_weights(cosine);
    let lone = 1.0 - weights[0].max(weights[4]) < LONE_WEIGHT;
    if ratio < RESOLVED_FROM && !lone {
        return Regime::LeftOut;
    }
    let seen = options.handedness * (point.centre - model.offset);
    let nearest = ORDERS
        .iter()
        .zip(weights)
        .filter(|(_, w)| *w > LEAST_WEIGHT)
        .map(|(q, _)| (*q, (seen - q * spacing).abs()))
        .min_by(|a, b| a.1.total_cmp(&b.1));
    match nearest {
        // The middle peak does not move with the field: it says nothing.
        Some((q, distance)) if q != 0.0 && distance < NEAREST_WITHIN * spacing => {
            Regime::Resolved { q: q as i8 }
        }
        _ => Regime::LeftOut,
    }
}

/// The points in use, as observations of the law.
pub(super) fn observations(points: &[FieldPoint], regimes: &[Regime]) -> Vec<Observation> {
    let with = |p: &FieldPoint, law| Observation {
        current: p.current,
        value: p.centre,
        sigma: p.sigma,
        law,
        lever: 1.0,
    };
    let pairs = points.iter().zip(regimes);
    pairs
        .filter_map(|(p, regime)| match regime {
            Regime::Resolved { q } => Some(with(p, Law::Peak(f64::from(*q)))),
            Regime::Merged => Some(with(p, Law::Merged)),
            Regime::LeftOut => None,
        })
        .collect()
}
