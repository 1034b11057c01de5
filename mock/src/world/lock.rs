//! When the laser is out of lock: at scheduled times, at random, or while a fault says so. A pure function of time.

use super::noise::Noise;
use crate::truth::LockTruth;

const CHANNEL: u32 = 64;

/// Intervals (start, end) within `from..=to` in which the laser is out of lock, unsorted, possibly overlapping.
pub(crate) fn losses(truth: &LockTruth, noise: &Noise, from: f64, to: f64) -> Vec<(f64, f64)> {
    let scheduled = truth
        .losses
        .iter()
        .map(|&(start, duration)| (start, start + duration));
    let mut found: Vec<(f64, f64)> = scheduled.chain(random(truth, noise, from, to)).collect();
    found.retain(|&(start, end)| start <= to && end > from);
    found
}

/// Time is cut into slots of a minute or four durations; a slot has one loss with probability rate times slot. So
/// the losses of any interval can be told without those before it.
fn random(truth: &LockTruth, noise: &Noise, from: f64, to: f64) -> Vec<(f64, f64)> {
    if truth.rate <= 0.0 || to < 0.0 {
        return Vec::new();
    }
    let slot = (4.0 * truth.duration).max(60.0);
    let first = ((from - truth.duration) / slot).floor().max(0.0) as u64;
    let last = (to / slot).floor().max(0.0) as u64;
    (first..=last)
        .filter(|&n| noise.uniform(CHANNEL, 2 * n) < truth.rate * slot)
        .map(|n| {
            let start = (n as f64 + noise.uniform(CHANNEL, 2 * n + 1)) * slot;
            (start, start + truth.duration)
        })
        .collect()
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::truth::Truth;

    #[test]
    fn scheduled_and_random_losses_are_the_same_however_they_are_asked_for() {
        let truth = LockTruth {
            losses: vec![(12.0, 3.0)],
            rate: 1.0 / 300.0,
            duration: 2.0,
            ..Truth::shipped().lock
        };
        let noise = Noise::new(5);
        let all = losses(&truth, &noise, 0.0, 36_000.0);
        assert!(
            (60..=200).contains(&all.len()),
            "{} losses in ten hours at one in five minutes",
            all.len()
        );
        for (start, end) in all {
            let middle = (start + end) / 2.0;
            assert!(losses(&truth, &noise, middle, middle).contains(&(start, end)));
        }
        assert!(losses(&truth, &noise, 12.5, 12.6).contains(&(12.0, 15.0)));
        let quiet = LockTruth { rate: 0.0, ..truth };
        assert!(
            losses(&quiet, &noise, 15.0, 1e5).is_empty()
                && losses(&quiet, &noise, 0.0, 11.9).is_empty()
        );
    }
}
