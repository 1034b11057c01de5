//! Noise of one trace and the tests that can condemn a fit. Looks at neighbouring samples only.

use serde::{Deserialize, Serialize};

/// Beyond this many standard deviations from white noise, a residual test condemns the fit (one in 30,000).
pub const CONDEMNED_BEYOND: f64 = 4.0;

/// Are the residuals white? Both statistics are standard normal for a right model and white noise.
#[derive(Debug, Clone, Copy, PartialEq, Serialize, Deserialize)]
pub struct ResidualTests {
    /// Number of runs of equal sign (A. Wald and J. Wolfowitz, Ann. Math. Stat. 11, 147 (1940)).
    pub runs: usize,
    /// Its deviation from the expectation in standard deviations; negative: too few runs, the model leaves a shape.
    pub runs_z: f64,
    /// Durbin-Watson statistic d = sum (r_i - r_(i-1))^2 / sum r_i^2 (J. Durbin and G. S. Watson, Biometrika 37,
    /// 409 (1950)); 2 for white residuals.
    pub durbin_watson: f64,
    /// (d - 2) sqrt(n) / 2: negative if neighbours are alike.
    pub durbin_watson_z: f64,
    /// Too few runs or too small a d: shape or noise are not what the fit assumes, its sigmas are not to be trusted.
    pub condemned: bool,
}

/// One-sigma noise of a trace from its second differences e_i = (y_(i-1) - 2 y_i + y_(i+1)) / sqrt(6):
/// median(|e|) / 0.67449, which a line covering a minority of the samples cannot pull far. Zero for fewer than 3.
pub(super) fn robust_sigma(signal: &[f64]) -> f64 {
    let mut sizes: Vec<f64> = signal
        .windows(3)
        .map(|w| (w[0] - 2.0 * w[1] + w[2]).abs())
        .collect();
    if sizes.is_empty() {
        return 0.0;
    }
    let middle = sizes.len() / 2;
    let (_, median, _) = sizes.select_nth_unstable_by(middle, f64::total_cmp);
    *median / (0.674_489_750_196_081_7 * 6f64.sqrt())
}

/// One-sigma noise from residuals, out of the mean square of their second differences: sum (..)^2 / (6 (n - 2)).
/// A smooth misfit hardly enters, so that chi-square remains a test. Relative error sqrt(35/(36 n)) for white noise.
pub(super) fn difference_sigma(residuals: &[f64]) -> f64 {
    if residuals.len() < 3 {
        return 0.0;
    }
    let sum: f64 = residuals
        .windows(3)
        .map(|w| (w[0] - 2.0 * w[1] + w[2]).powi(2))
        .sum();
    (sum / (6.0 * (residuals.len() - 2) as f64)).sqrt()
}

/// Runs test and Durbin-Watson of residuals in the order of the axis.
pub(super) fn test_residuals(residuals: &[f64]) -> ResidualTests {
    let n = residuals.len() as f64;
    let positive = residuals.iter().filter(|r| **r >= 0.0).count() as f64;
    let negative = n - positive;
    let runs = 1 + residuals
        .windows(2)
        .filter(|w| (w[0] >= 0.0) != (w[1] >= 0.0))
        .count();
    let product = 2.0 * positive * negative;
    let expected = product / n + 1.0;
    let variance = product * (product - n) / (n * n * (n - 1.0));
    let runs_z = if variance > 0.0 {
        (runs as f64 - expected) / variance.sqrt()
    } else {
        0.0
    };
    let squares: f64 = residuals.iter().map(|r| r * r).sum();
    let steps: f64 = residuals.windows(2).map(|w| (w[1] - w[0]).powi(2)).sum();
    let durbin_watson = if squares > 0.0 { steps / squares } else { 2.0 };
    let durbin_watson_z = (durbin_watson - 2.0) * n.sqrt() / 2.0;
    let condemned = runs_z < -CONDEMNED_BEYOND || durbin_watson_z < -CONDEMNED_BEYOND;
    ResidualTests {
        runs,
        runs_z,
        durbin_watson,
        durbin_watson_z,
        condemned,
    }
}
