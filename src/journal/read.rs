//! Reads a journal from front to back, one record in memory at a time.
//!
//! A torn tail, which a crash or power cut leaves, ends the reading and is told by [`Frames::tail`]. Damage with
//! whole records after it is returned as an error once, and the reading goes on after it. Never writes.

use std::io::{self, Read, Seek, SeekFrom};
use std::path::{Path, PathBuf};

use darkline_core::entry::Entry;
use darkline_core::trace::Trace;

use super::disk::Source;
use super::frame::{self, FileHeader, Flaw, FrameHeader, Kind};
use super::{JournalError, samples};

/// Bytes looked through at a time for the next whole record after damage.
const SEARCH_BLOCK: usize = 64 << 10;

/// Bytes at the end of a journal that are no whole record: one that was never acknowledged.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub struct Tail {
    /// Where the last whole record ends, bytes from the start of the file.
    pub at: u64,
    /// How many bytes follow it.
    pub dropped: u64,
    /// What is wrong with them.
    pub flaw: Flaw,
}

impl std::fmt::Display for Tail {
    fn fmt(&self, f: &mut std::fmt::Formatter<'_>) -> std::fmt::Result {
        let Self { at, dropped, flaw } = self;
        write!(
            f,
            "the last {dropped} bytes (from byte {at}) are no whole record: {flaw}"
        )
    }
}

/// A whole frame: its checksums match.
#[derive(Debug, Clone, Copy)]
pub struct Frame<'a> {
    /// Where it begins, bytes from the start of the file.
    pub at: u64,
    /// What its payload holds.
    pub kind: Kind,
    /// What was recorded.
    pub payload: &'a [u8],
}

/// One record of a journal.
#[derive(Debug, Clone, PartialEq)]
pub struct Record {
    /// Where its frame begins, bytes from the start of the file.
    pub at: u64,
    /// What happened.
    pub entry: Entry,
    /// The samples that belong to it.
    pub trace: Option<Trace>,
}

/// The whole frames of a journal, in order.
pub struct Frames {
    source: Box<dyn Source>,
    path: PathBuf,
    end: u64,
    at: u64,
    number: u64,
    frame: Vec<u8>,
    tail: Option<Tail>,
    damaged_header: bool,
}

impl std::fmt::Debug for Frames {
    fn fmt(&self, f: &mut std::fmt::Formatter<'_>) -> std::fmt::Result {
        f.debug_struct("Frames")
            .field("path", &self.path)
            .field("at", &self.at)
            .field("end", &self.end)
            .finish_non_exhaustive()
    }
}

impl Frames {
    /// Begin to read `source`, as far as it reaches now; `path` is for messages.
    ///
    /// A file that ends within its header is a journal without records. Fails on a file that is no journal or
    /// of a later version.
    pub fn new(mut source: Box<dyn Source>, path: &Path) -> Result<Self, JournalError> {
        let read = |error| JournalError::io("read", path, error);
        let end = source.seek(SeekFrom::End(0)).map_err(read)?;
        let mut frames = Self {
            source,
            path: path.to_owned(),
            end,
            at: frame::FILE_HEADER as u64,
            number: 0,
            frame: Vec::new(),
            tail: None,
            damaged_header: false,
        };
        let mut header =
            vec![0; frame::FILE_HEADER.min(usize::try_from(end).unwrap_or(usize::MAX))];
        frames.read_at(0, &mut header).map_err(read)?;
        match frame::judge_file_header(&header) {
            FileHeader::Ours => {}
            FileHeader::Unbegun => {
                frames.at = end;
                frames.tail = (end > 0).then_some(Tail {
                    at: 0,
                    dropped: end,
                    flaw: Flaw::ShortHeader,
                });
            }
            FileHeader::Newer(version) => {
                return Err(JournalError::Newer {
                    path: path.to_owned(),
                    version,
                });
            }
            // One bad bit in the first bytes must not cost the records that follow them.
            FileHeader::Damaged | FileHeader::Foreign => {
                if frames.load(frames.at).map_err(read)?.is_err() {
                    return Err(JournalError::Foreign {
                        path: path.to_owned(),
                    });
                }
                frames.damaged_header = true;
            }
        }
        Ok(frames)
    }

    /// Stop reading at byte `end`, so that a second reading sees what a first one saw of a growing file.
    pub fn until(mut self, end: u64) -> Self {
        self.end = self.end.min(end);
        self
    }

    /// Where the next frame begins, bytes from the start; after the last one, where the whole records end.
    pub fn position(&self) -> u64 {
        self.tail.map_or(self.at, |tail| tail.at)
    }

    /// Number of the next record.
    pub fn next_number(&self) -> u64 {
        self.number
    }

    /// The torn tail; known when the reading has ended.
    pub fn tail(&self) -> Option<Tail> {
        self.tail
    }

