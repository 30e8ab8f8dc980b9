//! What can go wrong with the file, in words, each with what to try.

use super::chain::Digest;
use std::path::{Path, PathBuf};

/// Why the ledger could not be opened, read or written.
#[derive(Debug, thiserror::Error)]
pub enum LedgerError {
    /// Another process is writing this ledger.
    #[error("the ledger {} is in use by {}; stop that one first, or give this one another state directory", .path.display(), holder(*.pid))]
    Held {
        /// The ledger's file.
        path: PathBuf,
        /// Who holds it, when the lock file says so.
        pid: Option<u32>,
    },
    /// The file was written by a newer program.
    #[error(
        "the ledger {} was written by a newer version of this program (layout {found}, this one knows up to {known}); nothing was changed; start the newer version, or restore a backup made before the upgrade", .path.display()
    )]
    Newer {
        /// The ledger's file.
        path: PathBuf,
        /// The layout found.
        found: i32,
        /// The newest layout this program knows.
        known: i32,
    },
    /// A reader met an older layout, which only the service itself migrates.
    #[error(
        "the ledger {} has the older layout {found} (this program reads {known}); start the service once so that it is brought up to date", .path.display()
    )]
    Older {
        /// The ledger's file.
        path: PathBuf,
        /// The layout found.
        found: i32,
        /// The layout this program reads.
        known: i32,
    },
    /// The file is something else.
    #[error("{} is not a tarecup ledger ({why}); nothing was changed; check the state directory, or move that file away", .path.display())]
    NotALedger {
        /// The file looked at.
        path: PathBuf,
        /// What it is instead.
        why: String,
    },
    /// There is no such file.
    #[error("there is no ledger at {}; check the state directory, or start the service once so that it makes one", .path.display())]
    Missing {
        /// Where it was looked for.
        path: PathBuf,
    },
    /// The file under the open ledger is no longer the one at its path.
    #[error(
        "the ledger {} was moved, removed or replaced while it was in use; nothing more is written to it; put the file back (with its -wal file) or restart the service", .path.display()
    )]
    Moved {
        /// Where the ledger should be.
        path: PathBuf,
    },
    /// No room.
    #[error("no room to write the ledger {}; free space on that disk, or raise the limit set for the file; recording resumes by itself", .path.display())]
    Full {
        /// The ledger's file.
        path: PathBuf,
    },
    /// Writing is not permitted.
    #[error(
        "the ledger {} cannot be written (read-only); check that its disk is mounted for writing and that this user owns the file and its folder", .path.display()
    )]
    ReadOnly {
        /// The ledger's file.
        path: PathBuf,
    },
    /// The file or one beside it cannot be opened.
    #[error(
        "the ledger {} cannot be opened ({what}); check that it is a file, and that this user may read and write it and its folder", .path.display()
    )]
    CannotOpen {
        /// The ledger's file.
        path: PathBuf,
        /// What SQLite said.
        what: String,
    },
    /// Someone else keeps the database locked.
    #[error("another program keeps the ledger {} locked; close whatever has the file open for writing (a database browser, a copy job)", .path.display())]
    Busy {
        /// The ledger's file.
        path: PathBuf,
    },
    /// The disk reported an error.
    #[error("the disk reported an error at the ledger {} ({what}); check the disk and its cable, and make a backup now", .path.display())]
    Io {
        /// The file or folder.
        path: PathBuf,
        /// What the system said.
        what: String,
    },
    /// SQLite finds the file malformed.
    #[error("the ledger {} is damaged ({what}); keep a copy of it as it is, then restore the latest backup", .path.display())]
    Damaged {
        /// The ledger's file.
        path: PathBuf,
        /// What is wrong.
        what: String,
    },
    /// The end of the chain is not as it was written.
    #[error(
        "the ledger {} is not as it was written: fact {seq}: {why}; keep a copy of it as it is, run `tarecup verify`, then restore the latest backup", .path.display()
    )]
    Chain {
        /// The ledger's file.
        path: PathBuf,
        /// The first bad fact among those looked at.
        seq: u64,
        /// What is wrong with it.
        why: String,
    },
    /// A commit failed earlier; nothing is accepted until the ledger has been reopened.
    #[error("an earlier commit to the ledger {} failed, so it must be reopened first; this happens by itself once the cause is gone", .path.display())]
    Poisoned {
        /// The ledger's file.
        path: PathBuf,
    },
    /// What was handed over does not fit onto the end of the ledger: a fault of this program.
    #[error("refused to store what does not fit the ledger: {why}; this is a fault of the program: keep the log and report it")]
    Misfit {
        /// What does not fit.
        why: String,
    },
    /// The SQLite library is one with known faults.
    #[error(
        "the SQLite library is version {found}; at least 3.51.3 is needed (older ones can lose commits); use a released build of this program"
    )]
    OldLibrary {
        /// The version in use.
        found: String,
    },
    /// Anything else SQLite said.
    #[error("the ledger {} could not be used while {doing}: {what}; restart the service, and if it stays so run `tarecup verify`", .path.display())]
    Other {
        /// The ledger's file.
        path: PathBuf,
        /// What was being done.
        doing: &'static str,
        /// What SQLite said.
        what: String,
    },
}

