//! Asking an instrument that speaks only when asked. Writes never wait.

use super::link::Link;
use crate::profile::Ask;
use std::io::ErrorKind;
use std::time::Duration;
use tokio::time::Instant;

/// A request that could not be written for so long is given up.
pub(super) const WRITE_TIMEOUT: Duration = Duration::from_secs(1);
/// Pause before the rest of a request is tried again.
const AGAIN: Duration = Duration::from_millis(10);

/// The requests of one port.
#[derive(Debug)]
pub(super) struct Asker {
    ask: Ask,
    next: Instant,
    /// Of the request that is being written: bytes gone out, and when to give up.
    writing: Option<(usize, Instant)>,
}

/// What became of an attempt to ask.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub(super) enum Asking {
    /// The request is out.
    Sent,
    /// The line takes no more at the moment.
    Blocked,
    /// The request was given up; another follows in its time.
    GivenUp,
    /// The port is gone.
    Gone,
}

impl Asker {
    pub(super) fn new(ask: &Ask, first: Instant) -> Self {
        Self { ask: ask.clone(), next: first, writing: None }
    }

    /// When to call [`Asker::act`].
    pub(super) fn next(&self) -> Instant {
        self.next
    }

    /// The next request waits until then.
    pub(super) fn not_before(&mut self, at: Instant) {
        self.next = self.next.max(at);
    }

    /// Writes the request, or what is left of it.
    pub(super) fn act(&mut self, port: &mut Link, now: Instant) -> Asking {
        let (mut done, give_up) = self.writing.unwrap_or((0, now + WRITE_TIMEOUT));
        while done < self.ask.send.len() {
            match port.try_write(&self.ask.send[done..]) {
                Ok(n) if n > 0 => done += n,
                Ok(_) => return self.blocked(port, done, give_up, now),
                Err(e) if e.kind() == ErrorKind::WouldBlock => return self.blocked(port, done, give_up, now),
                Err(e) if e.kind() == ErrorKind::Interrupted => {}
                Err(_) => return Asking::Gone,
            }
        }
        self.finished(now);
        Asking::Sent
    }

    fn blocked(&mut self, port: &Link, done: usize, give_up: Instant, now: Instant) -> Asking {
        if now < give_up {
            self.writing = Some((done, give_up));
            self.next = now + AGAIN;
            return Asking::Blocked;
        }
        // Old requests that nobody took would all be answered at once later.
        port.forget_written();
        self.finished(now);
        Asking::GivenUp
    }

    /// Keeps the rhythm, and skips what was missed.
    fn finished(&mut self, now: Instant) {
        self.writing = None;
        self.next += self.ask.every;
        if self.next <= now {
            self.next = now + self.ask.every;
        }
    }
}
