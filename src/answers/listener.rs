//! Connections within bounds: how many at once, and how long one may keep silent.
//!
//! Without these an asker that opens connections and says nothing would, in time, shut out the
//! site's radio.

use std::io;
use std::net::SocketAddr;
use std::pin::Pin;
use std::sync::Arc;
use std::task::{Context, Poll};
use std::time::Duration;

use axum::serve::Listener;
use tokio::io::{AsyncRead, AsyncWrite, ReadBuf};
use tokio::net::{TcpListener, TcpStream};
use tokio::sync::{OwnedSemaphorePermit, Semaphore};
use tokio::time::{Instant, Sleep};

/// Connections open at once; further ones wait in the system's queue. A browser opens six.
pub(super) const CONNECTIONS_MAX: usize = 128;

/// A connection on which nothing moves for this long is closed: longer than any answer takes, and
/// longer than a page that asks every few seconds ever pauses.
const SILENCE_MAX: Duration = Duration::from_secs(30);

/// A listener that accepts a bounded number of connections.
pub(super) struct Bounded {
    listener: TcpListener,
    permits: Arc<Semaphore>,
}

impl Bounded {
    /// At most `connections_max` connections, 1 or more.
    pub(super) fn new(listener: TcpListener, connections_max: usize) -> Bounded {
        Bounded { listener, permits: Arc::new(Semaphore::new(connections_max)) }
    }
}

impl Listener for Bounded {
    type Io = Connection;
    type Addr = SocketAddr;

    async fn accept(&mut self) -> (Connection, SocketAddr) {
        let permits = Arc::clone(&self.permits);
        let permit = permits.acquire_owned().await.expect("the semaphore is never closed");
        // The trait's own accept waits out failures such as too many open files.
        let (stream, address) = Listener::accept(&mut self.listener).await;
        (Connection::new(stream, permit, SILENCE_MAX), address)
    }

    fn local_addr(&self) -> io::Result<SocketAddr> {
        self.listener.local_addr()
    }
}

/// A stream that gives up when nothing moves on it in either direction.
pub(super) struct Connection<S = TcpStream> {
    stream: S,
    silence: Pin<Box<Sleep>>,
    silence_max: Duration,
    _permit: OwnedSemaphorePermit,
}

impl<S> Connection<S> {
    fn new(stream: S, permit: OwnedSemaphorePermit, silence_max: Duration) -> Connection<S> {
        let silence = Box::pin(tokio::time::sleep(silence_max));
        Connection { stream, silence, silence_max, _permit: permit }
    }

    /// Passes on what the stream said; something that moved puts the deadline off, and a wait
    /// beyond it is an error.
    fn within_silence<T>(
        &mut self,
        said: Poll<io::Result<T>>,
        context: &mut Context<'_>,
    ) -> Poll<io::Result<T>> {
        if said.is_ready() {
            let deadline = Instant::now() + self.silence_max;
            self.silence.as_mut().reset(deadline);
            return said;
        }
        self.silence.as_mut().poll(context).map(|()| Err(io::ErrorKind::TimedOut.into()))
    }
}

impl<S: AsyncRead + Unpin> AsyncRead for Connection<S> {
    fn poll_read(
        mut self: Pin<&mut Self>,
        context: &mut Context<'_>,
        buffer: &mut ReadBuf<'_>,
    ) -> Poll<io::Result<()>> {
        let said = Pin::new(&mut self.stream).poll_read(context, buffer);
        self.within_silence(said, context)
    }
}

impl<S: AsyncWrite + Unpin> AsyncWrite for Connection<S> {
    fn poll_write(
        mut self: Pin<&mut Self>,
        context: &mut Context<'_>,
        bytes: &[u8],
    ) -> Poll<io::Result<usize>> {
        let said = Pin::new(&mut self.stream).poll_write(context, bytes);
        self.within_silence(said, context)
    }

    fn poll_write_vectored(
        mut self: Pin<&mut Self>,
        context: &mut Context<'_>,
        slices: &[io::IoSlice<'_>],
    ) -> Poll<io::Result<usize>> {
        let said = Pin::new(&mut self.stream).poll_write_vectored(context, slices);
        self.within_silence(said, context)
    }

    fn is_write_vectored(&self) -> bool {
        self.stream.is_write_vectored()
    }

    // Flushing and closing wait for nothing that an asker could withhold on a TCP stream, and a
    // flush is always ready there: neither counts as something that moved.
    fn poll_flush(mut self: Pin<&mut Self>, context: &mut Context<'_>) -> Poll<io::Result<()>> {
        Pin::new(&mut self.stream).poll_flush(context)
    }

    fn poll_shutdown(mut self: Pin<&mut Self>, context: &mut Context<'_>) -> Poll<io::Result<()>> {
        Pin::new(&mut self.stream).poll_shutdown(context)
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    /// Both ends of a connection of this machine with itself, the second one watched.
    async fn pair(silence_max: Duration) -> (TcpStream, Connection) {
        let listener = TcpListener::bind("127.0.0.1:0").await.unwrap();
        let address = listener.local_addr().unwrap();
        let (asker, accepted) = tokio::join!(TcpStream::connect(address), listener.accept());
        let permit = Arc::new(Semaphore::new(1)).acquire_owned().await.unwrap();
        (asker.unwrap(), Connection::new(accepted.unwrap().0, permit, silence_max))
    }

    async fn read_byte(connection: &mut Connection) -> io::Result<u8> {
        let mut bytes = [0_u8; 1];
        let mut buffer = ReadBuf::new(&mut bytes);
        std::future::poll_fn(|context| Pin::new(&mut *connection).poll_read(context, &mut buffer))
            .await?;
        Ok(bytes[0])
    }

    #[tokio::test]
    async fn a_silent_connection_is_given_up() {
        let (asker, mut connection) = pair(Duration::from_millis(20)).await;
        let error = read_byte(&mut connection).await.unwrap_err();
        assert_eq!(error.kind(), io::ErrorKind::TimedOut);
        drop(asker);
    }

    #[tokio::test]
    async fn a_byte_that_arrives_is_passed_on_and_puts_the_deadline_off() {
        let (asker, mut connection) = pair(Duration::from_secs(3600)).await;
        let before = connection.silence.deadline();
        asker.writable().await.unwrap();
        assert_eq!(asker.try_write(b"x").unwrap(), 1);
        assert_eq!(read_byte(&mut connection).await.unwrap(), b'x');
        assert!(connection.silence.deadline() > before);
    }

    #[tokio::test]
    async fn a_connection_beyond_the_limit_waits_until_another_is_closed() {
        let listener = TcpListener::bind("127.0.0.1:0").await.unwrap();
        let address = listener.local_addr().unwrap();
        let mut bounded = Bounded::new(listener, 1);
        let _first_asker = TcpStream::connect(address).await.unwrap();
        let _second_asker = TcpStream::connect(address).await.unwrap();
        let (first, _) = bounded.accept().await;
        let early = tokio::time::timeout(Duration::from_millis(20), bounded.accept()).await;
        assert!(early.is_err(), "accepted beyond the limit");
        drop(first);
        bounded.accept().await;
    }
}
