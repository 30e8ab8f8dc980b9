//! The envelope of asks: one handler behind every way in.
//!
//! An ask is one JSON object. `ask` says what is wanted; `ask_id` makes it safe
//! to repeat (the same client gets the same answer again); everything else
//! belongs to the ask.

use serde_json::{Map, Value, json};
use std::str::FromStr;
use tarecup_core::lab::Wish;
use tarecup_core::lab::ask::Ask;
use tarecup_core::names::{BenchName, NameError, SpecimenId};
use tarecup_core::near::{meant, nearest};
use tarecup_core::quantity::{Mass, MassUnit};

/// Largest ask, in bytes. Checked before anything is parsed.
pub const LARGEST: usize = 64 * 1024;
/// More paste than any dish holds.
const MOST_PASTE_UG: i64 = 10_000 * 1_000_000;
/// Deepest nesting of an ask.
const DEEPEST: usize = 16;

/// Members that are numbers; everything else is text.
const NUMBERS: [&str; 15] = [
    "seq",
    "limit",
    "no",
    "drops",
    "weighing",
    "count",
    "what",
    "celsius",
    "passing_75um_percent",
    "clay_percent",
    "liquid_limit_oven_dried",
    "penetration_mm",
    "drop_height_mm",
    "revision",
    "kind_no",
];

/// What the names of the screen's clients begin with.
pub const SCREEN: &str = "screen";

/// What is asked for.
#[derive(Debug)]
pub enum Wanted {
    /// Something that may write.
    Write(Ask),
    /// Something that only reads.
    Read(Read),
    /// A person says that the instrument behind a port in doubt is the one of this name.
    Confirm(String),
}

/// Asks that only read.
#[derive(Debug, PartialEq)]
pub enum Read {
    /// How the service is doing.
    Status,
    /// The latest weighing at a bench.
    Latest(String),
    /// One document.
    Document {
        /// `specimen`, `container`, `bench`, `instrument`, `loose`.
        kind: String,
        /// Which.
        id: String,
    },
    /// What helps now: at a bench, or about a specimen.
    Advice {
        /// The bench.
        bench: Option<BenchName>,
        /// The specimen, wherever it is worked on.
        specimen: Option<SpecimenId>,
        /// What the client knows besides.
        wish: Wish,
    },
    /// Which of these asks would be refused, if they were made one after the other. Nothing is done.
    Would(Vec<Ask>),
    /// What is drying.
    Shelf,
    /// Loose weighings and counts.
    Loose,
    /// Facts after a number.
    FactsAfter {
        /// The number.
        seq: u64,
        /// At most so many.
        limit: usize,
    },
}

/// An ask with its envelope taken off.
#[derive(Debug)]
pub struct Asked {
    /// Id given by the client.
    pub id: Option<String>,
    /// What is wanted.
    pub wanted: Wanted,
    /// The ask without its envelope.
    pub body: Value,
    /// Who asks has given the PIN of `who`. Only the screen may say so.
    pub proven: bool,
}

/// Member of the envelope by which the screen says that a PIN was given. The input keeps it.
pub const PROVEN: &str = "proven";

/// A refusal as JSON.
pub fn refusal(says: &str) -> String {
    json!({"ok": false, "error": {"says": says}}).to_string()
}

/// Reads an ask. Errors are sentences.
pub fn parse(text: &str) -> Result<Asked, String> {
    if text.len() > LARGEST {
        return Err(format!("the ask is {} bytes long; at most {LARGEST} fit", text.len()));
    }
    not_too_deep(text)?;
    let value: Value = serde_json::from_str(text).map_err(|e| format!("the ask is not JSON: {e}"))?;
    let Value::Object(mut object) = value else {
        return Err(String::from("an ask is one JSON object with a member \"ask\""));
    };
    let id = match object.remove("ask_id") {
        None | Some(Value::Null) => None,
        Some(Value::String(id)) if !id.is_empty() && id.len() <= 64 => Some(id),
        Some(_) => return Err(String::from("\"ask_id\" is a text of 1 to 64 characters")),
    };
    let proven = match object.remove(PROVEN) {
        None => false,
        Some(Value::String(how)) if how == "pin" => true,
        Some(_) => return Err(format!("\"{PROVEN}\" is said by the screen alone")),
    };
    let body = Value::Object(object.clone());
    let wanted = match read(&object)? {
        Some(read) => Wanted::Read(read),
        None if object.get("ask").is_some_and(|word| word == CONFIRM) => Wanted::Confirm(confirm(&object)?),
        None => Wanted::Write(serde_json::from_value(body.clone()).map_err(|e| in_words(&object, &e.to_string()))?),
    };
    Ok(Asked { id, wanted, body, proven })
}

