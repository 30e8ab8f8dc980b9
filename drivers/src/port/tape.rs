//! A line to a Modbus instrument that keeps what came over it, to the byte:
//! the library that asks hands out registers only.

use std::fmt;
use std::future::poll_fn;
use std::io;
use std::pin::Pin;
use std::sync::{Arc, Mutex, MutexGuard, PoisonError};
use std::task::{Context, Poll};
use tokio::io::{AsyncRead, AsyncWrite, ReadBuf};

/// The most that is kept of what came for one request. The longest answer has
/// 260 bytes; beyond it is noise, of which the library reads 8 KiB at once.
const HEARD_MAX: usize = 32 * 1_024;

/// A serial port or a connection.
pub(super) trait Line: AsyncRead + AsyncWrite + Send + Unpin {}

impl<T: AsyncRead + AsyncWrite + Send + Unpin> Line for T {}

/// One line, shared by the library and by whoever listens between its requests.
#[derive(Clone)]
pub(super) struct Tape(Arc<Mutex<Inner>>);

struct Inner {
    line: Box<dyn Line>,
    heard: Vec<u8>,
}

impl fmt::Debug for Tape {
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        f.write_str("Tape")
    }
}

impl Tape {
    pub(super) fn new(line: Box<dyn Line>) -> Self {
        Self(Arc::new(Mutex::new(Inner { line, heard: Vec::new() })))
    }

    fn inner(&self) -> MutexGuard<'_, Inner> {
        self.0.lock().unwrap_or_else(PoisonError::into_inner)
    }

    /// What was read for the library since this was last called.
    pub(super) fn take(&self) -> Vec<u8> {
        std::mem::take(&mut self.inner().heard)
    }

    /// Waits for bytes that nobody asked for. 0: the line is gone.
    pub(super) async fn stray(&self, buffer: &mut [u8]) -> io::Result<usize> {
        let mut buffer = ReadBuf::new(buffer);
        poll_fn(|cx| Pin::new(&mut *self.inner().line).poll_read(cx, &mut buffer)).await?;
        Ok(buffer.filled().len())
    }
}

impl AsyncRead for Tape {
    fn poll_read(self: Pin<&mut Self>, cx: &mut Context<'_>, buffer: &mut ReadBuf<'_>) -> Poll<io::Result<()>> {
        let mut inner = self.inner();
        let Inner { line, heard } = &mut *inner;
        let before = buffer.filled().len();
        let read = Pin::new(&mut **line).poll_read(cx, buffer);
        let fresh = &buffer.filled()[before..];
        heard.extend_from_slice(&fresh[..fresh.len().min(HEARD_MAX - heard.len().min(HEARD_MAX))]);
        read
    }
}

impl AsyncWrite for Tape {
    fn poll_write(self: Pin<&mut Self>, cx: &mut Context<'_>, bytes: &[u8]) -> Poll<io::Result<usize>> {
        Pin::new(&mut *self.inner().line).poll_write(cx, bytes)
    }
    fn poll_flush(self: Pin<&mut Self>, cx: &mut Context<'_>) -> Poll<io::Result<()>> {
        Pin::new(&mut *self.inner().line).poll_flush(cx)
    }
    fn poll_shutdown(self: Pin<&mut Self>, cx: &mut Context<'_>) -> Poll<io::Result<()>> {
        Pin::new(&mut *self.inner().line).poll_shutdown(cx)
    }
}
