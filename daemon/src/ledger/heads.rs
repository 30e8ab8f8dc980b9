//! Signed heads: kept beside the chain, so that a verifier finds them.

use super::chain::Digest;
use super::error::{LedgerError, digest_of};
use super::reader::Reader;
use super::writer::Ledger;
use rusqlite::{Connection, Row};

/// A head with its signature, as it is kept and published.
#[derive(Clone, Debug, PartialEq, Eq)]
pub struct SignedHead {
    /// The last fact at the time.
    pub seq: u64,
    /// Its hash.
    pub hash: Digest,
    /// The ledger's epoch at the time.
    pub epoch: u64,
    /// Wall time, microseconds.
    pub at_utc_us: i64,
    /// The public key.
    pub key: [u8; 32],
    /// The signature.
    pub signature: [u8; 64],
}

/// Heads read in one go.
const PAGE: i64 = 1_000;
const COLUMNS: &str = "seq, hash, epoch, at_utc_us, key, signature";

fn head(row: &Row<'_>) -> rusqlite::Result<Option<SignedHead>> {
    let (seq, hash): (i64, Vec<u8>) = (row.get(0)?, row.get(1)?);
    let (key, signature): (Vec<u8>, Vec<u8>) = (row.get(4)?, row.get(5)?);
    let epoch: i64 = row.get(2)?;
    let parts = (digest_of(&hash), <[u8; 32]>::try_from(key), <[u8; 64]>::try_from(signature));
    Ok(match parts {
        (Some(hash), Ok(key), Ok(signature)) => Some(SignedHead {
            seq: seq.unsigned_abs(),
            hash,
            epoch: epoch.unsigned_abs(),
            at_utc_us: row.get(3)?,
            key,
            signature,
        }),
        _ => None,
    })
}

pub(super) fn keep(conn: &Connection, signed: &SignedHead) -> rusqlite::Result<()> {
    let sql = format!("INSERT INTO signed_head ({COLUMNS}) VALUES (?1, ?2, ?3, ?4, ?5, ?6) ON CONFLICT (seq) DO NOTHING");
    let (seq, epoch) = (signed.seq.cast_signed(), signed.epoch.cast_signed());
    conn.prepare_cached(&sql)?.execute((seq, signed.hash.0, epoch, signed.at_utc_us, signed.key, signed.signature))?;
    Ok(())
}

impl Ledger {
    /// Keeps a signed head. That it fails is no reason to stop recording: the
    /// next one vouches for everything before it as well.
    pub fn keep_head(&mut self, signed: &SignedHead) -> Result<(), LedgerError> {
        let (path, conn) = self.path_and_connection()?;
        keep(conn, signed).map_err(|e| LedgerError::sql(path, "keeping a signed head", &e))
    }
}

impl Reader {
    /// Signed heads after `seq` in order; `None` stands for one that is not whole.
    pub fn signed_heads_after(&self, seq: u64) -> Result<Vec<Option<SignedHead>>, LedgerError> {
        let sql = format!("SELECT {COLUMNS} FROM signed_head WHERE seq > ?1 ORDER BY seq LIMIT {PAGE}");
        let read = || self.connection().prepare_cached(&sql)?.query_map([seq.cast_signed()], head)?.collect::<Result<_, _>>();
        read().map_err(|e| LedgerError::sql(self.path(), "reading signed heads", &e))
    }

    /// The latest signed head.
    pub fn last_signed_head(&self) -> Result<Option<SignedHead>, LedgerError> {
        let sql = format!("SELECT {COLUMNS} FROM signed_head ORDER BY seq DESC LIMIT 1");
        let read = || {
            let mut statement = self.connection().prepare_cached(&sql)?;
            let mut rows = statement.query([])?;
            rows.next()?.map_or(Ok(None), head)
        };
        read().map_err(|e| LedgerError::sql(self.path(), "reading signed heads", &e))
    }
}
