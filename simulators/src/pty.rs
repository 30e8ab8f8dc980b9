//! A pseudo-terminal under a lasting name: the far end of a serial cable.
//!
//! The program under test opens the link as it would open a serial port. The
//! simulator keeps a slave descriptor of its own open in raw mode, so that no
//! byte is echoed back or rewritten and none is lost while nobody listens.

use nix::fcntl::{FcntlArg, FdFlag, OFlag, fcntl};
use nix::poll::{PollFd, PollFlags, PollTimeout, poll};
use nix::pty::{Winsize, openpty};
use nix::sys::termios::{FlushArg, SetArg, Termios, cfmakeraw, tcflush, tcgetattr, tcsetattr};
use std::fs::File;
use std::io::{ErrorKind, Read, Write};
use std::os::fd::{AsFd, OwnedFd};
use std::path::{Path, PathBuf};
use std::sync::atomic::{AtomicU64, Ordering};
use std::time::{Duration, Instant};

/// How long a write may wait for room unless told otherwise.
pub const WRITE_TIMEOUT: Duration = Duration::from_secs(5);
/// Most bytes one call of [`Pty::read_sent`] returns.
pub const SENT_MAX: usize = 64 * 1024;

/// Why a simulated cable could not be used.
#[derive(Debug, thiserror::Error)]
pub enum PtyError {
    /// The system gave no pseudo-terminal.
    #[error("cannot make a pseudo-terminal: {0}; check that /dev/pts is mounted and not used up")]
    Open(nix::Error),
    /// The link could not be put in place.
    #[error("cannot put the link {link}: {why}; choose a folder that you may write to")]
    Link {
        /// The link.
        link: PathBuf,
        /// The system's words.
        why: std::io::Error,
    },
    /// Something that is not a link stands in the way.
    #[error("{0} exists and is not a link; move it away or choose another folder")]
    InTheWay(PathBuf),
    /// The cable is out.
    #[error("{0} is unplugged; plug it in again first")]
    Unplugged(PathBuf),
    /// The reader left no room in time.
    #[error("nobody read from {link} for {waited_ms} ms and its buffer is full; is the program still listening?")]
    NobodyReads {
        /// The link.
        link: PathBuf,
        /// How long the write waited.
        waited_ms: u128,
    },
    /// Any other failure of reading or writing.
    #[error("{link}: {why}; unplug it and plug it in again")]
    Io {
        /// The link.
        link: PathBuf,
        /// The system's words.
        why: std::io::Error,
    },
}

/// What has gone out.
#[derive(Clone, Copy, Debug, Default, PartialEq, Eq)]
pub struct Counts {
    /// Bytes accepted by the pseudo-terminal.
    pub bytes: u64,
    /// Line feeds among them.
    pub lines: u64,
}

impl Counts {
    fn add(&mut self, bytes: &[u8]) {
        self.bytes += bytes.len() as u64;
        self.lines += bytes.iter().filter(|&&b| b == b'\n').count() as u64;
    }
}

struct Plugged {
    master: File,
    slave: OwnedFd,
    device: PathBuf,
    counts: Counts,
}

/// One simulated cable.
pub struct Pty {
    link: PathBuf,
    plugged: Option<Plugged>,
    ever: Counts,
    write_timeout: Duration,
}

impl Pty {
    /// Makes a pseudo-terminal and puts a link to it at `link`, replacing an older link in one step.
    pub fn open(link: &Path) -> Result<Self, PtyError> {
        let mut pty = Self { link: link.to_path_buf(), plugged: None, ever: Counts::default(), write_timeout: WRITE_TIMEOUT };
        pty.replug()?;
        Ok(pty)
    }

    /// How long a write may wait for room.
    pub fn set_write_timeout(&mut self, timeout: Duration) {
        self.write_timeout = timeout;
    }

    /// The lasting name.
    pub fn link(&self) -> &Path {
        &self.link
    }

    /// The device behind the link now; `None` while unplugged.
    pub fn device(&self) -> Option<&Path> {
        self.plugged.as_ref().map(|p| p.device.as_path())
    }

