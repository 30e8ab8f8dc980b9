//! The readings of a learned profile, by the service's own decoder, and what speaks against it.

use super::columns::Lines;
use super::frames::Heard;
use super::words;
use super::{Hints, Learned, LearnedReading, Refusal, UNREAD_CHECK};
use crate::frame::{Framer, How};
use crate::heard::{Reject, What};
use crate::profile::{Decoder, Kind, Profile, ProfileText};
use std::collections::{BTreeMap, BTreeSet};
use std::sync::Arc;
use tarecup_core::quantity::Mass;
use tarecup_core::signal::{Mark, Reading, Signal};

/// A profile and the masses it must read, by the place of their frames.
#[derive(Clone, Debug)]
pub(super) struct Draft {
    pub(super) text: ProfileText,
    pub(super) expect: Vec<(usize, i64)>,
}

/// A frame as the profile reads it.
struct Told {
    at: usize,
    body: Vec<u8>,
    what: What,
}

/// Reads everything with the profile; refuses it where it does not fit what was heard.
pub(super) fn read(heard: &Heard, draft: Draft, lines: &Lines, hints: &Hints) -> Result<Learned, Refusal> {
    let kind = draft.text.kind;
    let profile = Profile::compile(draft.text.clone()).map_err(|e| {
        Refusal::new(None, 9, format!("the lines cannot be written as a profile ({e}): set the instrument to a plainer line"))
    })?;
    let mut told = decode(heard, &Arc::new(profile));
    contradictions(&told, &draft, lines)?;
    if kind == Kind::Balance && draft.text.check.is_none() && unread_check(&told, lines) {
        return Err(Refusal::new(Some(kind), 9, UNREAD_CHECK));
    }
    if first_may_be_cut(&told, &draft.text, lines) {
        told.remove(0);
    }
    let readings: Vec<(Mass, LearnedReading)> = told.iter().filter_map(|t| reading(&t.what)).collect();
    if kind == Kind::Balance {
        proven(&readings, hints)?;
    }
    let confidence = confidence(&told, lines, hints);
    Ok(Learned {
        kind: Some(kind),
        profile: Some(draft.text),
        readings: readings.into_iter().map(|r| r.1).collect(),
        counts: told.iter().filter_map(|t| count(&t.what)).collect(),
        codes: told.iter().filter_map(|t| code(&t.what)).collect(),
        confidence,
        missing: Vec::new(),
    })
}

fn decode(heard: &Heard, profile: &Arc<Profile>) -> Vec<Told> {
    let mut framer = Framer::new(profile.framing().clone());
    let mut decoder = Decoder::new(Arc::clone(profile));
    framer.opened(true);
    let (mut told, mut at) = (Vec::new(), 0);
    framer.push(&heard.bytes, |piece| {
        let what = if piece.how == How::Whole { decoder.decode(piece.bytes) } else { What::Nothing };
        if what != What::Nothing {
            let body = profile.framing().parts(piece.bytes).map(|p| p.body.to_vec()).unwrap_or_default();
            told.push(Told { at, body, what });
        }
        at += 1;
    });
    told
}

fn reading(what: &What) -> Option<(Mass, LearnedReading)> {
    let What::Signal(Signal::Mass(Reading { mass, step, mark, basis })) = what else { return None };
    let steady = match mark {
        Mark::Steady => Some(true),
        Mark::Moving => Some(false),
        Mark::Unmarked => None,
    };
    Some((*step, LearnedReading { mass: *mass, steady, basis: *basis }))
}

fn count(what: &What) -> Option<u32> {
    match what {
        What::Signal(Signal::Total(n) | Signal::End(Some(n))) => Some(*n),
        _ => None,
    }
}

fn code(what: &What) -> Option<String> {
    match what {
        What::Signal(Signal::Code(code)) => Some(code.clone()),
        _ => None,
    }
}

/// Lines that the profile reads otherwise than it was learned from, or not at all.
fn contradictions(told: &[Told], draft: &Draft, lines: &Lines) -> Result<(), Refusal> {
    let kind = draft.text.kind;
    let read: BTreeMap<usize, i64> = told.iter().filter_map(|t| reading(&t.what).map(|(_, r)| (t.at, r.mass.ug()))).collect();
    if draft.expect.iter().any(|(at, ug)| read.get(at) != Some(ug)) {
        let says = "the lines can be read in two ways: set the balance to send the mass with its unit and nothing beside it";
        return Err(Refusal::new(Some(kind), 9, says));
    }
    let refused: BTreeSet<usize> =
        told.iter().filter(|t| matches!(t.what, What::Reject(r) if r != Reject::Checksum) && t.at > 0).map(|t| t.at).collect();
    let odd = lines.lines.iter().filter(|l| refused.contains(&l.at));
    let mut shapes: BTreeMap<Vec<u8>, (usize, bool)> = BTreeMap::new();
    let mut counts = 0;
    for line in odd {
        let weighs = line.weighs() && !words::overload(&line.body) && !words::underload(&line.body);
        counts += usize::from(words::counting(&line.body) && !line.numbers.is_empty());
        let entry = shapes.entry(line.shape()).or_insert((0, weighs));
        entry.0 += 1;
    }
    let mixed = |says: &str| Err(Refusal::new(None, 9, says));
    if kind == Kind::Balance && (shapes.values().any(|(n, weighs)| *weighs && *n >= 2) || counts >= 2) {
        return mixed("lines of two kinds were heard: see that one instrument alone is connected to this port");
    }
    let singles = shapes.values().filter(|(n, _)| *n == 1).count();
    let all = lines.lines.len();
    let lost = if kind == Kind::Balance { singles } else { refused.len() };
    if lost > 2 + all / 5 || (kind != Kind::Balance && lost * 8 > all && lost > 1) {
        return mixed("many lines fit no kind of line: see that speed and frame are right and one instrument alone is connected");
    }
    Ok(())
}

