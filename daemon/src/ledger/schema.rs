//! The layout of the file, how it is brought up to date, and how a connection
//! is set up.
//!
//! A layout once released is never edited: a change is a further step at the
//! end of [`STEPS`], and all steps that a file lacks run in one transaction.

use super::chain::LedgerId;
use super::error::LedgerError;
use rusqlite::config::DbConfig;
use rusqlite::{Connection, OpenFlags, TransactionBehavior};
use std::ffi::{OsStr, OsString};
use std::os::unix::ffi::OsStrExt;
use std::path::{Path, PathBuf};
use std::time::Duration;

/// "TCup": marks the file as a ledger of this program.
pub(crate) const APPLICATION_ID: i32 = 0x5443_7570;

/// The newest layout.
pub(crate) const NEWEST: i32 = STEPS.len() as i32;

/// Each step brings the file from one layout to the next.
const STEPS: &[&str] = &[LAYOUT_1, LAYOUT_2];

/// Oldest SQLite without the fault in which a reset of the write-ahead log
/// could lose commits (fixed in 3.51.3).
const OLDEST_SQLITE: i32 = 3_051_003;

/// How long another program may hold the database before that is an error:
/// a laboratory must be told within two seconds that nothing is recorded.
const PATIENCE: Duration = Duration::from_millis(1_000);

const LAYOUT_1: &str = "
CREATE TABLE ledger (
    one INTEGER PRIMARY KEY CHECK (one = 1),
    id TEXT NOT NULL CHECK (length(id) = 32),
    epoch INTEGER NOT NULL CHECK (epoch >= 1),
    created_utc_us INTEGER NOT NULL
) STRICT;
CREATE TABLE boot (
    ordinal INTEGER PRIMARY KEY CHECK (ordinal >= 1),
    boot_id TEXT NOT NULL UNIQUE,
    first_utc_us INTEGER NOT NULL
) STRICT;
CREATE TABLE instrument (
    id INTEGER PRIMARY KEY,
    name TEXT NOT NULL UNIQUE
) STRICT;
CREATE TABLE input (
    no INTEGER PRIMARY KEY,
    at_utc_us INTEGER NOT NULL,
    mono_us INTEGER NOT NULL,
    boot INTEGER NOT NULL,
    kind TEXT NOT NULL,
    -- Of the table instrument. Not a foreign key: that would be looked up for
    -- every line heard, and the digest covers the name itself.
    instrument INTEGER,
    bytes BLOB NOT NULL,
    reason TEXT
) STRICT;
CREATE TABLE fact (
    seq INTEGER PRIMARY KEY,
    at_utc_us INTEGER NOT NULL,
    mono_us INTEGER NOT NULL,
    boot INTEGER NOT NULL,
    kind TEXT NOT NULL,
    who TEXT,
    through INTEGER NOT NULL,
    inputs_to INTEGER NOT NULL,
    body BLOB NOT NULL,
    inputs_digest BLOB NOT NULL CHECK (length(inputs_digest) = 32),
    hash BLOB NOT NULL CHECK (length(hash) = 32)
) STRICT;
CREATE INDEX fact_of_kind ON fact (kind);
CREATE TABLE document (
    kind TEXT NOT NULL,
    id TEXT NOT NULL,
    seq INTEGER NOT NULL,
    open INTEGER NOT NULL CHECK (open IN (0, 1)),
    body BLOB NOT NULL,
    PRIMARY KEY (kind, id)
) STRICT;
CREATE INDEX document_open ON document (kind, id) WHERE open = 1;
CREATE TABLE answer (
    client TEXT NOT NULL,
    ask_id TEXT NOT NULL,
    body_digest BLOB NOT NULL CHECK (length(body_digest) = 32),
    answer BLOB NOT NULL,
    PRIMARY KEY (client, ask_id)
) STRICT;
CREATE TABLE cursor (
    name TEXT PRIMARY KEY,
    value INTEGER NOT NULL
) STRICT, WITHOUT ROWID;

