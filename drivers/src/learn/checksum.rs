//! Check digits that agree with the lines they stand in.

use super::frames::{Frame, Guess};
use super::{Refusal, UNREAD_CHECK};
use crate::frame::Parts;
use crate::profile::text::{CheckDigits, CheckKind, CheckOver, CheckPlace, CheckText, FrameText};
use std::collections::BTreeSet;

/// Different lines that must agree.
const ENOUGH: usize = 3;
/// Different lines that are compared.
const LOOK: usize = 48;

/// Frames without their check digits; those that do not agree are left out.
#[derive(Clone, Debug)]
pub(super) struct Checked {
    pub(super) frame: FrameText,
    pub(super) check: Option<CheckText>,
    pub(super) lines: Vec<(usize, Vec<u8>)>,
}

/// Looks for check digits.
pub(super) fn find(frames: &[Frame], guess: &Guess) -> Result<Checked, Refusal> {
    let mut sample: Vec<&Frame> = Vec::new();
    let mut seen = BTreeSet::new();
    for frame in frames.iter().filter(|f| !f.body.trim_ascii().is_empty()) {
        if seen.insert((&frame.body, &frame.tail)) {
            sample.push(frame);
        }
        if sample.len() == LOOK {
            break;
        }
    }
    let found = hypotheses(guess.frame.tail).find(|check| believed(*check, &sample));
    if guess.frame.tail > 0 && found.is_none() {
        return Err(Refusal::new(None, 2, UNREAD_CHECK));
    }
    let strip = |f: &Frame| match found {
        Some(check) => check.stripped(&parts(f)).map(<[u8]>::to_vec),
        None => Some(f.body.clone()),
    };
    let lines = frames.iter().filter_map(|f| strip(f).map(|body| (f.at, body))).collect();
    Ok(Checked { frame: guess.frame.clone(), check: found, lines })
}

fn parts(frame: &Frame) -> Parts<'_> {
    Parts { start: &frame.start, body: &frame.body, end: &frame.end, tail: &frame.tail }
}

/// Every check that could stand there.
fn hypotheses(tail: usize) -> impl Iterator<Item = CheckText> {
    let place = if tail > 0 { CheckPlace::AfterEnd } else { CheckPlace::BeforeEnd };
    // The wider first: the lower byte of a wide sum is itself a sum.
    let wide = |wide: bool| CheckKind::ALL.into_iter().filter(move |k| (k.bytes() == 2) == wide);
    let kinds = wide(true).chain(wide(false));
    kinds
        .flat_map(move |kind| {
            let digits = [CheckDigits::Hex, CheckDigits::Binary].into_iter();
            digits.flat_map(move |digits| {
                let overs = [CheckOver::Body, CheckOver::StartAndBody, CheckOver::BodyAndEnd, CheckOver::StartToEnd].into_iter();
                overs.flat_map(move |over| {
                    (0..=2).flat_map(move |skip| {
                        let orders = if kind.bytes() == 2 { &[false, true][..] } else { &[false][..] };
                        orders.iter().map(move |low_first| CheckText { kind, over, place, digits, skip, low_first: *low_first })
                    })
                })
            })
        })
        .filter(move |c| tail == 0 || c.width() == tail)
        // Digits before the end cannot cover what comes after them.
        .filter(|c| c.place == CheckPlace::AfterEnd || matches!(c.over, CheckOver::Body | CheckOver::StartAndBody))
}

/// Whether enough different lines agree, and nearly none does not.
fn believed(check: CheckText, sample: &[&Frame]) -> bool {
    let mut agree = BTreeSet::new();
    let mut values = BTreeSet::new();
    let mut against = 0;
    for frame in sample {
        match check.stripped(&parts(frame)) {
            Some(body) => {
                let digits = if check.place == CheckPlace::AfterEnd { &frame.tail[..] } else { &frame.body[body.len()..] };
                values.insert(digits.to_vec());
                agree.insert(body);
            }
            None => against += 1,
        }
        if against > 2 + sample.len() / 6 {
            return false;
        }
    }
    agree.len() >= ENOUGH && values.len() >= 2 && against * 4 <= agree.len().max(4)
}

#[cfg(test)]
mod tests {
    use super::*;

    fn frames(check: CheckText, texts: &[&str]) -> Vec<Frame> {
        let one = |(at, text): (usize, &&str)| {
            let (start, end) = (b"\x02".to_vec(), b"\x03".to_vec());
            let whole = [start.as_slice(), text.as_bytes(), end.as_slice()].concat();
            let range = match check.over {
                CheckOver::Body => &whole[1..whole.len() - 1],
                CheckOver::BodyAndEnd => &whole[1..],
                CheckOver::StartAndBody => &whole[..whole.len() - 1],
                CheckOver::StartToEnd => &whole[..],
            };
            let value = check.kind.value(range[..range.len() - check.skip].iter().copied());
            let value = if check.low_first { value.swap_bytes() } else { value };
            let digits = match (check.digits, check.kind.bytes()) {
                (CheckDigits::Hex, 1) => format!("{value:02X}").into_bytes(),
                (CheckDigits::Hex, _) => format!("{value:04x}").into_bytes(),
                (CheckDigits::Binary, 1) => vec![value as u8],
                (CheckDigits::Binary, _) => value.to_be_bytes().to_vec(),
            };
            let mut frame = Frame { start, body: text.as_bytes().to_vec(), end, tail: Vec::new(), at };
            if check.place == CheckPlace::AfterEnd {
                frame.tail = digits
            } else {
                frame.body.extend(digits)
            }
            frame
        };
        texts.iter().enumerate().map(one).collect()
    }

    #[test]
    fn every_kind_is_found_and_nothing_else() {
        let texts = ["+0012.34 g S*", "+0000.00 g S*", "+0100.07 g U*", "+0055.81 g S*", "-0003.10 g U*"];
        for tail in [0, 1, 2, 4] {
            for check in hypotheses(tail) {
                let frames = frames(check, &texts);
                let guess = Guess { frame: FrameText { tail, ..FrameText::default() }, doubtful: false };
                let found = find(&frames, &guess).expect("found");
                assert!(found.check.is_some(), "{check:?}");
                assert!(found.lines.iter().all(|(i, body)| body == texts[*i].as_bytes()), "{check:?} {:?}", found.check);
            }
        }
    }

    #[test]
    fn three_different_lines_must_agree_and_a_wrong_one_is_left_out() {
        let check = CheckText {
            kind: CheckKind::Xor,
            over: CheckOver::Body,
            place: CheckPlace::AfterEnd,
            digits: CheckDigits::Hex,
            skip: 0,
            low_first: false,
        };
        let guess = Guess { frame: FrameText { tail: 2, ..FrameText::default() }, doubtful: false };
        assert!(find(&frames(check, &["1.00 g", "2.00 g"]), &guess).is_err());
        let mut heard = frames(check, &["1.00 g", "2.00 g", "3.00 g", "4.00 g"]);
        heard[2].body[0] = b'7';
        let found = find(&heard, &guess).expect("found");
        assert_eq!(found.lines.iter().map(|l| l.0).collect::<Vec<_>>(), [0, 1, 3]);
    }
}