    /// The next whole frame, `None` at the end.
    ///
    /// After [`JournalError::Damaged`] the reading can go on; after any other error it cannot.
    pub fn next_frame(&mut self) -> Result<Option<Frame<'_>>, JournalError> {
        if std::mem::take(&mut self.damaged_header) {
            return Err(self.damaged(0, frame::FILE_HEADER as u64, Flaw::HeaderChecksum));
        }
        if self.at >= self.end {
            return Ok(None);
        }
        let at = self.at;
        match self.load(at).map_err(|error| self.failed(error))? {
            Ok(header) if header.number == self.number => {
                self.at += self.frame.len() as u64;
                self.number += 1;
                let payload = &self.frame[frame::FRAME_HEADER..][..header.length];
                Ok(Some(Frame {
                    at,
                    kind: header.kind,
                    payload,
                }))
            }
            Ok(header) if header.number > self.number => {
                self.number = header.number;
                Err(self.damaged(at, 0, Flaw::OutOfOrder))
            }
            Ok(_) => {
                let bytes = self.frame.len() as u64;
                self.at += bytes;
                Err(self.damaged(at, bytes, Flaw::OutOfOrder))
            }
            Err(flaw) => self.pass_over(at, flaw),
        }
    }

    /// Past bytes that are no frame: to the next whole one, or to the end of the file, whose tail is torn.
    fn pass_over(&mut self, at: u64, flaw: Flaw) -> Result<Option<Frame<'_>>, JournalError> {
        let next = self.search(at + 1).map_err(|error| self.failed(error))?;
        if let Some(next) = next {
            self.at = next;
            return Err(self.damaged(at, next - at, flaw));
        }
        if flaw == Flaw::Newer {
            self.at = self.end;
            return Err(self.damaged(at, self.end - at, flaw));
        }
        self.tail = Some(Tail {
            at,
            dropped: self.end - at,
            flaw,
        });
        self.at = self.end;
        Ok(None)
    }

    /// Load the frame at `at` into `self.frame` and check it.
    fn load(&mut self, at: u64) -> io::Result<Result<FrameHeader, Flaw>> {
        let left = usize::try_from(self.end.saturating_sub(at)).unwrap_or(usize::MAX);
        let mut frame = std::mem::take(&mut self.frame);
        frame.clear();
        frame.resize(frame::FRAME_HEADER.min(left), 0);
        self.read_at(at, &mut frame)?;
        let header = match frame::parse_header(&frame) {
            Ok(header) => header,
            Err(flaw) => return Ok(Err(flaw)),
        };
        let whole = frame::FRAME_HEADER + header.length + frame::FRAME_TRAILER;
        if whole > left {
            return Ok(Err(Flaw::ShortPayload));
        }
        frame.resize(whole, 0);
        self.source.read_exact(&mut frame[frame::FRAME_HEADER..])?;
        self.frame = frame;
        if frame::is_whole(&self.frame) {
            Ok(Ok(header))
        } else {
            Ok(Err(Flaw::Checksum))
        }
    }

    /// Where the next whole frame begins that continues the journal, at or after `from`.
    fn search(&mut self, from: u64) -> io::Result<Option<u64>> {
        let mut start = from;
        let mut block = Vec::new();
        while start < self.end {
            let left = usize::try_from(self.end - start).unwrap_or(usize::MAX);
            block.resize(left.min(SEARCH_BLOCK), 0);
            self.read_at(start, &mut block)?;
            for (i, window) in block.windows(frame::MARKER.len()).enumerate() {
                if window != frame::MARKER {
                    continue;
                }
                let candidate = start + i as u64;
                if let Ok(header) = self.load(candidate)?
                    && header.number >= self.number
                {
                    return Ok(Some(candidate));
                }
            }
            if left <= SEARCH_BLOCK {
                break;
            }
            // A marker may lie across the border of two blocks.
            start += (SEARCH_BLOCK - frame::MARKER.len() + 1) as u64;
        }
        Ok(None)
    }

    fn read_at(&mut self, at: u64, bytes: &mut [u8]) -> io::Result<()> {
        self.source.seek(SeekFrom::Start(at))?;
        self.source.read_exact(bytes)
    }

    fn damaged(&self, at: u64, bytes: u64, flaw: Flaw) -> JournalError {
        JournalError::Damaged {
            path: self.path.clone(),
            at,
            bytes,
            flaw,
        }
    }

    fn failed(&self, error: io::Error) -> JournalError {
        JournalError::io("read", &self.path, error)
    }
}

/// The records of a journal, in order. An iterator whose errors are those of [`Frames::next_frame`].
#[derive(Debug)]
pub struct Records {
    frames: Frames,
    over: bool,
}

impl Records {
    /// Read the records of `frames`.
    pub fn new(frames: Frames) -> Self {
        Self {
            frames,
            over: false,
        }
    }

    /// The torn tail; known when the iterator has ended.
    pub fn tail(&self) -> Option<Tail> {
        self.frames.tail()
    }

    /// Where the whole records end, bytes from the start; known when the iterator has ended.
    pub fn end(&self) -> u64 {
        self.frames.position()
    }

    fn read(&mut self) -> Result<Option<Record>, JournalError> {
        let Some(Frame { at, kind, payload }) = self.frames.next_frame()? else {
            return Ok(None);
        };
        let bytes = payload.len() as u64;
        match parse(kind, payload) {
            Some((entry, trace)) => Ok(Some(Record { at, entry, trace })),
            None => Err(self.frames.damaged(at, bytes, Flaw::Unreadable)),
        }
    }
}

impl Iterator for Records {
    type Item = Result<Record, JournalError>;

    fn next(&mut self) -> Option<Self::Item> {
        if self.over {
            return None;
        }
        let record = self.read();
        self.over = matches!(&record, Err(error) if !error.can_go_on());
        record.transpose()
    }
}

fn parse(kind: Kind, payload: &[u8]) -> Option<(Entry, Option<Trace>)> {
    match kind {
        Kind::Entry => Some((serde_json::from_slice(payload).ok()?, None)),
        Kind::EntryWithTrace => {
            let (length, rest) = payload.split_first_chunk::<4>()?;
            let (json, rest) = rest.split_at_checked(u32::from_le_bytes(*length) as usize)?;
            let entry = serde_json::from_slice(json).ok()?;
            Some((entry, Some(samples::decode(rest)?)))
        }
    }
}
