//! Program messages: headers and data as IEEE 488.2 (chapter 7) spells them, paths as SCPI-1999 (volume 1, 6.2.4).

use crate::scpi::ErrorCode;
use crate::scpi::number;

const LONGEST_MNEMONIC: usize = 12;
const MOST_DATA: usize = 64;

/// One mnemonic of a header with its numeric suffix.
#[derive(Clone, Debug, PartialEq, Eq)]
pub struct Node {
    /// Upper case, without the suffix.
    pub name: String,
    /// `None` where none was written.
    pub suffix: Option<u32>,
}

/// What a unit is about.
#[derive(Clone, Debug, PartialEq, Eq)]
pub enum Header {
    /// `*IDN` and the like, upper case, without the asterisk.
    Common(String),
    /// From the root of the tree, the message's current path included.
    Path(Vec<Node>),
}

/// One datum of a unit.
#[derive(Clone, Debug, PartialEq)]
pub enum Datum {
    /// A decimal number and its suffix in upper case.
    Number(f64, Option<String>),
    /// `#H`, `#Q` and `#B` numbers.
    NonDecimal(u64),
    /// Character data, upper case.
    Word(String),
    /// String data, quotes undone.
    Text(String),
    /// Block data.
    Block(Vec<u8>),
    /// An expression within parentheses, without them.
    Expression(String),
}

/// One program message unit.
#[derive(Clone, Debug, PartialEq)]
pub struct Unit {
    /// Header, absolute.
    pub header: Header,
    /// Whether the header ended with `?`.
    pub query: bool,
    /// At most 64 data.
    pub data: Vec<Datum>,
}

/// A program message being read unit by unit. After an error there are no more units.
#[derive(Debug)]
pub struct Message {
    bytes: Vec<u8>,
    at: usize,
    path: Vec<Node>,
    started: bool,
}

impl Message {
    /// Takes a message without its terminator.
    pub fn new(bytes: Vec<u8>) -> Message {
        Message {
            bytes,
            at: 0,
            path: Vec::new(),
            started: false,
        }
    }

    /// The next unit, an error of the text, or `None` at the end.
    pub fn next_unit(&mut self) -> Option<Result<Unit, ErrorCode>> {
        self.skip_blanks();
        if std::mem::replace(&mut self.started, true) && self.peek() == Some(b';') {
            self.at += 1;
            self.skip_blanks();
        }
        if self.at >= self.bytes.len() {
            return None;
        }
        let unit = self.unit();
        if unit.is_err() {
            self.at = self.bytes.len();
        }
        Some(unit)
    }

    fn unit(&mut self) -> Result<Unit, ErrorCode> {
        let header = self.header()?;
        let query = self.take(b'?');
        let blank = self.skip_blanks();
        let mut data = Vec::new();
        match self.peek() {
            None | Some(b';') => {}
            Some(_) if !blank => return Err(self.wrong(ErrorCode::INVALID_SEPARATOR)),
            Some(_) => self.data(&mut data)?,
        }
        Ok(Unit {
            header,
            query,
            data,
        })
    }

    fn data(&mut self, data: &mut Vec<Datum>) -> Result<(), ErrorCode> {
        loop {
            if data.len() == MOST_DATA {
                return Err(ErrorCode::TOO_MUCH_DATA);
            }
            data.push(self.datum()?);
            self.skip_blanks();
            match self.peek() {
                None | Some(b';') => return Ok(()),
                Some(b',') => self.at += 1,
                Some(_) => return Err(self.wrong(ErrorCode::INVALID_SEPARATOR)),
            }
            self.skip_blanks();
        }
    }

    fn header(&mut self) -> Result<Header, ErrorCode> {
        if self.take(b'*') {
            return Ok(Header::Common(self.mnemonic()?));
        }
        let mut nodes = if self.take(b':') {
            Vec::new()
        } else {
            self.path.clone()
        };
        loop {
            let mnemonic = self.mnemonic()?;
            nodes.push(node(&mnemonic)?);
            if !self.take(b':') {
                break;
            }
        }
        self.path = nodes[..nodes.len() - 1].to_vec();
        Ok(Header::Path(nodes))
    }

