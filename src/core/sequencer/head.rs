//! The head: goes to a point, has it settle, judges the guards, records. One point at a time.

use std::collections::BTreeSet;
use std::time::Duration;

use super::Sequencer;
use super::guarding::Round;
use super::route::Pick;
use super::settling::{Settling, Step};
use super::tail::Tail;
use super::visit::Visit;
use super::words::{Action, Course, Reading, Ticket};
use crate::entry::{Flag, RepeatReason, SafeLevel, State};
use crate::itinerary::Move;

/// The head of the run.
#[derive(Debug, Default)]
pub struct Head {
    /// What it is at.
    pub stage: Stage,
    /// The point in work.
    pub visit: Option<Box<Visit>>,
    /// The point gone to last.
    pub last: Option<u64>,
    /// Since when a guard makes it wait.
    pub waiting_since: Option<Duration>,
    /// Times that a guard was out before the recording.
    pub tries: u32,
    /// Guards that were said to be out.
    pub out: BTreeSet<u32>,
    /// Whether it was said that the run is held.
    pub said_held: bool,
}

/// What the head is at.
#[derive(Debug, Default)]
pub enum Stage {
    /// The run has not begun.
    #[default]
    Asleep,
    /// The alternation before the scan.
    Degaussing(Ticket),
    /// Between points.
    Idle,
    /// Waiting for the point's due time.
    Due(Duration),
    /// Quantities are being set.
    Moving(Ticket, Vec<Move>),
    /// Quantities are on their way.
    Settling(Vec<Settling>, Option<Ticket>),
    /// The guards are read before the recording.
    Before(Round),
    /// A guard is out; it is read again at this time.
    Pausing(Duration),
    /// Ready to record once the digitizer is free.
    Ready,
    /// A record is being taken.
    Acquiring(Ticket),
    /// A record that is not the point's last is read out.
    Fetching,
    /// The guards are read after the recording.
    After(Round),
    /// The samples will be forgotten as soon as nothing is outstanding.
    Dropping(RepeatReason),
    /// Done; waiting for the tail to take it.
    Handing,
    /// No further point.
    Over,
}

impl Head {
    /// Whether it is between points.
    pub fn is_idle(&self) -> bool {
        matches!(self.stage, Stage::Idle | Stage::Due(_))
    }

    /// Whether samples of its point are being taken or are there.
    pub fn is_recording(&self) -> bool {
        matches!(
            self.stage,
            Stage::Acquiring(_) | Stage::Fetching | Stage::After(_) | Stage::Handing
        )
    }

    /// As shown to people.
    pub fn state(&self) -> State {
        match self.stage {
            Stage::Moving(..) | Stage::Degaussing(_) => State::Moving,
            Stage::Settling(..) => State::Settling,
            Stage::Ready | Stage::Acquiring(_) | Stage::Fetching => State::Recording,
            Stage::After(_) | Stage::Dropping(_) | Stage::Handing => State::Recording,
            _ => State::Waiting,
        }
    }

    /// When it wants to be called again.
    pub fn next_timeout(&self) -> Option<Duration> {
        match &self.stage {
            Stage::Due(when) | Stage::Pausing(when) => Some(*when),
            Stage::Settling(ways, None) => ways.iter().map(Settling::next_time).min(),
            _ => None,
        }
    }

    /// The samples of the point in work are not to be kept.
    pub fn spoil(&mut self, reason: RepeatReason) {
        let at_rest = matches!(
            self.stage,
            Stage::Asleep | Stage::Idle | Stage::Due(_) | Stage::Handing | Stage::Over
        );
        if let (false, Some(visit)) = (at_rest, &mut self.visit) {
            visit.spoiled.get_or_insert(reason);
        }
    }
}

