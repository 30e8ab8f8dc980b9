//! From the desk to the screen: what was stored, handed over without waiting.
//!
//! The desk's thread puts what has changed into a box and goes on; the screen
//! takes it when it has time. What has changed twice meanwhile is there once,
//! so that the box never holds more than the laboratory itself.

use crate::desk::{Changed, Desk, Effects, LiveOut};
use bytes::Bytes;
use std::collections::BTreeMap;
use std::sync::{Mutex, MutexGuard, PoisonError};
use tarecup_core::fact::{Counted, Fact};
use tarecup_core::lab::entities::Entity;
use tarecup_core::lab::{Lab, Loaded};
use tarecup_core::names::InstrumentName;
use tokio::sync::Notify;

/// What the screen has not taken yet.
#[derive(Default)]
pub(super) struct News {
    /// The laboratory anew; what is in `entities` came after it.
    pub whole: Option<Box<Lab>>,
    /// Entities as they stand now.
    pub entities: BTreeMap<Entity, Changed>,
    /// Instruments as they are published, by name.
    pub instruments: BTreeMap<String, Bytes>,
    /// The latest reading or drop of each instrument.
    pub live: BTreeMap<String, LiveOut>,
    /// Counters whose run is over.
    pub ended: Vec<InstrumentName>,
    /// Whether recording began or ceased: why nothing is recorded.
    pub recording: Option<Option<String>>,
    /// The last fact that is stored.
    pub seq: u64,
}

impl News {
    /// Whether more has come than readings.
    pub fn shows(&self) -> bool {
        self.whole.is_some() || !self.entities.is_empty() || !self.instruments.is_empty() || self.recording.is_some()
    }
}

/// The box.
#[derive(Default)]
pub struct Mailbox {
    news: Mutex<News>,
    pub(super) wake: Notify,
}

impl Mailbox {
    fn lock(&self) -> MutexGuard<'_, News> {
        self.news.lock().unwrap_or_else(PoisonError::into_inner)
    }

    /// Takes what the screen needs of the effects. Called in the desk's thread after each commit.
    pub fn put(&self, desk: &Desk, effects: &mut Effects) {
        let instruments =
            effects.retained.iter().filter_map(|p| Some((p.topic.strip_prefix("instrument/")?, p.payload.clone()?)));
        let instruments: Vec<(String, Bytes)> = instruments.map(|(name, payload)| (name.to_string(), payload)).collect();
        if effects.changed.is_empty() && effects.live.is_empty() && instruments.is_empty() && !effects.presence {
            return;
        }
        let mut news = self.lock();
        for changed in effects.changed.drain(..) {
            match (key(&changed), changed) {
                (None, Changed::Whole(lab)) => {
                    news.entities.clear();
                    news.whole = Some(lab);
                }
                (Some(entity), changed) => drop(news.entities.insert(entity, changed)),
                (None, _) => (),
            }
        }
        news.instruments.extend(instruments);
        for (live, _) in &effects.live {
            let (LiveOut::Drop { instrument, .. } | LiveOut::Mass { instrument, .. } | LiveOut::Stale { instrument, .. }) = live;
            news.live.insert(instrument.to_string(), live.clone());
        }
        for recorded in &effects.recorded {
            if let Fact::Counted(Counted { cup: Some(cup), .. }) = &recorded.fact
                && !news.ended.contains(cup)
            {
                news.ended.push(cup.clone());
            }
        }
        if effects.presence {
            news.recording = Some(desk.not_recording().map(String::from));
        }
        news.seq = desk.last_seq();
        drop(news);
        self.wake.notify_one();
    }

    /// Takes everything.
    pub(super) fn take(&self) -> News {
        let mut news = self.lock();
        let seq = news.seq;
        std::mem::replace(&mut *news, News { seq, ..News::default() })
    }
}

fn key(changed: &Changed) -> Option<Entity> {
    Some(match changed {
        Changed::Whole(_) => return None,
        Changed::NoLonger(seq) => Entity::Loose(*seq),
        Changed::Entity(loaded) => match loaded.as_ref() {
            Loaded::Specimen(s) => Entity::Specimen(s.id.clone()),
            Loaded::Container(c) => Entity::Container(c.id.clone()),
            Loaded::Bench(b) => Entity::Bench(b.name.clone()),
            Loaded::Instrument(i) => Entity::Instrument(i.name.clone()),
            Loaded::Loose(l) => Entity::Loose(l.seq),
            Loaded::Statistics(_) => Entity::Statistics,
            Loaded::Clock(_) => Entity::Clock,
        },
    })
}
