//! What goes into the ledger and what comes out, as plain rows.

use super::chain::Digest;
use super::error::LedgerError;
use serde::Deserialize;
use std::borrow::Cow;
use tarecup_core::stamp::{Stamp, parse_rfc3339, rfc3339};

/// What sort of input a row is.
#[derive(Clone, Copy, Debug, PartialEq, Eq, Hash)]
pub enum InputKind {
    /// A frame that its instrument's profile knows.
    Line,
    /// A frame that was not understood; `reason` says why.
    Reject,
    /// What a person or a client asked for, without credentials.
    Ask,
    /// A port was opened, lost or refused.
    Port,
    /// The passing of time, where it led to a fact.
    Timer,
    /// The settings in full.
    Settings,
    /// The service started.
    Start,
    /// Many identical rejects as one row: count, digest and a sample.
    Flood,
    /// Something noticed of the wall clock.
    Clock,
}

impl InputKind {
    /// All kinds.
    pub const ALL: [InputKind; 9] =
        [Self::Line, Self::Reject, Self::Ask, Self::Port, Self::Timer, Self::Settings, Self::Start, Self::Flood, Self::Clock];

    /// The word stored in the file.
    pub fn word(self) -> &'static str {
        match self {
            Self::Line => "line",
            Self::Reject => "reject",
            Self::Ask => "ask",
            Self::Port => "port",
            Self::Timer => "timer",
            Self::Settings => "settings",
            Self::Start => "start",
            Self::Flood => "flood",
            Self::Clock => "clock",
        }
    }

    /// The kind with this word.
    pub fn from_word(word: &str) -> Option<Self> {
        Self::ALL.into_iter().find(|k| k.word() == word)
    }
}

/// One input on its way into the ledger; borrows from what was heard.
#[derive(Clone, Copy, Debug)]
pub struct InputRow<'a> {
    /// Its number; the first of a group is [`super::Ledger::next_input`].
    pub no: u64,
    /// When it came in.
    pub at: Stamp,
    /// What sort it is.
    pub kind: InputKind,
    /// The configured name of the instrument it came from.
    pub instrument: Option<&'a str>,
    /// The exact bytes.
    pub bytes: &'a [u8],
    /// Why it was not understood.
    pub reason: Option<&'a str>,
}

/// One fact on its way into the ledger.
///
/// `body` is the JSON to keep. Its members `seq`, `at`, `kind` and `who` must
/// say the same as the columns; `at` is RFC 3339 text, or a stamp as an object.
#[derive(Clone, Copy, Debug)]
pub struct FactRow<'a> {
    /// Its number; the first of a group is [`super::Ledger::next_seq`].
    pub seq: u64,
    /// When it became true.
    pub at: Stamp,
    /// What sort it is.
    pub kind: &'a str,
    /// Whose doing it is.
    pub who: Option<&'a str>,
    /// The last input that whatever made the fact had consumed.
    pub through: u64,
    /// The JSON, stored and hashed as it is.
    pub body: &'a [u8],
}

/// The state of one thing, derived from facts; replaces its earlier version.
#[derive(Clone, Copy, Debug)]
pub struct DocumentRow<'a> {
    /// What sort of thing (`specimen`, `container`, …).
    pub kind: &'a str,
    /// Which one.
    pub id: &'a str,
    /// The last fact it reflects; never goes back.
    pub seq: u64,
    /// Whether start-up needs it.
    pub open: bool,
    /// The JSON.
    pub body: &'a [u8],
}

/// The answer given to an ask, kept so that the same ask gets it again.
#[derive(Clone, Copy, Debug)]
pub struct AnswerRow<'a> {
    /// Who asked.
    pub client: &'a str,
    /// The ask's id, unique for its client.
    pub ask_id: &'a str,
    /// Digest of the ask's body, to notice another ask under the same id.
    pub body_digest: Digest,
    /// The answer.
    pub answer: &'a [u8],
}

/// What is stored in one transaction: all of it, or nothing.
#[derive(Clone, Copy, Debug, Default)]
pub struct Group<'a> {
    /// In the order taken, numbered without a gap.
    pub inputs: &'a [InputRow<'a>],
    /// In the order decided, numbered without a gap.
    pub facts: &'a [FactRow<'a>],
    /// What the facts touched.
    pub documents: &'a [DocumentRow<'a>],
    /// To asks answered by this group.
    pub answers: &'a [AnswerRow<'a>],
    /// Named positions, such as how far facts were delivered.
    pub cursors: &'a [(&'a str, u64)],
}

impl Group<'_> {
    /// Whether there is nothing in it.
    pub fn is_empty(&self) -> bool {
        self.inputs.is_empty()
            && self.facts.is_empty()
            && self.documents.is_empty()
            && self.answers.is_empty()
            && self.cursors.is_empty()
    }
}

/// One input as it was stored.
#[derive(Clone, Debug, PartialEq, Eq)]
pub struct InputStored {
    /// Its number.
    pub no: u64,
    /// When it came in.
    pub at: Stamp,
    /// What sort it is.
    pub kind: InputKind,
    /// The instrument's name at the time.
    pub instrument: Option<String>,
    /// The exact bytes.
    pub bytes: Vec<u8>,
    /// Why it was not understood.
    pub reason: Option<String>,
}

/// One fact as it was stored.
#[derive(Clone, Debug, PartialEq, Eq)]
pub struct FactStored {
    /// Its number.
    pub seq: u64,
    /// When it became true.
    pub at: Stamp,
    /// What sort it is.
    pub kind: String,
    /// Whose doing it is.
    pub who: Option<String>,
    /// The last input that whatever made the fact had consumed.
    pub through: u64,
    /// The last input that `inputs_digest` covers; the first is the one after
    /// the previous fact's.
    pub inputs_to: u64,
    /// The JSON exactly as it was handed over.
    pub body: Vec<u8>,
    /// Digest of the inputs since the previous fact.
    pub inputs_digest: Digest,
    /// The fact's place in the chain.
    pub hash: Digest,
}

