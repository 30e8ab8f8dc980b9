//! The bench screen and the HTTP interface.
//!
//! It shows what is stored and asks for what persons want; it decides nothing.
//! It has threads of its own, which yield to the desk, and everything that it
//! holds for a browser is bounded.

mod api;
pub mod app;
mod asking;
pub mod board;
mod events;
pub mod fill;
mod guard;
pub mod hand;
pub mod mailbox;
mod openapi;
pub mod operators;
pub mod pages;
pub mod pictures;
pub mod record;
mod routes;
mod server;
pub mod session;
mod shapes;
mod shapes_ask;
mod site;
pub mod view;
pub mod words;

use crate::desk::inbox::Inbox;
use crate::publish::holder_of;
use app::App;
use board::Board;
use hand::Hand;
use maud::{Markup, html};
use rustls::pki_types::pem::PemObject;
use rustls::pki_types::{CertificateDer, PrivateKeyDer};
use session::{Cookies, Secret, Sessions};
use std::net::{SocketAddr, TcpListener};
use std::path::Path;
use std::sync::Arc;
use std::time::Duration;
use tarecup_config::station::Screen as Settings;
use tokio::runtime::Runtime;
use tokio::sync::{Semaphore, oneshot};
use tokio_rustls::TlsAcceptor;

/// How much the screen's threads yield to all others.
const YIELDS: i32 = 5;
/// The desk answers within this time, or that is said.
const DESK_ANSWERS: Duration = Duration::from_secs(2);
/// Readers of the ledger at a time.
const READERS: usize = 2;

/// Why there is no screen.
#[derive(Debug, thiserror::Error)]
pub enum ScreenFault {
    /// The settings.
    #[error("[screen] {0}")]
    Settings(String),
    /// Somebody else listens there.
    #[error("[screen] {address} is taken by {holder}; stop that program, or set listen in [screen] to another port")]
    InUse {
        /// Where.
        address: SocketAddr,
        /// Who.
        holder: String,
    },
    /// The system.
    #[error("[screen] cannot listen on {address}: {error}")]
    Listen {
        /// Where.
        address: SocketAddr,
        /// Why.
        error: std::io::Error,
    },
}

/// What the screen needs before anything else starts.
pub struct Prepared {
    listener: TcpListener,
    secret: Option<Secret>,
    tls: Option<TlsAcceptor>,
    hosts: Vec<String>,
    /// Where it listens.
    pub address: SocketAddr,
}

/// Whether the files that the settings name are there and good.
pub fn check(settings: &Settings) -> Result<(), ScreenFault> {
    files(settings).map(drop)
}

fn files(settings: &Settings) -> Result<(Option<Secret>, Option<TlsAcceptor>), ScreenFault> {
    let secret = settings.secret_file.as_deref().map(Secret::read).transpose().map_err(ScreenFault::Settings)?;
    if secret.is_none() && !settings.listen.ip().is_loopback() {
        let says =
            "other machines can reach the address, and there is no secret: `tarecup secret new FILE`, and secret_file = \"FILE\"";
        return Err(ScreenFault::Settings(String::from(says)));
    }
    let tls = match (&settings.certificate_file, &settings.key_file) {
        (Some(certificate), Some(key)) => Some(acceptor(certificate, key).map_err(ScreenFault::Settings)?),
        _ => None,
    };
    Ok((secret, tls))
}

fn acceptor(certificate: &Path, key: &Path) -> Result<TlsAcceptor, String> {
    let trouble = |path: &Path, what: &dyn std::fmt::Display| format!("{}: {what}", path.display());
    let chain: Result<Vec<_>, _> = CertificateDer::pem_file_iter(certificate).and_then(Iterator::collect);
    let chain = chain.map_err(|e| trouble(certificate, &e))?;
    if chain.is_empty() {
        return Err(trouble(certificate, &"holds no certificate in PEM form"));
    }
    let secret = PrivateKeyDer::from_pem_file(key).map_err(|e| trouble(key, &e))?;
    let provider = Arc::new(rustls::crypto::ring::default_provider());
    let config = rustls::ServerConfig::builder_with_provider(provider)
        .with_safe_default_protocol_versions()
        .and_then(|b| b.with_no_client_auth().with_single_cert(chain, secret))
        .map_err(|e| trouble(certificate, &e))?;
    Ok(TlsAcceptor::from(Arc::new(config)))
}

impl Prepared {
    /// Reads the files that the settings name and takes the address; `None` when there is to be no screen.
    pub fn new(settings: &Settings, any_port: bool) -> Result<Option<Self>, ScreenFault> {
        if !settings.enabled {
            return Ok(None);
        }
        let (secret, tls) = files(settings)?;
        let listener = match TcpListener::bind(settings.listen) {
            Err(e) if e.kind() == std::io::ErrorKind::AddrInUse && any_port => {
                TcpListener::bind(SocketAddr::new(settings.listen.ip(), 0))
            }
            other => other,
        };
        let address = settings.listen;
        let listener = listener.map_err(|error| match error.kind() {
            std::io::ErrorKind::AddrInUse => {
                let holder = holder_of(address).unwrap_or_else(|| String::from("another program"));
                ScreenFault::InUse { address, holder }
            }
            _ => ScreenFault::Listen { address, error },
        })?;
        let taken = listener.set_nonblocking(true).and_then(|()| listener.local_addr());
        let address = taken.map_err(|error| ScreenFault::Listen { address, error })?;
        Ok(Some(Self { listener, secret, tls, hosts: settings.hosts.clone(), address }))
    }

