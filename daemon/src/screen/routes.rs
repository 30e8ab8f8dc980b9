//! Every path of the screen, in one place.

use super::app::App;
use super::{events, guard, site};
use axum::Router;
use axum::extract::{DefaultBodyLimit, Path, State};
use axum::http::{StatusCode, header};
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
        .route("/assets/{name}", get(asset))
        .fallback(nothing)
        .layer(DefaultBodyLimit::max(BODY_LARGEST))
        .layer(middleware::from_fn_with_state(Arc::clone(&app), guard::guard))
        .with_state(app)
}

async fn nothing(State(app): State<Arc<App>>, uri: axum::http::Uri) -> Response {
    let refused = guard::Refused::new(StatusCode::NOT_FOUND, "there is nothing at this address");
    site::refusal(&app, site::wants_json(uri.path()), &refused)
}

/// What the pages load. Only what is compiled in: no path ever reaches the disk.
const ASSETS: [(&str, &str, &[u8]); 0] = [];

async fn asset(Path(name): Path<String>) -> Response {
    match ASSETS.iter().find(|(of, _, _)| *of == name) {
        Some((_, kind, bytes)) => ([(header::CONTENT_TYPE, *kind), (header::CACHE_CONTROL, "no-cache")], *bytes).into_response(),
        None => StatusCode::NOT_FOUND.into_response(),
    }
}
