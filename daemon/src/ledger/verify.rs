//! Goes through the chain and names the first fact that is not as it was written.
//!
//! Reads in pages and holds no statement open between them, so a running
//! service may go on writing and tidying its log. Memory stays bounded.

use super::chain::{Digest, FactFields, InputDigest, InputFields, LedgerId, fact_hash, genesis};
use super::error::{LedgerError, digest_of};
use super::reader::{self, Reader};
use super::rows::{Columns, agree};
use rusqlite::types::ValueRef;
use rusqlite::{Connection, Row};
use std::path::Path;
use tarecup_core::stamp::{Boot, Stamp};

/// Inputs read in one go.
const INPUT_PAGE: i64 = 4_096;
/// Facts read in one go.
const FACT_PAGE: i64 = 256;

/// A place in the chain that is known from elsewhere: a published head, a
/// printed report, a backup.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub struct KnownHead {
    /// The ledger it was published for, if known.
    pub id: Option<LedgerId>,
    /// The fact's number.
    pub seq: u64,
    /// The fact's hash.
    pub hash: Digest,
}

/// How far [`verify`] has come.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub struct Progress {
    /// Facts found good.
    pub facts: u64,
    /// Facts in the ledger when it began.
    pub of_facts: u64,
    /// Inputs digested.
    pub inputs: u64,
    /// Inputs in the ledger when it began.
    pub of_inputs: u64,
}

/// The first thing that is not as it was written.
#[derive(Clone, Debug, PartialEq, Eq)]
pub struct Fault {
    /// The first bad fact. For inputs that no fact covers yet: the next fact's number.
    pub seq: u64,
    /// What is wrong.
    pub why: String,
}

/// What [`verify`] found.
#[derive(Clone, Debug, PartialEq, Eq)]
pub struct VerifyReport {
    /// The ledger's id as stored; `None` when it is not one.
    pub id: Option<LedgerId>,
    /// Facts found good, up to the first bad one.
    pub facts: u64,
    /// Inputs found good.
    pub inputs: u64,
    /// Of these, inputs after the last fact: nothing vouches for them until the next one.
    pub inputs_unchained: u64,
    /// The hash of the last good fact.
    pub last_hash: Option<Digest>,
    /// The first thing wrong.
    pub first_bad: Option<Fault>,
}

impl VerifyReport {
    /// Whether everything is as it was written.
    pub fn ok(&self) -> bool {
        self.first_bad.is_none()
    }
}

/// A fact as the file holds it, before anything about it is believed.
pub(crate) struct RawFact {
    pub seq: i64,
    pub at: Stamp,
    pub boot: i64,
    pub kind: Vec<u8>,
    pub who: Option<Vec<u8>>,
    pub through: i64,
    pub inputs_to: i64,
    pub body: Vec<u8>,
    pub inputs_digest: Vec<u8>,
    pub hash: Vec<u8>,
}

pub(crate) const RAW_FACT: &str = "seq, at_utc_us, mono_us, boot, kind, who, through, inputs_to, body, inputs_digest, hash";

/// Texts are taken as bytes: a tampered file may hold what is not UTF-8.
fn bytes_of(row: &Row<'_>, at: usize) -> rusqlite::Result<Option<Vec<u8>>> {
    Ok(raw_bytes(row.get_ref(at)?).map(<[u8]>::to_vec))
}

fn raw_bytes(value: ValueRef<'_>) -> Option<&[u8]> {
    match value {
        ValueRef::Text(bytes) | ValueRef::Blob(bytes) => Some(bytes),
        _ => None,
    }
}

impl RawFact {
    pub fn read(row: &Row<'_>) -> rusqlite::Result<Self> {
        let boot: i64 = row.get(3)?;
        let at = Stamp { utc_us: row.get(1)?, mono_us: row.get(2)?, boot: Boot(u32::try_from(boot).unwrap_or(u32::MAX)) };
        Ok(Self {
            seq: row.get(0)?,
            at,
            boot,
            kind: bytes_of(row, 4)?.unwrap_or_default(),
            who: bytes_of(row, 5)?,
            through: row.get(6)?,
            inputs_to: row.get(7)?,
            body: bytes_of(row, 8)?.unwrap_or_default(),
            inputs_digest: bytes_of(row, 9)?.unwrap_or_default(),
            hash: bytes_of(row, 10)?.unwrap_or_default(),
        })
    }

