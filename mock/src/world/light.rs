//! From field and light to volts at the digitizer's input: the optical chain, the detectors and their noise.

use super::coil::CoilTrack;
use super::line::{Conditions, Line};
use super::noise::Stream;
use super::{Fault, World, lock, tilt};
use std::f64::consts::PI;

// Streams of noise; the digitizer's own channels keep the numbers below 16.
const COMMON: u32 = 16;
const JITTER: u32 = 17;
const FLICKER: u32 = 24;
const ELEMENTARY_CHARGE: f64 = darkline_core::atom::constants::ELEMENTARY_CHARGE;

/// Everything that stays the same over one record.
struct Scene<'a> {
    world: &'a World,
    line: Line,
    /// Light shift at the record's control power, Hz.
    light_shift: f64,
    /// Intervals out of lock.
    losses: Vec<(f64, f64)>,
    hints: Hints,
}

#[derive(Default)]
struct Hints {
    coil: usize,
    probe: usize,
    control: usize,
}

impl World {
    pub(super) fn light_record(
        &self,
        channel: u8,
        acquisition: u64,
        t0: f64,
        dt: f64,
        out: &mut [f64],
    ) {
        match channel {
            1 => self.signal(acquisition, t0, dt, out),
            2 => self.reference(acquisition, t0, dt, out),
            3 => self.lock_record(acquisition, t0, dt, out),
            _ => out.fill(0.0),
        }
    }

    /// The line in the conditions of that moment.
    pub(super) fn line_at(&self, t: f64) -> Line {
        let at = Conditions {
            temperature: self.oven.at(t),
            probe: self.beams.probe.nominal(t),
            control: self.beams.control.nominal(t),
        };
        Line::new(&self.truth, &at)
    }

    fn signal(&self, acquisition: u64, t0: f64, dt: f64, out: &mut [f64]) {
        let detector = &self.truth.detector;
        let end = t0 + dt * out.len() as f64;
        // The detector's pole remembers about ten time constants (4e-5 of a step).
        let before = if detector.lag > 0.0 {
            ((10.0 * detector.lag / dt).ceil() as usize).clamp(1, 1000)
        } else {
            0
        };
        let from = t0 - before as f64 * dt;
        let mut scene = self.scene(from, end);
        let laser = &self.truth.laser;
        let mut jitter = self.stream(JITTER, acquisition);
        let keep = (-dt / laser.jitter_time.max(1e-12)).exp();
        let mut wander = if laser.jitter > 0.0 {
            laser.jitter * jitter.next()
        } else {
            0.0
        };
        let mut filter = Filter::new(detector.lag, dt);
        for index in 0..before {
            filter.next(scene.volts(from + index as f64 * dt, wander));
        }
        for (index, volts) in out.iter_mut().enumerate() {
            *volts = filter.next(scene.volts(t0 + index as f64 * dt, wander));
            if laser.jitter > 0.0 {
                wander = keep * wander + laser.jitter * (1.0 - keep * keep).sqrt() * jitter.next();
            }
        }
        self.add_noise(1, acquisition, t0, dt, out);
    }

    fn reference(&self, acquisition: u64, t0: f64, dt: f64, out: &mut [f64]) {
        let detector = &self.truth.detector;
        let mut hint = 0;
        for (index, volts) in out.iter_mut().enumerate() {
            let t = t0 + index as f64 * dt;
            let share = if self.fault(t, Fault::BeamBlocked) {
                0.0
            } else {
                self.beams.probe.output(t, &mut hint).1
            };
            *volts = detector.dark + detector.reference_full_scale * share;
        }
        self.add_noise(2, acquisition, t0, dt, out);
    }

    fn lock_record(&self, acquisition: u64, t0: f64, dt: f64, out: &mut [f64]) {
        let losses = self.lock_losses(t0, t0 + dt * out.len() as f64);
        let mut noise = self.stream(3, acquisition);
        for (index, volts) in out.iter_mut().enumerate() {
            let locked = !within(&losses, t0 + index as f64 * dt);
            *volts = self.lock_volts(locked) + self.truth.lock.noise * noise.next();
        }
    }

    pub(super) fn lock_volts(&self, locked: bool) -> f64 {
        if locked {
            self.truth.lock.level
        } else {
            0.02 * self.truth.lock.level
        }
    }