    fn mnemonic(&mut self) -> Result<String, ErrorCode> {
        if !self.peek().is_some_and(|byte| byte.is_ascii_alphabetic()) {
            return Err(self.wrong(ErrorCode::SYNTAX_ERROR));
        }
        let text = self.run(|byte| byte.is_ascii_alphanumeric() || byte == b'_');
        Ok(text.to_ascii_uppercase())
    }

    fn datum(&mut self) -> Result<Datum, ErrorCode> {
        match self.peek() {
            Some(b'+' | b'-' | b'.' | b'0'..=b'9') => self.number(),
            Some(b'#') => self.hash(),
            Some(quote @ (b'\'' | b'"')) => self.text(quote),
            Some(b'(') => self.expression(),
            Some(byte) if byte.is_ascii_alphabetic() => {
                let word = self.run(|byte| byte.is_ascii_alphanumeric() || byte == b'_');
                Ok(Datum::Word(word.to_ascii_uppercase()))
            }
            _ => Err(self.wrong(ErrorCode::SYNTAX_ERROR)),
        }
    }

    fn number(&mut self) -> Result<Datum, ErrorCode> {
        let (value, length) = number::decimal(&self.bytes[self.at..])?;
        self.at += length;
        self.skip_blanks();
        let begins = self
            .peek()
            .is_some_and(|byte| byte.is_ascii_alphabetic() || byte == b'/');
        let within = |byte: u8| byte.is_ascii_alphanumeric() || matches!(byte, b'/' | b'.' | b'-');
        let suffix = if begins {
            self.run(within)
        } else {
            String::new()
        };
        Ok(Datum::Number(
            value,
            (!suffix.is_empty()).then(|| suffix.to_ascii_uppercase()),
        ))
    }

    fn hash(&mut self) -> Result<Datum, ErrorCode> {
        self.at += 1;
        let kind = self.peek().ok_or(ErrorCode::INVALID_BLOCK)?;
        self.at += 1;
        let radix = match kind.to_ascii_uppercase() {
            b'H' => 16,
            b'Q' => 8,
            b'B' => 2,
            b'0' => {
                let data = self.bytes[self.at..].to_vec();
                self.at = self.bytes.len();
                return Ok(Datum::Block(data));
            }
            digits @ b'1'..=b'9' => return self.definite_block(usize::from(digits - b'0')),
            _ => return Err(self.wrong(ErrorCode::SYNTAX_ERROR)),
        };
        let digits = self.run(|byte| byte.is_ascii_alphanumeric());
        u64::from_str_radix(&digits, radix)
            .map(Datum::NonDecimal)
            .map_err(|_| ErrorCode::INVALID_NUMBER)
    }

    fn definite_block(&mut self, digits: usize) -> Result<Datum, ErrorCode> {
        let header = self
            .bytes
            .get(self.at..self.at + digits)
            .ok_or(ErrorCode::INVALID_BLOCK)?;
        let text = std::str::from_utf8(header).map_err(|_| ErrorCode::INVALID_BLOCK)?;
        if !header.iter().all(u8::is_ascii_digit) {
            return Err(ErrorCode::INVALID_BLOCK);
        }
        let length: usize = text.parse().map_err(|_| ErrorCode::INVALID_BLOCK)?;
        let start = self.at + digits;
        let data = self
            .bytes
            .get(start..start.saturating_add(length))
            .ok_or(ErrorCode::INVALID_BLOCK)?
            .to_vec();
        self.at = start + length;
        Ok(Datum::Block(data))
    }

