//! The one simulated world behind all mock instruments: coil current -> field -> resonance -> photodiode.
//! Owns the history of commands and answers for any time; has no clock of its own: time is seconds since the
//! world's start, handed in. Never speaks SCPI, never quantises or clips: that is the instruments' part.

mod beams;
mod coil;
mod light;
mod line;
mod lock;
mod noise;
mod oven;
mod tilt;

pub use crate::truth::Truth;
use beams::{BeamTrack, Beams};
use coil::CoilTrack;
use noise::Noise;
use oven::OvenTrack;

/// Which of the two beams.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Hash, PartialOrd, Ord)]
pub enum Beam {
    /// The weak beam whose transmission is recorded.
    Probe,
    /// The strong beam that makes the atoms dark.
    Control,
}

/// What the generator of a beam's modulator puts out.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct BeamState {
    /// Radio frequency, Hz.
    pub frequency: f64,
    /// Level at the generator, dBm.
    pub power: f64,
    /// Output on.
    pub on: bool,
}

/// A frequency sweep that starts at the moment it is handed over; after `duration` the beam stays at `stop`.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct Sweep {
    /// First frequency, Hz.
    pub start: f64,
    /// Last frequency, Hz.
    pub stop: f64,
    /// From the first to the last frequency, s.
    pub duration: f64,
    /// Number of equal dwells, from `start` to `stop` inclusive; `None`: phase-continuous.
    pub steps: Option<u32>,
}

/// Faults a test can switch on while the world runs.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Hash, PartialOrd, Ord)]
pub enum Fault {
    /// The laser is out of lock while this is on.
    LockLost,
    /// The digitizer does not see the next triggers. The world only keeps the flag: the digitizer asks for it.
    MissedTrigger,
    /// The supply drives 1.5 times the current asked for.
    CoilRunaway,
    /// Both beams are blocked.
    BeamBlocked,
    /// The oven's sensor is open and reads NaN.
    OvenSensorOpen,
}

impl Fault {
    /// Every fault, with the name that tests and world tools use.
    pub const NAMED: [(&'static str, Fault); 5] = [
        ("lock lost", Fault::LockLost),
        ("missed trigger", Fault::MissedTrigger),
        ("coil runaway", Fault::CoilRunaway),
        ("beam blocked", Fault::BeamBlocked),
        ("oven sensor open", Fault::OvenSensorOpen),
    ];

    /// The fault of that name, `None` for an unknown one.
    pub fn named(name: &str) -> Option<Fault> {
        Self::NAMED
            .iter()
            .find(|(n, _)| *n == name)
            .map(|(_, f)| *f)
    }
}

/// The simulated world. Not thread-safe by itself.
///
/// Times are seconds since the world's start. Commands must come in rising time (an earlier one counts as given at
/// the time of the latest before it); questions may be asked for any time, also for the past: the history of the
/// last several thousand commands is kept.
#[derive(Debug, Clone)]
pub struct World {
    truth: Truth,
    noise: Noise,
    coil: CoilTrack,
    setpoint: f64,
    output: bool,
    runaway: bool,
    beams: Beams,
    oven: OvenTrack,
    /// Switchings of faults in rising time.
    faults: Vec<(f64, Fault, bool)>,
    /// Readings taken so far, one count per meter: each reading has noise of its own.
    readings: [u64; 4],
}

/// Meters whose every reading has noise of its own, with their noise channels.
#[derive(Clone, Copy)]
enum Meter {
    Coil = 0,
    Oven = 1,
    Lock = 2,
    Room = 3,
}

impl World {
    /// A world at time 0: coil output off, both beams off at their modulator's centre, oven on and settled, laser in lock.
    pub fn new(truth: Truth) -> World {
        World {
            noise: Noise::new(truth.seed),
            coil: CoilTrack::new(truth.coil.clone()),
            setpoint: 0.0,
            output: false,
            runaway: false,
            beams: Beams {
                probe: BeamTrack::new(truth.probe.clone()),
                control: BeamTrack::new(truth.control.clone()),
            },
            oven: OvenTrack::new(&truth.cell, truth.room_temperature),
            faults: Vec::new(),
            readings: [0; 4],
            truth,
        }
    }

