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
    file: File,
}

impl Drop for Lock {
    /// Said expressly, because a process being started at this very moment may
    /// hold a copy of the descriptor, and closing ours would not release it.
    fn drop(&mut self) {
        let _ = self.file.unlock();
    }
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
        if !try_for_a_while(&file).map_err(|e| LedgerError::io(&path, &e))? {
            return Err(LedgerError::Held { path: ledger.to_path_buf(), pid: read_pid(&mut file) });
        }
        write_pid(&mut file).map_err(|e| LedgerError::io(&path, &e))?;
        Ok(Self { mark: FileMark::at(&path), path, file })
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

/// A holder that is just ending gets a quarter of a second; that also gives a
/// holder that is just beginning the time to write its number.
fn try_for_a_while(file: &File) -> std::io::Result<bool> {
    for _ in 0..25 {
        match file.try_lock() {
            Ok(()) => return Ok(true),
            Err(TryLockError::WouldBlock) => std::thread::sleep(Duration::from_millis(10)),
            Err(TryLockError::Error(e)) => return Err(e),
        }
    }
    Ok(false)
}

fn read_pid(file: &mut File) -> Option<u32> {
    let mut text = [0_u8; 16];
    let read = file.seek(SeekFrom::Start(0)).and_then(|_| file.read(&mut text)).unwrap_or(0);
    std::str::from_utf8(&text[..read]).ok()?.strip_suffix('\n')?.parse().ok()
}
