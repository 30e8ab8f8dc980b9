//! What the pages of the screen are like in a real browser: readable, large enough, true after a lost connection, the
//! same in two browsers, and deaf to strangers. Pictures of all of them are left in tests/.work/screens.

#[path = "browser_support.rs"]
mod browser;
#[path = "screen_support.rs"]
mod support;

use browser::{Browser, SIZES, Shared};
use serde_json::{Value, json};
use std::io::{BufRead, BufReader, Write};
use std::net::TcpListener;
use std::time::{Duration, Instant};
use support::{Station, begin, weighed};

/// What a stranger may have put into a name or a text.
const HOSTILE: &str = "<img src=x onerror=\"document.title='caught'\"> =1+1 \u{202e}evil & 'quoted'";

/// A station whose pages have something to show, hostile texts among it.
fn worked() -> (Station, Vec<String>) {
    let station = Station::start("");
    station.operator("AB", "4711");
    begin(&station, "S-1");
    let answer = station.ask(json!({"ask": "open_specimen", "specimen": "S-2", "description": HOSTILE, "preparation": HOSTILE}));
    assert_eq!(answer["ok"], true, "{answer}");
    let mut last = 0;
    for (container, empty, wet, drops) in [("C1", 21.43, 38.12, 31), ("C2", 20.87, 36.95, 24), ("C3", 22.05, 39.40, 17)] {
        weighed(&station, container, empty);
        station.count(drops);
        support::until("the slice is owed", || !station.get("/api/bench/north").json()["slice_owed"].is_null());
        last = weighed(&station, container, wet);
    }
    for (container, dry) in [("C1", 33.61), ("C2", 32.46)] {
        station.ask(json!({"ask": "into_oven", "containers": [container]}));
        station.ask(json!({"ask": "out_of_oven", "containers": [container]}));
        weighed(&station, container, dry);
    }
    station.ask(json!({"ask": "into_oven", "containers": ["C3"], "celsius": 110.0}));
    let answer = station.ask(json!({"ask": "set_aside", "what": last, "who": "AB", "why": HOSTILE}));
    assert_eq!(answer["ok"], true, "{answer}");
    station.ask(
        json!({"ask": "tie", "weighing": last, "bench": "north", "container": "C3", "role": "wet", "who": "AB", "why": HOSTILE}),
    );
    // A mass without a code is tied to nothing.
    station.weigh(12.34);
    support::until("a loose weighing", || station.get("/api/loose").body.contains("12.34"));
    let pages = [
        "/bench/north",
        "/bench/south",
        "/shelf",
        "/loose",
        "/laboratory",
        "/specimen/S-1",
        "/specimen/S-2",
        "/sign-in",
        "/nowhere",
    ];
    let mut pages: Vec<String> = pages.map(String::from).into();
    pages.extend([format!("/correct/{last}"), String::from("/correct/S-1/liquid/1")]);
    (station, pages)
}

/// Every visible text with less contrast than 7 : 1 to what lies under it, by WCAG 2.2's definition of contrast ratio.
const POOR: &str = "
    const ink = document.createElement('canvas').getContext('2d', { willReadFrequently: true });
    const rgba = (colour) => {
        ink.clearRect(0, 0, 1, 1); ink.fillStyle = '#000'; ink.fillStyle = colour; ink.fillRect(0, 0, 1, 1);
        const [r, g, b, a] = ink.getImageData(0, 0, 1, 1).data; return [r, g, b, a / 255];
    };
    const over = (top, under) => [0, 1, 2].map((i) => top[i] * top[3] + under[i] * (1 - top[3])).concat(1);
    const light = (c) => { const l = c.slice(0, 3).map((v) => v / 255).map((v) => v <= 0.04045 ? v / 12.92 : ((v + 0.055) / 1.055) ** 2.4);
        return 0.2126 * l[0] + 0.7152 * l[1] + 0.0722 * l[2]; };
    const ground = (e) => { if (!e) return [255, 255, 255, 1]; const c = rgba(getComputedStyle(e).backgroundColor);
        return c[3] === 1 ? c : over(c, ground(e.parentElement)); };
    const poor = [];
    let seen = 0;
    const all = document.createTreeWalker(document.body, NodeFilter.SHOW_TEXT);
    while (all.nextNode()) {
        const text = all.currentNode.data.trim(), e = all.currentNode.parentElement;
        if (!text || !e.checkVisibility({ opacityProperty: true, visibilityProperty: true }) || e.closest('.unseen, .skip, template, script, noscript, :disabled')) continue;
        const style = getComputedStyle(e), under = ground(e);
        let colour = rgba(e instanceof SVGElement ? style.fill : style.color);
        for (let p = e; p; p = p.parentElement) colour[3] *= Number(getComputedStyle(p).opacity);
        const [a, b] = [light(over(colour, under)), light(under)].sort((x, y) => y - x), ratio = (a + 0.05) / (b + 0.05);
        seen += 1;
        if (ratio < 7) poor.push(`${ratio.toFixed(2)} \"${text.slice(0, 40)}\" ${e.tagName}.${e.getAttribute('class') || ''}`);
    }
    return { seen, poor };";

