//! One writer: a lock file beside the ledger, held for as long as the process
//! lives. The kernel releases it however the process ends.

use super::error::LedgerError;
use std::ffi::OsString;
use std::fs::{File, OpenOptions, TryLockError};
use std::io::{Read, Seek, SeekFrom, Write};
use std::os::unix::fs::MetadataExt;
use std::path::{Path, PathBuf};
use std::time::Duration;

/// Which file on which disk: two paths, or one path at two moments, are the
/// same file only when these agree.
#[derive(Clone, Copy, PartialEq, Eq, Debug)]
pub(crate) struct FileMark {
    device: u64,
    inode: u64,
}

impl FileMark {
    /// The mark of the file at `path`, if there is one.
    pub fn at(path: &Path) -> Option<Self> {
        std::fs::metadata(path).ok().map(|m| Self { device: m.dev(), inode: m.ino() })
    }
}

/// The held lock.
#[derive(Debug)]
pub(crate) struct Lock {
    path: PathBuf,
    mark: Option<FileMark>,
    /// Closing it releases the lock.
    _file: File,
}

/// `ledger.sqlite` is locked by `ledger.sqlite.lock`.
fn lock_path(ledger: &Path) -> PathBuf {
    let mut name = OsString::from(ledger.as_os_str());
    name.push(".lock");
    PathBuf::from(name)
}

impl Lock {
    /// Takes the lock, or says who holds it.
    pub fn take(ledger: &Path) -> Result<Self, LedgerError> {
        let path = lock_path(ledger);
        let opened = OpenOptions::new().read(true).write(true).create(true).truncate(false).open(&path);
        let mut file = opened.map_err(|e| LedgerError::io(&path, &e))?;
        match file.try_lock() {
            Ok(()) => {}
            Err(TryLockError::WouldBlock) => {
                return Err(LedgerError::Held { path: ledger.to_path_buf(), pid: read_pid(&mut file) });
            }
            Err(TryLockError::Error(e)) => return Err(LedgerError::io(&path, &e)),
        }
        write_pid(&mut file).map_err(|e| LedgerError::io(&path, &e))?;
        Ok(Self { mark: FileMark::at(&path), path, _file: file })
    }

    /// Whether the file at the lock's path is still the one that is locked.
    /// When the folder was moved away and another put in its place, it is not,
    /// and a second process could think itself alone.
    pub fn still_there(&self) -> bool {
        self.mark.is_some() && FileMark::at(&self.path) == self.mark
    }
}

fn write_pid(file: &mut File) -> std::io::Result<()> {
    file.set_len(0)?;
    file.seek(SeekFrom::Start(0))?;
    file.write_all(format!("{}\n", std::process::id()).as_bytes())
}

/// The holder writes its number right after locking, so it may be a moment
/// late; waiting is bounded well below a second.
fn read_pid(file: &mut File) -> Option<u32> {
    for _ in 0..20 {
        let mut text = [0_u8; 16];
        let read = file.seek(SeekFrom::Start(0)).and_then(|_| file.read(&mut text)).unwrap_or(0);
        let text = std::str::from_utf8(&text[..read]).unwrap_or("");
        if let Some(pid) = text.strip_suffix('\n').and_then(|t| t.parse().ok()) {
            return Some(pid);
        }
        std::thread::sleep(Duration::from_millis(10));
    }
    None
}
