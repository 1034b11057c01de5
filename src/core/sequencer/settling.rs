//! When a quantity that was set counts as arrived: by readback, by drift, or by time alone.
//!
//! Judges readings that others take; says when it wants the next one.

use std::collections::VecDeque;
use std::time::Duration;

use crate::itinerary::{Move, Settle};
use crate::quantity::{QuantityName, Setting};

/// Readings closest together; the distance grows with the time that has passed.
const CLOSEST: Duration = Duration::from_millis(10);

/// Readings farthest apart.
const FARTHEST: Duration = Duration::from_secs(1);

/// Shortest time over which a drift is judged: a shorter one would judge the noise.
const DRIFT_OVER: Duration = Duration::from_secs(10);

/// Most readings kept for the drift.
const DRIFT_READINGS: usize = 64;

/// One quantity on its way.
#[derive(Debug, Clone)]
pub struct Settling {
    quantity: QuantityName,
    setpoint: Option<f64>,
    settle: Settle,
    sent: Duration,
    good: u32,
    next: Duration,
    asked: bool,
    history: VecDeque<(f64, f64)>,
}

/// What is to be done next for a quantity on its way.
#[derive(Debug, Clone, PartialEq)]
pub enum Step {
    /// It is there.
    Arrived,
    /// Its time is over and it is not there.
    GaveUp,
    /// Read it now.
    Read(QuantityName),
    /// Nothing before this time.
    Wait(Duration),
}

impl Settling {
    /// A quantity whose last setpoint was sent at `sent`.
    pub fn new(step: &Move, sent: Duration) -> Self {
        let settle = step.settle;
        let before = CLOSEST.saturating_mul(settle.readings.saturating_sub(1));
        Self {
            quantity: step.quantity.clone(),
            setpoint: match step.setpoint {
                Setting::Number(value) => Some(value),
                Setting::Switch(_) => None,
            },
            settle,
            sent,
            good: 0,
            // The last of the readings falls on the shortest wait, not the first.
            next: sent + seconds(settle.at_least).saturating_sub(before),
            asked: false,
            history: VecDeque::new(),
        }
    }

    /// Whether its reading is under way.
    pub fn is_asked(&self) -> bool {
        self.asked
    }

    /// When it wants to be looked at next.
    pub fn next_time(&self) -> Duration {
        let earliest = self.sent + seconds(self.settle.at_least);
        if self.is_there() {
            earliest
        } else {
            self.next.min(self.over())
        }
    }

    /// What to do at `now`.
    pub fn step(&mut self, now: Duration) -> Step {
        let earliest = self.sent + seconds(self.settle.at_least);
        if self.is_there() {
            return if now >= earliest {
                Step::Arrived
            } else {
                Step::Wait(earliest)
            };
        }
        if now >= self.over() {
            return Step::GaveUp;
        }
        if now >= self.next {
            let passed = now.saturating_sub(self.sent);
            self.next = now + (passed / 10).clamp(CLOSEST, FARTHEST);
            self.asked = true;
            return Step::Read(self.quantity.clone());
        }
        Step::Wait(self.next.min(self.over()))
    }

    /// Takes a reading.
    pub fn read(&mut self, value: Option<f64>, now: Duration) {
        self.asked = false;
        let Some(value) = value.filter(|value| value.is_finite()) else {
            self.good = 0;
            self.history.clear();
            return;
        };
        if self.history.len() == DRIFT_READINGS {
            self.history.pop_front();
        }
        if self.settle.drift.is_some() {
            self.history.push_back((now.as_secs_f64(), value));
        }
        let near = match (self.settle.within, self.setpoint) {
            (Some(within), Some(setpoint)) => (value - setpoint).abs() <= within,
            _ => true,
        };
        self.good = if near && self.is_steady() {
            self.good + 1
        } else {
            0
        };
    }

    fn over(&self) -> Duration {
        self.sent + seconds(self.settle.give_up.max(self.settle.at_least))
    }

    fn is_there(&self) -> bool {
        let looked_at = self.setpoint.is_some()
            && (self.settle.within.is_some() || self.settle.drift.is_some());
        !looked_at || self.good >= self.settle.readings.max(1)
    }

