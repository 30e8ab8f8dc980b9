//! The configuration file: what a right one means, and where a wrong one is wrong.

mod config_help;

use config_help::expect_fault;
use std::path::PathBuf;
use tarecup_config::station::{self, InstrumentKind, LogFormat, LogLevel, Scheme, Station};
use tarecup_core::quantity::Mass;
use tarecup_core::sense::{CountLimits, SettleLimits, Talks};
use tarecup_drivers::port::Flow;
use tarecup_drivers::pulse::ModemLine;

fn read(text: &str) -> Station {
    station::parse("it.toml", text).unwrap_or_else(|f| panic!("{f}"))
}

const WHOLE: &str = r#"
state_dir = "/var/lib/tarecup"
default_method = "t89-t90"

[lab]
name = "Mosswick materials laboratory"
station = "wet-room"

[mqtt]
url = "mqtts://broker.example"
user = "tarecup"
password_file = "/etc/tarecup/mqtt-password"
ca_file = "ca.pem"
root = "lab/soils"
retain_days = 7

[[bench]]
name = "north"
[[bench]]
name = "south"

[[instrument]]
name = "pan-1"
kind = "balance"
bench = ["north", "south"]
port = "/dev/serial/by-id/usb-1"
baud = 2400
frame = "7E1"
flow = "hardware"
profile = "signed-steady"
talks = "continuous"
steady_readings = 5
steady_span_g = 0.02
load_from_g = 1
change_from_g = 0.0300
steady_ms = 900
repeatability_g = 0.008
linearity_g = 0

[[instrument]]
name = "cup-1"
kind = "counter"
bench = "north"
port = "/dev/serial/by-id/usb-3"
profile = "drop-line"
debounce_ms = 200
pause_ms = 4000
gap_percent = 170

[[instrument]]
name = "wand"
kind = "scanner"
bench = "north"
port = "/dev/serial/by-id/usb-2"
profile = "plain-code"

[linking]
near_g = 0.021
slice_minutes = 20
code_after_s = 30
repeat_print_s = 5
intention_hours = 4
slice_aloud_minutes = 6

[log]
level = "debug"
format = "json"
"#;

#[test]
fn every_key_arrives() {
    let s = read(WHOLE);
    assert_eq!(s.state_dir, Some(PathBuf::from("/var/lib/tarecup")));
    assert_eq!(s.default_method.as_str(), "t89-t90");
    assert_eq!((s.lab.name.as_str(), s.lab.station.as_str()), ("Mosswick materials laboratory", "wet-room"));
    let url = s.mqtt.url.as_ref().expect("a url");
    assert_eq!((url.scheme, url.host.as_str(), url.port), (Scheme::Mqtts, "broker.example", 8883));
    assert_eq!(url.to_string(), "mqtts://broker.example:8883");
    assert_eq!(s.mqtt.user.as_deref(), Some("tarecup"));
    assert_eq!(s.mqtt.password_file, Some(PathBuf::from("/etc/tarecup/mqtt-password")));
    assert_eq!(s.mqtt.ca_file, Some(PathBuf::from("ca.pem")));
    assert_eq!((s.mqtt.root.as_str(), s.mqtt.retain_days), ("lab/soils", 7));
    assert_eq!(s.benches.iter().map(|b| b.name.as_str()).collect::<Vec<_>>(), ["north", "south"]);
    let l = s.linking;
    assert_eq!((l.near, l.slice_minutes, l.code_after_s, l.repeat_print_s), (Mass::from_ug(21_000), 20, 30, 5));
    assert_eq!((l.intention_hours, l.slice_aloud_minutes), (4, 6));
    assert_eq!((s.log.level, s.log.format), (LogLevel::Debug, LogFormat::Json));
}