    fn text(&mut self, quote: u8) -> Result<Datum, ErrorCode> {
        self.at += 1;
        let mut text = Vec::new();
        loop {
            match self.peek() {
                Some(byte) if byte == quote => {
                    self.at += 1;
                    if self.peek() != Some(quote) {
                        let text =
                            String::from_utf8(text).map_err(|_| ErrorCode::INVALID_STRING)?;
                        return Ok(Datum::Text(text));
                    }
                    text.push(quote);
                }
                Some(byte) => text.push(byte),
                None => return Err(ErrorCode::INVALID_STRING),
            }
            self.at += 1;
        }
    }

    fn expression(&mut self) -> Result<Datum, ErrorCode> {
        self.at += 1;
        let text = self.run(|byte| {
            byte.is_ascii() && !matches!(byte, b'(' | b')' | b';' | b'"' | b'\'' | b'#')
        });
        if !self.take(b')') {
            return Err(ErrorCode::INVALID_EXPRESSION);
        }
        Ok(Datum::Expression(text))
    }

    /// The error at the present byte: -101 where the byte can stand nowhere, else the given one.
    fn wrong(&self, otherwise: ErrorCode) -> ErrorCode {
        match self.peek() {
            Some(byte)
                if !byte.is_ascii()
                    || matches!(byte, b'!' | b'$' | b'&' | b'@' | b'[' | b'\\' | b']' | b'^'..=b'`' | b'{'..=b'\x7f') =>
            {
                ErrorCode::INVALID_CHARACTER
            }
            _ => otherwise,
        }
    }

    fn run(&mut self, keep: impl Fn(u8) -> bool) -> String {
        let start = self.at;
        while self.peek().is_some_and(&keep) {
            self.at += 1;
        }
        String::from_utf8_lossy(&self.bytes[start..self.at]).into_owned()
    }

    fn skip_blanks(&mut self) -> bool {
        let start = self.at;
        while self.peek().is_some_and(|byte| byte <= b' ') {
            self.at += 1;
        }
        self.at > start
    }

    fn peek(&self) -> Option<u8> {
        self.bytes.get(self.at).copied()
    }

    fn take(&mut self, byte: u8) -> bool {
        let found = self.peek() == Some(byte);
        self.at += usize::from(found);
        found
    }
}

fn node(mnemonic: &str) -> Result<Node, ErrorCode> {
    let name = mnemonic.trim_end_matches(|letter: char| letter.is_ascii_digit());
    if name.len() > LONGEST_MNEMONIC {
        return Err(ErrorCode::MNEMONIC_TOO_LONG);
    }
    let digits = &mnemonic[name.len()..];
    let suffix = if digits.is_empty() {
        None
    } else {
        Some(digits.parse().map_err(|_| ErrorCode::SUFFIX_OUT_OF_RANGE)?)
    };
    Ok(Node {
        name: name.to_owned(),
        suffix,
    })
}

#[cfg(test)]
mod tests {
    use super::*;
    use proptest::prelude::*;

    fn units(text: &str) -> Result<Vec<Unit>, ErrorCode> {
        let mut message = Message::new(text.as_bytes().to_vec());
        std::iter::from_fn(|| message.next_unit()).collect()
    }

    fn headers(text: &str) -> Vec<String> {
        let path = |nodes: &[Node]| {
            nodes
                .iter()
                .map(|node| {
                    format!(
                        "{}{}",
                        node.name,
                        node.suffix.map(|n| n.to_string()).unwrap_or_default()
                    )
                })
                .collect::<Vec<_>>()
                .join(":")
        };
        let one = |unit: Unit| match unit.header {
            Header::Common(name) => format!("*{name}"),
            Header::Path(nodes) => path(&nodes),
        };
        units(text).unwrap().into_iter().map(one).collect()
    }

