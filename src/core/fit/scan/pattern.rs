//! One trace against the pattern of peaks that a field model predicts in it: how far, and how wide.
//!
//! - `Form::Apart`: peaks at offset + h q x with free heights; x is the spacing nu_L. No weight is assumed, every
//!   peak in the window counts, and which one is tallest does not matter.
//! - `Form::Tied`: the five peaks with the weights of the model, displaced together by x; one height.
//!
//! Width and baseline are free in every trace: an inhomogeneous coil widens the line with the current, and neither
//! must leak into the field.

use crate::fit::noise::{ResidualTests, difference_sigma, test_residuals};
use crate::fit::projection::{BLOCK, Block, COLUMNS, Gram, Reduced, invert};
use crate::fit::shapes::{ORDERS, mixed, tilt_weights};

/// Most passes of the refinement.
const MOST_PASSES: usize = 40;
/// Trial displacements to either side of the prediction, and their distance in FWHM of the outermost peak.
const TRIALS: i32 = 3;
const TRIAL_STEP: f64 = 0.35;

/// What a field model predicts for a trace.
#[derive(Debug, Clone, Copy)]
pub(super) struct Prediction {
    /// Axial field and Q >= 0, T and T^2.
    pub axial: f64,
    pub squared: f64,
    /// Spacing of the peaks and its derivative by |B|, Hz and Hz/T.
    pub spacing: f64,
    pub slope: f64,
    /// Displacement common to all peaks, Hz.
    pub offset: f64,
    pub handedness: f64,
    /// Width to start from, Hz.
    pub fwhm: f64,
    /// Mixing phase, rad.
    pub phase: f64,
    pub form: Form,
}

#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub(super) enum Form {
    Apart,
    Tied,
}

/// What one trace says.
#[derive(Debug, Clone)]
pub(super) struct Seen {
    /// x (see the module), Hz, and its standard uncertainty.
    pub x: f64,
    pub sigma: f64,
    pub fwhm: f64,
    pub fwhm_sigma: f64,
    /// Response of x to the axial field and to the common offset, other things equal.
    pub by_axial: f64,
    pub by_offset: f64,
    /// Gain in chi-square over a sloped baseline.
    pub gain: f64,
    pub chi2: f64,
    pub dof: usize,
    pub tests: ResidualTests,
    pub converged: bool,
}

/// A peak: where it stands for x = 0, how it moves with x, how with the field, and its weight.
#[derive(Debug, Clone, Copy, Default)]
struct Peak {
    origin: f64,
    lever: f64,
    by_magnitude: f64,
    weight: f64,
    weight_slope: f64,
}

struct Task<'a> {
    middle: f64,
    half: f64,
    axis: &'a [f64],
    level: &'a [f64],
    peaks: Vec<Peak>,
    prediction: Prediction,
}

#[derive(Debug, Clone)]
struct State {
    x: f64,
    log_fwhm: f64,
    linear: [f64; COLUMNS],
    reduced: Reduced,
}

/// Fits one trace; `None` if nothing of the pattern lies in the window or the trace does not determine it.
///
/// `search`: also try displacements of up to a width; without it the prediction is trusted to half a width.
pub(super) fn see(
    detuning: &[f64],
    signal: &[f64],
    prediction: &Prediction,
    noise: Option<f64>,
    search: bool,
) -> Option<Seen> {
    let (lo, hi) = detuning
        .iter()
        .fold((f64::INFINITY, f64::NEG_INFINITY), |(l, h), x| {
            (l.min(*x), h.max(*x))
        });
    let (middle, half) = (0.5 * (lo + hi), 0.5 * (hi - lo));
    let mean = signal.iter().sum::<f64>() / signal.len() as f64;
    let axis: Vec<f64> = detuning.iter().map(|x| (x - middle) / half).collect();
    let level: Vec<f64> = signal.iter().map(|y| y - mean).collect();
    let peaks = peaks(prediction, (lo, hi));
    if peaks.is_empty() {
        return None;
    }
    let task = Task {
        middle,
        half,
        axis: &axis,
        level: &level,
        peaks,
        prediction: *prediction,
    };
    let state = task.refine(search)?;
    task.report(state, noise)
}

