//! vapour
