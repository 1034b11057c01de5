//! What can go wrong between a driver and its instrument. Every kind says whether the outcome is known,
//! and turns into a [`Fault`] for those who show it. Decides no reaction.

use std::time::Duration;

use darkline_core::diagnostic::Fault;
use thiserror::Error;

/// One item of an instrument's error queue (SCPI-1999, 21.8).
#[derive(Debug, Clone, PartialEq, Eq)]
pub struct QueuedError {
    /// Standard numbers are negative, a maker's own positive.
    pub number: i32,
    /// The instrument's words.
    pub text: String,
}

impl std::fmt::Display for QueuedError {
    fn fmt(&self, f: &mut std::fmt::Formatter<'_>) -> std::fmt::Result {
        write!(f, "{} {:?}", self.number, self.text)
    }
}

/// A failed exchange with the instrument named in each variant.
#[derive(Debug, Clone, PartialEq, Error)]
#[non_exhaustive]
pub enum DriverError {
    /// No link could be made.
    #[error("`{instrument}` cannot be reached at {link}: {why}")]
    Unreachable {
        /// Name of the instrument.
        instrument: String,
        /// Its address.
        link: String,
        /// The system's words.
        why: String,
    },
    /// Another process owns the link.
    #[error("{link} of `{instrument}` is in use by process {owner}")]
    Owned {
        /// Name of the instrument.
        instrument: String,
        /// Its address.
        link: String,
        /// Process id, or "unknown".
        owner: String,
    },
    /// The link broke during an exchange: what was said may or may not have been heard.
    #[error("the link of `{instrument}` broke after `{message}`: {why}")]
    Disconnected {
        /// Name of the instrument.
        instrument: String,
        /// The message then under way.
        message: String,
        /// The system's words.
        why: String,
    },
    /// No complete reply in time: what was said may or may not have been done.
    #[error("`{instrument}` did not answer `{message}` within {within:?}")]
    TimedOut {
        /// Name of the instrument.
        instrument: String,
        /// The message then under way.
        message: String,
        /// The time limit.
        within: Duration,
    },
    /// Questions and answers could not be matched again.
    #[error("`{instrument}` does not answer in step after {attempts} attempts")]
    OutOfStep {
        /// Name of the instrument.
        instrument: String,
        /// Attempts made.
        attempts: u32,
    },
    /// A complete reply that is not what was asked for.
    #[error("`{instrument}` answered `{message}` with {got}, not with {wanted}")]
    Garbled {
        /// Name of the instrument.
        instrument: String,
        /// The question.
        message: String,
        /// The reply, shortened.
        got: String,
        /// What would have been right.
        wanted: String,
    },
    /// The error queue was not empty after a message.
    #[error("`{instrument}` refused `{message}`: {}", list(errors))]
    Refused {
        /// Name of the instrument.
        instrument: String,
        /// The message.
        message: String,
        /// The queue, oldest first.
        errors: Vec<QueuedError>,
    },
    /// Another instrument than the map says.
    #[error("`{instrument}` says it is `{found}`, which does not match `{expected}`")]
    WrongIdentity {
        /// Name of the instrument.
        instrument: String,
        /// Pattern, or the identity found before.
        expected: String,
        /// The identity found.
        found: String,
    },
    /// The power-on bit was set: the settings are gone.
    #[error("`{instrument}` was switched off and on: its settings are gone")]
    PowerCycled {
        /// Name of the instrument.
        instrument: String,
    },
    /// The readback is not what was set.
    #[error("`{instrument}` reads back {property} as {readback} after {asked} was set")]
    Readback {
        /// Name of the instrument.
        instrument: String,
        /// The property.
        property: String,
        /// As set, SI units.
        asked: String,
        /// As read back, SI units.
        readback: String,
    },
    /// No trigger came.
    #[error("`{instrument}` saw no trigger within {within:?}: {counted} records counted, not one")]
    MissedTrigger {
        /// Name of the instrument.
        instrument: String,
        /// The time limit.
        within: Duration,
        /// Records counted since it was armed.
        counted: u64,
    },
    /// The map, or the role, does not have it.
    #[error("the map of `{instrument}` has no {what}")]
    NotInMap {
        /// Name of the instrument.
        instrument: String,
        /// What was wanted.
        what: String,
    },
    /// As many writes as the map's write budget allows have been made.
    #[error("`{instrument}`: {property} was written {written} times, the map's budget")]
    BudgetSpent {
        /// Name of the instrument.
        instrument: String,
        /// The property.
        property: String,
        /// Writes made.
        written: u64,
    },
}