#[test]
fn every_key_of_an_instrument_arrives() {
    let s = read(WHOLE);
    let [pan, cup, wand] = &s.instruments[..] else { panic!("three instruments") };
    assert_eq!((pan.name.as_str(), pan.kind), ("pan-1", InstrumentKind::Balance));
    assert_eq!(pan.benches.iter().map(|b| b.as_str()).collect::<Vec<_>>(), ["north", "south"]);
    assert_eq!((pan.port.path.as_str(), pan.port.baud, pan.port.flow), ("/dev/serial/by-id/usb-1", 2400, Flow::Hardware));
    assert_eq!(String::from(pan.port.frame), "7E1");
    assert_eq!(pan.profile.as_str(), "signed-steady");
    let settle = SettleLimits {
        talks: Talks::Continuous,
        steady_readings: 5,
        steady_span: Some(Mass::from_ug(20_000)),
        load_from: Mass::from_ug(1_000_000),
        change_from: Mass::from_ug(30_000),
        steady_ms: 900,
    };
    assert_eq!(pan.settle, settle);
    assert_eq!((pan.weighs.repeatability_g, pan.weighs.linearity_g), (Some(0.008), Some(0.0)));
    assert_eq!(wand.weighs, tarecup_core::soil::uncertainty::Balance::default());
    assert_eq!((cup.port.path.as_str(), cup.port.baud), ("/dev/serial/by-id/usb-3", 9600));
    assert_eq!(cup.count, CountLimits { debounce_ms: 200, pause_ms: 4000, gap_percent: 170, polled: false });
    assert_eq!((wand.kind, wand.profile.as_str()), (InstrumentKind::Scanner, "plain-code"));
    assert_eq!(wand.settle, SettleLimits::default());
}

#[test]
fn an_empty_file_gives_the_documented_defaults() {
    let s = read("");
    assert_eq!(s, read("\u{feff}# only a comment\r\n"));
    assert_eq!(s.broker.listen.to_string(), "127.0.0.1:18883");
    assert_eq!((s.mqtt.root.as_str(), s.mqtt.retain_days, s.mqtt.url), ("tarecup/v1", 30, None));
    assert_eq!((s.default_method.as_str(), s.benches.len(), s.instruments.len()), ("d4318-multipoint", 1, 0));
    assert_eq!(s.linking, station::Linking::default());
    assert_eq!(s.state_dir, None);
    assert!(s.methods.contains_key(&s.default_method), "the default method is shipped");
}

#[test]
fn with_one_bench_an_instrument_need_not_name_it() {
    let s = read("[[instrument]]\nname='p'\nkind='balance'\nport='/dev/ttyS0'\nprofile='signed-steady'\n");
    assert_eq!(s.instruments[0].benches, [s.benches[0].name.clone()]);
}

/// A balance with one line more, or one line in place of another.
fn balance(key: &str, line: &str) -> String {
    let mut lines = vec![
        ("name", "name = \"p\"".to_string()),
        ("kind", "kind = \"balance\"".into()),
        ("port", "port = \"/dev/ttyS0\"".into()),
        ("profile", "profile = \"signed-steady\"".into()),
    ];
    match lines.iter_mut().find(|(k, _)| *k == key) {
        Some((_, place)) => *place = line.into(),
        None => lines.push((key, line.into())),
    }
    let lines: Vec<String> = lines.into_iter().map(|(_, l)| l).collect();
    format!("[[instrument]]\n{}\n", lines.join("\n"))
}

#[test]
fn the_balance_of_the_next_tests_is_right() {
    assert_eq!(read(&balance("", "")).instruments.len(), 1);
}

