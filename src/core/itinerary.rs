//! The itinerary: sequence x bench, checked, every setpoint in order, expanded lazily.
//!
//! A point is computed from its index; a million points take no more memory than a hundred. Nothing
//! here moves an instrument or knows what time it is.

mod model;

use std::sync::Arc;

use crate::bench::Bench;
use crate::diagnostic::Diagnostic;
use crate::sequence::Sequence;

pub use model::{
    DegaussPlan, DwellPlan, Extreme, Forecast, Guard, GuardSource, Move, Otherwise, Point,
    PointKind, Resonance, Seconds, Settle, Shape, StepAxis, StepQuantity, SweepPlan, TimeStep,
};

/// Most points of one itinerary.
pub const MOST_POINTS: u64 = 10_000_000;

/// A checked scan on a given bench.
#[derive(Debug, Clone)]
pub struct Itinerary {
    bench: Arc<Bench>,
    sequence: Arc<Sequence>,
}

impl Itinerary {
    /// Checks the sequence against the bench.
    ///
    /// # Errors
    /// Every fault at once.
    pub fn plan(bench: Arc<Bench>, sequence: Arc<Sequence>) -> Result<Self, Vec<Diagnostic>> {
        Ok(Self { bench, sequence })
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
        0
    }

    /// Whether there is no point at all; never so for a planned itinerary.
    pub fn is_empty(&self) -> bool {
        self.len() == 0
    }

    /// The point at `index`; `None` from [`len`](Self::len) on.
    pub fn point(&self, index: u64) -> Option<Point> {
        let _ = index;
        None
    }

    /// Everything that is set at the point `index`, as moves from nowhere: what a run that goes on
    /// after an interruption has to set. `None` from [`len`](Self::len) on.
    pub fn settings(&self, index: u64) -> Option<Vec<Move>> {
        let _ = index;
        None
    }

    /// The sweep within each point; `None` where the probe is stepped or nothing is recorded.
    pub fn sweep(&self) -> Option<&SweepPlan> {
        None
    }

    /// The recording at each point of a stepped probe; `None` where the instrument sweeps.
    pub fn dwell(&self) -> Option<&DwellPlan> {
        None
    }

    /// The steps of the grid, outermost first.
    pub fn steps(&self) -> &[StepAxis] {
        &[]
    }

    /// The guards in the file's order.
    pub fn guards(&self) -> &[Guard] {
        &[]
    }

    /// What the line looks like.
    pub fn resonance(&self) -> Resonance {
        Resonance {
            shape: Shape::Lorentzian,
            follow: false,
        }
    }

    /// Alternation before the scan; `None` where not asked for.
    pub fn degauss(&self) -> Option<&DegaussPlan> {
        None
    }

    /// Findings that do not forbid the run.
    pub fn warnings(&self) -> &[Diagnostic] {
        &[]
    }

    /// What the run will take.
    pub fn forecast(&self) -> Forecast {
        Forecast {
            points: 0,
            traces: 0,
            seconds: Seconds::default(),
            bytes: 0,
            extremes: Vec::new(),
        }
    }
}

/// Reads and checks both files.
///
/// # Errors
/// Every fault of both at once; warnings among them only where there is an error too.
pub fn check(
    bench: &str,
    sequence: &str,
) -> Result<(Arc<Bench>, Arc<Sequence>, Itinerary), Vec<Diagnostic>> {
    let bench = Arc::new(Bench::parse(bench)?);
    let sequence = Arc::new(Sequence::parse(sequence)?);
    let itinerary = Itinerary::plan(Arc::clone(&bench), Arc::clone(&sequence))?;
    Ok((bench, sequence, itinerary))
}
