//! Weighted nonlinear least squares: Levenberg-Marquardt with a scaled trust region on a pivoted QR factorisation.
//!
//! The iteration is MINPACK's (J. J. Moré, in *Numerical Analysis*, Lecture Notes in Mathematics 630 (1978)), in
//! the `levenberg-marquardt` crate. This module adds what a physicist needs around it: finite input or an error,
//! a restart from where the trust region collapsed, the covariance and a word about the convergence.

use levenberg_marquardt::{LeastSquaresProblem, LevenbergMarquardt, TerminationReason};
use nalgebra::{DMatrix, DVector, Dyn, storage::Owned};
use serde::{Deserialize, Serialize};

use super::{FitError, require_finite};

/// A model to be fitted: weighted residuals (data - model, or model - data, divided by sigma) and their derivatives.
pub trait Residuals {
    /// Number of residuals.
    fn count(&self) -> usize;
    /// Writes the weighted residuals at `parameters` into `out`, which has `count` places.
    fn residuals(&self, parameters: &[f64], out: &mut [f64]);
    /// Writes d residual / d parameter into `out`, `count` rows by one column per parameter.
    fn jacobian(&self, parameters: &[f64], out: &mut DMatrix<f64>);
}

/// How the iteration ended.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Serialize, Deserialize)]
pub enum Convergence {
    /// Chi-square, parameters or gradient cannot improve further.
    Converged,
    /// The evaluations were used up before.
    OutOfPatience,
    /// The model gave NaN or infinity on the way and no step avoided it.
    Diverged,
}

/// Answer of a fit.
#[derive(Debug, Clone, PartialEq)]
pub struct Solution {
    /// Best parameters.
    pub parameters: Vec<f64>,
    /// (J^T J)^-1, not scaled by chi-square; `None` where the data do not determine every parameter.
    pub covariance: Option<DMatrix<f64>>,
    /// Sum of squared weighted residuals.
    pub chi2: f64,
    /// Residuals less parameters.
    pub dof: usize,
    /// How the iteration ended.
    pub convergence: Convergence,
    /// Evaluations of the residuals, over all restarts.
    pub evaluations: usize,
}

/// Rounds of the trust region: each starts with a fresh radius where the last one ended.
const ROUNDS: usize = 4;
/// Evaluations allowed per parameter and round.
const PATIENCE: usize = 400;

/// Minimises the sum of squares from `start`.
///
/// # Errors
/// A start or a residual at the start that is not finite; fewer residuals than parameters.
pub fn solve(problem: &impl Residuals, start: &[f64]) -> Result<Solution, FitError> {
    require_finite("start", start)?;
    let count = problem.count();
    if count < start.len() || start.is_empty() {
        return Err(FitError::TooFew {
            what: "residuals",
            got: count,
            needed: start.len().max(1),
        });
    }
    let mut first = vec![0.0; count];
    problem.residuals(start, &mut first);
    require_finite("residual at the start", &first)?;

    let mut best = DVector::from_column_slice(start);
    let mut chi2 = first.iter().map(|r| r * r).sum::<f64>();
    let mut evaluations = 0;
    let mut convergence = Convergence::OutOfPatience;
    for _ in 0..ROUNDS {
        let (ended, report) = LevenbergMarquardt::new()
            .with_ftol(f64::EPSILON)
            .with_xtol(f64::EPSILON)
            .with_gtol(0.0)
            .with_patience(PATIENCE)
            .minimize(Adapter {
                problem,
                at: best.clone(),
            });
        evaluations += report.number_of_evaluations;
        let reached = 2.0 * report.objective_function;
        convergence = word(&report.termination);
        // A failed round may leave its last trial point; it counts only if it is better.
        let gain = chi2 - reached;
        let better = reached.is_finite() && gain >= 0.0 && ended.at.iter().all(|v| v.is_finite());
        if better {
            (best, chi2) = (ended.at, reached);
        }
        if !better || gain <= 1e-14 * chi2 {
            break;
        }
    }
    let parameters = best.as_slice().to_vec();
    let covariance = covariance(problem, &parameters);
    Ok(Solution {
        covariance,
        chi2,
        dof: count - parameters.len(),
        convergence,
        evaluations,
        parameters,
    })
}

fn word(reason: &TerminationReason) -> Convergence {
    match reason {
        TerminationReason::Converged { .. }
        | TerminationReason::ResidualsZero
        | TerminationReason::Orthogonal
        | TerminationReason::NoImprovementPossible(_) => Convergence::Converged,
        TerminationReason::LostPatience => Convergence::OutOfPatience,
        TerminationReason::User(_)
        | TerminationReason::Numerical(_)
        | TerminationReason::NoParameters
        | TerminationReason::NoResiduals
        | TerminationReason::WrongDimensions(_) => Convergence::Diverged,
    }
}

