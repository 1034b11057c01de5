//! What an instrument is to the bench: its role, and the properties that a role offers.
//!
//! This is the vocabulary only. Which instruments there are, and their limits, says the bench file.

use serde::{Deserialize, Serialize};

use crate::quantity::Dimension;

/// What an instrument is to the bench.
#[derive(Debug, Clone, Copy, PartialEq, Eq, PartialOrd, Ord, Hash, Serialize, Deserialize)]
#[serde(rename_all = "kebab-case")]
pub enum Role {
    /// Drives a modulator: frequency, power, output; can sweep its frequency.
    RfGenerator,
    /// Drives a coil: current, output.
    CurrentSupply,
    /// Records voltages over a sweep.
    Digitizer,
    /// Keeps a temperature: temperature, output.
    TemperatureController,
    /// Reads something and sets nothing.
    Monitor,
}

/// What can be done with a property.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Serialize, Deserialize)]
#[serde(rename_all = "kebab-case")]
pub enum Access {
    /// It can be set and read back.
    Settable,
    /// It can only be read.
    ReadOnly,
}

/// One property that a role offers.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct Offer {
    /// Its name, the second half of a quantity's name.
    pub property: &'static str,
    /// What it measures.
    pub dimension: Dimension,
    /// Whether it can be set.
    pub access: Access,
    /// Whether setting it puts energy into something: such a property needs safe and rest values.
    pub energises: bool,
    /// Whether the instrument can sweep it by itself within a point.
    pub sweeps: bool,
}

impl Role {
    /// All roles, in the order of the documentation.
    pub const ALL: [Self; 5] = [
        Self::RfGenerator,
        Self::CurrentSupply,
        Self::Digitizer,
        Self::TemperatureController,
        Self::Monitor,
    ];

    /// As written in a bench file, `rf-generator`.
    pub fn name(self) -> &'static str {
        match self {
            Self::RfGenerator => "rf-generator",
            Self::CurrentSupply => "current-supply",
            Self::Digitizer => "digitizer",
            Self::TemperatureController => "temperature-controller",
            Self::Monitor => "monitor",
        }
    }

    /// The role of that name.
    pub fn find(name: &str) -> Option<Self> {
        Self::ALL.into_iter().find(|role| role.name() == name)
    }

    /// The properties that an instrument of this role offers.
    ///
    /// A monitor's are declared in the bench file, each with its `unit`; a digitizer has inputs instead.
    pub fn offers(self) -> &'static [Offer] {
        match self {
            Self::RfGenerator => RF_GENERATOR,
            Self::CurrentSupply => CURRENT_SUPPLY,
            Self::Digitizer | Self::Monitor => &[],
            Self::TemperatureController => TEMPERATURE_CONTROLLER,
        }
    }
}

const fn settable(property: &'static str, dimension: Dimension) -> Offer {
    Offer {
        property,
        dimension,
        access: Access::Settable,
        energises: false,
        sweeps: false,
    }
}

const fn energising(property: &'static str, dimension: Dimension) -> Offer {
    Offer {
        energises: true,
        ..settable(property, dimension)
    }
}

const RF_GENERATOR: &[Offer] = &[
    Offer {
        sweeps: true,
        ..settable("frequency", Dimension::Frequency)
    },
    settable("power", Dimension::Level),
    energising("output", Dimension::Switch),
];
const CURRENT_SUPPLY: &[Offer] = &[
    energising("current", Dimension::Current),
    energising("output", Dimension::Switch),
];
const TEMPERATURE_CONTROLLER: &[Offer] = &[
    energising("temperature", Dimension::Temperature),
    energising("output", Dimension::Switch),
];
#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn names_find_their_role() {
        for role in Role::ALL {
            assert_eq!(Role::find(role.name()), Some(role));
        }
        assert_eq!(Role::find("oscilloscope"), None);
    }
}
