//! lambda