    fn columns(&self) -> Columns<'_> {
        Columns { seq: self.seq, at: self.at, kind: &self.kind, who: self.who.as_deref() }
    }

    fn fields(&self) -> FactFields<'_> {
        FactFields {
            seq: self.seq,
            utc_us: self.at.utc_us,
            mono_us: self.at.mono_us,
            boot: self.boot,
            kind: &self.kind,
            who: self.who.as_deref(),
            through: self.through,
            inputs_to: self.inputs_to,
            body: &self.body,
        }
    }
}

/// Why a check stopped: the chain is bad, or the file cannot be read.
pub(crate) enum Stop {
    Bad(Fault),
    Sql(rusqlite::Error),
}

impl From<rusqlite::Error> for Stop {
    fn from(error: rusqlite::Error) -> Self {
        Self::Sql(error)
    }
}

fn bad(seq: i64, why: impl Into<String>) -> Stop {
    Stop::Bad(Fault { seq: seq.unsigned_abs(), why: why.into() })
}

/// A place in the chain from which the next fact can be checked.
pub(crate) struct Place {
    pub seq: i64,
    pub inputs_to: i64,
    pub hash: Digest,
}

impl Place {
    pub fn start(id: &LedgerId) -> Self {
        Self { seq: 0, inputs_to: 0, hash: genesis(id) }
    }

    /// After the fact `seq`, which is taken as good: a look at the end of the
    /// chain has to begin somewhere.
    pub fn at(seq: i64, fact: Option<&RawFact>) -> Result<Self, Stop> {
        let fact = fact.ok_or_else(|| bad(seq, "it is missing"))?;
        let hash = digest_of(&fact.hash).ok_or_else(|| bad(seq, "its hash does not have 32 bytes"))?;
        Ok(Self { seq, inputs_to: fact.inputs_to, hash })
    }

    /// Checks everything about the next fact but the inputs before it.
    pub fn check_fact(&self, fact: &RawFact) -> Result<Place, Stop> {
        let expected = self.seq + 1;
        if fact.seq != expected {
            return Err(bad(expected, format!("it is missing; the next one there is {}", fact.seq)));
        }
        if fact.inputs_to < self.inputs_to {
            return Err(bad(expected, "it claims to cover inputs that an earlier fact covers"));
        }
        let (Some(inputs), Some(hash)) = (digest_of(&fact.inputs_digest), digest_of(&fact.hash)) else {
            return Err(bad(expected, "its hash or digest does not have 32 bytes"));
        };
        if fact_hash(&self.hash, &fact.fields(), &inputs) != hash {
            return Err(bad(expected, "its hash does not follow from what is stored and the fact before it"));
        }
        agree(&fact.columns(), &fact.body).map_err(|why| bad(expected, why))?;
        Ok(Place { seq: fact.seq, inputs_to: fact.inputs_to, hash })
    }

    /// Checks that the inputs between this place and `fact` are those it was chained to.
    pub fn check_inputs(&self, conn: &Connection, fact: &RawFact) -> Result<(), Stop> {
        let mut digest = InputDigest::new();
        let reached = digest_inputs(conn, self.seq + 1, self.inputs_to, fact.inputs_to, &mut digest)?;
        if reached != fact.inputs_to {
            return Err(bad(self.seq + 1, format!("inputs {} to {} before it are missing", reached + 1, fact.inputs_to)));
        }
        if digest_of(&fact.inputs_digest) != Some(digest.take()) {
            let why = format!("the inputs {} to {} before it are not as they were digested", self.inputs_to + 1, reached);
            return Err(bad(self.seq + 1, why));
        }
        Ok(())
    }
}

/// Digests the inputs after `after` up to `to` as far as there are any, and
/// says how far that was. A gap is a fault, laid at fact `seq`.
pub(crate) fn digest_inputs(conn: &Connection, seq: i64, after: i64, to: i64, digest: &mut InputDigest) -> Result<i64, Stop> {
    let mut reached = after;
    loop {
        // Before the first input look from the very bottom, for rows slipped in under it.
        let from = if reached == 0 { i64::MIN } else { reached + 1 };
        let before = reached;
        let mut statement = conn.prepare_cached(
            "SELECT i.no, i.at_utc_us, i.mono_us, i.boot, i.kind, n.name, i.reason, i.bytes
             FROM input AS i LEFT JOIN instrument AS n ON n.id = i.instrument
             WHERE i.no >= ?1 AND i.no <= ?2 ORDER BY i.no LIMIT ?3",
        )?;
        let mut rows = statement.query((from, to, INPUT_PAGE))?;
        while let Some(row) = rows.next()? {
            let no: i64 = row.get(0)?;
            if no != reached + 1 {
                return Err(bad(seq, format!("input {} before it is missing; the next one there is {no}", reached + 1)));
            }
            add_input(row, no, digest)?;
            reached = no;
        }
        if reached - before < INPUT_PAGE {
            return Ok(reached);
        }
    }
}

