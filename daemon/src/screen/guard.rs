//! What every request has to pass, and what every answer carries.
//!
//! A page of any website can make a browser on this machine ask us. So the name
//! it asks under must be ours (DNS rebinding), and what writes must come from
//! one of our own pages (cross-site requests).

use super::app::App;
use super::server::Ends;
use super::{session, site};
use axum::extract::{Request, State};
use axum::http::header::{self, HeaderMap, HeaderName, HeaderValue};
use axum::http::{Method, StatusCode};
use axum::middleware::Next;
use axum::response::{IntoResponse, Response};
use std::net::IpAddr;
use std::sync::Arc;
use std::time::Duration;

/// A request is answered within this time; events go on for as long as they are wanted.
const ANSWER_TIME: Duration = Duration::from_secs(30);
/// What a page may load and where it may send: nothing but this station.
const POLICY: &str = "default-src 'none'; script-src 'self'; style-src 'self'; img-src 'self'; connect-src 'self'; \
                      form-action 'self'; frame-ancestors 'none'; base-uri 'none'";

/// Why a request is not taken.
#[derive(Clone, Debug, PartialEq, Eq)]
pub struct Refused {
    /// The status.
    pub status: StatusCode,
    /// In words.
    pub says: String,
}

impl Refused {
    /// A refusal.
    pub fn new(status: StatusCode, says: impl Into<String>) -> Self {
        Self { status, says: says.into() }
    }
}

/// Passes a request on, or refuses it.
pub(super) async fn guard(State(app): State<Arc<App>>, mut request: Request, next: Next) -> Response {
    let api = site::wants_json(request.uri().path());
    let answer = match admit(&app, &mut request) {
        Err(refused) => site::refusal(&app, api, &refused),
        Ok(Admitted::Enter) => site::to_enter(request.uri(), api),
        Ok(Admitted::Yes) => match tokio::time::timeout(ANSWER_TIME, next.run(request)).await {
            Ok(answer) => answer,
            Err(_) => {
                let says = "the request took too long; try again";
                site::refusal(&app, api, &Refused::new(StatusCode::REQUEST_TIMEOUT, says))
            }
        },
    };
    with_headers(in_words(&app, api, answer))
}

/// A refusal that the framework made, in the words and the form of all others.
fn in_words(app: &App, api: bool, answer: Response) -> Response {
    let plain = answer.extensions().get::<Refused>().cloned();
    let says = match (plain, answer.status()) {
        (Some(refused), _) => refused.says,
        (None, StatusCode::PAYLOAD_TOO_LARGE) => String::from("the request is too large: 64 kB fit, and 1 MB for a list"),
        (None, StatusCode::METHOD_NOT_ALLOWED) => String::from("this address is not asked like that; /api/openapi.json says how"),
        (None, StatusCode::UNSUPPORTED_MEDIA_TYPE) if !api => String::from("a form is sent as application/x-www-form-urlencoded"),
        (None, status) if status.is_client_error() && !typed(&answer) => String::from("the request cannot be understood"),
        _ => return answer,
    };
    let status = answer.status();
    let allow = answer.headers().get(header::ALLOW).cloned();
    let mut told = site::refusal(app, api, &Refused::new(status, says));
    if let Some(allow) = allow {
        told.headers_mut().insert(header::ALLOW, allow);
    }
    told
}

/// Whether a body is ours already: the framework's own are plain text.
fn typed(answer: &Response) -> bool {
    let kind = answer.headers().get(header::CONTENT_TYPE).and_then(|v| v.to_str().ok()).unwrap_or_default();
    !kind.is_empty() && !kind.starts_with("text/plain")
}

enum Admitted {
    Yes,
    /// The secret has to be presented first.
    Enter,
}

fn admit(app: &App, request: &mut Request) -> Result<Admitted, Refused> {
    let ends = request.extensions().get::<Ends>().copied();
    let ends = ends.ok_or_else(|| Refused::new(StatusCode::INTERNAL_SERVER_ERROR, "the connection is not known"))?;
    let host = host(request.headers(), request.uri().authority().map(|a| a.as_str()))?;
    known_host(app, &host, &ends)?;
    let writes = !matches!(*request.method(), Method::GET | Method::HEAD);
    same_site(request.headers(), &host, writes)?;
    let path = request.uri().path();
    let open = path == "/enter" || path.starts_with("/assets/");
    if let Some(secret) = app.secret.as_ref().filter(|_| !open)
        && !session::admitted(secret, request.headers(), &app.cookies)
    {
        return Ok(Admitted::Enter);
    }
    let who = app.sessions.who(request.headers(), &app.cookies);
    request.extensions_mut().insert(who);
    Ok(Admitted::Yes)
}

/// The one name that a request asks under.
fn host(headers: &HeaderMap, authority: Option<&str>) -> Result<String, Refused> {
    let mut all = headers.get_all(header::HOST).iter();
    let (first, second) = (all.next(), all.next());
    let text = first.and_then(|h| h.to_str().ok()).filter(|_| second.is_none());
    let text = text.ok_or_else(|| Refused::new(StatusCode::BAD_REQUEST, "a request names exactly one Host"))?;
    if authority.is_some_and(|a| !a.eq_ignore_ascii_case(text)) {
        return Err(Refused::new(StatusCode::BAD_REQUEST, "the request names two hosts"));
    }
    Ok(text.to_ascii_lowercase())
}