/// One document as it was stored.
#[derive(Clone, Debug, PartialEq, Eq)]
pub struct DocumentStored {
    /// What sort of thing.
    pub kind: String,
    /// Which one.
    pub id: String,
    /// The last fact it reflects.
    pub seq: u64,
    /// Whether start-up needs it.
    pub open: bool,
    /// The JSON.
    pub body: Vec<u8>,
}

/// Integers in the file are signed; a number of a row beyond that is a fault.
pub(crate) fn signed(n: u64, what: &str) -> Result<i64, LedgerError> {
    i64::try_from(n).map_err(|_| LedgerError::Misfit { why: format!("{what} {n} is too large to be stored") })
}

/// The columns that a fact's JSON repeats.
pub(crate) struct Columns<'a> {
    pub seq: i64,
    pub at: Stamp,
    pub kind: &'a [u8],
    pub who: Option<&'a [u8]>,
}

#[derive(Deserialize)]
struct Said<'a> {
    seq: i64,
    #[serde(borrow)]
    at: At<'a>,
    #[serde(borrow)]
    kind: Cow<'a, str>,
    #[serde(borrow, default)]
    who: Option<Cow<'a, str>>,
}

#[derive(Deserialize)]
#[serde(untagged)]
enum At<'a> {
    #[serde(borrow)]
    Text(Cow<'a, str>),
    Stamp(Stamp),
}

impl At<'_> {
    /// A clock beyond the year 9999 is written as the limit, hence the second comparison.
    fn says(&self, at: &Stamp) -> bool {
        match self {
            Self::Text(text) => parse_rfc3339(text) == Some(at.utc_us) || *text == rfc3339(at.utc_us),
            Self::Stamp(stamp) => stamp == at,
        }
    }
}

/// Whether the JSON says the same as the columns; otherwise what differs.
pub(crate) fn agree(columns: &Columns<'_>, body: &[u8]) -> Result<(), String> {
    let said: Said<'_> =
        serde_json::from_slice(body).map_err(|e| format!("its JSON cannot be read for `seq`, `at`, `kind` and `who` ({e})"))?;
    let differs = |name: &str| Err(format!("its JSON and the column `{name}` differ"));
    if said.seq != columns.seq {
        return differs("seq");
    }
    if said.kind.as_bytes() != columns.kind {
        return differs("kind");
    }
    if said.who.as_ref().map(|w| w.as_bytes()) != columns.who {
        return differs("who");
    }
    if !said.at.says(&columns.at) {
        return differs("at_utc_us");
    }
    Ok(())
}

#[cfg(test)]
mod tests {
    use super::*;
    use tarecup_core::stamp::Boot;

    const AT: Stamp = Stamp { utc_us: 1_772_439_245_123_000, mono_us: 5, boot: Boot(2) };

    fn columns() -> Columns<'static> {
        Columns { seq: 7, at: AT, kind: b"mass_taken", who: Some(b"AB") }
    }

    #[test]
    fn json_that_says_the_same_agrees_in_every_spelling() {
        for body in [
            r#"{"seq":7,"at":"2026-03-02T08:14:05.123000Z","kind":"mass_taken","who":"AB"}"#,
            r#"{"seq":7,"at":"2026-03-02T08:14:05.123Z","kind":"mass\u005ftaken","who":"AB","fact":{"seq":9}}"#,
            r#"{"seq":7,"at":{"utc_us":1772439245123000,"mono_us":5,"boot":2},"kind":"mass_taken","who":"AB"}"#,
        ] {
            assert_eq!(agree(&columns(), body.as_bytes()), Ok(()), "{body}");
        }
        let beyond = Columns { at: Stamp { utc_us: i64::MAX, ..AT }, ..columns() };
        let body = format!(r#"{{"seq":7,"at":"{}","kind":"mass_taken","who":"AB"}}"#, rfc3339(i64::MAX));
        assert_eq!(agree(&beyond, body.as_bytes()), Ok(()));
    }

    #[test]
    fn json_that_says_something_else_is_named() {
        for (body, what) in [
            (r#"{"seq":8,"at":"2026-03-02T08:14:05.123Z","kind":"mass_taken","who":"AB"}"#, "seq"),
            (r#"{"seq":7,"at":"2026-03-02T08:14:05.124Z","kind":"mass_taken","who":"AB"}"#, "at_utc_us"),
            (r#"{"seq":7,"at":"2026-03-02T08:14:05.123Z","kind":"mass","who":"AB"}"#, "kind"),
            (r#"{"seq":7,"at":"2026-03-02T08:14:05.123Z","kind":"mass_taken"}"#, "who"),
            (r#"{"seq":7,"at":{"utc_us":1772439245123000,"mono_us":5,"boot":3},"kind":"mass_taken","who":"AB"}"#, "at_utc_us"),
            (r#"{"seq":7,"seq":7,"at":"2026-03-02T08:14:05.123Z","kind":"mass_taken","who":"AB"}"#, "duplicate"),
            (r#"{"seq":7,"kind":"mass_taken","who":"AB"}"#, "missing"),
            ("[7]", "cannot be read"),
            ("", "cannot be read"),
        ] {
            let why = agree(&columns(), body.as_bytes()).expect_err(body);
            assert!(why.contains(what), "{body}: {why}");
        }
    }

    #[test]
    fn every_kind_has_its_word() {
        for kind in InputKind::ALL {
            assert_eq!(InputKind::from_word(kind.word()), Some(kind));
        }
        assert_eq!(InputKind::from_word("Line"), None);
    }
}
