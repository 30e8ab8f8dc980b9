//! Opening a serial port for this program alone, with its line set.

use super::{CharFrame, Flow, PortSettings};
use rustix::fs::{CWD, FlockOperation, Mode, OFlags};
use rustix::io::Errno;
use rustix::termios::{ControlModes, InputModes, OptionalActions, SpecialCodeIndex, Termios};
use std::os::fd::{AsFd, BorrowedFd, OwnedFd};
use std::path::Path;

/// Why a port is not open.
#[derive(Clone, Debug, PartialEq, Eq)]
pub(super) enum OpenFault {
    /// Nothing is there (now); an unplugged adapter.
    Missing,
    /// Another program has it.
    Busy,
    /// It will not do, and why, with what to try.
    Refused(String),
}

/// Opens the port, locks it and sets its line. May block for as long as the driver likes.
pub(super) fn open(settings: &PortSettings) -> Result<OwnedFd, OpenFault> {
    let path = settings.path.as_str();
    if path.starts_with("tcp://") {
        return Err(refused(
            path,
            "ports over TCP are not supported yet; connect the instrument to a serial port of this machine",
        ));
    }
    if settings.baud == 0 {
        return Err(refused(path, "0 baud would hang up; write the instrument's speed, such as 9600"));
    }
    // Without waiting for a carrier: most instruments have no such line.
    let flags = OFlags::RDWR | OFlags::NOCTTY | OFlags::NONBLOCK | OFlags::CLOEXEC;
    let fd = rustix::fs::openat(CWD, path, flags, Mode::empty()).map_err(|e| not_opened(path, e))?;
    if !rustix::termios::isatty(&fd) {
        return Err(match rustix::termios::tcgetattr(&fd) {
            // An adapter that was pulled between opening and asking.
            Err(Errno::IO | Errno::NODEV | Errno::NXIO) => OpenFault::Missing,
            _ => refused(path, "it is not a serial port; `tarecup ports` lists those of this machine"),
        });
    }
    // An exclusive-use flag would not stop a second program of root; the lock does,
    // and it goes with the descriptor, whatever ends this program.
    match rustix::fs::flock(&fd, FlockOperation::NonBlockingLockExclusive) {
        Ok(()) => {}
        Err(Errno::WOULDBLOCK) => return Err(OpenFault::Busy),
        Err(e) => return Err(refused(path, &format!("it cannot be locked for this program alone ({e}); use a local device"))),
    }
    set_line(fd.as_fd(), settings)?;
    Ok(fd)
}

fn refused(path: &str, why: &str) -> OpenFault {
    OpenFault::Refused(format!("{path}: {why}"))
}

fn not_opened(path: &str, error: Errno) -> OpenFault {
    match error {
        Errno::NOENT | Errno::NOTDIR | Errno::NXIO | Errno::NODEV | Errno::IO => OpenFault::Missing,
        Errno::BUSY => OpenFault::Busy,
        Errno::ACCESS | Errno::PERM => {
            let group = "give the service's user the group that owns the device (often 'dialout'), then start the service again";
            refused(path, &format!("no permission to open it; {group}"))
        }
        Errno::ISDIR => refused(path, "it is a folder, not a serial port; `tarecup ports` lists those of this machine"),
        other => refused(path, &format!("it cannot be opened ({other}); `tarecup ports` lists the ports of this machine")),
    }
}

/// Raw bytes, speed, character frame and flow control. Modem lines are left
/// alone: pseudo-terminals have none, and instruments seldom need them.
fn set_line(fd: BorrowedFd<'_>, settings: &PortSettings) -> Result<(), OpenFault> {
    let path = settings.path.as_str();
    let failed = |e: Errno| match e {
        Errno::IO | Errno::NODEV | Errno::NXIO => OpenFault::Missing,
        e => refused(path, &format!("the line cannot be set to {} baud, {} ({e})", settings.baud, String::from(settings.frame))),
    };
    let mut line = rustix::termios::tcgetattr(fd).map_err(failed)?;
    shape(&mut line, settings.frame, settings.flow);
    line.set_speed(settings.baud).map_err(failed)?;
    rustix::termios::tcsetattr(fd, OptionalActions::Now, &line).map_err(failed)?;
    // A driver may accept a speed and set another one.
    let speed = rustix::termios::tcgetattr(fd).map_err(failed)?.output_speed();
    if u64::from(speed.abs_diff(settings.baud)) * 100 > u64::from(settings.baud) * 3 {
        return Err(refused(
            path,
            &format!(
                "the port cannot run at {} baud (it chose {speed}); set the instrument to a usual speed, such as 9600",
                settings.baud
            ),
        ));
    }
    Ok(())
}

