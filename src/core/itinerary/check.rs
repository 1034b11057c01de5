//! What `check` refuses although every word is known: limits, ramps, windows, settling.

use super::model::{DwellPlan, Settle, SweepPlan};
use super::plan::Axis;
use super::resolve::Scene;
use crate::bench::{Polarity, Property};
use crate::channel::Role;
use crate::diagnostic::{Diagnostic, FileRole};
use crate::document::{Span, Text, fault};
use crate::quantity::{Dimension, display};
use crate::sequence::{Sequence, SettleText, Sweep};

/// A sweep faster than this, in units of pi FWHM^2, distorts the line.
const FASTEST: f64 = 0.03;

/// A setpoint must lie within its range, its supply's polarity and its interlocks. `by`: who asks.
pub(super) fn limit(scene: &mut Scene<'_>, property: &Property, value: f64, text: &Text, by: &str) {
    if let Some((code, message)) = past(scene, property, value) {
        let help = match code {
            "D0513" => format!("change {by}: keep it at or above zero"),
            "D0518" => format!("change {by}: keep it within the interlock's bounds"),
            _ => format!(
                "change {by}, or raise the limit of `{}` in the bench file if the bench bears it",
                property.name
            ),
        };
        scene.findings.push(fault(code, text, message).help(help));
    }
}

/// Code and message where a value passes a limit.
fn past(scene: &Scene<'_>, property: &Property, value: f64) -> Option<(&'static str, String)> {
    let bench = scene.bench();
    let instrument = bench.instruments.get(property.name.instrument())?;
    if scene.draft.broken.contains(&instrument.name) {
        // Its limits are not to be trusted, and the bench file's own findings say so.
        return None;
    }
    let show = |value| display(value, property.dimension);
    let what = property.name.property();
    if instrument.polarity == Some(Polarity::Unipolar)
        && property.dimension == Dimension::Current
        && value < 0.0
    {
        let message = format!(
            "{what} {} is negative, but `{}` is unipolar",
            show(value),
            instrument.name
        );
        return Some(("D0513", message));
    }
    let (low, high) = property.range?;
    if value > high {
        let message = format!(
            "{what} {} exceeds the {} limit of `{}`",
            show(value),
            show(high),
            instrument.name
        );
        return Some(("D0501", message));
    }
    if value < low {
        let message = format!(
            "{what} {} is below the {} limit of `{}`",
            show(value),
            show(low),
            instrument.name
        );
        return Some(("D0501", message));
    }
    let trips = bench.interlocks.iter().find(|interlock| {
        interlock.quantity == property.name
            && (interlock.lowest.is_some_and(|low| value < low)
                || interlock.highest.is_some_and(|high| value > high))
    })?;
    let message = format!(
        "{what} {} would trip the interlock on `{}`",
        show(value),
        trips.quantity
    );
    Some(("D0518", message))
}

/// A degauss goes to both signs.
pub(super) fn degauss(scene: &mut Scene<'_>, property: &Property, size: f64, text: &Text) {
    for value in [size, -size] {
        if let Some((code, message)) = past(scene, property, value) {
            let code = if code == "D0501" { "D0503" } else { code };
            let message = format!("degaussing: {message}");
            scene.findings.push(
                fault(code, text, message).help("lower `from` of [degauss]; it alternates in sign"),
            );
            return;
        }
    }
}

/// Seconds that the longest ramp of a slot takes; zero where it steps at once.
pub(super) fn longest_ramp(scene: &Scene<'_>, index: usize, property: &Property) -> f64 {
    let reach = scene.reach.get(index).and_then(|reach| reach.all);
    let approach = scene.slots.get(index).and_then(|slot| slot.approach);
    match (reach, property.slew) {
        (Some((low, high)), Some(slew)) => {
            (high - low + 2.0 * approach.unwrap_or(0.0).abs()) / slew
        }
        _ => 0.0,
    }
}

