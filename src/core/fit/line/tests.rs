//! One trace against published-style references and its own promises.

use super::*;
use crate::fit::shapes::absorptive;

/// Deterministic white noise for tests: SplitMix64 and the cosine branch of Box-Muller.
pub(crate) struct Noise(pub u64);

impl Noise {
    pub(crate) fn uniform(&mut self) -> f64 {
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

/// The column of a reference trace: axis in Hz, signal in V.
fn reference(column: usize) -> (Vec<f64>, Vec<f64>) {
    let text = include_str!("../../testdata/fit/traces.csv");
    let rows = text.lines().skip(1).map(|l| {
        l.split(',')
            .map(|v| v.parse().unwrap())
            .collect::<Vec<f64>>()
    });
    rows.map(|r| (r[0] * 1e3, r[column])).unzip()
}

/// Fits of the same traces by lmfit 1.3.4. Its width is the half width, its slope per 200 kHz, its sigmas scaled by
/// the root of chi-square per degree of freedom.
#[test]
fn reference_traces_agree_with_an_independent_fit_to_its_printed_digits() {
    let close = |got: f64, want: f64, digits: f64| {
        assert!((got / want - 1.0).abs() < digits, "{got} for {want}")
    };
    let (axis, signal) = reference(1);
    let fit = fit_line(&axis, &signal, &LineOptions::default()).unwrap();
    let peak = fit.peak().unwrap();
    let scale = (0.003176903125f64 / 196.0).sqrt() / fit.noise;
    close(peak.centre.value, 31_746.691, 1e-6);
    close(peak.fwhm.value, 2.0 * 17_397.965, 1e-6);
    close(peak.height.value, 0.10192092, 1e-6);
    close(
        fit.base.value,
        0.49983528 + 0.020618562 * 31.746691 / 200.0,
        1e-6,
    );
    close(fit.slope.value, 0.020618562 / 200e3, 1e-5);
    close(fit.chi2 * fit.noise.powi(2), 0.003176903125, 1e-8);
    close(peak.centre.sigma * scale, 264.25, 1e-3);
    close(peak.fwhm.sigma * scale, 2.0 * 434.96, 1e-3);
    close(peak.height.sigma * scale, 0.0015437, 1e-3);
    assert_eq!(fit.dof, 196);

    let (axis, signal) = reference(2);
    let mixed = LineOptions {
        shape: LineShape::Mixed,
        ..LineOptions::default()
    };
    let fit = fit_line(&axis, &signal, &mixed).unwrap();
    let peak = fit.peak().unwrap();
    close(peak.centre.value, -44_225.627, 1e-5);
    close(peak.fwhm.value, 2.0 * 23_770.504, 1e-5);
    close(peak.height.value, 0.079605185, 1e-5);
    close(
        peak.phase.unwrap().value.tan(),
        0.025412157 / 0.079605185,
        1e-5,
    );
    close(
        peak.centre.sigma * (0.003389459153f64 / 195.0).sqrt() / fit.noise,
        761.0,
        1e-3,
    );

    // The wrong model stands 15 of its sigmas off, and must not go unnoticed.
    let fit = fit_line(&axis, &signal, &LineOptions::default()).unwrap();
    close(fit.peak().unwrap().centre.value, -37_443.996, 1e-5);
    close(fit.chi2 * fit.noise.powi(2), 0.005162675558, 1e-6);
    assert!(fit.has(LineFlag::Condemned), "{:?}", fit.tests);

    let (axis, signal) = reference(5);
    assert_eq!(
        fit_line(&axis, &signal, &LineOptions::default())
            .unwrap()
            .found,
        Found::NoPeak
    );
}

/// Pull of a pure Lorentzian on a line mixed by 1 to 10 degrees, in FWHM, for spans of 10 and 30 FWHM with a sloped
/// baseline: computed by an independent program.
#[test]
fn the_bias_of_a_pure_lorentzian_is_the_known_one() {
    for (degrees, span, bias) in [
        (1.0, 10.0, 0.00805),
        (2.0, 10.0, 0.01610),
        (10.0, 10.0, 0.08067),
        (1.0, 30.0, 0.00863),
        (10.0, 30.0, 0.08652),
    ] {
        let axis: Vec<f64> = (0..2001)
            .map(|i| span * (f64::from(i) / 2000.0 - 0.5))
            .collect();
        let signal: Vec<f64> = axis
            .iter()
            .map(|x| crate::fit::shapes::mixed(2.0 * x, f64::to_radians(degrees)).value)
            .collect();
        let fit = fit_line(
            &axis,
            &signal,
            &LineOptions {
                noise: Some(1e-3),
                ..LineOptions::default()
            },
        )
        .unwrap();
        let centre = fit.peak().unwrap().centre.value;
        assert!(
            (centre.abs() - bias).abs() < 0.01 * bias + 2e-5,
            "{degrees} deg, {span}: {centre} for {bias}"
        );
    }
}

/// Shares within 1 and 2 sigma over 400 seeded traces, binomial bands of 3.3 standard deviations.
#[test]
fn sigmas_of_a_line_are_honest() {
    let mut within = [[0.0; 2]; 4];
    for seed in 0..400 {
        let (axis, signal) = trace(12_345.0, 8_000.0, 0.1, 0.02, seed);
        let fit = fit_line(&axis, &signal, &LineOptions::default()).unwrap();
        let peak = fit.peak().unwrap();
        let base = 0.5 + 1e-8 * 12_345.0;
        let pairs = [
            (peak.centre, 12_345.0),
            (peak.fwhm, 8_000.0),
            (peak.height, 0.1),
            (peak.contrast.unwrap(), 0.1 / (2.0 * base + 0.1)),
        ];
        for (count, (got, truth)) in within.iter_mut().zip(pairs) {
            let pull = ((got.value - truth) / got.sigma).abs();
            count[0] += f64::from(pull < 1.0) / 400.0;
            count[1] += f64::from(pull < 2.0) / 400.0;
        }
    }
    for [one, two] in within {
        assert!(
            (one - 0.683).abs() < 3.3 * 0.0233 && (two - 0.954).abs() < 3.3 * 0.0105,
            "{within:?}"
        );
    }
}

/// At height/noise 2, HWHM 10 kHz, 500 samples over 600 kHz an independent program's grid found every line. The gain
/// expected is 4 (13.06 - 1.37) = 46.8 (sum of L^2 less what the baseline takes), so that the threshold of 25 misses
/// P(N(6.84, 1) < 5) = 3.3 % of them: 6.6 of 200, 14 with three standard deviations. None may be found elsewhere, and
/// noise alone must not be taken for a line.
#[test]
fn lines_are_found_and_noise_is_not() {
    let (mut missed, mut misplaced, mut invented) = (0, 0, 0);
    for seed in 0..200 {
        let mut source = Noise(seed);
        let centre = 400e3 * (source.uniform() - 0.5);
        let axis: Vec<f64> = (0..500)
            .map(|i| -300e3 + 600e3 * f64::from(i) / 499.0)
            .collect();
        let noise: Vec<f64> = axis.iter().map(|_| source.normal()).collect();
        let signal: Vec<f64> = axis
            .iter()
            .zip(&noise)
            .map(|(x, n)| 2.0 * absorptive((x - centre) / 10e3).value + n)
            .collect();
        match fit_line(&axis, &signal, &LineOptions::default())
            .unwrap()
            .peak()
        {
            None => missed += 1,
            Some(peak) => misplaced += usize::from((peak.centre.value - centre).abs() > 15e3),
        }
        let empty = fit_line(&axis, &noise, &LineOptions::default()).unwrap();
        invented += usize::from(empty.peak().is_some());
    }
    assert!(missed <= 14, "{missed} of 200 missed");
    assert!(misplaced == 0, "{misplaced} of 200 misplaced");
    assert!(invented <= 1, "{invented} of 200 invented");
}

#[test]
fn order_spacing_edge_and_neighbours() {
    let (axis, signal) = trace(12_345.0, 8_000.0, 0.1, 0.01, 3);
    let forward = fit_line(&axis, &signal, &LineOptions::default()).unwrap();
    let mut order: Vec<usize> = (0..axis.len()).collect();
    order.sort_by_key(|i| (i * 7919) % 2003);
    let shuffled = |v: &[f64]| order.iter().map(|i| v[*i]).collect::<Vec<f64>>();
    let fit = fit_line(
        &shuffled(&axis),
        &shuffled(&signal),
        &LineOptions::default(),
    )
    .unwrap();
    assert!((fit.peak().unwrap().centre.value - forward.peak().unwrap().centre.value).abs() < 1e-3);

    let (axis, signal) = trace(148_000.0, 8_000.0, 0.1, 0.01, 3);
    assert!(
        fit_line(&axis, &signal, &LineOptions::default())
            .unwrap()
            .has(LineFlag::AtEdge)
    );

    let two: Vec<f64> = axis
        .iter()
        .map(|x| 1.0 + absorptive(x / 4e3).value + 0.5 * absorptive((x - 12e3) / 4e3).value)
        .collect();
    let options = LineOptions {
        neighbours: vec![12e3],
        noise: Some(1e-3),
        ..LineOptions::default()
    };
    let fit = fit_line(&axis, &two, &options).unwrap();
    let peak = fit.peak().unwrap();
    assert!(
        peak.centre.value.abs() < 1e-3 && (peak.neighbours[0].value - 0.5).abs() < 1e-6,
        "{peak:?}"
    );
}
