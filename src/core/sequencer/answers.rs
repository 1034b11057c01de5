//! What the head makes of its actions' outcomes, and of the guards' readings.

use std::time::Duration;

use super::Sequencer;
use super::guarding::{Round, Ruling, rule};
use super::head::Stage;
use super::settling::Settling;
use super::tail::stop_reason;
use super::visit::{ATTEMPTS, Visit};
use super::words::{Action, Course, Outcome, Ticket, Trouble};
use crate::entry::{EntryKind, Flag, GuardReading, GuardStage, RepeatReason, SafeLevel, State};

/// Attempts that a guard with `wait` grants: it may come and go, but not for ever.
const WAITED_ATTEMPTS: u32 = 10;

/// Times that an instrument may be lost at one point.
const LOSSES: u32 = 5;

/// Time between two readings of a guard that is out: a tenth of the time it has been out, within these.
const PAUSES: (Duration, Duration) = (Duration::from_millis(100), Duration::from_secs(5));

impl<C: Course> Sequencer<C> {
    /// An action of the head is over. Actions of points that were dropped are passed over.
    pub(super) fn head_done(&mut self, ticket: Ticket, outcome: Result<Outcome, Trouble>) {
        if !self.head_awaits(ticket) {
            return;
        }
        match outcome {
            Ok(outcome) => self.head_succeeded(ticket, outcome),
            Err(Trouble::MissedTrigger) => self.missed_trigger(),
            Err(Trouble::Reconnected(instrument)) => self.head_lost(ticket, instrument),
            Err(Trouble::Fault(fault)) => self.fault(fault),
        }
    }

    fn head_awaits(&self, ticket: Ticket) -> bool {
        let by_stage = match &self.head.stage {
            Stage::Degaussing(asked) | Stage::Acquiring(asked) | Stage::Moving(asked, _) => {
                *asked == ticket
            }
            Stage::Settling(_, asked) => *asked == Some(ticket),
            Stage::Before(round) | Stage::After(round) => round.awaits(ticket),
            _ => false,
        };
        by_stage
            || self
                .head
                .visit
                .as_ref()
                .is_some_and(|visit| visit.awaits(ticket))
    }

    fn head_succeeded(&mut self, ticket: Ticket, outcome: Outcome) {
        if let Some(visit) = &mut self.head.visit
            && visit.awaits(ticket)
        {
            return visit.take(ticket, outcome);
        }
        let now = self.now.at;
        let value = match &outcome {
            Outcome::Read(value) => *value,
            _ => None,
        };
        match &mut self.head.stage {
            Stage::Degaussing(_) => self.degaussed(),
            Stage::Moving(_, moves) => {
                let ways = moves.iter().map(|step| Settling::new(step, now)).collect();
                self.head.stage = Stage::Settling(ways, None);
                if let Outcome::Moved(coordinates) = outcome {
                    let named = coordinates.into_iter().map(|at| (at.quantity.clone(), at));
                    self.standing.extend(named);
                }
            }
            Stage::Settling(ways, asked) => {
                *asked = None;
                if let Some(way) = ways.iter_mut().find(|way| way.is_asked()) {
                    way.read(value, now);
                }
            }
            Stage::Before(round) | Stage::After(round) => {
                round.read(&self.plan.guards, ticket, value);
            }
            Stage::Acquiring(_) => self.acquired(),
            _ => {}
        }
    }

    fn degaussed(&mut self) {
        if let Some(plan) = &self.plan.degauss {
            let largest = |most: f64, value: &f64| most.max(value.abs());
            let kind = EntryKind::Degaussed {
                quantity: plan.quantity.clone(),
                amplitude: plan.setpoints.iter().fold(0.0, largest),
                setpoints: plan.setpoints.len() as u64,
            };
            self.say(kind);
        }
        self.head.stage = Stage::Idle;
    }