/// Settling must be possible with this readback and within its own time.
pub(super) fn settle(
    scene: &mut Scene<'_>,
    property: &Property,
    settle: &Settle,
    text: &SettleText,
    longest: f64,
) {
    let show = |value| display(value, property.dimension.difference());
    if let (Some(within), Some(resolution), Some(place)) =
        (settle.within, property.resolution, &text.within)
        && within < 2.0 * resolution * (1.0 - 1e-9)
    {
        let message = format!(
            "settle within {} is finer than twice the {} resolution of `{}`: it may never settle",
            show(within),
            show(resolution),
            property.name
        );
        let help = format!("give at least {}", show(2.0 * resolution));
        scene
            .findings
            .push(fault("D0504", place, message).help(help));
    }
    let place = text.give_up.as_ref().or(text.at_least.as_ref());
    let span = place.map_or(text.span.clone(), |t| t.span.clone());
    let time = |value| display(value, Dimension::Time);
    if settle.give_up < longest {
        let message = format!(
            "`{}` gives up after {}, but its longest ramp takes {}",
            property.name,
            time(settle.give_up),
            time(longest)
        );
        scene.findings.push(
            Diagnostic::error("D0505", FileRole::Sequence, message)
                .at(span)
                .help("raise `give_up`, or `slew` in the bench file if the bench bears it"),
        );
    } else if settle.give_up < settle.at_least {
        let message = format!(
            "`{}` gives up after {}, before it may settle after {}",
            property.name,
            time(settle.give_up),
            time(settle.at_least)
        );
        scene
            .findings
            .push(Diagnostic::error("D0515", FileRole::Sequence, message).at(span));
    }
}

/// A sweep must be slow enough for the line, and stay within the modulator's band.
pub(super) fn sweep(scene: &mut Scene<'_>, plan: &SweepPlan, text: &Sweep) {
    let bench = scene.bench();
    let (Some(physics), Some(timing)) = (&bench.physics, &bench.timing) else {
        return;
    };
    let show = |value| display(value, Dimension::Frequency);
    let per_line = std::f64::consts::PI * physics.linewidth * physics.linewidth;
    let speed = plan.span / plan.duration / per_line;
    if speed > FASTEST {
        let slowest = plan.span / (FASTEST * per_line);
        let message = format!(
            "{} in {} is {speed:.3} pi FWHM^2 for a line {} wide, over {FASTEST}: the line would be distorted",
            show(plan.span),
            display(plan.duration, Dimension::Time),
            show(physics.linewidth)
        );
        let help = format!(
            "sweep for at least {}, or narrow `span`",
            display(slowest, Dimension::Time)
        );
        scene
            .findings
            .push(fault("D0506", &text.duration, message).help(help));
    }
    let periods = plan.duration * timing.mains;
    if (periods - periods.round()).abs() > 0.01 || periods < 0.5 {
        let message =
            format!("the sweep lasts {periods:.2} periods of the mains: hum does not average out");
        let whole = periods.ceil().max(1.0) / timing.mains;
        scene.findings.push(
            Diagnostic::warning("D0507", FileRole::Sequence, message)
                .at(text.duration.span.clone())
                .help(format!("sweep for {}", display(whole, Dimension::Time))),
        );
    }
}

/// What can only be judged once everything is known.
pub(super) fn whole(
    scene: &mut Scene<'_>,
    sequence: &Sequence,
    sweep: Option<&SweepPlan>,
    dwell: Option<&DwellPlan>,
    axes: &[Axis],
) {
    approaches(scene, sequence);
    if let (Some(plan), Some(text)) = (sweep, &sequence.sweep) {
        window(scene, plan, text);
    }
    if dwell.is_some() {
        stepped_window(scene);
    }
    outputs(scene, sequence, sweep);
    ticks(scene, sequence, sweep, dwell, axes);
}

