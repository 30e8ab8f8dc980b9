//! Every key of the files, in one place: the readers refuse any other, the
//! editor schema is tested against these lists.

/// The configuration file.
pub(crate) const STATION: &[&str] = &[
    "state_dir",
    "default_method",
    "method_files",
    "lab",
    "mqtt",
    "broker",
    "record",
    "backup",
    "screen",
    "bench",
    "instrument",
    "linking",
    "balance_check",
    "log",
    "method",
    "profile",
];
pub(crate) const LAB: &[&str] = &["name", "station"];
pub(crate) const MQTT: &[&str] = &["url", "user", "password_file", "ca_file", "root", "retain_days"];
pub(crate) const BROKER: &[&str] = &["listen", "password_file"];
pub(crate) const RECORD: &[&str] = &["signing_key_file"];
pub(crate) const BACKUP: &[&str] = &["folder", "every_hours", "keep"];
pub(crate) const SCREEN: &[&str] = &["enabled", "listen", "hosts", "secret_file", "certificate_file", "key_file"];
pub(crate) const BENCH: &[&str] = &["name"];
pub(crate) const INSTRUMENT: &[&str] = &[
    "name",
    "kind",
    "bench",
    "port",
    "baud",
    "frame",
    "flow",
    "profile",
    "talks",
    "steady_readings",
    "steady_span_g",
    "load_from_g",
    "change_from_g",
    "steady_ms",
    "repeatability_g",
    "linearity_g",
    "debounce_ms",
    "pause_ms",
    "gap_percent",
    "pulse",
    "bounce_ms",
];
/// Keys of an instrument that only a balance has.
pub(crate) const SETTLE: &[&str] =
    &["talks", "steady_readings", "steady_span_g", "load_from_g", "change_from_g", "steady_ms", "repeatability_g", "linearity_g"];
/// Keys of an instrument that only a cup counter has.
pub(crate) const COUNT: &[&str] = &["debounce_ms", "pause_ms", "gap_percent", "pulse", "bounce_ms"];
pub(crate) const LINKING: &[&str] =
    &["near_g", "slice_minutes", "code_after_s", "repeat_print_s", "intention_hours", "slice_aloud_minutes"];
pub(crate) const BALANCE_CHECK: &[&str] = &["every_hours", "tolerance_g", "overdue"];
pub(crate) const LOG: &[&str] = &["level", "format"];

/// A scenario or sheet file.
pub(crate) const SCENARIO: &[&str] = &["title", "method", "specimen"];
pub(crate) const SPECIMEN: &[&str] = &[
    "id",
    "method",
    "description",
    "preparation",
    "bench",
    "natural",
    "not_obtainable",
    "because",
    "passing_75um_percent",
    "clay_percent",
    "liquid_limit_oven_dried",
    "liquid",
    "plastic",
    "cone",
];
pub(crate) const LIQUID: &[&str] =
    &["drops", "container", "tare_g", "wet_g", "dry_g", "rate_per_s", "water_percent", "set_aside"];
pub(crate) const CONE: &[&str] = &["penetration_mm", "container", "tare_g", "wet_g", "dry_g", "water_percent", "set_aside"];
pub(crate) const WEIGHED: &[&str] = &["container", "tare_g", "wet_g", "dry_g", "water_percent", "set_aside"];

/// Where a key of the configuration file belongs, for one found elsewhere.
pub(crate) fn home_of(key: &str) -> Option<&'static str> {
    if ["state_dir", "default_method", "method_files"].contains(&key) {
        return Some("the top of the configuration file, before its first [table]");
    }
    let homes: [(&[&str], &str); 8] = [
        (RECORD, "[record] of the configuration file"),
        (INSTRUMENT, "an [[instrument]] of the configuration file"),
        (LINKING, "[linking] of the configuration file"),
        (MQTT, "[mqtt] of the configuration file"),
        (LIQUID, "a [[specimen.liquid]] row of a scenario"),
        (CONE, "a [[specimen.cone]] row of a scenario"),
        (SPECIMEN, "a [[specimen]] of a scenario"),
        (LAB, "[lab] of the configuration file"),
    ];
    homes.into_iter().find(|(keys, _)| keys.contains(&key)).map(|(_, home)| home)
}
