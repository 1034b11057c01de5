//! The state of a run as one fold over its entries: what the command line, the page and a replay show.
//!
//! Its size does not grow with the number of points. It never looks at samples.

use serde::Serialize;

use crate::answer::Answer;
use crate::diagnostic::Fault;
use crate::entry::{Entry, EntryKind, PointRecord, SafeLevel};

pub use crate::entry::State;

/// What is known of a run after any number of its entries.
#[derive(Debug, Clone, PartialEq, Default, Serialize)]
pub struct RunState {
    /// What it is doing, or how it ended.
    pub state: State,
    /// Why it is in that state, in words; empty where nothing need be said.
    pub reason: String,
    /// The sequence's title.
    pub title: String,
    /// Version of the program that made it.
    pub version: String,
    /// When it began, ns since 1970-01-01 UTC; 0 before.
    pub started_utc: i64,
    /// Points of the itinerary.
    pub points: u64,
    /// Points completed.
    pub done: u64,
    /// Completed points whose samples are in doubt.
    pub flagged: u64,
    /// Completed points that were recorded more than once.
    pub repeated: u64,
    /// The point completed last.
    pub last: Option<PointRecord>,
    /// Faults met, whether they ended the run or not.
    pub faults: u64,
    /// The fault met last.
    pub last_fault: Option<Fault>,
    /// How the bench was left; `None` before.
    pub left: Option<Left>,
    /// The answer; `None` before.
    pub answer: Option<Answer>,
    /// `seq` that the next entry must have: the number of entries seen.
    pub next_seq: u64,
    /// `at` of the last entry, ns since the run opened.
    pub at: u64,
}

/// How the bench was left.
#[derive(Debug, Clone, PartialEq, Serialize)]
pub struct Left {
    /// At rest or safe.
    pub level: SafeLevel,
    /// Instruments that are there.
    pub reached: Vec<String>,
    /// Instruments that may NOT be there, and why.
    pub unreached: Vec<Fault>,
}

