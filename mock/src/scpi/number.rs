//! Decimal numbers and their suffixes: IEEE 488.2, 7.7.2 and 7.7.3 (tables 7-1 and 7-2, recalled).

use crate::scpi::ErrorCode;

/// What a number measures, which decides the suffixes it may carry and the unit meant without one.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub enum Unit {
    /// No suffix allowed.
    None,
    /// Hz.
    Hertz,
    /// A.
    Ampere,
    /// V.
    Volt,
    /// s.
    Second,
    /// dBm, without multipliers.
    Dbm,
    /// Kelvin within; a bare number is in degrees Celsius.
    Celsius,
    /// Kelvin within; a bare number is in kelvin.
    Kelvin,
}

/// Zero of the Celsius scale in kelvin (BIPM SI brochure, 9th edition).
pub const CELSIUS_ZERO: f64 = 273.15;

/// Reads a decimal number at the start of the text: its value and the bytes it takes, suffix excluded.
pub fn decimal(text: &[u8]) -> Result<(f64, usize), ErrorCode> {
    let digits = |from: usize| {
        text[from..]
            .iter()
            .take_while(|byte| byte.is_ascii_digit())
            .count()
    };
    let mut end = usize::from(matches!(text.first(), Some(b'+' | b'-')));
    let whole = digits(end);
    end += whole;
    let mut fraction = 0;
    if text.get(end) == Some(&b'.') {
        fraction = digits(end + 1);
        end += 1 + fraction;
    }
    if whole + fraction == 0 {
        return Err(ErrorCode::INVALID_NUMBER);
    }
    if whole + fraction > 255 {
        return Err(ErrorCode::TOO_MANY_DIGITS);
    }
    let mantissa = String::from_utf8_lossy(&text[..end]).into_owned();
    let (exponent, length) = exponent(&text[end..])?;
    let value = format!("{mantissa}e{exponent}")
        .parse()
        .map_err(|_| ErrorCode::INVALID_NUMBER)?;
    Ok((value, end + length))
}

/// The exponent and the bytes it takes; (0, 0) where what follows is none.
fn exponent(text: &[u8]) -> Result<(i32, usize), ErrorCode> {
    let blanks = text.iter().take_while(|byte| **byte == b' ').count();
    if !matches!(text.get(blanks), Some(b'E' | b'e')) {
        return Ok((0, 0));
    }
    let mut at = blanks + 1;
    at += text[at..].iter().take_while(|byte| **byte == b' ').count();
    let sign = usize::from(matches!(text.get(at), Some(b'+' | b'-')));
    let digits = text[at + sign..]
        .iter()
        .take_while(|byte| byte.is_ascii_digit())
        .count();
    if digits == 0 {
        return Ok((0, 0));
    }
    let end = at + sign + digits;
    let value: i32 = String::from_utf8_lossy(&text[at..end])
        .parse()
        .map_err(|_| ErrorCode::EXPONENT_TOO_LARGE)?;
    // IEEE 488.2, 7.7.2.4.1: magnitude of the exponent at most 32000.
    if value.abs() > 32_000 {
        Err(ErrorCode::EXPONENT_TOO_LARGE)
    } else {
        Ok((value, end))
    }
}

/// The value in the unit's own scale, its suffix applied.
pub fn with_suffix(value: f64, suffix: Option<&str>, unit: Unit) -> Result<f64, ErrorCode> {
    let Some(suffix) = suffix else {
        return Ok(if unit == Unit::Celsius {
            value + CELSIUS_ZERO
        } else {
            value
        });
    };
    let symbol = match unit {
        Unit::None => return Err(ErrorCode::SUFFIX_NOT_ALLOWED),
        Unit::Dbm if suffix == "DBM" => return Ok(value),
        Unit::Celsius | Unit::Kelvin => return temperature(value, suffix),
        Unit::Dbm => return Err(ErrorCode::INVALID_SUFFIX),
        Unit::Hertz => "HZ",
        Unit::Ampere => "A",
        Unit::Volt => "V",
        Unit::Second => "S",
    };
    let multiplier = suffix
        .strip_suffix(symbol)
        .ok_or(ErrorCode::INVALID_SUFFIX)?;
    // Dividing by an exact power gives the double nearest to what was written; multiplying by 1e-3 would not.
    match multiplier {
        "" => Ok(value),
        "EX" => Ok(value * 1e18),
        "PE" => Ok(value * 1e15),
        "T" => Ok(value * 1e12),
        "G" => Ok(value * 1e9),
        "MA" => Ok(value * 1e6),
        // The one exception of the table: MHZ is megahertz.
        "M" if unit == Unit::Hertz => Ok(value * 1e6),
        "K" => Ok(value * 1e3),
        "M" => Ok(value / 1e3),
        "U" => Ok(value / 1e6),
        "N" => Ok(value / 1e9),
        "P" => Ok(value / 1e12),
        "F" => Ok(value / 1e15),
        "A" => Ok(value / 1e18),
        _ => Err(ErrorCode::INVALID_SUFFIX),
    }
}

fn temperature(value: f64, suffix: &str) -> Result<f64, ErrorCode> {
    match suffix {
        "CEL" => Ok(value + CELSIUS_ZERO),
        "K" => Ok(value),
        "MK" => Ok(value / 1e3),
        _ => Err(ErrorCode::INVALID_SUFFIX),
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn suffixes_of_the_standard() {
        for (value, suffix, unit, wanted) in [
            (20.0, "MA", Unit::Ampere, 20e-3),
            (20.0, "UA", Unit::Ampere, 20e-6),
            (80.0, "MHZ", Unit::Hertz, 80e6),
            (80.0, "MAHZ", Unit::Hertz, 80e6),
            (300.0, "KHZ", Unit::Hertz, 300e3),
            (40.0, "MS", Unit::Second, 40e-3),
            (12.0, "US", Unit::Second, 12e-6),
            (1.0, "S", Unit::Second, 1.0),
            (5.0, "MV", Unit::Volt, 5e-3),
            (1.0, "MAV", Unit::Volt, 1e6),
            (-3.0, "DBM", Unit::Dbm, -3.0),
            (80.0, "CEL", Unit::Kelvin, 353.15),
            (353.0, "K", Unit::Celsius, 353.0),
        ] {
            assert_eq!(
                with_suffix(value, Some(suffix), unit),
                Ok(wanted),
                "{value} {suffix}"
            );
        }
        assert_eq!(
            with_suffix(1.0, Some("HZ"), Unit::Ampere),
            Err(ErrorCode::INVALID_SUFFIX)
        );
        assert_eq!(
            with_suffix(1.0, Some("HZ"), Unit::None),
            Err(ErrorCode::SUFFIX_NOT_ALLOWED)
        );
        assert_eq!(with_suffix(25.0, None, Unit::Celsius), Ok(298.15));
    }

    #[test]
    fn decimals_and_what_follows_them() {
        assert_eq!(decimal(b"20 MA"), Ok((20.0, 2)));
        assert_eq!(decimal(b"1.5E+3HZ"), Ok((1500.0, 6)));
        assert_eq!(decimal(b"1 E 3"), Ok((1000.0, 5)));
        assert_eq!(decimal(b"1EXHZ"), Ok((1.0, 1)));
        assert_eq!(decimal(b".5,"), Ok((0.5, 2)));
        assert_eq!(decimal(b"5.,"), Ok((5.0, 2)));
        assert_eq!(decimal(b"-."), Err(ErrorCode::INVALID_NUMBER));
        assert_eq!(decimal(&[b'1'; 300]), Err(ErrorCode::TOO_MANY_DIGITS));
    }
}