#[test]
fn wrong_instruments_are_pointed_at() {
    let cases: [(&str, &str, &[&str]); 24] = [
        ("name", "name = @@\"pan 1\"", &["instrument 1: name", "' ' cannot stand in a name", "letters"]),
        ("name", "name = @@7", &["whole number", "putting it in quotes"]),
        ("name", "name = @@\"\"", &["is empty"]),
        ("kind", "kind = @@\"ballance\"", &["balance, counter, scanner", "did you mean"]),
        ("bench", "bench = @@\"nort\"", &["no such bench", "[[bench]] with name = \"nort\""]),
        ("bench", "bench = [\"bench-1\", @@\"bench-1\"]", &["twice"]),
        ("bench", "bench = @@[]", &["empty list"]),
        ("port", "port = @@\"ttyUSB0\"", &["not an absolute path", "tarecup ports"]),
        ("port", "port = @@\"tcp://10.0.0.9\"", &["no host with a port", "tcp://HOST:PORT", "tcp://10.0.0.7:4001"]),
        ("port", "port = @@\"TCP://\"", &["no host with a port"]),
        ("baud", "baud = @@0", &["is 0", "50 to 4000000"]),
        ("baud", "baud = @@\"9600\"", &["a text in quotes", "without point or quotes"]),
        ("baud", "baud = @@-9600", &["is -9600"]),
        ("baud", "baud = @@99999999999999999999999999999999", &["99999999999999999999999…"]),
        ("frame", "frame = @@\"9N1\"", &["\"9N1\"", "8N1"]),
        ("flow", "flow = @@\"hard\"", &["none, hardware, software"]),
        ("profile", "profile = @@\"signed-stedy\"", &["no such profile", "\"signed-steady\": did you mean"]),
        ("profile", "profile = @@\"drop-line\"", &["profile of a counter", "instrument is a balance"]),
        ("bond", "@@buad = 9600", &["is not a known key", "\"baud\": did you mean"]),
        ("pause_ms", "@@pause_ms = 4000", &["for a counter only", "taking this line out"]),
        ("load_from_g", "load_from_g = @@0.50000001", &["more decimals than a whole microgram"]),
        ("load_from_g", "load_from_g = @@inf", &["not a finite number"]),
        ("change_from_g", "change_from_g = @@-0.1", &["is -0.1", "above 0"]),
        ("steady_span_g", "steady_span_g = @@2.0", &["is 2.00 g", "load_from_g"]),
    ];
    for (key, line, words) in cases {
        expect_fault(&balance(key, line), words, |t| station::parse("it.toml", t));
    }
    for (key, words) in [("port", &["tarecup ports"][..]), ("profile", &["signed-steady", "[profile.NAME]", "`tarecup check`"])] {
        let lacking = format!("@@{}", balance(key, ""));
        expect_fault(&lacking, &[&[key, "is missing"], words].concat(), |t| station::parse("it.toml", t));
    }
}

/// A counter on a switch, with one line more.
fn switch(more: &str) -> String {
    format!("[[instrument]]\nname = \"cup-1\"\nkind = \"counter\"\nport = \"/dev/ttyS0\"\npulse = \"dcd\"\n{more}\n")
}

#[test]
fn a_switch_on_a_line_is_a_counter_without_a_profile() {
    let one = |more: &str| read(&switch(more)).instruments.remove(0);
    let cup = one("");
    let pulse = cup.pulse.expect("a switch");
    assert_eq!((pulse.line, pulse.bounce_ms, cup.profile.as_str()), (ModemLine::Dcd, 20, "contact-closure"));
    assert_eq!(one("bounce_ms = 35").pulse.expect("a switch").bounce_ms, 35);
    for (line, words) in [
        ("@@profile = \"drop-line\"", &["no profile beside pulse", "taking this line out"][..]),
        ("flow = @@\"hardware\"", &["the very line that the switch closes"]),
        ("bounce_ms = @@0", &["is 0", "1 to 100"]),
        ("debounce_ms = 30\nbounce_ms = @@40", &["no less than debounce_ms (30 ms)"]),
    ] {
        expect_fault(&switch(line), words, |t| station::parse("it.toml", t));
    }
    let wrong = switch("").replace("pulse = \"dcd\"", "pulse = @@\"dtr\"");
    expect_fault(&wrong, &["cts, dsr, dcd, ri"], |t| station::parse("it.toml", t));
    let lonely = switch("profile = \"drop-line\"\n@@bounce_ms = 20").replace("pulse = \"dcd\"\n", "");
    expect_fault(&lonely, &["there is no pulse"], |t| station::parse("it.toml", t));
    expect_fault(&balance("pulse", "@@pulse = \"cts\""), &["for a counter only"], |t| station::parse("it.toml", t));
}

