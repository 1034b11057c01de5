//! Response data of IEEE 488.2 (chapter 8): numbers, strings, blocks, and how units are joined.

/// Most bytes that one program message may call for; beyond it the query is deadlocked (-430).
pub const LONGEST_RESPONSE: usize = 8 * 1024 * 1024;

/// The response message under construction.
#[derive(Clone, Debug, Default, PartialEq)]
pub struct Response {
    bytes: Vec<u8>,
    units: usize,
    data: usize,
    indefinite: bool,
}

impl Response {
    /// Begins the response of the next query.
    pub fn next_unit(&mut self) {
        if self.units > 0 {
            self.bytes.push(b';');
        }
        self.units += 1;
        self.data = 0;
    }

    /// Withdraws what the failed query had begun.
    pub fn truncate(&mut self, mark: Mark) {
        self.bytes.truncate(mark.length);
        self.units = mark.units;
        self.indefinite = mark.indefinite;
    }

    /// The state to go back to with [`Response::truncate`].
    pub fn mark(&self) -> Mark {
        Mark {
            length: self.bytes.len(),
            units: self.units,
            indefinite: self.indefinite,
        }
    }

    /// Whether nothing was answered.
    pub fn is_empty(&self) -> bool {
        self.units == 0
    }

    /// Responses begun.
    pub fn units(&self) -> usize {
        self.units
    }

    /// Bytes so far.
    pub fn length(&self) -> usize {
        self.bytes.len()
    }

    /// Whether a response was written behind which no other may come.
    pub fn is_indefinite(&self) -> bool {
        self.indefinite
    }

    /// The bytes, terminator included.
    pub fn into_bytes(mut self) -> Vec<u8> {
        self.bytes.push(b'\n');
        self.bytes
    }

    /// NR1.
    pub fn integer(&mut self, value: i64) {
        self.datum(value.to_string().as_bytes());
    }

    /// NR3, the shortest that reads back as the same double; 9.91E37 and 9.9E37 of SCPI-1999 (volume 1, 7.2.1.4).
    pub fn real(&mut self, value: f64) {
        self.datum(real_text(value).as_bytes());
    }

    /// `1` or `0`.
    pub fn boolean(&mut self, value: bool) {
        self.datum(if value { b"1" } else { b"0" });
    }

    /// Character data such as `SWE`.
    pub fn word(&mut self, word: &str) {
        self.datum(word.as_bytes());
    }

    /// String data within double quotes, which are doubled inside.
    pub fn string(&mut self, text: &str) {
        self.datum(format!("\"{}\"", text.replace('"', "\"\"")).as_bytes());
    }

    /// Arbitrary ASCII data: no query may follow in the same message.
    pub fn arbitrary(&mut self, text: &str) {
        self.datum(text.as_bytes());
        self.indefinite = true;
    }

    /// A block: `#<digits><length>` and the data, or `#0` and the data, ended by the message's LF.
    pub fn block(&mut self, data: &[u8], definite: bool) {
        if definite {
            let length = data.len().to_string();
            self.datum(format!("#{}{length}", length.len()).as_bytes());
        } else {
            self.datum(b"#0");
            self.indefinite = true;
        }
        self.bytes.extend_from_slice(data);
    }

    fn datum(&mut self, text: &[u8]) {
        if self.data > 0 {
            self.bytes.push(b',');
        }
        self.data += 1;
        self.bytes.extend_from_slice(text);
    }
}

/// A place in a response to go back to.
#[derive(Clone, Copy, Debug)]
pub struct Mark {
    length: usize,
    units: usize,
    indefinite: bool,
}

/// NR3 text of a double.
pub fn real_text(value: f64) -> String {
    if value.is_nan() {
        return "9.91E+37".to_owned();
    }
    if value.is_infinite() {
        return if value > 0.0 { "9.9E+37" } else { "-9.9E+37" }.to_owned();
    }
    let text = format!("{value:E}");
    let (mantissa, exponent) = text.split_once('E').unwrap_or((&text, "0"));
    let point = if mantissa.contains('.') { "" } else { ".0" };
    let (sign, digits) = exponent
        .strip_prefix('-')
        .map_or(('+', exponent), |digits| ('-', digits));
    format!("{mantissa}{point}E{sign}{digits:0>2}")
}

#[cfg(test)]
mod tests {
    use super::*;
    use proptest::prelude::*;

    #[test]
    fn numbers_as_nr3() {
        for (value, text) in [
            (80e6, "8.0E+07"),
            (0.0, "0.0E+00"),
            (-0.02, "-2.0E-02"),
            (1.25e-5, "1.25E-05"),
            (1e100, "1.0E+100"),
            (f64::NAN, "9.91E+37"),
            (f64::INFINITY, "9.9E+37"),
            (f64::NEG_INFINITY, "-9.9E+37"),
        ] {
            assert_eq!(real_text(value), text);
        }
    }

    #[test]
    fn units_and_data_are_joined() {
        let mut response = Response::default();
        response.next_unit();
        response.integer(1);
        response.string("a\"b");
        response.next_unit();
        response.block(b"xyz", true);
        assert_eq!(response.into_bytes(), b"1,\"a\"\"b\";#13xyz\n");
    }

    proptest! {
        #[test]
        fn reals_read_back_exactly(value in any::<f64>().prop_filter("finite", |value| value.is_finite())) {
            prop_assert_eq!(real_text(value).parse::<f64>().ok(), Some(value));
        }
    }
}
