//! Numbers in response messages: NR1, NR2, NR3, `#H`, `#Q`, `#B`, and SCPI's stand-ins for infinity and
//! not-a-number (SCPI-1999 Volume 1, 7.2.1.4 and 7.2.1.5: 9.9E37 and 9.91E37).

use thiserror::Error;

/// Text that is no number.
#[derive(Debug, Clone, PartialEq, Eq, Error)]
#[error("`{0}` is not a number")]
pub struct NumberError(pub String);

/// SCPI's infinity.
pub const INFINITY: f64 = 9.9e37;
/// SCPI's not-a-number.
pub const NOT_A_NUMBER: f64 = 9.91e37;

/// Reads a numeric element; 9.9E37 becomes infinity (with its sign), 9.91E37 not-a-number.
///
/// # Errors
/// Anything else than one number, such as words or an empty element.
pub fn parse(element: &[u8]) -> Result<f64, NumberError> {
    let text = element.trim_ascii();
    let refuse = || NumberError(String::from_utf8_lossy(text).chars().take(40).collect());
    let value = match text {
        [b'#', kind, digits @ ..] => radix(*kind, digits),
        // Rust's own reader also takes words such as "inf": those are not SCPI's.
        _ if text.iter().all(|byte| b"+-.0123456789eE".contains(byte)) => std::str::from_utf8(text)
            .ok()
            .and_then(|text| text.parse::<f64>().ok()),
        _ => None,
    };
    value
        .filter(|value| value.is_finite())
        .map(stand_in)
        .ok_or_else(refuse)
}

/// Reads `1`, `0`, or a number that rounds to one of them, `ON` and `OFF`.
///
/// # Errors
/// Anything else.
pub fn parse_switch(element: &[u8]) -> Result<bool, NumberError> {
    match element.trim_ascii() {
        b"1" | b"ON" | b"on" | b"On" => Ok(true),
        b"0" | b"OFF" | b"off" | b"Off" => Ok(false),
        other => match parse(other)? {
            1.0 => Ok(true),
            0.0 => Ok(false),
            _ => Err(NumberError(String::from_utf8_lossy(other).into_owned())),
        },
    }
}

/// Writes a number so that it is read back to the last bit; infinities and not-a-number as SCPI has them.
pub fn print(value: f64) -> String {
    match value {
        value if value.is_nan() => "9.91E+37".to_owned(),
        f64::INFINITY => "9.9E+37".to_owned(),
        f64::NEG_INFINITY => "-9.9E+37".to_owned(),
        0.0 => "0".to_owned(),
        value if (1e-3..1e12).contains(&value.abs()) => format!("{value}"),
        value => format!("{value:E}"),
    }
}

fn radix(kind: u8, digits: &[u8]) -> Option<f64> {
    let radix = match kind {
        b'H' | b'h' => 16,
        b'Q' | b'q' => 8,
        b'B' | b'b' => 2,
        _ => return None,
    };
    let digits = std::str::from_utf8(digits).ok()?;
    if digits.starts_with(['+', '-']) {
        return None;
    }
    u64::from_str_radix(digits, radix)
        .ok()
        .map(|value| value as f64)
}

/// Instruments that print from single precision are off in the eighth digit; the two differ by 1e-3.
fn stand_in(value: f64) -> f64 {
    let near = |mark: f64| (value.abs() / mark - 1.0).abs() < 1e-6;
    match value {
        _ if near(NOT_A_NUMBER) => f64::NAN,
        _ if near(INFINITY) => f64::INFINITY.copysign(value),
        _ => value,
    }
}

#[cfg(test)]
mod tests {
    use proptest::prelude::*;

    use super::*;

    #[test]
    fn every_form_of_ieee_488_2() {
        for (text, value) in [
            ("+1", 1.0),
            ("-0.5", -0.5),
            (" 8.0E+07 ", 8e7),
            (".5e-3", 5e-4),
            ("#HfF", 255.0),
            ("#Q17", 15.0),
            ("#B101", 5.0),
        ] {
            assert_eq!(parse(text.as_bytes()), Ok(value), "{text}");
        }
        for text in [
            "", "inf", "NaN", "1,2", "1V", "#H", "#H-1", "#X1", "--1", "1E999",
        ] {
            assert!(parse(text.as_bytes()).is_err(), "{text}");
        }
    }

    // SCPI-1999 Volume 1, 7.2.1.4 and 7.2.1.5.
    #[test]
    fn infinity_and_not_a_number() {
        assert_eq!(parse(b"9.9E37"), Ok(f64::INFINITY));
        assert_eq!(parse(b"+9.90000000E+37"), Ok(f64::INFINITY));
        assert_eq!(parse(b"-9.9E+37"), Ok(f64::NEG_INFINITY));
        assert!(parse(b"9.91E37").unwrap().is_nan());
        assert!(parse(b"9.9100003E37").unwrap().is_nan());
        assert_eq!(parse(b"9.8E37"), Ok(9.8e37));
        for value in [f64::INFINITY, f64::NEG_INFINITY] {
            assert_eq!(parse(print(value).as_bytes()), Ok(value));
        }
        assert!(parse(print(f64::NAN).as_bytes()).unwrap().is_nan());
    }

    #[test]
    fn switches() {
        assert_eq!(parse_switch(b"1"), Ok(true));
        assert_eq!(parse_switch(b"+0"), Ok(false));
        assert!(parse_switch(b"2").is_err());
        assert!(parse_switch(b"").is_err());
    }

    proptest! {
        #[test]
        fn to_the_last_bit(value in -1e30f64..1e30) {
            prop_assert_eq!(parse(print(value).as_bytes()), Ok(value));
        }

        #[test]
        fn small_ones_too(value in -1e-3f64..1e-3) {
            prop_assert_eq!(parse(print(value).as_bytes()), Ok(value));
        }

        #[test]
        fn never_panics(bytes: Vec<u8>) {
            let _ = (parse(&bytes), parse_switch(&bytes));
        }
    }
}
