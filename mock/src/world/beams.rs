//! What the generators of both beams put out at any time, and what the modulators make of it.

use super::{Beam, BeamState, Sweep};
use crate::truth::BeamTruth;

/// History of one generator.
#[derive(Debug, Clone)]
pub(crate) struct BeamTrack {
    truth: BeamTruth,
    segments: Vec<Segment>,
}

#[derive(Debug, Clone, Copy)]
struct Segment {
    start: f64,
    state: BeamState,
    sweep: Option<Sweep>,
    /// Diffracted share at the modulator's centre frequency, 0..1.
    diffracted: f64,
}

const KEPT: usize = 16_384;

impl BeamTrack {
    pub(crate) fn new(truth: BeamTruth) -> BeamTrack {
        let state = BeamState {
            frequency: truth.centre,
            power: truth.level,
            on: false,
        };
        let rest = Segment {
            start: f64::NEG_INFINITY,
            state,
            sweep: None,
            diffracted: 0.0,
        };
        BeamTrack {
            truth,
            segments: vec![rest],
        }
    }

    pub(crate) fn set(&mut self, now: f64, state: BeamState) {
        let diffracted = if state.on {
            self.diffracted(state.power)
        } else {
            0.0
        };
        self.push(Segment {
            start: now,
            state,
            sweep: None,
            diffracted,
        });
    }

    pub(crate) fn sweep(&mut self, now: f64, sweep: Sweep) {
        let last = self.segments[self.segments.len() - 1];
        let state = BeamState {
            frequency: sweep.stop,
            ..last.state
        };
        self.push(Segment {
            start: now,
            state,
            sweep: Some(sweep),
            diffracted: last.diffracted,
        });
    }

    /// Radio frequency at `t`, Hz; `hint` as in the coil's track.
    pub(crate) fn frequency(&self, t: f64, hint: &mut usize) -> f64 {
        self.locate(t, hint).frequency(t)
    }

    /// (radio frequency in Hz, share of the light that is diffracted) at `t`.
    pub(crate) fn output(&self, t: f64, hint: &mut usize) -> (f64, f64) {
        let segment = self.locate(t, hint);
        let frequency = segment.frequency(t);
        let off = frequency - self.truth.centre;
        let flatness = 1.0 + off * (self.truth.slope + off * self.truth.curvature);
        (frequency, segment.diffracted * flatness.max(0.0))
    }

    /// Diffracted share at the centre frequency for the state at `t`, or for the world's own level if off then.
    pub(crate) fn nominal(&self, t: f64) -> f64 {
        let segment = self.locate(t, &mut 0);
        if segment.state.on {
            segment.diffracted
        } else {
            self.diffracted(self.truth.level)
        }
    }

    /// Acousto-optic diffraction in the Bragg regime: sin^2((pi/2) sqrt(P/Pfull)) (textbook, e.g. A. Yariv).
    fn diffracted(&self, level: f64) -> f64 {
        let share = 10f64.powf((level - self.truth.full_level) / 10.0);
        (std::f64::consts::FRAC_PI_2 * share.sqrt()).sin().powi(2)
    }

    fn push(&mut self, mut segment: Segment) {
        let last = self.segments[self.segments.len() - 1];
        segment.start = segment.start.max(last.start);
        if self.segments.len() >= KEPT {
            self.segments.drain(..KEPT / 2);
        }
        self.segments.push(segment);
    }

    fn locate(&self, t: f64, hint: &mut usize) -> &Segment {
        let known = (*hint).min(self.segments.len() - 1);
        let next_starts = |i: usize| self.segments.get(i + 1).is_some_and(|next| next.start <= t);
        if self.segments[known].start > t || next_starts(known) {
            *hint = self
                .segments
                .partition_point(|s| s.start <= t)
                .saturating_sub(1);
        }
        &self.segments[(*hint).min(self.segments.len() - 1)]
    }
}

impl Segment {
    fn frequency(&self, t: f64) -> f64 {
        let Some(sweep) = self.sweep else {
            return self.state.frequency;
        };
        let progress = if sweep.duration > 0.0 {
            ((t - self.start) / sweep.duration).clamp(0.0, 1.0)
        } else {
            1.0
        };
        let progress = match sweep.steps {
            None => progress,
            Some(steps) => {
                let steps = f64::from(steps.max(2));
                // A dwell belongs to its own step even where t is a rounding short of it.
                ((progress * steps + 1e-9).floor() / (steps - 1.0)).min(1.0)
            }
        };
        sweep.start + (sweep.stop - sweep.start) * progress
    }
}

/// Both beams.
#[derive(Debug, Clone)]
pub(crate) struct Beams {
    pub probe: BeamTrack,
    pub control: BeamTrack,
}

impl Beams {
    pub(crate) fn of(&self, beam: Beam) -> &BeamTrack {
        match beam {
            Beam::Probe => &self.probe,
            Beam::Control => &self.control,
        }
    }

    pub(crate) fn of_mut(&mut self, beam: Beam) -> &mut BeamTrack {
        match beam {
            Beam::Probe => &mut self.probe,
            Beam::Control => &mut self.control,
        }
    }
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::truth::Truth;

    fn beam() -> BeamTrack {
        BeamTrack::new(Truth::shipped().probe)
    }

    #[test]
    fn a_continuous_sweep_is_a_line_and_stays_at_its_stop() {
        let mut track = beam();
        track.sweep(
            2.0,
            Sweep {
                start: 79.9e6,
                stop: 80.1e6,
                duration: 0.04,
                steps: None,
            },
        );
        for (t, expected) in [
            (1.9, 80e6),
            (2.0, 79.9e6),
            (2.01, 79.95e6),
            (2.04, 80.1e6),
            (9.0, 80.1e6),
        ] {
            assert!((track.frequency(t, &mut 0) - expected).abs() < 1e-3, "{t}");
        }
    }

    #[test]
    fn a_stepped_sweep_dwells_from_start_to_stop_inclusive() {
        let mut track = beam();
        track.sweep(
            0.0,
            Sweep {
                start: 0.0,
                stop: 300.0,
                duration: 4.0,
                steps: Some(4),
            },
        );
        let seen: Vec<f64> = [0.0, 0.99, 1.0, 2.5, 3.0, 3.99, 4.5]
            .map(|t| track.frequency(t, &mut 0))
            .to_vec();
        assert_eq!(seen, [0.0, 0.0, 100.0, 200.0, 300.0, 300.0, 300.0]);
    }

    #[test]
    fn the_modulator_diffracts_everything_at_full_level_and_half_at_a_quarter() {
        let mut track = beam();
        let full = Truth::shipped().probe.full_level;
        for (level, expected) in [
            (full, 1.0),
            (full - 20.0 * 2f64.log10(), 0.5),
            (full - 60.0, 2.4674e-6),
        ] {
            track.set(
                1.0,
                BeamState {
                    frequency: 80e6,
                    power: level,
                    on: true,
                },
            );
            assert!(
                (track.output(1.0, &mut 0).1 / expected - 1.0).abs() < 1e-4,
                "{level}"
            );
        }
        track.set(
            2.0,
            BeamState {
                frequency: 80e6,
                power: full,
                on: false,
            },
        );
        assert_eq!(track.output(2.0, &mut 0).1, 0.0);
        assert!(track.output(1.5, &mut 0).1 > 0.0, "the past stays");
    }
}
