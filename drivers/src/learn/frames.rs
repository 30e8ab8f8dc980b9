//! Where lines end, and how frames without an end are found.

use super::{BYTES_MAX, Piece, Refusal};
use crate::frame::{Framer, Framing, How};
use crate::profile::text::FrameText;
use std::collections::BTreeSet;

/// Lines that are looked at; more would not teach more.
const FRAMES_MAX: usize = 30_000;
/// The longest line that is tried, in bytes.
const LONGEST: usize = 240;
/// A pause that parts frames, in microseconds.
const GAP_US: i64 = 30_000;

/// Everything that was heard.
#[derive(Clone, Debug)]
pub(super) struct Heard {
    pub(super) bytes: Vec<u8>,
    /// Places before which there was a pause.
    pub(super) gaps: Vec<usize>,
}

impl Heard {
    pub(super) fn new(pieces: &[Piece<'_>]) -> Self {
        let mut heard = Heard { bytes: Vec::new(), gaps: Vec::new() };
        let mut last: Option<i64> = None;
        for piece in pieces {
            if let (Some(at), Some(before)) = (piece.at_us, last)
                && at.saturating_sub(before) >= GAP_US
            {
                heard.gaps.push(heard.bytes.len());
            }
            last = piece.at_us.or(last);
            let room = BYTES_MAX.saturating_sub(heard.bytes.len());
            heard.bytes.extend_from_slice(&piece.bytes[..piece.bytes.len().min(room)]);
        }
        heard
    }

    fn count(&self, byte: u8) -> usize {
        self.bytes.iter().filter(|b| **b == byte).count()
    }

    fn occurrences(&self, text: &[u8]) -> usize {
        self.bytes.windows(text.len()).filter(|w| *w == text).count()
    }
}

/// One way to cut frames.
#[derive(Clone, Debug, Default)]
pub(super) struct Guess {
    pub(super) frame: FrameText,
    /// The end may be a mark inside frames of one length that have no end.
    pub(super) doubtful: bool,
}

impl Guess {
    fn ends(starts: Option<u8>, end: &[u8], tail: usize) -> Self {
        let text = |bytes: &[u8]| bytes.iter().map(|b| char::from(*b)).collect::<String>();
        let starts = starts.map(|b| text(&[b])).unwrap_or_default();
        Self { frame: FrameText { ends: vec![text(end)], starts, tail, ..FrameText::default() }, doubtful: false }
    }

    fn framing(&self) -> Option<Framing> {
        if self.frame.length.is_some() {
            return Framing::fixed(self.frame.columns.as_bytes()).ok();
        }
        let ends: Vec<Vec<u8>> = self.frame.ends.iter().map(|e| e.clone().into_bytes()).collect();
        let framing = Framing::new(
            &ends,
            self.frame.starts.as_bytes(),
            self.frame.single.as_bytes(),
            self.frame.tail,
            crate::frame::LONGEST_DEFAULT,
        );
        framing.ok().map(Framing::with_raw_tail)
    }
}

/// A frame as it was cut.
#[derive(Clone, Debug)]
pub(super) struct Frame {
    pub(super) start: Vec<u8>,
    pub(super) body: Vec<u8>,
    pub(super) end: Vec<u8>,
    pub(super) tail: Vec<u8>,
    /// Its place among everything the framer cut.
    pub(super) at: usize,
}

/// Cuts frames with the framer of the service.
pub(super) fn cut(heard: &Heard, guess: &Guess) -> Result<Vec<Frame>, Refusal> {
    let none = || Refusal::new(None, 0, "no line end was found: see that speed and frame are right, and send more lines");
    let framing = guess.framing().ok_or_else(none)?;
    let mut framer = Framer::new(framing.clone());
    framer.opened(true);
    let (mut frames, mut at) = (Vec::new(), 0);
    framer.push(&heard.bytes, |piece| {
        if piece.how == How::Whole
            && frames.len() < FRAMES_MAX
            && let Some(p) = framing.parts(piece.bytes)
        {
            let own = |b: &[u8]| b.to_vec();
            frames.push(Frame { start: own(p.start), body: own(p.body), end: own(p.end), tail: own(p.tail), at });
        }
        at += 1;
    });
    let spoken = frames.iter().filter(|f| !f.body.trim_ascii().is_empty()).count();
    if spoken < 3 {
        return Err(Refusal::new(None, 1, "too few lines were heard: load and unload the pan once more, or make a few drops"));
    }
    Ok(frames)
}

/// The line end made of CR and LF, if there is one.
fn newline(heard: &Heard) -> Option<&'static [u8]> {
    let (cr, lf) = (heard.count(b'\r'), heard.count(b'\n'));
    let (crlf, lfcr) = (heard.occurrences(b"\r\n"), heard.occurrences(b"\n\r"));
    let doubled = heard.occurrences(b"\r\r\n");
    let most = cr.max(lf);
    if most == 0 {
        return None;
    }
    Some(match () {
        () if doubled > 1 && doubled * 10 >= lf * 9 => b"\r\r\n",
        () if crlf.max(lfcr) * 2 < most => {
            if cr >= lf {
                b"\r"
            } else {
                b"\n"
            }
        }
        () if crlf >= lfcr => b"\r\n",
        () => b"\n\r",
    })
}

