//! What is taken and not yet stored, and its one transaction.

use super::flood::Swallowed;
use super::inbox::Reply;
use super::{Desk, InstrumentSetup, views};
use crate::asks;
use crate::keys::HeadText;
use crate::ledger::{AnswerRow, Digest, DocumentRow, FactRow, Group as Rows, InputKind, InputRow};
use bytes::Bytes;
use serde::Serialize;
use serde_json::Value;
use std::collections::{BTreeMap, BTreeSet};
use std::time::Instant;
use tarecup_core::fact::{Connection, Fact, Recorded, VERSION};
use tarecup_core::lab::clock::ClockSeen;
use tarecup_core::lab::entities::Entity;
use tarecup_core::lab::{Lab, Loaded};
use tarecup_core::names::InstrumentName;
use tarecup_core::sheet::Seq;
use tarecup_core::signal::Reading;
use tarecup_core::stamp::Stamp;
use tarecup_drivers::heard::{Batch, InstrumentId, PortState, What};

/// One thing that was taken. Held until it is stored; taken again if that fails.
pub(super) enum Held {
    /// Frames of one port.
    Batch { batch: Batch },
    /// Lines of a flood, as one row.
    Flood { instrument: InstrumentId, swallowed: Swallowed },
    /// Lines lost.
    Overrun { instrument: InstrumentId, lines: u64, at: Stamp },
    /// A port's state.
    Port { instrument: InstrumentId, state: PortState, at: Stamp },
    /// An ask that may write.
    Ask { client: String, id: Option<String>, body: String, proven: bool, reply: Option<Reply>, at: Stamp },
    /// A look at the clock that led to something.
    Timer { at: Stamp },
    /// Settings in full.
    Settings { text: String, at: Stamp },
    /// Something noticed of the wall clock.
    Clock { seen: ClockSeen, at: Stamp },
    /// The service came up.
    Start { after_orderly_stop: bool, at: Stamp },
    /// The service goes down in order.
    Stop { at: Stamp },
}

/// A fact and its stored bytes.
pub(super) struct Decided {
    pub recorded: Recorded,
    pub body: Bytes,
}

/// An answer that waits for its facts to be stored.
pub(super) struct Answered {
    /// Its ask is among what is held.
    pub held: bool,
    /// Client, ask id and digest of the body, when the answer is kept.
    pub keep: Option<(String, String, Digest)>,
    pub answer: String,
    pub reply: Option<Reply>,
}

/// What was decided since the last commit.
#[derive(Default)]
pub(super) struct Group {
    pub facts: Vec<Decided>,
    pub touched: BTreeSet<Entity>,
    pub answers: Vec<Answered>,
    pub live: Vec<LiveOut>,
    /// Instruments whose sense has moved on.
    pub senses: BTreeSet<usize>,
    pub lines: usize,
    /// Ports whose instrument a person has confirmed.
    pub confirmed: Vec<InstrumentId>,
    /// When the first fact was decided.
    pub first_fact: Option<Instant>,
    /// Something cannot wait for company.
    pub urgent: bool,
}

impl Group {
    pub fn has_facts(&self) -> bool {
        !self.facts.is_empty()
    }

    pub fn add(&mut self, facts: Vec<Recorded>, mut touched: BTreeSet<Entity>) {
        if !facts.is_empty() {
            self.first_fact.get_or_insert_with(Instant::now);
            self.urgent |= facts.iter().any(|r| !patient(&r.fact));
        }
        self.facts.extend(facts.into_iter().map(|recorded| Decided { body: stored(&recorded), recorded }));
        self.touched.append(&mut touched);
    }
}

/// Facts that nobody at a bench waits for.
fn patient(fact: &Fact) -> bool {
    matches!(
        fact,
        Fact::PanCleared { .. } | Fact::HandEmptied { .. } | Fact::InstrumentChanged { .. } | Fact::LinesOverrun { .. }
    )
}