-- What was heard and what was decided is never changed. The triggers on
-- INSERT also close the way of INSERT OR REPLACE, which deletes unasked.
-- The one on inputs fails rather than aborts, which is cheaper for each row;
-- the writer takes the whole group back in either case.
CREATE TRIGGER input_no_update BEFORE UPDATE ON input
BEGIN SELECT RAISE(ABORT, 'inputs are never changed'); END;
CREATE TRIGGER input_no_delete BEFORE DELETE ON input
BEGIN SELECT RAISE(ABORT, 'inputs are never deleted'); END;
CREATE TRIGGER input_at_the_end BEFORE INSERT ON input
WHEN NEW.no IS NOT (SELECT ifnull(max(no), 0) + 1 FROM input)
BEGIN SELECT RAISE(FAIL, 'an input goes at the end, without a gap'); END;
CREATE TRIGGER fact_no_update BEFORE UPDATE ON fact
BEGIN SELECT RAISE(ABORT, 'facts are never changed'); END;
CREATE TRIGGER fact_no_delete BEFORE DELETE ON fact
BEGIN SELECT RAISE(ABORT, 'facts are never deleted'); END;
CREATE TRIGGER fact_at_the_end BEFORE INSERT ON fact
WHEN NEW.seq IS NOT (SELECT ifnull(max(seq), 0) + 1 FROM fact)
BEGIN SELECT RAISE(ABORT, 'a fact goes at the end, without a gap'); END;
CREATE TRIGGER instrument_no_update BEFORE UPDATE ON instrument
BEGIN SELECT RAISE(ABORT, 'instrument names are never changed'); END;
CREATE TRIGGER instrument_no_delete BEFORE DELETE ON instrument
BEGIN SELECT RAISE(ABORT, 'instrument names are never deleted'); END;
CREATE TRIGGER boot_no_update BEFORE UPDATE ON boot
BEGIN SELECT RAISE(ABORT, 'starts of the machine are never changed'); END;
CREATE TRIGGER boot_no_delete BEFORE DELETE ON boot
BEGIN SELECT RAISE(ABORT, 'starts of the machine are never deleted'); END;
CREATE TRIGGER answer_no_update BEFORE UPDATE ON answer
BEGIN SELECT RAISE(ABORT, 'answers are never changed'); END;
CREATE TRIGGER ledger_no_delete BEFORE DELETE ON ledger
BEGIN SELECT RAISE(ABORT, 'the ledger keeps its name'); END;
CREATE TRIGGER ledger_same_id BEFORE UPDATE ON ledger
WHEN NEW.id IS NOT OLD.id OR NEW.one IS NOT OLD.one OR NEW.epoch < OLD.epoch
BEGIN SELECT RAISE(ABORT, 'the ledger keeps its name, and its epoch only rises'); END;
";

/// Signed heads, and from which fact on an epoch holds.
const LAYOUT_2: &str = "
CREATE TABLE epoch (
    epoch INTEGER PRIMARY KEY,
    first_seq INTEGER NOT NULL,
    at_utc_us INTEGER NOT NULL
) STRICT;
INSERT INTO epoch (epoch, first_seq, at_utc_us) SELECT epoch, 1, created_utc_us FROM ledger;
CREATE TRIGGER epoch_no_update BEFORE UPDATE ON epoch
BEGIN SELECT RAISE(ABORT, 'epochs are never changed'); END;
CREATE TRIGGER epoch_no_delete BEFORE DELETE ON epoch
BEGIN SELECT RAISE(ABORT, 'epochs are never deleted'); END;
CREATE TABLE signed_head (
    seq INTEGER PRIMARY KEY,
    hash BLOB NOT NULL CHECK (length(hash) = 32),
    epoch INTEGER NOT NULL,
    at_utc_us INTEGER NOT NULL,
    key BLOB NOT NULL CHECK (length(key) = 32),
    signature BLOB NOT NULL CHECK (length(signature) = 64)
) STRICT;
CREATE TRIGGER signed_head_no_update BEFORE UPDATE ON signed_head
BEGIN SELECT RAISE(ABORT, 'signed heads are never changed'); END;
CREATE TRIGGER signed_head_no_delete BEFORE DELETE ON signed_head
BEGIN SELECT RAISE(ABORT, 'signed heads are never deleted'); END;
";

/// Refuses an SQLite library that can lose commits.
pub(crate) fn check_library() -> Result<(), LedgerError> {
    if rusqlite::version_number() < OLDEST_SQLITE {
        return Err(LedgerError::OldLibrary { found: rusqlite::version().into() });
    }
    Ok(())
}

/// The file beside a database with this ending, such as `-wal`.
pub(crate) fn beside(path: &Path, ending: &str) -> PathBuf {
    let mut name = OsString::from(path.as_os_str());
    name.push(ending);
    PathBuf::from(name)
}

