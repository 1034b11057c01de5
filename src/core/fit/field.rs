//! The field law across points: coil constant, residual field, null current and transverse field from line centres.
//!
//! A current I makes the axial field b = k I + B0 beside the transverse field Bt; |B| = sqrt(b^2 + Q), where
//! Q = Bt^2 is fitted as a *signed* parameter, so that noise can push it either way and its error stays Gaussian.
//! - **Resolved** peaks stand at q nu_L(|B|), q = -2..2, with the weights of
//!   [`tilt_weights`](super::shapes::tilt_weights) for cos(theta) = b/|B|.
//! - **Overlapping** peaks merge into a line at their centroid 2 cos(theta) nu_L, which is linear in b and knows
//!   nothing of Q. Taking the square-root law there pulls Q to zero and k up by as much as 1.5 %.
//!
//! nu_L is half the frequency of the q = 2 line ([`Zeeman`]). Q comes from resolved points alone; where they do
//! not constrain it the answer is an upper limit or "cannot tell", never a number.

use serde::{Deserialize, Serialize};

use super::{Estimate, FitError, require_finite};

mod assign;
mod law;

pub(super) use assign::find_starts;
pub(super) use law::{Law, LawFit, Model, Observation, fit_law, report};

/// From this spacing on, in FWHM, neighbouring peaks count as resolved: two equal Lorentzians show two maxima from
/// 0.58 FWHM on, but only from about 1.5 do free heights, a common width and the spacing decouple (the error of a
/// centre is then within 10 % of that of a lone line).
pub const RESOLVED_FROM: f64 = 1.5;
/// Up to this spacing, in FWHM, the five peaks count as one line at their centroid: its pull off the centroid, of
/// third order in the spacing, is then below 0.01 FWHM at any angle.
pub const MERGED_UNTIL: f64 = 0.4;
/// Peaks other than the strongest may carry this much weight before an in-between spacing disqualifies a point.
pub const LONE_WEIGHT: f64 = 0.02;
/// The transverse field is a value, not a limit, if Q = 0 costs more than this in chi-square (4 sigma).
pub const MEASURED_FROM: f64 = 16.0;

/// Two-photon frequency of the q = 2 line against the field's magnitude: f(B) = slope B + quadratic B^2.
#[derive(Debug, Clone, Copy, PartialEq, Serialize, Deserialize)]
pub struct Zeeman {
    /// Hz/T, from Breit-Rabi; 13.9916661e9 for 87Rb F = 2, Delta m = 2. Positive; the sign is `handedness`.
    pub slope: f64,
    /// Hz/T^2, 0 unless populations are unequal.
    pub quadratic: f64,
}

impl Zeeman {
    /// Spacing of neighbouring peaks nu_L and its derivative by the field: Hz and Hz/T, for `field` >= 0 in T.
    pub fn spacing(&self, field: f64) -> (f64, f64) {
        (
            0.5 * (self.slope + self.quadratic * field) * field,
            0.5 * self.slope + self.quadratic * field,
        )
    }
}

/// What the bench knows about the field before the fit.
#[derive(Debug, Clone, Copy, PartialEq, Serialize, Deserialize)]
pub struct FieldOptions {
    /// The law of the level pair.
    pub zeeman: Zeeman,
    /// +1 if a field along the light raises the line, -1 for the other handedness.
    pub handedness: f64,
    /// Nominal coil constant, T/A, with its sign; the truth lies within `tolerance` of it.
    pub nominal: f64,
    /// Relative tolerance of `nominal`, e.g. 0.25.
    pub tolerance: f64,
    /// Has the light shift been measured or removed? If not, the residual field includes it.
    pub light_shift_known: bool,
}

/// One point: where a line stands.
#[derive(Debug, Clone, Copy, PartialEq, Serialize, Deserialize)]
pub struct FieldPoint {
    /// Coil current, A.
    pub current: f64,
    /// Signed two-photon detuning of the line, Hz.
    pub centre: f64,
    /// Its standard uncertainty, Hz; positive.
    pub sigma: f64,
    /// Full width at half maximum, Hz.
    pub fwhm: f64,
}

/// How a point entered the field law.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Serialize, Deserialize)]
pub enum Regime {
    /// The peak of this q, apart from its neighbours.
    Resolved {
        /// Which of the five, -2..2.
        q: i8,
    },
    /// All five in one line: the centroid, linear in the axial field.
    Merged,
    /// Neither: left out.
    LeftOut,
}

/// A point against the law.
#[derive(Debug, Clone, Copy, PartialEq, Serialize, Deserialize)]
pub struct FieldResidual {
    /// Coil current, A.
    pub current: f64,
    /// How it was used.
    pub regime: Regime,
    /// Observed frequency, Hz.
    pub observed: f64,
    /// Its standard uncertainty, Hz.
    pub sigma: f64,
    /// The law's prediction, Hz.
    pub predicted: f64,
}

/// The transverse field.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize)]
pub enum Transverse {
    /// Magnitude, T.
    Measured(Estimate),
    /// Not told from zero.
    UpperLimit {
        /// T.
        limit: f64,
        /// Probability with which it covers the truth, 0.95.
        confidence: f64,
    },
    /// The data do not constrain it.
    CannotTell {
        /// Why, in words.
        reason: String,
    },
}

/// Profile-likelihood intervals: where chi-square rises by 1 and by 4 over its minimum, others refitted.
#[derive(Debug, Clone, Copy, PartialEq, Serialize, Deserialize)]
pub struct Interval {
    /// 68.3 %.
    pub one_sigma: (f64, f64),
    /// 95.4 %.
    pub two_sigma: (f64, f64),
}

