//! Foreign websites, foreign names, forbidden paths, too much and too slow: what a browser or a stranger on this
//! machine may try. After OWASP ASVS 5.0, chapters 3.3 to 3.5 (headers and origins) and 13.4 (what is served).

#[path = "screen_support.rs"]
mod support;

use serde_json::json;
use std::io::{Read, Write};
use std::time::{Duration, Instant};
use support::{Station, begin};

/// The number of the last fact: what writes moves it.
fn seq(station: &Station) -> u64 {
    station.get("/api/status").json()["seq"].as_u64().expect("a number")
}

#[test]
fn every_answer_carries_the_policy() {
    let station = Station::start("");
    let pages = ["/", "/laboratory", "/bench/north", "/shelf", "/loose", "/sign-in", "/assets/script.js", "/assets/style.css"];
    let others = ["/api/status", "/api/openapi.json", "/nowhere", "/api/nowhere", "/bench/nobody", "/specimen/none", "/enter"];
    for path in pages.into_iter().chain(others) {
        let answer = station.get(path);
        assert!(answer.status != 0, "{path}");
        let policy = answer.header("content-security-policy").unwrap_or_else(|| panic!("{path} has no policy"));
        for part in ["default-src 'none'", "script-src 'self'", "frame-ancestors 'none'", "base-uri 'none'", "form-action 'self'"]
        {
            assert!(policy.contains(part), "{path}: {policy}");
        }
        assert!(!policy.contains("unsafe"), "{policy}");
        assert_eq!(answer.header("x-content-type-options"), Some("nosniff"), "{path}");
        assert!(answer.header("referrer-policy").is_some() && answer.header("cache-control").is_some(), "{path}");
        assert!(answer.header("access-control-allow-origin").is_none(), "{path}");
        assert!(answer.header("server").is_none(), "{path}");
    }
    for path in pages.into_iter().skip(1) {
        let answer = station.get(path);
        assert_eq!(answer.status, 200, "{path}: {}", answer.body);
        // Nothing in a page needs what the policy forbids.
        for forbidden in [" style=\"", "<style", "onclick=", "onload=", "javascript:"] {
            assert!(path.starts_with("/assets/") || !answer.body.contains(forbidden), "{path} has {forbidden}");
        }
    }
}

#[test]
fn another_name_for_this_machine_is_refused() {
    let station = Station::start("hosts = [\"bench-pc.example\"]");
    let port = station.address.port();
    let before = seq(&station);
    let body = json!({"ask": "sign_in", "bench": "north", "operator": "XX"}).to_string();
    for host in [
        format!("evil.example:{port}"),
        String::from("evil.example"),
        format!("127.0.0.1.evil.example:{port}"),
        format!("127.0.0.1:{}", port - 1),
        String::from("127.0.0.1"),
        format!("127.0.0.2:{port}"),
        format!("localhost.:{port}"),
        String::from("bench-pc.example.evil.example"),
        format!("user@127.0.0.1:{port}"),
    ] {
        assert_eq!(station.send("GET", "/api/status", &[("Host", &host)], b"").status, 421, "{host}");
        let headers = [("Host", host.as_str()), ("Content-Type", "application/json"), ("Origin", "http://evil.example")];
        assert_eq!(station.send("POST", "/api/ask", &headers, body.as_bytes()).status, 421, "{host}");
    }
    // Two names, none, and one that differs from the address asked for.
    assert_eq!(station.raw(b"GET / HTTP/1.1\r\nConnection: close\r\n\r\n").status, 400);
    let twice = format!("GET / HTTP/1.1\r\nHost: {0}\r\nHost: evil.example\r\nConnection: close\r\n\r\n", station.address);
    assert_eq!(station.raw(twice.as_bytes()).status, 400);
    let whole = format!("GET http://evil.example/ HTTP/1.1\r\nHost: {}\r\nConnection: close\r\n\r\n", station.address);
    assert_eq!(station.raw(whole.as_bytes()).status, 400);
    // Controls: its own names.
    for host in [
        format!("127.0.0.1:{port}"),
        format!("LOCALHOST:{port}"),
        String::from("bench-pc.example"),
        String::from("bench-pc.example:443"),
    ] {
        assert_eq!(station.send("GET", "/api/status", &[("Host", &host)], b"").status, 200, "{host}");
    }
    assert_eq!(seq(&station), before, "nothing was written");
}

