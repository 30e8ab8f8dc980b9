//! Bounded framing of bytes, pure: chunks of any size in, whole frames out.
//!
//! Whatever way the bytes were split over reads, the frames are the same.
//! Every byte ends up in exactly one frame, apart from the remainder of a
//! frame that was too long, which is skipped and counted. Memory is bounded by
//! the longest frame the dialect allows.
//!
//! A number whose first digits were sent before the port was opened looks like
//! another number: `2.34 g` may be the tail of `12.34 g`. So the first frame
//! after opening is believed only when its beginning was certainly heard.

/// Longest frame unless a profile says otherwise, in bytes.
pub const LONGEST_DEFAULT: usize = 256;
/// The most a profile may ask for, in bytes.
pub const LONGEST_MAX: usize = 16_384;
/// Longest terminator, in bytes.
pub const END_MAX: usize = 8;

const END: u8 = 1;
const START: u8 = 2;
const SINGLE: u8 = 4;
const TAIL_OF_END: u8 = 8;

/// How frames of a dialect begin and end.
#[derive(Clone, Debug)]
pub struct Framing {
    /// Longest first, so that CR LF is preferred to LF.
    ends: Vec<Vec<u8>>,
    class: Box<[u8; 256]>,
    longest: usize,
    tail: usize,
    has_starts: bool,
    /// Bytes after the terminator may be any, also a start byte.
    raw_tail: bool,
    /// What a frame without terminator looks like, column by column.
    columns: Vec<u8>,
}

/// Why a framing cannot work.
#[derive(Clone, Debug, PartialEq, Eq, thiserror::Error)]
pub enum FramingFault {
    /// Nothing ever ends a frame.
    #[error("frames never end; give 'ends', such as [\"\\r\\n\"], or 'single' bytes")]
    NoEnd,
    /// A terminator of no bytes or of too many.
    #[error("a terminator has {0} bytes; write 1 to 8")]
    EndLength(usize),
    /// More terminators than any dialect has.
    #[error("{0} terminators; at most 8 fit")]
    TooManyEnds(usize),
    /// One terminator continues another by more than one byte.
    #[error("one terminator continues another by more than one byte, so the shorter would always win; leave one of them out")]
    Ambiguous,
    /// A start or single byte is also part of a terminator, or both at once.
    #[error("the byte {0:#04x} has two duties; a start, a single byte and a terminator need different bytes")]
    TwoDuties(u8),
    /// The longest frame is out of range.
    #[error("the longest frame is {0} bytes; choose 8 to 16384")]
    Longest(usize),
    /// Columns that would be found anywhere, or too few or many of them.
    #[error("the columns must be 2 to 256 and one of them a character of its own, or no frame could be found again")]
    Columns,
    /// Too many bytes after the terminator.
    #[error("{0} bytes after the terminator; at most 8 fit")]
    Tail(usize),
}

/// A cut-out frame.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub struct Piece<'a> {
    /// The exact bytes, terminator included.
    pub bytes: &'a [u8],
    /// Whether it can be believed.
    pub how: How,
}

/// How a frame came to its end.
#[derive(Clone, Copy, Debug, PartialEq, Eq, Hash)]
pub enum How {
    /// From its true beginning to its terminator.
    Whole,
    /// The first after opening; its beginning may be missing.
    FirstPartial,
    /// Only the first bytes of a frame longer than allowed.
    TooLong,
    /// Interrupted by the beginning of another frame, or without a start byte.
    Broken,
    /// The port was lost before the terminator came.
    CutOff,
}

