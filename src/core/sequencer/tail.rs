//! The tail: transfers the last block of a point, fits it, makes it durable. One point at a time.

use super::Sequencer;
use super::guarding::{Ruling, judge_signals, rule};
use super::visit::{ATTEMPTS, Visit};
use super::words::{Action, Course, Fitted, Outcome, Ticket, Trouble, Verdict};
use crate::diagnostic::Fault;
use crate::entry::{EntryKind, Flag, GuardReading, RepeatReason, SafeLevel, State};

/// What the tail is at.
#[derive(Debug)]
pub enum Tail {
    /// Nothing.
    Empty,
    /// Its samples, or measurements, are on their way.
    Transferring(Box<Visit>),
    /// They are fitted.
    Fitting(Box<Visit>, Ticket),
    /// They are made durable.
    Keeping(Box<Visit>, Ticket, Option<Lesson>),
}

impl Tail {
    /// Whether it waits for this ticket.
    pub fn awaits(&self, ticket: Ticket) -> bool {
        match self {
            Self::Empty => false,
            Self::Transferring(visit) => visit.awaits(ticket),
            Self::Fitting(_, asked) | Self::Keeping(_, asked, _) => *asked == ticket,
        }
    }

    /// Whether the digitizer still holds its samples.
    pub fn holds_digitizer(&self) -> bool {
        matches!(self, Self::Transferring(visit) if visit.transfer.is_some())
    }
}

/// What a point teaches about the next window.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct Lesson {
    /// The visit that teaches it.
    pub visit: u64,
    /// Nominal centre, Hz.
    pub nominal: f64,
    /// Centre found, Hz.
    pub found: f64,
}

impl<C: Course> Sequencer<C> {
    /// One step of the tail, or of the end; whether there was one.
    pub(super) fn step_tail(&mut self) -> bool {
        match &self.tail {
            Tail::Transferring(visit) if visit.is_settled() => {}
            _ => return self.step_ending(),
        }
        let Tail::Transferring(visit) = std::mem::replace(&mut self.tail, Tail::Empty) else {
            return false;
        };
        self.judge_samples(visit);
        true
    }

    /// An action of the tail is over.
    pub(super) fn tail_done(&mut self, ticket: Ticket, outcome: Result<Outcome, Trouble>) {
        match std::mem::replace(&mut self.tail, Tail::Empty) {
            Tail::Empty => {}
            Tail::Transferring(visit) => self.transfer_done(visit, ticket, outcome),
            Tail::Fitting(visit, _) => self.fit_done(visit, outcome),
            Tail::Keeping(visit, _, lesson) => match outcome {
                Ok(_) => self.lessons.extend(lesson),
                Err(trouble) => {
                    let fault = trouble.into_fault();
                    self.say(EntryKind::Note {
                        text: format!("point {} could not be kept", visit.point.index),
                    });
                    self.fault(fault);
                }
            },
        }
    }

    /// Forgets a point whose samples are still in the digitizer.
    pub(super) fn drop_transfer(&mut self) {
        if let Tail::Transferring(visit) = &self.tail {
            let visit = visit.number;
            self.tail = Tail::Empty;
            self.out.push_back(Action::Discard { visit });
        }
    }

    fn transfer_done(
        &mut self,
        mut visit: Box<Visit>,
        ticket: Ticket,
        outcome: Result<Outcome, Trouble>,
    ) {
        match outcome {
            Ok(outcome) => {
                visit.take(ticket, outcome);
                self.tail = Tail::Transferring(visit);
            }
            Err(Trouble::Reconnected(instrument)) => {
                self.say(EntryKind::Reconnected { instrument });
                self.head.spoil(RepeatReason::Reconnected);
                if visit.transfer == Some(ticket) {
                    self.visit_again(visit, RepeatReason::Reconnected);
                } else {
                    // A measurement: the samples are as good without it.
                    visit.forget(ticket);
                    self.tail = Tail::Transferring(visit);
                }
            }
            Err(trouble) => {
                self.tail = Tail::Transferring(visit);
                self.fault(trouble.into_fault());
            }
        }
    }

