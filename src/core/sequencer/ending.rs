//! How a run ends: break off, leave the bench at rest or safe, finish what needs no instrument, close.

use super::words::{Action, Course, Outcome, Ticket, Trouble};
use super::{Sequencer, Tail};
use crate::entry::{EntryKind, SafeLevel, State};

/// An end under way.
#[derive(Debug)]
pub struct Ending {
    state: State,
    reason: String,
    level: SafeLevel,
    ticket: Option<Ticket>,
    over: bool,
}

impl Ending {
    /// Whether it waits for the bench to be left, with this ticket.
    pub fn awaits(&self, ticket: Ticket) -> bool {
        self.ticket == Some(ticket)
    }

    /// Whether the last action was given.
    pub fn is_over(&self) -> bool {
        self.over
    }

    /// How it ends.
    pub fn state(&self) -> State {
        self.state
    }
}

impl<C: Course> Sequencer<C> {
    /// Ends the run. An end at rest may still turn into a safe one, never the other way.
    pub(super) fn end(&mut self, state: State, level: SafeLevel, reason: &str) {
        if let Some(ending) = &self.ending {
            let worse = ending.level == SafeLevel::Rest && level == SafeLevel::Safe;
            if !worse || ending.over {
                return;
            }
        }
        // What was not begun yet must not begin after the bench was told to leave.
        self.out.retain(|action| {
            !matches!(
                action,
                Action::Degauss { .. }
                    | Action::Move { .. }
                    | Action::Read { .. }
                    | Action::Acquire { .. }
                    | Action::Transfer { .. }
                    | Action::Leave { .. }
            )
        });
        let ticket = self.ticket();
        self.ending = Some(Ending {
            state,
            reason: reason.to_owned(),
            level,
            ticket: Some(ticket),
            over: false,
        });
        self.out.push_back(Action::Leave { ticket, level });
        self.drop_head();
        self.drop_transfer();
    }

    /// The bench was left.
    pub(super) fn left(&mut self, outcome: Result<Outcome, Trouble>) {
        let Some(ending) = &mut self.ending else {
            return;
        };
        ending.ticket = None;
        let level = ending.level;
        let (reached, unreached) = match outcome {
            Ok(Outcome::Left { reached, unreached }) => (reached, unreached),
            Err(Trouble::Fault(fault)) => (Vec::new(), vec![fault]),
            _ => (Vec::new(), Vec::new()),
        };
        self.say(EntryKind::LeftSafe {
            level,
            reached,
            unreached,
        });
    }

    /// Closes the run once the bench is left and nothing is to be kept any more.
    pub(super) fn step_ending(&mut self) -> bool {
        let quiet = matches!(self.tail, Tail::Empty);
        let Some(ending) = &mut self.ending else {
            return false;
        };
        if ending.over || ending.ticket.is_some() || !quiet {
            return false;
        }
        ending.over = true;
        let (state, reason) = (ending.state, ending.reason.clone());
        self.say(EntryKind::Closed {
            state,
            reason: reason.clone(),
        });
        self.out.push_back(Action::Over { state, reason });
        true
    }
}
