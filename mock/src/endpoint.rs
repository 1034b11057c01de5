//! Links: one task per connection that reads program messages, has them carried out, and sends the responses.
//! The state of an instrument lives in the bench: who disconnects and connects again finds it as it was.

mod serial;
mod timer;

use std::future::Future;
use std::io;
use std::net::Ipv4Addr;
use std::sync::Arc;

use tokio::io::{AsyncRead, AsyncReadExt, AsyncWrite, AsyncWriteExt};
use tokio::net::TcpListener;
use tokio::sync::Semaphore;

use crate::bench::{Leash, Reply, Shared, Step};
use crate::scpi::ErrorCode;
use crate::scpi::decoder::{Decoder, Incoming};
use timer::Timer;

/// Connections that one instrument serves at a time; further ones are turned away.
const MOST_CONNECTIONS: usize = 8;
const CHUNK: usize = 4096;

/// A link as the conversation needs it.
pub(crate) trait Link: Send {
    /// Waits for bytes; 0 at the end of the link. Nothing is lost where it is dropped before it resolves.
    fn receive(&mut self, buffer: &mut [u8]) -> impl Future<Output = io::Result<usize>> + Send;

    /// Sends all bytes.
    fn send(&mut self, bytes: &[u8]) -> impl Future<Output = io::Result<()>> + Send;

    /// After a cut: whether the line goes on, with what was under way lost.
    fn survives_cut(&mut self) -> bool {
        false
    }
}

struct Stream<S>(S);

impl<S: AsyncRead + AsyncWrite + Unpin + Send> Link for Stream<S> {
    async fn receive(&mut self, buffer: &mut [u8]) -> io::Result<usize> {
        self.0.read(buffer).await
    }

    async fn send(&mut self, bytes: &[u8]) -> io::Result<()> {
        self.0.write_all(bytes).await?;
        self.0.flush().await
    }
}

/// Serves an in-memory stream until it ends, by the runtime's clock, which may be paused.
pub(crate) async fn serve_stream<S>(shared: Arc<Shared>, device: usize, stream: S, leash: Leash)
where
    S: AsyncRead + AsyncWrite + Unpin + Send,
{
    converse(shared, device, Stream(stream), leash, None).await;
}

/// Listens on a free port of the loopback and serves who connects.
pub(crate) async fn serve_tcp(shared: Arc<Shared>, device: usize, leash: Leash) -> io::Result<u16> {
    let listener = TcpListener::bind((Ipv4Addr::LOCALHOST, 0)).await?;
    let port = listener.local_addr()?.port();
    tokio::spawn(accept(shared, device, listener, leash));
    Ok(port)
}

/// Opens a pseudo-terminal and serves it; gives the path for the client.
pub(crate) fn serve_serial(
    shared: Arc<Shared>,
    device: usize,
    baud: u32,
    leash: Leash,
) -> io::Result<String> {
    let (line, path) = serial::Line::open(baud)?;
    tokio::spawn(converse(shared, device, line, leash, Some(Timer::new()?)));
    Ok(path)
}

async fn accept(shared: Arc<Shared>, device: usize, listener: TcpListener, mut leash: Leash) {
    let places = Arc::new(Semaphore::new(MOST_CONNECTIONS));
    loop {
        let accepted = tokio::select! {
            accepted = listener.accept() => accepted,
            ended = leash.pulled() => if ended { return } else { continue },
        };
        let Ok((stream, _)) = accepted else {
            // Out of descriptors, for instance: give others time to end.
            tokio::time::sleep(std::time::Duration::from_millis(20)).await;
            continue;
        };
        let Ok(place) = places.clone().try_acquire_owned() else {
            continue;
        };
        if shared.is_unreachable(device) || stream.set_nodelay(true).is_err() {
            continue;
        }
        let Ok(timer) = Timer::new() else { continue };
        let (shared, leash) = (shared.clone(), leash.clone());
        tokio::spawn(async move {
            converse(shared, device, Stream(stream), leash, Some(timer)).await;
            drop(place);
        });
    }
}

/// Why a conversation does not go on as before.
enum End {
    Closed,
    Cut,
    /// The next message came while a query was waiting.
    Interrupted(Incoming),
}

struct Conversation<L> {
    shared: Arc<Shared>,
    device: usize,
    link: L,
    leash: Leash,
    decoder: Decoder,
    /// `None`: the runtime's clock.
    timer: Option<Timer>,
}

