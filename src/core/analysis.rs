//! From recorded points to the answer: which points count, the two-photon detuning of their samples, and the
//! answer in the user's units. Fits through `fit`; reads no file and keeps nothing.

mod rows;
mod series;

use serde::{Deserialize, Serialize};

use crate::answer::{Answer, Stated};
use crate::bench::{Bench, LightShift, Physics};
use crate::entry::PointRecord;
use crate::fit::Estimate;
use crate::fit::field::{FieldOptions, Transverse, Zeeman};
use crate::fit::line::{LineOptions, LineShape};
use crate::fit::scan::{self, ScanFit, ScanOptions};
use crate::itinerary::{PointKind, Shape};
use crate::quantity::{QuantityName, Setting};
use crate::trace;

pub use rows::{Row, Samples, is_stepped, rows};

/// How far the true coil constant may lie from the bench file's nominal one, relative.
pub const NOMINAL_TOLERANCE: f64 = 0.3;

/// One recorded point with the samples that it keeps.
pub type Recorded = (PointRecord, Vec<trace::Acquisition>);

/// What the scan says, and the fit behind it.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize)]
pub struct Analysis {
    /// The answer in the user's units.
    pub answer: Answer,
    /// The fit; `None` where there was none, each statement of the answer then says why.
    pub fit: Option<ScanFit>,
    /// Indices of the rows (see [`Row::index`]) that went into the fit, in the order of `fit.points`.
    pub indices: Vec<u64>,
}

/// Analyses a coil scan: every grid point whose samples are beyond doubt goes into one fit of the field law.
pub fn analyse(bench: &Bench, shape: Shape, points: &[Recorded]) -> Analysis {
    match attempt(bench, shape, points) {
        Ok(analysis) => analysis,
        Err(reason) => Analysis {
            answer: unanswered(&reason),
            fit: None,
            indices: Vec::new(),
        },
    }
}

/// Two-photon detuning of a sample, Hz, from the two radio frequencies, Hz: the difference of the beams'
/// optical shifts, less a light shift that is known.
pub fn detuning(physics: &Physics, probe: f64, control: f64) -> f64 {
    let shift = match physics.light_shift {
        LightShift::Known { value, .. } => value,
        LightShift::Unknown => 0.0,
    };
    physics.probe_modulator.factor() * probe - physics.control_modulator.factor() * control - shift
}

/// Radio frequency of the control beam at a point, Hz: what the sequence set, or else the one that puts zero
/// detuning into the middle of the window.
pub fn control_frequency(physics: &Physics, record: &PointRecord) -> f64 {
    let name = format!("{}.frequency", physics.control_modulator.generator);
    let set = record
        .coordinate(&name)
        .and_then(|coordinate| coordinate.readback.or(coordinate.setpoint.number()));
    let ratio = physics.probe_modulator.factor() / physics.control_modulator.factor();
    set.unwrap_or(record.sweep_centre * ratio)
}

/// Coil current of a point, A: the supply's readback, or else the setpoint. `None` where the sequence does not
/// set the coil.
pub fn coil_current(coil: &QuantityName, record: &PointRecord) -> Option<f64> {
    let coordinate = record.coordinate(coil.as_str())?;
    coordinate.readback.or(coordinate.setpoint.number())
}

/// What the field fit is told of the bench.
pub fn field_options(physics: &Physics) -> FieldOptions {
    let slope = physics.slope();
    FieldOptions {
        zeeman: Zeeman {
            slope: slope.abs(),
            quadratic: 0.0,
        },
        handedness: slope.signum(),
        nominal: physics.coil_constant,
        tolerance: NOMINAL_TOLERANCE,
        light_shift_known: matches!(physics.light_shift, LightShift::Known { .. }),
    }
}

/// What the fit of one trace is told.
pub fn line_options(shape: Shape, dark: f64) -> LineOptions {
    LineOptions {
        shape: match shape {
            Shape::Lorentzian => LineShape::Lorentzian,
            Shape::MixedLorentzian => LineShape::Mixed,
        },
        dark,
        ..LineOptions::default()
    }
}

/// Detuning (Hz) and signal (V) of every sample of an acquisition; `None` without a recorded signal.
pub fn samples(
    physics: &Physics,
    record: &PointRecord,
    acquisition: &trace::Acquisition,
) -> Option<(Vec<f64>, Vec<f64>)> {
    let signal = acquisition.channel("signal")?;
    let control = control_frequency(physics, record);
    let axis = (0..acquisition.axis.samples)
        .map(|i| detuning(physics, acquisition.axis.frequency(i), control))
        .collect();
    Some((axis, signal.values().collect()))
}

fn attempt(bench: &Bench, shape: Shape, points: &[Recorded]) -> Result<Analysis, String> {
    let physics = bench
        .physics
        .as_ref()
        .ok_or("the bench file has no [physics]")?;
    let line = line_options(shape, dark_level(physics, points));
    let rows: Vec<_> = rows(physics, points)
        .into_iter()
        .filter(|row| !row.doubtful && !row.acquisitions.is_empty())
        .collect();
    if !stepped(&rows) {
        return Ok(Analysis {
            answer: series::strongest(bench, points, &rows, &line, &not_stepped(physics)),
            fit: None,
            indices: Vec::new(),
        });
    }
    let scan_points: Vec<_> = rows.iter().filter_map(Row::borrowed).collect();
    let options = ScanOptions {
        line,
        field: field_options(physics),
        expected_width: Some(physics.linewidth),
    };
    let fit = scan::fit_scan(&scan_points, &options).map_err(|error| error.to_string())?;
    Ok(Analysis {
        answer: match condemned(&fit) {
            Some(reason) => Answer {
                chi2: Some(fit.field.chi2),
                dof: Some(fit.field.dof as u64),
                used: fit.used as u64,
                ..unanswered(&reason)
            },
            None => state(bench, physics, &fit),
        },
        indices: rows
            .iter()
            .filter(|row| row.current.is_some())
            .map(|row| row.index)
            .collect(),
        fit: Some(fit),
    })
}

