//! One trace: the centre, width, height and base of its line, with a start that cannot fail and tests that can
//! condemn the answer. Knows nothing of fields; what other peaks the trace may hold it is told as `neighbours`.
//!
//! Model: base line a + b x plus a Lorentzian (or a mixed line, see [`shapes`](super::shapes)) and, at given
//! offsets, neighbours of the same width and free heights. The two nonlinear parameters, centre and width, are
//! refined by damped Gauss-Newton steps on the projected problem (Golub & Pereyra 1973); heights and baseline are
//! solved exactly in every pass.

use serde::{Deserialize, Serialize};

use super::noise::{ResidualTests, difference_sigma, robust_sigma, test_residuals};
use super::start::{self, Polarity, Search};
use super::{Direction, Estimate, FitError, require_finite};

mod refine;

use refine::{Refined, Trace};

/// Gain in chi-square over a sloped baseline that a line must exceed to count as found.
pub const LEAST_GAIN: f64 = 25.0;
/// Most neighbours a trace can be given.
pub const MOST_NEIGHBOURS: usize = 8;
/// Fewest samples of a trace.
pub const FEWEST_SAMPLES: usize = 8;

/// Shape of the line.
#[derive(Debug, Clone, Copy, PartialEq, Default, Serialize, Deserialize)]
pub enum LineShape {
    /// Purely absorptive.
    #[default]
    Lorentzian,
    /// Absorptive and dispersive with a free mixing phase: costs 2 to 10 times the samples.
    Mixed,
    /// Absorptive and dispersive with this mixing phase, rad: share one phase across a scan.
    MixedAt(f64),
}

/// What the fit of one trace is told. `LineOptions::default()` fits a peak anywhere in the window.
#[derive(Debug, Clone, PartialEq, Default, Serialize, Deserialize)]
pub struct LineOptions {
    /// Shape of the line and of its neighbours.
    pub shape: LineShape,
    /// Peak, dip or either.
    pub polarity: Polarity,
    /// One-sigma noise of a sample, V; `None`: estimated from the trace.
    pub noise: Option<f64>,
    /// Signal with no light, V: subtracted for the contrast.
    pub dark: f64,
    /// The centre must lie in [lo, hi], Hz, both inclusive; `None`: anywhere in the window.
    pub centre_within: Option<(f64, f64)>,
    /// Offsets of further lines from the centre, Hz: same width, free heights.
    pub neighbours: Vec<f64>,
    /// Did the digitizer clip? Only flagged: clipped samples carry no information about it.
    pub clipped: bool,
}

/// A line that was found. Sigmas from white noise.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize)]
pub struct Peak {
    /// Centre, Hz.
    pub centre: Estimate,
    /// Full width at half maximum of the absorptive part, Hz.
    pub fwhm: Estimate,
    /// Height of the absorptive part over the base, V; negative for a dip.
    pub height: Estimate,
    /// Mixing phase, rad; `None` where the shape has none or was given one.
    pub phase: Option<Estimate>,
    /// (T_peak - T_base) / (T_peak + T_base) with the dark level subtracted; `None` if the sum is not positive.
    pub contrast: Option<Estimate>,
    /// Heights at the given offsets, V, in their order.
    pub neighbours: Vec<Estimate>,
}

/// Is there a line?
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize)]
pub enum Found {
    /// Yes.
    Peak(Peak),
    /// No line of the wanted sign gains more than [`LEAST_GAIN`] (within the prior window, if one was given).
    NoPeak,
}

/// What to know before trusting a line.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Hash, Serialize, Deserialize)]
pub enum LineFlag {
    /// The digitizer clipped.
    Clipped,
    /// The centre is within half a FWHM of the end of the window or beyond it.
    AtEdge,
    /// The best line lay outside the prior window.
    OutsidePrior,
    /// The width ran to the sample spacing or beyond twice the window.
    WidthAtBound,
    /// Runs test or Durbin-Watson condemn the fit.
    Condemned,
    /// The iteration did not settle.
    NotConverged,
}

/// The fit of one trace.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize)]
pub struct LineFit {
    /// The line, or that there is none.
    pub found: Found,
    /// Decrease of chi-square against a sloped baseline.
    pub gain: f64,
    /// Level under the peak (at the window's middle if there is none), V.
    pub base: Estimate,
    /// Slope of the baseline, V/Hz.
    pub slope: Estimate,
    /// Covariance of [centre, fwhm, height, base, slope, (phase), neighbours..] in their units; of [base, slope]
    /// without a peak.
    pub covariance: Vec<Vec<f64>>,
    /// Sum of squared residuals over the noise squared.
    pub chi2: f64,
    /// Samples less parameters.
    pub dof: usize,
    /// One-sigma noise of a sample, V: given, or from the second differences of the residuals.
    pub noise: f64,
    /// Residual tests.
    pub tests: ResidualTests,
    /// Warnings, in no order.
    pub flags: Vec<LineFlag>,
}

