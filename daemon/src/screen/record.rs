//! What the pages show of the ledger itself: the history of a specimen, what
//! was corrected, the end of the chain. Read off the threads that serve.

use super::fill;
use super::view::{Change, Head};
use super::words::ENGLISH;
use crate::ledger::{FactStored, Reader};
use std::path::Path;
use tarecup_core::fact::{Fact, Recorded};
use tarecup_core::lab::entities::Specimen;
use tarecup_core::names::{Operator, SpecimenId};
use tarecup_core::sheet::Seq;
use tarecup_core::stamp::Stamp;

/// Facts that are looked through for a specimen's history.
const FACTS_MOST: usize = 20_000;
/// Facts before the first one that is surely the specimen's: its opening is among them.
const BEFORE: Seq = 1_000;
/// Facts read at a time.
const PAGE: usize = 1_000;

/// What the ledger tells of a specimen.
#[derive(Clone, Debug, Default)]
pub struct Record {
    /// The fact up to which it was read.
    pub through: Seq,
    /// Its changes.
    pub history: Vec<Change>,
    /// The ledger's end then.
    pub head: Option<Head>,
}

fn recorded(stored: FactStored) -> Option<Recorded> {
    let fact: Fact = serde_json::from_slice(&stored.body).ok()?;
    let who = stored.who.as_deref().and_then(|w| Operator::new(w).ok());
    Some(Recorded { seq: stored.seq, at: stored.at, who, through: Some(stored.through), fact })
}

/// The first fact that is surely the specimen's.
pub fn begins(specimen: &Specimen) -> Option<Seq> {
    let weighings = specimen.trials.iter().flat_map(|t| &t.wets).map(|w| w.seq);
    weighings.chain(specimen.counts.iter().map(|c| c.seq)).min()
}

/// Reads the record of a specimen.
pub fn read(state_dir: &Path, id: &SpecimenId, begins: Option<Seq>, now: &Stamp) -> Result<Record, String> {
    let words = |e: crate::ledger::LedgerError| e.to_string();
    let reader = Reader::open(state_dir).map_err(words)?;
    let end = reader.head().map_err(words)?;
    let mut after = begins.unwrap_or(end.seq).saturating_sub(BEFORE);
    let mut facts = Vec::new();
    while facts.len() < FACTS_MOST {
        let page = reader.facts_after(after, PAGE).map_err(words)?;
        let Some(last) = page.last() else { break };
        after = last.seq;
        facts.extend(page.into_iter().filter_map(recorded));
    }
    let epoch = u32::try_from(end.epoch).unwrap_or(u32::MAX);
    let head = Head { epoch, seq: end.seq, hash: end.hash.to_string(), at: now.rfc3339() };
    Ok(Record { through: after.max(end.seq), history: fill::history(&facts, id, &ENGLISH), head: Some(head) })
}

/// What was said of one weighing or count after it was recorded.
pub fn corrections(record: &Record, seq: Seq) -> Vec<Change> {
    let names = format!("{seq}");
    let about = |c: &&Change| c.correction && c.what.split(|ch: char| !ch.is_ascii_digit()).any(|n| n == names);
    record.history.iter().filter(about).cloned().collect()
}
