//! Whole pieces of work at the bench, in a real browser: by scanner, by keyboard, by touch; and a mistake that is
//! mended. The limits expected are computed here from the masses that were put on the pan.

#[path = "browser_support.rs"]
mod browser;
#[path = "screen_support.rs"]
mod support;

use browser::{Browser, ENTER, ESCAPE, Shared};
use serde_json::{Value, json};
use support::{Station, until};

/// Container, empty, wet and dry masses, drops (none for threads).
type Row = (&'static str, f64, f64, f64, Option<u32>);

const ROWS: [Row; 5] = [
    ("C1", 21.43, 38.12, 33.61, Some(32)),
    ("C2", 20.87, 36.95, 32.46, Some(24)),
    ("C3", 22.05, 39.40, 34.37, Some(17)),
    ("C4", 19.64, 27.91, 26.48, None),
    ("C5", 20.11, 28.02, 26.66, None),
];

fn water((_, empty, wet, dry, _): &Row) -> f64 {
    100.0 * (wet - dry) / (dry - empty)
}

/// Liquid limit: least squares of water content on the logarithm of drops, read at 25; plastic limit: the mean of the
/// threads; both as ASTM D4318 describes the multipoint method (from memory).
fn limits() -> (f64, f64) {
    let points: Vec<(f64, f64)> = ROWS.iter().filter_map(|r| r.4.map(|n| (f64::from(n).log10(), water(r)))).collect();
    let n = points.len() as f64;
    let (mx, my) = (points.iter().map(|p| p.0).sum::<f64>() / n, points.iter().map(|p| p.1).sum::<f64>() / n);
    let sxy: f64 = points.iter().map(|p| (p.0 - mx) * (p.1 - my)).sum();
    let sxx: f64 = points.iter().map(|p| (p.0 - mx).powi(2)).sum();
    let liquid = my + sxy / sxx * (25.0_f64.log10() - mx);
    let threads: Vec<f64> = ROWS.iter().filter(|r| r.4.is_none()).map(water).collect();
    (liquid, threads.iter().sum::<f64>() / threads.len() as f64)
}

/// A station with an open specimen, and its bench in the browser.
fn bench(browser: &Browser, specimen: &str) -> Station {
    let station = Station::start("");
    let answer = station.ask(json!({"ask": "open_specimen", "specimen": specimen, "description": "grey clay"}));
    assert_eq!(answer["ok"], true, "{answer}");
    browser.go(&format!("http://{}/bench/north", station.address));
    station
}

/// A mass is put on the pan; the page shows it as just recorded for this container in this role.
fn weigh(browser: &Browser, station: &Station, container: &str, role: &str, grams: f64) {
    browser.shows("#region-next", container);
    station.weigh(grams);
    for text in [format!("{grams:.2}"), container.to_string(), role.to_string()] {
        browser.shows(".latest", &text);
    }
}

/// The cup drops so often; the page shows it.
fn count(browser: &Browser, station: &Station, drops: u32) {
    station.count(drops);
    browser.shows(".latest", &format!("{drops} drops"));
}

fn figure(browser: &Browser, name: &str) -> (String, String) {
    let script = "const d = [...document.querySelectorAll('.figure')].find((e) => e.querySelector('dt').innerText.trim() === arguments[0]);
        const n = [...d.querySelectorAll('[data-number]')].map((e) => e.innerText.trim()); return n.length > 1 ? n : null";
    let found = browser.until(name, script, &[json!(name)]);
    let text = |i: usize| found[i].as_str().unwrap_or_default().to_string();
    (text(0), text(1))
}

#[test]
fn a_specimen_by_the_scanner_alone() {
    let shared = Shared::get();
    let browser = shared.take();
    let station = bench(&browser, "S-1");
    for code in ["+by-AB", "S-1", "+liquid"] {
        browser.scan(code);
    }
    browser.shows("#region-standing", "AB");
    browser.shows("#region-keys [aria-pressed=true]", "Liquid limit");
    for row in ROWS {
        if row.0 == "C4" {
            browser.scan("+plastic");
            browser.shows("#region-keys [aria-pressed=true]", "Plastic limit");
        }
        browser.scan(row.0);
        weigh(&browser, &station, row.0, "empty", row.1);
        if let Some(drops) = row.4 {
            count(&browser, &station, drops);
        }
        browser.scan(row.0);
        weigh(&browser, &station, row.0, "wet", row.2);
    }
    for card in ["+oven-in", "+oven-out"] {
        for row in ROWS {
            browser.scan(row.0);
            browser.scan(card);
        }
    }
    let out = || station.get("/api/containers").json();
    until("all are out of the oven", || ROWS.iter().all(|r| out().to_string().contains(r.0)));
    for row in ROWS {
        browser.scan(row.0);
        weigh(&browser, &station, row.0, "dry", row.3);
    }
    browser.picture("worked-bench");
    let (liquid, plastic) = limits();
    browser.go(&format!("http://{}/specimen/S-1", station.address));
    assert_eq!(figure(&browser, "Liquid limit"), (format!("{liquid:.0}"), format!("{liquid:.2}")));
    assert_eq!(figure(&browser, "Plastic limit"), (format!("{plastic:.0}"), format!("{plastic:.2}")));
    assert_eq!(figure(&browser, "Plasticity index").0, format!("{:.0}", liquid.round() - plastic.round()));
    browser.picture("worked-specimen");
}

#[test]
fn a_trial_by_the_keyboard_alone() {
    let shared = Shared::get();
    let browser = shared.take();
    let station = bench(&browser, "S-2");
    // The specimen is chosen by its key, which the tabulator reaches.
    browser.tab_to("Specimen");
    browser.keys(&ENTER.to_string());
    browser.shows("#pick-specimen .sheet-body", "S-2");
    browser.tab_to("S-2");
    browser.keys(&ENTER.to_string());
    browser.shows("#region-work", "S-2");
    // After that the code field has the focus again, without the tabulator.
    browser.until("the code field is ready", "return document.activeElement.id === 'code'", &[]);
    browser.tab_to("Liquid limit");
    browser.keys(&ENTER.to_string());
    browser.shows("#region-keys [aria-pressed=true]", "Liquid limit");
    let row = ROWS[0];
    browser.keys(&format!("{ESCAPE}{}{ENTER}", row.0));
    weigh(&browser, &station, row.0, "empty", row.1);
    // A count of a hand cup, typed.
    browser.tab_to("By hand");
    browser.keys(&ENTER.to_string());
    browser.shows("#by-hand .sheet-body", "Drops counted");
    browser.tab_to("Drops counted");
    browser.keys("28");
    browser.tab_to("Who (initials)");
    browser.keys(&format!("CD{ENTER}"));
    browser.shows(".latest", "28 drops");
    browser.shows(".latest", "typed");
    browser.keys(&format!("{}{ENTER}", row.0));
    weigh(&browser, &station, row.0, "wet", row.2);
    browser.keys(&format!("{}{ENTER}", row.0));
    browser.shows("#region-next", row.0);
    browser.keys(&format!("+oven-in{ENTER}{}{ENTER}+oven-out{ENTER}{}{ENTER}", row.0, row.0));
    weigh(&browser, &station, row.0, "dry", row.3);
    let limits = station.get("/api/specimen/S-2/limits").json();
    let found = limits["trials"][0]["water_percent"].as_f64().expect("percent");
    assert!((found - water(&row)).abs() < 1e-9, "{limits}");
    // Undo is reached as well.
    browser.tab_to("Undo");
    browser.keys(&ENTER.to_string());
    let mut dry = Value::Null;
    until("the dry mass is taken back", || {
        dry = station.get("/api/specimen/S-2/limits").json()["trials"][0]["water_percent"].clone();
        dry.is_null()
    });
}

#[test]
fn a_trial_by_touch_alone() {
    let shared = Shared::get();
    let browser = shared.take();
    let station = bench(&browser, "S-3");
    let row = ROWS[1];
    browser.tap("#pick-specimen > summary", "Specimen");
    browser.tap("#pick-specimen .sheet-body button", "S-3");
    browser.shows("#region-work", "S-3");
    browser.tap("#region-keys button.key", "Liquid limit");
    browser.shows("#region-keys [aria-pressed=true]", "Liquid limit");
    // The keys on the screen type a code that no picker knows yet.
    browser.tap("[data-pad-for=code]", "");
    for key in ["C", "2"] {
        browser.tap("#pad:not([hidden]) [data-key]", key);
    }
    browser.tap("#pad [data-key=Enter]", "Enter");
    weigh(&browser, &station, row.0, "empty", row.1);
    // The wrong container stood on the pan: taken back, and weighed again.
    browser.tap("#region-recorded button", "Undo");
    browser.until("nothing is recorded", "return !document.querySelector('.latest')?.innerText.includes('20.87') || document.querySelector('.latest .state') !== null", &[]);
    browser.tap("#pick-container > summary", "Container");
    browser.tap("#pick-container .sheet-body button", row.0);
    weigh(&browser, &station, row.0, "empty", row.1);
    count(&browser, &station, 21);
    browser.tap("#region-keys button.key", "Soil slid");
    browser.until("no slice is owed", "return [...document.querySelectorAll('#region-keys button')].some((b) => b.innerText.includes('Soil slid') && b.disabled)", &[]);
    // Counted again by eye, typed on the keys of the screen.
    browser.tap("#by-hand > summary", "By hand");
    browser.tap("[data-pad-for=hand-drops]", "");
    for key in ["2", "4"] {
        browser.tap("#pad:not([hidden]) [data-key]", key);
    }
    browser.tap("#pad [data-key=Enter]", "Enter");
    for key in ["K", "L"] {
        browser.tap("#pad:not([hidden]) [data-key]", key);
    }
    browser.tap("#pad [data-key=Close]", "Close");
    browser.tap("#by-hand button.confirm", "Record count");
    browser.shows(".latest", "24 drops");
    browser.shows(".latest", "typed");
    browser.tap("#pick-container > summary", "Container");
    browser.tap("#pick-container .sheet-body button", row.0);
    weigh(&browser, &station, row.0, "wet", row.2);
    browser.go(&format!("http://{}/shelf", station.address));
    browser.tap("#region-shelf button", "Into oven");
    browser.tap("#region-shelf button", "Out of oven");
    browser.shows("#region-shelf", "to be weighed dry");
    browser.go(&format!("http://{}/bench/north", station.address));
    browser.tap("#pick-container > summary", "Container");
    browser.tap("#pick-container .sheet-body button", row.0);
    weigh(&browser, &station, row.0, "dry", row.3);
    let limits = station.get("/api/specimen/S-3/limits").json();
    let trial = &limits["trials"][0];
    assert_eq!(trial["drops"].as_f64(), Some(24.0), "{limits}");
    assert!((trial["water_percent"].as_f64().expect("percent") - water(&row)).abs() < 1e-9, "{limits}");
    let slid = station.get("/api/facts?after=0&limit=1000").body;
    assert!(slid.contains("slid"), "{slid}");
}

#[test]
fn a_swapped_container_is_mended_in_two_taps_and_the_original_stays() {
    let shared = Shared::get();
    let browser = shared.take();
    let station = bench(&browser, "S-4");
    station.operator("AB", "4711");
    for code in ["+by-AB", "S-4", "+liquid", "C1"] {
        browser.scan(code);
    }
    weigh(&browser, &station, "C1", "empty", 21.43);
    browser.scan("C2");
    weigh(&browser, &station, "C2", "empty", 20.87);
    count(&browser, &station, 26);
    // C1 was put on the pan, and the code of C2 was read.
    browser.scan("C2");
    weigh(&browser, &station, "C2", "wet", 38.12);
    browser.tap(".latest a.entry-line", "38.12");
    browser.shows("main", "What is wrong?");
    browser.tap("#tie > summary", "Wrong container or role");
    browser.tap("#tie button.offer", "C1");
    browser.tap("#tie button.offer", "the wrong code was read");
    browser.see("document.querySelector('#tie input[name=who]').focus()", &[]);
    browser.until("who", "return document.activeElement.name === 'who'", &[]);
    if browser.see("return document.activeElement.value", &[]) == json!("") {
        browser.keys("AB");
    }
    browser.tap("#tie input[name=pin]", "");
    browser.keys("0000");
    browser.tap("#tie button.confirm", "Record tie");
    // A wrong PIN is refused in words, and nothing is lost of what was filled in.
    browser.until("a refusal", "return document.querySelector('#region-answer.refused')?.innerText", &[]);
    assert_eq!(browser.see("return document.querySelector('#tie input[name=container]').value", &[]), json!("C1"));
    browser.tap("#tie input[name=pin]", "");
    browser.see("document.querySelector('#tie input[name=pin]').select()", &[]);
    browser.keys("4711");
    browser.tap("#tie button.confirm", "Record tie");
    browser.until("the bench again", "return document.body.dataset.page === 'bench'", &[]);
    browser.go(&format!("http://{}/specimen/S-4", station.address));
    browser.shows("#region-trials", "C1");
    browser.shows("#region-history", "C2");
    browser.shows("#region-history", "the wrong code was read");
    browser.picture("worked-mended");
    let facts = station.get("/api/facts?after=0&limit=1000").body;
    assert!(facts.contains("38.12") && !facts.contains("4711"), "the mass stays and the PIN is nowhere: {facts}");
}
