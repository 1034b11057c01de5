//! The coil and its supply: from the history of setpoints to current, voltage and axial field at any time.
//! Two poles in series (supply loop, then L/R), an eddy-current share that lags, warming, and a shield's play.

use crate::truth::CoilTruth;

/// History of the supply's setpoints, with the state at each change; everything in between is in closed form.
#[derive(Debug, Clone)]
pub(crate) struct CoilTrack {
    truth: CoilTruth,
    segments: Vec<Segment>,
}

/// State at the moment a setpoint took effect.
#[derive(Debug, Clone, Copy)]
struct Segment {
    start: f64,
    target: f64,
    /// Output of the supply's loop, A.
    supply: f64,
    current: f64,
    /// What the eddy currents let through, A.
    eddy: f64,
    /// State of the play operator, A.
    play: f64,
    /// Warming above room temperature, K.
    warming: f64,
}

/// The state at one time.
#[derive(Debug, Clone, Copy, PartialEq)]
pub(crate) struct CoilState {
    /// A.
    pub current: f64,
    /// A/s.
    pub slope: f64,
    /// Axial field of coil and shield, T.
    pub field: f64,
}

const KEPT: usize = 16_384;

impl CoilTrack {
    pub(crate) fn new(truth: CoilTruth) -> CoilTrack {
        let start = f64::NEG_INFINITY;
        let rest = Segment {
            start,
            target: 0.0,
            supply: 0.0,
            current: 0.0,
            eddy: 0.0,
            play: 0.0,
            warming: 0.0,
        };
        CoilTrack {
            truth,
            segments: vec![rest],
        }
    }

    /// The supply drives towards `amperes` from `now` on, as far as it can.
    pub(crate) fn drive(&mut self, now: f64, amperes: f64) {
        let target = amperes.clamp(-self.truth.supply_limit, self.truth.supply_limit);
        let last = self.segments[self.segments.len() - 1];
        if target == last.target || !target.is_finite() {
            return;
        }
        let start = now.max(last.start);
        let mut next = self.advance(&last, start);
        next.target = target;
        if self.segments.len() >= KEPT {
            self.segments.drain(..KEPT / 2);
        }
        self.segments.push(next);
    }

    /// State at `t`; `hint` remembers the segment between calls with rising times (start with 0).
    pub(crate) fn at(&self, t: f64, hint: &mut usize) -> CoilState {
        let from = &self.segments[self.locate(t, hint)];
        let state = self.advance(from, t);
        let slope = (state.supply - state.current) / self.load_time();
        let c = &self.truth;
        let driven = (1.0 - c.eddy_share) * state.current + c.eddy_share * state.eddy;
        let constant = c.constant * (1.0 + c.expansion * state.warming);
        let field = constant * driven + c.hysteresis_constant * (state.play - state.current);
        CoilState {
            current: state.current,
            slope,
            field,
        }
    }

    /// Voltage across the winding, V: R I + L dI/dt.
    pub(crate) fn voltage(&self, t: f64) -> f64 {
        let state = self.at(t, &mut 0);
        self.truth.resistance * state.current + self.truth.inductance * state.slope
    }

    fn locate(&self, t: f64, hint: &mut usize) -> usize {
        let known = (*hint).min(self.segments.len() - 1);
        let holds = |i: usize| {
            self.segments[i].start <= t
                && self.segments.get(i + 1).is_none_or(|next| t < next.start)
        };
        if !holds(known) {
            *hint = self
                .segments
                .partition_point(|s| s.start <= t)
                .saturating_sub(1);
        }
        (*hint).min(self.segments.len() - 1)
    }

    fn load_time(&self) -> f64 {
        (self.truth.inductance / self.truth.resistance).max(1e-9)
    }

    /// Both poles solved exactly; the play is exact while the current moves one way, which two real poles do after a
    /// step from rest; warming takes the setpoint's power.
    fn advance(&self, from: &Segment, t: f64) -> Segment {
        let span = t - from.start;
        if !span.is_finite() {
            return Segment { start: t, ..*from };
        }
        let c = &self.truth;
        let load = self.load_time();
        let supply_time = if (c.supply_lag / load - 1.0).abs() < 1e-6 {
            load * (1.0 + 1e-6)
        } else {
            c.supply_lag.max(1e-9)
        };
        let (slow, fast) = (decay(span, supply_time), decay(span, load));
        let share = (from.supply - from.target) * supply_time / (supply_time - load);
        let current = from.target + share * slow + (from.current - from.target - share) * fast;
        let eddy = from.target + (from.eddy - from.target) * decay(span, c.eddy_time);
        let warm = c.heating * c.resistance * from.target * from.target;
        Segment {
            start: t,
            target: from.target,
            supply: from.target + (from.supply - from.target) * slow,
            current,
            eddy,
            play: from
                .play
                .clamp(current - c.hysteresis_width, current + c.hysteresis_width),
            warming: warm + (from.warming - warm) * decay(span, c.thermal_time),
        }
    }
}

