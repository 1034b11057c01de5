//! Reading `[instrument.*]`: roles, links, and each quantity with its limits, rest and safe values.

use std::collections::BTreeMap;

use super::{Accuracy, Coupling, Input, Instrument, Polarity, Property};
use crate::channel::{Access, Offer, Role};
use crate::diagnostic::Diagnostic;
use crate::document::{Findings, Span, Table, Text, suggestion};
use crate::quantity::{Dimension, QuantityName, Setting, display, unit::Unit};

/// An instrument and where its link is written.
pub(super) struct Read {
    pub instrument: Instrument,
    pub link_span: Span,
}

/// Reads one `[instrument.NAME]`; `None` where too little of it is usable.
pub(super) fn instrument(
    name: &Text,
    mut table: Table<'_>,
    findings: &mut Findings,
) -> Option<Read> {
    if !QuantityName::is_word(&name.text) {
        let message = format!("`{}` cannot name an instrument", name.text);
        findings.push(
            Diagnostic::error("D0313", name.file, message)
                .at(name.span.clone())
                .help("use letters, digits, `_` and `-`, beginning with a letter"),
        );
        return None;
    }
    let role = role(&mut table, findings);
    let map = table.required("map", findings);
    let link = table.required("link", findings);
    let identity = table.text("identity", findings).map(|t| t.text);
    let Some(role) = role else {
        // Which keys exist depends on the role: nothing more can be judged.
        return None;
    };
    let mut read = Instrument {
        name: name.text.clone(),
        role,
        map: map.map(|t| t.text).unwrap_or_default(),
        link: link.as_ref().map(|t| t.text.clone()).unwrap_or_default(),
        identity,
        properties: BTreeMap::new(),
        channels: BTreeMap::new(),
        polarity: None,
        amplifier: 0.0,
        modulator_limit: None,
    };
    if role == Role::CurrentSupply {
        read.polarity = Some(polarity(&mut table, findings));
    }
    if role == Role::RfGenerator {
        read.amplifier = table
            .quantity("amplifier", Dimension::LevelDifference, findings)
            .unwrap_or(0.0);
        read.modulator_limit = table.quantity("modulator_limit", Dimension::Level, findings);
    }
    let before = findings.0.len();
    match role {
        Role::Digitizer => inputs(&mut read, &mut table, findings),
        Role::Monitor => declared(&mut read, &mut table, findings),
        _ => offered(&mut read, &mut table, findings),
    }
    if findings.0.len() == before {
        modulator(&read, &table, findings);
        unipolar(&read, &table, findings);
        left_safe(&read, &table, findings);
    }
    let link_span = link.map_or_else(|| table.span.clone(), |t| t.span);
    table.finish(findings);
    Some(Read {
        instrument: read,
        link_span,
    })
}

fn role(table: &mut Table<'_>, findings: &mut Findings) -> Option<Role> {
    let text = table.required("role", findings)?;
    findings.choice(&text, &Role::ALL.map(|role| (role.name(), role)))
}

fn polarity(table: &mut Table<'_>, findings: &mut Findings) -> Polarity {
    let choices = [
        ("bipolar", Polarity::Bipolar),
        ("unipolar", Polarity::Unipolar),
    ];
    table
        .required("polarity", findings)
        .and_then(|text| findings.choice(&text, &choices))
        .unwrap_or(Polarity::Bipolar)
}

/// The properties that the role offers. A settable number must be declared, since it needs its range;
/// a switch needs its rest and safe values.
fn offered(read: &mut Instrument, table: &mut Table<'_>, findings: &mut Findings) {
    for offer in read.role.offers() {
        let needed = offer.access == Access::Settable;
        if needed && !table.has(offer.property) {
            table.missing(offer.property, findings);
        }
        if let Some(inner) = table.table(offer.property, findings)
            && let Some(property) = property(&read.name, *offer, inner, findings)
        {
            read.properties.insert(offer.property.to_owned(), property);
        }
    }
}

fn property(
    instrument: &str,
    offer: Offer,
    mut table: Table<'_>,
    findings: &mut Findings,
) -> Option<Property> {
    let name = QuantityName::new(&format!("{instrument}.{}", offer.property)).ok()?;
    let dimension = offer.dimension;
    let mut read = Property::bare(name, dimension, offer.access);
    if offer.access == Access::Settable {
        if dimension != Dimension::Switch {
            range(&mut read, &mut table, findings);
            ramp(&mut read, &mut table, findings);
        }
        read.rest = left(&read, "rest", &mut table, findings);
        read.safe = left(&read, "safe", &mut table, findings);
    }
    if dimension != Dimension::Switch {
        scale(&mut read, &mut table, findings);
    }
    table.finish(findings);
    Some(read)
}

