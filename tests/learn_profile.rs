//! What profiles can say beside patterns: signs apart, points that are not
//! printed, check digits of many kinds and places, frames without an end.

use proptest::prelude::*;
use std::sync::Arc;
use tarecup_core::signal::{Reading, Signal};
use tarecup_drivers::frame::{Framer, Framing, FramingFault, How};
use tarecup_drivers::heard::{Reject, What};
use tarecup_drivers::profile::{Profile, ProfileText};

fn compiled(toml: &str) -> Result<Arc<Profile>, String> {
    let text: ProfileText = toml::from_str(&format!("kind = \"balance\"\n{toml}")).map_err(|e| e.to_string())?;
    Profile::compile(text).map(Arc::new).map_err(|e| e.to_string())
}

fn ug(profile: &Profile, frame: &[u8]) -> Result<i64, Reject> {
    match profile.decode(frame) {
        What::Signal(Signal::Mass(Reading { mass, .. })) => Ok(mass.ug()),
        What::Reject(reason) => Err(reason),
        other => panic!("{other:?}"),
    }
}

#[test]
fn signs_that_stand_apart() {
    let p = compiled("frame = { ends = [\"\\n\"] }\n[[line]]\npattern = '(?<mass>-?\\d+\\.\\d\\d) ?(?<sign>[+*-])?(?<unit>g)'")
        .expect("a profile");
    for (line, want) in [
        ("12.34 -g\n", Ok(-12_340_000)),
        ("12.34+g\n", Ok(12_340_000)),
        ("12.34g\n", Ok(12_340_000)),
        ("-12.34g\n", Ok(-12_340_000)),
        // Two signs, or one that is none, are not understood.
        ("-12.34-g\n", Err(Reject::Mass)),
        ("12.34*g\n", Err(Reject::Mass)),
    ] {
        assert_eq!(ug(&p, line.as_bytes()), want, "{line}");
    }
    assert!(
        compiled("frame = { ends = [\"\\n\"] }\n[[line]]\npattern = '(?<sign>-)x'\nmeans = \"nothing\"")
            .expect_err("refused")
            .contains("belong to a mass")
    );
}

#[test]
fn points_that_are_not_printed() {
    let of = |d: u8| {
        compiled(&format!(
            "unit = \"g\"\ndecimals = {d}\nframe = {{ ends = [\"\\n\"] }}\n[[line]]\npattern = '(?<mass>[+-]?[0-9.]+)'"
        ))
    };
    let p = of(2).expect("a profile");
    for (line, want) in [
        ("001234\n", Ok(12_340_000)),
        ("-001234\n", Ok(-12_340_000)),
        ("34\n", Ok(340_000)),
        ("12.5\n", Ok(12_500_000)),
        ("4\n", Err(Reject::Mass)),
        ("-4\n", Err(Reject::Mass)),
        ("000000000000000000000000000000000000001\n", Err(Reject::Mass)),
    ] {
        assert_eq!(ug(&p, line.as_bytes()), want, "{line}");
    }
    assert!(of(0).expect_err("refused").contains("decimals") && of(10).is_err());
}

#[test]
fn check_digits_before_the_end() {
    let of = |check: &str, tail: &str| {
        compiled(&format!(
            "unit = \"g\"\nframe = {{ ends = [\"\\r\\n\"]{tail} }}\ncheck = {{ {check} }}\n[[line]]\npattern = '(?<mass>\\d+\\.\\d\\d)\\*?'"
        ))
    };
    let p = of("kind = \"twos-complement\", place = \"before-end\", skip = 1", "").expect("a profile");
    // 1+2+.+3+4 in ASCII are 0x31 0x32 0x2E 0x33 0x34: their sum is 0xF8, its complement 0x08.
    assert_eq!(ug(&p, b"12.34*08\r\n"), Ok(12_340_000));
    assert_eq!(ug(&p, b"12.34*09\r\n"), Err(Reject::Checksum));
    assert_eq!(ug(&p, b"*\r\n"), Err(Reject::Checksum));
    assert_eq!(p.decode(b"\r\n"), What::Nothing);
    for (check, tail, word) in [
        ("kind = \"crc16-arc\"", ", tail = 2", "tail = 4"),
        ("kind = \"crc16-arc\", digits = \"binary\"", ", tail = 4", "tail = 2"),
        ("kind = \"xor\", place = \"before-end\"", ", tail = 2", "leave 'tail' out"),
        ("kind = \"xor\", place = \"before-end\", skip = 99", "", "at most 8"),
        ("kind = \"crc-77\"", ", tail = 2", "crc-77"),
    ] {
        let says = of(check, tail).expect_err("refused");
        assert!(says.contains(word), "{check}: {says}");
    }
}