impl<C: Course> Sequencer<C> {
    /// One step of the head; whether there was one.
    pub(super) fn step_head(&mut self) -> bool {
        if self.ending.is_some() {
            return false;
        }
        let now = self.now.at;
        match &self.head.stage {
            Stage::Idle => self.step_idle(),
            Stage::Due(when) => {
                let is_due = now >= *when;
                !self.is_held() && is_due && self.start_moving(false)
            }
            Stage::Settling(_, None) => self.step_settling(),
            Stage::Before(_) => self.step_before(),
            Stage::Pausing(until) if now >= *until => self.judge_before(),
            Stage::Ready if !self.tail.holds_digitizer() => self.step_ready(),
            Stage::Fetching => self.step_fetching(),
            Stage::After(_) => self.step_after(),
            Stage::Dropping(reason) => {
                let reason = *reason;
                self.step_dropping(reason)
            }
            Stage::Handing => self.step_handing(),
            Stage::Over if matches!(self.tail, Tail::Empty) => {
                if self.winding {
                    self.end(State::Stopped, SafeLevel::Rest, "wound up by the user");
                } else {
                    self.end(State::Finished, SafeLevel::Rest, "all points are done");
                }
                true
            }
            _ => false,
        }
    }

    /// Forgets the point in work and goes to no other.
    pub(super) fn drop_head(&mut self) {
        self.head.stage = Stage::Over;
        if let Some(visit) = self.head.visit.take() {
            self.out.push_back(Action::Discard {
                visit: visit.number,
            });
        }
    }

    /// Whether the user holds the run; says so when the last point is complete.
    fn is_held(&mut self) -> bool {
        let complete = matches!(self.tail, Tail::Empty);
        if self.hold && complete && !self.head.said_held {
            self.head.said_held = true;
            self.turn(State::Held, "held by the user");
        }
        self.hold
    }

    fn step_idle(&mut self) -> bool {
        if self.winding {
            self.head.stage = Stage::Over;
            return true;
        }
        if self.is_held() {
            return false;
        }
        let tail_is_empty = matches!(self.tail, Tail::Empty);
        match self.route.pick(&self.course, tail_is_empty) {
            Pick::Drain => return false,
            Pick::End => self.head.stage = Stage::Over,
            Pick::Visit {
                point,
                again,
                drained,
            } => {
                let due = point.due.filter(|_| again.is_none());
                let mut visit = Visit::new(self.visits, point, again, self.now.utc);
                visit.lessons_below = self.visits.saturating_sub(u64::from(!drained));
                self.visits += 1;
                self.head.visit = Some(Box::new(visit));
                self.head.waiting_since = None;
                self.head.tries = 0;
                let started = *self.started.get_or_insert(self.now.at);
                let due = due.and_then(|due| Duration::try_from_secs_f64(due).ok());
                self.head.stage = Stage::Due(started + due.unwrap_or_default());
            }
        }
        true
    }

    /// Sends the moves of the point in work; all that the sequence sets where `full`.
    pub(super) fn start_moving(&mut self, full: bool) -> bool {
        let Some(visit) = &mut self.head.visit else {
            return false;
        };
        visit.spoiled = None;
        if visit.attempt == 1 {
            visit.begun = self.now.utc;
        }
        let index = visit.point.index;
        let follows = index == self.head.last.map_or(0, |last| last + 1);
        let moves = if follows && !full {
            visit.point.moves.clone()
        } else {
            self.moves_from_anywhere(index, full)
        };
        self.head.last = Some(index);
        if moves.is_empty() {
            self.head.stage = Stage::Settling(Vec::new(), None);
        } else {
            let ticket = self.ticket();
            self.out.push_back(Action::Move {
                ticket,
                moves: moves.clone(),
            });
            self.head.stage = Stage::Moving(ticket, moves);
        }
        true
    }

    /// What has to be set to get to a point from wherever the bench stands. What stands there already is
    /// left out, unless `full` or to be approached.
    fn moves_from_anywhere(&self, index: u64, full: bool) -> Vec<Move> {
        let mut moves = self.course.settings(index).unwrap_or_default();
        moves.retain(|step| {
            let stands = self
                .standing
                .get(&step.quantity)
                .is_some_and(|coordinate| coordinate.setpoint == step.setpoint);
            full || !stands || step.approach.is_some()
        });
        moves
    }

