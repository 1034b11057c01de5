//! Shows how a scan goes on: a bar on a terminal, a line now and then elsewhere. Always on standard error.

use std::io::{IsTerminal, Write};
use std::time::{Duration, Instant};

use darkline_core::itinerary::Itinerary;
use darkline_core::quantity::{Dimension, QuantityName, display};
use indicatif::{ProgressBar, ProgressDrawTarget, ProgressStyle};
use tokio::sync::watch;

use super::check::duration;
use crate::conductor::Progress;

/// Time between lines where standard error is no terminal.
const LINE_EVERY: Duration = Duration::from_secs(10);
/// Time between looks at the progress.
const LOOK_EVERY: Duration = Duration::from_millis(100);

/// What is shown of an itinerary.
#[derive(Debug, Clone)]
pub struct Shown {
    points: u64,
    seconds: f64,
    stepped: Vec<(QuantityName, Dimension)>,
}

impl Shown {
    /// The stepped quantities, the number of points and the time that is planned.
    pub fn of(itinerary: &Itinerary) -> Self {
        let forecast = itinerary.forecast();
        Self {
            points: forecast.points,
            seconds: forecast.seconds.total,
            stepped: itinerary
                .steps()
                .iter()
                .flat_map(|step| &step.quantities)
                .map(|quantity| (quantity.name.clone(), quantity.dimension))
                .collect(),
        }
    }

    /// The present setpoints of what is stepped: "coil.current 12.0 mA".
    fn setpoints(&self, progress: &Progress) -> String {
        let present = self.stepped.iter().filter_map(|(name, dimension)| {
            let value = progress.setpoints.get(name)?;
            Some(format!("{name} {}", display(rounded(*value), *dimension)))
        });
        present.collect::<Vec<_>>().join(", ")
    }

    /// Time left, s: by the pace so far once there is one, by the plan before.
    fn left(&self, progress: &Progress) -> f64 {
        let done = progress.run.done as f64;
        let all = self.points as f64;
        let elapsed = progress.elapsed.as_secs_f64();
        if done >= 3.0 {
            elapsed / done * (all - done)
        } else {
            (self.seconds - elapsed).max(0.0)
        }
    }
}

/// Six digits are enough to follow a scan by, and fine enough for a radio frequency's kilohertz.
fn rounded(value: f64) -> f64 {
    format!("{value:.5e}").parse().unwrap_or(value)
}

/// Shows the progress until its sender is gone.
pub async fn show(shown: Shown, mut progress: watch::Receiver<Progress>) {
    if std::io::stderr().is_terminal() {
        show_bar(&shown, &mut progress).await;
    } else {
        show_lines(&shown, &mut progress).await;
    }
}

async fn show_bar(shown: &Shown, progress: &mut watch::Receiver<Progress>) {
    let bar =
        ProgressBar::with_draw_target(Some(shown.points), ProgressDrawTarget::stderr_with_hz(10));
    // A template that does not parse would be our own mistake: the plain bar then does.
    if let Ok(style) = ProgressStyle::with_template("{bar:32} {pos}/{len} points  {msg}") {
        bar.set_style(style.progress_chars("━╸ "));
    }
    while progress.changed().await.is_ok() {
        {
            let now = progress.borrow_and_update();
            bar.set_position(now.run.done.min(shown.points));
            bar.set_message(format!(
                "{} left  {}  {}",
                duration(shown.left(&now)),
                now.state,
                shown.setpoints(&now)
            ));
        }
        tokio::time::sleep(LOOK_EVERY).await;
    }
    bar.finish_and_clear();
}

async fn show_lines(shown: &Shown, progress: &mut watch::Receiver<Progress>) {
    let mut last: Option<Instant> = None;
    while progress.changed().await.is_ok() {
        if last.is_none_or(|last| last.elapsed() >= LINE_EVERY) {
            last = Some(Instant::now());
            let now = progress.borrow_and_update().clone();
            let _ = writeln!(
                std::io::stderr(),
                "{}/{} points, {} left, {} {}",
                now.run.done,
                shown.points,
                duration(shown.left(&now)),
                now.state,
                shown.setpoints(&now)
            );
        }
        tokio::time::sleep(LOOK_EVERY).await;
    }
}
