//! Who may correct and review over HTTP: PINs, sessions, lock-out, the station's secret.

#[path = "screen_support.rs"]
mod support;

use serde_json::{Value, json};
use std::process::Command;
use support::{Answer, Station, all_text, begin, until, weighed};
use tarecup::screen::{self, Prepared};
use tarecup_config::station::Screen;

const PIN: &str = "739146";

fn facts(station: &Station) -> Vec<Value> {
    station.get("/api/facts?limit=1000").json()["facts"].as_array().expect("facts").clone()
}

fn with_cookie(station: &Station, cookie: &str, ask: &Value) -> Answer {
    station.send("POST", "/api/ask", &[("Content-Type", "application/json"), ("Cookie", cookie)], ask.to_string().as_bytes())
}

#[test]
fn corrections_need_the_pin_and_carry_the_name_it_proves() {
    let station = Station::start("");
    begin(&station, "S-1");
    let weighing = weighed(&station, "C1", 21.43);
    let amend = |who: &str, pin: &str| json!({"ask": "amend_mass", "weighing": weighing, "mass_g": "21.44", "who": who, "pin": pin, "why": "read wrong"});
    let answer = station.post("/api/ask", &amend("AB", ""));
    assert!(answer.status == 403 && answer.body.contains("tarecup operator add"), "nobody has a PIN yet: {}", answer.body);
    station.operator("AB", PIN);
    station.operator("KL", "8802461");
    for (who, pin) in [("AB", ""), ("AB", "739147"), ("KL", PIN), ("MO", PIN)] {
        assert_eq!(station.post("/api/ask", &amend(who, pin)).status, 403, "{who} {pin}");
    }
    let answer = station.post("/api/ask", &amend("ab", PIN));
    assert_eq!(answer.status, 200, "{}", answer.body);
    let amended = facts(&station).into_iter().find(|f| f["kind"] == "mass_amended").expect("the fact");
    assert_eq!(amended["who"], "AB", "the name as it was given with the PIN");
    // The input that is kept says that it was proven; nobody else may say so.
    let kept = rusqlite::Connection::open(station.state().join("ledger.sqlite")).expect("the ledger");
    let proven = |like: &str| -> u32 {
        let sql = "SELECT count(*) FROM input WHERE kind = 'ask' AND CAST(bytes AS TEXT) LIKE ?1";
        kept.query_row(sql, [like], |row| row.get(0)).expect("a number")
    };
    assert_eq!((proven("%\"proven\":\"pin\"%"), proven("%\"ask\":\"amend_mass\"%")), (1, 1));
    let said = json!({"ask": "amend_mass", "weighing": weighing, "mass_g": "21.45", "who": "AB", "why": "w", "proven": "pin"});
    assert_eq!(station.post("/api/ask", &said).status, 403);
    assert_eq!(station.ask(said)["ok"], false, "not over the local socket either");
    // Every ask that changes the record or speaks for a result is refused without one.
    for ask in [
        json!({"ask": "tie", "weighing": weighing, "bench": "north", "container": "C2", "role": "tare", "who": "AB", "why": "w"}),
        json!({"ask": "tie_count", "count": 1, "bench": "north", "specimen": "S-1", "who": "AB", "why": "w"}),
        json!({"ask": "set_aside", "what": weighing, "who": "AB", "why": "w"}),
        json!({"ask": "set_aside_trial", "specimen": "S-1", "kind": "liquid", "no": 1, "who": "AB", "why": "w"}),
        json!({"ask": "amend_drops", "count": 1, "drops": 20, "who": "AB", "why": "w"}),
        json!({"ask": "free_container", "container": "C1", "who": "AB", "why": "w"}),
        json!({"ask": "oven_off", "from": "2026-01-01T00:00:00Z", "to": "2026-01-01T01:00:00Z", "who": "AB", "why": "w"}),
        json!({"ask": "not_obtainable", "specimen": "S-1", "limit": "plastic", "because": "w", "who": "AB"}),
        json!({"ask": "answer_check", "specimen": "S-1", "check": "c", "about": "a", "says": "s", "who": "AB"}),
        json!({"ask": "review", "specimen": "S-1", "who": "AB"}),
    ] {
        assert_eq!(station.post("/api/ask", &ask).status, 403, "{ask}");
    }
    // What is done at the bench needs none.
    let answer = station.post("/api/ask", &json!({"ask": "sign_in", "bench": "north", "operator": "MO"}));
    assert_eq!(answer.status, 200);
    // No PIN stands anywhere: not in the ledger, not in the operators' file.
    let text = all_text(&station.state());
    assert!(text.contains("read wrong"), "the ledger is among the files");
    assert!(!text.contains(PIN) && !text.contains("8802461") && !text.contains("739147"));
}

