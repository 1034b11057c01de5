//! The mock bench: one simulated world behind independent SCPI instruments. Shares no fit and no framing with the drivers.

pub mod truth;
pub mod world;