/// Whether frames so ended are short and many enough to be lines.
fn plausible(heard: &Heard, end: &[u8]) -> bool {
    let n = heard.occurrences(end);
    n >= 1 && heard.bytes.len() / n <= LONGEST
}

/// Control characters that end frames, most usual first.
const CONTROLS: [u8; 9] = [0x03, 0x04, 0x17, 0x1E, 0x00, 0x1D, 0x1C, 0x1F, 0x0C];
/// Printed characters that end frames.
const PRINTED: &[u8] = b";#|*$!>/&%@^~\\})=:?";

/// Every way worth trying, the most telling first.
pub(super) fn candidates(heard: &Heard) -> Vec<Guess> {
    let mut out = Vec::new();
    let newline = newline(heard).filter(|e| plausible(heard, e));
    for start in [0x02, 0x01] {
        if heard.count(start) >= 2 {
            started(heard, start, newline, &mut out);
        }
    }
    if let Some(end) = newline {
        if let Some(single) = single_byte(heard) {
            let mut guess = Guess::ends(None, end, 0);
            guess.frame.single = char::from(single).to_string();
            out.push(guess);
        }
        if heard.occurrences(&[end, b"\x0C"].concat()) >= 2 {
            // Slips that a form feed ends.
            let mut guess = Guess::ends(None, end, 0);
            guess.frame.ends.push("\u{C}".into());
            out.push(guess);
        }
        for before in [0x03, 0x04] {
            let both = [&[before], end].concat();
            if heard.occurrences(&both) * 10 >= heard.occurrences(end) * 8 {
                out.push(Guess::ends(None, &both, 0));
            }
        }
        out.push(Guess::ends(None, end, 0));
        for tail in [2, 4, 1] {
            out.push(Guess::ends(None, end, tail));
        }
        return out;
    }
    let found = out.len();
    for end in CONTROLS.iter().filter(|c| heard.count(**c) >= 2 && plausible(heard, &[**c])) {
        if let Some(single) = single_byte(heard) {
            let mut guess = Guess::ends(None, &[*end], 0);
            guess.frame.single = char::from(single).to_string();
            out.push(guess);
        }
        // Check digits behind the end first: they must agree, and without them they would be taken for text.
        for tail in [2, 4, 1, 0] {
            out.push(Guess::ends(None, &[*end], tail));
        }
    }
    if out.len() > found {
        return out;
    }
    let spoken = heard.bytes.iter().filter(|b| !b.is_ascii_whitespace()).count();
    if let Some(single) = single_byte(heard).filter(|s| heard.count(*s) == spoken) {
        let frame = FrameText { single: char::from(single).to_string(), ..FrameText::default() };
        out.push(Guess { frame, doubtful: false });
    }
    let period = super::periodic::length(&heard.bytes);
    let tab = heard.count(b'\t') >= 2 && plausible(heard, b"\t");
    let printed = PRINTED.iter().filter(|c| plausible(heard, &[**c]) && regular(heard, **c));
    // What is seldom an end must at least end what was heard, and only where nothing more usual does.
    let semicolon = regular(heard, b';');
    let usual = |c: u8| matches!(c, b';' | b'\t') || (!semicolon && heard.bytes.last() == Some(&c));
    for end in printed.filter(|c| usual(**c)).chain(tab.then_some(&b'\t')) {
        if let Some(doubtful) = inside(heard, *end, period) {
            out.push(Guess { doubtful, ..Guess::ends(None, &[*end], 0) });
        }
    }
    out.extend(super::periodic::candidates(heard));
    out
}

