//! Drivers: links, the SCPI exchange, and the role every instrument plays. Decides nothing about a scan.

pub mod error;
pub mod exchange;
pub mod instrument;
pub mod link;
pub mod map;
pub mod random;
pub mod role;
pub mod safe;
pub mod scpi;

pub use instrument::{Instrument, open};
pub use safe::{Level, SafeReport, make_safe};
