//! The pure core of Darkline: words, models and arithmetic. No clock, no file, no socket, no thread.

pub mod answer;
pub mod atom;
pub mod fit;
pub mod quantity;
pub mod trace;
pub mod wire;
