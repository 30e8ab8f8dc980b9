//! The columns of a balance's line.

use super::number::{Number, Sign};
use super::session::{Moment, Shown};
use super::{Basis, Reading, pick, words};
use crate::rng::Rng;

/// Which unit, and where it stands.
#[derive(Clone, Copy, Debug)]
pub(super) struct Unit {
    pub text: &'static str,
    /// Micrograms.
    pub size: i64,
    pub before: bool,
    pub gap: usize,
    /// It is printed only beside steady masses.
    pub at_rest_only: bool,
    /// It is printed nowhere.
    pub silent: bool,
}

/// How steadiness is marked.
#[derive(Clone, Debug, PartialEq, Eq)]
pub(super) enum Marks {
    /// Not at all.
    None,
    /// One text for each; padded to one width when `even`.
    Both { steady: String, moving: String, even: bool },
    /// Steady, empty pan, moving.
    Three { steady: String, zero: String, moving: String },
    /// Only one is marked; the other is blank, or absent when `even` is false.
    One { text: String, of_steady: bool, even: bool },
    /// Bits added to a base character: this one for moving, this one for an empty pan, both in what state.
    Bits { base: u8, moving: u8, zero: u8, inverted: bool },
}

/// How gross and net are marked.
#[derive(Clone, Debug, PartialEq, Eq)]
pub(super) enum BasisMarks {
    None,
    Both { gross: String, net: String, even: bool },
    NetOnly { text: String, even: bool },
}

/// A column of a line.
#[derive(Clone, Debug)]
pub(super) enum Part {
    /// Always the same.
    Text(String),
    /// Number of the line, this wide, with zeros or blanks.
    Count {
        first: u32,
        width: usize,
        zeros: bool,
    },
    /// A date, always the same.
    Date(&'static str),
    /// Time of day, in seconds after this.
    Time(u32),
    Basis,
    Marks,
    Mass,
}

/// A balance's way of writing a line.
#[derive(Clone, Debug)]
pub(super) struct Layout {
    pub parts: Vec<Part>,
    pub number: Number,
    pub unit: Unit,
    pub marks: Marks,
    pub basis: BasisMarks,
    /// What stands in place of the number when there is none.
    pub trouble: String,
    /// The whole line consists of it then.
    pub trouble_alone: bool,
}

/// A line without what frames it.
#[derive(Clone, Debug, Default)]
pub(super) struct Body {
    pub text: String,
    /// Where sign and digits begin and end, blanks left out.
    pub number: (usize, usize),
    pub reading: Option<Reading>,
}

impl Layout {
    /// The line for one moment, `at` being its number in the session.
    pub fn write(&self, moment: &Moment, at: u32) -> Body {
        let mut body = Body::default();
        if moment.shown == Shown::Trouble && self.trouble_alone {
            body.text.clone_from(&self.trouble);
            return body;
        }
        for part in &self.parts {
            match part {
                Part::Text(text) => body.text.push_str(text),
                Part::Count { first, width, zeros: true } => body.text += &format!("{:0>width$}", first + at),
                Part::Count { first, width, zeros: false } => body.text += &format!("{:>width$}", first + at),
                Part::Date(format) => body.text.push_str(format),
                Part::Time(from) => body.text += &clock(from + 3 * at),
                Part::Basis => body.text += &self.basis_text(moment.net),
                Part::Marks => body.text += &self.marks_text(moment),
                Part::Mass => self.mass(moment, &mut body),
            }
        }
        body
    }

    /// So many steps of the last digit in micrograms.
    pub fn ug(&self, steps: i64) -> i64 {
        steps * self.unit.size / 10i64.pow(u32::try_from(self.number.decimals).unwrap_or(0))
    }

