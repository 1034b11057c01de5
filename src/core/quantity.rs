//! Quantities: their dimensions, their names, their values as text.
//!
//! Inside the program every value is an f64 in SI base units (A, Hz, K, T, V, W, s, T/A, Hz/T), except
//! an RF level, which stays in dBm. This module turns text into such values and back; it knows no limit
//! and no instrument.

pub mod name;
pub mod print;
pub mod read;
pub mod unit;

use serde::{Deserialize, Serialize};

pub use name::{NameError, QuantityName};
pub use print::{display, display_in, display_with_sigma};
pub use read::{QuantityError, parse, parse_any, parse_range, parse_switch};
pub use unit::Dimension;

/// What a quantity is set to: a number in SI base units (dBm for a level) or a switch.
#[derive(Debug, Clone, Copy, PartialEq, Serialize, Deserialize)]
#[serde(rename_all = "kebab-case")]
pub enum Setting {
    /// A number in SI base units; dBm for an RF level.
    Number(f64),
    /// On (`true`) or off.
    Switch(bool),
}

impl Setting {
    /// The number, or `None` for a switch.
    pub fn number(self) -> Option<f64> {
        match self {
            Self::Number(value) => Some(value),
            Self::Switch(_) => None,
        }
    }

    /// The switch, or `None` for a number.
    pub fn switch(self) -> Option<bool> {
        match self {
            Self::Number(_) => None,
            Self::Switch(on) => Some(on),
        }
    }

    /// As a person writes it: "20 mA", "on".
    pub fn display(self, dimension: Dimension) -> String {
        match self {
            Self::Number(value) => display(value, dimension),
            Self::Switch(true) => "on".to_owned(),
            Self::Switch(false) => "off".to_owned(),
        }
    }
}
