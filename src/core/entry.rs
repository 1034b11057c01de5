//! The entry: one line of the journal, saying what happened, when, in which order.
//!
//! Entries own all they say, compare equal when they say the same, and survive JSON unchanged. Samples
//! are never inside: they travel beside their point's entry as a [`Trace`](crate::trace::Trace).

use serde::{Deserialize, Serialize};

use crate::answer::Answer;
use crate::diagnostic::Fault;
use crate::fit::line::LineFit;
use crate::itinerary::PointKind;
use crate::quantity::{QuantityName, Setting};

/// One line of the journal.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize)]
pub struct Entry {
    /// From 0, without gaps, in the order of the journal.
    pub seq: u64,
    /// When, ns since the run opened, by a clock that never goes back.
    pub at: u64,
    /// When, ns since 1970-01-01 UTC, by the system's clock.
    pub utc: i64,
    /// What happened.
    pub kind: EntryKind,
}

/// What an entry says.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize)]
#[serde(rename_all = "kebab-case")]
pub enum EntryKind {
    /// The run began. Always the first entry, and only that.
    Opened(Box<Header>),
    /// An instrument said who it is.
    Identified {
        /// Its name in the bench file.
        instrument: String,
        /// Its whole `*IDN?` reply.
        identity: String,
        /// Its serial number; "0" where it has none.
        serial: String,
    },
    /// An instrument granted a setting of the record.
    Granted {
        /// Its name in the bench file.
        instrument: String,
        /// What was set: `ch1.range`, `interval`.
        setting: String,
        /// As asked, in `unit`.
        asked: f64,
        /// As read back, in `unit`.
        granted: f64,
        /// `V`, `s`, `Hz`; empty for a count.
        unit: String,
    },
    /// The alternation before the scan was gone through.
    Degaussed {
        /// The winding's current.
        quantity: QuantityName,
        /// Largest setpoint, A.
        amplitude: f64,
        /// Setpoints gone through.
        setpoints: u64,
    },
    /// The run began to move, was held, goes onward, or winds up.
    ///
    /// Moving, settling and recording alternate with every point and are not journalled; who watches
    /// a run live is told by its progress.
    Turned {
        /// The state it turned to.
        state: State,
        /// Why, in words.
        reason: String,
    },
    /// A point is complete. Its samples stand beside this entry.
    Point(Box<PointRecord>),
    /// A point was recorded in vain and will be visited again.
    Repeated {
        /// Its index in the itinerary.
        point: u64,
        /// Which attempt failed, from 1.
        attempt: u32,
        /// Why.
        reason: RepeatReason,
    },
    /// A guard went out of its bounds or came back.
    Guard {
        /// The point in work.
        point: u64,
        /// What it saw.
        reading: GuardReading,
    },
    /// An interlock tripped.
    Interlock {
        /// What is watched.
        quantity: QuantityName,
        /// The value that tripped it; `None` where it could not be read.
        value: Option<f64>,
        /// Lowest value allowed.
        lowest: Option<f64>,
        /// Highest value allowed.
        highest: Option<f64>,
        /// The bench file's words; empty for none.
        say: String,
    },
    /// An instrument was lost and answers again, with the same identity and the same settings.
    Reconnected {
        /// Its name in the bench file.
        instrument: String,
    },
    /// The bench is wrong.
    Faulted(Fault),
    /// Anything else worth knowing.
    Note {
        /// In words.
        text: String,
    },
    /// The bench was brought to rest or made safe, verified by readback.
    LeftSafe {
        /// Which of the two.
        level: SafeLevel,
        /// Instruments that are there.
        reached: Vec<String>,
        /// Instruments that may NOT be there, and why.
        unreached: Vec<Fault>,
    },
    /// The answer, as far as the points allow one.
    Answered(Box<Answer>),
    /// The run ended. Always the last entry.
    Closed {
        /// One of the ends.
        state: State,
        /// Why, in words.
        reason: String,
    },
}