/// A message for the moment.
#[derive(Clone, Debug)]
pub enum LiveOut {
    /// A drop fell.
    Drop {
        /// Which counter.
        instrument: InstrumentName,
        /// Drops so far.
        drops: u32,
        /// Drops per second so far.
        rate_per_s: Option<f64>,
        /// When.
        at: Stamp,
    },
    /// A balance shows a mass.
    Mass {
        /// Which balance.
        instrument: InstrumentName,
        /// The reading.
        reading: Reading,
        /// When.
        at: Stamp,
    },
    /// What was last shown of a balance is not what it shows now.
    Stale {
        /// Which balance.
        instrument: InstrumentName,
        /// How it is connected now.
        state: Connection,
        /// When it was last heard.
        last_heard: Option<Stamp>,
        /// When that was noticed.
        at: Stamp,
    },
}

/// Something to publish and keep at its topic: path below the station's root, and what stands there.
#[derive(Clone, Debug, PartialEq)]
pub struct Publish {
    /// Topic below `{root}/{station}/`.
    pub topic: String,
    /// The payload; `None` clears it.
    pub payload: Option<Bytes>,
}

/// What may leave after a commit.
#[derive(Default)]
pub struct Effects {
    /// Facts as they are stored, in order.
    pub facts: Vec<(u64, Bytes)>,
    /// The same facts, to be told to people.
    pub recorded: Vec<Recorded>,
    /// Retained topics.
    pub retained: Vec<Publish>,
    /// Messages for the moment.
    pub live: Vec<(LiveOut, u64)>,
    /// Answers to asks.
    pub replies: Vec<(Reply, String)>,
    /// Bytes taken, by instrument.
    pub heard: Vec<(InstrumentId, u64)>,
    /// Ports whose instrument a person has confirmed.
    pub confirmed: Vec<InstrumentId>,
    /// Whether recording began or ceased.
    pub presence: bool,
    /// What was touched, as it stands now; nothing unless the desk is mirrored.
    pub changed: Vec<Changed>,
}

/// A part of the laboratory that was touched, for a mirror of it.
#[derive(Clone, Debug)]
pub enum Changed {
    /// Everything: the state was read anew.
    Whole(Box<Lab>),
    /// An entity as it stands now.
    Entity(Box<Loaded>),
    /// A loose thing is tied or set aside.
    NoLonger(Seq),
}

#[derive(Serialize)]
struct Stored<'a> {
    v: u32,
    seq: u64,
    at: String,
    mono_us: i64,
    boot: u32,
    #[serde(skip_serializing_if = "Option::is_none")]
    who: Option<&'a str>,
    #[serde(skip_serializing_if = "Option::is_none")]
    through: Option<u64>,
    #[serde(flatten)]
    fact: &'a Fact,
}

/// The bytes of a fact, as they are stored for ever.
pub(super) fn stored(r: &Recorded) -> Bytes {
    let stored = Stored {
        v: VERSION,
        seq: r.seq,
        at: r.at.rfc3339(),
        mono_us: r.at.mono_us,
        boot: r.at.boot.0,
        who: r.who.as_ref().map(|w| w.as_str()),
        through: r.through,
        fact: &r.fact,
    };
    // A fact is made of plain values: writing it cannot fail.
    Bytes::from(serde_json::to_vec(&stored).unwrap_or_default())
}

struct Document {
    kind: &'static str,
    id: String,
    open: bool,
    body: Vec<u8>,
}

impl Desk {
    /// Stores the group in one transaction; only then adds to the effects.
    pub(super) fn commit(&mut self, effects: &mut Effects) {
        if self.held.is_empty() && self.group.answers.is_empty() && self.delivered == self.delivered_stored {
            self.group = Group::default();
            return;
        }
        match self.store() {
            Ok(()) => {
                self.delivered_stored = self.delivered;
                self.released(effects);
            }
            Err(e) => self.note_not_recording(&e, effects),
        }
    }

