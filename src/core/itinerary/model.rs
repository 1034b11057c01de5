//! What an itinerary is made of: points, moves, sweeps, guards, the forecast.

use serde::{Deserialize, Serialize};

use crate::bench::AxisKind;
use crate::quantity::{Dimension, QuantityName, Setting};
use crate::trace::Direction;

/// One place in the grid of steps, or a visit between them.
#[derive(Debug, Clone, PartialEq, Serialize)]
pub struct Point {
    /// From 0, in the order of execution.
    pub index: u64,
    /// Grid point, reference or background.
    pub kind: PointKind,
    /// What has to be set to get here from the point before, in order. At index 0, everything that the
    /// sequence sets at all.
    pub moves: Vec<Move>,
    /// Whether the way to the next point may begin while this one is transferred and fitted.
    pub overlap: bool,
    /// Earliest start, s since the first point's start; `None` for at once.
    pub due: Option<f64>,
    /// Middle of the window at this point, Hz: the sweep's own centre where it does not follow; else that
    /// centre, which is the line's place at zero current, moved by the bench's nominal coil constant.
    /// `None` without a sweep.
    pub centre: Option<f64>,
}

/// What a point is for.
#[derive(Debug, Clone, PartialEq, Eq, Serialize, Deserialize)]
#[serde(rename_all = "kebab-case")]
pub enum PointKind {
    /// A point of the grid.
    Grid {
        /// Index into the values of each step, outermost first.
        grid: Vec<u64>,
    },
    /// A point revisited against drift.
    Reference {
        /// Which `[[reference]]` of the file, from 0.
        which: usize,
    },
    /// A recording with something switched off.
    Background {
        /// Which `[[background]]` of the file, from 0.
        which: usize,
    },
}

/// One quantity to set.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize)]
pub struct Move {
    /// What is set.
    pub quantity: QuantityName,
    /// To what.
    pub setpoint: Setting,
    /// Value to pass through first, always from the same side; `None` goes straight.
    pub approach: Option<f64>,
    /// When it counts as arrived.
    pub settle: Settle,
}

/// When a quantity counts as arrived. All conditions that are given must hold.
#[derive(Debug, Clone, Copy, PartialEq, Serialize, Deserialize)]
pub struct Settle {
    /// Largest distance of the readback from the setpoint; `None` where it is not looked at.
    pub within: Option<f64>,
    /// Consecutive readings that must hold, at least 1.
    pub readings: u32,
    /// Largest drift of the measured value, per second; `None` where it is not looked at.
    pub drift: Option<f64>,
    /// Shortest wait after the last setpoint was sent, s.
    pub at_least: f64,
    /// Time after which it has failed to arrive, s, counted from the start of the move: a ramp counts.
    pub give_up: f64,
}

impl Settle {
    /// Counts as arrived once set.
    pub const AT_ONCE: Self = Self {
        within: None,
        readings: 1,
        drift: None,
        at_least: 0.0,
        give_up: 10.0,
    };
}

/// What the instrument does by itself within a point.
#[derive(Debug, Clone, PartialEq, Serialize)]
pub struct SweepPlan {
    /// What is swept.
    pub quantity: QuantityName,
    /// Middle of the window, Hz; where it follows, the line's place at zero current.
    pub centre: f64,
    /// Width of the window from end to end, Hz.
    pub span: f64,
    /// Time of one sweep, s.
    pub duration: f64,
    /// In the order of recording, one or two.
    pub directions: Vec<Direction>,
    /// Samples per acquisition.
    pub samples: u32,
    /// Separate acquisitions per direction.
    pub averages: u32,
    /// The digitizer's name.
    pub digitizer: String,
    /// Signal name and the digitizer's input: ("signal", "ch1").
    pub record: Vec<(String, String)>,
    /// Whether the window follows the predicted centre.
    pub follow: bool,
    /// How the generator sweeps.
    pub axis: AxisKind,
    /// Time from the sweep's start to sample 0, s.
    pub delay: f64,
}

/// How long a stepped probe's point is recorded.
#[derive(Debug, Clone, PartialEq, Serialize)]
pub struct DwellPlan {
    /// Time of one acquisition, s.
    pub duration: f64,
    /// Samples per acquisition.
    pub samples: u32,
    /// Separate acquisitions.
    pub averages: u32,
    /// The digitizer's name.
    pub digitizer: String,
    /// Signal name and the digitizer's input.
    pub record: Vec<(String, String)>,
}

