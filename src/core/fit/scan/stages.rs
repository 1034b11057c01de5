//! The stages of a scan's fit.

use super::super::field::{FieldPoint, fit_field};
use super::super::line::{combine_lines, fit_line};
use super::{FitError, PointFit, PointFlag, ScanFit, ScanOptions, ScanPoint};

pub(super) fn run(points: &[ScanPoint], options: &ScanOptions) -> Result<ScanFit, FitError> {
    let mut fits = Vec::with_capacity(points.len());
    let mut centres = Vec::new();
    for point in points {
        let lines = point
            .acquisitions
            .iter()
            .map(|a| fit_line(a.detuning, a.signal, &options.line))
            .collect::<Result<Vec<_>, _>>()?;
        let together = combine_lines(point.acquisitions.iter().map(|a| a.direction).zip(&lines));
        let mut flags = Vec::new();
        match &together {
            Some(t) => centres.push(FieldPoint {
                current: point.current,
                centre: t.centre.value,
                sigma: t.centre.sigma,
                fwhm: t.fwhm.value,
            }),
            None => flags.push(PointFlag::NoPeak),
        }
        let centre = together.as_ref().map(|t| t.centre);
        fits.push(PointFit {
            current: point.current,
            lines,
            centre,
            fwhm: together.map(|t| t.fwhm),
            flags,
        });
    }
    let field = fit_field(&centres, &options.field)?;
    let used = field.points.len();
    Ok(ScanFit {
        field,
        linewidth: None,
        contrast: None,
        named_at: None,
        linewidth_trend: None,
        lag: None,
        scatter: None,
        used,
        points: fits,
    })
}
