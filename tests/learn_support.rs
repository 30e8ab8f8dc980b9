//! Captures for the exam of learning: the stored ones with what they say, and what somebody who learns made of them.

use std::path::PathBuf;
use std::sync::Arc;
use tarecup_core::quantity::{Mass, MassUnit};
use tarecup_core::signal::{Basis, Mark, Signal};
use tarecup_core::stamp::Stamp;
use tarecup_drivers::heard::What;
use tarecup_drivers::intake::Intake;
use tarecup_drivers::learn::{Hints, Learned, Piece, learn};
use tarecup_drivers::profile::{Kind, Profile, ProfileText};
use tarecup_simulators::captures::{self, Answer, Capture, Code, Count, Reading, Score, Told, Truth, score};

/// Folder of the stored captures.
fn folder() -> PathBuf {
    PathBuf::from(env!("CARGO_MANIFEST_DIR")).join("../tests/captures")
}

/// Every stored capture with its name.
pub fn stored() -> Vec<(String, Capture)> {
    let mut names: Vec<String> = std::fs::read_dir(folder())
        .expect("the folder of captures")
        .flatten()
        .filter_map(|e| e.file_name().to_str()?.strip_suffix(".cap").map(String::from))
        .collect();
    names.sort();
    names.into_iter().map(|name| (name.clone(), read(&name))).collect()
}

fn read(name: &str) -> Capture {
    let bytes = std::fs::read(folder().join(format!("{name}.cap"))).unwrap_or_else(|e| panic!("{name}.cap: {e}"));
    let text = std::fs::read_to_string(folder().join(format!("{name}.toml"))).unwrap_or_else(|e| panic!("{name}.toml: {e}"));
    assert!(text.contains("Invented for this project"), "{name}.toml does not say where the capture comes from");
    let table: toml::Table = text.parse().unwrap_or_else(|e| panic!("{name}.toml: {e}"));
    let flag = |key: &str, usual: bool| table.get(key).map_or(usual, |v| v.as_bool().expect("true or false"));
    let items = |key: &str| -> Vec<&str> {
        let list = table.get(key).and_then(toml::Value::as_array);
        list.into_iter().flatten().map(|v| v.as_str().expect("a text")).collect()
    };
    let truth = Truth {
        kind: kind_named(table["kind"].as_str().expect("a kind")),
        readings: items("readings").into_iter().map(reading).collect(),
        counts: items("counts").into_iter().map(count).collect(),
        codes: items("codes").into_iter().map(code).collect(),
        fair: flag("fair", true),
        steady_evident: flag("steady_evident", true),
        basis_evident: flag("basis_evident", true),
    };
    let told = table.get("told").and_then(toml::Value::as_table);
    let told_text = |key: &str| told.and_then(|t| t.get(key)).map(|v| v.as_str().expect("a text"));
    let told = Told {
        masses_ug: Vec::new(),
        unit: told_text("unit").map(|u| if u == "kg" { "kg" } else { "g" }),
        kind: told_text("kind").map(kind_named),
    };
    Capture { bytes, about: text.lines().take(1).collect(), told, truth }
}

fn kind_named(word: &str) -> captures::Kind {
    match word {
        "balance" => captures::Kind::Balance,
        "counter" => captures::Kind::Counter,
        "scanner" => captures::Kind::Scanner,
        other => panic!("no kind {other}"),
    }
}

/// `21.43 g steady gross ?`; a question mark for what may be left out.
fn reading(text: &str) -> Reading {
    let mut words = text.split(' ');
    let mass_ug = micrograms(words.next().expect("a number"), words.next().expect("a unit"));
    let mut reading = Reading { mass_ug, steady: None, basis: captures::Basis::Unmarked, must: true };
    for word in words {
        match word {
            "steady" => reading.steady = Some(true),
            "moving" => reading.steady = Some(false),
            "gross" => reading.basis = captures::Basis::Gross,
            "net" => reading.basis = captures::Basis::Net,
            "?" => reading.must = false,
            other => panic!("no word {other} in {text}"),
        }
    }
    reading
}

/// Written apart from the program's own parser.
fn micrograms(number: &str, unit: &str) -> i64 {
    let size = match unit {
        "mg" => 1_000,
        "g" => 1_000_000,
        "kg" => 1_000_000_000,
        other => panic!("no unit {other}"),
    };
    let decimals = number.split_once('.').map_or(0, |(_, d)| d.len());
    let steps: i64 = number.replace('.', "").parse().expect("digits");
    steps * size / 10i64.pow(u32::try_from(decimals).unwrap())
}

fn count(text: &str) -> (Count, bool) {
    let (text, must) = may(text);
    let number = |n: &str| n.parse().expect("a number");
    let count = match text.split_once(' ') {
        None if text == "drop" => Count::Drop,
        None if text == "end" => Count::End(None),
        Some(("total", n)) => Count::Total(number(n)),
        Some(("end", n)) => Count::End(Some(number(n))),
        _ => panic!("no count {text}"),
    };
    (count, must)
}

fn code(text: &str) -> Code {
    let (text, must) = may(text);
    Code { text: text.into(), must }
}

fn may(text: &str) -> (&str, bool) {
    text.strip_suffix(" ?").map_or((text, true), |t| (t, false))
}

