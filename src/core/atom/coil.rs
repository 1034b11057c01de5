//! coil
