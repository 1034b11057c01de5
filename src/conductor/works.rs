//! The conductor's tasks: what they bring back, and that a panic in one is a fault.

use darkline_core::diagnostic::Fault;
use darkline_core::quantity::QuantityName;
use darkline_core::sequencer::{AcquisitionOrder, Outcome, Ticket, Trouble};
use darkline_core::trace::Acquisition;
use darkline_drivers::safe::SafeReport;

use super::recording::Taken;
use crate::instrument::unwind::catch;

/// What a task of the conductor brings back.
pub struct Finished {
    /// The action's.
    pub ticket: Ticket,
    /// For the sequencer.
    pub outcome: Result<Outcome, Trouble>,
    /// For the conductor.
    pub beside: Beside,
}

/// What an outcome brings that the sequencer need not see.
pub enum Beside {
    /// Nothing.
    Nothing,
    /// A record waits in the digitizer.
    Taken(AcquisitionOrder, Taken),
    /// A record was read out.
    Samples(u64, Box<Acquisition>),
    /// Readings, for show.
    Reading(QuantityName, f64),
    /// How the bench was left.
    Left(Box<SafeReport>),
}

/// A work whose panic is a fault.
pub async fn supervised<F>(ticket: Ticket, work: F) -> Finished
where
    F: Future<Output = (Result<Outcome, Trouble>, Beside)>,
{
    let (outcome, beside) = match catch(work).await {
        Ok(finished) => finished,
        Err(panic) => {
            let fault = Fault::new(
                "F0341",
                format!("a task of the conductor panicked: {panic}"),
            )
            .help("this is a defect of the program; its log says where");
            (Err(Trouble::Fault(fault)), Beside::Nothing)
        }
    };
    Finished {
        ticket,
        outcome,
        beside,
    }
}
