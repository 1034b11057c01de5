//! Acquisitions as bytes: integer codes as received with their scale, offset and axis, little-endian.
//! Every number comes back bit for bit. Never scales, averages or drops a sample.

use std::mem::size_of;

use darkline_core::trace::{Acquisition, ChannelData, Codes, Direction, SweepAxis, Trace};

/// Append all acquisitions of `trace` to `buffer`.
///
/// Fails, saying why, when a name or unit is longer than 255 bytes or there are more than 65535 channels.
pub fn encode(trace: &Trace, buffer: &mut Vec<u8>) -> Result<(), String> {
    buffer.extend_from_slice(&count(trace.len(), "acquisitions")?.to_le_bytes());
    for acquisition in trace {
        encode_acquisition(acquisition, buffer)?;
    }
    Ok(())
}

/// The acquisitions in `bytes`, all of it; `None` when they are not as [`encode`] writes them.
pub fn decode(bytes: &[u8]) -> Option<Trace> {
    let mut rest = Cursor { bytes };
    let acquisitions = rest.u32()? as usize;
    // A count is believed only as far as the bytes bear it.
    let mut trace = Vec::with_capacity(acquisitions.min(bytes.len() / 72));
    for _ in 0..acquisitions {
        trace.push(decode_acquisition(&mut rest)?);
    }
    rest.bytes.is_empty().then_some(trace)
}

fn count(n: usize, what: &str) -> Result<u32, String> {
    u32::try_from(n).map_err(|_| format!("{n} {what} are more than a record holds"))
}

fn encode_acquisition(acquisition: &Acquisition, buffer: &mut Vec<u8>) -> Result<(), String> {
    let axis = &acquisition.axis;
    let channels = u16::try_from(acquisition.channels.len())
        .map_err(|_| "more than 65535 channels in one acquisition".to_owned())?;
    buffer.extend_from_slice(&acquisition.point.to_le_bytes());
    buffer.extend_from_slice(&acquisition.begun.to_le_bytes());
    for value in [
        axis.start,
        axis.stop,
        axis.duration,
        axis.delay,
        axis.interval,
    ] {
        buffer.extend_from_slice(&value.to_le_bytes());
    }
    buffer.extend_from_slice(&axis.samples.to_le_bytes());
    buffer.extend_from_slice(&axis.steps.unwrap_or(0).to_le_bytes());
    buffer.extend_from_slice(&acquisition.repeat.to_le_bytes());
    buffer.extend_from_slice(&channels.to_le_bytes());
    buffer.push(match acquisition.direction {
        Direction::Up => 0,
        Direction::Down => 1,
    });
    buffer.push(u8::from(axis.steps.is_some()));
    for channel in &acquisition.channels {
        encode_channel(channel, buffer)?;
    }
    Ok(())
}

fn encode_channel(channel: &ChannelData, buffer: &mut Vec<u8>) -> Result<(), String> {
    let short = |text: &str| {
        u8::try_from(text.len()).map_err(|_| format!("`{text}` is longer than 255 bytes"))
    };
    let kind = match &channel.codes {
        Codes::I8(_) => 1,
        Codes::U8(_) => 2,
        Codes::I16(_) => 3,
        Codes::U16(_) => 4,
        Codes::F32(_) => 5,
        Codes::F64(_) => 6,
    };
    buffer.extend_from_slice(&channel.scale.to_le_bytes());
    buffer.extend_from_slice(&channel.offset.to_le_bytes());
    buffer.extend_from_slice(&count(channel.codes.len(), "samples")?.to_le_bytes());
    buffer.extend_from_slice(&channel.clipped.to_le_bytes());
    buffer.push(kind);
    buffer.push(short(&channel.name)?);
    buffer.push(short(&channel.unit)?);
    buffer.push(0);
    buffer.extend_from_slice(channel.name.as_bytes());
    buffer.extend_from_slice(channel.unit.as_bytes());
    encode_codes(&channel.codes, buffer);
    Ok(())
}

fn encode_codes(codes: &Codes, buffer: &mut Vec<u8>) {
    match codes {
        Codes::I8(codes) => buffer.extend(codes.iter().map(|code| code.cast_unsigned())),
        Codes::U8(codes) => buffer.extend_from_slice(codes),
        Codes::I16(codes) => buffer.extend(codes.iter().flat_map(|code| code.to_le_bytes())),
        Codes::U16(codes) => buffer.extend(codes.iter().flat_map(|code| code.to_le_bytes())),
        Codes::F32(codes) => buffer.extend(codes.iter().flat_map(|code| code.to_le_bytes())),
        Codes::F64(codes) => buffer.extend(codes.iter().flat_map(|code| code.to_le_bytes())),
    }
}

