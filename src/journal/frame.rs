//! Framing of a journal: the file's first bytes and one frame per record, little-endian and checksummed.
//! Works on bytes alone; never opens a file and never looks inside a payload. `docs/archive.md` is its layout.

use std::fmt;

/// First bytes of every journal. The high bit, CR LF and ^Z betray a transfer in text mode.
pub const MAGIC: [u8; 8] = *b"\x89DKLJ\r\n\x1a";
/// Version of the layout that is written. A reader refuses a greater one.
pub const VERSION: u16 = 1;
/// Bytes before the first frame.
pub const FILE_HEADER: usize = 32;
/// First bytes of every frame, so that the next one can be found after damage.
pub const MARKER: [u8; 4] = *b"DKR\x1e";
/// Bytes of a frame before its payload.
pub const FRAME_HEADER: usize = 24;
/// Bytes of a frame after its payload.
pub const FRAME_TRAILER: usize = 4;
/// Longest payload that is written or believed, bytes.
pub const LONGEST_PAYLOAD: usize = 256 << 20;

/// What a payload holds.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum Kind {
    /// An entry as JSON.
    Entry,
    /// An entry as JSON and the acquisitions that belong to it.
    EntryWithTrace,
}

impl Kind {
    fn code(self) -> u16 {
        match self {
            Self::Entry => 1,
            Self::EntryWithTrace => 2,
        }
    }

    fn from_code(code: u16) -> Option<Self> {
        match code {
            1 => Some(Self::Entry),
            2 => Some(Self::EntryWithTrace),
            _ => None,
        }
    }
}

/// The checked first bytes of a frame.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub struct FrameHeader {
    /// What the payload holds.
    pub kind: Kind,
    /// Position of the record in the journal, from 0.
    pub number: u64,
    /// Length of the payload, bytes.
    pub length: usize,
}

/// Why bytes are not a frame, or a file not a journal of ours.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum Flaw {
    /// The file ends within the header of a frame.
    ShortHeader,
    /// No frame begins here.
    NoMarker,
    /// The header's checksum does not match.
    HeaderChecksum,
    /// The file ends within the payload.
    ShortPayload,
    /// The checksum over header and payload does not match.
    Checksum,
    /// The frame is whole, but of a later version of the program: its kind or flags are unknown.
    Newer,
    /// The frame is whole and out of place: another number than the next one.
    OutOfOrder,
    /// The frame is whole, but what it holds cannot be read.
    Unreadable,
}

impl fmt::Display for Flaw {
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        f.write_str(match self {
            Self::ShortHeader => "the file ends within the header of a record",
            Self::NoMarker => "no record begins here",
            Self::HeaderChecksum => "the checksum of a record's header does not match",
            Self::ShortPayload => "the file ends within a record",
            Self::Checksum => "the checksum of a record does not match",
            Self::Newer => "a record is of a kind that only a later version knows",
            Self::OutOfOrder => "records are missing before this one",
            Self::Unreadable => "a record is whole, but what it holds cannot be read",
        })
    }
}

/// What the first bytes of a file say.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum FileHeader {
    /// A journal that can be read.
    Ours,
    /// The file ends within the header: nothing was ever recorded in it.
    Unbegun,
    /// Not a journal.
    Foreign,
    /// A journal whose header is damaged.
    Damaged,
    /// A journal of a later version.
    Newer(u16),
}

/// The bytes before the first frame.
pub fn file_header() -> [u8; FILE_HEADER] {
    let mut bytes = [0; FILE_HEADER];
    bytes[..8].copy_from_slice(&MAGIC);
    bytes[8..10].copy_from_slice(&VERSION.to_le_bytes());
    bytes[10..12].copy_from_slice(&(FILE_HEADER as u16).to_le_bytes());
    let checksum = crc32c::crc32c(&bytes[..28]);
    bytes[28..].copy_from_slice(&checksum.to_le_bytes());
    bytes
}

/// Judge the first bytes of a file; `bytes` are as many of the first 32 as there are.
pub fn judge_file_header(bytes: &[u8]) -> FileHeader {
    let seen = bytes.len().min(MAGIC.len());
    if bytes[..seen] != MAGIC[..seen] {
        return FileHeader::Foreign;
    }
    if bytes.len() < FILE_HEADER {
        return FileHeader::Unbegun;
    }
    if crc32c::crc32c(&bytes[..28]) != u32_at(bytes, 28) {
        return FileHeader::Damaged;
    }
    match u16_at(bytes, 8) {
        VERSION => FileHeader::Ours,
        other => FileHeader::Newer(other),
    }
}

/// Begin a frame in `buffer`, whose contents are lost. The payload is appended by the caller, then [`finish`].
pub fn begin(buffer: &mut Vec<u8>) {
    buffer.clear();
    buffer.resize(FRAME_HEADER, 0);
}

