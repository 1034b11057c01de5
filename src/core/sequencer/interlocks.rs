//! The interlocks: quantities read on a schedule, whose first bad value trips the run.
//!
//! Says what to read and when, and judges the readings. A quantity that cannot be read in time is as
//! bad as one out of bounds.

use std::time::Duration;

use super::words::Ticket;
use crate::bench::Interlock;
use crate::entry::EntryKind;
use crate::quantity::QuantityName;

/// A reading outstanding for longer than this, and than three of its intervals, counts as failed.
const PATIENCE: Duration = Duration::from_secs(10);

/// All interlocks of a bench.
#[derive(Debug, Default)]
pub struct Interlocks {
    watches: Vec<Watch>,
}

#[derive(Debug)]
struct Watch {
    interlock: Interlock,
    next: Duration,
    asked: Option<(Ticket, Duration)>,
}

impl Watch {
    fn interval(&self) -> Duration {
        Duration::try_from_secs_f64(self.interlock.every.max(0.01)).unwrap_or(PATIENCE)
    }

    fn patience(&self) -> Duration {
        PATIENCE.max(self.interval() * 3)
    }

    fn tripped(&self, value: Option<f64>) -> EntryKind {
        EntryKind::Interlock {
            quantity: self.interlock.quantity.clone(),
            value: value.filter(|value| value.is_finite()),
            lowest: self.interlock.lowest,
            highest: self.interlock.highest,
            say: self.interlock.say.clone(),
        }
    }
}

impl Interlocks {
    /// Each is read at once, and then every so often.
    pub fn new(interlocks: &[Interlock]) -> Self {
        let watch = |interlock: &Interlock| Watch {
            interlock: interlock.clone(),
            next: Duration::ZERO,
            asked: None,
        };
        Self {
            watches: interlocks.iter().map(watch).collect(),
        }
    }

    /// The next quantity to be read now, if any; `ticket` is the reading's.
    pub fn due(&mut self, now: Duration, ticket: Ticket) -> Option<QuantityName> {
        let watch = self
            .watches
            .iter_mut()
            .find(|watch| watch.asked.is_none() && watch.next <= now)?;
        watch.asked = Some((ticket, now));
        watch.next = now + watch.interval();
        Some(watch.interlock.quantity.clone())
    }

    /// Takes a reading: `None` where the ticket is not an interlock's, else whether all is well.
    pub fn read(&mut self, ticket: Ticket, value: Option<f64>) -> Option<Result<(), EntryKind>> {
        let watch = self
            .watches
            .iter_mut()
            .find(|watch| watch.asked.is_some_and(|(asked, _)| asked == ticket))?;
        watch.asked = None;
        let good = value.is_some_and(|value| {
            // A value that is no number compares false, and trips.
            watch.interlock.lowest.is_none_or(|lowest| value >= lowest)
                && watch
                    .interlock
                    .highest
                    .is_none_or(|highest| value <= highest)
                && value.is_finite()
        });
        Some(if good {
            Ok(())
        } else {
            Err(watch.tripped(value))
        })
    }

    /// Whether the ticket is an interlock's; its reading is then asked for again in time.
    pub fn excuse(&mut self, ticket: Ticket) -> bool {
        let asked = |watch: &&mut Watch| watch.asked.is_some_and(|(asked, _)| asked == ticket);
        let watch = self.watches.iter_mut().find(asked);
        watch.map(|watch| watch.asked = None).is_some()
    }

    /// The first interlock that has waited for its reading for too long.
    pub fn overdue(&self, now: Duration) -> Option<EntryKind> {
        let late = |watch: &&Watch| {
            watch
                .asked
                .is_some_and(|(_, since)| now >= since + watch.patience())
        };
        self.watches
            .iter()
            .find(late)
            .map(|watch| watch.tripped(None))
    }

    /// When there is something to do next.
    pub fn next_timeout(&self) -> Option<Duration> {
        let when = |watch: &Watch| match watch.asked {
            Some((_, since)) => since + watch.patience(),
            None => watch.next,
        };
        self.watches.iter().map(when).min()
    }

    /// After the system stood still: outstanding readings get their patience anew.
    pub fn forgive(&mut self, now: Duration) {
        for watch in &mut self.watches {
            if let Some((_, since)) = &mut watch.asked {
                *since = now;
            }
        }
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    fn one() -> Interlocks {
        Interlocks::new(&[Interlock {
            quantity: QuantityName::new("oven.temperature").unwrap(),
            lowest: None,
            highest: Some(393.0),
            every: 2.0,
            say: "too hot".into(),
        }])
    }

    #[test]
    fn it_is_read_on_its_schedule_and_never_twice_at_once() {
        let mut interlocks = one();
        assert!(interlocks.due(Duration::ZERO, 1).is_some());
        assert!(interlocks.due(Duration::from_secs(3), 2).is_none());
        assert_eq!(interlocks.read(1, Some(300.0)), Some(Ok(())));
        assert_eq!(interlocks.next_timeout(), Some(Duration::from_secs(2)));
        assert!(interlocks.due(Duration::from_secs(3), 3).is_some());
        assert_eq!(interlocks.read(7, Some(300.0)), None);
    }

    #[test]
    fn what_is_out_or_no_number_or_missing_trips() {
        for value in [Some(394.0), Some(f64::NAN), None] {
            let mut interlocks = one();
            interlocks.due(Duration::ZERO, 1);
            assert!(
                matches!(interlocks.read(1, value), Some(Err(_))),
                "{value:?}"
            );
        }
        let mut interlocks = one();
        interlocks.due(Duration::ZERO, 1);
        assert!(interlocks.overdue(Duration::from_secs(9)).is_none());
        assert!(interlocks.overdue(Duration::from_secs(10)).is_some());
    }
}