/// A directory stands for the ledger inside it.
pub(crate) fn file_at(path: &Path) -> PathBuf {
    if path.is_dir() { path.join(super::FILE_NAME) } else { path.to_path_buf() }
}

/// Looks at the file without changing a byte of it, and refuses what is not a
/// ledger or is a newer one.
///
/// The layout's number stands in the file, which an *immutable* connection
/// reads without making anything beside it, and, while an upgrade has not yet
/// been copied there, in the write-ahead log, which a read-only one sees too.
/// The file is never opened around SQLite: closing it again would drop the
/// locks that this process's readers have on it.
pub(crate) fn inspect(path: &Path) -> Result<(), LedgerError> {
    check_is_file(path)?;
    let length = |path: &Path| std::fs::metadata(path).map_or(0, |m| m.len());
    // A journal is left when the very first write was cut short; only a
    // connection that may write can undo that, and opening will.
    if length(path) == 0 || beside(path, "-journal").exists() {
        return Ok(());
    }
    let still = OpenFlags::SQLITE_OPEN_READ_ONLY | OpenFlags::SQLITE_OPEN_URI;
    let log = length(&beside(path, "-wal")) > 0;
    match connect_to(&immutable_uri(path), path, still).and_then(|conn| check_made_by_us(&conn, path)) {
        // A disk that filled while the log was being copied into the file leaves a part of it: only both together say what it is.
        Err(LedgerError::Damaged { .. }) if log => (),
        looked => drop(looked?),
    }
    if log {
        check_made_by_us(&connect(path, OpenFlags::SQLITE_OPEN_READ_ONLY)?, path)?;
    }
    Ok(())
}

/// The last input in the file itself, its log left aside; looks without making anything beside it.
pub(crate) fn last_input_in_file(path: &Path) -> Result<u64, LedgerError> {
    check_is_file(path)?;
    let still = OpenFlags::SQLITE_OPEN_READ_ONLY | OpenFlags::SQLITE_OPEN_URI;
    let conn = connect_to(&immutable_uri(path), path, still)?;
    if check_made_by_us(&conn, path)? == 0 {
        return Ok(0);
    }
    let last = conn.query_row("SELECT ifnull(max(no), 0) FROM input", [], |row| row.get::<_, i64>(0));
    last.map(i64::unsigned_abs).map_err(|e| LedgerError::sql(path, "looking at its end", &e))
}

/// A folder, a pipe or a device in the ledger's place would otherwise look
/// like a failing disk, or be waited for.
pub(crate) fn check_is_file(path: &Path) -> Result<(), LedgerError> {
    match std::fs::metadata(path) {
        Ok(found) if !found.is_file() => Err(not_a_ledger(path, "it is not a file")),
        _ => Ok(()),
    }
}

/// `file:` with everything but plain characters escaped (RFC 3986).
fn immutable_uri(path: &Path) -> OsString {
    let mut uri = String::from("file:");
    for byte in std::path::absolute(path).unwrap_or_else(|_| path.to_path_buf()).as_os_str().as_bytes() {
        match byte {
            b'a'..=b'z' | b'A'..=b'Z' | b'0'..=b'9' | b'/' | b'.' | b'-' | b'_' => uri.push(*byte as char),
            other => uri.push_str(&format!("%{other:02X}")),
        }
    }
    uri.push_str("?immutable=1");
    uri.into()
}

fn not_a_ledger(path: &Path, why: &str) -> LedgerError {
    LedgerError::NotALedger { path: path.to_path_buf(), why: why.into() }
}

fn refuse(path: &Path, application: i32, version: i32) -> Result<(), LedgerError> {
    if application != APPLICATION_ID {
        return Err(not_a_ledger(path, "it is another program's database"));
    }
    if version > NEWEST {
        return Err(LedgerError::Newer { path: path.to_path_buf(), found: version, known: NEWEST });
    }
    if version < 1 {
        return Err(not_a_ledger(path, "its layout has no number"));
    }
    Ok(())
}

/// The layout of an open database; 0 when it is still empty.
pub(crate) fn check_made_by_us(conn: &Connection, path: &Path) -> Result<i32, LedgerError> {
    let sql = |e| LedgerError::sql(path, "looking at its layout", &e);
    let number = |name: &str| conn.pragma_query_value(None, name, |row| row.get::<_, i32>(0));
    let (application, version) = (number("application_id").map_err(sql)?, number("user_version").map_err(sql)?);
    let tables: i64 = conn.query_row("SELECT count(*) FROM sqlite_schema", [], |row| row.get(0)).map_err(sql)?;
    if application == 0 && version == 0 && tables == 0 {
        return Ok(0);
    }
    refuse(path, application, version)?;
    Ok(version)
}

