//! The bounded queue in front of the desk.

use std::sync::atomic::{AtomicBool, Ordering};
use std::sync::{Arc, Condvar, Mutex, MutexGuard, OnceLock, PoisonError};
use std::time::{Duration, Instant};
use tarecup_core::stamp::Stamp;
use tarecup_drivers::heard::{Batch, Deliver, InstrumentId, PortState};

/// Bytes of lines that may wait. A reader that finds no room holds what it has.
const BYTES_MOST: usize = 8 << 20;
/// Bytes of lines that wake the desk by themselves.
const MUCH: usize = 64 << 10;
/// Asks that may wait.
const ASKS_MOST: usize = 256;

/// What waits for the desk.
pub enum Incoming {
    /// Frames of one port.
    Batch(Batch),
    /// Lines that were lost for want of room.
    Overrun {
        /// Whose.
        instrument: InstrumentId,
        /// How many.
        lines: u64,
        /// When.
        at: Stamp,
    },
    /// A port's state changed.
    Port {
        /// Whose.
        instrument: InstrumentId,
        /// What it is now.
        state: PortState,
        /// When.
        at: Stamp,
    },
    /// Somebody asks.
    Ask {
        /// Who, as far as a name goes.
        client: String,
        /// JSON text.
        body: String,
        /// Takes the answer, after its facts are committed.
        reply: Reply,
    },
    /// Facts are delivered through this number.
    Delivered(u64),
    /// Whether a broker is connected, and why not.
    Broker(Option<String>),
    /// Another part of the service has something to say, for the status.
    Note {
        /// About what.
        what: &'static str,
        /// What.
        says: serde_json::Value,
    },
    /// Look at the clock; tell when that is done, with the reason when nothing is being recorded.
    Tick(Reply),
    /// Stop in order.
    Stop,
}

/// Takes one answer.
pub type Reply = Box<dyn FnOnce(String) + Send>;

#[derive(Default)]
struct State {
    items: Vec<Incoming>,
    bytes: usize,
    asks: usize,
}

/// The queue.
#[derive(Default)]
pub struct Inbox {
    state: Mutex<State>,
    wake: Condvar,
    lines_wait: AtomicBool,
    overheard: OnceLock<Overheard>,
}

/// Hears every ask as it comes in: client and text.
pub type Overheard = Box<dyn Fn(&str, &str) + Send + Sync>;

impl Inbox {
    /// An empty queue.
    pub fn new() -> Arc<Self> {
        Arc::new(Self::default())
    }

    fn lock(&self) -> MutexGuard<'_, State> {
        self.state.lock().unwrap_or_else(PoisonError::into_inner)
    }

    fn push(&self, item: Incoming) {
        self.lock().items.push(item);
        self.wake.notify_one();
    }

    /// Puts an ask. When too many wait, it comes back with a sentence.
    pub fn ask(&self, client: String, body: String, reply: Reply) {
        let mut state = self.lock();
        if state.asks >= ASKS_MOST {
            drop(state);
            return reply(crate::asks::refusal("too many asks are waiting; ask again in a moment"));
        }
        if let Some(overheard) = self.overheard.get() {
            overheard(&client, &body);
        }
        state.asks += 1;
        state.items.push(Incoming::Ask { client, body, reply });
        drop(state);
        self.wake.notify_one();
    }

    /// Asks the desk to look at the clock.
    pub fn tick(&self, reply: Reply) {
        self.push(Incoming::Tick(reply));
    }

    /// Tells that facts are delivered.
    pub fn delivered(&self, through: u64) {
        let mut state = self.lock();
        // The desk writes the cursor with its next commit: no need to wake it for that alone.
        match state.items.iter_mut().find(|i| matches!(i, Incoming::Delivered(_))) {
            Some(item) => *item = Incoming::Delivered(through),
            None => state.items.push(Incoming::Delivered(through)),
        }
    }

    /// Tells how the broker is doing.
    pub fn broker(&self, trouble: Option<String>) {
        self.push(Incoming::Broker(trouble));
    }

    /// Tells what another part of the service has to say.
    pub fn note(&self, what: &'static str, says: serde_json::Value) {
        self.push(Incoming::Note { what, says });
    }

    /// From now on, asks are overheard. The first who asks for it stays.
    pub fn overhear(&self, by: Overheard) {
        let _ = self.overheard.set(by);
    }

    /// Asks for an orderly stop.
    pub fn stop(&self) {
        self.push(Incoming::Stop);
    }

    /// Wakes the desk when lines have come since the last call; tells whether any had.
    pub fn lines_are_in(&self) -> bool {
        let any = self.lines_wait.swap(false, Ordering::Relaxed);
        if any {
            // Taking the lock first: the desk is either before its check or asleep.
            drop(self.lock());
            self.wake.notify_one();
        }
        any
    }

    /// Takes what persons wait for; lines stay, and with them the bound on their number.
    pub fn take_urgent(&self, into: &mut Vec<Incoming>) {
        let mut state = self.lock();
        let all = std::mem::take(&mut state.items);
        let (urgent, rest) =
            all.into_iter().partition(|i| matches!(i, Incoming::Ask { .. } | Incoming::Tick(_) | Incoming::Stop));
        state.items = rest;
        state.asks = 0;
        into.extend::<Vec<Incoming>>(urgent);
    }

    /// Takes all that waits; waits for something until the given moment.
    pub fn take(&self, into: &mut Vec<Incoming>, until: Option<Instant>) {
        let mut state = self.lock();
        while !state.items.iter().any(|i| !matches!(i, Incoming::Delivered(_))) {
            let Some(until) = until else {
                state = self.wake.wait(state).unwrap_or_else(PoisonError::into_inner);
                continue;
            };
            let left = until.saturating_duration_since(Instant::now());
            if left == Duration::ZERO {
                break;
            }
            state = self.wake.wait_timeout(state, left).unwrap_or_else(PoisonError::into_inner).0;
        }
        into.append(&mut state.items);
        (state.bytes, state.asks) = (0, 0);
    }
}

