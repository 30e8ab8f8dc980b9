//! What frames lines, and what befalls them on the way.

use super::check::Check;
use super::{Reading, pick, size};
use crate::rng::Rng;

/// How frames begin and end.
#[derive(Clone, Debug)]
pub(super) struct Wrap {
    pub start: &'static [u8],
    pub end: &'static [u8],
    pub check: Option<Check>,
    /// Between body and check value.
    pub before_check: &'static [u8],
    /// Sent after everything, such as a line end after ETX.
    pub after: &'static [u8],
}

/// A message and what it says.
#[derive(Clone, Debug)]
pub(super) struct Frame<T> {
    pub bytes: Vec<u8>,
    pub says: Option<T>,
    /// Where in `bytes` the number begins and ends.
    pub number: (usize, usize),
}

/// Something that must be read, or only may.
pub(super) trait Says: Clone {
    fn only_may(&mut self);
}

impl Says for Reading {
    fn only_may(&mut self) {
        self.must = false;
    }
}

/// Several things said by one message, as slips do.
impl<T: Says> Says for Vec<T> {
    fn only_may(&mut self) {
        self.iter_mut().for_each(Says::only_may);
    }
}

impl Says for (super::Count, bool) {
    fn only_may(&mut self) {
        self.1 = false;
    }
}

impl Says for super::Code {
    fn only_may(&mut self) {
        self.must = false;
    }
}

impl Wrap {
    /// Only a terminator.
    pub fn plain(end: &'static [u8]) -> Self {
        Self { start: b"", end, check: None, before_check: b"", after: b"" }
    }

    pub fn invent(rng: &mut Rng) -> Self {
        let end: &'static [u8] = match rng.between(0, 99) {
            0..=44 => b"\r\n",
            45..=57 => b"\r",
            58..=68 => b"\n",
            69..=73 => b"\n\r",
            74..=85 => b"\x03",
            86..=89 => b";",
            90..=92 => b"\0",
            _ => b"",
        };
        let mut wrap = Self::plain(end);
        if end == b"\x03" && rng.chance(0.85) || end != b"\x03" && rng.chance(0.07) {
            wrap.start = pick(rng, &[b"\x02", b"\x02", b"\x02", b"\x01"]);
        }
        if rng.chance(if end == b"\x03" { 0.6 } else { 0.13 }) {
            let mut check = Check::invent(rng);
            let line = !matches!(end, b"\x03");
            // Behind a line end nobody puts a check value.
            check.after_end &= !line;
            check.with_end &= check.after_end;
            check.with_start &= !wrap.start.is_empty();
            wrap.check = Some(check);
            wrap.before_check = pick(rng, &[b"".as_slice(), b"", b" ", b"/"]);
            if check.after_end || wrap.end == b";" {
                wrap.before_check = b"";
            }
        }
        if end == b"\x03" && rng.chance(0.3) {
            wrap.after = pick(rng, &[b"\r\n".as_slice(), b"\r"]);
        }
        wrap
    }

    /// Puts a body into its frame.
    pub fn frame<T: Says>(&self, body: &[u8], number: (usize, usize), says: Option<T>) -> Frame<T> {
        let mut bytes = self.start.to_vec();
        bytes.extend_from_slice(body);
        let mut value = Vec::new();
        if let Some(check) = self.check {
            bytes.extend_from_slice(self.before_check);
            let from = if check.with_start { 0 } else { self.start.len() };
            if !check.after_end {
                value = check.of(&bytes[from..]);
                bytes.extend_from_slice(&value);
                bytes.extend_from_slice(self.end);
            } else {
                let body_end = bytes.len();
                bytes.extend_from_slice(self.end);
                let to = if check.with_end { bytes.len() } else { body_end };
                value = check.of(&bytes[from..to]);
                bytes.extend_from_slice(&value);
            }
        } else {
            bytes.extend_from_slice(self.end);
        }
        bytes.extend_from_slice(self.after);
        let mut says = says;
        // A binary check value may look like what frames the message: then even its own maker's program may miss it.
        if value.iter().any(|b| b.is_ascii_control() || b.is_ascii_whitespace() || self.end.contains(b))
            && self.check.is_some_and(|c| !c.hex)
            && let Some(says) = &mut says
        {
            says.only_may();
        }
        let shift = self.start.len();
        Frame { bytes, says, number: (number.0 + shift, number.1 + shift) }
    }

    /// For people.
    pub fn about(&self) -> String {
        let check = self.check.map(|c| format!(", {}", c.about())).unwrap_or_default();
        format!("start {:?} end {:?}{check}", String::from_utf8_lossy(self.start), String::from_utf8_lossy(self.end))
    }

    /// Nothing tells where a frame begins but its place.
    pub fn by_length(&self) -> bool {
        self.end.is_empty()
    }
}

/// What befalls a capture on its way.
#[derive(Clone, Copy, Debug, Default)]
pub(super) struct Fate {
    pub cut_first: bool,
    pub cut_last: bool,
    pub noise: bool,
    pub echo: bool,
    pub banner: bool,
    /// All frames have as many bytes, so that a lost byte shows.
    pub even: bool,
}

impl Fate {
    pub fn invent(rng: &mut Rng, wrap: &Wrap, even: bool) -> Self {
        if wrap.by_length() {
            // Without beginning and end, one lost byte shifts everything that follows.
            return Self { even, ..Self::default() };
        }
        Self {
            cut_first: rng.chance(0.25),
            cut_last: rng.chance(0.25),
            noise: rng.chance(0.15),
            echo: rng.chance(0.05),
            banner: rng.chance(0.07),
            even,
        }
    }
}

