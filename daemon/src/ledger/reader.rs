//! Looks into the ledger from beside the writer, through its own read-only
//! connection. Every call reads what it returns and closes its statement, so
//! a reader never keeps the write-ahead log from being tidied.

use super::chain::{Digest, LedgerId, genesis};
use super::error::{LedgerError, digest_of};
use super::rows::{DocumentStored, FactStored, InputKind, InputStored};
use super::schema;
use super::verify::{RAW_FACT, RawFact};
use rusqlite::types::Type;
use rusqlite::{Connection, OpenFlags, OptionalExtension, Row};
use std::path::{Path, PathBuf};
use tarecup_core::stamp::{Boot, Stamp};

/// The most rows one call returns, whatever is asked for: memory is bounded.
pub const MOST_ROWS: usize = 10_000;

/// Where the ledger stands.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub struct Head {
    /// The ledger's name.
    pub id: LedgerId,
    /// Raised at every restore.
    pub epoch: u64,
    /// The last fact; 0 when there is none.
    pub seq: u64,
    /// Its hash; what the first fact will be chained to when there is none.
    pub hash: Digest,
    /// The last input; 0 when there is none.
    pub last_input: u64,
}

/// Which documents.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub enum Which {
    /// Those that start-up needs.
    Open,
    /// All.
    All,
}

/// What is known of an ask.
#[derive(Clone, Debug, PartialEq, Eq)]
pub enum Asked {
    /// Nothing: it is to be decided.
    New,
    /// It was answered; the same answer is due again.
    Before(Vec<u8>),
    /// Its id was used by the same client for another ask: to be refused.
    Otherwise,
}

/// A read-only view of the ledger.
#[derive(Debug)]
pub struct Reader {
    conn: Connection,
    path: PathBuf,
}

pub(crate) fn last_seq(conn: &Connection) -> rusqlite::Result<u64> {
    conn.prepare_cached("SELECT ifnull(max(seq), 0) FROM fact")?.query_row([], |row| number(row, 0))
}

pub(crate) fn last_input(conn: &Connection) -> rusqlite::Result<u64> {
    conn.prepare_cached("SELECT ifnull(max(no), 0) FROM input")?.query_row([], |row| number(row, 0))
}

/// Numbers of rows are never negative.
fn number(row: &Row<'_>, at: usize) -> rusqlite::Result<u64> {
    let n: i64 = row.get(at)?;
    u64::try_from(n).map_err(|_| rusqlite::Error::IntegralValueOutOfRange(at, n))
}

fn odd(at: usize, what: &str) -> rusqlite::Error {
    rusqlite::Error::FromSqlConversionFailure(at, Type::Text, what.into())
}

fn stamp(row: &Row<'_>, at: usize) -> rusqlite::Result<Stamp> {
    Ok(Stamp { utc_us: row.get(at)?, mono_us: row.get(at + 1)?, boot: Boot(row.get(at + 2)?) })
}

fn fact(row: &Row<'_>) -> rusqlite::Result<FactStored> {
    let raw = RawFact::read(row)?;
    let text = |bytes: Vec<u8>, at| String::from_utf8(bytes).map_err(|_| odd(at, "not UTF-8"));
    Ok(FactStored {
        seq: number(row, 0)?,
        at: stamp(row, 1)?,
        kind: text(raw.kind, 4)?,
        who: raw.who.map(|w| text(w, 5)).transpose()?,
        through: number(row, 6)?,
        inputs_to: number(row, 7)?,
        body: raw.body,
        inputs_digest: digest_of(&raw.inputs_digest).ok_or_else(|| odd(9, "not 32 bytes"))?,
        hash: digest_of(&raw.hash).ok_or_else(|| odd(10, "not 32 bytes"))?,
    })
}

fn input(row: &Row<'_>) -> rusqlite::Result<InputStored> {
    let kind: String = row.get(4)?;
    Ok(InputStored {
        no: number(row, 0)?,
        at: stamp(row, 1)?,
        kind: InputKind::from_word(&kind).ok_or_else(|| odd(4, "an unknown kind of input"))?,
        instrument: row.get(5)?,
        bytes: row.get(6)?,
        reason: row.get(7)?,
    })
}

fn document(row: &Row<'_>) -> rusqlite::Result<DocumentStored> {
    Ok(DocumentStored { kind: row.get(0)?, id: row.get(1)?, seq: number(row, 2)?, open: row.get(3)?, body: row.get(4)? })
}

/// The ledger's id and epoch.
pub(crate) fn identity(conn: &Connection) -> rusqlite::Result<(LedgerId, u64)> {
    conn.query_row("SELECT id, epoch FROM ledger", [], |row| {
        let id: String = row.get(0)?;
        Ok((LedgerId::from_hex(&id).ok_or_else(|| odd(0, "not a ledger's id"))?, number(row, 1)?))
    })
}