/// Frames that begin with a start byte: the end is what stands before the next start.
fn started(heard: &Heard, start: u8, newline: Option<&'static [u8]>, out: &mut Vec<Guess>) {
    let segments: Vec<&[u8]> = heard.bytes.split(|b| *b == start).skip(1).collect();
    let segments = &segments[..segments.len().saturating_sub(1)];
    if segments.is_empty() {
        return;
    }
    let mut ends: Vec<Vec<u8>> = Vec::new();
    if let Some(newline) = newline {
        for before in [0x03, 0x04] {
            ends.push([&[before], newline].concat());
        }
        ends.push(newline.to_vec());
    }
    ends.extend(CONTROLS.iter().map(|c| vec![*c]));
    ends.extend([b"\r".to_vec(), b"\n".to_vec()]);
    ends.extend(PRINTED.iter().map(|c| vec![*c]));
    for end in ends {
        for tail in [0, 2, 1, 4] {
            let fits = |s: &&&[u8]| s.len() > tail + end.len() && s[..s.len() - tail].ends_with(&end);
            if segments.iter().filter(fits).count() * 5 >= segments.len() * 4 {
                out.push(Guess::ends(Some(start), &end, tail));
            }
        }
    }
}

/// Whether changing hexadecimal digits stand behind the end of started frames, before something that stays.
pub(super) fn digits_behind(heard: &Heard, guess: &Guess) -> bool {
    let (Some(start), Some(end)) = (guess.frame.starts.bytes().next(), guess.frame.ends.first()) else { return false };
    let behind = |s: &[u8]| s.windows(end.len()).position(|w| w == end.as_bytes()).map(|at| s[at + end.len()..].to_vec());
    let segments: Vec<Vec<u8>> = heard.bytes.split(|b| *b == start).skip(1).filter_map(behind).collect();
    guess.frame.tail == 0
        && [2, 4].into_iter().any(|n| {
            let headed = segments.iter().filter(|b| b.len() >= n && b[..n].iter().all(u8::is_ascii_hexdigit));
            let (heads, tails): (BTreeSet<&[u8]>, BTreeSet<&[u8]>) = headed.clone().map(|b| b.split_at(n)).unzip();
            headed.count() * 2 >= segments.len() && heads.len() >= 3 && tails.len() <= 4
        })
}

/// A character that cuts everything into pieces of much the same length, but for questions sent back and single odd ones.
fn regular(heard: &Heard, end: u8) -> bool {
    let pieces: Vec<usize> = heard.bytes.split(|b| *b == end).map(<[u8]>::len).collect();
    let inner = pieces.get(1..pieces.len().saturating_sub(1)).unwrap_or_default();
    let mut long: Vec<usize> = inner.iter().copied().filter(|n| *n >= 6).collect();
    if long.len() * 5 < inner.len() * 2 {
        long = inner.to_vec();
    }
    long.sort_unstable();
    let Some(&median) = long.get(long.len() / 2) else { return false };
    let odd = long.iter().filter(|n| **n * 2 + 8 < median || **n > median * 2 + 8).count();
    inner.len() >= 3 && median >= 2 && odd * 20 <= long.len()
}

