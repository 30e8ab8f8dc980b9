//! Captures that do not say enough, or say it twice in different ways.

use super::balance::{Invented, from_moments, invent, speak};
use super::line::{BasisMarks, Marks, Part};
use super::number::Sign;
use super::session::{Moment, Shown};
use super::surround::Wrap;
use super::{Capture, Code, Count, Kind, Told, Truth, pick, size, words};
use crate::rng::Rng;

pub(super) fn capture(rng: &mut Rng) -> Capture {
    let (word, mut capture) = match rng.between(0, 11) {
        0..=1 => ("no unit", with(rng, |_, made| made.layout.unit.silent = true)),
        2 => ("implied decimal point", with(rng, |_, made| made.layout.number.implied = true)),
        3 => ("one state only", one_state(rng)),
        4 => ("a dash that is no sign", dash(rng)),
        5 => ("groups of digits", groups(rng)),
        6 => ("no beginning of frames", no_phase(rng)),
        7 => ("another unit", other_unit(rng)),
        8 => ("two masses on a line", two_masses(rng)),
        9 => ("counts without contrast", counts(rng)),
        10 => ("codes without contrast", codes(rng)),
        _ => ("noise alone", noise(rng)),
    };
    capture.truth.fair = false;
    capture.about = format!("unfair, {word}: {}", capture.about);
    capture
}

fn with(rng: &mut Rng, change: impl Fn(&mut Rng, &mut Invented)) -> Capture {
    let mut made = invent(rng);
    change(rng, &mut made);
    speak(rng, &made)
}

/// The same mass again and again, or an empty pan.
fn one_state(rng: &mut Rng) -> Capture {
    let mut made = invent(rng);
    made.plan.trouble = false;
    let steps = if rng.chance(0.3) { 0 } else { rng.between(10, made.plan.most) };
    let moment = Moment { shown: Shown::Steps(steps), steady: true, net: false };
    let moments = vec![moment; size(rng, 1, 9)];
    let mut capture = from_moments(rng, &made, &moments);
    capture.truth.steady_evident = false;
    capture.truth.basis_evident = false;
    capture
}

/// `M-12.34 g`: a dash before each number.
fn dash(rng: &mut Rng) -> Capture {
    with(rng, |_, made| {
        made.layout.number.sign = Sign::Never;
        made.layout.number.width = 0;
        made.layout.number.zeros = false;
        made.layout.unit.before = false;
        made.plan.negative = false;
        made.layout.parts = vec![Part::Text("MA-".into()), Part::Mass];
        made.layout.marks = Marks::None;
        made.layout.basis = BasisMarks::None;
        made.wrap = Wrap::plain(b"\r\n");
    })
}

fn groups(rng: &mut Rng) -> Capture {
    with(rng, |rng, made| {
        made.layout.number.group = Some(if made.layout.number.point == '.' { pick(rng, &[',', ' ', '\'']) } else { '.' });
        made.layout.number.zeros = false;
        made.plan.most *= 20;
        made.layout.number.width = if made.layout.number.width > 0 { 14 } else { 0 };
    })
}

/// Frames of one length that nothing separates, heard from somewhere in one of them.
fn no_phase(rng: &mut Rng) -> Capture {
    let mut made = invent(rng);
    while !made.wrap.by_length() {
        made = invent(rng);
    }
    let mut capture = speak(rng, &made);
    let cut = size(rng, 1, 9).min(capture.bytes.len() / 2);
    capture.bytes.drain(..cut);
    // What was cut may have stood in front of the number, which is then still what was shown.
    if let Some(first) = capture.truth.readings.first_mut() {
        first.must = false;
    }
    capture
}

/// A unit that is not one of mass here; what is said is no mass.
fn other_unit(rng: &mut Rng) -> Capture {
    let unit = pick(rng, &["oz", "ct", "lb", "dwt", "pcs", "%"]);
    let mut capture = with(rng, |_, made| {
        made.layout.unit.text = unit;
        made.layout.unit.at_rest_only = false;
    });
    capture.truth.readings.clear();
    capture
}

/// The mass and, unlabelled, another one that does not change.
fn two_masses(rng: &mut Rng) -> Capture {
    let at_front = rng.chance(0.5);
    with(rng, |_, made| {
        let point = made.layout.number.point;
        let other = format!("50{point}00 {}", made.layout.unit.text);
        let gap = "   ".to_string();
        if at_front {
            made.layout.parts.splice(0..0, [Part::Text(other), Part::Text(gap)]);
        } else {
            made.layout.parts.extend([Part::Text(gap), Part::Text(other)]);
        }
    })
}

/// Numbers from one upwards, words without an end, or ends without drops; nobody told the kind.
fn counts(rng: &mut Rng) -> Capture {
    let mut truth = Truth::new(Kind::Counter);
    let mut bytes = Vec::new();
    let drops = u32::try_from(rng.between(8, 40)).unwrap_or(20);
    let style = size(rng, 0, 2);
    let word = pick(rng, &words::DROP_WORDS);
    for n in 1..=drops {
        match style {
            0 => {
                bytes.extend_from_slice(format!("{n}\r\n").as_bytes());
                truth.counts.push((Count::Total(n), false));
            }
            1 => {
                bytes.extend_from_slice(format!("{word}\r\n").as_bytes());
                truth.counts.push((Count::Drop, false));
            }
            _ if n % 5 == 0 => {
                let count = u32::try_from(rng.between(10, 50)).unwrap_or(20);
                bytes.extend_from_slice(format!("{count}\r\n").as_bytes());
                truth.counts.push((Count::End(Some(count)), false));
            }
            _ => {}
        }
    }
    Capture { bytes, about: format!("style {style}"), told: Told::default(), truth }
}

/// Short numbers on labels, or one code alone; nobody told the kind.
fn codes(rng: &mut Rng) -> Capture {
    let mut truth = Truth::new(Kind::Scanner);
    let many = if rng.chance(0.5) { size(rng, 6, 14) } else { 1 };
    for _ in 0..many {
        truth.codes.push(Code { text: rng.between(10, 99).to_string(), must: false });
    }
    let bytes = truth.codes.iter().flat_map(|c| format!("{}\r\n", c.text).into_bytes()).collect();
    Capture { bytes, about: format!("{many} codes"), told: Told::default(), truth }
}

/// A wrong speed of the line, or nothing there.
fn noise(rng: &mut Rng) -> Capture {
    let bytes = (0..size(rng, 0, 900)).map(|_| u8::try_from(rng.between(0, 255)).unwrap_or(0)).collect();
    Capture { bytes, about: "random bytes".into(), told: Told::default(), truth: Truth::new(Kind::Balance) }
}
