//! The drivers against instruments: a small one in memory (virtual time), links spoilt on purpose, and an
//! independent one built on a registry's SCPI library, over TCP.

#![expect(
    clippy::unwrap_used,
    clippy::panic,
    reason = "what serves the tests fails like a test"
)]

mod independent;
mod make_safe;
mod maps;
mod mock;
mod record;
mod resync;
mod roles;
mod toy;
