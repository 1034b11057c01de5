//! Sequence x bench -> plan: every word of the sequence gets its meaning on this bench, or a finding.

mod recording;
mod rules;
mod step;

use std::collections::BTreeMap;

use super::model::{DegaussPlan, Guard, GuardSource, Move, Otherwise, Settle};
use super::plan::{Plan, Slot, Visit};
use super::{MOST_POINTS, check};
use crate::bench::Bench;
use crate::bench::Property;
use crate::bench::read::{Draft, between_pair};
use crate::channel::Access;
use crate::diagnostic::{Diagnostic, FileRole};
use crate::document::{Findings, Span, Text, fault, suggestion};
use crate::quantity::{Dimension, QuantityName, Setting};
use crate::sequence::{self, Assignment, Sequence, SettleText};

/// What is known while resolving.
pub(super) struct Scene<'a> {
    pub draft: &'a Draft,
    pub findings: &'a mut Findings,
    pub slots: Vec<Slot>,
    pub reach: Vec<Reach>,
    names: BTreeMap<QuantityName, usize>,
}

/// How far a slot goes, and where the file says so.
#[derive(Debug, Clone)]
pub(super) struct Reach {
    /// Setpoints proper: lowest and highest; `None` for switches.
    pub settings: Option<(f64, f64)>,
    /// With approaches and degauss.
    pub all: Option<(f64, f64)>,
    /// Where the quantity is named.
    pub span: Span,
    /// Where its settle rule stands.
    pub settle: Option<SettleText>,
    /// Whether it is ever switched on (switches).
    pub turned_on: bool,
    /// Whether a step changes it.
    pub stepped: bool,
}

/// Resolves the whole sequence; `None` where some finding forbids it.
pub(super) fn resolve(draft: &Draft, sequence: &Sequence, findings: &mut Findings) -> Option<Plan> {
    let before = errors(findings);
    let mut scene = Scene {
        draft,
        findings,
        slots: Vec::new(),
        reach: Vec::new(),
        names: BTreeMap::new(),
    };
    scene.set(&sequence.set);
    let set = scene.slots.len();
    let (axes, steps) = scene.axes(&sequence.steps);
    let visits = scene.visits(sequence);
    let degauss = scene.degauss(sequence, set);
    let grid = scene.grid_size(&axes, sequence);
    let sweep = sequence
        .sweep
        .as_ref()
        .and_then(|s| scene.sweep(s, sequence.resonance));
    let dwell = sequence.dwell.as_ref().and_then(|d| scene.dwell(d));
    let guards = scene.guards(sequence);
    scene.settles();
    let follow = scene.follow(sequence, sweep.as_ref());
    check::whole(&mut scene, sequence, sweep.as_ref(), dwell.as_ref(), &axes);
    let slots = scene.slots;
    if errors(findings) > before {
        return None;
    }
    let plan = Plan {
        overlap: sequence.overlap && slots.iter().all(|slot| slot.approach.is_none()),
        slots,
        axes,
        grid: grid?,
        visits,
        sweep,
        dwell,
        guards,
        resonance: sequence.resonance,
        degauss,
        steps,
        follow,
    };
    if plan.len() > MOST_POINTS {
        findings.push(too_many(plan.len()));
        return None;
    }
    Some(plan)
}

fn errors(findings: &Findings) -> usize {
    let error = |d: &&Diagnostic| d.severity == crate::diagnostic::Severity::Error;
    findings.0.iter().filter(error).count()
}

fn too_many(points: u64) -> Diagnostic {
    let message =
        format!("{points} points, references and backgrounds; at most {MOST_POINTS} are possible");
    Diagnostic::error("D0402", FileRole::Sequence, message).at(0..0)
}

