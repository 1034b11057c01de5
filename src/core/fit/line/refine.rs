//! The refinement of one line on a scaled trace: axis in [-1, 1], signal less its mean.

use nalgebra::{DMatrix, DVector};

use super::{Estimate, FitError, Found, LineFit, LineFlag, LineOptions, LineShape, Peak};
use crate::fit::noise::{difference_sigma, test_residuals};
use crate::fit::projection::{BLOCK, Block, COLUMNS, Gram, Reduced, invert};
use crate::fit::shapes::{absorptive, dispersive};
use crate::fit::start::Start;

/// Most passes of the refinement; a good start needs five.
const MOST_PASSES: usize = 60;
/// Places of lines: the line itself, eight neighbours.
const LINES: usize = 9;

/// A trace scaled for computing.
pub(super) struct Trace {
    middle: f64,
    half: f64,
    mean: f64,
    pub axis: Vec<f64>,
    pub level: Vec<f64>,
    /// Smallest noise that the digits of the signal can show, V.
    pub floor: f64,
    /// Where the centre may lie, scaled.
    pub prior: (f64, f64),
    /// Which widths are credible, scaled.
    pub fwhm_range: (f64, f64),
    /// Offsets of line and neighbours, scaled; the first is 0.
    offsets: Vec<f64>,
    phase: (f64, f64),
    free_phase: bool,
    /// Products of baseline and data.
    bare: Gram,
}

/// The line at one place of the refinement, in scaled units.
#[derive(Debug, Clone)]
pub(super) struct Refined {
    pub centre: f64,
    pub log_fwhm: f64,
    /// Heights of the line and its neighbours.
    pub heights: [f64; LINES],
    /// Height of the dispersive part, 0 unless the phase is free.
    dispersive: f64,
    baseline: [f64; 2],
    pub sum_of_squares: f64,
    converged: bool,
    gram: Gram,
    reduced: Reduced,
}

/// A sloped baseline alone.
pub(super) struct Baseline {
    level: f64,
    slope: f64,
    pub sum_of_squares: f64,
    gram: Gram,
}

impl Refined {
    fn fwhm(&self) -> f64 {
        self.log_fwhm.exp()
    }

    pub fn centre_within(&self, prior: (f64, f64)) -> bool {
        self.centre >= prior.0 && self.centre <= prior.1
    }
}

impl Trace {
    pub fn new(detuning: &[f64], signal: &[f64], options: &LineOptions) -> Result<Trace, FitError> {
        let (lo, hi) = detuning
            .iter()
            .fold((f64::INFINITY, f64::NEG_INFINITY), |(l, h), x| {
                (l.min(*x), h.max(*x))
            });
        let (middle, half) = (0.5 * (lo + hi), 0.5 * (hi - lo));
        if half <= 1e-12 * middle.abs() || half <= 0.0 {
            return Err(FitError::NoSpan { at: middle });
        }
        let count = signal.len() as f64;
        let mean = signal.iter().sum::<f64>() / count;
        let largest = signal.iter().fold(0.0, |m: f64, y| m.max(y.abs()));
        let scaled = |x: f64| (x - middle) / half;
        let prior = options
            .centre_within
            .map_or((-1.0, 1.0), |(lo, hi)| (scaled(lo), scaled(hi)));
        let (phase, free_phase) = match options.shape {
            LineShape::Lorentzian => ((0.0, 1.0), false),
            LineShape::Mixed => ((0.0, 1.0), true),
            LineShape::MixedAt(phase) => (phase.sin_cos(), false),
        };
        let mut trace = Trace {
            middle,
            half,
            mean,
            axis: detuning.iter().map(|x| scaled(*x)).collect(),
            level: signal.iter().map(|y| y - mean).collect(),
            floor: (1e-15 * largest).max(1e-150),
            prior: (prior.0.clamp(-1.0, 1.0), prior.1.clamp(-1.0, 1.0)),
            fwhm_range: (2.5 / count, 2.0),
            offsets: std::iter::once(0.0)
                .chain(options.neighbours.iter().map(|o| o / half))
                .collect(),
            phase,
            free_phase,
            bare: Gram::new(3),
        };
        trace.bare = products(&trace.axis, &trace.level);
        Ok(trace)
    }

    fn linear_count(&self) -> usize {
        2 + self.offsets.len() + usize::from(self.free_phase)
    }