#[test]
fn another_website_cannot_write() {
    let station = Station::start("");
    let own = format!("http://{}", station.address);
    let before = seq(&station);
    let json = json!({"ask": "sign_in", "bench": "north", "operator": "XX"}).to_string();
    let form = "ask=sign_in&operator=XX&bench=north";
    let attempts: [&[(&str, &str)]; 6] = [
        &[("Origin", "http://evil.example")],
        &[("Origin", "null")],
        &[("Origin", "https://evil.example"), ("Sec-Fetch-Site", "cross-site")],
        &[("Sec-Fetch-Site", "cross-site")],
        &[("Sec-Fetch-Site", "same-site")],
        &[("Origin", &own), ("Sec-Fetch-Site", "cross-site")],
    ];
    for attempt in attempts {
        for (path, kind, body) in [
            ("/api/ask", "application/json", json.as_str()),
            ("/bench/north/act", "application/x-www-form-urlencoded", form),
            ("/act", "application/x-www-form-urlencoded", form),
            ("/sign-in", "application/x-www-form-urlencoded", "operator=XX&pin="),
            ("/api/session", "application/json", "{\"operator\":\"XX\",\"pin\":\"1\"}"),
            ("/import/take", "application/x-www-form-urlencoded", "what=containers&text=container%0AC1"),
            ("/api/import/containers?take=true", "text/csv", "container\nC1\n"),
            ("/demo/hand", "application/x-www-form-urlencoded", "do=cup"),
        ] {
            let headers: Vec<(&str, &str)> = attempt.iter().copied().chain([("Content-Type", kind)]).collect();
            let answer = station.send("POST", path, &headers, body.as_bytes());
            assert_eq!(answer.status, 403, "{path} {attempt:?}: {}", answer.body);
        }
    }
    // A form of another website can only send these kinds without asking first: JSON is not among them.
    for kind in ["text/plain", "application/x-www-form-urlencoded", "multipart/form-data", ""] {
        let answer = station.send("POST", "/api/ask", &[("Content-Type", kind)], json.as_bytes());
        assert_eq!(answer.status, 415, "{kind}");
    }
    // A permission to ask from elsewhere is never given.
    let asked = [("Origin", "http://evil.example"), ("Access-Control-Request-Method", "POST")];
    let answer = station.send("OPTIONS", "/api/ask", &asked, b"");
    assert!(answer.status >= 400 && answer.header("access-control-allow-origin").is_none(), "{}", answer.head);
    // Events, pictures and frames of ours elsewhere.
    let elsewhere = [("Sec-Fetch-Site", "cross-site"), ("Sec-Fetch-Mode", "cors")];
    assert_eq!(station.send("GET", "/events?bench=north", &elsewhere, b"").status, 403);
    assert_eq!(seq(&station), before, "nothing was written");
    // Control: our own page.
    assert_eq!(station.post("/api/ask", &json!({"ask": "sign_in", "bench": "north", "operator": "XX"})).status, 200);
    let headers = [("Origin", own.as_str()), ("Content-Type", "application/x-www-form-urlencoded")];
    let answer = station.send("POST", "/bench/north/act", &headers, b"ask=sign_in&operator=YY&bench=north");
    assert_eq!((answer.status, answer.header("location")), (303, Some("/bench/north")), "{}", answer.body);
    assert_eq!(seq(&station), before + 2);
}

