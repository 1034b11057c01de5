//! The sequence: a declared scan as written, one file.
//!
//! [`Sequence::parse`] knows the file's shape; what the words mean on a given bench (units, limits,
//! ramps) is settled when an [`Itinerary`](crate::itinerary::Itinerary) is planned. Values therefore
//! stay texts here, each with its place in the file.

pub(crate) mod read;

use crate::diagnostic::Diagnostic;
use crate::document::{Findings, Span, Text};
use crate::itinerary::{Otherwise, Resonance};
use crate::trace::Direction;

/// A declared scan, as written.
#[derive(Debug, Clone, PartialEq)]
pub struct Sequence {
    /// What the user calls it.
    pub title: String,
    pub(crate) set: Vec<Assignment>,
    pub(crate) steps: Vec<Step>,
    /// Whether some step could not be read: findings that follow from that would only repeat.
    pub(crate) broken_steps: bool,
    pub(crate) sweep: Option<Sweep>,
    pub(crate) dwell: Option<Dwell>,
    pub(crate) guards: Vec<GuardText>,
    pub(crate) references: Vec<Visit>,
    pub(crate) backgrounds: Vec<Visit>,
    pub(crate) resonance: Resonance,
    pub(crate) degauss: Option<Degauss>,
    /// `false` where the sequence forbids overlap.
    pub(crate) overlap: bool,
}

/// `"quantity" = "value"`.
#[derive(Debug, Clone, PartialEq)]
pub(crate) struct Assignment {
    pub quantity: Text,
    pub value: Text,
}

/// One `[[step]]`.
#[derive(Debug, Clone, PartialEq)]
pub(crate) struct Step {
    pub span: Span,
    pub kind: StepKind,
}

#[derive(Debug, Clone, PartialEq)]
pub(crate) enum StepKind {
    /// Quantities stepped together, the first one leading.
    Quantities {
        tracks: Vec<Track>,
        order: Order,
        order_span: Span,
    },
    /// One point every so often.
    Time { every: Text, duration: Text },
}

/// One quantity of a step.
#[derive(Debug, Clone, PartialEq)]
pub(crate) struct Track {
    pub quantity: Text,
    pub values: Values,
    pub approach: Option<Approach>,
    pub settle: Option<SettleText>,
}

/// The values of a track, as written.
#[derive(Debug, Clone, PartialEq)]
pub(crate) enum Values {
    List(Vec<Text>),
    Ranges(Vec<RangeText>),
}

/// `from`, `to`, `count`, `spacing`.
#[derive(Debug, Clone, PartialEq)]
pub(crate) struct RangeText {
    pub from: Text,
    pub to: Text,
    pub count: u64,
    pub spacing: Spacing,
    pub span: Span,
}

#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub(crate) enum Spacing {
    Linear,
    Log,
}

/// In which order the values of a step are visited.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub(crate) enum Order {
    /// As the list stands.
    Listed,
    Rising,
    Falling,
    /// Rising and falling in turn, from one pass to the next.
    Serpentine,
    /// Rising, then falling, the highest once.
    ThereAndBack,
    /// By a seeded permutation, a new one for every pass.
    Shuffled {
        seed: u64,
    },
}

/// Come to every value from the same side.
#[derive(Debug, Clone, PartialEq)]
pub(crate) struct Approach {
    pub below: bool,
    pub by: Text,
    pub span: Span,
}

/// When a quantity counts as arrived.
#[derive(Debug, Clone, PartialEq)]
pub(crate) struct SettleText {
    pub within: Option<Text>,
    pub drift: Option<Text>,
    pub readings: u32,
    pub at_least: Option<Text>,
    pub give_up: Option<Text>,
    pub span: Span,
}

/// `record = { signal = "scope.ch1" }`: signal's name, input.
#[derive(Debug, Clone, PartialEq)]
pub(crate) struct Record {
    pub signals: Vec<(Text, Text)>,
    pub span: Span,
}

/// `[sweep]`.
#[derive(Debug, Clone, PartialEq)]
pub(crate) struct Sweep {
    pub span: Span,
    pub quantity: Text,
    pub centre: Text,
    pub width: Text,
    pub duration: Text,
    pub directions: Vec<Direction>,
    pub samples: u32,
    pub averages: u32,
    pub record: Record,
}

/// `[dwell]`.
#[derive(Debug, Clone, PartialEq)]
pub(crate) struct Dwell {
    pub duration: Text,
    pub samples: u32,
    pub averages: u32,
    pub record: Record,
}

/// `[[guard]]`.
#[derive(Debug, Clone, PartialEq)]
pub(crate) struct GuardText {
    pub span: Span,
    /// A quantity's name, or a recorded signal's.
    pub source: Text,
    pub by_signal: bool,
    pub between: Vec<Text>,
    pub otherwise: Otherwise,
    pub give_up: Option<Text>,
    pub attempts: u32,
}

/// `[[reference]]` and `[[background]]`.
#[derive(Debug, Clone, PartialEq)]
pub(crate) struct Visit {
    pub every: u64,
    pub changes: Vec<Assignment>,
    pub settle: Option<SettleText>,
}

/// `[degauss]`.
#[derive(Debug, Clone, PartialEq)]
pub(crate) struct Degauss {
    pub quantity: Text,
    pub from: Text,
    /// Ratio of each stair to the one before.
    pub decay: Text,
    pub count: u64,
    pub dwell: Text,
}

impl Sequence {
    /// Reads a sequence file's text.
    ///
    /// # Errors
    /// Every fault of the file at once, in order of place.
    pub fn parse(text: &str) -> Result<Self, Vec<Diagnostic>> {
        let mut findings = Findings::default();
        match read::sequence(text, &mut findings) {
            Some(sequence) if findings.0.is_empty() => Ok(sequence),
            _ => Err(findings.sorted()),
        }
    }
}

impl Sequence {
    /// Every quantity of every step.
    pub(crate) fn tracks(&self) -> impl Iterator<Item = &Track> {
        self.steps.iter().flat_map(|step| match &step.kind {
            StepKind::Quantities { tracks, .. } => tracks.as_slice(),
            StepKind::Time { .. } => &[],
        })
    }
}
