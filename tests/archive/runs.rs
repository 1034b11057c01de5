//! Synthetic runs for the tests and benchmarks of journal and archive: invented numbers, no physics.

use std::path::Path;

use darkline::journal::Journal;
use darkline::journal::disk::LocalDisk;
use darkline_core::answer::{Answer, Stated};
use darkline_core::entry::{
    Coordinate, Entry, EntryKind, Flag, GuardReading, GuardStage, Header, PointRecord, State,
};
use darkline_core::itinerary::PointKind;
use darkline_core::quantity::{QuantityName, Setting};
use darkline_core::trace::{Acquisition, ChannelData, Codes, Direction, SweepAxis, Trace};

/// When the runs begin, ns since 1970.
pub const BEGUN: i64 = 1_796_151_600_123_456_789;

/// What a synthetic run looks like.
#[derive(Debug, Clone)]
pub struct Shape {
    pub points: u64,
    pub samples: u32,
    pub averages: u32,
    /// Formats and scales change from point to point, acquisitions and samples are missing here and there.
    pub mixed: bool,
}

impl Shape {
    /// A few short records.
    pub fn small(points: u64) -> Self {
        Self {
            points,
            samples: 8,
            averages: 1,
            mixed: false,
        }
    }

    /// Everything that may differ between points does.
    pub fn mixed(points: u64) -> Self {
        Self {
            points,
            samples: 37,
            averages: 3,
            mixed: true,
        }
    }

    /// As a coil scan leaves it.
    pub fn regular(points: u64, samples: u32) -> Self {
        Self {
            points,
            samples,
            averages: 2,
            mixed: false,
        }
    }
}

pub type Line = (Entry, Option<Trace>);

/// Write `run` as the journal in `folder`.
pub fn write(folder: &Path, run: &[Line]) {
    let mut journal = Journal::create(&LocalDisk, folder).unwrap();
    for (entry, trace) in run {
        journal.append(entry, trace.as_ref()).unwrap();
    }
}

/// All entries of a run with their samples.
pub fn run(shape: &Shape) -> Vec<Line> {
    let mut kinds = vec![
        (EntryKind::Opened(Box::new(header(shape))), None),
        (
            EntryKind::Identified {
                instrument: "scope".into(),
                identity: "EXAMPLE,DIGITIZER,0,1.0 µ".into(),
                serial: "0".into(),
            },
            None,
        ),
        (
            EntryKind::Granted {
                instrument: "scope".into(),
                setting: "ch1.range".into(),
                asked: 0.9,
                granted: 1.0,
                unit: "V".into(),
            },
            None,
        ),
    ];
    for index in 0..shape.points {
        let (record, trace) = point(shape, index);
        kinds.push((EntryKind::Point(Box::new(record)), trace));
    }
    kinds.push((EntryKind::Answered(Box::new(answer())), None));
    kinds.push((
        EntryKind::Closed {
            state: State::Finished,
            reason: "all points are done".into(),
        },
        None,
    ));
    (0..)
        .zip(kinds)
        .map(|(seq, (kind, trace))| {
            let at = seq * 200_000_000;
            let utc = BEGUN + at as i64;
            (Entry { seq, at, utc, kind }, trace)
        })
        .collect()
}

fn header(shape: &Shape) -> Header {
    Header {
        title: "Coil constant, synthetic".into(),
        version: "0.1.0".into(),
        commit: "abcdef0".into(),
        points: shape.points,
        bench: format!(
            "# a bench file, 118 nT/mA ± 4 µA\n{}",
            include_str!("../../mock/bench.toml")
        ),
        sequence: "title = \"Coil constant, synthetic\"\n".into(),
        started_utc: BEGUN,
    }
}

fn answer() -> Answer {
    Answer {
        coil_constant: Stated::measured(118.63, 0.04, "nT/mA"),
        residual_field: Stated::measured(-38.2, 1.1, "nT").qualified("including light shift"),
        null_current: Stated::measured(0.322, 0.009, "mA"),
        transverse_field: Stated::limit(95.0, "nT"),
        linewidth: Stated::measured(8.31, 0.05, "kHz").qualified("at 0 mA"),
        contrast: Stated::missing("no dark level was recorded", "%"),
        chi2: Some(38.4),
        dof: Some(38),
        used: 40,
        sigma_over_scatter: None,
    }
}

/// A number from 0 to 1 that depends on the arguments alone.
fn hash(a: u64, b: u64) -> f64 {
    let mut x = a.wrapping_mul(0x9e37_79b9_7f4a_7c15) ^ b.wrapping_mul(0xbf58_476d_1ce4_e5b9);
    x ^= x >> 31;
    x = x.wrapping_mul(0x94d0_49bb_1331_11eb);
    x ^= x >> 29;
    (x >> 11) as f64 / (1u64 << 53) as f64
}

fn kind(shape: &Shape, index: u64) -> PointKind {
    match index % 10 {
        7 if shape.mixed => PointKind::Reference { which: 0 },
        9 if shape.mixed => PointKind::Background { which: 1 },
        _ => PointKind::Grid {
            grid: vec![index / 5, index % 5],
        },
    }
}

