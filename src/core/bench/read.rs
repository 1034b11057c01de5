//! Reading a whole bench file: instruments, orders, interlocks; then what ties them together.

use std::collections::{BTreeMap, BTreeSet};

use super::{Bench, Instrument, Interlock, Specimen, instrument, link, physics};
use crate::diagnostic::{Diagnostic, FileRole};
use crate::document::{self, Findings, Span, Table, Text, suggestion};
use crate::quantity::{Dimension, QuantityName};

/// A bench as far as it could be read.
pub(crate) struct Draft {
    pub bench: Bench,
    /// Instruments that are declared but faulty: findings about them would only repeat.
    pub broken: BTreeSet<String>,
}

/// Reads the text; `None` where nothing at all could be made of it.
pub(crate) fn bench(text: &str, findings: &mut Findings) -> Option<Draft> {
    let parsed = document::open(text, FileRole::Bench, findings)?;
    let mut root = Table::root(&parsed, FileRole::Bench);
    let title = root
        .text("title", findings)
        .map(|t| t.text)
        .unwrap_or_default();
    let mut draft = Draft {
        bench: Bench {
            title,
            instruments: BTreeMap::new(),
            rest_order: Vec::new(),
            safe_order: Vec::new(),
            interlocks: Vec::new(),
            timing: None,
            physics: None,
            specimen: Specimen::default(),
        },
        broken: BTreeSet::new(),
    };
    instruments(&mut draft, &mut root, findings);
    orders(&mut draft, &mut root, findings);
    for table in root.tables("interlock", findings) {
        interlock(&mut draft, table, findings);
    }
    if let Some(table) = root.table("timing", findings) {
        draft.bench.timing = physics::timing(&draft, table, findings);
    }
    if let Some(table) = root.table("physics", findings) {
        draft.bench.physics = physics::physics(&draft, table, findings);
    }
    if let Some(table) = root.table("specimen", findings) {
        draft.bench.specimen = physics::specimen(table, findings);
    }
    root.finish(findings);
    Some(draft)
}

fn instruments(draft: &mut Draft, root: &mut Table<'_>, findings: &mut Findings) {
    let Some(mut all) = root.table("instrument", findings) else {
        if !root.has("instrument") {
            root.missing("instrument", findings);
        }
        return;
    };
    let mut wires: BTreeMap<String, String> = BTreeMap::new();
    for (name, table) in all.named_tables(findings) {
        let before = findings.0.len();
        match instrument::instrument(&name, table, findings) {
            Some(read) => {
                wire(&read.instrument, read.link_span, &mut wires, findings);
                draft
                    .bench
                    .instruments
                    .insert(name.text.clone(), read.instrument);
            }
            None => {
                draft.broken.insert(name.text.clone());
            }
        }
        if findings.0.len() > before {
            draft.broken.insert(name.text);
        }
    }
    all.finish(findings);
}

/// The link must be an address, and nobody else's.
fn wire(
    instrument: &Instrument,
    span: Span,
    wires: &mut BTreeMap<String, String>,
    findings: &mut Findings,
) {
    if instrument.link.is_empty() {
        return;
    }
    let text = Text {
        text: instrument.link.clone(),
        span: span.clone(),
        file: FileRole::Bench,
    };
    match link::canonical(&text) {
        Err(help) => {
            let message = format!("`{}` is no address of an instrument", instrument.link);
            findings.push(
                Diagnostic::error("D0304", FileRole::Bench, message)
                    .at(span)
                    .help(help),
            );
        }
        Ok(wire) => {
            if let Some(other) = wires.insert(wire, instrument.name.clone()) {
                let message = format!(
                    "`{other}` and `{}` are on one link, {}",
                    instrument.name, instrument.link
                );
                findings.push(
                    Diagnostic::error("D0303", FileRole::Bench, message)
                        .at(span)
                        .help("each instrument needs a link of its own"),
                );
            }
        }
    }
}

fn orders(draft: &mut Draft, root: &mut Table<'_>, findings: &mut Findings) {
    let has = |i: &Instrument, safe: bool| {
        let left = |p: &super::Property| if safe { p.safe } else { p.rest };
        i.properties.values().any(|p| left(p).is_some())
    };
    let members = |safe: bool| -> Vec<String> {
        let all = draft.bench.instruments.values();
        all.filter(|i| has(i, safe))
            .map(|i| i.name.clone())
            .collect()
    };
    let (rest, safe) = (members(false), members(true));
    let Some(mut table) = root.table("order", findings) else {
        draft.bench.rest_order = vec![rest];
        draft.bench.safe_order = vec![safe];
        return;
    };
    draft.bench.rest_order = order(draft, "rest", &rest, &mut table, findings);
    draft.bench.safe_order = order(draft, "safe", &safe, &mut table, findings);
    table.finish(findings);
}

