//! The plain data that a figure is drawn from, so that drawing depends on no archive and no fit.
//! Holds and thins the data; never draws them.

use darkline_core::answer::Answer;

/// Everything the figure of one coil scan shows.
#[derive(Debug, Clone, PartialEq)]
pub struct ScanPicture {
    /// Title of the sequence.
    pub title: String,
    /// The points, in any order; drawn sorted by current.
    pub points: Vec<PicturePoint>,
    /// The fitted field law as (current in A, detuning in Hz), in drawing order; a pair that is not
    /// finite breaks the line. Empty without a fit.
    pub field_line: Vec<(f64, f64)>,
    /// The answer for the caption.
    pub answer: Answer,
}

/// One point of the scan. All detunings share one zero, the nominal zero-field resonance.
#[derive(Debug, Clone, PartialEq, Default)]
pub struct PicturePoint {
    /// Coil current, A.
    pub current: f64,
    /// Centre of the fitted line and its standard uncertainty, Hz; `None` where no peak was found.
    pub centre: Option<(f64, f64)>,
    /// The point carries a flag.
    pub flagged: bool,
    /// The centre entered the field law.
    pub used: bool,
    /// Centre by the field law, Hz; `None` without one.
    pub expected: Option<f64>,
    /// Centre minus the field law, Hz; `None` takes the difference of `centre` and `expected`.
    pub residual: Option<f64>,
    /// The mean signal; `None` where nothing was recorded.
    pub sweep: Option<PictureSweep>,
}

impl PicturePoint {
    /// The residual given, or the difference of centre and law; `None` where it is no finite number.
    pub fn residual(&self) -> Option<f64> {
        let difference = || Some(self.centre?.0 - self.expected?);
        self.residual
            .or_else(difference)
            .filter(|hertz| hertz.is_finite())
    }

    /// Standard uncertainty of the centre, Hz; `None` where it is not finite or not positive.
    pub fn sigma(&self) -> Option<f64> {
        let (_, sigma) = self.centre?;
        (sigma.is_finite() && sigma > 0.0).then_some(sigma)
    }
}

/// The mean signal of one point over its own detuning range.
#[derive(Debug, Clone, PartialEq, Default)]
pub struct PictureSweep {
    /// Two-photon detuning of each sample, Hz, rising or falling.
    pub detuning: Vec<f64>,
    /// Signal at each detuning, V; a surplus on either side is ignored.
    pub signal: Vec<f64>,
}

impl PictureSweep {
    /// The samples averaged in runs of neighbours so that at most `most` remain.
    pub fn decimated(detuning: &[f64], signal: &[f64], most: usize) -> Self {
        let samples = detuning.len().min(signal.len());
        let run = samples.div_ceil(most.max(1)).max(1);
        let means = |values: &[f64]| -> Vec<f64> {
            let runs = values.chunks(run);
            runs.map(|run| run.iter().sum::<f64>() / run.len() as f64)
                .collect()
        };
        Self {
            detuning: means(&detuning[..samples]),
            signal: means(&signal[..samples]),
        }
    }

    /// The finite samples as (detuning in Hz, signal in V), sorted by detuning.
    pub fn sorted(&self) -> Vec<(f64, f64)> {
        let pairs = self
            .detuning
            .iter()
            .copied()
            .zip(self.signal.iter().copied());
        let mut pairs: Vec<_> = pairs
            .filter(|(detuning, signal)| detuning.is_finite() && signal.is_finite())
            .collect();
        pairs.sort_by(|left, right| left.0.total_cmp(&right.0));
        pairs
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn decimation_averages_and_bounds() {
        let axis: Vec<f64> = (0..10).map(f64::from).collect();
        let thin = PictureSweep::decimated(&axis, &axis[..9], 3);
        assert_eq!(thin.detuning, [1.0, 4.0, 7.0]);
        assert_eq!(thin.signal, thin.detuning);
        assert_eq!(PictureSweep::decimated(&[], &[], 0).detuning.len(), 0);
    }

    #[test]
    fn a_falling_sweep_with_gaps_is_sorted_and_cleaned() {
        let sweep = PictureSweep {
            detuning: vec![3.0, 2.0, 1.0, f64::NAN],
            signal: vec![0.3, f64::NAN, 0.1, 0.4],
        };
        assert_eq!(sweep.sorted(), [(1.0, 0.1), (3.0, 0.3)]);
    }
}
