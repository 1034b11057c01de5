//! The stages of a scan's fit: lone lines, a first model, then pattern and law in turn.

use super::super::Estimate;
use super::super::field::{self, FieldPoint, LawFit, Model, Observation, Regime};
use super::super::line::{LineFit, LineFlag, combine_lines, fit_line};
use super::look::{Averaged, PointSeen, average, look};
use super::search::search;
use super::{FitError, PointFit, PointFlag, ScanFit, ScanOptions, ScanPoint, width};

/// Rounds of pattern and law; three settle it, the rest is for a poor first model.
const ROUNDS: usize = 8;
/// The rounds end when no parameter moves by more than this share of its sigma.
const SETTLED: f64 = 0.02;
/// Gain in chi-square that a transverse field must bring to the patterns.
const SIMPLER: f64 = 9.0;
/// A point this many sigmas off the law is flagged.
const OFF_THE_LAW: f64 = 5.0;

pub(super) fn run(points: &[ScanPoint], options: &ScanOptions) -> Result<ScanFit, FitError> {
    field::check_options(&options.field)?;
    let lines = lone_lines(points, options)?;
    let traces: Vec<Vec<Averaged>> = points.iter().map(average).collect();
    let centres = lone_centres(points, &lines);
    if centres.len() < 4 {
        return Err(FitError::TooFew {
            what: "points with a line",
            got: centres.len(),
            needed: 4,
        });
    }
    let bench = Bench {
        points,
        traces: &traces,
        options,
    };
    let fwhm = median(centres.iter().map(|c| c.fwhm));
    let settled = bench.best(&centres, fwhm)?;
    report(points, options, lines, &traces, settled)
}

/// A fixed point of pattern and law.
struct Settled {
    seen: Vec<PointSeen>,
    observations: Vec<Observation>,
    fit: LawFit,
    /// Gain in chi-square of all traces, points left out of the law included: the referee between fixed points.
    gain: f64,
    /// Common width, Hz.
    fwhm: f64,
}

/// Which transverse field the patterns have; the law fits Q in either case.
#[derive(Clone, Copy, PartialEq, Eq)]
enum Tilt {
    Fitted,
    None,
}

/// The scan as the rounds see it.
struct Bench<'a> {
    points: &'a [ScanPoint<'a>],
    traces: &'a [Vec<Averaged>],
    options: &'a ScanOptions,
}

