//! Whole runs in virtual time over the mock bench's links in memory: how each ends, and how it leaves the bench.

#![expect(
    clippy::unwrap_used,
    clippy::panic,
    reason = "a test fails by panicking"
)]

use std::collections::BTreeMap;
use std::io;
use std::sync::Arc;
use std::sync::atomic::{AtomicI64, AtomicU64, Ordering};
use std::time::Duration;

use darkline::bench::{OpenBench, open_bench};
use darkline::conductor::{Command, Progress, RunEnd, run};
use darkline::seams::{Boxed, Clock, Fitter, MemoryRecorder, Recorder, Seams, VirtualClock};
use darkline_core::answer::Answer;
use darkline_core::diagnostic::Fault;
use darkline_core::entry::{Entry, EntryKind, Flag, Header, PointRecord, RepeatReason, State};
use darkline_core::itinerary::{self, Itinerary};
use darkline_core::run::RunState;
use darkline_core::sequencer::{Fitted, Verdict};
use darkline_core::trace::Trace;
use darkline_drivers::link::{Dial, dial_with};
use darkline_drivers::map::CommandMap;
use darkline_mock::truth::Truth;
use darkline_mock::world::World;
use darkline_mock::{MockBench, TimedFault};
use tokio::sync::{mpsc, watch};
use tokio::time::Instant;

const BENCH: &str = include_str!("../mock/bench.toml");

/// A short scan: the slow coil first, then records of 40 ms.
const SHORT: &str = r#"
title = "Short"

[set]
"control.frequency" = "80 MHz"
"control.power"     = "0 dBm"
"control.output"    = "on"
"probe.power"       = "-3 dBm"
"probe.output"      = "on"
"coil.output"       = "on"

[[step]]
quantity = "coil.current"
from     = "-20 mA"
to       = "20 mA"
count    = 6
order    = "rising"
settle   = { within = "20 uA", readings = 3, at_least = "20 ms", give_up = "5 s" }

[sweep]
quantity  = "probe.frequency"
centre    = "80 MHz"
span      = "120 kHz"
duration  = "40 ms"
direction = "both"
record    = { signal = "scope.ch1", reference = "scope.ch2", lock = "scope.ch3" }
samples   = 200
averages  = 2

[[guard]]
quantity  = "lock.level"
between   = ["0.4 V", "0.8 V"]
otherwise = "wait"
give_up   = "10 min"

[[guard]]
signal    = "lock"
between   = ["0.4 V", "0.8 V"]
otherwise = "repeat"
attempts  = 5

[resonance]
shape  = "lorentzian"
follow = false
"#;

/// One simulated run and everything around it.
struct Stage {
    mock: MockBench,
    seams: Seams,
    recorder: Arc<MemoryRecorder>,
    itinerary: Itinerary,
    commands: mpsc::Sender<Command>,
    ordered: mpsc::Receiver<Command>,
}

impl Stage {
    fn new(sequence: &str, faults: &[&str]) -> Self {
        let mock = MockBench::new(World::new(Truth::shipped()), Instant::now());
        for fault in faults {
            let timed: TimedFault = fault.parse().unwrap();
            mock.schedule(timed);
        }
        let (_, _, itinerary) = itinerary::check(BENCH, sequence).unwrap();
        let (seams, recorder) = Seams::in_memory();
        let (commands, ordered) = mpsc::channel(4);
        Self {
            mock,
            seams,
            recorder,
            itinerary,
            commands,
            ordered,
        }
    }

    async fn open(&self) -> Result<OpenBench, Vec<Fault>> {
        open_bench(
            Arc::clone(self.itinerary.bench()),
            |declared| {
                let mock = self.mock.clone();
                let name = declared.name.clone();
                let dialler: Box<dyn Dial> = Box::new(dial_with(name.clone(), move || {
                    let refused = || io::Error::from(io::ErrorKind::ConnectionRefused);
                    mock.connect(&name).ok_or_else(refused)
                }));
                Ok(dialler)
            },
            |declared| {
                CommandMap::find(&declared.map, &[])
                    .map_err(|error| Fault::new("F0212", error.to_string()))
            },
        )
        .await
    }

