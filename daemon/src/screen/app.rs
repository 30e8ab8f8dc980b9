//! What every request can use.

use super::board::Board;
use super::hand::Hand;
use super::operators::{self, Denied};
use super::server::Ends;
use super::session::{Cookies, Secret, Sessions};
use crate::desk::inbox::Inbox;
use std::path::PathBuf;
use std::sync::Arc;
use std::time::{SystemTime, UNIX_EPOCH};
use tarecup_core::names::Operator;
use tokio::sync::{Semaphore, oneshot};

/// The parts behind the screen.
pub struct App {
    /// What browsers see.
    pub board: Arc<Board>,
    /// The queue in front of the desk.
    pub inbox: Arc<Inbox>,
    /// Where the ledger and the operators' file lie.
    pub state_dir: PathBuf,
    /// Names under which browsers may reach it, beside its own address.
    pub hosts: Vec<String>,
    /// What a browser has to present first.
    pub secret: Option<Secret>,
    /// How cookies are called.
    pub cookies: Cookies,
    /// Who sits where.
    pub sessions: Sessions,
    /// The demo's hand at a simulated bench.
    pub hand: Option<Arc<dyn Hand>>,
    /// One PIN is judged at a time: that bounds memory and guesses.
    pub judging: Semaphore,
    /// Readers of the ledger at a time.
    pub reading: Semaphore,
}

/// UTC now, µs. Lock-outs and cookies live in the world's time also where a virtual day is played.
pub fn utc_us() -> i64 {
    SystemTime::now().duration_since(UNIX_EPOCH).map_or(0, |d| i64::try_from(d.as_micros()).unwrap_or(i64::MAX))
}

impl App {
    /// Puts an ask to the desk and waits for its answer.
    pub async fn ask(&self, client: String, json: String) -> String {
        let (tx, rx) = oneshot::channel();
        self.inbox.ask(client, json, Box::new(move |answer| drop(tx.send(answer))));
        let stopped = || crate::asks::refusal("the service stopped before it could answer; ask again when it is back");
        rx.await.unwrap_or_else(|_| stopped())
    }

    /// Judges a PIN, off the desk and off the threads that serve.
    pub async fn prove(&self, ends: &Ends, who: &Operator, pin: &str) -> Result<Operator, Denied> {
        if !ends.tls && !ends.peer.ip().to_canonical().is_loopback() {
            let says = "a PIN is only taken over TLS or from this machine; set certificate_file and key_file in [screen]";
            return Err(Denied::Trouble(String::from(says)));
        }
        let gone = || Denied::Trouble(String::from("the service is stopping"));
        let _turn = self.judging.acquire().await.map_err(|_| gone())?;
        let (dir, who, pin) = (self.state_dir.clone(), who.clone(), pin.to_string());
        let judged = tokio::task::spawn_blocking(move || operators::prove(&dir, &who, &pin, utc_us())).await;
        let judged = judged.unwrap_or_else(|_| Err(gone()));
        if let Err(denied) = &judged {
            tracing::warn!(%denied, peer = %ends.peer.ip(), "a PIN was not taken");
        }
        judged
    }

    /// Reads the ledger, off the threads that serve.
    pub async fn read<T: Send + 'static>(&self, read: impl FnOnce() -> T + Send + 'static) -> Option<T> {
        let _turn = self.reading.acquire().await.ok()?;
        tokio::task::spawn_blocking(read).await.ok()
    }

    /// Initials of everybody who has a PIN.
    pub fn operators(&self) -> Vec<String> {
        let book = operators::load(&self.state_dir).unwrap_or_else(|says| {
            tracing::warn!(%says, "operators");
            operators::Book::default()
        });
        book.operators.into_iter().map(|e| e.initials.to_string()).collect()
    }
}