    fn store(&mut self) -> Result<(), crate::ledger::LedgerError> {
        let documents = self.documents();
        let document_rows: Vec<DocumentRow<'_>> = documents
            .iter()
            .map(|d| DocumentRow { kind: d.kind, id: &d.id, seq: self.next_seq - 1, open: d.open, body: &d.body })
            .collect();
        let texts = self.held_texts();
        let inputs = input_rows(&self.setup.instruments, &self.held, &texts, self.ledger.next_input(), self.group.lines);
        let through = self.next_input - 1;
        let facts: Vec<FactRow<'_>> = self.group.facts.iter().map(|d| fact_row(d, through)).collect();
        let answers: Vec<AnswerRow<'_>> = self.group.answers.iter().filter_map(answer_row).collect();
        let cursors = [("delivered_through", self.delivered)];
        let rows = Rows { inputs: &inputs, facts: &facts, documents: &document_rows, answers: &answers, cursors: &cursors };
        self.ledger.commit(&rows).map(|_| ())
    }

    /// Texts of held rows that are not bytes of a line.
    fn held_texts(&self) -> Vec<String> {
        let instrument = |i: &InstrumentId| &self.setup.instruments[usize::from(*i)].name;
        self.held
            .iter()
            .map(|h| match h {
                // That the PIN was given is part of what was asked.
                Held::Ask { body, proven: true, .. } => format!("{{\"{}\":\"pin\",{}", asks::PROVEN, &body[1..]),
                Held::Batch { .. } | Held::Ask { .. } | Held::Settings { .. } => String::new(),
                Held::Flood { swallowed: s, .. } => {
                    serde_json::json!({"lines": s.lines, "bytes": s.bytes, "sha256": s.sha256, "sample": s.sample}).to_string()
                }
                Held::Overrun { lines, .. } => format!("{{\"overrun_lines\":{lines}}}"),
                Held::Port { state, instrument: i, .. } => format!("{} {state:?}", instrument(i)),
                Held::Timer { .. } => String::from("due"),
                Held::Clock { seen, .. } => serde_json::to_string(seen).unwrap_or_default(),
                Held::Start { after_orderly_stop, .. } => format!("start, after an orderly stop: {after_orderly_stop}"),
                Held::Stop { .. } => String::from("stop"),
            })
            .collect()
    }

    /// Documents of what was touched, as they stand now.
    fn documents(&self) -> Vec<Document> {
        let mut documents: Vec<Document> = self.group.touched.iter().map(|e| self.document(e)).collect();
        for &index in &self.group.senses {
            let id = self.setup.instruments[index].name.as_str().to_string();
            documents.push(Document { kind: "sense", id, open: true, body: json(&self.ears[index].state) });
        }
        documents
    }

    fn document(&self, entity: &Entity) -> Document {
        let doc = |kind, id: &str, open, body| Document { kind, id: id.to_string(), open, body };
        let lab = &self.lab;
        match entity {
            Entity::Specimen(id) => {
                let specimen = lab.specimen(id);
                doc("specimen", id.as_str(), specimen.is_some_and(|s| s.open()), json(&specimen))
            }
            Entity::Container(id) => doc("container", id.as_str(), true, json(&lab.container(id))),
            Entity::Bench(name) => doc("bench", name.as_str(), true, json(&lab.bench(name))),
            Entity::Instrument(name) => doc("instrument", name.as_str(), true, json(&lab.instrument(name))),
            Entity::Loose(seq) => {
                let loose = lab.loose(*seq);
                doc("loose", &format!("{seq:020}"), loose.is_some(), json(&loose))
            }
            Entity::Clock => doc("clock", views::CLOCK, true, json(lab.clock())),
            Entity::Statistics => doc("statistics", views::STATISTICS, true, json(lab.statistics())),
        }
    }

    /// Everything is stored: it may leave.
    fn released(&mut self, effects: &mut Effects) {
        let mut group = std::mem::take(&mut self.group);
        for held in self.held.drain(..) {
            if matches!(held, Held::Stop { .. }) {
                self.stopped = true;
            }
        }
        self.held_since = None;
        self.sign_when_due(&group);
        let seq = self.next_seq - 1;
        effects.confirmed.append(&mut group.confirmed);
        effects.presence |= group.touched.contains(&Entity::Clock);
        effects.retained.extend(self.topics(&group));
        self.live_masses(&mut group.live);
        effects.live.extend(group.live.into_iter().map(|l| (l, seq)));
        for decided in group.facts {
            effects.facts.push((decided.recorded.seq, decided.body));
            effects.recorded.push(decided.recorded);
        }
        let replies = group.answers.into_iter().filter_map(|a| a.reply.map(|r| (r, a.answer)));
        effects.replies.extend(replies);
        if self.mirrored {
            effects.changed.extend(group.touched.iter().filter_map(|e| self.changed(e)));
        }
        self.lab.forget_finished();
    }