fn add_input(row: &Row<'_>, no: i64, digest: &mut InputDigest) -> rusqlite::Result<()> {
    digest.add(&InputFields {
        no,
        utc_us: row.get(1)?,
        mono_us: row.get(2)?,
        boot: row.get(3)?,
        kind: raw_bytes(row.get_ref(4)?).unwrap_or_default(),
        instrument: raw_bytes(row.get_ref(5)?),
        reason: raw_bytes(row.get_ref(6)?),
        bytes: raw_bytes(row.get_ref(7)?).unwrap_or_default(),
    });
    Ok(())
}

/// The facts after `seq`, at most `limit`, as the file holds them.
pub(crate) fn raw_facts_after(conn: &Connection, seq: i64, limit: i64) -> rusqlite::Result<Vec<RawFact>> {
    let sql = format!("SELECT {RAW_FACT} FROM fact WHERE seq > ?1 ORDER BY seq LIMIT ?2");
    let from = if seq == 0 { i64::MIN } else { seq };
    conn.prepare_cached(&sql)?.query_map((from, limit), RawFact::read)?.collect()
}

/// Goes through the whole ledger at `path` (a file, or the directory it is in).
///
/// Checked are: that facts and inputs are numbered without a gap; every hash
/// and digest; that each fact's columns say the same as its JSON; and, when a
/// `head` known from elsewhere is given, that the chain still leads through
/// it. Without one, facts cut off at the end, or a chain rewritten whole,
/// cannot be noticed by anybody.
pub fn verify(path: &Path, head: Option<&KnownHead>, progress: &mut dyn FnMut(Progress)) -> Result<VerifyReport, LedgerError> {
    let reader = Reader::open(path)?;
    let failed = |e| LedgerError::sql(reader.path(), "verifying it", &e);
    let conn = reader.connection();
    let (of_facts, of_inputs) = (reader::last_seq(conn).map_err(failed)?, reader::last_input(conn).map_err(failed)?);
    let id: Vec<u8> = conn
        .query_row("SELECT id FROM ledger", [], |row| Ok(raw_bytes(row.get_ref(0)?).unwrap_or_default().to_vec()))
        .map_err(failed)?;
    let id = std::str::from_utf8(&id).ok().and_then(LedgerId::from_hex);
    let mut walk = Walk { conn, of_facts, of_inputs, head, head_seen: false, inputs: 0, unchained: 0, place: None, progress };
    let stopped = match id {
        Some(id) => walk.run(&id),
        None => Err(bad(1, "the ledger's id is not one, so nothing can be chained to it")),
    };
    let first_bad = match stopped {
        Ok(()) => None,
        Err(Stop::Bad(fault)) => Some(fault),
        Err(Stop::Sql(e)) => Some(walk.unreadable(reader.path(), &e)?),
    };
    let (inputs, inputs_unchained) = (walk.inputs, walk.unchained);
    let good = walk.place.filter(|p| p.seq > 0);
    Ok(VerifyReport {
        id,
        facts: good.as_ref().map_or(0, |p| p.seq.unsigned_abs()),
        inputs,
        inputs_unchained,
        last_hash: good.map(|p| p.hash),
        first_bad,
    })
}

struct Walk<'a> {
    conn: &'a Connection,
    of_facts: u64,
    of_inputs: u64,
    head: Option<&'a KnownHead>,
    head_seen: bool,
    inputs: u64,
    unchained: u64,
    /// The last fact found good.
    place: Option<Place>,
    progress: &'a mut dyn FnMut(Progress),
}

