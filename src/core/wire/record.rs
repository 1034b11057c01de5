//! The wire record: every message exchanged with an instrument, one JSON line each, for replay. Prints and
//! parses lines; it opens no file.
//!
//! ```text
//! {"at":1200450,"link":"coil","way":"sent","text":"SOUR:CURR 0.01\n"}
//! {"at":1200950,"link":"scope","way":"received","hex":"233134…"}
//! ```
//! `text` where every byte is printable ASCII or a tab, CR or LF; else `hex`.

use serde::{Deserialize, Serialize};
use thiserror::Error;

/// What a line tells.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Serialize, Deserialize)]
#[serde(rename_all = "lowercase")]
pub enum Way {
    /// From us to the instrument.
    Sent,
    /// From the instrument to us.
    Received,
    /// The link was made; no bytes.
    Opened,
    /// The link was lost or closed; no bytes.
    Lost,
}

/// One line of the record.
#[derive(Debug, Clone, PartialEq, Eq)]
pub struct Line {
    /// Nanoseconds since the record was begun.
    pub at: u64,
    /// Name of the instrument.
    pub link: String,
    /// What happened.
    pub way: Way,
    /// The bytes, as sent or received in one piece.
    pub bytes: Vec<u8>,
}

/// A line that is none.
#[derive(Debug, Error)]
pub enum RecordError {
    /// Not JSON, or not of the record's shape.
    #[error("not a line of a wire record: {0}")]
    Json(#[from] serde_json::Error),
    /// Neither `text` nor `hex`, or both.
    #[error("a line of a wire record has either `text` or `hex`")]
    Bytes,
    /// A digit that is none, or an odd number of them.
    #[error("`hex` of a wire record's line holds pairs of the digits 0 to 9 and a to f")]
    Hex,
}

#[derive(Serialize, Deserialize)]
#[serde(deny_unknown_fields)]
struct Raw {
    at: u64,
    link: String,
    way: Way,
    #[serde(default, skip_serializing_if = "Option::is_none")]
    text: Option<String>,
    #[serde(default, skip_serializing_if = "Option::is_none")]
    hex: Option<String>,
}

impl Line {
    /// The line as JSON, without a line end.
    ///
    /// # Errors
    /// [`RecordError::Json`], should the serialiser fail.
    pub fn print(&self) -> Result<String, RecordError> {
        let (text, hex) = match self.way {
            Way::Opened | Way::Lost => (None, None),
            Way::Sent | Way::Received => match std::str::from_utf8(&self.bytes) {
                Ok(text) if text.bytes().all(is_plain) => (Some(text.to_owned()), None),
                _ => (None, Some(to_hex(&self.bytes))),
            },
        };
        Ok(serde_json::to_string(&Raw {
            at: self.at,
            link: self.link.clone(),
            way: self.way,
            text,
            hex,
        })?)
    }

    /// Reads one line.
    ///
    /// # Errors
    /// See [`RecordError`].
    pub fn parse(line: &str) -> Result<Self, RecordError> {
        let raw: Raw = serde_json::from_str(line)?;
        let carries = matches!(raw.way, Way::Sent | Way::Received);
        let bytes = match (raw.text, raw.hex) {
            (Some(text), None) if carries => text.into_bytes(),
            (None, Some(hex)) if carries => from_hex(&hex).ok_or(RecordError::Hex)?,
            (None, None) if !carries => Vec::new(),
            _ => return Err(RecordError::Bytes),
        };
        Ok(Self {
            at: raw.at,
            link: raw.link,
            way: raw.way,
            bytes,
        })
    }
}

fn is_plain(byte: u8) -> bool {
    matches!(byte, b' '..=b'~' | b'\t' | b'\r' | b'\n')
}

fn to_hex(bytes: &[u8]) -> String {
    const DIGITS: &[u8; 16] = b"0123456789abcdef";
    bytes
        .iter()
        .flat_map(|byte| [byte >> 4, byte & 15])
        .map(|digit| char::from(DIGITS[usize::from(digit)]))
        .collect()
}

fn from_hex(text: &str) -> Option<Vec<u8>> {
    let digit = |byte: u8| match byte {
        b'0'..=b'9' => Some(byte - b'0'),
        b'a'..=b'f' => Some(byte - b'a' + 10),
        _ => None,
    };
    let (pairs, rest) = text.as_bytes().as_chunks::<2>();
    if !rest.is_empty() {
        return None;
    }
    pairs
        .iter()
        .map(|[high, low]| Some(digit(*high)? << 4 | digit(*low)?))
        .collect()
}

#[cfg(test)]
mod tests {
    use proptest::prelude::*;

    use super::*;

    #[test]
    fn lines_as_a_person_reads_them() {
        let line = Line {
            at: 1_200_450,
            link: "coil".to_owned(),
            way: Way::Sent,
            bytes: b"SOUR:CURR 0.01\n".to_vec(),
        };
        let text = r#"{"at":1200450,"link":"coil","way":"sent","text":"SOUR:CURR 0.01\n"}"#;
        assert_eq!(line.print().unwrap(), text);
        assert_eq!(Line::parse(text).unwrap(), line);
        let block = Line {
            bytes: b"#12\x00\xff\n".to_vec(),
            way: Way::Received,
            ..line
        };
        assert!(block.print().unwrap().contains(r#""hex":"23313200ff0a""#));
    }

    #[test]
    fn wrong_lines_are_refused() {
        for text in [
            "",
            "{}",
            r#"{"at":1,"link":"a","way":"sent"}"#,
            r#"{"at":1,"link":"a","way":"sent","text":"a","hex":"61"}"#,
            r#"{"at":1,"link":"a","way":"sent","hex":"6"}"#,
            r#"{"at":1,"link":"a","way":"sent","hex":"6G"}"#,
            r#"{"at":1,"link":"a","way":"opened","text":"a"}"#,
            r#"{"at":-1,"link":"a","way":"lost"}"#,
        ] {
            assert!(Line::parse(text).is_err(), "{text}");
        }
    }

    proptest! {
        #[test]
        fn any_bytes_go_round(at: u64, link in ".{0,9}", bytes: Vec<u8>, sent: bool) {
            let way = if sent { Way::Sent } else { Way::Received };
            let line = Line { at, link, way, bytes };
            let text = line.print().unwrap();
            prop_assert!(!text.contains('\n'));
            prop_assert_eq!(Line::parse(&text).unwrap(), line);
        }

        #[test]
        fn never_panics(text in ".{0,60}") {
            let _ = Line::parse(&text);
        }
    }
}