    /// From the grid's start to the least-squares line.
    pub fn refine(&self, start: Start, noise: f64) -> Refined {
        let zero = Refined {
            centre: start.centre,
            log_fwhm: start.fwhm.ln(),
            heights: [0.0; LINES],
            dispersive: 0.0,
            baseline: [0.0; 2],
            sum_of_squares: f64::INFINITY,
            converged: false,
            gram: Gram::new(0),
            reduced: Gram::new(1).reduce(0),
        };
        let mut at = if self.offsets.len() == 1 && !self.free_phase {
            // A lone line's derivatives scale with its height: no pass is needed to learn it.
            let mut unit = zero;
            unit.heights[0] = 1.0;
            let mut first = self.pass(&unit, [0.0; 2]);
            let height = first.heights[0];
            first.reduced.information *= height * height;
            first.reduced.gradient *= height;
            first
        } else {
            // The derivative columns need heights: the first pass only finds those.
            let first = self.pass(&zero, [0.0; 2]);
            self.pass(&first, [0.0; 2])
        };
        let mut damping = 0.0;
        for _ in 0..MOST_PASSES {
            let Some((step, promised)) = step(&at.reduced, damping, at.fwhm()) else {
                break;
            };
            let trial = self.pass(&at, step);
            let small = promised <= 1e-8 * noise * noise + 1e-15 * at.sum_of_squares;
            if trial.sum_of_squares <= at.sum_of_squares || small {
                at = trial;
                damping *= 0.1;
                if damping < 1e-6 {
                    damping = 0.0;
                }
                if small {
                    at.converged = true;
                    break;
                }
            } else if damping > 1e8 {
                break;
            } else {
                damping = (damping * 8.0).max(1e-3);
            }
        }
        at
    }

    /// One pass over the samples at the displaced place, derivatives weighted with the heights known before.
    fn pass(&self, from: &Refined, step: [f64; 2]) -> Refined {
        let (low, high) = (self.fwhm_range.0.ln() - 1.0, self.fwhm_range.1.ln() + 1.5);
        let centre = (from.centre + step[0]).clamp(-2.0, 2.0);
        let log_fwhm = (from.log_fwhm + step[1]).clamp(low, high);
        let linear = self.linear_count();
        let mut gram = Gram::seeded(linear + 3, &self.bare);
        let mut block: Block = [[0.0; BLOCK]; COLUMNS];
        for (axis, level) in self.axis.chunks(BLOCK).zip(self.level.chunks(BLOCK)) {
            if axis.len() < BLOCK {
                block = [[0.0; BLOCK]; COLUMNS];
            }
            block[0][..axis.len()].fill(1.0);
            block[1][..axis.len()].copy_from_slice(axis);
            self.fill(&mut block, axis, from, centre, log_fwhm.exp());
            block[linear + 2][..axis.len()].copy_from_slice(level);
            gram.add(&block);
        }
        let reduced = gram.reduce(linear);
        let mut heights = [0.0; LINES];
        heights[..self.offsets.len()].copy_from_slice(&reduced.linear[2..2 + self.offsets.len()]);
        Refined {
            centre,
            log_fwhm,
            heights,
            dispersive: if self.free_phase {
                reduced.linear[linear - 1]
            } else {
                0.0
            },
            baseline: [reduced.linear[0], reduced.linear[1]],
            sum_of_squares: reduced.sum_of_squares,
            converged: false,
            gram,
            reduced,
        }
    }

    /// Columns of the lines and the derivatives by centre and log width for one block.
    fn fill(&self, block: &mut Block, axis: &[f64], from: &Refined, centre: f64, fwhm: f64) {
        let linear = self.linear_count();
        let (sin, cos) = self.phase;
        let rate = 2.0 / fwhm;
        let mut by_centre = [0.0; BLOCK];
        let mut by_width = [0.0; BLOCK];
        let mut odd = [0.0; BLOCK];
        for (place, offset) in self.offsets.iter().enumerate() {
            let height = from.heights[place];
            let share = if from.heights[0] == 0.0 {
                0.0
            } else {
                height / from.heights[0]
            };
            let share = if place == 0 { 1.0 } else { share };
            let column = &mut block[2 + place];
            for (i, x) in axis.iter().enumerate() {
                let u = (x - centre - offset) * rate;
                let (even, part) = (absorptive(u), dispersive(u));
                column[i] = cos * even.value + sin * part.value;
                let weight = height * sin + from.dispersive * share;
                let slope = height * cos * even.slope + weight * part.slope;
                by_centre[i] -= rate * slope;
                by_width[i] -= u * slope;
                odd[i] += share * part.value;
            }
        }
        if self.free_phase {
            block[linear - 1][..axis.len()].copy_from_slice(&odd[..axis.len()]);
        }
        block[linear] = by_centre;
        block[linear + 1] = by_width;
    }

