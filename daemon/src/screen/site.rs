//! The pages, and the forms that work without a script.

use super::app::App;
use super::asking::{self, Answered};
use super::board::{Page, Seen};
use super::fill::{self, Around};
use super::guard::Refused;
use super::server::Ends;
use super::session::Who;
use super::words::ENGLISH;
use super::{pages, view};
use crate::ledger::Reader;
use axum::extract::{Extension, Form, Path, Query, State};
use axum::http::header::{self, HeaderMap, HeaderValue};
use axum::http::{StatusCode, Uri};
use axum::response::{Html, IntoResponse, Redirect, Response};
use maud::{Markup, html};
use serde_json::{Map, Value};
use std::collections::BTreeMap;
use std::sync::Arc;
use tarecup_core::fact::TrialRef;
use tarecup_core::lab::Loaded;
use tarecup_core::lab::ask::Ask;
use tarecup_core::lab::entities::Specimen;
use tarecup_core::names::{BenchName, Operator, SpecimenId};
use tarecup_core::sheet::Kind;

/// Members of a form.
pub type Members = BTreeMap<String, String>;

/// Whether whoever asks for this path wants JSON.
pub fn wants_json(path: &str) -> bool {
    path.starts_with("/api/") || path == "/events"
}

/// A refusal as a page, or as JSON.
pub fn refusal(app: &App, json: bool, refused: &Refused) -> Response {
    if json {
        let json = crate::asks::refusal(&refused.says);
        return (refused.status, [(header::CONTENT_TYPE, "application/json")], json).into_response();
    }
    problem(app, &Who::default(), refused.status, &refused.says)
}

/// The frame of a page.
pub fn frame(app: &App, who: &Who) -> view::Frame {
    let seen = Seen { page: Page::Laboratory, who: who.operator.clone(), proven: who.proven };
    app.board.look(|m| {
        let frame = app.board.around(m, &seen).frame;
        view::Frame {
            benches: m.lab.benches().map(|b| b.name.to_string()).collect(),
            loose: m.lab.loose_things().count(),
            ..frame
        }
    })
}

/// A page that says what went wrong.
pub fn problem(app: &App, who: &Who, status: StatusCode, says: &str) -> Response {
    let view = view::Problem { frame: frame(app, who), says: says.into() };
    (status, Html(pages::problem(&view, &ENGLISH).into_string())).into_response()
}

/// To where the secret is presented.
pub fn to_enter(uri: &Uri, json: bool) -> Response {
    if json {
        let says = "this station wants its secret first: open /enter in a browser, or send its cookie";
        return (StatusCode::UNAUTHORIZED, [(header::CONTENT_TYPE, "application/json")], crate::asks::refusal(says))
            .into_response();
    }
    let then: String = uri.path_and_query().map_or("/", |p| p.as_str()).chars().take(200).collect();
    Redirect::to(&format!("/enter?then={}", escaped(&then))).into_response()
}

/// A text as part of a query.
fn escaped(text: &str) -> String {
    let plain = |b: u8| b.is_ascii_alphanumeric() || b"-._~/".contains(&b);
    text.bytes().map(|b| if plain(b) { char::from(b).to_string() } else { format!("%{b:02X}") }).collect()
}

/// A path of this station, or the front page: a form cannot send anybody elsewhere.
pub fn then(members: &Members) -> String {
    let path = members.get("then").map_or("/", String::as_str);
    let plain = path.bytes().all(|b| b.is_ascii_graphic() && b != b'\\');
    let ours = path.starts_with('/') && !path.starts_with("//") && path.len() <= 200;
    String::from(if ours && plain { path } else { "/" })
}

fn seen(page: Page, who: &Who) -> Seen {
    Seen { page, who: who.operator.clone(), proven: who.proven }
}

type Made = Result<Html<String>, Refused>;

fn shown(app: &App, who: &Who, page: Page, make: impl FnOnce(&tarecup_core::lab::Lab, &Around) -> Option<Markup>) -> Made {
    let made = app.board.look(|m| make(&m.lab, &app.board.around(m, &seen(page, who))));
    made.map(|m| Html(m.into_string())).ok_or_else(|| Refused::new(StatusCode::NOT_FOUND, "there is no such page"))
}

/// `GET /`
pub(super) async fn front(State(app): State<Arc<App>>) -> Redirect {
    let benches: Vec<String> = app.board.look(|m| m.lab.benches().map(|b| b.name.to_string()).collect());
    match benches.as_slice() {
        [only] => Redirect::to(&format!("/bench/{only}")),
        _ => Redirect::to("/laboratory"),
    }
}