/// Joins frames as they arrive; what they say is what can still be read.
pub(super) fn join<T: Says>(rng: &mut Rng, mut frames: Vec<Frame<T>>, wrap: &Wrap, fate: Fate) -> (Vec<u8>, Vec<T>) {
    if fate.noise {
        disturb(rng, &mut frames, wrap, fate.even);
    }
    if wrap.check.is_some() && frames.len() >= 12 && rng.chance(0.4) {
        flip(rng, &mut frames);
    }
    if fate.echo {
        echo(rng, &mut frames, wrap);
    }
    if fate.banner {
        let text = pick(rng, &["READY 2.1", "-- hello --", "unit 7 rev 1.04", "self test ok"]);
        frames
            .insert(0, Frame { bytes: [wrap.start, text.as_bytes(), wrap.end, wrap.after].concat(), says: None, number: (0, 0) });
    }
    if fate.cut_first && frames.len() > 1 {
        cut_first(rng, &mut frames[0]);
    }
    if fate.cut_last && frames.len() > 2 {
        cut_last(rng, &mut frames, wrap);
    }
    let said = frames.iter().filter_map(|f| f.says.clone()).collect();
    (frames.into_iter().flat_map(|f| f.bytes).collect(), said)
}

fn cut_first<T: Says>(rng: &mut Rng, frame: &mut Frame<T>) {
    let cut = size(rng, 1, frame.bytes.len() - 1);
    let (from, to) = frame.number;
    let lost = &frame.bytes[from.min(cut)..to.min(cut)];
    // Zeros and a plus can be lost without harm; all else makes another number of it, or none.
    if !lost.iter().all(|b| matches!(b, b'0' | b' ' | b'+')) || cut >= to {
        frame.says = None;
    } else if let Some(says) = &mut frame.says {
        says.only_may();
    }
    frame.bytes.drain(..cut);
}

fn cut_last<T: Says>(rng: &mut Rng, frames: &mut [Frame<T>], wrap: &Wrap) {
    let Some(frame) = frames.last_mut() else { return };
    let keep = size(rng, 1, frame.bytes.len() - 1);
    let tail = wrap.end.len() + wrap.after.len() + wrap.check.map_or(0, |_| 8);
    if keep + tail < frame.bytes.len() || keep < frame.number.1 {
        frame.says = None;
    } else if let Some(says) = &mut frame.says {
        says.only_may();
    }
    frame.bytes.truncate(keep);
}

/// Bytes that no dialect here uses.
fn garbage(rng: &mut Rng, most: usize) -> Vec<u8> {
    let count = size(rng, 1, most);
    (0..count).map(|_| u8::try_from(rng.between(0x80, 0xFF)).unwrap_or(0xFF)).collect()
}

fn disturb<T: Says>(rng: &mut Rng, frames: &mut Vec<Frame<T>>, wrap: &Wrap, even: bool) {
    let at = size(rng, frames.len() / 4, frames.len() - 1);
    match rng.between(0, if even && frames.len() >= 20 { 3 } else { 2 }) {
        0 => {
            let bytes = [garbage(rng, 9), wrap.end.to_vec()].concat();
            frames.insert(at, Frame { bytes, says: None, number: (0, 0) });
        }
        1 => {
            let frame = &mut frames[at];
            frame.bytes.splice(0..0, garbage(rng, 4));
            if let Some(says) = &mut frame.says {
                says.only_may();
            }
        }
        2 => {
            let frame = &mut frames[at];
            let place = size(rng, frame.number.0, frame.number.1.max(frame.number.0 + 1) - 1);
            if let Some(byte) = frame.bytes.get_mut(place) {
                *byte = 0xFF;
                frame.says = None;
            }
        }
        _ => {
            let frame = &mut frames[at];
            let (from, to) = frame.number;
            if to > from {
                lose(frame, from, size(rng, from, to - 1));
            }
        }
    }
}

/// Loses one byte of a number. Without a plus, a blank or a zero in front it is still the same number.
fn lose<T: Says>(frame: &mut Frame<T>, from: usize, at: usize) {
    let in_front = frame.bytes[from..=at].iter().all(|b| matches!(b, b'+' | b'-' | b' ' | b'0'));
    if !in_front || frame.bytes[at] == b'-' {
        frame.says = None;
    } else if let Some(says) = &mut frame.says {
        says.only_may();
    }
    frame.bytes.remove(at);
}

/// Changes one digit of one frame, so that its check value does not agree.
fn flip<T: Says>(rng: &mut Rng, frames: &mut [Frame<T>]) {
    let at = size(rng, frames.len() / 2, frames.len() - 2);
    let frame = &mut frames[at];
    let (from, to) = frame.number;
    let Some(place) = (from..to).rev().find(|i| frame.bytes[*i].is_ascii_digit()) else { return };
    let other = if frame.bytes[place] == b'3' { b'8' } else { b'3' };
    frame.bytes[place] = other;
    frame.says = None;
}

/// The question that the host put before each answer, sent back by the instrument.
fn echo<T: Says>(rng: &mut Rng, frames: &mut Vec<Frame<T>>, wrap: &Wrap) {
    let question = pick(rng, &["?", "SEND", "W", "ask m"]);
    let echo = Frame { bytes: [question.as_bytes(), wrap.end].concat(), says: None, number: (0, 0) };
    let old = std::mem::take(frames);
    for frame in old {
        frames.push(echo.clone());
        frames.push(frame);
    }
}