impl Deliver for Inbox {
    /// Lines wake the desk only when much has gathered: whoever drives the
    /// ports calls [`Inbox::lines_are_in`] when it has read what there was.
    fn heard(&self, batch: Batch) -> Result<(), Batch> {
        let mut state = self.lock();
        if state.bytes + batch.bytes.len() > BYTES_MOST {
            return Err(batch);
        }
        state.bytes += batch.bytes.len();
        state.items.push(Incoming::Batch(batch));
        let much = state.bytes >= MUCH;
        drop(state);
        self.lines_wait.store(true, Ordering::Relaxed);
        if much {
            self.wake.notify_one();
        }
        Ok(())
    }

    fn overrun(&self, instrument: InstrumentId, lines: u64, at: Stamp) {
        let mut state = self.lock();
        let same = |i: &&mut Incoming| matches!(i, Incoming::Overrun { instrument: of, .. } if *of == instrument);
        match state.items.iter_mut().rev().find(same) {
            Some(Incoming::Overrun { lines: before, .. }) => *before += lines,
            _ => state.items.push(Incoming::Overrun { instrument, lines, at }),
        }
        drop(state);
        self.wake.notify_one();
    }

    fn state(&self, instrument: InstrumentId, state: PortState, at: Stamp) {
        self.push(Incoming::Port { instrument, state, at });
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    fn batch(bytes: usize) -> Batch {
        Batch { instrument: 0, bytes: vec![b'x'; bytes], frames: Vec::new(), read_at: None }
    }

    #[test]
    fn a_full_queue_gives_the_batch_back_and_takes_it_after_a_take() {
        let inbox = Inbox::new();
        assert!(inbox.heard(batch(BYTES_MOST)).is_ok());
        let back = inbox.heard(batch(1)).expect_err("no room");
        let mut items = Vec::new();
        inbox.take(&mut items, None);
        assert_eq!(items.len(), 1);
        assert!(inbox.heard(back).is_ok());
    }

    #[test]
    fn what_persons_wait_for_can_be_taken_alone() {
        let inbox = Inbox::new();
        assert!(inbox.heard(batch(10)).is_ok());
        inbox.stop();
        let mut items = Vec::new();
        inbox.take_urgent(&mut items);
        assert!(matches!(items.as_slice(), [Incoming::Stop]));
        items.clear();
        inbox.take(&mut items, None);
        assert!(matches!(items.as_slice(), [Incoming::Batch(_)]));
    }

    #[test]
    fn too_many_asks_are_answered_in_words() {
        let inbox = Inbox::new();
        for _ in 0..ASKS_MOST {
            inbox.ask("c".into(), "{}".into(), Box::new(|_| ()));
        }
        let (tx, rx) = std::sync::mpsc::channel();
        inbox.ask("c".into(), "{}".into(), Box::new(move |a| tx.send(a).unwrap_or(())));
        assert!(rx.try_recv().is_ok_and(|a| a.contains("too many asks")));
    }

    #[test]
    fn overruns_and_cursors_do_not_pile_up() {
        let inbox = Inbox::new();
        for n in 1..=3 {
            inbox.overrun(1, 10, Stamp::default());
            inbox.delivered(n);
        }
        let mut items = Vec::new();
        inbox.take(&mut items, None);
        assert_eq!(items.len(), 2);
        assert!(items.iter().any(|i| matches!(i, Incoming::Overrun { lines: 30, .. })));
        assert!(items.iter().any(|i| matches!(i, Incoming::Delivered(3))));
    }
}
