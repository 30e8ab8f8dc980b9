//! A copy of the ledger while it is being written, and the way back.

use super::error::LedgerError;
use super::lock::Lock;
use super::reader::{self, Reader};
use super::schema::{self, beside, file_at};
use super::verify::{KnownHead, Progress, verify};
use rusqlite::backup::{Backup, StepResult};
use rusqlite::{Connection, OpenFlags};
use std::fs::File;
use std::path::{Path, PathBuf};

/// Pages copied in one go; between two the writer's log may be tidied.
const PAGES: std::os::raw::c_int = 2_000;
/// Room that is left free on the target's disk.
const SPARE_BYTES: u64 = 16 << 20;

/// A copy that has been opened again and found good.
#[derive(Clone, Debug, PartialEq, Eq)]
pub struct Proven {
    /// The copy.
    pub path: PathBuf,
    /// The ledger's id.
    pub ledger: String,
    /// Its epoch.
    pub epoch: u64,
    /// The last fact in it.
    pub seq: u64,
    /// That fact's hash.
    pub hash: String,
}

/// Copies the ledger at `from` (a file, or the directory it is in) to the file
/// `to`, as it stands at one moment; the service may go on writing. The copy
/// is flushed, opened again, checked page by page and along its chain, and
/// only then gets its name.
///
/// # Errors
/// When it cannot be copied or the copy is not good; then there is no file `to`.
pub fn copy(from: &Path, to: &Path, progress: &mut dyn FnMut(Progress)) -> Result<Proven, LedgerError> {
    let part = beside(to, ".part");
    let made = copy_to(from, &part).and_then(|()| prove(&part, progress));
    let made = made.and_then(|proven| {
        let flush = |path: &Path| File::open(path)?.sync_all();
        let named = flush(&part).and_then(|()| std::fs::rename(&part, to));
        let folder = to.parent().filter(|p| !p.as_os_str().is_empty()).unwrap_or(Path::new("."));
        named.and_then(|()| flush(folder)).map_err(|e| LedgerError::io(to, &e))?;
        Ok(Proven { path: to.to_path_buf(), ..proven })
    });
    if made.is_err() {
        let _ = std::fs::remove_file(&part);
    }
    made
}

fn copy_to(from: &Path, part: &Path) -> Result<(), LedgerError> {
    let source = Reader::open(from)?;
    let folder = part.parent().filter(|p| !p.as_os_str().is_empty()).unwrap_or(Path::new("."));
    std::fs::create_dir_all(folder).map_err(|e| LedgerError::io(folder, &e))?;
    enough_room(source.path(), folder)?;
    let _ = std::fs::remove_file(part);
    let sql = |e| LedgerError::sql(part, "copying the ledger to it", &e);
    let flags = OpenFlags::SQLITE_OPEN_READ_WRITE | OpenFlags::SQLITE_OPEN_CREATE;
    let mut target = Connection::open_with_flags(part, flags).map_err(sql)?;
    // Within one read transaction every page is of the same moment, however long it takes.
    let moment = source.connection().unchecked_transaction().map_err(sql)?;
    reader::last_seq(&moment).map_err(sql)?;
    {
        let backup = Backup::new(&moment, &mut target).map_err(sql)?;
        while backup.step(PAGES).map_err(sql)? != StepResult::Done {}
    }
    drop(moment);
    // One plain file, without a log beside it.
    target.pragma_update_and_check(None, "journal_mode", "delete", |_| Ok(())).map_err(sql)?;
    target.close().map_err(|(_, e)| sql(e))?;
    File::open(part).and_then(|f| f.sync_all()).map_err(|e| LedgerError::io(part, &e))
}

/// A backup that fills the disk would stop what it is to protect.
fn enough_room(ledger: &Path, folder: &Path) -> Result<(), LedgerError> {
    let length = |path: &Path| std::fs::metadata(path).map_or(0, |m| m.len());
    let needed = length(ledger) + length(&beside(ledger, "-wal")) + SPARE_BYTES;
    match rustix::fs::statvfs(folder) {
        Ok(disk) if disk.f_bavail.saturating_mul(disk.f_frsize) < needed => Err(LedgerError::Full { path: folder.to_path_buf() }),
        _ => Ok(()),
    }
}