/// `GET /bench/NAME`
pub(super) async fn bench(
    State(app): State<Arc<App>>,
    Extension(who): Extension<Who>,
    Path(name): Path<String>,
    Query(query): Query<Members>,
) -> Made {
    let none = || Refused::new(StatusCode::NOT_FOUND, "there is no such bench");
    let name = BenchName::new(&name).map_err(|_| none())?;
    let paste_g: Option<String> = query.get("paste_g").map(|g| g.chars().take(12).collect());
    let page = shown(&app, &who, Page::Bench(name.clone()), |lab, around| {
        let around = Around { paste_g, ..around.clone() };
        Some(pages::bench(&fill::bench(lab, &name, &app.board.now(), &around)?, &ENGLISH))
    })?;
    Ok(match app.hand.as_ref().filter(|h| h.bench() == name.as_str()) {
        Some(hand) => {
            Html(page.0.replacen("</main>", &format!("{}</main>", super::hand_panel(&hand.standing()).into_string()), 1))
        }
        None => page,
    })
}

/// `GET /shelf`
pub(super) async fn shelf(
    State(app): State<Arc<App>>,
    Extension(who): Extension<Who>,
    Query(query): Query<Members>,
    headers: HeaderMap,
) -> Made {
    let celsius = query.get("celsius").and_then(|c| c.trim().replace(',', ".").parse().ok());
    let from_here = headers.get("sec-fetch-site").is_none_or(|v| v == "same-origin");
    // A link from elsewhere may show the shelf, not set the oven.
    if let Some(celsius) = celsius.filter(|c| (20.0..=300.0).contains(c) && from_here) {
        app.board.set_celsius(celsius);
    }
    shown(&app, &who, Page::Shelf, |lab, around| Some(pages::shelf(&fill::shelf(lab, &app.board.now(), around), &ENGLISH)))
}

/// `GET /loose`
pub(super) async fn loose(State(app): State<Arc<App>>, Extension(who): Extension<Who>) -> Made {
    shown(&app, &who, Page::Loose, |lab, around| Some(pages::loose(&fill::loose(lab, &app.board.now(), around), &ENGLISH)))
}

/// `GET /laboratory`
pub(super) async fn laboratory(State(app): State<Arc<App>>, Extension(who): Extension<Who>) -> Made {
    shown(&app, &who, Page::Laboratory, |lab, around| {
        Some(pages::laboratory(&fill::laboratory(lab, &app.board.now(), around), &ENGLISH))
    })
}

/// `GET /specimen/ID`
pub(super) async fn specimen(State(app): State<Arc<App>>, Extension(who): Extension<Who>, Path(id): Path<String>) -> Made {
    let none = || Refused::new(StatusCode::NOT_FOUND, "there is no such specimen");
    let id = SpecimenId::new(&id).map_err(|_| none())?;
    at_hand(&app, &id).await;
    app.board.read_record(&id).await;
    shown(&app, &who, Page::Specimen(id.clone()), |lab, around| {
        Some(pages::specimen(&fill::specimen(lab, &id, &app.board.now(), around)?, &ENGLISH))
    })
}

/// `GET /correct/SEQ`
pub(super) async fn correct(
    State(app): State<Arc<App>>,
    Extension(who): Extension<Who>,
    Path(seq): Path<u64>,
    headers: HeaderMap,
) -> Made {
    let mut around = correction_around(&app, &who, &headers);
    let find = |around: &Around| app.board.look(|m| fill::correction(&m.lab, seq, &app.board.now(), around));
    let of = find(&around).and_then(|c| SpecimenId::new(&c.subject.specimen?).ok());
    if let Some(id) = of {
        around.history = super::record::corrections(&app.board.read_record(&id).await, seq);
    }
    let none = "no weighing or count has this number, or its specimen is not at hand";
    let view = find(&around).ok_or_else(|| Refused::new(StatusCode::NOT_FOUND, none))?;
    Ok(Html(pages::correct(&view, &ENGLISH).into_string()))
}

