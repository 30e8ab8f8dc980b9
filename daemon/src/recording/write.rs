//! Writes a recording beside the service. Ports and asks only put what they
//! have into a bounded queue; a thread writes it. What finds no room, in the
//! queue or on the disk, is counted, and the service goes on.

use super::{AskLine, FORMAT, Head, Line, VERSION, asks_path, head_path, said_path};
use crate::asks;
use crate::desk::inbox::Inbox;
use serde::{Deserialize, Serialize};
use serde_json::{Value, json};
use std::collections::BTreeMap;
use std::fs::File;
use std::io::{Seek, SeekFrom, Write};
use std::path::{Path, PathBuf};
use std::sync::{Arc, Condvar, Mutex, PoisonError};
use std::thread::JoinHandle;
use std::time::{Duration, Instant};
use tarecup_core::stamp::Stamp;
use tarecup_drivers::heard::{Batch, Clock, Deliver, InstrumentId, PortState, Reject, What};
use tarecup_drivers::port::serial::Overhear;

/// Bytes that may wait to be written.
const WAITING_MOST: usize = 4 << 20;
/// What a recording may grow to.
const ALL_MOST: u64 = 1 << 30;
/// What a recording of bytes that nobody understood may grow to.
const UNREAD_MOST: u64 = 16 << 20;
/// How often waiting lines are written, and how it does is told.
const EVERY: Duration = Duration::from_millis(250);
/// After trouble with the disk, so long until the next attempt.
const TRY_AGAIN: Duration = Duration::from_secs(5);

/// What of all that is heard is kept.
#[derive(Clone, Copy, Debug, PartialEq, Eq, Serialize, Deserialize)]
#[serde(rename_all = "snake_case")]
pub enum Kept {
    /// All bytes and all asks.
    Everything,
    /// Bytes that were not understood.
    Unread,
}

enum Entry {
    Said { id: InstrumentId, bytes: Vec<u8>, quiet: Option<bool>, at: Stamp },
    State { id: InstrumentId, state: PortState, at: Stamp },
    Unread { id: InstrumentId, bytes: Vec<u8>, reject: Reject, at: Stamp },
    Ask { client: String, body: String, at: Stamp },
}

impl Entry {
    fn cost(&self) -> usize {
        64 + match self {
            Self::Said { bytes, .. } | Self::Unread { bytes, .. } => bytes.len(),
            Self::State { .. } => 64,
            Self::Ask { client, body, .. } => client.len() + body.len(),
        }
    }
}

#[derive(Default)]
struct Waiting {
    entries: Vec<Entry>,
    bytes: usize,
    lost: u64,
    stop: bool,
}

#[derive(Default)]
struct Queue {
    waiting: Mutex<Waiting>,
    wake: Condvar,
}

/// A recording that is being made.
pub struct Recorder {
    queue: Arc<Queue>,
    kept: Kept,
    clock: Arc<dyn Clock>,
    thread: Mutex<Option<JoinHandle<()>>>,
}

impl Recorder {
    /// Makes the folder and begins. `names` are those of the instruments, in the order of their numbers.
    ///
    /// # Errors
    /// A sentence: the folder cannot be made, or holds a recording already.
    pub fn start(
        folder: &Path,
        kept: Kept,
        names: Vec<String>,
        settings: &str,
        clock: Arc<dyn Clock>,
        inbox: Arc<Inbox>,
    ) -> Result<Arc<Self>, String> {
        let trouble = |e: &dyn std::fmt::Display| format!("{}: {e}; name another folder to record to", folder.display());
        let began = clock.now();
        std::fs::create_dir_all(folder).map_err(|e| trouble(&e))?;
        if head_path(folder).exists() {
            return Err(trouble(&"there is a recording already"));
        }
        let head = Head {
            format: FORMAT.into(),
            v: VERSION,
            program: env!("CARGO_PKG_VERSION").into(),
            began_utc_us: began.utc_us,
            began: began.rfc3339(),
            kept,
            settings: serde_json::from_str(settings).map_err(|e| trouble(&e))?,
        };
        let text = serde_json::to_vec_pretty(&head).map_err(|e| trouble(&e))?;
        std::fs::write(head_path(folder), text).map_err(|e| trouble(&e))?;
        let queue: Arc<Queue> = Arc::default();
        let most = if kept == Kept::Everything { ALL_MOST } else { UNREAD_MOST };
        let writer = Writer::new(folder, kept, names, began, most, inbox);
        let work = Arc::clone(&queue);
        let thread = std::thread::Builder::new().name("recording".into()).spawn(move || writer.work(&work));
        let thread = thread.map_err(|e| trouble(&e))?;
        Ok(Arc::new(Self { queue, kept, clock, thread: Mutex::new(Some(thread)) }))
    }