/// What a run is and with what it was made.
#[derive(Debug, Clone, PartialEq, Default, Serialize, Deserialize)]
pub struct Header {
    /// The sequence's title.
    pub title: String,
    /// Version of the program.
    pub version: String,
    /// Revision of its source; empty where unknown.
    pub commit: String,
    /// Points of the itinerary, references and backgrounds included.
    pub points: u64,
    /// The bench file, whole.
    pub bench: String,
    /// The sequence file, whole.
    pub sequence: String,
    /// When it began, ns since 1970-01-01 UTC.
    pub started_utc: i64,
}

/// What a run is doing, or how it ended.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Hash, Default, Serialize, Deserialize)]
#[serde(rename_all = "kebab-case")]
pub enum State {
    /// Not begun, or waiting for a point's due time or a guard.
    #[default]
    Waiting,
    /// Quantities are being set.
    Moving,
    /// Quantities have been set and are not there yet.
    Settling,
    /// Samples are being taken.
    Recording,
    /// Halted between points by the user.
    Held,
    /// Ending after the point in work.
    WindingUp,
    /// All points are done.
    Finished,
    /// Ended early: by the user or by a guard.
    Stopped,
    /// Ended by an interlock, or by `safe`.
    Tripped,
    /// Ended because the bench, or the program, is wrong.
    Faulted,
    /// The process died; said by who reads the journal, never by the run itself.
    Interrupted,
}

impl State {
    /// Whether a run in this state is over.
    pub fn is_end(self) -> bool {
        matches!(
            self,
            Self::Finished | Self::Stopped | Self::Tripped | Self::Faulted | Self::Interrupted
        )
    }

    /// As shown to people.
    pub fn word(self) -> &'static str {
        match self {
            Self::Waiting => "waiting",
            Self::Moving => "moving",
            Self::Settling => "settling",
            Self::Recording => "recording",
            Self::Held => "held",
            Self::WindingUp => "winding up",
            Self::Finished => "finished",
            Self::Stopped => "stopped",
            Self::Tripped => "tripped",
            Self::Faulted => "faulted",
            Self::Interrupted => "interrupted",
        }
    }
}

impl std::fmt::Display for State {
    fn fmt(&self, f: &mut std::fmt::Formatter<'_>) -> std::fmt::Result {
        f.write_str(self.word())
    }
}

/// The two states in which a bench is left.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Hash, Serialize, Deserialize)]
#[serde(rename_all = "kebab-case")]
pub enum SafeLevel {
    /// After finish or stop: coils ramped down, RF off, oven and laser lock kept.
    Rest,
    /// After a trip or fault.
    Safe,
}

/// One completed point.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize)]
pub struct PointRecord {
    /// Index in the itinerary.
    pub index: u64,
    /// Grid point, reference or background.
    pub kind: PointKind,
    /// Every quantity that the sequence sets, as it stood at this point, by name.
    pub coordinates: Vec<Coordinate>,
    /// Middle of the sweep's window, Hz; of a stepped probe, its frequency; 0 where neither is there.
    pub sweep_centre: f64,
    /// When its first move began, ns since 1970-01-01 UTC.
    pub begun: i64,
    /// When its last sample was taken, ns since 1970-01-01 UTC.
    pub ended: i64,
    /// What the guards saw, in the order of judging.
    pub guards: Vec<GuardReading>,
    /// Doubts about this point, each once.
    pub flags: Vec<Flag>,
    /// Times it was recorded, 1 where the first was good.
    pub attempts: u32,
    /// Acquisitions in its trace.
    pub acquisitions: u32,
    /// The fit of its trace; `None` where there is nothing to fit.
    pub line: Option<LineFit>,
}

impl PointRecord {
    /// Index along each step, outermost first; `None` for references and backgrounds.
    pub fn grid(&self) -> Option<&[u64]> {
        match &self.kind {
            PointKind::Grid { grid } => Some(grid),
            _ => None,
        }
    }

    /// The coordinate of that quantity.
    pub fn coordinate(&self, quantity: &str) -> Option<&Coordinate> {
        self.coordinates
            .iter()
            .find(|coordinate| coordinate.quantity.as_str() == quantity)
    }

