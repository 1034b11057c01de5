//! The itinerary: sequence x bench, checked, every setpoint in order, expanded lazily.
//!
//! A point is computed from its index; a million points take no more memory than a hundred. Nothing
//! here moves an instrument or knows what time it is.

mod check;
mod forecast;
mod model;
mod order;
mod plan;
mod resolve;

use std::sync::Arc;

use crate::bench::read::Draft;
use crate::bench::{self, Bench};
use crate::diagnostic::{Diagnostic, FileRole, Severity};
use crate::document::{self, Findings};
use crate::quantity::Setting;
use crate::sequence::{self, Sequence};
use plan::{Place, Plan};

pub use model::{
    DegaussPlan, DwellPlan, Extreme, Forecast, Guard, GuardSource, Move, Otherwise, Point,
    PointKind, Resonance, Seconds, Settle, Shape, StepAxis, StepQuantity, SweepPlan, TimeStep,
};

/// Most points of one itinerary, references and backgrounds included.
pub const MOST_POINTS: u64 = 10_000_000;

/// A checked scan on a given bench.
#[derive(Debug, Clone)]
pub struct Itinerary {
    bench: Arc<Bench>,
    sequence: Arc<Sequence>,
    plan: Arc<Plan>,
    warnings: Vec<Diagnostic>,
}

impl Itinerary {
    /// Checks the sequence against the bench.
    ///
    /// # Errors
    /// Every fault at once, warnings among them.
    pub fn plan(bench: Arc<Bench>, sequence: Arc<Sequence>) -> Result<Self, Vec<Diagnostic>> {
        let draft = Draft::whole((*bench).clone());
        let mut findings = Findings::default();
        let plan = resolve::resolve(&draft, &sequence, &mut findings);
        let findings = findings.sorted();
        match plan {
            Some(plan) => Ok(Self {
                bench,
                sequence,
                plan: Arc::new(plan),
                warnings: findings,
            }),
            None => Err(findings),
        }
    }

    /// The bench it was planned for.
    pub fn bench(&self) -> &Arc<Bench> {
        &self.bench
    }

    /// The sequence's title.
    pub fn title(&self) -> &str {
        &self.sequence.title
    }

    /// Number of points, references and backgrounds included.
    pub fn len(&self) -> u64 {
        self.plan.len()
    }

    /// Whether there is no point at all; never so for a planned itinerary.
    pub fn is_empty(&self) -> bool {
        self.len() == 0
    }

    /// The point at `index`; `None` from [`len`](Self::len) on.
    pub fn point(&self, index: u64) -> Option<Point> {
        if index >= self.len() {
            return None;
        }
        let mut state = Vec::new();
        let place = self.plan.fill(index, &mut state);
        let moves = match index.checked_sub(1) {
            None => self.moves(None, &state, None, place),
            Some(previous) => {
                let mut before = Vec::new();
                let from = self.plan.fill(previous, &mut before);
                self.moves(Some(&before), &state, Some(from), place)
            }
        };
        Some(Point {
            index,
            kind: self.kind(place),
            moves,
            overlap: self.plan.overlap,
            due: self.plan.due(place),
            centre: self.centre(&state),
        })
    }

    /// Everything that is set at the point `index`, as moves from nowhere: what a run that goes on
    /// after an interruption has to set. `None` from [`len`](Self::len) on.
    pub fn settings(&self, index: u64) -> Option<Vec<Move>> {
        if index >= self.len() {
            return None;
        }
        let mut state = Vec::new();
        let place = self.plan.fill(index, &mut state);
        Some(self.moves(None, &state, None, place))
    }

    /// The sweep within each point; `None` where the probe is stepped.
    pub fn sweep(&self) -> Option<&SweepPlan> {
        self.plan.sweep.as_ref()
    }

    /// The recording at each point of a stepped probe; `None` where the instrument sweeps.
    pub fn dwell(&self) -> Option<&DwellPlan> {
        self.plan.dwell.as_ref()
    }

    /// The steps of the grid, outermost first; empty for a single point.
    pub fn steps(&self) -> &[StepAxis] {
        &self.plan.steps
    }

