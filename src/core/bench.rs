//! The bench: instruments, limits, rest and safe values, interlocks, timing, physics, specimen.
//!
//! [`Bench::parse`] turns the text of a bench file into the model, or says everything that is wrong
//! with it at once. This module opens no file and reaches no instrument.

mod instrument;
pub(crate) mod link;
mod physics;
pub(crate) mod read;

use std::collections::BTreeMap;

use serde::Serialize;

use crate::atom::breit_rabi::Level;
pub use crate::atom::breit_rabi::Species;
use crate::channel::{Access, Role};
use crate::diagnostic::Diagnostic;
use crate::document::Findings;
use crate::quantity::{Dimension, QuantityName, Setting};

/// A whole bench, checked.
#[derive(Debug, Clone, PartialEq, Serialize)]
pub struct Bench {
    /// What the user calls it.
    pub title: String,
    /// Instruments by name.
    pub instruments: BTreeMap<String, Instrument>,
    /// Groups in which instruments go to rest: groups in order, instruments of a group in parallel.
    /// Names every instrument that has a rest value.
    pub rest_order: Vec<Vec<String>>,
    /// Groups in which instruments go to their safe state.
    pub safe_order: Vec<Vec<String>>,
    /// What trips the bench to safe.
    pub interlocks: Vec<Interlock>,
    /// How a trace starts; `None` where nothing sweeps.
    pub timing: Option<Timing>,
    /// The physics of cell and light; `None` where the file does not say.
    pub physics: Option<Physics>,
    /// The cell or coil under test.
    pub specimen: Specimen,
}

/// One instrument.
#[derive(Debug, Clone, PartialEq, Serialize)]
pub struct Instrument {
    /// Its name, the first half of its quantities' names.
    pub name: String,
    /// What it is to the bench.
    pub role: Role,
    /// Name of its command map, or a path to a user's own.
    pub map: String,
    /// Address: `tcp://host:5025`, `serial:///dev/ttyUSB0?baud=115200`, or a VISA resource name.
    pub link: String,
    /// Text that its `*IDN?` reply must contain; `None` leaves it to the map.
    pub identity: Option<String>,
    /// Quantities by property name. Every settable property of the role is here.
    pub properties: BTreeMap<String, Property>,
    /// Input channels of a digitizer by name; empty for other roles.
    pub channels: BTreeMap<String, Input>,
    /// Whether a supply delivers both signs; `None` for other roles.
    pub polarity: Option<Polarity>,
    /// Gain between an RF generator and its modulator, dB.
    pub amplifier: f64,
    /// Highest level allowed at the modulator, dBm; `None` where not declared.
    pub modulator_limit: Option<f64>,
}

/// One quantity of an instrument.
#[derive(Debug, Clone, PartialEq, Serialize)]
pub struct Property {
    /// Its full name.
    pub name: QuantityName,
    /// What it measures; [`Dimension::Switch`] for on and off.
    pub dimension: Dimension,
    /// Whether it can be set.
    pub access: Access,
    /// Lowest and highest setpoint, both allowed; `None` for switches and what is only read.
    pub range: Option<(f64, f64)>,
    /// Fastest change, per second; `None` where it may step at once.
    pub slew: Option<f64>,
    /// Largest single stair of a ramp; set wherever `slew` is.
    pub ramp_step: Option<f64>,
    /// Value after finish or stop; `None` keeps what it has.
    pub rest: Option<Setting>,
    /// Value after a trip, fault or crash; `None` keeps what it has.
    pub safe: Option<Setting>,
    /// Smallest step that the readback shows; `None` where unknown.
    pub resolution: Option<f64>,
    /// Standard uncertainty of setpoint or readback; `None` where not declared.
    pub accuracy: Option<Accuracy>,
}

/// Standard uncertainty of an instrument's scale: u^2 = (gain * value)^2 + offset^2.
#[derive(Debug, Clone, Copy, PartialEq, Serialize)]
pub struct Accuracy {
    /// Relative, 1 sigma.
    pub gain: f64,
    /// Absolute, 1 sigma, in the quantity's unit (K or dB for temperatures or levels).
    pub offset: f64,
}

/// One input of a digitizer.
#[derive(Debug, Clone, PartialEq, Serialize)]
pub struct Input {
    /// Its name, "ch1".
    pub name: String,
    /// Full scale from end to end, V.
    pub range: f64,
    /// Centre of the range, V.
    pub offset: f64,
    /// DC or AC.
    pub coupling: Coupling,
    /// Low-pass of the input, Hz; `None` leaves what it has.
    pub bandwidth: Option<f64>,
}

