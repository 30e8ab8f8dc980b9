//! Settings of the courier, and the refusal of ones that cannot work.

use std::fmt;
use std::path::PathBuf;
use std::time::Duration;

use bytes::Bytes;

/// How the courier reaches its broker and what it calls itself there.
#[derive(Clone)]
pub struct CourierSettings {
    /// Host name or address.
    pub host: String,
    /// Port.
    pub port: u16,
    /// Encryption; `None` is plain TCP, meant for loopback.
    pub tls: Option<TlsSettings>,
    /// User and password.
    pub login: Option<Login>,
    /// Client identifier: fixed and unique to this station, so that a second connection replaces the first.
    pub client_id: String,
    /// Topic root, for example `tarecup/v1`.
    pub root: String,
    /// Station, one topic level.
    pub station: String,
    /// Payload the broker keeps at `{root}/{station}/presence` when the connection breaks off.
    pub will: Bytes,
    /// Interval of the sign of life when nothing else is sent, 5 s to 1 h.
    pub keep_alive: Duration,
    /// Whether to listen on `{root}/{station}/ask`.
    pub asks: bool,
    /// Bounds.
    pub limits: Limits,
}

/// Server authentication.
#[derive(Debug, Clone, PartialEq, Eq)]
pub struct TlsSettings {
    /// PEM file with the certificates of the authorities that are trusted.
    pub ca_file: PathBuf,
}

/// User and password; the password never shows in debug output.
#[derive(Clone, PartialEq, Eq)]
pub struct Login {
    /// User name.
    pub user: String,
    /// Password.
    pub password: String,
}

impl fmt::Debug for Login {
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        f.debug_struct("Login").field("user", &self.user).finish_non_exhaustive()
    }
}

impl fmt::Debug for CourierSettings {
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        f.debug_struct("CourierSettings")
            .field("host", &self.host)
            .field("port", &self.port)
            .field("tls", &self.tls)
            .field("login", &self.login)
            .field("client_id", &self.client_id)
            .field("root", &self.root)
            .field("station", &self.station)
            .finish_non_exhaustive()
    }
}

/// Bounds of what the courier holds.
#[derive(Debug, Clone, PartialEq, Eq)]
pub struct Limits {
    /// Messages of quality of service 1 that wait for an acknowledgement, at most; 1 to 512.
    pub window: usize,
    /// Undelivered facts kept in memory; older ones are read again from the ledger.
    pub recent_facts: usize,
    /// Bytes of undelivered facts kept in memory.
    pub recent_bytes: usize,
    /// Facts read from the ledger at a time.
    pub page: usize,
    /// Retained topics known at once.
    pub retained_topics: usize,
    /// Live messages of the kind [`super::Live::Each`] that may wait.
    pub live_each: usize,
    /// Answers that may wait.
    pub answers: usize,
}

impl Default for Limits {
    fn default() -> Self {
        Self {
            window: 16,
            recent_facts: 2_000,
            recent_bytes: 8 * 1024 * 1024,
            page: 128,
            retained_topics: 20_000,
            live_each: 256,
            answers: 256,
        }
    }
}

/// A setting that cannot work.
#[derive(Debug, Clone, PartialEq, Eq, thiserror::Error)]
#[error("{setting}: {fault}. {remedy}")]
pub struct SettingsFault {
    /// The setting.
    pub setting: &'static str,
    /// What is wrong with it.
    pub fault: String,
    /// What to try.
    pub remedy: String,
}

pub(super) fn fault(setting: &'static str, fault: impl Into<String>, remedy: impl Into<String>) -> SettingsFault {
    SettingsFault { setting, fault: fault.into(), remedy: remedy.into() }
}

