//! The HTTP interface: JSON below `/api/`.

use super::app::App;
use super::asking::{self, Answered};
use super::guard::Refused;
use super::server::Ends;
use super::session::Who;
use super::shapes::{
    Bench, Benches, Container, Containers, Facts, Imported, ImportedLine, Instruments, Limits, Loose, LooseThings, Session,
    SignIn, Specimen, Specimens, Status,
};
use super::view::ImportLine;
use super::{openapi, site};
use crate::desk::views;
use crate::ledger::Reader;
use axum::body::Bytes;
use axum::extract::{Extension, Path, Query, State};
use axum::http::StatusCode;
use axum::http::header::{self, HeaderMap};
use axum::response::{IntoResponse, Response};
use serde::de::DeserializeOwned;
use serde::{Deserialize, Serialize};
use serde_json::{Map, Value, json};
use std::sync::Arc;
use tarecup_core::lab::ask::Ask;
use tarecup_core::lab::entities::LooseWhat;
use tarecup_core::names::{BenchName, ContainerId, InstrumentName, Operator, SpecimenId};

/// Most facts in one answer.
const FACTS_MOST: usize = 1_000;

type Answer = Result<Response, Refused>;

fn none(what: &str) -> Refused {
    Refused::new(StatusCode::NOT_FOUND, format!("there is no such {what}"))
}

/// What goes out goes through its shape: it is described as it is, or not sent.
fn shaped<T: DeserializeOwned>(value: Value) -> Result<T, Refused> {
    serde_json::from_value(value).map_err(|e| {
        tracing::error!(error = %e, "an answer is not of the shape that is described");
        Refused::new(StatusCode::INTERNAL_SERVER_ERROR, "the answer is not of the shape that is described; tell the maintainers")
    })
}

fn all<T: DeserializeOwned>(values: Vec<Value>) -> Result<Vec<T>, Refused> {
    values.into_iter().map(shaped).collect()
}

fn send<T: Serialize>(value: &T) -> Answer {
    Ok(axum::Json(value).into_response())
}