/// Keys that are smaller than a gloved finger wants; anything else to touch that is smaller than WCAG 2.2 has it (2.5.8,
/// 24 px, links within a sentence left out).
const SMALL: &str = "
    const least = (e) => document.body.classList.contains('at-bench') && e.matches('.key, .enter') ? 72 : 24;
    const small = [];
    for (const e of document.querySelectorAll('button, summary, a, input:not([type=hidden]), textarea')) {
        const box = e.closest('label') || e, r = box.getBoundingClientRect();
        if (!e.checkVisibility({ visibilityProperty: true }) || e.matches('.skip, .unseen') || !r.width || getComputedStyle(e).display === 'inline') continue;
        if (Math.min(r.width, r.height) < least(e) - 0.01) small.push(`${r.width.toFixed(0)}×${r.height.toFixed(0)} ${e.tagName}.${e.className} \"${e.innerText.slice(0, 30)}\"`);
    }
    return small;";

#[test]
fn every_page_is_readable_and_fits_at_three_sizes() {
    let shared = Shared::get();
    let browser = shared.take();
    // The control: a checker that finds nothing here would find nothing anywhere.
    browser.go("data:text/html,<body class=at-bench><p style='color:%23777'>grey</p><button class=key>x</button>");
    assert_eq!(browser.see(POOR, &[])["poor"].as_array().map(Vec::len), Some(2), "grey on white is 4.5 : 1");
    assert_eq!(browser.see(SMALL, &[]).as_array().map(Vec::len), Some(1));
    let (station, pages) = worked();
    let mut wrong = Vec::new();
    for path in &pages {
        browser.size(1024, 600);
        browser.go(&format!("http://{}{path}", station.address));
        for (width, height) in SIZES {
            browser.size(width, height);
            for dark in [false, true] {
                browser.dark(dark);
                let found = browser.see(POOR, &[]);
                assert!(found["seen"].as_u64().is_some_and(|n| n > 5), "{path}: there is text: {found}");
                wrong.extend(found["poor"].as_array().into_iter().flatten().map(|p| format!("{path} {width} dark {dark}: {p}")));
            }
            browser.dark(false);
            let small = browser.see(SMALL, &[]);
            wrong.extend(small.as_array().into_iter().flatten().map(|s| format!("{path} {width}: {s}")));
            let wide = browser.see("return [document.documentElement.scrollWidth, innerWidth]", &[]);
            if wide[0].as_u64() > wide[1].as_u64() {
                wrong.push(format!("{path} {width}: wider than the window: {wide}"));
            }
            browser.picture(&format!("{}-{width}", path.trim_matches('/').replace('/', "-")));
        }
    }
    browser.go(&format!("http://{}/bench/north", station.address));
    for (width, height) in SIZES {
        browser.size(width, height);
        for sheet in ["pick-container", "by-hand"] {
            browser.tap(&format!("#{sheet} > summary"), "");
            browser.picture(&format!("bench-{sheet}-{width}"));
            browser.tap(&format!("#{sheet} > summary"), "");
        }
    }
    wrong.dedup();
    assert!(wrong.is_empty(), "{} things are wrong:\n{}", wrong.len(), wrong.join("\n"));
}

#[test]
fn a_stopped_service_greys_the_page_and_it_catches_up_by_itself() {
    let shared = Shared::get();
    let browser = shared.take();
    let mut station = Station::start("");
    begin(&station, "S-1");
    browser.go(&format!("http://{}/bench/north", station.address));
    browser.shows("#region-work", "S-1");
    browser.until(
        "a beat",
        "return document.body.dataset.connection === 'live' && !document.getElementById('lost').checkVisibility()",
        &[],
    );
    browser.see("window.notLoadedAnew = true", &[]);
    station.stop();
    let stopped = Instant::now();
    browser.until("the page greys", "return document.body.dataset.connection === 'lost'", &[]);
    assert!(stopped.elapsed() <= Duration::from_millis(3_300), "{:?}", stopped.elapsed());
    browser.shows("#lost", "What you see is from");
    browser.until("the balance is stale", "return document.querySelector('[data-instrument]').dataset.state === 'stale'", &[]);
    browser.picture("lost");
    // What is asked meanwhile is said not to have been recorded.
    browser.scan("C9");
    browser.shows("#region-answer", "did not answer");
    station.serve(None);
    // Done elsewhere while this page was cut off.
    weighed(&station, "C1", 21.43);
    browser.until("live again", "return document.body.dataset.connection === 'live'", &[]);
    browser.shows(".latest", "21.43");
    assert_eq!(browser.see("return window.notLoadedAnew === true", &[]), json!(true));
    assert!(!browser.text("#region-next").contains("C9"), "a code that was refused is not sent later by itself");
}

