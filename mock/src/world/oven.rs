//! Cell and oven: one slow pole between the heater's setpoint (or the room) and the cell.

use crate::truth::CellTruth;

/// History of the oven's setpoints.
#[derive(Debug, Clone)]
pub(crate) struct OvenTrack {
    time: f64,
    room: f64,
    segments: Vec<Segment>,
}

#[derive(Debug, Clone, Copy)]
struct Segment {
    start: f64,
    from: f64,
    target: f64,
}

const KEPT: usize = 4096;

impl OvenTrack {
    pub(crate) fn new(truth: &CellTruth, room: f64) -> OvenTrack {
        let start = Segment {
            start: 0.0,
            from: truth.temperature,
            target: truth.temperature,
        };
        OvenTrack {
            time: truth.oven_time,
            room,
            segments: vec![start],
        }
    }

    pub(crate) fn set(&mut self, now: f64, kelvin: f64, on: bool) {
        let target = if on { kelvin } else { self.room };
        let last = self.segments[self.segments.len() - 1];
        if !target.is_finite() || target == last.target {
            return;
        }
        let start = now.max(last.start);
        let from = self.after(&last, start);
        if self.segments.len() >= KEPT {
            self.segments.drain(..KEPT / 2);
        }
        self.segments.push(Segment {
            start,
            from,
            target,
        });
    }

    /// Cell temperature at `t`, K.
    pub(crate) fn at(&self, t: f64) -> f64 {
        let index = self
            .segments
            .partition_point(|s| s.start <= t)
            .saturating_sub(1);
        self.after(&self.segments[index], t)
    }

    fn after(&self, segment: &Segment, t: f64) -> f64 {
        let span = (t - segment.start).max(0.0);
        let rest = if self.time > 0.0 {
            (-span / self.time).exp()
        } else {
            0.0
        };
        segment.target + (segment.from - segment.target) * rest
    }
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::truth::Truth;

    #[test]
    fn the_cell_follows_with_its_time_constant_and_cools_to_the_room() {
        let truth = CellTruth {
            temperature: 323.0,
            oven_time: 60.0,
            ..Truth::shipped().cell
        };
        let mut oven = OvenTrack::new(&truth, 294.0);
        oven.set(10.0, 333.0, true);
        assert_eq!(oven.at(9.0), 323.0);
        assert!((oven.at(70.0) - (333.0 - 10.0 / std::f64::consts::E)).abs() < 1e-9);
        oven.set(2000.0, 333.0, false);
        assert!((oven.at(1999.0) - 333.0).abs() < 1e-9 && (oven.at(9000.0) - 294.0).abs() < 1e-9);
    }
}
