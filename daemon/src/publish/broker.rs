//! The built-in broker: for one bench and its screens on the same machine.
//!
//! It admits, by rule and not by default: only the service itself, known by a secret made at each start, publishes
//! under `{root}/{station}`; everybody else may subscribe, and publish to `{root}/{station}/ask` when asks are
//! enabled, nowhere else. WebSocket and the brokers' own statistics topics are off. It listens on loopback only,
//! unless a password file is named. Nothing is stored: the courier publishes retained topics again at each connect.

use std::fmt::Write as _;
use std::future::Future;
use std::net::SocketAddr;
use std::path::{Path, PathBuf};
use std::pin::Pin;
use std::sync::Arc;
use std::time::Duration;

use mqtt5::broker::auth::PasswordAuthProvider;
use mqtt5::broker::config::{BrokerConfig, StorageBackend, StorageConfig};
use mqtt5::broker::{AuthProvider, AuthResult, BrokerShutdownHandle, MqttBroker};
use mqtt5::packet::connect::ConnectPacket;
use mqtt5::protocol::v5::reason_codes::ReasonCode;
use tokio::task::JoinHandle;

use super::settings::check_prefix;
use super::{CourierSettings, Login, PACKET_MAX, holder_of};

/// User name of the service itself at its own broker.
const OWN_USER: &str = "tarecup-service";
/// Connections at a time.
const CLIENTS_MAX: usize = 256;
/// Messages that may wait for one slow subscriber.
const QUEUE_MAX: usize = 20_000;

/// What the built-in broker needs to know.
#[derive(Debug, Clone)]
pub struct BrokerSettings {
    /// Where to listen; port 0 takes a free one.
    pub address: SocketAddr,
    /// Topic root.
    pub root: String,
    /// Station.
    pub station: String,
    /// The service's client identifier: nobody else may take it and so push the service off.
    pub client_id: String,
    /// Whether others may publish to `{root}/{station}/ask`.
    pub asks: bool,
    /// File with lines `user:hash`, the hash in PHC form by Argon2. With it everybody has to log in; it is
    /// required when the address is not loopback.
    pub passwords: Option<PathBuf>,
}

impl BrokerSettings {
    /// Settings that fit a courier's.
    #[must_use]
    pub fn for_courier(address: SocketAddr, courier: &CourierSettings) -> Self {
        Self {
            address,
            root: courier.root.clone(),
            station: courier.station.clone(),
            client_id: courier.client_id.clone(),
            asks: courier.asks,
            passwords: None,
        }
    }
}

/// Why the built-in broker did not start.
#[derive(Debug, thiserror::Error)]
pub enum BrokerFault {
    /// The address reaches beyond this machine and nobody would have to log in.
    #[error(
        "{0} can be reached from the network: name a password file, or use 127.0.0.1, or a broker of its own (see mosquitto.conf)"
    )]
    Open(SocketAddr),
    /// Somebody else listens there.
    #[error("{address} is in use by {holder}: stop it, or choose another address for the built-in broker")]
    InUse {
        /// The address.
        address: SocketAddr,
        /// Who, where that is known.
        holder: String,
    },
    /// The system does not allow listening there.
    #[error("cannot listen on {address}: {why}")]
    Listen {
        /// The address.
        address: SocketAddr,
        /// Why.
        why: String,
    },
    /// The password file is of no use.
    #[error("password file {}: {why}. Write one line user:hash for each user, the hash by Argon2 in PHC form", path.display())]
    Passwords {
        /// The file.
        path: PathBuf,
        /// Why.
        why: String,
    },
    /// A topic setting.
    #[error(transparent)]
    Setting(#[from] super::SettingsFault),
    /// No randomness for the secret.
    #[error("the system gives no random numbers: {0}")]
    Random(String),
}

/// The running broker.
pub struct BuiltIn {
    address: SocketAddr,
    login: Login,
    shutdown: BrokerShutdownHandle,
    task: JoinHandle<()>,
}

