//! From the ledger back to the desk's state: at start-up, and after a commit
//! that failed. One code for both.

use super::ear::{Ear, SenseState};
use super::group::{Answered, Effects, Group, Held, Publish, payload};
use super::{Desk, views};
use crate::ledger::{Asked, Digest, DocumentStored, InputKind, InputStored, Ledger, LedgerError, OpenOptions, Reader, Which};
use serde::de::DeserializeOwned;
use serde_json::Value;
use std::path::Path;
use tarecup_core::fact::Fact;
use tarecup_core::lab::entities::{Container, Entity, Loose, Specimen};
use tarecup_core::lab::statistics::Statistics;
use tarecup_core::lab::{Lab, Loaded, Setup};
use tarecup_core::names::{BenchName, ContainerId, InstrumentName, SpecimenId};
use tarecup_core::sense::{CountLimits, SettleLimits};
use tarecup_core::stamp::{Boot, HOUR_US, Stamp};
use tarecup_drivers::heard::{PortState, What};

/// Lines fed again to a sense at most: far more than any placement or count run needs.
const FED_AGAIN: u64 = 100_000;
/// Rows read at a time.
const PAGE: usize = 1_000;

/// Kind of instrument.
#[derive(Clone, Copy, Debug, PartialEq, Eq, serde::Serialize)]
#[serde(rename_all = "snake_case")]
pub enum Kind {
    /// Shows masses.
    Balance,
    /// Counts drops.
    Counter,
    /// Reads codes.
    Scanner,
}

/// Makes signals of the bytes of a stored line again.
pub type Decode = Box<dyn FnMut(&[u8]) -> What + Send>;

/// An instrument as the desk needs to know it.
pub struct InstrumentSetup {
    /// Its name.
    pub name: InstrumentName,
    /// What it is.
    pub kind: Kind,
    /// Benches it serves.
    pub benches: Vec<BenchName>,
    /// Name of its profile, for people.
    pub profile: String,
    /// Path of its port, for people.
    pub port: String,
    /// Limits of settling.
    pub settle: SettleLimits,
    /// Limits of counting.
    pub count: CountLimits,
    /// It sends all the time, so that silence means something.
    pub streams: bool,
    /// Decodes a stored line.
    pub decode: Decode,
}

/// What the desk is set up as.
pub struct DeskSetup {
    /// The station's name.
    pub station: String,
    /// Where the ledger is, for people.
    pub state_dir: String,
    /// The laboratory.
    pub lab: Setup,
    /// Instruments, in the order of their numbers.
    pub instruments: Vec<InstrumentSetup>,
    /// The settings in full, without secrets.
    pub settings: String,
    /// Finished specimens stay published for so many days.
    pub retain_days: u32,
    /// Signs heads, if anything does.
    pub key: Option<crate::keys::Key>,
}

impl Desk {
    /// Opens the ledger, brings the state back, and records that the service came up.
    pub fn open(
        path: &Path,
        options: OpenOptions,
        setup: DeskSetup,
        now: impl Fn(Boot) -> Stamp,
    ) -> Result<(Desk, Effects), LedgerError> {
        let ledger = Ledger::open(path, options)?;
        let reader = ledger.reader()?;
        let now = now(ledger.tail().boot);
        let mut desk = Desk::blank(ledger, reader, setup, now)?;
        desk.load(now)?;
        let mut effects = Effects::default();
        desk.started(now);
        desk.commit(&mut effects);
        if let Some(why) = desk.not_recording.take() {
            return Err(LedgerError::Misfit { why });
        }
        let mut retained = desk.standing_topics(&now)?;
        retained.append(&mut effects.retained);
        effects.retained = retained;
        effects.presence = true;
        Ok((desk, effects))
    }

