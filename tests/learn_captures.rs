//! The exam of learning a dialect from what an instrument sent: stored captures, written by hand, and generated ones.
//!
//! Neither the captures nor their truth come from the program that reads them. The generated ones are
//! drawn from a fixed seed, so that a run tells of a change and not of the dice; `CAPTURE_SEED=random` draws them
//! afresh, so that nothing can be fitted to them, and `CAPTURE_SEED=N` repeats a run.

#[path = "learn_support.rs"]
mod support;

use std::fmt::Write;
use std::path::Path;
use std::time::{Duration, Instant};
use support::{Learner, candidate, compiled, decoded, hints, judge, learned, stored};
use tarecup_config::profiles::shipped;
use tarecup_core::quantity::Mass;
use tarecup_drivers::learn::{Hints, Learned, Piece};
use tarecup_drivers::profile::Profile;
use tarecup_simulators::captures::{Answer, Capture, Count, Kind, Score, Truth, generate};
use tarecup_simulators::rng::Rng;

/// Generated captures of one run; `CAPTURE_COUNT` asks for more.
const GENERATED: u64 = 1_500;

fn generated() -> u64 {
    std::env::var("CAPTURE_COUNT").map_or(GENERATED, |text| text.parse().expect("CAPTURE_COUNT is a whole number"))
}

/// How a learner did.
#[derive(Default)]
struct Tally {
    fair: usize,
    understood: usize,
    partly: usize,
    refused: usize,
    wrong: usize,
    unfair: usize,
    unfair_refused: usize,
    spent: Duration,
    failures: Vec<(String, Capture, String)>,
}

/// Examines a learner; the captures are made one by one.
fn exam(captures: impl Iterator<Item = (String, Capture)>, by: Learner) -> Tally {
    let mut tally = Tally::default();
    for (name, capture) in captures {
        let begun = Instant::now();
        let learned = learned(by, &capture);
        tally.spent += begun.elapsed();
        let verdict = judge(&capture, &learned);
        let fair = capture.truth.fair;
        tally.fair += usize::from(fair);
        tally.unfair += usize::from(!fair);
        match (&verdict, fair) {
            (Score::Understood, true) => tally.understood += 1,
            (Score::Partly(_), true) => tally.partly += 1,
            (Score::Refused, true) => tally.refused += 1,
            (Score::Refused, false) => tally.unfair_refused += 1,
            (Score::Wrong(_), _) => tally.wrong += 1,
            (Score::Understood | Score::Partly(_), false) => {}
        }
        let fails = matches!(verdict, Score::Wrong(_)) || fair && verdict != Score::Understood;
        if fails {
            let missing = learned.missing.join("; ");
            tally.failures.push((name, capture, format!("{verdict:?}; missing: {missing}")));
        }
    }
    tally
}

impl Tally {
    /// Share of the fair ones that were understood.
    fn share(&self) -> f64 {
        self.understood as f64 / self.fair.max(1) as f64
    }

    fn words(&self) -> String {
        let all = self.fair + self.unfair;
        format!(
            "{all} captures: {} fair, of them {} understood ({:.2} %), {} partly, {} refused; {} unfair, {} refused; {} wrong; {} µs each",
            self.fair,
            self.understood,
            100.0 * self.share(),
            self.partly,
            self.refused,
            self.unfair,
            self.unfair_refused,
            self.wrong,
            self.spent.as_micros() / all.max(1) as u128,
        )
    }

    /// Keeps each failing capture in a folder and shows the first few.
    fn keep(&self, folder: &Path) -> String {
        let mut text = format!("{}\nfailing captures are in {}\n", self.words(), folder.display());
        std::fs::create_dir_all(folder).expect("a folder for failing captures");
        // Wrong readings are worse than refusals, so they are shown first.
        let mut failures: Vec<_> = self.failures.iter().collect();
        failures.sort_by_key(|f| !f.2.starts_with("Wrong"));
        for (at, (name, capture, verdict)) in failures.into_iter().enumerate() {
            std::fs::write(folder.join(format!("{name}.cap")), &capture.bytes).expect("room for a capture");
            let about = format!("{verdict}\n{}\n{:?}\n{:#?}\n", capture.about, capture.told, capture.truth);
            std::fs::write(folder.join(format!("{name}.txt")), about).expect("room for a note");
            if at < 5 {
                let _ = writeln!(text, "{name}: {verdict}\n  {}\n  {}", capture.about, excerpt(&capture.bytes));
            }
        }
        text
    }
}

/// The first bytes, printable ones as they are and the others as numbers.
fn excerpt(bytes: &[u8]) -> String {
    let mut text = String::new();
    for &byte in bytes.iter().take(400) {
        match byte {
            b'\n' => text.push_str("<0A>\n  "),
            0x20..=0x7E => text.push(char::from(byte)),
            other => {
                let _ = write!(text, "<{other:02X}>");
            }
        }
    }
    text
}