/// `GET /api/status`
pub(super) async fn status(State(app): State<Arc<App>>) -> Answer {
    let answer = app.ask(String::from("screen"), String::from(r#"{"ask":"status"}"#)).await;
    let mut answer: Value = serde_json::from_str(&answer).unwrap_or_default();
    if answer["ok"] != Value::Bool(true) || answer["status"]["v"].is_null() {
        let why =
            answer["status"]["not_recording"].as_str().or(answer["error"]["says"].as_str()).unwrap_or("the desk does not answer");
        return Err(Refused::new(StatusCode::SERVICE_UNAVAILABLE, format!("nothing is being recorded: {why}")));
    }
    send(&shaped::<Status>(answer["status"].take())?)
}

/// `GET /api/benches`
pub(super) async fn benches(State(app): State<Arc<App>>) -> Answer {
    let (seq, views) = app.board.look(|m| (m.seq, m.lab.benches().map(|b| views::bench(&m.lab, b, m.seq)).collect()));
    send(&Benches { seq, benches: all(views)? })
}

/// `GET /api/bench/NAME`
pub(super) async fn bench(State(app): State<Arc<App>>, Path(name): Path<String>) -> Answer {
    let name = BenchName::new(&name).map_err(|_| none("bench"))?;
    let view = app.board.look(|m| m.lab.bench(&name).map(|b| views::bench(&m.lab, b, m.seq)));
    send(&shaped::<Bench>(view.ok_or_else(|| none("bench"))?)?)
}

/// `GET /api/specimens`
pub(super) async fn specimens(State(app): State<Arc<App>>) -> Answer {
    let (seq, views) = app.board.look(|m| (m.seq, m.lab.specimens().map(|s| views::specimen(s, m.seq)).collect()));
    send(&Specimens { seq, specimens: all(views)? })
}

/// `GET /api/specimen/ID`
pub(super) async fn specimen(State(app): State<Arc<App>>, Path(id): Path<String>) -> Answer {
    let id = SpecimenId::new(&id).map_err(|_| none("specimen"))?;
    site::at_hand(&app, &id).await;
    let view = app.board.look(|m| m.lab.specimen(&id).map(|s| views::specimen(s, m.seq)));
    send(&shaped::<Specimen>(view.ok_or_else(|| none("specimen"))?)?)
}

/// `GET /api/specimen/ID/limits`
pub(super) async fn limits(State(app): State<Arc<App>>, Path(id): Path<String>) -> Answer {
    let id = SpecimenId::new(&id).map_err(|_| none("specimen"))?;
    site::at_hand(&app, &id).await;
    let view = app.board.look(|m| {
        let specimen = m.lab.specimen(&id)?;
        let limits = specimen.limits.as_ref()?;
        Some(views::limits(limits, specimen.revision, m.seq, None, &[], Value::Null))
    });
    let none = || Refused::new(StatusCode::NOT_FOUND, format!("there is no result of {id} yet"));
    send(&shaped::<Limits>(view.ok_or_else(none)?)?)
}

/// `GET /api/containers`
pub(super) async fn containers(State(app): State<Arc<App>>) -> Answer {
    let (seq, views) = app.board.look(|m| (m.seq, m.lab.containers().map(|c| views::container(&m.lab, c, m.seq)).collect()));
    send(&Containers { seq, containers: all(views)? })
}

/// `GET /api/container/ID`
pub(super) async fn container(State(app): State<Arc<App>>, Path(id): Path<String>) -> Answer {
    let id = ContainerId::new(&id).map_err(|_| none("container"))?;
    let view = app.board.look(|m| m.lab.container(&id).map(|c| views::container(&m.lab, c, m.seq)));
    send(&shaped::<Container>(view.ok_or_else(|| none("container"))?)?)
}

/// `GET /api/instruments`
pub(super) async fn instruments(State(app): State<Arc<App>>) -> Answer {
    let (seq, views) = app.board.look(|m| (m.seq, m.instruments.values().cloned().collect()));
    send(&Instruments { seq, instruments: all(views)? })
}

/// `GET /api/instrument/NAME`
pub(super) async fn instrument(State(app): State<Arc<App>>, Path(name): Path<String>) -> Answer {
    let name = InstrumentName::new(&name).map_err(|_| none("instrument"))?;
    let view = app.board.look(|m| m.instruments.get(&name).cloned()).ok_or_else(|| none("instrument"))?;
    send(&shaped::<super::shapes::Instrument>(view)?)
}

/// `GET /api/loose`
pub(super) async fn loose(State(app): State<Arc<App>>) -> Answer {
    let of = |l: &tarecup_core::lab::entities::Loose| {
        let (mass_g, drops, instrument) = match &l.what {
            LooseWhat::Weighing { weighing, .. } => (Some(weighing.mass.grams()), None, weighing.balance.as_ref()),
            LooseWhat::Count(count) => (None, Some(count.drops), count.cup.as_ref()),
        };
        Loose {
            seq: l.seq,
            bench: l.bench.as_ref().map(ToString::to_string),
            mass_g,
            drops,
            instrument: instrument.map(ToString::to_string),
            why: l.why.clone(),
            at: l.at.rfc3339(),
        }
    };
    send(&app.board.look(|m| LooseThings { seq: m.seq, loose: m.lab.loose_things().map(of).collect() }))
}

/// Which facts.
#[derive(Deserialize)]
pub(super) struct After {
    #[serde(default)]
    after: u64,
    limit: Option<usize>,
}

/// `GET /api/facts?after=SEQ&limit=N`
pub(super) async fn facts(State(app): State<Arc<App>>, Query(which): Query<After>) -> Answer {
    let (dir, limit) = (app.state_dir.clone(), which.limit.unwrap_or(100).clamp(1, FACTS_MOST));
    let read = move || Reader::open(&dir).and_then(|r| r.facts_after(which.after, limit)).map_err(|e| e.to_string());
    let trouble = |says: String| Refused::new(StatusCode::SERVICE_UNAVAILABLE, says);
    let read = app.read(read).await.ok_or_else(|| trouble(String::from("the service is stopping")))?;
    let facts = read.map_err(trouble)?;
    let seq = facts.last().map_or(which.after, |f| f.seq);
    send(&Facts { seq, facts: all(facts.iter().map(|f| serde_json::from_slice(&f.body).unwrap_or_default()).collect())? })
}

/// The body of a request that says it is JSON. Saying so keeps forms of other websites out.
fn object(headers: &HeaderMap, body: &Bytes) -> Result<Map<String, Value>, Refused> {
    let kind = headers.get(header::CONTENT_TYPE).and_then(|v| v.to_str().ok()).unwrap_or_default();
    if kind.split(';').next().map(str::trim) != Some("application/json") {
        let says = "the body is JSON: send it with Content-Type: application/json";
        return Err(Refused::new(StatusCode::UNSUPPORTED_MEDIA_TYPE, says));
    }
    let text = std::str::from_utf8(body).map_err(|_| Refused::new(StatusCode::BAD_REQUEST, "the body is not UTF-8"))?;
    crate::asks::not_too_deep(text).map_err(|says| Refused::new(StatusCode::BAD_REQUEST, says))?;
    match serde_json::from_str(text) {
        Ok(Value::Object(object)) => Ok(object),
        Ok(_) => Err(Refused::new(StatusCode::BAD_REQUEST, "the body is one JSON object")),
        Err(e) => Err(Refused::new(StatusCode::BAD_REQUEST, format!("the body is not JSON: {e}"))),
    }
}

/// `POST /api/ask`
pub(super) async fn ask(
    State(app): State<Arc<App>>,
    Extension(who): Extension<Who>,
    Extension(ends): Extension<Ends>,
    headers: HeaderMap,
    body: Bytes,
) -> Answer {
    let Answered { status, json } = asking::ask(&app, &ends, &who, object(&headers, &body)?).await;
    if who.proven && status == StatusCode::OK {
        app.sessions.used(&headers, &app.cookies);
    }
    Ok((status, [(header::CONTENT_TYPE, "application/json")], json).into_response())
}

/// `GET /api/session`
pub(super) async fn session(Extension(who): Extension<Who>) -> Answer {
    send(&Session { operator: who.operator, proven: who.proven })
}

/// `POST /api/session`
pub(super) async fn begin_session(
    State(app): State<Arc<App>>,
    Extension(ends): Extension<Ends>,
    headers: HeaderMap,
    body: Bytes,
) -> Answer {
    let bad = |says: String| Refused::new(StatusCode::BAD_REQUEST, says);
    let said: SignIn = serde_json::from_value(Value::Object(object(&headers, &body)?)).map_err(|e| bad(e.to_string()))?;
    let operator = Operator::new(&said.operator).map_err(|e| bad(format!("operator: {e}")))?;
    let proven = app.prove(&ends, &operator, &said.pin).await;
    let operator = proven.map_err(|denied| Refused::new(asking::status_of(&denied), denied.to_string()))?;
    let cookie = app.sessions.begin(operator.as_str(), true, &app.cookies);
    let cookie = cookie.map_err(|says| Refused::new(StatusCode::INTERNAL_SERVER_ERROR, says))?;
    let session = Session { operator: Some(operator.to_string()), proven: true };
    Ok(([(header::SET_COOKIE, cookie)], axum::Json(session)).into_response())
}

/// `DELETE /api/session`
pub(super) async fn end_session(State(app): State<Arc<App>>, headers: HeaderMap) -> Answer {
    let cookie = app.sessions.end(&headers, &app.cookies);
    Ok(([(header::SET_COOKIE, cookie)], axum::Json(Session { operator: None, proven: false })).into_response())
}

/// Whether to take a list.
#[derive(Deserialize)]
pub(super) struct Take {
    #[serde(default)]
    take: bool,
}

/// `POST /api/import/containers` and `POST /api/import/specimens`
pub(super) async fn import(
    State(app): State<Arc<App>>,
    Extension(who): Extension<Who>,
    Extension(ends): Extension<Ends>,
    Path(what): Path<String>,
    Query(take): Query<Take>,
    headers: HeaderMap,
    body: Bytes,
) -> Answer {
    let kind = headers.get(header::CONTENT_TYPE).and_then(|v| v.to_str().ok()).unwrap_or_default();
    if kind.split(';').next().map(str::trim) != Some("text/csv") {
        let says = "the body is a list: send it with Content-Type: text/csv";
        return Err(Refused::new(StatusCode::UNSUPPORTED_MEDIA_TYPE, says));
    }
    if !["containers", "specimens"].contains(&what.as_str()) {
        return Err(none("list of that kind; there are containers and specimens"));
    }
    let text = std::str::from_utf8(&body).map_err(|_| Refused::new(StatusCode::BAD_REQUEST, "the list is not UTF-8"))?;
    let (mut read, asks) = site::read_list(&app, &who, &what, text);
    if let Some(says) = read.refused {
        return Err(Refused::new(StatusCode::UNPROCESSABLE_ENTITY, says));
    }
    // One line that cannot be taken, and nothing of the list is.
    let whole = take.take && read.lines.iter().all(|l| l.refused.is_none());
    if whole {
        taken(&app, &ends, &who, &mut read.lines, asks, None).await;
    }
    let line = |l: ImportLine| ImportedLine { line: l.no, fields: l.fields, refused: l.refused, note: l.note };
    send(&Imported { taken: whole, lines: read.lines.into_iter().map(line).collect() })
}

/// Takes the lines of a list that can be taken; what the desk refuses is told at its line.
pub(super) async fn taken(app: &App, ends: &Ends, who: &Who, lines: &mut [ImportLine], asks: Vec<Ask>, by: Option<&str>) {
    // Lines that were not refused and asks are in the same order.
    for (line, ask) in lines.iter_mut().filter(|l| l.refused.is_none()).zip(asks) {
        let Ok(Value::Object(mut ask)) = serde_json::to_value(ask) else { continue };
        ask.insert("who".into(), json!(by));
        line.refused = asking::ask(app, ends, who, ask).await.refusal();
    }
}

/// `GET /api/openapi.json`
pub(super) async fn description() -> Answer {
    send(&openapi::document())
}