    /// Runs to the end.
    async fn run(self) -> Outcome {
        let bench = self.open().await.unwrap();
        let header = Header {
            points: self.itinerary.len(),
            ..Header::default()
        };
        let began = Instant::now();
        let (progress, _shown) = watch::channel(Progress::default());
        let end = run(
            bench,
            self.itinerary,
            header,
            self.seams,
            self.ordered,
            progress,
        )
        .await;
        drop(self.commands);
        Outcome {
            end,
            took: began.elapsed(),
            mock: self.mock,
            entries: self.recorder.entries(),
        }
    }
}

/// What came of it.
struct Outcome {
    end: RunEnd,
    took: Duration,
    mock: MockBench,
    entries: Vec<Arc<Entry>>,
}

impl Outcome {
    fn last(&self, instrument: &str, what: &str) -> f64 {
        let history = self.mock.history();
        let found = history.of(instrument).unwrap().extremes(what);
        found.map_or(0.0, |found| found.last)
    }

    /// The coil without current, all light off, and never a limit, a stair or a slew passed on the way.
    fn assert_dark_and_within_limits(&self) {
        assert_eq!(self.last("coil", "current"), 0.0);
        assert_eq!(self.last("coil", "output"), 0.0);
        assert_eq!(self.last("probe", "output"), 0.0);
        assert_eq!(self.last("control", "output"), 0.0);
        let history = self.mock.history();
        for (name, instrument) in history.iter() {
            assert_eq!(instrument.violations, 0, "{name}");
        }
        let coil = history.of("coil").unwrap();
        assert!(coil.greatest_magnitude("current") <= 25e-3);
        let sets: Vec<(f64, f64)> = coil
            .sets()
            .filter(|set| set.what == "current")
            .map(|set| (set.at, set.value))
            .collect();
        for (at, window) in sets.iter().enumerate() {
            let later = sets[at..].iter().take_while(|set| set.0 < window.0 + 0.1);
            let before = if at == 0 { 0.0 } else { sets[at - 1].1 };
            for set in later {
                let change = (set.1 - before).abs();
                assert!(
                    change <= 0.2 * 0.1 + 1e-3 + 1e-9,
                    "{change} A within 100 ms of {}",
                    window.0
                );
            }
        }
    }

    fn points(&self) -> Vec<&PointRecord> {
        let point = |entry: &'_ Arc<Entry>| matches!(entry.kind, EntryKind::Point(_));
        self.entries
            .iter()
            .filter(|entry| point(entry))
            .filter_map(|entry| match &entry.kind {
                EntryKind::Point(record) => Some(&**record),
                _ => None,
            })
            .collect()
    }

    fn says(&self, wanted: impl Fn(&EntryKind) -> bool) -> bool {
        self.entries.iter().any(|entry| wanted(&entry.kind))
    }

    fn assert_ended(&self, state: State) {
        assert_eq!(
            self.end.state, state,
            "{}: {:?}",
            self.end.reason, self.end.fault
        );
        let numbers: Vec<u64> = self.entries.iter().map(|entry| entry.seq).collect();
        assert_eq!(numbers, (0..numbers.len() as u64).collect::<Vec<_>>());
        let folded = RunState::fold(self.entries.iter().map(|entry| &**entry));
        assert_eq!(folded, self.end.run);
        assert_eq!(folded.state, state);
        assert!(folded.left.is_some());
    }
}

#[tokio::test(start_paused = true)]
async fn a_whole_scan_finishes_at_rest() {
    let outcome = Stage::new(SHORT, &[]).run().await;
    outcome.assert_ended(State::Finished);
    assert!(outcome.end.is_safe());
    println!("short scan: {:?} of virtual time", outcome.took);
    outcome.assert_dark_and_within_limits();
    let points = outcome.points();
    assert_eq!(points.len(), 6);
    for (nth, point) in points.iter().enumerate() {
        assert_eq!(point.index, nth as u64);
        assert_eq!((point.attempts, point.acquisitions), (1, 4));
        assert!(point.flags.is_empty(), "{:?}", point.flags);
        let coil = point.coordinate("coil.current").unwrap();
        let wanted = -20e-3 + 8e-3 * nth as f64;
        assert!((coil.readback.unwrap() - wanted).abs() < 2e-6);
        assert!((coil.measured.unwrap() - wanted).abs() < 20e-6);
    }
}