impl LineFit {
    /// The line, if there is one.
    pub fn peak(&self) -> Option<&Peak> {
        match &self.found {
            Found::Peak(peak) => Some(peak),
            Found::NoPeak => None,
        }
    }

    /// Was this warning raised?
    pub fn has(&self, flag: LineFlag) -> bool {
        self.flags.contains(&flag)
    }
}

/// Fits one trace. `detuning` in Hz, in any order and spacing; `signal` in V.
///
/// # Errors
/// Lengths that differ, fewer than [`FEWEST_SAMPLES`] samples, NaN or infinity, an axis without extent, a
/// negative noise, more than [`MOST_NEIGHBOURS`] neighbours. A missing line is no error.
pub fn fit_line(
    detuning: &[f64],
    signal: &[f64],
    options: &LineOptions,
) -> Result<LineFit, FitError> {
    check(detuning, signal, options)?;
    let sorted;
    let (detuning, signal) = if is_monotone(detuning) {
        (detuning, signal)
    } else {
        sorted = sort(detuning, signal);
        (&sorted.0[..], &sorted.1[..])
    };
    let trace = Trace::new(detuning, signal, options)?;
    let rough = options
        .noise
        .unwrap_or_else(|| robust_sigma(signal))
        .max(trace.floor);
    let search = Search {
        centre: trace.prior,
        fwhm: trace.fwhm_range,
        polarity: options.polarity,
    };
    let refined = start::search(&trace.axis, &trace.level, &search).map(|s| trace.refine(s, rough));
    let candidate = refined.filter(|r| options.polarity.admits(r.heights[0]));
    Ok(judge(&trace, candidate, options))
}

fn check(detuning: &[f64], signal: &[f64], options: &LineOptions) -> Result<(), FitError> {
    if detuning.len() != signal.len() {
        return Err(FitError::Length {
            what: "signal",
            got: signal.len(),
            expected: detuning.len(),
        });
    }
    let needed = FEWEST_SAMPLES + options.neighbours.len();
    if detuning.len() < needed {
        return Err(FitError::TooFew {
            what: "samples",
            got: detuning.len(),
            needed,
        });
    }
    require_finite("detuning", detuning)?;
    require_finite("signal", signal)?;
    require_finite("neighbours", &options.neighbours)?;
    require_finite("dark", &[options.dark])?;
    if options.neighbours.len() > MOST_NEIGHBOURS {
        let value = options.neighbours.len() as f64;
        return Err(FitError::Option {
            option: "neighbours",
            value,
            must: "at most 8 offsets",
        });
    }
    if let Some(noise) = options.noise
        && !(noise > 0.0 && noise.is_finite())
    {
        return Err(FitError::Option {
            option: "noise",
            value: noise,
            must: "positive and finite",
        });
    }
    if let Some((lo, hi)) = options.centre_within {
        require_finite("centre_within", &[lo, hi])?;
        if hi < lo {
            return Err(FitError::Option {
                option: "centre_within",
                value: hi,
                must: "[lo, hi] with lo <= hi",
            });
        }
    }
    if let LineShape::MixedAt(phase) = options.shape {
        require_finite("mixing phase", &[phase])?;
    }
    Ok(())
}

fn is_monotone(axis: &[f64]) -> bool {
    axis.windows(2).all(|w| w[0] <= w[1]) || axis.windows(2).all(|w| w[0] >= w[1])
}

fn sort(detuning: &[f64], signal: &[f64]) -> (Vec<f64>, Vec<f64>) {
    let mut order: Vec<usize> = (0..detuning.len()).collect();
    order.sort_by(|a, b| detuning[*a].total_cmp(&detuning[*b]));
    (
        order.iter().map(|i| detuning[*i]).collect(),
        order.iter().map(|i| signal[*i]).collect(),
    )
}

