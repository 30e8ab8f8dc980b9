//! The local socket: asks of persons on this machine, one JSON object a line,
//! one answer a line. It lies in the state directory and belongs to the user
//! who runs the service; whoever may open it may ask.

use crate::asks;
use crate::desk::inbox::Inbox;
use std::io::{BufRead, BufReader, Read, Write};
use std::os::unix::fs::PermissionsExt;
use std::os::unix::net::UnixStream as Blocking;
use std::path::{Path, PathBuf};
use std::sync::Arc;
use std::time::Duration;
use tokio::io::{AsyncBufReadExt, AsyncReadExt, AsyncWriteExt, BufReader as AsyncReader};
use tokio::net::{UnixListener, UnixStream};
use tokio::sync::{Semaphore, oneshot};

/// Name of the socket in the state directory.
pub const NAME: &str = "asks.sock";
/// Clients at a time.
const CLIENTS_MOST: usize = 64;
/// A client that says nothing for so long is let go.
const SILENCE: Duration = Duration::from_secs(300);

/// Path of the socket of a state directory.
pub fn path(state_dir: &Path) -> PathBuf {
    state_dir.join(NAME)
}

/// Listens in the state directory. The ledger's lock is held: a socket left there is nobody's.
pub fn listen(state_dir: &Path) -> std::io::Result<UnixListener> {
    let path = path(state_dir);
    match std::fs::remove_file(&path) {
        Err(e) if e.kind() != std::io::ErrorKind::NotFound => return Err(e),
        _ => (),
    }
    let listener = UnixListener::bind(&path)?;
    std::fs::set_permissions(&path, std::fs::Permissions::from_mode(0o600))?;
    Ok(listener)
}

/// Serves clients until the task is dropped.
pub async fn serve(listener: UnixListener, inbox: Arc<Inbox>) {
    let places = Arc::new(Semaphore::new(CLIENTS_MOST));
    loop {
        let Ok(place) = Arc::clone(&places).acquire_owned().await else { return };
        match listener.accept().await {
            Ok((stream, _)) => {
                let inbox = Arc::clone(&inbox);
                tokio::spawn(async move {
                    if let Err(e) = talk(stream, &inbox).await {
                        tracing::debug!(error = %e, "a local client went away");
                    }
                    drop(place);
                });
            }
            Err(e) => {
                tracing::warn!(error = %e, "the local socket cannot accept");
                tokio::time::sleep(Duration::from_millis(200)).await;
            }
        }
    }
}

async fn talk(stream: UnixStream, inbox: &Inbox) -> std::io::Result<()> {
    let (read, mut write) = stream.into_split();
    let mut read = AsyncReader::new(read);
    let mut line = Vec::new();
    loop {
        line.clear();
        let most = asks::LARGEST as u64 + 2;
        let got = tokio::time::timeout(SILENCE, (&mut read).take(most).read_until(b'\n', &mut line)).await;
        match got {
            Err(_) | Ok(Ok(0)) => return Ok(()),
            Ok(Err(e)) => return Err(e),
            Ok(Ok(_)) => (),
        }
        let complete = line.last() == Some(&b'\n');
        let mut answer = match std::str::from_utf8(&line) {
            Ok(text) if complete || line.len() < most as usize => ask(inbox, text.trim_end()).await,
            Ok(_) => asks::refusal("the ask is too long"),
            Err(_) => asks::refusal("the ask is not UTF-8"),
        };
        answer.push('\n');
        write.write_all(answer.as_bytes()).await?;
        if !complete {
            return Ok(());
        }
    }
}

async fn ask(inbox: &Inbox, text: &str) -> String {
    let (tx, rx) = oneshot::channel();
    inbox.ask("local".into(), text.into(), Box::new(move |answer| drop(tx.send(answer))));
    rx.await.unwrap_or_else(|_| asks::refusal("the service stopped before it could answer; ask again when it is back"))
}

/// Why a client got no answer.
#[derive(Debug, thiserror::Error)]
pub enum ClientError {
    /// Nobody listens.
    #[error("no service answers at {}: is `tarecup run` running with this state directory? ({error})", .path.display())]
    Nobody {
        /// Where.
        path: PathBuf,
        /// What the system says.
        error: std::io::Error,
    },
    /// More than an ask may be.
    #[error("the ask is {0} bytes long; at most {most} fit", most = asks::LARGEST)]
    TooLong(usize),
    /// The connection broke.
    #[error("the service went away before it answered ({0}); ask again")]
    Broken(std::io::Error),
}

/// Asks the running service, from another process.
pub fn ask_service(state_dir: &Path, text: &str, timeout: Duration) -> Result<String, ClientError> {
    if text.len() > asks::LARGEST {
        return Err(ClientError::TooLong(text.len()));
    }
    let path = path(state_dir);
    let mut stream = Blocking::connect(&path).map_err(|error| ClientError::Nobody { path, error })?;
    let exchange = |stream: &mut Blocking| {
        stream.set_read_timeout(Some(timeout))?;
        stream.write_all(text.replace(['\n', '\r'], " ").as_bytes())?;
        stream.write_all(b"\n")?;
        let mut answer = String::new();
        BufReader::new(stream).take(16 << 20).read_line(&mut answer)?;
        match answer.is_empty() {
            true => Err(std::io::Error::from(std::io::ErrorKind::UnexpectedEof)),
            false => Ok(answer.trim_end().to_string()),
        }
    };
    exchange(&mut stream).map_err(ClientError::Broken)
}
