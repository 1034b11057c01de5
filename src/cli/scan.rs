//! `darkline scan`: runs a sequence in the foreground and prints its answer. Decides nothing about the scan:
//! that is the sequencer's part.

mod recording;

use std::path::{Path, PathBuf};
use std::sync::Arc;

use darkline_core::answer::{Answer, Stated};
use darkline_core::entry::{Header, State};
use darkline_core::itinerary::Itinerary;
use serde_json::json;
use tokio::sync::{mpsc, watch};

use super::arguments::ScanOptions;
use super::diagnostics::{self, Files};
use super::links::Reached;
use super::progress::{self, Shown};
use super::signals::{self, Ask};
use super::{Exit, check, opening, output};
use crate::bench::OpenBench;
use crate::conductor::{self, Command, Progress, RunEnd};
use crate::fitting::{self, RunFitter};
use crate::report;
use crate::{archive, picture};
use recording::Recording;

/// Runs `scan`.
pub async fn run(options: &ScanOptions) -> Exit {
    match attempt(options).await {
        Ok(exit) => exit,
        Err((exit, message)) => {
            diagnostics::show_error(&message);
            refuse(options, &message);
            exit
        }
    }
}

async fn attempt(options: &ScanOptions) -> Result<Exit, (Exit, String)> {
    let wrong = |message| (Exit::WrongFile, message);
    let files = Files::read(&options.bench.bench, Some(&options.sequence)).map_err(wrong)?;
    let itinerary = match check::plan(&files) {
        Ok(itinerary) => itinerary,
        Err(findings) => {
            diagnostics::show(&files, &findings);
            let found = diagnostics::as_json(&files, &findings);
            if options.bench.json {
                output::json(&json!({"run": null, "state": "refused", "findings": found}));
            }
            return Ok(Exit::WrongFile);
        }
    };
    diagnostics::show(&files, itinerary.warnings());
    let mut asks = signals::listen().map_err(|error| (Exit::Fault, error.to_string()))?;
    let reached = Reached::settle(options.bench.world(), options.bench.links.as_deref())
        .await
        .map_err(wrong)?;
    let mut recording = Recording::begin(&options.into, &files, &itinerary)
        .map_err(|message| (Exit::Fault, message))?;
    let opened = tokio::select! {
        opened = opening::open(&options.bench.bench, itinerary.bench(), &reached, recording.tape()) => opened,
        Some(_) = asks.recv() => {
            let reason = "stopped by the user before anything was set";
            recording.close_unopened(State::Stopped, reason, &[]);
            return Err((Exit::Stopped, reason.to_owned()));
        }
    };
    let (bench, reach) = match opened {
        Ok(opened) => opened,
        Err(faults) => {
            for fault in &faults {
                diagnostics::show_fault(fault);
            }
            let reason = "the bench could not be opened; nothing was set";
            recording.close_unopened(State::Faulted, reason, &faults);
            refuse(options, reason);
            return Ok(Exit::Fault);
        }
    };
    let (end, asked) = conduct(bench, &itinerary, &mut recording, asks).await;
    // The bench has been left: the links may go.
    drop(reach);
    drop(reached);
    recording.finish().await;
    Ok(conclude(options, &itinerary, recording.folder(), &end, asked).await)
}

/// Runs the itinerary to its end, showing its progress and passing on what signals ask.
async fn conduct(
    bench: OpenBench,
    itinerary: &Itinerary,
    recording: &mut Recording,
    mut asks: mpsc::Receiver<Ask>,
) -> (RunEnd, Option<Ask>) {
    let (commands, orders) = mpsc::channel(8);
    let (progress, watched) = watch::channel(Progress::default());
    let shown = tokio::spawn(progress::show(Shown::of(itinerary), watched));
    let fitter = RunFitter::new(
        Arc::clone(itinerary.bench()),
        itinerary.resonance().shape,
        recording.folder().to_owned(),
    );
    let header: Header = recording.header().clone();
    let seams = recording.seams(Arc::new(fitter));
    let mut run = std::pin::pin!(conductor::run(
        bench,
        itinerary.clone(),
        header,
        seams,
        orders,
        progress
    ));
    let mut first = None;
    let end = loop {
        tokio::select! {
            end = &mut run => break end,
            Some(ask) = asks.recv() => {
                first.get_or_insert(ask);
                let command = match ask {
                    Ask::Stop(signal) => {
                        tracing::info!("{signal}: ending the scan, the bench goes to rest");
                        Command::Cut
                    }
                    Ask::Safe => Command::Safe,
                };
                // A full queue holds the same command already.
                let _ = commands.try_send(command);
            }
        }
    };
    let _ = shown.await;
    (end, first)
}