#[test]
fn a_form_sends_nobody_elsewhere() {
    let station = Station::start("");
    let kind = [("Content-Type", "application/x-www-form-urlencoded")];
    for then in ["https://evil.example/", "//evil.example/", "/%5Cevil.example", "javascript:x", "/x%0d%0aSet-Cookie:a=b"] {
        let body = format!("ask=code&bench=north&text=C1&then={then}");
        let answer = station.send("POST", "/act", &kind, body.as_bytes());
        assert_eq!((answer.status, answer.header("location")), (303, Some("/")), "{then}: {}", answer.head);
        assert!(answer.header("set-cookie").is_none());
    }
}

#[test]
fn only_what_is_compiled_in_is_served() {
    let station = Station::start("");
    let paths = [
        "/assets/../Cargo.toml",
        "/assets/..%2f..%2fetc/passwd",
        "/assets/%2e%2e/%2e%2e/etc/passwd",
        "/assets/..%5c..%5cetc%5cpasswd",
        "/assets/style.css%00.html",
        "/assets//etc/passwd",
        "/assets/",
        "/assets/%2fetc%2fpasswd",
        "/etc/passwd",
        "/../../etc/passwd",
        "/operators.json",
        "/ledger.sqlite",
        "/.git/config",
        "/bench/..%2f..%2foperators.json",
        "/specimen/..%2foperators.json",
        "/api/specimen/..%2f..%2fledger.sqlite",
        "/api/container/%00",
    ];
    for path in paths {
        let answer = station.get(path);
        assert!(answer.status == 404 || answer.status == 400, "{path}: {}", answer.status);
        assert!(!answer.body.contains("root:") && !answer.body.contains("argon2") && !answer.body.contains("SQLite"), "{path}");
    }
    assert_eq!(station.get("/assets/style.css").status, 200);
}

#[test]
fn what_is_too_large_is_not_read() {
    let station = Station::start("");
    let before = seq(&station);
    let large = vec![b'x'; 65 * 1024];
    let kind = [("Content-Type", "application/json")];
    assert_eq!(station.send("POST", "/api/ask", &kind, &large).status, 413);
    assert_eq!(station.send("POST", "/act", &[("Content-Type", "application/x-www-form-urlencoded")], &large).status, 413);
    let list = vec![b'C'; 1024 * 1024 + 1];
    assert_eq!(station.send("POST", "/api/import/containers", &[("Content-Type", "text/csv")], &list).status, 413);
    // It says that a hundred megabytes come: they are not waited for.
    let began = Instant::now();
    let head = format!(
        "POST /api/ask HTTP/1.1\r\nHost: {}\r\nContent-Type: application/json\r\nContent-Length: 104857600\r\n\r\n",
        station.address
    );
    assert_eq!(station.raw(&[head.as_bytes(), &large].concat()).status, 413);
    // It does not say how much comes.
    let head = format!(
        "POST /api/ask HTTP/1.1\r\nHost: {}\r\nContent-Type: application/json\r\nTransfer-Encoding: chunked\r\nConnection: close\r\n\r\n",
        station.address
    );
    let chunk = [b"10000\r\n".as_slice(), &vec![b'x'; 0x1_0000], b"\r\n"].concat();
    assert_eq!(station.raw(&[head.as_bytes(), &chunk, &chunk, b"0\r\n\r\n"].concat()).status, 413);
    assert!(began.elapsed() < Duration::from_secs(5), "{:?}", began.elapsed());
    let deep = format!("{{\"ask\":{}1{}}}", "[".repeat(100), "]".repeat(100));
    assert_eq!(station.send("POST", "/api/ask", &kind, deep.as_bytes()).status, 400);
    for broken in [
        &b"{"[..],
        b"[]",
        b"\xff\xfe",
        b"{\"ask\":7}",
        b"{\"ask\":\"sign_inn\"}",
        b"{\"ask\":\"sign_in\",\"bench\":\"north\",\"operator\":\"A B\"}",
    ] {
        assert_eq!(station.send("POST", "/api/ask", &kind, broken).status, 400, "{}", String::from_utf8_lossy(broken));
    }
    // Heads: too many lines, too long a line, too long an address.
    let many: Vec<(String, String)> = (0..100).map(|n| (format!("X-{n}"), String::from("y"))).collect();
    let many: Vec<(&str, &str)> = many.iter().map(|(n, v)| (n.as_str(), v.as_str())).collect();
    assert_eq!(station.send("GET", "/", &many, b"").status, 431);
    assert_eq!(station.send("GET", "/", &[("X-Long", &"y".repeat(40_000))], b"").status, 431);
    assert!([414, 431].contains(&station.get(&format!("/{}", "y".repeat(40_000))).status));
    assert_eq!(seq(&station), before);
}

