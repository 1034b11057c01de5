//! Notices that the whole system stood still: suspended, or stopped for a while.
//!
//! While a system is suspended its time of day goes on and its passing time does not; a process that was
//! merely stopped sees both jump between two ticks.

use std::time::Duration;

use tokio::time::Instant;

/// Time between two looks.
pub const TICK: Duration = Duration::from_secs(1);

/// A gap longer than this is a standstill; a shorter one is a busy machine, or a clock being set.
const LEAST: Duration = Duration::from_secs(3);

/// Watches two clocks.
#[derive(Debug)]
pub struct Standstill {
    looked: Instant,
    utc: i64,
}

impl Standstill {
    /// Begins now, at this time of day in ns.
    pub fn new(utc: i64) -> Self {
        Self {
            looked: Instant::now(),
            utc,
        }
    }

    /// How long the system stood still since the last look, if it did.
    pub fn look(&mut self, utc: i64) -> Option<Duration> {
        let now = Instant::now();
        let passed = now.saturating_duration_since(self.looked);
        let of_day = Duration::from_nanos(u64::try_from(utc.saturating_sub(self.utc)).unwrap_or(0));
        self.looked = now;
        self.utc = utc;
        let stopped = passed.saturating_sub(TICK);
        let suspended = of_day.saturating_sub(passed);
        let gap = stopped.max(suspended);
        (gap >= LEAST).then_some(gap)
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[tokio::test(start_paused = true)]
    async fn jumps_are_noticed_and_clocks_set_back_are_not() {
        let mut standstill = Standstill::new(0);
        let second = 1_000_000_000;
        tokio::time::advance(TICK).await;
        assert_eq!(standstill.look(second), None);
        tokio::time::advance(TICK).await;
        assert_eq!(standstill.look(62 * second), Some(Duration::from_secs(60)));
        tokio::time::advance(TICK).await;
        assert_eq!(standstill.look(10 * second), None);
        tokio::time::advance(Duration::from_secs(31)).await;
        assert_eq!(standstill.look(41 * second), Some(Duration::from_secs(30)));
    }
}
