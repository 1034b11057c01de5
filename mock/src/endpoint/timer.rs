//! A kernel timer: waits finer than the millisecond of the runtime's own timers. Real time only.

use std::io;
use std::time::Instant;

use rustix::time::{Itimerspec, TimerfdClockId, TimerfdFlags, TimerfdTimerFlags, Timespec};
use tokio::io::AsyncReadExt;
use tokio::net::unix::pipe;

/// One timer, one wait at a time.
pub(crate) struct Timer {
    // A pipe in name only: the runtime's reader for any descriptor that can be polled, without unsafe code.
    timer: pipe::Receiver,
}

impl Timer {
    /// A timer that nobody waits for.
    pub fn new() -> io::Result<Timer> {
        let flags = TimerfdFlags::NONBLOCK | TimerfdFlags::CLOEXEC;
        let timer = rustix::time::timerfd_create(TimerfdClockId::Monotonic, flags)?;
        Ok(Timer {
            timer: pipe::Receiver::from_owned_fd_unchecked(timer)?,
        })
    }

    /// Waits until the moment. Can be dropped and begun again.
    pub async fn wait_until(&mut self, moment: Instant) -> io::Result<()> {
        let left = moment.saturating_duration_since(Instant::now());
        if left.is_zero() {
            return Ok(());
        }
        let seconds = i64::try_from(left.as_secs()).unwrap_or(i64::MAX);
        let value = Timespec {
            tv_sec: seconds,
            tv_nsec: i64::from(left.subsec_nanos()),
        };
        let once = Itimerspec {
            it_interval: Timespec {
                tv_sec: 0,
                tv_nsec: 0,
            },
            it_value: value,
        };
        rustix::time::timerfd_settime(&self.timer, TimerfdTimerFlags::empty(), &once)?;
        self.timer.read_exact(&mut [0; 8]).await?;
        Ok(())
    }
}