/// Complete the frame in `buffer` with header and checksums.
///
/// Returns false, and leaves no frame, when the payload is longer than [`LONGEST_PAYLOAD`].
pub fn finish(buffer: &mut Vec<u8>, kind: Kind, number: u64) -> bool {
    let length = buffer.len() - FRAME_HEADER;
    if length > LONGEST_PAYLOAD {
        buffer.clear();
        return false;
    }
    buffer[..4].copy_from_slice(&MARKER);
    buffer[4..6].copy_from_slice(&kind.code().to_le_bytes());
    buffer[6..8].copy_from_slice(&0u16.to_le_bytes());
    buffer[8..16].copy_from_slice(&number.to_le_bytes());
    buffer[16..20].copy_from_slice(&(length as u32).to_le_bytes());
    let header = crc32c::crc32c(&buffer[..20]);
    buffer[20..24].copy_from_slice(&header.to_le_bytes());
    let whole = crc32c::crc32c(buffer);
    buffer.extend_from_slice(&whole.to_le_bytes());
    true
}

/// Check the first bytes of a frame. Says [`Flaw::Newer`] only of a header that is whole.
pub fn parse_header(bytes: &[u8]) -> Result<FrameHeader, Flaw> {
    let seen = bytes.len().min(MARKER.len());
    if bytes[..seen] != MARKER[..seen] {
        return Err(Flaw::NoMarker);
    }
    if bytes.len() < FRAME_HEADER {
        return Err(Flaw::ShortHeader);
    }
    if crc32c::crc32c(&bytes[..20]) != u32_at(bytes, 20) {
        return Err(Flaw::HeaderChecksum);
    }
    let length = u32_at(bytes, 16) as usize;
    let kind = Kind::from_code(u16_at(bytes, 4));
    match kind {
        Some(kind) if u16_at(bytes, 6) == 0 && length <= LONGEST_PAYLOAD => Ok(FrameHeader {
            kind,
            number: u64_at(bytes, 8),
            length,
        }),
        _ => Err(Flaw::Newer),
    }
}

/// Whether the trailer belongs to header and payload. `frame` is the whole frame.
pub fn is_whole(frame: &[u8]) -> bool {
    let Some(end) = frame.len().checked_sub(FRAME_TRAILER) else {
        return false;
    };
    crc32c::crc32c(&frame[..end]) == u32_at(frame, end)
}

fn u16_at(bytes: &[u8], at: usize) -> u16 {
    u16::from_le_bytes([bytes[at], bytes[at + 1]])
}

fn u32_at(bytes: &[u8], at: usize) -> u32 {
    u32::from_le_bytes([bytes[at], bytes[at + 1], bytes[at + 2], bytes[at + 3]])
}

fn u64_at(bytes: &[u8], at: usize) -> u64 {
    u64::from(u32_at(bytes, at)) | u64::from(u32_at(bytes, at + 4)) << 32
}

#[cfg(test)]
mod tests {
    use super::*;

    fn frame(payload: &[u8]) -> Vec<u8> {
        let mut buffer = Vec::new();
        begin(&mut buffer);
        buffer.extend_from_slice(payload);
        assert!(finish(&mut buffer, Kind::Entry, 7));
        buffer
    }

    #[test]
    fn the_checksum_is_crc_32c() {
        // RFC 3720, appendix B.4: 32 bytes of zeros, of ones, and rising.
        assert_eq!(crc32c::crc32c(&[0; 32]), 0x8a91_36aa);
        assert_eq!(crc32c::crc32c(&[0xff; 32]), 0x62a8_ab43);
        let rising: Vec<u8> = (0..32).collect();
        assert_eq!(crc32c::crc32c(&rising), 0x46dd_794e);
    }

    #[test]
    fn every_flipped_bit_of_a_frame_is_noticed() {
        let good = frame(b"{\"seq\":7}");
        let header = parse_header(&good).unwrap();
        assert_eq!((header.number, header.length), (7, 9));
        assert!(is_whole(&good));
        for bit in 0..good.len() * 8 {
            let mut bad = good.clone();
            bad[bit / 8] ^= 1 << (bit % 8);
            assert!(
                parse_header(&bad).is_err() || !is_whole(&bad),
                "bit {bit} flipped unnoticed"
            );
        }
    }

    #[test]
    fn every_flipped_bit_of_the_file_header_is_noticed() {
        let good = file_header();
        assert_eq!(judge_file_header(&good), FileHeader::Ours);
        for bit in 0..good.len() * 8 {
            let mut bad = good;
            bad[bit / 8] ^= 1 << (bit % 8);
            let said = judge_file_header(&bad);
            assert!(
                matches!(said, FileHeader::Foreign | FileHeader::Damaged),
                "bit {bit}: {said:?}"
            );
        }
    }

    #[test]
    fn a_later_version_is_told_from_damage() {
        let mut later = file_header();
        later[8] = 9;
        let checksum = crc32c::crc32c(&later[..28]);
        later[28..].copy_from_slice(&checksum.to_le_bytes());
        assert_eq!(judge_file_header(&later), FileHeader::Newer(9));
        assert_eq!(judge_file_header(&later[..20]), FileHeader::Unbegun);
        assert_eq!(judge_file_header(b""), FileHeader::Unbegun);
        assert_eq!(judge_file_header(b"\x89HDF"), FileHeader::Foreign);
    }
}
