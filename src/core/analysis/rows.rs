//! Which recorded points make one line: a point of its own where the instrument sweeps, a row of the innermost
//! step where the probe is stepped. Judges no line.

use crate::bench::Physics;
use crate::entry::PointRecord;
use crate::fit::{self, scan};
use crate::itinerary::PointKind;
use crate::trace::{self, Direction};

use super::{Recorded, coil_current, control_frequency, detuning, samples};

/// Samples of one acquisition on their axis.
#[derive(Debug, Clone, PartialEq)]
pub struct Samples {
    /// Which way the sweep went.
    pub direction: fit::Direction,
    /// Two-photon detuning of every sample, Hz.
    pub detuning: Vec<f64>,
    /// Signal, V.
    pub signal: Vec<f64>,
    /// Whether samples stood at an end of the digitizer's range.
    pub clipped: bool,
}

/// Everything recorded of one line.
#[derive(Debug, Clone, PartialEq)]
pub struct Row {
    /// Index in the itinerary of its first point.
    pub index: u64,
    /// Coil current, A; `None` where the sequence does not set it.
    pub current: Option<f64>,
    /// A flag casts doubt on all its samples.
    pub doubtful: bool,
    /// It carries any flag.
    pub flagged: bool,
    /// One per acquisition of a sweep; a single one for a stepped probe, one sample per step.
    pub acquisitions: Vec<Samples>,
}

impl Row {
    /// The row as the scan's fit takes it; `None` without a coil current.
    pub fn borrowed(&self) -> Option<scan::ScanPoint<'_>> {
        Some(scan::ScanPoint {
            current: self.current?,
            acquisitions: self
                .acquisitions
                .iter()
                .map(|samples| scan::Acquisition {
                    direction: samples.direction,
                    detuning: &samples.detuning,
                    signal: &samples.signal,
                    clipped: samples.clipped,
                })
                .collect(),
        })
    }
}

/// The lines of a run's grid points, in the order of recording.
pub fn rows(physics: &Physics, points: &[Recorded]) -> Vec<Row> {
    let mut rows: Vec<Row> = Vec::new();
    // Where the probe is stepped: the outer indices of the row in work.
    let mut outer: Option<Vec<u64>> = None;
    for recorded in points {
        let (record, trace) = recorded;
        let PointKind::Grid { grid } = &record.kind else {
            continue;
        };
        if !is_stepped(trace) {
            outer = None;
            rows.push(swept(physics, recorded));
            continue;
        }
        let place = grid.split_last().map_or(&[][..], |(_, outer)| outer);
        if outer.as_deref() != Some(place) {
            outer = Some(place.to_vec());
            rows.push(empty(physics, record));
        }
        if let Some(row) = rows.last_mut() {
            extend(physics, row, recorded);
        }
    }
    rows
}

/// Whether the probe stood still while a trace was recorded.
pub fn is_stepped(trace: &[trace::Acquisition]) -> bool {
    trace
        .iter()
        .any(|acquisition| acquisition.axis.start == acquisition.axis.stop)
}

fn empty(physics: &Physics, record: &PointRecord) -> Row {
    Row {
        index: record.index,
        current: coil_current(&physics.coil, record),
        doubtful: false,
        flagged: false,
        acquisitions: Vec::new(),
    }
}

fn swept(physics: &Physics, (record, trace): &Recorded) -> Row {
    let one = |acquisition: &trace::Acquisition| {
        let (detuning, signal) = samples(physics, record, acquisition)?;
        Some(Samples {
            direction: match acquisition.direction {
                Direction::Up => fit::Direction::Up,
                Direction::Down => fit::Direction::Down,
            },
            detuning,
            signal,
            clipped: is_clipped(acquisition),
        })
    };
    Row {
        doubtful: record.is_doubtful(),
        flagged: !record.flags.is_empty(),
        acquisitions: trace.iter().filter_map(one).collect(),
        ..empty(physics, record)
    }
}

/// Adds one step of the probe to its row: the mean of its samples. A step in doubt is left out.
fn extend(physics: &Physics, row: &mut Row, (record, trace): &Recorded) {
    row.flagged |= !record.flags.is_empty();
    if record.is_doubtful() {
        return;
    }
    let means: Vec<f64> = trace
        .iter()
        .filter_map(|acquisition| acquisition.channel("signal")?.mean())
        .collect();
    let (Some(first), false) = (trace.first(), means.is_empty()) else {
        return;
    };
    let control = control_frequency(physics, record);
    if row.acquisitions.is_empty() {
        row.acquisitions.push(Samples {
            direction: fit::Direction::Up,
            detuning: Vec::new(),
            signal: Vec::new(),
            clipped: false,
        });
    }
    if let Some(samples) = row.acquisitions.first_mut() {
        samples
            .detuning
            .push(detuning(physics, first.axis.start, control));
        samples
            .signal
            .push(means.iter().sum::<f64>() / means.len() as f64);
        samples.clipped |= trace.iter().any(is_clipped);
    }
}

fn is_clipped(acquisition: &trace::Acquisition) -> bool {
    acquisition
        .channel("signal")
        .is_some_and(|channel| channel.clipped > 0)
}
