//! Samples out of a block, in the formats of SCPI-1999's `FORMat` subsystem (Volume 2, chapter 9), and the
//! preamble that scales them. Keeps the codes as received; scaling is left to whoever uses them.

use thiserror::Error;

use crate::trace::Codes;
use crate::wire::frame::elements;
use crate::wire::number;

/// How a sample is written.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum Encoding {
    /// `INT,8`: two's complement.
    Int8,
    /// `UINT,8`.
    Uint8,
    /// `INT,16`: two's complement.
    Int16,
    /// `UINT,16`.
    Uint16,
    /// `REAL,32`: IEEE 754 single.
    Real32,
    /// `REAL,64`: IEEE 754 double.
    Real64,
    /// `ASC`: numbers parted by commas.
    Ascii,
}

/// Which byte of a sample comes first.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum ByteOrder {
    /// `FORM:BORD NORM`: the most significant byte first.
    Normal,
    /// `FORM:BORD SWAP`: the least significant byte first.
    Swapped,
}

/// Why a block is not what was announced.
#[derive(Debug, Clone, PartialEq, Error)]
pub enum BlockError {
    /// The length is no whole number of samples.
    #[error("{bytes} bytes are no whole number of samples of {width} bytes")]
    Uneven {
        /// Bytes received.
        bytes: usize,
        /// Bytes of one sample.
        width: usize,
    },
    /// The words are no format of SCPI-1999 that holds samples.
    #[error("`{0}` is no sample format")]
    Format(String),
    /// An element that should be a number.
    #[error(transparent)]
    Number(#[from] number::NumberError),
}

impl Encoding {
    /// Reads the answer of `FORM?`: `INT,16`, `REAL,32`, `ASC,0`.
    ///
    /// # Errors
    /// [`BlockError::Format`] for anything else.
    pub fn parse(text: &str) -> Result<Self, BlockError> {
        let upper = text.trim().to_ascii_uppercase();
        let (kind, length) = upper.split_once(',').unwrap_or((&upper, ""));
        match (kind.trim(), length.trim()) {
            ("INT" | "INTEGER", "8") => Ok(Self::Int8),
            ("UINT" | "UINTEGER", "8") => Ok(Self::Uint8),
            ("INT" | "INTEGER", "16") => Ok(Self::Int16),
            ("UINT" | "UINTEGER", "16") => Ok(Self::Uint16),
            ("REAL", "32") => Ok(Self::Real32),
            ("REAL", "64") => Ok(Self::Real64),
            ("ASC" | "ASCII", _) => Ok(Self::Ascii),
            _ => Err(BlockError::Format(text.trim().to_owned())),
        }
    }

    /// As a parameter of `FORM`.
    pub fn word(self) -> &'static str {
        match self {
            Self::Int8 => "INT,8",
            Self::Uint8 => "UINT,8",
            Self::Int16 => "INT,16",
            Self::Uint16 => "UINT,16",
            Self::Real32 => "REAL,32",
            Self::Real64 => "REAL,64",
            Self::Ascii => "ASC",
        }
    }

    /// Bytes of one sample; `None` for `ASC`.
    pub fn width(self) -> Option<usize> {
        match self {
            Self::Int8 | Self::Uint8 => Some(1),
            Self::Int16 | Self::Uint16 => Some(2),
            Self::Real32 => Some(4),
            Self::Real64 => Some(8),
            Self::Ascii => None,
        }
    }
}

impl ByteOrder {
    /// Reads the answer of `FORM:BORD?`.
    ///
    /// # Errors
    /// [`BlockError::Format`] for anything else.
    pub fn parse(text: &str) -> Result<Self, BlockError> {
        match text.trim().to_ascii_uppercase().as_str() {
            "NORM" | "NORMAL" => Ok(Self::Normal),
            "SWAP" | "SWAPPED" => Ok(Self::Swapped),
            _ => Err(BlockError::Format(text.trim().to_owned())),
        }
    }

    /// As a parameter of `FORM:BORD`.
    pub fn word(self) -> &'static str {
        match self {
            Self::Normal => "NORM",
            Self::Swapped => "SWAP",
        }
    }
}

/// The samples of a block's payload, or of a unit of ASCII numbers.
///
/// # Errors
/// [`BlockError::Uneven`], or [`BlockError::Number`] for ASCII.
pub fn decode(bytes: &[u8], encoding: Encoding, order: ByteOrder) -> Result<Codes, BlockError> {
    let width = encoding.width().unwrap_or(1);
    if !bytes.len().is_multiple_of(width) {
        return Err(BlockError::Uneven {
            bytes: bytes.len(),
            width,
        });
    }
    Ok(match encoding {
        Encoding::Int8 => Codes::I8(bytes.iter().map(|byte| byte.cast_signed()).collect()),
        Encoding::Uint8 => Codes::U8(bytes.to_vec()),
        Encoding::Int16 => Codes::I16(words(bytes, order, i16::from_be_bytes)),
        Encoding::Uint16 => Codes::U16(words(bytes, order, u16::from_be_bytes)),
        Encoding::Real32 => Codes::F32(words(bytes, order, f32::from_be_bytes)),
        Encoding::Real64 => Codes::F64(words(bytes, order, f64::from_be_bytes)),
        Encoding::Ascii => Codes::F64(
            elements(bytes)
                .into_iter()
                .map(number::parse)
                .collect::<Result<_, _>>()?,
        ),
    })
}

