//! Reading `[timing]`, `[physics]` and `[specimen]`.

use super::read::Draft;
use super::{
    AxisCalibration, AxisKind, Handedness, LightShift, Modulator, OpticalLine, Physics, Species,
    Specimen, Starts, Timing, instrument,
};
use crate::channel::Role;
use crate::diagnostic::Diagnostic;
use crate::document::{Findings, Table, Text};
use crate::quantity::{Dimension, QuantityName};

/// Axis as written, before its calibration is known.
#[derive(Clone, Copy)]
enum Axis {
    SteppedList,
    PhaseContinuous,
    FmRamp,
    FreeRunning,
}

pub(super) fn timing(
    draft: &Draft,
    mut table: Table<'_>,
    findings: &mut Findings,
) -> Option<Timing> {
    let starts = table
        .required("starts", findings)
        .and_then(|text| starts(draft, &text, findings));
    let wire = table
        .text("wire", findings)
        .map(|t| t.text)
        .unwrap_or_default();
    let delay = table.quantity("delay", Dimension::Time, findings);
    let mains = table.positive("mains", Dimension::Frequency, findings);
    let axis = table.required("axis", findings);
    let axis = axis.and_then(|text| axis_kind(&text, &mut table, findings));
    table.finish(findings);
    Some(Timing {
        starts: starts?,
        wire,
        delay: delay.unwrap_or(0.0),
        axis: axis?,
        mains: mains.unwrap_or(50.0),
    })
}

fn starts(draft: &Draft, text: &Text, findings: &mut Findings) -> Option<Starts> {
    match text.text.as_str() {
        "bus" => return Some(Starts::Bus),
        "line" => return Some(Starts::Line),
        name if !draft.knows(name) => {
            let mut known = draft.names();
            known.extend(["bus", "line"]);
            findings.push(instrument::unknown(text, &known));
            return None;
        }
        _ => {}
    }
    match draft.bench.instruments.get(&text.text)?.role {
        Role::RfGenerator => Some(Starts::Generator(text.text.clone())),
        Role::Digitizer => Some(Starts::Digitizer(text.text.clone())),
        role => {
            let message = format!("`{}` is a {}; it starts no trace", text.text, role.name());
            findings.push(
                Diagnostic::error("D0314", text.file, message)
                    .at(text.span.clone())
                    .help("name an rf-generator or a digitizer, or write \"bus\" or \"line\""),
            );
            None
        }
    }
}

fn axis_kind(text: &Text, table: &mut Table<'_>, findings: &mut Findings) -> Option<AxisKind> {
    let axis = findings.choice(
        text,
        &[
            ("stepped-list", Axis::SteppedList),
            ("phase-continuous", Axis::PhaseContinuous),
            ("fm-ramp", Axis::FmRamp),
            ("free-running", Axis::FreeRunning),
        ],
    )?;
    let inner = table.table("calibration", findings);
    let needs = matches!(axis, Axis::FmRamp | Axis::FreeRunning);
    if needs && inner.is_none() {
        if !table.has("calibration") {
            let message = format!(
                "a `{}` axis is only as good as its calibration, and none is given",
                text.text
            );
            findings.push(
                Diagnostic::error("D0310", text.file, message)
                    .at(text.span.clone())
                    .help("add [timing.calibration] with gain, gain_sigma, offset, offset_sigma"),
            );
        }
        return None;
    }
    let calibration = inner.and_then(|inner| calibration(inner, findings));
    match (axis, calibration) {
        (Axis::SteppedList, _) => Some(AxisKind::SteppedList),
        (Axis::PhaseContinuous, _) => Some(AxisKind::PhaseContinuous),
        (Axis::FmRamp, calibration) => Some(AxisKind::FmRamp(calibration?)),
        (Axis::FreeRunning, calibration) => Some(AxisKind::FreeRunning(calibration?)),
    }
}

