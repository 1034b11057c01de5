//! The law itself, its least-squares fit with signed Q, its profile likelihood and the report.

use nalgebra::DMatrix;

use super::{
    Estimate, FieldFit, FieldOptions, FieldPoint, FieldResidual, FitError, Interval, MEASURED_FROM,
    Regime, Transverse,
};
use crate::fit::solver::{Residuals, Solution, solve};

/// Unit of field in which the parameters are of order one, T.
const FIELD_UNIT: f64 = 1e-6;
/// Unit of the common offset, Hz.
const OFFSET_UNIT: f64 = 1e3;
/// One-sided 95 %: 1.645^2.
const LIMIT_RISE: f64 = 2.705_543_454_095_404;
/// The offset is fitted if that widens the sigma of B0 by no more than this factor.
const MOST_LOOSENING: f64 = 20.0;
/// Below this magnitude the square root of the law is continued as a constant, T.
const LEAST_FIELD: f64 = 1e-12;

/// The field model: T/A, T, T^2, Hz.
#[derive(Debug, Clone, Copy, PartialEq)]
pub(in crate::fit) struct Model {
    pub constant: f64,
    pub residual: f64,
    pub squared: f64,
    pub offset: f64,
}

impl Model {
    pub fn axial(&self, current: f64) -> f64 {
        self.constant * current + self.residual
    }

    /// |B| at an axial field, Q taken as signed.
    pub fn magnitude(&self, axial: f64) -> f64 {
        (axial * axial + self.squared)
            .max(LEAST_FIELD * LEAST_FIELD)
            .sqrt()
    }

    /// |B| and cos(theta) with Q held to its physical range.
    pub fn physical(&self, axial: f64) -> (f64, f64) {
        let magnitude = axial.hypot(self.squared.max(0.0).sqrt()).max(LEAST_FIELD);
        (magnitude, axial / magnitude)
    }
}

/// What an observed frequency is, as a function of the field.
#[derive(Debug, Clone, Copy, PartialEq)]
pub(in crate::fit) enum Law {
    /// The peak of this q, or for q = 1 the spacing of the peaks.
    Peak(f64),
    /// The centroid of all five.
    Merged,
    /// Linearised at a model: value there, axial field and Q there, derivatives by both (Hz/T, Hz/T^2).
    Linear {
        value: f64,
        axial: f64,
        squared: f64,
        by_axial: f64,
        by_squared: f64,
    },
}

/// One observed frequency. `lever`: its derivative by the common offset.
#[derive(Debug, Clone, Copy, PartialEq)]
pub(in crate::fit) struct Observation {
    pub current: f64,
    pub value: f64,
    pub sigma: f64,
    pub law: Law,
    pub lever: f64,
}

/// Prediction and its derivatives by [k, B0, Q, offset].
fn predict(observation: &Observation, model: &Model, options: &FieldOptions) -> (f64, [f64; 4]) {
    let axial = model.axial(observation.current);
    let (value, by_axial, by_squared) = match observation.law {
        Law::Peak(q) => {
            let magnitude = model.magnitude(axial);
            let (spacing, slope) = options.zeeman.spacing(magnitude);
            let factor = options.handedness * q;
            (
                factor * spacing,
                factor * slope * axial / magnitude,
                factor * slope / (2.0 * magnitude),
            )
        }
        Law::Merged => {
            let (spacing, slope) = options.zeeman.spacing(axial.abs());
            let factor = 2.0 * options.handedness;
            (factor * spacing * axial.signum(), factor * slope, 0.0)
        }
        Law::Linear {
            value,
            axial: at,
            squared,
            by_axial,
            by_squared,
        } => (
            value + by_axial * (axial - at) + by_squared * (model.squared - squared),
            by_axial,
            by_squared,
        ),
    };
    let derivatives = [
        by_axial * observation.current,
        by_axial,
        by_squared,
        observation.lever,
    ];
    (value + observation.lever * model.offset, derivatives)
}