fn peaks(p: &Prediction, window: (f64, f64)) -> Vec<Peak> {
    let magnitude = p.axial.hypot(p.squared.sqrt()).max(1e-12);
    let (weights, slopes) = tilt_weights(p.axial / magnitude);
    let expected = |q: f64| p.offset + p.handedness * q * p.spacing;
    let all = ORDERS
        .iter()
        .zip(weights)
        .zip(slopes)
        .map(|((q, weight), weight_slope)| Peak {
            origin: if p.form == Form::Apart {
                p.offset
            } else {
                expected(*q)
            },
            lever: if p.form == Form::Apart {
                p.handedness * q
            } else {
                1.0
            },
            by_magnitude: p.handedness * q * p.slope,
            weight,
            weight_slope,
        });
    match p.form {
        Form::Tied => all.collect(),
        Form::Apart => all
            .zip(ORDERS)
            .filter(|(peak, q)| {
                let at = expected(*q);
                peak.weight > 1e-3 && at > window.0 - p.fwhm && at < window.1 + p.fwhm
            })
            .map(|(peak, _)| peak)
            .collect(),
    }
}

impl Task<'_> {
    fn tied(&self) -> bool {
        self.prediction.form == Form::Tied
    }

    /// Baseline and heights.
    fn linear_count(&self) -> usize {
        2 + if self.tied() { 1 } else { self.peaks.len() }
    }

    fn refine(&self, search: bool) -> Option<(State, bool)> {
        let p = &self.prediction;
        let centre = if self.tied() { 0.0 } else { p.spacing };
        let reach = self.peaks.iter().map(|k| k.lever.abs()).fold(0.0, f64::max);
        if reach == 0.0 {
            return None;
        }
        let trial = |i: i32| {
            let x = centre + f64::from(i) * TRIAL_STEP * p.fwhm / reach;
            self.pass(x, p.fwhm.ln(), &[0.0; COLUMNS], 2)
        };
        let trials = if search { TRIALS } else { 0 };
        let best = (-trials..=trials).map(trial).min_by(|a, b| {
            a.reduced
                .sum_of_squares
                .total_cmp(&b.reduced.sum_of_squares)
        })?;
        let mut at = self.pass(best.x, best.log_fwhm, &best.linear, 2);
        let scale = at.reduced.sum_of_squares / self.axis.len() as f64;
        let mut damping = 0.0;
        for _ in 0..MOST_PASSES {
            let mut matrix = at.reduced.information.clone();
            (0..2).for_each(|i| matrix[(i, i)] *= 1.0 + damping);
            let step = invert(&matrix)? * &at.reduced.gradient;
            let promised = step.dot(&at.reduced.gradient);
            let excess = (step[0].abs() * reach / at.log_fwhm.exp())
                .max(step[1].abs() / 0.7)
                .max(1.0);
            let next = self.pass(
                at.x + step[0] / excess,
                at.log_fwhm + step[1] / excess,
                &at.linear,
                2,
            );
            let small = promised <= 1e-8 * scale;
            if small || next.reduced.sum_of_squares <= at.reduced.sum_of_squares {
                at = next;
                damping = if damping < 1e-5 { 0.0 } else { damping * 0.1 };
                if small {
                    return Some((at, true));
                }
            } else if damping > 1e6 {
                break;
            } else {
                damping = (damping * 8.0).max(1e-3);
            }
        }
        Some((at, false))
    }

    /// One pass over the samples; `derivatives` 2: by x and log width; 4: also by axial field and offset.
    fn pass(&self, x: f64, log_fwhm: f64, before: &[f64; COLUMNS], derivatives: usize) -> State {
        let fwhm = log_fwhm.exp().clamp(1e-4 * self.half, 8.0 * self.half);
        let linear = self.linear_count();
        let mut gram = Gram::new(linear + derivatives + 1);
        let mut block: Block = [[0.0; BLOCK]; COLUMNS];
        for (axis, level) in self.axis.chunks(BLOCK).zip(self.level.chunks(BLOCK)) {
            block[..=linear + derivatives]
                .iter_mut()
                .for_each(|c| c.fill(0.0));
            block[0][..axis.len()].fill(1.0);
            block[1][..axis.len()].copy_from_slice(axis);
            self.fill(&mut block, axis, x, fwhm, before, derivatives);
            block[linear + derivatives][..axis.len()].copy_from_slice(level);
            gram.add(&block);
        }
        let reduced = gram.reduce(linear);
        State {
            x,
            log_fwhm: fwhm.ln(),
            linear: reduced.linear,
            reduced,
        }
    }

    fn fill(
        &self,
        block: &mut Block,
        axis: &[f64],
        x: f64,
        fwhm: f64,
        before: &[f64; COLUMNS],
        derivatives: usize,
    ) {
        let linear = self.linear_count();
        let rate = 2.0 / fwhm;
        let p = &self.prediction;
        let magnitude = p.axial.hypot(p.squared.sqrt()).max(1e-12);
        let cosine = p.axial / magnitude;
        let cosine_by_axial = (1.0 - cosine * cosine) / magnitude;
        for (place, peak) in self.peaks.iter().enumerate() {
            let column = if self.tied() { 2 } else { 2 + place };
            let (share, height) = if self.tied() {
                (peak.weight, before[2] * peak.weight)
            } else {
                (1.0, before[column])
            };
            let at = peak.origin + peak.lever * x - self.middle;
            let tilt = if self.tied() {
                before[2] * peak.weight_slope
            } else {
                0.0
            };
            for (i, t) in axis.iter().enumerate() {
                let u = (t * self.half - at) * rate;
                let shape = mixed_or_plain(u, p.phase);
                let displaced = -rate * height * shape.slope;
                block[column][i] += share * shape.value;
                block[linear][i] += peak.lever * displaced;
                block[linear + 1][i] -= u * height * shape.slope;
                if derivatives == 4 {
                    let moved = displaced * peak.by_magnitude;
                    block[linear + 2][i] += moved * cosine + tilt * cosine_by_axial * shape.value;
                    block[linear + 3][i] += displaced;
                }
            }
        }
    }

    fn residuals(&self, at: &State) -> Vec<f64> {
        let rate = 2.0 / at.log_fwhm.exp();
        let model = |t: f64| {
            let baseline = at.linear[0] + at.linear[1] * t;
            self.peaks
                .iter()
                .enumerate()
                .fold(baseline, |sum, (place, peak)| {
                    let height = if self.tied() {
                        at.linear[2] * peak.weight
                    } else {
                        at.linear[2 + place]
                    };
                    let u =
                        (t * self.half - (peak.origin + peak.lever * at.x - self.middle)) * rate;
                    sum + height * mixed_or_plain(u, self.prediction.phase).value
                })
        };
        self.axis
            .iter()
            .zip(self.level)
            .map(|(t, y)| y - model(*t))
            .collect()
    }

    fn report(&self, (state, converged): (State, bool), given: Option<f64>) -> Option<Seen> {
        let at = self.pass(state.x, state.log_fwhm, &state.linear, 4);
        let residuals = self.residuals(&at);
        let floor = 1e-15 * self.level.iter().fold(0.0, |m: f64, y| m.max(y.abs())) + 1e-150;
        let noise = given
            .unwrap_or_else(|| difference_sigma(&residuals))
            .max(floor);
        let information = &at.reduced.information;
        let covariance = invert(&information.view((0, 0), (2, 2)).into_owned())?;
        // Least-squares response of (x, ln w) to a displacement along a further derivative column.
        let response = |column: usize| {
            covariance[(0, 0)] * information[(0, column)]
                + covariance[(0, 1)] * information[(1, column)]
        };
        let variance = noise * noise;
        let fwhm = at.log_fwhm.exp();
        let bare = self.baseline_sum_of_squares();
        Some(Seen {
            x: at.x,
            sigma: (covariance[(0, 0)] * variance).sqrt(),
            fwhm,
            fwhm_sigma: fwhm * (covariance[(1, 1)] * variance).sqrt(),
            by_axial: response(2),
            by_offset: response(3),
            gain: (bare - at.reduced.sum_of_squares) / variance,
            chi2: at.reduced.sum_of_squares / variance,
            dof: self.axis.len().saturating_sub(self.linear_count() + 2),
            tests: test_residuals(&residuals),
            converged,
        })
    }

    fn baseline_sum_of_squares(&self) -> f64 {
        let mut gram = Gram::new(3);
        let mut block: Block = [[0.0; BLOCK]; COLUMNS];
        for (axis, level) in self.axis.chunks(BLOCK).zip(self.level.chunks(BLOCK)) {
            block[..3].iter_mut().for_each(|c| c.fill(0.0));
            block[0][..axis.len()].fill(1.0);
            block[1][..axis.len()].copy_from_slice(axis);
            block[2][..axis.len()].copy_from_slice(level);
            gram.add(&block);
        }
        gram.reduce(2).sum_of_squares
    }
}

#[inline]
fn mixed_or_plain(u: f64, phase: f64) -> crate::fit::shapes::Shape {
    if phase == 0.0 {
        crate::fit::shapes::absorptive(u)
    } else {
        mixed(u, phase)
    }
}