/// What is left of a decay: nothing that f64 could see after forty time constants.
fn decay(span: f64, time: f64) -> f64 {
    if span < 40.0 * time {
        (-span / time).exp()
    } else {
        0.0
    }
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::truth::Truth;

    fn coil() -> CoilTruth {
        CoilTruth {
            supply_lag: 2e-3,
            resistance: 8.0,
            inductance: 0.04,
            ..Truth::shipped().coil
        }
    }

    #[test]
    fn the_current_obeys_both_differential_equations() {
        let truth = coil();
        let mut track = CoilTrack::new(truth.clone());
        track.drive(1.0, 20e-3);
        track.drive(1.004, -5e-3);
        // The same by small steps of the second-order Runge-Kutta method.
        let (mut supply, mut current, step) = (0.0f64, 0.0f64, 1e-6);
        let load = truth.inductance / truth.resistance;
        for n in 0..20_000 {
            let t = 1.0 + f64::from(n) * step;
            let target = if n < 4000 { 20e-3 } else { -5e-3 };
            let rate = |s: f64, i: f64| ((target - s) / truth.supply_lag, (s - i) / load);
            let (a, b) = rate(supply, current);
            let (a, b) = rate(supply + a * step / 2.0, current + b * step / 2.0);
            assert!(
                (track.at(t, &mut 0).current - current).abs() < 1e-9,
                "at {t}"
            );
            (supply, current) = (supply + a * step, current + b * step);
        }
        let end = track.at(3.0, &mut 0);
        assert!((end.current + 5e-3).abs() < 1e-12 && (track.voltage(3.0) + 0.04).abs() < 1e-9);
    }

    #[test]
    fn the_past_can_be_asked_for_and_splitting_a_command_changes_nothing() {
        let mut track = CoilTrack::new(coil());
        track.drive(1.0, 20e-3);
        let before = track.at(1.003, &mut 0);
        track.drive(1.01, 0.0);
        assert_eq!(track.at(1.003, &mut 0), before);
        assert_eq!(track.at(0.5, &mut 0).current, 0.0);
    }

    #[test]
    fn a_warm_coil_is_weaker_or_stronger_by_its_expansion() {
        let truth = CoilTruth {
            heating: 1000.0,
            thermal_time: 10.0,
            ..coil()
        };
        let mut track = CoilTrack::new(truth.clone());
        track.drive(0.0, 20e-3);
        let warming = 1000.0 * 8.0 * 4e-4;
        let expected = truth.constant * 20e-3 * (1.0 + 17e-6 * warming);
        assert!((track.at(1000.0, &mut 0).field / expected - 1.0).abs() < 1e-12);
    }

    #[test]
    fn the_play_operator_gives_the_published_loop() {
        // A hysteresis study's table (computed): h = 2 mA, k = 120, r = 5 nT/mA, B0 = 350 nT.
        let truth = CoilTruth {
            constant: 120e-6,
            hysteresis_width: 2e-3,
            hysteresis_constant: 5e-6,
            expansion: 0.0,
            eddy_share: 0.0,
            ..coil()
        };
        let mut track = CoilTrack::new(truth);
        let published = [
            (5.0, 940.0),
            (10.0, 1540.0),
            (20.0, 2740.0),
            (15.0, 2160.0),
            (0.0, 360.0),
            (-20.0, -2040.0),
            (-15.0, -1460.0),
            (0.0, 340.0),
            (20.0, 2740.0),
            (-20.0, -2040.0),
            (16.0, 2260.0),
        ];
        for (n, (milliamperes, nanotesla)) in published.into_iter().enumerate() {
            let now = n as f64;
            track.drive(now, milliamperes * 1e-3);
            let field = track.at(now + 0.99, &mut 0).field * 1e9 + 350.0;
            assert!(
                (field - nanotesla).abs() < 1e-6,
                "{milliamperes} mA: {field} nT"
            );
        }
    }
}