#[test]
fn a_session_stands_for_the_pin_and_ends() {
    let station = Station::start("");
    begin(&station, "S-1");
    let weighing = weighed(&station, "C1", 21.43);
    station.operator("AB", PIN);
    let answer = station.post("/api/session", &json!({"operator": "AB", "pin": "000"}));
    assert!(answer.status == 403 && answer.header("set-cookie").is_none(), "{}", answer.body);
    let answer = station.post("/api/session", &json!({"operator": "AB", "pin": PIN}));
    assert_eq!(answer.status, 200, "{}", answer.body);
    let set = answer.header("set-cookie").expect("a cookie");
    for part in ["HttpOnly", "SameSite=Strict", "Path=/"] {
        assert!(set.contains(part), "{set}");
    }
    assert!(!set.contains("Secure"), "without TLS it could not come back");
    let cookie = answer.cookie();
    let session = station.send("GET", "/api/session", &[("Cookie", &cookie)], b"").json();
    assert_eq!(session, json!({"operator": "AB", "proven": true}));
    let amend = |why: &str| json!({"ask": "amend_mass", "weighing": weighing, "mass_g": "21.44", "why": why});
    assert_eq!(with_cookie(&station, &cookie, &amend("once")).status, 200);
    // For another person the session proves nothing.
    let mut other = amend("other");
    other["who"] = json!("KL");
    assert_eq!(with_cookie(&station, &cookie, &other).status, 403);
    // A cookie that was made up, and one beside the true one.
    let name = cookie.split('=').next().expect("a name");
    assert_eq!(with_cookie(&station, &format!("{name}={}", "0".repeat(64)), &amend("forged")).status, 403);
    assert_eq!(with_cookie(&station, &format!("{cookie}; {name}=x"), &amend("forged")).status, 403);
    // Signing in anew gives another cookie; signing out ends this one.
    let second = station.post("/api/session", &json!({"operator": "AB", "pin": PIN})).cookie();
    assert_ne!(second, cookie);
    assert_eq!(station.send("DELETE", "/api/session", &[("Cookie", &cookie)], b"").status, 200);
    assert_eq!(with_cookie(&station, &cookie, &amend("after")).status, 403);
    assert_eq!(with_cookie(&station, &second, &amend("second")).status, 200);
    // Whoever was removed is proven no more.
    tarecup::screen::operators::remove(&station.state(), &tarecup_core::names::Operator::new("AB").expect("initials"))
        .expect("removed");
    assert_eq!(with_cookie(&station, &second, &amend("removed")).status, 403);
    let why: Vec<Value> =
        facts(&station).iter().filter(|f| f["kind"] == "mass_amended").map(|f| f["fact"]["why"].clone()).collect();
    assert_eq!(why, ["once", "second"]);
}

#[test]
fn a_badge_names_and_never_proves() {
    let station = Station::start("");
    begin(&station, "S-1");
    let weighing = weighed(&station, "C1", 21.43);
    station.operator("AB", PIN);
    let kind = ("Content-Type", "application/x-www-form-urlencoded");
    let answer = station.send("POST", "/sign-in", &[kind], b"operator=%2Bby-AB&pin=&then=/bench/north");
    assert_eq!((answer.status, answer.header("location")), (303, Some("/bench/north")), "{}", answer.body);
    let cookie = answer.cookie();
    let session = station.send("GET", "/api/session", &[("Cookie", &cookie)], b"").json();
    assert_eq!(session, json!({"operator": "AB", "proven": false}));
    assert_eq!(station.get("/api/bench/north").json()["signed_in"], "AB");
    let amend = json!({"ask": "amend_mass", "weighing": weighing, "mass_g": "21.44", "who": "AB", "why": "w"});
    assert_eq!(with_cookie(&station, &cookie, &amend).status, 403);
    // By the form, with the PIN, it is.
    let body = format!("ask=amend_mass&weighing={weighing}&mass_g=21,44&who=AB&pin={PIN}&why=comma&then=/loose");
    let answer = station.send("POST", "/act", &[kind, ("Cookie", &cookie)], body.as_bytes());
    assert_eq!((answer.status, answer.header("location")), (303, Some("/loose")), "{}", answer.body);
}

