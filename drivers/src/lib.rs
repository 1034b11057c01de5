//! Drivers: links, the SCPI exchange, and the role every instrument plays. Decides nothing about a scan.

pub mod error;
pub mod role;
