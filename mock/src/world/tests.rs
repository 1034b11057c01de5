//! The whole chain: what a scan of this world would see.

use super::*;
use crate::truth::{LineTruth, Truth};

const N: usize = 2000;

fn quiet() -> Truth {
    let mut truth = Truth::shipped();
    truth.detector.white = 0.0;
    truth.detector.transimpedance = 0.0;
    truth.detector.intensity_noise = 0.0;
    truth.detector.corner = 0.0;
    truth.detector.lag = 0.0;
    truth.detector.pickup = 0.0;
    truth.lock.noise = 0.0;
    truth.field.mains = 0.0;
    truth.laser.jitter = 0.0;
    truth
}

/// A world with both beams on and the coil settled at `amperes` from t = 0 on; sweeps start at t = 10 s.
fn running(truth: Truth, amperes: f64) -> World {
    let (probe, control) = (truth.probe.clone(), truth.control.clone());
    let mut world = World::new(truth);
    world.set_coil_output(0.0, true);
    world.set_coil_current(0.0, amperes);
    world.set_beam(
        0.0,
        Beam::Probe,
        BeamState {
            frequency: 80e6,
            power: probe.level,
            on: true,
        },
    );
    world.set_beam(
        0.0,
        Beam::Control,
        BeamState {
            frequency: 80e6,
            power: control.level,
            on: true,
        },
    );
    world
}

fn sweep(world: &mut World, channel: u8, acquisition: u64, span: f64) -> Vec<f64> {
    let sweep = Sweep {
        start: 80e6 - span / 2.0,
        stop: 80e6 + span / 2.0,
        duration: 0.04,
        steps: None,
    };
    world.start_sweep(10.0, Beam::Probe, sweep);
    let mut volts = vec![0.0; N];
    world.record(channel, acquisition, 10.0, 0.04 / N as f64, &mut volts);
    volts
}

fn place_of_peak(volts: &[f64], span: f64) -> f64 {
    let top = volts
        .iter()
        .enumerate()
        .max_by(|a, b| a.1.total_cmp(b.1))
        .unwrap()
        .0;
    (top as f64 / N as f64 - 0.5) * span
}

#[test]
fn the_strong_peak_stands_where_breit_rabi_puts_it() {
    for (milliamperes, q) in [(20.0, 2.0), (-20.0, -2.0), (8.0, 2.0), (-12.0, -2.0)] {
        let truth = quiet();
        let mut world = running(truth.clone(), milliamperes * 1e-3);
        let warming = truth.coil.heating * truth.coil.resistance * (milliamperes * 1e-3f64).powi(2);
        let warmed =
            1.0 + truth.coil.expansion * warming * (1.0 - (-10.0 / truth.coil.thermal_time).exp());
        let axial = truth.coil.constant * milliamperes * 1e-3 * warmed + truth.field.residual;
        assert!((world.field(10.0).0 / axial - 1.0).abs() < 1e-6);
        let field = axial.hypot(truth.field.transverse);
        let expected = q / 2.0 * 13.9916661e9 * field;
        let span = 100e3;
        let seen = place_of_peak(&sweep(&mut world, 1, 1, span), span);
        // A sample is 50 Hz; neighbouring peaks' wings pull the maximum by some hertz more.
        assert!(
            (seen - expected).abs() < 100.0,
            "{milliamperes} mA: {seen} against {expected}"
        );
    }
}

#[test]
fn five_peaks_appear_when_the_field_lies_across() {
    let mut truth = quiet();
    (truth.field.residual, truth.field.transverse) = (0.0, 3e-6);
    let line = LineTruth::Lorentzian {
        fwhm: 3e3,
        contrast: 0.05,
        base: 0.5,
    };
    let mut world = running(
        Truth {
            line,
            ..truth.clone()
        },
        0.0,
    );
    let span = 120e3;
    let volts = sweep(&mut world, 1, 1, span);
    let larmor = 13.9916661e9 * 3e-6 / 2.0;
    let light = volts.iter().copied().fold(f64::MAX, f64::min);
    let peak = |q: f64| volts[((q * larmor / span + 0.5) * N as f64).round() as usize] - light;
    // d2(q, 2)^2 at 90 degrees: 1/16, 1/4, 3/8.
    assert!(
        (peak(1.0) / peak(0.0) - 2.0 / 3.0).abs() < 0.01
            && (peak(-2.0) / peak(0.0) - 1.0 / 6.0).abs() < 0.01
    );
    assert!(peak(0.5) < 0.05 * peak(0.0));
}

#[test]
fn the_same_question_gives_the_same_bytes_and_another_seed_others() {
    let ask = |seed, channel, acquisition| {
        let mut world = running(
            Truth {
                seed,
                ..Truth::shipped()
            },
            5e-3,
        );
        let _ = world.lock_level(3.0);
        sweep(&mut world, channel, acquisition, 60e3)
    };
    assert_eq!(ask(1, 1, 7), ask(1, 1, 7));
    for (seed, channel, acquisition) in [(2, 1, 7), (1, 1, 8), (1, 2, 7)] {
        assert_ne!(ask(1, 1, 7), ask(seed, channel, acquisition));
    }
}

