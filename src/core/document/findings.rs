//! All faults found in the two files, and how the commonest of them are worded.

use super::Text;
use crate::diagnostic::Diagnostic;
use crate::quantity::{self, Dimension, QuantityError, Setting};

/// All that was found so far.
#[derive(Debug, Default)]
pub(crate) struct Findings(pub Vec<Diagnostic>);

impl Findings {
    pub fn push(&mut self, diagnostic: Diagnostic) {
        self.0.push(diagnostic);
    }

    /// The findings in order of file and place.
    pub fn sorted(mut self) -> Vec<Diagnostic> {
        self.0
            .sort_by_key(|d| (d.file, d.span.as_ref().map_or(0, |span| span.start)));
        self.0
    }

    /// The value of a text in SI base units, or a finding.
    pub fn quantity(&mut self, text: &Text, wanted: Dimension) -> Option<f64> {
        match quantity::parse(&text.text, wanted) {
            Ok(value) => Some(value),
            Err(error) => {
                self.push(quantity_fault(&error, text));
                None
            }
        }
    }

    /// A number or switch position, or a finding.
    pub fn setting(&mut self, text: &Text, wanted: Dimension) -> Option<Setting> {
        let value = self.quantity(text, wanted)?;
        Some(match wanted {
            Dimension::Switch => Setting::Switch(value != 0.0),
            _ => Setting::Number(value),
        })
    }

    /// As [`quantity`](Self::quantity), above zero.
    pub fn positive(&mut self, text: &Text, wanted: Dimension) -> Option<f64> {
        let value = self.quantity(text, wanted)?;
        if value > 0.0 {
            return Some(value);
        }
        let message = format!("`{}` must be above zero", text.text);
        self.push(Diagnostic::error("D0210", text.file, message).at(text.span.clone()));
        None
    }

    /// As [`quantity`](Self::quantity), zero or above.
    pub fn not_negative(&mut self, text: &Text, wanted: Dimension) -> Option<f64> {
        let value = self.quantity(text, wanted)?;
        if value >= 0.0 {
            return Some(value);
        }
        let message = format!("`{}` must not be negative", text.text);
        self.push(Diagnostic::error("D0210", text.file, message).at(text.span.clone()));
        None
    }

    /// "low .. high", or a finding.
    pub fn range(&mut self, text: &Text, wanted: Dimension) -> Option<(f64, f64)> {
        match quantity::parse_range(&text.text, wanted) {
            Ok(range) => Some(range),
            Err(error) => {
                self.push(quantity_fault(&error, text));
                None
            }
        }
    }

    /// The choice of that name, or a finding with a suggestion.
    pub fn choice<T: Copy>(&mut self, text: &Text, choices: &[(&str, T)]) -> Option<T> {
        let found = choices.iter().find(|(name, _)| *name == text.text);
        if found.is_none() {
            let names: Vec<&str> = choices.iter().map(|(name, _)| *name).collect();
            let message = format!("unknown word `{}`", text.text);
            self.push(
                Diagnostic::error("D0107", text.file, message)
                    .at(text.span.clone())
                    .help(suggestion(&text.text, &names)),
            );
        }
        found.map(|(_, value)| *value)
    }
}

/// The finding for a text that is no such value.
pub(crate) fn quantity_fault(error: &QuantityError, text: &Text) -> Diagnostic {
    let code = match error {
        QuantityError::NoUnit { .. }
        | QuantityError::UnknownUnit { .. }
        | QuantityError::WrongUnit { .. }
        | QuantityError::CelsiusDifference(_) => "D0201",
        QuantityError::Empty(_)
        | QuantityError::NoNumber { .. }
        | QuantityError::NoQuantity(_)
        | QuantityError::NoSwitch(_)
        | QuantityError::NoRange { .. } => "D0202",
        QuantityError::NotFinite(_) => "D0203",
        QuantityError::Reversed(_) => "D0204",
        QuantityError::BelowZeroKelvin(_) => "D0210",
    };
    Diagnostic::error(code, text.file, error.to_string()).at(text.span.clone())
}

/// An error at a text of a file.
pub(crate) fn fault(code: &'static str, text: &Text, message: impl Into<String>) -> Diagnostic {
    Diagnostic::error(code, text.file, message).at(text.span.clone())
}

/// "did you mean `x`?", or all the names where none is near.
pub(crate) fn suggestion(word: &str, names: &[&str]) -> String {
    let nearest = names
        .iter()
        .map(|name| (strsim::damerau_levenshtein(word, name), *name))
        .min();
    match nearest {
        Some((distance, name)) if distance <= 1.max(word.chars().count() / 3) => {
            format!("did you mean `{name}`?")
        }
        Some(_) => format!("known are {}", listed(names)),
        None => "nothing of this kind is declared".to_owned(),
    }
}

/// "`a`, `b`, `c`".
pub(crate) fn listed(names: &[&str]) -> String {
    let quoted: Vec<String> = names.iter().map(|name| format!("`{name}`")).collect();
    quoted.join(", ")
}
