//! Incremental decoder of IEEE 488.2 response messages (IEEE 488.2-1992, clause 8), as they come over a
//! byte stream: units parted by `;`, data elements by `,`, ended by LF or CR LF. It finds the ends; what
//! the elements mean is said elsewhere. It never allocates on the word of a length that it did not check.

use std::ops::Range;

use thiserror::Error;

/// Why bytes are not a response message. The stream is then out of step: nothing after it can be trusted.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Error)]
pub enum FrameError {
    /// Longer than the reader is ready to take.
    #[error("a response of at least {length} bytes exceeds the limit of {limit}")]
    TooLong {
        /// Bytes announced or received.
        length: usize,
        /// The decoder's limit.
        limit: usize,
    },
    /// A block's length has something other than digits in it.
    #[error("byte {byte:#04x} stands in the length of a block")]
    BadLength {
        /// The offending byte.
        byte: u8,
    },
    /// `#0` where the number of bytes is not known: over a byte stream nothing marks its end.
    #[error("an indefinite block came where its length is not known")]
    Indefinite,
    /// Something other than `;`, `,` or an end after a block or a closed string.
    #[error("byte {byte:#04x} follows a block or string where `;`, `,` or an end of line should")]
    Trailing {
        /// The offending byte.
        byte: u8,
    },
}

/// A complete response message.
#[derive(Debug, Clone, PartialEq, Eq, Default)]
pub struct Message {
    bytes: Vec<u8>,
    units: Vec<Unit>,
}

#[derive(Debug, Clone, PartialEq, Eq, Default)]
struct Unit {
    range: Range<usize>,
    block: Option<Range<usize>>,
}

impl Message {
    /// Number of response message units; an empty line has one, which is empty.
    pub fn len(&self) -> usize {
        self.units.len()
    }

    /// Whether there is no unit at all (never so for a decoded message).
    pub fn is_empty(&self) -> bool {
        self.units.is_empty()
    }

    /// The bytes of one unit without its `;` or line end.
    pub fn unit(&self, index: usize) -> Option<&[u8]> {
        self.bytes.get(self.units.get(index)?.range.clone())
    }

    /// The payload of the first block within the unit; `None` where the unit has none.
    pub fn block(&self, index: usize) -> Option<&[u8]> {
        self.bytes.get(self.units.get(index)?.block.clone()?)
    }

    /// Everything received, without the line end.
    pub fn bytes(&self) -> &[u8] {
        &self.bytes
    }
}

/// Splits a unit into its data elements at `,`, quoted strings kept whole, white space trimmed.
pub fn elements(unit: &[u8]) -> Vec<&[u8]> {
    let mut found = Vec::new();
    let (mut start, mut quoted) = (0, false);
    for (at, byte) in unit.iter().enumerate() {
        match byte {
            b'"' => quoted = !quoted,
            b',' if !quoted => {
                found.push(unit[start..at].trim_ascii());
                start = at + 1;
            }
            _ => {}
        }
    }
    found.push(unit[start..].trim_ascii());
    found
}

/// The text of a quoted string element, doubled quotes undone; anything else as it stands.
pub fn unquoted(element: &[u8]) -> String {
    let text = String::from_utf8_lossy(element);
    match text
        .strip_prefix('"')
        .and_then(|rest| rest.strip_suffix('"'))
    {
        Some(inner) => inner.replace("\"\"", "\""),
        None => text.into_owned(),
    }
}

#[derive(Debug, Clone, Copy, PartialEq, Eq)]
enum State {
    /// At the beginning of a data element: `"` opens a string, `#` a block.
    Element,
    Text,
    String,
    /// A quote within a string: its end, or the first of a doubled one.
    Quote,
    /// After `#`.
    Hash,
    Length {
        digits: u8,
        value: usize,
    },
    Block {
        left: usize,
    },
    /// Only a separator or an end may follow.
    Closed,
}

