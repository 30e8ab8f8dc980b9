//! Addresses: of a broker, to listen on, of an instrument's port, and the topic root.

use crate::defaults;
use crate::fault::quote;
use crate::reader::Entry;
use std::fmt;
use std::net::{IpAddr, Ipv4Addr, SocketAddr};

/// Whether a broker is reached in the clear or over TLS.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub enum Scheme {
    /// `mqtt://`
    Mqtt,
    /// `mqtts://`: over TLS.
    Mqtts,
}

/// Where a broker is.
#[derive(Clone, Debug, PartialEq, Eq)]
pub struct BrokerUrl {
    /// In the clear or over TLS.
    pub scheme: Scheme,
    /// Name or address; an IPv6 address without its brackets.
    pub host: String,
    /// Port; 1883 or 8883 where none is written.
    pub port: u16,
}

impl fmt::Display for BrokerUrl {
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        let scheme = if self.scheme == Scheme::Mqtts { "mqtts" } else { "mqtt" };
        match self.host.contains(':') {
            true => write!(f, "{scheme}://[{}]:{}", self.host, self.port),
            false => write!(f, "{scheme}://{}:{}", self.host, self.port),
        }
    }
}

const URL: &str = "mqtt://host:1883 or mqtts://host:8883";

/// Reads `mqtt.url`. What it holds of a password never reaches a message.
pub(super) fn broker_url(entry: &Entry<'_>) -> Option<BrokerUrl> {
    let text = entry.text()?;
    let (scheme, rest) = match text.split_once("://") {
        Some(("mqtt", rest)) => (Scheme::Mqtt, rest),
        Some(("mqtts", rest)) => (Scheme::Mqtts, rest),
        _ => {
            entry.fault("does not begin with mqtt:// or mqtts://", URL, "mqtts:// before the host for TLS, mqtt:// without");
            return None;
        }
    };
    if rest.contains('@') {
        entry.fault("holds a user or password", URL, "user = \"…\" and password_file = \"…\" in [mqtt], and a url without them");
        return None;
    }
    let rest = rest.strip_suffix('/').unwrap_or(rest);
    let default = if scheme == Scheme::Mqtts { defaults::MQTTS_PORT } else { defaults::MQTT_PORT };
    let Some((host, port)) = host_port(rest, default) else {
        entry.fault(
            &format!("names {}, which is not a host with a port", quote(rest)),
            URL,
            "the host's name or address, ':' and a port of 1 to 65535",
        );
        return None;
    };
    Some(BrokerUrl { scheme, host, port })
}

/// `host`, `host:port` or `[v6]:port`.
fn host_port(text: &str, default: u16) -> Option<(String, u16)> {
    let (host, port) = if let Some(rest) = text.strip_prefix('[') {
        let (host, rest) = rest.split_once(']')?;
        host.parse::<std::net::Ipv6Addr>().ok()?;
        (host, rest.strip_prefix(':').or(if rest.is_empty() { Some("") } else { None })?)
    } else {
        text.split_once(':').unwrap_or((text, ""))
    };
    let port = match port {
        "" if !text.ends_with(':') => default,
        digits if digits.bytes().all(|b| b.is_ascii_digit()) => digits.parse().ok().filter(|p| *p > 0)?,
        _ => return None,
    };
    let allowed = |b: u8| b.is_ascii_alphanumeric() || matches!(b, b'.' | b'-' | b'_' | b':');
    (!host.is_empty() && host.len() <= 253 && host.bytes().all(allowed)).then(|| (host.to_string(), port))
}

/// Reads an address to listen on.
pub(super) fn listen(entry: &Entry<'_>) -> Option<SocketAddr> {
    let text = entry.text()?;
    let local = text
        .strip_prefix("localhost:")
        .and_then(|p| p.parse().ok())
        .map(|p: u16| SocketAddr::new(IpAddr::V4(Ipv4Addr::LOCALHOST), p));
    match text.parse().ok().or(local) {
        Some(address) if SocketAddr::port(&address) > 0 => Some(address),
        _ => {
            let says = format!("is {}, which is not an address and port", quote(text));
            entry.fault(&says, "an IP address, ':' and a port of 1 to 65535", "\"127.0.0.1:18883\", or \"[::1]:18883\"");
            None
        }
    }
}