    /// The guards in the file's order.
    pub fn guards(&self) -> &[Guard] {
        &self.plan.guards
    }

    /// What the line looks like.
    pub fn resonance(&self) -> Resonance {
        self.plan.resonance
    }

    /// Alternation before the scan; `None` where not asked for.
    pub fn degauss(&self) -> Option<&DegaussPlan> {
        self.plan.degauss.as_ref()
    }

    /// Findings that do not forbid the run.
    pub fn warnings(&self) -> &[Diagnostic] {
        &self.warnings
    }

    /// What the run will take. Walks through every point: a second for ten million.
    pub fn forecast(&self) -> Forecast {
        forecast::forecast(&self.plan, &self.bench)
    }

    fn kind(&self, place: Place) -> PointKind {
        match place {
            Place::Grid { ordinal } => PointKind::Grid {
                grid: self.plan.grid_of(ordinal),
            },
            Place::Visit { number, .. } => match self.plan.visits.get(number) {
                Some(visit) if visit.is_reference => PointKind::Reference { which: visit.which },
                Some(visit) => PointKind::Background { which: visit.which },
                None => PointKind::Background { which: number },
            },
        }
    }

    /// What differs between two states, in the order of [set] and then of the steps.
    fn moves(
        &self,
        before: Option<&[Setting]>,
        state: &[Setting],
        from: Option<Place>,
        to: Place,
    ) -> Vec<Move> {
        let mut moves = Vec::new();
        for (index, (slot, setpoint)) in self.plan.slots.iter().zip(state).enumerate() {
            if before.is_some_and(|before| before.get(index) == Some(setpoint)) {
                continue;
            }
            let approach = slot.approach.zip(setpoint.number());
            moves.push(Move {
                quantity: slot.name.clone(),
                setpoint: *setpoint,
                approach: approach.map(|(by, value)| value + by),
                settle: self.plan.settle(index, from, to),
            });
        }
        moves
    }

    fn centre(&self, state: &[Setting]) -> Option<f64> {
        let sweep = self.plan.sweep.as_ref()?;
        let moved = self.plan.follow.and_then(|(slot, slope)| {
            let current = state.get(slot)?.number()?;
            Some(slope * current)
        });
        Some(sweep.centre + moved.unwrap_or(0.0))
    }
}

/// Reads and checks both files.
///
/// # Errors
/// Every fault of both at once, warnings among them, by file and place.
pub fn check(
    bench: &str,
    sequence: &str,
) -> Result<(Arc<Bench>, Arc<Sequence>, Itinerary), Vec<Diagnostic>> {
    check_bytes(bench.as_bytes(), sequence.as_bytes())
}

/// As [`check`], for files that may be no text at all.
///
/// # Errors
/// Every fault of both at once, warnings among them, by file and place.
pub fn check_bytes(
    bench: &[u8],
    sequence: &[u8],
) -> Result<(Arc<Bench>, Arc<Sequence>, Itinerary), Vec<Diagnostic>> {
    let mut findings = Findings::default();
    let draft = document::decode(bench, FileRole::Bench, &mut findings)
        .and_then(|text| bench::read::bench(text, &mut findings));
    let read = document::decode(sequence, FileRole::Sequence, &mut findings)
        .and_then(|text| sequence::read::sequence(text, &mut findings));
    let plan = match (&draft, &read) {
        (Some(draft), Some(read)) => resolve::resolve(draft, read, &mut findings),
        _ => None,
    };
    let findings = findings.sorted();
    let clean = findings.iter().all(|d| d.severity == Severity::Warning);
    match (draft, read, plan) {
        (Some(draft), Some(read), Some(plan)) if clean => {
            let (bench, sequence) = (Arc::new(draft.bench), Arc::new(read));
            let itinerary = Itinerary {
                bench: Arc::clone(&bench),
                sequence: Arc::clone(&sequence),
                plan: Arc::new(plan),
                warnings: findings,
            };
            Ok((bench, sequence, itinerary))
        }
        _ => Err(findings),
    }
}
