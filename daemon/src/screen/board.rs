//! What every browser sees: a mirror of the laboratory, and the parts of the
//! pages that are being watched.
//!
//! Each watched page is made once after each change, however many browsers
//! watch it. A browser is told that there is something newer than what it has;
//! one that is slow skips what lay between. Nothing is queued for it.

use super::fill::{self, Around, Heard};
use super::mailbox::{Mailbox, News};
use super::record::{self, Record};
use super::words::ENGLISH;
use super::{pages, view};
use crate::backup::Note;
use crate::clock::BootClock;
use crate::desk::{Changed, LiveOut};
use maud::Markup;
use serde_json::{Value, json};
use std::collections::{BTreeMap, BTreeSet};
use std::path::PathBuf;
use std::sync::atomic::{AtomicBool, AtomicU64, Ordering};
use std::sync::{Arc, Mutex, MutexGuard, PoisonError, RwLock};
use std::time::Duration;
use tarecup_core::lab::Lab;
use tarecup_core::names::{BenchName, InstrumentName, SpecimenId};
use tarecup_core::signal::{Mark, Reading};
use tarecup_core::stamp::{Stamp, rfc3339};
use tokio::sync::watch;
use tokio::time::Instant;

/// After a page was made it is not made again before this time: at most ten times a second.
const PACE: Duration = Duration::from_millis(95);
/// What changes with time alone is made anew at this interval.
const TIME_SHOWS: Duration = Duration::from_secs(5);
/// Finished specimens that the mirror keeps at hand.
const FINISHED_KEPT: usize = 300;

/// Specimens whose record is kept at hand.
const RECORDS_KEPT: usize = 20;

/// A page that changes while it is open.
#[derive(Clone, Debug, PartialEq, Eq, PartialOrd, Ord)]
pub enum Page {
    /// A bench.
    Bench(BenchName),
    /// The oven shelf.
    Shelf,
    /// Things tied to nothing.
    Loose,
    /// A specimen.
    Specimen(SpecimenId),
    /// The laboratory.
    Laboratory,
}

impl Page {
    /// The page of a word and an identifier, as `/events` names it.
    pub fn named(word: &str, id: Option<&str>) -> Option<Page> {
        Some(match (word, id) {
            ("bench", Some(name)) => Page::Bench(BenchName::new(name).ok()?),
            ("specimen", Some(id)) => Page::Specimen(SpecimenId::new(id).ok()?),
            ("shelf", None) => Page::Shelf,
            ("loose", None) => Page::Loose,
            ("laboratory" | "lab", None) => Page::Laboratory,
            _ => return None,
        })
    }
}

/// A page as one person sees it: who is signed in at the screen shows on it.
#[derive(Clone, Debug, PartialEq, Eq, PartialOrd, Ord)]
pub struct Seen {
    /// The page.
    pub page: Page,
    /// Who is signed in at the screen.
    pub who: Option<String>,
    /// Their PIN was given a short time ago.
    pub proven: bool,
}

/// A part of a page.
#[derive(Clone, Debug)]
pub struct Region {
    /// Its name.
    pub name: &'static str,
    /// What stands there.
    pub html: Arc<str>,
    /// When it was last made anew, in steps of the board.
    pub version: u64,
    /// The fact it reflects.
    pub seq: u64,
}

impl Region {
    /// Its element has this behind `region-` as id.
    pub fn id(&self) -> &'static str {
        self.name
    }
}

/// A page that somebody watches.
pub struct Watched {
    regions: Mutex<Vec<Region>>,
    newest: watch::Sender<u64>,
}

impl Watched {
    /// Parts that are newer than a version.
    pub fn newer_than(&self, version: u64) -> Vec<Region> {
        lock(&self.regions).iter().filter(|r| r.version > version).cloned().collect()
    }

    /// Tells of newer versions.
    pub fn subscribe(&self) -> watch::Receiver<u64> {
        self.newest.subscribe()
    }
}

/// The latest reading or drop of an instrument.
#[derive(Clone, Debug)]
pub struct Live {
    /// When it came, in steps of the board.
    pub version: u64,
    /// As it is sent.
    pub text: Arc<str>,
}

/// The mirror.
pub struct Mirror {
    /// The laboratory.
    pub lab: Lab,
    /// Instruments as they are published.
    pub instruments: BTreeMap<InstrumentName, Value>,
    heard: BTreeMap<InstrumentName, Heard>,
    /// Why nothing is recorded.
    pub not_recording: Option<String>,
    /// The last fact.
    pub seq: u64,
}

/// What is the same for as long as the service runs.
pub struct Fixed {
    /// Name of the laboratory.
    pub lab: String,
    /// Name of the station.
    pub station: String,
    /// Tells this start from others.
    pub start: String,
    /// Where the ledger lies.
    pub state_dir: PathBuf,
}