/// Finds the end of one response message after another in a stream of bytes.
#[derive(Debug)]
pub struct Decoder {
    limit: usize,
    indefinite: Option<usize>,
    state: State,
    message: Message,
    unit_start: usize,
    block: Option<Range<usize>>,
}

impl Decoder {
    /// A decoder that refuses messages of more than `limit` bytes.
    pub fn new(limit: usize) -> Self {
        Self {
            limit,
            indefinite: None,
            state: State::Element,
            message: Message::default(),
            unit_start: 0,
            block: None,
        }
    }

    /// Takes an indefinite block (`#0`) in the coming message as one of `length` bytes.
    pub fn expect_indefinite(&mut self, length: Option<usize>) {
        self.indefinite = length;
    }

    /// Forgets a message that was begun.
    pub fn reset(&mut self) {
        *self = Self {
            indefinite: self.indefinite,
            ..Self::new(self.limit)
        };
    }

    /// Whether part of a message has been taken.
    pub fn midway(&self) -> bool {
        !self.message.bytes.is_empty()
    }

    /// Takes bytes up to the end of one message. Returns how many were taken, and the message if it is
    /// complete; bytes beyond it belong to the next one and are left.
    ///
    /// # Errors
    /// See [`FrameError`]; the decoder is then reset, and the stream out of step.
    pub fn push(&mut self, input: &[u8]) -> Result<(usize, Option<Message>), FrameError> {
        let taken = self.advance(input);
        if taken.is_err() {
            self.reset();
        }
        taken
    }

    fn advance(&mut self, input: &[u8]) -> Result<(usize, Option<Message>), FrameError> {
        let mut at = 0;
        while let Some(byte) = input.get(at).copied() {
            if let State::Block { left } = self.state {
                let chunk = left.min(input.len() - at);
                self.message.bytes.extend_from_slice(&input[at..at + chunk]);
                at += chunk;
                self.state = match left - chunk {
                    0 => State::Closed,
                    left => State::Block { left },
                };
                continue;
            }
            at += 1;
            if byte == b'\n' && self.ends_at_line() {
                return Ok((at, Some(self.finish())));
            }
            self.step(byte)?;
        }
        Ok((at, None))
    }

    fn ends_at_line(&self) -> bool {
        !matches!(self.state, State::String | State::Length { .. })
    }

    fn step(&mut self, byte: u8) -> Result<(), FrameError> {
        let length = self.message.bytes.len() + 1;
        if length > self.limit {
            return Err(FrameError::TooLong {
                length,
                limit: self.limit,
            });
        }
        self.message.bytes.push(byte);
        self.state = match self.state {
            State::String if byte == b'"' => State::Quote,
            State::String => State::String,
            State::Quote if byte == b'"' => State::String,
            State::Hash => self.after_hash(byte)?,
            State::Length { digits, value } => self.length(digits, value, byte)?,
            _ if byte == b';' => {
                self.close_unit(length - 1);
                self.unit_start = length;
                State::Element
            }
            _ if byte == b',' => State::Element,
            State::Element => match byte {
                b'"' => State::String,
                b'#' => State::Hash,
                b' ' | b'\t' => State::Element,
                _ => State::Text,
            },
            State::Quote | State::Closed => match byte {
                b'\r' | b' ' => State::Closed,
                byte => return Err(FrameError::Trailing { byte }),
            },
            State::Text | State::Block { .. } => State::Text,
        };
        Ok(())
    }

    /// `#0` is an indefinite block, `#1` to `#9` a definite one, `#H`, `#Q` and `#B` are numbers.
    fn after_hash(&mut self, byte: u8) -> Result<State, FrameError> {
        match byte {
            b'0' => match self.indefinite {
                Some(length) => self.open_block(length),
                None => Err(FrameError::Indefinite),
            },
            b'1'..=b'9' => Ok(State::Length {
                digits: byte - b'0',
                value: 0,
            }),
            _ => Ok(State::Text),
        }
    }