fn holder(pid: Option<u32>) -> String {
    match pid {
        Some(pid) => format!("process {pid}"),
        None => "another process".into(),
    }
}

impl LedgerError {
    /// Puts what SQLite said into words.
    pub(crate) fn sql(path: &Path, doing: &'static str, error: &rusqlite::Error) -> Self {
        use rusqlite::ErrorCode as Code;
        let path = path.to_path_buf();
        let what = error.to_string();
        // Making room for the index of the log beside the file is a write like any other.
        if error.sqlite_extended_error_code() == Some(rusqlite::ffi::SQLITE_IOERR_SHMSIZE) {
            return Self::Full { path };
        }
        match error.sqlite_error_code() {
            Some(Code::DiskFull) => Self::Full { path },
            Some(Code::ReadOnly | Code::PermissionDenied) => Self::ReadOnly { path },
            Some(Code::DatabaseBusy | Code::DatabaseLocked | Code::FileLockingProtocolFailed) => Self::Busy { path },
            Some(Code::SystemIoFailure) => {
                let code = error.sqlite_extended_error_code().unwrap_or_default();
                Self::Io { path, what: format!("{what}, SQLite code {code}") }
            }
            Some(Code::CannotOpen) => Self::CannotOpen { path, what },
            Some(Code::NotADatabase) => Self::NotALedger { path, why: "it is not an SQLite file".into() },
            Some(Code::DatabaseCorrupt) => Self::Damaged { path, what },
            _ => Self::Other { path, doing, what },
        }
    }

    /// Puts what the file system said into words.
    pub(crate) fn io(path: &Path, error: &std::io::Error) -> Self {
        use std::io::ErrorKind as Kind;
        let path = path.to_path_buf();
        match error.kind() {
            Kind::StorageFull | Kind::QuotaExceeded => Self::Full { path },
            Kind::ReadOnlyFilesystem | Kind::PermissionDenied => Self::ReadOnly { path },
            _ => Self::Io { path, what: error.to_string() },
        }
    }
}

/// A stored digest must have its full length.
pub(crate) fn digest_of(bytes: &[u8]) -> Option<Digest> {
    <[u8; 32]>::try_from(bytes).ok().map(Digest)
}

#[cfg(test)]
mod tests {
    use super::*;
    use rusqlite::ffi;

    /// Extended codes, as SQLite gives them for what disks do.
    #[test]
    fn what_sqlite_says_becomes_a_sentence_with_a_remedy() {
        for (code, remedy) in [
            (ffi::SQLITE_FULL, "free space"),
            (ffi::SQLITE_READONLY, "mounted for writing"),
            (ffi::SQLITE_READONLY_DBMOVED, "mounted for writing"),
            (ffi::SQLITE_BUSY, "close whatever"),
            (ffi::SQLITE_BUSY_SNAPSHOT, "close whatever"),
            (ffi::SQLITE_IOERR_SHMSIZE, "free space"),
            (ffi::SQLITE_IOERR_FSYNC, "check the disk"),
            (ffi::SQLITE_IOERR_WRITE, "check the disk"),
            (ffi::SQLITE_CORRUPT, "restore the latest backup"),
            (ffi::SQLITE_NOTADB, "nothing was changed"),
            (ffi::SQLITE_CANTOPEN, "may read and write"),
            (ffi::SQLITE_NOMEM, "restart the service"),
        ] {
            let error = rusqlite::Error::SqliteFailure(ffi::Error::new(code), None);
            let said = LedgerError::sql(Path::new("/lab/ledger.sqlite"), "storing", &error).to_string();
            assert!(said.contains(remedy) && said.contains("/lab/ledger.sqlite"), "{code}: {said}");
        }
        let full = std::io::Error::from(std::io::ErrorKind::StorageFull);
        assert!(matches!(LedgerError::io(Path::new("x"), &full), LedgerError::Full { .. }));
    }
}
