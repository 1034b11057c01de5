//! What the mock instruments were told and what they sent, for tests to prove that no limit was passed and no byte
//! was lost. Bounded: the newest entries are kept, the extremes are over all time.

use std::collections::{BTreeMap, VecDeque};

use crate::scpi::ErrorCode;

const LONGEST: usize = 65_536;

/// An accepted setting.
#[derive(Clone, Debug, PartialEq)]
pub struct Set {
    /// Seconds since the bench's start.
    pub at: f64,
    /// What was set, `current` for instance.
    pub what: &'static str,
    /// In SI units (power in dBm); switches are 0 or 1.
    pub value: f64,
}

/// The extremes of one quantity over all time, its value at the start included.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Extremes {
    /// Least value.
    pub least: f64,
    /// Greatest value.
    pub greatest: f64,
    /// Greatest change at once.
    pub greatest_step: f64,
    /// Value now.
    pub last: f64,
    /// How often it was set.
    pub count: u64,
}

/// A refused command.
#[derive(Clone, Debug, PartialEq)]
pub struct Refusal {
    /// Seconds since the bench's start.
    pub at: f64,
    /// Why.
    pub code: ErrorCode,
}

/// A block as it was sent.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub struct Transfer {
    /// Channel, from 1.
    pub channel: u32,
    /// Acquisition since the bench's start, from 1.
    pub acquisition: u64,
    /// Bytes of the block's data.
    pub bytes: usize,
    /// CRC-32C of the block's data.
    pub crc32c: u32,
}

/// The history of one instrument.
#[derive(Clone, Debug, Default, PartialEq)]
pub struct InstrumentHistory {
    sets: VecDeque<Set>,
    extremes: BTreeMap<&'static str, Extremes>,
    refusals: VecDeque<Refusal>,
    transfers: VecDeque<Transfer>,
    /// Accepted settings outside the instrument's own limits: a fault of the mock itself, always 0.
    pub violations: u64,
    /// Messages carried out.
    pub messages: u64,
    /// Triggers seen, missed ones excluded.
    pub triggers: u64,
    /// Triggers missed.
    pub missed_triggers: u64,
}

impl InstrumentHistory {
    /// Accepted settings in order, the newest 65,536.
    pub fn sets(&self) -> impl ExactSizeIterator<Item = &Set> {
        self.sets.iter()
    }

    /// Extremes of a quantity; `None` where it was never set.
    pub fn extremes(&self, what: &str) -> Option<Extremes> {
        self.extremes.get(what).copied()
    }

    /// Greatest magnitude of a quantity over all time; 0 where it was never set.
    pub fn greatest_magnitude(&self, what: &str) -> f64 {
        self.extremes(what)
            .map_or(0.0, |found| found.greatest.abs().max(found.least.abs()))
    }

    /// Refused commands, the newest 65,536.
    pub fn refusals(&self) -> impl ExactSizeIterator<Item = &Refusal> {
        self.refusals.iter()
    }

    /// Blocks sent, the newest 65,536.
    pub fn transfers(&self) -> impl ExactSizeIterator<Item = &Transfer> {
        self.transfers.iter()
    }

    /// Notes an accepted setting, checked against the instrument's own limits once more. `from` is the value before
    /// the first setting.
    pub(crate) fn note(
        &mut self,
        at: f64,
        what: &'static str,
        value: f64,
        limits: (f64, f64),
        from: f64,
    ) {
        if !(value >= limits.0 && value <= limits.1) {
            self.violations += 1;
        }
        let start = Extremes {
            least: from,
            greatest: from,
            greatest_step: 0.0,
            last: from,
            count: 0,
        };
        let seen = self.extremes.entry(what).or_insert(start);
        seen.least = seen.least.min(value);
        seen.greatest = seen.greatest.max(value);
        seen.greatest_step = seen.greatest_step.max((value - seen.last).abs());
        seen.last = value;
        seen.count += 1;
        push(&mut self.sets, Set { at, what, value });
    }

    pub(crate) fn refuse(&mut self, at: f64, code: ErrorCode) {
        push(&mut self.refusals, Refusal { at, code });
    }

    pub(crate) fn transfer(&mut self, transfer: Transfer) {
        push(&mut self.transfers, transfer);
    }
}

/// The history of all instruments at one moment.
#[derive(Clone, Debug, Default, PartialEq)]
pub struct History {
    pub(crate) instruments: BTreeMap<&'static str, InstrumentHistory>,
}

impl History {
    /// The history of an instrument; `None` for an unknown name.
    pub fn of(&self, name: &str) -> Option<&InstrumentHistory> {
        self.instruments.get(name)
    }

    /// All of them by name.
    pub fn iter(&self) -> impl Iterator<Item = (&'static str, &InstrumentHistory)> {
        self.instruments
            .iter()
            .map(|(name, history)| (*name, history))
    }
}

fn push<T>(queue: &mut VecDeque<T>, item: T) {
    if queue.len() == LONGEST {
        queue.pop_front();
    }
    queue.push_back(item);
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn extremes_outlive_the_queue() {
        let mut history = InstrumentHistory::default();
        history.note(0.0, "current", -0.02, (-0.1, 0.1), 0.0);
        for _ in 0..LONGEST + 5 {
            history.note(1.0, "current", 0.0, (-0.1, 0.1), 0.0);
        }
        assert_eq!(history.sets().len(), LONGEST);
        assert_eq!(history.greatest_magnitude("current"), 0.02);
        assert_eq!(history.extremes("current").unwrap().greatest_step, 0.02);
        assert_eq!(history.violations, 0);
        history.note(1.0, "current", 0.2, (-0.1, 0.1), 0.0);
        assert_eq!(history.violations, 1);
    }
}