/// Name and port of a host.
fn split(host: &str) -> (&str, Option<&str>) {
    let after = host.rfind(']').map_or(0, |i| i + 1);
    match host[after..].rfind(':') {
        Some(i) => (&host[..after + i], Some(&host[after + i + 1..])),
        None => (host, None),
    }
}

fn known_host(app: &App, host: &str, ends: &Ends) -> Result<(), Refused> {
    let (name, port) = split(host);
    let bare = name.trim_start_matches('[').trim_end_matches(']');
    if app.hosts.iter().any(|h| h == bare) {
        // Behind a proxy the port is the proxy's.
        return Ok(());
    }
    let usual = if ends.tls { "443" } else { "80" };
    let right_port = port.unwrap_or(usual).parse() == Ok(ends.local.port());
    let own = match bare.parse::<IpAddr>() {
        Ok(address) => address == ends.local.ip().to_canonical(),
        Err(_) => bare == "localhost" && ends.local.ip().to_canonical().is_loopback(),
    };
    if own && right_port {
        return Ok(());
    }
    let says = format!(
        "this station is not called {:?}; open it under its own address, or name it in hosts of [screen]",
        host.chars().take(80).collect::<String>()
    );
    Err(Refused::new(StatusCode::MISDIRECTED_REQUEST, says))
}

/// What writes must come from our own pages, or from a program that is no browser.
fn same_site(headers: &HeaderMap, host: &str, writes: bool) -> Result<(), Refused> {
    let text = |name: HeaderName| headers.get(name).map(|v| v.to_str().unwrap_or("?"));
    let refuse = |says: &str| Err(Refused::new(StatusCode::FORBIDDEN, says));
    let foreign = "the request comes from another website; use the pages of this station";
    if headers.get_all(header::ORIGIN).iter().count() > 1 {
        return refuse(foreign);
    }
    match text(HeaderName::from_static("sec-fetch-site")) {
        None | Some("same-origin") => (),
        // Typed into the address bar, or a link from elsewhere: may look, may not write.
        Some("none") if !writes => (),
        Some(_) if !writes && text(HeaderName::from_static("sec-fetch-mode")) == Some("navigate") => (),
        Some(_) => return refuse(foreign),
    }
    match text(header::ORIGIN) {
        None => Ok(()),
        Some(origin) => match origin.split_once("://") {
            Some(("http" | "https", from)) if from.eq_ignore_ascii_case(host) => Ok(()),
            _ => refuse(foreign),
        },
    }
}

fn with_headers(mut answer: Response) -> Response {
    let headers = answer.headers_mut();
    let always = [
        (header::CONTENT_SECURITY_POLICY, POLICY),
        (header::X_CONTENT_TYPE_OPTIONS, "nosniff"),
        (header::REFERRER_POLICY, "same-origin"),
        (header::X_FRAME_OPTIONS, "DENY"),
        (HeaderName::from_static("cross-origin-opener-policy"), "same-origin"),
        (HeaderName::from_static("cross-origin-resource-policy"), "same-origin"),
        (HeaderName::from_static("permissions-policy"), "camera=(), microphone=(), geolocation=()"),
    ];
    for (name, value) in always {
        headers.insert(name, HeaderValue::from_static(value));
    }
    headers.entry(header::CACHE_CONTROL).or_insert(HeaderValue::from_static("no-store"));
    answer
}

impl IntoResponse for Refused {
    fn into_response(self) -> Response {
        // Whoever passes the answer on puts it into the form that was asked for.
        let mut answer = self.status.into_response();
        answer.extensions_mut().insert(self);
        answer
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn hosts_are_split_at_their_port() {
        for (host, name, port) in [
            ("localhost:8470", "localhost", Some("8470")),
            ("[::1]:8470", "[::1]", Some("8470")),
            ("[::1]", "[::1]", None),
            ("bench-pc", "bench-pc", None),
        ] {
            assert_eq!(split(host), (name, port));
        }
    }

    fn site(pairs: &[(&'static str, &str)], writes: bool) -> bool {
        let mut headers = HeaderMap::new();
        for (name, value) in pairs {
            headers.append(*name, HeaderValue::from_str(value).expect("a value"));
        }
        same_site(&headers, "127.0.0.1:8470", writes).is_ok()
    }

    #[test]
    fn only_own_pages_write() {
        assert!(site(&[], true), "a program that is no browser");
        assert!(site(&[("origin", "http://127.0.0.1:8470"), ("sec-fetch-site", "same-origin")], true));
        for origin in ["null", "http://evil.example", "http://127.0.0.1:8471", "http://127.0.0.1:8470.evil.example", "file://"] {
            assert!(!site(&[("origin", origin)], true), "{origin}");
        }
        for from in ["cross-site", "same-site", "none", "anything"] {
            assert!(!site(&[("sec-fetch-site", from)], true), "{from}");
        }
        assert!(!site(&[("origin", "http://127.0.0.1:8470"), ("origin", "http://evil.example")], true));
        assert!(site(&[("sec-fetch-site", "none")], false));
        assert!(site(&[("sec-fetch-site", "cross-site"), ("sec-fetch-mode", "navigate")], false), "a link may lead here");
        assert!(!site(&[("sec-fetch-site", "cross-site"), ("sec-fetch-mode", "no-cors")], false), "an image of ours elsewhere");
    }
}
