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
use super::{Answer, CourierEvent, FACT_MAX, Live, Outgoing, What};

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
            if !is_topic(&topic) {
                trouble.push(no_topic(What::Retained(topic)));
            } else if bytes > FACT_MAX {
                trouble.push(CourierEvent::TooLarge { what: What::Retained(topic), bytes, limit: FACT_MAX });
            } else if !self.retained.set(&topic, wanted) && !self.full_told {
                self.full_told = true;
                trouble.push(CourierEvent::RetainedFull { topic });
            }
        }
        if self.connected {
            for live in outgoing.live {
                match &live {
                    Live::Newest { topic, .. } | Live::Each { topic, .. } if !is_topic(topic) => {
                        trouble.push(no_topic(What::Live(topic.clone())));
                    }
                    _ => self.live.push(live),
                }
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

/// A name that can be published to. Another one would make the client refuse the message, again and again.
fn is_topic(topic: &str) -> bool {
    (1..=1_024).contains(&topic.len()) && !topic.contains(['+', '#', '\0'])
}

fn no_topic(what: What) -> CourierEvent {
    CourierEvent::Refused { what, reason: "not a topic: leave out + and #, and keep it under 1 KiB".to_owned() }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn what_could_never_be_sent_is_refused_at_the_door() {
        let shared = Shared::new(&CourierSettings::new("h", 1, "r", "s"), 0);
        let mut outbox = shared.lock();
        outbox.connected = true;
        let body = Bytes::from_static(b"x");
        let trouble = outbox.take(Outgoing {
            retained: vec![("r/s/+".into(), Some(body.clone())), (String::new(), None), ("r/s/head".into(), Some(body.clone()))],
            live: vec![Live::Each { topic: "r/s/#".into(), payload: body.clone() }],
            answers: vec![Answer { client: "a/b".into(), payload: body, correlation: None }],
            ..Outgoing::default()
        });
        assert_eq!(trouble.len(), 4);
        assert!(trouble.iter().all(|e| matches!(e, CourierEvent::Refused { .. })));
        assert!(outbox.live.pop().is_none() && outbox.answers.is_empty());
        assert!(outbox.retained.next(false).is_some_and(|due| &*due.topic == "r/s/head"));
        assert!(outbox.retained.next(false).is_none());
    }

    #[test]
    fn without_a_connection_moments_and_answers_are_not_kept() {
        let shared = Shared::new(&CourierSettings::new("h", 1, "r", "s"), 0);
        let mut outbox = shared.lock();
        let body = Bytes::from_static(b"x");
        outbox.take(Outgoing {
            live: vec![Live::Newest { topic: "t".into(), payload: body.clone() }],
            answers: vec![Answer { client: "a".into(), payload: body, correlation: None }],
            ..Outgoing::default()
        });
        assert!(outbox.live.pop().is_none() && outbox.answers.is_empty());
    }
}