impl Walk<'_> {
    fn run(&mut self, id: &LedgerId) -> Result<(), Stop> {
        if let Some(other) = self.head.and_then(|h| h.id).filter(|other| other != id) {
            return Err(bad(1, format!("the known head belongs to ledger {other}, this is {id}")));
        }
        self.place = Some(Place::start(id));
        loop {
            let seq = self.place.as_ref().map_or(0, |p| p.seq);
            let page = raw_facts_after(self.conn, seq, FACT_PAGE)?;
            for fact in &page {
                self.step(fact)?;
            }
            self.report();
            if page.len() < FACT_PAGE as usize {
                break;
            }
        }
        self.head_reached()?;
        self.rest()
    }

    fn step(&mut self, fact: &RawFact) -> Result<(), Stop> {
        let Some(place) = &self.place else { return Ok(()) };
        let next = place.check_fact(fact)?;
        place.check_inputs(self.conn, fact)?;
        let digested = (next.inputs_to - place.inputs_to).unsigned_abs();
        if let Some(head) = self.head.filter(|h| h.seq == next.seq.unsigned_abs()) {
            self.head_seen = true;
            if head.hash != next.hash {
                let why = "its hash is not the one published for it: the chain was rewritten at or before this fact";
                return Err(bad(next.seq, why));
            }
        }
        self.inputs += digested;
        self.place = Some(next);
        if digested > INPUT_PAGE.unsigned_abs() {
            self.report();
        }
        Ok(())
    }

    fn head_reached(&self) -> Result<(), Stop> {
        let last = self.place.as_ref().map_or(0, |p| p.seq);
        match self.head {
            Some(head) if !self.head_seen && head.seq > 0 => {
                let why = format!("the ledger ends at fact {last}, but fact {} has been published: facts were cut off", head.seq);
                Err(bad(last + 1, why))
            }
            _ => Ok(()),
        }
    }

    /// Inputs after the last fact.
    fn rest(&mut self) -> Result<(), Stop> {
        let Some(place) = &self.place else { return Ok(()) };
        let mut ignored = InputDigest::new();
        let reached = digest_inputs(self.conn, place.seq + 1, place.inputs_to, i64::MAX, &mut ignored)?;
        self.unchained = (reached - place.inputs_to).unsigned_abs();
        self.inputs += self.unchained;
        self.report();
        Ok(())
    }

    fn report(&mut self) {
        let facts = self.place.as_ref().map_or(0, |p| p.seq.unsigned_abs());
        (self.progress)(Progress { facts, of_facts: self.of_facts, inputs: self.inputs, of_inputs: self.of_inputs });
    }

    /// What SQLite finds malformed is a fault of the ledger at this place;
    /// a lock or a failing disk is not.
    fn unreadable(&self, path: &Path, error: &rusqlite::Error) -> Result<Fault, LedgerError> {
        use rusqlite::ErrorCode::{DatabaseCorrupt, NotADatabase};
        let of_the_file = match error {
            rusqlite::Error::SqliteFailure(e, _) => matches!(e.code, DatabaseCorrupt | NotADatabase),
            _ => true,
        };
        if !of_the_file {
            return Err(LedgerError::sql(path, "verifying it", error));
        }
        let seq = self.place.as_ref().map_or(0, |p| p.seq.unsigned_abs()) + 1;
        Ok(Fault { seq, why: format!("it, or an input before it, cannot be read ({error})") })
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    fn forged(who: &str) -> RawFact {
        let body = br#"{"seq":1,"at":"1970-01-01T00:00:00.000007Z","kind":"started","who":"AB"}"#.to_vec();
        let inputs = InputDigest::new().take();
        let mut fact = RawFact {
            seq: 1,
            at: Stamp { utc_us: 7, mono_us: 7, boot: Boot(1) },
            boot: 1,
            kind: b"started".to_vec(),
            who: Some(who.into()),
            through: 0,
            inputs_to: 0,
            body,
            inputs_digest: inputs.0.to_vec(),
            hash: Vec::new(),
        };
        fact.hash = fact_hash(&genesis(&LedgerId([1; 16])), &fact.fields(), &inputs).0.to_vec();
        fact
    }

    /// Whoever hashes a forged column anew still has to make the JSON fit it.
    #[test]
    fn columns_that_fit_their_hash_must_fit_their_json_too() {
        let start = Place::start(&LedgerId([1; 16]));
        assert!(start.check_fact(&forged("AB")).is_ok());
        let Err(Stop::Bad(fault)) = start.check_fact(&forged("XY")) else { panic!("the forged column passed") };
        assert!(fault.seq == 1 && fault.why.contains("`who`"), "{}", fault.why);
    }
}