impl DriverError {
    /// Whether a setting under way may or may not have been made.
    pub fn outcome_unknown(&self) -> bool {
        matches!(
            self,
            Self::Disconnected { .. }
                | Self::TimedOut { .. }
                | Self::OutOfStep { .. }
                | Self::Garbled { .. }
        )
    }

    /// Whether dialling again may help.
    pub fn link_lost(&self) -> bool {
        matches!(
            self,
            Self::Unreachable { .. } | Self::Disconnected { .. } | Self::OutOfStep { .. }
        )
    }

    /// The instrument concerned.
    pub fn instrument(&self) -> &str {
        match self {
            Self::Unreachable { instrument, .. }
            | Self::Owned { instrument, .. }
            | Self::Disconnected { instrument, .. }
            | Self::TimedOut { instrument, .. }
            | Self::OutOfStep { instrument, .. }
            | Self::Garbled { instrument, .. }
            | Self::Refused { instrument, .. }
            | Self::WrongIdentity { instrument, .. }
            | Self::PowerCycled { instrument }
            | Self::Readback { instrument, .. }
            | Self::MissedTrigger { instrument, .. }
            | Self::NotInMap { instrument, .. }
            | Self::BudgetSpent { instrument, .. } => instrument,
        }
    }

    /// Stable code and remedy.
    fn code_and_help(&self) -> (&'static str, &'static str) {
        match self {
            Self::Unreachable { .. } => (
                "F0201",
                "check that it is on, its cable, and `link` in the bench file",
            ),
            Self::Owned { .. } => (
                "F0202",
                "end that process first, or let it finish; one program talks to an instrument at a time",
            ),
            Self::Disconnected { .. } => ("F0203", "check its power and cable"),
            Self::TimedOut { .. } => (
                "F0204",
                "check that it is on and idle, or raise `timeout` in its command map",
            ),
            Self::OutOfStep { .. } => (
                "F0205",
                "switch it off and on, or declare a `sentinel` in its command map",
            ),
            Self::Garbled { .. } => (
                "F0206",
                "check baud rate and parity, or the `hear` of its command map",
            ),
            Self::Refused { .. } => (
                "F0207",
                "check the value against the instrument's own limits, or the `say` of its command map",
            ),
            Self::WrongIdentity { .. } => (
                "F0208",
                "check `link` and `map` in the bench file: another instrument answers there",
            ),
            Self::PowerCycled { .. } => {
                ("F0209", "find out why it lost power before the run goes on")
            }
            Self::Readback { .. } => (
                "F0210",
                "check the instrument's own limits and range, and `resolution` in its command map",
            ),
            Self::MissedTrigger { .. } => (
                "F0211",
                "check the trigger cable and level, and `[timing]` in the bench file",
            ),
            Self::NotInMap { .. } => ("F0212", "add it to the command map, or use another map"),
            Self::BudgetSpent { .. } => (
                "F0213",
                "its memory wears out by writing: use fewer steps, or raise `budget` in its command map",
            ),
        }
    }
}

impl From<DriverError> for Fault {
    fn from(error: DriverError) -> Self {
        let (code, help) = error.code_and_help();
        Fault::new(code, error.to_string())
            .help(help)
            .of(error.instrument())
    }
}

fn list(errors: &[QueuedError]) -> String {
    let items: Vec<String> = errors.iter().map(QueuedError::to_string).collect();
    items.join(", ")
}
