//! The MQTT client library behind a small trait, so that another one is a change of this file.
//!
//! One [`Transport::open`] is one connection: its state is fresh and is thrown away with the
//! connection. The library keeps requests over a reconnect and then drops them without a word, so
//! nothing may survive in it; what has to be sent again is the courier's business.

use std::future::Future;
use std::sync::Arc;
use std::time::Duration;

use bytes::Bytes;
use rumqttc::v5::mqttbytes::QoS;
use rumqttc::v5::mqttbytes::v5::{
    ConnectReturnCode, DisconnectReasonCode, Filter, LastWill, Packet, PubAckReason, Publish, PublishProperties,
    RetainForwardRule, SubscribeReasonCode,
};
use rumqttc::v5::{AsyncClient, ConnectionError, Event, EventLoop, MqttOptions, StateError};
use rumqttc::{NetworkOptions, Outgoing, TlsConfiguration};
use rustls::pki_types::CertificateDer;
use rustls::pki_types::pem::PemObject;

use super::settings::{CourierSettings, SettingsFault, TlsSettings, fault};
use super::{ASK_MAX, PACKET_MAX};

/// Requests handed to the library and not yet written. The courier keeps far fewer.
const REQUESTS: usize = 1_024;

/// A message on its way out.
#[derive(Debug, Clone)]
pub(super) struct Message {
    pub(super) topic: String,
    pub(super) payload: Bytes,
    /// Quality of service 1, else 0.
    pub(super) assured: bool,
    pub(super) retain: bool,
    pub(super) correlation: Option<Bytes>,
}

impl Message {
    /// Bytes of the packet: fixed header, topic, packet identifier, properties, payload.
    pub(super) fn packet_size(&self) -> usize {
        let correlation = self.correlation.as_ref().map_or(0, |c| 3 + c.len());
        5 + 2 + self.topic.len() + 2 + 4 + correlation + self.payload.len()
    }
}

/// What a connection reports.
#[derive(Debug)]
pub(super) enum Happening {
    /// The broker accepted.
    Up {
        /// Largest packet it takes.
        max_packet: usize,
        /// Unacknowledged messages it takes at a time.
        receive_max: usize,
    },
    /// The next message in the order of [`Outlet::publish`] was written; identifier 0 for quality of service 0.
    Written(u16),
    /// The broker's answer: `Err` has its reason.
    Answered(u16, Result<(), String>),
    /// A message arrived.
    Heard { payload: Bytes, retained: bool, response_topic: Option<String>, correlation: Option<Bytes> },
    /// The subscription was refused.
    NotSubscribed(String),
    /// The farewell was written.
    Parted,
    /// Nothing the courier needs to know.
    Other,
}

/// Why a connection ended.
#[derive(Debug)]
pub(super) struct Lost {
    pub(super) why: String,
    /// The broker said that a packet was too large.
    pub(super) too_large: bool,
}

/// The sending half. Neither method waits; an error means that the connection is of no more use.
pub(super) trait Outlet: Send {
    fn publish(&self, message: Message) -> Result<(), ()>;
    fn subscribe(&self, topic: &str) -> Result<(), ()>;
    fn part(&self) -> Result<(), ()>;
}

/// The driving half. The future of `next` must be polled to its end; dropping it ends the connection.
pub(super) trait Inlet: Send {
    fn next(&mut self) -> impl Future<Output = Result<Happening, Lost>> + Send;
    /// What had arrived before the connection was lost and was not reported yet.
    fn leftovers(&mut self) -> Vec<Happening>;
}

/// Opens connections.
pub(super) trait Transport: Send + 'static {
    type Outlet: Outlet;
    type Inlet: Inlet;
    fn open(&self) -> (Self::Outlet, Self::Inlet);
}

/// MQTT 5 by the `rumqttc` library.
pub(super) struct Rumqttc {
    options: MqttOptions,
}

