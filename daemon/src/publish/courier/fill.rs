//! What goes next, and handing it to the client.

use std::sync::Arc;

use super::session::{Item, Parting, Session};
use super::{End, Task, client_gone};
use crate::publish::facts::Next;
use crate::publish::outbox::Outbox;
use crate::publish::retained::Due;
use crate::publish::transport::{Message, Outlet};
use crate::publish::{Answer, CourierEvent, FACT_MAX, What};

/// Retained payloads on their way at a time: the rest of the window belongs to facts.
const RETAINED_FLYING: usize = 4;
/// Messages handed to the client but not yet written beyond which live ones wait.
const CONGESTED: usize = 24;

impl Task {
    /// Hands to the client what the window allows.
    pub(super) fn fill<O: Outlet>(&mut self, session: &mut Session, outlet: &O) -> Result<(), End> {
        let mut told = Vec::new();
        let filled = {
            let shared = self.shared.clone();
            let mut outbox = shared.lock();
            self.fill_assured(session, outlet, &mut outbox, &mut told)
                .and_then(|()| Self::fill_live(session, outlet, &mut outbox, &mut told))
        };
        for event in told {
            (self.on_event)(event);
        }
        filled.map_err(|()| End::Lost(client_gone()))
    }

    fn fill_assured<O: Outlet>(
        &mut self,
        session: &mut Session,
        outlet: &O,
        outbox: &mut Outbox,
        told: &mut Vec<CourierEvent>,
    ) -> Result<(), ()> {
        while session.in_flight() < session.window {
            let Some((item, message)) = self.choose(session, outbox) else { return Ok(()) };
            let size = message.packet_size();
            let over_cap = matches!(item, Item::Fact(_)) && message.payload.len() > FACT_MAX;
            if over_cap || size > session.max_packet {
                let (bytes, limit) = if over_cap { (message.payload.len(), FACT_MAX) } else { (size, session.max_packet) };
                let what = match item {
                    Item::Fact(seq) => {
                        if outbox.facts.pass_over(seq) {
                            told.push(CourierEvent::Delivered { through: outbox.facts.delivered() });
                        }
                        What::Fact(seq)
                    }
                    Item::Retained(topic, version) => {
                        outbox.retained.settle(&topic, version);
                        session.last_word_refused |= session.parting == Parting::LastWord && topic.ends_with("/presence");
                        What::Retained(topic.to_string())
                    }
                    Item::Answer(client) => What::Answer(client),
                    Item::Live => continue,
                };
                told.push(CourierEvent::TooLarge { what, bytes, limit });
                continue;
            }
            if let Item::Fact(seq) = item {
                outbox.facts.sent(seq);
            }
            outlet.publish(message)?;
            session.submitted.push_back((item, size));
        }
        Ok(())
    }

    /// Presence, then answers, then facts, then the other retained topics, of which a few at a time.
    fn choose(&mut self, session: &mut Session, outbox: &mut Outbox) -> Option<(Item, Message)> {
        if let Some(due) = outbox.retained.next(true) {
            return Some(retained_message(due));
        }
        let retained_may = outbox.retained.flying() < RETAINED_FLYING.min(session.window);
        if let Some(Answer { client, payload, correlation }) = outbox.answers.pop_front() {
            let topic = self.settings.topic(&format!("answer/{client}"));
            return Some((Item::Answer(client), Message { topic, payload, assured: true, retain: false, correlation }));
        }
        // While retained topics wait, facts leave them a part of the window: a long catch-up must not starve them.
        let share = if outbox.retained.waiting() && session.window > RETAINED_FLYING { RETAINED_FLYING } else { 0 };
        if session.pause_until.is_none() && outbox.facts.in_flight() < session.window - share {
            match outbox.facts.next() {
                Next::Send(seq, payload) => {
                    let topic = self.fact_topic.clone();
                    return Some((Item::Fact(seq), Message { topic, payload, assured: true, retain: false, correlation: None }));
                }
                Next::Load(after) if session.load.is_none() && self.load_retry.is_none() => {
                    let (past, limit) = (Arc::clone(&self.past), self.settings.limits.page);
                    let job = tokio::task::spawn_blocking(move || past.facts_after(after, limit));
                    session.load = Some((after, job));
                }
                Next::Load(_) | Next::Idle => {}
            }
        }
        if retained_may { outbox.retained.next(false).map(retained_message) } else { None }
    }

    fn fill_live<O: Outlet>(
        session: &mut Session,
        outlet: &O,
        outbox: &mut Outbox,
        told: &mut Vec<CourierEvent>,
    ) -> Result<(), ()> {
        while session.submitted.len() < CONGESTED.max(session.window + 8) {
            let Some((topic, payload)) = outbox.live.pop() else { return Ok(()) };
            let message = Message { topic, payload, assured: false, retain: false, correlation: None };
            let size = message.packet_size();
            if size > session.max_packet {
                let what = What::Live(message.topic);
                told.push(CourierEvent::TooLarge { what, bytes: size, limit: session.max_packet });
                continue;
            }
            outlet.publish(message)?;
            session.submitted.push_back((Item::Live, size));
            session.pending_live += 1;
        }
        Ok(())
    }
}

fn retained_message(due: Due) -> (Item, Message) {
    let topic = due.topic.to_string();
    let message = Message { topic, payload: due.payload, assured: true, retain: true, correlation: None };
    (Item::Retained(due.topic, due.version), message)
}
