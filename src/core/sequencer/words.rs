//! What goes in and out of the sequencer: inputs, actions, and the plan of a run. No logic.

use std::time::Duration;

use crate::bench::Interlock;
use crate::diagnostic::Fault;
use crate::entry::{Coordinate, EntryKind, PointRecord, SafeLevel, State};
use crate::fit::line::LineFit;
use crate::itinerary::{DegaussPlan, Guard, Itinerary, Move, Point};
use crate::quantity::{Dimension, QuantityName};
use crate::trace::Direction;

/// A moment of the run.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Default)]
pub struct Moment {
    /// Time since the run opened, by a clock that never goes back.
    pub at: Duration,
    /// ns since 1970-01-01 UTC, by the system's clock.
    pub utc: i64,
}

/// Number of an action that is answered; every one is used once.
pub type Ticket = u64;

/// What a user may ask of a run.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Hash)]
pub enum Command {
    /// Halt before the next point.
    Hold,
    /// Go on after a hold.
    Onward,
    /// Finish what is recorded or being recorded, then end at rest.
    WindUp,
    /// End now, at rest.
    Cut,
    /// End now, safe.
    Safe,
}

/// What the conductor tells the sequencer.
#[derive(Debug, Clone, PartialEq)]
pub enum Input {
    /// The run may begin.
    Begin,
    /// An action is over.
    Done {
        /// The action's.
        ticket: Ticket,
        /// What came of it.
        outcome: Result<Outcome, Trouble>,
    },
    /// The user asks for something.
    Order(Command),
    /// The whole system stood still for this long.
    Suspended(Duration),
    /// Something outside all actions went wrong.
    Failed(Fault),
    /// The time of [`next_timeout`](super::Sequencer::next_timeout) has come.
    Tick,
}

/// What came of an action that went well.
#[derive(Debug, Clone, PartialEq)]
pub enum Outcome {
    /// `Move`: every quantity as it stands now, in the order of the moves.
    Moved(Vec<Coordinate>),
    /// `Read`: the value; `None` where the instrument had no number to say.
    Read(Option<f64>),
    /// `Acquire`: the record is complete and waits in the digitizer.
    Acquired,
    /// `Transfer`: the samples are with the conductor.
    Transferred(Summary),
    /// `Fit`.
    Fitted(Box<Fitted>),
    /// `Degauss`.
    Degaussed,
    /// `Complete`: the point is durable.
    Kept,
    /// `Leave`: how the bench was left.
    Left {
        /// Instruments that are there.
        reached: Vec<String>,
        /// Instruments that may not be there, and why.
        unreached: Vec<Fault>,
    },
}

/// What came of an action that did not go well.
#[derive(Debug, Clone, PartialEq)]
pub enum Trouble {
    /// `Acquire`: no trigger, or not exactly one.
    MissedTrigger,
    /// The instrument was lost meanwhile and is back with all its settings; the action was not done.
    Reconnected(String),
    /// The bench is wrong.
    Fault(Fault),
}

/// What the samples of one acquisition say at a glance.
#[derive(Debug, Clone, PartialEq, Default)]
pub struct Summary {
    /// Samples at an end of the digitizer's range, guarded channels apart.
    pub clipped: u32,
    /// Lowest and highest value of every channel, V, by the name that the sequence gives it.
    pub extremes: Vec<(String, f64, f64)>,
}

/// A fit as far as the run depends on it.
#[derive(Debug, Clone, PartialEq)]
pub struct Fitted {
    /// The fit, for the record; `None` where there was nothing to fit.
    pub line: Option<LineFit>,
    /// What it found.
    pub verdict: Verdict,
}

/// What a fit found.
#[derive(Debug, Clone, Copy, PartialEq)]
pub enum Verdict {
    /// A peak, at this frequency in Hz.
    Peak(f64),
    /// No peak that stands out of the noise.
    NoPeak,
    /// The fit failed.
    Failed,
    /// There was nothing to fit.
    Nothing,
}

/// What the sequencer wants done. Actions with a ticket are answered by [`Input::Done`]; the others are
/// done in the order in which they are given.
#[derive(Debug, Clone, PartialEq)]
pub enum Action {
    /// Go through the alternation.
    Degauss {
        /// To be answered.
        ticket: Ticket,
        /// Where and how.
        plan: DegaussPlan,
    },
    /// Set quantities, one after the other, each read back.
    Move {
        /// To be answered.
        ticket: Ticket,
        /// What to set.
        moves: Vec<Move>,
    },
    /// Read a quantity.
    Read {
        /// To be answered.
        ticket: Ticket,
        /// Which.
        quantity: QuantityName,
        /// What of it.
        what: Reading,
    },
    /// Take one record: arm, confirm, start, await completion.
    Acquire {
        /// To be answered.
        ticket: Ticket,
        /// Which point, which way, which window.
        acquisition: AcquisitionOrder,
    },
    /// Read the samples of the last record out of the digitizer, and keep them for their visit.
    Transfer {
        /// To be answered.
        ticket: Ticket,
        /// The record they belong to.
        acquisition: AcquisitionOrder,
    },
    /// Fit the samples that were kept for this visit.
    Fit {
        /// To be answered.
        ticket: Ticket,
        /// The visit.
        visit: u64,
        /// The point so far.
        record: Box<PointRecord>,
    },
    /// Make the point and the samples kept for this visit durable, then announce it.
    Complete {
        /// To be answered.
        ticket: Ticket,
        /// The visit.
        visit: u64,
        /// The point.
        record: Box<PointRecord>,
    },
    /// Forget the samples kept for this visit.
    Discard {
        /// The visit.
        visit: u64,
    },
    /// Write an entry.
    Say(EntryKind),
    /// Break off everything else on the instruments and bring the bench to rest or make it safe.
    Leave {
        /// To be answered.
        ticket: Ticket,
        /// Which of the two.
        level: SafeLevel,
    },
    /// The run is over: the last action.
    Over {
        /// How it ended.
        state: State,
        /// Why, in words.
        reason: String,
    },
}