/// The law's value at an observation, Hz.
pub(in crate::fit) fn predicted(
    observation: &Observation,
    model: &Model,
    options: &FieldOptions,
) -> f64 {
    predict(observation, model, options).0
}

/// Least squares with some of [k, B0, Q, offset] free, all in units of order one.
struct Problem<'a> {
    observations: &'a [Observation],
    options: &'a FieldOptions,
    rest: Model,
    free: [bool; 4],
}

impl Problem<'_> {
    fn units(&self) -> [f64; 4] {
        [
            self.options.nominal,
            FIELD_UNIT,
            FIELD_UNIT * FIELD_UNIT,
            OFFSET_UNIT,
        ]
    }

    fn model(&self, parameters: &[f64]) -> Model {
        let mut all = as_array(&self.rest);
        let places = (0..4).filter(|i| self.free[*i]);
        for (place, value) in places.zip(parameters) {
            all[place] = value * self.units()[place];
        }
        Model {
            constant: all[0],
            residual: all[1],
            squared: all[2],
            offset: all[3],
        }
    }

    fn start(&self) -> Vec<f64> {
        let all = as_array(&self.rest);
        (0..4)
            .filter(|i| self.free[*i])
            .map(|i| all[i] / self.units()[i])
            .collect()
    }
}

fn as_array(model: &Model) -> [f64; 4] {
    [model.constant, model.residual, model.squared, model.offset]
}

impl Residuals for Problem<'_> {
    fn count(&self) -> usize {
        self.observations.len()
    }

    fn residuals(&self, parameters: &[f64], out: &mut [f64]) {
        let model = self.model(parameters);
        for (o, observation) in out.iter_mut().zip(self.observations) {
            *o = (predict(observation, &model, self.options).0 - observation.value)
                / observation.sigma;
        }
    }

    fn jacobian(&self, parameters: &[f64], out: &mut DMatrix<f64>) {
        let model = self.model(parameters);
        let units = self.units();
        for (row, observation) in self.observations.iter().enumerate() {
            let (_, derivatives) = predict(observation, &model, self.options);
            for (column, place) in (0..4).filter(|i| self.free[*i]).enumerate() {
                out[(row, column)] = derivatives[place] * units[place] / observation.sigma;
            }
        }
    }
}

/// A fitted law.
#[derive(Debug, Clone)]
pub(in crate::fit) struct LawFit {
    pub model: Model,
    /// Which of [k, B0, Q, offset] were free.
    pub free: [bool; 4],
    /// 4 x 4 in SI units, zeros where held.
    pub covariance: DMatrix<f64>,
    pub chi2: f64,
}

/// Fits k and B0, Q where resolved peaks constrain it (else it is held at 0), and the offset if asked for and if the
/// points can tell it from B0.
pub(in crate::fit) fn fit_law(
    observations: &[Observation],
    options: &FieldOptions,
    start: &Model,
    offset: bool,
) -> Result<LawFit, FitError> {
    let sees_squared = observations.iter().any(|o| match o.law {
        Law::Peak(_) => true,
        Law::Merged => false,
        Law::Linear { by_squared, .. } => by_squared != 0.0,
    });
    let held = Model {
        offset: 0.0,
        ..*start
    };
    if sees_squared
        && let Some(plain) = attempt(observations, options, &held, [true, true, true, false])?
    {
        if offset
            && let Some(full) = attempt(observations, options, &plain.model, [true; 4])?
            && tells_offset(&full, &plain)
        {
            return Ok(full);
        }
        return Ok(plain);
    }
    let bare = Model {
        squared: 0.0,
        ..held
    };
    attempt(observations, options, &bare, [true, true, false, false])?.ok_or(
        FitError::Undetermined {
            what: "coil constant and residual field",
            remedy: "record lines at more currents, further apart",
        },
    )
}

/// Where only q = +-2 is seen, offset and B0 displace the lines alike, and B0 with a free offset is anyone's guess. A
/// statement about the layout of the points, not about the value found, so that it does not bias the answer.
fn tells_offset(full: &LawFit, plain: &LawFit) -> bool {
    full.covariance[(1, 1)] < MOST_LOOSENING * MOST_LOOSENING * plain.covariance[(1, 1)]
}