/// A counter that is read over Modbus, at this port and with this scale of nothing.
fn registers(port: &str, read: &str) -> String {
    format!(
        "[[instrument]]\nname = \"cup-1\"\nkind = \"counter\"\nport = {port}\nprofile = \"bus\"\n\
         [profile.bus]\nkind = \"counter\"\n[profile.bus.modbus]\nunit = 1\nevery_ms = 200\n[[profile.bus.modbus.read]]\nwhat = \"total\"\n{read}\n"
    )
}

#[test]
fn registers_are_read_from_a_line_or_from_the_network() {
    let port = |port: &str| {
        let cup = read(&registers(port, "address = 0")).instruments.remove(0);
        assert!(cup.count.polled, "the same total again is no double");
        cup.port.path
    };
    assert_eq!(port("\"/dev/ttyS0\""), "/dev/ttyS0");
    assert_eq!(port("\"tcp://10.0.0.9\""), "tcp://10.0.0.9:502");
    assert_eq!(port("\"tcp://gateway-2:4001\""), "tcp://gateway-2:4001");
    assert_eq!(port("\"tcp://[fe80::1]:4001\""), "tcp://[fe80::1]:4001");
    for (at, read, words) in [
        ("@@\"tcp://\"", "address = 0", &["not a host", "1 to 65535"][..]),
        ("@@\"tcp://h:0\"", "address = 0", &["not a host"]),
        ("\"/dev/ttyS0\"", "@@register = 12", &["12 is no register", "40001"]),
        ("\"/dev/ttyS0\"", "address = 0\n@@scales = \"1\"", &["\"scales\"", "did you mean"]),
    ] {
        expect_fault(&registers(at, read), words, |t| station::parse("it.toml", t));
    }
}

#[test]
fn wrong_tables_are_pointed_at() {
    let cases: [(&str, &[&str]); 44] = [
        ("[lab]\nstation = @@\"wet room\"", &["lab: station", "' ' cannot stand"]),
        ("[lab]\n@@stations = \"x\"", &["\"station\": did you mean"]),
        ("[lab]\nname = @@\"a\\u0000b\"", &["control character"]),
        ("[lab]\n@@state_dir = \"x\"", &["does not belong here", "top of the configuration file"]),
        ("@@baud = 1", &["does not belong here", "[[instrument]]"]),
        ("@@lab = 3".replace("@@lab = ", "lab = @@").leak(), &["is a whole number", "[lab]"]),
        ("[mqtt]\nurl = \"mqtt://h\"\nuser = \"u\"\n@@password = \"hunter2\"", &["is a secret", "password_file"]),
        ("[mqtt]\nurl = @@\"mqtt://u:hunter2@h\"", &["holds a user or password", "password_file"]),
        ("[mqtt]\nurl = @@\"http://h\"", &["does not begin with mqtt://"]),
        ("[mqtt]\nurl = @@\"mqtt://h:0\"", &["1 to 65535"]),
        ("[mqtt]\nurl = @@\"mqtt://\"", &["is not a host"]),
        ("[mqtt]\nurl = @@\"mqtt://[::1\"", &["is not a host"]),
        ("[mqtt]\n@@user = \"u\"", &["there is no url", "mqtts://host:8883"]),
        ("[mqtt]\nurl = \"mqtt://h\"\n@@password_file = \"p\"", &["has no user", "user ="]),
        ("[mqtt]\nurl = @@\"mqtts://h\"", &["mqtt: url asks for TLS", "no ca_file", "ca_file = \"ca.crt\" in [mqtt]"]),
        ("[mqtt]\nurl = \"mqtts://h\"\nca_file = @@5", &["putting it in quotes"]),
        ("[mqtt]\nurl = \"mqtt://h\"\n@@ca_file = \"p\"", &["needs TLS", "mqtts://"]),
        ("[mqtt]\n@@url = \"mqtt://h\"\n[broker]\nlisten = \"127.0.0.1:1\"", &["built-in", "one of the two"]),
        ("[mqtt]\nroot = @@\"a/+/b\"", &["wildcard", "tarecup/v1"]),
        ("[mqtt]\nroot = @@\"a/#\"", &["wildcard"]),
        ("[mqtt]\nroot = @@\"/a\"", &["empty level"]),
        ("[mqtt]\nroot = @@\"$SYS/a\"", &["begins with '$'"]),
        ("[mqtt]\nroot = @@\"a b\"", &["no letter, digit"]),
        ("[mqtt]\nretain_days = @@0", &["1 to 3650"]),
        ("[broker]\nlisten = @@\"0.0.0.0:18883\"", &["other machines can reach", "password_file"]),
        ("[broker]\nlisten = @@\"127.0.0.1\"", &["not an address and port", "127.0.0.1:18883"]),
        ("[broker]\nlisten = @@\"127.0.0.1:0\"", &["1 to 65535"]),
        ("[screen]\nlisten = @@\"0.0.0.0:8470\"", &["other machines can reach", "tarecup secret new"]),
        ("[screen]\nlisten = @@\"8470\"", &["not an address and port"]),
        ("[screen]\nenabled = @@\"yes\"", &["true or false"]),
        ("[screen]\n@@certificate_file = \"a\"", &["key_file"]),
        ("[screen]\n@@key_file = \"a\"", &["certificate_file"]),
        ("[screen]\nhosts = [\"pc\", @@\"http://pc:1\"]", &["not the name or address", "bench-pc.example"]),
        ("[screen]\n@@port = 1", &["port"]),
        ("[[bench]]\nname = \"n\"\n[[bench]]\nname = @@\"n\"", &["as a bench above"]),
        ("@@[[bench]]\n", &["bench 1: name", "is missing", "name = \"north\""]),
        ("default_method = @@\"d4318-multi-point\"", &["no such method", "\"d4318-multipoint\": did you mean"]),
        ("state_dir = @@5", &["putting it in quotes"]),
        ("[linking]\nnear_g = @@\"0.05\"", &["without quotes"]),
        ("[linking]\nslice_minutes = 4\nslice_aloud_minutes = @@5", &["no longer owed after 4"]),
        ("[linking]\n@@asks_by_mqtt = false", &["is not a known key"]),
        ("[@@keep]\nunused_lines_days = 400", &["is not a known key", "one of state_dir"]),
        ("method_files = @@\"a\\u001b.toml\"", &["not a path"]),
        ("[log]\nlevel = @@\"infos\"", &["\"info\": did you mean"]),
    ];
    for (marked, words) in cases {
        expect_fault(marked, words, |t| station::parse("it.toml", t));
    }
}

