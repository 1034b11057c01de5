//! The plan behind an itinerary: what is set, along which axes, with which visits between.
//!
//! All of it is as large as the two files, never as large as the number of points.

use super::model::{DegaussPlan, DwellPlan, Guard, Resonance, Settle, StepAxis, SweepPlan};
use super::order;
use crate::quantity::{Dimension, QuantityName, Setting};
use crate::sequence::Order;

/// Everything that was resolved.
#[derive(Debug, Clone)]
pub(super) struct Plan {
    pub slots: Vec<Slot>,
    pub axes: Vec<Axis>,
    /// Grid points: the product of the axes' places.
    pub grid: u64,
    /// References first, then backgrounds.
    pub visits: Vec<Visit>,
    pub sweep: Option<SweepPlan>,
    pub dwell: Option<DwellPlan>,
    pub guards: Vec<Guard>,
    pub resonance: Resonance,
    pub degauss: Option<DegaussPlan>,
    pub overlap: bool,
    pub steps: Vec<StepAxis>,
    /// Slot of the coil's current and movement of the line per ampere, where the window follows.
    pub follow: Option<(usize, f64)>,
}

/// A quantity that the sequence sets.
#[derive(Debug, Clone)]
pub(super) struct Slot {
    pub name: QuantityName,
    pub dimension: Dimension,
    /// Its value where no axis steps it.
    pub fixed: Setting,
    pub settle: Settle,
    /// Added to every setpoint to find the value it is approached from.
    pub approach: Option<f64>,
}

/// One step.
#[derive(Debug, Clone)]
pub(super) struct Axis {
    pub order: Order,
    /// Number of declared values.
    pub values: u64,
    /// Sorts a list.
    pub rank: Option<Vec<u32>>,
    pub tracks: Vec<(usize, Values)>,
    /// Seconds from start to start, for a step in time.
    pub every: Option<f64>,
}

/// The declared values of one quantity.
#[derive(Debug, Clone)]
pub(super) enum Values {
    List(Vec<Setting>),
    Segments(Vec<Segment>),
}

/// Evenly spaced values, on a linear or logarithmic scale.
#[derive(Debug, Clone, Copy)]
pub(super) struct Segment {
    pub from: f64,
    pub to: f64,
    pub count: u64,
    pub log: bool,
}

/// A reference or background.
#[derive(Debug, Clone)]
pub(super) struct Visit {
    pub every: u64,
    pub changes: Vec<(usize, Setting)>,
    pub settle: Option<Settle>,
    pub is_reference: bool,
    /// Its number among its kind.
    pub which: usize,
}

/// What stands at an index.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub(super) enum Place {
    Grid {
        ordinal: u64,
    },
    /// A visit on the way to the grid point `ordinal`, or after the last one.
    Visit {
        number: usize,
        ordinal: u64,
    },
}

impl Segment {
    fn at(&self, i: u64) -> f64 {
        if i == 0 || self.count < 2 {
            return self.from;
        }
        if i + 1 >= self.count {
            return self.to;
        }
        let part = i as f64 / (self.count - 1) as f64;
        if self.log {
            self.from * (self.to / self.from).powf(part)
        } else {
            self.from * (1.0 - part) + self.to * part
        }
    }
}

impl Values {
    pub fn len(&self) -> u64 {
        match self {
            Self::List(list) => list.len() as u64,
            Self::Segments(all) => all.iter().map(|s| s.count).fold(0, u64::saturating_add),
        }
    }

    /// The value of that index; the last one beyond the end.
    pub fn at(&self, mut i: u64) -> Option<Setting> {
        match self {
            Self::List(list) => {
                let i = usize::try_from(i).ok()?;
                list.get(i).or(list.last()).copied()
            }
            Self::Segments(all) => {
                for segment in all {
                    if i < segment.count {
                        return Some(Setting::Number(segment.at(i)));
                    }
                    i -= segment.count;
                }
                all.last().map(|segment| Setting::Number(segment.to))
            }
        }
    }

    /// Lowest and highest number; `None` for switches.
    pub fn extremes(&self) -> Option<(f64, f64)> {
        let numbers: Vec<f64> = match self {
            Self::List(list) => list.iter().filter_map(|s| s.number()).collect(),
            Self::Segments(all) => all.iter().flat_map(|s| [s.from, s.to]).collect(),
        };
        let low = numbers.iter().copied().reduce(f64::min)?;
        let high = numbers.iter().copied().reduce(f64::max)?;
        Some((low, high))
    }
}

impl Axis {
    pub fn places(&self) -> u64 {
        order::places(self.order, self.values)
    }

    fn place(&self, visit: u64, pass: u64) -> u64 {
        order::place(self.order, self.values, self.rank.as_deref(), visit, pass)
    }

