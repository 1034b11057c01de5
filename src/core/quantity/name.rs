//! The name of a quantity, `coil.current`: an instrument of the bench and one of its properties.

use std::fmt;
use std::sync::Arc;

use serde::{Deserialize, Serialize};

/// `instrument.property`, cheap to clone.
#[derive(Debug, Clone, PartialEq, Eq, PartialOrd, Ord, Hash, Serialize, Deserialize)]
#[serde(try_from = "String", into = "String")]
pub struct QuantityName {
    text: Arc<str>,
    dot: usize,
}

/// Why a text is no quantity name.
#[derive(Debug, Clone, PartialEq, Eq, thiserror::Error)]
#[error("`{0}` is not a quantity; write `instrument.property`, as in `coil.current`")]
pub struct NameError(pub String);

impl QuantityName {
    /// Reads `instrument.property`.
    ///
    /// # Errors
    /// Where the text is not exactly two words of letters, digits, `_` or `-` with one dot between.
    pub fn new(text: &str) -> Result<Self, NameError> {
        let wrong = || NameError(text.to_owned());
        let (instrument, property) = text.split_once('.').ok_or_else(wrong)?;
        if !(is_word(instrument) && is_word(property)) {
            return Err(wrong());
        }
        Ok(Self {
            text: Arc::from(text),
            dot: instrument.len(),
        })
    }

    /// Whether `text` can name an instrument or a property.
    pub fn is_word(text: &str) -> bool {
        is_word(text)
    }

    /// The instrument's name, `coil`.
    pub fn instrument(&self) -> &str {
        &self.text[..self.dot]
    }

    /// The property's name, `current`.
    pub fn property(&self) -> &str {
        &self.text[self.dot + 1..]
    }

    /// The whole name, `coil.current`.
    pub fn as_str(&self) -> &str {
        &self.text
    }
}

fn is_word(text: &str) -> bool {
    text.starts_with(|c: char| c.is_ascii_alphabetic())
        && text
            .chars()
            .all(|c| c.is_ascii_alphanumeric() || c == '_' || c == '-')
}

impl fmt::Display for QuantityName {
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        f.write_str(&self.text)
    }
}

impl TryFrom<String> for QuantityName {
    type Error = NameError;
    fn try_from(text: String) -> Result<Self, NameError> {
        Self::new(&text)
    }
}

impl std::str::FromStr for QuantityName {
    type Err = NameError;
    fn from_str(text: &str) -> Result<Self, NameError> {
        Self::new(text)
    }
}

impl From<QuantityName> for String {
    fn from(name: QuantityName) -> Self {
        name.text.to_string()
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn a_name_has_two_words() {
        let name = QuantityName::new("coil.current").unwrap();
        assert_eq!((name.instrument(), name.property()), ("coil", "current"));
        for bad in [
            "coil",
            "coil.",
            ".current",
            "a.b.c",
            "coil.cur rent",
            "",
            "1.5",
        ] {
            assert!(QuantityName::new(bad).is_err(), "{bad}");
        }
    }
}