#[test]
fn a_listener_beyond_loopback_is_right_with_passwords() {
    let s = read("[broker]\nlisten = \"0.0.0.0:18883\"\npassword_file = \"users\"\n");
    assert!(!s.broker.listen.ip().is_loopback());
    let s = read("[screen]\nlisten = \"0.0.0.0:80\"\nsecret_file = \"s\"\nhosts = \"PC.example\"\n").screen;
    assert!(s.enabled && s.listen.port() == 80 && s.secret_file == Some("s".into()) && s.hosts == ["pc.example"], "{s:?}");
    assert_eq!(read("").screen.listen.to_string(), "127.0.0.1:8470");
    assert!(!read("[screen]\nenabled = false\n").screen.enabled);
    assert_eq!(read("[broker]\nlisten = \"localhost:9\"").broker.listen.to_string(), "127.0.0.1:9");
    assert_eq!(read("[broker]\nlisten = \"[::1]:9\"").broker.listen.to_string(), "[::1]:9");
    let v6 = read("[mqtt]\nurl = \"mqtt://[fe80::1]:1884/\"").mqtt.url.expect("a url");
    assert_eq!((v6.host.as_str(), v6.port, v6.to_string().as_str()), ("fe80::1", 1884, "mqtt://[fe80::1]:1884"));
}