    fn mass(&self, moment: &Moment, body: &mut Body) {
        let unit = self.unit;
        let shown = if unit.at_rest_only && !moment.steady { " ".repeat(unit.text.len()) } else { unit.text.to_string() };
        let (before, after) = match (unit.silent, unit.before) {
            (true, _) => (String::new(), String::new()),
            (_, true) => (format!("{shown}{}", " ".repeat(unit.gap)), String::new()),
            (_, false) => (String::new(), format!("{}{shown}", " ".repeat(unit.gap))),
        };
        body.text += &before;
        let Shown::Steps(steps) = moment.shown else {
            let width = self.number.write(0).len();
            body.text += &format!("{:>width$}{after}", self.trouble);
            return;
        };
        let written = self.number.write(steps);
        let begin = body.text.len() + written.len() - written.trim_start().len();
        body.number = (begin, begin + written.trim().len());
        body.text += &written;
        body.text += &after;
        body.reading = Some(Reading {
            mass_ug: self.ug(steps),
            steady: (self.marks != Marks::None).then_some(moment.steady),
            basis: match (&self.basis, moment.net) {
                (BasisMarks::None, _) => Basis::Unmarked,
                (_, true) => Basis::Net,
                (BasisMarks::NetOnly { .. }, false) => Basis::Gross,
                (_, false) => Basis::Gross,
            },
            must: !unit.at_rest_only || moment.steady,
        });
    }

    fn basis_text(&self, net: bool) -> String {
        match &self.basis {
            BasisMarks::None => String::new(),
            BasisMarks::Both { gross, net: other, even } => either(net, other, gross, *even),
            BasisMarks::NetOnly { text, even } => either(net, text, "", *even),
        }
    }

    fn marks_text(&self, moment: &Moment) -> String {
        match &self.marks {
            Marks::None => String::new(),
            Marks::Both { steady, moving, even } => either(moment.steady, steady, moving, *even),
            Marks::Three { steady, zero, moving } => match (moment.steady, moment.shown) {
                (true, Shown::Steps(0)) => zero.clone(),
                (true, _) => steady.clone(),
                (false, _) => moving.clone(),
            },
            Marks::One { text, of_steady, even } => either(moment.steady == *of_steady, text, "", *even),
            Marks::Bits { base, moving, zero, inverted } => {
                let at_zero = moment.shown == Shown::Steps(0);
                let bits = if moment.steady == *inverted { *moving } else { 0 } + if at_zero { *zero } else { 0 };
                char::from(base + bits).to_string()
            }
        }
    }

