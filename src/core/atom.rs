//! The atom: published constants, ground-state levels and the three-level dark resonance. Knows no instrument.