    /// What has been written since the cable was last plugged in.
    pub fn counts(&self) -> Counts {
        self.plugged.as_ref().map_or(Counts::default(), |p| p.counts)
    }

    /// What has been written altogether.
    pub fn counts_ever(&self) -> Counts {
        self.ever
    }

    /// Pulls the cable: the link goes first, then the device, so that nobody finds a link to a device that
    /// has meanwhile been given to someone else. Bytes not yet read are lost, as with a real cable.
    pub fn unplug(&mut self) {
        if let Some(plugged) = &self.plugged {
            // Another simulator may have taken the name; its link stays.
            if std::fs::read_link(&self.link).is_ok_and(|to| to == plugged.device) {
                let _ = std::fs::remove_file(&self.link);
            }
        }
        self.plugged = None;
    }

    /// Plugs the cable in (again): a fresh device under the same link. The counts since plugging start at zero.
    pub fn replug(&mut self) -> Result<(), PtyError> {
        self.unplug();
        let plugged = plug()?;
        point_link(&self.link, &plugged.device)?;
        self.plugged = Some(plugged);
        Ok(())
    }

    /// Writes everything or fails after the write timeout. What was accepted before a failure is counted.
    pub fn write(&mut self, bytes: &[u8]) -> Result<(), PtyError> {
        let until = Instant::now() + self.write_timeout;
        let mut rest = bytes;
        while !rest.is_empty() {
            let accepted = self.write_some(rest)?;
            rest = &rest[accepted..];
            if accepted == 0 && !self.wait_for(PollFlags::POLLOUT, until)? {
                return Err(PtyError::NobodyReads { link: self.link.clone(), waited_ms: self.write_timeout.as_millis() });
            }
        }
        Ok(())
    }

    /// Writes as a cable does: when nobody takes the bytes, the oldest are gone. True when some were lost.
    pub fn write_or_lose(&mut self, bytes: &[u8]) -> Result<bool, PtyError> {
        let (mut rest, mut lost) = (bytes, false);
        while !rest.is_empty() {
            let accepted = self.write_some(rest)?;
            rest = &rest[accepted..];
            if accepted == 0 {
                let plugged = self.plugged.as_ref().ok_or_else(|| PtyError::Unplugged(self.link.clone()))?;
                let _ = tcflush(&plugged.slave, FlushArg::TCIFLUSH);
                lost = true;
                let soon = Instant::now() + Duration::from_millis(20);
                if !self.wait_for(PollFlags::POLLOUT, soon)? {
                    return Ok(true);
                }
            }
        }
        Ok(lost)
    }

    /// One attempt; 0 when there is no room.
    fn write_some(&mut self, bytes: &[u8]) -> Result<usize, PtyError> {
        let plugged = self.plugged.as_mut().ok_or_else(|| PtyError::Unplugged(self.link.clone()))?;
        match plugged.master.write(bytes) {
            Ok(n) => {
                plugged.counts.add(&bytes[..n]);
                self.ever.add(&bytes[..n]);
                Ok(n)
            }
            Err(e) if matches!(e.kind(), ErrorKind::WouldBlock | ErrorKind::Interrupted) => Ok(0),
            Err(why) => Err(PtyError::Io { link: self.link.clone(), why }),
        }
    }

    /// What the program under test has sent, waiting for the first byte at most this long. Empty when nothing came.
    pub fn read_sent(&mut self, timeout: Duration) -> Result<Vec<u8>, PtyError> {
        let mut sent = Vec::new();
        if !self.wait_for(PollFlags::POLLIN, Instant::now() + timeout)? {
            return Ok(sent);
        }
        let plugged = self.plugged.as_mut().ok_or_else(|| PtyError::Unplugged(self.link.clone()))?;
        let mut buffer = [0u8; 1024];
        while sent.len() < SENT_MAX {
            match plugged.master.read(&mut buffer) {
                Ok(0) => break,
                Ok(n) => sent.extend_from_slice(&buffer[..n]),
                Err(e) if e.kind() == ErrorKind::WouldBlock => break,
                Err(e) if e.kind() == ErrorKind::Interrupted => {}
                Err(why) => return Err(PtyError::Io { link: self.link.clone(), why }),
            }
        }
        Ok(sent)
    }