fn calibration(mut table: Table<'_>, findings: &mut Findings) -> Option<AxisCalibration> {
    let gain = table.required("gain", findings);
    let gain = gain.and_then(|text| findings.positive(&text, Dimension::Ratio));
    let offset = table.required("offset", findings);
    let offset = offset.and_then(|text| findings.quantity(&text, Dimension::Frequency));
    let gain_sigma = table.required("gain_sigma", findings);
    let gain_sigma = gain_sigma.and_then(|text| findings.not_negative(&text, Dimension::Ratio));
    let offset_sigma = table.required("offset_sigma", findings);
    let offset_sigma = offset_sigma.and_then(|t| findings.not_negative(&t, Dimension::Frequency));
    table.finish(findings);
    Some(AxisCalibration {
        gain: gain?,
        gain_sigma: gain_sigma?,
        offset: offset?,
        offset_sigma: offset_sigma?,
    })
}

pub(super) fn physics(
    draft: &Draft,
    mut table: Table<'_>,
    findings: &mut Findings,
) -> Option<Physics> {
    let species = word(
        &mut table,
        "species",
        &[("85Rb", Species::Rb85), ("87Rb", Species::Rb87)],
        findings,
    );
    let line = word(
        &mut table,
        "line",
        &[("D1", OpticalLine::D1), ("D2", OpticalLine::D2)],
        findings,
    );
    let hands = [
        ("sigma+", Handedness::SigmaPlus),
        ("sigma-", Handedness::SigmaMinus),
    ];
    let handedness = word(&mut table, "handedness", &hands, findings);
    let ground = table.whole("ground", (1, 3), findings);
    if !table.has("ground") {
        table.missing("ground", findings);
    }
    let pair = table.signed_pair("pair", (-3, 3), findings);
    if !table.has("pair") {
        table.missing("pair", findings);
    }
    let linewidth = table.required("linewidth", findings);
    let linewidth = linewidth.and_then(|text| findings.positive(&text, Dimension::Frequency));
    let coil = table.required("coil", findings);
    let coil = coil.and_then(|text| coil_current(draft, &text, findings));
    let coil_constant = coil_constant(&mut table, findings);
    let light_shift = light_shift(&mut table, findings);
    let probe = modulator(draft, &mut table, "probe", findings);
    let control = modulator(draft, &mut table, "control", findings);
    let place = table.place("pair");
    let file = table.file;
    table.finish(findings);
    let read = Physics {
        species: species?,
        line: line?,
        ground: u8::try_from(ground?.value).ok()?,
        pair: pair.map(|(a, b)| (a as i8, b as i8))?,
        handedness: handedness?,
        linewidth: linewidth?,
        coil: coil?,
        coil_constant: coil_constant?,
        light_shift: light_shift?,
        probe_modulator: probe?,
        control_modulator: control?,
    };
    match impossible(&read) {
        None => Some(read),
        Some(message) => {
            findings.push(Diagnostic::error("D0315", file, message).at(place));
            None
        }
    }
}

fn word<T: Copy>(
    table: &mut Table<'_>,
    key: &'static str,
    choices: &[(&str, T)],
    findings: &mut Findings,
) -> Option<T> {
    let text = table.required(key, findings)?;
    findings.choice(&text, choices)
}

/// The coil constant is signed, but not zero: a coil that makes no field cannot be planned for.
fn coil_constant(table: &mut Table<'_>, findings: &mut Findings) -> Option<f64> {
    let text = table.required("coil_constant", findings)?;
    let value = findings.quantity(&text, Dimension::FieldPerCurrent)?;
    if value != 0.0 {
        return Some(value);
    }
    let message = "the nominal coil constant must not be zero";
    findings.push(Diagnostic::error("D0210", text.file, message).at(text.span));
    None
}

fn coil_current(draft: &Draft, text: &Text, findings: &mut Findings) -> Option<QuantityName> {
    let name = draft.quantity(text, findings)?;
    let dimension = draft.bench.property(&name)?.dimension;
    if dimension == Dimension::Current {
        return Some(name);
    }
    let message = format!(
        "`coil` is {} here; it must name the coil's current",
        dimension.name()
    );
    findings.push(Diagnostic::error("D0201", text.file, message).at(text.span.clone()));
    None
}

