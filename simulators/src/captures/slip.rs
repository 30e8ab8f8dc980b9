//! Balances that print a slip of several lines for each press of a key.

use super::number::{Number, Sign};
use super::surround::{Fate, Wrap, join};
use super::{Basis, Capture, Kind, Reading, Told, Truth, pick, size, words};
use crate::rng::Rng;

struct Slip {
    number: Number,
    unit: &'static str,
    step_ug: i64,
    words: (&'static str, &'static str, &'static str),
    date: Option<&'static str>,
    sample: Option<&'static str>,
    operator: Option<&'static str>,
    rule: Option<&'static str>,
    column: usize,
    with_tare: bool,
    eol: &'static str,
    after: &'static str,
}

pub(super) fn capture(rng: &mut Rng) -> Capture {
    let slip = invent(rng);
    let count = size(rng, 4, 8);
    let most = 9_000_000_000 / slip.step_ug / 100;
    let wrap = Wrap::plain(b"");
    let mut frames = Vec::new();
    for at in 0..count {
        let tare = if slip.with_tare { rng.between(most / 40, most / 10) } else { 0 };
        let net = rng.between(most / 30, most / 2);
        let (text, number) = slip.write(at, tare, net);
        let reading = |steps: i64, basis, must| Reading { mass_ug: steps * slip.step_ug, steady: None, basis, must };
        // Who takes the gross mass alone has taken what stands on the pan.
        let says = if slip.with_tare {
            vec![reading(tare + net, Basis::Gross, true), reading(net, Basis::Net, false)]
        } else {
            vec![reading(net, Basis::Unmarked, true)]
        };
        frames.push(wrap.frame(text.as_bytes(), number, Some(says)));
    }
    // Slips hold many numbers, so a slip cut short is a slip lost.
    let fate = Fate { cut_first: false, ..Fate::default() };
    let cut = rng.chance(0.25).then(|| size(rng, 1, 20));
    let (mut bytes, said) = join(rng, frames, &wrap, fate);
    let mut readings: Vec<Reading> = said.into_iter().flatten().collect();
    if let Some(cut) = cut {
        bytes.truncate(bytes.len() - cut);
        let last = readings.len() - if slip.with_tare { 2 } else { 1 };
        readings[last..].iter_mut().for_each(|r| r.must = false);
    }
    // No slip of an empty pan is printed, so a comma before three digits may as well part thousands.
    let thousands = slip.number.point == ',' && slip.number.decimals == 3;
    let about = format!("slips of {:?}, {:?}, cut {cut:?}", slip.words, slip.number);
    Capture { bytes, about, told: Told::default(), truth: Truth { readings, fair: !thousands, ..Truth::new(Kind::Balance) } }
}

fn invent(rng: &mut Rng) -> Slip {
    let (unit, unit_ug, decimals) = pick(
        rng,
        &[("g", 1_000_000, 1), ("g", 1_000_000, 2), ("g", 1_000_000, 2), ("g", 1_000_000, 3), ("kg", 1_000_000_000, 4)],
    );
    let step_ug = unit_ug / 10i64.pow(u32::try_from(decimals).unwrap_or(0));
    let mut number = Number::invent(rng, decimals, 90_000_000 / step_ug + 1);
    number.sign = pick(rng, &[Sign::Negative, Sign::Negative, Sign::Always]);
    number.width = number.width.max(8);
    let or_none = |rng: &mut Rng, of: &[&'static str]| rng.chance(0.55).then(|| pick(rng, of));
    Slip {
        number,
        unit,
        step_ug,
        words: pick(rng, &words::SLIP_WORDS),
        date: or_none(rng, &["2026-03-12 14:05", "12.03.26", "Date: 12/03/2026"]),
        sample: or_none(rng, &["Sample", "No.", "lfd.Nr", "Probe:"]),
        operator: or_none(rng, &["Oper. 07", "by: KT", "ID 4711"]),
        rule: or_none(rng, &["----------------", "================"]),
        column: size(rng, 8, 12),
        with_tare: rng.chance(0.75),
        eol: pick(rng, &["\r\n", "\r\n", "\n", "\r"]),
        after: pick(rng, &["", "", "\u{c}", "."]),
    }
}

impl Slip {
    /// Its text, and where the first number of it is.
    fn write(&self, at: usize, tare: i64, net: i64) -> (String, (usize, usize)) {
        let mut lines: Vec<String> = Vec::new();
        lines.extend(self.date.map(String::from));
        lines.extend(self.sample.map(|w| format!("{w:<column$}{:>4}", at + 1, column = self.column)));
        lines.extend(self.operator.map(String::from));
        lines.extend(self.rule.map(String::from));
        let before: usize = lines.iter().map(|l| l.len() + self.eol.len()).sum();
        let mass =
            |word: &str, steps: i64| format!("{word:<column$}{} {}", self.number.write(steps), self.unit, column = self.column);
        if self.with_tare {
            lines.push(mass(self.words.0, tare + net));
            lines.push(mass(self.words.1, tare));
            lines.push(mass(self.words.2, net));
        } else {
            lines.push(mass("Load", net));
        }
        // A blank line, a form feed or a dot ends the slip.
        lines.push(self.after.to_string());
        let text: String = lines.iter().map(|l| format!("{l}{}", self.eol)).collect();
        (text, (before, before + self.column + self.number.width))
    }
}
