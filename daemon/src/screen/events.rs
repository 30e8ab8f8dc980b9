//! Server-sent events: a browser learns of what is newer than what it has.
//!
//! `GET /events?bench=NAME` or `?page=shelf`, `loose`, `laboratory`,
//! `?specimen=ID`. Events:
//!
//! * `region` `{"id","html","seq"}`: put this into the element `region-ID`;
//! * `live` `{"instrument",…}`: a reading or a drop, the latest only;
//! * `beat` `{"now","seq","recording","why"}`: each second, so that silence means trouble.
//!
//! The id of an event is `START-VERSION`. A browser that comes back with it as
//! `Last-Event-ID` gets what has changed since; after a restart of the service,
//! everything that is not older than the fact named in `&after=SEQ`. A slow one skips what lay between: nothing is queued for it.

use super::app::App;
use super::board::{Page, Seen, Watched};
use super::guard::Refused;
use super::session::Who;
use axum::extract::{Extension, Query, State};
use axum::http::{HeaderMap, StatusCode};
use axum::response::sse::{Event, Sse};
use axum::response::{IntoResponse, Response};
use serde::Deserialize;
use serde_json::json;
use std::collections::{BTreeSet, VecDeque};
use std::convert::Infallible;
use std::sync::Arc;
use std::time::Duration;
use tarecup_core::names::InstrumentName;
use tokio::sync::watch;
use tokio::time::Interval;

/// How often a browser hears that the service is there.
const BEAT: Duration = Duration::from_secs(1);

/// Which page.
#[derive(Deserialize)]
pub(super) struct Which {
    bench: Option<String>,
    specimen: Option<String>,
    page: Option<String>,
    /// The fact that the page reflects already.
    #[serde(default)]
    after: u64,
}

impl Which {
    fn page(&self) -> Option<Page> {
        match (&self.bench, &self.specimen, &self.page) {
            (Some(name), None, None) => Page::named("bench", Some(name)),
            (None, Some(id), None) => Page::named("specimen", Some(id)),
            // A page may name itself by its path: `bench/north`.
            (None, None, Some(page)) => match page.trim_matches('/').split_once('/') {
                Some((word, id)) => Page::named(word, Some(id)),
                None => Page::named(page.trim_matches('/'), None),
            },
            _ => None,
        }
    }
}

/// `GET /events`
pub(super) async fn events(
    State(app): State<Arc<App>>,
    Extension(who): Extension<Who>,
    Query(which): Query<Which>,
    headers: HeaderMap,
) -> Response {
    let Some(page) = which.page() else {
        let says = "say which page: ?bench=NAME, ?specimen=ID or ?page=shelf, loose or laboratory";
        return Refused::new(StatusCode::BAD_REQUEST, says).into_response();
    };
    if let Page::Specimen(id) = &page {
        super::site::at_hand(&app, id).await;
        app.board.read_record(id).await;
    }
    let Some(watched) = app.board.watch(Seen { page: page.clone(), who: who.operator.clone(), proven: who.proven }) else {
        return Refused::new(StatusCode::NOT_FOUND, "there is no such page").into_response();
    };
    let start = &app.board.fixed.start;
    let last = headers.get("last-event-id").and_then(|v| v.to_str().ok());
    let known = last.and_then(|id| id.split_once('-')).filter(|(of, _)| of == start).and_then(|(_, v)| v.parse().ok());
    let version: u64 = known.unwrap_or(0);
    let instruments = match &page {
        Page::Bench(bench) => app
            .board
            .look(|m| m.lab.setup().instruments.iter().filter(|(_, at)| at.contains(bench)).map(|(i, _)| i.clone()).collect()),
        _ => BTreeSet::new(),
    };
    let mut newest = watched.subscribe();
    newest.mark_changed();
    let mut live = app.board.live_newest();
    live.mark_changed();
    let watch = Watch {
        app,
        watched,
        instruments,
        newest,
        live,
        version,
        after: which.after,
        live_version: version,
        beat: tokio::time::interval(BEAT),
        ready: VecDeque::new(),
    };
    let stream = futures_util::stream::unfold(watch, |mut watch| async move {
        let event = watch.next().await?;
        Some((Ok::<_, Infallible>(event), watch))
    });
    let mut answer = Sse::new(stream).into_response();
    answer.headers_mut().insert("x-accel-buffering", axum::http::HeaderValue::from_static("no"));
    answer
}

struct Watch {
    app: Arc<App>,
    watched: Arc<Watched>,
    instruments: BTreeSet<InstrumentName>,
    newest: watch::Receiver<u64>,
    live: watch::Receiver<u64>,
    version: u64,
    after: u64,
    live_version: u64,
    beat: Interval,
    ready: VecDeque<Event>,
}

impl Watch {
    /// The next event; `None` when the service stops.
    async fn next(&mut self) -> Option<Event> {
        loop {
            if let Some(event) = self.ready.pop_front() {
                return Some(event);
            }
            tokio::select! {
                biased;
                changed = self.newest.changed() => {
                    changed.ok()?;
                    self.regions();
                }
                changed = self.live.changed() => {
                    changed.ok()?;
                    self.readings();
                }
                _ = self.beat.tick() => return Some(self.beat()),
            }
        }
    }

    fn regions(&mut self) {
        let mut newer = self.watched.newer_than(self.version);
        newer.sort_by_key(|r| r.version);
        for region in newer {
            self.version = self.version.max(region.version);
            if region.seq < self.after {
                continue;
            }
            let data = json!({"id": region.id(), "html": &*region.html, "seq": region.seq}).to_string();
            self.ready.push_back(self.event("region", &data).id(format!("{}-{}", self.app.board.fixed.start, region.version)));
        }
    }

    fn readings(&mut self) {
        let of = |name: &str| self.instruments.iter().any(|i| i.as_str() == name);
        for live in self.app.board.live_since(self.live_version, of) {
            self.live_version = self.live_version.max(live.version);
            self.ready.push_back(self.event("live", &live.text));
        }
    }

    fn beat(&self) -> Event {
        let board = &self.app.board;
        let why = board.not_recording();
        let data = json!({"now": board.now().rfc3339(), "seq": board.look(|m| m.seq), "recording": why.is_none(), "why": why});
        self.event("beat", &data.to_string())
    }

    fn event(&self, name: &str, data: &str) -> Event {
        Event::default().event(name).data(data)
    }
}