const CONFIRM: &str = "confirm_port";

/// Which instrument a confirming ask names.
fn confirm(object: &Map<String, Value>) -> Result<String, String> {
    if let Some(other) = object.keys().find(|k| !["ask", "instrument", "who"].contains(&k.as_str())) {
        return Err(format!("\"{CONFIRM}\" has instrument and who, and no \"{other}\""));
    }
    let text = |name: &str| object.get(name).and_then(Value::as_str).filter(|t| !t.is_empty() && t.len() <= 64);
    match (text("instrument"), text("who")) {
        (Some(instrument), Some(_)) => Ok(instrument.to_owned()),
        _ => Err(format!("\"{CONFIRM}\" needs the texts \"instrument\" and \"who\"")),
    }
}

/// The instrument that the body of an ask confirms, if it is such an ask.
pub fn confirmed(body: &str) -> Option<String> {
    match serde_json::from_str(body) {
        Ok(Value::Object(object)) if object.get("ask").is_some_and(|word| word == CONFIRM) => confirm(&object).ok(),
        _ => None,
    }
}

fn read(object: &Map<String, Value>) -> Result<Option<Read>, String> {
    let word = object.get("ask").and_then(Value::as_str).ok_or("an ask has a member \"ask\" that says what is wanted")?;
    let text = |name: &str| {
        object.get(name).and_then(Value::as_str).map(String::from).ok_or(format!("\"{word}\" needs a text \"{name}\""))
    };
    Ok(Some(match word {
        "status" => Read::Status,
        "latest" => Read::Latest(text("bench")?),
        "document" => Read::Document { kind: text("kind")?, id: text("id")? },
        "facts_after" => Read::FactsAfter {
            seq: object.get("seq").and_then(Value::as_u64).ok_or("\"facts_after\" needs a whole number \"seq\"")?,
            limit: object.get("limit").and_then(Value::as_u64).unwrap_or(100).min(1_000) as usize,
        },
        "advice" => advice(object)?,
        "would" => would(object)?,
        "shelf" => nothing_else(object, word, Read::Shelf)?,
        "loose" => nothing_else(object, word, Read::Loose)?,
        _ => return Ok(None),
    }))
}

/// Asks that only read; the others are variants of [`Ask`].
const READS: [&str; 8] = ["status", "latest", "document", "facts_after", "advice", "would", "shelf", "loose"];

/// What serde says of an ask, in the words of who wrote it, with what was meant.
fn in_words(object: &Map<String, Value>, error: &str) -> String {
    let word = object.get("ask").and_then(Value::as_str).unwrap_or_default();
    let quoted: Vec<&str> = error.split('`').skip(1).step_by(2).collect();
    let (written, known) = quoted.split_first().map_or(("", &[][..]), |(first, rest)| (*first, rest));
    let printable = |text: &str| -> String { text.chars().take(60).flat_map(char::escape_default).collect() };
    if error.starts_with("unknown variant") && known.contains(&"open_specimen") {
        let shown = printable(word);
        let all = known.iter().copied().chain(READS);
        let hint = nearest(word, all).map_or_else(
            || String::from("the asks are listed in the handbook, README.md, under \"At the bench\""),
            |near| format!("did you mean \"{near}\"?"),
        );
        return format!("the ask cannot be done: there is no ask \"{shown}\"; {hint}");
    }
    let shown = printable(written);
    if error.starts_with("unknown variant") {
        let hint = meant(written, known.iter().copied());
        return format!("the ask cannot be done: \"{shown}\" is not known here{hint}; it is one of {}", known.join(", "));
    }
    if error.starts_with("unknown field") {
        return format!("the ask cannot be done: {}", no_member(word, &shown, known));
    }
    if error.starts_with("missing field") {
        return format!("the ask cannot be done: \"{word}\" needs the member \"{shown}\"");
    }
    format!("the ask cannot be done: {error}")
}

fn no_member(word: &str, written: &str, known: &[&str]) -> String {
    let hint = meant(written, known.iter().copied());
    let members = if known.is_empty() { String::from("it has none") } else { format!("it has {}", known.join(", ")) };
    format!("\"{word}\" has no member \"{written}\"{hint}; {members}")
}

/// An ask that reads and has these members only.
fn only(object: &Map<String, Value>, word: &str, known: &[&str]) -> Result<(), String> {
    match object.keys().find(|k| *k != "ask" && !known.contains(&k.as_str())) {
        None => Ok(()),
        Some(other) => {
            let shown: String = other.chars().take(60).flat_map(char::escape_default).collect();
            Err(no_member(word, &shown, known))
        }
    }
}

