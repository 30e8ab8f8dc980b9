//! What a port task reads from: a serial line, or a connection that carries one.

use std::io;
use std::time::Duration;
use tokio::io::AsyncReadExt;
use tokio::net::TcpStream;
use tokio::task::spawn_blocking;
use tokio::time::timeout;
use tokio_serial::{ClearBuffer, SerialPort, SerialStream};

/// How long closing may hold up the task.
const CLOSING: Duration = Duration::from_millis(500);

/// An open way to an instrument.
#[derive(Debug)]
pub(super) enum Link {
    Serial(SerialStream),
    Network(TcpStream),
}

impl Link {
    /// Reads what is there. 0 bytes: the other end is gone. May be dropped without loss.
    pub(super) async fn read(&mut self, buffer: &mut [u8]) -> io::Result<usize> {
        match self {
            Self::Serial(port) => port.read(buffer).await,
            Self::Network(stream) => stream.read(buffer).await,
        }
    }

    /// Writes what fits at once.
    pub(super) fn try_write(&mut self, bytes: &[u8]) -> io::Result<usize> {
        match self {
            Self::Serial(port) => port.try_write(bytes),
            Self::Network(stream) => stream.try_write(bytes),
        }
    }

    /// Throws away what was written and nobody took. What is in a connection cannot be called back.
    pub(super) fn forget_written(&self) {
        if let Self::Serial(port) = self {
            let _ = port.clear(ClearBuffer::Output);
        }
    }

    /// Closes a serial port on a thread of its own: a driver may take seconds
    /// to give up bytes that nobody takes, so these are thrown away first.
    pub(super) async fn close(self) {
        if let Self::Serial(port) = self {
            let closing = spawn_blocking(move || {
                let _ = port.clear(ClearBuffer::Output);
                drop(port);
            });
            let _ = timeout(CLOSING, closing).await;
        }
    }
}