#[test]
fn a_binary_check_byte_may_be_a_start_byte() {
    let toml = |digits: &str, tail: u8| {
        format!(
            "unit = \"g\"\nframe = {{ starts = \"\\u0002\", ends = [\"\\u0003\"], tail = {tail} }}\ncheck = {{ kind = \"xor\", digits = \"{digits}\" }}\n[[line]]\npattern = '(?<mass>\\d+\\.\\d)'"
        )
    };
    let p = compiled(&toml("binary", 1)).expect("a profile");
    // 0x31 ^ 0x2E ^ 0x31 = 0x2E. A start byte (02) in the place of check digits is one of them, here a wrong one.
    let mut framer = Framer::new(p.framing().clone());
    framer.opened(true);
    let mut frames = Vec::new();
    framer.push(b"\x029.9\x03\x02\x021.1\x03\x2E", |f| frames.push((f.bytes.to_vec(), f.how)));
    assert_eq!(frames, [(b"\x029.9\x03\x02".to_vec(), How::Whole), (b"\x021.1\x03\x2E".to_vec(), How::Whole)]);
    assert_eq!(ug(&p, &frames[0].0), Err(Reject::Checksum));
    assert_eq!(ug(&p, &frames[1].0), Ok(1_100_000));
}

#[test]
fn frames_without_an_end() {
    let p = compiled("frame = { length = 10, columns = \"?####.##g?\" }\n[[line]]\npattern = '(?<mass>[+-]\\d+\\.\\d\\d)(?<unit>g)(?:(?<steady>S)|U)'").expect("a profile");
    let mut framer = Framer::new(p.framing().clone());
    framer.opened(true);
    let mut got = Vec::new();
    framer.push(b"34gS+0012.34gS-0001.00gU+00x2.34gS+0000.01gS+00", |f| got.push((f.bytes.to_vec(), f.how)));
    let whole: Vec<&[u8]> = got.iter().filter(|f| f.1 == How::Whole).map(|f| f.0.as_slice()).collect();
    assert_eq!(whole, [&b"+0012.34gS"[..], b"-0001.00gU", b"+0000.01gS"]);
    assert_eq!(ug(&p, whole[1]), Ok(-1_000_000));
    assert_eq!(got.iter().map(|f| f.0.len()).sum::<usize>() + framer.pending(), 47, "no byte is lost");
    for (frame, word) in [
        ("length = 9, columns = \"?####.##g?\"", "'columns' shows 10"),
        ("length = 10", "'columns' shows 0"),
        ("length = 3, columns = \"###\"", "of its own"),
        ("length = 3, columns = \"##g\", ends = [\"\\n\"]", "leave them out"),
    ] {
        let toml = format!("unit = \"g\"\nframe = {{ {frame} }}\n[[line]]\npattern = '(?<mass>\\d+)g'");
        let says = compiled(&toml).expect_err("refused");
        assert!(says.contains(word), "{frame}: {says}");
    }
    assert_eq!(Framing::fixed(b"????").expect_err("refused"), FramingFault::Columns);
}

proptest! {
    #[test]
    fn endless_frames_are_the_same_however_they_are_split(bytes in prop::collection::vec(prop::sample::select(b"0123.g+".to_vec()), 0..300), size in 1usize..40) {
        let framing = Framing::fixed(b"##.#g").expect("a framing");
        let cut = |size: usize| {
            let mut framer = Framer::new(framing.clone());
            framer.opened(false);
            let mut out = Vec::new();
            for chunk in bytes.chunks(size) {
                framer.push(chunk, |p| out.push((p.bytes.to_vec(), p.how)));
            }
            framer.lost(|p| out.push((p.bytes.to_vec(), p.how)));
            out
        };
        let whole = cut(bytes.len().max(1));
        prop_assert_eq!(&whole, &cut(size));
        prop_assert_eq!(whole.iter().flat_map(|p| p.0.clone()).collect::<Vec<u8>>(), bytes);
    }
}
