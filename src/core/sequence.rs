//! The sequence: a declared scan as written, one file.
//!
//! [`Sequence::parse`] knows the file's shape; what the words mean on a given bench (units, limits,
//! ramps) is settled when an [`Itinerary`](crate::itinerary::Itinerary) is planned.

use crate::diagnostic::Diagnostic;

/// A declared scan, as written.
#[derive(Debug, Clone, PartialEq)]
pub struct Sequence {
    /// What the user calls it.
    pub title: String,
}

impl Sequence {
    /// Reads a sequence file's text.
    ///
    /// # Errors
    /// Every fault of the file at once, in order of place.
    pub fn parse(text: &str) -> Result<Self, Vec<Diagnostic>> {
        let _ = text;
        Err(Vec::new())
    }
}