fn base_seed() -> u64 {
    match std::env::var("CAPTURE_SEED") {
        Err(_) => 66_001_000,
        Ok(text) if text != "random" => text.parse().expect("CAPTURE_SEED is a whole number, or random"),
        Ok(_) => {
            let mut bytes = [0; 8];
            getrandom::fill(&mut bytes).expect("a random seed");
            // Short enough to be copied by hand.
            u64::from_le_bytes(bytes) >> 24
        }
    }
}

#[test]
fn stored_captures_are_read_rightly_or_refused() {
    let all = stored();
    assert!(all.len() >= 60, "{} captures", all.len());
    let tally = exam(all.into_iter(), candidate);
    let work = tempfile::tempdir().expect("a folder").keep();
    let words = tally.keep(&work);
    println!("{words}");
    assert!(tally.failures.is_empty(), "{words}");
}

#[test]
fn generated_captures_are_never_misread_and_nearly_all_understood() {
    let base = base_seed();
    let seeds = (0..generated()).map(|n| base.wrapping_add(n));
    let tally = exam(seeds.map(|s| (format!("seed-{s}"), generate(s))), candidate);
    let folder = std::env::temp_dir().join(format!("tarecup-captures-{base}"));
    let words = format!("CAPTURE_SEED={base}: {}", tally.keep(&folder));
    println!("{words}");
    assert_eq!(tally.wrong, 0, "{words}");
    // The target is 97 of 100; runs with fresh seeds came to 97.7 and more. Of 12 000 fresh ones 5 were misread, four of
    // which were mended; the README says what is left.
    assert!(tally.share() >= 0.96, "{words}");
}

#[test]
fn it_does_not_matter_how_the_bytes_were_split() {
    let mut rng = Rng::new(base_seed());
    for (name, capture) in stored() {
        let whole = format!("{:?}", learned(candidate, &capture));
        let single: Vec<&[u8]> = capture.bytes.chunks(1).collect();
        let mut splits = vec![single];
        for _ in 0..2 {
            splits.push(split(&mut rng, &capture.bytes));
        }
        for pieces in splits {
            let pieces: Vec<Piece<'_>> = pieces.into_iter().map(|bytes| Piece { at_us: None, bytes }).collect();
            let other = format!("{:?}", candidate(&pieces, &hints(&capture.told)));
            assert_eq!(whole, other, "{name} in {} pieces", pieces.len());
        }
    }
}

fn split<'a>(rng: &mut Rng, mut bytes: &'a [u8]) -> Vec<&'a [u8]> {
    let mut pieces = Vec::new();
    while !bytes.is_empty() {
        let most = i64::try_from(bytes.len()).unwrap_or(1).min(60);
        let at = usize::try_from(rng.between(1, most)).unwrap_or(1);
        pieces.push(&bytes[..at]);
        bytes = &bytes[at..];
    }
    pieces
}

/// What of an answer through somebody else's profile must not be: masses and counts that were not said.
fn strays(truth: &Truth, answer: &Answer) -> Vec<String> {
    let mut strays = Vec::new();
    let mut said = truth.readings.iter();
    for (mass, ..) in &answer.readings {
        if !said.any(|r| r.mass_ug == *mass) {
            strays.push(format!("a mass of {mass} µg"));
            said = truth.readings.iter();
        }
    }
    let mut said = truth.counts.iter();
    for count in &answer.counts {
        let same = |c: &Count| match (c, count) {
            (a, b) if a == b => true,
            // A final count is a count; that the run is over may be missed.
            (Count::End(Some(a)), Count::Total(b)) => a == b,
            (Count::End(_), Count::End(None)) => true,
            _ => false,
        };
        if !said.any(|(c, _)| same(c)) {
            strays.push(format!("{count:?}"));
            said = truth.counts.iter();
        }
    }
    strays
}

/// A counter that sends a bare byte at each drop hears a drop in that byte wherever it stands: no line tells them apart.
fn drops_by_byte(profile: &Profile, bytes: &[u8]) -> bool {
    let single = profile.text().frame.single.as_bytes();
    bytes.iter().any(|b| single.contains(b))
}

#[test]
fn no_learned_profile_reads_masses_or_counts_out_of_other_instruments() {
    let all = stored();
    let mut profiles = Vec::new();
    for (name, capture) in &all {
        if let Some(text) = learned(candidate, capture).profile {
            profiles.push((name.clone(), compiled(&text).expect("a profile that compiles")));
        }
    }
    let learned_ones = profiles.len();
    for source in shipped().expect("shipped profiles").values() {
        profiles.push((source.name.to_string(), compiled(&source.text).expect("a shipped profile")));
    }
    let mut complaints = Vec::new();
    let mut excused = 0;
    // A code that is a mass in all its letters is read as one by whoever reads masses: such captures prove nothing here.
    for (of, capture) in all.iter().filter(|(_, c)| c.truth.fair || c.truth.kind != Kind::Scanner) {
        for (by, profile) in profiles.iter().filter(|(by, _)| by != of) {
            if drops_by_byte(profile, &capture.bytes) {
                excused += 1;
                continue;
            }
            let strays = strays(&capture.truth, &decoded(profile, &capture.bytes));
            if let Some(first) = strays.first() {
                complaints.push(format!("{of} through {by}: {} strays, first {first}", strays.len()));
            }
        }
    }
    let tried = all.len() * profiles.len();
    println!("{tried} pairs, {excused} excused, {} with strays:\n{}", complaints.len(), complaints.join("\n"));
    assert!(learned_ones >= 40 && profiles.len() >= learned_ones + 10, "{learned_ones} learned");
    assert!(complaints.is_empty(), "{} of {tried} pairs", complaints.len());
}

