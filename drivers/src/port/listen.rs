//! Listening to a port without ever being able to write to it.
//!
//! The descriptor is opened for reading alone, so that no fault of the program
//! can send a byte: an unknown instrument may take any byte for an order.

use super::CharFrame;
use super::open::busy;
use rustix::fs::{CWD, FlockOperation, Mode, OFlags};
use rustix::io::Errno;
use rustix::termios::{ControlModes, InputModes, OptionalActions, Termios};
use std::os::fd::OwnedFd;
use std::time::{Duration, Instant};

/// Speeds that are tried, the usual ones first.
pub const SPEEDS: [u32; 10] = [9600, 2400, 4800, 19_200, 1200, 38_400, 57_600, 115_200, 600, 300];
/// How often a silent port is looked at.
const LOOK: Duration = Duration::from_millis(4);

/// A port that is only listened to.
#[derive(Debug)]
pub struct Ear {
    path: String,
    fd: OwnedFd,
    /// The line's settings as they were found.
    found: Termios,
    /// Bytes of a marked error whose rest has not come yet.
    held: Vec<u8>,
}

/// What was heard since the last time.
#[derive(Clone, Debug, Default, PartialEq, Eq)]
pub struct Sound {
    /// The bytes; those with an error are left out.
    pub bytes: Vec<u8>,
    /// Bytes with a wrong parity or a missing stop bit.
    pub errors: usize,
}

impl Ear {
    /// Opens the port for reading alone and locks it.
    ///
    /// # Errors
    /// In words, with what to try; a port of another program is named with that program.
    pub fn open(path: &str) -> Result<Self, String> {
        let flags = OFlags::RDONLY | OFlags::NOCTTY | OFlags::NONBLOCK | OFlags::CLOEXEC;
        let fd = rustix::fs::openat(CWD, path, flags, Mode::empty()).map_err(|e| not_opened(path, e))?;
        if !rustix::termios::isatty(&fd) {
            return Err(format!("{path}: it is not a serial port; `tarecup ports` lists those of this machine"));
        }
        match rustix::fs::flock(&fd, FlockOperation::NonBlockingLockExclusive) {
            Ok(()) => {}
            Err(Errno::WOULDBLOCK) => return Err(taken(path)),
            Err(e) => return Err(format!("{path}: it cannot be locked for this program alone ({e}); use a local device")),
        }
        let found = rustix::termios::tcgetattr(&fd).map_err(|e| lost(path, e))?;
        Ok(Self { path: path.into(), fd, found, held: Vec::new() })
    }

    /// Sets speed and character frame. What was heard before is forgotten.
    ///
    /// # Errors
    /// When the port cannot be set so.
    pub fn tune(&mut self, baud: u32, frame: CharFrame) -> Result<(), String> {
        let unset = |e: Errno| {
            let frame = String::from(frame);
            format!("{}: the line cannot be set to {baud} baud, {frame} ({e}); try another adapter", self.path)
        };
        let mut line = self.found.clone();
        shape(&mut line, frame);
        line.set_speed(baud).map_err(unset)?;
        rustix::termios::tcsetattr(&self.fd, OptionalActions::Now, &line).map_err(unset)?;
        self.held.clear();
        // What came at the old speed is noise at the new one.
        while self.read(&mut [0; 4096]).map_err(|e| lost(&self.path, e))? > 0 {}
        Ok(())
    }

    /// Waits for bytes, at most so long.
    ///
    /// # Errors
    /// When the port is gone.
    pub fn hear(&mut self, wait: Duration) -> Result<Sound, String> {
        let until = Instant::now() + wait;
        let mut room = [0; 4096];
        loop {
            let n = self.read(&mut room).map_err(|e| lost(&self.path, e))?;
            if n > 0 {
                self.held.extend_from_slice(&room[..n]);
                return Ok(unmarked(&mut self.held));
            }
            if Instant::now() >= until {
                return Ok(Sound::default());
            }
            std::thread::sleep(LOOK);
        }
    }

    fn read(&self, room: &mut [u8]) -> Result<usize, Errno> {
        match rustix::io::read(&self.fd, room) {
            Ok(n) => Ok(n),
            Err(Errno::AGAIN | Errno::INTR) => Ok(0),
            Err(e) => Err(e),
        }
    }
}

impl Drop for Ear {
    fn drop(&mut self) {
        // The next program finds the line as we found it.
        let _ = rustix::termios::tcsetattr(&self.fd, OptionalActions::Now, &self.found);
    }
}