/// The time that the shipped scan took against its critical path: the sum over the points of sweeps, ramp and
/// shortest settling. Time is virtual and transfers take none of it: what is more is the program's doing.
#[tokio::test(start_paused = true)]
async fn the_shipped_scan_is_close_to_its_critical_path() {
    let sequence = include_str!("../sequences/coil-constant.toml");
    let outcome = Stage::new(sequence, &[]).run().await;
    outcome.assert_ended(State::Finished);
    outcome.assert_dark_and_within_limits();
    let (mut path, mut last) = (0.0, 0.0);
    for point in outcome.points() {
        let coil = point.coordinate("coil.current").unwrap();
        let current = coil.setpoint.number().unwrap();
        let ramp = f64::abs(current - last) / 0.2;
        let settling = if ramp > 0.0 { 20e-3 } else { 0.0 };
        path += f64::from(point.acquisitions) * 40e-3 + ramp + settling;
        last = current;
    }
    // Down to rest.
    path += f64::abs(last) / 0.2;
    let ratio = outcome.took.as_secs_f64() / path;
    println!(
        "shipped scan: {} points in {:.3} s, critical path {path:.3} s, ratio {ratio:.4}",
        outcome.points().len(),
        outcome.took.as_secs_f64(),
    );
    assert!(ratio < 1.05, "{ratio}");
}

#[tokio::test(start_paused = true)]
async fn an_instrument_that_cannot_be_reached_is_named() {
    let faults = Stage::new(SHORT, &["unreachable:coil"])
        .open()
        .await
        .unwrap_err();
    assert_eq!(faults.len(), 1);
    assert_eq!(faults[0].code, "F0201");
    assert_eq!(faults[0].instrument.as_deref(), Some("coil"));
}

#[tokio::test(start_paused = true)]
async fn another_instrument_at_the_same_place_is_refused() {
    let faults = Stage::new(SHORT, &["wrong-identity:scope"])
        .open()
        .await
        .unwrap_err();
    assert_eq!(faults[0].code, "F0208");
    assert_eq!(faults[0].instrument.as_deref(), Some("scope"));
}

#[tokio::test(start_paused = true)]
async fn a_digitizer_that_falls_silent_faults_the_run_and_the_bench_is_safe() {
    let outcome = Stage::new(SHORT, &["silent:scope@0.7"]).run().await;
    outcome.assert_ended(State::Faulted);
    assert_eq!(
        outcome.end.fault.as_ref().unwrap().instrument.as_deref(),
        Some("scope")
    );
    assert!(outcome.end.is_safe(), "{:?}", outcome.end.safe_report);
    outcome.assert_dark_and_within_limits();
    assert!(
        outcome.took < Duration::from_secs(120),
        "{:?}",
        outcome.took
    );
}

#[tokio::test(start_paused = true)]
async fn a_supply_that_falls_silent_is_said_loudly() {
    let outcome = Stage::new(SHORT, &["silent:coil@0.7"]).run().await;
    // An interlock watches its current, and is not patient with an instrument that says nothing.
    outcome.assert_ended(State::Tripped);
    assert!(
        outcome.end.reason.contains("could not be read"),
        "{}",
        outcome.end.reason
    );
    assert!(!outcome.end.is_safe());
    assert_eq!(outcome.end.safe_report.unreached[0].0, "coil");
    assert_eq!(outcome.last("probe", "output"), 0.0);
    assert_eq!(outcome.last("control", "output"), 0.0);
    assert!(
        outcome.took < Duration::from_secs(120),
        "{:?}",
        outcome.took
    );
}

#[tokio::test(start_paused = true)]
async fn a_supply_whose_link_breaks_once_comes_back_and_the_point_is_repeated() {
    let outcome = Stage::new(SHORT, &["disconnect:coil@0.7"]).run().await;
    outcome.assert_ended(State::Finished);
    outcome.assert_dark_and_within_limits();
    assert_eq!(outcome.points().len(), 6);
    assert!(outcome.says(
        |kind| matches!(kind, EntryKind::Reconnected { instrument } if instrument == "coil")
    ));
}

#[tokio::test(start_paused = true)]
async fn a_current_past_its_limit_trips_the_interlock() {
    let outcome = Stage::new(SHORT, &["readback-offset:coil:0.05@0.6"])
        .run()
        .await;
    outcome.assert_ended(State::Tripped);
    assert!(outcome.says(|kind| matches!(
        kind,
        EntryKind::Interlock { quantity, value: Some(value), .. }
            if quantity.as_str() == "coil.current" && *value > 25e-3
    )));
    assert!(outcome.end.is_safe(), "{:?}", outcome.end.safe_report);
    outcome.assert_dark_and_within_limits();
}

