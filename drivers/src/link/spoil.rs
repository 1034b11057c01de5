//! A link that is spoilt on purpose, by a seed: replies that come late, never, garbled or torn. For tests
//! and rehearsals.

use std::sync::atomic::{AtomicU64, Ordering};
use std::time::Duration;

use tokio::io::{AsyncReadExt, AsyncWriteExt, ReadHalf, WriteHalf};

use super::{BoxStream, Dial, Dialling};
use crate::random::Random;

const ROOM: usize = 1 << 20;

/// How replies are spoilt. Shares are of 1 and judged per piece received, in this order.
#[derive(Debug, Clone, Copy, Default)]
pub struct Spoil {
    /// Makes the choice of victims repeatable.
    pub seed: u64,
    /// Every reply is delayed by this.
    pub delay: Duration,
    /// Share of replies that come late.
    pub late: f64,
    /// How much later they come. Those behind them wait too: a wire keeps its order.
    pub lateness: Duration,
    /// Share of replies that never come.
    pub drop: f64,
    /// Share of replies of which one byte is changed.
    pub garble: f64,
    /// The link breaks after this many bytes received; `None` for never.
    pub breaks_after: Option<usize>,
}

/// A dialler whose links are spoilt.
#[derive(Debug)]
pub struct Spoilt<D> {
    inner: D,
    spoil: Spoil,
    dialled: AtomicU64,
}

impl<D: Dial> Spoilt<D> {
    /// Spoils the links of `inner`.
    pub fn new(inner: D, spoil: Spoil) -> Self {
        Self {
            inner,
            spoil,
            dialled: AtomicU64::new(0),
        }
    }
}

impl<D: Dial> Dial for Spoilt<D> {
    fn dial(&self) -> Dialling<'_> {
        Box::pin(async move {
            let inner = self.inner.dial().await?;
            let turn = self.dialled.fetch_add(1, Ordering::Relaxed);
            let mut spoil = self.spoil;
            if turn > 0 {
                // A link that broke once holds from then on, so that a reconnection can be seen to work.
                spoil.breaks_after = None;
            }
            let random = Random::seeded(spoil.seed.wrapping_add(turn));
            let (ours, far) = tokio::io::duplex(ROOM);
            let (from_us, to_us) = tokio::io::split(far);
            let (from_instrument, to_instrument) = tokio::io::split(inner);
            tokio::spawn(async move {
                tokio::select! {
                    () = forward(from_us, to_instrument) => {}
                    () = backward(from_instrument, to_us, spoil, random) => {}
                }
            });
            Ok(Box::new(ours) as BoxStream)
        })
    }

    fn address(&self) -> String {
        self.inner.address()
    }
}

async fn forward(mut from: ReadHalf<tokio::io::DuplexStream>, mut to: WriteHalf<BoxStream>) {
    let _ = tokio::io::copy(&mut from, &mut to).await;
}

async fn backward(
    mut from: ReadHalf<BoxStream>,
    mut to: WriteHalf<tokio::io::DuplexStream>,
    spoil: Spoil,
    mut random: Random,
) {
    let mut piece = vec![0; 1 << 16];
    let mut passed = 0;
    while let Ok(count @ 1..) = from.read(&mut piece).await {
        let Some(bytes) = piece.get_mut(..count) else {
            return;
        };
        tokio::time::sleep(spoil.delay).await;
        if random.chance(spoil.late) {
            tokio::time::sleep(spoil.lateness).await;
        }
        if random.chance(spoil.drop) {
            continue;
        }
        if random.chance(spoil.garble) {
            let at = random.below(count);
            if let Some(byte) = bytes.get_mut(at) {
                *byte ^= 0x15;
            }
        }
        let left = spoil
            .breaks_after
            .map_or(usize::MAX, |limit| limit.saturating_sub(passed));
        passed += count;
        let part = bytes.get(..count.min(left)).unwrap_or_default();
        if to.write_all(part).await.is_err() || left < count {
            return;
        }
    }
}
