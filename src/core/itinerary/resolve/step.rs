//! Steps: their values on this bench, and how many points they make.

use super::super::model::{StepAxis, StepQuantity, TimeStep};
use super::super::plan::{Axis, Segment, Values};
use super::super::{MOST_POINTS, check};
use super::Scene;
use crate::bench::Property;
use crate::diagnostic::{Diagnostic, FileRole};
use crate::document::{Span, Text, fault};
use crate::quantity::{Dimension, Setting};
use crate::sequence::{self, Order, RangeText, Sequence, Spacing, Step, StepKind, Track};

impl Scene<'_> {
    /// The axes, outermost first, and how the archive labels them.
    pub(super) fn axes(&mut self, steps: &[Step]) -> (Vec<Axis>, Vec<StepAxis>) {
        let mut axes = Vec::new();
        let mut labels = Vec::new();
        for (number, step) in steps.iter().enumerate() {
            let read = match &step.kind {
                StepKind::Time { every, duration } => {
                    self.time(number, every, duration, &step.span)
                }
                StepKind::Quantities { tracks, order, .. } => self.quantities(tracks, *order),
            };
            if let Some((axis, label)) = read {
                axes.push(axis);
                labels.push(label);
            }
        }
        (axes, labels)
    }

    fn time(
        &mut self,
        number: usize,
        every: &Text,
        duration: &Text,
        span: &Span,
    ) -> Option<(Axis, StepAxis)> {
        let spacing = self.findings.positive(every, Dimension::Time);
        let whole = self.findings.positive(duration, Dimension::Time);
        if number > 0 {
            let message = "a step in time must be the outermost step";
            self.findings.push(
                Diagnostic::error("D0413", FileRole::Sequence, message)
                    .at(span.clone())
                    .help("move it before the other [[step]]s: they then run once per tick"),
            );
        }
        let (spacing, whole) = (spacing?, whole?);
        // A hair more, so that 1 h of 10 s steps does not lose its last tick to rounding.
        let ticks = (whole / spacing * (1.0 + 1e-12)).floor() + 1.0;
        if ticks > MOST_POINTS as f64 {
            let message = format!("{ticks:.0} ticks; at most {MOST_POINTS} points are possible");
            self.findings.push(fault("D0402", every, message));
            return None;
        }
        let axis = Axis {
            order: Order::Listed,
            values: ticks as u64,
            rank: None,
            tracks: Vec::new(),
            every: Some(spacing),
        };
        let label = StepAxis {
            quantities: Vec::new(),
            count: axis.places(),
            time: Some(TimeStep { every: spacing }),
        };
        Some((axis, label))
    }

    fn quantities(&mut self, tracks: &[Track], order: Order) -> Option<(Axis, StepAxis)> {
        let mut read = Vec::new();
        let mut labels = Vec::new();
        let mut count = None;
        for track in tracks {
            let (slot, values, label) = self.track(track)?;
            let len = values.len();
            if *count.get_or_insert(len) != len {
                let message = format!(
                    "`{}` has {len} values, but the quantity it is stepped together with has {}",
                    label.name,
                    count.unwrap_or(0)
                );
                self.findings.push(fault("D0407", &track.quantity, message));
                return None;
            }
            read.push((slot, values));
            labels.push(label);
        }
        let rank = read.first().and_then(|(_, values)| rank(values));
        let axis = Axis {
            order,
            values: count?,
            rank: rank.filter(|_| order != Order::Listed),
            tracks: read,
            every: None,
        };
        let label = StepAxis {
            quantities: labels,
            count: axis.places(),
            time: None,
        };
        Some((axis, label))
    }

    fn track(&mut self, track: &Track) -> Option<(usize, Values, StepQuantity)> {
        let property = self.settable(&track.quantity)?;
        let approach = self.approach(track, property);
        let values = self.values(track, property);
        let slot = self.slot(&track.quantity, property, None)?;
        let values = values?;
        if let Some((low, high)) = values.extremes() {
            self.widen(slot, low, true);
            self.widen(slot, high, true);
        }
        if let Some(reach) = self.reach.get_mut(slot) {
            reach.settle.clone_from(&track.settle);
            reach.stepped = true;
            reach.turned_on = property.dimension == Dimension::Switch;
        }
        if let Some(by) = approach
            && let Some(slot) = self.slots.get_mut(slot)
        {
            slot.approach = Some(by);
        }
        let label = StepQuantity {
            name: property.name.clone(),
            dimension: property.dimension,
            first: values.at(0)?,
            last: values.at(values.len().saturating_sub(1))?,
        };
        Some((slot, values, label))
    }

    /// Signed distance from the setpoint to where it is approached from.
    fn approach(&mut self, track: &Track, property: &Property) -> Option<f64> {
        let approach = track.approach.as_ref()?;
        if property.dimension == Dimension::Switch {
            let message = format!(
                "`{}` is a switch; it is approached from no side",
                property.name
            );
            let fault = Diagnostic::error("D0405", FileRole::Sequence, message);
            self.findings.push(fault.at(approach.span.clone()));
            return None;
        }
        let by = self
            .findings
            .positive(&approach.by, property.dimension.difference())?;
        Some(if approach.below { -by } else { by })
    }

    fn values(&mut self, track: &Track, property: &Property) -> Option<Values> {
        match &track.values {
            sequence::Values::List(list) => {
                let mut settings = Vec::with_capacity(list.len());
                let mut complete = true;
                for text in list {
                    match self.findings.setting(text, property.dimension) {
                        Some(setting) => {
                            if let Setting::Number(value) = setting {
                                check::limit(self, property, value, text, "the value");
                            }
                            settings.push(setting);
                        }
                        None => complete = false,
                    }
                }
                complete.then_some(Values::List(settings))
            }
            sequence::Values::Ranges(ranges) => {
                if property.dimension == Dimension::Switch {
                    let message = format!(
                        "`{}` is a switch; give values = [\"off\", \"on\"]",
                        property.name
                    );
                    self.findings.push(fault("D0404", &track.quantity, message));
                    return None;
                }
                let segments: Vec<Option<Segment>> = ranges
                    .iter()
                    .map(|range| self.segment(range, property))
                    .collect();
                let segments = segments.into_iter().collect::<Option<Vec<_>>>()?;
                self.rising(ranges, &segments);
                Some(Values::Segments(segments))
            }
        }
    }

    fn segment(&mut self, range: &RangeText, property: &Property) -> Option<Segment> {
        let from = self.findings.quantity(&range.from, property.dimension);
        let to = self.findings.quantity(&range.to, property.dimension);
        let (from, to) = (from?, to?);
        check::limit(self, property, from, &range.from, "`from`");
        check::limit(self, property, to, &range.to, "`to`");
        let span = range.from.span.start.min(range.to.span.start)
            ..range.from.span.end.max(range.to.span.end);
        if from > to {
            let message = format!(
                "the step goes from {} to {}: reversed",
                range.from.text, range.to.text
            );
            self.findings.push(
                Diagnostic::error("D0403", FileRole::Sequence, message)
                    .at(span.clone())
                    .help("write the lower end in `from`, and order = \"falling\""),
            );
            return None;
        }
        let lonely = range.count == 1 && from != to;
        let same = range.count > 1 && from == to;
        if lonely || same {
            let message = format!(
                "{} values cannot go from {} to {}",
                range.count, range.from.text, range.to.text
            );
            let fault = Diagnostic::error("D0401", FileRole::Sequence, message);
            self.findings.push(fault.at(range.span.clone()));
            return None;
        }
        let log = range.spacing == Spacing::Log;
        if log
            && (from <= 0.0
                || matches!(
                    property.dimension,
                    Dimension::Level | Dimension::Temperature
                ))
        {
            let message = format!(
                "logarithmic spacing from {} to {} has no meaning",
                range.from.text, range.to.text
            );
            let fault = Diagnostic::error("D0410", FileRole::Sequence, message);
            self.findings.push(
                fault
                    .at(span)
                    .help("both ends must be above zero; a level in dBm is logarithmic already"),
            );
            return None;
        }
        Some(Segment {
            from,
            to,
            count: range.count,
            log,
        })
    }

    /// Several ranges must rise from one to the next.
    fn rising(&mut self, ranges: &[RangeText], segments: &[Segment]) {
        for ((text, before), after) in ranges
            .iter()
            .skip(1)
            .zip(segments)
            .zip(segments.iter().skip(1))
        {
            if after.from <= before.to {
                let message = format!(
                    "the range from {} does not begin above the one before",
                    text.from.text
                );
                self.findings.push(
                    fault("D0403", &text.from, message)
                        .help("list the ranges rising, without overlap"),
                );
            }
        }
    }

    /// Number of grid points, or a finding where there are too many.
    pub(super) fn grid_size(&mut self, axes: &[Axis], sequence: &Sequence) -> Option<u64> {
        let product = axes
            .iter()
            .try_fold(1u64, |product, axis| product.checked_mul(axis.places()));
        match product {
            Some(points) if points <= MOST_POINTS => Some(points),
            _ => {
                let points: f64 = axes.iter().map(|axis| axis.places() as f64).product();
                let span = sequence
                    .steps
                    .first()
                    .map_or(0..0, |step| step.span.clone());
                let message = format!("{points:.3e} points; at most {MOST_POINTS} are possible");
                self.findings.push(
                    Diagnostic::error("D0402", FileRole::Sequence, message)
                        .at(span)
                        .help("the steps multiply: lower a `count`, or split the scan"),
                );
                None
            }
        }
    }
}

/// Sorts a list of numbers that is not rising already.
fn rank(values: &Values) -> Option<Vec<u32>> {
    let Values::List(list) = values else {
        return None;
    };
    let number = |setting: &Setting| match setting {
        Setting::Number(value) => *value,
        Setting::Switch(on) => f64::from(*on),
    };
    let mut keyed: Vec<(f64, u32)> = list.iter().map(number).zip(0u32..).collect();
    keyed.sort_by(|a, b| a.0.total_cmp(&b.0));
    Some(keyed.into_iter().map(|(_, i)| i).collect())
}