    /// A desk that has taken nothing yet.
    pub(super) fn blank(ledger: Ledger, reader: Reader, setup: DeskSetup, now: Stamp) -> Result<Desk, LedgerError> {
        let delivered = reader.cursor("delivered_through")?.unwrap_or(0);
        Ok(Desk {
            lab: Lab::new(setup.lab.clone()),
            setup,
            ledger,
            reader,
            ears: Vec::new(),
            held: Vec::new(),
            held_since: None,
            group: Group::default(),
            next_input: 1,
            next_seq: 1,
            last_fact_input: 1,
            cleaned: now,
            signed: None,
            delivered,
            delivered_stored: delivered,
            broker: None,
            not_recording: None,
            stopped: false,
            beside: std::collections::BTreeMap::new(),
            mirrored: false,
            clock_watch: Default::default(),
            watched: Default::default(),
        })
    }

    /// Facts are known to be delivered through this number.
    pub fn delivered_through(&self) -> u64 {
        self.delivered
    }

    /// The ledger's id and epoch, as payloads name them.
    pub fn ledger_name(&self) -> (String, u64) {
        let tail = self.ledger.tail();
        (tail.id.to_string(), tail.epoch)
    }

    /// Which boot stamps belong to.
    pub fn boot(&self) -> Boot {
        self.ledger.tail().boot
    }

    fn started(&mut self, now: Stamp) {
        let last = self.reader.facts_after((self.next_seq - 1).saturating_sub(1), 1).ok().and_then(|f| f.into_iter().next());
        let latest = self.reader.inputs_from((self.next_input - 1).max(1), 1, None).ok().and_then(|i| i.first().map(|i| i.at));
        let after_orderly_stop = last.is_none_or(|f| f.kind == "service_stopped");
        self.absorb(Held::Start { after_orderly_stop, at: now });
        self.settings_taken(now);
        if let Some(seen) = self.clock_watch.start(latest, &now, self.lab.clock()) {
            self.absorb(Held::Clock { seen, at: now });
        }
    }

    fn settings_taken(&mut self, now: Stamp) {
        let digest = Digest::of(self.setup.settings.as_bytes()).to_string();
        let before = self.reader.latest_fact("settings_taken").ok().flatten();
        if before.is_none_or(|f| !String::from_utf8_lossy(&f.body).contains(&digest)) {
            let text = self.setup.settings.clone();
            self.absorb(Held::Settings { text, at: now });
        }
    }

    /// State, senses and numbers as the ledger has them.
    fn load(&mut self, now: Stamp) -> Result<(), LedgerError> {
        let tail = self.ledger.tail();
        (self.next_input, self.next_seq) = (tail.last_input + 1, tail.last_seq + 1);
        // A start and a recovery are followed by a fact; counting begins there.
        self.last_fact_input = self.next_input;
        self.group = Group::default();
        self.lab = Lab::new(self.setup.lab.clone());
        for (kind, which) in [
            ("container", Which::All),
            ("specimen", Which::Open),
            ("bench", Which::All),
            ("instrument", Which::All),
            ("loose", Which::Open),
            ("clock", Which::All),
        ] {
            self.each_document(kind, which, |desk, stored| desk.load_one(&stored))?;
        }
        self.load_statistics()?;
        for id in self.lab.missing() {
            self.fetch_specimen(&id);
        }
        self.load_senses(now)
    }

    /// What all results say together; of a ledger that has no such document yet, from its results.
    fn load_statistics(&mut self) -> Result<(), LedgerError> {
        if let Some(stored) = self.reader.document("statistics", views::STATISTICS)? {
            self.load_one(&stored);
            return Ok(());
        }
        let mut sums = Statistics::default();
        self.each_document("specimen", Which::All, |_, stored| {
            if let Ok(Some(specimen)) = serde_json::from_slice::<Option<Specimen>>(&stored.body) {
                sums = sums.plus(specimen.limits.as_ref().map_or(Statistics::default(), Statistics::of));
            }
        })?;
        self.lab.load(Loaded::Statistics(sums));
        Ok(())
    }

    fn each_document(
        &mut self,
        kind: &str,
        which: Which,
        mut take: impl FnMut(&mut Self, DocumentStored),
    ) -> Result<(), LedgerError> {
        let mut after = String::new();
        loop {
            let page = self.reader.documents(kind, which, &after, PAGE)?;
            let Some(last) = page.last() else { return Ok(()) };
            after.clone_from(&last.id);
            for stored in page {
                take(self, stored);
            }
        }
    }