#[test]
fn who_is_slow_is_let_go() {
    let station = Station::start("");
    let mut silent = station.connect();
    let mut dripping = station.connect();
    let began = Instant::now();
    let mut buffer = [0u8; 1024];
    dripping.set_read_timeout(Some(Duration::from_millis(10))).expect("set");
    write!(dripping, "GET / HTTP/1.1\r\nHost: {}\r\nX-Slow: ", station.address).expect("sent");
    let gone = loop {
        // One letter of the head at a time, for ever.
        if dripping.write_all(b"y").is_err() {
            break true;
        }
        match dripping.read(&mut buffer) {
            Ok(0) => break true,
            Ok(_) => (),
            Err(e) if e.kind() == std::io::ErrorKind::ConnectionReset => break true,
            Err(_) => (),
        }
        if began.elapsed() > Duration::from_secs(16) {
            break false;
        }
        std::thread::sleep(Duration::from_millis(200));
    };
    assert!(gone, "a head that never ends is not waited for");
    assert!(began.elapsed() > Duration::from_secs(5), "but a slow one is: {:?}", began.elapsed());
    assert!(matches!(silent.read(&mut buffer), Ok(0) | Err(_)) && began.elapsed() < Duration::from_secs(25), "nor is silence");
    assert_eq!(station.get("/api/status").status, 200);
}

#[test]
fn hostile_names_stay_text() {
    let station = Station::start("");
    begin(&station, "S-1");
    let hostile = "<script>alert(1)</script><img src=x onerror=alert(2)>\"'>&lt;";
    let answer = station.ask(json!({"ask": "open_specimen", "specimen": "S-2", "description": hostile, "preparation": hostile}));
    assert_eq!(answer["ok"], true, "{answer}");
    let answer = station.ask(json!({"ask": "intend", "bench": "north", "specimen": "S-2", "intention": "liquid"}));
    assert_eq!(answer["ok"], true);
    for code in [hostile, "<b>C1</b>", "=1+1", "../../x", "\u{202e}C1"] {
        // A code that is no name is refused aloud; the refusal shows it.
        let kind = [("Content-Type", "application/x-www-form-urlencoded")];
        let text: String = code.bytes().map(|b| format!("%{b:02X}")).collect();
        let answer = station.send("POST", "/bench/north/act", &kind, format!("ask=code&bench=north&text={text}").as_bytes());
        assert_eq!(answer.status, 422, "{code}");
        assert!(
            !answer.body.contains("<script>alert") && !answer.body.contains("<img src=x") && !answer.body.contains("<b>C1"),
            "{code}"
        );
    }
    for name in ["<script>", "C 1", "A/B", "%00", "='x'!A1", ""] {
        let answer = station.post("/api/ask", &json!({"ask": "register_container", "container": name}));
        assert_eq!(answer.status, 400, "{name}: {}", answer.body);
    }
    support::until("the page shows the specimen", || station.get("/bench/north").body.contains("S-2"));
    for path in ["/bench/north", "/specimen/S-2", "/laboratory"] {
        let page = station.get(path).body;
        assert!(!page.contains("<script>alert") && !page.contains("<img src=x"), "{path}");
        assert_eq!(page.matches("<script").count(), 1, "{path}: only our own script");
    }
    let mut events = station.events("bench=north", None);
    for _ in 0..4 {
        let event = events.wait("a region", |e| e.name == "region");
        let html = event.data["html"].as_str().expect("html");
        assert!(!html.contains("<script") && !html.contains("<img src=x"), "{html}");
    }
}
