//! The truth: every number that sets the simulated world, in SI units, and the world file that it is read from.
//! Never simulates anything: `world` does. No randomness except in `seeded`, which draws whole truths from a seed.

use darkline_core::atom::breit_rabi::Level;

mod file;
mod section;
mod seeded;
mod shipped;
mod units;

/// Everything that sets one simulated world. All fields in SI units (T, A, Hz, s, K, W, V) unless said otherwise.
#[derive(Debug, Clone, PartialEq)]
pub struct Truth {
    /// Seed of all noise. The noise depends on (seed, channel, acquisition, sample) and on nothing else.
    pub seed: u64,
    /// The atoms.
    pub atom: AtomTruth,
    /// The coil and its supply.
    pub coil: CoilTruth,
    /// Fields that are there without the coil.
    pub field: FieldTruth,
    /// The vapour cell and its oven.
    pub cell: CellTruth,
    /// How one dark-resonance line looks.
    pub line: LineTruth,
    /// Laser light common to both beams.
    pub laser: LaserTruth,
    /// Probe beam behind its modulator.
    pub probe: BeamTruth,
    /// Control beam behind its modulator.
    pub control: BeamTruth,
    /// Photodiodes.
    pub detector: DetectorTruth,
    /// The laser lock.
    pub lock: LockTruth,
    /// Room temperature, K.
    pub room_temperature: f64,
}

/// The atoms and the pair of states that makes the line.
#[derive(Debug, Clone, PartialEq)]
pub struct AtomTruth {
    /// Isotope and ground-state level F used.
    pub level: Level,
    /// +1.0: sigma+ probe with sigma- control; -1.0 the reverse. Sign of the line's shift.
    pub handedness: f64,
    /// Population asymmetry between the outer pairs, -1..1: scales the small nonlinear Zeeman term.
    pub pair_asymmetry: f64,
    /// Share of wrong-handed light, 0..1: gives a mirror line at -2 nu_L.
    pub polarisation_leak: f64,
}

/// The coil and the supply that drives it.
#[derive(Debug, Clone, PartialEq)]
pub struct CoilTruth {
    /// Coil constant at room temperature, T/A.
    pub constant: f64,
    /// Winding resistance, ohm.
    pub resistance: f64,
    /// Inductance, H.
    pub inductance: f64,
    /// Time constant of the supply's control loop, s.
    pub supply_lag: f64,
    /// Relative change of the coil constant per kelvin of coil temperature (17e-6 for copper geometry).
    pub expansion: f64,
    /// Warming per dissipated power, K/W.
    pub heating: f64,
    /// Thermal time constant of the coil, s.
    pub thermal_time: f64,
    /// Relative fall of the field from the cell's middle to its ends (0: homogeneous).
    pub inhomogeneity: f64,
    /// Share of the field that follows late, through eddy currents (0: none).
    pub eddy_share: f64,
    /// Time constant of the eddy currents, s.
    pub eddy_time: f64,
    /// Half width of the play operator of a magnetic shield, A (0: none).
    pub hysteresis_width: f64,
    /// Field of the shield per ampere of play, T/A.
    pub hysteresis_constant: f64,
    /// Largest current that the supply delivers, A.
    pub supply_limit: f64,
    /// Supply readback: relative gain error.
    pub readback_gain_error: f64,
    /// Supply readback: offset, A.
    pub readback_offset: f64,
    /// Supply readback: rms noise of one reading, A.
    pub readback_noise: f64,
}

/// Fields that are there without the coil.
#[derive(Debug, Clone, PartialEq)]
pub struct FieldTruth {
    /// Along the light, T, signed as the coil's field.
    pub residual: f64,
    /// Across the light, T, not negative.
    pub transverse: f64,
    /// Slow drift of the residual field, T/s.
    pub drift: f64,
    /// Amplitude of the axial mains field, T (0: none).
    pub mains: f64,
    /// Mains frequency, Hz.
    pub mains_frequency: f64,
}

/// The vapour cell and its oven.
#[derive(Debug, Clone, PartialEq)]
pub struct CellTruth {
    /// Length along the light, m.
    pub length: f64,
    /// Share of the vapour that is the isotope and level in question and takes part (abundance times level share).
    pub share: f64,
    /// Temperature at the world's start, also the oven's first setpoint, K.
    pub temperature: f64,
    /// Time constant of cell in oven, s.
    pub oven_time: f64,
    /// Offset of the oven's sensor, K.
    pub sensor_offset: f64,
    /// rms noise of one sensor reading, K.
    pub sensor_noise: f64,
}

/// How one dark-resonance line looks.
#[derive(Debug, Clone, PartialEq)]
pub enum LineTruth {
    /// Three-level Bloch equations, averaged over the Doppler profile, in an optically thick cell.
    Bloch(BlochTruth),
    /// Closed form: transmission `base * (1 + 2 c/(1-c) / (1 + (2 delta/fwhm)^2))`, summed over the five peaks.
    Lorentzian {
        /// Full width at half maximum, Hz.
        fwhm: f64,
        /// Contrast (peak - base)/(peak + base), 0..1.
        contrast: f64,
        /// Transmission far off the two-photon resonance, 0..1.
        base: f64,
    },
}