fn attempt(
    observations: &[Observation],
    options: &FieldOptions,
    from: &Model,
    free: [bool; 4],
) -> Result<Option<LawFit>, FitError> {
    if observations.len() <= free.iter().filter(|f| **f).count() {
        return Ok(None);
    }
    let problem = Problem {
        observations,
        options,
        rest: *from,
        free,
    };
    let solution = solve(&problem, &problem.start())?;
    let model = problem.model(&solution.parameters);
    let chi2 = solution.chi2;
    Ok(spread(&problem, &solution).map(|covariance| LawFit {
        model,
        free,
        covariance,
        chi2,
    }))
}

fn spread(problem: &Problem, solution: &Solution) -> Option<DMatrix<f64>> {
    let small = solution.covariance.as_ref()?;
    let places: Vec<usize> = (0..4).filter(|i| problem.free[*i]).collect();
    let units = problem.units();
    let mut full = DMatrix::zeros(4, 4);
    for (i, a) in places.iter().enumerate() {
        for (j, b) in places.iter().enumerate() {
            full[(*a, *b)] = small[(i, j)] * units[*a] * units[*b];
        }
    }
    full.iter().all(|v| v.is_finite()).then_some(full)
}

/// Chi-square with one parameter held at `value`, the other free ones refitted.
fn profile(
    observations: &[Observation],
    options: &FieldOptions,
    fit: &LawFit,
    place: usize,
    value: f64,
) -> f64 {
    let mut all = as_array(&fit.model);
    all[place] = value;
    let rest = Model {
        constant: all[0],
        residual: all[1],
        squared: all[2],
        offset: all[3],
    };
    let mut free = fit.free;
    free[place] = false;
    let problem = Problem {
        observations,
        options,
        rest,
        free,
    };
    solve(&problem, &problem.start()).map_or(f64::INFINITY, |s| s.chi2)
}

/// Where the profile of a parameter has risen by `rise` over `floor`, on the side of `sign`.
fn crossing(profile: impl Fn(f64) -> f64, from: f64, step: f64, floor: f64, rise: f64) -> f64 {
    let (mut inside, mut outside) = (0.0, 1.0);
    while profile(from + outside * step) - floor < rise && outside < 1e4 {
        inside = outside;
        outside *= 1.6;
    }
    for _ in 0..40 {
        let middle = 0.5 * (inside + outside);
        if profile(from + middle * step) - floor < rise {
            inside = middle;
        } else {
            outside = middle;
        }
        if outside - inside < 1e-4 * outside {
            break;
        }
    }
    from + 0.5 * (inside + outside) * step
}

fn interval(
    observations: &[Observation],
    options: &FieldOptions,
    fit: &LawFit,
    place: usize,
) -> Interval {
    let best = as_array(&fit.model)[place];
    let sigma = fit.covariance[(place, place)].max(0.0).sqrt();
    let at = |v: f64| profile(observations, options, fit, place, v);
    let side = |sign: f64, rise: f64| {
        crossing(at, best, sign * rise.sqrt() * sigma * 0.98, fit.chi2, rise)
    };
    Interval {
        one_sigma: (side(-1.0, 1.0), side(1.0, 1.0)),
        two_sigma: (side(-1.0, 4.0), side(1.0, 4.0)),
    }
}

/// Value, limit or "cannot tell".
fn transverse(observations: &[Observation], options: &FieldOptions, fit: &LawFit) -> Transverse {
    if !fit.free[2] {
        return Transverse::CannotTell {
            reason: "no point shows the peaks apart from each other".to_owned(),
        };
    }
    let best = fit.model.squared;
    let sigma = fit.covariance[(2, 2)].max(0.0).sqrt();
    let at = |q: f64| profile(observations, options, fit, 2, q);
    let at_zero = at(0.0);
    if best > 0.0 && at_zero - fit.chi2 > MEASURED_FROM {
        let field = best.sqrt();
        return Transverse::Measured(Estimate {
            value: field,
            sigma: sigma / (2.0 * field),
        });
    }
    let floor = if best > 0.0 { fit.chi2 } else { at_zero };
    let limit = crossing(at, best.max(0.0), 1.5 * sigma, floor, LIMIT_RISE).sqrt();
    let largest = observations
        .iter()
        .map(|o| fit.model.axial(o.current).abs())
        .fold(0.0, f64::max);
    if limit > largest {
        let reason = format!(
            "the resolved points only limit it to {:.3e} T, beyond the largest axial field",
            limit
        );
        return Transverse::CannotTell { reason };
    }
    Transverse::UpperLimit {
        limit,
        confidence: 0.95,
    }
}