    /// Least-squares slope over the readings kept, against the largest drift allowed.
    fn is_steady(&self) -> bool {
        let Some(largest) = self.settle.drift else {
            return true;
        };
        let (Some(first), Some(last)) = (self.history.front(), self.history.back()) else {
            return false;
        };
        if last.0 - first.0 < DRIFT_OVER.as_secs_f64() {
            return false;
        }
        let n = self.history.len() as f64;
        let (t, v) = self
            .history
            .iter()
            .fold((0.0, 0.0), |sum, at| (sum.0 + at.0 / n, sum.1 + at.1 / n));
        let (tt, tv) = self.history.iter().fold((0.0, 0.0), |sum, at| {
            let (dt, dv) = (at.0 - t, at.1 - v);
            (sum.0 + dt * dt, sum.1 + dt * dv)
        });
        tt > 0.0 && (tv / tt).abs() <= largest
    }
}

fn seconds(value: f64) -> Duration {
    Duration::try_from_secs_f64(value.max(0.0)).unwrap_or(Duration::MAX / 4)
}

#[cfg(test)]
mod tests {
    use super::*;

    fn way(settle: Settle) -> Settling {
        let step = Move {
            quantity: QuantityName::new("coil.current").unwrap(),
            setpoint: Setting::Number(1.0),
            approach: None,
            settle,
        };
        Settling::new(&step, Duration::ZERO)
    }

    /// Drives it with a law of the value over time; returns how and when it ended.
    fn drive(mut settling: Settling, law: impl Fn(f64) -> f64) -> (Step, Duration) {
        let mut now = Duration::ZERO;
        loop {
            match settling.step(now) {
                Step::Read(_) => settling.read(Some(law(now.as_secs_f64())), now),
                Step::Wait(until) => {
                    assert!(until > now, "no progress at {now:?}");
                    now = until;
                }
                end => return (end, now),
            }
        }
    }

    const BY_READBACK: Settle = Settle {
        within: Some(0.01),
        readings: 3,
        drift: None,
        at_least: 0.05,
        give_up: 5.0,
    };

    #[test]
    fn what_is_there_takes_the_shortest_wait() {
        let (end, at) = drive(way(BY_READBACK), |_| 1.0);
        assert_eq!((end, at), (Step::Arrived, Duration::from_millis(50)));
    }

    #[test]
    fn what_comes_late_is_waited_for_and_what_never_comes_is_given_up() {
        let (end, at) = drive(way(BY_READBACK), |t| 1.0 - (-t / 0.1).exp());
        assert_eq!(end, Step::Arrived);
        // Within 1 % after 4.6 time constants.
        assert!(at.as_secs_f64() > 0.46 && at.as_secs_f64() < 0.7, "{at:?}");
        let (end, at) = drive(way(BY_READBACK), |_| 1.02);
        assert_eq!((end, at), (Step::GaveUp, Duration::from_secs(5)));
    }

    #[test]
    fn a_drift_is_judged_over_a_while() {
        let settle = Settle {
            within: None,
            drift: Some(20e-3 / 60.0),
            give_up: 3600.0,
            ..BY_READBACK
        };
        // 10 K off with a time constant of 100 s drifts 20 mK/min after 572 s.
        let (end, at) = drive(way(settle), |t| 10.0 * (-t / 100.0).exp());
        assert_eq!(end, Step::Arrived);
        assert!((560.0..660.0).contains(&at.as_secs_f64()), "{at:?}");
        let (end, _) = drive(way(settle), |t| 1e-3 * t);
        assert_eq!(end, Step::GaveUp);
    }

    #[test]
    fn time_alone_reads_nothing() {
        let mut settling = way(Settle {
            within: None,
            ..BY_READBACK
        });
        assert_eq!(
            settling.step(Duration::ZERO),
            Step::Wait(Duration::from_millis(50))
        );
        assert_eq!(settling.step(Duration::from_millis(50)), Step::Arrived);
    }

    #[test]
    fn a_reading_that_is_no_number_counts_against_it() {
        let mut settling = way(BY_READBACK);
        let now = Duration::from_millis(30);
        settling.read(Some(1.0), now);
        settling.read(Some(1.0), now);
        settling.read(None, now);
        settling.read(Some(1.0), now);
        assert!(!settling.is_there());
    }
}
