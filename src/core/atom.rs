//! The atom: published constants, ground-state levels and the three-level dark resonance. Knows no instrument.

pub mod breit_rabi;
pub mod coil;
pub mod constants;
pub mod doppler;
pub mod lambda;
#[cfg(test)]
mod published;
pub mod vapour;
