//! What goes over the wires, as data: IEEE 488.2 response messages, numbers, sample blocks, and the wire
//! record. Opens no link and knows no instrument.

pub mod block;
pub mod frame;
pub mod number;
pub mod record;
