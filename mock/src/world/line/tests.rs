//! The tables against direct calculation, and the shipped line against a Lorentzian.

use super::*;

fn nominal(truth: &Truth) -> Conditions {
    let share = |beam: &crate::truth::BeamTruth| {
        let part = 10f64.powf((beam.level - beam.full_level) / 10.0);
        (std::f64::consts::FRAC_PI_2 * part.sqrt()).sin().powi(2)
    };
    Conditions {
        temperature: truth.cell.temperature,
        probe: share(&truth.probe),
        control: share(&truth.control),
    }
}

fn bloch(truth: &Truth) -> &BlochTruth {
    match &truth.line {
        LineTruth::Bloch(bloch) => bloch,
        LineTruth::Lorentzian { .. } => panic!("not a Bloch line"),
    }
}

/// Largest errors of T over the window +-300 kHz: against direct calculation with the table's own quadrature
/// (interpolation alone) and with one twice as fine in velocity and eight times along the cell (all).
fn errors(truth: &Truth, at: &Conditions) -> (f64, f64) {
    let line = Line::Table(Arc::new(build(truth, bloch(truth), at)));
    let atom = atom(truth, bloch(truth), at);
    let mut worst = (0.0f64, 0.0f64);
    for n in -60..=60 {
        // Between the nodes, dense about the line.
        let delta = 300e3 * (f64::from(n) / 60.0).powi(3) + 7.0;
        let direct = |nodes, slices| {
            log_transmission(truth, bloch(truth), at, &atom, delta, nodes, slices).exp()
        };
        worst.0 = worst
            .0
            .max((line.single(delta) - direct(QUADRATURE, SLICES)).abs());
        worst.1 = worst
            .1
            .max((line.single(delta) - direct(2 * QUADRATURE, 8 * SLICES)).abs());
    }
    worst
}

#[test]
fn the_table_agrees_with_direct_calculation() {
    let truth = Truth::shipped();
    let (interpolation, all) = errors(&truth, &nominal(&truth));
    eprintln!("interpolation {interpolation:e}, all {all:e}");
    assert!(interpolation < 1e-6, "{interpolation:e}");
    assert!(all < 2e-5, "{all:e}");
    let mut detuned = truth.clone();
    detuned.laser.detuning = 100e6;
    let (interpolation, _) = errors(&detuned, &nominal(&truth));
    assert!(interpolation < 1e-6, "laser detuned: {interpolation:e}");
}

#[test]
fn between_two_temperatures_the_blend_is_close() {
    let truth = Truth::shipped();
    let at = Conditions {
        temperature: truth.cell.temperature + 0.5,
        ..nominal(&truth)
    };
    let line = Line::new(&truth, &at);
    let exact = Line::Table(Arc::new(build(&truth, bloch(&truth), &at)));
    for delta in [0.0, 2e3, 5e3, 20e3, 200e3] {
        let error = line.single(delta) - exact.single(delta);
        assert!(error.abs() < 1e-3, "{delta}: {error:e}");
    }
}

#[test]
fn a_detuned_laser_makes_the_line_asymmetric_and_a_tuned_one_does_not() {
    let mut truth = Truth::shipped();
    let skew = |truth: &Truth| {
        let line = Line::new(truth, &nominal(truth));
        (line.single(6e3) - line.single(-6e3)).abs() / (line.single(0.0) - line.base())
    };
    assert_eq!(skew(&truth), 0.0);
    truth.laser.detuning = 100e6;
    assert!(skew(&truth) > 0.02, "{}", skew(&truth));
}

#[test]
fn the_shipped_line_is_nearly_lorentzian() {
    let truth = Truth::shipped();
    let line = Line::new(&truth, &nominal(&truth));
    // Base and height by linear least squares for each width; the best of a fine grid of widths.
    let detunings: Vec<f64> = (-500..=500).map(|n| f64::from(n) * 100.0).collect();
    let rms = |fwhm: f64| {
        let shape = |d: &f64| 1.0 / (1.0 + (2.0 * d / fwhm).powi(2));
        let n = detunings.len() as f64;
        let mean = |f: &dyn Fn(&f64) -> f64| detunings.iter().map(f).sum::<f64>() / n;
        let (ml, mt) = (mean(&shape), mean(&|d| line.single(*d)));
        let slope = mean(&|d| (shape(d) - ml) * (line.single(*d) - mt))
            / mean(&|d| (shape(d) - ml).powi(2));
        (
            mean(&|d| (line.single(*d) - mt - slope * (shape(d) - ml)).powi(2)).sqrt() / slope,
            fwhm,
        )
    };
    let best = (0..400)
        .map(|n| rms(5e3 + 5.0 * f64::from(n)))
        .min_by(|a, b| a.0.total_cmp(&b.0))
        .unwrap();
    eprintln!(
        "best Lorentzian: rms {:e} of the height, FWHM {}; half maximum {}",
        best.0,
        best.1,
        line.full_width()
    );
    assert!(best.0 < 3e-3, "{best:?}");
    assert!((best.1 / line.full_width() - 1.0).abs() < 0.02, "{best:?}");
}