/// What was told, as the learner takes it.
pub fn hints(told: &Told) -> Hints {
    Hints {
        masses: told.masses_ug.iter().map(|ug| Mass::from_ug(*ug)).collect(),
        unit: told.unit.and_then(MassUnit::parse),
        kind: told.kind.map(|k| match k {
            captures::Kind::Balance => Kind::Balance,
            captures::Kind::Counter => Kind::Counter,
            captures::Kind::Scanner => Kind::Scanner,
        }),
    }
}

/// Whoever learns: pieces and hints in, what was worked out.
pub type Learner = fn(&[Piece<'_>], &Hints) -> Learned;

/// What a learner makes of a capture heard in one piece.
pub fn learned(by: Learner, capture: &Capture) -> Learned {
    by(&[Piece { at_us: None, bytes: &capture.bytes }], &hints(&capture.told))
}

/// The learner that is examined.
pub fn candidate(pieces: &[Piece<'_>], hints: &Hints) -> Learned {
    learn(pieces, hints)
}

fn basis(basis: Basis) -> captures::Basis {
    match basis {
        Basis::Gross => captures::Basis::Gross,
        Basis::Net => captures::Basis::Net,
        Basis::Unmarked => captures::Basis::Unmarked,
    }
}

fn kind(kind: Kind) -> captures::Kind {
    match kind {
        Kind::Balance => captures::Kind::Balance,
        Kind::Counter => captures::Kind::Counter,
        Kind::Scanner => captures::Kind::Scanner,
    }
}

/// A profile made ready.
pub fn compiled(text: &ProfileText) -> Result<Arc<Profile>, String> {
    Profile::compile(text.clone()).map(Arc::new).map_err(|e| e.to_string())
}

/// What a port that speaks by this profile would give for these bytes, heard from an unknown place.
pub fn decoded(profile: &Arc<Profile>, bytes: &[u8]) -> Answer {
    let mut answer = Answer { kind: Some(kind(profile.kind())), ..Answer::default() };
    let mut intake = Intake::new(0, profile);
    intake.opened(false);
    let batches = bytes.chunks(64).filter_map(|c| intake.read(c, Stamp::default(), None)).collect::<Vec<_>>();
    for frame in batches.into_iter().flat_map(|b| b.frames) {
        let What::Signal(signal) = frame.what else { continue };
        match signal {
            Signal::Mass(r) => {
                let steady = match r.mark {
                    Mark::Steady => Some(true),
                    Mark::Moving => Some(false),
                    Mark::Unmarked => None,
                };
                answer.readings.push((r.mass.ug(), steady, basis(r.basis)));
            }
            Signal::Drop => answer.counts.push(Count::Drop),
            Signal::Total(n) => answer.counts.push(Count::Total(n)),
            Signal::End(n) => answer.counts.push(Count::End(n)),
            Signal::Code(text) => answer.codes.push(text),
            Signal::Overload | Signal::Underload | Signal::NotReady => {}
        }
    }
    answer
}

/// Judges what a learner said by its own readings and by what its profile does with the bytes; the worse counts.
pub fn judge(capture: &Capture, learned: &Learned) -> Score {
    let Some(text) = &learned.profile else {
        return match learned.missing.is_empty() {
            true => Score::Wrong("refused without a word on what is missing".into()),
            false => Score::Refused,
        };
    };
    let profile = match compiled(text) {
        Ok(profile) => profile,
        Err(e) => return Score::Wrong(format!("a profile that does not compile: {e}")),
    };
    let by_profile = decoded(&profile, &capture.bytes);
    let said = Answer {
        refused: false,
        kind: learned.kind.map(kind),
        readings: learned.readings.iter().map(|r| (r.mass.ug(), r.steady, basis(r.basis))).collect(),
        // The numbers alone say too little of what a count is; the profile says it.
        counts: by_profile.counts.clone(),
        codes: learned.codes.clone(),
    };
    let own = worse(score(&capture.truth, &said), numbers(&capture.truth, &learned.counts));
    worse(own, named(score(&capture.truth, &by_profile)))
}

fn named(score: Score) -> Score {
    match score {
        Score::Wrong(text) => Score::Wrong(format!("its profile reads {text}")),
        Score::Partly(text) => Score::Partly(format!("its profile reads {text}")),
        other => other,
    }
}

fn worse(a: Score, b: Score) -> Score {
    let rank = |s: &Score| match s {
        Score::Wrong(_) => 0,
        Score::Partly(_) => 1,
        Score::Refused => 2,
        Score::Understood => 3,
    };
    if rank(&b) < rank(&a) { b } else { a }
}

/// The counts that were said must be those of the truth, each number or drops numbered, in order.
fn numbers(truth: &Truth, said: &[u32]) -> Score {
    let mut running = 0;
    let mut all = Vec::new();
    for (count, _) in &truth.counts {
        match count {
            Count::Drop => running += 1,
            Count::Total(n) => running = *n,
            Count::End(n) => running = n.unwrap_or(running),
        }
        all.push(running);
        if matches!(count, Count::End(_)) {
            running = 0;
        }
    }
    let mut left = all.iter();
    match said.iter().find(|n| !left.any(|m| m == *n)) {
        None => Score::Understood,
        Some(n) => Score::Wrong(format!("the count {n} is not what was said, in {said:?}")),
    }
}