    /// What the world is made of.
    pub fn truth(&self) -> &Truth {
        &self.truth
    }

    /// Sets the supply's setpoint, A. The actual current follows through supply loop and L/R.
    pub fn set_coil_current(&mut self, now: f64, amperes: f64) {
        self.setpoint = amperes;
        self.drive(now);
    }

    /// Switches the supply's output. Off means no current, after the decay of the loop and L/R.
    pub fn set_coil_output(&mut self, now: f64, on: bool) {
        self.output = on;
        self.drive(now);
    }

    /// Actual current, A.
    pub fn coil_current(&mut self, now: f64) -> f64 {
        self.coil.at(now, &mut 0).current
    }

    /// Current as the supply measures it, A: gain error, offset, noise; each call is a new reading.
    pub fn measured_coil_current(&mut self, now: f64) -> f64 {
        let noise = self.reading(Meter::Coil);
        let truth = &self.truth.coil;
        let actual = self.coil.at(now, &mut 0).current;
        actual * (1.0 + truth.readback_gain_error)
            + truth.readback_offset
            + truth.readback_noise * noise
    }

    /// Voltage across the coil, V.
    pub fn coil_voltage(&mut self, now: f64) -> f64 {
        self.coil.voltage(now)
    }

    /// Sets a beam's generator; ends a sweep of that beam.
    pub fn set_beam(&mut self, now: f64, beam: Beam, state: BeamState) {
        self.beams.of_mut(beam).set(now, state);
    }

    /// Starts a sweep of a beam; power and output stay as they are. It may start in the future: give that time as
    /// `now`, and no command for this beam before it.
    pub fn start_sweep(&mut self, now: f64, beam: Beam, sweep: Sweep) {
        self.beams.of_mut(beam).sweep(now, sweep);
    }

    /// Radio frequency of a beam at that moment, Hz.
    pub fn frequency(&self, now: f64, beam: Beam) -> f64 {
        self.beams.of(beam).frequency(now, &mut 0)
    }

    /// Sets the oven's setpoint, K, and switches its heater.
    pub fn set_oven(&mut self, now: f64, kelvin: f64, on: bool) {
        self.oven.set(now, kelvin, on);
    }

    /// Actual temperature of the cell, K.
    pub fn cell_temperature(&mut self, now: f64) -> f64 {
        self.oven.at(now)
    }

    /// Cell temperature as the controller's sensor reads it, K; each call is a new reading. NaN with an open sensor.
    pub fn oven_reading(&mut self, now: f64) -> f64 {
        let noise = self.reading(Meter::Oven);
        if self.fault(now, Fault::OvenSensorOpen) {
            return f64::NAN;
        }
        self.oven.at(now) + self.truth.cell.sensor_offset + self.truth.cell.sensor_noise * noise
    }

    /// Whether the laser is in lock.
    pub fn locked(&self, t: f64) -> bool {
        !self
            .lock_losses(t, t)
            .iter()
            .any(|&(start, end)| start <= t && t < end)
    }

    /// The lock monitor's level, V: about 0.6 V in lock, near 0 V out of lock; each call is a new reading.
    pub fn lock_level(&mut self, t: f64) -> f64 {
        let noise = self.reading(Meter::Lock);
        self.lock_volts(self.locked(t)) + self.truth.lock.noise * noise
    }