    /// Whether a flag casts doubt on the samples themselves.
    pub fn is_doubtful(&self) -> bool {
        self.flags.iter().any(|flag| flag.casts_doubt())
    }
}

/// A quantity at a point: asked for, said, measured. Never one "value".
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize)]
pub struct Coordinate {
    /// Its name.
    pub quantity: QuantityName,
    /// What was asked for.
    pub setpoint: Setting,
    /// What the instrument says it is set to; `None` where it was not read, or is a switch.
    pub readback: Option<f64>,
    /// What the instrument measures; `None` where it measures nothing.
    pub measured: Option<f64>,
}

/// One judgement of a guard.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize)]
pub struct GuardReading {
    /// Which guard of the itinerary, from 0.
    pub guard: u32,
    /// What was judged: a quantity's or a recorded signal's name.
    pub what: String,
    /// When it was judged.
    pub stage: GuardStage,
    /// The lowest value seen; `None` where it could not be read.
    pub lowest: Option<f64>,
    /// The highest value seen; `None` where it could not be read.
    pub highest: Option<f64>,
    /// Whether it was within its bounds.
    pub good: bool,
}

/// When a guard is judged.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Hash, Serialize, Deserialize)]
#[serde(rename_all = "kebab-case")]
pub enum GuardStage {
    /// Before the recording.
    Before,
    /// On a channel recorded with the trace.
    During,
    /// After the recording.
    After,
}

/// A doubt about a point, or a thing that befell it.
#[derive(Debug, Clone, Copy, PartialEq, Eq, PartialOrd, Ord, Hash, Serialize, Deserialize)]
#[serde(rename_all = "kebab-case")]
pub enum Flag {
    /// A quantity had not settled when its time was over.
    Unsettled,
    /// A guard was out before or after the recording.
    GuardOut,
    /// A guarded channel was out while the samples were taken.
    OutOfLock,
    /// Samples stand at an end of the digitizer's range.
    Clipped,
    /// No peak stands out of the noise.
    NoPeak,
    /// The fit failed.
    Unfitted,
    /// A trigger was missed and the acquisition repeated.
    MissedTrigger,
    /// The system was suspended meanwhile, and the point repeated.
    Suspended,
    /// An instrument was lost and came back, and the point repeated.
    Reconnected,
    /// It was recorded more than once.
    Retried,
}

impl Flag {
    /// Whether it casts doubt on the samples that were kept, not only on the way there.
    pub fn casts_doubt(self) -> bool {
        matches!(
            self,
            Self::Unsettled
                | Self::GuardOut
                | Self::OutOfLock
                | Self::Clipped
                | Self::NoPeak
                | Self::Unfitted
        )
    }

    /// As shown to people.
    pub fn word(self) -> &'static str {
        match self {
            Self::Unsettled => "unsettled",
            Self::GuardOut => "guard out",
            Self::OutOfLock => "out of lock",
            Self::Clipped => "clipped",
            Self::NoPeak => "no peak",
            Self::Unfitted => "unfitted",
            Self::MissedTrigger => "missed trigger",
            Self::Suspended => "suspended",
            Self::Reconnected => "reconnected",
            Self::Retried => "retried",
        }
    }
}

/// Why a point is visited again.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Hash, Serialize, Deserialize)]
#[serde(rename_all = "kebab-case")]
pub enum RepeatReason {
    /// Samples stand at an end of the digitizer's range.
    Clipped,
    /// No peak stands out of the noise.
    NoPeak,
    /// The trigger was missed.
    MissedTrigger,
    /// A guard was out.
    Guard,
    /// The system was suspended.
    Suspended,
    /// An instrument was lost and came back.
    Reconnected,
}

impl RepeatReason {
    /// The flag that the point keeps from it.
    pub fn flag(self) -> Flag {
        match self {
            Self::Clipped | Self::NoPeak | Self::Guard => Flag::Retried,
            Self::MissedTrigger => Flag::MissedTrigger,
            Self::Suspended => Flag::Suspended,
            Self::Reconnected => Flag::Reconnected,
        }
    }
}