impl Framing {
    /// Framing by terminators (`ends`), frames that must begin with one of the
    /// bytes `starts` (if any), bytes that are frames of their own (`singles`),
    /// and `tail` bytes after the terminator, such as check digits.
    pub fn new(ends: &[Vec<u8>], starts: &[u8], singles: &[u8], tail: usize, longest: usize) -> Result<Self, FramingFault> {
        check_ends(ends, singles)?;
        if tail > END_MAX {
            return Err(FramingFault::Tail(tail));
        }
        if !(8..=LONGEST_MAX).contains(&longest) {
            return Err(FramingFault::Longest(longest));
        }
        let mut class = Box::new([0u8; 256]);
        for (bytes, duty) in [(starts, START), (singles, SINGLE)] {
            for &b in bytes {
                if class[usize::from(b)] & !duty != 0 || ends.iter().any(|e| e.contains(&b)) {
                    return Err(FramingFault::TwoDuties(b));
                }
                class[usize::from(b)] |= duty;
            }
        }
        for end in ends {
            let last = end[end.len() - 1];
            class[usize::from(last)] |= END;
            let only_last = ends.iter().all(|e| !e[..e.len() - 1].contains(&last));
            if end.len() > 1 && only_last {
                class[usize::from(last)] |= TAIL_OF_END;
            }
        }
        let mut ends = ends.to_vec();
        ends.sort_by_key(|e| std::cmp::Reverse(e.len()));
        let has_starts = !starts.is_empty();
        Ok(Self { ends, class, longest, tail, has_starts, raw_tail: false, columns: Vec::new() })
    }

    /// The same where the bytes after the terminator are binary.
    pub(crate) fn with_raw_tail(self) -> Self {
        Self { raw_tail: true, ..self }
    }

    /// Framing without terminators: every frame has the same length and
    /// `columns`: `#` is a digit, `?` any byte, everything else itself.
    pub fn fixed(columns: &[u8]) -> Result<Self, FramingFault> {
        let own = columns.iter().any(|c| !matches!(c, b'#' | b'?'));
        if !own || !(2..=LONGEST_DEFAULT).contains(&columns.len()) {
            return Err(FramingFault::Columns);
        }
        let (class, columns) = (Box::new([0u8; 256]), columns.to_vec());
        let longest = columns.len().max(8);
        Ok(Self { ends: Vec::new(), class, longest, tail: 0, has_starts: false, raw_tail: false, columns })
    }

    /// Whether the bytes are a frame of fixed length.
    fn fits(&self, bytes: &[u8]) -> bool {
        let fits = |(c, b): (&u8, &u8)| match c {
            b'#' => b.is_ascii_digit(),
            b'?' => true,
            own => own == b,
        };
        bytes.len() == self.columns.len() && self.columns.iter().zip(bytes).all(fits)
    }

    /// The longest frame, in bytes.
    pub fn longest(&self) -> usize {
        self.longest
    }

    fn class(&self, byte: u8) -> u8 {
        self.class[usize::from(byte)]
    }

    /// The byte that would still belong to the terminator `end` just seen: LF
    /// after CR where both CR and CR LF end a frame.
    fn rest_of(&self, end: &[u8]) -> Option<u8> {
        self.ends.iter().find(|e| e.len() == end.len() + 1 && e.starts_with(end)).map(|e| e[end.len()])
    }

    fn is_rest(&self, byte: u8) -> bool {
        self.ends.iter().any(|e| self.rest_of(e) == Some(byte))
    }

    fn end_of<'a>(&'a self, open: &[u8]) -> Option<&'a [u8]> {
        self.ends.iter().map(Vec::as_slice).find(|e| open.ends_with(e))
    }

    /// Takes a frame's raw bytes apart. `None` when it is not a whole frame.
    pub fn parts<'a>(&self, frame: &'a [u8]) -> Option<Parts<'a>> {
        if !self.columns.is_empty() {
            // STX or SOH at the front is a start byte, as it is in frames with an end.
            let start = usize::from(matches!(self.columns[0], 0x01 | 0x02));
            let (start, body) = frame.split_at(start.min(frame.len()));
            return self.fits(frame).then_some(Parts { start, body, end: &[], tail: &[] });
        }
        // What is left of the previous terminator (LF of CR LF) is in front.
        let lead = usize::from(frame.len() > 1 && self.is_rest(frame[0]));
        if let [.., b] = frame
            && frame.len() == lead + 1
            && self.class(*b) & SINGLE != 0
        {
            return Some(Parts { start: &[], body: &frame[lead..], end: &[], tail: &[] });
        }
        let (front, tail) = frame.split_at(frame.len().checked_sub(self.tail)?);
        let end = self.end_of(front)?;
        let (body, end) = front.split_at(front.len() - end.len());
        let body = &body[lead.min(body.len())..];
        let (start, body) = match (self.has_starts, body) {
            (false, body) => body.split_at(0),
            (true, [first, ..]) if self.class(*first) & START != 0 => body.split_at(1),
            (true, _) => return None,
        };
        Some(Parts { start, body, end, tail })
    }
}