    #[test]
    fn path_goes_on_behind_a_semicolon_and_common_commands_leave_it() {
        assert_eq!(
            headers("sour:freq:star 1;stop 2;*OPC;cent 3"),
            ["SOUR:FREQ:STAR", "SOUR:FREQ:STOP", "*OPC", "SOUR:FREQ:CENT"]
        );
        assert_eq!(headers("FREQ 1;POW 2"), ["FREQ", "POW"]);
        assert_eq!(
            headers("SENS2:VOLT:RANG 1;:INP3:COUP AC"),
            ["SENS2:VOLT:RANG", "INP3:COUP"]
        );
        assert_eq!(headers("SYST:ERR?;"), ["SYST:ERR"]);
    }

    #[test]
    fn data_of_every_kind() {
        let unit =
            units("X 1, -2.5e3 , .5 MA,#hFf,#B101,#Q17,word_1,'it''s',\"a;b\",#13a;b,(@1,2)")
                .unwrap()
                .remove(0);
        assert_eq!(
            unit.data,
            [
                Datum::Number(1.0, None),
                Datum::Number(-2500.0, None),
                Datum::Number(0.5, Some("MA".into())),
                Datum::NonDecimal(255),
                Datum::NonDecimal(5),
                Datum::NonDecimal(15),
                Datum::Word("WORD_1".into()),
                Datum::Text("it's".into()),
                Datum::Text("a;b".into()),
                Datum::Block(b"a;b".to_vec()),
                Datum::Expression("@1,2".into()),
            ]
        );
        assert!(units("X?").unwrap()[0].query);
    }

    #[test]
    fn faults_have_their_standard_numbers() {
        for (text, code) in [
            ("FREQ\u{e9} 1", ErrorCode::INVALID_CHARACTER),
            ("FREQ! 1", ErrorCode::INVALID_CHARACTER),
            (":", ErrorCode::SYNTAX_ERROR),
            ("FREQ 1;;POW 2", ErrorCode::SYNTAX_ERROR),
            ("FREQ ,1", ErrorCode::SYNTAX_ERROR),
            ("FREQ 1,", ErrorCode::SYNTAX_ERROR),
            ("FREQ 1 HZ 2", ErrorCode::INVALID_SEPARATOR),
            ("FREQ 1 2", ErrorCode::INVALID_SEPARATOR),
            ("FREQ,1", ErrorCode::INVALID_SEPARATOR),
            ("FREQUENCYFREQUENCY 1", ErrorCode::MNEMONIC_TOO_LONG),
            ("FREQ 1E99999999", ErrorCode::EXPONENT_TOO_LARGE),
            ("FREQ +", ErrorCode::INVALID_NUMBER),
            ("X 'open", ErrorCode::INVALID_STRING),
            ("X #15ab", ErrorCode::INVALID_BLOCK),
            ("X (1", ErrorCode::INVALID_EXPRESSION),
            ("INP99999999999:COUP AC", ErrorCode::SUFFIX_OUT_OF_RANGE),
        ] {
            assert_eq!(units(text), Err(code), "{text}");
        }
        let mut message = Message::new(b"FREQ 1;!;POW 2".to_vec());
        assert!(message.next_unit().unwrap().is_ok());
        assert!(message.next_unit().unwrap().is_err());
        assert_eq!(message.next_unit(), None);
    }

    proptest! {
        #[test]
        fn never_panics_and_always_ends(bytes in proptest::collection::vec(any::<u8>(), 0..300)) {
            let mut message = Message::new(bytes);
            let count = std::iter::from_fn(|| message.next_unit()).count();
            prop_assert!(count <= 301);
        }

        #[test]
        fn never_panics_on_what_looks_like_scpi(text in "([*:A-Z#'\"(]{0,3}[A-Z]{1,4}[0-9]{0,12}[?:; ,.@E+-]{0,2}[0-9#HQB]{0,4}){0,12}") {
            let mut message = Message::new(text.into_bytes());
            prop_assert!(std::iter::from_fn(|| message.next_unit()).count() <= 400);
        }
    }
}