/// Dresses the fit. `regimes` and `points` belong together; `observations` are those in use.
pub(in crate::fit) fn report(
    observations: &[Observation],
    regimes: &[Regime],
    points: &[FieldPoint],
    fit: LawFit,
    options: &FieldOptions,
) -> Result<FieldFit, FitError> {
    let model = fit.model;
    // With the offset free, B0 and offset come apart; the answer named after both is their sum as a field.
    let share = if options.light_shift_known {
        0.0
    } else {
        options.handedness / options.zeeman.slope
    };
    let mut sum = DMatrix::identity(4, 4);
    sum[(1, 3)] = share;
    let c = &(&sum * &fit.covariance * sum.transpose());
    let residual_field = model.residual + share * model.offset;
    let estimate = |i: usize, value: f64| Estimate {
        value,
        sigma: c[(i, i)].max(0.0).sqrt(),
    };
    let null = -residual_field / model.constant;
    let null_variance =
        (c[(1, 1)] + 2.0 * null * c[(0, 1)] + null * null * c[(0, 0)]) / model.constant.powi(2);
    let residuals = points.iter().zip(regimes).map(|(p, regime)| {
        let law = match regime {
            Regime::Resolved { q } => Law::Peak(f64::from(*q)),
            Regime::Merged | Regime::LeftOut => Law::Merged,
        };
        let seen = Observation {
            current: p.current,
            value: p.centre,
            sigma: p.sigma,
            law,
            lever: 1.0,
        };
        let predicted = predicted(&seen, &model, options);
        FieldResidual {
            current: p.current,
            regime: *regime,
            observed: p.centre,
            sigma: p.sigma,
            predicted,
        }
    });
    let used = fit.free.iter().filter(|f| **f).count();
    Ok(FieldFit {
        coil_constant: estimate(0, model.constant),
        residual_field: estimate(1, residual_field),
        includes_light_shift: !options.light_shift_known,
        null_current: Estimate {
            value: null,
            sigma: null_variance.max(0.0).sqrt(),
        },
        transverse: transverse(observations, options, &fit),
        transverse_squared: fit.free[2].then(|| estimate(2, model.squared)),
        offset: fit.free[3].then(|| estimate(3, model.offset)),
        covariance: c.row_iter().map(|r| r.iter().copied().collect()).collect(),
        chi2: fit.chi2,
        dof: observations.len().saturating_sub(used),
        coil_constant_interval: interval(observations, options, &fit, 0),
        residual_field_interval: displaced(
            interval(observations, options, &fit, 1),
            estimate(1, residual_field),
            model.residual,
            fit.covariance[(1, 1)].max(0.0).sqrt(),
        ),
        transverse_squared_interval: fit.free[2].then(|| interval(observations, options, &fit, 2)),
        points: residuals.collect(),
    })
}

/// The interval of B0 carried over to B0 plus offset: same asymmetry, centre and width of the sum.
fn displaced(interval: Interval, sum: Estimate, from: f64, sigma: f64) -> Interval {
    let scale = if sigma > 0.0 { sum.sigma / sigma } else { 1.0 };
    let carry = |(lo, hi): (f64, f64)| {
        (
            sum.value + scale * (lo - from),
            sum.value + scale * (hi - from),
        )
    };
    Interval {
        one_sigma: carry(interval.one_sigma),
        two_sigma: carry(interval.two_sigma),
    }
}