/// Requests beyond what the file can hold find nothing, rather than being an error.
fn signed(n: u64) -> i64 {
    i64::try_from(n).unwrap_or(i64::MAX)
}

fn bounded(limit: usize) -> i64 {
    limit.min(MOST_ROWS) as i64
}

impl Reader {
    /// Opens the ledger at `path` (a file, or the directory it is in) for
    /// reading. It must exist and have the layout of this program.
    pub fn open(path: &Path) -> Result<Self, LedgerError> {
        schema::check_library()?;
        let path = schema::file_at(path);
        if !path.exists() {
            return Err(LedgerError::Missing { path });
        }
        schema::check_is_file(&path)?;
        let conn = schema::connect(&path, OpenFlags::SQLITE_OPEN_READ_ONLY)?;
        match schema::check_made_by_us(&conn, &path)? {
            0 => Err(LedgerError::Missing { path }),
            schema::NEWEST => Ok(Self { conn, path }),
            found => Err(LedgerError::Older { path, found, known: schema::NEWEST }),
        }
    }

    pub(crate) fn connection(&self) -> &Connection {
        &self.conn
    }

    /// The ledger's file.
    pub fn path(&self) -> &Path {
        &self.path
    }

    fn failed(&self, error: &rusqlite::Error) -> LedgerError {
        let what = error.to_string();
        match error {
            rusqlite::Error::FromSqlConversionFailure(..)
            | rusqlite::Error::InvalidColumnType(..)
            | rusqlite::Error::IntegralValueOutOfRange(..)
            | rusqlite::Error::Utf8Error(..) => LedgerError::Damaged { path: self.path.clone(), what },
            _ => LedgerError::sql(&self.path, "reading it", error),
        }
    }