/// Decides between peak and no peak and dresses the answer.
fn judge(trace: &Trace, candidate: Option<Refined>, options: &LineOptions) -> LineFit {
    let bare = trace.baseline();
    let mut flags = Vec::new();
    if options.clipped {
        flags.push(LineFlag::Clipped);
    }
    let mut gain = 0.0;
    if let Some(refined) = candidate {
        let residuals = trace.residuals(&refined);
        let noise = options
            .noise
            .unwrap_or_else(|| difference_sigma(&residuals))
            .max(trace.floor);
        gain = (bare.sum_of_squares - refined.sum_of_squares) / (noise * noise);
        let inside = options.centre_within.is_none() || refined.centre_within(trace.prior);
        if !inside && gain > LEAST_GAIN {
            flags.push(LineFlag::OutsidePrior);
        }
        if gain > LEAST_GAIN
            && inside
            && let Some(mut fit) = trace.report(&refined, noise, options)
        {
            let tests = test_residuals(&residuals);
            fit.flags = flags;
            fit.flags.extend(trace.warnings(&refined));
            if tests.condemned {
                fit.flags.push(LineFlag::Condemned);
            }
            return LineFit { gain, tests, ..fit };
        }
    }
    LineFit {
        gain,
        flags,
        ..trace.report_baseline(&bare, options)
    }
}

/// Several acquisitions of one point taken together.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize)]
pub struct LinesTogether {
    /// Centre free of the sweep's lag (mean of both directions), Hz.
    pub centre: Estimate,
    /// Half the difference up - down, Hz: the lag at this sweep rate. `None` with one direction only, whose lag
    /// then stays in the centre.
    pub lag: Option<Estimate>,
    /// Weighted mean width, Hz.
    pub fwhm: Estimate,
    /// Scatter of the centres about their direction's mean over what their sigmas predict; 1 for white noise.
    /// `None` if no direction has two acquisitions.
    pub scatter: Option<f64>,
    /// Acquisitions with a line.
    pub count: usize,
}

/// Combines separate fits of one point. The centres are averaged, weighted by their sigmas within a direction and
/// equally between the directions, so that the lag, of opposite sign, cancels exactly. Averaging rather than one
/// joint fit: for white noise both have the same variance, and the average does not care about the axes.
///
/// Returns `None` if none of the fits has a line.
pub fn combine_lines<'a>(
    fits: impl IntoIterator<Item = (Direction, &'a LineFit)>,
) -> Option<LinesTogether> {
    let mut centres: [Vec<Estimate>; 2] = [Vec::new(), Vec::new()];
    let mut widths = Vec::new();
    for (direction, fit) in fits {
        if let Some(peak) = fit.peak() {
            centres[usize::from(direction == Direction::Down)].push(peak.centre);
            widths.push(peak.fwhm);
        }
    }
    let count = widths.len();
    let fwhm = weighted_mean(&widths)?;
    let (centre, lag) = match (weighted_mean(&centres[0]), weighted_mean(&centres[1])) {
        (Some(up), Some(down)) => {
            let sigma = 0.5 * up.sigma.hypot(down.sigma);
            let mean = Estimate {
                value: 0.5 * (up.value + down.value),
                sigma,
            };
            (
                mean,
                Some(Estimate {
                    value: 0.5 * (up.value - down.value),
                    sigma,
                }),
            )
        }
        (Some(one), None) | (None, Some(one)) => (one, None),
        (None, None) => return None,
    };
    Some(LinesTogether {
        centre,
        lag,
        fwhm,
        scatter: scatter(&centres),
        count,
    })
}

/// Fits several acquisitions of one point, each on its own, and combines them ([`combine_lines`]).
///
/// # Errors
/// As [`fit_line`], for the first acquisition that is at fault.
pub fn fit_lines_together(
    acquisitions: &[(Direction, &[f64], &[f64])],
    options: &LineOptions,
) -> Result<(Vec<LineFit>, Option<LinesTogether>), FitError> {
    let fits = acquisitions
        .iter()
        .map(|(_, detuning, signal)| fit_line(detuning, signal, options))
        .collect::<Result<Vec<_>, _>>()?;
    let together = combine_lines(acquisitions.iter().map(|a| a.0).zip(&fits));
    Ok((fits, together))
}

fn weighted_mean(values: &[Estimate]) -> Option<Estimate> {
    let weight: f64 = values.iter().map(|v| v.sigma.powi(-2)).sum();
    if values.is_empty() || !(weight.is_finite() && weight > 0.0) {
        return None;
    }
    let value = values
        .iter()
        .map(|v| v.value * v.sigma.powi(-2))
        .sum::<f64>()
        / weight;
    Some(Estimate {
        value,
        sigma: weight.powf(-0.5),
    })
}

fn scatter(centres: &[Vec<Estimate>; 2]) -> Option<f64> {
    let (mut chi2, mut dof) = (0.0, 0);
    for group in centres.iter().filter(|g| g.len() > 1) {
        let mean = weighted_mean(group)?;
        chi2 += group
            .iter()
            .map(|c| ((c.value - mean.value) / c.sigma).powi(2))
            .sum::<f64>();
        dof += group.len() - 1;
    }
    (dof > 0).then(|| (chi2 / dof as f64).sqrt())
}

#[cfg(test)]
pub(crate) mod tests;