#[test]
fn instruments_that_collide_are_pointed_at() {
    let one = "[[instrument]]\nname='a'\nkind='balance'\nport='/dev/ttyS0'\nprofile='signed-steady'\n";
    let cases = [
        ("[[instrument]]\nname='b'\nkind='balance'\nport=@@'/dev/ttyS0'\nprofile='signed-steady'\n", "line 4 too"),
        (
            "[[instrument]]\nname=@@'a'\nkind='balance'\nport='/dev/ttyS1'\nprofile='signed-steady'\n",
            "as the instrument of line 2",
        ),
        (
            "[[bench]]\nname='x'\n[[bench]]\nname='y'\n[[instrument]]\nname='c'\nkind='counter'\nbench=@@['x','y']\nport='/dev/ttyS1'\nprofile='drop-line'\n",
            "several benches",
        ),
    ];
    for (second, words) in cases {
        let first = if second.starts_with("[[bench]]") { one.replace("kind=", "bench='x'\nkind=") } else { one.into() };
        expect_fault(&format!("{first}{second}"), &[words], |t| station::parse("it.toml", t));
    }
    let two = "[[bench]]\nname='x'\n[[bench]]\nname='y'\n@@[[instrument]]\nname='a'\nkind='balance'\nport='/dev/ttyS0'\nprofile='signed-steady'\n";
    expect_fault(two, &["instrument 1: bench", "is missing", "x, y"], |t| station::parse("it.toml", t));
}

#[test]
fn one_pass_tells_all_faults_in_order() {
    let text = "colour = 1\n[lab]\nstation = \"a b\"\n[[instrument]]\nkind = \"x\"\nbaud = 0\n[log]\nlevel = 3\n";
    let faults = station::parse("it.toml", text).expect_err("faults");
    let places: Vec<(u32, u32)> = faults.list.iter().map(|f| (f.line, f.column)).collect();
    let missing = [(4, 1); 3]; // name, port and profile
    assert_eq!(places, [&[(1, 1), (3, 11)][..], &missing, &[(5, 8), (6, 8), (8, 9)]].concat(), "{faults}");
    assert_eq!(faults.to_string().lines().count(), 8);
}

#[test]
fn a_secret_is_never_repeated() {
    for text in ["[mqtt]\npassword = \"hunter2\"", "[mqtt]\nurl = \"mqtt://u:hunter2@h\"", "secret = \"hunter2\""] {
        let said = station::parse("it.toml", text).expect_err(text).to_string();
        assert!(!said.contains("hunter2"), "{said}");
    }
}

#[test]
fn broken_syntax_is_pointed_at_and_hides_no_other_fault() {
    let text = "[lab]\nname = \"x\nstation = \"a b\"\n[log]\nlevel = \"loud\"\n";
    let faults = station::parse("it.toml", text).expect_err("faults");
    assert!(faults.list.iter().any(|f| f.line == 2 && f.says.contains("cannot be understood")), "{faults}");
    assert!(faults.list.iter().any(|f| (f.line, f.column) == (5, 9)), "{faults}");
    expect_fault("[lab]\nname = \"a\"\n@@name = \"b\"\n", &["duplicate key", "removing or renaming"], |t| {
        station::parse("it.toml", t)
    });
}

#[test]
fn a_broken_table_is_told_once_and_not_at_its_users() {
    let text = "default_method = \"m\"\n[@@method.m]\ntitle = \"t\"\n".replace("[@@", "@@[");
    expect_fault(&text, &["method, m lacks"], |t| station::parse("it.toml", t));
    let text = format!("{}[profile.own]\nkind = @@\"ballance\"\n", balance("profile", "profile = \"own\""));
    expect_fault(&text, &["\"balance\": did you mean"], |t| station::parse("it.toml", t));
}

#[test]
fn what_an_instrument_leaves_out_is_as_its_profile_says() {
    let s = read(&format!(
        "{}[[instrument]]\nname='q'\nkind='balance'\nport='/dev/ttyS1'\nprofile='own'\nbaud=300\ntalks='continuous'\n\
         [profile.own]\nkind='balance'\ntalks='print-on-key'\nserial={{baud=1200,frame='7E1',flow='software'}}\n\
         frame={{ends=[\"\\r\\n\"]}}\nline=[{{pattern='(?<mass>\\d+\\.\\d+) (?<unit>g)'}}]\n",
        balance("profile", "profile = \"own\"")
    ));
    let [p, q] = &s.instruments[..] else { panic!("two instruments") };
    assert_eq!((p.port.baud, String::from(p.port.frame).as_str(), p.port.flow), (1200, "7E1", Flow::Software));
    assert_eq!((p.settle.talks, q.settle.talks, q.port.baud), (Talks::PrintOnKey, Talks::Continuous, 300));
}

