//! One point of a scan under a field model: which pattern to expect in its traces, and what they say about the field.

use super::super::field::{self, Law, Model, Observation, Regime};
use super::super::line::{LEAST_GAIN, LineShape};
use super::super::shapes::tilt_weights;
use super::super::{Direction, Estimate};
use super::pattern::{Form, Prediction, Seen, see};
use super::{ScanOptions, ScanPoint};

/// A trace as the pattern fit takes it: acquisitions on the same axis averaged.
pub(super) struct Averaged {
    direction: Direction,
    pub detuning: Vec<f64>,
    pub signal: Vec<f64>,
    /// How many acquisitions were averaged.
    count: usize,
}

/// What a point says about the field under the present model.
pub(super) struct PointSeen {
    pub regime: Regime,
    pub observation: Option<Observation>,
    pub fwhm: Option<Estimate>,
    /// Position of the dominating peak under the model and as seen, Hz.
    pub centre: Option<Estimate>,
    pub lag: Option<Estimate>,
    /// Gain in chi-square over sloped baselines, chi-square and degrees of freedom of the point's traces.
    pub gain: f64,
    pub chi2: f64,
    pub dof: f64,
    pub condemned: bool,
}
/// Averages the acquisitions that share direction and axis.
pub(super) fn average(point: &ScanPoint) -> Vec<Averaged> {
    let mut out: Vec<Averaged> = Vec::new();
    for a in &point.acquisitions {
        match out
            .iter_mut()
            .find(|o| o.direction == a.direction && o.detuning == a.detuning)
        {
            Some(mean) => {
                mean.count += 1;
                let share = 1.0 / mean.count as f64;
                for (m, y) in mean.signal.iter_mut().zip(a.signal) {
                    *m += (y - *m) * share;
                }
            }
            None => out.push(Averaged {
                direction: a.direction,
                detuning: a.detuning.to_vec(),
                signal: a.signal.to_vec(),
                count: 1,
            }),
        }
    }
    out
}

/// How a point's peaks lie to each other: how to fit them and whether to use them.
fn arrange(
    axial: f64,
    model: &Model,
    fwhm: f64,
    options: &ScanOptions,
) -> (Regime, Form, Prediction) {
    let (magnitude, cosine) = model.physical(axial);
    let (spacing, slope) = options.field.zeeman.spacing(magnitude);
    let (weights, _) = tilt_weights(cosine);
    let lone = 1.0 - weights[0].max(weights[4]) < field::LONE_WEIGHT;
    let ratio = spacing / fwhm;
    let q = if axial < 0.0 { -2 } else { 2 };
    let (regime, form) = if ratio >= field::RESOLVED_FROM {
        (Regime::Resolved { q }, Form::Apart)
    } else if ratio < field::MERGED_UNTIL {
        (Regime::Merged, Form::Tied)
    } else if lone {
        (Regime::Resolved { q }, Form::Tied)
    } else {
        (Regime::LeftOut, Form::Tied)
    };
    let phase = match options.line.shape {
        LineShape::MixedAt(phase) => phase,
        LineShape::Lorentzian | LineShape::Mixed => 0.0,
    };
    let squared = model.squared.max(0.0);
    let (offset, handedness) = (model.offset, options.field.handedness);
    (
        regime,
        form,
        Prediction {
            axial,
            squared,
            spacing,
            slope,
            offset,
            handedness,
            fwhm,
            phase,
            form,
        },
    )
}