#[test]
fn five_wrong_pins_lock_over_every_way_in() {
    let station = Station::start("");
    station.operator("AB", PIN);
    let kind = ("Content-Type", "application/x-www-form-urlencoded");
    for n in 0..5 {
        let status = match n % 2 {
            0 => station.post("/api/session", &json!({"operator": "AB", "pin": "1"})).status,
            _ => station.send("POST", "/sign-in", &[kind], b"operator=ab&pin=1&then=/").status,
        };
        assert_eq!(status, if n == 4 { 429 } else { 403 }, "try {n}");
    }
    let answer = station.post("/api/session", &json!({"operator": "AB", "pin": PIN}));
    assert!(answer.status == 429 && answer.body.contains("unlock"), "the right one is not taken either: {}", answer.body);
    let review = json!({"ask": "review", "specimen": "S-1", "who": "AB", "pin": PIN});
    assert_eq!(station.post("/api/ask", &review).status, 429);
    let page = station.send("POST", "/sign-in", &[kind], format!("operator=AB&pin={PIN}&then=/").as_bytes());
    assert!(page.status == 429 && page.header("set-cookie").is_none());
    // Another person is not locked with them.
    station.operator("KL", "8802461");
    assert_eq!(station.post("/api/session", &json!({"operator": "KL", "pin": "8802461"})).status, 200);
    // By hand, at the machine.
    let state = station.state().display().to_string();
    let unlock = Command::new(env!("CARGO_BIN_EXE_tarecup")).args(["operator", "unlock", "AB", "--state", &state]).status();
    assert!(unlock.expect("run").success());
    assert_eq!(station.post("/api/session", &json!({"operator": "AB", "pin": PIN})).status, 200);
}

#[test]
fn the_command_reads_the_pin_from_its_input_alone() {
    use std::io::Write;
    use std::process::Stdio;
    let folder = tempfile::tempdir().expect("a folder");
    let state = folder.path().display().to_string();
    let run = |words: &[&str], input: &str| {
        let mut child = Command::new(env!("CARGO_BIN_EXE_tarecup"))
            .args(["operator"])
            .args(words)
            .args(["--state", &state])
            .stdin(Stdio::piped())
            .stdout(Stdio::piped())
            .stderr(Stdio::piped())
            .spawn()
            .expect("it starts");
        child.stdin.take().expect("piped").write_all(input.as_bytes()).expect("written");
        let out = child.wait_with_output().expect("it ends");
        let text = String::from_utf8_lossy(&out.stdout).into_owned() + &String::from_utf8_lossy(&out.stderr);
        (out.status.code().unwrap_or(-1), text)
    };
    let (code, text) = run(&["add", "AB"], &format!("{PIN}\n"));
    assert!(code == 0 && !text.contains(PIN), "{text}");
    assert!(run(&["list"], "").1.contains("AB"));
    assert_eq!(run(&["add", "KL"], "1234\n").0, 1, "the first that anybody would try");
    assert_eq!(run(&["add", "AB", PIN], "").0, 2, "never an argument");
    assert_eq!(run(&["remove", "AB"], "").0, 0);
    assert_eq!(run(&["remove", "AB"], "").0, 1);
}

#[test]
fn a_screen_on_the_network_wants_its_secret() {
    let folder = tempfile::tempdir().expect("a folder");
    let file = folder.path().join("secret");
    let new = || Command::new(env!("CARGO_BIN_EXE_tarecup")).args(["secret", "new"]).arg(&file).output().expect("run");
    let out = new();
    assert!(out.status.success(), "{}", String::from_utf8_lossy(&out.stderr));
    let secret = std::fs::read_to_string(&file).expect("the secret");
    assert!(!String::from_utf8_lossy(&out.stdout).contains(secret.trim()), "it is not shown");
    assert_eq!(new().status.code(), Some(2), "and never written over");

    let station = Station::start(&format!("secret_file = {:?}", file.display().to_string()));
    for path in ["/", "/bench/north", "/events?bench=north", "/sign-in"] {
        let answer = station.get(path);
        assert!(answer.status == 303 || answer.status == 401, "{path}: {}", answer.status);
        assert!(!answer.body.contains("north"), "{path}");
    }
    assert_eq!(station.get("/api/status").status, 401);
    assert_eq!(station.post("/api/ask", &json!({"ask": "sign_in", "bench": "north", "operator": "AB"})).status, 401);
    assert_eq!(station.get("/assets/style.css").status, 200);
    let page = station.get("/enter?then=/bench/north");
    assert!(page.status == 200 && page.body.contains("name=\"secret\""));
    let kind = [("Content-Type", "application/x-www-form-urlencoded")];
    for wrong in ["", "x", &secret.trim()[1..]] {
        let answer = station.send("POST", "/enter", &kind, format!("secret={wrong}&then=/").as_bytes());
        assert!(answer.status == 403 && answer.header("set-cookie").is_none(), "{wrong}");
    }
    let answer = station.send("POST", "/enter", &kind, format!("secret={}&then=/bench/north", secret.trim()).as_bytes());
    assert_eq!((answer.status, answer.header("location")), (303, Some("/bench/north")));
    let cookie = answer.cookie();
    assert!(!cookie.contains(secret.trim()));
    assert_eq!(station.send("GET", "/api/status", &[("Cookie", &cookie)], b"").status, 200);
    let forged = cookie.replacen('.', ".0", 1);
    assert_eq!(station.send("GET", "/api/status", &[("Cookie", &forged)], b"").status, 401);
}

