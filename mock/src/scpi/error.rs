//! Error numbers of SCPI-1999 (volume 2, chapter 21, recalled) and their texts. Nothing of our own is added.

use crate::scpi::status::event;

/// An error number of SCPI-1999. Zero is never an error and has no value here.
#[derive(Clone, Copy, Debug, PartialEq, Eq, Hash, PartialOrd, Ord)]
pub struct ErrorCode(i16);

macro_rules! codes {
    ($($name:ident = $number:literal, $text:literal;)*) => {
        impl ErrorCode {
            $(#[doc = concat!($text, ".")] pub const $name: ErrorCode = ErrorCode($number);)*

            /// The text that SCPI-1999 gives to this number.
            pub fn text(self) -> &'static str {
                match self.0 { $($number => $text,)* _ => "Device-specific error" }
            }
        }
    };
}

codes! {
    COMMAND_ERROR = -100, "Command error";
    INVALID_CHARACTER = -101, "Invalid character";
    SYNTAX_ERROR = -102, "Syntax error";
    INVALID_SEPARATOR = -103, "Invalid separator";
    DATA_TYPE_ERROR = -104, "Data type error";
    PARAMETER_NOT_ALLOWED = -108, "Parameter not allowed";
    MISSING_PARAMETER = -109, "Missing parameter";
    MNEMONIC_TOO_LONG = -112, "Program mnemonic too long";
    UNDEFINED_HEADER = -113, "Undefined header";
    SUFFIX_OUT_OF_RANGE = -114, "Header suffix out of range";
    INVALID_NUMBER = -121, "Invalid character in number";
    EXPONENT_TOO_LARGE = -123, "Exponent too large";
    TOO_MANY_DIGITS = -124, "Too many digits";
    INVALID_SUFFIX = -131, "Invalid suffix";
    SUFFIX_NOT_ALLOWED = -138, "Suffix not allowed";
    INVALID_STRING = -151, "Invalid string data";
    INVALID_BLOCK = -161, "Invalid block data";
    INVALID_EXPRESSION = -171, "Invalid expression";
    TRIGGER_IGNORED = -211, "Trigger ignored";
    INIT_IGNORED = -213, "Init ignored";
    PARAMETER_ERROR = -220, "Parameter error";
    SETTINGS_CONFLICT = -221, "Settings conflict";
    DATA_OUT_OF_RANGE = -222, "Data out of range";
    TOO_MUCH_DATA = -223, "Too much data";
    ILLEGAL_PARAMETER = -224, "Illegal parameter value";
    DATA_STALE = -230, "Data corrupt or stale";
    QUEUE_OVERFLOW = -350, "Queue overflow";
    COMMUNICATION_ERROR = -360, "Communication error";
    INPUT_OVERRUN = -363, "Input buffer overrun";
    QUERY_ERROR = -400, "Query error";
    QUERY_INTERRUPTED = -410, "Query INTERRUPTED";
    QUERY_UNTERMINATED = -420, "Query UNTERMINATED";
    QUERY_DEADLOCKED = -430, "Query DEADLOCKED";
    QUERY_AFTER_INDEFINITE = -440, "Query UNTERMINATED after indefinite response";
}

impl ErrorCode {
    /// The number itself, such as -222.
    pub fn number(self) -> i16 {
        self.0
    }

    /// Whether this is a command error (-1xx), after which the rest of the program message is discarded.
    pub fn is_command_error(self) -> bool {
        (-199..=-100).contains(&self.0)
    }

    /// The bit of the standard event status register that this class of errors sets (SCPI-1999 21.8).
    pub fn event_bit(self) -> u8 {
        match self.0 {
            -199..=-100 => event::COMMAND_ERROR,
            -299..=-200 => event::EXECUTION_ERROR,
            -499..=-400 => event::QUERY_ERROR,
            _ => event::DEVICE_ERROR,
        }
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn classes_set_their_bits() {
        // SCPI-1999 21.8: command errors set ESR bit 5, execution errors bit 4, device errors bit 3, query errors bit 2.
        assert_eq!(ErrorCode::UNDEFINED_HEADER.event_bit(), 1 << 5);
        assert_eq!(ErrorCode::DATA_OUT_OF_RANGE.event_bit(), 1 << 4);
        assert_eq!(ErrorCode::QUEUE_OVERFLOW.event_bit(), 1 << 3);
        assert_eq!(ErrorCode::QUERY_INTERRUPTED.event_bit(), 1 << 2);
        assert_eq!(ErrorCode::UNDEFINED_HEADER.text(), "Undefined header");
        assert_eq!(ErrorCode::QUERY_AFTER_INDEFINITE.number(), -440);
    }
}
