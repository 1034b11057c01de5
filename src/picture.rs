//! The figure of a run from its recorded points and their analysis. Draws nothing itself: see `report`.

use std::collections::BTreeMap;

use darkline_core::analysis::{self, Analysis, Recorded, Row};
use darkline_core::bench::{Bench, Physics};
use darkline_core::fit::field::{FieldFit, Regime};

use crate::report::{PicturePoint, PictureSweep, ScanPicture};

/// Most samples of one column of the map.
const COLUMN: usize = 400;
/// Points at which the fitted field line is drawn.
const LINE: usize = 400;

/// The picture of a coil scan: its grid points, the centres that were fitted, and the law through them.
pub fn scan_picture(
    bench: &Bench,
    title: &str,
    points: &[Recorded],
    analysis: &Analysis,
) -> ScanPicture {
    let empty = ScanPicture {
        title: title.to_owned(),
        points: Vec::new(),
        field_line: Vec::new(),
        answer: analysis.answer.clone(),
    };
    let Some(physics) = bench.physics.as_ref() else {
        return empty;
    };
    let fitted = fitted_centres(analysis);
    ScanPicture {
        points: analysis::rows(physics, points)
            .iter()
            .filter_map(|row| point(row, &fitted))
            .collect(),
        field_line: analysis
            .fit
            .as_ref()
            .map_or_else(Vec::new, |fit| field_line(physics, &fit.field, points)),
        ..empty
    }
}

/// What the fit says of one point.
#[derive(Debug, Clone, Copy)]
struct Fitted {
    centre: Option<(f64, f64)>,
    expected: Option<f64>,
    used: bool,
}

fn fitted_centres(analysis: &Analysis) -> BTreeMap<u64, Fitted> {
    let Some(fit) = &analysis.fit else {
        return BTreeMap::new();
    };
    // Points without a centre do not reach the field law: the two lists are matched by the current.
    let mut laws = fit.field.points.iter().peekable();
    analysis
        .indices
        .iter()
        .zip(&fit.points)
        .map(|(index, point)| {
            let law = laws.next_if(|law| law.current == point.current);
            let fitted = Fitted {
                centre: law
                    .map(|law| (law.observed, law.sigma))
                    .or(point.centre.map(|centre| (centre.value, centre.sigma))),
                expected: law.map(|law| law.predicted),
                used: law.is_some_and(|law| law.regime != Regime::LeftOut),
            };
            (*index, fitted)
        })
        .collect()
}

fn point(row: &Row, fitted: &BTreeMap<u64, Fitted>) -> Option<PicturePoint> {
    let fit = fitted.get(&row.index);
    let (mut detuning, mut signal) = (Vec::new(), Vec::new());
    for samples in &row.acquisitions {
        let thin = PictureSweep::decimated(&samples.detuning, &samples.signal, COLUMN);
        detuning.extend(thin.detuning);
        signal.extend(thin.signal);
    }
    Some(PicturePoint {
        current: row.current?,
        centre: fit.and_then(|fit| fit.centre),
        flagged: row.flagged,
        used: fit.is_some_and(|fit| fit.used),
        expected: fit.and_then(|fit| fit.expected),
        residual: None,
        sweep: (!signal.is_empty()).then_some(PictureSweep { detuning, signal }),
    })
}

/// The line that follows the axial field through the null: the outermost peak of the side it is on.
fn field_line(physics: &Physics, field: &FieldFit, points: &[Recorded]) -> Vec<(f64, f64)> {
    let currents = points
        .iter()
        .filter_map(|(record, _)| analysis::coil_current(&physics.coil, record));
    let (low, high) = currents.fold(
        (f64::INFINITY, f64::NEG_INFINITY),
        |(low, high), current| (low.min(current), high.max(current)),
    );
    if low >= high {
        return Vec::new();
    }
    let options = analysis::field_options(physics);
    let offset = field.offset.map_or(0.0, |offset| offset.value);
    let across = field
        .transverse_squared
        .map_or(0.0, |squared| squared.value);
    let law = |current: f64| {
        let axial = field.axial(current);
        let magnitude = (axial * axial + across).max(0.0).sqrt();
        let (spacing, _) = options.zeeman.spacing(magnitude);
        (
            axial,
            offset + options.handedness * axial.signum() * 2.0 * spacing,
        )
    };
    let mut line = Vec::new();
    let mut side = f64::NAN;
    for i in 0..=LINE {
        let current = low + (high - low) * i as f64 / LINE as f64;
        let (axial, centre) = law(current);
        if axial * side < 0.0 {
            // The peak that dominates changes at the null: the line breaks there.
            line.push((current, f64::NAN));
        }
        side = axial;
        line.push((current, centre));
    }
    line
}