impl RunState {
    /// The state after these entries.
    pub fn fold<'a>(entries: impl IntoIterator<Item = &'a Entry>) -> Self {
        let mut state = Self::default();
        for entry in entries {
            state.apply(entry);
        }
        state
    }

    /// Takes one more entry. An entry seen before changes nothing, so that a reader who lost its place
    /// may start again from any earlier one.
    pub fn apply(&mut self, entry: &Entry) {
        if entry.seq < self.next_seq {
            return;
        }
        self.next_seq = entry.seq.saturating_add(1);
        self.at = entry.at;
        match &entry.kind {
            EntryKind::Opened(header) => {
                self.title.clone_from(&header.title);
                self.version.clone_from(&header.version);
                self.points = header.points;
                self.started_utc = header.started_utc;
            }
            EntryKind::Turned { state, reason } | EntryKind::Closed { state, reason } => {
                self.state = *state;
                self.reason.clone_from(reason);
            }
            EntryKind::Point(record) => self.completed(record),
            EntryKind::Faulted(fault) => {
                self.faults += 1;
                self.last_fault = Some(fault.clone());
            }
            EntryKind::LeftSafe {
                level,
                reached,
                unreached,
            } => {
                self.left = Some(Left {
                    level: *level,
                    reached: reached.clone(),
                    unreached: unreached.clone(),
                });
            }
            EntryKind::Answered(answer) => self.answer = Some((**answer).clone()),
            EntryKind::Identified { .. }
            | EntryKind::Granted { .. }
            | EntryKind::Degaussed { .. }
            | EntryKind::Repeated { .. }
            | EntryKind::Guard { .. }
            | EntryKind::Interlock { .. }
            | EntryKind::Reconnected { .. }
            | EntryKind::Note { .. } => {}
        }
    }

    /// The same as left by a process that is no longer there: a run that did not end was interrupted.
    #[must_use]
    pub fn abandoned(mut self) -> Self {
        if !self.state.is_end() {
            self.state = State::Interrupted;
            self.reason = "the process ended in the middle of the run".to_owned();
        }
        self
    }

    fn completed(&mut self, record: &PointRecord) {
        self.done += 1;
        self.flagged += u64::from(record.is_doubtful());
        self.repeated += u64::from(record.attempts > 1);
        self.last = Some(record.clone());
    }
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::entry::{Coordinate, Flag, GuardReading, GuardStage, Header, RepeatReason};
    use crate::itinerary::PointKind;
    use crate::quantity::{QuantityName, Setting};

    fn entries() -> Vec<Entry> {
        let point = |index, flags: Vec<Flag>, attempts| {
            EntryKind::Point(Box::new(PointRecord {
                index,
                kind: PointKind::Grid { grid: vec![index] },
                coordinates: vec![Coordinate {
                    quantity: QuantityName::new("coil.current").unwrap(),
                    setpoint: Setting::Number(0.1),
                    readback: Some(0.1 + f64::EPSILON),
                    measured: None,
                }],
                sweep_centre: 80e6,
                begun: 1,
                ended: 2,
                guards: vec![GuardReading {
                    guard: 0,
                    what: "lock".into(),
                    stage: GuardStage::During,
                    lowest: Some(0.5),
                    highest: Some(0.6),
                    good: true,
                }],
                flags,
                attempts,
                acquisitions: 8,
                line: None,
            }))
        };
        let kinds = vec![
            EntryKind::Opened(Box::new(Header {
                title: "t".into(),
                points: 3,
                ..Header::default()
            })),
            EntryKind::Turned {
                state: State::Moving,
                reason: String::new(),
            },
            point(0, vec![], 1),
            EntryKind::Repeated {
                point: 1,
                attempt: 1,
                reason: RepeatReason::NoPeak,
            },
            point(1, vec![Flag::Retried], 2),
            point(2, vec![Flag::NoPeak, Flag::Retried], 3),
            EntryKind::Faulted(Fault::new("F0203", "the link of `coil` broke").of("coil")),
            EntryKind::LeftSafe {
                level: SafeLevel::Safe,
                reached: vec!["probe".into()],
                unreached: vec![Fault::new("F0201", "`coil` cannot be reached").of("coil")],
            },
            EntryKind::Closed {
                state: State::Faulted,
                reason: "lost".into(),
            },
        ];
        kinds
            .into_iter()
            .enumerate()
            .map(|(seq, kind)| Entry {
                seq: seq as u64,
                at: seq as u64 * 10,
                utc: 0,
                kind,
            })
            .collect()
    }

    #[test]
    fn counts_and_ends_follow_from_the_entries() {
        let state = RunState::fold(&entries());
        assert_eq!((state.points, state.done), (3, 3));
        assert_eq!((state.flagged, state.repeated), (1, 2));
        assert_eq!(state.state, State::Faulted);
        assert_eq!(
            state.left.as_ref().map(|left| left.unreached.len()),
            Some(1)
        );
        assert_eq!(state.clone().abandoned(), state);
    }

    #[test]
    fn entries_seen_twice_change_nothing() {
        let entries = entries();
        let once = RunState::fold(&entries);
        let again = RunState::fold(entries.iter().chain(entries.iter().skip(2)));
        assert_eq!(once, again);
    }

    #[test]
    fn a_run_without_end_was_interrupted() {
        let entries = entries();
        let state = RunState::fold(&entries[..4]).abandoned();
        assert_eq!(state.state, State::Interrupted);
        assert_eq!(state.done, 1);
    }

    #[test]
    fn entries_survive_json_unchanged() {
        for entry in entries() {
            let text = serde_json::to_string(&entry).unwrap();
            assert_eq!(
                serde_json::from_str::<Entry>(&text).unwrap(),
                entry,
                "{text}"
            );
        }
    }
}