impl<'a> Scene<'a> {
    pub fn bench(&self) -> &'a Bench {
        &self.draft.bench
    }

    /// A settable quantity of the bench, or a finding.
    fn settable(&mut self, text: &Text) -> Option<&'a Property> {
        let name = self.draft.quantity(text, self.findings)?;
        let property = self.bench().property(&name)?;
        if property.access == Access::Settable {
            return Some(property);
        }
        let message = format!("`{name}` can only be read, not set");
        self.findings.push(fault("D0208", text, message));
        None
    }

    /// Adds a quantity that the sequence sets; a second time is a finding.
    fn slot(
        &mut self,
        text: &Text,
        property: &Property,
        settings: Option<(f64, f64)>,
    ) -> Option<usize> {
        if self.names.contains_key(&property.name) {
            let message = format!("`{}` is set twice", property.name);
            self.findings.push(
                fault("D0406", text, message).help("set it in one step, or in [set], not in both"),
            );
            return None;
        }
        let index = self.slots.len();
        self.names.insert(property.name.clone(), index);
        self.slots.push(Slot {
            name: property.name.clone(),
            dimension: property.dimension,
            fixed: property.rest.unwrap_or(Setting::Number(0.0)),
            settle: Settle::AT_ONCE,
            approach: None,
        });
        self.reach.push(Reach {
            settings,
            all: settings,
            span: text.span.clone(),
            settle: None,
            turned_on: false,
            stepped: false,
        });
        Some(index)
    }

    pub fn slot_of(&self, name: &QuantityName) -> Option<usize> {
        self.names.get(name).copied()
    }

    fn set(&mut self, all: &[Assignment]) {
        for assignment in all {
            let Some(property) = self.settable(&assignment.quantity) else {
                continue;
            };
            let setting = self.findings.setting(&assignment.value, property.dimension);
            let Some(setting) = setting else { continue };
            let number = setting.number();
            if let Some(value) = number {
                check::limit(
                    self,
                    property,
                    value,
                    &assignment.value,
                    "the value in [set]",
                );
            }
            let Some(index) = self.slot(&assignment.quantity, property, number.map(|v| (v, v)))
            else {
                continue;
            };
            if let Some(slot) = self.slots.get_mut(index) {
                slot.fixed = setting;
            }
            if let Some(reach) = self.reach.get_mut(index) {
                reach.turned_on = setting == Setting::Switch(true);
            }
        }
    }

    fn visits(&mut self, sequence: &Sequence) -> Vec<Visit> {
        let references = sequence.references.iter().enumerate().map(|v| (true, v));
        let backgrounds = sequence.backgrounds.iter().enumerate().map(|v| (false, v));
        let mut all = Vec::new();
        for (is_reference, (which, visit)) in references.chain(backgrounds) {
            let mut changes = Vec::new();
            for change in &visit.changes {
                changes.extend(self.change(change, is_reference, sequence));
            }
            let settle = visit.settle.as_ref();
            let settle = settle.and_then(|text| self.visit_settle(text, &visit.changes));
            all.push(Visit {
                every: visit.every.max(1),
                changes,
                settle,
                is_reference,
                which,
            });
        }
        all
    }

    /// A visit may only change what the sequence sets: else nobody knows what to put back.
    fn change(
        &mut self,
        change: &Assignment,
        is_reference: bool,
        sequence: &Sequence,
    ) -> Option<(usize, Setting)> {
        let property = self.settable(&change.quantity)?;
        let setting = self.findings.setting(&change.value, property.dimension)?;
        let kind = if is_reference {
            "reference"
        } else {
            "background"
        };
        let Some(index) = self.slot_of(&property.name) else {
            let mut named = sequence.tracks().map(|track| track.quantity.text.as_str());
            if sequence.broken_steps || named.any(|name| name == property.name.as_str()) {
                return None;
            }
            let message = format!(
                "the {kind} changes `{}`, which the sequence never sets: nothing says what to put back",
                property.name
            );
            self.findings.push(
                fault("D0417", &change.quantity, message)
                    .help(format!("add `{}` to [set]", property.name)),
            );
            return None;
        };
        if let Some(value) = setting.number() {
            check::limit(
                self,
                property,
                value,
                &change.value,
                &format!("the {kind}'s value"),
            );
            self.widen(index, value, true);
        }
        if setting == Setting::Switch(true)
            && let Some(reach) = self.reach.get_mut(index)
        {
            reach.turned_on = true;
        }
        Some((index, setting))
    }

    /// Notes that a slot reaches a value.
    pub fn widen(&mut self, index: usize, value: f64, is_setting: bool) {
        let Some(reach) = self.reach.get_mut(index) else {
            return;
        };
        let widened = |range: Option<(f64, f64)>| {
            let (low, high) = range.unwrap_or((value, value));
            Some((low.min(value), high.max(value)))
        };
        reach.all = widened(reach.all);
        if is_setting {
            reach.settings = widened(reach.settings);
        }
    }

    /// `set`: number of slots that [set] filled.
    fn degauss(&mut self, sequence: &Sequence, set: usize) -> Option<DegaussPlan> {
        let text = sequence.degauss.as_ref()?;
        let property = self.settable(&text.quantity)?;
        let dwell = self.findings.not_negative(&text.dwell, Dimension::Time);
        let decay = self.findings.positive(&text.decay, Dimension::Ratio);
        if property.dimension == Dimension::Switch {
            let message = format!(
                "`{}` is a switch; degaussing needs a current",
                property.name
            );
            self.findings.push(fault("D0208", &text.quantity, message));
            return None;
        }
        let from = self.findings.quantity(&text.from, property.dimension)?;
        let decay = decay?;
        if decay >= 1.0 {
            let message = format!("`decay` {} does not decay", text.decay.text);
            self.findings.push(
                fault("D0210", &text.decay, message)
                    .help("give the ratio of each stair to the one before, below 1, as in 0.8"),
            );
            return None;
        }
        check::degauss(self, property, from.abs(), &text.from);
        let mut setpoints: Vec<f64> = (0..text.count)
            .map(|i| {
                let sign = if i.is_multiple_of(2) { 1.0 } else { -1.0 };
                sign * from * decay.powf(i as f64)
            })
            .collect();
        setpoints.push(0.0);
        if let Some(index) = self.slot_of(&property.name) {
            self.widen(index, from.abs(), false);
            self.widen(index, -from.abs(), false);
        }
        let moves = self.slots.iter().take(set).map(|slot| Move {
            quantity: slot.name.clone(),
            setpoint: slot.fixed,
            approach: None,
            settle: slot.settle,
        });
        Some(DegaussPlan {
            before: moves.collect(),
            quantity: property.name.clone(),
            setpoints,
            dwell: dwell?,
        })
    }

    fn guards(&mut self, sequence: &Sequence) -> Vec<Guard> {
        let mut guards = Vec::new();
        for guard in &sequence.guards {
            let Some((source, dimension)) = self.guarded(guard, sequence) else {
                continue;
            };
            let between = between_pair(&guard.between, dimension, self.findings);
            let give_up = match &guard.give_up {
                Some(text) => self.findings.positive(text, Dimension::Time),
                None => Some(600.0),
            };
            if let (Some(between), Some(give_up)) = (between, give_up) {
                guards.push(Guard {
                    source,
                    between,
                    otherwise: guard.otherwise,
                    give_up,
                    attempts: if guard.otherwise == Otherwise::Repeat {
                        guard.attempts
                    } else {
                        1
                    },
                });
            }
        }
        guards
    }

    fn guarded(
        &mut self,
        guard: &sequence::GuardText,
        sequence: &Sequence,
    ) -> Option<(GuardSource, Dimension)> {
        if !guard.by_signal {
            let name = self.draft.quantity(&guard.source, self.findings)?;
            let dimension = self.bench().property(&name)?.dimension;
            if dimension == Dimension::Switch {
                let message = format!("`{name}` is a switch; a guard needs a measured value");
                self.findings.push(fault("D0416", &guard.source, message));
                return None;
            }
            return Some((GuardSource::Quantity(name), dimension));
        }
        let swept = sequence.sweep.as_ref().map(|s| &s.record);
        let record = swept.or(sequence.dwell.as_ref().map(|d| &d.record))?;
        let names: Vec<&str> = record
            .signals
            .iter()
            .map(|(n, _)| n.text.as_str())
            .collect();
        if names.contains(&guard.source.text.as_str()) {
            let source = GuardSource::Signal(guard.source.text.clone());
            return Some((source, Dimension::Voltage));
        }
        let message = format!("no signal `{}` is recorded", guard.source.text);
        self.findings.push(
            fault("D0416", &guard.source, message).help(suggestion(&guard.source.text, &names)),
        );
        None
    }
}