/// The board.
pub struct Board {
    /// What the desk hands over.
    pub mailbox: Mailbox,
    /// What stays.
    pub fixed: Fixed,
    mirror: RwLock<Mirror>,
    watched: Mutex<BTreeMap<Seen, Arc<Watched>>>,
    live: Mutex<BTreeMap<String, Live>>,
    live_newest: watch::Sender<u64>,
    version: AtomicU64,
    clock: Arc<dyn BootClock>,
    /// What the ledger tells of the specimens whose pages are open.
    records: Mutex<BTreeMap<SpecimenId, Record>>,
    /// Oven temperature for the next containers.
    celsius: Mutex<Option<f64>>,
    /// The desk has not answered for a while.
    silent: AtomicBool,
}

fn lock<T>(mutex: &Mutex<T>) -> MutexGuard<'_, T> {
    mutex.lock().unwrap_or_else(PoisonError::into_inner)
}

impl Board {
    /// A board that mirrors this laboratory.
    pub fn new(fixed: Fixed, lab: Lab, instruments: Vec<Value>, seq: u64, clock: Arc<dyn BootClock>) -> Arc<Self> {
        let mut mirror = Mirror { lab, instruments: BTreeMap::new(), heard: BTreeMap::new(), not_recording: None, seq };
        for view in instruments {
            mirror.instrument(view);
        }
        Arc::new(Self {
            mailbox: Mailbox::default(),
            fixed,
            mirror: RwLock::new(mirror),
            watched: Mutex::default(),
            live: Mutex::default(),
            live_newest: watch::Sender::new(0),
            version: AtomicU64::new(1),
            clock,
            records: Mutex::default(),
            celsius: Mutex::default(),
            silent: AtomicBool::new(false),
        })
    }

    /// The time of the service.
    pub fn now(&self) -> Stamp {
        self.clock.now()
    }

    /// Looks at the mirror.
    pub fn look<T>(&self, at: impl FnOnce(&Mirror) -> T) -> T {
        at(&self.mirror.read().unwrap_or_else(PoisonError::into_inner))
    }

    /// Puts a specimen that came from the ledger into the mirror, until it is forgotten again.
    pub fn remember(&self, loaded: tarecup_core::lab::Loaded) {
        self.mirror.write().unwrap_or_else(PoisonError::into_inner).lab.load(loaded);
    }

    /// Why nothing is being recorded, as far as the screen can know.
    pub fn not_recording(&self) -> Option<String> {
        let said = self.look(|m| m.not_recording.clone());
        let silent = self.silent.load(Ordering::Relaxed);
        said.or_else(|| silent.then(|| String::from("the desk does not answer; look at the log and at the disk")))
    }

    /// Whether anybody watches a page.
    pub fn is_watched(&self) -> bool {
        lock(&self.watched).values().any(|w| Arc::strong_count(w) > 1)
    }

    /// From now on containers go into an oven of this temperature unless somebody says otherwise.
    pub fn set_celsius(&self, celsius: f64) {
        *lock(&self.celsius) = Some(celsius);
    }

    /// Reads what the ledger tells of a specimen, unless that is known already.
    pub async fn read_record(&self, id: &SpecimenId) -> Record {
        let (seq, begins) = self.look(|m| (m.seq, m.lab.specimen(id).and_then(record::begins)));
        if let Some(known) = lock(&self.records).get(id).filter(|r| r.through >= seq) {
            return known.clone();
        }
        let (dir, key, now) = (self.fixed.state_dir.clone(), id.clone(), self.clock.now());
        let read = tokio::task::spawn_blocking(move || record::read(&dir, &key, begins, &now)).await;
        let record = match read {
            Ok(Ok(record)) => record,
            Ok(Err(says)) => {
                tracing::warn!(%says, "the history of {id} could not be read");
                return Record::default();
            }
            Err(_) => return Record::default(),
        };
        let mut records = lock(&self.records);
        while records.len() >= RECORDS_KEPT {
            records.pop_first();
        }
        records.insert(id.clone(), record.clone());
        record
    }

    /// Specimens whose pages are open, each with its record brought up to date.
    async fn read_records(&self) {
        let open: BTreeSet<SpecimenId> = lock(&self.watched)
            .iter()
            .filter(|(_, w)| Arc::strong_count(w) > 1)
            .filter_map(|(s, _)| match &s.page {
                Page::Specimen(id) => Some(id.clone()),
                _ => None,
            })
            .collect();
        for id in &open {
            self.read_record(id).await;
        }
    }

    /// Notes whether the desk answers.
    pub fn desk_answers(&self, answers: bool) {
        let was = self.silent.swap(!answers, Ordering::Relaxed);
        if was == answers {
            self.make_all();
        }
    }

