//! A whole scan: traces at many currents in, line fits, field law, width and contrast out.
//!
//! Two stages, iterated: every trace is fitted with the peaks that the present field model predicts in it, the
//! resulting frequencies are fitted with the field law, and the better model predicts again. Several starts compete;
//! the gain of all traces decides between them, since a wrong assignment can satisfy the law but not the traces.
//!
//! # Why not one joint fit of five components over all traces
//! Linearised, this *is* the joint fit with a free width, baseline and, where the peaks stand apart, free heights in
//! every trace; only the assumption of weights, of a common width and of an exact Lorentzian is dropped. That
//! assumption would tell the transverse field from the broadening near the null, but a thick cell breaks it: heights
//! follow exp(depth x weight), not the weight. Measured over 500 seeds each with a line exp(0.5 x Lorentzian) (21
//! points, 1,000 samples, both directions): coil constant within 1 and 2 sigma 65.6 and 97.4 % (tilts resolved), 64.1
//! and 94.2 % (tiny tilts), transverse field 64.8 and 93.8 %: as for the exact shape. Only the linewidth suffers: it is
//! the FWHM of the best Lorentzian, there low by a few per cent.
//!
//! What is not constrained by peaks apart is not answered: the transverse field is then "cannot tell".
//!
//! `LineShape::Mixed` is taken as `Lorentzian` in the patterns; share one phase with `MixedAt`.

use serde::{Deserialize, Serialize};

use super::field::{FieldFit, FieldOptions};
use super::line::{LineFit, LineOptions};
use super::{Direction, Estimate, FitError};

/// One acquisition: samples on their axis.
#[derive(Debug, Clone, PartialEq)]
pub struct Acquisition<'a> {
    /// Which way the sweep went.
    pub direction: Direction,
    /// Signed two-photon detuning of every sample, Hz.
    pub detuning: &'a [f64],
    /// Signal, V.
    pub signal: &'a [f64],
    /// Did the digitizer clip?
    pub clipped: bool,
}

/// All acquisitions at one coil current.
#[derive(Debug, Clone, PartialEq)]
pub struct ScanPoint<'a> {
    /// Coil current, A.
    pub current: f64,
    /// The acquisitions, in any order of directions.
    pub acquisitions: Vec<Acquisition<'a>>,
}

/// What the fit of a scan is told.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize)]
pub struct ScanOptions {
    /// Shape, polarity, noise and dark level of the traces.
    pub line: LineOptions,
    /// What is known about the field.
    pub field: FieldOptions,
    /// Full width at half maximum that the bench expects, Hz, good to a factor of two: the first model is searched
    /// with it. `None`: from the lone lines, which come out too wide where five weak peaks stand side by side.
    pub expected_width: Option<f64>,
}

/// What to know before trusting a point.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Hash, Serialize, Deserialize)]
pub enum PointFlag {
    /// No acquisition shows a line.
    NoPeak,
    /// Peaks overlap too much to tell a centre; the point was left out of the field law.
    Overlapping,
    /// The centre lies more than 5 sigma off the law.
    OffTheLaw,
    /// Only one direction was swept: the lag stays in the centre.
    OneDirection,
    /// An acquisition clipped.
    Clipped,
    /// The residual tests condemn an acquisition.
    Condemned,
}

/// The fit of one point.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize)]
pub struct PointFit {
    /// Coil current, A.
    pub current: f64,
    /// Fit of a lone line to every acquisition, in their order.
    pub lines: Vec<LineFit>,
    /// Frequency of the dominating predicted peak, lag cancelled, Hz; `None` without a line.
    pub centre: Option<Estimate>,
    /// Common width of the peaks, Hz.
    pub fwhm: Option<Estimate>,
    /// Warnings.
    pub flags: Vec<PointFlag>,
}

/// The answer of a scan.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize)]
pub struct ScanFit {
    /// Coil constant, residual field, null current, transverse field.
    pub field: FieldFit,
    /// FWHM at `named_at`, Hz.
    pub linewidth: Option<Estimate>,
    /// Contrast at `named_at`.
    pub contrast: Option<Estimate>,
    /// The current whose point gives linewidth and contrast, A: the one nearest the null whose strongest peak is
    /// q = +-2 and stands apart (or, if none does, the one farthest from the null).
    pub named_at: Option<f64>,
    /// Change of the FWHM with |I - null current|, Hz/A: an inhomogeneous coil widens the line.
    pub linewidth_trend: Option<Estimate>,
    /// Half the difference of up and down sweeps, Hz; `None` with one direction.
    pub lag: Option<Estimate>,
    /// Scatter of separate acquisitions over what the fits' sigmas predict; `None` without repeats.
    pub scatter: Option<f64>,
    /// Points that entered the field law.
    pub used: usize,
    /// Every point, in the order given.
    pub points: Vec<PointFit>,
}

/// Fits a scan.
///
/// # Errors
/// As [`fit_line`](super::line::fit_line) and [`fit_field`](super::field::fit_field); fewer than four points with
/// a line.
pub fn fit_scan(points: &[ScanPoint], options: &ScanOptions) -> Result<ScanFit, FitError> {
    stages::run(points, options)
}

mod look;
mod pattern;
mod search;
mod stages;
mod width;

#[cfg(test)]
mod tests;