    fn put(&self, entry: Entry) {
        let mut waiting = self.queue.waiting.lock().unwrap_or_else(PoisonError::into_inner);
        let cost = entry.cost();
        if waiting.bytes + cost > WAITING_MOST {
            waiting.lost += 1;
        } else {
            waiting.bytes += cost;
            waiting.entries.push(entry);
        }
    }

    /// Keeps an ask, as it came in.
    pub fn asked(&self, client: &str, body: &str) {
        if self.kept == Kept::Everything {
            self.put(Entry::Ask { client: client.into(), body: body.into(), at: self.clock.now() });
        }
    }

    /// Writes what waits and ends.
    pub fn stop(&self) {
        self.queue.waiting.lock().unwrap_or_else(PoisonError::into_inner).stop = true;
        self.queue.wake.notify_one();
        if let Some(thread) = self.thread.lock().unwrap_or_else(PoisonError::into_inner).take() {
            let _ = thread.join();
        }
    }
}

impl Overhear for Recorder {
    fn said(&self, id: InstrumentId, bytes: &[u8], quiet: Option<bool>, at: Stamp) {
        if self.kept == Kept::Everything {
            self.put(Entry::Said { id, bytes: bytes.to_vec(), quiet, at });
        }
    }
}

/// Passes on what ports deliver, and keeps what belongs into recordings.
pub struct Beside {
    /// Who takes it.
    pub inner: Arc<dyn Deliver>,
    /// Who records.
    pub recorders: Vec<Arc<Recorder>>,
}

impl Deliver for Beside {
    fn heard(&self, batch: Batch) -> Result<(), Batch> {
        let unread = self.recorders.iter().find(|r| r.kept == Kept::Unread);
        let rejects = unread.map(|r| (r, rejects_of(&batch)));
        self.inner.heard(batch)?;
        if let Some((recorder, rejects)) = rejects {
            rejects.into_iter().for_each(|entry| recorder.put(entry));
        }
        Ok(())
    }
    fn overrun(&self, instrument: InstrumentId, lines: u64, at: Stamp) {
        self.inner.overrun(instrument, lines, at);
    }
    fn state(&self, id: InstrumentId, state: PortState, at: Stamp) {
        for recorder in self.recorders.iter().filter(|r| r.kept == Kept::Everything) {
            recorder.put(Entry::State { id, state: state.clone(), at });
        }
        self.inner.state(id, state, at);
    }
}

fn rejects_of(batch: &Batch) -> Vec<Entry> {
    let mut begin = 0usize;
    let mut rejects = Vec::new();
    for frame in &batch.frames {
        let bytes = begin..frame.end as usize;
        begin = frame.end as usize;
        // The first line after an opening is seldom whole: that says nothing of the profile.
        if let What::Reject(reject) = frame.what
            && reject != Reject::FirstPartial
        {
            rejects.push(Entry::Unread { id: batch.instrument, bytes: batch.bytes[bytes].to_vec(), reject, at: frame.at });
        }
    }
    rejects
}

/// One open file, and how much of it holds whole lines.
struct Sheet {
    file: File,
    whole: u64,
}

struct Writer {
    folder: PathBuf,
    kept: Kept,
    names: Vec<String>,
    began: Stamp,
    most: u64,
    inbox: Arc<Inbox>,
    sheets: BTreeMap<PathBuf, Sheet>,
    written: u64,
    lost: u64,
    /// Lost since the last line that says so.
    untold: u64,
    full: bool,
    trouble: Option<(String, Instant)>,
    told: Option<Value>,
}

impl Writer {
    fn new(folder: &Path, kept: Kept, names: Vec<String>, began: Stamp, most: u64, inbox: Arc<Inbox>) -> Self {
        let folder = std::path::absolute(folder).unwrap_or_else(|_| folder.to_path_buf());
        let (sheets, trouble, told) = (BTreeMap::new(), None, None);
        Self { folder, kept, names, began, most, inbox, sheets, written: 0, lost: 0, untold: 0, full: false, trouble, told }
    }

    fn work(mut self, queue: &Queue) {
        loop {
            let mut waiting = queue.waiting.lock().unwrap_or_else(PoisonError::into_inner);
            // Ports do not wake this thread: it looks by itself.
            if !waiting.stop {
                waiting = queue.wake.wait_timeout(waiting, EVERY).unwrap_or_else(PoisonError::into_inner).0;
            }
            let (entries, stop) = (std::mem::take(&mut waiting.entries), waiting.stop);
            waiting.bytes = 0;
            self.count_lost(std::mem::take(&mut waiting.lost));
            drop(waiting);
            self.write(&entries);
            self.tell();
            if stop {
                return;
            }
        }
    }

    fn count_lost(&mut self, lost: u64) {
        self.lost += lost;
        self.untold += lost;
    }

