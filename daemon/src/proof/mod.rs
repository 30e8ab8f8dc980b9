//! What a ledger can be asked to prove: its chain, its signed heads, that its
//! documents follow from its facts, and its facts from what was heard.

mod documents;
mod heads;
mod redecided;

use crate::ledger::{self, KnownHead, LedgerError, Reader, VerifyReport};
use std::path::Path;

pub(crate) use documents::nothing;
pub use heads::Heads;
pub(crate) use redecided::Scratch;

/// Differences listed at most; beyond them the count would say nothing more.
pub(crate) const MOST_DIFFERENCES: usize = 200;

/// Something that is not as it follows.
#[derive(Clone, Debug, PartialEq, Eq, serde::Serialize)]
pub struct Difference {
    /// The fact it concerns; 0 where none can be named.
    pub seq: u64,
    /// What differs.
    pub why: String,
}

/// Everything that was proved, or not.
pub struct Proof {
    /// The chain.
    pub chain: VerifyReport,
    /// Signed heads; `None` when the chain is bad already.
    pub heads: Option<Heads>,
    /// Documents that do not follow from the facts; `None` when the chain is bad already.
    pub documents: Option<Vec<Difference>>,
    /// Facts that today's program would decide otherwise; `None` when not asked for.
    pub redecided: Option<Vec<Difference>>,
}

impl Proof {
    /// The first fact that something is wrong with.
    pub fn first_bad(&self) -> Option<(u64, String)> {
        if let Some(fault) = &self.chain.first_bad {
            return Some((fault.seq, fault.why.clone()));
        }
        let heads = self.heads.iter().flat_map(|h| &h.wrong);
        let first = heads.chain(self.documents.iter().flatten()).min_by_key(|d| d.seq);
        first.map(|d| (d.seq, d.why.clone()))
    }
}

/// How far a proof has come.
pub enum Step<'a> {
    /// The chain.
    Chain(&'a ledger::Progress),
    /// Documents: facts folded.
    Documents(u64),
    /// Deciding again: inputs taken.
    Again(u64),
}

/// Proves the ledger at `path` (a file, or the directory it is in).
///
/// # Errors
/// When it cannot be read at all.
pub fn prove(path: &Path, heads: &[KnownHead], redecide: bool, progress: &mut dyn FnMut(Step<'_>)) -> Result<Proof, LedgerError> {
    let chain = ledger::verify(path, heads.iter().max_by_key(|h| h.seq), &mut |p| progress(Step::Chain(&p)))?;
    if !chain.ok() {
        return Ok(Proof { chain, heads: None, documents: None, redecided: None });
    }
    let reader = Reader::open(path)?;
    let heads = Some(heads::check(&reader, chain.id, heads)?);
    let documents = documents::compare(&reader, &mut |n| progress(Step::Documents(n)))?;
    let redecided = match redecide {
        true => Some(redecided::compare(&reader, &mut |n| progress(Step::Again(n)))?),
        false => None,
    };
    Ok(Proof { chain, heads, documents: Some(documents), redecided })
}