fn nothing_else(object: &Map<String, Value>, word: &str, read: Read) -> Result<Read, String> {
    only(object, word, &[]).map(|()| read)
}

/// Most asks that are tried at once.
const MOST_TRIED: usize = 200;

fn would(object: &Map<String, Value>) -> Result<Read, String> {
    only(object, "would", &["asks"])?;
    let asks = object.get("asks").and_then(Value::as_array).ok_or("\"would\" needs a list \"asks\"")?;
    if asks.len() > MOST_TRIED {
        return Err(format!("at most {MOST_TRIED} asks are tried at once"));
    }
    let one = |(n, ask): (usize, &Value)| {
        let members = ask.as_object().cloned().unwrap_or_default();
        serde_json::from_value(ask.clone()).map_err(|e| format!("ask {n}: {}", in_words(&members, &e.to_string())))
    };
    asks.iter().enumerate().map(one).collect::<Result<_, String>>().map(Read::Would)
}

fn advice(object: &Map<String, Value>) -> Result<Read, String> {
    fn name<T: FromStr<Err = NameError>>(object: &Map<String, Value>, member: &str) -> Result<Option<T>, String> {
        let Some(value) = object.get(member).filter(|v| !v.is_null()) else { return Ok(None) };
        let text = value.as_str().ok_or_else(|| format!("\"{member}\" is a text"))?;
        text.parse().map(Some).map_err(|e| format!("\"{member}\": {e}"))
    }
    only(object, "advice", &["bench", "specimen", "paste_g", "drops"])?;
    let paste = match object.get("paste_g").filter(|v| !v.is_null()) {
        None => None,
        Some(value) => {
            let text = value.as_str().map_or_else(|| value.to_string(), String::from);
            let mass = Mass::parse(&text, MassUnit::Gram).map_err(|e| format!("\"paste_g\" is a mass in grams: {e}"))?;
            let believable = mass > Mass::ZERO && mass <= Mass::from_ug(MOST_PASTE_UG);
            Some(mass)
                .filter(|_| believable)
                .ok_or("\"paste_g\" is the mass of the paste, more than 0 and at most 10000 g")?
                .into()
        }
    };
    let drops = match object.get("drops").filter(|v| !v.is_null()) {
        None => None,
        Some(value) => {
            let drops = value.as_u64().and_then(|d| u32::try_from(d).ok()).filter(|d| (1..=500).contains(d));
            Some(drops.ok_or("\"drops\" is a whole number between 1 and 500")?)
        }
    };
    let wish = Wish { paste, drops, slope: None };
    Ok(Read::Advice { bench: name(object, "bench")?, specimen: name(object, "specimen")?, wish })
}

/// A member of an ask that came as text: which members are numbers or lists is known by their names.
pub fn member(name: &str, value: &str) -> Result<Value, String> {
    if name == "containers" || name == "wanted" {
        return Ok(Value::Array(value.split(',').map(|c| Value::String(c.trim().into())).collect()));
    }
    if NUMBERS.contains(&name) && !(name == "limit" && value.parse::<f64>().is_err()) {
        return value
            .parse::<serde_json::Number>()
            .map(Value::Number)
            .map_err(|_| format!("{name}={value}: a number is expected"));
    }
    Ok(Value::String(value.into()))
}

/// Refuses what is nested too deep, before anything is parsed.
pub fn not_too_deep(text: &str) -> Result<(), String> {
    match depth(text) > DEEPEST {
        true => Err(format!("the ask is nested more than {DEEPEST} deep")),
        false => Ok(()),
    }
}

