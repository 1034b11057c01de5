//! The run as a state machine: inputs and the time go in, actions come out.
//!
//! It has a head, which moves, settles, judges the guards and records, and a tail, which transfers, fits
//! and makes durable: one point each, completed in order. It never waits, reads no clock and reaches no
//! instrument; whoever drives it performs its actions and feeds back what came of them.
//!
//! What it promises, whatever the timings:
//! - every point is completed exactly once, a repeated one after its failed attempts;
//! - nothing moves while a recording is under way, and no record is armed before the one before it has
//!   left the digitizer;
//! - the same data give the same visits, windows and entries.

mod answers;
mod ending;
mod follow;
mod guarding;
mod head;
mod interlocks;
mod route;
mod settling;
mod tail;
mod visit;
mod words;

#[cfg(test)]
mod simulation;

use std::collections::{BTreeMap, VecDeque};
use std::time::Duration;

use crate::diagnostic::Fault;
use crate::entry::{Coordinate, EntryKind, RepeatReason, SafeLevel, State};
use crate::quantity::QuantityName;

use ending::Ending;
use follow::Follower;
use head::{Head, Stage};
use interlocks::Interlocks;
use route::Route;
use tail::{Lesson, Tail};

pub use visit::ATTEMPTS;
pub use words::{
    AcquisitionOrder, Action, Command, Course, Fitted, Input, Moment, Outcome, Plan, Reading,
    Summary, Ticket, Trouble, Verdict, WindowPlan,
};

/// The state machine of one run.
#[derive(Debug)]
pub struct Sequencer<C> {
    course: C,
    plan: Plan,
    now: Moment,
    out: VecDeque<Action>,
    tickets: Ticket,
    visits: u64,
    /// When the first point's first move began.
    started: Option<Duration>,
    head: Head,
    tail: Tail,
    route: Route,
    follower: Option<Follower>,
    lessons: VecDeque<Lesson>,
    /// Every quantity that was set, as it stood last.
    standing: BTreeMap<QuantityName, Coordinate>,
    interlocks: Interlocks,
    hold: bool,
    winding: bool,
    ending: Option<Ending>,
}

impl<C: Course> Sequencer<C> {
    /// A run that has not begun.
    pub fn new(course: C, plan: Plan) -> Self {
        Self {
            follower: plan.window.map(Follower::new),
            interlocks: Interlocks::new(&plan.interlocks),
            course,
            plan,
            now: Moment::default(),
            out: VecDeque::new(),
            tickets: 0,
            visits: 0,
            started: None,
            head: Head::default(),
            tail: Tail::Empty,
            route: Route::default(),
            lessons: VecDeque::new(),
            standing: BTreeMap::new(),
            hold: false,
            winding: false,
            ending: None,
        }
    }

    /// Takes an input at this moment. All actions that follow from it are then ready to be taken.
    pub fn handle(&mut self, input: Input, now: Moment) {
        self.now = now;
        match input {
            Input::Begin => self.begin(),
            Input::Done { ticket, outcome } => self.done(ticket, outcome),
            Input::Order(command) => self.order(command),
            Input::Suspended(gap) => self.suspended(gap),
            Input::Failed(fault) => self.fault(fault),
            Input::Tick => {}
        }
        self.advance();
    }

    /// The next action, in order; `None` when there is nothing to do before the next input.
    pub fn next_action(&mut self) -> Option<Action> {
        self.out.pop_front()
    }

    /// When to call with [`Input::Tick`] if nothing else happens before, as time since the run opened.
    pub fn next_timeout(&self) -> Option<Duration> {
        if self.ending.is_some() {
            return None;
        }
        let interlock = match self.head.stage {
            Stage::Asleep => None,
            _ => self.interlocks.next_timeout(),
        };
        [interlock, self.head.next_timeout()]
            .into_iter()
            .flatten()
            .min()
    }

    /// What the run is doing now.
    pub fn state(&self) -> State {
        match &self.ending {
            Some(ending) if ending.is_over() => ending.state(),
            Some(_) => State::WindingUp,
            None if self.winding => State::WindingUp,
            None if self.hold && self.head.is_idle() => State::Held,
            None => self.head.state(),
        }
    }

    /// Index of the point that the head is at.
    pub fn point(&self) -> Option<u64> {
        self.head.visit.as_ref().map(|visit| visit.point.index)
    }

    fn begin(&mut self) {
        if !matches!(self.head.stage, Stage::Asleep) {
            return;
        }
        self.turn(State::Moving, "begun");
        self.head.stage = match self.plan.degauss.clone() {
            Some(plan) => {
                let ticket = self.ticket();
                self.out.push_back(Action::Degauss { ticket, plan });
                Stage::Degaussing(ticket)
            }
            None => Stage::Idle,
        };
    }