fn words<const N: usize, T>(bytes: &[u8], order: ByteOrder, read: fn([u8; N]) -> T) -> Vec<T> {
    let (words, _) = bytes.as_chunks::<N>();
    words
        .iter()
        .map(|word| {
            let mut word = *word;
            if order == ByteOrder::Swapped {
                word.reverse();
            }
            read(word)
        })
        .collect()
}

/// How codes become volts and when they were taken: one record's preamble.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct Preamble {
    /// Samples in the record.
    pub samples: u32,
    /// Time between samples, s.
    pub interval: f64,
    /// Value of one code.
    pub scale: f64,
    /// Value of code 0.
    pub offset: f64,
    /// Time from the trigger to sample 0 as the instrument sees it, s.
    pub delay: f64,
    /// Code of a sample clipped at the lower end; minus infinity where the instrument does not say.
    pub lowest: f64,
    /// Code of a sample clipped at the upper end; infinity where the instrument does not say.
    pub highest: f64,
}

impl Preamble {
    /// How many samples stand at an end of the range.
    pub fn clipped(&self, codes: &Codes) -> u32 {
        let outside = codes
            .iter()
            .filter(|code| *code <= self.lowest || *code >= self.highest)
            .count();
        u32::try_from(outside).unwrap_or(u32::MAX)
    }
}

#[cfg(test)]
mod tests {
    use proptest::prelude::*;

    use super::*;

    const ENCODINGS: [Encoding; 7] = [
        Encoding::Int8,
        Encoding::Uint8,
        Encoding::Int16,
        Encoding::Uint16,
        Encoding::Real32,
        Encoding::Real64,
        Encoding::Ascii,
    ];

    #[test]
    fn known_bytes() {
        use ByteOrder::{Normal, Swapped};
        use Encoding::*;
        assert_eq!(
            decode(b"\xff\x7f\x80", Int8, Normal),
            Ok(Codes::I8(vec![-1, 127, -128]))
        );
        assert_eq!(
            decode(b"\xff\x00", Uint8, Swapped),
            Ok(Codes::U8(vec![255, 0]))
        );
        assert_eq!(
            decode(b"\xff\xfe\x01\x00", Int16, Normal),
            Ok(Codes::I16(vec![-2, 256]))
        );
        assert_eq!(
            decode(b"\xfe\xff\x00\x01", Int16, Swapped),
            Ok(Codes::I16(vec![-2, 256]))
        );
        assert_eq!(
            decode(b"\x80\x00", Uint16, Normal),
            Ok(Codes::U16(vec![32768]))
        );
        // IEEE 754: 1.0f32 is 3F800000, -2.0f64 is C000000000000000.
        assert_eq!(
            decode(b"\x3f\x80\0\0", Real32, Normal),
            Ok(Codes::F32(vec![1.0]))
        );
        assert_eq!(
            decode(b"\0\0\0\0\0\0\0\xc0", Real64, Swapped),
            Ok(Codes::F64(vec![-2.0]))
        );
        assert_eq!(
            decode(b"1.5E-3, -2,9.9E37", Ascii, Normal),
            Ok(Codes::F64(vec![1.5e-3, -2.0, f64::INFINITY]))
        );
        assert_eq!(
            decode(b"abc", Int16, Normal),
            Err(BlockError::Uneven { bytes: 3, width: 2 })
        );
        assert!(decode(b"1,,2", Ascii, Normal).is_err());
    }

    #[test]
    fn words_are_read_back() {
        for encoding in ENCODINGS {
            assert_eq!(Encoding::parse(encoding.word()), Ok(encoding));
        }
        assert_eq!(Encoding::parse("ASC,0\r"), Ok(Encoding::Ascii));
        assert!(Encoding::parse("INT,24").is_err());
        for order in [ByteOrder::Normal, ByteOrder::Swapped] {
            assert_eq!(ByteOrder::parse(order.word()), Ok(order));
        }
        assert!(ByteOrder::parse("LSBF").is_err());
    }

    #[test]
    fn clipped_samples_are_counted() {
        let preamble = Preamble {
            samples: 4,
            interval: 2e-5,
            scale: 1e-3,
            offset: 0.0,
            delay: 0.0,
            lowest: -8192.0,
            highest: 8191.0,
        };
        assert_eq!(
            preamble.clipped(&Codes::I16(vec![-8192, -8191, 8190, 8191])),
            2
        );
    }

    proptest! {
        #[test]
        fn bytes_go_round(values: Vec<f64>, swapped: bool) {
            let order = if swapped { ByteOrder::Swapped } else { ByteOrder::Normal };
            let bytes: Vec<u8> = values
                .iter()
                .flat_map(|value| if swapped { value.to_le_bytes() } else { value.to_be_bytes() })
                .collect();
            let codes = decode(&bytes, Encoding::Real64, order).unwrap();
            let back: Vec<u64> = codes.iter().map(f64::to_bits).collect();
            let sent: Vec<u64> = values.iter().map(|value| value.to_bits()).collect();
            prop_assert_eq!(back, sent);
        }

        #[test]
        fn never_panics(bytes: Vec<u8>, swapped: bool, text in ".{0,20}") {
            let order = if swapped { ByteOrder::Swapped } else { ByteOrder::Normal };
            for encoding in ENCODINGS {
                let _ = decode(&bytes, encoding, order);
            }
            let _ = (Encoding::parse(&text), ByteOrder::parse(&text));
        }
    }
}