/// Opens a connection with the settings that both sides share.
pub(crate) fn connect(path: &Path, flags: OpenFlags) -> Result<Connection, LedgerError> {
    connect_to(path.as_os_str(), path, flags)
}

fn connect_to(name: &OsStr, path: &Path, flags: OpenFlags) -> Result<Connection, LedgerError> {
    let sql = |e| LedgerError::sql(path, "opening it", &e);
    let conn = Connection::open_with_flags(name, flags | OpenFlags::SQLITE_OPEN_NO_MUTEX).map_err(sql)?;
    conn.busy_timeout(PATIENCE).map_err(sql)?;
    conn.set_db_config(DbConfig::SQLITE_DBCONFIG_DQS_DML, false).map_err(sql)?;
    conn.set_db_config(DbConfig::SQLITE_DBCONFIG_DQS_DDL, false).map_err(sql)?;
    conn.set_db_config(DbConfig::SQLITE_DBCONFIG_TRUSTED_SCHEMA, false).map_err(sql)?;
    conn.set_db_config(DbConfig::SQLITE_DBCONFIG_DEFENSIVE, true).map_err(sql)?;
    conn.set_prepared_statement_cache_capacity(32);
    Ok(conn)
}

/// Sets up the writer's connection.
pub(crate) fn configure_writer(conn: &Connection, path: &Path, max_pages: Option<u32>) -> Result<(), LedgerError> {
    let sql = |e| LedgerError::sql(path, "setting it up", &e);
    let mode: String = conn.pragma_update_and_check(None, "journal_mode", "wal", |row| row.get(0)).map_err(sql)?;
    if mode != "wal" {
        let what = format!("the write-ahead log cannot be switched on, the mode stays {mode}");
        return Err(LedgerError::Other { path: path.to_path_buf(), doing: "setting it up", what });
    }
    conn.pragma_update(None, "synchronous", "FULL").map_err(sql)?;
    conn.pragma_update(None, "foreign_keys", true).map_err(sql)?;
    conn.pragma_update(None, "recursive_triggers", true).map_err(sql)?;
    conn.pragma_update(None, "temp_store", "MEMORY").map_err(sql)?;
    // Copying the log back into the file is done when the desk is idle
    // (`Ledger::tidy`); this is the backstop for a day without an idle moment.
    let set = |name: &str, value: i64| {
        conn.pragma_update_and_check(None, name, value, |row| row.get::<_, i64>(0)).map(|_| ()).map_err(sql)
    };
    set("wal_autocheckpoint", BACKSTOP_PAGES)?;
    set("journal_size_limit", LOG_KEPT_BYTES)?;
    if let Some(pages) = max_pages {
        set("max_page_count", i64::from(pages))?;
    }
    Ok(())
}

/// 32 MiB of pages of 4 KiB.
const BACKSTOP_PAGES: i64 = 8_192;
/// After a burst the log's file is cut back to this.
const LOG_KEPT_BYTES: i64 = 16 << 20;

/// What a ledger is born with.
pub(crate) struct Birth {
    pub id: LedgerId,
    pub utc_us: i64,
}

/// Brings the file to the newest layout, or leaves it wholly as it was.
pub(crate) fn migrate(conn: &mut Connection, path: &Path, birth: &Birth) -> Result<(), LedgerError> {
    let version = check_made_by_us(conn, path)?;
    migrate_by(STEPS, version, conn, birth).map_err(|e| LedgerError::sql(path, "bringing its layout up to date", &e))
}

fn migrate_by(steps: &[&str], version: i32, conn: &mut Connection, birth: &Birth) -> rusqlite::Result<()> {
    let missing = steps.get(usize::try_from(version).unwrap_or(0)..).unwrap_or_default();
    if missing.is_empty() {
        return Ok(());
    }
    let tx = conn.transaction_with_behavior(TransactionBehavior::Immediate)?;
    for step in missing {
        tx.execute_batch(step)?;
    }
    if version == 0 {
        let row = (birth.id.to_string(), birth.utc_us);
        tx.execute("INSERT INTO ledger (one, id, epoch, created_utc_us) VALUES (1, ?1, 1, ?2)", row)?;
        if steps.len() > 1 {
            tx.execute("INSERT INTO epoch (epoch, first_seq, at_utc_us) VALUES (1, 1, ?1)", [birth.utc_us])?;
        }
        tx.pragma_update(None, "application_id", APPLICATION_ID)?;
    }
    tx.pragma_update(None, "user_version", steps.len() as i32)?;
    tx.commit()
}

