//! Cuts a stream of bytes into program messages. Bounded: what is longer than the cap is dropped and said.

/// Longest program message, its terminator excluded, in bytes.
pub const LONGEST_MESSAGE: usize = 64 * 1024;

/// What the stream held.
#[derive(Clone, Debug, PartialEq, Eq)]
pub enum Incoming {
    /// A whole program message without its terminator.
    Message(Vec<u8>),
    /// A message over [`LONGEST_MESSAGE`] was dropped up to its terminator (-363).
    Overrun,
    /// A definite block announced more than a message can hold; dropped up to the next terminator (-223).
    BlockTooLong,
}

#[derive(Clone, Copy, Debug, PartialEq, Eq)]
enum Place {
    /// Where a datum may begin (behind a blank or a comma): a `#` opens a block.
    Before,
    /// Anywhere else in the text.
    Text,
    Quoted(u8),
    /// Behind `#`.
    Hash,
    /// Digits of a block length still to come, length so far.
    Length(u8, usize),
    /// Bytes of block data still to come.
    Block(usize),
    /// Dropping up to LF.
    Dropping,
}

/// Incremental: give it bytes with [`Decoder::push`], then take messages with [`Decoder::take`] until `None`.
#[derive(Debug)]
pub struct Decoder {
    waiting: Vec<u8>,
    read: usize,
    message: Vec<u8>,
    place: Place,
}

impl Default for Decoder {
    fn default() -> Decoder {
        Decoder {
            waiting: Vec::new(),
            read: 0,
            message: Vec::new(),
            place: Place::Text,
        }
    }
}

impl Decoder {
    /// Adds received bytes.
    pub fn push(&mut self, bytes: &[u8]) {
        self.waiting.drain(..std::mem::take(&mut self.read));
        self.waiting.extend_from_slice(bytes);
    }

    /// Bytes received and not yet taken as part of a message.
    pub fn backlog(&self) -> usize {
        self.waiting.len() - self.read
    }

    /// Whether a message has begun and not ended.
    pub fn has_partial(&self) -> bool {
        !self.message.is_empty()
    }

    /// The next message or incident; `None` until more bytes come. Empty messages are passed over.
    pub fn take(&mut self) -> Option<Incoming> {
        while let Some(&byte) = self.waiting.get(self.read) {
            self.read += 1;
            if let Some(incoming) = self.step(byte) {
                return Some(incoming);
            }
        }
        None
    }

    fn step(&mut self, byte: u8) -> Option<Incoming> {
        if let Place::Block(left) = self.place {
            self.message.push(byte);
            self.place = if left > 1 {
                Place::Block(left - 1)
            } else {
                Place::Text
            };
            return None;
        }
        if byte == b'\n' {
            return self.finish();
        }
        if self.place == Place::Dropping {
            return None;
        }
        if self.message.len() >= LONGEST_MESSAGE {
            self.message.clear();
            self.place = Place::Dropping;
            return Some(Incoming::Overrun);
        }
        self.message.push(byte);
        match self.next_place(byte) {
            Some(place) => {
                self.place = place;
                None
            }
            None => {
                self.message.clear();
                self.place = Place::Dropping;
                Some(Incoming::BlockTooLong)
            }
        }
    }

    /// Where the byte leads; `None` where a block's length cannot be held.
    fn next_place(&self, byte: u8) -> Option<Place> {
        Some(match (self.place, byte) {
            (Place::Quoted(quote), _) if byte == quote => Place::Text,
            (Place::Quoted(quote), _) => Place::Quoted(quote),
            (Place::Before, b'#') => Place::Hash,
            (Place::Hash, b'1'..=b'9') => Place::Length(byte - b'0', 0),
            (Place::Length(digits, so_far), b'0'..=b'9') => {
                let length = so_far
                    .saturating_mul(10)
                    .saturating_add(usize::from(byte - b'0'));
                match (digits, length) {
                    (1, 0) => Place::Text,
                    (1, _) if self.message.len().saturating_add(length) > LONGEST_MESSAGE => {
                        return None;
                    }
                    (1, _) => Place::Block(length),
                    _ => Place::Length(digits - 1, length),
                }
            }
            (_, b'\'' | b'"') => Place::Quoted(byte),
            (_, b' ' | b'\t' | b',') => Place::Before,
            _ => Place::Text,
        })
    }

    fn finish(&mut self) -> Option<Incoming> {
        self.place = Place::Text;
        let mut message = std::mem::take(&mut self.message);
        if message.last() == Some(&b'\r') {
            message.pop();
        }
        (!message.iter().all(u8::is_ascii_whitespace)).then_some(Incoming::Message(message))
    }
}

#[cfg(test)]
mod tests {
    use super::*;
    use proptest::prelude::*;

    fn all(bytes: &[u8]) -> Vec<Incoming> {
        let mut decoder = Decoder::default();
        decoder.push(bytes);
        std::iter::from_fn(|| decoder.take()).collect()
    }

    fn message(text: &[u8]) -> Incoming {
        Incoming::Message(text.to_vec())
    }

    #[test]
    fn lines_of_either_kind() {
        assert_eq!(
            all(b"*IDN?\nFREQ 1;:POW 2\r\n\n\r\nOUTP"),
            [message(b"*IDN?"), message(b"FREQ 1;:POW 2")]
        );
    }

    #[test]
    fn line_feed_within_a_block_is_data() {
        assert_eq!(
            all(b"DATA #13a\nb\n*CLS\n"),
            [message(b"DATA #13a\nb"), message(b"*CLS")]
        );
        assert_eq!(
            all(b"DATA 1,#203\n\n\n;X\n"),
            [message(b"DATA 1,#203\n\n\n;X")]
        );
        // Within a string or a number `#` opens nothing.
        assert_eq!(
            all(b"D \"#15\"\nD #HFF\n"),
            [message(b"D \"#15\""), message(b"D #HFF")]
        );
    }

    #[test]
    fn too_long_is_said_once_and_dropped_to_its_end() {
        let mut long = vec![b'A'; LONGEST_MESSAGE + 1000];
        long.extend_from_slice(b"\n*IDN?\n");
        assert_eq!(all(&long), [Incoming::Overrun, message(b"*IDN?")]);
        assert_eq!(
            all(b"DATA #9999999999xxx\n*IDN?\n"),
            [Incoming::BlockTooLong, message(b"*IDN?")]
        );
    }

    proptest! {
        #[test]
        fn cutting_does_not_matter(bytes in proptest::collection::vec(any::<u8>(), 0..200), cut in 0usize..200) {
            let whole = all(&bytes);
            let cut = cut.min(bytes.len());
            let mut decoder = Decoder::default();
            let mut parts = Vec::new();
            for part in [&bytes[..cut], &bytes[cut..]] {
                decoder.push(part);
                parts.extend(std::iter::from_fn(|| decoder.take()));
            }
            prop_assert_eq!(whole, parts);
        }
    }
}