    fn length(&mut self, digits: u8, value: usize, byte: u8) -> Result<State, FrameError> {
        if !byte.is_ascii_digit() {
            return Err(FrameError::BadLength { byte });
        }
        let value = value * 10 + usize::from(byte - b'0');
        match digits {
            1 => self.open_block(value),
            _ => Ok(State::Length {
                digits: digits - 1,
                value,
            }),
        }
    }

    fn open_block(&mut self, length: usize) -> Result<State, FrameError> {
        let start = self.message.bytes.len();
        let end = start.saturating_add(length);
        if end > self.limit {
            return Err(FrameError::TooLong {
                length: end,
                limit: self.limit,
            });
        }
        self.message.bytes.reserve(length + 2);
        self.block.get_or_insert(start..end);
        Ok(match length {
            0 => State::Closed,
            left => State::Block { left },
        })
    }

    fn close_unit(&mut self, end: usize) {
        self.message.units.push(Unit {
            range: self.unit_start..end,
            block: self.block.take(),
        });
    }

    fn finish(&mut self) -> Message {
        let bytes = &mut self.message.bytes;
        // A CR belongs to the line end, unless it is the last byte of a block.
        let within_block = self
            .block
            .as_ref()
            .is_some_and(|block| block.end == bytes.len());
        if bytes.last() == Some(&b'\r') && !within_block && bytes.len() > self.unit_start {
            bytes.pop();
        }
        let end = bytes.len();
        self.close_unit(end);
        self.state = State::Element;
        self.unit_start = 0;
        self.indefinite = None;
        std::mem::take(&mut self.message)
    }
}

#[cfg(test)]
mod tests {
    use proptest::prelude::*;

    use super::*;

    fn decode(bytes: &[u8]) -> Message {
        let (taken, message) = Decoder::new(1 << 20).push(bytes).unwrap();
        assert_eq!(taken, bytes.len());
        message.unwrap()
    }

    #[test]
    fn units_strings_and_line_ends() {
        let message = decode(b"1.0E-02;0,\"No error; really, \"\"none\"\"\n\";;x\r\n");
        assert_eq!(message.len(), 4);
        assert_eq!(message.unit(0), Some(&b"1.0E-02"[..]));
        let queue = elements(message.unit(1).unwrap());
        assert_eq!(queue[0], b"0");
        assert_eq!(unquoted(queue[1]), "No error; really, \"none\"\n");
        assert_eq!(message.unit(2), Some(&b""[..]));
        assert_eq!(message.unit(3), Some(&b"x"[..]));
        assert_eq!(decode(b"\r\n").unit(0), Some(&b""[..]));
    }

    // IEEE 488.2-1992, 8.7.9 (definite) and 8.7.10 (indefinite length arbitrary block response data).
    #[test]
    fn definite_blocks_may_hold_any_byte() {
        let message = decode(b"12;#206a;\n\"\r#;#10;#16abcde\r\n");
        assert_eq!(message.len(), 4);
        assert_eq!(message.block(0), None);
        assert_eq!(message.block(1), Some(&b"a;\n\"\r#"[..]));
        assert_eq!(message.block(2), Some(&b""[..]));
        assert_eq!(message.block(3), Some(&b"abcde\r"[..]));
        assert_eq!(message.unit(3), Some(&b"#16abcde\r"[..]));
    }

    #[test]
    fn indefinite_blocks_need_a_known_length() {
        let mut decoder = Decoder::new(100);
        assert_eq!(decoder.push(b"#0ab"), Err(FrameError::Indefinite));
        decoder.expect_indefinite(Some(3));
        let (taken, message) = decoder.push(b"#0a\nb\nrest").unwrap();
        assert_eq!(taken, 6);
        assert_eq!(message.unwrap().block(0), Some(&b"a\nb"[..]));
        // The expectation holds for one message only.
        assert_eq!(decoder.push(b"#0ab"), Err(FrameError::Indefinite));
    }

