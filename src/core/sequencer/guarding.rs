//! The guards: judged before, during and after a recording. Says what the worst of them asks for.

use super::words::{Action, Reading, Ticket};
use crate::entry::{GuardReading, GuardStage};
use crate::itinerary::{Guard, GuardSource, Otherwise};

/// What the guards ask for, mildest first.
#[derive(Debug, Clone, Copy, PartialEq, Eq, PartialOrd, Ord)]
pub enum Ruling {
    /// All is well.
    Good,
    /// Keep the point, flagged.
    Flag,
    /// Record again.
    Repeat,
    /// Wait until it is back, then record.
    Wait,
    /// Stop the scan.
    Stop,
}

/// One judging of all guards over quantities.
#[derive(Debug, Clone)]
pub struct Round {
    stage: GuardStage,
    asked: Vec<(Ticket, usize)>,
    readings: Vec<GuardReading>,
}

impl Round {
    /// Asks for a reading of every guarded quantity; `ticket` numbers them.
    pub fn begin(
        guards: &[Guard],
        stage: GuardStage,
        mut ticket: impl FnMut() -> Ticket,
    ) -> (Self, Vec<Action>) {
        let mut asked = Vec::new();
        let mut reads = Vec::new();
        for (which, guard) in guards.iter().enumerate() {
            if let GuardSource::Quantity(quantity) = &guard.source {
                let ticket = ticket();
                asked.push((ticket, which));
                reads.push(Action::Read {
                    ticket,
                    quantity: quantity.clone(),
                    what: Reading::Measured,
                });
            }
        }
        let round = Self {
            stage,
            asked,
            readings: Vec::new(),
        };
        (round, reads)
    }

    /// Whether it waits for this reading.
    pub fn awaits(&self, ticket: Ticket) -> bool {
        self.asked.iter().any(|(asked, _)| *asked == ticket)
    }

    /// Takes a reading.
    pub fn read(&mut self, guards: &[Guard], ticket: Ticket, value: Option<f64>) {
        let Some(at) = self.asked.iter().position(|(asked, _)| *asked == ticket) else {
            return;
        };
        let (_, which) = self.asked.swap_remove(at);
        if let Some(guard) = guards.get(which) {
            let value = value.filter(|value| value.is_finite());
            self.readings
                .push(reading(guard, which, self.stage, value, value));
        }
    }

    /// The readings in the order of the guards, once all are there.
    pub fn complete(&mut self) -> Option<Vec<GuardReading>> {
        if !self.asked.is_empty() {
            return None;
        }
        self.readings.sort_by_key(|reading| reading.guard);
        Some(std::mem::take(&mut self.readings))
    }
}

/// Judges the recorded signals by their lowest and highest values.
pub fn judge_signals(guards: &[Guard], extremes: &[(String, f64, f64)]) -> Vec<GuardReading> {
    let judge = |(which, guard): (usize, &Guard)| {
        let GuardSource::Signal(name) = &guard.source else {
            return None;
        };
        let seen = extremes.iter().find(|(signal, _, _)| signal == name);
        let number = |value: f64| Some(value).filter(|value| value.is_finite());
        let (lowest, highest) = match seen {
            Some((_, lowest, highest)) => (number(*lowest), number(*highest)),
            None => (None, None),
        };
        Some(reading(guard, which, GuardStage::During, lowest, highest))
    };
    guards.iter().enumerate().filter_map(judge).collect()
}

/// What the worst of the readings asks for, and which one that is.
pub fn rule<'a>(
    guards: &[Guard],
    readings: &'a [GuardReading],
) -> (Ruling, Option<&'a GuardReading>) {
    let ruling = |reading: &GuardReading| {
        if reading.good {
            return Ruling::Good;
        }
        match guards
            .get(reading.guard as usize)
            .map(|guard| guard.otherwise)
        {
            Some(Otherwise::Wait) => Ruling::Wait,
            Some(Otherwise::Repeat) => Ruling::Repeat,
            Some(Otherwise::Flag) | None => Ruling::Flag,
            Some(Otherwise::Stop) => Ruling::Stop,
        }
    };
    readings
        .iter()
        .map(|reading| (ruling(reading), Some(reading)))
        .max_by_key(|(ruling, _)| *ruling)
        .unwrap_or((Ruling::Good, None))
}

fn reading(
    guard: &Guard,
    which: usize,
    stage: GuardStage,
    lowest: Option<f64>,
    highest: Option<f64>,
) -> GuardReading {
    let good = lowest.is_some_and(|value| value >= guard.between.0)
        && highest.is_some_and(|value| value <= guard.between.1);
    GuardReading {
        guard: u32::try_from(which).unwrap_or(u32::MAX),
        what: match &guard.source {
            GuardSource::Quantity(quantity) => quantity.to_string(),
            GuardSource::Signal(name) => name.clone(),
        },
        stage,
        lowest,
        highest,
        good,
    }
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::quantity::QuantityName;

    fn guard(source: GuardSource, otherwise: Otherwise) -> Guard {
        Guard {
            source,
            between: (0.4, 0.8),
            otherwise,
            give_up: 60.0,
            attempts: 3,
        }
    }

    #[test]
    fn a_round_is_complete_with_its_last_reading_and_the_worst_rules() {
        let level = GuardSource::Quantity(QuantityName::new("lock.level").unwrap());
        let guards = [
            guard(level.clone(), Otherwise::Flag),
            guard(GuardSource::Signal("lock".into()), Otherwise::Repeat),
            guard(level, Otherwise::Wait),
        ];
        let mut next = 0;
        let (mut round, reads) = Round::begin(&guards, GuardStage::Before, || {
            next += 1;
            next
        });
        assert_eq!(reads.len(), 2);
        round.read(&guards, 2, Some(0.3));
        assert_eq!(round.complete(), None);
        round.read(&guards, 1, Some(0.5));
        let readings = round.complete().unwrap();
        let (ruling, worst) = rule(&guards, &readings);
        assert_eq!(
            (ruling, worst.map(|worst| worst.guard)),
            (Ruling::Wait, Some(2))
        );
    }

    #[test]
    fn a_signal_is_judged_by_its_extremes_and_its_absence_is_bad() {
        let guards = [guard(GuardSource::Signal("lock".into()), Otherwise::Repeat)];
        let good = |low, high| judge_signals(&guards, &[("lock".into(), low, high)])[0].good;
        assert!(good(0.4, 0.8));
        assert!(!good(0.39, 0.8));
        assert!(!good(0.4, 0.81));
        assert!(!good(f64::NAN, 0.5));
        assert!(!judge_signals(&guards, &[])[0].good);
    }
}
