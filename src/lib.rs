//! The I/O shell of Darkline: everything that touches a clock, a file or a socket, around the pure core.

pub mod archive;
pub mod bench;
pub mod conductor;
pub mod folder;
pub mod instrument;
pub mod journal;
pub mod report;
pub mod seams;