/// Opens a copy and looks at all of it.
pub fn prove(path: &Path, progress: &mut dyn FnMut(Progress)) -> Result<Proven, LedgerError> {
    let reader = Reader::open(path)?;
    let sql = |e| LedgerError::sql(path, "checking it", &e);
    let checked: String = reader.connection().query_row("PRAGMA integrity_check(1)", [], |row| row.get(0)).map_err(sql)?;
    if checked != "ok" {
        return Err(LedgerError::Damaged { path: path.to_path_buf(), what: checked });
    }
    let head = reader.head()?;
    let known = KnownHead { id: Some(head.id), seq: head.seq, hash: head.hash };
    let report = verify(path, Some(&known), progress)?;
    if let Some(fault) = report.first_bad {
        return Err(LedgerError::Chain { path: path.to_path_buf(), seq: fault.seq, why: fault.why });
    }
    let (ledger, hash) = (head.id.to_string(), head.hash.to_string());
    Ok(Proven { path: path.to_path_buf(), ledger, epoch: head.epoch, seq: head.seq, hash })
}

/// What a restore did.
#[derive(Clone, Debug, PartialEq, Eq)]
pub struct Restored {
    /// The epoch from now on.
    pub epoch: u64,
    /// The last fact of the backup.
    pub seq: u64,
    /// Where the ledger that was there before lies now.
    pub before: Option<PathBuf>,
}

/// Puts the backup `from` in the place of the ledger at `to` (a file, or the
/// directory it is in), whose service must not be running. What was there is
/// moved aside, never overwritten. The epoch rises above that of both, so that
/// facts made from now on are never taken for those that were lost.
///
/// # Errors
/// When the backup is not good, the place is in use, or is another ledger's.
pub fn restore(from: &Path, to: &Path, utc_us: i64, progress: &mut dyn FnMut(Progress)) -> Result<Restored, LedgerError> {
    let proven = prove(from, progress)?;
    let to = file_at(to);
    let folder = to.parent().filter(|p| !p.as_os_str().is_empty()).unwrap_or(Path::new("."));
    std::fs::create_dir_all(folder).map_err(|e| LedgerError::io(folder, &e))?;
    let _lock = Lock::take(&to)?;
    let mut epoch = proven.epoch;
    if to.exists() {
        let there = Reader::open(&to)?.head()?;
        if there.id.to_string() != proven.ledger {
            let why = format!("it is ledger {}, and the backup is of ledger {}; name another place", there.id, proven.ledger);
            return Err(LedgerError::NotALedger { path: to, why });
        }
        epoch = epoch.max(there.epoch);
    }
    let part = beside(&to, ".restoring");
    copy_to(from, &part)?;
    raise_epoch(&part, epoch + 1, proven.seq + 1, utc_us)?;
    prove(&part, progress)?;
    let before = move_aside(&to, epoch + 1)?;
    let named = std::fs::rename(&part, &to).and_then(|()| File::open(folder)?.sync_all());
    named.map_err(|e| LedgerError::io(&to, &e))?;
    Ok(Restored { epoch: epoch + 1, seq: proven.seq, before })
}

fn raise_epoch(part: &Path, epoch: u64, first_seq: u64, utc_us: i64) -> Result<(), LedgerError> {
    let conn = schema::connect(part, OpenFlags::SQLITE_OPEN_READ_WRITE)?;
    let raise = || {
        let tx = conn.unchecked_transaction()?;
        tx.execute("UPDATE ledger SET epoch = ?1", [epoch.cast_signed()])?;
        let row = (epoch.cast_signed(), first_seq.cast_signed(), utc_us);
        tx.execute("INSERT INTO epoch (epoch, first_seq, at_utc_us) VALUES (?1, ?2, ?3)", row)?;
        tx.commit()
    };
    raise().map_err(|e| LedgerError::sql(part, "raising its epoch", &e))
}

/// Moves what lies at the ledger's place, with its log, to a name of its own.
fn move_aside(to: &Path, epoch: u64) -> Result<Option<PathBuf>, LedgerError> {
    if !to.exists() {
        return Ok(None);
    }
    let aside = beside(to, &format!(".before-epoch-{epoch}"));
    for ending in ["-wal", "-shm", ""] {
        let (old, new) = (beside(to, ending), beside(&aside, ending));
        match std::fs::rename(&old, &new) {
            Err(e) if e.kind() != std::io::ErrorKind::NotFound => return Err(LedgerError::io(&old, &e)),
            _ => (),
        }
    }
    Ok(Some(aside))
}
