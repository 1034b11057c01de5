//! Whole runs of the sequencer against a fake bench, over thousands of seeds.
//!
//! What the data say depends on one seed, how long everything takes on another: what a run keeps may
//! depend on the first only. The bench asserts on its side what may never happen.

use std::collections::BTreeMap;
use std::time::Duration;

use super::*;
use crate::bench::Interlock;
use crate::diagnostic::Fault;
use crate::entry::{Flag, PointRecord};
use crate::itinerary::{Guard, GuardSource, Move, Otherwise, Point, PointKind, Settle};
use crate::quantity::Setting;
use crate::trace::Direction;

/// A number for this place, from splitmix64 (Steele, Lea, Flood 2014), uniform in 0..1.
fn chance(seed: u64, place: &[u64]) -> f64 {
    let mut state = seed;
    for part in place {
        state = mix(state ^ part.wrapping_mul(0x9e37_79b9_7f4a_7c15));
    }
    (mix(state) >> 11) as f64 / (1u64 << 53) as f64
}

fn mix(state: u64) -> u64 {
    let mut z = state.wrapping_add(0x9e37_79b9_7f4a_7c15);
    z = (z ^ (z >> 30)).wrapping_mul(0xbf58_476d_1ce4_e5b9);
    z = (z ^ (z >> 27)).wrapping_mul(0x94d0_49bb_1331_11eb);
    z ^ (z >> 31)
}

fn name(text: &str) -> QuantityName {
    QuantityName::new(text).unwrap()
}

/// Rows of points with a background now and then.
#[derive(Debug, Clone)]
struct Grid {
    width: u64,
    height: u64,
    overlap: bool,
    approach: bool,
}

impl Grid {
    fn of(seed: u64) -> Self {
        let pick = |place, n: f64| (chance(seed, &[99, place]) * n) as u64;
        let approach = pick(3, 3.0) == 0;
        Self {
            width: 1 + pick(0, 9.0),
            height: 1 + pick(1, 4.0),
            overlap: !approach && pick(2, 4.0) > 0,
            approach,
        }
    }

    fn kind(&self, index: u64) -> PointKind {
        if index % 7 == 6 {
            PointKind::Background { which: 0 }
        } else {
            let nth = index - index / 7;
            let grid = vec![nth / self.width, nth % self.width];
            PointKind::Grid { grid }
        }
    }

    fn step(&self, quantity: &str, setpoint: Setting) -> Move {
        Move {
            quantity: name(quantity),
            setpoint,
            approach: self.approach.then_some(-1.0),
            settle: Settle {
                within: Some(0.5),
                readings: 3,
                drift: None,
                at_least: 0.02,
                give_up: 1.0,
            },
        }
    }

    fn output(&self, index: u64) -> Setting {
        Setting::Switch(!matches!(self.kind(index), PointKind::Background { .. }))
    }
}

impl Course for Grid {
    fn len(&self) -> u64 {
        self.width * self.height
    }

    fn point(&self, index: u64) -> Option<Point> {
        if index >= self.len() {
            return None;
        }
        let mut moves = vec![self.step("coil.current", Setting::Number(index as f64))];
        if index == 0 || self.output(index) != self.output(index - 1) {
            moves.push(self.step("control.output", self.output(index)));
        }
        Some(Point {
            index,
            kind: self.kind(index),
            moves,
            overlap: self.overlap,
            due: (index == 3).then_some(1.0),
            centre: Some(80e6 + 1e3 * index as f64),
        })
    }

    fn settings(&self, index: u64) -> Option<Vec<Move>> {
        Some(vec![
            self.step("coil.current", Setting::Number(index as f64)),
            self.step("control.output", self.output(index)),
        ])
    }
}

fn plan(seed: u64) -> Plan {
    let guard = |source, otherwise| Guard {
        source,
        between: (0.4, 0.8),
        otherwise,
        give_up: 1e4,
        attempts: 2,
    };
    let otherwise = match (chance(seed, &[98]) * 3.0) as u32 {
        0 => Otherwise::Wait,
        1 => Otherwise::Repeat,
        _ => Otherwise::Flag,
    };
    Plan {
        acquisitions: [Direction::Up, Direction::Down]
            .iter()
            .flat_map(|way| (0..2).map(|repeat| (*way, repeat)))
            .take(1 + (chance(seed, &[97]) * 4.0) as usize)
            .collect(),
        window: Some(WindowPlan {
            centre: 80e6,
            span: 300e3,
            follow: true,
            range: (79e6, 81e6),
        }),
        guards: vec![
            guard(GuardSource::Quantity(name("lock.level")), otherwise),
            guard(GuardSource::Signal("lock".into()), Otherwise::Repeat),
        ],
        interlocks: vec![Interlock {
            quantity: name("oven.temperature"),
            lowest: None,
            highest: Some(400.0),
            every: 0.3,
            say: String::new(),
        }],
        measured: vec![name("coil.current")],
        ..Plan::default()
    }
}

