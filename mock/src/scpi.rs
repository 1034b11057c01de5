//! The mock's own SCPI engine: program messages, data, responses and status. Knows no instrument and no link.

pub mod decoder;
pub mod error;
pub mod number;
pub mod parse;
pub mod pattern;
pub mod response;
pub mod status;

pub use error::ErrorCode;
