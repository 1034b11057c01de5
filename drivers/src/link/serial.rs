//! Serial links: set up with the `serialport` crate, read and written asynchronously over its descriptor.
//! Works on pseudo-terminals as on real lines.

use std::io;
use std::os::fd::OwnedFd;
use std::path::Path;
use std::pin::Pin;
use std::task::{Context, Poll, ready};

use rustix::fs::{Mode, OFlags};
use rustix::termios::{self, OptionalActions, QueueSelector, SpecialCodeIndex};
use serialport::{DataBits, FlowControl, StopBits, TTYPort};
use tokio::io::unix::AsyncFd;
use tokio::io::{AsyncRead, AsyncWrite, ReadBuf};

use super::address::{Flow, Line, Parity};

/// An open serial line, exclusively ours (`TIOCEXCL`).
#[derive(Debug)]
pub struct SerialStream {
    line: AsyncFd<OwnedFd>,
    /// Holds the line's exclusive mode until dropped.
    _port: TTYPort,
}

impl SerialStream {
    /// Opens and sets up a line. Input that was waiting from before is thrown away.
    ///
    /// # Errors
    /// Those of the system: no such device, no permission, in use, no such speed.
    pub fn open(device: &Path, line: &Line) -> io::Result<Self> {
        // Opened before the crate makes the line exclusive; it lends its own descriptor only as a number.
        let flags = OFlags::RDWR | OFlags::NOCTTY | OFlags::NONBLOCK | OFlags::CLOEXEC;
        let descriptor = rustix::fs::open(device, flags, Mode::empty())?;
        let port = serialport::new(device.to_string_lossy(), line.baud)
            .data_bits(match line.data_bits {
                7 => DataBits::Seven,
                _ => DataBits::Eight,
            })
            .parity(match line.parity {
                Parity::None => serialport::Parity::None,
                Parity::Even => serialport::Parity::Even,
                Parity::Odd => serialport::Parity::Odd,
            })
            .stop_bits(match line.stop_bits {
                2 => StopBits::Two,
                _ => StopBits::One,
            })
            .flow_control(match line.flow {
                Flow::None => FlowControl::None,
                Flow::Software => FlowControl::Software,
                Flow::Hardware => FlowControl::Hardware,
            })
            .open_native()
            .map_err(io::Error::from)?;
        // With VMIN = 0 an idle line would read as an end of file.
        let mut attributes = termios::tcgetattr(&descriptor)?;
        attributes.special_codes[SpecialCodeIndex::VMIN] = 1;
        attributes.special_codes[SpecialCodeIndex::VTIME] = 0;
        termios::tcsetattr(&descriptor, OptionalActions::Now, &attributes)?;
        termios::tcflush(&descriptor, QueueSelector::IFlush)?;
        Ok(Self {
            line: watch(descriptor)?,
            _port: port,
        })
    }
}

#[expect(
    unsafe_code,
    reason = "tokio has no safe way to watch a descriptor that is not a socket or pipe"
)]
fn watch(descriptor: OwnedFd) -> io::Result<AsyncFd<OwnedFd>> {
    // SAFETY: an `OwnedFd` gives the same, open descriptor until it is dropped, and nobody else closes it.
    unsafe { AsyncFd::register(descriptor) }.map_err(io::Error::from)
}

impl AsyncRead for SerialStream {
    fn poll_read(
        self: Pin<&mut Self>,
        cx: &mut Context<'_>,
        buf: &mut ReadBuf<'_>,
    ) -> Poll<io::Result<()>> {
        loop {
            let mut guard = ready!(self.line.poll_read_ready(cx))?;
            let outcome = guard.try_io(|line| {
                let space = buf.initialize_unfilled();
                Ok(rustix::io::read(line.get_ref(), space)?)
            });
            if let Ok(count) = outcome {
                buf.advance(count?);
                return Poll::Ready(Ok(()));
            }
        }
    }
}

impl AsyncWrite for SerialStream {
    fn poll_write(
        self: Pin<&mut Self>,
        cx: &mut Context<'_>,
        bytes: &[u8],
    ) -> Poll<io::Result<usize>> {
        loop {
            let mut guard = ready!(self.line.poll_write_ready(cx))?;
            let outcome = guard.try_io(|line| Ok(rustix::io::write(line.get_ref(), bytes)?));
            if let Ok(count) = outcome {
                return Poll::Ready(count);
            }
        }
    }

    fn poll_flush(self: Pin<&mut Self>, _: &mut Context<'_>) -> Poll<io::Result<()>> {
        Poll::Ready(Ok(()))
    }

    fn poll_shutdown(self: Pin<&mut Self>, _: &mut Context<'_>) -> Poll<io::Result<()>> {
        Poll::Ready(Ok(()))
    }
}

#[cfg(test)]
mod tests {
    use std::path::PathBuf;

    use rustix::pty::{OpenptFlags, grantpt, openpt, ptsname, unlockpt};
    use tokio::io::{AsyncReadExt, AsyncWriteExt};

    use super::*;

    #[tokio::test]
    async fn a_pseudo_terminal_carries_bytes_and_its_end_is_noticed() {
        let master = openpt(OpenptFlags::RDWR | OpenptFlags::NOCTTY).unwrap();
        grantpt(&master).unwrap();
        unlockpt(&master).unwrap();
        let name = ptsname(&master, Vec::new()).unwrap();
        let device = PathBuf::from(name.to_str().unwrap());
        let mut stream = SerialStream::open(&device, &Line::default()).unwrap();

        stream.write_all(b"*IDN?\n").await.unwrap();
        let mut got = [0u8; 16];
        assert_eq!(rustix::io::read(&master, &mut got).unwrap(), 6);
        // Raw both ways: no echo, no change of line ends, all 256 bytes.
        let bytes: Vec<u8> = (0..=255).collect();
        assert_eq!(rustix::io::write(&master, &bytes).unwrap(), 256);
        let mut back = vec![0; 256];
        stream.read_exact(&mut back).await.unwrap();
        assert_eq!(back, bytes);

        drop(master);
        let mut one = [0u8; 1];
        match stream.read(&mut one).await {
            Ok(count) => assert_eq!(count, 0),
            Err(error) => assert!(super::super::is_disconnected(&error), "{error}"),
        }
    }
}