// ---- controls: what the exam must complain of ----------------------------------------------------------------------

/// Takes the decimal point one place off.
fn point_shifted(pieces: &[Piece<'_>], hints: &Hints) -> Learned {
    let mut learned = candidate(pieces, hints);
    learned.readings.iter_mut().for_each(|r| r.mass = Mass::from_ug(r.mass.ug() * 10));
    learned
}

/// Takes steady for moving.
fn marks_swapped(pieces: &[Piece<'_>], hints: &Hints) -> Learned {
    let mut learned = candidate(pieces, hints);
    learned.readings.iter_mut().for_each(|r| r.steady = r.steady.map(|s| !s));
    learned
}

/// Leaves all marks out.
fn marks_missed(pieces: &[Piece<'_>], hints: &Hints) -> Learned {
    let mut learned = candidate(pieces, hints);
    learned.readings.iter_mut().for_each(|r| r.steady = None);
    learned
}

/// Invents a mass where there was none.
fn mass_invented(pieces: &[Piece<'_>], hints: &Hints) -> Learned {
    let mut learned = candidate(pieces, hints);
    if let Some(last) = learned.readings.last().copied() {
        learned.readings.push(tarecup_drivers::learn::LearnedReading { mass: Mass::from_ug(last.mass.ug() + 10_000), ..last });
    }
    learned
}

/// Counts one drop too many.
fn counts_moved(pieces: &[Piece<'_>], hints: &Hints) -> Learned {
    let mut learned = candidate(pieces, hints);
    learned.counts.iter_mut().for_each(|n| *n += 100);
    learned.codes.iter_mut().for_each(|c| c.push('0'));
    learned
}

/// Refuses all, with a reason or without.
fn refuses(pieces: &[Piece<'_>], hints: &Hints) -> Learned {
    Learned {
        profile: None,
        readings: Vec::new(),
        counts: Vec::new(),
        codes: Vec::new(),
        missing: vec!["courage".into()],
        ..candidate(pieces, hints)
    }
}

fn refuses_mutely(pieces: &[Piece<'_>], hints: &Hints) -> Learned {
    Learned { missing: Vec::new(), ..refuses(pieces, hints) }
}

#[test]
fn wrong_learners_fail_the_exam() {
    // Only where the right learner passes does a wrong one prove that the exam can complain.
    let passed: Vec<_> = stored().into_iter().filter(|(_, c)| judge(c, &learned(candidate, c)) == Score::Understood).collect();
    let of = |fits: fn(&Truth) -> bool| passed.iter().filter(move |(_, c)| c.truth.fair && fits(&c.truth)).cloned();
    let balance: fn(&Truth) -> bool = |t| t.kind == Kind::Balance && t.readings.iter().any(|r| r.mass_ug != 0);
    let marked: fn(&Truth) -> bool = |t| t.steady_evident && t.readings.iter().any(|r| r.steady.is_some());
    for (word, tally) in [
        ("point", exam(of(balance), point_shifted)),
        ("invented", exam(of(balance), mass_invented)),
        ("swapped", exam(of(marked), marks_swapped)),
        ("others", exam(of(|t| t.kind != Kind::Balance), counts_moved)),
        ("mute", exam(of(|_| true), refuses_mutely)),
    ] {
        assert!(tally.fair >= 8 && tally.wrong == tally.fair, "{word}: {}", tally.words());
    }
    let missed = exam(of(marked), marks_missed);
    assert!(missed.fair >= 8 && missed.partly == missed.fair, "{}", missed.words());
    let refused = exam(of(|_| true), refuses);
    assert!(refused.refused == refused.fair && refused.share() == 0.0, "{}", refused.words());
}

#[test]
fn strays_are_seen() {
    let (_, capture) = stored().into_iter().find(|(name, _)| name.starts_with("b01")).expect("a balance");
    let mut answer =
        Answer { readings: vec![(21_430_000, None, tarecup_simulators::captures::Basis::Unmarked)], ..Answer::default() };
    assert_eq!(strays(&capture.truth, &answer), [""; 0]);
    answer.readings[0].0 = 2_143_000;
    answer.counts.push(Count::Total(21));
    assert_eq!(strays(&capture.truth, &answer).len(), 2);
}