    /// Data less model, in the order of the axis.
    pub fn residuals(&self, at: &Refined) -> Vec<f64> {
        let (sin, cos) = self.phase;
        let rate = 2.0 / at.fwhm();
        let mut out: Vec<f64> = self
            .axis
            .iter()
            .zip(&self.level)
            .map(|(x, y)| y - at.baseline[0] - at.baseline[1] * x)
            .collect();
        for (place, offset) in self.offsets.iter().enumerate() {
            let height = at.heights[place];
            let share = if place == 0 {
                1.0
            } else {
                height / at.heights[0]
            };
            let weight = height * sin + at.dispersive * share;
            for (r, x) in out.iter_mut().zip(&self.axis) {
                let u = (x - at.centre - offset) * rate;
                *r -= height * cos * absorptive(u).value + weight * dispersive(u).value;
            }
        }
        out
    }

    /// The best sloped baseline.
    pub fn baseline(&self) -> Baseline {
        let gram = self.bare.clone();
        let reduced = gram.reduce(2);
        let [level, slope] = [reduced.linear[0], reduced.linear[1]];
        Baseline {
            level,
            slope,
            sum_of_squares: reduced.sum_of_squares,
            gram,
        }
    }

    pub fn report_baseline(&self, bare: &Baseline, options: &LineOptions) -> LineFit {
        let residuals: Vec<f64> = self
            .axis
            .iter()
            .zip(&self.level)
            .map(|(x, y)| y - bare.level - bare.slope * x)
            .collect();
        let noise = options
            .noise
            .unwrap_or_else(|| difference_sigma(&residuals))
            .max(self.floor);
        let spread = invert(&bare.gram.normal_matrix()).unwrap_or_else(|| DMatrix::zeros(2, 2))
            * (noise * noise);
        let covariance =
            DMatrix::from_fn(2, 2, |i, j| spread[(i, j)] / self.half.powi((i + j) as i32));
        LineFit {
            found: Found::NoPeak,
            gain: 0.0,
            base: Estimate {
                value: self.mean + bare.level,
                sigma: covariance[(0, 0)].sqrt(),
            },
            slope: Estimate {
                value: bare.slope / self.half,
                sigma: covariance[(1, 1)].sqrt(),
            },
            covariance: rows(&covariance),
            chi2: bare.sum_of_squares / (noise * noise),
            dof: self.axis.len() - 2,
            noise,
            tests: test_residuals(&residuals),
            flags: Vec::new(),
        }
    }

    /// The answer in physical units; `None` if the data do not determine centre and width.
    pub fn report(&self, at: &Refined, noise: f64, options: &LineOptions) -> Option<LineFit> {
        let lines = self.offsets.len();
        let linear = self.linear_count();
        let scaled = self.covariance(at)? * (noise * noise);
        // Reported parameters as linear functions of the internal ones [level, slope, heights.., (odd), centre, ln fwhm].
        let reported = 5 + usize::from(self.free_phase) + lines - 1;
        let mut map = DMatrix::zeros(reported, linear + 2);
        map[(0, linear)] = self.half;
        map[(1, linear + 1)] = self.half * at.fwhm();
        map[(2, 2)] = 1.0;
        map[(3, 0)] = 1.0;
        map[(3, 1)] = at.centre;
        map[(3, linear)] = at.baseline[1];
        map[(4, 1)] = 1.0 / self.half;
        if self.free_phase {
            let square = at.heights[0].powi(2) + at.dispersive.powi(2);
            map[(5, 2)] = -at.dispersive / square;
            map[(5, linear - 1)] = at.heights[0] / square;
        }
        for n in 1..lines {
            map[(reported - lines + n, 2 + n)] = 1.0;
        }
        let covariance = &map * scaled * map.transpose();
        let estimate = |i: usize, value: f64| Estimate {
            value,
            sigma: covariance[(i, i)].max(0.0).sqrt(),
        };
        let base = estimate(3, self.mean + at.baseline[0] + at.baseline[1] * at.centre);
        let height = estimate(2, at.heights[0]);
        let peak = Peak {
            centre: estimate(0, self.middle + self.half * at.centre),
            fwhm: estimate(1, self.half * at.fwhm()),
            height,
            phase: self
                .free_phase
                .then(|| estimate(5, at.dispersive.atan2(at.heights[0]))),
            contrast: contrast(height.value, base.value - options.dark, &covariance),
            neighbours: (1..lines)
                .map(|n| estimate(reported - lines + n, at.heights[n]))
                .collect(),
        };
        Some(LineFit {
            found: Found::Peak(peak),
            gain: 0.0,
            base,
            slope: estimate(4, at.baseline[1] / self.half),
            covariance: rows(&covariance),
            chi2: at.sum_of_squares / (noise * noise),
            dof: self.axis.len().saturating_sub(linear + 2),
            noise,
            tests: test_residuals(&[]),
            flags: Vec::new(),
        })
    }

