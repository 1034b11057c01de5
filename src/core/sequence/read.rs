//! Reading a sequence file.

mod step;

use super::{Assignment, Degauss, Dwell, GuardText, Record, Sequence, SettleText, Sweep, Visit};
use crate::diagnostic::{Diagnostic, FileRole};
use crate::document::{self, Findings, Table};
use crate::itinerary::{MOST_POINTS, Otherwise, Resonance, Shape};
use crate::trace::Direction;

/// Most samples of one acquisition.
const MOST_SAMPLES: u64 = 10_000_000;
/// Most values of a list, ranges of a step, stairs of a degauss.
pub(super) const MOST_COUNT: u64 = MOST_POINTS;

/// Reads the text as far as it goes; `None` where nothing at all could be made of it.
pub(crate) fn sequence(text: &str, findings: &mut Findings) -> Option<Sequence> {
    let parsed = document::open(text, FileRole::Sequence, findings)?;
    let mut root = Table::root(&parsed, FileRole::Sequence);
    let title = root.required("title", findings);
    let set = root.table("set", findings);
    let set = set
        .map(|table| assignments(table, findings))
        .unwrap_or_default();
    let steps = root.tables("step", findings);
    let declared = steps.len();
    let steps: Vec<_> = steps
        .into_iter()
        .filter_map(|t| step::step(t, findings))
        .collect();
    let sweep = root.table("sweep", findings);
    let sweep = sweep.and_then(|table| self::sweep(table, findings));
    let dwell = root.table("dwell", findings);
    let dwell = dwell.and_then(|table| self::dwell(table, findings));
    recorded_once(&root, findings);
    let guards = root.tables("guard", findings);
    let guards = guards
        .into_iter()
        .filter_map(|t| guard(t, findings))
        .collect();
    let references = root.tables("reference", findings);
    let references = visits(references, "at", findings);
    let backgrounds = root.tables("background", findings);
    let backgrounds = visits(backgrounds, "with", findings);
    let resonance = root.table("resonance", findings);
    let resonance = self::resonance(resonance, findings);
    let degauss = root.table("degauss", findings);
    let degauss = degauss.and_then(|table| self::degauss(table, findings));
    let overlap = root.boolean("overlap", findings).unwrap_or(true);
    root.finish(findings);
    Some(Sequence {
        title: title.map(|t| t.text).unwrap_or_default(),
        set,
        broken_steps: steps.len() < declared,
        steps,
        sweep,
        dwell,
        guards,
        references,
        backgrounds,
        resonance,
        degauss,
        overlap,
    })
}

/// A point either sweeps or dwells.
fn recorded_once(root: &Table<'_>, findings: &mut Findings) {
    let (message, span) = match (root.has("sweep"), root.has("dwell")) {
        (true, true) => (
            "a point either sweeps or dwells, not both",
            root.place("dwell"),
        ),
        (false, false) => ("the sequence records nothing", 0..0),
        _ => return,
    };
    findings.push(
        Diagnostic::error("D0408", FileRole::Sequence, message)
            .at(span)
            .help("give either [sweep] (the instrument sweeps) or [dwell] (the probe is stepped)"),
    );
}

fn assignments(mut table: Table<'_>, findings: &mut Findings) -> Vec<Assignment> {
    let pairs = table.named_texts(findings);
    pairs
        .into_iter()
        .map(|(quantity, value)| Assignment { quantity, value })
        .collect()
}

fn record(table: &mut Table<'_>, findings: &mut Findings) -> Option<Record> {
    if !table.has("record") {
        table.missing("record", findings);
    }
    let mut inner = table.table("record", findings)?;
    let signals = inner.named_texts(findings);
    let span = inner.span.clone();
    if signals.is_empty() {
        let message = "`record` names no signal";
        findings.push(
            Diagnostic::error("D0409", FileRole::Sequence, message)
                .at(span.clone())
                .help("as in record = { signal = \"scope.ch1\" }"),
        );
        return None;
    }
    Some(Record { signals, span })
}

fn sweep(mut table: Table<'_>, findings: &mut Findings) -> Option<Sweep> {
    let directions = [
        ("up", &[Direction::Up][..]),
        ("down", &[Direction::Down][..]),
        ("both", &[Direction::Up, Direction::Down][..]),
    ];
    let quantity = table.required("quantity", findings);
    let centre = table.required("centre", findings);
    let width = table.required("span", findings);
    let duration = table.required("duration", findings);
    let direction = table.text("direction", findings);
    let direction = direction.and_then(|text| findings.choice(&text, &directions));
    let samples = samples(&mut table, findings);
    let averages = table.whole("averages", (1, 10_000), findings);
    let record = record(&mut table, findings);
    let span = table.span.clone();
    table.finish(findings);
    Some(Sweep {
        span,
        quantity: quantity?,
        centre: centre?,
        width: width?,
        duration: duration?,
        directions: direction.unwrap_or(&[Direction::Up]).to_vec(),
        samples: samples?,
        averages: averages.map_or(1, |w| w.value as u32),
        record: record?,
    })
}

