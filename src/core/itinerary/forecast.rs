//! What a run will take: time in parts, size, extremes. One walk over all points, without memory.
//!
//! What the instruments' own ramps, waits and sweeps take is known; what links and command handling
//! take is an estimate, from [`exchange`].

use super::model::{Extreme, Forecast, Seconds};
use super::plan::{Place, Plan, Slot};
use crate::bench::link::baud;
use crate::bench::{Bench, Property};
use crate::quantity::{Dimension, Setting};

/// Bytes of a sample on the wire and in the archive.
const SAMPLE: u64 = 2;
/// Bytes of an archive that hold no samples.
const FILE: u64 = 64 * 1024;
/// Bytes of a point beside its samples: coordinates, times, guards, fit.
const PER_POINT: u64 = 1024;
/// Bytes of a command with its reply.
const MESSAGE: f64 = 40.0;
/// Bytes per second over a network.
const NETWORK: f64 = 10e6;
/// Exchanges of one setpoint: set, error queue, readback.
const PER_SETPOINT: f64 = 3.0;
/// Exchanges of one acquisition: arm, confirm, start, completion, preamble, read, count.
const PER_ACQUISITION: f64 = 7.0;

pub(super) fn forecast(plan: &Plan, bench: &Bench) -> Forecast {
    let costs: Vec<Cost> = plan
        .slots
        .iter()
        .map(|slot| Cost::of(slot, bench))
        .collect();
    let recording = Recording::of(plan, bench);
    let mut seconds = Seconds {
        degaussing: degaussing(plan, bench),
        ..Seconds::default()
    };
    seconds.total = seconds.degaussing;
    let start = seconds.total;
    let points = plan.len();
    let (mut before, mut state) = (Vec::new(), Vec::new());
    let mut from: Option<Place> = None;
    for index in 0..points {
        let place = plan.fill(index, &mut state);
        let (moving, settling) = way(
            plan,
            &costs,
            from.map(|_| before.as_slice()),
            &state,
            from,
            place,
        );
        let waiting = plan.due(place).map_or(0.0, |due| {
            (start + due - seconds.total - moving - settling).max(0.0)
        });
        seconds.moving += moving;
        seconds.settling += settling;
        seconds.waiting += waiting;
        // The transfer of the point before hides behind this point's way, or the reverse.
        let hidden = if plan.overlap && from.is_some() {
            recording.transfer.min(moving + settling)
        } else {
            0.0
        };
        seconds.total += moving + settling + waiting + recording.total() - hidden;
        std::mem::swap(&mut before, &mut state);
        from = Some(place);
    }
    let count = points as f64;
    seconds.sweeping = recording.sweeping * count;
    seconds.transferring = recording.transfer * count;
    seconds.commanding = recording.commanding * count;
    let traces = points.saturating_mul(recording.acquisitions);
    Forecast {
        points,
        traces,
        seconds,
        bytes: FILE
            .saturating_add(points.saturating_mul(PER_POINT))
            .saturating_add(traces.saturating_mul(recording.bytes)),
        extremes: extremes(plan, bench),
    }
}

/// Seconds of one exchange with an instrument: a guess at its own time, and the bytes on a serial line.
fn exchange(bench: &Bench, instrument: &str) -> f64 {
    let link = bench.instruments.get(instrument).map(|i| i.link.as_str());
    match link.and_then(baud) {
        Some(baud) => 1e-3 + MESSAGE * 10.0 / f64::from(baud),
        None => 0.5e-3,
    }
}

/// What a move of a slot costs.
struct Cost {
    slew: Option<f64>,
    stair: Option<f64>,
    approach: Option<f64>,
    exchange: f64,
    /// From where the first move starts.
    rest: Option<f64>,
}

impl Cost {
    fn of(slot: &Slot, bench: &Bench) -> Self {
        let property = bench.property(&slot.name);
        Self {
            slew: property.and_then(|p| p.slew),
            stair: property.and_then(|p| p.ramp_step),
            approach: slot.approach,
            exchange: exchange(bench, slot.name.instrument()),
            rest: property.and_then(|p| p.rest).and_then(Setting::number),
        }
    }

    fn moving(&self, from: Option<Setting>, to: Setting) -> f64 {
        let target = to.number();
        let start = from.and_then(Setting::number).or(self.rest).or(target);
        let (Some(start), Some(target)) = (start, target) else {
            return PER_SETPOINT * self.exchange;
        };
        match self.approach {
            Some(by) => self.ramp(target + by - start) + self.ramp(by),
            None => self.ramp(target - start),
        }
    }

    fn ramp(&self, distance: f64) -> f64 {
        let stairs = self
            .stair
            .map_or(1.0, |stair| (distance.abs() / stair).ceil().max(1.0));
        let by_slew = self.slew.map_or(0.0, |slew| distance.abs() / slew);
        by_slew.max(stairs * PER_SETPOINT * self.exchange)
    }
}

/// Seconds of moving and of settling between two states.
fn way(
    plan: &Plan,
    costs: &[Cost],
    before: Option<&[Setting]>,
    state: &[Setting],
    from: Option<Place>,
    to: Place,
) -> (f64, f64) {
    let (mut moving, mut settling) = (0.0, 0.0);
    for (slot, (cost, now)) in costs.iter().zip(state).enumerate() {
        let was = before.and_then(|before| before.get(slot)).copied();
        if was == Some(*now) {
            continue;
        }
        let settle = plan.settle(slot, from, to);
        moving += cost.moving(was, *now);
        settling += settle
            .at_least
            .max(f64::from(settle.readings - 1) * cost.exchange);
    }
    (moving, settling)
}