    fn judge_samples(&mut self, mut visit: Box<Visit>) {
        if self.plan.acquisitions.is_empty() {
            return self.keep(visit, None);
        }
        let readings = judge_signals(&self.plan.guards, &visit.summary.extremes);
        self.say_guards(visit.point.index, &readings);
        let (ruling, worst) = rule(&self.plan.guards, &readings);
        let attempts = self.attempts(worst);
        let stop = (ruling == Ruling::Stop).then(|| stop_reason(worst));
        visit.guards.extend(readings);
        match ruling {
            Ruling::Good => {}
            Ruling::Repeat | Ruling::Wait if visit.attempt < attempts && self.may_repeat() => {
                return self.visit_again(visit, RepeatReason::Guard);
            }
            _ => {
                visit.flags.insert(Flag::OutOfLock);
            }
        }
        if visit.summary.clipped > 0 {
            if visit.attempt < ATTEMPTS && self.may_repeat() && stop.is_none() {
                return self.visit_again(visit, RepeatReason::Clipped);
            }
            visit.flags.insert(Flag::Clipped);
        }
        let ticket = self.ticket();
        self.out.push_back(Action::Fit {
            ticket,
            visit: visit.number,
            record: visit.record(),
        });
        self.tail = Tail::Fitting(visit, ticket);
        if let Some(reason) = stop {
            self.end(State::Stopped, SafeLevel::Rest, &reason);
        }
    }

    fn fit_done(&mut self, mut visit: Box<Visit>, outcome: Result<Outcome, Trouble>) {
        let fitted = match outcome {
            Ok(Outcome::Fitted(fitted)) => *fitted,
            Ok(_) => Fitted {
                line: None,
                verdict: Verdict::Nothing,
            },
            // The samples are good all the same: they are kept, and then the run ends.
            Err(trouble) => {
                visit.flags.insert(Flag::Unfitted);
                self.keep(visit, None);
                return self.fault(trouble.into_fault());
            }
        };
        visit.line = fitted.line;
        let mut lesson = None;
        match fitted.verdict {
            Verdict::Peak(found) => {
                if let Some(nominal) = visit.point.centre.filter(|_| visit.teaches()) {
                    lesson = Some(Lesson {
                        visit: visit.number,
                        nominal,
                        found,
                    });
                }
            }
            Verdict::NoPeak if visit.expects_peak() => {
                if visit.attempt < ATTEMPTS && self.may_repeat() {
                    return self.visit_again(visit, RepeatReason::NoPeak);
                }
                visit.flags.insert(Flag::NoPeak);
            }
            Verdict::Failed => {
                visit.flags.insert(Flag::Unfitted);
            }
            Verdict::NoPeak | Verdict::Nothing => {}
        }
        self.keep(visit, lesson);
    }

    fn keep(&mut self, visit: Box<Visit>, lesson: Option<Lesson>) {
        let ticket = self.ticket();
        self.out.push_back(Action::Complete {
            ticket,
            visit: visit.number,
            record: visit.record(),
        });
        self.tail = Tail::Keeping(visit, ticket, lesson);
    }

    /// Forgets the samples and has the point visited again.
    fn visit_again(&mut self, mut visit: Box<Visit>, reason: RepeatReason) {
        self.out.push_back(Action::Discard {
            visit: visit.number,
        });
        if self.ending.is_some() {
            return;
        }
        self.say_repeated(visit.point.index, visit.attempts(), reason);
        visit.restart(reason);
        let overlap = visit.point.overlap;
        self.route.again(visit.again(), overlap);
    }

    /// Whether a point recorded in vain would be visited again at all.
    fn may_repeat(&self) -> bool {
        !self.winding && self.ending.is_none()
    }

    /// Most attempts that this guard grants a point.
    pub(super) fn attempts(&self, worst: Option<&GuardReading>) -> u32 {
        worst
            .and_then(|worst| self.plan.guards.get(worst.guard as usize))
            .map_or(ATTEMPTS, |guard| guard.attempts.max(1))
    }

    /// Writes entries for the guards that are out.
    pub(super) fn say_guards(&mut self, point: u64, readings: &[GuardReading]) {
        for reading in readings.iter().filter(|reading| !reading.good) {
            self.say(EntryKind::Guard {
                point,
                reading: reading.clone(),
            });
        }
    }
}

/// Why a guard stops the scan, in words.
pub fn stop_reason(worst: Option<&GuardReading>) -> String {
    match worst {
        Some(worst) => format!("the guard on {} was out", worst.what),
        None => "a guard was out".to_owned(),
    }
}

impl Trouble {
    /// As a fault, where nothing else can be made of it.
    pub(super) fn into_fault(self) -> Fault {
        match self {
            Self::Fault(fault) => fault,
            Self::MissedTrigger => Fault::new("F0301", "a trigger was missed again and again")
                .help("check the trigger cable and level, and `[timing]` in the bench file"),
            Self::Reconnected(instrument) => {
                Fault::new("F0302", format!("`{instrument}` is lost again and again"))
                    .help("check its power and cable")
                    .of(instrument)
            }
        }
    }
}
