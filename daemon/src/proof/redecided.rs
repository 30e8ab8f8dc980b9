//! The facts decided again from the inputs, by today's program.
//!
//! A difference is not a fault of the ledger: history is never decided anew.
//! It shows what an upgrade would see differently, or that somebody put facts
//! into the chain that nothing which was heard leads to.

use super::documents::{nothing, recorded};
use super::{Difference, MOST_DIFFERENCES};
use crate::desk::again::Again;
use crate::ledger::{InputKind, InputStored, LedgerError, Reader};
use crate::service::setup_of;
use serde_json::Value;
use std::collections::VecDeque;
use std::path::PathBuf;
use tarecup_core::fact::Fact;

/// Inputs read at a time.
const PAGE: usize = 1_000;
/// Facts read at a time.
const FACT_PAGE: usize = 1_000;

/// A folder for the ledger that nothing is written to.
pub(crate) struct Scratch(PathBuf);

impl Scratch {
    pub(crate) fn new() -> Result<Self, LedgerError> {
        let mut random = [0; 8];
        let path = std::env::temp_dir();
        getrandom::fill(&mut random).map_err(|e| LedgerError::Io { path: path.clone(), what: e.to_string() })?;
        Ok(Self(path.join(format!("tarecup-again-{:016x}", u64::from_ne_bytes(random)))))
    }
}

impl Scratch {
    pub(crate) fn path(&self) -> &std::path::Path {
        &self.0
    }
}

impl Drop for Scratch {
    fn drop(&mut self) {
        let _ = std::fs::remove_dir_all(&self.0);
    }
}

/// Feeds all inputs through a desk and compares its facts with the stored ones.
pub(super) fn compare(reader: &Reader, progress: &mut dyn FnMut(u64)) -> Result<Vec<Difference>, LedgerError> {
    let scratch = Scratch::new()?;
    let mut again = Again::new(&scratch.0, nothing())?;
    let end = reader.head()?;
    let mut walk = Walk { reader, differences: Vec::new(), facts: VecDeque::new(), read: 0, end: end.seq, lost: false };
    let mut from = 1;
    while from <= end.last_input && !walk.lost {
        let page = reader.inputs_from(from, PAGE, None)?;
        let Some(last) = page.last() else { break };
        from = last.no + 1;
        for input in page.iter().filter(|i| i.no <= end.last_input) {
            walk.step(&mut again, input)?;
            if walk.lost {
                break;
            }
        }
        progress(from - 1);
    }
    walk.rest()?;
    Ok(walk.differences)
}

struct Walk<'a> {
    reader: &'a Reader,
    differences: Vec<Difference>,
    /// Stored facts not yet compared.
    facts: VecDeque<crate::ledger::FactStored>,
    read: u64,
    end: u64,
    /// Numbers no longer match: comparing on would only list shifts.
    lost: bool,
}

impl Walk<'_> {
    fn step(&mut self, again: &mut Again, input: &InputStored) -> Result<(), LedgerError> {
        let settings = match self.settings_of(input)? {
            Some(Err(why)) => {
                self.stop(0, why);
                return Ok(());
            }
            Some(Ok(setup)) => Some(setup),
            None => None,
        };
        match again.take(input, self.reader, settings) {
            Err(why) => self.stop(0, why),
            Ok(decided) => {
                for (fact, bytes) in decided {
                    self.compare(fact.seq, fact.fact.kind(), &bytes, input.no)?;
                    if self.lost {
                        break;
                    }
                }
            }
        }
        Ok(())
    }

    /// Settings that follow a start hold for it already.
    fn settings_of(&self, input: &InputStored) -> Result<Option<Result<crate::desk::DeskSetup, String>>, LedgerError> {
        if input.kind != InputKind::Start || input.bytes == b"stop" {
            return Ok(None);
        }
        let next = self.reader.inputs_from(input.no + 1, 1, None)?.into_iter().next();
        let next = next.filter(|n| n.kind == InputKind::Settings);
        Ok(next.map(|n| setup_of(&String::from_utf8_lossy(&n.bytes))))
    }

    fn next(&mut self) -> Result<Option<crate::ledger::FactStored>, LedgerError> {
        if self.facts.is_empty() && self.read < self.end {
            self.facts = self.reader.facts_after(self.read, FACT_PAGE)?.into();
            self.read = self.facts.back().map_or(self.end, |f| f.seq);
            let end = self.end;
            self.facts.retain(|f| f.seq <= end);
        }
        Ok(self.facts.pop_front())
    }

    fn compare(&mut self, seq: u64, kind: &str, bytes: &[u8], input: u64) -> Result<(), LedgerError> {
        let Some(kept) = self.next()? else {
            self.stop(seq, format!("input {input} leads to one more fact, \"{kind}\", which is not in the ledger"));
            return Ok(());
        };
        if kept.kind != kind {
            let why =
                format!("input {input} leads to \"{kind}\", the ledger has \"{}\"; what follows was not compared", kept.kind);
            self.stop(kept.seq, why);
            return Ok(());
        }
        // How many lines came by then depends on how they were grouped, and the program may be another.
        let loosely = matches!(recorded(&kept).map(|r| r.fact), Ok(Fact::LinesKept { .. } | Fact::ServiceStarted { .. }));
        let (made, stored): (Option<Value>, Option<Value>) =
            (serde_json::from_slice(bytes).ok(), serde_json::from_slice(&kept.body).ok());
        if !loosely && made != stored && self.differences.len() < MOST_DIFFERENCES {
            let text = |v: &Option<Value>| v.as_ref().map(|v| v["fact"].to_string()).unwrap_or_default();
            let why = format!("input {input} leads to {} today, the ledger has {}", text(&made), text(&stored));
            self.differences.push(Difference { seq: kept.seq, why });
        }
        Ok(())
    }

    fn rest(&mut self) -> Result<(), LedgerError> {
        if !self.lost
            && let Some(kept) = self.next()?
        {
            self.stop(
                kept.seq,
                format!("nothing that was heard or asked leads to \"{}\"; what follows was not compared", kept.kind),
            );
        }
        Ok(())
    }

    fn stop(&mut self, seq: u64, why: String) {
        self.lost = true;
        self.differences.push(Difference { seq, why });
    }
}