    #[test]
    fn a_length_is_capped_before_allocation() {
        let mut decoder = Decoder::new(1000);
        let error = decoder.push(b"#9999999999").unwrap_err();
        assert!(matches!(error, FrameError::TooLong { limit: 1000, .. }));
        assert_eq!(
            decoder.push(b"#2x"),
            Err(FrameError::BadLength { byte: b'x' })
        );
        assert_eq!(
            decoder.push(b"#11ab"),
            Err(FrameError::Trailing { byte: b'b' })
        );
        let long = vec![b'1'; 1001];
        assert!(matches!(
            decoder.push(&long),
            Err(FrameError::TooLong { .. })
        ));
        // After each refusal the decoder starts anew.
        assert!(decoder.push(b"1\n").unwrap().1.is_some());
    }

    #[test]
    fn hexadecimal_numbers_are_no_blocks() {
        assert_eq!(decode(b"#HFF;2\n").unit(0), Some(&b"#HFF"[..]));
    }

    #[test]
    fn real_replies_byte_by_byte() {
        // As sent by an instrument: identity, an interleaved error, a block of four 16-bit integers.
        let stream =
            b"Umbra,DIG-4,3001,3.1\r\n-222,\"Data out of range\"\n#18\x00\x01\n;\xff\xfe\r\n\n";
        let mut decoder = Decoder::new(64);
        let mut messages = Vec::new();
        for byte in stream {
            let (taken, message) = decoder.push(std::slice::from_ref(byte)).unwrap();
            assert_eq!(taken, 1);
            messages.extend(message);
        }
        assert_eq!(messages.len(), 3);
        assert_eq!(messages[2].block(0), Some(&b"\x00\x01\n;\xff\xfe\r\n"[..]));
        assert!(!decoder.midway());
    }

    fn unit() -> impl Strategy<Value = (Vec<u8>, Option<Vec<u8>>)> {
        prop_oneof![
            "[-+0-9.A-Z]{0,12}".prop_map(|text| (text.into_bytes(), None)),
            "[ -~\n]{0,12}".prop_map(|text| {
                (
                    format!("\"{}\"", text.replace('"', "\"\"")).into_bytes(),
                    None,
                )
            }),
            proptest::collection::vec(any::<u8>(), 0..40).prop_map(|payload| {
                let length = payload.len().to_string();
                let mut bytes = format!("#{}{length}", length.len()).into_bytes();
                bytes.extend_from_slice(&payload);
                (bytes, Some(payload))
            }),
        ]
    }

    proptest! {
        #[test]
        fn arbitrary_bytes_never_panic(bytes: Vec<u8>, length in proptest::option::of(0usize..40)) {
            let mut decoder = Decoder::new(200);
            decoder.expect_indefinite(length);
            let mut rest = &bytes[..];
            while !rest.is_empty() {
                match decoder.push(rest) {
                    Ok((taken, _)) => { prop_assert!(taken > 0); rest = &rest[taken..]; }
                    Err(_) => rest = &rest[1..],
                }
            }
            for part in bytes.split(|byte| *byte == b',') { elements(part); unquoted(part); }
        }

        #[test]
        fn what_was_put_together_is_taken_apart(
            units in proptest::collection::vec(unit(), 1..5), cut in 1usize..9, crlf: bool,
        ) {
            let parts: Vec<&[u8]> = units.iter().map(|(bytes, _)| &bytes[..]).collect();
            let mut stream = parts.join(&b';');
            stream.extend_from_slice(if crlf { b"\r\n" } else { b"\n" });
            let mut decoder = Decoder::new(1 << 16);
            let mut messages = Vec::new();
            for chunk in stream.chunks(cut) {
                let (taken, message) = decoder.push(chunk).unwrap();
                prop_assert_eq!(taken, chunk.len());
                messages.extend(message);
            }
            prop_assert_eq!(messages.len(), 1);
            prop_assert_eq!(messages[0].len(), units.len());
            for (index, (bytes, block)) in units.iter().enumerate() {
                prop_assert_eq!(messages[0].unit(index), Some(&bytes[..]));
                prop_assert_eq!(messages[0].block(index), block.as_deref());
            }
        }
    }
}
