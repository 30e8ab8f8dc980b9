//! What the courier knows of one connection.

use std::collections::{HashMap, VecDeque};
use std::sync::Arc;
use std::time::{Duration, Instant};

use tokio::task::JoinHandle;

use super::{PAUSE_FIRST, Page};

/// What a message in flight was.
#[derive(Debug)]
pub(super) enum Item {
    Fact(u64),
    Retained(Arc<str>, u64),
    Answer(String),
    Live,
}

/// State of one connection.
pub(super) struct Session {
    /// Handed to the client in this order, not yet written.
    pub(super) submitted: VecDeque<(Item, usize)>,
    /// Written, by packet identifier, not yet answered.
    pub(super) written: HashMap<u16, (Item, usize)>,
    pub(super) up: Option<Instant>,
    pub(super) max_packet: usize,
    pub(super) window: usize,
    pub(super) progress: Instant,
    /// When to look whether the broker still answers; set only while something is in flight.
    pub(super) look: Option<Instant>,
    /// Facts are refused: not before this.
    pub(super) pause_until: Option<Instant>,
    pub(super) pause: Duration,
    pub(super) refusals: usize,
    pub(super) ignored_told: bool,
    pub(super) load: Option<(u64, JoinHandle<Page>)>,
    pub(super) parting: Parting,
    /// The last word on presence was refused or too large.
    pub(super) last_word_refused: bool,
    pub(super) pending_live: usize,
}

#[derive(PartialEq, Eq, Clone, Copy)]
pub(super) enum Parting {
    No,
    Draining,
    LastWord,
    Gone,
}

impl Session {
    pub(super) fn new(now: Instant) -> Self {
        Self {
            submitted: VecDeque::new(),
            written: HashMap::new(),
            up: None,
            max_packet: usize::MAX,
            window: 1,
            progress: now,
            look: None,
            pause_until: None,
            pause: PAUSE_FIRST,
            refusals: 0,
            ignored_told: false,
            load: None,
            parting: Parting::No,
            last_word_refused: false,
            pending_live: 0,
        }
    }

    pub(super) fn in_flight(&self) -> usize {
        self.submitted.len() - self.pending_live + self.written.len()
    }

    /// The longest packet that may have offended the broker.
    pub(super) fn longest(&self) -> Option<usize> {
        self.submitted.iter().chain(self.written.values()).map(|(_, size)| *size).max()
    }
}