    fn write(&mut self, entries: &[Entry]) {
        let mut pages: BTreeMap<PathBuf, String> = BTreeMap::new();
        let mut lines = 0;
        for entry in entries {
            let before = std::mem::take(&mut self.untold);
            for (path, text) in self.lines(entry, before) {
                let page = pages.entry(path).or_default();
                page.push_str(&text);
                page.push('\n');
            }
            lines += 1;
        }
        let bytes: u64 = pages.values().map(|p| p.len() as u64).sum();
        self.full |= self.written + bytes > self.most;
        if self.full || self.trouble.as_ref().is_some_and(|(_, at)| at.elapsed() < TRY_AGAIN) {
            return self.count_lost(lines);
        }
        let outcome = pages.iter().try_for_each(|(path, text)| self.append(path, text.as_bytes()));
        match outcome {
            Ok(()) if lines > 0 => self.trouble = None,
            Ok(()) => (),
            Err(e) => {
                tracing::warn!(folder = %self.folder.display(), error = %e, "the recording cannot be written; the service goes on");
                self.trouble = Some((e.to_string(), Instant::now()));
                self.count_lost(lines);
            }
        }
    }

    /// Appends whole lines; of a write that failed nothing stays.
    fn append(&mut self, path: &Path, text: &[u8]) -> std::io::Result<()> {
        if !self.sheets.contains_key(path) {
            let file = File::options().create(true).append(true).open(path)?;
            let whole = file.metadata()?.len();
            self.sheets.insert(path.to_path_buf(), Sheet { file, whole });
        }
        let Some(sheet) = self.sheets.get_mut(path) else { return Ok(()) };
        match sheet.file.write_all(text) {
            Ok(()) => {
                sheet.whole += text.len() as u64;
                self.written += text.len() as u64;
                Ok(())
            }
            Err(e) => {
                let _ = sheet.file.set_len(sheet.whole);
                let _ = sheet.file.seek(SeekFrom::End(0));
                Err(e)
            }
        }
    }

    /// The lines of an entry, each with its file.
    fn lines(&self, entry: &Entry, lost: u64) -> Vec<(PathBuf, String)> {
        let name = |id: InstrumentId| self.names.get(usize::from(id)).map_or("unknown", String::as_str);
        let line = |at: &Stamp| Line { t: self.t(at), lost: (lost > 0).then_some(lost), ..Line::default() };
        let (id, lines) = match entry {
            Entry::Said { id, bytes, quiet, at } => (*id, vec![Line { quiet: *quiet, ..line(at) }.with_bytes(bytes)]),
            Entry::State { id, state, at } => (*id, vec![line(at).with_state(state)]),
            // Played again, the bytes must begin and end as they did.
            Entry::Unread { id, bytes, reject, at } => {
                let opened = line(at).with_state(&PortState::Opened);
                let said = Line { quiet: Some(true), reject: Some(reject.word().into()), t: self.t(at), ..Line::default() };
                (*id, vec![opened, said.with_bytes(bytes)])
            }
            Entry::Ask { client, body, at } => {
                return self.ask(client, body, at).map(|text| (asks_path(&self.folder), text)).into_iter().collect();
            }
        };
        let path = said_path(&self.folder, name(id));
        lines.iter().map(|l| (path.clone(), serde_json::to_string(l).unwrap_or_default())).collect()
    }

    /// Only what may change something is worth keeping; proofs of who asks are not kept.
    fn ask(&self, client: &str, body: &str, at: &Stamp) -> Option<String> {
        let asked = asks::parse(body).ok().filter(|a| !matches!(a.wanted, asks::Wanted::Read(_)))?;
        let mut ask = asked.body;
        if let Value::Object(members) = &mut ask {
            ["pin", "password", "secret", "key"].iter().for_each(|k| drop(members.remove(*k)));
        }
        serde_json::to_string(&AskLine { t: self.t(at), client: client.into(), ask }).ok()
    }

    fn t(&self, at: &Stamp) -> i64 {
        at.since(&self.began).us
    }

    /// Tells the status how the recording does, when that has changed for the worse or better.
    fn tell(&mut self) {
        let trouble = match (&self.trouble, self.full) {
            (Some((why, _)), _) => Some(why.clone()),
            (None, true) => Some(format!("it has reached {} MB and takes no more; record to another folder", self.most >> 20)),
            (None, false) => None,
        };
        let says = json!({"folder": self.folder.display().to_string(), "lost": self.lost, "trouble": trouble});
        if self.told.as_ref() != Some(&says) {
            if self.full && self.told.as_ref().is_some_and(|t| t["trouble"].is_null()) {
                tracing::warn!(folder = %self.folder.display(), "the recording is full; the service goes on");
            }
            self.inbox.note(if self.kept == Kept::Everything { "recording" } else { "unread" }, says.clone());
            self.told = Some(says);
        }
    }
}