/// Reads a name or address, without a port, under which a browser reaches the screen.
pub(super) fn host(entry: &Entry<'_>) -> Option<String> {
    let text = entry.text()?;
    let name = |b: u8| b.is_ascii_alphanumeric() || matches!(b, b'.' | b'-' | b'_');
    let named = !text.is_empty() && text.len() <= 253 && text.bytes().all(name);
    if named || text.parse::<IpAddr>().is_ok() {
        return Some(text.to_ascii_lowercase());
    }
    entry.fault(
        &format!("is {}, which is not the name or address of a machine", quote(text)),
        "a name or address without scheme and port",
        "\"bench-pc.example\" or \"192.0.2.7\"",
    );
    None
}

/// Reads the topic root.
pub(super) fn topic_root(entry: &Entry<'_>) -> Option<String> {
    let text = entry.text()?;
    let try_this = "\"tarecup/v1\", or levels of letters, digits, '.', '_' and '-'";
    let wrong = if text.contains(['+', '#']) {
        "holds a wildcard, and one cannot publish to a wildcard"
    } else if text.starts_with('$') {
        "begins with '$', which brokers keep for themselves"
    } else if text.split('/').any(str::is_empty) {
        "has an empty level"
    } else if text.len() > 128 {
        "is longer than 128 characters"
    } else if !text.bytes().all(|b| b.is_ascii_alphanumeric() || b"._-/".contains(&b)) {
        "holds a character that is no letter, digit, '.', '_' or '-'"
    } else {
        return Some(text.to_string());
    };
    entry.fault(wrong, "topic levels separated by '/'", try_this);
    None
}

/// What an instrument's port looks like.
pub(super) const PORT: &str = "the absolute path of a serial port, such as \"/dev/serial/by-id/…\", or tcp://HOST:PORT";

/// The address of a Modbus gateway or instrument on the network.
fn gateway(entry: &Entry<'_>, text: &str, host: &str) -> Option<String> {
    let Some((host, port)) = host_port(host, defaults::MODBUS_PORT) else {
        let says = format!("is {}, which is not a host with a port", quote(text));
        entry.fault(&says, "tcp://HOST:PORT", "the host's name or address, ':' and a port of 1 to 65535");
        return None;
    };
    Some(if host.contains(':') { format!("tcp://[{host}]:{port}") } else { format!("tcp://{host}:{port}") })
}

/// Reads an instrument's port: an absolute path, or for Modbus also an address.
pub(super) fn port(entry: &Entry<'_>, modbus: bool) -> Option<String> {
    let text = entry.text()?;
    if modbus && let Some(host) = text.strip_prefix("tcp://") {
        return gateway(entry, text, host);
    }
    if text.get(..6).is_some_and(|scheme| scheme.eq_ignore_ascii_case("tcp://")) {
        let rest = text[6..].strip_suffix('/').unwrap_or(&text[6..]);
        let Some((host, port)) = host_port(rest, 0).filter(|(_, port)| *port > 0) else {
            let says = format!("is {}, which names no host with a port", quote(text));
            entry.fault(
                &says,
                "tcp://HOST:PORT, the address and data port of a serial device server",
                "\"tcp://10.0.0.7:4001\" or, with IPv6, \"tcp://[fd00::7]:4001\"",
            );
            return None;
        };
        let host = host.to_ascii_lowercase();
        return Some(if host.contains(':') { format!("tcp://[{host}]:{port}") } else { format!("tcp://{host}:{port}") });
    }
    if !text.starts_with('/') || text.len() > 4_000 || text.chars().any(char::is_control) {
        let says = format!("is {}, which is not an absolute path", quote(text));
        entry.fault(&says, PORT, "`tarecup ports`, which lists the ports there are");
        return None;
    }
    Some(text.to_string())
}