#[tokio::test(start_paused = true)]
async fn a_missed_trigger_is_repeated_and_flagged() {
    let outcome = Stage::new(SHORT, &["miss-trigger:1@0.6"]).run().await;
    outcome.assert_ended(State::Finished);
    let points = outcome.points();
    assert_eq!(points.len(), 6);
    let flagged: Vec<_> = points
        .iter()
        .filter(|point| point.flags.contains(&Flag::MissedTrigger))
        .collect();
    assert_eq!(flagged.len(), 1);
    assert_eq!((flagged[0].attempts, flagged[0].acquisitions), (2, 4));
    assert_eq!(outcome.end.run.repeated, 1);
}

#[tokio::test(start_paused = true)]
async fn a_laser_lock_lost_for_a_while_repeats_what_it_spoilt() {
    // 250 ms are longer than a record: it is lost in the middle of one, whenever it begins.
    let outcome = Stage::new(SHORT, &["lock-lost:0.25@0.6"]).run().await;
    outcome.assert_ended(State::Finished);
    let points = outcome.points();
    assert_eq!(points.len(), 6);
    assert!(outcome.says(|kind| matches!(
        kind,
        EntryKind::Repeated {
            reason: RepeatReason::Guard,
            ..
        }
    )));
    assert!(points.iter().all(|point| !point.is_doubtful()));
    assert!(outcome.end.run.repeated >= 1);
}

#[tokio::test(start_paused = true)]
async fn a_cut_in_the_middle_of_a_ramp_ramps_down_from_there() {
    for at in [5, 40, 60, 90, 300, 500, 700, 900] {
        let stage = Stage::new(SHORT, &[]);
        let commands = stage.commands.clone();
        let user = tokio::spawn(async move {
            tokio::time::sleep(Duration::from_millis(at)).await;
            // Twice is not worse than once.
            let _ = commands.send(Command::Cut).await;
            let _ = commands.send(Command::Cut).await;
        });
        let outcome = stage.run().await;
        user.await.unwrap();
        outcome.assert_ended(State::Stopped);
        assert!(outcome.end.is_safe(), "{:?}", outcome.end.safe_report);
        outcome.assert_dark_and_within_limits();
    }
}

#[tokio::test(start_paused = true)]
async fn wind_up_keeps_the_point_in_work() {
    let stage = Stage::new(SHORT, &[]);
    let commands = stage.commands.clone();
    tokio::spawn(async move {
        tokio::time::sleep(Duration::from_millis(600)).await;
        let _ = commands.send(Command::WindUp).await;
    });
    let outcome = stage.run().await;
    outcome.assert_ended(State::Stopped);
    assert!(!outcome.points().is_empty());
    outcome.assert_dark_and_within_limits();
}

/// A fitter that panics at its third point.
#[derive(Default)]
struct Panicking(AtomicU64);

impl Fitter for Panicking {
    fn fit(&self, _: Box<PointRecord>, _: Arc<Trace>) -> Boxed<'static, Fitted> {
        let nth = self.0.fetch_add(1, Ordering::Relaxed);
        Box::pin(async move {
            assert!(nth != 2, "a broken assertion");
            Fitted {
                line: None,
                verdict: Verdict::Nothing,
            }
        })
    }

    fn completed(&self, _: &PointRecord) {}

    fn answer(&self) -> Boxed<'static, Option<Answer>> {
        Box::pin(async { panic!("another broken assertion") })
    }
}

#[tokio::test(start_paused = true)]
async fn a_panic_in_the_fitter_faults_the_run_and_keeps_the_samples() {
    let mut stage = Stage::new(SHORT, &[]);
    stage.seams.fitter = Arc::new(Panicking::default());
    let outcome = stage.run().await;
    outcome.assert_ended(State::Faulted);
    assert!(outcome.end.reason.contains("a broken assertion"));
    assert!(outcome.end.is_safe());
    outcome.assert_dark_and_within_limits();
    let points = outcome.points();
    assert_eq!(points.len(), 3);
    assert!(points[2].flags.contains(&Flag::Unfitted));
}

/// A clock that panics after so many looks: the loop itself is hit.
struct BrokenClock(AtomicI64);

impl Clock for BrokenClock {
    fn utc(&self) -> i64 {
        let left = self.0.fetch_sub(1, Ordering::Relaxed);
        assert!(left > 0, "a broken clock");
        0
    }
}

