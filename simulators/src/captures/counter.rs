//! Counters of a liquid-limit cup.

use super::surround::{Fate, Wrap, join};
use super::{Capture, Count, Kind, Told, Truth, pick, size, words};
use crate::rng::Rng;

/// How drops are told.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
enum Drops {
    /// One byte each.
    Byte(u8),
    /// One line each, without a number.
    Word(&'static str),
    /// The running count; from 0 when `zero`.
    Running { zero: bool, repeats: bool },
    /// Only the end is told.
    Silent,
}

struct Counter {
    drops: Drops,
    before: &'static str,
    width: usize,
    zeros: bool,
    after: &'static str,
    end: Option<&'static str>,
    /// The run over is told with its count.
    counted: bool,
    wrap: Wrap,
}

pub(super) fn capture(rng: &mut Rng) -> Capture {
    let counter = invent(rng);
    let runs = size(rng, if counter.drops == Drops::Silent { 5 } else { 2 }, if counter.drops == Drops::Silent { 9 } else { 4 });
    let mut frames = Vec::new();
    let mut last = 0;
    for _ in 0..runs {
        let drops = loop {
            let drops = u32::try_from(rng.between(11, 46)).unwrap_or(20);
            if drops != last {
                break drops;
            }
        };
        last = drops;
        counter.run(rng, drops, &mut frames);
    }
    let lines = !matches!(counter.drops, Drops::Byte(_));
    let fate = if lines && counter.drops != Drops::Silent {
        Fate { echo: false, ..Fate::invent(rng, &counter.wrap, false) }
    } else {
        Fate::default()
    };
    let (bytes, counts) = join(rng, frames, &counter.wrap, fate);
    let told = Told { kind: counter.needs_telling().then_some(Kind::Counter), ..Told::default() };
    let about =
        format!("counter {:?}, {:?} {:?}, {}, {fate:?}", counter.drops, counter.before, counter.end, counter.wrap.about());
    Capture { bytes, about, told, truth: Truth { counts, ..Truth::new(Kind::Counter) } }
}

fn invent(rng: &mut Rng) -> Counter {
    let drops = match rng.between(0, 99) {
        0..=17 => Drops::Byte(pick(rng, b"*.!~")),
        18..=37 => Drops::Word(pick(rng, &["tick", "DROP", "golpe", "o", "isku!", "<hit>", "klapp"])),
        38..=87 => Drops::Running { zero: rng.chance(0.4), repeats: rng.chance(0.2) },
        _ => Drops::Silent,
    };
    let running = matches!(drops, Drops::Running { .. });
    let end = (!running || rng.chance(0.6)).then(|| pick(rng, &words::END_WORDS));
    let width = pick(rng, &[0, 0, 2, 3, 4, 5]);
    let end_of_line = pick(rng, &[b"\r\n".as_slice(), b"\r\n", b"\r", b"\n", b"\x03"]);
    let mut wrap = Wrap::plain(end_of_line);
    if running && rng.chance(0.2) {
        wrap = Wrap::invent(rng);
        if wrap.by_length() || wrap.end == b";" {
            wrap = Wrap::plain(b"\r\n");
        }
    }
    Counter {
        drops,
        before: if rng.chance(0.75) { pick(rng, &words::DROP_WORDS) } else { "" },
        width,
        zeros: rng.chance(0.5),
        after: if rng.chance(0.2) { pick(rng, &[" drops", " x", "/", " Hub"]) } else { "" },
        end,
        counted: true,
        wrap,
    }
}

impl Counter {
    fn run(&self, rng: &mut Rng, drops: u32, frames: &mut Vec<super::surround::Frame<(Count, bool)>>) {
        let first = u32::from(!matches!(self.drops, Drops::Running { zero: true, .. }));
        for n in first..=drops {
            match self.drops {
                Drops::Byte(byte) => {
                    frames.push(super::surround::Frame { bytes: vec![byte], says: Some((Count::Drop, true)), number: (0, 1) });
                }
                Drops::Word(word) => frames.push(self.wrap.frame(word.as_bytes(), (0, word.len()), Some((Count::Drop, true)))),
                Drops::Running { repeats, .. } => {
                    let times = if repeats { size(rng, 1, 3) } else { 1 };
                    for _ in 0..times {
                        frames.push(self.numbered(self.before, n, Count::Total(n)));
                    }
                }
                Drops::Silent => {}
            }
        }
        if let Some(end) = self.end {
            let number = self.counted.then_some(drops);
            frames.push(self.numbered(end, drops, Count::End(number)));
        }
    }

    fn numbered(&self, word: &str, n: u32, says: Count) -> super::surround::Frame<(Count, bool)> {
        let gap = if word.is_empty() || word.ends_with(['=', '#']) { "" } else { " " };
        let width = self.width;
        let digits = if self.zeros { format!("{n:0>width$}") } else { format!("{n:>width$}") };
        let front = format!("{word}{gap}");
        let text = format!("{front}{digits}{}", self.after);
        self.wrap.frame(text.as_bytes(), (front.len(), front.len() + digits.len()), Some((says, true)))
    }

    /// Bare numbers, whatever counts them, could be codes; finals alone could be anything.
    fn needs_telling(&self) -> bool {
        match self.drops {
            Drops::Silent => true,
            Drops::Running { repeats, .. } => self.before.is_empty() && (self.end.is_none() || repeats),
            _ => false,
        }
    }
}
