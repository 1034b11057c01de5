//! Units of a world file: "118.6 nT/mA" to SI. The mock's own small parser, so that a unit misread by the daemon's
//! does not pass unseen.

/// The units allowed for one kind of quantity: name and factor to the first one, which is the SI unit.
#[derive(Debug, Clone, Copy)]
pub(super) struct Units(&'static [(&'static str, f64)]);

pub(super) const PLAIN: Units = Units(&[("", 1.0), ("%", 1e-2), ("ppm", 1e-6)]);
pub(super) const FIELD: Units = Units(&[
    ("T", 1.0),
    ("mT", 1e-3),
    ("uT", 1e-6),
    ("nT", 1e-9),
    ("pT", 1e-12),
    ("G", 1e-4),
    ("mG", 1e-7),
]);
pub(super) const FIELD_PER_CURRENT: Units = Units(&[
    ("T/A", 1.0),
    ("mT/A", 1e-3),
    ("uT/A", 1e-6),
    ("nT/A", 1e-9),
    ("uT/mA", 1e-3),
    ("nT/mA", 1e-6),
    ("G/A", 1e-4),
]);
pub(super) const FIELD_PER_TIME: Units = Units(&[
    ("T/s", 1.0),
    ("nT/s", 1e-9),
    ("pT/s", 1e-12),
    ("nT/h", 1e-9 / 3600.0),
]);
pub(super) const CURRENT: Units = Units(&[("A", 1.0), ("mA", 1e-3), ("uA", 1e-6), ("nA", 1e-9)]);
pub(super) const FREQUENCY: Units = Units(&[("Hz", 1.0), ("kHz", 1e3), ("MHz", 1e6), ("GHz", 1e9)]);
pub(super) const TIME: Units = Units(&[
    ("s", 1.0),
    ("ms", 1e-3),
    ("us", 1e-6),
    ("ns", 1e-9),
    ("min", 60.0),
    ("h", 3600.0),
]);
pub(super) const RATE: Units = Units(&[("1/s", 1.0), ("1/min", 1.0 / 60.0), ("1/h", 1.0 / 3600.0)]);
pub(super) const LENGTH: Units = Units(&[("m", 1.0), ("cm", 1e-2), ("mm", 1e-3)]);
/// degC is told apart by its name: the only unit with an offset.
pub(super) const TEMPERATURE: Units = Units(&[("K", 1.0), ("degC", 1.0)]);
pub(super) const TEMPERATURE_DIFFERENCE: Units = Units(&[("K", 1.0), ("mK", 1e-3)]);
pub(super) const WARMING: Units = Units(&[("K/W", 1.0)]);
pub(super) const EXPANSION: Units = Units(&[("1/K", 1.0), ("ppm/K", 1e-6)]);
pub(super) const RESISTANCE: Units = Units(&[("ohm", 1.0), ("mohm", 1e-3), ("kohm", 1e3)]);
pub(super) const INDUCTANCE: Units = Units(&[("H", 1.0), ("mH", 1e-3), ("uH", 1e-6)]);
pub(super) const VOLTAGE: Units = Units(&[("V", 1.0), ("mV", 1e-3), ("uV", 1e-6)]);
pub(super) const NOISE: Units = Units(&[
    ("V/sqrt(Hz)", 1.0),
    ("uV/sqrt(Hz)", 1e-6),
    ("nV/sqrt(Hz)", 1e-9),
]);
pub(super) const TRANSIMPEDANCE: Units = Units(&[("V/A", 1.0), ("V/mA", 1e3), ("V/uA", 1e6)]);
pub(super) const LEVEL: Units = Units(&[("dBm", 1.0)]);
pub(super) const SLOPE: Units = Units(&[("1/Hz", 1.0), ("1/MHz", 1e-6), ("%/MHz", 1e-8)]);
pub(super) const CURVATURE: Units =
    Units(&[("1/Hz^2", 1.0), ("1/MHz^2", 1e-12), ("%/MHz^2", 1e-14)]);
