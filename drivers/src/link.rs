//! Links: byte streams to instruments, made by a [`Dial`], and wrappers that record, replay or spoil them.
//! Knows no message and no language.

pub mod address;
pub mod owner;
pub mod replay;
pub mod serial;
pub mod spoil;
pub mod tap;
pub mod tcp;

use std::future::Future;
use std::io;
use std::pin::Pin;
use std::sync::Arc;

use tokio::io::{AsyncRead, AsyncWrite};

pub use address::{Address, AddressError};
pub use owner::{Ownership, OwnershipError};

/// A link that is open.
pub trait Stream: AsyncRead + AsyncWrite + Send + Unpin {}
impl<T: AsyncRead + AsyncWrite + Send + Unpin> Stream for T {}

/// Any link that is open.
pub type BoxStream = Box<dyn Stream>;

/// A link being opened.
pub type Dialling<'a> = Pin<Box<dyn Future<Output = io::Result<BoxStream>> + Send + 'a>>;

/// Opens a link, again and again if need be: over TCP, a serial line, or in memory.
pub trait Dial: Send + Sync {
    /// Opens the link.
    fn dial(&self) -> Dialling<'_>;

    /// The address as a person would write it.
    fn address(&self) -> String;
}

impl<D: Dial + ?Sized> Dial for Arc<D> {
    fn dial(&self) -> Dialling<'_> {
        (**self).dial()
    }

    fn address(&self) -> String {
        (**self).address()
    }
}

impl<D: Dial + ?Sized> Dial for Box<D> {
    fn dial(&self) -> Dialling<'_> {
        (**self).dial()
    }

    fn address(&self) -> String {
        (**self).address()
    }
}

impl Dial for Address {
    fn dial(&self) -> Dialling<'_> {
        match self {
            Address::Tcp { host, port } => Box::pin(async move {
                let stream = tcp::connect(host, *port, tcp::CONNECT_WITHIN).await?;
                Ok(Box::new(stream) as BoxStream)
            }),
            Address::Serial { device, line } => Box::pin(async move {
                Ok(Box::new(serial::SerialStream::open(device, line)?) as BoxStream)
            }),
        }
    }

    fn address(&self) -> String {
        self.to_string()
    }
}

/// A dialler from a closure, for links in memory: `dial_with("memory", || Ok(one end of a duplex))`.
pub fn dial_with<F, S>(address: impl Into<String>, open: F) -> impl Dial
where
    F: Fn() -> io::Result<S> + Send + Sync,
    S: Stream + 'static,
{
    Closure {
        address: address.into(),
        open,
    }
}

struct Closure<F> {
    address: String,
    open: F,
}

impl<F, S> Dial for Closure<F>
where
    F: Fn() -> io::Result<S> + Send + Sync,
    S: Stream + 'static,
{
    fn dial(&self) -> Dialling<'_> {
        let opened = (self.open)().map(|stream| Box::new(stream) as BoxStream);
        Box::pin(std::future::ready(opened))
    }

    fn address(&self) -> String {
        self.address.clone()
    }
}

/// Whether an error says that the other end is gone (as against, say, a wrong argument).
pub fn is_disconnected(error: &io::Error) -> bool {
    use io::ErrorKind::{
        BrokenPipe, ConnectionAborted, ConnectionReset, NotConnected, TimedOut, UnexpectedEof,
    };
    let gone = [
        rustix::io::Errno::IO,
        rustix::io::Errno::NXIO,
        rustix::io::Errno::NODEV,
    ];
    matches!(
        error.kind(),
        BrokenPipe | ConnectionAborted | ConnectionReset | NotConnected | TimedOut | UnexpectedEof
    ) || error
        .raw_os_error()
        .is_some_and(|code| gone.iter().any(|errno| errno.raw_os_error() == code))
}
