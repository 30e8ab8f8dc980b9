//! What waits to go out, shared between the desk that adds and the courier that takes.
//!
//! Everything in it is bounded, so that adding never has to wait, whatever becomes of the courier's task.

use std::collections::VecDeque;
use std::sync::{Arc, Mutex, MutexGuard, PoisonError};
use std::time::Instant;

use bytes::Bytes;
use tokio::sync::{Notify, oneshot};

use super::courier::{Farewell, client_name};
use super::facts::FactQueue;
use super::live::LiveQueue;
use super::retained::RetainedBoard;
use super::settings::CourierSettings;
use super::{Answer, CourierEvent, FACT_MAX, Outgoing, What};

/// A request to say goodbye.
pub(super) struct StopAsked {
    /// Last payload for presence.
    pub(super) presence: Option<Bytes>,
    /// From here on nothing more is drained.
    pub(super) drain_until: Instant,
    /// From here on the courier goes without a word.
    pub(super) until: Instant,
    pub(super) reply: oneshot::Sender<Farewell>,
}

/// The contents.
pub(super) struct Outbox {
    pub(super) facts: FactQueue,
    pub(super) retained: RetainedBoard,
    pub(super) live: LiveQueue,
    pub(super) answers: VecDeque<Answer>,
    /// Live messages and answers are taken only while there is a connection.
    pub(super) connected: bool,
    pub(super) stop: Option<StopAsked>,
    pub(super) abandoned: bool,
    max_answers: usize,
    full_told: bool,
}

/// The shared handle.
#[derive(Clone)]
pub(super) struct Shared {
    inner: Arc<(Mutex<Outbox>, Notify)>,
}

impl Shared {
    pub(super) fn new(settings: &CourierSettings, delivered_through: u64) -> Self {
        let limits = &settings.limits;
        let outbox = Outbox {
            facts: FactQueue::new(delivered_through, limits),
            retained: RetainedBoard::new(settings.topic(""), limits.retained_topics),
            live: LiveQueue::new(limits.live_each),
            answers: VecDeque::new(),
            connected: false,
            stop: None,
            abandoned: false,
            max_answers: limits.answers,
            full_told: false,
        };
        Self { inner: Arc::new((Mutex::new(outbox), Notify::new())) }
    }

    pub(super) fn lock(&self) -> MutexGuard<'_, Outbox> {
        // The contents are consistent after every single step, so a panic elsewhere spoils nothing.
        self.inner.0.lock().unwrap_or_else(PoisonError::into_inner)
    }

    pub(super) fn wake(&self) {
        self.inner.1.notify_one();
    }

    pub(super) async fn woken(&self) {
        self.inner.1.notified().await;
    }
}

impl Outbox {
    /// Takes what a commit made known. What could not be taken comes back as events.
    pub(super) fn take(&mut self, outgoing: Outgoing) -> Vec<CourierEvent> {
        let mut trouble = Vec::new();
        for (seq, payload) in outgoing.facts {
            self.facts.push(seq, payload);
        }
        for (topic, wanted) in outgoing.retained {
            let bytes = wanted.as_ref().map_or(0, Bytes::len);
            if bytes > FACT_MAX {
                trouble.push(CourierEvent::TooLarge { what: What::Retained(topic), bytes, limit: FACT_MAX });
            } else if !self.retained.set(&topic, wanted) && !self.full_told {
                self.full_told = true;
                trouble.push(CourierEvent::RetainedFull { topic });
            }
        }
        if self.connected {
            for live in outgoing.live {
                self.live.push(live);
            }
            for answer in outgoing.answers {
                if !client_name(&answer.client) {
                    let reason = "not the name of a client: give the one that asked".to_owned();
                    trouble.push(CourierEvent::Refused { what: What::Answer(answer.client), reason });
                    continue;
                }
                if self.answers.len() >= self.max_answers {
                    self.answers.pop_front();
                }
                self.answers.push_back(answer);
            }
        }
        trouble
    }

    /// The connection is gone: facts start again, moments are over, retained topics wait for the next connect.
    pub(super) fn disconnected(&mut self) {
        self.connected = false;
        self.facts.rewind();
        self.live.clear();
        self.answers.clear();
    }

    pub(super) fn settled(&self) -> bool {
        self.facts.settled() && self.retained.settled() && self.answers.is_empty()
    }
}