    /// What stands around a page and in the mirror beside the laboratory.
    pub fn around(&self, mirror: &Mirror, seen: &Seen) -> Around {
        let silent = self.silent.load(Ordering::Relaxed);
        let not_recording =
            mirror.not_recording.clone().or_else(|| silent.then(|| String::from("the desk does not answer; look at the log")));
        let bench = match &seen.page {
            Page::Bench(name) => Some(name.to_string()),
            _ => None,
        };
        let record = match &seen.page {
            Page::Specimen(id) => lock(&self.records).get(id).cloned().unwrap_or_default(),
            _ => Record::default(),
        };
        Around {
            frame: view::Frame {
                lab: self.fixed.lab.clone(),
                station: self.fixed.station.clone(),
                bench,
                who: seen.who.clone(),
                asks_pin: !seen.proven,
                not_recording,
                seq: mirror.seq,
                now: self.clock.now().rfc3339(),
                ..view::Frame::default()
            },
            instruments: mirror.heard.clone(),
            history: record.history,
            head: record.head,
            celsius: *lock(&self.celsius),
            backup_proven: match &seen.page {
                Page::Laboratory => Note::read(&self.fixed.state_dir).at_utc_us.map(rfc3339),
                _ => None,
            },
            ..Around::default()
        }
    }

    /// The parts of a page; `None` when there is no such page.
    fn parts(&self, mirror: &Mirror, seen: &Seen) -> Option<Vec<(&'static str, Markup)>> {
        let (around, now, words) = (self.around(mirror, seen), self.clock.now(), &ENGLISH);
        Some(match &seen.page {
            Page::Bench(name) => pages::regions::bench(&fill::bench(&mirror.lab, name, &now, &around)?, words),
            Page::Shelf => pages::regions::shelf(&fill::shelf(&mirror.lab, &now, &around), words),
            Page::Loose => pages::regions::loose(&fill::loose(&mirror.lab, &now, &around), words),
            Page::Specimen(id) => pages::regions::specimen(&fill::specimen(&mirror.lab, id, &now, &around)?, words),
            Page::Laboratory => pages::regions::laboratory(&fill::laboratory(&mirror.lab, &now, &around), words),
        })
    }

    /// Begins to watch a page; `None` when there is no such page.
    pub fn watch(&self, seen: Seen) -> Option<Arc<Watched>> {
        let mirror = self.mirror.read().unwrap_or_else(PoisonError::into_inner);
        let mut all = lock(&self.watched);
        let watched = match all.get(&seen) {
            Some(watched) => Arc::clone(watched),
            None => {
                let fresh = Arc::new(Watched { regions: Mutex::default(), newest: watch::Sender::new(0) });
                all.insert(seen.clone(), Arc::clone(&fresh));
                fresh
            }
        };
        if !self.make(&mirror, &seen, &watched) {
            all.remove(&seen);
            return None;
        }
        Some(watched)
    }

    /// Makes a page anew; false when there is no such page.
    fn make(&self, mirror: &Mirror, seen: &Seen, watched: &Watched) -> bool {
        let Some(parts) = self.parts(mirror, seen) else { return false };
        let version = 1 + self.version.fetch_add(1, Ordering::Relaxed);
        let mut regions = lock(&watched.regions);
        let mut newer = false;
        for (name, markup) in parts {
            let html = markup.into_string();
            match regions.iter_mut().find(|r| r.name == name) {
                Some(old) if *old.html == *html => (),
                Some(old) => {
                    *old = Region { name, html: html.into(), version, seq: mirror.seq };
                    newer = true;
                }
                None => {
                    regions.push(Region { name, html: html.into(), version, seq: mirror.seq });
                    newer = true;
                }
            }
        }
        drop(regions);
        if newer {
            watched.newest.send_replace(version);
        }
        true
    }

    /// Makes every watched page anew; lets go of those that nobody watches.
    fn make_all(&self) {
        let mirror = self.mirror.read().unwrap_or_else(PoisonError::into_inner);
        let mut all = lock(&self.watched);
        all.retain(|_, w| Arc::strong_count(w) > 1);
        for (seen, watched) in all.iter() {
            self.make(&mirror, seen, watched);
        }
    }

    /// Readings and drops newer than a version, of the instruments that `of` names.
    pub fn live_since(&self, version: u64, of: impl Fn(&str) -> bool) -> Vec<Live> {
        lock(&self.live).iter().filter(|(name, l)| l.version > version && of(name)).map(|(_, l)| l.clone()).collect()
    }

    /// Tells of newer readings and drops.
    pub fn live_newest(&self) -> watch::Receiver<u64> {
        self.live_newest.subscribe()
    }