/// Whether a character may stand inside frames of one length instead of ending them; `None` where it parts their fields.
fn inside(heard: &Heard, end: u8, period: Option<usize>) -> Option<bool> {
    let Some(length) = period else { return Some(false) };
    let pieces: Vec<&[u8]> = heard.bytes.split(|b| *b == end).collect();
    let inner = pieces.get(1..pieces.len().saturating_sub(1)).unwrap_or_default();
    // Pieces of one length each are the frames themselves.
    let even = inner.iter().map(|p| p.len()).collect::<BTreeSet<_>>().len() == 1;
    let per_frame = if even { 1.0 } else { heard.count(end) as f64 / (heard.bytes.len() as f64 / length as f64) };
    // Of two pieces one may be a question that the instrument sends back.
    let constant = |from: usize| inner.iter().skip(from).step_by(2).collect::<BTreeSet<_>>().len() == 1;
    match () {
        () if per_frame > 2.5 => None,
        () if per_frame > 1.5 && !(constant(0) || constant(1)) => None,
        () => Some(heard.bytes.last() != Some(&end)),
    }
}

/// A mark that is sent by itself: one byte for each drop.
fn single_byte(heard: &Heard) -> Option<u8> {
    let alike = heard.bytes.windows(2).all(|w| w[0] == w[1]);
    let part_of_numbers = |b: u8| b.is_ascii_alphanumeric() || matches!(b, b'+' | b'-' | b',');
    let own = |b: u8| b.is_ascii_graphic() && (!part_of_numbers(b) || (alike && !b.is_ascii_digit()));
    let mut runs = heard.bytes.chunk_by(|a, b| a == b).filter(|r| own(r[0]) || r[0] == 0x07);
    let first = runs.next()?[0];
    let alone = heard.bytes.iter().filter(|b| **b == first).count();
    let others = heard.bytes.chunk_by(|a, b| (*a == first) == (*b == first)).filter(|r| r[0] == first);
    let runs: Vec<usize> = others.map(<[u8]>::len).collect();
    // Hardly anything else is heard of such a counter.
    (alone >= 5 && alone * 2 >= heard.bytes.len() && runs.iter().all(|n| *n >= 3)).then_some(first)
}

#[cfg(test)]
mod tests {
    use super::*;

    fn heard(text: &str) -> Heard {
        Heard::new(&[Piece { at_us: None, bytes: text.as_bytes() }])
    }

    #[test]
    fn line_ends_are_told_apart() {
        for (text, end) in [
            ("1 g\r\n2 g\r\n3 g\r\n", "\r\n"),
            ("1 g\n\r2 g\n\r3 g\n\r", "\n\r"),
            ("1 g\r2 g\r3 g\r", "\r"),
            ("1 g\n2 g\n3 g\n", "\n"),
            ("1 g\r\r\n2 g\r\r\n3 g\r\r\n", "\r\r\n"),
            ("G 1 g\r\nN 2 g\r\n\r\nG 3 g\r\n", "\r\n"),
            ("\x021 g\x03\x022 g\x03\x023 g\x03", "\x03"),
            ("\x021 g\x03\r\n\x022 g\x03\r\n\x023 g\x03\r\n", "\x03\r\n"),
            ("1.00 g;2.00 g;3.00 g;4.00 g;5.00 g;", ";"),
            ("1 g\x002 g\x003 g\x00", "\0"),
        ] {
            let found = candidates(&heard(text));
            assert_eq!(found.first().map(|g| g.frame.ends.clone()), Some(vec![end.to_owned()]), "{text:?}");
        }
    }

    #[test]
    fn check_digits_after_the_end_are_left_to_it() {
        let found = candidates(&heard("\x021 g\x034F\x022 g\x03A0\x023 g\x031B\x02"));
        assert_eq!((found[0].frame.tail, found[0].frame.starts.as_str()), (2, "\u{2}"));
    }

    #[test]
    fn pauses_are_kept_only_with_times() {
        let pieces = [(0, "ab"), (10_000, "cd"), (90_000, "ef")].map(|(at, t)| Piece { at_us: Some(at), bytes: t.as_bytes() });
        assert_eq!(Heard::new(&pieces).gaps, [4]);
        assert!(heard("abcd").gaps.is_empty());
    }
}