/// Fits all traces of a point with the pattern that the model predicts.
pub(super) fn look(
    current: f64,
    traces: &[Averaged],
    model: &Model,
    fwhm: f64,
    search: bool,
    options: &ScanOptions,
) -> PointSeen {
    let axial = model.axial(current);
    let (regime, form, prediction) = arrange(axial, model, fwhm, options);
    let mut seen: [Vec<Seen>; 2] = [Vec::new(), Vec::new()];
    for trace in traces {
        let noise = options.line.noise.map(|n| n / (trace.count as f64).sqrt());
        if let Some(s) = see(&trace.detuning, &trace.signal, &prediction, noise, search)
            && s.gain > LEAST_GAIN
            && s.sigma.is_finite()
            && s.converged
        {
            seen[usize::from(trace.direction == Direction::Down)].push(s);
        }
    }
    let condemned = seen.iter().flatten().any(|s| s.tests.condemned);
    let sum = |f: fn(&Seen) -> f64| seen.iter().flatten().map(f).sum::<f64>();
    let (gain, chi2, dof) = (sum(|s| s.gain), sum(|s| s.chi2), sum(|s| s.dof as f64));
    let mut out = PointSeen {
        regime,
        observation: None,
        fwhm: None,
        centre: None,
        lag: None,
        gain,
        chi2,
        dof,
        condemned,
    };
    let Some(mean) = together(&seen) else {
        return out;
    };
    out.fwhm = Some(Estimate {
        value: mean.fwhm,
        sigma: mean.fwhm_sigma,
    });
    let h = options.field.handedness;
    let q = if axial < 0.0 { -2.0 } else { 2.0 };
    let (value, law, lever) = match form {
        Form::Apart => (h * mean.x, Law::Peak(1.0), h * mean.by_offset),
        Form::Tied => {
            // Q is for peaks apart to tell: a tied pattern takes it as given.
            let (squared, by_axial, by_squared) = (prediction.squared, mean.by_axial, 0.0);
            let law = Law::Linear {
                value: -mean.by_offset * model.offset,
                axial,
                squared,
                by_axial,
                by_squared,
            };
            (mean.x, law, mean.by_offset)
        }
    };
    // x of peaks apart is fitted with the offset held where the model has it.
    let value = if form == Form::Apart {
        value + lever * model.offset
    } else {
        value
    };
    out.centre = Some(match (form, regime) {
        (Form::Apart, _) => Estimate {
            value: model.offset + h * q * mean.x,
            sigma: 2.0 * mean.sigma,
        },
        (Form::Tied, Regime::Merged) => {
            let (spacing, _) = options.field.zeeman.spacing(axial.abs());
            let centroid = model.offset + h * 2.0 * spacing * axial.signum();
            Estimate {
                value: centroid + mean.x,
                sigma: mean.sigma,
            }
        }
        (Form::Tied, _) => Estimate {
            value: model.offset + h * q * prediction.spacing + mean.x,
            sigma: mean.sigma,
        },
    });
    out.lag = mean.lag.map(|l| Estimate {
        value: l / lever.abs(),
        sigma: mean.sigma / lever.abs(),
    });
    if regime != Regime::LeftOut {
        out.observation = Some(Observation {
            current,
            value,
            sigma: mean.sigma,
            law,
            lever,
        });
    }
    out
}

/// Mean over the traces of a point.
struct Together {
    x: f64,
    sigma: f64,
    lag: Option<f64>,
    fwhm: f64,
    fwhm_sigma: f64,
    by_axial: f64,
    by_offset: f64,
}

/// Weighted mean within a direction, plain mean of the directions: the lag cancels.
fn together(seen: &[Vec<Seen>; 2]) -> Option<Together> {
    let side = |group: &[Seen]| {
        let weight: f64 = group.iter().map(|s| s.sigma.powi(-2)).sum();
        let mean = |f: fn(&Seen) -> f64| {
            group.iter().map(|s| f(s) * s.sigma.powi(-2)).sum::<f64>() / weight
        };
        (!group.is_empty()).then(|| Together {
            x: mean(|s| s.x),
            sigma: weight.powf(-0.5),
            lag: None,
            fwhm: 0.0,
            fwhm_sigma: 0.0,
            by_axial: mean(|s| s.by_axial),
            by_offset: mean(|s| s.by_offset),
        })
    };
    let mut out = match (side(&seen[0]), side(&seen[1])) {
        (Some(up), Some(down)) => Together {
            x: 0.5 * (up.x + down.x),
            sigma: 0.5 * up.sigma.hypot(down.sigma),
            lag: Some(0.5 * (up.x - down.x)),
            by_axial: 0.5 * (up.by_axial + down.by_axial),
            by_offset: 0.5 * (up.by_offset + down.by_offset),
            ..up
        },
        (Some(one), None) | (None, Some(one)) => one,
        (None, None) => return None,
    };
    // Unweighted: a width that noise made narrow also claims the smaller sigma, which would bias a weighted mean.
    let count = seen.iter().flatten().count() as f64;
    out.fwhm = seen.iter().flatten().map(|s| s.fwhm).sum::<f64>() / count;
    let squares: f64 = seen.iter().flatten().map(|s| s.fwhm_sigma.powi(2)).sum();
    out.fwhm_sigma = squares.sqrt() / count;
    Some(out)
}
