//! What is recorded at a point: the sweep, or the dwell of a stepped probe.

use std::collections::BTreeSet;

use super::super::check;
use super::super::model::{DwellPlan, Resonance, SweepPlan};
use super::Scene;
use crate::channel::Role;
use crate::diagnostic::{Diagnostic, FileRole};
use crate::document::{Span, Text, fault, suggestion};
use crate::quantity::{Dimension, QuantityName};
use crate::sequence::{Dwell, Record, Sweep};

/// Digitizer and pairs of signal and input.
type Recorded = (String, Vec<(String, String)>);

impl Scene<'_> {
    pub(super) fn sweep(&mut self, text: &Sweep, resonance: Resonance) -> Option<SweepPlan> {
        let quantity = self.swept(&text.quantity);
        let centre = self.findings.quantity(&text.centre, Dimension::Frequency);
        let span = self.findings.positive(&text.width, Dimension::Frequency);
        let duration = self.findings.positive(&text.duration, Dimension::Time);
        let recorded = self.record(&text.record);
        let bench = self.bench();
        if bench.timing.is_none() {
            self.lacks("timing", "how a trace starts", &text.span);
        }
        if bench.physics.is_none() {
            self.lacks(
                "physics",
                "how wide the line is and how it moves",
                &text.span,
            );
        }
        let timing = bench.timing.as_ref()?;
        let (digitizer, record) = recorded?;
        let plan = SweepPlan {
            quantity: quantity?,
            centre: centre?,
            span: span?,
            duration: duration?,
            directions: text.directions.clone(),
            samples: text.samples,
            averages: text.averages,
            digitizer,
            record,
            follow: resonance.follow,
            axis: timing.axis,
            delay: timing.delay,
        };
        check::sweep(self, &plan, text);
        Some(plan)
    }

    /// Says that the bench has no such table; silent where the table is there but faulty.
    fn lacks(&mut self, table: &str, what: &str, span: &Span) {
        let faulty = self.findings.0.iter().any(|d| d.file == FileRole::Bench);
        if faulty {
            return;
        }
        let message = format!("the bench does not say {what}");
        self.findings.push(
            Diagnostic::error("D0511", FileRole::Sequence, message)
                .at(span.clone())
                .help(format!("add [{table}] to the bench file")),
        );
    }

    /// A quantity that its instrument can sweep by itself.
    fn swept(&mut self, text: &Text) -> Option<QuantityName> {
        let property = self.settable(text)?;
        let role = self
            .bench()
            .instruments
            .get(property.name.instrument())?
            .role;
        let mut offers = role.offers().iter();
        if !offers.any(|offer| offer.sweeps && offer.property == property.name.property()) {
            let message = format!(
                "`{}` cannot be swept by the instrument itself",
                property.name
            );
            self.findings.push(fault("D0208", text, message).help(
                "sweep the frequency of an rf-generator, or step this quantity and use [dwell]",
            ));
            return None;
        }
        if self.slot_of(&property.name).is_some() {
            let message = format!("`{}` is both set or stepped and swept", property.name);
            self.findings.push(fault("D0406", text, message));
            return None;
        }
        Some(property.name.clone())
    }

    pub(super) fn dwell(&mut self, text: &Dwell) -> Option<DwellPlan> {
        let duration = self.findings.positive(&text.duration, Dimension::Time);
        let (digitizer, record) = self.record(&text.record)?;
        Some(DwellPlan {
            duration: duration?,
            samples: text.samples,
            averages: text.averages,
            digitizer,
            record,
        })
    }

    /// Signals and inputs, all of one digitizer.
    fn record(&mut self, text: &Record) -> Option<Recorded> {
        let before = self.findings.0.len();
        let mut digitizer: Option<&str> = None;
        let mut inputs = BTreeSet::new();
        let mut record = Vec::new();
        for (signal, place) in &text.signals {
            let Some((instrument, input)) = self.input(place) else {
                continue;
            };
            if *digitizer.get_or_insert(instrument) != instrument {
                let message = "all signals of a sequence are recorded by one digitizer";
                self.findings.push(fault("D0415", place, message));
            }
            if !inputs.insert(input) {
                let message = format!("`{}` is recorded twice", place.text);
                self.findings.push(fault("D0415", place, message));
            }
            record.push((signal.text.clone(), input.to_owned()));
        }
        if !text
            .signals
            .iter()
            .any(|(signal, _)| signal.text == "signal")
        {
            let message = "`record` has no `signal`: the line is looked for there";
            let fault = Diagnostic::error("D0409", FileRole::Sequence, message);
            self.findings.push(fault.at(text.span.clone()));
        }
        let complete = self.findings.0.len() == before && record.len() == text.signals.len();
        complete
            .then(|| (digitizer.map(str::to_owned), record))
            .and_then(|(d, r)| Some((d?, r)))
    }

    /// "scope.ch1" -> ("scope", "ch1").
    fn input<'t>(&mut self, text: &'t Text) -> Option<(&'t str, &'t str)> {
        let bench = self.bench();
        let known: Vec<String> = bench
            .instruments
            .values()
            .flat_map(|i| i.channels.keys().map(|input| format!("{}.{input}", i.name)))
            .collect();
        let known: Vec<&str> = known.iter().map(String::as_str).collect();
        let split = text.text.split_once('.');
        if let Some((name, input)) = split {
            if self.draft.broken.contains(name) {
                return None;
            }
            let instrument = bench
                .instruments
                .get(name)
                .filter(|i| i.role == Role::Digitizer);
            if instrument.is_some_and(|i| i.channels.contains_key(input)) {
                return split;
            }
        }
        let message = format!("no digitizer has an input `{}`", text.text);
        self.findings
            .push(fault("D0206", text, message).help(suggestion(&text.text, &known)));
        None
    }
}
