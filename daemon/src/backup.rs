//! Backups: named, counted, and remembered with the time of the last proven one.

use crate::ledger::{self, LedgerError, Progress, Proven, Reader};
use serde::{Deserialize, Serialize};
use std::path::{Path, PathBuf};
use std::sync::Arc;
use std::sync::mpsc::{RecvTimeoutError, Sender, channel};
use std::thread::JoinHandle;
use std::time::Duration;
use tarecup_core::stamp::{HOUR_US, rfc3339};
use tarecup_drivers::heard::Clock;

/// What is known of backups lies here, in the state directory.
const NOTE: &str = "backups.json";
/// How often it is looked whether one is due.
const LOOK: Duration = Duration::from_secs(30);

/// What is known of backups.
#[derive(Clone, Debug, Default, PartialEq, Eq, Serialize, Deserialize)]
pub struct Note {
    /// When the last proven one was begun, microseconds.
    pub at_utc_us: Option<i64>,
    /// Its file.
    pub file: Option<PathBuf>,
    /// The last fact in it.
    pub seq: Option<u64>,
    /// Why the latest attempt failed, if it did.
    pub trouble: Option<String>,
}

impl Note {
    /// What is known at a state directory.
    pub fn read(state_dir: &Path) -> Self {
        std::fs::read(state_dir.join(NOTE)).ok().and_then(|text| serde_json::from_slice(&text).ok()).unwrap_or_default()
    }

    fn write(&self, state_dir: &Path) -> std::io::Result<()> {
        let part = state_dir.join(format!("{NOTE}.part"));
        std::fs::write(&part, serde_json::to_vec(self)?)?;
        std::fs::File::open(&part)?.sync_all()?;
        std::fs::rename(part, state_dir.join(NOTE))
    }

    /// As status and screen show it.
    pub fn view(&self) -> serde_json::Value {
        serde_json::json!({
            "proven_at": self.at_utc_us.map(rfc3339), "file": self.file.as_ref().map(|f| f.display().to_string()),
            "seq": self.seq, "trouble": self.trouble,
        })
    }
}

/// Makes one backup of the ledger at `state_dir` in `folder`, proves it, and
/// takes away the oldest beyond `keep` of the same ledger.
///
/// # Errors
/// Why there is none; that is remembered, too.
pub fn make(
    state_dir: &Path,
    folder: &Path,
    keep: Option<u32>,
    utc_us: i64,
    progress: &mut dyn FnMut(Progress),
) -> Result<Proven, LedgerError> {
    let made = Reader::open(state_dir).and_then(|r| r.head()).and_then(|head| {
        let to = folder.join(file_name(&head.id.to_string(), utc_us));
        ledger::copy(state_dir, &to, progress)
    });
    let mut note = Note::read(state_dir);
    match &made {
        Ok(proven) => {
            let (file, seq) = (Some(proven.path.clone()), Some(proven.seq));
            note = Note { at_utc_us: Some(utc_us), file, seq, trouble: None };
            if let Some(keep) = keep {
                take_away_old(folder, &proven.ledger, keep as usize);
            }
        }
        Err(e) => note.trouble = Some(e.to_string()),
    }
    if let Err(e) = note.write(state_dir) {
        tracing::warn!(error = %e, "what is known of backups could not be written down");
    }
    made
}

/// Names sort by time.
fn file_name(ledger: &str, utc_us: i64) -> String {
    let at: String = rfc3339(utc_us).chars().filter(|c| c.is_ascii_digit() || matches!(c, 'T' | 'Z' | '.')).collect();
    format!("{}{at}.sqlite", prefix(ledger))
}

fn prefix(ledger: &str) -> String {
    format!("tarecup-{}-", ledger.get(..8).unwrap_or(ledger))
}

fn take_away_old(folder: &Path, ledger: &str, keep: usize) {
    let prefix = prefix(ledger);
    let named = |name: &str| name.starts_with(&prefix) && name.ends_with(".sqlite");
    let entries = std::fs::read_dir(folder).into_iter().flatten().filter_map(Result::ok);
    let mut names: Vec<String> = entries.filter_map(|e| e.file_name().into_string().ok()).filter(|n| named(n)).collect();
    names.sort_unstable();
    for old in names.iter().take(names.len().saturating_sub(keep)) {
        if let Err(e) = std::fs::remove_file(folder.join(old)) {
            tracing::warn!(file = %old, error = %e, "an old backup could not be taken away");
        }
    }
}

/// When and where backups are made by the service.
#[derive(Clone, Debug)]
pub struct Plan {
    /// Whose ledger.
    pub state_dir: PathBuf,
    /// Where to.
    pub folder: PathBuf,
    /// Hours from one to the next.
    pub every_hours: u32,
    /// How many are kept.
    pub keep: u32,
}

/// Makes backups for as long as it lives.
pub struct Keeper {
    stop: Sender<()>,
    thread: JoinHandle<()>,
}

impl Keeper {
    /// Begins. After a failure it is tried again every quarter of an hour at most.
    ///
    /// # Errors
    /// When the system gives no thread.
    pub fn start(plan: Plan, clock: Arc<dyn Clock>) -> std::io::Result<Self> {
        let (stop, stopped) = channel();
        let work = move || {
            let mut not_before = i64::MIN;
            while stopped.recv_timeout(LOOK) == Err(RecvTimeoutError::Timeout) {
                let now = clock.now().utc_us;
                if now >= not_before && due(&plan, now) {
                    not_before = now.saturating_add(HOUR_US / 4);
                    match make(&plan.state_dir, &plan.folder, Some(plan.keep), now, &mut |_| ()) {
                        Ok(proven) => tracing::info!(file = %proven.path.display(), seq = proven.seq, "backup made and proven"),
                        Err(e) => tracing::error!(error = %e, "NO BACKUP could be made"),
                    }
                }
            }
        };
        let thread = std::thread::Builder::new().name("backup".into()).spawn(work)?;
        Ok(Self { stop, thread })
    }

    /// Ends after a backup that is under way.
    pub fn stop(self) {
        drop(self.stop);
        let _ = self.thread.join();
    }
}

fn due(plan: &Plan, now: i64) -> bool {
    let last = Note::read(&plan.state_dir).at_utc_us;
    // A last one in the future was made before the clock was set back.
    last.is_none_or(|last| last > now || now - last >= i64::from(plan.every_hours) * HOUR_US)
}