    /// A record is complete: it is read out, while the guards are judged where it was the last.
    fn acquired(&mut self) {
        let ticket = self.ticket();
        let Some(visit) = &mut self.head.visit else {
            return;
        };
        let Some(acquisition) = visit.order(&self.plan) else {
            return;
        };
        visit.taken += 1;
        visit.missed = 0;
        visit.ended = self.now.utc;
        visit.transfer = Some(ticket);
        let is_last = visit.taken == self.plan.acquisitions.len();
        self.out.push_back(Action::Transfer {
            ticket,
            acquisition,
        });
        if is_last {
            self.judge_after();
        } else {
            self.head.stage = Stage::Fetching;
        }
    }

    /// The acquisition is taken again at once: the coil is still there.
    fn missed_trigger(&mut self) {
        let Some(visit) = &mut self.head.visit else {
            return;
        };
        visit.missed += 1;
        visit.missed_in_all += 1;
        visit.flags.insert(Flag::MissedTrigger);
        let (point, attempt) = (visit.point.index, visit.attempts() - 1);
        let (missed, spoiled) = (visit.missed, visit.spoiled);
        self.say_repeated(point, attempt, RepeatReason::MissedTrigger);
        if missed >= ATTEMPTS {
            return self.fault(Trouble::MissedTrigger.into_fault());
        }
        match spoiled {
            Some(reason) => self.head.stage = Stage::Dropping(reason),
            None => self.acquire(),
        }
    }

    /// An instrument was lost and is back: the point in work begins anew.
    fn head_lost(&mut self, ticket: Ticket, instrument: String) {
        self.say(EntryKind::Reconnected {
            instrument: instrument.clone(),
        });
        if matches!(self.head.stage, Stage::Degaussing(_)) {
            self.head.stage = Stage::Asleep;
            return self.begin();
        }
        let Some(visit) = &mut self.head.visit else {
            return;
        };
        let is_transfer = visit.transfer == Some(ticket);
        let is_measurement = !is_transfer && visit.awaits(ticket);
        visit.forget(ticket);
        visit.lost += 1;
        if visit.lost > LOSSES {
            return self.fault(Trouble::Reconnected(instrument).into_fault());
        }
        if is_measurement {
            // The record may be under way on other instruments: it is dropped when it is over.
            return self.head.spoil(RepeatReason::Reconnected);
        }
        match self.head.stage {
            Stage::Acquiring(_) | Stage::Fetching | Stage::After(_) | Stage::Handing => {
                self.head.stage = Stage::Dropping(RepeatReason::Reconnected);
            }
            Stage::Dropping(_) => {}
            _ => {
                visit.flags.insert(Flag::Reconnected);
                self.start_moving(true);
            }
        }
    }

    /// Reads the guards before the recording.
    pub(super) fn judge_before(&mut self) -> bool {
        self.head.stage = Stage::Before(self.begin_round(GuardStage::Before));
        true
    }

    /// Reads the guards after the recording.
    pub(super) fn judge_after(&mut self) {
        self.head.stage = Stage::After(self.begin_round(GuardStage::After));
    }

    fn begin_round(&mut self, stage: GuardStage) -> Round {
        let tickets = &mut self.tickets;
        let (round, reads) = Round::begin(&self.plan.guards, stage, || {
            *tickets += 1;
            *tickets
        });
        self.out.extend(reads);
        round
    }

    pub(super) fn step_before(&mut self) -> bool {
        let Stage::Before(round) = &mut self.head.stage else {
            return false;
        };
        let Some(readings) = round.complete() else {
            return false;
        };
        self.say_changes(&readings);
        let (ruling, worst) = rule(&self.plan.guards, &readings);
        match ruling {
            Ruling::Good => self.proceed(readings, false),
            Ruling::Flag => self.proceed(readings, true),
            Ruling::Repeat => {
                self.head.tries += 1;
                if self.head.tries >= self.attempts(worst) {
                    self.proceed(readings, true);
                } else {
                    self.head.stage = Stage::Pausing(self.now.at + Duration::from_secs(1));
                }
            }
            Ruling::Wait => self.wait_for(worst),
            Ruling::Stop => self.end(State::Stopped, SafeLevel::Rest, &stop_reason(worst)),
        }
        true
    }

    fn proceed(&mut self, readings: Vec<GuardReading>, flag: bool) {
        self.head.waiting_since = None;
        self.head.stage = Stage::Ready;
        if let Some(visit) = &mut self.head.visit {
            visit.guards.extend(readings);
            if flag {
                visit.flags.insert(Flag::GuardOut);
            }
        }
    }