impl BuiltIn {
    /// Where it listens.
    #[must_use]
    pub fn address(&self) -> SocketAddr {
        self.address
    }

    /// The service's own user and secret of this start.
    #[must_use]
    pub fn login(&self) -> Login {
        self.login.clone()
    }

    /// Points a courier at this broker.
    pub fn admit(&self, courier: &mut CourierSettings) {
        courier.host = self.address.ip().to_string();
        courier.port = self.address.port();
        courier.tls = None;
        courier.login = Some(self.login());
    }

    /// True while it serves.
    #[must_use]
    pub fn is_running(&self) -> bool {
        !self.task.is_finished()
    }

    /// Closes every connection and ends. Stop the courier first.
    pub async fn stop(mut self) {
        self.shutdown.shutdown();
        if tokio::time::timeout(Duration::from_secs(2), &mut self.task).await.is_err() {
            self.task.abort();
        }
    }
}

impl Drop for BuiltIn {
    fn drop(&mut self) {
        self.shutdown.shutdown();
    }
}

/// Starts the built-in broker on the current runtime; it listens when this returns.
///
/// # Errors
/// Why it does not start and what to try.
pub async fn start(settings: BrokerSettings) -> Result<BuiltIn, BrokerFault> {
    check_prefix(&settings.root, &settings.station)?;
    let passwords = match &settings.passwords {
        Some(path) => Some(load_passwords(path).await?),
        None if settings.address.ip().is_loopback() => None,
        None => return Err(BrokerFault::Open(settings.address)),
    };
    let address = free_address(settings.address)?;
    let login = Login { user: OWN_USER.to_owned(), password: secret()? };
    let door = Door {
        secret: login.password.clone(),
        client_id: settings.client_id,
        own: format!("{}/{}/", settings.root, settings.station),
        ask: settings.asks.then(|| format!("{}/{}/ask", settings.root, settings.station)),
        passwords,
    };
    let listen = |why: String| BrokerFault::Listen { address, why };
    let broker = MqttBroker::with_config(config(address)).await.map_err(|e| listen(e.to_string()))?;
    let mut broker = broker.with_auth_provider(Arc::new(door));
    let address = broker.local_addr().ok_or_else(|| listen("no address was given".into()))?;
    let shutdown = broker.shutdown_handle();
    let mut ready = broker.ready_receiver();
    let task = tokio::spawn(async move {
        if let Err(error) = broker.run().await {
            tracing::error!(%error, "the built-in broker ended");
        }
    });
    if ready.wait_for(|ready| *ready).await.is_err() {
        return Err(listen("the broker ended while starting".into()));
    }
    Ok(BuiltIn { address, login, shutdown, task })
}

fn config(address: SocketAddr) -> BrokerConfig {
    let storage = StorageConfig::new()
        .with_backend(StorageBackend::Memory)
        .with_persistence(false)
        .with_max_queued_messages_per_client(QUEUE_MAX)
        .with_max_queued_bytes_per_client(16 * 1024 * 1024);
    let mut config = BrokerConfig::new()
        .with_bind_address(address)
        .with_max_clients(CLIENTS_MAX)
        .with_max_packet_size(PACKET_MAX)
        .with_session_expiry(Duration::from_secs(24 * 3600))
        .with_max_subscriptions_per_client(128)
        .with_max_retained_message_size(PACKET_MAX)
        .with_client_channel_capacity(QUEUE_MAX)
        .with_storage(storage)
        .with_server_receive_maximum(64)
        .with_sys_topics_enabled(false);
    config.websocket_config = None;
    config.websocket_tls_config = None;
    config.quic_config = None;
    config
}

