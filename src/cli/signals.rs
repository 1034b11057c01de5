//! Signals as asks: stop now, or go safe now. Knows no bench.

use rustix::fd::AsFd;
use tokio::signal::unix::{Signal, SignalKind, signal};
use tokio::sync::mpsc;

/// What a signal asks of a running scan.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum Ask {
    /// End at once: ramp down, `rest`, readable files. Says which signal came.
    Stop(&'static str),
    /// Go to `safe` at once; sent by `darkline safe` to the owner of the bench.
    Safe,
}

/// Listens for SIGINT, SIGTERM, SIGHUP and SIGUSR1.
///
/// A SIGHUP that comes because the terminal was closed is no ask: an unattended scan outlives its
/// terminal. A SIGHUP sent on purpose (terminal alive, or never one) ends the scan.
///
/// # Errors
/// Where the system refuses a signal handler.
pub fn listen() -> std::io::Result<mpsc::Receiver<Ask>> {
    let (sender, receiver) = mpsc::channel(8);
    let had_terminal = terminal().is_some();
    let mut interrupt = signal(SignalKind::interrupt())?;
    let mut terminate = signal(SignalKind::terminate())?;
    let mut hangup = signal(SignalKind::hangup())?;
    let mut safe = signal(SignalKind::user_defined1())?;
    tokio::spawn(async move {
        loop {
            let ask = next(&mut interrupt, &mut terminate, &mut hangup, &mut safe).await;
            let closed_terminal =
                ask == Ask::Stop("SIGHUP") && had_terminal && terminal().is_none();
            if closed_terminal {
                tracing::warn!("the terminal was closed; the scan goes on");
                continue;
            }
            // The channel is bounded: a ninth signal says nothing that the first eight did not.
            if let Err(mpsc::error::TrySendError::Closed(_)) = sender.try_send(ask) {
                return;
            }
        }
    });
    Ok(receiver)
}

async fn next(
    interrupt: &mut Signal,
    terminate: &mut Signal,
    hangup: &mut Signal,
    safe: &mut Signal,
) -> Ask {
    tokio::select! {
        _ = interrupt.recv() => Ask::Stop("SIGINT"),
        _ = terminate.recv() => Ask::Stop("SIGTERM"),
        _ = hangup.recv() => Ask::Stop("SIGHUP"),
        _ = safe.recv() => Ask::Safe,
    }
}

/// The controlling terminal, while there is one that answers.
fn terminal() -> Option<()> {
    let terminal = std::fs::File::open("/dev/tty").ok()?;
    rustix::termios::tcgetattr(terminal.as_fd()).ok()?;
    Some(())
}