/// Coupling of a digitizer's input.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Serialize)]
#[serde(rename_all = "lowercase")]
pub enum Coupling {
    /// Passes a steady voltage.
    Dc,
    /// Blocks a steady voltage.
    Ac,
}

/// Signs of current that a supply delivers.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Serialize)]
#[serde(rename_all = "lowercase")]
pub enum Polarity {
    /// Both.
    Bipolar,
    /// Only zero and positive.
    Unipolar,
}

/// Protects things: a measured value out of bounds drives the bench to safe.
#[derive(Debug, Clone, PartialEq, Serialize)]
pub struct Interlock {
    /// What is watched.
    pub quantity: QuantityName,
    /// Lowest value allowed; `None` for no lower bound.
    pub lowest: Option<f64>,
    /// Highest value allowed; `None` for no upper bound.
    pub highest: Option<f64>,
    /// Time between readings, s.
    pub every: f64,
    /// Shown when it trips; empty for none.
    pub say: String,
}

/// How a trace starts, and how the generator's frequency goes over a sweep.
#[derive(Debug, Clone, PartialEq, Serialize)]
pub struct Timing {
    /// Who starts a trace.
    pub starts: Starts,
    /// The trigger's wire in words, "probe.sync -> scope.ext"; empty where there is none.
    pub wire: String,
    /// Time from the sweep's start to sample 0, s.
    pub delay: f64,
    /// How the generator sweeps.
    pub axis: AxisKind,
    /// Frequency of the mains, Hz.
    pub mains: f64,
}

/// Who starts a trace.
#[derive(Debug, Clone, PartialEq, Eq, Serialize)]
#[serde(rename_all = "kebab-case")]
pub enum Starts {
    /// The generator of this name starts its sweep and triggers the digitizer.
    Generator(String),
    /// The digitizer of this name triggers the generator.
    Digitizer(String),
    /// A trigger command over the link.
    Bus,
    /// A zero crossing of the mains.
    Line,
}

/// How a generator's frequency goes over a sweep.
#[derive(Debug, Clone, Copy, PartialEq, Serialize)]
#[serde(rename_all = "kebab-case")]
pub enum AxisKind {
    /// In equal steps, one per sample unless the generator has fewer.
    SteppedList,
    /// Continuously, synthesised.
    PhaseContinuous,
    /// By an external ramp on the frequency modulation input.
    FmRamp(AxisCalibration),
    /// By an oscillator of its own that nothing locks.
    FreeRunning(AxisCalibration),
}

/// True frequency axis = centre + offset + gain * (nominal - centre).
#[derive(Debug, Clone, Copy, PartialEq, Serialize)]
pub struct AxisCalibration {
    /// Ratio of true to nominal span.
    pub gain: f64,
    /// Its standard uncertainty.
    pub gain_sigma: f64,
    /// True minus nominal centre, Hz.
    pub offset: f64,
    /// Its standard uncertainty, Hz.
    pub offset_sigma: f64,
}

/// The atom, the light, the line.
#[derive(Debug, Clone, PartialEq, Serialize)]
pub struct Physics {
    /// The isotope.
    pub species: Species,
    /// The optical line.
    pub line: OpticalLine,
    /// F of the ground level in which the dark resonance lives.
    pub ground: u8,
    /// Magnetic numbers of the pair of ground states, probe's first.
    pub pair: (i8, i8),
    /// Handedness of the probe; the control has the other.
    pub handedness: Handedness,
    /// Full width at half maximum expected, Hz.
    pub linewidth: f64,
    /// The current that makes the field.
    pub coil: QuantityName,
    /// Nominal coil constant, T/A, signed.
    pub coil_constant: f64,
    /// What is known of the light shift.
    pub light_shift: LightShift,
    /// How the probe's RF becomes its optical shift.
    pub probe_modulator: Modulator,
    /// How the control's RF becomes its optical shift.
    pub control_modulator: Modulator,
}

/// Optical lines of rubidium.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Serialize)]
pub enum OpticalLine {
    /// 5S1/2 - 5P1/2, 795 nm.
    D1,
    /// 5S1/2 - 5P3/2, 780 nm.
    D2,
}

/// Handedness of circular light along the coil's axis.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Serialize)]
pub enum Handedness {
    /// Raises m by one.
    SigmaPlus,
    /// Lowers m by one.
    SigmaMinus,
}