/// What the fake bench does wrong, each with its probability.
#[derive(Debug, Clone, Copy)]
struct Vices {
    clipped: f64,
    no_peak: f64,
    missed: f64,
    lock: f64,
    guard: f64,
    lost: f64,
}

const WELL_BEHAVED: Vices = Vices {
    clipped: 0.0,
    no_peak: 0.0,
    missed: 0.0,
    lock: 0.0,
    guard: 0.0,
    lost: 0.0,
};

const NAUGHTY: Vices = Vices {
    clipped: 0.1,
    no_peak: 0.1,
    missed: 0.05,
    lock: 0.1,
    guard: 0.15,
    ..WELL_BEHAVED
};

/// A bench and a user, in virtual time.
struct Simulation {
    sequencer: Sequencer<Grid>,
    grid: Grid,
    data: u64,
    timing: u64,
    vices: Vices,
    now: Duration,
    due: Vec<(Duration, Ticket, Result<Outcome, Trouble>)>,
    stands: BTreeMap<QuantityName, Setting>,
    busy: BTreeMap<&'static str, Ticket>,
    full: Option<AcquisitionOrder>,
    visited: Vec<(u64, u32)>,
    tries: BTreeMap<(u64, u64), u64>,
    guard_reads: u64,
    kept: Vec<PointRecord>,
    entries: Vec<EntryKind>,
    left: bool,
    over: Option<State>,
    orders: Vec<(u64, Command)>,
    inputs: u64,
}

impl Simulation {
    fn new(data: u64, timing: u64, vices: Vices) -> Self {
        let grid = Grid::of(data);
        Self {
            sequencer: Sequencer::new(grid.clone(), plan(data)),
            grid,
            data,
            timing,
            vices,
            now: Duration::ZERO,
            due: Vec::new(),
            stands: BTreeMap::new(),
            busy: BTreeMap::new(),
            full: None,
            visited: Vec::new(),
            tries: BTreeMap::new(),
            guard_reads: 0,
            kept: Vec::new(),
            entries: Vec::new(),
            left: false,
            over: None,
            orders: Vec::new(),
            inputs: 0,
        }
    }

    fn run(mut self) -> Self {
        self.put(Input::Begin);
        while self.over.is_none() {
            assert!(
                self.inputs < 200_000,
                "no end: {:?}",
                self.sequencer.head.stage
            );
            if let Some(at) = self
                .orders
                .iter()
                .position(|(when, _)| *when <= self.inputs)
            {
                let (_, command) = self.orders.swap_remove(at);
                self.put(Input::Order(command));
                continue;
            }
            let next = self.due.iter().map(|(when, ..)| *when).min();
            let timeout = self.sequencer.next_timeout();
            match (next, timeout) {
                (Some(next), timeout) if timeout.is_none_or(|timeout| next <= timeout) => {
                    self.now = self.now.max(next);
                    let at = self
                        .due
                        .iter()
                        .position(|(when, ..)| *when == next)
                        .unwrap();
                    let (_, ticket, outcome) = self.due.swap_remove(at);
                    self.answer(ticket, outcome);
                }
                (_, Some(timeout)) => {
                    let waited = timeout > self.now || self.inputs < 10 || self.now == timeout;
                    assert!(waited, "a timeout in the past is never served");
                    self.now = self.now.max(timeout);
                    self.put(Input::Tick);
                }
                _ if self.sequencer.hold => self.put(Input::Order(Command::Onward)),
                _ => panic!(
                    "stuck at {:?} / {:?}",
                    self.sequencer.head, self.sequencer.tail
                ),
            }
        }
        assert!(self.left);
        assert!(self.sequencer.next_action().is_none());
        self
    }

    fn answer(&mut self, ticket: Ticket, outcome: Result<Outcome, Trouble>) {
        self.busy.retain(|_, busy| *busy != ticket);
        if matches!(outcome, Ok(Outcome::Left { .. })) {
            self.left = true;
        }
        self.put(Input::Done { ticket, outcome });
    }