    /// `http://…` or `https://…`, as a person types it.
    pub fn url(&self) -> String {
        let scheme = if self.tls.is_some() { "https" } else { "http" };
        format!("{scheme}://{}", self.address)
    }
}

/// The screen at work.
pub struct Screen {
    runtime: Runtime,
    url: String,
}

impl Screen {
    /// Begins to serve.
    pub fn start(
        prepared: Prepared,
        board: Arc<Board>,
        inbox: Arc<Inbox>,
        state_dir: &Path,
        hand: Option<Arc<dyn Hand>>,
    ) -> std::io::Result<Self> {
        let url = prepared.url();
        let yields = || {
            // On Linux this is a matter of the thread alone. Without the right to, it stays as it is.
            let _ = rustix::process::nice(YIELDS);
        };
        let mut builder = tokio::runtime::Builder::new_multi_thread();
        let builder = builder.worker_threads(1).max_blocking_threads(4).thread_name("screen").on_thread_start(yields);
        let runtime = builder.enable_all().build()?;
        let app = Arc::new(App {
            cookies: Cookies::new(prepared.address.port(), prepared.tls.is_some()),
            board: Arc::clone(&board),
            inbox: Arc::clone(&inbox),
            state_dir: state_dir.to_path_buf(),
            hosts: prepared.hosts,
            secret: prepared.secret,
            sessions: Sessions::default(),
            hand,
            judging: Semaphore::new(1),
            reading: Semaphore::new(READERS),
        });
        let listener = {
            let _inside = runtime.enter();
            tokio::net::TcpListener::from_std(prepared.listener)?
        };
        runtime.spawn(Arc::clone(&board).follow());
        runtime.spawn(listen_to_desk(board, inbox));
        runtime.spawn(server::serve(listener, prepared.tls, app));
        Ok(Self { runtime, url })
    }

    /// Where it is, as a person types it.
    pub fn url(&self) -> &str {
        &self.url
    }

    /// Stops at once: pages see that no beat comes any more.
    pub fn stop(self) {
        self.runtime.shutdown_timeout(Duration::from_millis(200));
    }
}

/// While somebody watches, the desk is asked each second whether it still answers.
async fn listen_to_desk(board: Arc<Board>, inbox: Arc<Inbox>) {
    let mut each = tokio::time::interval(Duration::from_secs(1));
    loop {
        each.tick().await;
        if !board.is_watched() {
            continue;
        }
        let (tx, mut rx) = oneshot::channel();
        inbox.tick(Box::new(move |_| {
            let _ = tx.send(());
        }));
        if tokio::time::timeout(DESK_ANSWERS, &mut rx).await.is_err() {
            board.desk_answers(false);
            let _ = rx.await;
        }
        board.desk_answers(true);
    }
}

/// The panel of the demo's hand, below the page of its bench.
fn hand_panel(now: &hand::Standing) -> Markup {
    let button = |what: &str, id: &str, text: &str, able: bool| {
        html! {
            form method="post" action="/demo/hand" {
                input type="hidden" name="do" value=(what);
                button.key id=(id) type="submit" disabled[!able] { (text) }
            }
        }
    };
    html! {
        section #hand .hand aria-label="Simulated hand" {
            h2 { "Simulated hand" }
            p.about { "This bench is simulated: here you move its instruments." }
            form method="post" action="/demo/hand" {
                input type="hidden" name="do" value="put";
                label for="hand-container" { "Read the code of a container and put it on the pan" }
                select id="hand-container" name="container" {
                    @for one in &now.containers { option value=(one.container) { (one.container) ": " (one.holds) } }
                }
                label for="hand-with" { "with" }
                select id="hand-with" name="with" {
                    option value="as-it-is" { "what is in it" }
                    option value="slice" { "a slice of the paste in the cup" }
                    option value="threads" { "threads rolled until they crumble" }
                    option value="nothing" { "nothing: emptied and wiped" }
                }
                button.key id="hand-put" type="submit" disabled[now.pan.is_some()] { "Put it on the pan" }
            }
            (button("lift", "hand-lift", "Take it off the pan", now.pan.is_some()))
            (button("wetter", "hand-wetter", "Mix a little water in", !now.cup_runs))
            (button("drier", "hand-drier", "Work the paste drier", !now.cup_runs))
            (button("cup", "hand-cup", "Fill the cup, cut the groove, start the cam", !now.cup_runs))
            (button("stop", "hand-stop", "Stop the cam", now.cup_runs))
            (button("oven", "hand-oven", "Dry the wet containers: a night in the oven", now.pan.is_none() && !now.cup_runs))
            p.note id="hand-says" role="status" {
                @if let Some(pan) = &now.pan { "On the pan: " (pan) ". " }
                (now.says)
            }
        }
    }
}