impl Bench<'_> {
    /// The best of several fixed points. A wrong one (every q taken for another, a transverse field that hides the
    /// points near the null) satisfies the law, but not the traces: their gain decides.
    fn best(&self, centres: &[FieldPoint], fwhm: f64) -> Result<Settled, FitError> {
        let field = &self.options.field;
        let starts = field::find_starts(centres, field)?;
        let polish = |m: &Model| field::polish(centres, *m, field).unwrap_or(*m);
        let mut best: Option<(bool, Settled)> = None;
        let mut failure = None;
        // Each start with its transverse field in the patterns and, if that does not satisfy, without.
        let polished = starts.iter().map(|s| (polish(s), fwhm));
        let trials = self.searched(centres).into_iter().chain(polished);
        let trials = trials.flat_map(|(model, fwhm)| {
            let bare = Model {
                squared: 0.0,
                ..model
            };
            [(model, fwhm, Tilt::Fitted), (bare, fwhm, Tilt::None)]
        });
        for (model, fwhm, tilt) in trials {
            match self.settle(model, fwhm, tilt) {
                Ok(settled) => {
                    let credible = self.credible(&settled);
                    if best
                        .as_ref()
                        .is_none_or(|(c, b)| (credible, settled.gain) > (*c, b.gain))
                    {
                        best = Some((credible, settled));
                    }
                    if credible {
                        break;
                    }
                }
                Err(error) => failure = Some(error),
            }
        }
        let undetermined = FitError::Undetermined {
            what: "a coil constant near the nominal one",
            remedy: "check the nominal constant, the handedness and the window",
        };
        let Some((_, best)) = best else {
            return Err(failure.unwrap_or(undetermined));
        };
        self.without_transverse(best)
    }

    /// The start that all traces together prefer. Lone lines fitted to five weak peaks come out far too wide; the
    /// pattern at a trial width does not.
    fn searched(&self, centres: &[FieldPoint]) -> Option<(Model, f64)> {
        let currents: Vec<f64> = self.points.iter().map(|point| point.current).collect();
        if let Some(width) = self.options.expected_width {
            let bounds = (0.5 * width, 2.0 * width);
            return search(&currents, self.traces, bounds, self.options);
        }
        let mut widths: Vec<f64> = centres.iter().map(|centre| centre.fwhm).collect();
        widths.sort_by(f64::total_cmp);
        let narrow = *widths.get(widths.len() / 10)?;
        let wide = *widths.get(widths.len() / 2)?;
        search(&currents, self.traces, (narrow / 1.5, wide), self.options)
    }

    /// Would the traces rather have no transverse field in their patterns? Where Q is mostly noise, its square root is
    /// large and would tear apart the very points that show it to be small.
    fn without_transverse(&self, best: Settled) -> Result<Settled, FitError> {
        if best.fit.model.squared <= 0.0 {
            return Ok(best);
        }
        let bare = Model {
            squared: 0.0,
            ..best.fit.model
        };
        let gain: f64 = self
            .look(&bare, best.fwhm, true)
            .iter()
            .map(|s| s.gain)
            .sum();
        if gain <= best.gain - SIMPLER {
            return Ok(best);
        }
        match self.settle(bare, best.fwhm, Tilt::None) {
            Ok(other) if other.gain > best.gain - SIMPLER => Ok(other),
            Ok(_) | Err(_) => Ok(best),
        }
    }

    /// Nothing speaks against this one: others need not be tried.
    fn credible(&self, settled: &Settled) -> bool {
        let dof = settled.observations.len() as f64 - 3.0;
        let apart = |s: &PointSeen| s.chi2 < s.dof + 8.0 * (2.0 * s.dof).sqrt();
        let fine = settled.seen.iter().filter(|s| apart(s)).count();
        settled.fit.chi2 < dof + 6.0 * (2.0 * dof.max(1.0)).sqrt()
            && 10 * fine >= 9 * settled.seen.len()
    }

    fn look(&self, model: &Model, fwhm: f64, search: bool) -> Vec<PointSeen> {
        let pairs = self.points.iter().zip(self.traces);
        pairs
            .map(|(p, t)| look(p.current, t, model, fwhm, search, self.options))
            .collect()
    }

    /// Pattern and law in turn until the model stays.
    fn settle(&self, start: Model, fwhm: f64, tilt: Tilt) -> Result<Settled, FitError> {
        let field = &self.options.field;
        let (mut model, mut fwhm) = (start, fwhm);
        let mut settled = None;
        for round in 0..ROUNDS {
            let pattern = match tilt {
                Tilt::Fitted => model,
                Tilt::None => Model {
                    squared: 0.0,
                    ..model
                },
            };
            let seen = self.look(&pattern, fwhm, round == 0);
            let observations: Vec<Observation> =
                seen.iter().filter_map(|s| s.observation).collect();
            let fit = match field::fit_law(&observations, field, &model, !field.light_shift_known) {
                Ok(fit) => fit,
                Err(_) if settled.is_some() => break,
                Err(error) => return Err(error),
            };
            let moved = moved(&model, &fit);
            model = fit.model;
            let off = (model.constant / field.nominal - 1.0).abs();
            if off > 1.1 * field.tolerance {
                break;
            }
            let gain = seen.iter().map(|s| s.gain).sum();
            let used = seen.iter().filter(|s| s.observation.is_some());
            fwhm = median(used.filter_map(|s| s.fwhm).map(|w| w.value));
            settled = Some(Settled {
                seen,
                observations,
                fit,
                gain,
                fwhm,
            });
            if round > 1 && moved < SETTLED {
                break;
            }
        }
        settled.ok_or(FitError::Undetermined {
            what: "a coil constant near the nominal one",
            remedy: "check the nominal constant, the handedness and the window",
        })
    }
}

/// Fits a lone line to every acquisition.
fn lone_lines(points: &[ScanPoint], options: &ScanOptions) -> Result<Vec<Vec<LineFit>>, FitError> {
    let fit = |p: &ScanPoint| {
        p.acquisitions
            .iter()
            .map(|a| {
                let clipped = a.clipped || options.line.clipped;
                let line = super::LineOptions {
                    clipped,
                    neighbours: Vec::new(),
                    ..options.line.clone()
                };
                fit_line(a.detuning, a.signal, &line)
            })
            .collect::<Result<Vec<_>, _>>()
    };
    points.iter().map(fit).collect()
}

fn lone_centres(points: &[ScanPoint], lines: &[Vec<LineFit>]) -> Vec<FieldPoint> {
    points
        .iter()
        .zip(lines)
        .filter_map(|(p, fits)| {
            let together = combine_lines(p.acquisitions.iter().map(|a| a.direction).zip(fits))?;
            let (centre, sigma) = (together.centre.value, together.centre.sigma);
            Some(FieldPoint {
                current: p.current,
                centre,
                sigma,
                fwhm: together.fwhm.value,
            })
        })
        .collect()
}

/// Largest move of a parameter in its sigmas.
fn moved(from: &Model, fit: &LawFit) -> f64 {
    let moves = [
        fit.model.constant - from.constant,
        fit.model.residual - from.residual,
        fit.model.squared - from.squared,
        fit.model.offset - from.offset,
    ];
    moves
        .iter()
        .enumerate()
        .map(|(i, m)| (m, fit.covariance[(i, i)].sqrt()))
        .filter(|(_, sigma)| *sigma > 0.0)
        .map(|(m, sigma)| m.abs() / sigma)
        .fold(0.0, f64::max)
}