    fn step_settling(&mut self) -> bool {
        let now = self.now.at;
        let Stage::Settling(mut ways, _) = std::mem::take(&mut self.head.stage) else {
            return false;
        };
        let mut asked = None;
        let mut flags = Vec::new();
        ways.retain_mut(|way| {
            if asked.is_some() {
                return true;
            }
            match way.step(now) {
                Step::Arrived => return false,
                Step::GaveUp => {
                    flags.push(Flag::Unsettled);
                    return false;
                }
                Step::Read(quantity) => asked = Some(quantity),
                Step::Wait(_) => {}
            }
            true
        });
        if let Some(visit) = &mut self.head.visit {
            visit.flags.extend(flags);
        }
        if let Some(quantity) = asked {
            let ticket = self.ticket();
            self.out.push_back(Action::Read {
                ticket,
                quantity,
                what: Reading::Arrival,
            });
            self.head.stage = Stage::Settling(ways, Some(ticket));
            return true;
        }
        if ways.is_empty() {
            return self.judge_before();
        }
        self.head.stage = Stage::Settling(ways, None);
        false
    }

    fn step_ready(&mut self) -> bool {
        let Some(mut visit) = self.head.visit.take() else {
            return false;
        };
        if let Some(reason) = visit.spoiled {
            visit.flags.insert(reason.flag());
            self.head.visit = Some(visit);
            return self.start_moving(true);
        }
        visit.coordinates = self.standing.clone();
        visit.centre = self
            .window_centre(&visit)
            .or_else(|| visit.frequency(&self.plan));
        for at in 0..self.plan.measured.len() {
            let Some(quantity) = self.plan.measured.get(at).cloned() else {
                continue;
            };
            if !self.standing.contains_key(&quantity) {
                continue;
            }
            let ticket = self.ticket();
            visit.measuring.push((ticket, quantity.clone()));
            self.out.push_back(Action::Read {
                ticket,
                quantity,
                what: Reading::Measured,
            });
        }
        self.head.visit = Some(visit);
        self.acquire();
        true
    }

    /// Middle of the window, from the fits that may be known by then whatever the timings.
    fn window_centre(&mut self, visit: &Visit) -> Option<f64> {
        let follower = self.follower.as_mut()?;
        while let Some(lesson) = self.lessons.front() {
            if lesson.visit >= visit.lessons_below {
                break;
            }
            follower.learn(lesson.nominal, lesson.found);
            self.lessons.pop_front();
        }
        let window = self.plan.window?;
        Some(follower.centre(visit.point.centre.unwrap_or(window.centre)))
    }

    /// Has the next record taken; judges the guards where all are.
    pub(super) fn acquire(&mut self) {
        let Some(visit) = &self.head.visit else {
            return;
        };
        match visit.order(&self.plan) {
            Some(acquisition) => {
                let ticket = self.ticket();
                self.out.push_back(Action::Acquire {
                    ticket,
                    acquisition,
                });
                self.head.stage = Stage::Acquiring(ticket);
            }
            None => self.judge_after(),
        }
    }

    fn step_fetching(&mut self) -> bool {
        let Some(visit) = &self.head.visit else {
            return false;
        };
        if visit.transfer.is_some() {
            return false;
        }
        match visit.spoiled {
            Some(reason) => self.head.stage = Stage::Dropping(reason),
            None => self.acquire(),
        }
        true
    }

    /// Once nothing is outstanding, forgets the samples and begins anew.
    fn step_dropping(&mut self, reason: RepeatReason) -> bool {
        let Some(visit) = &mut self.head.visit else {
            return false;
        };
        if !visit.is_settled() {
            return false;
        }
        if self.winding {
            self.drop_head();
            return true;
        }
        let (number, point) = (visit.number, visit.point.index);
        let attempt = visit.attempts();
        visit.restart(reason);
        self.out.push_back(Action::Discard { visit: number });
        self.say_repeated(point, attempt, reason);
        match reason {
            RepeatReason::Suspended | RepeatReason::Reconnected => self.start_moving(true),
            _ => self.judge_before(),
        }
    }

    fn step_handing(&mut self) -> bool {
        if !matches!(self.tail, Tail::Empty) {
            return false;
        }
        let Some(visit) = self.head.visit.take() else {
            return false;
        };
        self.route.leave(&visit.point);
        self.tail = Tail::Transferring(visit);
        self.head.stage = Stage::Idle;
        true
    }
}
