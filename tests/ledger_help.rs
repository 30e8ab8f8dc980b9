//! A small ledger with a fixed id and fixed times, shared by the ledger tests.

use std::path::Path;
use tarecup::ledger::{AnswerRow, Digest, DocumentRow, FactRow, Group, InputKind, InputRow, Ledger, LedgerId, OpenOptions};
use tarecup_core::stamp::{Boot, Stamp};

/// 2026-03-02T08:14:05Z.
pub const START_US: i64 = 1_772_439_245_000_000;

pub const ID: LedgerId = LedgerId([0, 1, 2, 3, 4, 5, 6, 7, 8, 9, 10, 11, 12, 13, 14, 15]);

pub fn options() -> OpenOptions {
    OpenOptions { new_id: Some(ID), ..OpenOptions::new("boot-a", START_US) }
}

/// A millisecond for every input.
pub fn at(no: i64) -> Stamp {
    Stamp { utc_us: START_US + no * 1_000, mono_us: 5_000 + no * 1_000, boot: Boot(1) }
}

pub fn input<'a>(no: u64, kind: InputKind, instrument: Option<&'a str>, bytes: &'a [u8]) -> InputRow<'a> {
    let reason = (kind == InputKind::Reject).then_some("no_pattern");
    InputRow { no, at: at(no as i64), kind, instrument, bytes, reason }
}

pub const BODIES: [&[u8]; 3] = [
    br#"{"seq":1,"at":"2026-03-02T08:14:05.001000Z","kind":"started","who":null}"#,
    br#"{"seq":2,"at":"2026-03-02T08:14:05.002000Z","kind":"mass_taken","who":"AB","fact":{"line":2}}"#,
    br#"{"seq":3,"at":"2026-03-02T08:14:05.005000Z","kind":"note_added","who":"AB"}"#,
];

/// Five inputs, three facts, two documents, one answer, one cursor, in two groups.
pub fn fill(ledger: &mut Ledger) {
    let inputs = [
        input(1, InputKind::Start, None, b"{}"),
        input(2, InputKind::Line, Some("pan-1"), b"ST  21.43 g\r\n"),
        input(3, InputKind::Reject, Some("pan-1"), b"\xff\x00\r\n"),
        input(4, InputKind::Line, Some("cup-1"), b"DROP\r\n"),
        input(5, InputKind::Ask, None, br#"{"ask":"note"}"#),
    ];
    let facts = [
        FactRow { seq: 1, at: at(1), kind: "started", who: None, through: 1, body: BODIES[0] },
        FactRow { seq: 2, at: at(2), kind: "mass_taken", who: Some("AB"), through: 2, body: BODIES[1] },
        FactRow { seq: 3, at: at(5), kind: "note_added", who: Some("AB"), through: 5, body: BODIES[2] },
    ];
    let documents = [
        DocumentRow { kind: "container", id: "C11", seq: 2, open: true, body: br#"{"tare_g":21.43}"# },
        DocumentRow { kind: "container", id: "C14", seq: 2, open: false, body: b"{}" },
    ];
    let first = Group { inputs: &inputs[..4], facts: &facts[..2], documents: &documents, ..Group::default() };
    ledger.commit(&first).expect("the first group");
    let answer =
        AnswerRow { client: "tablet", ask_id: "a-1", body_digest: Digest::of(br#"{"ask":"note"}"#), answer: b"{\"ok\":true}" };
    let second = Group {
        inputs: &inputs[4..],
        facts: &facts[2..],
        answers: &[answer],
        cursors: &[("delivered_through", 2)],
        ..Group::default()
    };
    ledger.commit(&second).expect("the second group");
}

/// Makes the small ledger in `folder` and closes it.
pub fn sample(folder: &Path) {
    fill(&mut Ledger::open(folder, options()).expect("a new ledger"));
}