    /// Waits until the other side has read every byte, at most this long. True when nothing is left unread.
    pub fn drained(&self, timeout: Duration) -> Result<bool, PtyError> {
        let plugged = self.plugged.as_ref().ok_or_else(|| PtyError::Unplugged(self.link.clone()))?;
        let until = Instant::now() + timeout;
        loop {
            let mut fds = [PollFd::new(plugged.slave.as_fd(), PollFlags::POLLIN)];
            // Our own slave descriptor is readable for as long as somebody still has bytes to take.
            match poll(&mut fds, PollTimeout::ZERO) {
                Ok(0) => return Ok(true),
                Ok(_) if Instant::now() >= until => return Ok(false),
                Ok(_) | Err(nix::Error::EINTR) => std::thread::sleep(Duration::from_micros(200)),
                Err(e) => return Err(PtyError::Io { link: self.link.clone(), why: e.into() }),
            }
        }
    }

    /// Waits for the master; false when the time is over.
    fn wait_for(&self, what: PollFlags, until: Instant) -> Result<bool, PtyError> {
        let plugged = self.plugged.as_ref().ok_or_else(|| PtyError::Unplugged(self.link.clone()))?;
        loop {
            let left = until.saturating_duration_since(Instant::now());
            let timeout = PollTimeout::try_from(left).unwrap_or(PollTimeout::MAX);
            let mut fds = [PollFd::new(plugged.master.as_fd(), what)];
            match poll(&mut fds, timeout) {
                // Less than a millisecond is rounded down to nothing: look at the clock again.
                Ok(0) if Instant::now() >= until => return Ok(false),
                Ok(0) => std::thread::sleep(Duration::from_micros(100)),
                Ok(_) => return Ok(true),
                Err(nix::Error::EINTR) => {}
                Err(e) => return Err(PtyError::Io { link: self.link.clone(), why: e.into() }),
            }
        }
    }
}

impl Drop for Pty {
    fn drop(&mut self) {
        self.unplug();
    }
}

fn plug() -> Result<Plugged, PtyError> {
    let pair = openpty(None::<&Winsize>, None::<&Termios>).map_err(PtyError::Open)?;
    let set_up = || -> nix::Result<PathBuf> {
        let mut termios = tcgetattr(&pair.slave)?;
        cfmakeraw(&mut termios);
        tcsetattr(&pair.slave, SetArg::TCSANOW, &termios)?;
        for fd in [&pair.master, &pair.slave] {
            fcntl(fd, FcntlArg::F_SETFD(FdFlag::FD_CLOEXEC))?;
        }
        let flags = OFlag::from_bits_truncate(fcntl(&pair.master, FcntlArg::F_GETFL)?);
        fcntl(&pair.master, FcntlArg::F_SETFL(flags | OFlag::O_NONBLOCK))?;
        nix::unistd::ttyname(&pair.slave)
    };
    let device = set_up().map_err(PtyError::Open)?;
    Ok(Plugged { master: File::from(pair.master), slave: pair.slave, device, counts: Counts::default() })
}

/// A link made beside its place and renamed into it: there is no moment at which the name is missing or half made.
fn point_link(link: &Path, device: &Path) -> Result<(), PtyError> {
    static MADE: AtomicU64 = AtomicU64::new(0);
    if std::fs::symlink_metadata(link).is_ok_and(|meta| !meta.is_symlink()) {
        return Err(PtyError::InTheWay(link.to_path_buf()));
    }
    let failed = |why| PtyError::Link { link: link.to_path_buf(), why };
    let name = link.file_name().ok_or_else(|| failed(ErrorKind::InvalidInput.into()))?;
    let number = MADE.fetch_add(1, Ordering::Relaxed);
    let beside = link.with_file_name(format!(".{}.{}-{number}", name.to_string_lossy(), std::process::id()));
    let _ = std::fs::remove_file(&beside);
    std::os::unix::fs::symlink(device, &beside).map_err(failed)?;
    std::fs::rename(&beside, link).map_err(|why| {
        let _ = std::fs::remove_file(&beside);
        failed(why)
    })
}