fn samples(table: &mut Table<'_>, findings: &mut Findings) -> Option<u32> {
    if !table.has("samples") {
        table.missing("samples", findings);
    }
    let samples = table.whole("samples", (2, MOST_SAMPLES), findings)?;
    u32::try_from(samples.value).ok()
}

fn dwell(mut table: Table<'_>, findings: &mut Findings) -> Option<Dwell> {
    let duration = table.required("duration", findings);
    let samples = samples(&mut table, findings);
    let averages = table.whole("averages", (1, 10_000), findings);
    let record = record(&mut table, findings);
    table.finish(findings);
    Some(Dwell {
        duration: duration?,
        samples: samples?,
        averages: averages.map_or(1, |w| w.value as u32),
        record: record?,
    })
}

fn guard(mut table: Table<'_>, findings: &mut Findings) -> Option<GuardText> {
    let choices = [
        ("wait", Otherwise::Wait),
        ("repeat", Otherwise::Repeat),
        ("flag", Otherwise::Flag),
        ("stop", Otherwise::Stop),
    ];
    let by_signal = table.has("signal");
    let quantity = table.text("quantity", findings);
    let signal = table.text("signal", findings);
    let between = table.texts("between", findings);
    if !table.has("between") {
        table.missing("between", findings);
    }
    let otherwise = table.required("otherwise", findings);
    let otherwise = otherwise.and_then(|text| findings.choice(&text, &choices));
    let give_up = table.text("give_up", findings);
    let attempts = table.whole("attempts", (1, 1000), findings);
    let span = table.span.clone();
    table.finish(findings);
    let source = match (quantity, signal) {
        (Some(text), None) | (None, Some(text)) => text,
        _ => {
            let message = "a guard watches either a `quantity` or a recorded `signal`";
            findings.push(Diagnostic::error("D0416", FileRole::Sequence, message).at(span));
            return None;
        }
    };
    Some(GuardText {
        span,
        source,
        by_signal,
        between: between?,
        otherwise: otherwise?,
        give_up,
        attempts: attempts.map_or(10, |w| w.value as u32),
    })
}

fn visits(tables: Vec<Table<'_>>, key: &'static str, findings: &mut Findings) -> Vec<Visit> {
    let mut visits = Vec::new();
    for mut table in tables {
        if !table.has("every") {
            table.missing("every", findings);
        }
        let every = table.whole("every", (1, MOST_POINTS), findings);
        if !table.has(key) {
            table.missing(key, findings);
        }
        let changes = table.table(key, findings).map(|t| assignments(t, findings));
        let settle = settle(&mut table, findings);
        table.finish(findings);
        if let (Some(every), Some(changes)) = (every, changes) {
            visits.push(Visit {
                every: every.value,
                changes,
                settle,
            });
        }
    }
    visits
}

pub(super) fn settle(table: &mut Table<'_>, findings: &mut Findings) -> Option<SettleText> {
    let mut inner = table.table("settle", findings)?;
    let readings = inner.whole("readings", (1, 1000), findings);
    let read = SettleText {
        within: inner.text("within", findings),
        drift: inner.text("drift", findings),
        readings: readings.map_or(1, |w| w.value as u32),
        at_least: inner.text("at_least", findings),
        give_up: inner.text("give_up", findings),
        span: inner.span.clone(),
    };
    inner.finish(findings);
    Some(read)
}

fn resonance(table: Option<Table<'_>>, findings: &mut Findings) -> Resonance {
    let shapes = [
        ("lorentzian", Shape::Lorentzian),
        ("mixed lorentzian", Shape::MixedLorentzian),
    ];
    let mut read = Resonance {
        shape: Shape::Lorentzian,
        follow: false,
    };
    let Some(mut table) = table else {
        return read;
    };
    if let Some(text) = table.text("shape", findings)
        && let Some(shape) = findings.choice(&text, &shapes)
    {
        read.shape = shape;
    }
    read.follow = table.boolean("follow", findings).unwrap_or(false);
    table.finish(findings);
    read
}

fn degauss(mut table: Table<'_>, findings: &mut Findings) -> Option<Degauss> {
    let quantity = table.required("quantity", findings);
    let from = table.required("from", findings);
    let decay = table.required("decay", findings);
    let count = table.whole("count", (1, 10_000), findings);
    if !table.has("count") {
        table.missing("count", findings);
    }
    let dwell = table.required("dwell", findings);
    table.finish(findings);
    Some(Degauss {
        quantity: quantity?,
        from: from?,
        decay: decay?,
        count: count?.value,
        dwell: dwell?,
    })
}
