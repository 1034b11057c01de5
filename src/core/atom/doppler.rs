//! doppler
