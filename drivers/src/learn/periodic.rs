//! Frames without an end: found by what repeats, or by the pauses between them.

use super::frames::{Guess, Heard};
use crate::profile::text::FrameText;

/// Frame lengths that are tried.
const LENGTHS: std::ops::RangeInclusive<usize> = 6..=64;
/// Bytes that are compared.
const LOOK: usize = 16_384;

/// How alike two bytes of one column are: digits are alike, and so are a blank and a digit of a padded number.
fn alike(a: u8, b: u8) -> u32 {
    let filled = |b: u8| b.is_ascii_digit() || b == b' ';
    match () {
        () if a == b || (a.is_ascii_digit() && b.is_ascii_digit()) => 2,
        () if filled(a) && filled(b) => 1,
        () => 0,
    }
}

/// The length after which everything looks the same again.
pub(super) fn length(bytes: &[u8]) -> Option<usize> {
    let bytes = &bytes[..bytes.len().min(LOOK)];
    let score = |p: usize| {
        let n = bytes.len().checked_sub(p).filter(|n| *n >= 2 * p)?;
        let sum: u32 = (0..n).map(|i| alike(bytes[i], bytes[i + p])).sum();
        Some(f64::from(sum) / (2 * n) as f64)
    };
    let scores: Vec<(usize, f64)> = LENGTHS.filter_map(|p| score(p).map(|s| (p, s))).collect();
    let best = scores.iter().map(|s| s.1).fold(0.0, f64::max);
    scores.into_iter().find(|s| best >= 0.8 && s.1 >= best - 0.02).map(|s| s.0)
}

/// What each column holds when frames begin at `phase`.
fn columns(bytes: &[u8], length: usize, phase: usize) -> Option<String> {
    let frames: Vec<&[u8]> = bytes[phase..].chunks_exact(length).collect();
    let column = |c: usize| {
        let first = frames.first()?[c];
        let digits = frames.iter().all(|f| f[c].is_ascii_digit());
        let same = frames.iter().all(|f| f[c] == first) && first.is_ascii() && !matches!(first, b'#' | b'?') && !digits;
        // Signs and blanks stand for what is not there now.
        let open = matches!(first, b' ' | b'+' | b'-');
        Some(match () {
            () if digits => '#',
            () if same && !open => char::from(first),
            () => '?',
        })
    };
    (0..length).map(column).collect()
}

/// The places where a frame may begin: a start byte; pauses; the file's
/// beginning, or the beginning that whole frames up to its end would have.
fn phases(heard: &Heard, length: usize) -> Vec<usize> {
    let start = heard.bytes.iter().take(length).position(|b| matches!(b, 0x01 | 0x02));
    if let Some(start) = start {
        return vec![start];
    }
    if let Some(first) = heard.gaps.first() {
        let same = heard.gaps.iter().filter(|g| **g % length == first % length).count();
        return if same * 10 >= heard.gaps.len() * 9 { vec![first % length] } else { Vec::new() };
    }
    let rest = heard.bytes.len() % length;
    let mut phases = if rest == 0 { vec![0] } else { vec![0, rest] };
    phases.retain(|p| !splits(&heard.bytes, length, *p));
    phases
}

/// Whether frames that begin there would cut numbers in two.
fn splits(bytes: &[u8], length: usize, phase: usize) -> bool {
    let number = |b: u8| b.is_ascii_digit() || matches!(b, b'.' | b',');
    let borders: Vec<bool> = (phase..bytes.len())
        .step_by(length)
        .skip(1)
        .map(|at| {
            // A number behind the blanks is another one.
            let next = bytes[at..].iter().find(|b| **b != b' ').copied().unwrap_or(b' ');
            let parted = bytes[at] == b' ' && (next.is_ascii_digit() || matches!(next, b'+' | b'-'));
            let digit = number(bytes[at - 1]) || matches!(bytes[at - 1], b'+' | b'-');
            digit && (number(bytes[at]) || bytes[at] == b' ') && !(parted && number(bytes[at - 1]))
        })
        .collect();
    borders.iter().filter(|cut| **cut).count() * 10 > borders.len()
}

/// Ways to cut frames of a fixed length.
pub(super) fn candidates(heard: &Heard) -> Vec<Guess> {
    let Some(length) = length(&heard.bytes) else { return Vec::new() };
    let guess = |phase: usize| {
        let columns = columns(&heard.bytes, length, phase)?;
        let own = columns.bytes().any(|c| !matches!(c, b'#' | b'?'));
        // The same columns must not fit in another place of what was heard.
        let fits = |at: usize| heard.bytes[at..at + length].iter().zip(columns.bytes()).all(|(b, c)| covers(c, *b));
        let other = (0..heard.bytes.len().saturating_sub(length)).filter(|at| at % length != phase && fits(*at));
        let turned = other.count() * 10 * length > heard.bytes.len();
        let frame = FrameText { length: Some(length), columns: columns.clone(), ..FrameText::default() };
        (own && !turned).then_some(Guess { frame, doubtful: false })
    };
    phases(heard, length).into_iter().filter_map(guess).collect()
}

/// Whether a column so described may hold the byte.
fn covers(column: u8, byte: u8) -> bool {
    column == byte || column == b'?' || (column == b'#' && byte.is_ascii_digit())
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::learn::Piece;

    fn found(text: &str) -> Vec<String> {
        let heard = Heard::new(&[Piece { at_us: None, bytes: text.as_bytes() }]);
        candidates(&heard).into_iter().map(|g| g.frame.columns).collect()
    }

    #[test]
    fn what_repeats_is_found() {
        let text: String = (0..12).map(|i| format!("+{:07.2}gS", f64::from(i) * 7.13)).collect();
        assert_eq!(found(&text), ["?####.##gS"]);
        assert!(found(&text[3..]).len() < 2, "a cut number is no beginning");
        let text: String = (0..12).map(|i| format!("\u{2}{:07.2}g", f64::from(i) * 7.13)).collect();
        assert_eq!(found(&text[4..]), ["\u{2}####.##g"]);
        assert!(found("no two words of this are the same length or look alike in any way").is_empty());
    }
}