fn decode_acquisition(rest: &mut Cursor<'_>) -> Option<Acquisition> {
    let point = rest.u64()?;
    let begun = rest.u64()?.cast_signed();
    let [start, stop, duration, delay, interval] = [
        rest.f64()?,
        rest.f64()?,
        rest.f64()?,
        rest.f64()?,
        rest.f64()?,
    ];
    let samples = rest.u32()?;
    let steps = rest.u32()?;
    let repeat = rest.u32()?;
    let channels = u16::from_le_bytes(rest.array()?);
    let direction = match rest.u8()? {
        0 => Direction::Up,
        1 => Direction::Down,
        _ => return None,
    };
    let stepped = rest.u8()? == 1;
    let axis = SweepAxis {
        start,
        stop,
        duration,
        steps: stepped.then_some(steps),
        delay,
        interval,
        samples,
    };
    let channels = (0..channels)
        .map(|_| decode_channel(rest))
        .collect::<Option<Vec<_>>>()?;
    Some(Acquisition {
        point,
        direction,
        repeat,
        axis,
        begun,
        channels,
    })
}

fn decode_channel(rest: &mut Cursor<'_>) -> Option<ChannelData> {
    let scale = rest.f64()?;
    let offset = rest.f64()?;
    let samples = rest.u32()? as usize;
    let clipped = rest.u32()?;
    let kind = rest.u8()?;
    let name = usize::from(rest.u8()?);
    let unit = usize::from(rest.u8()?);
    rest.u8()?;
    let name = String::from_utf8(rest.take(name)?.to_vec()).ok()?;
    let unit = String::from_utf8(rest.take(unit)?.to_vec()).ok()?;
    let codes = match kind {
        1 => Codes::I8(rest.numbers(samples, i8::from_le_bytes)?),
        2 => Codes::U8(rest.take(samples)?.to_vec()),
        3 => Codes::I16(rest.numbers(samples, i16::from_le_bytes)?),
        4 => Codes::U16(rest.numbers(samples, u16::from_le_bytes)?),
        5 => Codes::F32(rest.numbers(samples, f32::from_le_bytes)?),
        6 => Codes::F64(rest.numbers(samples, f64::from_le_bytes)?),
        _ => return None,
    };
    Some(ChannelData {
        name,
        codes,
        scale,
        offset,
        unit,
        clipped,
    })
}

/// What is left to read.
struct Cursor<'a> {
    bytes: &'a [u8],
}

impl<'a> Cursor<'a> {
    fn take(&mut self, n: usize) -> Option<&'a [u8]> {
        let (taken, rest) = self.bytes.split_at_checked(n)?;
        self.bytes = rest;
        Some(taken)
    }

    fn array<const N: usize>(&mut self) -> Option<[u8; N]> {
        self.take(N)?.try_into().ok()
    }

    fn u8(&mut self) -> Option<u8> {
        Some(self.take(1)?[0])
    }

    fn u32(&mut self) -> Option<u32> {
        Some(u32::from_le_bytes(self.array()?))
    }

    fn u64(&mut self) -> Option<u64> {
        Some(u64::from_le_bytes(self.array()?))
    }

    fn f64(&mut self) -> Option<f64> {
        Some(f64::from_le_bytes(self.array()?))
    }

    fn numbers<T, const N: usize>(
        &mut self,
        n: usize,
        from: impl Fn([u8; N]) -> T,
    ) -> Option<Vec<T>> {
        debug_assert_eq!(size_of::<T>(), N);
        let (numbers, _) = self.take(n.checked_mul(N)?)?.as_chunks::<N>();
        Some(numbers.iter().map(|&bytes| from(bytes)).collect())
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    fn trace() -> Trace {
        let channel = |name: &str, codes| ChannelData {
            name: name.into(),
            codes,
            scale: 1.525_902_189e-4,
            offset: -0.1,
            unit: "V".into(),
            clipped: 1,
        };
        vec![Acquisition {
            point: 3,
            direction: Direction::Down,
            repeat: 2,
            axis: SweepAxis {
                start: 80.15e6,
                stop: 79.85e6,
                duration: 0.04,
                steps: Some(401),
                delay: 12e-6,
                interval: 20e-6,
                samples: 3,
            },
            begun: -5,
            channels: vec![
                channel("a", Codes::I8(vec![-128, 0, 127])),
                channel("b", Codes::U8(vec![0, 1, 255])),
                channel("c", Codes::I16(vec![i16::MIN, -1, i16::MAX])),
                channel("µ", Codes::U16(vec![0, 1, u16::MAX])),
                channel("e", Codes::F32(vec![f32::INFINITY, -0.0, 1.5])),
                channel("f", Codes::F64(vec![9.9e37, f64::MIN_POSITIVE, -1.0])),
            ],
        }]
    }

    #[test]
    fn every_code_comes_back() {
        let mut bytes = Vec::new();
        encode(&trace(), &mut bytes).unwrap();
        assert_eq!(decode(&bytes).unwrap(), trace());
    }

    #[test]
    fn cut_anywhere_it_is_refused_without_a_panic() {
        let mut bytes = Vec::new();
        encode(&trace(), &mut bytes).unwrap();
        for length in 0..bytes.len() {
            assert!(decode(&bytes[..length]).is_none(), "{length} bytes");
        }
        bytes.push(0);
        assert!(decode(&bytes).is_none());
    }

    #[test]
    fn a_name_that_does_not_fit_is_refused() {
        let mut trace = trace();
        trace[0].channels[0].name = "x".repeat(256);
        assert!(encode(&trace, &mut Vec::new()).is_err());
    }
}