/// `GET /correct/SPECIMEN/KIND/NO`
pub(super) async fn correct_trial(
    State(app): State<Arc<App>>,
    Extension(who): Extension<Who>,
    Path((specimen, kind, no)): Path<(String, String, u32)>,
    headers: HeaderMap,
) -> Made {
    let none = || Refused::new(StatusCode::NOT_FOUND, "there is no such determination");
    let id = SpecimenId::new(&specimen).map_err(|_| none())?;
    let kind: Kind = serde_json::from_value(Value::String(kind)).map_err(|_| none())?;
    at_hand(&app, &id).await;
    let around = correction_around(&app, &who, &headers);
    let trial = TrialRef { kind, no };
    let view = app.board.look(|m| fill::trial_correction(&m.lab, &id, trial, &app.board.now(), &around)).ok_or_else(none)?;
    Ok(Html(pages::correct(&view, &ENGLISH).into_string()))
}

fn correction_around(app: &App, who: &Who, headers: &HeaderMap) -> Around {
    let from = came_from(headers).unwrap_or_else(|| String::from("/laboratory"));
    let around = app.board.look(|m| app.board.around(m, &seen(Page::Loose, who)));
    Around { then: then(&Members::from([(String::from("then"), from)])), ..around }
}

/// A finished specimen comes from the ledger when it is named.
pub(super) async fn at_hand(app: &App, id: &SpecimenId) {
    if app.board.look(|m| m.lab.specimen(id).is_some()) {
        return;
    }
    let (key, dir) = (id.to_string(), app.state_dir.clone());
    let found = app.read(move || {
        let stored = Reader::open(&dir).ok()?.document("specimen", &key).ok()??;
        serde_json::from_slice::<Specimen>(&stored.body).ok()
    });
    if let Some(specimen) = found.await.flatten() {
        app.board.remember(Loaded::Specimen(Box::new(specimen)));
    }
}

/// A form as an ask: fields left empty are left out.
pub fn ask_of(members: Members) -> Result<Map<String, Value>, String> {
    let mut ask = Map::new();
    for (name, value) in members {
        if name == "then" || name == "token" || (value.trim().is_empty() && name != "pin") {
            continue;
        }
        let value = if name == "mass_g" || name == "lid_g" {
            Value::String(value.trim().replace(',', "."))
        } else {
            crate::asks::member(&name, &value)?
        };
        ask.insert(name, value);
    }
    Ok(ask)
}

/// `POST /bench/NAME/act`
pub(super) async fn act_at(
    State(app): State<Arc<App>>,
    Extension(who): Extension<Who>,
    Extension(ends): Extension<Ends>,
    Path(name): Path<String>,
    Form(mut members): Form<Members>,
) -> Response {
    if BenchName::new(&name).is_err() {
        return problem(&app, &who, StatusCode::NOT_FOUND, "there is no such bench");
    }
    members.entry("then".into()).or_insert_with(|| format!("/bench/{name}"));
    if members.get("bench").is_some_and(String::is_empty) {
        members.insert("bench".into(), name);
    }
    acted(&app, &ends, &who, members).await
}

/// `POST /act`
pub(super) async fn act(
    State(app): State<Arc<App>>,
    Extension(who): Extension<Who>,
    Extension(ends): Extension<Ends>,
    headers: HeaderMap,
    Form(mut members): Form<Members>,
) -> Response {
    if !members.contains_key("then")
        && let Some(from) = came_from(&headers)
    {
        members.insert("then".into(), from);
    }
    acted(&app, &ends, &who, members).await
}

/// The path of the page that a form was on.
fn came_from(headers: &HeaderMap) -> Option<String> {
    let uri: Uri = headers.get(header::REFERER)?.to_str().ok()?.parse().ok()?;
    Some(uri.path_and_query()?.to_string())
}

async fn acted(app: &App, ends: &Ends, who: &Who, members: Members) -> Response {
    let to = then(&members);
    let ask = match ask_of(members) {
        Ok(ask) => ask,
        Err(says) => return problem(app, who, StatusCode::BAD_REQUEST, &says),
    };
    let answered: Answered = asking::ask(app, ends, who, ask).await;
    match answered.refusal() {
        None => Redirect::to(&to).into_response(),
        Some(says) => problem(app, who, answered.status, &says),
    }
}

/// `GET /sign-in`
pub(super) async fn sign_in(
    State(app): State<Arc<App>>,
    Extension(who): Extension<Who>,
    Query(members): Query<Members>,
) -> Response {
    sign_in_page(&app, &who, &members, StatusCode::OK, None)
}