impl Rumqttc {
    /// # Errors
    /// A certificate file that cannot be used.
    pub(super) fn new(settings: &CourierSettings) -> Result<Self, SettingsFault> {
        let mut options = MqttOptions::new(&settings.client_id, host_for(settings), settings.port);
        options.set_clean_start(true).set_keep_alive(settings.keep_alive.max(Duration::from_secs(5)));
        options.set_connection_timeout(5);
        options.set_last_will(LastWill::new(settings.topic("presence"), settings.will.to_vec(), QoS::AtLeastOnce, true, None));
        let incoming = u32::try_from(ASK_MAX + 4096).unwrap_or(u32::MAX);
        options.set_max_packet_size(Some(incoming));
        // Packet identifiers run in a circle of this length. It is longer than the window, so that an identifier is
        // free again before its turn comes, and much shorter than the default, which costs megabytes.
        options.set_outgoing_inflight_upper_limit(1_024);
        let mut network = NetworkOptions::new();
        network.set_tcp_nodelay(true);
        options.set_network_options(network);
        if let Some(login) = &settings.login {
            options.set_credentials(&login.user, &login.password);
        }
        if let Some(tls) = &settings.tls {
            options.set_transport(rumqttc::Transport::tls_with_config(tls_config(tls)?));
        }
        Ok(Self { options })
    }
}

/// The library joins host and port with a colon: an IPv6 address needs its brackets, which TLS in turn does not want.
fn host_for(settings: &CourierSettings) -> String {
    if settings.tls.is_none() && settings.host.contains(':') && !settings.host.starts_with('[') {
        format!("[{}]", settings.host)
    } else {
        settings.host.clone()
    }
}

fn tls_config(tls: &TlsSettings) -> Result<TlsConfiguration, SettingsFault> {
    let remedy = "Name a readable PEM file with the certificate of the authority that signed the broker's";
    let bad = |why: String| fault("ca_file", format!("{}: {why}", tls.ca_file.display()), remedy);
    let mut roots = rustls::RootCertStore::empty();
    for certificate in CertificateDer::pem_file_iter(&tls.ca_file).map_err(|e| bad(e.to_string()))? {
        let certificate = certificate.map_err(|e| bad(e.to_string()))?;
        roots.add(certificate).map_err(|e| bad(e.to_string()))?;
    }
    if roots.is_empty() {
        return Err(bad("holds no certificate".into()));
    }
    let provider = Arc::new(rustls::crypto::ring::default_provider());
    let config = rustls::ClientConfig::builder_with_provider(provider)
        .with_safe_default_protocol_versions()
        .map_err(|e| bad(e.to_string()))?
        .with_root_certificates(roots)
        .with_no_client_auth();
    Ok(TlsConfiguration::Rustls(Arc::new(config)))
}

impl Transport for Rumqttc {
    type Outlet = RumqttcOutlet;
    type Inlet = RumqttcInlet;

    fn open(&self) -> (Self::Outlet, Self::Inlet) {
        let (client, events) = AsyncClient::new(self.options.clone(), REQUESTS);
        (RumqttcOutlet { client }, RumqttcInlet { events })
    }
}

pub(super) struct RumqttcOutlet {
    client: AsyncClient,
}

impl Outlet for RumqttcOutlet {
    fn publish(&self, m: Message) -> Result<(), ()> {
        let qos = if m.assured { QoS::AtLeastOnce } else { QoS::AtMostOnce };
        let sent = match m.correlation {
            None => self.client.try_publish(m.topic, qos, m.retain, m.payload),
            Some(data) => {
                let properties = PublishProperties { correlation_data: Some(data), ..PublishProperties::default() };
                self.client.try_publish_with_properties(m.topic, qos, m.retain, m.payload, properties)
            }
        };
        sent.map_err(|_| ())
    }

    fn subscribe(&self, topic: &str) -> Result<(), ()> {
        let mut filter = Filter::new(topic, QoS::AtLeastOnce);
        filter.retain_forward_rule = RetainForwardRule::Never;
        // Without it a broker clears the mark by which a retained ask is known.
        filter.preserve_retain = true;
        self.client.try_subscribe_many([filter]).map_err(|_| ())
    }

    fn part(&self) -> Result<(), ()> {
        self.client.try_disconnect().map_err(|_| ())
    }
}

pub(super) struct RumqttcInlet {
    events: EventLoop,
}

