//! `darkline safe`: drives the bench to its declared safe state and verifies it by readback. A scan that owns
//! the bench is asked first. What cannot be reached is passed over and named.

use std::collections::BTreeMap;
use std::time::Duration;

use darkline_core::bench::Bench;
use darkline_core::diagnostic::Fault;
use darkline_drivers::instrument::Instrument;
use darkline_drivers::safe::{Level, SafeReport, make_safe};
use rustix::process::{Pid, Signal, kill_process};
use serde_json::json;
use tokio::time::{Instant, sleep};

use super::arguments::BenchOptions;
use super::links::Reached;
use super::{Exit, diagnostics, identify, opening, output};
use crate::reach::{Reach, ReachError};

/// Longest wait for a scan that owns the bench to leave it safe.
const OWNER_PATIENCE: Duration = Duration::from_secs(120);

/// Runs `safe`.
pub async fn run(options: &BenchOptions) -> Exit {
    let bench = match identify::read_bench(options) {
        Ok(bench) => bench,
        Err(exit) => return exit,
    };
    let reached = match Reached::settle(options.world(), options.links.as_deref()).await {
        Ok(reached) => reached,
        Err(message) => {
            diagnostics::show_error(&message);
            return Exit::WrongFile;
        }
    };
    let reach = match take_over(options, &bench, &reached).await {
        Ok(reach) => reach,
        Err(faults) => {
            faults.iter().for_each(diagnostics::show_fault);
            diagnostics::show_error("the bench MAY NOT BE SAFE: it is not ours to drive");
            return Exit::MayNotBeSafe;
        }
    };
    let (mut instruments, faults) = identify::open_each(&bench, &reach).await;
    let report = make_safe(&bench, Level::Safe, &mut instruments).await;
    tell(options, &bench, &report, &faults);
    if report.is_safe() {
        Exit::Finished
    } else {
        Exit::MayNotBeSafe
    }
}

/// Takes the links, asking their owner to make the bench safe and go where there is one.
async fn take_over(
    options: &BenchOptions,
    bench: &Bench,
    reached: &Reached,
) -> Result<Reach, Vec<Fault>> {
    let since = Instant::now();
    let mut asked = false;
    loop {
        let (owner, fault) = match opening::take(&options.bench, bench, reached) {
            Ok(reach) => return Ok(reach),
            Err(ReachError::Owned { owner, fault }) => (owner, fault),
            Err(other) => return Err(other.faults()),
        };
        if since.elapsed() > OWNER_PATIENCE {
            return Err(vec![fault]);
        }
        if !asked {
            asked = true;
            let Some(owner) = owner.and_then(Pid::from_raw).filter(|pid| is_ours(*pid)) else {
                return Err(vec![fault]);
            };
            diagnostics::note(&format!(
                "process {} has the bench; it is asked to make it safe and end",
                owner.as_raw_nonzero()
            ));
            if let Err(error) = kill_process(owner, Signal::USR1) {
                return Err(vec![fault.help(format!("it cannot be asked: {error}"))]);
            }
        }
        sleep(Duration::from_millis(100)).await;
    }
}

/// Whether a process is this program: a signal to anything else might end it.
fn is_ours(pid: Pid) -> bool {
    std::fs::read_to_string(format!("/proc/{}/comm", pid.as_raw_nonzero()))
        .is_ok_and(|name| name.trim() == "darkline")
}

fn tell(options: &BenchOptions, bench: &Bench, report: &SafeReport, faults: &[Fault]) {
    faults.iter().for_each(diagnostics::show_fault);
    if options.json {
        let unreached: Vec<_> = report
            .unreached
            .iter()
            .map(|(name, why)| json!({"instrument": name, "why": why}))
            .collect();
        let readbacks: BTreeMap<_, _> = report
            .readbacks
            .iter()
            .map(|(quantity, setting)| (quantity.as_str(), setting))
            .collect();
        output::json(&json!({
            "safe": report.is_safe(),
            "reached": report.reached,
            "unreached": unreached,
            "readbacks": readbacks,
        }));
        return;
    }
    let mut text = String::new();
    for (quantity, setting) in &report.readbacks {
        let shown = bench
            .property(quantity)
            .map_or_else(|| format!("{setting:?}"), |p| setting.display(p.dimension));
        text += &format!("{:<22} {shown}\n", quantity.as_str());
    }
    for (name, why) in &report.unreached {
        text += &format!("{name:<22} MAY NOT BE SAFE: {why}\n");
    }
    text += if report.is_safe() {
        "the bench is safe, verified by readback\n"
    } else {
        "the bench MAY NOT BE SAFE: look at the instruments named above now\n"
    };
    output::text(&text);
}

/// Instruments that answered, by name.
pub type Instruments = BTreeMap<String, Instrument>;