    fn put(&mut self, input: Input) {
        self.inputs += 1;
        let now = Moment {
            at: self.now,
            utc: self.now.as_nanos() as i64,
        };
        self.sequencer.handle(input, now);
        while let Some(action) = self.sequencer.next_action() {
            assert!(self.over.is_none(), "{action:?} after the end");
            self.perform(action);
        }
    }

    fn later(&mut self, ticket: Ticket, most: f64, outcome: Result<Outcome, Trouble>) {
        let takes = chance(self.timing, &[ticket, self.inputs]).powi(3) * most;
        let lost = self.vices.lost > chance(self.timing, &[ticket, 5]);
        let outcome = match outcome {
            Ok(Outcome::Kept | Outcome::Fitted(_) | Outcome::Left { .. }) => outcome,
            Ok(Outcome::Acquired) if lost => {
                self.full = None;
                Err(Trouble::Reconnected("scope".into()))
            }
            _ if lost => Err(Trouble::Reconnected("coil".into())),
            other => other,
        };
        self.due
            .push((self.now + Duration::from_secs_f64(takes), ticket, outcome));
    }

    fn occupy(&mut self, what: &'static str, ticket: Ticket) {
        assert!(!self.left, "{what} after the bench was left");
        let before = self.busy.insert(what, ticket);
        assert!(before.is_none(), "{what} while it is busy");
    }

    /// How often this was asked of the point before: what the data say depends on that, not on time.
    fn nth(&mut self, what: u64, point: u64) -> u64 {
        let count = self.tries.entry((what, point)).or_default();
        *count += 1;
        *count
    }

    fn perform(&mut self, action: Action) {
        match action {
            Action::Degauss { .. } => panic!("not asked for"),
            Action::Move { ticket, moves } => self.go(ticket, &moves),
            Action::Read {
                ticket, quantity, ..
            } => self.read(ticket, &quantity),
            Action::Acquire {
                ticket,
                acquisition,
            } => self.record(ticket, acquisition),
            Action::Transfer {
                ticket,
                acquisition,
            } => self.transfer(ticket, acquisition),
            Action::Fit { ticket, record, .. } => self.fit(ticket, &record),
            Action::Complete { ticket, record, .. } => {
                self.occupy_tail("disk", ticket);
                self.kept.push(*record);
                self.later(ticket, 0.02, Ok(Outcome::Kept));
            }
            Action::Discard { .. } => {}
            Action::Say(kind) => self.entries.push(kind),
            Action::Leave { ticket, .. } => {
                self.due.retain(|(_, _, outcome)| {
                    matches!(outcome, Ok(Outcome::Kept | Outcome::Fitted(_)))
                });
                self.busy
                    .retain(|what, _| matches!(*what, "disk" | "fitter"));
                let outcome = Outcome::Left {
                    reached: vec!["coil".into()],
                    unreached: Vec::new(),
                };
                self.later(ticket, 1.0, Ok(outcome));
            }
            Action::Over { state, .. } => self.over = Some(state),
        }
    }

    fn occupy_tail(&mut self, what: &'static str, ticket: Ticket) {
        let before = self.busy.insert(what, ticket);
        assert!(before.is_none(), "{what} has two points at once");
    }

    fn go(&mut self, ticket: Ticket, moves: &[Move]) {
        assert!(
            !self.busy.contains_key("record"),
            "moves in the middle of a recording"
        );
        self.occupy("move", ticket);
        let mut coordinates = Vec::new();
        for step in moves {
            self.stands.insert(step.quantity.clone(), step.setpoint);
            coordinates.push(Coordinate {
                quantity: step.quantity.clone(),
                setpoint: step.setpoint,
                readback: step.setpoint.number(),
                measured: None,
            });
        }
        self.later(ticket, 0.3, Ok(Outcome::Moved(coordinates)));
    }

    fn read(&mut self, ticket: Ticket, quantity: &QuantityName) {
        assert!(!self.left);
        let value = match quantity.as_str() {
            "lock.level" => {
                self.guard_reads += 1;
                let out = self.vices.guard > chance(self.data, &[1, self.guard_reads]);
                if out { 0.1 } else { 0.6 }
            }
            "oven.temperature" => 350.0,
            _ => match self.stands.get(quantity) {
                Some(Setting::Number(value)) => *value,
                _ => 0.0,
            },
        };
        self.later(ticket, 0.01, Ok(Outcome::Read(Some(value))));
    }