fn shape(line: &mut Termios, frame: CharFrame, flow: Flow) {
    line.make_raw();
    let bits = match frame.data_bits {
        5 => ControlModes::CS5,
        6 => ControlModes::CS6,
        7 => ControlModes::CS7,
        _ => ControlModes::CS8,
    };
    let modes = &mut line.control_modes;
    // Without HUPCL the lines stay up when the port is closed: some counters
    // reset themselves when DTR falls.
    *modes -= ControlModes::CSIZE | ControlModes::PARENB | ControlModes::PARODD | ControlModes::CSTOPB;
    *modes -= ControlModes::CRTSCTS | ControlModes::HUPCL;
    *modes |= bits | ControlModes::CREAD | ControlModes::CLOCAL;
    modes.set(ControlModes::PARENB, frame.parity != 'N');
    modes.set(ControlModes::PARODD, frame.parity == 'O');
    modes.set(ControlModes::CSTOPB, frame.stop_bits == 2);
    modes.set(ControlModes::CRTSCTS, flow == Flow::Hardware);
    // A byte with a wrong parity or a missing stop bit (a wrong speed) arrives
    // as NUL, so that it cannot pass for a digit.
    line.input_modes |= InputModes::INPCK;
    line.input_modes -= InputModes::IGNPAR | InputModes::PARMRK;
    line.input_modes.set(InputModes::IXON | InputModes::IXOFF, flow == Flow::Software);
    line.special_codes[SpecialCodeIndex::VMIN] = 1;
    line.special_codes[SpecialCodeIndex::VTIME] = 0;
}

/// The sentence for a port that another program has.
pub(super) fn busy(path: &str) -> String {
    let holder = match holder(Path::new(path)) {
        Some(pid) if pid == std::process::id() => {
            return format!("{path}: another instrument of this service already uses it; give each instrument a port of its own");
        }
        Some(pid) => {
            let name = std::fs::read_to_string(format!("/proc/{pid}/comm")).unwrap_or_default();
            format!("'{}' (process {pid})", name.trim())
        }
        None => "another program".to_owned(),
    };
    format!("{path}: {holder} uses it; stop that program, or give this instrument another port")
}

/// The process that holds the lock on the port, else one that has it open.
fn holder(path: &Path) -> Option<u32> {
    let locks = std::fs::read_to_string("/proc/locks").unwrap_or_default();
    let stat = rustix::fs::stat(path).ok()?;
    let place = format!("{:02x}:{:02x}:{}", rustix::fs::major(stat.st_dev), rustix::fs::minor(stat.st_dev), stat.st_ino);
    lock_holder(&locks, &place).or_else(|| open_by(&std::fs::canonicalize(path).ok()?))
}

fn lock_holder(locks: &str, place: &str) -> Option<u32> {
    locks.lines().find_map(|line| {
        let words: Vec<&str> = line.split_ascii_whitespace().collect();
        match words[..] {
            [_, "FLOCK", _, _, pid, at, ..] if at == place => pid.parse().ok().filter(|pid| *pid > 0),
            _ => None,
        }
    })
}

/// A process that has the device open. Its path alone would not do: in a
/// container the same path is another device.
fn open_by(device: &Path) -> Option<u32> {
    use std::os::unix::fs::MetadataExt;
    let place = |path: &Path| std::fs::metadata(path).map(|m| (m.dev(), m.ino())).ok();
    let (own, wanted) = (std::process::id(), place(device)?);
    let pids = std::fs::read_dir("/proc").ok()?.flatten().filter_map(|e| e.file_name().to_str()?.parse::<u32>().ok());
    pids.filter(|pid| *pid != own).take(10_000).find(|pid| {
        let Ok(files) = std::fs::read_dir(format!("/proc/{pid}/fd")) else { return false };
        let mut files = files.flatten().take(10_000).map(|f| f.path());
        files.any(|f| std::fs::read_link(&f).is_ok_and(|to| to == device) && place(&f) == Some(wanted))
    })
}

#[cfg(test)]
mod tests {
    use super::*;

    fn settings(path: &str) -> PortSettings {
        PortSettings { path: path.into(), baud: 9600, frame: CharFrame::default(), flow: Flow::None }
    }

    #[test]
    fn what_is_not_a_port_is_refused_in_words() {
        for (path, word) in [("/dev/null", "not a serial port"), ("/", "folder"), ("tcp://10.0.0.7:4001", "TCP")] {
            match open(&settings(path)) {
                Err(OpenFault::Refused(says)) => assert!(says.contains(word) && says.starts_with(path), "{says}"),
                other => panic!("{path}: {other:?}"),
            }
        }
        assert_eq!(open(&settings("/nowhere/at/all")).err(), Some(OpenFault::Missing));
        let halted = PortSettings { baud: 0, ..settings("/dev/null") };
        assert!(matches!(open(&halted), Err(OpenFault::Refused(says)) if says.contains("baud")));
    }

    #[test]
    fn a_process_that_has_a_file_open_is_found() {
        let file = tempfile::NamedTempFile::new().expect("a file");
        let path = file.path().canonicalize().expect("a path");
        assert_eq!(open_by(&path), None, "this process itself does not count");
        let mut child = std::process::Command::new("sleep");
        let mut child = child.arg("30").stdin(file.reopen().expect("opened")).spawn().expect("a process");
        let found = open_by(&path);
        child.kill().expect("killed");
        child.wait().expect("ended");
        assert_eq!(found, Some(child.id()));
    }

    #[test]
    fn the_holder_of_a_lock_is_found() {
        let locks = "1: POSIX  ADVISORY  WRITE 11 00:19:4 0 EOF\n2: FLOCK  ADVISORY  WRITE 708 00:19:4 0 EOF\n2: -> FLOCK  ADVISORY  WRITE 9 00:19:4 0 EOF\n";
        assert_eq!(lock_holder(locks, "00:19:4"), Some(708));
        assert_eq!(lock_holder(locks, "00:19:5"), None);
    }
}