fn sign_in_page(app: &App, who: &Who, members: &Members, status: StatusCode, refused: Option<String>) -> Response {
    let locked = members.get("operator").and_then(|o| {
        let book = super::operators::load(&app.state_dir).ok()?;
        let entry = book.operators.iter().find(|e| e.initials.as_str().eq_ignore_ascii_case(o))?;
        entry.locked(super::app::utc_us()).map(String::from)
    });
    let view =
        view::SignIn { frame: frame(app, who), operators: app.operators(), then: then(members), refused, locked_until: locked };
    (status, Html(pages::sign_in(&view, &ENGLISH).into_string())).into_response()
}

/// `POST /sign-in`
pub(super) async fn sign_in_with(
    State(app): State<Arc<App>>,
    Extension(who): Extension<Who>,
    Extension(ends): Extension<Ends>,
    Form(mut members): Form<Members>,
) -> Response {
    // The code of a badge names its owner as the card does.
    let named = members.get("operator").map_or("", |o| o.trim()).trim_start_matches("+by-").to_string();
    members.insert("operator".into(), named.clone());
    let refused = |status, says: String| sign_in_page(&app, &who, &members, status, Some(says));
    let operator = match Operator::new(&named) {
        Ok(operator) => operator,
        Err(e) => return refused(StatusCode::BAD_REQUEST, format!("initials: {e}")),
    };
    let pin = members.get("pin").map_or("", String::as_str);
    // Without a PIN a person is named, not proven: weighings carry the name, corrections still ask for the PIN.
    let judged = if pin.is_empty() { Ok(operator) } else { app.prove(&ends, &operator, pin).await };
    match judged {
        Err(denied) => refused(asking::status_of(&denied), denied.to_string()),
        Ok(operator) => match app.sessions.begin(operator.as_str(), !pin.is_empty(), &app.cookies) {
            Err(says) => refused(StatusCode::INTERNAL_SERVER_ERROR, says),
            Ok(cookie) => {
                let to = then(&members);
                sign_in_at_bench(&app, &operator, &to).await;
                with_cookie(Redirect::to(&to).into_response(), cookie)
            }
        },
    }
}

/// Who signs in from a bench's page works at that bench.
async fn sign_in_at_bench(app: &App, operator: &Operator, page: &str) {
    let bench = page.strip_prefix("/bench/").and_then(|b| BenchName::new(b).ok());
    if let Some(bench) = bench.filter(|b| app.board.look(|m| m.lab.bench(b).is_some())) {
        let ask = serde_json::json!({"ask": "sign_in", "bench": bench, "operator": operator});
        app.ask(String::from("screen"), ask.to_string()).await;
    }
}

/// `POST /sign-out`
pub(super) async fn sign_out(State(app): State<Arc<App>>, headers: HeaderMap, Form(members): Form<Members>) -> Response {
    let cookie = app.sessions.end(&headers, &app.cookies);
    with_cookie(Redirect::to(&then(&members)).into_response(), cookie)
}

fn with_cookie(mut answer: Response, cookie: HeaderValue) -> Response {
    answer.headers_mut().append(header::SET_COOKIE, cookie);
    answer
}

/// What a list would do, and the asks of its good lines.
pub(super) fn read_list(app: &App, who: &Who, what: &str, text: &str) -> (view::Import, Vec<Ask>) {
    app.board.look(|m| fill::import(&m.lab, what, text, &app.board.now(), &app.board.around(m, &seen(Page::Laboratory, who))))
}

/// `POST /import`
pub(super) async fn import(
    State(app): State<Arc<App>>,
    Extension(who): Extension<Who>,
    Form(members): Form<Members>,
) -> Response {
    let (view, _) = list_of(&app, &who, &members);
    let status = if view.refused.is_some() { StatusCode::UNPROCESSABLE_ENTITY } else { StatusCode::OK };
    (status, Html(pages::import(&view, &ENGLISH).into_string())).into_response()
}

fn list_of(app: &App, who: &Who, members: &Members) -> (view::Import, Vec<Ask>) {
    let member = |name: &str| members.get(name).map_or("", String::as_str);
    read_list(app, who, member("what"), member("text"))
}