/// Protects the data: a value out of bounds makes a point wait, repeat, be flagged, or stops the scan.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize)]
pub struct Guard {
    /// What is judged: a quantity before and after the recording, a recorded signal during it.
    pub source: GuardSource,
    /// Lowest and highest good value, both good.
    pub between: (f64, f64),
    /// What follows when it is out.
    pub otherwise: Otherwise,
    /// Longest wait, s (`Wait`).
    pub give_up: f64,
    /// Most attempts at one point (`Repeat`), at least 1.
    pub attempts: u32,
}

/// What a guard judges.
#[derive(Debug, Clone, PartialEq, Eq, Serialize, Deserialize)]
#[serde(rename_all = "kebab-case")]
pub enum GuardSource {
    /// A quantity, read before and after the recording.
    Quantity(QuantityName),
    /// Every sample of a recorded signal, by its name in `record`, in volts.
    Signal(String),
}

/// What follows when a guard is out.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Serialize, Deserialize)]
#[serde(rename_all = "lowercase")]
pub enum Otherwise {
    /// Wait until it is back, then record (again).
    Wait,
    /// Record again.
    Repeat,
    /// Keep the point, flagged.
    Flag,
    /// Stop the scan.
    Stop,
}

/// What the line looks like, and whether the window follows it.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Serialize, Deserialize)]
pub struct Resonance {
    /// Shape to fit.
    pub shape: Shape,
    /// Whether the window follows the predicted centre.
    pub follow: bool,
}

/// Shape of the line.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Serialize, Deserialize)]
#[serde(rename_all = "kebab-case")]
pub enum Shape {
    /// Absorptive part only.
    Lorentzian,
    /// Absorptive and dispersive part.
    MixedLorentzian,
}

/// Decaying alternation before the scan.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize)]
pub struct DegaussPlan {
    /// What has to be set before it begins: the sequence's `[set]`.
    pub before: Vec<Move>,
    /// The winding's current.
    pub quantity: QuantityName,
    /// Setpoints in order, alternating in sign, decaying, the last one zero.
    pub setpoints: Vec<f64>,
    /// Time held at each, s.
    pub dwell: f64,
}

/// One step of the grid, as the archive labels it.
#[derive(Debug, Clone, PartialEq, Serialize)]
pub struct StepAxis {
    /// Quantities stepped together; empty for a step in time.
    pub quantities: Vec<StepQuantity>,
    /// Number of values.
    pub count: u64,
    /// For a step in time: its spacing.
    pub time: Option<TimeStep>,
}

/// One quantity of a step.
#[derive(Debug, Clone, PartialEq, Serialize)]
pub struct StepQuantity {
    /// Its name.
    pub name: QuantityName,
    /// What it measures.
    pub dimension: Dimension,
    /// First declared value.
    pub first: Setting,
    /// Last declared value.
    pub last: Setting,
}

/// A step that only waits: one point every so often.
#[derive(Debug, Clone, Copy, PartialEq, Serialize)]
pub struct TimeStep {
    /// From start to start, s.
    pub every: f64,
}

/// What a run will take.
#[derive(Debug, Clone, PartialEq, Serialize)]
pub struct Forecast {
    /// Grid points, references and backgrounds.
    pub points: u64,
    /// Acquisitions: points x directions x averages.
    pub traces: u64,
    /// Time and its parts.
    pub seconds: Seconds,
    /// Size of the archive.
    pub bytes: u64,
    /// Every quantity that is set or swept, against its limits.
    pub extremes: Vec<Extreme>,
}

/// Time and its parts, s; what the links take is an estimate. Where a transfer overlaps with moving to
/// the next point, `total` counts the longer of the two.
#[derive(Debug, Clone, Copy, PartialEq, Default, Serialize)]
pub struct Seconds {
    /// Ramping and sending setpoints.
    pub moving: f64,
    /// Waiting for quantities to settle.
    pub settling: f64,
    /// Sweeping or dwelling.
    pub sweeping: f64,
    /// Reading the samples.
    pub transferring: f64,
    /// Arming, starting and asking.
    pub commanding: f64,
    /// Degaussing.
    pub degaussing: f64,
    /// Waiting for a point's due time.
    pub waiting: f64,
    /// All of it.
    pub total: f64,
}

/// How far one quantity goes.
#[derive(Debug, Clone, PartialEq, Serialize)]
pub struct Extreme {
    /// Its name.
    pub quantity: QuantityName,
    /// What it measures.
    pub dimension: Dimension,
    /// Lowest value reached, approach, degauss and following included.
    pub lowest: f64,
    /// Highest value reached.
    pub highest: f64,
    /// Its limits; `None` for switches.
    pub limit: Option<(f64, f64)>,
}