impl Action {
    /// The ticket, where the action is answered.
    pub fn ticket(&self) -> Option<Ticket> {
        match self {
            Self::Degauss { ticket, .. }
            | Self::Move { ticket, .. }
            | Self::Read { ticket, .. }
            | Self::Acquire { ticket, .. }
            | Self::Transfer { ticket, .. }
            | Self::Fit { ticket, .. }
            | Self::Complete { ticket, .. }
            | Self::Leave { ticket, .. } => Some(*ticket),
            Self::Discard { .. } | Self::Say(_) | Self::Over { .. } => None,
        }
    }
}

/// What of a quantity is read.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Hash)]
pub enum Reading {
    /// What settling goes by: the measured value of a temperature, the readback of anything else.
    Arrival,
    /// What the instrument measures; where it measures nothing, what it says it is set to.
    Measured,
}

/// One record to be taken.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct AcquisitionOrder {
    /// The visit that it belongs to.
    pub visit: u64,
    /// The point's index in the itinerary.
    pub point: u64,
    /// Which way the probe is swept; `Up` for a stepped probe.
    pub direction: Direction,
    /// Which of the averages in this direction, from 0.
    pub repeat: u32,
    /// Middle of the window; of a stepped probe, its frequency, Hz. `None` where neither is there.
    pub centre: Option<f64>,
}

/// Where the points come from.
pub trait Course {
    /// Number of points.
    fn len(&self) -> u64;
    /// Whether there is none.
    fn is_empty(&self) -> bool {
        self.len() == 0
    }
    /// The point of that index; `None` past the end.
    fn point(&self, index: u64) -> Option<Point>;
    /// Everything that is set at that point, as moves from nowhere.
    fn settings(&self, index: u64) -> Option<Vec<Move>>;
}

impl Course for Itinerary {
    fn len(&self) -> u64 {
        Itinerary::len(self)
    }

    fn point(&self, index: u64) -> Option<Point> {
        Itinerary::point(self, index)
    }

    fn settings(&self, index: u64) -> Option<Vec<Move>> {
        Itinerary::settings(self, index)
    }
}

/// What holds for the whole run.
#[derive(Debug, Clone, PartialEq, Default)]
pub struct Plan {
    /// Alternation before the scan.
    pub degauss: Option<DegaussPlan>,
    /// The records of one point, in order: direction and repeat. Empty where nothing is recorded.
    pub acquisitions: Vec<(Direction, u32)>,
    /// The window of a sweep; `None` for a stepped probe.
    pub window: Option<WindowPlan>,
    /// The frequency of a stepped probe, where there is one.
    pub stepped: Option<QuantityName>,
    /// Guards in the file's order.
    pub guards: Vec<Guard>,
    /// Interlocks in the file's order.
    pub interlocks: Vec<Interlock>,
    /// Quantities that are measured at every point.
    pub measured: Vec<QuantityName>,
}

/// Where the sweep's window may be.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct WindowPlan {
    /// Its middle where nothing is predicted, Hz.
    pub centre: f64,
    /// Its width, Hz.
    pub span: f64,
    /// Whether it follows the predicted centre.
    pub follow: bool,
    /// Lowest and highest frequency that the bench allows, Hz.
    pub range: (f64, f64),
}

impl Plan {
    /// What the itinerary and its bench say.
    pub fn of(itinerary: &Itinerary) -> Self {
        let bench = itinerary.bench();
        let acquisitions = match (itinerary.sweep(), itinerary.dwell()) {
            (Some(sweep), _) => (0..sweep.averages)
                .flat_map(|repeat| sweep.directions.iter().map(move |way| (*way, repeat)))
                .collect(),
            (None, Some(dwell)) => (0..dwell.averages)
                .map(|repeat| (Direction::Up, repeat))
                .collect(),
            (None, None) => Vec::new(),
        };
        let window = itinerary.sweep().map(|sweep| WindowPlan {
            centre: sweep.centre,
            span: sweep.span,
            follow: sweep.follow,
            range: bench
                .property(&sweep.quantity)
                .and_then(|property| property.range)
                .unwrap_or((f64::NEG_INFINITY, f64::INFINITY)),
        });
        let stepped = itinerary
            .dwell()
            .and_then(|_| itinerary.steps().last()?.quantities.first())
            .filter(|quantity| quantity.dimension == Dimension::Frequency)
            .map(|quantity| quantity.name.clone());
        Self {
            degauss: itinerary.degauss().cloned(),
            acquisitions,
            window,
            stepped,
            guards: itinerary.guards().to_vec(),
            interlocks: bench.interlocks.clone(),
            measured: Vec::new(),
        }
    }
}
