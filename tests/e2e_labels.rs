//! Printed labels and cards, read again by independent libraries: what is
//! printed is what the scanner hands on, and what the program understands.

mod e2e_support;

use e2e_support::{Ended, tarecup, tests_dir};
use serde_json::Value;
use std::collections::BTreeSet;
use std::path::{Path, PathBuf};
use std::process::Command;
use tarecup_core::lab::CARDS;

/// Runs `labels` into a folder; the files written.
fn printed(folder: &Path, out: &str, arguments: &[&str]) -> Vec<PathBuf> {
    let out = folder.join(out).display().to_string();
    let ended = tarecup(&[&["labels", "--out", &out], arguments].concat());
    assert_eq!(ended.code, 0, "{}", ended.err);
    let files: Vec<PathBuf> = ended.out.lines().map(PathBuf::from).collect();
    assert!(!files.is_empty() && files.iter().all(|f| f.exists()), "{files:?}");
    files
}

fn read(files: &[PathBuf], damage: bool) -> Value {
    let python = tests_dir().join(".venv/bin/python");
    assert!(python.exists(), "reading codes needs Python with its libraries: run tests/setup-python first");
    let mut command = Command::new(python);
    command.arg(tests_dir().join("read_codes.py")).args(files);
    if damage {
        command.arg("--damage");
    }
    let out = command.output().expect("Python starts");
    assert!(out.status.success(), "run tests/setup-python again. It said:\n{}", String::from_utf8_lossy(&out.stderr));
    serde_json::from_slice(&out.stdout).expect("JSON")
}

fn texts(read: &Value) -> BTreeSet<String> {
    let codes = read["codes"].as_array().into_iter().flatten();
    codes.map(|c| c["text"].as_str().expect("a text").to_string()).collect()
}

fn set<const N: usize>(texts: [&str; N]) -> BTreeSet<String> {
    texts.map(String::from).into()
}

#[test]
fn containers_and_specimens_read_as_they_were_named() {
    let folder = tempfile::tempdir().expect("a folder");
    let mut wanted: BTreeSet<String> = (1..=40).map(|n| format!("C{n}")).collect();
    wanted.extend(set(["T-007", "S-101", "x_9.b"]));
    for (out, symbol, format, identifier) in [
        ("a.svg", "code128", "Code128", "]C"),
        ("b.pdf", "code128", "Code128", "]C"),
        ("c.svg", "qr", "QRCode", "]Q"),
        ("d.pdf", "qr", "QRCode", "]Q"),
    ] {
        let files =
            printed(folder.path(), out, &["--containers", "C1..C40,T-007,x_9.b", "--specimens", "S-101", "--symbol", symbol]);
        let read = read(&files, false);
        assert_eq!(texts(&read), wanted, "{out}");
        for code in read["codes"].as_array().into_iter().flatten() {
            let (found, aim) = (code["as"].as_str().unwrap_or_default(), code["identifier"].as_str().unwrap_or_default());
            assert!(found.starts_with(format) && aim.starts_with(identifier), "{out}: {code}");
        }
    }
}

#[test]
fn a_damaged_sheet_is_not_read() {
    let folder = tempfile::tempdir().expect("a folder");
    let files = printed(folder.path(), "a.pdf", &["--containers", "C1..C6"]);
    assert_eq!(texts(&read(&files, false)).len(), 6);
    assert_eq!(texts(&read(&files, true)).len(), 0, "the reader notices damage");
}

#[test]
fn every_card_is_printed_with_its_words() {
    let folder = tempfile::tempdir().expect("a folder");
    let wanted: BTreeSet<String> = CARDS
        .iter()
        .map(|(card, _)| (*card).to_string())
        .filter(|card| !card.ends_with('-'))
        .chain(["+by-AB".to_string(), "+by-KL".to_string()])
        .collect();
    for symbol in ["code128", "qr"] {
        let arguments = ["--cards", "--operators", "AB,KL", "--symbol", symbol];
        let files = printed(folder.path(), &format!("{symbol}.svg"), &arguments);
        assert_eq!(texts(&read(&files, false)), wanted, "{symbol}");
        let drawn: String = files.iter().map(|f| std::fs::read_to_string(f).expect("a page")).collect();
        for words in ["AB signs in", "goes into", "plastic limit"] {
            assert!(drawn.contains(words), "{words}");
        }
    }
}

#[test]
fn the_paper_and_the_line_of_a_hundred_millimetres_are_true() {
    let folder = tempfile::tempdir().expect("a folder");
    for (paper, wanted) in [("a4", [210.0, 297.0]), ("letter", [215.9, 279.4])] {
        for out in [format!("{paper}.pdf"), format!("{paper}.svg")] {
            let files = printed(folder.path(), &out, &["--containers", "C1", "--paper", paper]);
            let page: Vec<f64> =
                read(&files, false)["pages"][0].as_array().expect("a page").iter().filter_map(Value::as_f64).collect();
            assert!((page[0] - wanted[0]).abs() < 0.3 && (page[1] - wanted[1]).abs() < 0.3, "{out}: {page:?}");
            assert!((page[2] - 100.0).abs() < 0.3, "{out}: the line is {} mm long", page[2]);
        }
    }
}

#[test]
fn mistakes_are_told_and_nothing_is_written() {
    let folder = tempfile::tempdir().expect("a folder");
    let path = |name: &str| folder.path().join(name).display().to_string();
    let (pdf, txt, nowhere) = (path("a.pdf"), path("a.txt"), path("no/such/folder/a.pdf"));
    let state = path("state");
    let cases: [(&[&str], i32, &str); 9] = [
        (&["--out", &pdf], 2, "nothing to print"),
        (&["--out", &txt, "--cards"], 2, ".pdf nor with .svg"),
        (&["--out", &pdf, "--containers", "C1..B4"], 2, "--containers: \"C1..B4\""),
        (&["--out", &pdf, "--containers", "tin 4"], 2, "cannot stand in a name"),
        (&["--out", &pdf, "--containers", "C1", "--specimens", "C1"], 2, "one code means one thing"),
        (&["--out", &pdf, "--containers", "C1", "--size", "4"], 2, "such as 48x25"),
        (&["--out", &pdf, "--containers", "C1", "--size", "300x25"], 2, "smaller --size"),
        (&["--out", &pdf, "--registered", "--state", &state], 2, "--registered"),
        (&["--out", &nowhere, "--cards"], 1, "cannot be written"),
    ];
    for (arguments, code, says) in cases {
        let Ended { code: got, err, .. } = tarecup(&[&["labels"], arguments].concat());
        assert!(got == code && err.contains(says), "{arguments:?}: {got} {err}");
    }
    assert_eq!(std::fs::read_dir(folder.path()).expect("the folder").count(), 0);
}

#[test]
fn the_register_of_a_ledger_is_printed() {
    let folder = tempfile::tempdir().expect("a folder");
    let state = folder.path().join("state");
    let scenario = folder.path().join("day.toml");
    let sheet = e2e_support::sheet(
        "S-1",
        "d4318-multipoint",
        vec![e2e_support::liquid(&[25], "C7", "20.00", "30.00", &["27.00"])],
        vec![e2e_support::slice("C8", "20.00", "30.00", &["28.00"])],
    );
    std::fs::write(&scenario, e2e_support::scenario(&[sheet])).expect("written");
    let _ = e2e_support::demo(&scenario, Some(&state));
    let state = state.display().to_string();
    let files = printed(folder.path(), "a.svg", &["--registered", "--containers", "C7,C1", "--state", &state]);
    assert_eq!(texts(&read(&files, false)), set(["C1", "C7", "C8"]));
}