    /// Inverse normal matrix of all parameters; columns that the window does not hold count as absent.
    fn covariance(&self, at: &Refined) -> Option<DMatrix<f64>> {
        let mut normal = at.gram.normal_matrix();
        for i in 2..self.linear_count() {
            if at.reduced.linear[i] == 0.0 {
                normal.row_mut(i).fill(0.0);
                normal.column_mut(i).fill(0.0);
                normal[(i, i)] = 1.0;
            }
        }
        invert(&normal)
    }

    pub fn warnings(&self, at: &Refined) -> Vec<LineFlag> {
        let fwhm = at.fwhm();
        let mut flags = Vec::new();
        if at.centre.abs() > 1.0 - 0.5 * fwhm.min(1.0) {
            flags.push(LineFlag::AtEdge);
        }
        if fwhm <= 1.2 * self.fwhm_range.0 || fwhm >= 2.0 * self.fwhm_range.1 {
            flags.push(LineFlag::WidthAtBound);
        }
        if !at.converged {
            flags.push(LineFlag::NotConverged);
        }
        flags
    }
}

/// Damped Gauss-Newton step in (centre, log width) and the decrease of the sum of squares it promises.
fn step(reduced: &Reduced, damping: f64, fwhm: f64) -> Option<([f64; 2], f64)> {
    let mut matrix = reduced.information.clone();
    for i in 0..2 {
        matrix[(i, i)] *= 1.0 + damping;
    }
    let inverse = invert(&matrix)?;
    let step: DVector<f64> = inverse * &reduced.gradient;
    let promised = step.dot(&reduced.gradient);
    // Never more than a width, never more than a factor of two in width.
    let excess = (step[0].abs() / fwhm).max(step[1].abs() / 0.7).max(1.0);
    Some(([step[0] / excess, step[1] / excess], promised.max(0.0)))
}

/// (T_peak - T_base)/(T_peak + T_base) for height h over a base b without its dark part: h / (2 b + h).
fn contrast(height: f64, base: f64, covariance: &DMatrix<f64>) -> Option<Estimate> {
    let total = 2.0 * base + height;
    if total <= 0.0 {
        return None;
    }
    let (by_height, by_base) = (
        2.0 * base / (total * total),
        -2.0 * height / (total * total),
    );
    let variance = by_height * by_height * covariance[(2, 2)]
        + by_base * by_base * covariance[(3, 3)]
        + 2.0 * by_height * by_base * covariance[(2, 3)];
    Some(Estimate {
        value: height / total,
        sigma: variance.max(0.0).sqrt(),
    })
}

fn rows(matrix: &DMatrix<f64>) -> Vec<Vec<f64>> {
    matrix
        .row_iter()
        .map(|r| r.iter().copied().collect())
        .collect()
}

/// Products of the baseline's columns 1, x and the data.
fn products(axis: &[f64], level: &[f64]) -> Gram {
    let mut gram = Gram::new(3);
    let mut block: Block = [[0.0; BLOCK]; COLUMNS];
    for (axis, level) in axis.chunks(BLOCK).zip(level.chunks(BLOCK)) {
        block[..3].iter_mut().for_each(|c| c.fill(0.0));
        block[0][..axis.len()].fill(1.0);
        block[1][..axis.len()].copy_from_slice(axis);
        block[2][..axis.len()].copy_from_slice(level);
        gram.add(&block);
    }
    gram
}