/// "unknown", or a table with value and sigma.
fn light_shift(table: &mut Table<'_>, findings: &mut Findings) -> Option<LightShift> {
    if !table.has("light_shift") {
        table.missing("light_shift", findings);
    }
    if !table.holds_table("light_shift") {
        let text = table.text("light_shift", findings)?;
        return findings.choice(&text, &[("unknown", LightShift::Unknown)]);
    }
    let mut inner = table.table("light_shift", findings)?;
    let value = inner.required("value", findings);
    let value = value.and_then(|text| findings.quantity(&text, Dimension::Frequency));
    let sigma = inner.required("sigma", findings);
    let sigma = sigma.and_then(|text| findings.not_negative(&text, Dimension::Frequency));
    inner.finish(findings);
    Some(LightShift::Known {
        value: value?,
        sigma: sigma?,
    })
}

/// `[physics.probe]` or `[physics.control]`.
fn modulator(
    draft: &Draft,
    table: &mut Table<'_>,
    key: &'static str,
    findings: &mut Findings,
) -> Option<Modulator> {
    if !table.has(key) {
        table.missing(key, findings);
    }
    let mut inner = table.table(key, findings)?;
    let generator = inner.required("generator", findings);
    let generator = generator.and_then(|text| {
        if !draft.knows(&text.text) {
            findings.push(instrument::unknown(&text, &draft.names()));
            return None;
        }
        let role = draft.bench.instruments.get(&text.text)?.role;
        if role == Role::RfGenerator {
            return Some(text.text);
        }
        let message = format!("`{}` is a {}, not an rf-generator", text.text, role.name());
        findings.push(Diagnostic::error("D0314", text.file, message).at(text.span));
        None
    });
    let order = inner.signed("order", (-10, 10), findings).unwrap_or(1);
    if order == 0 {
        let message = "`order` 0 is the undiffracted beam: it does not follow the RF";
        findings.push(Diagnostic::error("D0210", inner.file, message).at(inner.place("order")));
    }
    let passes = inner
        .whole("passes", (1, 2), findings)
        .map_or(1, |w| w.value);
    inner.finish(findings);
    Some(Modulator {
        generator: generator?,
        order: i32::try_from(order).ok().filter(|order| *order != 0)?,
        passes: u32::try_from(passes).ok()?,
    })
}

/// A pair of states that probe and control of opposite handedness cannot join.
fn impossible(read: &Physics) -> Option<String> {
    let twice = read.species.isotope().twice_nuclear_spin;
    // F = I - 1/2 and I + 1/2; 2 I is odd for both isotopes.
    let levels = [(twice - 1) / 2, (twice + 1) / 2];
    let ground = i32::from(read.ground);
    if !levels.contains(&ground) {
        return Some(format!(
            "{} has no ground level F = {ground}; it has F = {} and F = {}",
            name_of(read.species),
            levels[0],
            levels[1]
        ));
    }
    let (probe, control) = read.pair;
    if probe.unsigned_abs().max(control.unsigned_abs()) > read.ground {
        return Some(format!(
            "F = {ground} has no state with m = {probe} or m = {control}"
        ));
    }
    let wanted = match read.handedness {
        Handedness::SigmaPlus => 2,
        Handedness::SigmaMinus => -2,
    };
    (control - probe != wanted).then(|| {
        format!(
            "pair [{probe}, {control}] (probe's state first) does not fit the probe's handedness: \
             the control's m must be the probe's {} 2",
            if wanted > 0 { "plus" } else { "minus" }
        )
    })
}

pub(super) fn specimen(mut table: Table<'_>, findings: &mut Findings) -> Specimen {
    let mut words = |key| {
        table
            .text(key, findings)
            .map(|t| t.text)
            .unwrap_or_default()
    };
    let (name, description, buffer_gas) =
        (words("name"), words("description"), words("buffer_gas"));
    let read = Specimen {
        name,
        description,
        length: table.positive("length", Dimension::Length, findings),
        diameter: table.positive("diameter", Dimension::Length, findings),
        buffer_gas,
        pressure: table.positive("pressure", Dimension::Pressure, findings),
    };
    table.finish(findings);
    read
}

fn name_of(species: Species) -> &'static str {
    match species {
        Species::Rb85 => "85Rb",
        Species::Rb87 => "87Rb",
    }
}