#[test]
fn beyond_loopback_nothing_starts_without_a_secret() {
    let open = Screen { listen: "0.0.0.0:8470".parse().expect("an address"), ..Screen::default() };
    assert!(Prepared::new(&open, true).is_err_and(|e| e.to_string().contains("tarecup secret new")));
    let folder = tempfile::tempdir().expect("a folder");
    let file = folder.path().join("secret");
    for (text, mode) in [("short\n", 0o600), ("long enough to be one\n", 0o644)] {
        use std::os::unix::fs::PermissionsExt;
        std::fs::write(&file, text).expect("written");
        std::fs::set_permissions(&file, std::fs::Permissions::from_mode(mode)).expect("changed");
        let settings = Screen { secret_file: Some(file.clone()), ..open.clone() };
        assert!(screen::check(&settings).is_err(), "{text}");
    }
    let missing = Screen { secret_file: Some(folder.path().join("none")), ..open.clone() };
    assert!(screen::check(&missing).is_err());
    let config = folder.path().join("bench.toml");
    std::fs::write(&config, "[screen]\nlisten = \"0.0.0.0:8470\"\n").expect("written");
    for verb in ["check", "run"] {
        let out = Command::new(env!("CARGO_BIN_EXE_tarecup")).arg(verb).arg("--config").arg(&config).output().expect("run");
        let says = String::from_utf8_lossy(&out.stderr).into_owned();
        assert!(out.status.code() == Some(2) && says.contains("tarecup secret new") && says.contains(":2:"), "{verb}: {says}");
    }
}

#[test]
fn a_taken_address_is_refused_naming_the_holder() {
    let first = Station::start("");
    let settings = Screen { listen: first.address, ..Screen::default() };
    let fault = Prepared::new(&settings, false).err().expect("taken").to_string();
    assert!(fault.contains(&format!("process {}", std::process::id())), "{fault}");
    let free = Prepared::new(&settings, true).expect("a free one").expect("a screen");
    assert_ne!(free.address.port(), first.address.port());
    assert!(Prepared::new(&Screen { enabled: false, ..settings }, false).expect("no fault").is_none());
}

#[test]
fn over_tls_cookies_are_secure() {
    let folder = tempfile::tempdir().expect("a folder");
    let at = |name: &str| folder.path().join(name).display().to_string();
    let made = Command::new("openssl")
        .args(["req", "-x509", "-newkey", "ec", "-pkeyopt", "ec_paramgen_curve:prime256v1", "-nodes", "-days", "2"])
        .args(["-subj", "/CN=localhost", "-addext", "subjectAltName=IP:127.0.0.1", "-keyout", &at("key"), "-out", &at("crt")])
        .output()
        .expect("openssl runs");
    assert!(made.status.success(), "{}", String::from_utf8_lossy(&made.stderr));
    let station = Station::start(&format!("certificate_file = {:?}\nkey_file = {:?}", at("crt"), at("key")));
    assert!(station.service().screen_url().expect("a screen").starts_with("https://"));
    station.operator("AB", PIN);
    // A client of its own, by another library: what it prints is the answer.
    let url = format!("https://{}/api/session", station.address);
    let body = json!({"operator": "AB", "pin": PIN}).to_string();
    let request = format!(
        "POST /api/session HTTP/1.1\r\nHost: {}\r\nOrigin: https://{}\r\nContent-Type: application/json\r\nContent-Length: {}\r\nConnection: close\r\n\r\n{body}",
        station.address,
        station.address,
        body.len()
    );
    let mut client = Command::new("openssl")
        .args([
            "s_client",
            "-quiet",
            "-no_ign_eof",
            "-CAfile",
            &at("crt"),
            "-verify_return_error",
            "-connect",
            &station.address.to_string(),
        ])
        .stdin(std::process::Stdio::piped())
        .stdout(std::process::Stdio::piped())
        .stderr(std::process::Stdio::null())
        .spawn()
        .expect("openssl runs");
    let mut stdin = client.stdin.take().expect("piped");
    std::io::Write::write_all(&mut stdin, request.as_bytes()).expect("written");
    let mut answer = String::new();
    std::io::Read::read_to_string(&mut client.stdout.take().expect("piped"), &mut answer).expect("read");
    drop(stdin);
    let _ = client.wait();
    assert!(answer.contains("200 OK") && answer.contains("__Host-tarecup") && answer.contains("; Secure"), "{url}: {answer}");
    // Without TLS nothing is said at this port.
    assert_eq!(station.get("/api/status").status, 0);
    until("the service is well", || station.service().ports_open() == 2);
}