impl CourierSettings {
    /// Settings with defaults for a broker at this host and port without encryption or login.
    #[must_use]
    pub fn new(host: &str, port: u16, root: &str, station: &str) -> Self {
        Self {
            host: host.to_owned(),
            port,
            tls: None,
            login: None,
            client_id: format!("tarecup-{station}"),
            root: root.to_owned(),
            station: station.to_owned(),
            will: Bytes::from_static(br#"{"state":"lost"}"#),
            keep_alive: Duration::from_secs(15),
            asks: false,
            limits: Limits::default(),
        }
    }

    /// `{root}/{station}/{tail}`.
    #[must_use]
    pub fn topic(&self, tail: &str) -> String {
        format!("{}/{}/{tail}", self.root, self.station)
    }

    /// Refuses what cannot work, before a connection is tried.
    ///
    /// # Errors
    /// The setting, what is wrong with it, and what to try.
    pub fn check(&self) -> Result<(), SettingsFault> {
        if self.host.is_empty() || self.host.len() > 253 || self.host.chars().any(|c| c.is_whitespace() || c.is_control()) {
            return Err(fault(
                "host",
                format!("“{}” is not a host name", self.host),
                "Give a name or an address, such as broker.example",
            ));
        }
        if self.port == 0 {
            return Err(fault("port", "0 is not a port to connect to", "Usual are 1883, and 8883 with encryption"));
        }
        if self.client_id.is_empty() || self.client_id.len() > 128 || self.client_id.chars().any(char::is_control) {
            return Err(fault("client_id", "must have 1 to 128 printable characters", "Leave it out to use tarecup-STATION"));
        }
        check_prefix(&self.root, &self.station)?;
        if !(5..=3600).contains(&self.keep_alive.as_secs()) {
            return Err(fault("keep_alive", format!("{:?} is outside 5 s to 1 h", self.keep_alive), "Leave it out to use 15 s"));
        }
        if self.will.len() > 16 * 1024 {
            return Err(fault("will", format!("{} bytes are too many", self.will.len()), "Keep the last will under 16 KiB"));
        }
        self.limits.check()
    }
}

/// Root and station end up in topics: no wildcard, nothing empty, not the brokers' own `$` tree.
pub(super) fn check_prefix(root: &str, station: &str) -> Result<(), SettingsFault> {
    let bad = |level: &str| level.is_empty() || level.chars().any(|c| matches!(c, '+' | '#') || c.is_control());
    if root.len() > 128 || root.starts_with('$') || root.split('/').any(bad) {
        return Err(fault("root", format!("“{root}” is not a topic root"), "Use levels without + or #, such as tarecup/v1"));
    }
    if station.len() > 64 || station.contains('/') || bad(station) {
        return Err(fault(
            "station",
            format!("“{station}” is not one topic level"),
            "Use letters, digits, dot, dash or underline",
        ));
    }
    Ok(())
}

impl Limits {
    fn check(&self) -> Result<(), SettingsFault> {
        if !(1..=512).contains(&self.window) {
            return Err(fault("window", format!("{} is outside 1 to 512", self.window), "Leave it out to use 16"));
        }
        if [self.recent_facts, self.recent_bytes, self.page, self.retained_topics, self.live_each, self.answers].contains(&0) {
            return Err(fault("limits", "a bound of 0 lets nothing through", "Leave it out to use the default"));
        }
        Ok(())
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn settings_that_cannot_work_are_refused_by_name() {
        let good = CourierSettings::new("127.0.0.1", 1883, "tarecup/v1", "wet-room");
        assert_eq!(good.check(), Ok(()));
        let faulty = |change: fn(&mut CourierSettings)| {
            let mut s = good.clone();
            change(&mut s);
            s.check().expect_err("refused").setting
        };
        assert_eq!(faulty(|s| s.host = "a b".into()), "host");
        assert_eq!(faulty(|s| s.port = 0), "port");
        assert_eq!(faulty(|s| s.client_id.clear()), "client_id");
        assert_eq!(faulty(|s| s.root = "tarecup/#".into()), "root");
        assert_eq!(faulty(|s| s.root = "$SYS".into()), "root");
        assert_eq!(faulty(|s| s.station = "a/b".into()), "station");
        assert_eq!(faulty(|s| s.keep_alive = Duration::from_secs(1)), "keep_alive");
        assert_eq!(faulty(|s| s.will = Bytes::from(vec![0; 20_000])), "will");
        assert_eq!(faulty(|s| s.limits.window = 0), "window");
        assert_eq!(faulty(|s| s.limits.page = 0), "limits");
    }

    #[test]
    fn a_password_never_shows() {
        let mut s = CourierSettings::new("h", 1, "r", "s");
        s.login = Some(Login { user: "bench".into(), password: "kiln-dried".into() });
        assert!(format!("{s:?}").contains("bench"));
        assert!(!format!("{s:?}").contains("kiln-dried"));
    }
}
