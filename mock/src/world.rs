//! The one simulated world behind all mock instruments: coil current -> field -> resonance -> photodiode.
//! Owns the history of commands and answers for any time; has no clock of its own: time is seconds since the
//! world's start, handed in. Never speaks SCPI, never quantises or clips: that is the instruments' part.

pub use crate::truth::Truth;

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
}

impl World {
    /// A world at time 0: coil output off, both beams off at their modulator's centre, oven on and settled, laser in lock.
    pub fn new(truth: Truth) -> World {
        World { truth }
    }

    /// What the world is made of.
    pub fn truth(&self) -> &Truth {
        &self.truth
    }

    /// Sets the supply's setpoint, A. The actual current follows through supply loop and L/R.
    pub fn set_coil_current(&mut self, _now: f64, _amperes: f64) {}

    /// Switches the supply's output.
    pub fn set_coil_output(&mut self, _now: f64, _on: bool) {}

    /// Actual current, A.
    pub fn coil_current(&mut self, _now: f64) -> f64 {
        0.0
    }

    /// Current as the supply measures it, A: gain error, offset, noise; each call is a new reading.
    pub fn measured_coil_current(&mut self, _now: f64) -> f64 {
        0.0
    }

    /// Voltage across the coil, V.
    pub fn coil_voltage(&mut self, _now: f64) -> f64 {
        0.0
    }

    /// Sets a beam's generator; ends a sweep of that beam.
    pub fn set_beam(&mut self, _now: f64, _beam: Beam, _state: BeamState) {}

    /// Starts a sweep of a beam; power and output stay as they are.
    pub fn start_sweep(&mut self, _now: f64, _beam: Beam, _sweep: Sweep) {}

    /// Radio frequency of a beam at that moment, Hz.
    pub fn frequency(&self, _now: f64, _beam: Beam) -> f64 {
        80e6
    }

    /// Sets the oven's setpoint, K, and switches its heater.
    pub fn set_oven(&mut self, _now: f64, _kelvin: f64, _on: bool) {}

    /// Actual temperature of the cell, K.
    pub fn cell_temperature(&mut self, _now: f64) -> f64 {
        self.truth.cell.temperature
    }

    /// Cell temperature as the controller's sensor reads it, K; each call is a new reading.
    pub fn oven_reading(&mut self, _now: f64) -> f64 {
        self.truth.cell.temperature
    }

    /// The lock monitor's level, V: about 0.6 V in lock, near 0 V out of lock.
    pub fn lock_level(&mut self, _t: f64) -> f64 {
        0.6
    }

    /// Any monitored quantity by name, in SI units: `lock` (V), `room temperature` (K), `cell temperature` (K),
    /// `coil current` (A). `None` for an unknown name.
    pub fn monitor(&mut self, name: &str, t: f64) -> Option<f64> {
        match name {
            "lock" => Some(self.lock_level(t)),
            "room temperature" => Some(self.truth.room_temperature),
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
    pub fn record(&mut self, _channel: u8, _acquisition: u64, _t0: f64, _dt: f64, out: &mut [f64]) {
        out.fill(0.0);
    }

    /// Switches a fault from that moment.
    pub fn set_fault(&mut self, _now: f64, _fault: Fault, _on: bool) {}

    /// Whether a fault is on at that moment.
    pub fn fault(&self, _t: f64, _fault: Fault) -> bool {
        false
    }
}
