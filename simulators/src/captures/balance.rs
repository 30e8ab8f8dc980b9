//! Balances that speak in lines.

use super::line::{self, BasisMarks, Layout, Marks, Part, Unit};
use super::number::{Number, Sign};
use super::session::{Moment, Plan, play};
use super::surround::{Fate, Wrap, join};
use super::{Capture, Kind, Told, Truth, pick, words};
use crate::rng::Rng;

/// An invented balance before it speaks.
#[derive(Clone, Debug)]
pub(super) struct Invented {
    pub layout: Layout,
    pub wrap: Wrap,
    pub plan: Plan,
}

/// Unit, decimals, and the largest load in steps of the last decimal.
const RANGES: [(&str, i64, usize, i64); 12] = [
    ("g", 1_000_000, 1, 30_000),
    ("g", 1_000_000, 2, 60_000),
    ("g", 1_000_000, 2, 220_000),
    ("g", 1_000_000, 2, 600_000),
    ("g", 1_000_000, 3, 320_000),
    ("g", 1_000_000, 3, 60_000),
    ("g", 1_000_000, 4, 2_200_000),
    ("kg", 1_000_000_000, 3, 6_000),
    ("kg", 1_000_000_000, 4, 32_000),
    ("kg", 1_000_000_000, 5, 120_000),
    ("mg", 1_000, 1, 1_200_000),
    ("mg", 1_000, 2, 9_000_000),
];

pub(super) fn capture(rng: &mut Rng) -> Capture {
    let mut made = invent(rng);
    let mut told = Told::default();
    // Some balances leave the unit to their display; then the person has to say it.
    let silent = rng.chance(0.05);
    if silent {
        made.layout.unit.silent = true;
        told.unit = Some(made.layout.unit.text);
    }
    // Others leave out the point; then it takes masses that are known.
    let implied = !silent && rng.chance(0.03);
    if implied {
        made.layout.number.implied = true;
        made.plan.tare = false;
    }
    let (moments, loads) = play(rng, made.plan);
    let mut capture = from_moments(rng, &made, &moments);
    if implied {
        told.masses_ug = loads.map(|steps| made.layout.ug(steps)).to_vec();
        capture.about += ", masses told";
    }
    if silent {
        capture.about += ", unit told";
    }
    capture.told = told;
    capture
}

/// A balance whose captures are fair.
pub(super) fn invent(rng: &mut Rng) -> Invented {
    let (text, size, decimals, most) = pick(rng, &RANGES);
    let wrap = Wrap::invent(rng);
    let mut number = Number::invent(rng, decimals, most);
    let mut marks = line::marks(rng);
    let basis = line::basis(rng);
    if wrap.by_length() {
        even_out(&mut number, &mut marks, most);
    }
    let unit = Unit {
        text,
        size,
        before: rng.chance(0.2),
        gap: super::size(rng, 0, 2),
        at_rest_only: marks != Marks::None && rng.chance(0.04),
        silent: false,
    };
    let unit = if text == "kg" && rng.chance(0.1) { Unit { text: "KG", ..unit } } else { unit };
    let mut avoid = wrap.end.to_vec();
    avoid.extend_from_slice(wrap.start);
    let parts = line::parts(rng, &marks, &basis, &number, &avoid);
    let trouble = (pick(rng, &words::ERRORS)).to_string();
    let trouble_alone = trouble.bytes().any(|b| b.is_ascii_digit()) || rng.chance(0.3);
    let keyed = rng.chance(0.2);
    let mut layout = Layout { parts, number, unit, marks, basis, trouble, trouble_alone };
    if wrap.by_length() {
        layout.trouble_alone = false;
        for part in &mut layout.parts {
            if let Part::Count { width, zeros, .. } = part {
                (*width, *zeros) = (4, true);
            }
        }
        layout.trouble = "^^^^".into();
        layout.basis = match layout.basis {
            BasisMarks::Both { gross, net, .. } => BasisMarks::Both { gross, net, even: true },
            BasisMarks::NetOnly { text, .. } => BasisMarks::NetOnly { text, even: true },
            BasisMarks::None => BasisMarks::None,
        };
    }
    let tare = layout.basis != BasisMarks::None || rng.chance(0.12);
    let zero_rests = matches!(layout.marks, Marks::Bits { .. });
    let plan = Plan { most, tare, negative: number.sign != Sign::Never, trouble: rng.chance(0.15), keyed, zero_rests };
    Invented { layout, wrap, plan }
}

/// Makes all lines as long as each other.
fn even_out(number: &mut Number, marks: &mut Marks, most: i64) {
    number.width = number.width.max(most.to_string().len() + 2);
    number.left = false;
    match marks {
        Marks::Both { even, .. } | Marks::One { even, .. } => *even = true,
        _ => {}
    }
}

/// Plays a session on it.
pub(super) fn speak(rng: &mut Rng, made: &Invented) -> Capture {
    let (moments, _) = play(rng, made.plan);
    from_moments(rng, made, &moments)
}

/// What is heard of these moments.
pub(super) fn from_moments(rng: &mut Rng, made: &Invented, moments: &[Moment]) -> Capture {
    let mut frames = Vec::new();
    for (at, moment) in moments.iter().enumerate() {
        let body = made.layout.write(moment, u32::try_from(at).unwrap_or(0));
        frames.push(made.wrap.frame(body.text.as_bytes(), body.number, body.reading));
    }
    let even = made.layout.even() && (!made.layout.trouble_alone || !made.plan.trouble);
    let fate = Fate::invent(rng, &made.wrap, even);
    let (bytes, readings) = join(rng, frames, &made.wrap, fate);
    // A dash behind a few numbers near zero may be a mark; behind a tared load taken off, again and again, it is a sign.
    let dashes = made.layout.number.sign == Sign::TrailingNegative && readings.iter().any(|r| r.mass_ug < 0);
    let truth = Truth {
        readings,
        fair: !dashes || made.plan.tare && !made.plan.keyed,
        steady_evident: steady_evident(made),
        basis_evident: basis_evident(made),
        ..Truth::new(Kind::Balance)
    };
    Capture { bytes, about: about(made, fate), told: Told::default(), truth }
}

/// Lines that come of a key show no run of equal masses, and one mark alone contrasts with nothing.
fn steady_evident(made: &Invented) -> bool {
    !made.plan.keyed
}

/// A lone letter that comes and goes says little; a pair of words of the trade says enough.
fn basis_evident(made: &Invented) -> bool {
    !matches!(&made.layout.basis, BasisMarks::NetOnly { text, .. } if text.len() == 1)
}

fn about(made: &Invented, fate: Fate) -> String {
    let Layout { number, unit, marks, basis, .. } = &made.layout;
    let kind = if made.plan.keyed { "balance on a key" } else { "running balance" };
    format!("{kind}, {} {number:?}, unit {unit:?}, marks {marks:?}, basis {basis:?}, {fate:?}", made.wrap.about())
}