    fn list<T>(
        &self,
        sql: &str,
        params: impl rusqlite::Params,
        row: fn(&Row<'_>) -> rusqlite::Result<T>,
    ) -> Result<Vec<T>, LedgerError> {
        let read = || self.conn.prepare_cached(sql)?.query_map(params, row)?.collect::<Result<_, _>>();
        read().map_err(|e| self.failed(&e))
    }

    fn one<T>(
        &self,
        sql: &str,
        params: impl rusqlite::Params,
        row: fn(&Row<'_>) -> rusqlite::Result<T>,
    ) -> Result<Option<T>, LedgerError> {
        let read = || self.conn.prepare_cached(sql)?.query_row(params, row).optional();
        read().map_err(|e| self.failed(&e))
    }

    /// Where the ledger stands at this moment.
    pub fn head(&self) -> Result<Head, LedgerError> {
        let read = || {
            // One transaction, so that all five belong together.
            let tx = self.conn.unchecked_transaction()?;
            let (id, epoch) = identity(&tx)?;
            let last_input = last_input(&tx)?;
            let last = tx
                .prepare_cached("SELECT seq, hash FROM fact ORDER BY seq DESC LIMIT 1")?
                .query_row([], |row| Ok((number(row, 0)?, row.get::<_, [u8; 32]>(1)?)))
                .optional()?;
            let (seq, hash) = last.map_or_else(|| (0, genesis(&id)), |(seq, hash)| (seq, Digest(hash)));
            Ok(Head { id, epoch, seq, hash, last_input })
        };
        read().map_err(|e: rusqlite::Error| self.failed(&e))
    }

    /// The facts after `seq` in order, at most `limit` and [`MOST_ROWS`].
    pub fn facts_after(&self, seq: u64, limit: usize) -> Result<Vec<FactStored>, LedgerError> {
        let sql = format!("SELECT {RAW_FACT} FROM fact WHERE seq > ?1 ORDER BY seq LIMIT ?2");
        self.list(&sql, (signed(seq), bounded(limit)), fact)
    }

    /// The fact `seq`.
    pub fn fact(&self, seq: u64) -> Result<Option<FactStored>, LedgerError> {
        let sql = format!("SELECT {RAW_FACT} FROM fact WHERE seq = ?1");
        self.one(&sql, (signed(seq),), fact)
    }

    /// The fact `seq`, and the facts after it that tie it anew (few: they are found by their kind).
    pub fn facts_naming(&self, seq: u64) -> Result<Vec<FactStored>, LedgerError> {
        let sql = format!(
            "SELECT {RAW_FACT} FROM fact WHERE seq = ?1
             OR (seq > ?1 AND kind = 'weighing_tied' AND CAST(body AS TEXT) ->> '$.fact.weighing' = ?1)
             OR (seq > ?1 AND kind = 'count_tied' AND CAST(body AS TEXT) ->> '$.fact.count' = ?1)
             ORDER BY seq LIMIT {MOST_ROWS}"
        );
        self.list(&sql, (signed(seq),), fact)
    }

    /// Facts that moved a determination away from a specimen.
    pub fn moves_from(&self, specimen: &str) -> Result<Vec<FactStored>, LedgerError> {
        let sql = format!(
            "SELECT {RAW_FACT} FROM fact WHERE kind = 'trial_moved'
             AND CAST(body AS TEXT) ->> '$.fact.specimen' = ?1 ORDER BY seq LIMIT {MOST_ROWS}"
        );
        self.list(&sql, (specimen,), fact)
    }

    /// The latest fact of a kind.
    pub fn latest_fact(&self, kind: &str) -> Result<Option<FactStored>, LedgerError> {
        let sql = format!("SELECT {RAW_FACT} FROM fact WHERE kind = ?1 ORDER BY seq DESC LIMIT 1");
        self.one(&sql, (kind,), fact)
    }

    /// Epochs, each with the first fact it holds for, oldest first.
    pub fn epochs(&self) -> Result<Vec<(u64, u64)>, LedgerError> {
        let sql = "SELECT epoch, first_seq FROM epoch ORDER BY epoch";
        self.list(sql, (), |row| Ok((number(row, 0)?, number(row, 1)?)))
    }

    /// All facts of a kind, oldest first.
    pub fn facts_of_kind(&self, kind: &str) -> Result<Vec<FactStored>, LedgerError> {
        let sql = format!("SELECT {RAW_FACT} FROM fact WHERE kind = ?1 ORDER BY seq");
        self.list(&sql, (kind,), fact)
    }

    /// One document.
    pub fn document(&self, kind: &str, id: &str) -> Result<Option<DocumentStored>, LedgerError> {
        let sql = "SELECT kind, id, seq, open, body FROM document WHERE kind = ?1 AND id = ?2";
        self.one(sql, (kind, id), document)
    }

    /// The documents of a kind in the order of their ids, those after the id
    /// `after` (`""` for the first), at most `limit` and [`MOST_ROWS`].
    pub fn documents(&self, kind: &str, which: Which, after: &str, limit: usize) -> Result<Vec<DocumentStored>, LedgerError> {
        let sql = match which {
            Which::Open => {
                "SELECT kind, id, seq, open, body FROM document
                 WHERE kind = ?1 AND id > ?2 AND open = 1 ORDER BY id LIMIT ?3"
            }
            Which::All => {
                "SELECT kind, id, seq, open, body FROM document
                 WHERE kind = ?1 AND id > ?2 ORDER BY id LIMIT ?3"
            }
        };
        self.list(sql, (kind, after, bounded(limit)), document)
    }

    /// The inputs from number `no` on, of one instrument or of all, at most
    /// `limit` and [`MOST_ROWS`].
    pub fn inputs_from(&self, no: u64, limit: usize, instrument: Option<&str>) -> Result<Vec<InputStored>, LedgerError> {
        let columns = "SELECT i.no, i.at_utc_us, i.mono_us, i.boot, i.kind, n.name, i.bytes, i.reason
             FROM input AS i LEFT JOIN instrument AS n ON n.id = i.instrument WHERE i.no >= ?1";
        let (no, limit) = (signed(no), bounded(limit));
        match instrument {
            None => self.list(&format!("{columns} ORDER BY i.no LIMIT ?2"), (no, limit), input),
            Some(name) => {
                let one = "AND i.instrument = (SELECT id FROM instrument WHERE name = ?3)";
                self.list(&format!("{columns} {one} ORDER BY i.no LIMIT ?2"), (no, limit, name), input)
            }
        }
    }

    /// What is known of an ask with this id and body.
    pub fn answer(&self, client: &str, ask_id: &str, body_digest: &Digest) -> Result<Asked, LedgerError> {
        let sql = "SELECT body_digest, answer FROM answer WHERE client = ?1 AND ask_id = ?2";
        let found = self.one(sql, (client, ask_id), |row| Ok((row.get::<_, [u8; 32]>(0)?, row.get::<_, Vec<u8>>(1)?)))?;
        Ok(match found {
            None => Asked::New,
            Some((digest, answer)) if digest == body_digest.0 => Asked::Before(answer),
            Some(_) => Asked::Otherwise,
        })
    }

    /// A named position.
    pub fn cursor(&self, name: &str) -> Result<Option<u64>, LedgerError> {
        self.one("SELECT value FROM cursor WHERE name = ?1", (name,), |row| number(row, 0))
    }

    /// The kernel's boot id behind a stamp's boot.
    pub fn boot_id(&self, boot: Boot) -> Result<Option<String>, LedgerError> {
        self.one("SELECT boot_id FROM boot WHERE ordinal = ?1", (boot.0,), |row| row.get(0))
    }
}
