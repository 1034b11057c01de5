//! One trace against published-style references and its own promises.

use super::*;
use crate::fit::shapes::absorptive;

/// Deterministic white noise for tests: SplitMix64 and the cosine branch of Box-Muller.
pub(crate) struct Noise(pub u64);

impl Noise {
    fn uniform(&mut self) -> f64 {
        self.0 = self.0.wrapping_add(0x9E37_79B9_7F4A_7C15);
        let mut z = self.0;
        z = (z ^ (z >> 30)).wrapping_mul(0xBF58_476D_1CE4_E5B9);
        z = (z ^ (z >> 27)).wrapping_mul(0x94D0_49BB_1331_11EB);
        z ^= z >> 31;
        ((z >> 11) as f64 + 1.0) / 9_007_199_254_740_992.0
    }

    pub(crate) fn normal(&mut self) -> f64 {
        let (a, b) = (self.uniform(), self.uniform());
        (-2.0 * a.ln()).sqrt() * (std::f64::consts::TAU * b).cos()
    }
}

fn trace(centre: f64, fwhm: f64, height: f64, noise: f64, seed: u64) -> (Vec<f64>, Vec<f64>) {
    let mut source = Noise(seed);
    let axis: Vec<f64> = (0..2000)
        .map(|i| -150e3 + 300e3 * f64::from(i) / 1999.0)
        .collect();
    let signal = axis
        .iter()
        .map(|x| {
            0.5 + 1e-8 * x
                + height * absorptive(2.0 * (x - centre) / fwhm).value
                + noise * source.normal()
        })
        .collect();
    (axis, signal)
}

#[test]
fn a_noiseless_line_comes_back_exactly() {
    let (axis, signal) = trace(12_345.0, 8_000.0, 0.1, 0.0, 1);
    let fit = fit_line(&axis, &signal, &LineOptions::default()).unwrap();
    let peak = fit.peak().unwrap();
    assert!((peak.centre.value - 12_345.0).abs() < 1e-4, "{peak:?}");
    assert!((peak.fwhm.value - 8_000.0).abs() < 1e-3);
    assert!((peak.height.value - 0.1).abs() < 1e-9);
    assert!((fit.slope.value - 1e-8).abs() < 1e-15);
    assert!(
        (peak.contrast.unwrap().value - 0.1 / (2.0 * (0.5 + 1e-8 * 12_345.0) + 0.1)).abs() < 1e-9
    );
}

#[test]
fn bad_input_is_an_error() {
    let (axis, mut signal) = trace(0.0, 8_000.0, 0.1, 0.01, 1);
    let options = LineOptions::default();
    assert!(matches!(
        fit_line(&axis[1..], &signal, &options),
        Err(FitError::Length { .. })
    ));
    assert!(matches!(
        fit_line(&axis[..4], &signal[..4], &options),
        Err(FitError::TooFew { .. })
    ));
    assert!(matches!(
        fit_line(&[1.0; 20], &signal[..20], &options),
        Err(FitError::NoSpan { .. })
    ));
    signal[7] = f64::NAN;
    assert!(matches!(
        fit_line(&axis, &signal, &options),
        Err(FitError::NotFinite { index: 7, .. })
    ));
}

#[test]
fn constant_signals_have_no_peak() {
    let (axis, _) = trace(0.0, 1.0, 0.0, 0.0, 1);
    for level in [0.0, 1.0, -3e-9] {
        let fit = fit_line(&axis, &vec![level; axis.len()], &LineOptions::default()).unwrap();
        assert_eq!(fit.found, Found::NoPeak);
        assert!(fit.chi2.is_finite() && fit.noise > 0.0);
    }
}