fn point(shape: &Shape, index: u64) -> (PointRecord, Option<Trace>) {
    let setpoint = -20e-3 + 1e-3 * index as f64;
    let centre = 80e6 + 1.66e6 * setpoint;
    let begun = BEGUN + index as i64 * 200_000_000;
    let kind = kind(shape, index);
    let background = matches!(kind, PointKind::Background { .. });
    let trace = trace(shape, index, centre, begun);
    let flags = match index % 6 {
        1 if shape.mixed => vec![Flag::Clipped, Flag::Retried],
        4 if shape.mixed => vec![Flag::OutOfLock],
        _ => vec![],
    };
    let quantity = |name: &str| QuantityName::new(name).unwrap();
    let record = PointRecord {
        index,
        kind,
        coordinates: vec![
            Coordinate {
                quantity: quantity("coil.current"),
                setpoint: Setting::Number(setpoint),
                readback: Some(setpoint + 1e-6 * hash(index, 1)),
                measured: (index % 3 != 2).then_some(setpoint + 2e-6 * hash(index, 2)),
            },
            Coordinate {
                quantity: quantity("control.output"),
                setpoint: Setting::Switch(!background),
                readback: None,
                measured: None,
            },
        ],
        sweep_centre: centre,
        begun,
        ended: begun + 170_000_000,
        guards: vec![
            guard(GuardStage::Before, Some(0.61 + 0.01 * hash(index, 3))),
            guard(GuardStage::After, (index != 4).then_some(0.6)),
        ],
        attempts: 1 + u32::from(!flags.is_empty()),
        flags,
        acquisitions: trace.len() as u32,
        line: None,
    };
    let traced = !(shape.mixed && index == 11);
    (record, traced.then_some(trace))
}

fn guard(stage: GuardStage, value: Option<f64>) -> GuardReading {
    GuardReading {
        guard: 0,
        what: "lock.level".into(),
        stage,
        lowest: value,
        highest: value,
        good: value.is_some(),
    }
}

fn trace(shape: &Shape, index: u64, centre: f64, begun: i64) -> Trace {
    let mut trace = Trace::new();
    for repeat in 0..shape.averages {
        for direction in [Direction::Up, Direction::Down] {
            if shape.mixed && index == 5 && repeat == 1 {
                continue;
            }
            trace.push(acquisition(shape, index, direction, repeat, centre, begun));
        }
    }
    trace
}

fn acquisition(
    shape: &Shape,
    index: u64,
    direction: Direction,
    repeat: u32,
    centre: f64,
    begun: i64,
) -> Acquisition {
    let half = match direction {
        Direction::Up => 150e3,
        Direction::Down => -150e3,
    };
    let samples = shape.samples - u32::from(shape.mixed && index == 3);
    let axis = SweepAxis {
        start: centre - half,
        stop: centre + half,
        duration: 40e-3,
        steps: index.is_multiple_of(2).then_some(401),
        delay: 12e-6,
        interval: 40e-3 / f64::from(samples),
        samples,
    };
    let seed = index * 1000 + u64::from(repeat) * 10 + u64::from(half < 0.0);
    let volts: Vec<f64> = (0..samples)
        .map(|i| {
            let x = (axis.frequency(i) - centre) / 20e3;
            0.3 / (1.0 + x * x) + 0.01 * (hash(seed, u64::from(i)) - 0.5)
        })
        .collect();
    let mut channels = vec![
        signal(shape, index, &volts),
        channel("reference", Codes::U8(codes(&volts, 1.0 / 255.0))),
    ];
    if shape.mixed && index.is_multiple_of(2) {
        channels.push(channel("lock", Codes::F64(volts)));
    }
    Acquisition {
        point: index,
        direction,
        repeat,
        axis,
        begun: begun + i64::from(repeat) * 41_000_000,
        channels,
    }
}

fn signal(shape: &Shape, index: u64, volts: &[f64]) -> ChannelData {
    let fine = 1.0 / 32767.0;
    let codes = match index % 5 {
        2 if shape.mixed => Codes::U16(codes(volts, 1.0 / 65535.0)),
        3 if shape.mixed => Codes::I8(codes(volts, 1.0 / 127.0)),
        _ => Codes::I16(codes(volts, fine)),
    };
    let scale = match &codes {
        Codes::U16(_) => 1.0 / 65535.0,
        Codes::I8(_) => 1.0 / 127.0,
        _ => fine,
    };
    ChannelData {
        scale,
        offset: if shape.mixed && index > 20 {
            -0.125
        } else {
            0.0
        },
        clipped: u32::from(index % 6 == 1),
        ..channel("signal", codes)
    }
}

fn channel(name: &str, codes: Codes) -> ChannelData {
    ChannelData {
        name: name.into(),
        scale: match &codes {
            Codes::U8(_) => 1.0 / 255.0,
            _ => 1.0,
        },
        offset: 0.0,
        unit: "V".into(),
        clipped: 0,
        codes,
    }
}

fn codes<T: TryFrom<i64> + Default>(volts: &[f64], scale: f64) -> Vec<T> {
    volts
        .iter()
        .map(|volt| T::try_from((volt / scale).round() as i64).unwrap_or_default())
        .collect()
}