/// (J^T J)^-1 by QR of the column-scaled Jacobian: the squares of its singular values are never formed.
fn covariance(problem: &impl Residuals, parameters: &[f64]) -> Option<DMatrix<f64>> {
    let n = parameters.len();
    let mut jacobian = DMatrix::zeros(problem.count(), n);
    problem.jacobian(parameters, &mut jacobian);
    let scale: Vec<f64> = jacobian.column_iter().map(|c| c.norm()).collect();
    if scale.iter().any(|s| !s.is_finite() || *s == 0.0) {
        return None;
    }
    for (mut column, s) in jacobian.column_iter_mut().zip(&scale) {
        column /= *s;
    }
    let r = jacobian.qr().r();
    if (0..n).any(|i| r[(i, i)].abs() < 1e-13) {
        return None;
    }
    let inverse = r.solve_upper_triangular(&DMatrix::identity(n, n))?;
    let product = &inverse * inverse.transpose();
    Some(DMatrix::from_fn(n, n, |i, j| {
        product[(i, j)] / (scale[i] * scale[j])
    }))
}

/// Dresses a model for the crate.
struct Adapter<'a, P> {
    problem: &'a P,
    at: DVector<f64>,
}

impl<P: Residuals> LeastSquaresProblem<f64, Dyn, Dyn> for Adapter<'_, P> {
    type ResidualStorage = Owned<f64, Dyn>;
    type JacobianStorage = Owned<f64, Dyn, Dyn>;
    type ParameterStorage = Owned<f64, Dyn>;

    fn set_params(&mut self, x: &DVector<f64>) {
        self.at.copy_from(x);
    }

    fn params(&self) -> DVector<f64> {
        self.at.clone()
    }

    fn residuals(&self) -> Option<DVector<f64>> {
        let mut out = DVector::zeros(self.problem.count());
        self.problem
            .residuals(self.at.as_slice(), out.as_mut_slice());
        // An overflow on the way is a bad step, not the end: a huge finite residual makes the region shrink.
        for r in out.iter_mut().filter(|r| !r.is_finite()) {
            *r = 1e100;
        }
        Some(out)
    }

    fn jacobian(&self) -> Option<DMatrix<f64>> {
        let mut out = DMatrix::zeros(self.problem.count(), self.at.len());
        self.problem.jacobian(self.at.as_slice(), &mut out);
        out.iter().all(|v| v.is_finite()).then_some(out)
    }
}

#[cfg(test)]
mod nist;

#[cfg(test)]
mod tests {
    use super::*;

    struct Line<'a>(&'a [f64]);

    impl Residuals for Line<'_> {
        fn count(&self) -> usize {
            self.0.len()
        }
        fn residuals(&self, p: &[f64], out: &mut [f64]) {
            for (i, (o, y)) in out.iter_mut().zip(self.0).enumerate() {
                *o = p[0] + p[1] * i as f64 - y;
            }
        }
        fn jacobian(&self, _: &[f64], out: &mut DMatrix<f64>) {
            for i in 0..self.0.len() {
                out[(i, 0)] = 1.0;
                out[(i, 1)] = i as f64;
            }
        }
    }

    #[test]
    fn nan_is_an_error_and_not_a_panic() {
        let data = [0.0, 1.0, f64::NAN];
        assert!(matches!(
            solve(&Line(&data), &[0.0, 0.0]),
            Err(FitError::NotFinite { index: 2, .. })
        ));
        assert!(matches!(
            solve(&Line(&[0.0]), &[0.0, 0.0]),
            Err(FitError::TooFew { .. })
        ));
        assert!(matches!(
            solve(&Line(&[0.0, 1.0]), &[f64::INFINITY, 0.0]),
            Err(FitError::NotFinite { .. })
        ));
    }

    #[test]
    fn covariance_of_a_straight_line_is_the_textbook_one() {
        let data = [1.0, 3.0, 5.0, 7.5, 8.5];
        let solution = solve(&Line(&data), &[0.0, 0.0]).unwrap();
        // For x = 0..4: var(slope) = 1/sum (x - 2)^2 = 1/10, var(intercept) = 30/(5*10).
        let covariance = solution.covariance.unwrap();
        assert!((covariance[(1, 1)] - 0.1).abs() < 1e-12);
        assert!((covariance[(0, 0)] - 0.6).abs() < 1e-12);
        assert!((covariance[(0, 1)] + 0.2).abs() < 1e-12);
        assert_eq!(
            (solution.dof, solution.convergence),
            (3, Convergence::Converged)
        );
    }
}
