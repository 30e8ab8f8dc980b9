//! Every path of the screen, in one place.

use super::app::App;
use super::{api, events, guard, pages, site};
use axum::Router;
use axum::extract::{DefaultBodyLimit, Path, State};
use axum::http::StatusCode;
use axum::http::header::{self, HeaderMap};
use axum::middleware;
use axum::response::{IntoResponse, Response};
use axum::routing::{get, post};
use std::sync::Arc;

/// Largest body, in bytes.
pub const BODY_LARGEST: usize = 64 * 1024;
/// Largest list, in bytes.
pub const LIST_LARGEST: usize = 1024 * 1024;

/// The router.
pub(super) fn router(app: Arc<App>) -> Router {
    Router::new()
        .route("/", get(site::front))
        .route("/bench/{name}", get(site::bench))
        .route("/bench/{name}/act", post(site::act_at))
        .route("/act", post(site::act))
        .route("/shelf", get(site::shelf))
        .route("/loose", get(site::loose))
        .route("/laboratory", get(site::laboratory))
        .route("/specimen/{id}", get(site::specimen))
        .route("/sign-in", get(site::sign_in).post(site::sign_in_with))
        .route("/sign-out", post(site::sign_out))
        .route("/enter", get(site::enter).post(site::enter_with))
        .route("/demo/hand", post(site::hand))
        .route("/events", get(events::events))
        .route("/correct/{seq}", get(site::correct))
        .route("/correct/{specimen}/{kind}/{no}", get(site::correct_trial))
        .merge(lists())
        .nest("/api", api())
        .route("/assets/{name}", get(asset))
        .fallback(nothing)
        .layer(DefaultBodyLimit::max(BODY_LARGEST))
        .layer(middleware::from_fn_with_state(Arc::clone(&app), guard::guard))
        .with_state(app)
}

/// The HTTP interface; [`super::openapi`] describes each path.
fn api() -> Router<Arc<App>> {
    Router::new()
        .route("/status", get(api::status))
        .route("/benches", get(api::benches))
        .route("/bench/{bench}", get(api::bench))
        .route("/specimens", get(api::specimens))
        .route("/specimen/{specimen}", get(api::specimen))
        .route("/specimen/{specimen}/limits", get(api::limits))
        .route("/containers", get(api::containers))
        .route("/container/{container}", get(api::container))
        .route("/instruments", get(api::instruments))
        .route("/instrument/{instrument}", get(api::instrument))
        .route("/loose", get(api::loose))
        .route("/facts", get(api::facts))
        .route("/ask", post(api::ask))
        .route("/session", get(api::session).post(api::begin_session).delete(api::end_session))
        .route("/openapi.json", get(api::description))
        .fallback(nothing)
}

/// Lists may be longer than anything else.
fn lists() -> Router<Arc<App>> {
    Router::new()
        .route("/import", post(site::import))
        .route("/import/take", post(site::import_take))
        .route("/api/import/{list}", post(api::import))
        .layer(DefaultBodyLimit::max(LIST_LARGEST))
}

async fn nothing(State(app): State<Arc<App>>, uri: axum::http::Uri) -> Response {
    let refused = guard::Refused::new(StatusCode::NOT_FOUND, "there is nothing at this address");
    site::refusal(&app, site::wants_json(uri.path()), &refused)
}

/// What the pages load. Only what is compiled in: no path ever reaches the disk.
const ASSETS: [(&str, &str, &str); 3] = [
    ("style.css", "text/css; charset=utf-8", pages::STYLE),
    ("script.js", "text/javascript; charset=utf-8", pages::SCRIPT),
    ("icon.svg", "image/svg+xml", pages::ICON),
];

async fn asset(Path(name): Path<String>, headers: HeaderMap) -> Response {
    let Some((_, kind, text)) = ASSETS.iter().find(|(of, _, _)| *of == name) else {
        return StatusCode::NOT_FOUND.into_response();
    };
    let tag = format!("\"{}\"", &crate::ledger::Digest::of(text.as_bytes()).to_string()[..16]);
    let same = headers.get(header::IF_NONE_MATCH).is_some_and(|v| v.as_bytes() == tag.as_bytes());
    let about = [(header::CONTENT_TYPE, String::from(*kind)), (header::CACHE_CONTROL, "no-cache".into()), (header::ETAG, tag)];
    match same {
        true => (StatusCode::NOT_MODIFIED, about).into_response(),
        false => (about, *text).into_response(),
    }
}