/// Groups as written; whoever has a value to go to must stand in exactly one of them.
fn order(
    draft: &Draft,
    key: &'static str,
    members: &[String],
    table: &mut Table<'_>,
    findings: &mut Findings,
) -> Vec<Vec<String>> {
    let Some(groups) = table.groups(key, findings) else {
        return vec![members.to_vec()];
    };
    let span = table.place(key);
    let mut named: BTreeSet<&str> = BTreeSet::new();
    for name in groups.iter().flatten() {
        if !draft.knows(&name.text) {
            findings.push(instrument::unknown(name, &draft.names()));
        } else if !named.insert(&name.text) {
            let message = format!("`{}` stands twice in the {key} order", name.text);
            findings.push(Diagnostic::error("D0308", name.file, message).at(name.span.clone()));
        }
    }
    for member in members.iter().filter(|m| !named.contains(m.as_str())) {
        let message = format!("`{member}` has a {key} value but stands nowhere in the {key} order");
        findings.push(
            Diagnostic::error("D0308", FileRole::Bench, message)
                .at(span.clone())
                .help(format!("add \"{member}\" to one of the groups")),
        );
    }
    let texts = |group: &Vec<Text>| group.iter().map(|name| name.text.clone()).collect();
    groups.iter().map(texts).collect()
}

fn interlock(draft: &mut Draft, mut table: Table<'_>, findings: &mut Findings) {
    let name = table.required("quantity", findings);
    let dimension = name.and_then(|name| {
        let name = draft.quantity(&name, findings)?;
        let property = draft.bench.property(&name)?;
        Some((name, property.dimension))
    });
    let between = table.texts("between", findings);
    let at_least = table.text("at_least", findings);
    let at_most = table.text("at_most", findings);
    let every = table.positive("every", Dimension::Time, findings);
    let say = table
        .text("say", findings)
        .map(|t| t.text)
        .unwrap_or_default();
    let span = table.span.clone();
    table.finish(findings);
    let Some((quantity, dimension)) = dimension else {
        return;
    };
    if dimension == Dimension::Switch {
        let message = format!("`{quantity}` is a switch; an interlock needs a measured value");
        findings.push(Diagnostic::error("D0311", FileRole::Bench, message).at(span));
        return;
    }
    let mut bounds = (
        at_least.and_then(|text| findings.quantity(&text, dimension)),
        at_most.and_then(|text| findings.quantity(&text, dimension)),
    );
    if let Some(pair) = between.and_then(|pair| between_pair(&pair, dimension, findings)) {
        bounds = (Some(pair.0), Some(pair.1));
    }
    if bounds == (None, None) {
        let message = format!("the interlock on `{quantity}` has no bound");
        findings.push(
            Diagnostic::error("D0311", FileRole::Bench, message)
                .at(span)
                .help("add `at_most`, `at_least`, or between = [low, high]"),
        );
        return;
    }
    draft.bench.interlocks.push(Interlock {
        quantity,
        lowest: bounds.0,
        highest: bounds.1,
        every: every.unwrap_or(1.0),
        say,
    });
}

/// `["low", "high"]`.
pub(crate) fn between_pair(
    pair: &[Text],
    dimension: Dimension,
    findings: &mut Findings,
) -> Option<(f64, f64)> {
    let [low, high] = pair else {
        let text = pair.first()?;
        let message = format!("`between` has {} values; it needs two", pair.len());
        findings.push(Diagnostic::error("D0106", text.file, message).at(text.span.clone()));
        return None;
    };
    let bounds = (
        findings.quantity(low, dimension),
        findings.quantity(high, dimension),
    );
    let (Some(bottom), Some(top)) = bounds else {
        return None;
    };
    if bottom < top {
        return Some((bottom, top));
    }
    let message = format!(
        "`between` is reversed: {} is not below {}",
        low.text, high.text
    );
    findings.push(
        Diagnostic::error("D0204", low.file, message)
            .at(low.span.start..high.span.end)
            .help("write the lower end first"),
    );
    None
}

impl Draft {
    /// A bench without faults.
    pub fn whole(bench: Bench) -> Self {
        Self {
            bench,
            broken: BTreeSet::new(),
        }
    }

    /// Whether an instrument of that name is declared, faulty or not.
    pub fn knows(&self, name: &str) -> bool {
        self.bench.instruments.contains_key(name) || self.broken.contains(name)
    }

    /// Names of all declared instruments.
    pub fn names(&self) -> Vec<&str> {
        let broken = self.broken.iter().map(String::as_str);
        let mut names: Vec<&str> = broken
            .chain(self.bench.instruments.keys().map(String::as_str))
            .collect();
        names.sort_unstable();
        names.dedup();
        names
    }

    /// The quantity of that name. `None` with a finding where there is none, without where the
    /// instrument is faulty.
    pub fn quantity(&self, text: &Text, findings: &mut Findings) -> Option<QuantityName> {
        let name = match QuantityName::new(&text.text) {
            Ok(name) => name,
            Err(error) => {
                let fault = Diagnostic::error("D0205", text.file, error.to_string());
                findings.push(fault.at(text.span.clone()));
                return None;
            }
        };
        if self.bench.property(&name).is_some() {
            return Some(name);
        }
        if !self.broken.contains(name.instrument()) {
            let known: Vec<&str> = self.bench.properties().map(|p| p.name.as_str()).collect();
            let message = format!("the bench has no quantity `{name}`");
            findings.push(
                Diagnostic::error("D0205", text.file, message)
                    .at(text.span.clone())
                    .help(suggestion(&text.text, &known)),
            );
        }
        None
    }
}
