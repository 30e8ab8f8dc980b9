//! Asks that come over HTTP: who asks, whether it is proven, then the same
//! handler as behind every other way in.

use super::app::App;
use super::operators::Denied;
use super::server::Ends;
use super::session::Who;
use crate::asks;
use axum::http::StatusCode;
use serde_json::{Map, Value};
use tarecup_core::names::{BenchName, Operator};

/// Asks that change what is recorded, or speak for a result: only who gave a PIN makes them.
pub const PROVEN: [&str; 15] = [
    "tie",
    "tie_count",
    "set_aside",
    "explain",
    "move_trial",
    "amend_penetration",
    "set_aside_trial",
    "amend_mass",
    "amend_drops",
    "free_container",
    "oven_off",
    "clock_right",
    "not_obtainable",
    "answer_check",
    "review",
];
/// Asks that name nobody beside whom they are about.
const NAMELESS: [&str; 11] =
    ["sign_in", "sign_out", "code", "status", "latest", "document", "facts_after", "advice", "would", "shelf", "loose"];

/// What came of an ask.
pub struct Answered {
    /// The status it goes with.
    pub status: StatusCode,
    /// JSON, as the desk gave it.
    pub json: String,
}

impl Answered {
    fn refused(status: StatusCode, says: &str) -> Self {
        Self { status, json: asks::refusal(says) }
    }

    /// Why it was refused; `None` when it was done.
    pub fn refusal(&self) -> Option<String> {
        let value: Value = serde_json::from_str(&self.json).unwrap_or_default();
        match value["ok"] {
            Value::Bool(true) => None,
            _ => Some(value["error"]["says"].as_str().unwrap_or("the ask was refused").to_string()),
        }
    }
}

/// Asks for somebody.
pub async fn ask(app: &App, ends: &Ends, who: &Who, mut object: Map<String, Value>) -> Answered {
    let pin = match object.remove("pin") {
        None | Some(Value::Null) => None,
        Some(Value::String(pin)) if pin.is_empty() => None,
        Some(Value::String(pin)) => Some(pin),
        Some(_) => return Answered::refused(StatusCode::BAD_REQUEST, "\"pin\" is a text"),
    };
    // Said by us alone, below.
    object.remove(asks::PROVEN);
    let word = object.get("ask").and_then(Value::as_str).unwrap_or_default().to_string();
    if let Err((status, says)) = name(app, ends, who, &word, &mut object, pin).await {
        return Answered::refused(status, &says);
    }
    let text = Value::Object(object).to_string();
    // What cannot be read is told apart from what cannot be done.
    if let Err(says) = asks::parse(&text) {
        return Answered::refused(StatusCode::BAD_REQUEST, &says);
    }
    let client = if who.session.is_empty() { String::from(asks::SCREEN) } else { format!("{}-{}", asks::SCREEN, who.session) };
    let json = app.ask(client, text).await;
    let mut answered = Answered { status: StatusCode::OK, json };
    if let Some(says) = answered.refusal() {
        let not_now = says.starts_with("nothing is being recorded") || says.starts_with("the service stopped");
        answered.status = if not_now { StatusCode::SERVICE_UNAVAILABLE } else { StatusCode::UNPROCESSABLE_ENTITY };
    }
    answered
}

/// Puts the name of who asks into the ask, or says why it cannot stand there.
async fn name(
    app: &App,
    ends: &Ends,
    who: &Who,
    word: &str,
    object: &mut Map<String, Value>,
    pin: Option<String>,
) -> Result<(), (StatusCode, String)> {
    if NAMELESS.contains(&word) {
        return Ok(());
    }
    let said = match object.get("who") {
        None | Some(Value::Null) => None,
        Some(Value::String(text)) if text.trim().is_empty() => None,
        Some(Value::String(text)) => {
            Some(Operator::new(text.trim()).map_err(|e| (StatusCode::BAD_REQUEST, format!("who: {e}")))?)
        }
        Some(_) => return Err((StatusCode::BAD_REQUEST, String::from("\"who\" is a text"))),
    };
    let here = who.operator.as_deref().and_then(|o| Operator::new(o).ok());
    let proven = match pin {
        Some(pin) => {
            let named = said.clone().or(here.clone());
            let named = named.ok_or((StatusCode::FORBIDDEN, String::from("say whose PIN it is")))?;
            let proven = app.prove(ends, &named, &pin).await;
            Some(proven.map_err(|denied| (status_of(&denied), denied.to_string()))?)
        }
        // A proof ends with the PIN: whoever was removed meanwhile is proven no more.
        None if who.proven && said.as_ref().is_none_or(|s| Some(s) == here.as_ref()) => {
            here.clone().filter(|h| PROVEN.contains(&word) && app.operators().iter().any(|o| o == h.as_str()))
        }
        None => None,
    };
    if PROVEN.contains(&word) && proven.is_none() {
        let says = if app.operators().is_empty() {
            "this needs the PIN of whoever says it, and nobody has one yet: `tarecup operator add INITIALS` at the service's machine"
        } else {
            "this needs the PIN of whoever says it; give it with your initials, or sign in first"
        };
        return Err((StatusCode::FORBIDDEN, String::from(says)));
    }
    if proven.is_some() {
        object.insert(asks::PROVEN.into(), "pin".into());
    }
    let typed = matches!(word, "type_mass" | "type_drops");
    let name = proven.or(said).or(here).or_else(|| typed.then(|| at_bench(app, object)).flatten());
    match name {
        Some(name) => drop(object.insert("who".into(), Value::String(name.to_string()))),
        None => drop(object.remove("who")),
    }
    Ok(())
}

/// Who is signed in at the bench that an ask is about.
fn at_bench(app: &App, object: &Map<String, Value>) -> Option<Operator> {
    let bench = BenchName::new(object.get("bench")?.as_str()?).ok()?;
    app.board.look(|m| m.lab.bench(&bench).and_then(|b| b.signed_in.clone()))
}

/// The status of a PIN that was not taken.
pub fn status_of(denied: &Denied) -> StatusCode {
    match denied {
        Denied::Locked { .. } => StatusCode::TOO_MANY_REQUESTS,
        Denied::Nobody(_) | Denied::Wrong { .. } | Denied::Trouble(_) => StatusCode::FORBIDDEN,
    }
}