    /// Intervals out of lock that touch `from..=to`, the fault's included.
    pub(super) fn lock_losses(&self, from: f64, to: f64) -> Vec<(f64, f64)> {
        let mut all = lock::losses(&self.truth.lock, &self.noise, from, to);
        all.extend(self.fault_intervals(Fault::LockLost));
        all
    }

    /// Intensity noise of the probe on what is above the dark level (one stream for both photodiodes), then shot,
    /// white and 1/f noise of the channel's own amplifier.
    fn add_noise(&self, channel: u32, acquisition: u64, t0: f64, dt: f64, out: &mut [f64]) {
        let detector = &self.truth.detector;
        // Bandwidth of one sample: the digitizer's, or that of the detector's pole, pi/2 times its corner.
        let bandwidth = if detector.lag > 0.0 {
            (0.5 / dt).min(0.25 / detector.lag)
        } else {
            0.5 / dt
        };
        let white = detector.white * detector.white * bandwidth;
        let shot = 2.0 * ELEMENTARY_CHARGE * detector.transimpedance * bandwidth;
        let mut common = self.stream(COMMON, acquisition);
        let mut own = self.stream(channel, acquisition);
        let mut flicker = Flicker::new(self, channel, acquisition, dt);
        for (index, volts) in out.iter_mut().enumerate() {
            let light = *volts - detector.dark;
            if detector.intensity_noise > 0.0 {
                *volts += light * detector.intensity_noise * common.next();
            }
            let variance = white + shot * light.max(0.0);
            if variance > 0.0 {
                *volts += variance.sqrt() * own.next();
            }
            if detector.pickup > 0.0 {
                *volts += detector.pickup * self.mains(t0 + index as f64 * dt);
            }
            *volts += flicker.next();
        }
    }

    /// The mains' wave, -1..1.
    fn mains(&self, t: f64) -> f64 {
        (2.0 * PI * self.truth.field.mains_frequency * t).sin()
    }

    fn stream(&self, channel: u32, acquisition: u64) -> Stream {
        self.noise.stream(channel, acquisition)
    }

    fn scene(&self, from: f64, to: f64) -> Scene<'_> {
        let middle = (from + to) / 2.0;
        let rabi2 = match &self.truth.line {
            crate::truth::LineTruth::Bloch(bloch) => {
                bloch.control_rabi.powi(2) * self.beams.control.nominal(middle)
            }
            crate::truth::LineTruth::Lorentzian { .. } => 1e12 * self.beams.control.nominal(middle),
        };
        Scene {
            world: self,
            line: self.line_at(middle),
            light_shift: self.truth.laser.light_shift * rabi2,
            losses: self.lock_losses(from, to),
            hints: Hints::default(),
        }
    }
}

impl Scene<'_> {
    /// Noise-free volts of the signal photodiode before its pole; `wander` is the laser's frequency error, Hz.
    fn volts(&mut self, t: f64, wander: f64) -> f64 {
        let world = self.world;
        let detector = &world.truth.detector;
        let (probe_frequency, probe) = world.beams.probe.output(t, &mut self.hints.probe);
        let (control_frequency, control) = world.beams.control.output(t, &mut self.hints.control);
        if world.fault(t, Fault::BeamBlocked) {
            return detector.dark;
        }
        let leakage = detector.dark + detector.leakage * control;
        if probe <= 0.0 {
            return leakage;
        }
        let transmission = if within(&self.losses, t) {
            world.truth.lock.transmission
        } else if control <= 0.0 {
            self.line.uncontrolled()
        } else {
            let shift = self.light_shift + world.truth.laser.pull * wander;
            self.transmission(t, probe_frequency - control_frequency - shift)
        };
        leakage + detector.full_scale * probe * transmission
    }

    /// Transmission at `detuning` (Hz) of the probe's frequency above the control's, shifts of the light taken off.
    fn transmission(&mut self, t: f64, detuning: f64) -> f64 {
        let world = self.world;
        let (coil, still) = axial_field(world, &world.coil, t, &mut self.hints.coil);
        let spread = world.truth.coil.inhomogeneity;
        if spread == 0.0 {
            return self.at_field(coil + still, detuning);
        }
        // A quadratic fall of the coil's field along the cell that leaves its mean alone.
        const SLICES: i32 = 8;
        let slices = (0..SLICES).map(|n| (2.0 * f64::from(n) + 1.0) / f64::from(SLICES) - 1.0);
        let logs = slices.map(|z| {
            self.at_field(
                coil * (1.0 - spread * (z * z - 1.0 / 3.0)) + still,
                detuning,
            )
            .ln()
        });
        (logs.sum::<f64>() / f64::from(SLICES)).exp()
    }

    fn at_field(&self, axial: f64, detuning: f64) -> f64 {
        let atom = &self.world.truth.atom;
        let field = axial.hypot(self.world.truth.field.transverse);
        let cosine = if field > 0.0 { axial / field } else { 1.0 };
        let mut weights = tilt::weights(cosine);
        if atom.polarisation_leak > 0.0 {
            let kept = weights;
            for (index, weight) in weights.iter_mut().enumerate() {
                *weight += atom.polarisation_leak * (kept[4 - index] - kept[index]);
            }
        }
        let larmor = atom.level.larmor(field);
        let bend = atom.pair_asymmetry * atom.level.outer_pair_curvature() * field * field;
        let detunings = std::array::from_fn(|index| {
            let q = index as f64 - 2.0;
            let outer = if index == 0 || index == 4 {
                bend * q.signum()
            } else {
                0.0
            };
            detuning - atom.handedness * (q * larmor + outer)
        });
        self.line.transmission(&detunings, &weights)
    }
}

