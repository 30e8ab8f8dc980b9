//! The broker: settings of the courier, the built-in one, asks over MQTT.

use super::StartError;
use crate::asks;
use crate::desk::Desk;
use crate::desk::inbox::Inbox;
use crate::ledger::{FactStored, Reader};
use crate::publish::{self, Courier, CourierEvent, CourierSettings, Login, Outgoing, Past, TlsSettings};
use bytes::{BufMut, Bytes, BytesMut};
use std::path::{Path, PathBuf};
use std::sync::{Arc, Mutex, PoisonError};
use tarecup_config::station::{Scheme, Station};
use tokio::runtime::Runtime;

pub(super) fn courier_settings(station: &Station) -> Result<CourierSettings, StartError> {
    let root = station.mqtt.root.as_str();
    let name = station.lab.station.as_str();
    let mut settings = match &station.mqtt.url {
        Some(url) => CourierSettings::new(&url.host, url.port, root, name),
        None => CourierSettings::new(&station.broker.listen.ip().to_string(), station.broker.listen.port().max(1), root, name),
    };
    settings.asks = true;
    if let Some(url) = &station.mqtt.url {
        if url.scheme == Scheme::Mqtts {
            let ca_file = station.mqtt.ca_file.clone().ok_or_else(|| {
                StartError::Mqtt(
                    "ca_file is needed with mqtts: the file with the certificate of whoever signed the broker's".into(),
                )
            })?;
            settings.tls = Some(TlsSettings { ca_file });
        }
        settings.login = login(station)?;
    }
    Ok(settings)
}

pub(super) fn login(station: &Station) -> Result<Option<Login>, StartError> {
    let Some(user) = station.mqtt.user.clone() else { return Ok(None) };
    let password = match &station.mqtt.password_file {
        None => String::new(),
        Some(path) => {
            let text =
                std::fs::read_to_string(path).map_err(|e| StartError::Mqtt(format!("password_file {}: {e}", path.display())))?;
            text.lines().next().unwrap_or_default().trim().to_string()
        }
    };
    Ok(Some(Login { user, password }))
}

#[cfg(feature = "broker")]
pub(super) fn built_in(
    station: &Station,
    settings: &mut CourierSettings,
    any_port: bool,
    runtime: &Runtime,
) -> Result<Option<publish::broker::BuiltIn>, StartError> {
    use publish::broker::{BrokerFault, BrokerSettings, start};
    if station.mqtt.url.is_some() {
        return Ok(None);
    }
    let mut wanted = BrokerSettings::for_courier(station.broker.listen, settings);
    wanted.passwords = station.broker.password_file.clone();
    let started = match runtime.block_on(start(wanted.clone())) {
        Err(BrokerFault::InUse { address, holder }) if any_port => {
            tracing::warn!(%address, %holder, "the usual address of the built-in broker is taken; using a free one");
            wanted.address.set_port(0);
            runtime.block_on(start(wanted))
        }
        other => other,
    };
    let broker = started.map_err(|e| StartError::Broker(e.to_string()))?;
    broker.admit(settings);
    Ok(Some(broker))
}

pub(super) type SharedCourier = Arc<Mutex<Option<Courier>>>;

pub(super) fn start_courier(
    settings: CourierSettings,
    desk: &Desk,
    state_dir: &Path,
    inbox: &Arc<Inbox>,
    shared: &SharedCourier,
    runtime: &Runtime,
) -> Result<(), StartError> {
    let past = Arc::new(LedgerPast { path: state_dir.to_path_buf(), ledger: desk.ledger_name() });
    let (inbox, answers) = (Arc::clone(inbox), Arc::clone(shared));
    let on_event = Arc::new(move |event: CourierEvent| courier_event(event, &inbox, &answers));
    let courier = publish::spawn(runtime.handle(), settings, past, desk.delivered_through(), on_event);
    let courier = courier.map_err(|e| StartError::Mqtt(e.to_string()))?;
    *shared.lock().unwrap_or_else(PoisonError::into_inner) = Some(courier);
    Ok(())
}

pub(super) fn courier_event(event: CourierEvent, inbox: &Arc<Inbox>, answers: &SharedCourier) {
    match event {
        CourierEvent::Connected => {
            tracing::info!("the broker accepted the connection");
            inbox.broker(None);
        }
        CourierEvent::Disconnected { why } => {
            tracing::warn!(%why, "no broker; recording goes on");
            inbox.broker(Some(why));
        }
        CourierEvent::Delivered { through } => inbox.delivered(through),
        CourierEvent::Asked { client, payload, correlation } => asked_by_mqtt(client, &payload, correlation, inbox, answers),
        CourierEvent::AskIgnored { why } => tracing::warn!(%why, "an ask over MQTT is not passed on"),
        CourierEvent::TooLarge { what, .. } => tracing::warn!(?what, "too large for the broker, and not sent"),
        other => tracing::warn!(event = ?other, "the broker refuses something"),
    }
}

/// Asks over MQTT may read. What would write is refused: a name on a topic proves nothing.
pub(super) fn asked_by_mqtt(
    client: String,
    payload: &[u8],
    correlation: Option<Bytes>,
    inbox: &Arc<Inbox>,
    answers: &SharedCourier,
) {
    let answers = Arc::clone(answers);
    let to = client.clone();
    let reply = move |answer: String| {
        let answer = publish::Answer { client: to, payload: Bytes::from(answer), correlation };
        let outgoing = Outgoing { answers: vec![answer], ..Outgoing::default() };
        if let Some(courier) = answers.lock().unwrap_or_else(PoisonError::into_inner).as_ref() {
            courier.send(outgoing);
        }
    };
    let asked = std::str::from_utf8(payload)
        .map_err(|_| String::from("the ask is not UTF-8"))
        .and_then(|text| asks::parse(text).map(|a| (text, a)));
    match asked {
        Ok((text, asked)) if matches!(asked.wanted, asks::Wanted::Read(_)) => {
            inbox.ask(format!("mqtt-{client}"), text.into(), Box::new(reply));
        }
        Ok(_) => reply(asks::refusal("asks that change the record are not taken over MQTT; use the bench or the local socket")),
        Err(says) => reply(asks::refusal(&says)),
    }
}

/// Facts that the courier no longer has in memory.
pub(super) struct LedgerPast {
    path: PathBuf,
    ledger: (String, u64),
}

impl Past for LedgerPast {
    fn facts_after(&self, seq: u64, limit: usize) -> Result<Vec<(u64, Bytes)>, String> {
        let reader = Reader::open(&self.path).map_err(|e| e.to_string())?;
        let facts = reader.facts_after(seq, limit).map_err(|e| e.to_string())?;
        // A fact keeps the epoch in which it was made, also when a backup has been restored since.
        let epochs = reader.epochs().map_err(|e| e.to_string())?;
        let epoch = |seq| epochs.iter().rfind(|(_, first)| *first <= seq).map_or(self.ledger.1, |(epoch, _)| *epoch);
        let payload = |f: &FactStored| fact_payload(&(self.ledger.0.clone(), epoch(f.seq)), &f.body);
        Ok(facts.iter().map(|f| (f.seq, payload(f))).collect())
    }
}

/// A fact as it is published: its stored bytes, with the ledger's name put in front.
pub fn fact_payload(ledger: &(String, u64), stored: &[u8]) -> Bytes {
    let mut payload = BytesMut::with_capacity(stored.len() + 80);
    payload.put_slice(format!("{{\"ledger\":\"{}\",\"epoch\":{},", ledger.0, ledger.1).as_bytes());
    payload.put_slice(stored.get(1..).unwrap_or_default());
    payload.freeze()
}
