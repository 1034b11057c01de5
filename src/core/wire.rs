//! What goes over the wires, as data: IEEE 488.2 framing and the wire record. Opens no link.
