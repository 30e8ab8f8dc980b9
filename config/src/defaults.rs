//! Defaults that people and other programs rely on. They are part of the
//! contract: changing one is a change of version.

use std::net::{IpAddr, Ipv4Addr, SocketAddr};

/// Where the built-in MQTT broker listens: 127.0.0.1:18883.
pub const BROKER_LISTEN: SocketAddr = SocketAddr::new(IpAddr::V4(Ipv4Addr::LOCALHOST), 18_883);
/// Where the bench screen listens: 127.0.0.1:8470.
pub const SCREEN_LISTEN: SocketAddr = SocketAddr::new(IpAddr::V4(Ipv4Addr::LOCALHOST), 8_470);
/// Port of MQTT without TLS (registered with IANA as `mqtt`).
pub const MQTT_PORT: u16 = 1_883;
/// Port of MQTT over TLS (registered with IANA as `secure-mqtt`).
pub const MQTTS_PORT: u16 = 8_883;
/// Port of Modbus TCP (registered with IANA as `mbap`).
pub const MODBUS_PORT: u16 = 502;
/// Topic root.
pub const ROOT: &str = "tarecup/v1";
/// Days that a finished specimen stays among the retained topics.
pub const RETAIN_DAYS: u32 = 30;
/// Name of the laboratory when none is given.
pub const LAB: &str = "Soils laboratory";
/// Name of the station when none is given.
pub const STATION: &str = "station";
/// The bench there is when none is configured.
pub const BENCH: &str = "bench-1";
/// The method when none is named.
pub const METHOD: &str = "d4318-multipoint";
/// Speed of a serial line.
pub const BAUD: u32 = 9_600;
/// Drops per second of a motorised cup, where a scenario does not say.
pub const RATE_PER_S: f64 = 2.0;

/// Hours from one backup to the next.
pub const BACKUP_EVERY_HOURS: u32 = 24;

/// Backups that are kept.
pub const BACKUPS_KEPT: u32 = 14;