/// A frame taken apart.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub struct Parts<'a> {
    /// The start byte, where frames have one.
    pub start: &'a [u8],
    /// Between start byte and terminator.
    pub body: &'a [u8],
    /// The terminator.
    pub end: &'a [u8],
    /// What follows the terminator.
    pub tail: &'a [u8],
}

fn check_ends(ends: &[Vec<u8>], singles: &[u8]) -> Result<(), FramingFault> {
    if ends.is_empty() && singles.is_empty() {
        return Err(FramingFault::NoEnd);
    }
    if ends.len() > 8 {
        return Err(FramingFault::TooManyEnds(ends.len()));
    }
    for end in ends {
        if !(1..=END_MAX).contains(&end.len()) {
            return Err(FramingFault::EndLength(end.len()));
        }
        if ends.iter().any(|e| e.len() > end.len() + 1 && e.starts_with(end)) {
            return Err(FramingFault::Ambiguous);
        }
    }
    Ok(())
}

/// Cuts a stream of bytes into frames.
#[derive(Clone, Debug)]
pub struct Framer {
    framing: Framing,
    /// Bytes of the frame that has begun.
    open: Vec<u8>,
    /// How many bytes at the front of `open` belong to the previous terminator.
    lead: usize,
    /// The beginning of the open frame was heard.
    sure: bool,
    /// The open frame began with a start byte.
    started: bool,
    /// Bytes that still come after the terminator.
    tail_left: usize,
    /// A byte that, coming next, belongs to the terminator just seen.
    rest: Option<u8>,
    /// Inside the remainder of a frame that was too long.
    skipping: bool,
    /// Last bytes skipped, to find the terminator.
    recent: Vec<u8>,
    skipped: u64,
}

impl Framer {
    /// A framer of a port that has not been opened yet.
    pub fn new(framing: Framing) -> Self {
        Self {
            framing,
            open: Vec::new(),
            lead: 0,
            sure: false,
            started: false,
            tail_left: 0,
            rest: None,
            skipping: false,
            recent: Vec::new(),
            skipped: 0,
        }
    }

    /// The port was opened, and `quiet` for long enough that its first byte
    /// begins a frame. Anything left from before is forgotten.
    pub fn opened(&mut self, quiet: bool) {
        self.open.clear();
        self.restart();
        self.sure = quiet;
        self.rest = None;
        self.skipping = false;
    }

    /// Bytes skipped so far because their frame was too long.
    pub fn skipped(&self) -> u64 {
        self.skipped
    }

    /// Bytes of the frame that has begun.
    pub fn pending(&self) -> usize {
        self.open.len()
    }

