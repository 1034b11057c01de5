//! One visit of a point: everything known of it between its first move and its entry.

use std::collections::{BTreeMap, BTreeSet};

use super::route::Again;
use super::words::{AcquisitionOrder, Plan, Summary, Ticket};
use crate::entry::{Coordinate, Flag, GuardReading, PointRecord, RepeatReason};
use crate::fit::line::LineFit;
use crate::itinerary::{Point, PointKind};
use crate::quantity::{QuantityName, Setting};

/// Most times that a point is recorded for the sake of its samples; the last is kept, flagged.
pub const ATTEMPTS: u32 = 3;

/// A visit under way.
#[derive(Debug, Clone)]
pub struct Visit {
    /// Number of the visit, in the order of the run.
    pub number: u64,
    /// Where.
    pub point: Point,
    /// Times the point was recorded, this one included, from 1.
    pub attempt: u32,
    /// Acquisition that is next or under way.
    pub taken: usize,
    /// Triggers missed in a row.
    pub missed: u32,
    /// Triggers missed at this point.
    pub missed_in_all: u32,
    /// Times an instrument was lost meanwhile.
    pub lost: u32,
    /// What befell it.
    pub flags: BTreeSet<Flag>,
    /// What the guards saw in this attempt.
    pub guards: Vec<GuardReading>,
    /// Middle of the window; of a stepped probe, its frequency, Hz.
    pub centre: Option<f64>,
    /// Visits below this number may teach this one's window.
    pub lessons_below: u64,
    /// Its first move, ns UTC.
    pub begun: i64,
    /// Its last sample, ns UTC.
    pub ended: i64,
    /// All transfers so far.
    pub summary: Summary,
    /// The transfer under way.
    pub transfer: Option<Ticket>,
    /// Measurements under way.
    pub measuring: Vec<(Ticket, QuantityName)>,
    /// Quantities as they stand at this point.
    pub coordinates: BTreeMap<QuantityName, Coordinate>,
    /// Why its samples are not to be kept.
    pub spoiled: Option<RepeatReason>,
    /// The fit.
    pub line: Option<LineFit>,
}

impl Visit {
    /// A visit that begins now.
    pub fn new(number: u64, point: Point, again: Option<Again>, begun: i64) -> Self {
        let (attempt, missed_in_all, flags) = match again {
            Some(again) => (again.attempt, again.missed, again.flags),
            None => (1, 0, BTreeSet::new()),
        };
        Self {
            number,
            point,
            attempt,
            taken: 0,
            missed: 0,
            missed_in_all,
            lost: 0,
            flags,
            guards: Vec::new(),
            centre: None,
            lessons_below: 0,
            begun,
            ended: begun,
            summary: Summary::default(),
            transfer: None,
            measuring: Vec::new(),
            coordinates: BTreeMap::new(),
            spoiled: None,
            line: None,
        }
    }

    /// The record to be taken now; `None` when all are taken.
    pub fn order(&self, plan: &Plan) -> Option<AcquisitionOrder> {
        let (direction, repeat) = *plan.acquisitions.get(self.taken)?;
        Some(AcquisitionOrder {
            visit: self.number,
            point: self.point.index,
            direction,
            repeat,
            centre: self.centre,
        })
    }

    /// Takes the summary of one more transfer.
    pub fn transferred(&mut self, summary: Summary) {
        self.transfer = None;
        self.summary.clipped = self.summary.clipped.saturating_add(summary.clipped);
        for (name, low, high) in summary.extremes {
            match self.summary.extremes.iter_mut().find(|seen| seen.0 == name) {
                // Not `min` and `max`: they pass over what is no number, which must stay visible here.
                Some(seen) => {
                    if low.is_nan() || low < seen.1 {
                        seen.1 = low;
                    }
                    if high.is_nan() || high > seen.2 {
                        seen.2 = high;
                    }
                }
                None => self.summary.extremes.push((name, low, high)),
            }
        }
    }

    /// Whether nothing is outstanding for it.
    pub fn is_settled(&self) -> bool {
        self.transfer.is_none() && self.measuring.is_empty()
    }

    /// The same place, to be recorded anew for this reason.
    pub fn restart(&mut self, reason: RepeatReason) {
        self.attempt += 1;
        self.flags.insert(Flag::Retried);
        self.flags.insert(reason.flag());
        self.taken = 0;
        self.missed = 0;
        self.guards.clear();
        self.summary = Summary::default();
        self.spoiled = None;
    }

    /// Times it was recorded, missed triggers included.
    pub fn attempts(&self) -> u32 {
        self.attempt.saturating_add(self.missed_in_all)
    }

    /// Where it goes once more, after [`restart`](Self::restart).
    pub fn again(self) -> Again {
        Again {
            index: self.point.index,
            attempt: self.attempt,
            missed: self.missed_in_all,
            flags: self.flags,
        }
    }

    /// Whether what was found here may move the windows that follow.
    pub fn teaches(&self) -> bool {
        self.expects_peak() && !self.flags.iter().any(|flag| flag.casts_doubt())
    }

    /// Whether a peak is expected at this point at all.
    pub fn expects_peak(&self) -> bool {
        !matches!(self.point.kind, PointKind::Background { .. })
    }

    /// The entry, as far as it is known.
    pub fn record(&self) -> Box<PointRecord> {
        Box::new(PointRecord {
            index: self.point.index,
            kind: self.point.kind.clone(),
            coordinates: self.coordinates.values().cloned().collect(),
            sweep_centre: self.centre.unwrap_or(0.0),
            begun: self.begun,
            ended: self.ended,
            guards: self.guards.clone(),
            flags: self.flags.iter().copied().collect(),
            attempts: self.attempts(),
            acquisitions: u32::try_from(self.taken).unwrap_or(u32::MAX),
            line: self.line.clone(),
        })
    }

    /// Of a stepped probe, the frequency it stands at.
    pub fn frequency(&self, plan: &Plan) -> Option<f64> {
        match self.coordinates.get(plan.stepped.as_ref()?)?.setpoint {
            Setting::Number(value) => Some(value),
            Setting::Switch(_) => None,
        }
    }
}
