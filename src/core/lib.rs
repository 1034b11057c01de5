//! The pure core of Darkline: words, models and arithmetic. No clock, no file, no socket, no thread.

pub mod analysis;
pub mod answer;
pub mod atom;
pub mod bench;
pub mod channel;
pub mod diagnostic;
mod document;
pub mod entry;
pub mod fit;
pub mod itinerary;
pub mod quantity;
pub mod run;
pub mod sequence;
pub mod sequencer;
pub mod trace;
pub mod wire;