    /// A result is worth a signature, and so is the end of a day's work.
    fn sign_when_due(&mut self, group: &Group) {
        let due = |d: &&Decided| matches!(d.recorded.fact, Fact::LimitsComputed { .. } | Fact::ServiceStopped {});
        if let Some(last) = group.facts.iter().rfind(due) {
            let at = last.recorded.at;
            self.sign_head(&at);
        }
    }

    /// Signs where the ledger ends, and keeps that.
    pub(super) fn sign_head(&mut self, at: &Stamp) {
        let Some(key) = &self.setup.key else { return };
        let tail = self.ledger.tail();
        let head =
            HeadText { ledger: tail.id, epoch: tail.epoch, seq: tail.last_seq, hash: tail.last_hash, at_utc_us: at.utc_us };
        let signed = key.sign(&head);
        if let Err(e) = self.ledger.keep_head(&signed) {
            tracing::warn!(error = %e, "a signed head could not be kept; the next one vouches for everything before it as well");
        }
        self.signed = Some(signed);
    }

    fn changed(&self, entity: &Entity) -> Option<Changed> {
        let lab = &self.lab;
        Some(Changed::Entity(Box::new(match entity {
            Entity::Specimen(id) => Loaded::Specimen(Box::new(lab.specimen(id)?.clone())),
            Entity::Container(id) => Loaded::Container(lab.container(id)?.clone()),
            Entity::Bench(name) => Loaded::Bench(lab.bench(name)?.clone()),
            Entity::Instrument(name) => Loaded::Instrument(lab.instrument(name)?.clone()),
            Entity::Statistics => Loaded::Statistics(*lab.statistics()),
            Entity::Clock => Loaded::Clock(lab.clock().clone()),
            Entity::Loose(seq) => match lab.loose(*seq) {
                Some(loose) => Loaded::Loose(loose.clone()),
                None => return Some(Changed::NoLonger(*seq)),
            },
        })))
    }

    /// Topics that have changed with the group.
    fn topics(&mut self, group: &Group) -> Vec<Publish> {
        let seq = self.next_seq - 1;
        let mut topics: BTreeMap<String, Option<Bytes>> = BTreeMap::new();
        for entity in &group.touched {
            if let Some((topic, view)) = views::of(&self.lab, entity, seq) {
                topics.insert(topic, Some(payload(&view)));
            }
        }
        let moved = |e: &Entity| matches!(e, Entity::Specimen(_) | Entity::Container(_) | Entity::Clock);
        if group.touched.iter().any(moved) {
            for bench in self.lab.benches() {
                let view = views::bench(&self.lab, bench, seq);
                topics.insert(format!("bench/{}", bench.name), Some(payload(&view)));
            }
        }
        if let Some(stop) = group.facts.iter().find(|d| matches!(d.recorded.fact, Fact::ServiceStopped {})) {
            topics.insert(String::from("head"), Some(payload(&self.head_view(&stop.recorded.at))));
        }
        for decided in &group.facts {
            if let Fact::LimitsComputed { specimen, .. } = &decided.recorded.fact
                && let Some(view) = self.limits_view(&decided.recorded)
            {
                topics.insert(format!("specimen/{specimen}/limits"), Some(payload(&view)));
                topics.insert(String::from("head"), Some(payload(&self.head_view(&decided.recorded.at))));
            }
        }
        for index in 0..self.ears.len() {
            let name = self.setup.instruments[index].name.clone();
            let topic = format!("instrument/{name}");
            let counted = std::mem::take(&mut self.ears[index].counters_changed) || self.ears[index].shown_long_ago();
            if counted || topics.contains_key(&topic) {
                self.ears[index].counters_shown();
                topics.insert(topic, Some(payload(&self.instrument_view(index))));
            }
        }
        topics.into_iter().map(|(topic, payload)| Publish { topic, payload }).collect()
    }