    /// Whether all lines have as many characters.
    pub fn even(&self) -> bool {
        let marks = match &self.marks {
            Marks::Both { steady, moving, even } => *even || steady.len() == moving.len(),
            Marks::One { even, .. } => *even,
            _ => true,
        };
        let basis = match &self.basis {
            BasisMarks::None => true,
            BasisMarks::Both { gross, net, even } => *even || gross.len() == net.len(),
            BasisMarks::NetOnly { even, .. } => *even,
        };
        let counts = self.parts.iter().all(|p| !matches!(p, Part::Count { width, .. } if *width < 3));
        marks && basis && counts && self.number.fixed()
    }
}

fn either(first: bool, a: &str, b: &str, even: bool) -> String {
    let width = if even { a.len().max(b.len()) } else { 0 };
    format!("{:<width$}", if first { a } else { b })
}

fn clock(seconds: u32) -> String {
    format!("{:02}:{:02}:{:02}", seconds / 3600 % 24, seconds / 60 % 60, seconds % 60)
}

/// Invents marks of steadiness.
pub(super) fn marks(rng: &mut Rng) -> Marks {
    match rng.between(0, 99) {
        0..=19 => Marks::None,
        20..=49 => {
            let (steady, moving) = pick(rng, &words::STEADY_SIGNS);
            Marks::Both { steady: steady.into(), moving: moving.into(), even: true }
        }
        50..=66 => {
            let (steady, moving) = pick(rng, &words::STEADY_WORDS);
            Marks::Both { steady: steady.into(), moving: moving.into(), even: rng.chance(0.6) }
        }
        67..=72 => Marks::Three { steady: "S".into(), zero: "Z".into(), moving: (pick(rng, &["U", "M", "~"])).into() },
        73..=91 => {
            let of_steady = rng.chance(0.5);
            let text = pick(rng, if of_steady { &words::STEADY_ONLY } else { &words::MOVING_ONLY });
            Marks::One { text: text.into(), of_steady, even: rng.chance(0.7) }
        }
        _ => {
            let base = pick(rng, b"@`0");
            let moving = pick(rng, &[1, 2, 4]);
            let zero = if rng.chance(0.6) { pick(rng, &[1, 2, 4, 8]) } else { 0 };
            let zero = if zero == moving { 0 } else { zero };
            // Above 9 the characters after the digits are punctuation; a base of letters has no such edge.
            let base = if base == b'0' && moving + zero > 9 { b'@' } else { base };
            Marks::Bits { base, moving, zero, inverted: rng.chance(0.2) }
        }
    }
}

/// Invents marks of gross and net.
pub(super) fn basis(rng: &mut Rng) -> BasisMarks {
    match rng.between(0, 99) {
        0..=61 => BasisMarks::None,
        62..=89 => {
            let (gross, net) = pick(rng, &words::BASIS_WORDS);
            BasisMarks::Both { gross: gross.into(), net: net.into(), even: rng.chance(0.6) }
        }
        _ => BasisMarks::NetOnly { text: (pick(rng, &["NET", "N", "Netto", "net"])).into(), even: rng.chance(0.7) },
    }
}

/// What may stand between columns: never what could belong to a number.
fn between(rng: &mut Rng, comma: bool, avoid: &[u8]) -> String {
    let all = [" ", "  ", " ", "\t", "|", ";", ",", " / ", ", "];
    loop {
        let text = pick(rng, &all);
        if text.contains(',') && comma || text.bytes().any(|b| avoid.contains(&b)) {
            continue;
        }
        return text.to_string();
    }
}

/// Puts columns in an order. `avoid` are bytes that end frames.
pub(super) fn parts(rng: &mut Rng, marks: &Marks, basis: &BasisMarks, number: &Number, avoid: &[u8]) -> Vec<Part> {
    let mut front = Vec::new();
    if rng.chance(0.1) {
        let zeros = rng.chance(0.6);
        let width = pick(rng, if zeros { &[3, 4] } else { &[1, 3, 4] });
        front.push(Part::Count { first: pick(rng, &[1, 1, 17, 96]), width, zeros });
    }
    if rng.chance(0.07) {
        front.push(Part::Date(pick(rng, &["2026-03-12", "12.03.26", "12/03/2026", "20260312"])));
    }
    if rng.chance(0.09) {
        front.push(Part::Time(pick(rng, &[30_000, 35_950, 50_333])));
    }
    if rng.chance(0.1) {
        front.push(Part::Text((pick(rng, &["OP07", "ID 4711", "(3)", "B12", "nr.5", "Lab-2"])).into()));
    }
    if rng.chance(0.3) {
        front.push(Part::Text((pick(rng, &words::PREFIXES)).into()));
    }
    let mut back = Vec::new();
    let shown = [(*basis != BasisMarks::None).then_some(Part::Basis), (*marks != Marks::None).then_some(Part::Marks)];
    for part in shown.into_iter().flatten() {
        if rng.chance(0.45) { front.push(part) } else { back.push(part) }
    }
    if rng.chance(0.06) {
        let last = front.pop();
        back.extend(last);
    }
    join(rng, front, back, number, avoid)
}

fn join(rng: &mut Rng, front: Vec<Part>, back: Vec<Part>, number: &Number, avoid: &[u8]) -> Vec<Part> {
    let gap = between(rng, number.point == ',', avoid);
    // A comma or slash beside whole numbers would read as part of one, so numbers stand between blanks there.
    let near = if gap.trim().is_empty() || gap == "|" || gap == ";" { gap.clone() } else { "  ".into() };
    let mut parts = Vec::new();
    let tight =
        matches!(front.last(), Some(Part::Marks | Part::Basis)) && matches!(number.sign, Sign::Always | Sign::AlwaysApart);
    let count = front.len();
    for (i, part) in front.into_iter().enumerate() {
        let bits_or_letters = i + 1 == count && tight && rng.chance(0.3);
        parts.push(part);
        if !bits_or_letters {
            parts.push(Part::Text(near.clone()));
        }
    }
    parts.push(Part::Mass);
    let blank_first = rng.chance(0.75);
    for part in back {
        parts.push(Part::Text(if blank_first { near.clone() } else { gap.clone() }));
        parts.push(part);
    }
    if rng.chance(0.06) {
        parts.push(Part::Text(" ".into()));
    }
    parts
}