async fn converse<L: Link>(
    shared: Arc<Shared>,
    device: usize,
    link: L,
    leash: Leash,
    timer: Option<Timer>,
) {
    let decoder = Decoder::default();
    let mut conversation = Conversation {
        shared,
        device,
        link,
        leash,
        decoder,
        timer,
    };
    loop {
        match conversation.talk().await {
            Ok(()) => {}
            Err(End::Cut) if conversation.link.survives_cut() => {
                conversation.decoder = Decoder::default()
            }
            Err(_) => return,
        }
    }
}

impl<L: Link> Conversation<L> {
    /// One message, and those that interrupt it.
    async fn talk(&mut self) -> Result<(), End> {
        let mut incoming = self.next().await?;
        loop {
            match self.answer(incoming).await {
                Err(End::Interrupted(next)) => incoming = next,
                other => return other,
            }
        }
    }

    async fn next(&mut self) -> Result<Incoming, End> {
        loop {
            if let Some(incoming) = self.decoder.take() {
                return Ok(incoming);
            }
            let mut buffer = [0; CHUNK];
            let count = tokio::select! {
                count = self.link.receive(&mut buffer) => count,
                ended = self.leash.pulled() => return Err(if ended { End::Closed } else { End::Cut }),
            };
            self.took(count, &buffer)?;
        }
    }

    fn took(&mut self, count: io::Result<usize>, buffer: &[u8]) -> Result<(), End> {
        match count {
            Ok(0) | Err(_) => {
                if self.decoder.has_partial() {
                    self.shared.fail(self.device, ErrorCode::QUERY_UNTERMINATED);
                }
                Err(End::Closed)
            }
            Ok(count) => {
                self.decoder.push(&buffer[..count]);
                Ok(())
            }
        }
    }

    async fn answer(&mut self, incoming: Incoming) -> Result<(), End> {
        if !self.shared.hears(self.device) {
            return Ok(());
        }
        let message = match incoming {
            Incoming::Message(message) => message,
            Incoming::Overrun => {
                self.shared.fail(self.device, ErrorCode::INPUT_OVERRUN);
                return Ok(());
            }
            Incoming::BlockTooLong => {
                self.shared.fail(self.device, ErrorCode::TOO_MUCH_DATA);
                return Ok(());
            }
        };
        match self.carry_out(message).await? {
            Some(reply) => self.send(reply).await,
            None => Ok(()),
        }
    }

    async fn carry_out(&mut self, message: Vec<u8>) -> Result<Option<Reply>, End> {
        let shared = self.shared.clone();
        let mut exchange = shared.begin(self.device, message);
        loop {
            let changed = shared.changed.notified();
            tokio::pin!(changed);
            changed.as_mut().enable();
            let deadline = match shared.proceed(self.device, &mut exchange) {
                Step::Done(reply) => return Ok(reply),
                Step::Blocked(deadline) => deadline,
            };
            let mut buffer = [0; CHUNK];
            tokio::select! {
                () = sleep_until(deadline, &mut self.timer) => {}
                () = changed => {}
                // Behind `*WAI` alone nothing waits to be sent: the next message waits its turn.
                count = self.link.receive(&mut buffer), if exchange.asked => {
                    self.took(count, &buffer)?;
                    if let Some(next) = self.decoder.take() {
                        shared.fail(self.device, ErrorCode::QUERY_INTERRUPTED);
                        return Err(End::Interrupted(next));
                    }
                }
                ended = self.leash.pulled() => return Err(if ended { End::Closed } else { End::Cut }),
            }
        }
    }

    async fn send(&mut self, reply: Reply) -> Result<(), End> {
        let bytes = if reply.torn {
            &reply.bytes[..reply.bytes.len() / 2]
        } else {
            &reply.bytes[..]
        };
        let sending = async {
            if let Some(delay) = reply.delay {
                tokio::time::sleep(delay).await;
            }
            self.link.send(bytes).await
        };
        let sent = tokio::select! {
            sent = sending => sent.map_err(|_| End::Closed),
            ended = self.leash.pulled() => Err(if ended { End::Closed } else { End::Cut }),
        };
        if reply.torn { Err(End::Cut) } else { sent }
    }
}

async fn sleep_until(deadline: Option<tokio::time::Instant>, timer: &mut Option<Timer>) {
    match (deadline, timer) {
        (None, _) => std::future::pending().await,
        (Some(deadline), Some(timer)) => {
            if timer.wait_until(deadline.into_std()).await.is_err() {
                tokio::time::sleep_until(deadline).await;
            }
        }
        (Some(deadline), None) => tokio::time::sleep_until(deadline).await,
    }
}
