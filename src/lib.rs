//! The I/O shell of Darkline: everything that touches a clock, a file or a socket, around the pure core.

pub mod archive;
pub mod bench;
pub mod cli;
pub mod conductor;
pub mod fitting;
pub mod folder;
pub mod instrument;
pub mod journal;
pub mod picture;
pub mod reach;
pub mod report;
pub mod seams;