#[test]
fn two_browsers_at_one_bench_see_the_same() {
    let shared = Shared::get();
    let browser = shared.take();
    let other = Browser::open();
    other.size(360, 740);
    let station = Station::start("");
    begin(&station, "S-1");
    for one in [&*browser, &other] {
        one.go(&format!("http://{}/bench/north", station.address));
        one.shows("#region-work", "S-1");
    }
    other.scan("C1");
    browser.shows("#region-next", "C1");
    station.weigh(21.43);
    for one in [&*browser, &other] {
        one.shows(".latest", "21.43");
        one.shows(".latest", "C1");
    }
    browser.tap("#region-recorded button", "Undo");
    other.until("taken back", "return !document.querySelector('.latest:not(:has(.aside))')?.innerText.includes('21.43')", &[]);
}

#[test]
fn hostile_texts_are_shown_as_text() {
    let shared = Shared::get();
    let browser = shared.take();
    let (station, pages) = worked();
    for path in &pages {
        browser.go(&format!("http://{}{path}", station.address));
        assert_eq!(
            browser.see("return [document.querySelectorAll('img').length, document.title === 'caught']", &[]),
            json!([0, false]),
            "{path}"
        );
    }
    browser.go(&format!("http://{}/specimen/S-2", station.address));
    assert!(
        browser.text("#region-about").contains(HOSTILE.split(" \u{202e}").next().expect("its beginning")),
        "{}",
        browser.text("#region-about")
    );
    // A code that is no name is refused in words, and its text stays text.
    browser.go(&format!("http://{}/bench/north", station.address));
    for code in ["<img src=x onerror=alert(1)>", "=HYPERLINK(1)", "../../etc"] {
        browser.scan(code);
        browser.until("it is refused", "return document.querySelector('#region-answer.refused')?.innerText || document.querySelector('#region-next .urgent')?.innerText", &[]);
    }
    assert_eq!(browser.see("return document.querySelectorAll('img').length", &[]), json!(0));
}

/// Serves one page to whoever comes, as another website.
fn website() -> u16 {
    let listener = TcpListener::bind("127.0.0.1:0").expect("a port");
    let port = listener.local_addr().expect("an address").port();
    std::thread::spawn(move || {
        for mut stream in listener.incoming().flatten() {
            let mut lines = BufReader::new(stream.try_clone().expect("a stream")).lines();
            while lines.next().is_some_and(|l| l.is_ok_and(|l| !l.is_empty())) {}
            let page = "<!doctype html><title>elsewhere</title><p>another website";
            let _ = write!(
                stream,
                "HTTP/1.1 200 OK\r\nContent-Type: text/html\r\nContent-Length: {}\r\nConnection: close\r\n\r\n{page}",
                page.len()
            );
        }
    });
    port
}

#[test]
fn another_website_in_the_same_browser_neither_reads_nor_writes() {
    let shared = Shared::get();
    let browser = shared.take();
    let station = Station::start("");
    begin(&station, "S-1");
    let ask = |browser: &Browser| {
        let script = "const [to, done] = arguments;
            const ask = JSON.stringify({ ask: 'code', bench: 'north', text: 'C7' });
            const tries = [['POST', 'application/json', 'cors'], ['POST', 'text/plain', 'cors'], ['POST', 'text/plain', 'no-cors'], ['GET', null, 'cors']];
            Promise.all(tries.map(([method, type, mode]) => fetch(method === 'GET' ? `${to}/api/status` : `${to}/api/ask`,
                { method, mode, credentials: 'include', headers: type ? { 'Content-Type': type } : {}, body: type ? ask : undefined })
                .then((r) => `${r.type} ${r.status}`, () => 'refused'))).then(done)";
        browser.see_later(script, &[json!(format!("http://{}", station.address))])
    };
    let port = website();
    browser.go(&format!("http://127.0.0.1:{port}/"));
    assert_eq!(ask(&browser), json!(["refused", "refused", "opaque 0", "refused"]));
    // A form and a frame get no further.
    let script = "const [to, done] = arguments; const frame = document.createElement('iframe'); frame.name = 'inside';
        frame.src = `${to}/bench/north`; document.body.append(frame);
        const form = document.createElement('form'); form.method = 'post'; form.action = `${to}/bench/north/act`; form.target = 'inside';
        for (const [name, value] of [['ask', 'code'], ['bench', 'north'], ['text', 'C7']]) { const i = document.createElement('input'); i.name = name; i.value = value; form.append(i); }
        document.body.append(form); form.submit(); setTimeout(() => done(true), 500)";
    browser.see_later(script, &[json!(format!("http://{}", station.address))]);
    assert_eq!(station.get("/api/bench/north").json()["in_hand"], Value::Null, "nothing was written");
    // The control: the same from the screen's own page is taken.
    browser.go(&format!("http://{}/bench/north", station.address));
    let own = ask(&browser);
    assert!(own[0].as_str().is_some_and(|s| s == "basic 200"), "{own}");
    support::until("the own page's ask is taken", || !station.get("/api/bench/north").json()["in_hand"].is_null());
}