impl Inlet for RumqttcInlet {
    async fn next(&mut self) -> Result<Happening, Lost> {
        match self.events.poll().await {
            Ok(event) => translate(event),
            Err(error) => Err(lost(&error)),
        }
    }

    fn leftovers(&mut self) -> Vec<Happening> {
        self.events.state.events.drain(..).filter_map(|e| translate(e).ok()).collect()
    }
}

fn translate(event: Event) -> Result<Happening, Lost> {
    Ok(match event {
        Event::Outgoing(Outgoing::Publish(id)) => Happening::Written(id),
        Event::Outgoing(Outgoing::Disconnect) => Happening::Parted,
        Event::Outgoing(Outgoing::AwaitAck(id)) => {
            // Only a broker that answers out of order gets here; the library may then wait for ever.
            return Err(Lost { why: format!("the broker left packet {id} unanswered"), too_large: false });
        }
        Event::Incoming(Packet::ConnAck(ack)) => {
            let p = ack.properties.as_ref();
            let max = p.and_then(|p| p.max_packet_size).map_or(usize::MAX, |n| n as usize);
            Happening::Up {
                max_packet: max.min(PACKET_MAX),
                receive_max: p.and_then(|p| p.receive_max).map_or(65_535, usize::from).max(1),
            }
        }
        Event::Incoming(Packet::PubAck(ack)) => Happening::Answered(ack.pkid, verdict(ack.reason)),
        Event::Incoming(Packet::Publish(publish)) => heard(publish),
        Event::Incoming(Packet::SubAck(ack)) => {
            match ack.return_codes.iter().find(|c| !matches!(c, SubscribeReasonCode::Success(_))) {
                Some(code) => Happening::NotSubscribed(format!("{code:?}: let the service's user read the ask topic")),
                None => Happening::Other,
            }
        }
        _ => Happening::Other,
    })
}

fn heard(publish: Publish) -> Happening {
    let (response_topic, correlation) = publish.properties.map_or((None, None), |p| (p.response_topic, p.correlation_data));
    Happening::Heard { payload: publish.payload, retained: publish.retain, response_topic, correlation }
}

fn verdict(reason: PubAckReason) -> Result<(), String> {
    match reason {
        PubAckReason::Success | PubAckReason::NoMatchingSubscribers => Ok(()),
        PubAckReason::NotAuthorized => Err("not authorized: let the service's user publish under its station".into()),
        PubAckReason::QuotaExceeded => Err("the broker's quota is used up: raise its limits".into()),
        other => Err(format!("{other:?}: see the broker's log")),
    }
}

fn lost(error: &ConnectionError) -> Lost {
    let mut too_large = false;
    let why = match error {
        ConnectionError::Timeout(_) => "no answer within 5 s: is the broker running and the address right?".to_owned(),
        ConnectionError::ConnectionRefused(ConnectReturnCode::NotAuthorized | ConnectReturnCode::BadUserNamePassword) => {
            "the broker refuses user or password: check both in the settings".to_owned()
        }
        ConnectionError::ConnectionRefused(code) => format!("the broker refuses the connection: {code:?}"),
        ConnectionError::MqttState(StateError::ServerDisconnect { reason_code, reason_string }) => {
            too_large = *reason_code == DisconnectReasonCode::PacketTooLarge;
            let hint = match reason_code {
                DisconnectReasonCode::SessionTakenOver => ": another client uses the same client id",
                _ => "",
            };
            format!("the broker closed the connection ({reason_code:?}{hint}) {}", reason_string.as_deref().unwrap_or(""))
        }
        ConnectionError::MqttState(StateError::ConnectionAborted) => "the broker closed the connection".to_owned(),
        ConnectionError::MqttState(StateError::AwaitPingResp) => "the broker gives no sign of life".to_owned(),
        ConnectionError::Io(e) if e.kind() == std::io::ErrorKind::ConnectionRefused => {
            "nobody listens there: is the broker running and the port right?".to_owned()
        }
        ConnectionError::Tls(e) => format!("encryption failed: {e}: check ca_file and that the certificate names this host"),
        other => other.to_string(),
    };
    Lost { why: why.trim_end().to_owned(), too_large }
}