#[test]
fn the_past_is_recorded_as_it_was() {
    let mut world = running(Truth::shipped(), 5e-3);
    let before = sweep(&mut world, 1, 1, 60e3);
    world.set_coil_current(10.05, -20e-3);
    world.set_beam(
        10.05,
        Beam::Control,
        BeamState {
            frequency: 80e6,
            power: -10.0,
            on: false,
        },
    );
    let mut after = vec![0.0; N];
    world.record(1, 1, 10.0, 0.04 / N as f64, &mut after);
    assert_eq!(before, after);
}

#[test]
fn without_control_there_is_no_peak_and_without_probe_only_leakage() {
    let mut truth = quiet();
    truth.detector.leakage = 0.1;
    let mut world = running(truth.clone(), 5e-3);
    world.set_beam(
        1.0,
        Beam::Control,
        BeamState {
            frequency: 80e6,
            power: 0.0,
            on: false,
        },
    );
    let flat = sweep(&mut world, 1, 1, 60e3);
    let uncontrolled = world.line_at(10.0).uncontrolled();
    let probe = world.beams.probe.output(10.01, &mut 0).1;
    for volts in &flat {
        assert!(
            (volts - truth.detector.dark - truth.detector.full_scale * probe * uncontrolled).abs()
                < 1e-3 * probe
        );
    }
    world.set_beam(
        11.0,
        Beam::Control,
        BeamState {
            frequency: 80e6,
            power: truth.control.level,
            on: true,
        },
    );
    world.set_beam(
        11.0,
        Beam::Probe,
        BeamState {
            frequency: 80e6,
            power: 0.0,
            on: false,
        },
    );
    let mut volts = [0.0; 3];
    world.record(1, 2, 12.0, 1e-5, &mut volts);
    let control = world.beams.control.output(12.0, &mut 0).1;
    assert!(
        volts
            .iter()
            .all(|v| (v - truth.detector.dark - 0.1 * control).abs() < 1e-12)
    );
    world.record(2, 2, 12.0, 1e-5, &mut volts);
    assert!(
        volts
            .iter()
            .all(|v| (v - truth.detector.dark).abs() < 1e-12)
    );
}

#[test]
fn out_of_lock_the_level_is_low_and_the_peak_gone_during_exactly_these_samples() {
    let mut truth = quiet();
    truth.lock.losses = vec![(10.02, 0.01)];
    let mut world = running(truth.clone(), 5e-3);
    world.set_fault(10.035, Fault::LockLost, true);
    world.set_fault(10.036, Fault::LockLost, false);
    let (signal, lock) = (sweep(&mut world, 1, 1, 60e3), sweep(&mut world, 3, 1, 60e3));
    let probe = world.beams.probe.output(10.02, &mut 0).1;
    let out_of_lock =
        truth.detector.dark + truth.detector.full_scale * probe * truth.lock.transmission;
    for n in 0..N {
        let t = 10.0 + n as f64 * 0.04 / N as f64;
        let lost = (10.02..10.03).contains(&t) || (10.035..10.036).contains(&t);
        assert_eq!(lost, lock[n] < 0.1, "at {t}");
        assert_eq!(
            lost,
            (signal[n] - out_of_lock).abs() < 0.02 * out_of_lock,
            "at {t}: {}",
            signal[n]
        );
        assert_eq!(lost, !world.locked(t));
    }
    assert!(world.lock_level(10.025) < 0.1 && world.lock_level(10.031) > 0.5);
}

#[test]
fn the_detectors_pole_shifts_a_swept_line_by_rate_times_time_and_mirrored_on_the_way_back() {
    let mut truth = quiet();
    truth.detector.lag = 100e-6;
    truth.field.transverse = 0.0;
    (truth.coil.expansion, truth.field.residual) = (0.0, 0.0);
    let mut world = running(truth, 0.0);
    let mut shifts = Vec::new();
    for (start, stop) in [(-100e3, 100e3), (100e3, -100e3)] {
        world.start_sweep(
            10.0,
            Beam::Probe,
            Sweep {
                start: 80e6 + start,
                stop: 80e6 + stop,
                duration: 0.04,
                steps: None,
            },
        );
        let mut volts = vec![0.0; N];
        world.record(1, 1, 10.0, 0.04 / N as f64, &mut volts);
        shifts.push(place_of_peak(&volts, stop - start));
    }
    // 5 MHz/s for 100 us: 500 Hz, to first order in the shift over the linewidth; a sample is 100 Hz.
    assert!(
        (shifts[0] - 500.0).abs() < 110.0 && (shifts[1] + 500.0).abs() < 110.0,
        "{shifts:?}"
    );
}

