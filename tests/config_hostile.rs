//! Broken and hostile files: always an answer, never a panic, and every fault
//! has a real place.

use proptest::prelude::*;
use tarecup_config::methods::{self, Methods};
use tarecup_config::scenario::{self, Mode};
use tarecup_config::{Faults, station, text};

fn shipped() -> Methods {
    methods::shipped().unwrap_or_else(|f| panic!("{f}"))
}

/// Every fault points into the text.
fn placed(faults: &Faults, text: &str) -> bool {
    let lines: Vec<&str> = text.split('\n').collect();
    !faults.list.is_empty()
        && faults.list.iter().all(|f| {
            let line = (f.line as usize).checked_sub(1).and_then(|n| lines.get(n));
            line.is_some_and(|l| f.column >= 1 && f.column as usize <= l.chars().count() + 1)
        })
}

/// All readers on one text.
fn all_readers(text: &str, methods: &Methods) {
    let answers = [
        station::parse("it.toml", text).err(),
        scenario::parse("it.toml", text, Mode::Demo, methods).err(),
        scenario::parse("it.toml", text, Mode::Work, methods).err(),
        methods::parse("it.toml", text).err(),
    ];
    for faults in answers.into_iter().flatten() {
        assert!(placed(&faults, text), "{faults}\nin\n{text}");
        assert!(!faults.to_string().chars().any(|c| c.is_control() && c != '\n'), "{faults:?}");
    }
}

#[test]
fn files_too_large_or_not_text_are_refused_in_words() {
    let folder = tempfile::tempdir().expect("a folder");
    let path = folder.path().join("big.toml");
    std::fs::write(&path, vec![b'#'; text::LARGEST_FILE + 1]).expect("written");
    assert!(text::read_file(&path).expect_err("too large").to_string().contains("larger than 1 MiB"));
    std::fs::write(&path, vec![b'#'; text::LARGEST_FILE]).expect("written");
    assert_eq!(text::read_file(&path).map(|t| t.len()), Ok(text::LARGEST_FILE));
    let big = "#".repeat(text::LARGEST_FILE + 1);
    assert!(station::parse("it.toml", &big).expect_err("too large").to_string().contains("larger than 1 MiB"));

    std::fs::write(&path, b"a = 1\n\xc3\xa9 = \"caf\xe9\"\n").expect("written");
    let faults = text::read_file(&path).expect_err("not UTF-8");
    assert_eq!((faults.list[0].line, faults.list[0].column), (2, 9));
    assert!(faults.to_string().contains("0xe9") && faults.to_string().contains("saving the file as UTF-8"), "{faults}");
}

#[test]
fn nesting_without_end_is_refused_at_its_place() {
    let n = 100_000;
    let texts = [
        ("a = ".to_string() + &"[".repeat(n), 1, 21),
        ("a = ".to_string() + &"{a=".repeat(n), 1, 53),
        ("a.".repeat(n) + "a = 1", 1, 34),
        (format!("[{}a]", "a.".repeat(n)), 1, 35),
        (format!("x = 1\n[[{}a]]", "\"a\" . ".repeat(n)), 2, 103),
        (
            format!("y = '''\n[[[[[[[[[[[[[[[[[[[[[[[['''\n# [[[[[[[[[[[[[[[[[[[[[[[\nx = {}1{}", "[".repeat(17), "]".repeat(17)),
            4,
            21,
        ),
    ];
    let methods = shipped();
    for (text, line, column) in texts {
        let faults = scenario::parse("it.toml", &text, Mode::Work, &methods).expect_err("too deep");
        assert_eq!(faults.list.len(), 1, "{faults}");
        assert!(faults.list[0].says.contains("16 deep"), "{faults}");
        assert_eq!((faults.list[0].line, faults.list[0].column), (line, column), "{}", &text[..20]);
    }
    let within = format!("x = {}1{}", "[".repeat(16), "]".repeat(16));
    assert!(!scenario::parse("it.toml", &within, Mode::Work, &methods).expect_err("no specimen").to_string().contains("deep"));
}

#[test]
fn large_files_of_small_things_are_answered() {
    let methods = shipped();
    let fill = |piece: &str| piece.repeat(text::LARGEST_FILE / piece.len());
    for piece in [
        "[[specimen]]\n",
        "[[instrument]]\n",
        "a=1\n",
        "\"\n",
        "[",
        "]\n",
        "'",
        "\r",
        "\u{feff}",
        "=",
        "-",
        "[[specimen.liquid]]\ndrops=0\n",
    ] {
        all_readers(&fill(piece), &methods);
    }
}

const SEED: &str = "title='t'\n[[specimen]]\nid='S'\n[[specimen.liquid]]\ndrops=[30,31]\ncontainer='C1'\ntare_g=21.43\nwet_g=38.22\ndry_g=33.39\n\
    [[instrument]]\nname='p'\nkind='balance'\nport='/dev/ttyS0'\nbaud=9600\nprofile='signed-steady'\n[mqtt]\nurl='mqtt://h:1'\n[method.m]\nname='x'\n[profile.p]\nkind='counter'\n";

proptest! {
    #![proptest_config(ProptestConfig::with_cases(300))]

    #[test]
    fn any_bytes_are_answered(bytes in proptest::collection::vec(any::<u8>(), 0..300)) {
        match text::from_bytes("it.toml", bytes) {
            Ok(text) => all_readers(&text, &shipped()),
            Err(faults) => prop_assert_eq!(faults.list.len(), 1),
        }
    }

    #[test]
    fn any_text_of_toml_pieces_is_answered(pieces in proptest::collection::vec(prop::sample::select(vec![
        "[", "]", "[[", "]]", "{", "}", "=", ".", ",", "\n", " ", "\"", "'", "'''", "\"\"\"", "#", "specimen", "liquid", "id", "drops",
        "method", "profile", "instrument", "bench", "mqtt", "url", "1", "-", "0x", "1.5", "inf", "nan", "1979-05-27", "\\", "\u{feff}", "é", "\r\n",
    ]), 0..60)) {
        all_readers(&pieces.concat(), &shipped());
    }

    #[test]
    fn a_mutated_file_is_answered(cuts in proptest::collection::vec((0..SEED.len(), 0..4usize, prop::sample::select(vec!["", "[", "]", "\"", "9", "\n", "=", "{", ".", "-", "e", "nan", "\u{0}"])), 1..6)) {
        let mut text = SEED.to_string();
        for (at, length, piece) in cuts {
            let at = at.min(text.len());
            let end = (at + length).min(text.len());
            text.replace_range(at..end, piece);
        }
        all_readers(&text, &shipped());
    }
}