    fn record(&mut self, ticket: Ticket, order: AcquisitionOrder) {
        assert!(!self.busy.contains_key("move"), "records while moving");
        assert!(
            !self.busy.contains_key("transfer"),
            "records over a transfer"
        );
        assert_eq!(
            self.full, None,
            "records over a record that was not read out"
        );
        self.occupy("record", ticket);
        let wanted = self.grid.settings(order.point).unwrap();
        for step in wanted {
            assert_eq!(
                self.stands.get(&step.quantity),
                Some(&step.setpoint),
                "recorded at the wrong place"
            );
        }
        let nth = self.nth(2, order.point);
        if self.vices.missed > chance(self.data, &[2, order.point, nth]) {
            return self.later(ticket, 0.1, Err(Trouble::MissedTrigger));
        }
        self.full = Some(order);
        self.later(ticket, 0.1, Ok(Outcome::Acquired));
    }

    fn transfer(&mut self, ticket: Ticket, order: AcquisitionOrder) {
        assert_eq!(self.full.take(), Some(order), "reads out another record");
        self.occupy("transfer", ticket);
        let nth = self.nth(3, order.point);
        let clipped = self.vices.clipped > chance(self.data, &[3, order.point, nth]);
        let unlocked = self.vices.lock > chance(self.data, &[4, order.point, nth]);
        let summary = Summary {
            clipped: u32::from(clipped),
            extremes: vec![("lock".into(), if unlocked { 0.2 } else { 0.5 }, 0.6)],
        };
        self.later(ticket, 0.2, Ok(Outcome::Transferred(summary)));
    }

    fn fit(&mut self, ticket: Ticket, record: &PointRecord) {
        self.occupy_tail("fitter", ticket);
        self.visited.push((record.index, record.attempts));
        let nth = self.nth(4, record.index);
        let background = matches!(record.kind, PointKind::Background { .. });
        let no_peak = background || self.vices.no_peak > chance(self.data, &[5, record.index, nth]);
        let verdict = if no_peak {
            Verdict::NoPeak
        } else {
            let error = 1e4 * (chance(self.data, &[6, record.index, nth]) - 0.5);
            Verdict::Peak(80e6 + 1.1e3 * record.index as f64 + error)
        };
        let fitted = Fitted {
            line: None,
            verdict,
        };
        self.later(ticket, 0.5, Ok(Outcome::Fitted(Box::new(fitted))));
    }

    /// All that was kept, without the times.
    fn timeless(&self) -> Vec<PointRecord> {
        let strip = |record: &PointRecord| PointRecord {
            begun: 0,
            ended: 0,
            ..record.clone()
        };
        self.kept.iter().map(strip).collect()
    }

    /// All entries but those about holding, in an order of their own: the head's and the tail's may
    /// come in either order.
    fn said(&self) -> Vec<String> {
        let mut said: Vec<String> = self
            .entries
            .iter()
            .filter(|kind| !matches!(kind, EntryKind::Turned { .. }))
            .map(|kind| format!("{kind:?}"))
            .collect();
        said.sort();
        said
    }
}

/// Every point once.
fn assert_complete(simulation: &Simulation) {
    let mut kept: Vec<u64> = simulation.kept.iter().map(|record| record.index).collect();
    kept.sort_unstable();
    assert_eq!(kept, (0..simulation.grid.len()).collect::<Vec<_>>());
    assert_eq!(simulation.over, Some(State::Finished));
}

#[test]
fn points_that_go_well_are_completed_once_and_in_order() {
    for seed in 0..2000 {
        let simulation = Simulation::new(seed, seed, WELL_BEHAVED).run();
        let kept: Vec<u64> = simulation.kept.iter().map(|record| record.index).collect();
        assert_eq!(
            kept,
            (0..simulation.grid.len()).collect::<Vec<_>>(),
            "seed {seed}"
        );
        assert!(simulation.kept.iter().all(|record| record.attempts == 1));
        assert!(simulation.kept.iter().all(|record| record.flags.is_empty()));
        assert!(simulation.kept.iter().all(|record| {
            record.coordinate("coil.current").unwrap().measured == Some(record.index as f64)
        }));
    }
}

