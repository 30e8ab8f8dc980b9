//! Room on the disk: a reserve beside the ledger that is given up when there is
//! none left, so that what is in progress can still be stored.

use super::schema::beside;
use rustix::fs::FallocateFlags;
use std::fs::File;
use std::io::{ErrorKind, Write};
use std::path::{Path, PathBuf};

/// What is free on the ledger's disk.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub struct Room {
    /// Bytes that this user may still write.
    pub free_bytes: u64,
    /// Bytes in all.
    pub total_bytes: u64,
}

impl Room {
    /// Of the disk that holds this path; `None` where the system does not tell.
    pub fn of(path: &Path) -> Option<Self> {
        let found = rustix::fs::statvfs(path.parent().filter(|p| !p.as_os_str().is_empty()).unwrap_or(Path::new("."))).ok()?;
        let bytes = |blocks: u64| blocks.saturating_mul(found.f_frsize);
        (found.f_blocks > 0).then(|| Self { free_bytes: bytes(found.f_bavail), total_bytes: bytes(found.f_blocks) })
    }

    /// Less than a tenth is free.
    pub fn low(&self) -> bool {
        self.free_bytes < self.total_bytes / 10
    }
}

/// Room kept back.
#[derive(Debug)]
pub(super) struct Reserve {
    path: PathBuf,
    bytes: u64,
    /// It was given up and has not been made again.
    given_up: bool,
}

impl Reserve {
    pub fn beside(ledger: &Path, bytes: u64) -> Self {
        Self { path: beside(ledger, ".reserve"), bytes, given_up: false }
    }

    fn there(&self) -> bool {
        self.bytes > 0 && std::fs::metadata(&self.path).is_ok_and(|m| m.len() >= self.bytes)
    }

    /// Keeps the room back.
    pub fn make(&mut self) -> std::io::Result<()> {
        if self.bytes > 0 && !self.there() {
            let made = self.allocate();
            if made.is_err() {
                let _ = std::fs::remove_file(&self.path);
            }
            made?;
        }
        self.given_up = false;
        Ok(())
    }

    /// A file of holes would keep nothing back: the blocks themselves are taken.
    fn allocate(&self) -> std::io::Result<()> {
        let mut file = File::create(&self.path)?;
        match rustix::fs::fallocate(&file, FallocateFlags::empty(), 0, self.bytes) {
            Ok(()) => Ok(()),
            Err(rustix::io::Errno::NOTSUP | rustix::io::Errno::NOSYS) => {
                let block = [0u8; 4096];
                (0..self.bytes.div_ceil(4096)).try_for_each(|_| file.write_all(&block))?;
                file.sync_all()
            }
            Err(e) => Err(e.into()),
        }
    }

    /// Gives the room up; false when there was none.
    pub fn give_up(&mut self) -> bool {
        let freed = self.there() && std::fs::remove_file(&self.path).is_ok();
        self.given_up |= freed;
        freed
    }

    /// After it was given up, recording goes on only once it is there again.
    pub fn demand(&mut self) -> std::io::Result<()> {
        if !self.given_up {
            return Ok(());
        }
        match self.make() {
            Err(e) if matches!(e.kind(), ErrorKind::StorageFull | ErrorKind::QuotaExceeded) => Err(e),
            // What else may be the matter with it is no reason not to record.
            _ => Ok(()),
        }
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn a_reserve_takes_real_room_and_gives_it_back() {
        let folder = tempfile::tempdir().expect("a folder");
        let mut reserve = Reserve::beside(&folder.path().join("ledger.sqlite"), 1 << 20);
        assert!(!reserve.give_up(), "none was made");
        reserve.make().expect("room");
        let blocks = || std::os::unix::fs::MetadataExt::blocks(&std::fs::metadata(&reserve.path).expect("it is there"));
        assert!(blocks() * 512 >= 1 << 20, "not a hole");
        assert!(reserve.give_up() && !reserve.path.exists());
        reserve.demand().expect("there is room again");
        assert!(reserve.there() && !reserve.given_up);
    }

    #[test]
    fn a_tenth_is_where_the_warning_begins() {
        let room = |free_bytes| Room { free_bytes, total_bytes: 1_000 };
        assert!(!room(100).low() && room(99).low());
        assert!(Room::of(Path::new("/ledger.sqlite")).is_some_and(|r| r.total_bytes > 0));
    }
}