/// Why the field law cannot be believed: its chi-square lies so far above the degrees of freedom that no noise makes
/// it so. The sigmas of such a fit mean nothing, and widening them would hide it.
fn condemned(fit: &ScanFit) -> Option<String> {
    let (chi2, dof) = (fit.field.chi2, fit.field.dof as f64);
    let believable = dof + 8.0 * (2.0 * dof).sqrt() + 16.0;
    (chi2 > believable || !chi2.is_finite()).then(|| {
        format!("the field law does not describe the points: chi-square {chi2:.0} for {dof} degrees of freedom")
    })
}

fn not_stepped(physics: &Physics) -> String {
    format!(
        "`{}` was not stepped over at least four good points",
        physics.coil
    )
}

fn stepped(rows: &[Row]) -> bool {
    let mut currents: Vec<_> = rows.iter().filter_map(|row| row.current).collect();
    currents.sort_by(f64::total_cmp);
    currents.dedup();
    currents.len() >= 4
}

/// Signal without probe light, V: the mean over the backgrounds with the probe off; 0 where there is none.
fn dark_level(physics: &Physics, points: &[Recorded]) -> f64 {
    let probe = format!("{}.output", physics.probe_modulator.generator);
    let dark = |record: &PointRecord| {
        matches!(record.kind, PointKind::Background { .. })
            && record
                .coordinate(&probe)
                .is_some_and(|coordinate| coordinate.setpoint == Setting::Switch(false))
    };
    let means: Vec<_> = points
        .iter()
        .filter(|(record, _)| dark(record))
        .flat_map(|(_, trace)| trace)
        .filter_map(|acquisition| acquisition.channel("signal")?.mean())
        .collect();
    match means.len() {
        0 => 0.0,
        count => means.iter().sum::<f64>() / count as f64,
    }
}

/// The fit in the user's units, with the budget that the bench file declares for the current's scale.
fn state(bench: &Bench, physics: &Physics, fit: &ScanFit) -> Answer {
    let field = &fit.field;
    let accuracy = bench
        .property(&physics.coil)
        .and_then(|property| property.accuracy);
    let systematic = |of: &dyn Fn(f64, f64) -> f64| accuracy.map(|a| of(a.gain, a.offset));
    let constant = field.coil_constant.value;
    let null = field.null_current.value;
    let mut coil_constant = measured(field.coil_constant, 1e6, "nT/mA");
    coil_constant.systematic = systematic(&|gain, _| gain * constant.abs() * 1e6);
    let mut residual_field = measured(field.residual_field, 1e9, "nT");
    residual_field.systematic = systematic(&|_, offset| offset * constant.abs() * 1e9);
    if field.includes_light_shift {
        residual_field = residual_field.qualified("including light shift");
    }
    let mut null_current = measured(field.null_current, 1e3, "mA");
    null_current.systematic = systematic(&|gain, offset| offset.hypot(gain * null) * 1e3);
    let at = fit
        .named_at
        .map(|current| format!("at {:.2} mA", current * 1e3 + 0.0));
    Answer {
        coil_constant,
        residual_field,
        null_current,
        transverse_field: transverse(&field.transverse),
        linewidth: named(fit.linewidth, 1e-3, "kHz", &at),
        contrast: named(fit.contrast, 100.0, "%", &at),
        chi2: Some(field.chi2),
        dof: Some(field.dof as u64),
        used: fit.used as u64,
        sigma_over_scatter: fit.scatter.filter(|s| *s > 0.0).map(f64::recip),
    }
}

fn measured(estimate: Estimate, scale: f64, unit: &str) -> Stated {
    Stated::measured(estimate.value * scale, estimate.sigma * scale, unit)
}

fn named(estimate: Option<Estimate>, scale: f64, unit: &str, at: &Option<String>) -> Stated {
    let stated = match estimate {
        Some(estimate) => measured(estimate, scale, unit),
        None => return Stated::missing("no point shows a line that stands apart", unit),
    };
    match at {
        Some(at) => stated.qualified(at.clone()),
        None => stated,
    }
}

fn transverse(transverse: &Transverse) -> Stated {
    match transverse {
        Transverse::Measured(estimate) => measured(*estimate, 1e9, "nT"),
        Transverse::UpperLimit { limit, .. } => Stated::limit(limit * 1e9, "nT"),
        Transverse::CannotTell { reason } => {
            Stated::missing(format!("cannot tell: {reason}"), "nT")
        }
    }
}

fn unanswered(reason: &str) -> Answer {
    Answer {
        coil_constant: Stated::missing(reason, "nT/mA"),
        residual_field: Stated::missing(reason, "nT"),
        null_current: Stated::missing(reason, "mA"),
        transverse_field: Stated::missing(reason, "nT"),
        linewidth: Stated::missing(reason, "kHz"),
        contrast: Stated::missing(reason, "%"),
        chi2: None,
        dof: None,
        used: 0,
        sigma_over_scatter: None,
    }
}