/// What recording one point costs.
struct Recording {
    acquisitions: u64,
    /// Bytes of one acquisition.
    bytes: u64,
    sweeping: f64,
    transfer: f64,
    commanding: f64,
}

impl Recording {
    fn of(plan: &Plan, bench: &Bench) -> Self {
        let swept = plan.sweep.as_ref().map(|s| {
            let acquisitions = s.directions.len() as u64 * u64::from(s.averages);
            (
                acquisitions,
                s.duration + s.delay.max(0.0),
                s.samples,
                s.record.len(),
                &s.digitizer,
            )
        });
        let dwelt = plan.dwell.as_ref().map(|d| {
            (
                u64::from(d.averages),
                d.duration,
                d.samples,
                d.record.len(),
                &d.digitizer,
            )
        });
        let Some((acquisitions, duration, samples, signals, digitizer)) = swept.or(dwelt) else {
            return Self {
                acquisitions: 0,
                bytes: 0,
                sweeping: 0.0,
                transfer: 0.0,
                commanding: 0.0,
            };
        };
        let bytes = u64::from(samples) * signals as u64 * SAMPLE;
        let link = bench.instruments.get(digitizer).map(|i| i.link.as_str());
        let rate = link
            .and_then(baud)
            .map_or(NETWORK, |baud| f64::from(baud) / 10.0);
        let count = acquisitions as f64;
        Self {
            acquisitions,
            bytes,
            sweeping: count * duration,
            transfer: count * bytes as f64 / rate,
            commanding: count * PER_ACQUISITION * exchange(bench, digitizer),
        }
    }

    fn total(&self) -> f64 {
        self.sweeping + self.transfer + self.commanding
    }
}

fn degaussing(plan: &Plan, bench: &Bench) -> f64 {
    let Some(degauss) = &plan.degauss else {
        return 0.0;
    };
    let property = bench.property(&degauss.quantity);
    let cost = Cost {
        slew: property.and_then(|p| p.slew),
        stair: property.and_then(|p| p.ramp_step),
        approach: None,
        exchange: exchange(bench, degauss.quantity.instrument()),
        rest: Some(0.0),
    };
    let mut at = 0.0;
    let mut seconds = 0.0;
    for setpoint in &degauss.setpoints {
        seconds += cost.ramp(setpoint - at) + degauss.dwell;
        at = *setpoint;
    }
    seconds
}

/// How far every quantity goes that is set, degaussed or swept.
fn extremes(plan: &Plan, bench: &Bench) -> Vec<Extreme> {
    let mut all: Vec<Extreme> = Vec::new();
    for (index, slot) in plan.slots.iter().enumerate() {
        let Some((low, high)) = reach(plan, index) else {
            continue;
        };
        all.push(extreme(bench.property(&slot.name), slot, low, high));
    }
    if let Some(degauss) = &plan.degauss {
        let size = degauss
            .setpoints
            .iter()
            .fold(0.0f64, |size, s| size.max(s.abs()));
        if let Some(found) = all.iter_mut().find(|e| e.quantity == degauss.quantity) {
            found.lowest = found.lowest.min(-size);
            found.highest = found.highest.max(size);
        } else if let Some(property) = bench.property(&degauss.quantity) {
            all.push(Extreme {
                quantity: degauss.quantity.clone(),
                dimension: property.dimension,
                lowest: -size,
                highest: size,
                limit: property.range,
            });
        }
    }
    if let Some(sweep) = &plan.sweep {
        let moved = plan.follow.and_then(|(slot, slope)| {
            let (low, high) = settings(plan, slot)?;
            Some((slope * low, slope * high))
        });
        let (a, b) = moved.unwrap_or((0.0, 0.0));
        all.push(Extreme {
            quantity: sweep.quantity.clone(),
            dimension: Dimension::Frequency,
            lowest: sweep.centre + a.min(b) - sweep.span / 2.0,
            highest: sweep.centre + a.max(b) + sweep.span / 2.0,
            limit: bench.property(&sweep.quantity).and_then(|p| p.range),
        });
    }
    all
}

fn extreme(property: Option<&Property>, slot: &Slot, lowest: f64, highest: f64) -> Extreme {
    Extreme {
        quantity: slot.name.clone(),
        dimension: slot.dimension,
        lowest,
        highest,
        limit: property.and_then(|p| p.range),
    }
}

/// Lowest and highest setpoint of a slot; `None` for switches.
fn settings(plan: &Plan, index: usize) -> Option<(f64, f64)> {
    let tracks = plan.axes.iter().flat_map(|axis| &axis.tracks);
    let stepped = tracks
        .filter(|(slot, _)| *slot == index)
        .find_map(|(_, values)| values.extremes());
    let fixed = plan.slots.get(index)?.fixed.number().map(|v| (v, v));
    let mut reach = stepped.or(fixed)?;
    let changes = plan.visits.iter().flat_map(|visit| &visit.changes);
    for value in changes
        .filter(|(slot, _)| *slot == index)
        .filter_map(|(_, s)| s.number())
    {
        reach = (reach.0.min(value), reach.1.max(value));
    }
    Some(reach)
}

/// The same with approaches.
fn reach(plan: &Plan, index: usize) -> Option<(f64, f64)> {
    let (low, high) = settings(plan, index)?;
    let by = plan.slots.get(index)?.approach.unwrap_or(0.0);
    Some((low.min(low + by), high.max(high + by)))
}
