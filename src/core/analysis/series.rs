//! What a run without a stepped coil still answers: width and contrast of its strongest line, and where that was.

use crate::answer::{Answer, Stated};
use crate::bench::Bench;
use crate::entry::PointRecord;
use crate::fit::Estimate;
use crate::fit::line::{LineOptions, Peak, fit_line};
use crate::itinerary::PointKind;

use super::{Recorded, Row, unanswered};

/// Linewidth and contrast of the row with the highest contrast; everything else is missing for `reason`.
pub fn strongest(
    bench: &Bench,
    points: &[Recorded],
    rows: &[Row],
    options: &LineOptions,
    reason: &str,
) -> Answer {
    let contrast = |peak: &Peak| peak.contrast.map_or(0.0, |contrast| contrast.value);
    let best = rows
        .iter()
        .filter_map(|row| Some((row, peak(row, options)?)))
        .max_by(|(_, one), (_, other)| contrast(one).total_cmp(&contrast(other)));
    let mut answer = unanswered(reason);
    let Some((row, peak)) = best else {
        answer.linewidth = Stated::missing("no point shows a line", "kHz");
        answer.contrast = Stated::missing("no point shows a line", "%");
        return answer;
    };
    let place = place(bench, points, row);
    answer.linewidth = stated(peak.fwhm, 1e-3, "kHz").qualified(place.clone());
    answer.contrast = match peak.contrast {
        Some(contrast) => stated(contrast, 100.0, "%").qualified(place),
        None => Stated::missing("no level to compare the peak with", "%"),
    };
    answer
}

/// The line through all acquisitions of a row together: what lags one way leads the other.
fn peak(row: &Row, options: &LineOptions) -> Option<Peak> {
    let join = |part: fn(&super::Samples) -> &Vec<f64>| -> Vec<f64> {
        row.acquisitions.iter().flat_map(part).copied().collect()
    };
    let (detuning, signal) = (join(|s| &s.detuning), join(|s| &s.signal));
    let line = fit_line(&detuning, &signal, options).ok()?;
    line.peak().cloned()
}

fn stated(estimate: Estimate, scale: f64, unit: &str) -> Stated {
    Stated::measured(estimate.value * scale, estimate.sigma * scale, unit)
}

/// Where a row stands: the quantities that differ between points, "at control.power 0 dBm".
fn place(bench: &Bench, points: &[Recorded], row: &Row) -> String {
    let record = |index| {
        points
            .iter()
            .map(|(record, _)| record)
            .find(|r| r.index == index)
    };
    let Some(here) = record(row.index) else {
        return format!("at point {}", row.index);
    };
    let differs = |quantity: &str| {
        let setpoint = |record: &PointRecord| record.coordinate(quantity).map(|c| c.setpoint);
        points
            .iter()
            .filter(|(other, _)| matches!(other.kind, PointKind::Grid { .. }))
            .any(|(other, _)| setpoint(other) != setpoint(here))
    };
    let words: Vec<String> = here
        .coordinates
        .iter()
        .filter(|coordinate| differs(coordinate.quantity.as_str()))
        .filter_map(|coordinate| {
            let dimension = bench.property(&coordinate.quantity)?.dimension;
            let value = coordinate.setpoint.display(dimension);
            Some(format!("{} {value}", coordinate.quantity))
        })
        .collect();
    if words.is_empty() {
        format!("at point {}", row.index)
    } else {
        format!("at {}", words.join(", "))
    }
}
