//! Which point is visited next: the itinerary in order, and points recorded in vain once more.
//!
//! A point whose repetition was decided before the coil left it (no overlap) is visited again at once;
//! one whose samples were judged while the coil was on its way already, after its row. A row is a pass
//! through the innermost step. The order depends on the data alone, never on how long anything took:
//! where it could, the route first has the tail emptied.

use std::collections::{BTreeSet, VecDeque};

use super::words::Course;
use crate::entry::Flag;
use crate::itinerary::{Point, PointKind};

/// A point to be visited again.
#[derive(Debug, Clone, PartialEq, Eq)]
pub struct Again {
    /// Its index.
    pub index: u64,
    /// Which attempt it will be, from 2.
    pub attempt: u32,
    /// Triggers missed there so far.
    pub missed: u32,
    /// What befell it so far.
    pub flags: BTreeSet<Flag>,
}

/// Where to go.
#[derive(Debug, Clone, PartialEq)]
pub enum Pick {
    /// To this point.
    Visit {
        /// The point.
        point: Point,
        /// Where it was visited before.
        again: Option<Again>,
        /// Whether all visits before were complete when this was decided.
        drained: bool,
    },
    /// Nowhere before the tail is empty.
    Drain,
    /// All points are done.
    End,
}

/// The way through the itinerary.
#[derive(Debug, Default)]
pub struct Route {
    next: u64,
    upcoming: Option<Point>,
    row: Option<Vec<u64>>,
    at_once: VecDeque<Again>,
    after_row: VecDeque<Again>,
    /// Whether the way on from the point left last may begin before that point is complete.
    overlap: bool,
}

impl Route {
    /// Where to go now.
    pub fn pick(&mut self, course: &impl Course, tail_is_empty: bool) -> Pick {
        let drain = !self.overlap;
        if drain && !tail_is_empty {
            return Pick::Drain;
        }
        if let Some(again) = self.at_once.pop_front() {
            return revisit(course, again);
        }
        if self.upcoming.is_none() {
            self.upcoming = course.point(self.next);
        }
        let boundary = self.upcoming.as_ref().is_none_or(|point| {
            let row = row_of(point);
            row.is_some() && self.row.is_some() && row != self.row
        });
        if boundary {
            if !tail_is_empty {
                return Pick::Drain;
            }
            if let Some(again) = self.after_row.pop_front() {
                return revisit(course, again);
            }
        }
        let Some(point) = self.upcoming.take() else {
            return Pick::End;
        };
        self.next += 1;
        if let Some(row) = row_of(&point) {
            self.row = Some(row);
        }
        Pick::Visit {
            point,
            again: None,
            drained: drain || boundary,
        }
    }

    /// The coil leaves this point.
    pub fn leave(&mut self, point: &Point) {
        self.overlap = point.overlap;
    }

    /// This point will be visited again.
    pub fn again(&mut self, again: Again, overlap: bool) {
        if overlap {
            self.after_row.push_back(again);
        } else {
            self.at_once.push_back(again);
        }
    }
}

fn revisit(course: &impl Course, again: Again) -> Pick {
    match course.point(again.index) {
        Some(point) => Pick::Visit {
            point,
            again: Some(again),
            drained: true,
        },
        // A course that loses points has no more of them.
        None => Pick::End,
    }
}

/// What all points of a row have in common; `None` for references and backgrounds, which belong to any.
fn row_of(point: &Point) -> Option<Vec<u64>> {
    match &point.kind {
        PointKind::Grid { grid } => Some(
            grid.split_last()
                .map_or(&[][..], |(_, outer)| outer)
                .to_vec(),
        ),
        _ => None,
    }
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::itinerary::Move;

    struct Rows {
        width: u64,
        height: u64,
        overlap: bool,
    }

    impl Course for Rows {
        fn len(&self) -> u64 {
            self.width * self.height
        }
        fn point(&self, index: u64) -> Option<Point> {
            (index < self.len()).then(|| Point {
                index,
                kind: PointKind::Grid {
                    grid: vec![index / self.width, index % self.width],
                },
                moves: Vec::new(),
                overlap: self.overlap,
                due: None,
                centre: None,
            })
        }
        fn settings(&self, _: u64) -> Option<Vec<Move>> {
            Some(Vec::new())
        }
    }

    /// Walks the course, the points of `bad` failing once; returns the order of visits.
    fn walk(rows: &Rows, bad: &[u64]) -> Vec<u64> {
        let mut route = Route::default();
        let mut order = Vec::new();
        let mut tail: Option<(Point, bool)> = None;
        loop {
            match route.pick(rows, tail.is_none()) {
                Pick::End => return order,
                Pick::Drain => {}
                Pick::Visit { point, again, .. } => {
                    order.push(point.index);
                    judge(&mut route, tail.take(), bad);
                    route.leave(&point);
                    tail = Some((point, again.is_some()));
                    continue;
                }
            }
            judge(&mut route, tail.take(), bad);
        }
    }

    fn judge(route: &mut Route, tail: Option<(Point, bool)>, bad: &[u64]) {
        if let Some((point, false)) = tail
            && bad.contains(&point.index)
        {
            let again = Again {
                index: point.index,
                attempt: 2,
                missed: 0,
                flags: BTreeSet::new(),
            };
            route.again(again, point.overlap);
        }
    }

    #[test]
    fn with_overlap_bad_points_come_after_their_row() {
        let rows = Rows {
            width: 3,
            height: 2,
            overlap: true,
        };
        assert_eq!(walk(&rows, &[0, 2, 5]), [0, 1, 2, 0, 2, 3, 4, 5, 5]);
    }

    #[test]
    fn without_overlap_bad_points_come_at_once() {
        let rows = Rows {
            width: 3,
            height: 2,
            overlap: false,
        };
        assert_eq!(walk(&rows, &[0, 2]), [0, 0, 1, 2, 2, 3, 4, 5]);
    }
}