/// The answer of the field law.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize)]
pub struct FieldFit {
    /// k, T/A.
    pub coil_constant: Estimate,
    /// B0 along the light at zero current, T; with an unknown light shift, plus the common offset as a field.
    pub residual_field: Estimate,
    /// Is the light shift part of `residual_field` (and of `null_current`)? One handedness cannot tell them apart.
    pub includes_light_shift: bool,
    /// The current at which the axial field vanishes, A.
    pub null_current: Estimate,
    /// The field across the light.
    pub transverse: Transverse,
    /// Q = Bt^2 as fitted, signed, T^2; `None` if it was not constrained.
    pub transverse_squared: Option<Estimate>,
    /// Displacement common to all peaks (light shift and RF offset), Hz; `None` if held at 0.
    pub offset: Option<Estimate>,
    /// Covariance of [k, B0, Q, offset] in T/A, T, T^2, Hz; zeros for a parameter that was held.
    pub covariance: Vec<Vec<f64>>,
    /// Sum of squared residuals over their variances.
    pub chi2: f64,
    /// Points used less parameters.
    pub dof: usize,
    /// Profile interval of the coil constant, T/A.
    pub coil_constant_interval: Interval,
    /// Profile interval of the residual field, T.
    pub residual_field_interval: Interval,
    /// Profile interval of Q, T^2, where it was constrained.
    pub transverse_squared_interval: Option<Interval>,
    /// Every point, in the order given.
    pub points: Vec<FieldResidual>,
}

impl FieldFit {
    /// The axial field (light shift included where `residual_field` includes it) at this current, T.
    pub fn axial(&self, current: f64) -> f64 {
        self.coil_constant.value * current + self.residual_field.value
    }

    /// What to call `residual_field`.
    pub fn residual_field_name(&self) -> &'static str {
        if self.includes_light_shift {
            "residual field including light shift"
        } else {
            "residual field"
        }
    }
}

/// Fits the field law to line centres. Which of the five peaks a centre belongs to is found by prediction and
/// iterated, starting from a search that needs only the nominal coil constant.
///
/// # Errors
/// NaN, a sigma or width that is not positive, fewer than four points, a nominal constant of zero.
pub fn fit_field(points: &[FieldPoint], options: &FieldOptions) -> Result<FieldFit, FitError> {
    check(points, options)?;
    let start = find_starts(points, options)?[0];
    let (observations, regimes, found) = iterate(points, start, options)?;
    report(&observations, &regimes, points, found, options)
}

/// A better model from lone centres; `None` if they do not allow one.
pub(super) fn polish(points: &[FieldPoint], start: Model, options: &FieldOptions) -> Option<Model> {
    let (_, _, found) = iterate(points, start, options).ok()?;
    let off = (found.model.constant / options.nominal - 1.0).abs();
    (off < 1.2 * options.tolerance).then_some(found.model)
}

/// Assigns and fits in turn until the assignment stays.
fn iterate(
    points: &[FieldPoint],
    start: Model,
    options: &FieldOptions,
) -> Result<(Vec<Observation>, Vec<Regime>, LawFit), FitError> {
    let mut model = start;
    let mut regimes = assign::regimes(points, &model, options);
    let mut fit = None;
    for _ in 0..8 {
        let observations = assign::observations(points, &regimes);
        let found = fit_law(&observations, options, &model, false)?;
        model = found.model;
        let next = assign::regimes(points, &model, options);
        let same = next == regimes;
        fit = Some((observations, std::mem::replace(&mut regimes, next), found));
        if same {
            break;
        }
    }
    fit.ok_or(FitError::Undetermined {
        what: "the coil constant",
        remedy: "record more points",
    })
}

pub(super) fn check_options(options: &FieldOptions) -> Result<(), FitError> {
    let FieldOptions {
        zeeman,
        handedness,
        nominal,
        tolerance,
        ..
    } = *options;
    require_finite(
        "field options",
        &[
            zeeman.slope,
            zeeman.quadratic,
            handedness,
            nominal,
            tolerance,
        ],
    )?;
    if zeeman.slope <= 0.0 {
        return Err(FitError::Option {
            option: "zeeman.slope",
            value: zeeman.slope,
            must: "positive, Hz/T",
        });
    }
    if handedness.abs() != 1.0 {
        return Err(FitError::Option {
            option: "handedness",
            value: handedness,
            must: "+1 or -1",
        });
    }
    if nominal == 0.0 {
        return Err(FitError::Option {
            option: "nominal",
            value: nominal,
            must: "the coil constant, not zero, T/A",
        });
    }
    if !(tolerance > 0.0 && tolerance < 1.0) {
        return Err(FitError::Option {
            option: "tolerance",
            value: tolerance,
            must: "between 0 and 1",
        });
    }
    Ok(())
}

fn check(points: &[FieldPoint], options: &FieldOptions) -> Result<(), FitError> {
    check_options(options)?;
    if points.len() < 4 {
        return Err(FitError::TooFew {
            what: "points",
            got: points.len(),
            needed: 4,
        });
    }
    for (index, p) in points.iter().enumerate() {
        for (what, value) in [
            ("current", p.current),
            ("centre", p.centre),
            ("sigma", p.sigma),
            ("fwhm", p.fwhm),
        ] {
            if !value.is_finite() {
                return Err(FitError::NotFinite { what, index, value });
            }
        }
        for (option, value) in [("sigma", p.sigma), ("fwhm", p.fwhm)] {
            if value <= 0.0 {
                return Err(FitError::Option {
                    option,
                    value,
                    must: "positive, Hz",
                });
            }
        }
    }
    Ok(())
}

#[cfg(test)]
mod tests;