/// `POST /import/take`
pub(super) async fn import_take(
    State(app): State<Arc<App>>,
    Extension(who): Extension<Who>,
    Extension(ends): Extension<Ends>,
    Form(members): Form<Members>,
) -> Response {
    let by = members.get("who").map(|w| w.trim().to_string()).filter(|w| !w.is_empty());
    let by = match members.get("pin").filter(|p| !p.is_empty()) {
        None => by,
        Some(pin) => {
            let named = by.or(who.operator.clone()).and_then(|n| Operator::new(&n).ok());
            let Some(named) = named else { return problem(&app, &who, StatusCode::FORBIDDEN, "say whose PIN it is") };
            match app.prove(&ends, &named, pin).await {
                Ok(proven) => Some(proven.to_string()),
                Err(denied) => return problem(&app, &who, asking::status_of(&denied), &denied.to_string()),
            }
        }
    };
    let (mut view, asks) = list_of(&app, &who, &members);
    if view.refused.is_none() && view.lines.iter().all(|l| l.refused.is_none()) {
        super::api::taken(&app, &ends, &who, &mut view.lines, asks, by.as_deref()).await;
        view.lines.retain(|l| l.refused.is_some());
        if view.lines.is_empty() {
            return Redirect::to("/laboratory").into_response();
        }
        // What was not taken stays on the page, to be mended and brought again.
        view.refused = Some(String::from("every other line was taken; these were not"));
    }
    (StatusCode::UNPROCESSABLE_ENTITY, Html(pages::import(&view, &ENGLISH).into_string())).into_response()
}

/// `GET /enter`
pub(super) async fn enter(Query(members): Query<Members>) -> Html<String> {
    Html(enter_page(&then(&members), None).into_string())
}

/// `POST /enter`
pub(super) async fn enter_with(State(app): State<Arc<App>>, Form(members): Form<Members>) -> Response {
    let to = then(&members);
    let Some(secret) = &app.secret else { return Redirect::to(&to).into_response() };
    // One at a time and not too fast: a guess costs what it costs everybody.
    let _turn = app.judging.acquire().await;
    if !secret.is(members.get("secret").map_or("", String::as_str)) {
        tokio::time::sleep(std::time::Duration::from_millis(500)).await;
        let says = "that is not the secret of this station; it stands in the file that secret_file of [screen] names";
        return (StatusCode::FORBIDDEN, Html(enter_page(&to, Some(says)).into_string())).into_response();
    }
    match secret.admit(&app.cookies) {
        Ok(cookie) => with_cookie(Redirect::to(&to).into_response(), cookie),
        Err(says) => (StatusCode::INTERNAL_SERVER_ERROR, says).into_response(),
    }
}

fn enter_page(then: &str, refused: Option<&str>) -> Markup {
    html! {
        (maud::DOCTYPE)
        html lang="en" {
            head {
                meta charset="utf-8";
                meta name="viewport" content="width=device-width, initial-scale=1";
                title { "Enter" }
                link rel="stylesheet" href="/assets/style.css";
            }
            body {
                main #main {
                    h1 { "This screen is for who has its secret" }
                    @if let Some(says) = refused { p.note #refused role="alert" { (says) } }
                    form method="post" action="/enter" {
                        input type="hidden" name="then" value=(then);
                        label for="secret" { "Secret of the station" }
                        input id="secret" name="secret" type="password" autocomplete="off" required autofocus;
                        button.key type="submit" { "Enter" }
                    }
                }
            }
        }
    }
}

/// `POST /demo/hand`
pub(super) async fn hand(State(app): State<Arc<App>>, Extension(who): Extension<Who>, Form(members): Form<Members>) -> Response {
    let Some(hand) = app.hand.clone() else {
        return problem(&app, &who, StatusCode::NOT_FOUND, "only the demo has a simulated bench");
    };
    let back = format!("/bench/{}#hand", hand.bench());
    let (said, code) = (members.clone(), members.get("container").cloned());
    let reads = members.get("do").is_some_and(|d| d == "put") && members.get("read").is_none_or(|r| r != "no");
    if let Some(code) = code.filter(|_| reads) {
        // The hand holds the container before the reader first.
        let ask = serde_json::json!({"ask": "code", "bench": hand.bench(), "text": code});
        app.ask(String::from("screen-hand"), ask.to_string()).await;
    }
    let done = tokio::task::spawn_blocking(move || hand.act(&said)).await;
    match done {
        Ok(Ok(())) => Redirect::to(&back).into_response(),
        Ok(Err(says)) => problem(&app, &who, StatusCode::UNPROCESSABLE_ENTITY, &says),
        Err(_) => problem(&app, &who, StatusCode::INTERNAL_SERVER_ERROR, "the simulated hand failed"),
    }
}