#[test]
fn far_too_many_instruments_are_refused_at_the_first_beyond() {
    let many = "[[instrument]]\n".repeat(201);
    let faults = station::parse("it.toml", &many).expect_err("too many");
    assert_eq!((faults.list.len(), faults.list[0].line), (1, 201), "{faults}");
    assert!(faults.list[0].says.contains("1 of them from here on"), "{faults}");
}

/// The rest of a counter's profile.
const TICKS: &str = "frame = { ends = [\"\\r\\n\"] }\nline = [{ pattern = 'tick', means = 'drop' }]\n";

#[test]
fn own_profiles_are_taken_and_checked() {
    let s = read(&format!("[profile.mine]\nkind = \"counter\"\n{TICKS}"));
    let mine = s.profiles.values().find(|p| p.name.as_str() == "mine").expect("mine");
    assert_eq!((mine.kind, mine.shipped, mine.at.line), (InstrumentKind::Counter, false, 1));
    expect_fault(&format!("[profile.@@\"my own\"]\nkind = \"counter\"\n{TICKS}"), &["is not a name"], |t| {
        station::parse("it.toml", t)
    });
    let pattern = "[profile.mine]\nkind = 'counter'\nframe = { ends = [\"\\n\"] }\n[[profile.mine.line]]\n@@pattern = '(tick'\nmeans = 'drop'\n";
    expect_fault(pattern, &["profile, mine: line[1].pattern"], |t| station::parse("it.toml", t));
    let unit = "[profile.mine]\nkind = 'balance'\n@@unit = \"g\\u001b\"\nframe = { ends = [\"\\n\"] }\nline = []\n";
    expect_fault(unit, &["profile, mine: unit is wrong", "\\u{1b}"], |t| station::parse("it.toml", t));
    let renamed = format!("[profile.mine]\nname = \"yours\"\nkind = \"counter\"\n{TICKS}").replace("name", "@@name");
    expect_fault(&renamed, &["\"yours\"", "\"mine\""], |t| station::parse("it.toml", t));
    let key = "[profile.mine]\nkind = 'counter'\n@@fram = { ends = [\"\\n\"] }\n";
    expect_fault(key, &["\"frame\": did you mean"], |t| station::parse("it.toml", t));
    expect_fault(&format!("@@[profile.mine]\n{TICKS}"), &["profile, mine", "kind"], |t| station::parse("it.toml", t));
}

#[test]
fn relative_paths_lie_beside_the_file() {
    let folder = tempfile::tempdir().expect("a folder");
    let load = |text: &str| {
        let config = folder.path().join("tarecup.toml");
        std::fs::write(&config, text).expect("written");
        station::load(&config).unwrap_or_else(|f| panic!("{f}"))
    };
    let mqtt = "[mqtt]\nurl = 'mqtts://h'\nuser = 'u'\n";
    let s = load(&format!("state_dir = 'state'\n{mqtt}password_file = 'secret/broker'\nca_file = '../ca.crt'\n"));
    assert_eq!(s.state_dir, Some(folder.path().join("state")));
    assert_eq!(s.mqtt.password_file, Some(folder.path().join("secret/broker")));
    assert_eq!(s.mqtt.ca_file, Some(folder.path().join("../ca.crt")));
    let s = load("[broker]\npassword_file = 'users'\n");
    assert_eq!((s.broker.password_file, s.state_dir), (Some(folder.path().join("users")), None));

    let s = load(&format!("state_dir = '/var/lib/tarecup'\n{mqtt}password_file = '/etc/p'\nca_file = '/etc/ca.crt'\n"));
    let as_written = ["/var/lib/tarecup", "/etc/p", "/etc/ca.crt"].map(|p| Some(PathBuf::from(p)));
    assert_eq!([s.state_dir, s.mqtt.password_file, s.mqtt.ca_file], as_written);
    let s = load("[broker]\npassword_file = '/etc/users'\n");
    assert_eq!(s.broker.password_file, Some(PathBuf::from("/etc/users")));
}