/// Builds the archive and the figure, prints the answer, and says how it ended.
async fn conclude(
    options: &ScanOptions,
    itinerary: &Itinerary,
    folder: &Path,
    end: &RunEnd,
    asked: Option<Ask>,
) -> Exit {
    if let Err(error) = archive::spawn_build(folder).await {
        diagnostics::show_error(&format!(
            "{error}; the journal is whole: `darkline rebuild {}` builds it later",
            folder.display()
        ));
    }
    let figure = draw(itinerary, folder).await;
    if let Some(fault) = &end.fault {
        diagnostics::show_fault(fault);
    }
    for (instrument, why) in &end.safe_report.unreached {
        diagnostics::show_error(&format!(
            "`{instrument}` MAY NOT BE SAFE: {why}; look at it now"
        ));
    }
    if end.state != State::Finished {
        diagnostics::show_error(&format!("the scan was {}: {}", end.state, end.reason));
    }
    if options.bench.json {
        output::json(&summary(folder, end, figure.as_deref()));
    } else {
        print_answer(folder, end, figure.as_deref());
    }
    exit_of(end, asked)
}

fn exit_of(end: &RunEnd, asked: Option<Ask>) -> Exit {
    match (end.is_safe(), end.state, asked) {
        (false, _, _) => Exit::MayNotBeSafe,
        (true, State::Finished, _) => Exit::Finished,
        (true, State::Stopped, Some(_)) => Exit::Stopped,
        (true, _, _) => Exit::Fault,
    }
}

async fn draw(itinerary: &Itinerary, folder: &Path) -> Option<PathBuf> {
    let bench = Arc::clone(itinerary.bench());
    let (title, shape) = (itinerary.title().to_owned(), itinerary.resonance().shape);
    let folder = folder.to_owned();
    let drawn = tokio::task::spawn_blocking(move || {
        let points = fitting::recorded(&folder).map_err(|error| error.to_string())?;
        let analysis = darkline_core::analysis::analyse(&bench, shape, &points);
        let picture = picture::scan_picture(&bench, &title, &points, &analysis);
        if picture.points.is_empty() {
            return Ok(None);
        }
        let [_, png] =
            report::write_figure(&picture, &folder).map_err(|error| error.to_string())?;
        Ok::<_, String>(Some(png))
    });
    match drawn.await {
        Ok(Ok(figure)) => figure,
        Ok(Err(error)) => {
            diagnostics::show_error(&format!("no figure: {error}"));
            None
        }
        Err(error) => {
            diagnostics::show_error(&format!("no figure: drawing it panicked: {error}"));
            None
        }
    }
}

fn print_answer(folder: &Path, end: &RunEnd, figure: Option<&Path>) {
    let run = report::RunSummary {
        done: end.run.done,
        flagged: end.run.flagged,
        repeated: end.run.repeated,
        folder: folder.display().to_string(),
        state: end.state.to_string(),
    };
    if let Some(answer) = &end.run.answer {
        let (colour, width) = output::terminal();
        output::text(&report::answer_text(answer, colour, width, &run));
    } else {
        output::text(&format!(
            "no answer; {} points done, in {}\n",
            run.done, run.folder
        ));
    }
    if let Some(figure) = figure {
        output::text(&format!("figure           {}\n", figure.display()));
    }
}

fn summary(folder: &Path, end: &RunEnd, figure: Option<&Path>) -> serde_json::Value {
    let answer = end.run.answer.as_ref();
    json!({
        "run": folder.display().to_string(),
        "state": end.state,
        "reason": end.reason,
        "points": {
            "done": end.run.done,
            "flagged": end.run.flagged,
            "repeated": end.run.repeated,
            "used": answer.map(|answer| answer.used),
        },
        "answer": answer.map(statements),
        "chi2": answer.and_then(|answer| answer.chi2),
        "dof": answer.and_then(|answer| answer.dof),
        "sigma_over_scatter": answer.and_then(|answer| answer.sigma_over_scatter),
        "figure": figure.map(|figure| figure.display().to_string()),
        "safe": end.is_safe(),
        "fault": end.fault,
    })
}

fn statements(answer: &Answer) -> serde_json::Value {
    let pairs = answer
        .statements()
        .map(|(name, stated): (_, &Stated)| (name.to_owned(), json!(stated)));
    serde_json::Value::Object(pairs.into_iter().collect())
}

/// The one object of `--json` for a scan that did not begin.
fn refuse(options: &ScanOptions, reason: &str) {
    if options.bench.json {
        output::json(&json!({"run": null, "state": "refused", "reason": reason}));
    }
}