    /// The latest reading of each balance, when it is new and not too soon after the last shown.
    fn live_masses(&mut self, live: &mut Vec<LiveOut>) {
        const APART_US: i64 = 190_000;
        const AGAIN_US: i64 = 1_000_000;
        for (index, ear) in self.ears.iter_mut().enumerate() {
            let Some((reading, at)) = ear.reading.filter(|_| !ear.stale()) else { continue };
            let due = match &ear.shown {
                None => true,
                Some((shown, when)) => {
                    let age = at.since(when).us;
                    age >= AGAIN_US || (age >= APART_US && *shown != reading)
                }
            };
            if due {
                (ear.shown, ear.on_show) = (Some((reading, at)), true);
                live.push(LiveOut::Mass { instrument: self.setup.instruments[index].name.clone(), reading, at });
            }
        }
    }
}

fn input_rows<'a>(
    instruments: &'a [InstrumentSetup],
    held: &'a [Held],
    texts: &'a [String],
    first: u64,
    lines: usize,
) -> Vec<InputRow<'a>> {
    let name = |i: InstrumentId| instruments[usize::from(i)].name.as_str();
    let mut rows = Vec::with_capacity(lines + held.len());
    let mut no = first;
    for (held, text) in held.iter().zip(texts) {
        let mut reason = None;
        let (kind, at, instrument, bytes) = match held {
            Held::Batch { batch, .. } => {
                no = batch_rows(batch, name(batch.instrument), no, &mut rows);
                continue;
            }
            Held::Overrun { instrument, at, .. } | Held::Port { instrument, at, .. } => {
                (InputKind::Port, at, Some(*instrument), text.as_bytes())
            }
            Held::Flood { instrument, swallowed } => {
                reason = Some(swallowed.reason.word());
                (InputKind::Flood, &swallowed.at, Some(*instrument), text.as_bytes())
            }
            Held::Ask { proven: true, at, .. } => (InputKind::Ask, at, None, text.as_bytes()),
            Held::Ask { body, at, .. } => (InputKind::Ask, at, None, body.as_bytes()),
            Held::Clock { at, .. } => (InputKind::Clock, at, None, text.as_bytes()),
            Held::Timer { at } => (InputKind::Timer, at, None, text.as_bytes()),
            Held::Settings { text, at } => (InputKind::Settings, at, None, text.as_bytes()),
            Held::Start { at, .. } | Held::Stop { at } => (InputKind::Start, at, None, text.as_bytes()),
        };
        let instrument = instrument.map(name);
        rows.push(InputRow { no, at: *at, kind, instrument, bytes, reason });
        no += 1;
    }
    rows
}

fn batch_rows<'a>(batch: &'a Batch, instrument: &'a str, mut no: u64, rows: &mut Vec<InputRow<'a>>) -> u64 {
    let mut begin = 0usize;
    for frame in &batch.frames {
        let bytes = &batch.bytes[begin..frame.end as usize];
        begin = frame.end as usize;
        let (kind, reason) = match &frame.what {
            What::Reject(reason) => (InputKind::Reject, Some(reason.word())),
            _ => (InputKind::Line, None),
        };
        rows.push(InputRow { no, at: frame.at, kind, instrument: Some(instrument), bytes, reason });
        no += 1;
    }
    no
}

fn fact_row(decided: &Decided, through: u64) -> FactRow<'_> {
    let r = &decided.recorded;
    FactRow {
        seq: r.seq,
        at: r.at,
        kind: r.fact.kind(),
        who: r.who.as_ref().map(|w| w.as_str()),
        through: r.through.unwrap_or(through),
        body: &decided.body,
    }
}

fn answer_row(answered: &Answered) -> Option<AnswerRow<'_>> {
    let (client, ask_id, digest) = answered.keep.as_ref()?;
    Some(AnswerRow { client, ask_id, body_digest: *digest, answer: answered.answer.as_bytes() })
}

fn json<T: Serialize>(value: &T) -> Vec<u8> {
    serde_json::to_vec(value).unwrap_or_default()
}

pub(super) fn payload(view: &Value) -> Bytes {
    Bytes::from(view.to_string())
}
