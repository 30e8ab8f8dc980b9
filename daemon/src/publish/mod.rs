//! What leaves the bench over MQTT 5: the outbox, the client, and the built-in broker.
//!
//! The desk hands over what a commit made known as one [`Outgoing`]; the [`Courier`] carries it
//! to a broker, whatever the broker does meanwhile. Three kinds of message, three promises:
//!
//! * **Facts** are sent in the order of their `seq`, at quality of service 1, at most
//!   [`Limits::window`] unacknowledged. One is *delivered* when the broker has acknowledged it with a
//!   good reason and every earlier one is delivered too; [`CourierEvent::Delivered`] says how far
//!   that is. After a lost connection the courier begins again behind the last delivered fact, so
//!   a subscriber may see up to a window of facts twice and ignores a `seq` it already has. A fact
//!   that is no longer in memory is read again through [`Past`].
//! * **Retained topics** hold the newest wanted payload only, one in flight a topic, facts first,
//!   a few at a time. All of them are published again after every connect, because a broker may
//!   come back with an older store or with none: presence, instruments, head, then the rest in
//!   the order in which they were first given.
//! * **Live** messages (quality of service 0) are for eyes: without a connection they are dropped.
//!
//! Nothing here can grow without bound, and [`Courier::send`] never waits for the network.
//!
//! # Sizes
//! A fact may have at most [`FACT_MAX`] bytes (256 KiB), well under the built-in broker's packet limit of
//! [`PACKET_MAX`] (1 MiB). A message over that cap or over the maximum packet size which the
//! broker announced is not sent, since a broker answers it by closing the connection, for ever:
//! [`CourierEvent::TooLarge`] names it. Such a fact counts as passed: the cursor moves over it and later
//! facts follow; subscribers see the gap in `seq`.

#[cfg(feature = "broker")]
pub mod broker;
mod courier;
mod facts;
mod holder;
mod live;
mod outbox;
mod retained;
mod settings;
mod transport;

use bytes::Bytes;

pub use courier::{Courier, Farewell, spawn};
pub use holder::holder_of;
pub use settings::{CourierSettings, Limits, Login, SettingsFault, TlsSettings};

/// Largest fact payload that is ever published, in bytes.
pub const FACT_MAX: usize = 256 * 1024;
/// Largest packet the built-in broker takes, in bytes.
pub const PACKET_MAX: usize = 1024 * 1024;
/// Largest ask the courier is willing to receive, in bytes; announced to the broker.
pub const ASK_MAX: usize = 64 * 1024;

/// What one commit makes known outside.
#[derive(Debug, Clone, Default)]
pub struct Outgoing {
    /// Facts as (`seq`, payload), ascending.
    pub facts: Vec<(u64, Bytes)>,
    /// Retained topics in full (`{root}/{station}/…`) with the payload wanted there; `None` clears the topic.
    pub retained: Vec<(String, Option<Bytes>)>,
    /// Messages for the moment.
    pub live: Vec<Live>,
    /// Answers to asks.
    pub answers: Vec<Answer>,
}

/// A message for the moment, at quality of service 0.
#[derive(Debug, Clone, PartialEq, Eq)]
pub enum Live {
    /// Only the newest one of a topic matters: a mass reading.
    Newest {
        /// Full topic.
        topic: String,
        /// Payload.
        payload: Bytes,
    },
    /// Each one matters: a drop of the cup. Sent at once, in order; when more than
    /// [`Limits::live_each`] wait, the oldest go.
    Each {
        /// Full topic.
        topic: String,
        /// Payload.
        payload: Bytes,
    },
}

/// An answer to an ask, at quality of service 1, not retained. It is dropped when the connection
/// is lost: who asked asks again under the same ask id and gets the same answer.
#[derive(Debug, Clone, PartialEq, Eq)]
pub struct Answer {
    /// The asking client, as [`CourierEvent::Asked`] named it.
    pub client: String,
    /// Payload.
    pub payload: Bytes,
    /// The correlation data of the ask, returned unchanged.
    pub correlation: Option<Bytes>,
}

/// The ledger as the courier needs it: facts that are no longer in memory.
pub trait Past: Send + Sync {
    /// Payloads of up to `limit` facts with `seq` greater than the given one, ascending, ready to publish.
    /// Empty means that there are none. It may block: it is called on a thread for that.
    ///
    /// # Errors
    /// A sentence why the ledger could not be read; the courier tries again later.
    fn facts_after(&self, seq: u64, limit: usize) -> Result<Vec<(u64, Bytes)>, String>;
}

/// What was refused or too large.
#[derive(Debug, Clone, PartialEq, Eq)]
pub enum What {
    /// The fact with this `seq`.
    Fact(u64),
    /// The retained payload for this topic.
    Retained(String),
    /// A live message on this topic.
    Live(String),
    /// An answer to this client.
    Answer(String),
    /// The subscription to asks.
    Asks,
}

/// What the courier tells. The callback runs on the courier's task: it hands over and returns.
#[derive(Debug, Clone, PartialEq, Eq)]
pub enum CourierEvent {
    /// The broker accepted the connection.
    Connected,
    /// The connection was lost or could not be made; told once for each run of equal reasons.
    Disconnected {
        /// Why, and what to try where that is known.
        why: String,
    },
    /// Every fact up to and including this `seq` is delivered (or was passed as too large).
    Delivered {
        /// The last such `seq`.
        through: u64,
    },
    /// Somebody asks something. Nothing about the payload has been checked but its size.
    Asked {
        /// The client, from the response topic `{root}/{station}/answer/{client}`. A name, not a proof.
        client: String,
        /// The ask.
        payload: Bytes,
        /// To be returned with the answer.
        correlation: Option<Bytes>,
    },
    /// An ask that is not passed on: retained, or with no or a foreign response topic. Told once a connection.
    AskIgnored {
        /// Why, and what to send instead.
        why: String,
    },
    /// Not sent, because the broker would not take it.
    TooLarge {
        /// Which.
        what: What,
        /// Size of the packet, or of the payload where [`FACT_MAX`] decided.
        bytes: usize,
        /// What would have passed.
        limit: usize,
    },
    /// The broker answered with a bad reason. A fact is tried again after a pause, a retained
    /// payload at the next connect or when a newer one is given.
    Refused {
        /// Which.
        what: What,
        /// The broker's reason and what to try.
        reason: String,
    },
    /// A retained topic beyond [`Limits::retained_topics`] was not taken.
    RetainedFull {
        /// Which.
        topic: String,
    },
    /// The ledger could not be read for catching up; tried again later.
    PastUnreadable {
        /// Why.
        why: String,
    },
    /// The ledger has no fact between these two, though `seq` is gapless.
    Missing {
        /// The last fact before the gap.
        after: u64,
        /// The first one behind it.
        found: u64,
    },
}
