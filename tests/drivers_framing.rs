//! Framing under every split of the bytes, noise between frames, and floods.

use proptest::prelude::*;
use std::sync::Arc;
use tarecup_core::signal::Signal;
use tarecup_core::stamp::Stamp;
use tarecup_drivers::frame::{Framer, Framing, How};
use tarecup_drivers::heard::{Batch, Reject, What};
use tarecup_drivers::intake::Intake;
use tarecup_drivers::profile::{Profile, ProfileText};

macro_rules! profiles {
    ($($name:literal),* $(,)?) => { [$(include_str!(concat!("../config/profiles/", $name, ".toml"))),*] };
}

fn shipped() -> Vec<Arc<Profile>> {
    let texts = profiles!(
        "signed-steady",
        "plain-stream",
        "print-line",
        "slip-gross-net",
        "asked-long",
        "comma-stream",
        "framed-xor",
        "drop-line",
        "running-total",
        "byte-per-drop",
        "contact-closure",
        "plain-code",
        "framed-code",
    );
    texts.iter().map(|t| compiled(t)).collect()
}

fn compiled(toml: &str) -> Arc<Profile> {
    let text: ProfileText = toml::from_str(toml).expect("a profile");
    Arc::new(Profile::compile(text).expect("a profile"))
}

fn signed_steady() -> Arc<Profile> {
    compiled(include_str!("../config/profiles/signed-steady.toml"))
}

fn pieces(framing: &Framing, quiet: bool, chunks: &[&[u8]]) -> Vec<(Vec<u8>, How)> {
    let mut framer = Framer::new(framing.clone());
    framer.opened(quiet);
    let mut out = Vec::new();
    for chunk in chunks {
        framer.push(chunk, |p| out.push((p.bytes.to_vec(), p.how)));
    }
    framer.lost(|p| out.push((p.bytes.to_vec(), p.how)));
    out
}

/// Splits bytes at the given places, wrapped around.
fn split<'a>(bytes: &'a [u8], cuts: &[usize]) -> Vec<&'a [u8]> {
    let mut places: Vec<usize> = cuts.iter().map(|c| c % (bytes.len() + 1)).collect();
    places.extend([0, bytes.len()]);
    places.sort_unstable();
    places.windows(2).map(|w| &bytes[w[0]..w[1]]).collect()
}

/// Bytes rich in those that mean something to some dialect.
fn lively() -> impl Strategy<Value = Vec<u8>> {
    let byte = prop_oneof![
        3 => prop::sample::select(b"\r\n\x0c\x02\x03*=0123456789.+- gSUk".to_vec()),
        1 => any::<u8>(),
    ];
    prop::collection::vec(byte, 0..600)
}

proptest! {
    #![proptest_config(ProptestConfig::with_cases(150))]

    #[test]
    fn any_split_gives_the_same_frames(bytes in lively(), cuts in prop::collection::vec(any::<usize>(), 0..40), quiet: bool) {
        for profile in shipped() {
            let whole = pieces(profile.framing(), quiet, &[&bytes]);
            let parts = pieces(profile.framing(), quiet, &split(&bytes, &cuts));
            prop_assert_eq!(&whole, &parts, "{}", profile.name());
            let singly: Vec<&[u8]> = bytes.chunks(1).collect();
            prop_assert_eq!(&whole, &pieces(profile.framing(), quiet, &singly), "{}", profile.name());
        }
    }

    #[test]
    fn no_byte_is_lost_or_made_up(bytes in lively(), quiet: bool) {
        for profile in shipped() {
            let mut framer = Framer::new(profile.framing().clone());
            framer.opened(quiet);
            let mut kept = Vec::new();
            framer.push(&bytes, |p| kept.extend_from_slice(p.bytes));
            framer.lost(|p| kept.extend_from_slice(p.bytes));
            prop_assert_eq!(kept.len() as u64 + framer.skipped(), bytes.len() as u64, "{}", profile.name());
            if framer.skipped() == 0 {
                prop_assert_eq!(&kept, &bytes, "{}", profile.name());
            }
        }
    }

    #[test]
    fn memory_stays_within_the_longest_frame(chunks in prop::collection::vec(lively(), 0..6)) {
        for profile in shipped() {
            let mut framer = Framer::new(profile.framing().clone());
            framer.opened(false);
            for chunk in &chunks {
                framer.push(chunk, |p| assert!(p.bytes.len() <= profile.framing().longest() + 8));
                prop_assert!(framer.pending() <= profile.framing().longest() + 8);
            }
        }
    }

    #[test]
    fn after_noise_the_next_frame_is_taken(noise in prop::collection::vec(any::<u8>(), 0..700), ug in -9_999_999i64..9_999_999) {
        let profile = signed_steady();
        let sign = if ug < 0 { '-' } else { '+' };
        let line = format!("{sign}{:>10} g  S\r\n", format!("{}.{:04}", ug.abs() / 10_000, ug.abs() % 10_000));
        // The noise spoils the line it runs into; the one after must be heard exactly.
        let mut bytes = noise;
        bytes.extend_from_slice(b"\r\n");
        bytes.extend_from_slice(line.as_bytes());
        let batch = read_all(&profile, true, &bytes);
        let masses = masses(&batch);
        prop_assert_eq!(masses.last(), Some(&(ug * 100)));
        // The noise itself was not taken for a mass.
        prop_assert_eq!(masses.len(), 1);
    }

    #[test]
    fn random_bytes_are_no_mass(bytes in prop::collection::vec(any::<u8>(), 0..3000)) {
        for profile in shipped() {
            for frame in read_all(&profile, true, &bytes).map(|b| b.frames).unwrap_or_default() {
                prop_assert!(!matches!(frame.what, What::Signal(Signal::Mass(_))), "{}", profile.name());
            }
        }
    }

    #[test]
    fn opened_anywhere_only_the_first_partial_line_is_lost(from in 0usize..90) {
        let lines: Vec<String> = (1..=5).map(|n| format!("+   1{n}.4571 g  S\r\n")).collect();
        let stream = lines.concat();
        let from = from.min(stream.len());
        let batch = read_all(&signed_steady(), false, &stream.as_bytes()[from..]);
        // A line is whole when the end of the one before it was heard, at least its last byte.
        let ends: Vec<usize> = lines.iter().scan(0, |at, l| { *at += l.len(); Some(*at) }).collect();
        let expected = ends.iter().filter(|end| **end > from && **end < stream.len()).count();
        prop_assert_eq!(masses(&batch).len(), expected);
        for (mass, n) in masses(&batch).iter().rev().zip((1..=5).rev()) {
            prop_assert_eq!(*mass, 10_457_100 + n * 1_000_000);
        }
    }
}

