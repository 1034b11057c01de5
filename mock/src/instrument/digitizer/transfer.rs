//! How a record goes over the wire: number format, byte order, block, and the scaling that undoes it.

use crate::instrument::Call;
use crate::instrument::digitizer::input::{BITS, HALF, Input};
use crate::scpi::ErrorCode;
use crate::scpi::parse::Datum;
use crate::scpi::pattern::{choose, short_form};
use crate::scpi::response::{Response, real_text};

#[derive(Clone, Copy, Debug, PartialEq, Eq)]
enum Format {
    Ascii,
    Integer8,
    Integer16,
    Unsigned8,
    Unsigned16,
    Real32,
    Real64,
}

const FORMATS: [(Format, &str, i64); 7] = [
    (Format::Ascii, "ASCii", 0),
    (Format::Integer8, "INTeger", 8),
    (Format::Integer16, "INTeger", 16),
    (Format::Unsigned8, "UINTeger", 8),
    (Format::Unsigned16, "UINTeger", 16),
    (Format::Real32, "REAL", 32),
    (Format::Real64, "REAL", 64),
];

/// Codes of the converter per code of eight bits.
const PER_BYTE: f64 = (1u32 << (BITS - 8)) as f64;

/// `FORMat`.
#[derive(Clone, Copy, Debug)]
pub struct Transport {
    format: Format,
    swapped: bool,
    definite: bool,
}

impl Default for Transport {
    fn default() -> Transport {
        Transport {
            format: Format::Ascii,
            swapped: false,
            definite: true,
        }
    }
}

/// A transferred number c stands for `scale * c + offset` volts; clipped samples carry `lowest` or `highest`.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Scaling {
    pub scale: f64,
    pub offset: f64,
    pub lowest: f64,
    pub highest: f64,
}

/// What was sent.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub struct Sent {
    pub bytes: usize,
    pub crc32c: u32,
}

impl Transport {
    pub fn format(&mut self, call: &mut Call<'_, '_>) -> Result<(), ErrorCode> {
        if call.is_query() {
            call.end()?;
            let (_, name, length) = self.row();
            call.out.word(short_form(name));
            call.out.integer(length);
            return Ok(());
        }
        let name = choose(call.word()?, &["ASCii", "INTeger", "UINTeger", "REAL"])?;
        let length = match call.datum() {
            None => [0, 16, 16, 64][name],
            Some(Datum::Number(length, None)) => *length as i64,
            Some(_) => return Err(ErrorCode::DATA_TYPE_ERROR),
        };
        call.end()?;
        let name = ["ASCii", "INTeger", "UINTeger", "REAL"][name];
        let fits = |row: &&(Format, &str, i64)| {
            row.1 == name && (row.2 == length || row.0 == Format::Ascii)
        };
        self.format = FORMATS
            .iter()
            .find(fits)
            .ok_or(ErrorCode::ILLEGAL_PARAMETER)?
            .0;
        Ok(())
    }

    pub fn byte_order(&mut self, call: &mut Call<'_, '_>) -> Result<(), ErrorCode> {
        if let Some(chosen) = call.choice(&["NORMal", "SWAPped"], usize::from(self.swapped))? {
            self.swapped = chosen == 1;
        }
        Ok(())
    }

    pub fn block_kind(&mut self, call: &mut Call<'_, '_>) -> Result<(), ErrorCode> {
        if let Some(chosen) =
            call.choice(&["DEFinite", "INDefinite"], usize::from(!self.definite))?
        {
            self.definite = chosen == 0;
        }
        Ok(())
    }

    pub fn scaling(&self, input: &Input) -> Scaling {
        let step = input.step();
        let scaling = |scale, offset, lowest, highest| Scaling {
            scale,
            offset,
            lowest,
            highest,
        };
        // Eight bits are cut off from fourteen: a code stands for the middle of what it holds.
        let middle = (PER_BYTE - 1.0) / 2.0 * step;
        match self.format {
            Format::Ascii | Format::Real32 | Format::Real64 => scaling(
                1.0,
                0.0,
                input.offset - HALF * step,
                input.offset + (HALF - 1.0) * step,
            ),
            Format::Integer16 => scaling(step, input.offset, -HALF, HALF - 1.0),
            Format::Unsigned16 => scaling(step, input.offset - HALF * step, 0.0, 2.0 * HALF - 1.0),
            Format::Integer8 => scaling(step * PER_BYTE, input.offset + middle, -128.0, 127.0),
            Format::Unsigned8 => scaling(
                step * PER_BYTE,
                input.offset + middle - HALF * step,
                0.0,
                255.0,
            ),
        }
    }