/// Deepest bracket of a JSON text, brackets inside texts not counted.
fn depth(text: &str) -> usize {
    let (mut depth, mut deepest, mut inside, mut escaped) = (0usize, 0usize, false, false);
    for b in text.bytes() {
        match (inside, b) {
            _ if escaped => escaped = false,
            (true, b'\\') => escaped = true,
            (_, b'"') => inside = !inside,
            (false, b'{' | b'[') => {
                depth += 1;
                deepest = deepest.max(depth);
            }
            (false, b'}' | b']') => depth = depth.saturating_sub(1),
            _ => (),
        }
    }
    deepest
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn good_asks_are_read() {
        let asked = parse(r#"{"ask":"sign_in","bench":"north","operator":"AB","ask_id":"7"}"#).expect("an ask");
        assert_eq!(asked.id.as_deref(), Some("7"));
        assert!(matches!(asked.wanted, Wanted::Write(Ask::SignIn { .. })));
        assert!(asked.body.get("ask_id").is_none());
        let asked = parse(r#"{"ask":"document","kind":"container","id":"C11"}"#).expect("an ask");
        assert!(matches!(asked.wanted, Wanted::Read(Read::Document { .. })));
        let asked = parse(r#"{"ask":"facts_after","seq":3}"#).expect("an ask");
        assert!(matches!(asked.wanted, Wanted::Read(Read::FactsAfter { seq: 3, limit: 100 })));
    }

    #[test]
    fn advice_is_asked_with_what_the_client_knows() {
        let read = |text: &str| match parse(text).map(|a| a.wanted) {
            Ok(Wanted::Read(read)) => Ok(read),
            Ok(other) => panic!("{other:?}"),
            Err(says) => Err(says),
        };
        let asked = read(r#"{"ask":"advice","bench":"north","paste_g":182.5,"drops":40}"#).expect("an ask");
        let wish = Wish { paste: Some(Mass::from_ug(182_500_000)), drops: Some(40), slope: None };
        assert_eq!(asked, Read::Advice { bench: BenchName::new("north").ok(), specimen: None, wish });
        assert!(matches!(read(r#"{"ask":"advice","specimen":"S-1","paste_g":"182.5"}"#), Ok(Read::Advice { .. })));
        assert_eq!(read(r#"{"ask":"shelf"}"#), Ok(Read::Shelf));
        for (text, words) in [
            (r#"{"ask":"advice","bench":"north","paste_g":0}"#, "more than 0"),
            (r#"{"ask":"advice","bench":"north","paste_g":"x"}"#, "mass in grams"),
            (r#"{"ask":"advice","bench":"north","paste_g":1e300}"#, "mass in grams"),
            (r#"{"ask":"advice","bench":"north","paste_g":20000}"#, "at most 10000"),
            (r#"{"ask":"advice","bench":"north","drops":0}"#, "between 1 and 500"),
            (r#"{"ask":"advice","bench":7}"#, "is a text"),
            (r#"{"ask":"advice","bench":"a b"}"#, "cannot stand in a name"),
            (r#"{"ask":"advice","bnech":"north"}"#, "did you mean bench?"),
            (r#"{"ask":"loose","bench":"north"}"#, "has no member \"bench\"; it has none"),
        ] {
            let says = read(text).expect_err(text);
            assert!(says.contains(words), "{text}: {says}");
        }
    }

    #[test]
    fn what_was_meant_is_named() {
        for (text, words) in [
            (r#"{"ask":"sign_inn","bench":"north"}"#, "there is no ask \"sign_inn\"; did you mean \"sign_in\"?"),
            (r#"{"ask":"statsu"}"#, "did you mean \"status\"?"),
            (r#"{"ask":"fly"}"#, "README.md"),
            (
                r#"{"ask":"sign_in","bench":"north","opertor":"AB"}"#,
                "has no member \"opertor\" (did you mean operator?); it has bench, operator",
            ),
            (r#"{"ask":"sign_in","bench":"north"}"#, "\"sign_in\" needs the member \"operator\""),
            (r#"{"ask":"intend","bench":"north","specimen":"S-1","intention":"plastics"}"#, "did you mean plastic?"),
            (
                r#"{"ask":"intend","bench":"north","specimen":"S-1","intention":"flying"}"#,
                "it is one of liquid, plastic, natural",
            ),
            (r#"{"ask":"a`b`c"}"#, "there is no ask"),
        ] {
            let says = parse(text).expect_err(text);
            assert!(says.contains(words), "{text}: {says}");
        }
    }

    #[test]
    fn bad_asks_are_refused_in_words() {
        for (text, words) in [
            ("", "not JSON"),
            ("[]", "one JSON object"),
            ("{}", "member \"ask\""),
            (r#"{"ask":"sign_inn"}"#, "cannot be done"),
            (r#"{"ask":"sign_in","bench":"a b","operator":"AB"}"#, "cannot be done"),
            (r#"{"ask":"sign_in","bench":"north","operator":"AB","pin":"1234"}"#, "cannot be done"),
            (r#"{"ask":"facts_after","seq":-1}"#, "whole number"),
            (r#"{"ask":"status","ask_id":""}"#, "1 to 64"),
            (r#"{"ask":"confirm_port","instrument":"pan-1"}"#, "\"who\""),
            (r#"{"ask":"confirm_port","instrument":"pan-1","who":"AB","pin":"1"}"#, "no \"pin\""),
        ] {
            let says = parse(text).expect_err(text);
            assert!(says.contains(words), "{text}: {says}");
        }
        assert!(parse(&format!("{{\"ask\":{}", "[".repeat(100_000))).is_err_and(|e| e.contains("bytes long")));
        assert!(parse(&"[".repeat(1_000)).is_err_and(|e| e.contains("nested")));
    }
}