/// Rates of the three-level model in ordinary Hz (not angular).
#[derive(Debug, Clone, PartialEq)]
pub struct BlochTruth {
    /// Decay rate of the upper level, Hz.
    pub natural_width: f64,
    /// Extra optical dephasing by buffer gas, Hz.
    pub optical_dephasing: f64,
    /// Transit (or diffusion) rate, Hz.
    pub transit: f64,
    /// Ground-state decoherence, Hz.
    pub ground_decoherence: f64,
    /// Share of the decay that ends in the other hyperfine level, 0..1.
    pub sink_branching: f64,
    /// Line-strength factor in the absorption coefficient (dipole strength relative to a closed two-level line).
    pub strength: f64,
    /// Rabi frequency of the probe at full diffraction, Hz.
    pub probe_rabi: f64,
    /// Rabi frequency of the control at full diffraction, Hz.
    pub control_rabi: f64,
}

/// Laser light common to both beams.
#[derive(Debug, Clone, PartialEq)]
pub struct LaserTruth {
    /// One-photon detuning of the control beam, Hz.
    pub detuning: f64,
    /// rms jitter of the laser frequency within the lock, Hz.
    pub jitter: f64,
    /// Correlation time of that jitter, s.
    pub jitter_time: f64,
    /// Centre of the line per laser detuning, Hz/Hz (the jitter acts through it).
    pub pull: f64,
    /// Light shift per square of the control Rabi frequency, Hz/Hz^2 (0: off).
    pub light_shift: f64,
}

/// One beam behind its single-pass, +1 order modulator.
#[derive(Debug, Clone, PartialEq)]
pub struct BeamTruth {
    /// Generator level at the world's start and for the world's own figures, dBm.
    pub level: f64,
    /// Generator level at which the modulator diffracts everything, dBm.
    pub full_level: f64,
    /// Radio frequency of the modulator's best efficiency, Hz.
    pub centre: f64,
    /// Relative efficiency per detuning from `centre`, 1/Hz.
    pub slope: f64,
    /// Relative efficiency per squared detuning, 1/Hz^2.
    pub curvature: f64,
}

/// Photodiodes and their amplifiers.
#[derive(Debug, Clone, PartialEq)]
pub struct DetectorTruth {
    /// Signal photodiode: volts at full probe power and an empty cell.
    pub full_scale: f64,
    /// Reference photodiode: volts at full probe power.
    pub reference_full_scale: f64,
    /// Volts in the dark.
    pub dark: f64,
    /// Volts of control light at full control power that reach the signal photodiode.
    pub leakage: f64,
    /// Time constant of detector and amplifier, s (0: none).
    pub lag: f64,
    /// Transimpedance, V/A: sets the shot noise (0: none).
    pub transimpedance: f64,
    /// White amplifier noise, V/sqrt(Hz).
    pub white: f64,
    /// Corner below which the amplifier's noise rises as 1/f, Hz (0: none).
    pub corner: f64,
    /// Common relative intensity noise of the probe, rms per sample.
    pub intensity_noise: f64,
    /// Electrical mains pickup, V amplitude.
    pub pickup: f64,
}

/// The laser lock and its monitor.
#[derive(Debug, Clone, PartialEq)]
pub struct LockTruth {
    /// Monitor level in lock, V.
    pub level: f64,
    /// rms noise of the monitor, V.
    pub noise: f64,
    /// Losses of lock at known times: (start, duration), s.
    pub losses: Vec<(f64, f64)>,
    /// Random losses of lock per second.
    pub rate: f64,
    /// Duration of a random loss, s.
    pub duration: f64,
    /// Transmission of the cell out of lock, 0..1.
    pub transmission: f64,
}

/// A world file that cannot be read.
#[derive(Debug, Clone, PartialEq, thiserror::Error)]
#[error("world file: {message}")]
pub struct WorldFileError {
    /// What is wrong, where (line), and what to do.
    pub message: String,
}

/// One drawn case of the honest-answer campaign: a truth, and what a user would know of it beforehand.
#[derive(Debug, Clone, PartialEq)]
pub struct Campaign {
    /// The world.
    pub truth: Truth,
    /// Coil currents run from minus to plus this, A.
    pub current_range: f64,
    /// Coil constant as the bench file states it, T/A, within 20 % of the truth.
    pub nominal_constant: f64,
    /// Span of the sweep, Hz, centred on the control's frequency plus the predicted shift.
    pub span: f64,
    /// Duration of one sweep, s.
    pub duration: f64,
}

impl Truth {
    /// Text of the shipped world file, with a comment on every key.
    pub const SHIPPED_FILE: &str = include_str!("../world.toml");

    /// The truth of the shipped world (`mock/world.toml`).
    pub fn shipped() -> Truth {
        shipped::truth()
    }

    /// Reads a world file (TOML). What the file leaves out is as in the shipped world.
    ///
    /// # Errors
    /// Unknown key, wrong unit, or a value outside its range, with the line.
    pub fn parse(text: &str) -> Result<Truth, WorldFileError> {
        file::read(text)
    }

    /// The case of that seed for the honest-answer campaign.
    pub fn seeded(seed: u64) -> Campaign {
        seeded::campaign(seed)
    }
}

#[cfg(test)]
mod tests;