    fn order(&mut self, command: Command) {
        match command {
            Command::Hold => self.hold = true,
            Command::Onward => {
                if std::mem::take(&mut self.hold) && self.head.said_held {
                    self.head.said_held = false;
                    self.turn(State::Moving, "onward");
                }
            }
            Command::WindUp => self.wind_up(),
            Command::Cut => self.end(State::Stopped, SafeLevel::Rest, "cut by the user"),
            Command::Safe => self.end(State::Tripped, SafeLevel::Safe, "made safe by the user"),
        }
    }

    fn wind_up(&mut self) {
        if std::mem::replace(&mut self.winding, true) || self.ending.is_some() {
            return;
        }
        self.turn(State::WindingUp, "wound up by the user");
        if !self.head.is_recording() {
            self.drop_head();
        }
    }

    fn suspended(&mut self, gap: Duration) {
        let text = format!(
            "the system stood still for {:.1} s; the point in work is repeated",
            gap.as_secs_f64()
        );
        self.say(EntryKind::Note { text });
        self.interlocks.forgive(self.now.at);
        self.head.spoil(RepeatReason::Suspended);
    }

    fn done(&mut self, ticket: Ticket, outcome: Result<Outcome, Trouble>) {
        if self.ending.as_ref().is_some_and(|end| end.awaits(ticket)) {
            return self.left(outcome);
        }
        let value = match &outcome {
            Ok(Outcome::Read(value)) => *value,
            _ => None,
        };
        if matches!(outcome, Err(Trouble::Reconnected(_))) && self.interlocks.excuse(ticket) {
            return self.reconnected_aside(outcome);
        }
        match self.interlocks.read(ticket, value) {
            Some(Err(tripped)) => {
                if let Err(Trouble::Fault(fault)) = outcome {
                    self.say(EntryKind::Faulted(fault));
                }
                self.trip(tripped);
            }
            Some(Ok(())) => {}
            None if self.tail.awaits(ticket) => self.tail_done(ticket, outcome),
            None => self.head_done(ticket, outcome),
        }
    }

    /// An instrument was lost and is back, but what was asked of it can be asked again later.
    fn reconnected_aside(&mut self, outcome: Result<Outcome, Trouble>) {
        if let Err(Trouble::Reconnected(instrument)) = outcome {
            self.say(EntryKind::Reconnected { instrument });
            self.head.spoil(RepeatReason::Reconnected);
        }
    }

    fn trip(&mut self, tripped: EntryKind) {
        let reason = match &tripped {
            EntryKind::Interlock {
                quantity,
                value: None,
                ..
            } => format!("{quantity}, which an interlock watches, could not be read"),
            EntryKind::Interlock { quantity, say, .. } if say.is_empty() => {
                format!("the interlock on {quantity} tripped")
            }
            EntryKind::Interlock { quantity, say, .. } => {
                format!("the interlock on {quantity} tripped: {say}")
            }
            _ => "an interlock tripped".to_owned(),
        };
        if self.ending.is_none() {
            self.say(tripped);
        }
        self.end(State::Tripped, SafeLevel::Safe, &reason);
    }

    fn fault(&mut self, fault: Fault) {
        let reason = fault.message.clone();
        self.say(EntryKind::Faulted(fault));
        self.end(State::Faulted, SafeLevel::Safe, &reason);
    }

    /// Goes as far as it goes without further input.
    fn advance(&mut self) {
        if self.ending.is_none() && !matches!(self.head.stage, Stage::Asleep) {
            self.watch_interlocks();
        }
        while self.step_tail() || self.step_head() {}
    }

    fn watch_interlocks(&mut self) {
        if let Some(tripped) = self.interlocks.overdue(self.now.at) {
            return self.trip(tripped);
        }
        while let Some(quantity) = self.interlocks.due(self.now.at, self.tickets + 1) {
            let ticket = self.ticket();
            self.out.push_back(Action::Read {
                ticket,
                quantity,
                what: Reading::Measured,
            });
        }
    }

    fn ticket(&mut self) -> Ticket {
        self.tickets += 1;
        self.tickets
    }

    fn say(&mut self, kind: EntryKind) {
        self.out.push_back(Action::Say(kind));
    }

    fn turn(&mut self, state: State, reason: &str) {
        let reason = reason.to_owned();
        self.say(EntryKind::Turned { state, reason });
    }
}
