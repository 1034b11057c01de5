//! A link whose bytes are recorded as they pass. Never waits for whoever keeps the record.

use std::io;
use std::pin::Pin;
use std::sync::Arc;
use std::sync::atomic::{AtomicU64, Ordering};
use std::task::{Context, Poll, ready};

use darkline_core::wire::record::{Line, Way};
use tokio::io::{AsyncRead, AsyncWrite, ReadBuf};
use tokio::sync::mpsc::{self, Receiver, Sender};
use tokio::time::Instant;

use super::{BoxStream, Dial, Dialling};

/// Takes the lines of all links of one run.
#[derive(Debug, Clone)]
pub struct Tape {
    begun: Instant,
    lines: Sender<Line>,
    lost: Arc<AtomicU64>,
}

impl Tape {
    /// A tape and the end where its lines come out; `room` lines may wait there.
    pub fn new(room: usize) -> (Self, Receiver<Line>) {
        let (lines, out) = mpsc::channel(room);
        let tape = Self {
            begun: Instant::now(),
            lines,
            lost: Arc::default(),
        };
        (tape, out)
    }

    /// Lines lost because nobody took them in time: a scan never waits for its record.
    pub fn lost(&self) -> u64 {
        self.lost.load(Ordering::Relaxed)
    }

    fn put(&self, link: &str, way: Way, bytes: &[u8]) {
        let line = Line {
            at: u64::try_from(self.begun.elapsed().as_nanos()).unwrap_or(u64::MAX),
            link: link.to_owned(),
            way,
            bytes: bytes.to_vec(),
        };
        if self.lines.try_send(line).is_err() {
            self.lost.fetch_add(1, Ordering::Relaxed);
        }
    }
}

/// A dialler whose links are recorded under the instrument's name.
#[derive(Debug)]
pub struct Recorded<D> {
    inner: D,
    instrument: String,
    tape: Tape,
}

impl<D: Dial> Recorded<D> {
    /// Records the links of `inner`.
    pub fn new(inner: D, instrument: impl Into<String>, tape: Tape) -> Self {
        Self {
            inner,
            instrument: instrument.into(),
            tape,
        }
    }
}

impl<D: Dial> Dial for Recorded<D> {
    fn dial(&self) -> Dialling<'_> {
        Box::pin(async move {
            let inner = self.inner.dial().await?;
            self.tape.put(&self.instrument, Way::Opened, b"");
            Ok(Box::new(Tapped {
                inner,
                instrument: self.instrument.clone(),
                tape: self.tape.clone(),
                lost: false,
            }) as BoxStream)
        })
    }

    fn address(&self) -> String {
        self.inner.address()
    }
}

struct Tapped {
    inner: BoxStream,
    instrument: String,
    tape: Tape,
    lost: bool,
}

impl Tapped {
    fn put(&self, way: Way, bytes: &[u8]) {
        self.tape.put(&self.instrument, way, bytes);
    }

    fn lose(&mut self) {
        if !std::mem::replace(&mut self.lost, true) {
            self.put(Way::Lost, b"");
        }
    }
}

impl Drop for Tapped {
    fn drop(&mut self) {
        self.lose();
    }
}

impl AsyncRead for Tapped {
    fn poll_read(
        mut self: Pin<&mut Self>,
        cx: &mut Context<'_>,
        buf: &mut ReadBuf<'_>,
    ) -> Poll<io::Result<()>> {
        let before = buf.filled().len();
        let outcome = ready!(Pin::new(&mut self.inner).poll_read(cx, buf));
        match buf.filled().get(before..) {
            Some(bytes) if outcome.is_ok() && !bytes.is_empty() => self.put(Way::Received, bytes),
            _ => self.lose(),
        }
        Poll::Ready(outcome)
    }
}

impl AsyncWrite for Tapped {
    fn poll_write(
        mut self: Pin<&mut Self>,
        cx: &mut Context<'_>,
        bytes: &[u8],
    ) -> Poll<io::Result<usize>> {
        let outcome = ready!(Pin::new(&mut self.inner).poll_write(cx, bytes));
        match &outcome {
            Ok(count) => self.put(Way::Sent, bytes.get(..*count).unwrap_or_default()),
            Err(_) => self.lose(),
        }
        Poll::Ready(outcome)
    }

    fn poll_flush(mut self: Pin<&mut Self>, cx: &mut Context<'_>) -> Poll<io::Result<()>> {
        Pin::new(&mut self.inner).poll_flush(cx)
    }

    fn poll_shutdown(mut self: Pin<&mut Self>, cx: &mut Context<'_>) -> Poll<io::Result<()>> {
        Pin::new(&mut self.inner).poll_shutdown(cx)
    }
}