#[test]
fn shared_intensity_noise_cancels_in_the_ratio() {
    let mut truth = quiet();
    truth.detector.intensity_noise = 0.01;
    (truth.detector.dark, truth.detector.leakage) = (0.0, 0.0);
    let mut world = running(truth, 20e-3);
    let (signal, reference) = (sweep(&mut world, 1, 1, 1.0), sweep(&mut world, 2, 1, 1.0));
    let ratios: Vec<f64> = signal.iter().zip(&reference).map(|(s, r)| s / r).collect();
    let mean = |x: &[f64]| x.iter().sum::<f64>() / N as f64;
    let spread =
        |x: &[f64]| (x.iter().map(|v| (v / mean(x) - 1.0).powi(2)).sum::<f64>() / N as f64).sqrt();
    assert!((spread(&signal) / 0.01 - 1.0).abs() < 0.1 && spread(&ratios) < 1e-4);
}

#[test]
fn readings_carry_their_errors_and_faults_act() {
    let mut truth = quiet();
    (
        truth.coil.readback_gain_error,
        truth.coil.readback_offset,
        truth.coil.readback_noise,
    ) = (0.01, 1e-6, 0.0);
    let mut world = running(truth, 10e-3);
    assert!((world.measured_coil_current(5.0) - 10.101e-3).abs() < 1e-9);
    assert!((world.coil_current(5.0) - 10e-3).abs() < 1e-9);
    world.set_fault(6.0, Fault::CoilRunaway, true);
    assert!((world.coil_current(8.0) - 15e-3).abs() < 1e-9);
    world.set_fault(8.0, Fault::CoilRunaway, false);
    world.set_coil_output(9.0, false);
    assert!(world.coil_current(10.0).abs() < 1e-9);
    world.set_fault(20.0, Fault::OvenSensorOpen, true);
    assert!(world.oven_reading(19.0).is_finite() && world.oven_reading(21.0).is_nan());
    assert!(
        world.monitor("room temperature", 3.0).is_some() && world.monitor("colour", 3.0).is_none()
    );
    assert_eq!(Fault::named("lock lost"), Some(Fault::LockLost));
}

#[test]
fn light_shift_moves_the_line_by_its_coefficient() {
    let mut truth = quiet();
    truth.field.transverse = 0.0;
    let span = 60e3;
    let without = place_of_peak(&sweep(&mut running(truth.clone(), 0.0), 1, 1, span), span);
    // -102.3 Hz/MHz^2 is too little for one sample; a hundredfold is not.
    truth.laser.light_shift = -102.312e-10;
    let mut world = running(truth.clone(), 0.0);
    let with = place_of_peak(&sweep(&mut world, 1, 1, span), span);
    let LineTruth::Bloch(bloch) = &truth.line else {
        panic!()
    };
    let expected = -102.312e-10 * bloch.control_rabi.powi(2) * world.beams.control.nominal(10.0);
    assert!(
        (with - without - expected).abs() <= 31.0,
        "{with} {without} {expected}"
    );
}

#[test]
fn mains_and_gradients_broaden_and_a_wrong_handed_leak_mirrors() {
    let height = |truth: Truth| {
        let volts = sweep(&mut running(truth, 20e-3), 1, 1, 150e3);
        let base = volts[0];
        (volts.iter().copied().fold(f64::MIN, f64::max) - base, volts)
    };
    let (plain, _) = height(quiet());
    let mut gradient = quiet();
    gradient.coil.inhomogeneity = 0.2;
    assert!(height(gradient).0 < 0.8 * plain);
    let mut leaky = quiet();
    leaky.atom.polarisation_leak = 0.3;
    let (_, volts) = height(leaky.clone());
    let field = (leaky.coil.constant * 20e-3 + leaky.field.residual).hypot(leaky.field.transverse);
    let mirror = volts[((-13.9916661e9 * field / 150e3 + 0.5) * N as f64) as usize] - volts[0];
    assert!((mirror / plain - 0.3).abs() < 0.05, "{}", mirror / plain);
    let mut humming = quiet();
    humming.field.mains = 200e-9;
    let span = 150e3;
    let at = |truth: Truth| place_of_peak(&height(truth).1, span);
    let shift = at(humming) - at(quiet());
    assert!(shift.abs() > 100.0 && shift.abs() < 4000.0, "{shift}");
}

#[test]
fn the_shipped_line_is_as_promised() {
    let world = running(Truth::shipped(), 0.0);
    let (width, contrast) = (world.true_linewidth(10.0), world.true_contrast(10.0));
    assert!((5.5e3..6.5e3).contains(&width), "{width} Hz");
    assert!((0.02..0.12).contains(&contrast), "{contrast}");
    let mut quiet_world = running(quiet(), 20e-3);
    let mut noisy = running(Truth::shipped(), 20e-3);
    let (clean, with) = (
        sweep(&mut quiet_world, 1, 1, 100e3),
        sweep(&mut noisy, 1, 1, 100e3),
    );
    let height = clean.iter().copied().fold(f64::MIN, f64::max) - clean[0];
    let noise = (with
        .iter()
        .zip(&clean)
        .map(|(a, b)| (a - b).powi(2))
        .sum::<f64>()
        / N as f64)
        .sqrt();
    eprintln!(
        "width {width} contrast {contrast} height {height} noise {noise} ratio {}",
        height / noise
    );
    assert!(
        (15.0..30.0).contains(&(height / noise)),
        "{}",
        height / noise
    );
}
