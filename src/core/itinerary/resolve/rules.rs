//! Settle rules, and whether the window follows.

use super::super::check;
use super::super::model::{Settle, SweepPlan};
use super::Scene;
use crate::bench::Property;
use crate::document::fault;
use crate::quantity::Dimension;
use crate::sequence::{Assignment, Sequence, SettleText};

/// Time allowed to arrive where the file does not say, s.
const GIVE_UP: f64 = 10.0;
/// The same where a drift is waited for, s.
const GIVE_UP_DRIFT: f64 = 7200.0;

impl Scene<'_> {
    /// Gives every slot its settle rule, once it is known how far it goes.
    pub(super) fn settles(&mut self) {
        for index in 0..self.slots.len() {
            let Some(slot) = self.slots.get(index) else {
                continue;
            };
            let Some(property) = self.bench().property(&slot.name) else {
                continue;
            };
            let longest = check::longest_ramp(self, index, property);
            let text = self.reach.get(index).and_then(|reach| reach.settle.clone());
            let settle = match text {
                Some(text) => self.settle(&text, property, longest),
                None => Some(Settle {
                    give_up: GIVE_UP + longest,
                    ..Settle::AT_ONCE
                }),
            };
            if let (Some(settle), Some(slot)) = (settle, self.slots.get_mut(index)) {
                slot.settle = settle;
            }
        }
    }

    /// A visit's rule: of the first quantity with a number that it changes, else time alone.
    pub(super) fn visit_settle(
        &mut self,
        text: &SettleText,
        changes: &[Assignment],
    ) -> Option<Settle> {
        let mut properties = changes.iter().filter_map(|change| {
            let name = crate::quantity::QuantityName::new(&change.quantity.text).ok()?;
            self.bench().property(&name)
        });
        let property = properties.next()?;
        let longest = self
            .slot_of(&property.name)
            .map_or(0.0, |index| check::longest_ramp(self, index, property));
        self.settle(text, property, longest)
    }

    /// `longest`: s that the longest ramp takes.
    fn settle(&mut self, text: &SettleText, property: &Property, longest: f64) -> Option<Settle> {
        let before = self.findings.0.len();
        let is_switch = property.dimension == Dimension::Switch;
        for given in [&text.within, &text.drift]
            .into_iter()
            .flatten()
            .filter(|_| is_switch)
        {
            let message = format!("`{}` is a switch: it settles by time alone", property.name);
            self.findings.push(fault("D0514", given, message));
        }
        if is_switch && self.findings.0.len() > before {
            return None;
        }
        let difference = property.dimension.difference();
        let within = text
            .within
            .as_ref()
            .map(|t| self.findings.positive(t, difference));
        let rate = property.dimension.rate().unwrap_or(Dimension::RatioRate);
        let drift = text.drift.as_ref().map(|t| self.findings.positive(t, rate));
        let at_least = text
            .at_least
            .as_ref()
            .map(|t| self.findings.not_negative(t, Dimension::Time));
        let give_up = text
            .give_up
            .as_ref()
            .map(|t| self.findings.positive(t, Dimension::Time));
        if self.findings.0.len() > before {
            return None;
        }
        let at_least = at_least.flatten().unwrap_or(0.0);
        let patience = if drift.is_some() {
            GIVE_UP_DRIFT
        } else {
            GIVE_UP
        };
        let settle = Settle {
            within: within.flatten(),
            readings: text.readings,
            drift: drift.flatten(),
            at_least,
            give_up: give_up.flatten().unwrap_or(patience + longest + at_least),
        };
        check::settle(self, property, &settle, text, longest);
        Some(settle)
    }

    /// The coil's slot and how far the line moves per ampere, where the window follows.
    pub(super) fn follow(
        &self,
        sequence: &Sequence,
        sweep: Option<&SweepPlan>,
    ) -> Option<(usize, f64)> {
        let physics = self.bench().physics.as_ref()?;
        if !sequence.resonance.follow || sweep.is_none() {
            return None;
        }
        Some((self.slot_of(&physics.coil)?, physics.rf_per_current()))
    }
}