#[tokio::test(start_paused = true)]
async fn a_panic_in_the_loop_itself_leaves_the_bench_safe() {
    let mut stage = Stage::new(SHORT, &[]);
    stage.seams.clock = Arc::new(BrokenClock(AtomicI64::new(100)));
    let outcome = stage.run().await;
    outcome.assert_ended(State::Faulted);
    assert!(
        outcome.end.reason.contains("a broken clock"),
        "{}",
        outcome.end.reason
    );
    assert!(outcome.end.is_safe());
    outcome.assert_dark_and_within_limits();
}

#[tokio::test(start_paused = true)]
async fn a_full_disk_faults_the_run_and_nothing_is_announced_that_is_not_on_it() {
    let mut stage = Stage::new(SHORT, &[]);
    let recorder = Arc::new(MemoryRecorder::failing_at(20));
    stage.seams.recorder = Arc::clone(&recorder) as Arc<dyn Recorder>;
    let mut announced = stage.seams.entries.subscribe();
    let outcome = stage.run().await;
    assert_eq!(outcome.end.state, State::Faulted);
    assert!(outcome.end.is_safe());
    outcome.assert_dark_and_within_limits();
    let mut heard = 0;
    while announced.try_recv().is_ok() {
        heard += 1;
    }
    assert_eq!((heard, recorder.entries().len()), (20, 20));
}

/// A time of day that jumps ahead once, as when the system was suspended.
struct Jumping(VirtualClock, Instant);

impl Clock for Jumping {
    fn utc(&self) -> i64 {
        let jump = if self.1.elapsed() > Duration::from_millis(600) {
            3_600_000_000_000
        } else {
            0
        };
        self.0.utc() + jump
    }
}

#[tokio::test(start_paused = true)]
async fn a_suspended_system_is_noticed_and_the_point_in_work_repeated() {
    let mut stage = Stage::new(SHORT, &[]);
    stage.seams.clock = Arc::new(Jumping(VirtualClock::new(0), Instant::now()));
    let outcome = stage.run().await;
    outcome.assert_ended(State::Finished);
    assert!(outcome.says(
        |kind| matches!(kind, EntryKind::Note { text } if text.contains("stood still for 3600"))
    ));
    let suspended = outcome
        .points()
        .iter()
        .filter(|point| point.flags.contains(&Flag::Suspended))
        .count();
    assert_eq!(suspended, 1);
    assert_eq!(outcome.points().len(), 6);
}

/// 41 x 401 points, each held for 1.7 s: 7.8 h of virtual time.
#[tokio::test(start_paused = true)]
async fn a_night_of_a_stepped_probe_takes_seconds() {
    let sequence = r#"
title = "Stepped"
[set]
"control.frequency" = "80 MHz"
"control.power"     = "0 dBm"
"control.output"    = "on"
"probe.power"       = "-3 dBm"
"probe.output"      = "on"
"coil.output"       = "on"
[[step]]
quantity = "coil.current"
from     = "-20 mA"
to       = "20 mA"
count    = 41
order    = "rising"
settle   = { within = "20 uA", readings = 3, at_least = "20 ms", give_up = "5 s" }
[[step]]
quantity = "probe.frequency"
from     = "79.94 MHz"
to       = "80.06 MHz"
count    = 401
order    = "serpentine"
settle   = { at_least = "2 ms" }
[dwell]
duration = "1.7 s"
samples  = 20
record   = { signal = "scope.ch1", lock = "scope.ch3" }
[[guard]]
signal    = "lock"
between   = ["0.4 V", "0.8 V"]
otherwise = "repeat"
attempts  = 5
[resonance]
shape = "lorentzian"
"#;
    let wall = std::time::Instant::now();
    let outcome = Stage::new(sequence, &[]).run().await;
    outcome.assert_ended(State::Finished);
    assert_eq!(outcome.points().len(), 41 * 401);
    let indices: BTreeMap<u64, ()> = outcome.points().iter().map(|p| (p.index, ())).collect();
    assert_eq!(indices.len(), 41 * 401);
    assert!(outcome.took > Duration::from_secs(7 * 3600 + 1800));
    println!(
        "{:.2} h of virtual time in {:.1} s",
        outcome.took.as_secs_f64() / 3600.0,
        wall.elapsed().as_secs_f64()
    );
}
