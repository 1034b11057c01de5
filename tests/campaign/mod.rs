//! The honest-answer campaign: whole runs in virtual time on seeded worlds, each answer held against its truth.
//! Shared by the test that runs a share of it and by the program that prints the whole table.

use std::fmt::Write as _;
use std::sync::Arc;

use darkline::bench::open_bench;
use darkline::conductor::{Progress, run};
use darkline::seams::{MemoryRecorder, Seams};
use darkline_core::analysis::{self, Recorded};
use darkline_core::answer::{Answer, Stated};
use darkline_core::diagnostic::Fault;
use darkline_core::entry::{EntryKind, Header, State};
use darkline_core::itinerary;
use darkline_drivers::link::{Dial, dial_with};
use darkline_drivers::map::CommandMap;
use darkline_mock::MockBench;
use darkline_mock::truth::{Campaign, LineTruth, Truth};
use darkline_mock::world::World;
use tokio::sync::{mpsc, watch};
use tokio::time::Instant;

/// What one run answered, in sigmas from the truth.
#[derive(Debug, Clone, Default)]
pub struct Outcome {
    /// The seed.
    pub seed: u64,
    /// (answer - truth) / sigma by the answer's name.
    pub pulls: Vec<(&'static str, f64)>,
    /// For an upper limit on the transverse field: whether it covers the truth.
    pub limit_covers: Option<bool>,
    /// The transverse field was neither measured nor limited.
    pub cannot_tell: bool,
    /// What went wrong, where the run did not answer.
    pub failure: Option<String>,
    /// Chi-square and degrees of freedom of the field law.
    pub chi2: (f64, f64),
}

/// Runs one seed's whole scan in virtual time and holds its answer against the truth.
pub fn run_seed(seed: u64) -> Outcome {
    let campaign = Truth::seeded(seed);
    let runtime = tokio::runtime::Builder::new_current_thread()
        .enable_all()
        .start_paused(true)
        .build()
        .unwrap();
    match runtime.block_on(scan(&campaign)) {
        Ok(answer) => judge(seed, &campaign, &answer),
        Err(failure) => Outcome {
            seed,
            failure: Some(failure),
            ..Outcome::default()
        },
    }
}

async fn scan(campaign: &Campaign) -> Result<Answer, String> {
    let (bench, _, itinerary) =
        itinerary::check(&bench_text(campaign), &sequence_text(campaign))
            .map_err(|findings| format!("the files are refused: {findings:?}"))?;
    let mock = Arc::new(MockBench::new(
        World::new(campaign.truth.clone()),
        Instant::now(),
    ));
    let opened = open_bench(
        Arc::clone(&bench),
        |declared| {
            let (mock, name) = (Arc::clone(&mock), declared.name.clone());
            let gone = || std::io::Error::from(std::io::ErrorKind::NotConnected);
            let dial = dial_with("memory", move || mock.connect(&name).ok_or_else(gone));
            Ok(Box::new(dial) as Box<dyn Dial>)
        },
        |declared| {
            CommandMap::find(&declared.map, &[])
                .map_err(|error| Fault::new("F0000", error.to_string()))
        },
    )
    .await
    .map_err(|faults| format!("the bench does not open: {faults:?}"))?;
    let (mut seams, _) = Seams::in_memory();
    let mut recorder = MemoryRecorder::default();
    recorder.keeps_samples = true;
    let recorder = Arc::new(recorder);
    seams.recorder = Arc::clone(&recorder) as _;
    let (_orders, commands) = mpsc::channel(1);
    let (progress, _watched) = watch::channel(Progress::default());
    let shape = itinerary.resonance().shape;
    let end = run(
        opened,
        itinerary,
        Header::default(),
        seams,
        commands,
        progress,
    )
    .await;
    if end.state != State::Finished || !end.is_safe() {
        return Err(format!("the run ended {}: {}", end.state, end.reason));
    }
    let points = recorded(&recorder);
    Ok(analysis::analyse(&bench, shape, &points).answer)
}

fn recorded(recorder: &MemoryRecorder) -> Vec<Recorded> {
    let entries = recorder.entries();
    let records = entries.iter().filter_map(|entry| match &entry.kind {
        EntryKind::Point(record) => Some((**record).clone()),
        _ => None,
    });
    records
        .zip(recorder.traces())
        .map(|(record, trace)| (record, (*trace).clone()))
        .collect()
}

/// The shipped bench file with what this case's user would have written.
fn bench_text(campaign: &Campaign) -> String {
    let limit = 1.5 * campaign.current_range;
    let shipped = include_str!("../../mock/bench.toml");
    let mut text = String::new();
    for line in shipped.lines() {
        let key = line.split(['=', ' ']).next().unwrap_or_default();
        let replaced = match key {
            "coil_constant" => format!(
                "coil_constant = \"{} nT/mA\"",
                campaign.nominal_constant * 1e6
            ),
            "slew" => format!("slew = \"{} A/s\"", 20.0 * limit),
            "ramp_step" => format!("ramp_step = \"{} A\"", limit / 20.0),
            "linewidth" => format!("linewidth = \"{} Hz\"", linewidth(campaign)),
            "light_shift" => "light_shift = { value = \"0 Hz\", sigma = \"0 Hz\" }".to_owned(),
            _ => line.to_owned(),
        };
        let _ = writeln!(text, "{replaced}");
    }
    text.replace("-25 mA .. 25 mA", &format!("-{limit} A .. {limit} A"))
        .replace(
            "[\"-26 mA\", \"26 mA\"]",
            &format!("[\"-{0} A\", \"{0} A\"]", 1.1 * limit),
        )
}

fn linewidth(campaign: &Campaign) -> f64 {
    match campaign.truth.line {
        LineTruth::Lorentzian { fwhm, .. } => fwhm,
        LineTruth::Bloch { .. } => 6e3,
    }
}

fn sequence_text(campaign: &Campaign) -> String {
    let range = campaign.current_range;
    let within = (range * 1e-3).max(4e-6);
    format!(
        r#"
title = "Honest answer"
[set]
"control.frequency" = "80 MHz"
"control.power"     = "0 dBm"
"control.output"    = "on"
"probe.power"       = "-3 dBm"
"probe.output"      = "on"
"coil.output"       = "on"
[[step]]
quantity = "coil.current"
from     = "-{range} A"
to       = "{range} A"
count    = 21
order    = "rising"
settle   = {{ within = "{within} A", readings = 3, at_least = "20 ms", give_up = "5 s" }}
[sweep]
quantity  = "probe.frequency"
centre    = "80 MHz"
span      = "{span} Hz"
duration  = "{duration} s"
direction = "both"
record    = {{ signal = "scope.ch1", lock = "scope.ch3" }}
samples   = 1000
averages  = 1
[[background]]
every = 20
with  = {{ "probe.output" = "off" }}
[resonance]
shape  = "lorentzian"
follow = false
"#,
        span = campaign.span,
        duration = campaign.duration,
    )
}

fn judge(seed: u64, campaign: &Campaign, answer: &Answer) -> Outcome {
    let truth = &campaign.truth;
    let constant = truth.coil.constant * 1e6;
    let residual = truth.field.residual * 1e9;
    let mut outcome = Outcome {
        seed,
        chi2: (
            answer.chi2.unwrap_or(f64::NAN),
            answer.dof.unwrap_or(0) as f64,
        ),
        ..Outcome::default()
    };
    let mut pull = |name, stated: &Stated, truth: f64| match (stated.value, stated.sigma) {
        (Some(value), Some(sigma)) => outcome.pulls.push((name, (value - truth) / sigma)),
        _ => {
            outcome.failure = Some(format!(
                "no {name}: {}",
                stated.reason.clone().unwrap_or_default()
            ));
        }
    };
    pull("coil_constant", &answer.coil_constant, constant);
    pull("residual_field", &answer.residual_field, residual);
    pull("null_current", &answer.null_current, -residual / constant);
    if let LineTruth::Lorentzian { fwhm, contrast, .. } = truth.line {
        pull("linewidth", &answer.linewidth, fwhm * 1e-3);
        // The peak of a tilted field carries a share of the contrast: held against the truth only without tilt.
        if truth.field.transverse < 20e-9 {
            pull("contrast", &answer.contrast, contrast * 100.0);
        }
    }
    let transverse = truth.field.transverse * 1e9;
    let stated = &answer.transverse_field;
    match (stated.value, stated.upper_limit) {
        (Some(_), _) => pull("transverse_field", stated, transverse),
        (None, Some(limit)) => outcome.limit_covers = Some(limit >= transverse),
        (None, None) => outcome.cannot_tell = true,
    }
    outcome
}

/// Share of answers within one and two sigma, per answer, over all outcomes.
#[derive(Debug, Clone, Copy)]
pub struct Coverage {
    /// Answers counted.
    pub count: usize,
    /// Share within one sigma.
    pub one: f64,
    /// Share within two sigma.
    pub two: f64,
    /// Mean pull.
    pub mean: f64,
}

/// The coverage of one answer.
pub fn coverage(outcomes: &[Outcome], name: &str) -> Coverage {
    let pulls: Vec<f64> = outcomes
        .iter()
        .flat_map(|outcome| &outcome.pulls)
        .filter(|(of, _)| *of == name)
        .map(|(_, pull)| *pull)
        .collect();
    let share = |limit: f64| {
        pulls.iter().filter(|pull| pull.abs() <= limit).count() as f64 / pulls.len() as f64
    };
    Coverage {
        count: pulls.len(),
        one: share(1.0),
        two: share(2.0),
        mean: pulls.iter().sum::<f64>() / pulls.len() as f64,
    }
}

/// The answers that are held against the truth.
pub const NAMES: [&str; 6] = [
    "coil_constant",
    "residual_field",
    "null_current",
    "transverse_field",
    "linewidth",
    "contrast",
];

/// The table that the program prints.
pub fn table(outcomes: &[Outcome]) -> String {
    let mut text = String::from("answer             runs  within 1 s  within 2 s  mean pull\n");
    for name in NAMES {
        let c = coverage(outcomes, name);
        let _ = writeln!(
            text,
            "{name:<17} {:>5}  {:>8.1} %  {:>8.1} %  {:>+9.3}",
            c.count,
            100.0 * c.one,
            100.0 * c.two,
            c.mean
        );
    }
    let limits: Vec<bool> = outcomes.iter().filter_map(|o| o.limit_covers).collect();
    let covered = limits.iter().filter(|covers| **covers).count();
    let _ = writeln!(
        text,
        "upper limits      {:>5}  cover the truth {:.1} %",
        limits.len(),
        100.0 * covered as f64 / limits.len() as f64
    );
    let count = |which: &dyn Fn(&Outcome) -> bool| outcomes.iter().filter(|o| which(o)).count();
    let _ = writeln!(text, "cannot tell       {:>5}", count(&|o| o.cannot_tell));
    let _ = writeln!(
        text,
        "without an answer {:>5}",
        count(&|o| o.failure.is_some())
    );
    let chi2: f64 = outcomes
        .iter()
        .map(|o| o.chi2.0)
        .filter(|x| x.is_finite())
        .sum();
    let dof: f64 = outcomes.iter().map(|o| o.chi2.1).sum();
    let _ = writeln!(text, "chi2 / dof        {:.4}", chi2 / dof);
    text
}