/// The first line may have begun before anybody listened: `2.34 g` may be the tail of `12.34 g`, and a mark or a minus sign
/// in front of it may be missing.
fn first_may_be_cut(told: &[Told], text: &ProfileText, lines: &Lines) -> bool {
    let Some(first) = told.first().filter(|t| t.at == 0) else { return false };
    if !text.frame.starts.is_empty() || text.frame.length.is_some() || text.check.is_some() {
        return false;
    }
    let second = told.iter().skip(1).find(|t| std::mem::discriminant(&t.what) == std::mem::discriminant(&first.what));
    let same_length = second.is_some_and(|s| s.body.len() == first.body.len());
    match (&first.what, second.map(|s| &s.what)) {
        (What::Signal(Signal::Mass(r)), next) => {
            let shape = |t: &Told| {
                let line = lines.lines.iter().find(|l| l.at == t.at);
                line.map(|l| l.shape().into_iter().filter(|b| *b != b' ').collect::<Vec<u8>>())
            };
            let own = shape(first);
            if told.iter().skip(1).filter(|t| reading(&t.what).is_some()).all(|t| shape(t) != own) {
                return true;
            }
            let letter = first.body.first().is_some_and(u8::is_ascii_alphabetic);
            let begins = letter && second.is_some_and(|s| shape(s) == own);
            let digits = |b: &[u8]| b.iter().position(|b| !b.is_ascii_digit()).unwrap_or(b.len());
            let longest = told.iter().skip(1).filter(|t| reading(&t.what).is_some()).map(|t| digits(&t.body)).max().unwrap_or(0);
            let signed = told.iter().filter_map(|t| reading(&t.what)).any(|(_, r)| r.mass.ug() < 0);
            let long = digits(&first.body) > 0 && digits(&first.body) >= longest && !signed;
            let same = matches!(next, Some(What::Signal(Signal::Mass(n))) if n.mass == r.mass);
            let like_next = same && second.is_some_and(|s| shape(s) == own);
            !(begins || same_length || like_next || long)
        }
        (What::Signal(Signal::Total(n)), Some(What::Signal(Signal::Total(next)))) => *next != n + 1 && *next > 1,
        (What::Signal(Signal::Code(_)), _) => !same_length,
        _ => false,
    }
}

/// Check digits behind the line end that were not understood stand at the beginning of what follows, such as a question
/// that the instrument sends back.
fn unread_check(told: &[Told], lines: &Lines) -> bool {
    let read: BTreeSet<usize> = told.iter().filter(|t| matches!(t.what, What::Signal(_))).map(|t| t.at).collect();
    let rest: Vec<&[u8]> = lines.lines.iter().filter(|l| !read.contains(&l.at)).map(|l| l.body.as_slice()).collect();
    [2, 4].into_iter().any(|n| {
        let headed = rest.iter().filter(|b| b.len() >= n && b[..n].iter().all(u8::is_ascii_hexdigit));
        let (heads, tails): (BTreeSet<&[u8]>, BTreeSet<&[u8]>) = headed.clone().map(|b| b.split_at(n)).unzip();
        headed.count() * 4 >= lines.lines.len() && heads.len() >= 3 && tails.len() <= 2
    })
}

/// Every known mass must have been read.
fn proven(readings: &[(Mass, LearnedReading)], hints: &Hints) -> Result<(), Refusal> {
    for known in &hints.masses {
        let near = |(step, r): &(Mass, LearnedReading)| {
            // Near in steps and in share: else a coarse reading of zero would be near to every small mass.
            let (away, steps) = ((r.mass - *known).abs().ug(), 5 * step.ug());
            away <= steps.max(known.abs().ug() / 500) && (known.ug() == 0 || away * 20 <= known.abs().ug())
        };
        if !readings.iter().any(near) {
            let says = format!(
                "the known mass {known} g was not read: put it on the pan and wait until it is at rest, or correct --mass"
            );
            return Err(Refusal::new(Some(Kind::Balance), 10, says));
        }
    }
    Ok(())
}

/// More lines, more different values, check digits and known masses make it surer.
fn confidence(told: &[Told], lines: &Lines, hints: &Hints) -> f64 {
    let understood = told.iter().filter(|t| matches!(t.what, What::Signal(_))).count();
    let values: BTreeSet<&[u8]> = told.iter().map(|t| t.body.as_slice()).collect();
    let share = understood as f64 / lines.lines.len().max(1) as f64;
    let many = (understood.min(20) + values.len().min(10)) as f64 / 30.0;
    let sure = if lines.checked.check.is_some() || !hints.masses.is_empty() { 0.1 } else { 0.0 };
    let raw = 0.5 + 0.2 * share.min(1.0) + 0.2 * many + sure;
    (raw * 100.0).round() / 100.0
}