    fn load_one(&mut self, stored: &DocumentStored) {
        fn read<T: DeserializeOwned>(stored: &DocumentStored) -> Option<T> {
            match serde_json::from_slice::<Option<T>>(&stored.body) {
                Ok(value) => value,
                Err(e) => {
                    tracing::error!(kind = %stored.kind, id = %stored.id, error = %e, "a document cannot be read; its facts are safe in the ledger");
                    None
                }
            }
        }
        let loaded = match stored.kind.as_str() {
            "specimen" => read(stored).map(|s: Specimen| Loaded::Specimen(Box::new(s))),
            "container" => read(stored).map(|c: Container| Loaded::Container(c)),
            "bench" => read(stored).map(Loaded::Bench),
            "instrument" => read(stored).map(Loaded::Instrument),
            "statistics" => read(stored).map(Loaded::Statistics),
            "clock" => read(stored).map(Loaded::Clock),
            "loose" => read(stored).map(|l: Loose| Loaded::Loose(l)),
            _ => None,
        };
        if let Some(loaded) = loaded {
            self.lab.load(loaded);
        }
    }

    /// Senses as they stood, then fed the lines that came after their last fact.
    fn load_senses(&mut self, now: Stamp) -> Result<(), LedgerError> {
        let mut states = std::collections::BTreeMap::new();
        self.each_document("sense", Which::All, |_, stored| {
            let state: SenseState = serde_json::from_slice(&stored.body).unwrap_or_default();
            states.insert(stored.id, state);
        })?;
        let ears = self.setup.instruments.iter().map(|i| Ear::new(i, states.remove(i.name.as_str()).unwrap_or_default()));
        self.ears = ears.collect();
        let reader = self.ledger.reader()?;
        self.feed_senses(&reader, self.next_input, now)
    }

    /// Feeds the senses what came after their last fact and before the input `before`, in which the service came up.
    pub(super) fn feed_senses(&mut self, reader: &Reader, before: u64, now: Stamp) -> Result<(), LedgerError> {
        let floor = before.saturating_sub(FED_AGAIN);
        let mut from = self.ears.iter().map(|e| e.state.through + 1).min().unwrap_or(before).max(floor);
        let mut last: Option<Stamp> = None;
        while from < before {
            let page = reader.inputs_from(from, PAGE, None)?;
            let Some(end) = page.last() else { break };
            from = end.no + 1;
            for input in page.iter().filter(|i| i.no < before) {
                last = Some(input.at);
                self.feed_again(input);
            }
        }
        if let Some(last) = last {
            let since = last.rfc3339();
            self.ears.iter_mut().for_each(|e| e.service_was_away(&since, now));
        }
        Ok(())
    }

    /// A stored line reaches its sense again. What it leads to is a fact already, or led to none.
    fn feed_again(&mut self, input: &InputStored) {
        let Some(index) = self.setup.instruments.iter().position(|i| Some(i.name.as_str()) == input.instrument.as_deref()) else {
            return;
        };
        if input.no <= self.ears[index].state.through {
            return;
        }
        if matches!(input.kind, InputKind::Line | InputKind::Reject) {
            self.ears[index].last_heard = Some(input.at);
        }
        match input.kind {
            InputKind::Line => {
                if let What::Signal(signal) = (self.setup.instruments[index].decode)(&input.bytes) {
                    let _ = self.ears[index].sense(&signal, input.no, input.at);
                }
            }
            InputKind::Port if input.bytes.ends_with(b"Lost") => self.ears[index].port_again(&PortState::Lost, input.at),
            InputKind::Port if input.bytes.ends_with(b"Opened") => self.ears[index].port_again(&PortState::Opened, input.at),
            _ => (),
        }
    }