fn median(values: impl Iterator<Item = f64>) -> f64 {
    let mut values: Vec<f64> = values.filter(|v| v.is_finite()).collect();
    if values.is_empty() {
        return f64::NAN;
    }
    let middle = values.len() / 2;
    *values.select_nth_unstable_by(middle, f64::total_cmp).1
}

fn report(
    points: &[ScanPoint],
    options: &ScanOptions,
    lines: Vec<Vec<LineFit>>,
    traces: &[Vec<Averaged>],
    settled: Settled,
) -> Result<ScanFit, FitError> {
    let Settled {
        seen,
        observations,
        fit,
        ..
    } = settled;
    let model = fit.model;
    let scatter = scatter(points, &lines);
    let used = observations.len();
    let regimes: Vec<Regime> = seen.iter().map(|s| s.regime).collect();
    let places: Vec<FieldPoint> = points
        .iter()
        .zip(&seen)
        .map(|(p, s)| {
            let centre = s.centre.unwrap_or(Estimate {
                value: 0.0,
                sigma: 0.0,
            });
            let fwhm = s.fwhm.map_or(0.0, |w| w.value);
            FieldPoint {
                current: p.current,
                centre: centre.value,
                sigma: centre.sigma,
                fwhm,
            }
        })
        .collect();
    let mut field = field::report(&observations, &regimes, &places, fit, &options.field)?;
    let mut out = Vec::with_capacity(points.len());
    for (((point, fits), s), residual) in points.iter().zip(lines).zip(&seen).zip(&mut field.points)
    {
        if s.observation.is_none() {
            residual.regime = Regime::LeftOut;
        }
        let flags = flags(point, &fits, s, residual.observed - residual.predicted);
        out.push(PointFit {
            current: point.current,
            lines: fits,
            centre: s.centre,
            fwhm: s.fwhm,
            flags,
        });
    }
    let width = width::name(points, traces, &seen, &model, options);
    Ok(ScanFit {
        linewidth: width.as_ref().map(|w| w.linewidth),
        contrast: width.as_ref().and_then(|w| w.contrast),
        named_at: width.as_ref().map(|w| w.current),
        linewidth_trend: width::trend(points, &seen, &field),
        lag: mean_lag(&seen),
        scatter,
        used,
        field,
        points: out,
    })
}

fn flags(point: &ScanPoint, fits: &[LineFit], seen: &PointSeen, residual: f64) -> Vec<PointFlag> {
    let mut flags = Vec::new();
    let sigma = seen.centre.map_or(f64::INFINITY, |c| c.sigma);
    let checks = [
        (PointFlag::NoPeak, seen.centre.is_none()),
        (
            PointFlag::Overlapping,
            seen.centre.is_some() && seen.observation.is_none(),
        ),
        (
            PointFlag::OffTheLaw,
            seen.observation.is_some() && residual.abs() > OFF_THE_LAW * sigma,
        ),
        (
            PointFlag::OneDirection,
            point
                .acquisitions
                .windows(2)
                .all(|w| w[0].direction == w[1].direction),
        ),
        (
            PointFlag::Clipped,
            fits.iter().any(|f| f.has(LineFlag::Clipped)),
        ),
        (PointFlag::Condemned, seen.condemned),
    ];
    flags.extend(
        checks
            .iter()
            .filter(|(_, raised)| *raised)
            .map(|(flag, _)| *flag),
    );
    flags
}

/// Scatter of the acquisitions' lone centres about the mean of their point and direction over the predicted one.
fn scatter(points: &[ScanPoint], lines: &[Vec<LineFit>]) -> Option<f64> {
    let ratios: Vec<f64> = points
        .iter()
        .zip(lines)
        .filter_map(|(p, fits)| {
            combine_lines(p.acquisitions.iter().map(|a| a.direction).zip(fits))?.scatter
        })
        .collect();
    let mean_square = ratios.iter().map(|r| r * r).sum::<f64>() / ratios.len() as f64;
    (!ratios.is_empty()).then(|| mean_square.sqrt())
}

fn mean_lag(seen: &[PointSeen]) -> Option<Estimate> {
    let lags: Vec<Estimate> = seen
        .iter()
        .filter(|s| s.observation.is_some())
        .filter_map(|s| s.lag)
        .collect();
    let weight: f64 = lags.iter().map(|l| l.sigma.powi(-2)).sum();
    let value = lags.iter().map(|l| l.value * l.sigma.powi(-2)).sum::<f64>() / weight;
    (!lags.is_empty() && weight.is_finite()).then(|| Estimate {
        value,
        sigma: weight.powf(-0.5),
    })
}
