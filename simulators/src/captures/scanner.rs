//! Code scanners.

use super::surround::{Fate, Wrap, join};
use super::{Capture, Code, Kind, Told, Truth, pick, size};
use crate::rng::Rng;

pub(super) fn capture(rng: &mut Rng) -> Capture {
    let (codes, plain) = codes(rng);
    let symbology = rng.chance(0.35).then(|| pick(rng, &["]C1", "]C0", "]E0", "]Q3", "]d2", "]A0"]));
    let mut wrap = Wrap::plain(pick(rng, &[b"\r\n".as_slice(), b"\r\n", b"\r", b"\n", b"\t"]));
    if rng.chance(0.12) {
        wrap = Wrap { start: b"\x02", ..Wrap::plain(b"\x03") };
    }
    let mut frames = Vec::new();
    for code in &codes {
        let text = format!("{}{code}", symbology.unwrap_or_default());
        let number = (text.len() - code.len(), text.len());
        frames.push(wrap.frame(text.as_bytes(), number, Some(Code { text: code.clone(), must: true })));
    }
    let fate = Fate { cut_last: rng.chance(0.2), ..Fate::default() };
    let (bytes, codes) = join(rng, frames, &wrap, fate);
    let told = Told { kind: (plain && symbology.is_none()).then_some(Kind::Scanner), ..Told::default() };
    let about = format!("scanner, {symbology:?}, {}, {fate:?}", wrap.about());
    Capture { bytes, about, told, truth: Truth { codes, ..Truth::new(Kind::Scanner) } }
}

/// Codes of one laboratory, and whether they could as well be the counts or numbers of something else.
fn codes(rng: &mut Rng) -> (Vec<String>, bool) {
    let count = size(rng, 7, 16);
    let style = rng.between(0, 3);
    let pool: Vec<String> = match style {
        // Containers, bags and boreholes together.
        0 => {
            let mut pool = Vec::new();
            for letter in ["C", "S-", "BH", "tin "] {
                let more = size(rng, 2, 5);
                pool.extend((0..more).map(|_| format!("{letter}{}", rng.between(1, 240))));
            }
            pool
        }
        // Containers alone.
        1 => (0..9).map(|_| format!("{}{:03}", pick(rng, &["C", "C"]), rng.between(1, 400))).collect(),
        // Long numbers, as on bought labels.
        2 => (0..9).map(|_| format!("{}{:07}", rng.between(40_000, 49_999), rng.between(0, 9_999_999))).collect(),
        _ => {
            let mut one = || {
                format!("{}/{}-{}", pick(rng, &["LL", "PL", "WC", "B2"]), rng.between(1, 99), pick(rng, &["a", "b", "XY", "K9"]))
            };
            (0..9).map(|_| one()).collect()
        }
    };
    let codes = (0..count).map(|_| pick(rng, &pool)).collect();
    (codes, style == 1)
}