    /// Ledger and state anew, then what is held is taken again unless the commit landed after all.
    pub(super) fn reload_and_retake(&mut self, now: Stamp) -> Result<(), LedgerError> {
        let first = self.first_held();
        if !self.reopened_on_reserve()? {
            self.ledger.reopen()?;
        }
        self.reader = self.ledger.reader()?;
        let answers = std::mem::take(&mut self.group.answers);
        let held = std::mem::take(&mut self.held);
        let landed = first.is_some_and(|no| self.ledger.contains_input(no));
        if let Err(e) = self.load(now) {
            (self.held, self.group.answers) = (held, answers);
            return Err(e);
        }
        if landed {
            // Stored after all: only the answers are still owed.
            self.group.answers = answers.into_iter().map(|a| Answered { keep: None, held: false, ..a }).collect();
            return Ok(());
        }
        let (of_held, others): (Vec<Answered>, Vec<Answered>) = answers.into_iter().partition(|a| a.held);
        self.group.answers = others;
        let mut replies = of_held.into_iter();
        for mut one in held {
            if let Held::Ask { reply, .. } = &mut one {
                *reply = replies.next().and_then(|a| a.reply);
            }
            self.absorb(one);
        }
        Ok(())
    }

    fn first_held(&self) -> Option<u64> {
        let before = self.ledger.next_input();
        (!self.held.is_empty()).then_some(before)
    }

    /// Brings a specimen back from the ledger, if it is not at hand.
    pub(super) fn fetch_specimen(&mut self, id: &SpecimenId) {
        if self.lab.specimen(id).is_none()
            && let Ok(Some(stored)) = self.reader.document("specimen", id.as_str())
        {
            self.load_one(&stored);
        }
    }

    /// Brings back what an ask names.
    pub(super) fn fetch_named(&mut self, body: &str) {
        let Ok(Value::Object(ask)) = serde_json::from_str::<Value>(body) else { return };
        for member in ["specimen", "to"] {
            if let Some(id) = ask.get(member).and_then(Value::as_str).and_then(|s| SpecimenId::new(s).ok()) {
                self.fetch_specimen(&id);
            }
        }
        if let Some(text) = ask.get("text").and_then(Value::as_str) {
            self.fetch_code(text);
        }
        for name in ["weighing", "count", "what"] {
            if let Some(seq) = ask.get(name).and_then(Value::as_u64) {
                self.fetch_fact_of(seq);
            }
        }
    }

    /// Brings back the specimen that a code may mean.
    pub(super) fn fetch_code(&mut self, text: &str) {
        let text = text.trim();
        let is_container = ContainerId::new(text).is_ok_and(|c| self.lab.container(&c).is_some());
        if let Ok(id) = SpecimenId::new(text)
            && !is_container
        {
            self.fetch_specimen(&id);
        }
    }

    /// Specimens that a weighing or count was tied to, at first and later.
    fn specimens_of(&self, seq: u64) -> Vec<SpecimenId> {
        let ties = self.reader.facts_naming(seq).unwrap_or_else(|e| {
            tracing::warn!(error = %e, seq, "the ties of a weighing could not be read");
            Vec::new()
        });
        let specimen = |stored: &crate::ledger::FactStored| match serde_json::from_slice::<Fact>(&stored.body) {
            Ok(Fact::Weighed(w)) => w.link.and_then(|l| l.specimen),
            Ok(Fact::WeighingTied { link, .. }) => link.specimen,
            Ok(Fact::Counted(c)) => c.specimen,
            Ok(Fact::CountTied { specimen, .. } | Fact::PenetrationEntered { specimen, .. }) => Some(specimen),
            _ => None,
        };
        let mut all: Vec<SpecimenId> = ties.iter().filter_map(specimen).collect();
        // A determination may have been moved since, and moved on from there.
        let mut n = 0;
        while let Some(from) = all.get(n).cloned() {
            let moves = self.reader.moves_from(from.as_str()).unwrap_or_default();
            let to = moves.iter().filter_map(|stored| match serde_json::from_slice::<Fact>(&stored.body) {
                Ok(Fact::TrialMoved { to, .. }) => Some(to),
                _ => None,
            });
            let new: Vec<SpecimenId> = to.filter(|id| !all.contains(id)).collect();
            all.extend(new);
            n += 1;
        }
        all
    }

