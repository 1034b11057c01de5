//! The mock bench: one simulated world behind independent SCPI instruments. Shares no fit and no framing with the drivers.

pub mod bench;
mod chance;
mod device;
mod endpoint;
pub mod fault;
pub mod history;
pub mod instrument;
pub mod scpi;
mod serve;
pub mod truth;
pub mod world;

pub use bench::{Endpoint, MockBench, Options};
pub use fault::{Fault, TimedFault};
pub use history::History;
pub use instrument::digitizer::DigitizerOptions;
pub use serve::{ServeError, serve_forever};
