//! Opening a serial port for this program alone, with its line set.

use super::{CharFrame, Flow, PortSettings};
use rustix::fs::{CWD, FlockOperation, Mode, OFlags};
use rustix::io::Errno;
use rustix::termios::{ControlModes, InputModes, OptionalActions, Termios};
use serialport::{DataBits, FlowControl, Parity, SerialPortBuilder, StopBits};
use std::os::fd::{AsFd, BorrowedFd, OwnedFd};
use std::path::Path;
use tokio_serial::{SerialPortBuilderExt, SerialStream};

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
/// Needs a runtime with I/O around it.
pub(super) fn open(settings: &PortSettings) -> Result<SerialStream, OpenFault> {
    let path = settings.path.as_str();
    if settings.baud == 0 {
        return Err(refused(path, "0 baud would hang up; write the instrument's speed, such as 9600"));
    }
    // Both descriptors must lead to one device, also when a link is changed meanwhile.
    let device = std::fs::canonicalize(path).ok().and_then(|d| d.into_os_string().into_string().ok());
    let device = device.as_deref().unwrap_or(path);
    let probe = probe(path, device)?;
    let port = stream(settings, device, probe.as_fd())?;
    finish(probe.as_fd(), settings)?;
    Ok(port)
}

/// A second descriptor of the device, held only while it is opened: it tells
/// what is wrong better than the stream does, and it reaches settings of the
/// line that the stream does not offer. These belong to the device, not to
/// the descriptor.
fn probe(path: &str, device: &str) -> Result<OwnedFd, OpenFault> {
    // Without waiting for a carrier: most instruments have no such line.
    let flags = OFlags::RDWR | OFlags::NOCTTY | OFlags::NONBLOCK | OFlags::CLOEXEC;
    let fd = rustix::fs::openat(CWD, device, flags, Mode::empty()).map_err(|e| not_opened(path, e))?;
    if !rustix::termios::isatty(&fd) {
        return Err(match rustix::termios::tcgetattr(&fd) {
            // An adapter that was pulled between opening and asking.
            Err(e) if gone(e) => OpenFault::Missing,
            _ => refused(path, "it is not a serial port; `tarecup ports` lists those of this machine"),
        });
    }
    // A port of another program is left before anything about it is changed.
    match rustix::fs::flock(&fd, FlockOperation::NonBlockingLockExclusive) {
        Ok(()) => {}
        Err(Errno::WOULDBLOCK) => return Err(OpenFault::Busy),
        Err(e) => return Err(refused(path, &format!("it cannot be locked for this program alone ({e}); use a local device"))),
    }
    // The stream takes the lock next, and goes without if another is quicker.
    let _ = rustix::fs::flock(&fd, FlockOperation::Unlock);
    Ok(fd)
}

/// Opens the device with its speed, character frame and flow control. Modem
/// lines are left alone: pseudo-terminals have none, and instruments seldom
/// need them.
fn stream(settings: &PortSettings, device: &str, probe: BorrowedFd<'_>) -> Result<SerialStream, OpenFault> {
    builder(settings, device).open_native_async().map_err(|e| {
        if rustix::termios::tcgetattr(probe).is_err_and(gone) {
            return OpenFault::Missing;
        }
        match e.kind {
            serialport::ErrorKind::NoDevice => OpenFault::Busy,
            serialport::ErrorKind::Io(std::io::ErrorKind::NotFound) => OpenFault::Missing,
            _ => unset(settings, &e.description),
        }
    })
}

fn builder(settings: &PortSettings, device: &str) -> SerialPortBuilder {
    let CharFrame { data_bits, parity, stop_bits } = settings.frame;
    let data_bits = match data_bits {
        5 => DataBits::Five,
        6 => DataBits::Six,
        7 => DataBits::Seven,
        _ => DataBits::Eight,
    };
    let parity = match parity {
        'E' => Parity::Even,
        'O' => Parity::Odd,
        _ => Parity::None,
    };
    let flow = match settings.flow {
        Flow::None => FlowControl::None,
        Flow::Hardware => FlowControl::Hardware,
        Flow::Software => FlowControl::Software,
    };
    // Exclusive, for the lock: it goes with the stream, whatever ends this program.
    serialport::new(device, settings.baud)
        .data_bits(data_bits)
        .parity(parity)
        .stop_bits(if stop_bits == 2 { StopBits::Two } else { StopBits::One })
        .flow_control(flow)
        .preserve_dtr_on_open()
        .exclusive(true)
}

fn refused(path: &str, why: &str) -> OpenFault {
    OpenFault::Refused(format!("{path}: {why}"))
}

fn not_opened(path: &str, error: Errno) -> OpenFault {
    match error {
        Errno::NOENT | Errno::NOTDIR => OpenFault::Missing,
        e if gone(e) => OpenFault::Missing,
        Errno::BUSY => OpenFault::Busy,
        Errno::ACCESS | Errno::PERM => {
            let group = "give the service's user the group that owns the device (often 'dialout'), then start the service again";
            refused(path, &format!("no permission to open it; {group}"))
        }
        Errno::ISDIR => refused(path, "it is a folder, not a serial port; `tarecup ports` lists those of this machine"),
        other => refused(path, &format!("it cannot be opened ({other}); `tarecup ports` lists the ports of this machine")),
    }
}

fn gone(error: Errno) -> bool {
    matches!(error, Errno::IO | Errno::NODEV | Errno::NXIO)
}

fn unset(settings: &PortSettings, why: &str) -> OpenFault {
    let (baud, frame) = (settings.baud, String::from(settings.frame));
    refused(
        &settings.path,
        &format!("the line cannot be set to {baud} baud, {frame} ({why}); try other settings of the instrument"),
    )
}

/// What the stream does not offer.
fn finish(fd: BorrowedFd<'_>, settings: &PortSettings) -> Result<(), OpenFault> {
    let failed = |e: Errno| if gone(e) { OpenFault::Missing } else { unset(settings, &e.to_string()) };
    // The exclusive-use flag that comes with the stream's lock would outlive this
    // program where the other end stays (a pseudo-terminal), and it would not stop
    // a second program of root; the lock does.
    rustix::termios::ioctl_tiocnxcl(fd).map_err(failed)?;
    let mut line = rustix::termios::tcgetattr(fd).map_err(failed)?;
    shape(&mut line);
    rustix::termios::tcsetattr(fd, OptionalActions::Now, &line).map_err(failed)?;
    // A driver may accept a speed and set another one.
    let speed = rustix::termios::tcgetattr(fd).map_err(failed)?.output_speed();
    if u64::from(speed.abs_diff(settings.baud)) * 100 > u64::from(settings.baud) * 3 {
        return Err(refused(
            &settings.path,
            &format!(
                "the port cannot run at {} baud (it chose {speed}); set the instrument to a usual speed, such as 9600",
                settings.baud
            ),
        ));
    }
    Ok(())
}

fn shape(line: &mut Termios) {
    // Without HUPCL the lines stay up when the port is closed: some counters
    // reset themselves when DTR falls.
    line.control_modes -= ControlModes::HUPCL;
    // A byte with a wrong parity or a missing stop bit (a wrong speed) arrives
    // as NUL, so that it cannot pass for a digit.
    line.input_modes |= InputModes::INPCK;
    line.input_modes -= InputModes::IGNPAR | InputModes::PARMRK;
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
pub(super) fn holder(path: &Path) -> Option<u32> {
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
        for (path, word) in [("/dev/null", "not a serial port"), ("/", "folder")] {
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