    /// Brings back the specimens that a weighing or count belongs to.
    fn fetch_fact_of(&mut self, seq: u64) {
        for id in self.specimens_of(seq) {
            self.fetch_specimen(&id);
        }
        let id = format!("{seq:020}");
        if let Ok(Some(stored)) = self.reader.document("loose", &id) {
            self.load_one(&stored);
        }
    }

    /// The answer that this client already had for this ask id.
    pub(super) fn known_ask(&self, client: &str, id: &str, body: &str) -> Result<Option<String>, String> {
        match self.reader.answer(client, id, &Digest::of(body.as_bytes())) {
            Ok(Asked::New) => Ok(None),
            Ok(Asked::Before(answer)) => Ok(Some(String::from_utf8_lossy(&answer).into_owned())),
            Ok(Asked::Otherwise) => Err(String::from("another ask was made under this id; give each ask an id of its own")),
            Err(e) => Err(e.to_string()),
        }
    }

    /// Everything that stands published: open things first, then finished specimens within their days.
    pub(super) fn standing_topics(&mut self, now: &Stamp) -> Result<Vec<Publish>, LedgerError> {
        let seq = self.next_seq - 1;
        let mut topics: Vec<Publish> = Vec::new();
        let mut put = |topic: String, view: &Value| topics.push(Publish { topic, payload: Some(payload(view)) });
        for index in 0..self.ears.len() {
            put(format!("instrument/{}", self.setup.instruments[index].name), &self.instrument_view(index));
        }
        put(String::from("head"), &self.head_view(now));
        put(String::from("offer"), &self.offer_view(now));
        for bench in self.lab.benches() {
            put(format!("bench/{}", bench.name), &views::bench(&self.lab, bench, seq));
        }
        for entity in self
            .lab
            .specimens()
            .map(|s| Entity::Specimen(s.id.clone()))
            .chain(self.lab.containers().map(|c| Entity::Container(c.id.clone())))
        {
            if let Some((topic, view)) = views::of(&self.lab, &entity, seq) {
                put(topic, &view);
            }
        }
        let mut results = Vec::new();
        self.each_document("specimen", Which::All, |_, stored| results.push(stored))?;
        for stored in results {
            topics.extend(self.result_topics(&stored, now));
        }
        Ok(topics)
    }

    /// Once a day, results that have stood published for their days are taken down.
    pub(super) fn take_down(&mut self, now: &Stamp) -> Result<Vec<Publish>, LedgerError> {
        let mut topics = Vec::new();
        self.each_document("specimen", Which::All, |desk, stored| {
            topics.extend(desk.result_topics(&stored, now).into_iter().filter(|p| p.payload.is_none()));
        })?;
        Ok(topics)
    }

    fn result_topics(&self, document: &DocumentStored, now: &Stamp) -> Vec<Publish> {
        let Ok(Some(specimen)) = serde_json::from_slice::<Option<Specimen>>(&document.body) else { return Vec::new() };
        let Some(limits) = &specimen.limits else { return Vec::new() };
        let fact = self.reader.fact(document.seq).ok().flatten();
        let age_us = fact.as_ref().map_or(0, |f| now.utc_us - f.at.utc_us);
        let topic = format!("specimen/{}/limits", specimen.id);
        let (at, hash) = fact.map_or((None, None), |f| (Some(f.at.rfc3339()), Some(f.hash.to_string())));
        let over = !specimen.open() && age_us > i64::from(self.setup.retain_days) * 24 * HOUR_US;
        if over {
            return [topic, format!("specimen/{}", specimen.id)]
                .into_iter()
                .map(|topic| Publish { topic, payload: None })
                .collect();
        }
        let (ledger, epoch) = self.ledger_name();
        let ledger = serde_json::json!({"id": ledger, "epoch": epoch, "seq": document.seq, "hash": hash});
        let view = views::limits(limits, specimen.revision, document.seq, at, &[], ledger);
        let mut topics = vec![Publish { topic, payload: Some(payload(&view)) }];
        if !specimen.open() {
            let view = views::specimen(&specimen, document.seq);
            topics.push(Publish { topic: format!("specimen/{}", specimen.id), payload: Some(payload(&view)) });
        }
        topics
    }
}