    /// Any monitored quantity by name, in SI units: `lock` (V), `room temperature` (K), `cell temperature` (K),
    /// `coil current` (A). `None` for an unknown name.
    pub fn monitor(&mut self, name: &str, t: f64) -> Option<f64> {
        match name {
            "lock" => Some(self.lock_level(t)),
            "room temperature" => Some(self.room_reading(t)),
            "cell temperature" => Some(self.oven_reading(t)),
            "coil current" => Some(self.measured_coil_current(t)),
            _ => None,
        }
    }

    /// Volts at the digitizer's input, for `out.len()` samples at `t0 + i * dt`. May be asked for the past: the
    /// digitizer calls it when the acquisition is over. Channel 1: signal photodiode, 2: reference photodiode,
    /// 3: lock monitor; any other channel is an open input (0 V).
    ///
    /// `acquisition` numbers the acquisitions; the same number, times and commands give the same volts, bit for bit.
    /// Powers and temperature are taken at the record's middle; a beam switched on or off within it is seen.
    pub fn record(&mut self, channel: u8, acquisition: u64, t0: f64, dt: f64, out: &mut [f64]) {
        self.light_record(channel, acquisition, t0, dt, out);
    }

    /// Switches a fault from that moment.
    pub fn set_fault(&mut self, now: f64, fault: Fault, on: bool) {
        let now = self.faults.last().map_or(now, |&(last, ..)| now.max(last));
        self.faults.push((now, fault, on));
        if fault == Fault::CoilRunaway {
            self.runaway = on;
            self.drive(now);
        }
    }

    /// Whether a fault is on at that moment.
    pub fn fault(&self, t: f64, fault: Fault) -> bool {
        let latest = self
            .faults
            .iter()
            .rev()
            .find(|&&(at, which, _)| which == fault && at <= t);
        latest.is_some_and(|&(.., on)| on)
    }

    /// Full width at half maximum of the single line (untilted, homogeneous field), Hz, noise-free, in the present
    /// conditions; a beam that is off counts with its level of the world file.
    pub fn true_linewidth(&self, t: f64) -> f64 {
        self.line_at(t).full_width()
    }

    /// Contrast (peak - base)/(peak + base) of that line, dark level and leakage taken off.
    pub fn true_contrast(&self, t: f64) -> f64 {
        self.line_at(t).contrast()
    }

    /// Transmission of the cell on the single line at a two-photon detuning (Hz) in the present conditions, 0..1.
    pub fn true_transmission(&self, t: f64, detuning: f64) -> f64 {
        self.line_at(t).single(detuning)
    }

    fn drive(&mut self, now: f64) {
        let asked = if self.output { self.setpoint } else { 0.0 };
        self.coil
            .drive(now, if self.runaway { 1.5 * asked } else { asked });
    }

    fn reading(&mut self, meter: Meter) -> f64 {
        let count = &mut self.readings[meter as usize];
        *count += 1;
        self.noise.normal(128 + meter as u32, *count)
    }

    fn room_reading(&mut self, t: f64) -> f64 {
        // The air conditioning's slow breath, half an hour long.
        let drift = 0.1 * (std::f64::consts::TAU * t / 1800.0).sin();
        self.truth.room_temperature + drift + 5e-3 * self.reading(Meter::Room)
    }

    fn fault_intervals(&self, fault: Fault) -> Vec<(f64, f64)> {
        let mut intervals: Vec<(f64, f64)> = Vec::new();
        for &(at, _, on) in self.faults.iter().filter(|&&(_, which, _)| which == fault) {
            let open = intervals
                .last()
                .is_some_and(|&(_, end)| end == f64::INFINITY);
            if on && !open {
                intervals.push((at, f64::INFINITY));
            } else if let (false, true, Some(last)) = (on, open, intervals.last_mut()) {
                last.1 = at;
            }
        }
        intervals
    }
}

/// One number evenly spread over 0..1, of a stream that no world draws from: for drawing truths.
pub(crate) fn uniform(seed: u64, draw: u64) -> f64 {
    Noise::new(seed).uniform(u32::MAX, draw)
}

#[cfg(test)]
mod tests;
