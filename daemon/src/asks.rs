//! The envelope of asks: one handler behind every way in.
//!
//! An ask is one JSON object. `ask` says what is wanted; `ask_id` makes it safe
//! to repeat (the same client gets the same answer again); everything else
//! belongs to the ask.

use serde_json::{Map, Value, json};
use tarecup_core::lab::ask::Ask;

/// Largest ask, in bytes. Checked before anything is parsed.
pub const LARGEST: usize = 64 * 1024;
/// Deepest nesting of an ask.
const DEEPEST: usize = 16;

/// Members that are numbers; everything else is text.
const NUMBERS: [&str; 12] = [
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
}

/// Asks that only read.
#[derive(Debug, PartialEq, Eq)]
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
        None => Wanted::Write(serde_json::from_value(body.clone()).map_err(|e| format!("the ask cannot be done: {e}"))?),
    };
    Ok(Asked { id, wanted, body, proven })
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
        _ => return Ok(None),
    }))
}

/// A member of an ask that came as text: which members are numbers or lists is known by their names.
pub fn member(name: &str, value: &str) -> Result<Value, String> {
    if name == "containers" {
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
        ] {
            let says = parse(text).expect_err(text);
            assert!(says.contains(words), "{text}: {says}");
        }
        assert!(parse(&format!("{{\"ask\":{}", "[".repeat(100_000))).is_err_and(|e| e.contains("bytes long")));
        assert!(parse(&"[".repeat(1_000)).is_err_and(|e| e.contains("nested")));
    }
}
