//! Estimation: least squares, line shapes, one trace, the field law across points, a whole scan.
//!
//! Everything is SI: detunings and widths in Hz, signals in V, currents in A, fields in T, coil constants in
//! T/A. Knows no file, no instrument and no clock; draws no random number: the same samples give the same answer.

use serde::{Deserialize, Serialize};

pub mod field;
pub mod line;
mod noise;
mod projection;
pub mod scan;
pub mod shapes;
pub mod solver;
pub mod start;

/// A value with its standard uncertainty (one sigma), both in the unit its field names.
#[derive(Debug, Clone, Copy, PartialEq, Serialize, Deserialize)]
pub struct Estimate {
    /// The best estimate.
    pub value: f64,
    /// Standard uncertainty from the noise alone; not inflated by the chi-square per degree of freedom.
    pub sigma: f64,
}

/// Which way the instrument swept while the trace was recorded.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Hash, Serialize, Deserialize)]
pub enum Direction {
    /// Rising frequency.
    Up,
    /// Falling frequency.
    Down,
}

impl Direction {
    /// +1 for a rising sweep, -1 for a falling one: the sign with which the lag displaces the line.
    pub fn sign(self) -> f64 {
        match self {
            Direction::Up => 1.0,
            Direction::Down => -1.0,
        }
    }
}

/// Why a fit gave no answer at all. A line that is not there is not an error but a result.
#[derive(Debug, Clone, PartialEq, thiserror::Error)]
pub enum FitError {
    /// An input sample is NaN or infinite.
    #[error(
        "{what} [{index}] is {value}, which is not a finite number; drop the sample or repeat the acquisition"
    )]
    NotFinite {
        /// Which input.
        what: &'static str,
        /// Place of the first offender, from zero.
        index: usize,
        /// The offending value.
        value: f64,
    },
    /// Two inputs that belong together differ in length.
    #[error("{what} has {got} values where {expected} belong to it; pass equally long slices")]
    Length {
        /// Which input.
        what: &'static str,
        /// Its length.
        got: usize,
        /// The length it must have.
        expected: usize,
    },
    /// Fewer data than the model can be fitted to.
    #[error("{got} {what} are fewer than the {needed} this fit needs; record more")]
    TooFew {
        /// What there is too little of.
        what: &'static str,
        /// How many there are.
        got: usize,
        /// How many are needed.
        needed: usize,
    },
    /// The axis does not extend over an interval, so no shape can be seen on it.
    #[error("every detuning is {at} Hz: a line needs a span; check the sweep's `span`")]
    NoSpan {
        /// The one value of the axis, Hz.
        at: f64,
    },
    /// An option lies outside its meaning.
    #[error("option `{option}` is {value}; it must be {must}")]
    Option {
        /// Name of the field.
        option: &'static str,
        /// Its value.
        value: f64,
        /// What would be allowed.
        must: &'static str,
    },
    /// The data do not determine the parameters.
    #[error("the data do not determine {what}; {remedy}")]
    Undetermined {
        /// What stays open.
        what: &'static str,
        /// What would settle it.
        remedy: &'static str,
    },
}

/// Rejects the first value that is NaN or infinite.
pub(crate) fn require_finite(what: &'static str, values: &[f64]) -> Result<(), FitError> {
    match values.iter().position(|v| !v.is_finite()) {
        None => Ok(()),
        Some(index) => Err(FitError::NotFinite {
            what,
            index,
            value: values[index],
        }),
    }
}