/// A line that hands on every byte and answers none: no echo, no flow control by characters, no order to hang up.
fn shape(line: &mut Termios, frame: CharFrame) {
    line.make_raw();
    line.input_modes |= InputModes::INPCK | InputModes::PARMRK;
    line.input_modes -= InputModes::IGNPAR | InputModes::IXON | InputModes::IXOFF | InputModes::IXANY;
    let parity = ControlModes::PARENB | ControlModes::PARODD;
    line.control_modes -= ControlModes::CSIZE | parity | ControlModes::CSTOPB | ControlModes::HUPCL | ControlModes::CRTSCTS;
    line.control_modes |= ControlModes::CREAD | ControlModes::CLOCAL;
    line.control_modes |= match frame.data_bits {
        5 => ControlModes::CS5,
        6 => ControlModes::CS6,
        7 => ControlModes::CS7,
        _ => ControlModes::CS8,
    };
    line.control_modes |= match frame.parity {
        'E' => ControlModes::PARENB,
        'O' => parity,
        _ => ControlModes::empty(),
    };
    if frame.stop_bits == 2 {
        line.control_modes |= ControlModes::CSTOPB;
    }
}

/// Takes the kernel's marks out: FF 00 x is a byte x with an error, FF FF the byte FF.
fn unmarked(held: &mut Vec<u8>) -> Sound {
    let mut sound = Sound::default();
    let mut at = 0;
    while at < held.len() {
        match held[at..] {
            [0xFF, 0xFF, ..] => {
                sound.bytes.push(0xFF);
                at += 2;
            }
            [0xFF, 0x00, _, ..] => {
                sound.errors += 1;
                at += 3;
            }
            [0xFF] | [0xFF, 0x00] => break,
            [byte, ..] => {
                sound.bytes.push(byte);
                at += 1;
            }
            [] => break,
        }
    }
    held.drain(..at);
    sound
}

fn taken(path: &str) -> String {
    let says = busy(path);
    if says.contains("'tarecup'") {
        return format!("{says} (the service listens there: stop `tarecup run` while learning)");
    }
    says
}

fn lost(path: &str, error: Errno) -> String {
    format!("{path}: the port is gone ({error}); plug it in again and start anew")
}

fn not_opened(path: &str, error: Errno) -> String {
    match error {
        Errno::NOENT | Errno::NOTDIR => format!("{path}: there is nothing; `tarecup ports` lists the ports of this machine"),
        Errno::BUSY => taken(path),
        Errno::ACCESS | Errno::PERM => {
            format!("{path}: no permission to open it; give this user the group that owns the device (often 'dialout')")
        }
        other => format!("{path}: it cannot be opened ({other}); `tarecup ports` lists the ports of this machine"),
    }
}

/// How much like text bytes are, from 0 to 1. A wrong speed gives control
/// characters, bytes with the eighth bit, and errors.
pub fn likeness(sound: &Sound) -> f64 {
    let all = sound.bytes.len() + 2 * sound.errors;
    // Seven bits with parity look like text without the eighth.
    let parity = [0, 1].iter().any(|odd| sound.bytes.iter().all(|b| b.count_ones() % 2 == *odd));
    let mask = if parity && sound.bytes.len() >= 16 { 0x7F } else { 0xFF };
    let text = |b: &&u8| {
        let b = **b & mask;
        b.is_ascii_graphic() || matches!(b, b' ' | b'\r' | b'\n' | b'\t' | 0x01..=0x04 | 0x0C)
    };
    if all == 0 { 0.0 } else { sound.bytes.iter().filter(text).count() as f64 / all as f64 }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn marks_of_errors_are_taken_out_however_they_are_split() {
        let mut held = b"ab\xFF\x00c\xFF\xFFd\xFF".to_vec();
        assert_eq!(unmarked(&mut held), Sound { bytes: b"ab\xFFd".to_vec(), errors: 1 });
        assert_eq!(held, b"\xFF");
        held.extend(b"\x00zq");
        assert_eq!(unmarked(&mut held), Sound { bytes: b"q".to_vec(), errors: 1 });
    }

    #[test]
    fn text_is_told_from_a_wrong_speed() {
        let sound = |bytes: &[u8], errors| Sound { bytes: bytes.to_vec(), errors };
        assert!(likeness(&sound(b"  12.34 g\r\n  12.34 g\r\n", 0)) > 0.99);
        let even: Vec<u8> =
            b"  12.34 g\r\n  12.34 g\r\n".iter().map(|b| if b.count_ones() % 2 == 1 { b | 0x80 } else { *b }).collect();
        assert!(likeness(&sound(&even, 0)) > 0.99);
        assert!(likeness(&sound(b"\x80\xE6\x18\x00\xFE\x66\x98\x06\x1E\x9F", 3)) < 0.3);
        assert!(likeness(&sound(b"12.34 g\r\n", 9)) < 0.5);
    }

    #[test]
    fn what_is_not_a_port_is_refused_in_words() {
        for (path, word) in [("/dev/null", "not a serial port"), ("/nowhere/at/all", "tarecup ports")] {
            assert!(Ear::open(path).expect_err("refused").contains(word));
        }
    }
}
