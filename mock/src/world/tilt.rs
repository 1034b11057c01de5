//! How the five peaks q = -2..2 share the resonance when the field stands at an angle to the light.
//!
//! Squares of the rotation-matrix elements d2(q, 2) (D. M. Brink and G. R. Satchler, Angular Momentum, textbook). The
//! mock has its own copy on purpose: a misreading must not pass on both sides.

/// Weights of the peaks q = -2, -1, 0, 1, 2 (at `q * nu_L`) for the cosine of the angle between field and light; they
/// add up to 1.
pub(crate) fn weights(cosine: f64) -> [f64; 5] {
    let c = cosine.clamp(-1.0, 1.0);
    let sine2 = 1.0 - c * c;
    let (plus, minus) = ((1.0 + c) / 2.0, (1.0 - c) / 2.0);
    [
        minus.powi(4),
        minus * minus * sine2,
        0.375 * sine2 * sine2,
        plus * plus * sine2,
        plus.powi(4),
    ]
}

#[cfg(test)]
mod tests {
    use super::*;

    /// Rank-2 theory columns of an 8-level Floquet study of tilted fields (computed): angle, then q = 2, 1, 0, -1, -2.
    const PUBLISHED: [[f64; 6]; 8] = [
        [0.0, 1.00000, 0.00000, 0.00000, 0.00000, 0.00000],
        [15.0, 0.93357, 0.06472, 0.00168, 0.00002, 0.00000],
        [30.0, 0.75779, 0.21763, 0.02344, 0.00112, 0.00002],
        [45.0, 0.53079, 0.36428, 0.09375, 0.01072, 0.00046],
        [60.0, 0.31641, 0.42188, 0.21094, 0.04687, 0.00391],
        [75.0, 0.15694, 0.36962, 0.32644, 0.12814, 0.01886],
        [90.0, 0.06250, 0.25000, 0.37500, 0.25000, 0.06250],
        [135.0, 0.00046, 0.01072, 0.09375, 0.36428, 0.53079],
    ];

    #[test]
    fn weights_agree_with_the_table_and_add_up_to_one() {
        for row in PUBLISHED {
            let ours = weights(row[0].to_radians().cos());
            for (published, ours) in row[1..].iter().zip(ours.iter().rev()) {
                assert!((published - ours).abs() < 6e-6, "{row:?}: {ours}");
            }
            assert!((ours.iter().sum::<f64>() - 1.0).abs() < 1e-12);
        }
    }

    #[test]
    fn the_strongest_peak_changes_where_published() {
        // cos = 3/5 and 1/5, exact.
        let at = weights(0.6);
        assert!((at[4] - at[3]).abs() < 1e-12);
        let at = weights(0.2);
        assert!((at[3] - at[2]).abs() < 1e-12);
    }
}