    /// Writes the record into the response.
    pub fn send(&self, codes: &[i16], input: &Input, out: &mut Response) -> Sent {
        let volts = |code: &i16| input.offset + f64::from(*code) * input.step();
        if self.format == Format::Ascii {
            let text = codes
                .iter()
                .map(|code| real_text(volts(code)))
                .collect::<Vec<_>>()
                .join(",");
            out.word(&text);
            return Sent {
                bytes: text.len(),
                crc32c: crc32c::crc32c(text.as_bytes()),
            };
        }
        let unsigned = |code: &i16| (i32::from(*code) + HALF as i32) as u16;
        let shift = BITS - 8;
        let mut data = Vec::with_capacity(codes.len() * 8);
        match self.format {
            Format::Ascii => {}
            Format::Integer8 => data.extend(codes.iter().map(|code| (code >> shift) as i8 as u8)),
            Format::Unsigned8 => {
                data.extend(codes.iter().map(|code| (unsigned(code) >> shift) as u8))
            }
            Format::Integer16 => self.words(codes.iter().map(|code| code.to_be_bytes()), &mut data),
            Format::Unsigned16 => self.words(
                codes.iter().map(|code| unsigned(code).to_be_bytes()),
                &mut data,
            ),
            Format::Real32 => self.words(
                codes.iter().map(|code| (volts(code) as f32).to_be_bytes()),
                &mut data,
            ),
            Format::Real64 => self.words(
                codes.iter().map(|code| volts(code).to_be_bytes()),
                &mut data,
            ),
        }
        out.block(&data, self.definite);
        Sent {
            bytes: data.len(),
            crc32c: crc32c::crc32c(&data),
        }
    }

    fn words<const N: usize>(&self, words: impl Iterator<Item = [u8; N]>, data: &mut Vec<u8>) {
        for mut word in words {
            if self.swapped {
                word.reverse();
            }
            data.extend_from_slice(&word);
        }
    }

    fn row(&self) -> (Format, &'static str, i64) {
        FORMATS
            .into_iter()
            .find(|row| row.0 == self.format)
            .unwrap_or(FORMATS[0])
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    fn sent(format: Format, swapped: bool, codes: &[i16]) -> Vec<u8> {
        let mut out = Response::default();
        out.next_unit();
        Transport {
            format,
            swapped,
            definite: true,
        }
        .send(codes, &Input::default(), &mut out);
        out.into_bytes()
    }

    #[test]
    fn every_format_byte_by_byte() {
        let codes = [-8192, -1, 0, 8191];
        assert_eq!(
            sent(Format::Integer16, false, &codes),
            b"#18\xE0\x00\xFF\xFF\x00\x00\x1F\xFF\n"
        );
        assert_eq!(
            sent(Format::Integer16, true, &codes),
            b"#18\x00\xE0\xFF\xFF\x00\x00\xFF\x1F\n"
        );
        assert_eq!(
            sent(Format::Unsigned16, false, &codes),
            b"#18\x00\x00\x1F\xFF\x20\x00\x3F\xFF\n"
        );
        assert_eq!(
            sent(Format::Integer8, false, &codes),
            b"#14\x80\xFF\x00\x7F\n"
        );
        assert_eq!(
            sent(Format::Unsigned8, false, &codes),
            b"#14\x00\x7F\x80\xFF\n"
        );
        // IEEE 754: -1.0 is BF800000 and BFF0000000000000.
        assert_eq!(
            sent(Format::Real32, false, &[-8192]),
            b"#14\xBF\x80\x00\x00\n"
        );
        assert_eq!(
            sent(Format::Real64, true, &[-8192]),
            b"#18\x00\x00\x00\x00\x00\x00\xF0\xBF\n"
        );
        assert_eq!(
            sent(Format::Ascii, false, &[-8192, 0]),
            b"-1.0E+00,0.0E+00\n"
        );
    }

    #[test]
    fn scaling_undoes_every_integer_format() {
        let input = Input {
            offset: 0.25,
            ..Input::default()
        };
        for (code, format) in [
            (100i16, Format::Integer16),
            (-100, Format::Unsigned16),
            (-100, Format::Integer8),
            (100, Format::Unsigned8),
        ] {
            let transport = Transport {
                format,
                ..Transport::default()
            };
            let scaling = transport.scaling(&input);
            let mut out = Response::default();
            out.next_unit();
            transport.send(&[code], &input, &mut out);
            let bytes = out.into_bytes();
            let number = match format {
                Format::Integer8 => f64::from(bytes[3] as i8),
                Format::Unsigned8 => f64::from(bytes[3]),
                Format::Integer16 => f64::from(i16::from_be_bytes([bytes[3], bytes[4]])),
                _ => f64::from(u16::from_be_bytes([bytes[3], bytes[4]])),
            };
            let volts = scaling.scale * number + scaling.offset;
            let truth = input.offset + f64::from(code) * input.step();
            assert!(
                (volts - truth).abs() <= scaling.scale / 2.0,
                "{format:?}: {volts} for {truth}"
            );
        }
    }
}