/// Approaches count against the limits.
fn approaches(scene: &mut Scene<'_>, sequence: &Sequence) {
    for track in sequence.tracks() {
        let Some(approach) = &track.approach else {
            continue;
        };
        let name = crate::quantity::QuantityName::new(&track.quantity.text).ok();
        let Some(index) = name.and_then(|name| scene.slot_of(&name)) else {
            continue;
        };
        let by = scene.slots.get(index).and_then(|slot| slot.approach);
        let reach = scene.reach.get(index).and_then(|reach| reach.settings);
        let (Some(by), Some((low, high))) = (by, reach) else {
            continue;
        };
        let farthest = if by < 0.0 { low + by } else { high + by };
        scene.widen(index, farthest, false);
        let bench = scene.bench();
        let name = scene.slots.get(index).map(|slot| slot.name.clone());
        let Some(property) = name.and_then(|name| bench.property(&name)) else {
            continue;
        };
        // Where the setpoint itself is past the limit, that is said already.
        let end = if by < 0.0 { low } else { high };
        if past(scene, property, end).is_none()
            && let Some((code, message)) = past(scene, property, farthest)
        {
            let code = if code == "D0501" { "D0502" } else { code };
            let message = format!(
                "approaching {}: {message}",
                display(end, property.dimension)
            );
            scene.findings.push(
                Diagnostic::error(code, FileRole::Sequence, message)
                    .at(approach.span.clone())
                    .help("narrow the step, lower `by`, or approach from the other side"),
            );
        }
    }
}

/// Lowest and highest place of the line, Hz of the probe's RF, about its place `zero` at zero field.
fn excursion(scene: &Scene<'_>, zero: f64) -> Option<(f64, f64)> {
    let physics = scene.bench().physics.as_ref()?;
    let index = scene.slot_of(&physics.coil)?;
    let (low, high) = scene.reach.get(index)?.settings?;
    let slope = physics.rf_per_current();
    let ends = (zero + slope * low, zero + slope * high);
    Some((ends.0.min(ends.1), ends.0.max(ends.1)))
}

/// Where the line lies at zero field by the control's frequency; `otherwise` where that is not fixed.
fn zero_field(scene: &Scene<'_>, otherwise: f64) -> f64 {
    let fixed = || {
        let physics = scene.bench().physics.as_ref()?;
        let name = format!("{}.frequency", physics.control_modulator.generator);
        let index = scene.slot_of(&crate::quantity::QuantityName::new(&name).ok()?)?;
        let (low, high) = scene.reach.get(index)?.settings?;
        let control = physics.control_modulator.factor();
        (low == high).then(|| control * low / physics.probe_modulator.factor())
    };
    fixed().unwrap_or(otherwise)
}

/// The window must lie in the modulator's band, and hold the line unless it follows it.
fn window(scene: &mut Scene<'_>, plan: &SweepPlan, text: &Sweep) {
    let bench = scene.bench();
    let show = |value| display(value, Dimension::Frequency);
    let half = plan.span / 2.0;
    let follows = plan.follow;
    let followed = excursion(scene, plan.centre).filter(|_| follows);
    let (low, high) = followed.unwrap_or((plan.centre, plan.centre));
    let (low, high) = (low - half, high + half);
    let range = bench.property(&plan.quantity).and_then(|p| p.range);
    if let Some((bottom, top)) = range
        && (low < bottom || high > top)
    {
        let message = format!(
            "the window {} .. {}{} leaves the band {} .. {} of `{}`",
            show(low),
            show(high),
            if follows { ", following the line," } else { "" },
            show(bottom),
            show(top),
            plan.quantity
        );
        scene
            .findings
            .push(fault("D0508", &text.width, message).help("narrow `span`, or move `centre`"));
    }
    if follows {
        return;
    }
    let zero = zero_field(scene, plan.centre);
    let place = text.centre.span.start.min(text.width.span.start)
        ..text.centre.span.end.max(text.width.span.end);
    leaves(
        scene,
        zero,
        (plan.centre - half, plan.centre + half),
        place,
        "write follow = true in [resonance], widen `span`, or step less current",
    );
}