/// What is known of the light shift of the pair.
#[derive(Debug, Clone, Copy, PartialEq, Serialize)]
#[serde(rename_all = "kebab-case")]
pub enum LightShift {
    /// Nothing: an offset of the line may be field or light.
    Unknown,
    /// Value and standard uncertainty, Hz.
    Known {
        /// Hz
        value: f64,
        /// Hz
        sigma: f64,
    },
}

/// An acousto-optic modulator in a beam: optical shift = order * passes * RF.
#[derive(Debug, Clone, PartialEq, Eq, Serialize)]
pub struct Modulator {
    /// Name of the RF generator that drives it.
    pub generator: String,
    /// Diffraction order, signed, not zero.
    pub order: i32,
    /// 1, or 2 for a double pass.
    pub passes: u32,
}

impl Modulator {
    /// Optical shift per RF frequency, signed.
    pub fn factor(&self) -> f64 {
        f64::from(self.order) * f64::from(self.passes)
    }
}

/// The cell or coil under test, in words; written into the archive.
#[derive(Debug, Clone, PartialEq, Default, Serialize)]
pub struct Specimen {
    /// Its name; empty where not given.
    pub name: String,
    /// What it is, in words.
    pub description: String,
    /// Length of the light's path in the cell, m.
    pub length: Option<f64>,
    /// Diameter, m.
    pub diameter: Option<f64>,
    /// Buffer gas in words, "Ne"; empty for none.
    pub buffer_gas: String,
    /// Pressure of the buffer gas, Pa.
    pub pressure: Option<f64>,
}

impl Physics {
    /// Movement of the line in optical frequency per axial field at zero field, Hz/T, signed: the linear
    /// Zeeman effect with the level's g-factor, gJ and gI included.
    pub fn slope(&self) -> f64 {
        let (probe, control) = self.pair;
        let pair = f64::from(i16::from(control) - i16::from(probe));
        // `ground` was checked against the species when the file was read.
        Level::new(self.species, self.ground)
            .map_or(f64::NAN, |level| level.two_photon_slope() / 2.0 * pair)
    }

    /// Nominal movement of the line in the probe's RF per current in the coil, Hz/A, signed.
    pub fn rf_per_current(&self) -> f64 {
        self.slope() * self.coil_constant / self.probe_modulator.factor()
    }
}

impl Bench {
    /// Reads a bench file's text.
    ///
    /// # Errors
    /// Every fault of the file at once, in order of place.
    pub fn parse(text: &str) -> Result<Self, Vec<Diagnostic>> {
        let mut findings = Findings::default();
        let draft = read::bench(text, &mut findings);
        match draft {
            Some(draft) if findings.0.is_empty() => Ok(draft.bench),
            _ => Err(findings.sorted()),
        }
    }

    /// Every quantity of the bench, by instrument and property.
    pub fn properties(&self) -> impl Iterator<Item = &Property> {
        self.instruments
            .values()
            .flat_map(|instrument| instrument.properties.values())
    }

    /// The quantity of that name.
    pub fn property(&self, name: &QuantityName) -> Option<&Property> {
        self.instruments
            .get(name.instrument())?
            .properties
            .get(name.property())
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    /// The two-photon slopes of the reference table: formula from gJ and gI as published in Steck, "Rubidium 87 D
    /// Line Data" and "Rubidium 85 D Line Data", with CODATA 2022; tolerance 1e-6 relative. The textbook
    /// gF = 1/2 would be 13.9962 Hz/nT, 327 ppm too large, which is more than a coil calibration's error.
    #[test]
    fn the_line_moves_as_published() {
        let shipped = Bench::parse(include_str!("../../mock/bench.toml")).unwrap();
        let physics = shipped.physics.unwrap();
        for (species, ground, hertz_per_nanotesla) in [
            (Species::Rb87, 2, 13.991_666_1),
            (Species::Rb87, 1, -14.047_379_1),
            (Species::Rb85, 3, 9.334_855_9),
            (Species::Rb85, 2, -9.351_295_3),
        ] {
            let physics = Physics {
                species,
                ground,
                ..physics.clone()
            };
            let slope = physics.slope() * 1e-9;
            let off = (slope / hertz_per_nanotesla - 1.0).abs();
            assert!(off < 1e-6, "{species:?} F={ground}: {slope} Hz/nT");
        }
    }
}
