//! Help for the tests of wrong files: `@@` marks the place where a fault is
//! expected, and is taken out before the file is read.

use tarecup_config::{Fault, Faults};

/// Splits a marked text into the text and the expected line and column.
pub fn unmark(marked: &str) -> (String, u32, u32) {
    let before = marked.split("@@").next().expect("a first part");
    assert_eq!(marked.matches("@@").count(), 1, "one mark is needed in:\n{marked}");
    let line = before.matches('\n').count() + 1;
    let column = before.rsplit('\n').next().expect("a last line").chars().count() + 1;
    (marked.replace("@@", ""), line as u32, column as u32)
}

/// One wrong file: the fault must stand at the mark, and its message hold every word.
pub fn expect_fault<T: std::fmt::Debug>(marked: &str, words: &[&str], parse: impl Fn(&str) -> Result<T, Faults>) {
    let (text, line, column) = unmark(marked);
    let faults = parse(&text).expect_err(&text);
    let here: Vec<&Fault> = faults.list.iter().filter(|f| (f.line, f.column) == (line, column)).collect();
    assert_eq!(here.len(), 1, "one fault is expected at {line}:{column}, found\n{faults}\nin\n{text}");
    assert_eq!(faults.list.len(), 1, "only that one:\n{faults}\nin\n{text}");
    let said = here[0].to_string();
    assert!(said.starts_with(&format!("it.toml:{line}:{column}: ")), "{said}");
    for word in words {
        assert!(said.contains(word), "'{word}' is missing in: {said}");
    }
    assert!(!here[0].expected.is_empty() && !here[0].try_this.is_empty(), "{said}");
}