/// The same for a probe that is stepped as the innermost step.
fn stepped_window(scene: &mut Scene<'_>) {
    let Some(physics) = &scene.bench().physics else {
        return;
    };
    let name = format!("{}.frequency", physics.probe_modulator.generator);
    let index = crate::quantity::QuantityName::new(&name)
        .ok()
        .and_then(|name| scene.slot_of(&name));
    let Some(reach) = index.and_then(|index| scene.reach.get(index)) else {
        return;
    };
    let span = reach.span.clone();
    let Some((low, high)) = reach
        .settings
        .filter(|(low, high)| reach.stepped && low < high)
    else {
        return;
    };
    let zero = zero_field(scene, 0.5 * (low + high));
    leaves(
        scene,
        zero,
        (low, high),
        span,
        "step the probe farther, or the current less",
    );
}

/// Says where the line, with its width, leaves a window that stands still.
fn leaves(scene: &mut Scene<'_>, zero: f64, window: (f64, f64), span: Span, help: &str) {
    let Some(width) = scene.bench().physics.as_ref().map(|p| p.linewidth) else {
        return;
    };
    let Some((low, high)) = excursion(scene, zero) else {
        return;
    };
    if low - width >= window.0 && high + width <= window.1 {
        return;
    }
    let show = |value| display(value, Dimension::Frequency);
    let message = format!(
        "by the nominal coil constant the line goes from {} to {}, and leaves the window {} .. {}",
        show(low),
        show(high),
        show(window.0),
        show(window.1)
    );
    scene.findings.push(
        Diagnostic::error("D0509", FileRole::Sequence, message)
            .at(span)
            .help(help),
    );
}

/// Stepping or sweeping an instrument whose output nobody switches on records nothing.
fn outputs(scene: &mut Scene<'_>, sequence: &Sequence, sweep: Option<&SweepPlan>) {
    let mut used: Vec<(String, Span)> = Vec::new();
    for (slot, reach) in scene.slots.iter().zip(&scene.reach) {
        if slot.dimension != Dimension::Switch && reach.stepped {
            used.push((slot.name.instrument().to_owned(), reach.span.clone()));
        }
    }
    if let (Some(plan), Some(text)) = (sweep, &sequence.sweep) {
        let span = text.quantity.span.clone();
        used.push((plan.quantity.instrument().to_owned(), span));
    }
    for (name, span) in used {
        let role = scene.bench().instruments.get(&name).map(|i| i.role);
        // An oven is kept warm between runs.
        if role.is_none_or(|role| role == Role::TemperatureController) {
            continue;
        }
        let output = format!("{name}.output");
        let on = scene
            .slots
            .iter()
            .zip(&scene.reach)
            .any(|(slot, reach)| slot.name.as_str() == output && reach.turned_on);
        if !on {
            let message =
                format!("`{name}` is used, but the sequence never switches `{output}` on");
            scene.findings.push(
                Diagnostic::warning("D0516", FileRole::Sequence, message)
                    .at(span)
                    .help(format!("add \"{output}\" = \"on\" to [set]")),
            );
        }
    }
}

/// A step in time whose ticks come faster than a point takes falls behind.
fn ticks(
    scene: &mut Scene<'_>,
    sequence: &Sequence,
    sweep: Option<&SweepPlan>,
    dwell: Option<&DwellPlan>,
    axes: &[Axis],
) {
    let Some(every) = axes.first().and_then(|axis| axis.every) else {
        return;
    };
    let swept = sweep.map(|s| s.duration * s.directions.len() as f64 * f64::from(s.averages));
    let dwelt = dwell.map(|d| d.duration * f64::from(d.averages));
    let inner: f64 = axes
        .iter()
        .skip(1)
        .map(|axis| axis.places() as f64)
        .product();
    let taken = swept.or(dwelt).unwrap_or(0.0) * inner;
    if taken > every {
        let span = sequence
            .steps
            .first()
            .map_or(0..0, |step| step.span.clone());
        let message = format!(
            "recording takes {} per tick, longer than the {} between ticks",
            display(taken, Dimension::Time),
            display(every, Dimension::Time)
        );
        scene
            .findings
            .push(Diagnostic::warning("D0517", FileRole::Sequence, message).at(span));
    }
}