#[cfg(test)]
mod tests {
    use super::*;

    const BIRTH: Birth = Birth { id: LedgerId([1; 16]), utc_us: 5 };

    fn state(conn: &Connection) -> (i32, i32, i64) {
        let number = |name: &str| conn.pragma_query_value(None, name, |r| r.get(0)).expect("a number");
        let tables = conn.query_row("SELECT count(*) FROM sqlite_schema", [], |r| r.get(0)).expect("a count");
        (number("application_id"), number("user_version"), tables)
    }

    /// A step that fails takes those before it back as well.
    #[test]
    fn a_migration_happens_wholly_or_not_at_all() {
        let mut conn = Connection::open_in_memory().expect("memory");
        let broken = [LAYOUT_1, "CREATE TABLE later (x INTEGER) STRICT; CREATE TABLE later (x INTEGER) STRICT;"];
        migrate_by(&broken, 0, &mut conn, &BIRTH).expect_err("the second step is broken");
        assert_eq!(state(&conn), (0, 0, 0));

        migrate_by(&STEPS[..1], 0, &mut conn, &BIRTH).expect("the first layout");
        let first = state(&conn);
        assert_eq!((first.0, first.1), (APPLICATION_ID, 1));
        migrate_by(&broken, 1, &mut conn, &BIRTH).expect_err("the second step is broken");
        assert_eq!(state(&conn), first);

        let whole = [LAYOUT_1, "CREATE TABLE later (x INTEGER) STRICT;"];
        migrate_by(&whole, 1, &mut conn, &BIRTH).expect("the second layout");
        assert_eq!(state(&conn), (APPLICATION_ID, 2, first.2 + 1));
        let (id, rows): (String, i64) = conn
            .query_row("SELECT id, (SELECT count(*) FROM ledger) FROM ledger", [], |r| Ok((r.get(0)?, r.get(1)?)))
            .expect("row");
        assert_eq!((id, rows), (BIRTH.id.to_string(), 1));
        migrate_by(&[LAYOUT_1, LAYOUT_2, "CREATE TABLE more (x INTEGER) STRICT;"], 2, &mut conn, &BIRTH).expect("a third layout");
        assert!(matches!(check_made_by_us(&conn, Path::new("x")), Err(LedgerError::Newer { found: 3, known: 2, .. })));
    }

    /// What a commit's durability rests on.
    #[test]
    fn the_writer_flushes_every_commit() {
        let folder = tempfile::tempdir().expect("a folder");
        let path = folder.path().join("x");
        let flags = OpenFlags::SQLITE_OPEN_READ_WRITE | OpenFlags::SQLITE_OPEN_CREATE;
        let conn = connect(&path, flags).expect("opens");
        configure_writer(&conn, &path, None).expect("is set up");
        let number = |name: &str| conn.pragma_query_value(None, name, |r| r.get::<_, i64>(0)).expect("a number");
        assert_eq!((number("synchronous"), number("foreign_keys"), number("recursive_triggers")), (2, 1, 1));
        let mode: String = conn.pragma_query_value(None, "journal_mode", |r| r.get(0)).expect("a mode");
        assert_eq!(mode, "wal");
    }

    /// A misspelt column must be an error, not a text.
    #[test]
    fn double_quotes_never_make_a_text() {
        let folder = tempfile::tempdir().expect("a folder");
        let flags = OpenFlags::SQLITE_OPEN_READ_WRITE | OpenFlags::SQLITE_OPEN_CREATE;
        let conn = connect(&folder.path().join("x"), flags).expect("opens");
        conn.query_row("SELECT \"misspelt\"", [], |r| r.get::<_, String>(0)).expect_err("refused");
        let text: String = conn.query_row("SELECT 'spelt'", [], |r| r.get(0)).expect("a text");
        assert_eq!(text, "spelt");
    }

    #[test]
    fn odd_names_of_files_are_escaped() {
        assert_eq!(immutable_uri(Path::new("/a b/ü?x#1%.db")), "file:/a%20b/%C3%BC%3Fx%231%25.db?immutable=1");
    }
}
