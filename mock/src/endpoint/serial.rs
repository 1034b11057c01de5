//! A serial line on a pseudo-terminal, its bytes paced by the baud rate both ways (10 bits a byte: 8N1).
//! Real time only: a kernel timer paces it, finer than the millisecond of the runtime's own.

use std::io;
use std::os::fd::OwnedFd;
use std::time::{Duration, Instant};

use rustix::fs::{Mode, OFlags};
use rustix::pty::{OpenptFlags, grantpt, openpt, ptsname, unlockpt};
use rustix::termios::{OptionalActions, QueueSelector, tcflush, tcgetattr, tcsetattr};
use tokio::io::{AsyncReadExt, AsyncWriteExt};
use tokio::net::unix::pipe;

use crate::endpoint::Link;
use crate::endpoint::timer::Timer;

const BITS_PER_BYTE: f64 = 10.0;
/// Bytes sent at a time: fine enough that a reader sees a line fill, coarse enough to be cheap.
const BURST: usize = 16;

/// The instrument's end of a serial line.
pub(crate) struct Line {
    // Pipes in name only: the runtime's reader and writer for any descriptor that can be polled, without unsafe code.
    input: pipe::Receiver,
    output: pipe::Sender,
    /// Held open, so that the line outlives its clients as a cable does.
    client: OwnedFd,
    timer: Timer,
    per_byte: Duration,
    /// Received bytes that are still on their way.
    coming: Vec<u8>,
    /// When they are all there.
    there: Instant,
}

impl Line {
    /// A new line and the path of the client's end.
    pub fn open(baud: u32) -> io::Result<(Line, String)> {
        let master = openpt(OpenptFlags::RDWR | OpenptFlags::NOCTTY | OpenptFlags::CLOEXEC)?;
        grantpt(&master)?;
        unlockpt(&master)?;
        let path = ptsname(&master, Vec::new())?
            .into_string()
            .map_err(io::Error::other)?;
        let client = rustix::fs::open(
            &path,
            OFlags::RDWR | OFlags::NOCTTY | OFlags::CLOEXEC,
            Mode::empty(),
        )?;
        let mut settings = tcgetattr(&client)?;
        settings.make_raw();
        settings.set_speed(baud)?;
        tcsetattr(&client, OptionalActions::Now, &settings)?;
        let flags = rustix::fs::fcntl_getfl(&master)?;
        rustix::fs::fcntl_setfl(&master, flags | OFlags::NONBLOCK)?;
        let line = Line {
            input: pipe::Receiver::from_owned_fd_unchecked(master.try_clone()?)?,
            output: pipe::Sender::from_owned_fd_unchecked(master)?,
            client,
            timer: Timer::new()?,
            per_byte: Duration::from_secs_f64(BITS_PER_BYTE / f64::from(baud.max(1))),
            coming: Vec::new(),
            there: Instant::now(),
        };
        Ok((line, path))
    }

    async fn read_some(&mut self, most: usize) -> io::Result<()> {
        let mut buffer = vec![0; most];
        let count = self.input.read(&mut buffer).await?;
        if count == 0 {
            return Err(io::ErrorKind::UnexpectedEof.into());
        }
        buffer.truncate(count);
        self.there = self.there.max(Instant::now()) + self.per_byte * count as u32;
        self.coming = buffer;
        Ok(())
    }
}

impl Link for Line {
    async fn receive(&mut self, buffer: &mut [u8]) -> io::Result<usize> {
        if self.coming.is_empty() {
            self.read_some(buffer.len()).await?;
        }
        self.timer.wait_until(self.there).await?;
        let count = self.coming.len().min(buffer.len());
        buffer[..count].copy_from_slice(&self.coming[..count]);
        self.coming.drain(..count);
        Ok(count)
    }

    async fn send(&mut self, bytes: &[u8]) -> io::Result<()> {
        let mut moment = Instant::now();
        for burst in bytes.chunks(BURST) {
            moment += self.per_byte * burst.len() as u32;
            self.timer.wait_until(moment).await?;
            self.output.write_all(burst).await?;
        }
        Ok(())
    }

    fn survives_cut(&mut self) -> bool {
        self.coming.clear();
        tcflush(&self.client, QueueSelector::IOFlush).is_ok()
    }
}