pub(super) const PULL: Units = Units(&[("Hz/Hz", 1.0), ("Hz/MHz", 1e-6)]);
pub(super) const LIGHT_SHIFT: Units = Units(&[("Hz/Hz^2", 1.0), ("Hz/MHz^2", 1e-12)]);

impl Units {
    /// Whether a bare number will do.
    pub(super) fn is_plain(self) -> bool {
        self.base().is_empty()
    }

    /// Name of the SI unit.
    pub(super) fn base(self) -> &'static str {
        self.0.first().map_or("", |unit| unit.0)
    }

    /// How a value is written.
    pub(super) fn example(self) -> String {
        if self.is_plain() {
            return "a number".to_owned();
        }
        let names: Vec<&str> = self.0.iter().map(|unit| unit.0).collect();
        format!(
            "a text such as \"1 {}\" (units: {})",
            self.base(),
            names.join(", ")
        )
    }
}

/// The quantity in SI units.
///
/// # Errors
/// No number, or a unit that does not belong here.
pub(super) fn parse(text: &str, units: Units) -> Result<f64, String> {
    let text = text.trim().replace(['\u{b5}', '\u{3bc}'], "u");
    let end = text
        .char_indices()
        .find(|&(at, c)| !(c.is_ascii_digit() || "+-.".contains(c) || exponent(&text, at)))
        .map_or(text.len(), |(at, _)| at);
    let (number, unit) = text.split_at(end);
    let number: f64 = number
        .trim()
        .parse()
        .map_err(|_| format!("`{text}` is no quantity; write {}", units.example()))?;
    let unit = unit.trim();
    let Some((name, factor)) = units.0.iter().find(|(name, _)| *name == unit) else {
        return Err(format!("has the unit `{unit}`; write {}", units.example()));
    };
    let offset = if *name == "degC" {
        darkline_core::atom::constants::ZERO_CELSIUS
    } else {
        0.0
    };
    // Dividing by a power of ten that f64 holds exactly rounds once less than multiplying by its inverse.
    Ok(offset
        + if *factor < 1.0 {
            number / (1.0 / factor).round().max(1.0)
        } else {
            number * factor
        })
}

/// An `e` that stands between digits belongs to the number.
fn exponent(text: &str, at: usize) -> bool {
    let bytes = text.as_bytes();
    let digit = |i: usize| bytes.get(i).is_some_and(u8::is_ascii_digit);
    let signed = bytes.get(at + 1).is_some_and(|b| matches!(b, b'+' | b'-'));
    matches!(bytes[at], b'e' | b'E')
        && at > 0
        && digit(at - 1)
        && (digit(at + 1) || (signed && digit(at + 2)))
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn quantities_become_si() {
        for (text, units, expected) in [
            ("118.6 nT/mA", FIELD_PER_CURRENT, 118.6e-6),
            ("-2.5e-3 mT", FIELD, -2.5e-6),
            ("60 degC", TEMPERATURE, 333.15),
            ("3 1/h", RATE, 3.0 / 3600.0),
            ("5 \u{b5}s", TIME, 5e-6),
            ("10 mG", FIELD, 1e-6),
            ("0.3", PLAIN, 0.3),
            ("2 %", PLAIN, 0.02),
            ("1e3 Hz", FREQUENCY, 1e3),
        ] {
            let ours = parse(text, units).unwrap();
            assert!((ours / expected - 1.0).abs() < 1e-14, "{text}: {ours}");
        }
    }

    #[test]
    fn nonsense_is_refused() {
        for (text, units) in [
            ("3", FIELD),
            ("3 Hz", FIELD),
            ("nT", FIELD),
            ("", TIME),
            ("1e nT", FIELD),
            ("3 nt", FIELD),
        ] {
            assert!(parse(text, units).is_err(), "{text}");
        }
    }
}
