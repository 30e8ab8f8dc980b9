//! What may leave, turned into messages.

use super::broker::{SharedCourier, fact_payload};
use super::ports::Doors;
use super::{Tap, Told};
use crate::clock::BootClock;
use crate::desk::{Desk, Effects, LiveOut};
use crate::heard::Heard;
use crate::publish::{CourierSettings, Live, Outgoing};
use crate::screen::board::Board;
use bytes::Bytes;
use serde_json::json;
use std::sync::{Arc, PoisonError};

/// Turns what may leave into messages.
pub(super) struct Outlet {
    pub(super) board: Option<Arc<Board>>,
    pub(super) settings: CourierSettings,
    pub(super) ledger: (String, u64),
    pub(super) courier: SharedCourier,
    pub(super) heard: Arc<Heard>,
    pub(super) tap: Option<Tap>,
    pub(super) told: Option<Told>,
    pub(super) clock: Arc<dyn BootClock>,
    pub(super) doors: Doors,
}

impl Outlet {
    pub(super) fn hand_on(&self, desk: &Desk, mut effects: Effects) {
        if let Some(board) = &self.board {
            board.mailbox.put(desk, &mut effects);
        }
        let mut outgoing = Outgoing::default();
        if effects.presence {
            let presence = desk.presence("up", &self.clock.now()).to_string();
            outgoing.retained.push((self.settings.topic("presence"), Some(Bytes::from(presence))));
        }
        outgoing.facts = effects.facts.iter().map(|(seq, body)| (*seq, fact_payload(&self.ledger, body))).collect();
        outgoing.retained.extend(effects.retained.into_iter().map(|p| (self.settings.topic(&p.topic), p.payload)));
        outgoing.live = effects.live.iter().map(|(live, seq)| self.live(live, *seq)).collect();
        if let Some(tap) = &self.tap {
            self.tapped(tap, &outgoing);
        }
        let anything = !(outgoing.facts.is_empty() && outgoing.retained.is_empty() && outgoing.live.is_empty());
        if anything && let Some(courier) = self.courier.lock().unwrap_or_else(PoisonError::into_inner).as_ref() {
            courier.send(outgoing);
        }
        if let Some(told) = &self.told {
            effects.recorded.iter().for_each(|r| told(r));
        }
        for (reply, answer) in effects.replies {
            reply(answer);
        }
        self.doors.confirm(&effects.confirmed);
        self.heard.add(&effects.heard);
    }

    fn live(&self, live: &LiveOut, seq: u64) -> Live {
        match live {
            LiveOut::Drop { instrument, drops, rate_per_s, at } => Live::Each {
                topic: self.settings.topic(&format!("live/{instrument}")),
                payload: text(&json!({"v": 1, "seq": seq, "at": at.rfc3339(), "drops": drops, "rate_per_s": rate_per_s})),
            },
            LiveOut::Mass { instrument, reading, at } => Live::Newest {
                topic: self.settings.topic(&format!("live/{instrument}")),
                payload: text(
                    &json!({"v": 1, "seq": seq, "at": at.rfc3339(), "mass_g": reading.mass.grams(), "steady": reading.mark, "basis": reading.basis, "stale": false}),
                ),
            },
            LiveOut::Stale { instrument, state, last_heard, at } => Live::Newest {
                topic: self.settings.topic(&format!("live/{instrument}")),
                payload: text(
                    &json!({"v": 1, "seq": seq, "at": at.rfc3339(), "stale": true, "state": state, "last_heard": last_heard.map(|s| s.rfc3339())}),
                ),
            },
        }
    }

    fn tapped(&self, tap: &Tap, outgoing: &Outgoing) {
        let fact_topic = self.settings.topic("fact");
        for (_, payload) in &outgoing.facts {
            tap(&fact_topic, Some(payload), false, 1);
        }
        for (topic, payload) in &outgoing.retained {
            tap(topic, payload.as_deref(), true, 1);
        }
        for live in &outgoing.live {
            let (Live::Newest { topic, payload } | Live::Each { topic, payload }) = live;
            tap(topic, Some(payload), false, 0);
        }
    }
}

pub(super) fn text(value: &serde_json::Value) -> Bytes {
    Bytes::from(value.to_string())
}