/// (field of the coil, field without it) along the light, T.
fn axial_field(world: &World, coil: &CoilTrack, t: f64, hint: &mut usize) -> (f64, f64) {
    let field = &world.truth.field;
    let mains = if field.mains > 0.0 {
        field.mains * world.mains(t)
    } else {
        0.0
    };
    (
        coil.at(t, hint).field,
        field.residual + field.drift * t + mains,
    )
}

impl World {
    /// (axial field in T, transverse field in T) at a time: what the atoms see, the mains' part included.
    pub fn field(&self, t: f64) -> (f64, f64) {
        let (coil, still) = axial_field(self, &self.coil, t, &mut 0);
        (coil + still, self.truth.field.transverse)
    }
}

fn within(intervals: &[(f64, f64)], t: f64) -> bool {
    intervals.iter().any(|&(start, end)| start <= t && t < end)
}

/// One pole, exact for an input that is straight between samples; causal.
struct Filter {
    time: f64,
    step: f64,
    keep: f64,
    last: Option<(f64, f64)>,
}

impl Filter {
    fn new(time: f64, step: f64) -> Filter {
        let keep = if time > 0.0 {
            (-step / time).exp()
        } else {
            0.0
        };
        Filter {
            time,
            step,
            keep,
            last: None,
        }
    }

    fn next(&mut self, input: f64) -> f64 {
        let output = match self.last {
            Some((before, output)) if self.time > 0.0 => {
                let behind = (input - before) / self.step * self.time;
                input - behind + (output - before + behind) * self.keep
            }
            _ => input,
        };
        self.last = Some((input, output));
        output
    }
}

/// 1/f noise as a sum of relaxations with corners a factor of four apart, from half a hertz to four times the
/// corner: their spectra add up to white^2 * corner / f within some per cent over that range.
struct Flicker {
    parts: Vec<(Stream, f64, f64, f64)>,
}

impl Flicker {
    fn new(world: &World, channel: u32, acquisition: u64, dt: f64) -> Flicker {
        let detector = &world.truth.detector;
        let mut parts = Vec::new();
        let mut frequency = 0.5;
        let sigma = (detector.white * detector.white * detector.corner * 4f64.ln()).sqrt();
        while sigma > 0.0 && frequency <= 4.0 * detector.corner && parts.len() < 12 {
            let keep = (-2.0 * PI * frequency * dt).exp();
            let mut stream = world.stream(FLICKER + 16 * channel + parts.len() as u32, acquisition);
            let start = sigma * stream.next();
            parts.push((stream, keep, sigma * (1.0 - keep * keep).sqrt(), start));
            frequency *= 4.0;
        }
        Flicker { parts }
    }

    fn next(&mut self) -> f64 {
        let mut sum = 0.0;
        for (stream, keep, kick, state) in &mut self.parts {
            sum += *state;
            *state = *keep * *state + *kick * stream.next();
        }
        sum
    }
}