    /// Feeds what was read; every frame that is now complete goes to `take`.
    pub fn push(&mut self, chunk: &[u8], mut take: impl FnMut(Piece<'_>)) {
        if !self.framing.columns.is_empty() {
            return self.push_fixed(chunk, take);
        }
        let mut rest = chunk;
        while let Some(&byte) = rest.first() {
            if self.skipping {
                self.skip(byte, &mut take);
                rest = &rest[1..];
                continue;
            }
            if self.tail_left > 0 {
                self.tail(byte, &mut take);
                rest = &rest[1..];
                continue;
            }
            let plain = rest.iter().position(|&b| self.framing.class(b) != 0).unwrap_or(rest.len());
            let plain = plain.min(self.framing.longest - self.open.len().min(self.framing.longest));
            if plain > 0 {
                self.rest = None;
                self.open.extend_from_slice(&rest[..plain]);
                rest = &rest[plain..];
            } else {
                self.special(byte, &mut take);
                rest = &rest[1..];
            }
        }
    }

    /// Frames without terminator: the first place where one fits is where it begins.
    fn push_fixed(&mut self, chunk: &[u8], mut take: impl FnMut(Piece<'_>)) {
        let length = self.framing.columns.len();
        for &byte in chunk {
            self.open.push(byte);
            // Bytes in front that belong to no frame are counted in `lead`.
            if self.open.len() - self.lead < length {
                continue;
            }
            if self.framing.fits(&self.open[self.lead..]) {
                if self.lead > 0 {
                    let how = if self.sure { How::Broken } else { How::FirstPartial };
                    take(Piece { bytes: &self.open[..self.lead], how });
                }
                take(Piece { bytes: &self.open[self.lead..], how: How::Whole });
                self.open.clear();
                self.restart();
            } else {
                self.lead += 1;
                if self.lead >= self.framing.longest {
                    take(Piece { bytes: &self.open[..self.lead], how: How::Broken });
                    self.open.drain(..self.lead);
                    self.lead = 0;
                }
            }
        }
    }

    /// The port was lost: a half frame goes to `take` as cut off.
    pub fn lost(&mut self, mut take: impl FnMut(Piece<'_>)) {
        if !self.open.is_empty() {
            take(Piece { bytes: &self.open, how: How::CutOff });
        }
        self.opened(false);
    }

    /// A byte with a duty, or one that does not fit any more.
    fn special(&mut self, byte: u8, take: &mut impl FnMut(Piece<'_>)) {
        let class = self.framing.class(byte);
        if class & (START | SINGLE) != 0 {
            self.interrupt(byte, take);
        } else if self.open.len() >= self.framing.longest {
            self.overlong(take);
            self.skip(byte, take);
        } else if self.open.is_empty() && self.rest.take() == Some(byte) {
            self.open.push(byte);
            self.lead = 1;
        } else {
            let tail_of_unheard = !self.sure && self.open.is_empty() && class & TAIL_OF_END != 0;
            self.open.push(byte);
            let end = self.framing.end_of(&self.open[self.lead..]).map(<[u8]>::len);
            match end {
                Some(_) if self.framing.tail > 0 => self.tail_left = self.framing.tail,
                Some(len) => self.finish(len, take),
                // Opened between CR and LF: the next frame is whole.
                None if tail_of_unheard => self.finish(0, take),
                None => {}
            }
        }
    }

    /// A byte after the terminator.
    fn tail(&mut self, byte: u8, take: &mut impl FnMut(Piece<'_>)) {
        if self.framing.class(byte) & START != 0 && !self.framing.raw_tail {
            self.tail_left = 0;
            self.interrupt(byte, take);
            return;
        }
        self.open.push(byte);
        self.tail_left -= 1;
        if self.tail_left == 0 {
            self.finish(0, take);
        }
    }

    /// A start or single byte: whatever was open is broken off.
    fn interrupt(&mut self, byte: u8, take: &mut impl FnMut(Piece<'_>)) {
        if self.open.len() > self.lead {
            let how = if self.sure { How::Broken } else { How::FirstPartial };
            take(Piece { bytes: &self.open, how });
            self.open.clear();
            self.lead = 0;
        }
        self.rest = None;
        self.sure = true;
        self.open.push(byte);
        if self.framing.class(byte) & SINGLE != 0 {
            take(Piece { bytes: &self.open, how: How::Whole });
            self.open.clear();
            self.restart();
        } else {
            self.started = true;
        }
    }

    /// The open frame is complete; its terminator has `end` bytes.
    fn finish(&mut self, end: usize, take: &mut impl FnMut(Piece<'_>)) {
        let how = match (self.sure, self.framing.has_starts && !self.started) {
            (false, _) => How::FirstPartial,
            (true, true) => How::Broken,
            (true, false) => How::Whole,
        };
        take(Piece { bytes: &self.open, how });
        self.rest = self.framing.rest_of(&self.open[self.open.len() - end..]).filter(|_| end > 0);
        self.open.clear();
        self.restart();
    }

    fn restart(&mut self) {
        self.lead = 0;
        self.started = false;
        self.tail_left = 0;
        self.sure = true;
    }

    fn overlong(&mut self, take: &mut impl FnMut(Piece<'_>)) {
        take(Piece { bytes: &self.open, how: How::TooLong });
        let keep = self.open.len().min(END_MAX - 1).min(self.open.len() - self.lead);
        self.recent.clear();
        self.recent.extend_from_slice(&self.open[self.open.len() - keep..]);
        self.open.clear();
        self.restart();
        self.skipping = true;
    }

    /// A byte of the remainder of a frame that was too long.
    fn skip(&mut self, byte: u8, take: &mut impl FnMut(Piece<'_>)) {
        if self.framing.class(byte) & (START | SINGLE) != 0 {
            self.skipping = false;
            self.tail_left = 0;
            self.interrupt(byte, take);
            return;
        }
        self.skipped += 1;
        if self.tail_left > 0 {
            self.tail_left -= 1;
            self.skipping = self.tail_left > 0;
            return;
        }
        if self.recent.len() == END_MAX {
            self.recent.remove(0);
        }
        self.recent.push(byte);
        if let Some(end) = self.framing.end_of(&self.recent) {
            self.rest = self.framing.rest_of(end);
            self.tail_left = self.framing.tail;
            self.skipping = self.tail_left > 0;
        }
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    fn framing(ends: &[&str], starts: &str, singles: &str, tail: usize, longest: usize) -> Framing {
        let ends: Vec<Vec<u8>> = ends.iter().map(|e| e.as_bytes().to_vec()).collect();
        Framing::new(&ends, starts.as_bytes(), singles.as_bytes(), tail, longest).expect("a framing")
    }

    fn cut(framing: &Framing, quiet: bool, chunks: &[&str]) -> Vec<(String, How)> {
        let mut framer = Framer::new(framing.clone());
        framer.opened(quiet);
        let mut out = Vec::new();
        for chunk in chunks {
            framer.push(chunk.as_bytes(), |p| out.push((String::from_utf8_lossy(p.bytes).into_owned(), p.how)));
        }
        out
    }

    fn texts(pieces: &[(String, How)]) -> Vec<(&str, How)> {
        pieces.iter().map(|(t, h)| (t.as_str(), *h)).collect()
    }

    #[test]
    fn any_of_three_line_ends() {
        let f = framing(&["\r\n", "\r", "\n"], "", "", 0, 64);
        let got = cut(&f, true, &["a\r", "\nb\rc\n\nd\r\n"]);
        let whole = How::Whole;
        assert_eq!(texts(&got), [("a\r", whole), ("\nb\r", whole), ("c\n", whole), ("\n", whole), ("d\r", whole)]);
        let bodies: Vec<&[u8]> = got.iter().map(|(t, _)| f.parts(t.as_bytes()).expect("whole").body).collect();
        assert_eq!(bodies, [b"a".as_slice(), b"b", b"c", b"", b"d"]);
    }

    #[test]
    fn a_terminator_split_over_reads() {
        let f = framing(&["\r\n"], "", "", 0, 64);
        assert_eq!(texts(&cut(&f, true, &["a\rb\r", "\n"])), [("a\rb\r\n", How::Whole)]);
    }

    #[test]
    fn the_first_frame_is_believed_only_with_its_beginning() {
        let f = framing(&["\r\n"], "", "", 0, 64);
        let partial = How::FirstPartial;
        assert_eq!(texts(&cut(&f, false, &["2.34 g\r\n2.35 g\r\n"])), [("2.34 g\r\n", partial), ("2.35 g\r\n", How::Whole)]);
        assert_eq!(texts(&cut(&f, false, &["\na\r\n"])), [("\n", partial), ("a\r\n", How::Whole)]);
        assert_eq!(texts(&cut(&f, true, &["2.34 g\r\n"])), [("2.34 g\r\n", How::Whole)]);
    }

    #[test]
    fn opening_inside_a_slip_is_not_taken_for_its_end() {
        let f = framing(&["\r\n\r\n"], "", "", 0, 64);
        assert_eq!(texts(&cut(&f, false, &["\nN 1 g\r\n\r\n"])), [("\nN 1 g\r\n\r\n", How::FirstPartial)]);
    }

    #[test]
    fn start_bytes_and_check_digits() {
        let f = framing(&["\x03"], "\x02", "", 2, 64);
        let got = cut(&f, false, &["x\x02a\x035", "A\r\n\x02b\x02c\x03FF\x02d\x03\x02e\x0300f\x0300"]);
        assert_eq!(
            texts(&got),
            [
                ("x", How::FirstPartial),
                ("\x02a\x035A", How::Whole),
                ("\r\n", How::Broken),
                ("\x02b", How::Broken),
                ("\x02c\x03FF", How::Whole),
                ("\x02d\x03", How::Broken),
                ("\x02e\x0300", How::Whole),
                ("f\x0300", How::Broken),
            ]
        );
        assert_eq!(f.parts(b"\x02a\x035A"), Some(Parts { start: b"\x02", body: b"a", end: b"\x03", tail: b"5A" }));
        assert_eq!(f.parts(b"a\x035A"), None);
    }

    #[test]
    fn bytes_that_are_frames() {
        let f = framing(&["\r\n"], "", "*", 0, 64);
        let got = cut(&f, false, &["*", "x*=2", "7\r\n"]);
        assert_eq!(texts(&got), [("*", How::Whole), ("x", How::Broken), ("*", How::Whole), ("=27\r\n", How::Whole)]);
    }

    #[test]
    fn an_overlong_line_is_told_once_and_skipped() {
        let f = framing(&["\r\n"], "", "", 0, 8);
        let mut framer = Framer::new(f.clone());
        framer.opened(true);
        let mut out = Vec::new();
        framer.push(b"1234567\r\nAA\r\n123456\r\n", |p| out.push((p.bytes.to_vec(), p.how)));
        assert_eq!(
            out,
            [(b"1234567\r".to_vec(), How::TooLong), (b"AA\r\n".to_vec(), How::Whole), (b"123456\r\n".to_vec(), How::Whole)]
        );
        assert_eq!(framer.skipped(), 1);
    }

    #[test]
    fn a_half_line_is_cut_off() {
        let mut framer = Framer::new(framing(&["\r\n"], "", "", 0, 64));
        framer.opened(true);
        framer.push(b"12.3", |_| panic!("not complete"));
        let mut out = Vec::new();
        framer.lost(|p| out.push((p.bytes.to_vec(), p.how)));
        assert_eq!(out, [(b"12.3".to_vec(), How::CutOff)]);
        framer.lost(|_| panic!("told twice"));
    }

    #[test]
    fn what_cannot_work_is_refused() {
        let new = |ends: &[&str], starts: &str, singles: &str, tail, longest| {
            let ends: Vec<Vec<u8>> = ends.iter().map(|e| e.as_bytes().to_vec()).collect();
            Framing::new(&ends, starts.as_bytes(), singles.as_bytes(), tail, longest).expect_err("refused")
        };
        assert_eq!(new(&[], "", "", 0, 64), FramingFault::NoEnd);
        assert_eq!(new(&[""], "", "", 0, 64), FramingFault::EndLength(0));
        assert_eq!(new(&["\r\n\r\n", "\r\n"], "", "", 0, 64), FramingFault::Ambiguous);
        assert_eq!(new(&["\r\n"], "\n", "", 0, 64), FramingFault::TwoDuties(b'\n'));
        assert_eq!(new(&["\r\n"], "*", "*", 0, 64), FramingFault::TwoDuties(b'*'));
        assert_eq!(new(&["\r\n"], "", "", 9, 64), FramingFault::Tail(9));
        assert_eq!(new(&["\r\n"], "", "", 0, 1_000_000), FramingFault::Longest(1_000_000));
    }
}