/// Looks whether the address is free before the library tries, to name the holder.
fn free_address(address: SocketAddr) -> Result<SocketAddr, BrokerFault> {
    match std::net::TcpListener::bind(address) {
        Ok(_) => Ok(address),
        Err(e) if e.kind() == std::io::ErrorKind::AddrInUse => {
            let holder = holder_of(address).unwrap_or_else(|| "another program".to_owned());
            Err(BrokerFault::InUse { address, holder })
        }
        Err(e) => Err(BrokerFault::Listen { address, why: e.to_string() }),
    }
}

fn secret() -> Result<String, BrokerFault> {
    let mut bytes = [0_u8; 32];
    getrandom::fill(&mut bytes).map_err(|e| BrokerFault::Random(e.to_string()))?;
    let mut text = String::with_capacity(64);
    for byte in bytes {
        let _ = write!(text, "{byte:02x}");
    }
    Ok(text)
}

async fn load_passwords(path: &Path) -> Result<PasswordAuthProvider, BrokerFault> {
    let bad = |why: String| BrokerFault::Passwords { path: path.to_owned(), why };
    let text = tokio::fs::read_to_string(path).await.map_err(|e| bad(e.to_string()))?;
    let lines = text.lines().enumerate().map(|(n, l)| (n + 1, l.trim())).filter(|(_, l)| !l.is_empty() && !l.starts_with('#'));
    let provider = PasswordAuthProvider::new();
    let mut users = 0;
    for (number, line) in lines {
        match line.split_once(':') {
            Some((user, _)) if user == OWN_USER => return Err(bad(format!("line {number}: {OWN_USER} is the service itself"))),
            Some((user, hash)) if !user.is_empty() && hash.starts_with("$argon2") => {
                provider.add_user_with_hash(user.to_owned(), hash.to_owned());
                users += 1;
            }
            _ => return Err(bad(format!("line {number} is not user:hash"))),
        }
    }
    if users == 0 { Err(bad("no user in it".into())) } else { Ok(provider) }
}

/// Who comes in, and who may say what.
struct Door {
    secret: String,
    client_id: String,
    own: String,
    ask: Option<String>,
    passwords: Option<PasswordAuthProvider>,
}

type Answer<'a, T> = Pin<Box<dyn Future<Output = T> + Send + 'a>>;

impl Door {
    fn is_own(&self, connect: &ConnectPacket) -> bool {
        let given = connect.password.as_deref().unwrap_or_default();
        connect.username.as_deref() == Some(OWN_USER) && same(given, self.secret.as_bytes())
    }
}

/// Compares without telling by its duration how much agrees.
fn same(a: &[u8], b: &[u8]) -> bool {
    a.len() == b.len() && a.iter().zip(b).fold(0, |different, (x, y)| different | (x ^ y)) == 0
}

impl AuthProvider for Door {
    fn authenticate<'a>(
        &'a self,
        connect: &'a ConnectPacket,
        client: SocketAddr,
    ) -> Answer<'a, mqtt5::error::Result<AuthResult>> {
        Box::pin(async move {
            if self.is_own(connect) {
                return Ok(AuthResult::success_with_user(OWN_USER));
            }
            if connect.username.as_deref() == Some(OWN_USER) {
                return Ok(AuthResult::fail(ReasonCode::BadUsernameOrPassword));
            }
            if connect.client_id == self.client_id {
                return Ok(AuthResult::fail(ReasonCode::ClientIdentifierNotValid));
            }
            match &self.passwords {
                Some(passwords) => passwords.authenticate(connect, client).await,
                None => Ok(AuthResult::success()),
            }
        })
    }

    fn authorize_publish<'a>(&'a self, _client: &str, user: Option<&'a str>, topic: &'a str) -> Answer<'a, bool> {
        let own = user == Some(OWN_USER);
        Box::pin(async move { if own { topic.starts_with(&self.own) } else { self.ask.as_deref() == Some(topic) } })
    }

    fn authorize_subscribe<'a>(&'a self, _client: &str, _user: Option<&'a str>, _filter: &'a str) -> Answer<'a, bool> {
        Box::pin(async { true })
    }
}