    fn value_at(&self, place: u64) -> u64 {
        order::value_at(self.order, self.values, self.rank.as_deref(), place)
    }
}

impl Plan {
    /// Points, references and backgrounds.
    pub fn len(&self) -> u64 {
        let visits = self.visits.iter().map(|visit| {
            let trailing = u64::from(visit.is_reference);
            self.grid.div_ceil(visit.every) + trailing
        });
        visits.fold(self.grid, u64::saturating_add)
    }

    /// The index of a grid point: all visits due up to it come before.
    fn position(&self, ordinal: u64) -> u64 {
        let before = self.visits.iter().map(|visit| ordinal / visit.every + 1);
        ordinal + before.sum::<u64>()
    }

    /// What stands at an index below [`len`](Self::len).
    pub fn place(&self, index: u64) -> Place {
        let last = self.grid.saturating_sub(1);
        let (mut low, mut high) = (0, last);
        while low < high {
            let middle = low + (high - low) / 2;
            if self.position(middle) < index {
                low = middle + 1;
            } else {
                high = middle;
            }
        }
        let ordinal = low;
        let position = self.position(ordinal);
        if position == index {
            return Place::Grid { ordinal };
        }
        let here: Vec<usize> = if index < position {
            let due = |visit: &Visit| ordinal.is_multiple_of(visit.every);
            self.numbers(due)
        } else {
            self.numbers(|visit| visit.is_reference)
        };
        let nth = if index < position {
            here.len() as u64 - (position - index).min(here.len() as u64)
        } else {
            index - position - 1
        };
        let number = usize::try_from(nth).ok().and_then(|nth| here.get(nth));
        Place::Visit {
            number: number.copied().unwrap_or(0),
            ordinal,
        }
    }

    fn numbers(&self, wanted: impl Fn(&Visit) -> bool) -> Vec<usize> {
        let all = self.visits.iter().enumerate();
        all.filter(|(_, visit)| wanted(visit))
            .map(|(i, _)| i)
            .collect()
    }

    /// The place along every axis of a grid point, outermost first.
    pub fn grid_of(&self, ordinal: u64) -> Vec<u64> {
        let mut grid = Vec::with_capacity(self.axes.len());
        self.walk(ordinal, |_, place| grid.push(place));
        grid
    }

    /// Calls `each` with every axis, outermost first, and the place along it.
    fn walk(&self, ordinal: u64, mut each: impl FnMut(&Axis, u64)) {
        let mut below = self.grid;
        for axis in &self.axes {
            let places = axis.places().max(1);
            below = (below / places).max(1);
            // `pass` counts how often this axis was run through before.
            let visited = ordinal / below;
            each(axis, axis.place(visited % places, visited / places));
        }
    }

    /// Writes what every slot has at the index into `state`.
    pub fn fill(&self, index: u64, state: &mut Vec<Setting>) -> Place {
        let place = self.place(index);
        let (Place::Grid { ordinal } | Place::Visit { ordinal, .. }) = place;
        state.clear();
        state.extend(self.slots.iter().map(|slot| slot.fixed));
        self.walk(ordinal, |axis, at| {
            let value = axis.value_at(at);
            for (slot, values) in &axis.tracks {
                if let (Some(here), Some(setting)) = (state.get_mut(*slot), values.at(value)) {
                    *here = setting;
                }
            }
        });
        if let Place::Visit { number, .. } = place
            && let Some(visit) = self.visits.get(number)
        {
            for (slot, setting) in &visit.changes {
                if let Some(here) = state.get_mut(*slot) {
                    *here = *setting;
                }
            }
        }
        place
    }

    /// Earliest start of a point, s: for the first point after each tick of an outermost step in time.
    pub fn due(&self, place: Place) -> Option<f64> {
        let every = self.axes.first()?.every?;
        let Place::Grid { ordinal } = place else {
            return None;
        };
        let inner = (self.grid / self.axes.first()?.places().max(1)).max(1);
        ordinal
            .is_multiple_of(inner)
            .then(|| (ordinal / inner) as f64 * every)
    }

    /// The settle rule of a move from `before` to `now`: a visit's own, on the way there and back.
    pub fn settle(&self, slot: usize, before: Option<Place>, now: Place) -> Settle {
        let of = |place: Place| match place {
            Place::Visit { number, .. } => {
                let visit = self.visits.get(number)?;
                let touched = visit.changes.iter().any(|(changed, _)| *changed == slot);
                visit.settle.filter(|_| touched)
            }
            Place::Grid { .. } => None,
        };
        let own = self.slots.get(slot).map_or(Settle::AT_ONCE, |s| s.settle);
        of(now).or_else(|| of(before?)).unwrap_or(own)
    }
}