fn read_all(profile: &Arc<Profile>, quiet: bool, bytes: &[u8]) -> Option<Batch> {
    let mut intake = Intake::new(7, profile);
    intake.opened(quiet);
    intake.read(bytes, Stamp::default(), None)
}

fn masses(batch: &Option<Batch>) -> Vec<i64> {
    let frames = batch.iter().flat_map(|b| &b.frames);
    frames.filter_map(|f| if let What::Signal(Signal::Mass(r)) = &f.what { Some(r.mass.ug()) } else { None }).collect()
}

#[test]
fn without_the_rule_of_the_first_line_a_tail_would_be_a_mass() {
    let profile = compiled(include_str!("../config/profiles/plain-stream.toml"));
    let tail = b"2.34 g\r\n     12.34 g\r\n";
    assert_eq!(masses(&read_all(&profile, false, tail)), [12_340_000]);
    // The control: believed, the tail of 12.34 g is 2.34 g.
    assert_eq!(masses(&read_all(&profile, true, tail)), [2_340_000, 12_340_000]);
}

#[test]
fn a_megabyte_without_a_line_end_is_one_reject() {
    let profile = signed_steady();
    let mut intake = Intake::new(7, &profile);
    intake.opened(true);
    let mut frames = Vec::new();
    for _ in 0..256 {
        frames.extend(intake.read(&[b'7'; 4096], Stamp::default(), None).into_iter().flat_map(|b| b.frames));
    }
    assert_eq!(frames.len(), 1);
    assert_eq!((frames[0].end, &frames[0].what), (256, &What::Reject(Reject::TooLong)));
    assert_eq!(intake.skipped(), 1024 * 1024 - 256);
    let next = intake.read(b"\r\n+   23.4571 g  S\r\n", Stamp::default(), None);
    assert_eq!(masses(&next), [23_457_100]);
}

#[test]
fn a_batch_holds_the_bytes_and_the_stamp_of_the_read_that_completed_the_frame() {
    let mut intake = Intake::new(7, &signed_steady());
    intake.opened(true);
    let at = |us| Stamp { mono_us: us, ..Stamp::default() };
    assert!(intake.read(b"+   23.4571 g", at(1), None).is_none());
    let batch = intake.read(b"  S\r\n\r\n+   23", at(2), None).expect("two frames");
    assert_eq!(batch.instrument, 7);
    assert_eq!(batch.bytes, b"+   23.4571 g  S\r\n\r\n");
    let ends: Vec<(u32, i64)> = batch.frames.iter().map(|f| (f.end, f.at.mono_us)).collect();
    assert_eq!(ends, [(18, 2), (20, 2)]);
    let half = intake.lost(at(3)).expect("the half line");
    assert_eq!((half.bytes.as_slice(), &half.frames[0].what), (b"+   23".as_slice(), &What::Reject(Reject::CutOff)));
    assert_eq!(half.frames[0].at.mono_us, 3);
}