    /// Takes what the desk has handed over.
    fn take(&self, news: News) {
        let mut mirror = self.mirror.write().unwrap_or_else(PoisonError::into_inner);
        mirror.seq = mirror.seq.max(news.seq);
        if let Some(lab) = news.whole {
            mirror.lab = *lab;
        }
        for changed in news.entities.into_values() {
            match changed {
                Changed::Entity(loaded) => mirror.lab.load(*loaded),
                Changed::NoLonger(seq) => mirror.lab.unload_loose(seq),
                Changed::Whole(_) => (),
            }
        }
        if mirror.lab.specimens().filter(|s| !s.open()).count() > FINISHED_KEPT {
            mirror.lab.forget_finished();
        }
        for body in news.instruments.into_values() {
            mirror.instrument(serde_json::from_slice(&body).unwrap_or_default());
        }
        if let Some(recording) = news.recording {
            mirror.not_recording = recording;
        }
        let seq = mirror.seq;
        let ended = news.ended;
        for (name, live) in news.live {
            mirror.live(&live);
            let version = 1 + self.version.fetch_add(1, Ordering::Relaxed);
            lock(&self.live).insert(name, Live { version, text: live_text(&live, seq).into() });
            self.live_newest.send_replace(version);
        }
        for name in ended {
            if let Some(heard) = mirror.heard.get_mut(&name) {
                heard.running = false;
            }
        }
    }

    /// Follows the desk until the task is dropped: readings and drops at once, pages at most ten times a second.
    pub async fn follow(self: Arc<Self>) {
        let mut time = tokio::time::interval(TIME_SHOWS);
        let (mut due, mut next) = (false, Instant::now());
        loop {
            tokio::select! {
                () = self.mailbox.wake.notified() => {
                    let news = self.mailbox.take();
                    due |= news.shows();
                    self.take(news);
                }
                _ = time.tick() => {
                    self.read_records().await;
                    due = true;
                }
                () = tokio::time::sleep_until(next), if due => (),
            }
            if due && Instant::now() >= next {
                self.make_all();
                (due, next) = (false, Instant::now() + PACE);
            }
        }
    }
}

impl Mirror {
    fn instrument(&mut self, view: Value) {
        let Some(name) = view["instrument"].as_str().and_then(|n| InstrumentName::new(n).ok()) else { return };
        let heard = self.heard.entry(name.clone()).or_default();
        heard.kind = match view["kind"].as_str() {
            Some("balance") => "balance",
            Some("counter") => "counter",
            _ => "scanner",
        };
        let utc_us = view["last_heard"].as_str().and_then(tarecup_core::stamp::parse_rfc3339);
        heard.last_heard = utc_us.map(|utc_us| Stamp { utc_us, ..heard.last_heard.unwrap_or_default() });
        heard.rejects = view["rejects"].as_object().into_iter().flatten().filter_map(|(_, n)| n.as_u64()).sum();
        self.instruments.insert(name, view);
    }

    fn live(&mut self, live: &LiveOut) {
        match live {
            LiveOut::Mass { instrument, reading, at } => {
                let heard = self.heard.entry(instrument.clone()).or_default();
                let steady = match reading.mark {
                    Mark::Steady => view::Steady::Steady,
                    Mark::Moving => view::Steady::Moving,
                    Mark::Unmarked => view::Steady::Unmarked,
                };
                heard.reading = Some(view::Reading { mass_g: printed(reading), steady });
                heard.last_heard = Some(*at);
            }
            LiveOut::Drop { instrument, drops, rate_per_s, at } => {
                let heard = self.heard.entry(instrument.clone()).or_default();
                heard.drops = Some((*drops, *rate_per_s));
                heard.running = true;
                heard.last_heard = Some(*at);
            }
            // How it is connected comes with its view; the page then shows the reading as an old one.
            LiveOut::Stale { .. } => (),
        }
    }
}

/// A reading or a drop as browsers get it.
fn live_text(live: &LiveOut, seq: u64) -> String {
    match live {
        LiveOut::Mass { instrument, reading, at } => json!({
            "instrument": instrument, "mass_g": printed(reading), "steady": reading.mark, "basis": reading.basis,
            "at": at.rfc3339(), "seq": seq,
        }),
        LiveOut::Drop { instrument, drops, rate_per_s, at } => json!({
            "instrument": instrument, "drops": drops, "rate_per_s": rate_per_s, "at": at.rfc3339(), "seq": seq,
        }),
        LiveOut::Stale { instrument, at, .. } => json!({
            "instrument": instrument, "stale": true, "at": at.rfc3339(), "seq": seq,
        }),
    }
    .to_string()
}

/// The mass with as many decimals as the balance prints.
fn printed(reading: &Reading) -> String {
    let text = reading.mass.to_string();
    let step = reading.step.ug().unsigned_abs().max(1);
    let decimals = 6usize.saturating_sub(step.ilog10() as usize);
    let has = text.split_once('.').map_or(0, |(_, part)| part.len());
    text + &"0".repeat(decimals.saturating_sub(has))
}
