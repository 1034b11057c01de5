//! Line shapes and the pattern of five peaks in a tilted field, with their derivatives. Owns formulas, fits nothing.
//!
//! With the reduced detuning u = 2 (x - centre) / FWHM:
//! - absorptive part L(u) = 1 / (1 + u^2), a Lorentzian of height 1;
//! - dispersive part D(u) = u / (1 + u^2), its Kramers-Kronig partner, extremes +-1/2 at the half-height points;
//! - mixed line A (cos(phi) L + sin(phi) D): the Fano profile up to a constant (U. Fano, Phys. Rev. 124, 1866
//!   (1961)); phi is the mixing phase.
//!
//! In a field at the angle theta to the light, the two-photon line of a Delta m = 2 pair splits into five peaks
//! at q nu_L, q = -2..2, with the weights (d^2_{q2}(theta))^2 of the rotation matrix of rank 2 (D. A. Varshalovich
//! et al., *Quantum Theory of Angular Momentum*, World Scientific 1988, section 4.3). They are binomial:
//! C(4, 2+q) p^(2+q) (1-p)^(2-q) with p = (1 + cos(theta))/2. Their mean is 2 cos(theta), their variance
//! sin(theta)^2: where the peaks overlap, the line stands at 2 cos(theta) nu_L, linear in the axial field.

/// Greatest slope of a Lorentzian of height 1 and FWHM 1: 3 sqrt(3)/4, at +-FWHM/(2 sqrt(3)).
pub const MAX_SLOPE: f64 = 1.299_038_105_676_658;

/// The five values of q, in the order in which the weights are given.
pub const ORDERS: [f64; 5] = [-2.0, -1.0, 0.0, 1.0, 2.0];

/// A line shape at one reduced detuning u, with its derivative.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct Shape {
    /// Value, 1 at most for the absorptive part.
    pub value: f64,
    /// Derivative with respect to u.
    pub slope: f64,
}

/// The absorptive Lorentzian L(u) = 1/(1+u^2) and dL/du = -2 u L^2.
#[inline]
pub fn absorptive(u: f64) -> Shape {
    let value = 1.0 / (1.0 + u * u);
    Shape {
        value,
        slope: -2.0 * u * value * value,
    }
}

/// The dispersive Lorentzian D(u) = u/(1+u^2) and dD/du = (1 - u^2) L^2.
#[inline]
pub fn dispersive(u: f64) -> Shape {
    let level = 1.0 / (1.0 + u * u);
    Shape {
        value: u * level,
        slope: (1.0 - u * u) * level * level,
    }
}

/// The mixed Lorentzian cos(phase) L(u) + sin(phase) D(u); `phase` in rad.
#[inline]
pub fn mixed(u: f64, phase: f64) -> Shape {
    let (sin, cos) = phase.sin_cos();
    let (a, d) = (absorptive(u), dispersive(u));
    Shape {
        value: cos * a.value + sin * d.value,
        slope: cos * a.slope + sin * d.slope,
    }
}

/// Weights (d^2_{q2}(theta))^2 of the five peaks for q = -2..2 and their derivatives with respect to
/// `cosine` = cos(theta). They add up to 1 (the derivatives to 0) for every `cosine`.
pub fn tilt_weights(cosine: f64) -> ([f64; 5], [f64; 5]) {
    let (p, r) = (0.5 * (1.0 + cosine), 0.5 * (1.0 - cosine));
    let weights = [
        r.powi(4),
        4.0 * p * r.powi(3),
        6.0 * p * p * r * r,
        4.0 * p.powi(3) * r,
        p.powi(4),
    ];
    let slopes = [
        -2.0 * r.powi(3),
        2.0 * r * r * (r - 3.0 * p),
        6.0 * p * r * (r - p),
        2.0 * p * p * (3.0 * r - p),
        2.0 * p.powi(3),
    ];
    (weights, slopes)
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn derivatives_agree_with_central_differences() {
        let step = 1e-6;
        for i in -40..=40 {
            let u = f64::from(i) * 0.17;
            for f in [absorptive, dispersive, |u| mixed(u, 0.4)] {
                let difference = (f(u + step).value - f(u - step).value) / (2.0 * step);
                assert!((f(u).slope - difference).abs() < 1e-9, "at u = {u}");
            }
        }
        for i in -10..=10 {
            let c = f64::from(i) * 0.1;
            let (_, slopes) = tilt_weights(c);
            for (q, slope) in slopes.iter().enumerate() {
                let difference =
                    (tilt_weights(c + step).0[q] - tilt_weights(c - step).0[q]) / (2.0 * step);
                assert!((slope - difference).abs() < 1e-9, "q index {q} at cos {c}");
            }
        }
    }

    #[test]
    fn the_steepest_point_is_where_the_textbook_puts_it() {
        // Exact: 3 sqrt(3)/4 A/FWHM at +-FWHM/(2 sqrt(3)); u = 1/sqrt(3), du/dx = 2/FWHM.
        let steepest = absorptive(-1.0 / 3f64.sqrt()).slope * 2.0;
        assert!((steepest - MAX_SLOPE).abs() < 1e-12);
        assert!((MAX_SLOPE - 1.299038106).abs() < 1e-9);
    }

    /// Weights at 15 degree steps: rotation-matrix column computed with an independent program (numpy), which
    /// an 8-level Floquet calculation (QuTiP 5.3) confirmed to 0.002 at low power.
    #[test]
    fn tilt_weights_follow_the_rotation_matrix() {
        let table = [
            (0.0, [0.00000, 0.00000, 0.00000, 0.00000, 1.00000]),
            (15.0, [0.00000, 0.00002, 0.00168, 0.06472, 0.93357]),
            (30.0, [0.00002, 0.00112, 0.02344, 0.21763, 0.75779]),
            (45.0, [0.00046, 0.01072, 0.09375, 0.36428, 0.53079]),
            (60.0, [0.00391, 0.04687, 0.21094, 0.42188, 0.31641]),
            (75.0, [0.01886, 0.12814, 0.32644, 0.36962, 0.15694]),
            (90.0, [0.06250, 0.25000, 0.37500, 0.25000, 0.06250]),
            (135.0, [0.53079, 0.36428, 0.09375, 0.01072, 0.00046]),
            (180.0, [1.00000, 0.00000, 0.00000, 0.00000, 0.00000]),
        ];
        for (degrees, expected) in table {
            let (weights, _) = tilt_weights(f64::to_radians(degrees).cos());
            for (got, want) in weights.iter().zip(expected) {
                assert!(
                    (got - want).abs() < 1.1e-5,
                    "{degrees} degrees: {weights:?}"
                );
            }
            let mean: f64 = weights.iter().zip(ORDERS).map(|(w, q)| w * q).sum();
            assert!((mean - 2.0 * f64::to_radians(degrees).cos()).abs() < 1e-12);
        }
    }
}