    fn wait_for(&mut self, worst: Option<&GuardReading>) {
        let now = self.now.at;
        let since = *self.head.waiting_since.get_or_insert(now);
        let give_up = worst
            .and_then(|worst| self.plan.guards.get(worst.guard as usize))
            .and_then(|guard| Duration::try_from_secs_f64(guard.give_up).ok())
            .unwrap_or(Duration::MAX / 4);
        let waited = now.saturating_sub(since);
        if waited >= give_up {
            let what = worst.map_or("a guard", |worst| worst.what.as_str());
            let reason = format!(
                "the guard on {what} stayed out for {:.0} s",
                waited.as_secs_f64()
            );
            return self.end(State::Stopped, SafeLevel::Rest, &reason);
        }
        let pause = (waited / 10).clamp(PAUSES.0, PAUSES.1);
        self.head.stage = Stage::Pausing((now + pause).min(since + give_up));
    }

    pub(super) fn step_after(&mut self) -> bool {
        let Stage::After(round) = &mut self.head.stage else {
            return false;
        };
        let Some(readings) = round.complete() else {
            return false;
        };
        self.say_changes(&readings);
        let (ruling, worst) = rule(&self.plan.guards, &readings);
        let attempts = match ruling {
            Ruling::Wait => self.attempts(worst).max(WAITED_ATTEMPTS),
            _ => self.attempts(worst),
        };
        let reason = stop_reason(worst);
        let winding = self.winding;
        let Some(visit) = &mut self.head.visit else {
            return false;
        };
        let again =
            matches!(ruling, Ruling::Wait | Ruling::Repeat) && visit.attempt < attempts && !winding;
        visit.guards.extend(readings);
        self.head.stage = match visit.spoiled {
            Some(reason) => Stage::Dropping(reason),
            None if again => Stage::Dropping(RepeatReason::Guard),
            None => Stage::Handing,
        };
        if ruling != Ruling::Good && !again {
            visit.flags.insert(Flag::GuardOut);
        }
        if ruling == Ruling::Stop {
            self.end(State::Stopped, SafeLevel::Rest, &reason);
        }
        true
    }

    /// Writes an entry for every guard that went out or came back.
    fn say_changes(&mut self, readings: &[GuardReading]) {
        let Some(point) = self.point() else {
            return;
        };
        for reading in readings {
            let changed = if reading.good {
                self.head.out.remove(&reading.guard)
            } else {
                self.head.out.insert(reading.guard)
            };
            if changed {
                self.say(EntryKind::Guard {
                    point,
                    reading: reading.clone(),
                });
            }
        }
    }

    pub(super) fn say_repeated(&mut self, point: u64, attempt: u32, reason: RepeatReason) {
        self.say(EntryKind::Repeated {
            point,
            attempt,
            reason,
        });
    }
}

impl Visit {
    /// Whether one of its transfers or measurements has this ticket.
    pub fn awaits(&self, ticket: Ticket) -> bool {
        self.transfer == Some(ticket) || self.measuring.iter().any(|(asked, _)| *asked == ticket)
    }

    /// Takes the outcome of a transfer or measurement.
    pub fn take(&mut self, ticket: Ticket, outcome: Outcome) {
        match outcome {
            Outcome::Transferred(summary) if self.transfer == Some(ticket) => {
                self.transferred(summary);
            }
            Outcome::Read(value) => {
                let asked = self.measuring.iter().find(|(asked, _)| *asked == ticket);
                if let Some(coordinate) = asked.and_then(|(_, name)| self.coordinates.get_mut(name))
                {
                    coordinate.measured = value.filter(|value| value.is_finite());
                }
                self.forget(ticket);
            }
            _ => self.forget(ticket),
        }
    }

    /// Waits for this ticket no more.
    pub fn forget(&mut self, ticket: Ticket) {
        if self.transfer == Some(ticket) {
            self.transfer = None;
        }
        self.measuring.retain(|(asked, _)| *asked != ticket);
    }
}
