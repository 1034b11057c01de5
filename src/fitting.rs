//! The fits of a run: one line per completed point while it goes on, the answer at its end from what the
//! journal kept. Keeps no samples; touches no instrument.

use std::path::{Path, PathBuf};
use std::sync::Arc;

use darkline_core::analysis::{self, Analysis, Recorded};
use darkline_core::answer::Answer;
use darkline_core::bench::{Bench, Physics};
use darkline_core::entry::PointRecord;
use darkline_core::fit::line::{LineFit, fit_line};
use darkline_core::itinerary::Shape;
use darkline_core::sequencer::{Fitted, Verdict};
use darkline_core::trace::Trace;

use crate::archive;
use crate::instrument::driver::Boxed;
use crate::journal::JournalError;
use crate::seams::Fitter;

/// Most samples that the answer's fit holds in memory at once; a longer run is answered from every n-th point.
const MOST_SAMPLES: usize = 40_000_000;

/// Fits on a thread of the runtime's pool, and answers from the journal of one run folder.
#[derive(Debug, Clone)]
pub struct RunFitter {
    bench: Arc<Bench>,
    shape: Shape,
    folder: PathBuf,
}

impl RunFitter {
    /// Fits the points of the run in `folder`.
    pub fn new(bench: Arc<Bench>, shape: Shape, folder: PathBuf) -> Self {
        Self {
            bench,
            shape,
            folder,
        }
    }
}

impl Fitter for RunFitter {
    fn fit(&self, record: Box<PointRecord>, trace: Arc<Trace>) -> Boxed<'static, Fitted> {
        let (bench, shape) = (Arc::clone(&self.bench), self.shape);
        Box::pin(async move {
            let fitted = tokio::task::spawn_blocking(move || {
                fit_point(bench.physics.as_ref(), shape, &record, &trace)
            });
            match fitted.await {
                Ok(fitted) => fitted,
                // The fit's own panic becomes the caller's: it decides what follows for the bench.
                Err(error) if error.is_panic() => std::panic::resume_unwind(error.into_panic()),
                Err(_) => FAILED,
            }
        })
    }

    fn completed(&self, _record: &PointRecord) {}

    fn answer(&self) -> Boxed<'static, Option<Answer>> {
        let (bench, shape, folder) = (Arc::clone(&self.bench), self.shape, self.folder.clone());
        Box::pin(async move {
            let analysed =
                tokio::task::spawn_blocking(move || analyse_folder(&bench, shape, &folder)).await;
            match analysed {
                Ok(Ok(analysis)) => Some(analysis.answer),
                Ok(Err(error)) => {
                    tracing::warn!("no answer: {error}");
                    None
                }
                Err(error) => {
                    tracing::error!("no answer: the analysis panicked: {error}");
                    None
                }
            }
        })
    }
}

const FAILED: Fitted = Fitted {
    line: None,
    verdict: Verdict::Failed,
};

const NOTHING: Fitted = Fitted {
    line: None,
    verdict: Verdict::Nothing,
};

/// Fits one line to all acquisitions of a point together. The verdict's frequency is the probe's RF.
pub fn fit_point(
    physics: Option<&Physics>,
    shape: Shape,
    record: &PointRecord,
    trace: &Trace,
) -> Fitted {
    let Some(physics) = physics else {
        return NOTHING;
    };
    if analysis::is_stepped(trace) {
        // One step of a stepped probe is no line: its row is fitted at the end.
        return NOTHING;
    }
    let (mut detuning, mut signal) = (Vec::new(), Vec::new());
    for (axis, volts) in trace
        .iter()
        .filter_map(|acquisition| analysis::samples(physics, record, acquisition))
    {
        detuning.extend(axis);
        signal.extend(volts);
    }
    if signal.is_empty() {
        return NOTHING;
    }
    match fit_line(&detuning, &signal, &analysis::line_options(shape, 0.0)) {
        Ok(line) => Fitted {
            verdict: verdict(physics, record, &line),
            line: Some(line),
        },
        Err(error) => {
            tracing::warn!("point {}: {error}", record.index);
            FAILED
        }
    }
}

fn verdict(physics: &Physics, record: &PointRecord, line: &LineFit) -> Verdict {
    let Some(peak) = line.peak() else {
        return Verdict::NoPeak;
    };
    let zero = analysis::detuning(physics, 0.0, analysis::control_frequency(physics, record));
    Verdict::Peak((peak.centre.value - zero) / physics.probe_modulator.factor())
}

/// Analyses the completed points in the journal of a run folder.
///
/// # Errors
/// Where the journal cannot be read.
pub fn analyse_folder(
    bench: &Bench,
    shape: Shape,
    folder: &Path,
) -> Result<Analysis, JournalError> {
    Ok(analysis::analyse(bench, shape, &recorded(folder)?))
}

/// The completed points of a run folder with their samples, thinned evenly where they would not fit in memory.
///
/// # Errors
/// Where the journal cannot be read.
pub fn recorded(folder: &Path) -> Result<Vec<Recorded>, JournalError> {
    let mut kept: Vec<Recorded> = Vec::new();
    let (mut stride, mut samples, mut seen) = (1_usize, 0_usize, 0_usize);
    for point in archive::read_points(folder)? {
        let (record, trace) = point?;
        seen += 1;
        if (seen - 1) % stride != 0 {
            continue;
        }
        let trace = trace.unwrap_or_default();
        samples += size(&trace);
        kept.push((record, trace));
        while samples > MOST_SAMPLES && kept.len() > 64 {
            stride *= 2;
            kept = kept.into_iter().step_by(2).collect();
            samples = kept.iter().map(|(_, trace)| size(trace)).sum();
        }
    }
    Ok(kept)
}

fn size(trace: &Trace) -> usize {
    trace
        .iter()
        .flat_map(|acquisition| &acquisition.channels)
        .map(|channel| channel.codes.len())
        .sum()
}