#[test]
fn the_same_data_give_the_same_entries_whatever_the_timings() {
    let mut repeated = 0;
    for seed in 0..1500 {
        let first = Simulation::new(seed, 2 * seed, NAUGHTY).run();
        if first.over == Some(State::Finished) {
            assert_complete(&first);
        }
        for timing in [2 * seed + 1, 77_000 + seed] {
            let mut other = Simulation::new(seed, timing, NAUGHTY);
            if timing % 3 == 0 {
                other.orders = vec![(7, Command::Hold), (900, Command::Onward)];
            }
            let other = other.run();
            if first.over == Some(State::Finished) {
                assert_eq!(first.timeless(), other.timeless(), "seed {seed}");
                assert_eq!(first.visited, other.visited, "seed {seed}");
                assert_eq!(first.said(), other.said(), "seed {seed}");
            } else {
                // A trigger missed for good ends a run wherever the tail then is.
                assert_eq!(first.over, other.over, "seed {seed}");
            }
        }
        repeated += first
            .kept
            .iter()
            .filter(|record| record.attempts > 1)
            .count();
    }
    assert!(
        repeated > 1000,
        "the bench was not naughty enough: {repeated}"
    );
}

#[test]
fn lost_instruments_and_standstills_repeat_the_point_in_work() {
    for seed in 0..1000 {
        let vices = Vices {
            lost: 0.01,
            ..NAUGHTY
        };
        let mut simulation = Simulation::new(seed, seed, vices);
        simulation.put(Input::Begin);
        simulation.put(Input::Suspended(Duration::from_secs(3600)));
        let simulation = simulation.run();
        match simulation.over {
            Some(State::Finished) => assert_complete(&simulation),
            other => assert_eq!(other, Some(State::Faulted)),
        }
    }
}

#[test]
fn every_way_of_ending_early_leaves_the_bench_and_keeps_what_was_recorded() {
    for seed in 0..2000 {
        let when = 2 + (chance(seed, &[11]) * 120.0) as u64;
        let commands = [Command::WindUp, Command::Cut, Command::Safe];
        let command = commands[(seed % 3) as usize];
        let mut simulation = Simulation::new(seed, seed, WELL_BEHAVED);
        simulation.orders = vec![(when, command), (when + 2, command)];
        let simulation = simulation.run();
        let expected = match (simulation.over, command) {
            (Some(State::Finished), _) => continue,
            (_, Command::Safe) => State::Tripped,
            _ => State::Stopped,
        };
        assert_eq!(simulation.over, Some(expected));
        let kept: Vec<u64> = simulation.kept.iter().map(|record| record.index).collect();
        assert_eq!(kept, (0..kept.len() as u64).collect::<Vec<_>>());
        if command == Command::WindUp {
            // Whatever was recorded to its end is kept.
            assert!(kept.len() >= simulation.visited.len());
        }
    }
}

#[test]
fn an_interlock_trips_and_a_fault_faults() {
    for seed in 0..300 {
        let mut simulation = Simulation::new(seed, seed, WELL_BEHAVED);
        simulation.put(Input::Begin);
        let oven = simulation.due.iter().position(
            |(_, _, outcome)| matches!(outcome, Ok(Outcome::Read(Some(value))) if *value == 350.0),
        );
        simulation.due[oven.unwrap()].2 = Ok(Outcome::Read(Some(401.0)));
        let simulation = simulation.run();
        assert_eq!(simulation.over, Some(State::Tripped));
        let tripped = |kind: &EntryKind| matches!(kind, EntryKind::Interlock { value, .. } if *value == Some(401.0));
        assert!(simulation.entries.iter().any(tripped));

        let mut simulation = Simulation::new(seed, seed, WELL_BEHAVED);
        simulation.put(Input::Begin);
        simulation.put(Input::Failed(Fault::new("F0999", "the disk is full")));
        assert_eq!(simulation.run().over, Some(State::Faulted));
    }
}

#[test]
fn a_guard_that_stays_out_stops_the_run_after_its_patience() {
    let vices = Vices {
        guard: 1.0,
        ..WELL_BEHAVED
    };
    let seed = (0..50)
        .find(|seed| plan(*seed).guards[0].otherwise == Otherwise::Wait)
        .unwrap();
    let simulation = Simulation::new(seed, 1, vices).run();
    assert_eq!(simulation.over, Some(State::Stopped));
    assert!(simulation.now >= Duration::from_secs(10_000));
    assert!(simulation.entries.len() < 10, "one entry for one outage");
}

#[test]
fn the_last_attempt_is_kept_with_its_flag() {
    let vices = Vices {
        no_peak: 1.0,
        ..WELL_BEHAVED
    };
    let simulation = Simulation::new(4, 4, vices).run();
    assert_complete(&simulation);
    for record in &simulation.kept {
        if matches!(record.kind, PointKind::Background { .. }) {
            assert_eq!(record.attempts, 1);
        } else {
            assert_eq!(record.attempts, ATTEMPTS);
            assert!(record.flags.contains(&Flag::NoPeak));
        }
    }
}