fn range(read: &mut Property, table: &mut Table<'_>, findings: &mut Findings) {
    let Some(text) = table.text("range", findings) else {
        if !table.has("range") {
            let message = format!(
                "`{}` has no `range`; nothing may be set without limits",
                read.name
            );
            findings.push(
                Diagnostic::error("D0301", table.file, message)
                    .at(table.span.clone())
                    .help(format!(
                        "add range = \"low .. high\" ({})",
                        read.dimension.accepted()
                    )),
            );
        }
        return;
    };
    read.range = findings.range(&text, read.dimension);
}

/// `slew` and `ramp_step` come together: a slew without a stair, or the reverse, is no ramp.
fn ramp(read: &mut Property, table: &mut Table<'_>, findings: &mut Findings) {
    let rate = read.dimension.rate();
    let slew = table.text("slew", findings);
    let stair = table.text("ramp_step", findings);
    if let (Some(slew), Some(rate)) = (&slew, rate) {
        read.slew = ramp_number(slew, rate, findings);
    }
    if let Some(stair) = &stair {
        read.ramp_step = ramp_number(stair, read.dimension.difference(), findings);
    }
    let (has, lacks, span) = match (&slew, &stair) {
        (Some(slew), None) => ("slew", "ramp_step", slew.span.clone()),
        (None, Some(stair)) => ("ramp_step", "slew", stair.span.clone()),
        _ => return,
    };
    let message = format!(
        "`{}` has `{has}` but no `{lacks}`: it cannot ramp",
        read.name
    );
    findings.push(
        Diagnostic::error("D0305", table.file, message)
            .at(span)
            .help(format!(
                "add `{lacks}`; a ramp is stairs of `ramp_step` at the pace of `slew`"
            )),
    );
}

fn ramp_number(text: &Text, wanted: Dimension, findings: &mut Findings) -> Option<f64> {
    let value = findings.quantity(text, wanted)?;
    if value > 0.0 {
        return Some(value);
    }
    let message = format!("`{}` makes a ramp that never arrives", text.text);
    findings.push(
        Diagnostic::error("D0305", text.file, message)
            .at(text.span.clone())
            .help("give a value above zero, or leave out both `slew` and `ramp_step`"),
    );
    None
}

/// `rest` or `safe`: a value within the range, or "keep". Whatever can be set must say both: a scan may
/// step it, and then something has to say where it is left.
fn left(
    read: &Property,
    key: &'static str,
    table: &mut Table<'_>,
    findings: &mut Findings,
) -> Option<Setting> {
    let Some(text) = table.text(key, findings) else {
        if !table.has(key) {
            let message = format!("`{}` has no `{key}` value", read.name);
            findings.push(
                Diagnostic::error("D0302", table.file, message)
                    .at(table.span.clone())
                    .help(format!(
                        "add {key} = the value it is left at, or {key} = \"keep\""
                    )),
            );
        }
        return None;
    };
    if text.text == "keep" {
        return None;
    }
    let setting = findings.setting(&text, read.dimension)?;
    if let (Setting::Number(value), Some((low, high))) = (setting, read.range)
        && !(low..=high).contains(&value)
    {
        let message = format!(
            "{key} value {} of `{}` lies outside its range {} .. {}",
            display(value, read.dimension),
            read.name,
            display(low, read.dimension),
            display(high, read.dimension)
        );
        findings.push(Diagnostic::error("D0306", text.file, message).at(text.span));
        return None;
    }
    Some(setting)
}

fn scale(read: &mut Property, table: &mut Table<'_>, findings: &mut Findings) {
    let difference = read.dimension.difference();
    read.resolution = table.positive("resolution", difference, findings);
    if let Some(mut inner) = table.table("accuracy", findings) {
        let gain = inner.text("gain", findings);
        let offset = inner.text("offset", findings);
        let mut number = |text: Option<Text>, wanted| {
            text.and_then(|text| findings.not_negative(&text, wanted))
                .unwrap_or(0.0)
        };
        read.accuracy = Some(Accuracy {
            gain: number(gain, Dimension::Ratio),
            offset: number(offset, difference),
        });
        inner.finish(findings);
    }
}

/// The quantities of a monitor, each with its `unit`; a voltage where it does not say.
fn declared(read: &mut Instrument, table: &mut Table<'_>, findings: &mut Findings) {
    for (name, mut inner) in table.named_tables(findings) {
        let unit = inner.text("unit", findings);
        let found = unit.as_ref().map(|unit| Unit::find(&unit.text));
        if let (Some(unit), Some(None)) = (&unit, &found) {
            let message = format!("unknown unit `{}`", unit.text);
            findings.push(Diagnostic::error("D0201", unit.file, message).at(unit.span.clone()));
        }
        let dimension = found
            .flatten()
            .map_or(Dimension::Voltage, |unit| unit.dimension);
        let Ok(full) = QuantityName::new(&format!("{}.{}", read.name, name.text)) else {
            let message = format!("`{}` cannot name a quantity", name.text);
            findings.push(Diagnostic::error("D0313", name.file, message).at(name.span));
            continue;
        };
        let mut property = Property::bare(full, dimension, Access::ReadOnly);
        scale(&mut property, &mut inner, findings);
        inner.finish(findings);
        read.properties.insert(name.text, property);
    }
    if read.properties.is_empty() {
        let message = format!("monitor `{}` reads nothing", read.name);
        findings.push(
            Diagnostic::error("D0206", table.file, message)
                .at(table.span.clone())
                .help(format!(
                    "add [instrument.{}.level] with unit = \"V\"",
                    read.name
                )),
        );
    }
}

/// Inputs of a digitizer.
fn inputs(read: &mut Instrument, table: &mut Table<'_>, findings: &mut Findings) {
    let couplings = [("dc", Coupling::Dc), ("ac", Coupling::Ac)];
    for (name, mut inner) in table.named_tables(findings) {
        let range = inner.required("range", findings);
        let range = range.and_then(|text| findings.positive(&text, Dimension::Voltage));
        let coupling = inner.text("coupling", findings);
        let coupling = coupling.and_then(|text| findings.choice(&text, &couplings));
        let input = Input {
            name: name.text.clone(),
            range: range.unwrap_or(0.0),
            offset: inner
                .quantity("offset", Dimension::Voltage, findings)
                .unwrap_or(0.0),
            coupling: coupling.unwrap_or(Coupling::Dc),
            bandwidth: inner.positive("bandwidth", Dimension::Frequency, findings),
        };
        inner.finish(findings);
        read.channels.insert(name.text, input);
    }
    if read.channels.is_empty() {
        let message = format!("digitizer `{}` has no input", read.name);
        findings.push(
            Diagnostic::error("D0206", table.file, message)
                .at(table.span.clone())
                .help(format!(
                    "add [instrument.{}.ch1] with its `range`",
                    read.name
                )),
        );
    }
}

/// The generator's highest level, amplified, must not pass the modulator's limit.
fn modulator(read: &Instrument, table: &Table<'_>, findings: &mut Findings) {
    let power = read.properties.get("power");
    let Some(((_, high), limit)) = power.and_then(|p| p.range).zip(read.modulator_limit) else {
        return;
    };
    if high + read.amplifier <= limit {
        return;
    }
    let message = format!(
        "{} from `{}` and {} of amplifier gain are {} at the modulator, over its {} limit",
        display(high, Dimension::Level),
        read.name,
        display(read.amplifier, Dimension::LevelDifference),
        display(high + read.amplifier, Dimension::Level),
        display(limit, Dimension::Level),
    );
    let top = limit - read.amplifier;
    findings.push(
        Diagnostic::error("D0307", table.file, message)
            .at(table.place("power"))
            .help(format!(
                "end the range of `{}.power` at {}",
                read.name,
                display(top, Dimension::Level)
            )),
    );
}

fn unipolar(read: &Instrument, table: &Table<'_>, findings: &mut Findings) {
    let current = read.properties.get("current").and_then(|p| p.range);
    if read.polarity == Some(Polarity::Unipolar)
        && let Some((low, _)) = current
        && low < 0.0
    {
        let message = format!(
            "the range of `{}.current` begins at {}, but the supply is unipolar",
            read.name,
            display(low, Dimension::Current)
        );
        findings.push(
            Diagnostic::error("D0309", table.file, message)
                .at(table.place("current"))
                .help("begin the range at \"0 mA\", or write polarity = \"bipolar\" if it is"),
        );
    }
}

/// An instrument that energises the bench must do something on the way to safe.
fn left_safe(read: &Instrument, table: &Table<'_>, findings: &mut Findings) {
    let energises = read.role.offers().iter().any(|offer| offer.energises);
    if energises && read.properties.values().all(|p| p.safe.is_none()) {
        let message = format!(
            "every safe value of `{}` is \"keep\": a trip would leave it energised",
            read.name
        );
        findings.push(
            Diagnostic::error("D0302", table.file, message)
                .at(table.span.clone())
                .help("give at least its `output` safe = \"off\""),
        );
    }
}

/// "did you mean" among the instruments' names.
pub(super) fn unknown(name: &Text, known: &[&str]) -> Diagnostic {
    let message = format!("no instrument is called `{}`", name.text);
    Diagnostic::error("D0207", name.file, message)
        .at(name.span.clone())
        .help(suggestion(&name.text, known))
}

impl Property {
    /// Without limits, ramps and values to be left at.
    fn bare(name: QuantityName, dimension: Dimension, access: Access) -> Self {
        Self {
            name,
            dimension,
            access,
            range: None,
            slew: None,
            ramp_step: None,
            rest: None,
            safe: None,
            resolution: None,
            accuracy: None,
        }
    }
}
