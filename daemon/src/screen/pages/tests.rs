//! What must hold of every page, whatever it shows.

use super::super::view::{self, sample};
use super::super::words::{ENGLISH, Words};
use super::*;
use serde::Serialize;
use std::collections::BTreeSet;

/// A page with the data it was made of, as JSON.
struct Made {
    name: &'static str,
    html: String,
    data: String,
}

fn made<V: Serialize>(name: &'static str, page: fn(&V, &Words) -> Markup, view: &V, w: &Words) -> Made {
    Made { name, html: page(view, w).into_string(), data: serde_json::to_string(view).unwrap() }
}

/// Every page in every state.
fn all(w: &Words) -> Vec<Made> {
    let (mut off, mut complete, mut reviewed, mut trial) =
        (sample::shelf(), sample::specimen(), sample::specimen(), sample::correction());
    off.off_since = Some(sample::at("09:00:00"));
    complete.state = "complete".into();
    reviewed.state = "reviewed".into();
    reviewed.reviewed_by = Some("KL".into());
    trial.subject.what = view::What::Trial;
    let mut count = sample::correction();
    count.subject.what = view::What::Count { drops: 27 };
    let locked = view::SignIn { locked_until: Some(sample::at("10:00:00")), ..sample::sign_in() };
    vec![
        made("bench", bench, &sample::bench(), w),
        made("bench idle", bench, &sample::bench_idle(), w),
        made("bench cup", bench, &sample::bench_cup(), w),
        made("bench trouble", bench, &sample::bench_trouble(), w),
        made("bench empty", bench, &view::Bench::default(), w),
        made("shelf", shelf, &sample::shelf(), w),
        made("shelf off", shelf, &off, w),
        made("shelf empty", shelf, &view::Shelf::default(), w),
        made("loose", loose, &sample::loose(), w),
        made("loose empty", loose, &view::LoosePage::default(), w),
        made("correct", correct, &sample::correction(), w),
        made("correct count", correct, &count, w),
        made("correct trial", correct, &trial, w),
        made("specimen", specimen, &sample::specimen(), w),
        made("specimen complete", specimen, &complete, w),
        made("specimen reviewed", specimen, &reviewed, w),
        made("specimen empty", specimen, &view::SpecimenPage::default(), w),
        made("laboratory", laboratory, &sample::laboratory(), w),
        made("laboratory empty", laboratory, &view::Laboratory::default(), w),
        made("import", import, &sample::import(), w),
        made("sign-in", sign_in, &sample::sign_in(), w),
        made("sign-in locked", sign_in, &locked, w),
        made("problem", problem, &sample::problem(), w),
    ]
}

/// Values of an attribute in a page.
fn values<'a>(html: &'a str, attribute: &str) -> Vec<&'a str> {
    let opening = format!(" {attribute}=\"");
    html.split(opening.as_str()).skip(1).filter_map(|rest| rest.split('"').next()).collect()
}

/// Names of the attributes of all tags.
fn attributes(html: &str) -> BTreeSet<String> {
    let tags = html.split('<').skip(1).filter_map(|t| t.split('>').next());
    let name = |part: &str| part.rsplit(' ').next().unwrap_or("").to_ascii_lowercase();
    // What stands before each `="` ends with a name; the last piece of a tag is only a value.
    tags.flat_map(|t| t.match_indices("=\"").map(|(i, _)| name(&t[..i])).collect::<Vec<_>>()).collect()
}

#[test]
fn no_page_carries_a_script_or_a_style_of_its_own() {
    let bad = |html: &str| {
        let inline = attributes(html).into_iter().find(|a| a == "style" || (a.starts_with("on") && a.len() > 2));
        let script = html.matches("<script").count() != 1 || !html.contains("<script src=\"/assets/script.js\" defer></script>");
        inline.or(script.then(|| "script".into())).or(html.contains("<style").then(|| "style".into()))
    };
    for page in all(&ENGLISH) {
        assert_eq!(bad(&page.html), None, "{}", page.name);
        assert!(!page.html.contains("http://") && !page.html.contains("https://"), "{}: nothing from outside", page.name);
    }
    let good = "<script src=\"/assets/script.js\" defer></script>";
    for (html, found) in
        [("<p style=\"x\">", "style"), ("<p class=\"a\" onclick=\"x\">", "onclick"), ("<script>x</script>", "script")]
    {
        assert_eq!(bad(&format!("{good}{html}")).as_deref(), Some(found));
    }
    assert!(
        !SCRIPT.contains("eval(") && !SCRIPT.contains("new Function") && !STYLE.contains("@import") && !STYLE.contains("url(")
    );
}

#[test]
fn hostile_texts_stay_texts() {
    let evil = "</title></svg><script>alert(1)</script>\"'><img src=x onerror=alert(2)>";
    let own = || String::from(evil);
    let some = || Some(own());
    let mut b = sample::bench_trouble();
    b.frame = view::Frame { lab: own(), not_recording: some(), token: own(), who: some(), now: own(), ..b.frame };
    (b.name, b.next.sentence, b.signed_in) = (own(), own(), some());
    b.balances[0] = view::Balance { name: own(), detail: some(), shared_with: vec![own()], ..b.balances[0].clone() };
    let work = b.work.as_mut().unwrap();
    (work.specimen, work.description) = (own(), some());
    work.trials[0].container = some();
    b.recorded[0] =
        view::Recorded { container: some(), role: some(), loose: some(), by: some(), at: own(), ..b.recorded[0].clone() };
    b.specimens[0] = view::SpecimenKey { id: own(), description: some(), chosen: true };
    b.containers[0].id = own();
    b.advice.paste_g = some();
    b.advice.says = vec![own()];
    b.advice.water = Some(view::Water { per_gram: 0.004, per_gram_u: 0.001, from: own() });
    let mut s = sample::specimen();
    (s.id, s.description, s.method, s.opened, s.state) = (own(), some(), own(), own(), own());
    s.checks[0] = view::Check { check: own(), hold: true, about: own(), says: own(), answered: some() };
    s.chart.others[0].0 = own();
    s.history[0] =
        view::Change { what: own(), was: some(), is: some(), why: some(), who: some(), at: own(), ..s.history[0].clone() };
    s.head = Some(view::Head { hash: own(), at: own(), ..Default::default() });
    s.results.group = some();
    let mut l = sample::loose();
    l.things[0].why = own();
    l.things[0].subject.instrument = some();
    l.containers[0] = own();
    let mut i = sample::import();
    (i.text, i.lines[0].fields[0], i.refused) = (own(), own(), some());
    let p = view::Problem { says: own(), ..sample::problem() };
    let w = &ENGLISH;
    for page in [
        made("bench", bench, &b, w),
        made("specimen", specimen, &s, w),
        made("loose", loose, &l, w),
        made("import", import, &i, w),
        made("problem", problem, &p, w),
    ] {
        assert!(page.html.contains("&lt;script&gt;alert(1)"), "{}: the text is shown", page.name);
        assert!(
            !page.html.contains("<script>") && !page.html.contains("<img") && !page.html.contains("</title></svg>"),
            "{}",
            page.name
        );
        let harmless = attributes(&page.html).into_iter().all(|a| !a.starts_with("onerror") && !a.starts_with("src=x"));
        assert!(harmless, "{}", page.name);
    }
}

#[test]
fn regions_are_those_of_their_pages_and_say_the_same() {
    let w = &ENGLISH;
    let cases = [
        (bench(&sample::bench_trouble(), w), regions::bench(&sample::bench_trouble(), w)),
        (shelf(&sample::shelf(), w), regions::shelf(&sample::shelf(), w)),
        (loose(&sample::loose(), w), regions::loose(&sample::loose(), w)),
        (specimen(&sample::specimen(), w), regions::specimen(&sample::specimen(), w)),
        (laboratory(&sample::laboratory(), w), regions::laboratory(&sample::laboratory(), w)),
    ];
    for (page, regions) in cases {
        let page = page.into_string();
        assert!(regions.len() >= 3);
        for (name, inside) in regions {
            assert_eq!(page.matches(&format!("id=\"region-{name}\"")).count(), 1, "{name}");
            // Readings come as live events and are left out of the region.
            assert_eq!(page.contains(&inside.into_string()), name != "live", "{name}");
        }
        assert!(page.contains("id=\"region-answer\" role=\"status\" aria-live=\"assertive\""));
    }
    let field = regions::bench(&sample::bench(), w).into_iter().any(|(_, m)| m.into_string().contains("id=\"code\""));
    assert!(!field, "the code field is in no region that is replaced");
}

#[test]
fn ids_are_unique_and_every_field_has_a_name() {
    for page in all(&ENGLISH) {
        let ids = values(&page.html, "id");
        let unique: BTreeSet<&str> = ids.iter().copied().collect();
        assert_eq!(ids.len(), unique.len(), "{}: {ids:?}", page.name);
        for tag in page.html.split("<input").skip(1).filter_map(|t| t.split('>').next()) {
            if tag.contains("type=\"hidden\"") || tag.contains("type=\"radio\"") {
                continue;
            }
            let id = values(tag, "id");
            assert_eq!(id.len(), 1, "{}: {tag}", page.name);
            assert!(page.html.contains(&format!("<label for=\"{}\"", id[0])), "{}: {tag}", page.name);
        }
        for button in page.html.split("<button").skip(1).filter_map(|t| t.split("</button>").next()) {
            let text: String = button.split('>').skip(1).filter_map(|p| p.split('<').next()).collect();
            assert!(!text.trim().is_empty() || button.contains("aria-label="), "{}: {button}", page.name);
        }
        assert!(page.html.contains("<html lang=\"en\">") && page.html.contains("<h1>"), "{}", page.name);
    }
}

/// Texts in marks tell what did not come from the words.
#[test]
fn every_text_comes_from_the_words_or_the_data() {
    let marked = ENGLISH.each(|name, text| if name == "language" { text } else { format!("⟦{text}⟧").leak() });
    let mut strange = BTreeSet::new();
    for page in all(&marked) {
        strange.extend(strangers(&page.html, &page.data).into_iter().map(|t| (page.name, t)));
    }
    assert!(strange.is_empty(), "{strange:?}");
    let found = strangers("<p>⟦Fine ⟦in⟧ here⟧ Hello <b title=\"Extra\">⟦x⟧</b></p>", "{}");
    assert_eq!(found, ["Extra", "Hello"]);
}

/// Symbols of the plasticity chart, which no language changes, and keys of a keyboard.
const SYMBOLS: [&str; 8] = ["CL", "CH", "ML", "MH", "QWERTYUIOP", "ASDFGHJKL", "ZXCVBNM", "NP"];

fn strangers(html: &str, data: &str) -> Vec<String> {
    let mut shown = String::new();
    for piece in html.split('<').skip(1) {
        let (tag, text) = piece.split_once('>').unwrap_or((piece, ""));
        let tag = format!(" {tag}");
        for attribute in ["aria-label", "title", "placeholder", "data-fill"] {
            shown.extend(values(&tag, attribute).into_iter().flat_map(|v| [" ", v]));
        }
        shown.push(' ');
        shown.push_str(text);
    }
    let mut depth = 0;
    let outside: String = shown
        .chars()
        .map(|c| {
            depth += i32::from(c == '⟦') - i32::from(c == '⟧');
            if depth > 0 || c == '⟧' { ' ' } else { c }
        })
        .collect();
    let words = outside.split(|c: char| !c.is_alphabetic()).filter(|t| t.chars().count() >= 2);
    let known = |t: &&str| !data.contains(t) && !SYMBOLS.contains(t) && !["quot", "amp", "lt", "gt"].contains(t);
    let found: BTreeSet<String> = words.filter(known).map(String::from).collect();
    found.into_iter().collect()
}

#[test]
fn no_page_is_heavy() {
    let assets = STYLE.len() + SCRIPT.len() + ICON.len();
    for page in all(&ENGLISH) {
        assert!(page.html.len() + assets <= 150_000, "{}: {} and {assets} bytes", page.name, page.html.len());
    }
}

#[test]
fn states_are_told_by_word_and_shape() {
    let text = |b: &view::Bench| bench(b, &ENGLISH).into_string();
    let (live, never, stale) = (text(&sample::bench()), text(&sample::bench_idle()), text(&sample::bench_trouble()));
    assert!(live.contains("data-state=\"live\"><svg") && live.contains("<span>live</span>") && live.contains(">steady</span>"));
    assert!(never.contains("data-state=\"never\"><svg") && never.contains("<span>never seen</span>"));
    assert!(stale.contains("data-state=\"stale\"") && stale.contains("<span>unplugged</span>"));
    assert!(stale.contains("NOT RECORDING") && stale.contains("id=\"region-alarm\" role=\"alert\"><div class=\"not-recording\""));
    assert!(
        stale.contains("data-owed=\"overdue\"") && stale.contains("datetime=\"2026-03-02T10:36:00.000000Z\" data-time=\"ago\"")
    );
    let moving = text(&sample::bench_cup());
    assert!(
        moving.contains("data-steady=\"moving\"") && moving.contains(">moving</span>") && moving.contains(ENGLISH.caution_cam)
    );
}

#[test]
fn numbers_stay_numbers_for_the_script_and_for_asks() {
    let page = bench(&sample::bench(), &ENGLISH).into_string();
    assert!(page.contains("data-number=\"38.19\">38.19<"));
    let shelf = shelf(&sample::shelf(), &ENGLISH).into_string();
    assert!(
        shelf.contains("name=\"celsius\" value=\"110\" data-type=\"number\"")
            && shelf.contains("value=\"C14,C15\" data-type=\"list\"")
    );
    let odd = view::Shelf { celsius: f64::NAN, ..sample::shelf() };
    assert!(!super::shelf(&odd, &ENGLISH).into_string().contains("NaN"));
}

// ---- the palette ----

/// Named colours of each block of the style sheet that sets them: light, dark, no connection, paper.
fn palettes() -> Vec<Vec<(String, [f64; 3])>> {
    let blocks = STYLE.split("--ground:").skip(1).map(|rest| format!("--ground:{}", rest.split('}').next().unwrap_or("")));
    let colour = |text: &str| {
        let hex = text.trim().strip_prefix('#')?;
        let part = |i: usize| u8::from_str_radix(hex.get(i..i + 2)?, 16).ok().map(|v| f64::from(v) / 255.0);
        Some([part(0)?, part(2)?, part(4)?])
    };
    let of = |block: String| {
        let pairs = block.split(';').filter_map(|p| p.split_once(':').map(|(n, v)| (n.trim().to_string(), v.to_string())));
        pairs.filter_map(|(n, v)| colour(&v).map(|c| (n, c))).collect()
    };
    blocks.map(of).collect()
}

/// Contrast by WCAG 2.2: relative luminance of sRGB, (L1 + 0.05) / (L2 + 0.05).
fn contrast(a: [f64; 3], b: [f64; 3]) -> f64 {
    let linear = |v: f64| if v <= 0.04045 { v / 12.92 } else { ((v + 0.055) / 1.055).powf(2.4) };
    let luminance = |c: [f64; 3]| 0.2126 * linear(c[0]) + 0.7152 * linear(c[1]) + 0.0722 * linear(c[2]);
    let (a, b) = (luminance(a), luminance(b));
    (a.max(b) + 0.05) / (a.min(b) + 0.05)
}

#[test]
fn contrast_is_enough_in_every_palette() {
    // Against figures known from WCAG's own examples: black on white 21, #767676 on white 4.54.
    assert!((contrast([0.0; 3], [1.0; 3]) - 21.0).abs() < 1e-9);
    assert!((contrast([118.0 / 255.0; 3], [1.0; 3]) - 4.54).abs() < 0.01);
    let texts = [
        ("--ink", "--ground"),
        ("--ink", "--sheet"),
        ("--quiet", "--ground"),
        ("--quiet", "--sheet"),
        ("--on-accent", "--accent"),
        ("--on-alarm", "--alarm"),
        ("--on-call", "--call"),
        ("--alarm", "--ground"),
        ("--alarm", "--sheet"),
        ("--accent", "--sheet"),
        ("--ink", "--band"),
    ];
    let graphics = [
        ("--edge", "--ground"),
        ("--edge", "--sheet"),
        ("--accent", "--ground"),
        ("--series", "--sheet"),
        ("--series", "--band"),
        ("--other", "--sheet"),
    ];
    let palettes = palettes();
    assert_eq!(palettes.len(), 4);
    for palette in &palettes {
        // The paper keeps what it does not name; it is always light.
        let get = |name: &str| {
            let found = palette.iter().chain(&palettes[0]).find(|(n, _)| n == name);
            found.unwrap_or_else(|| panic!("{name} has no colour")).1
        };
        for (pairs, least) in [(&texts[..], 7.0), (&graphics[..], 3.0)] {
            for (front, back) in pairs {
                let is = contrast(get(front), get(back));
                assert!(is >= least, "{front} on {back}: {is:.2} in {palette:?}");
            }
        }
    }
}

#[test]
fn keys_are_large_enough_for_a_glove() {
    let key = STYLE.split("--key: ").nth(1).and_then(|rest| rest.split("px").next()).and_then(|px| px.parse::<f64>().ok());
    // CSS has 96 pixels to the inch.
    assert!(key.is_some_and(|px| px / 96.0 * 25.4 >= 19.0), "{key:?}");
    assert!(STYLE.contains("min-height: var(--key); min-width: var(--key);"));
    assert!(STYLE.contains("prefers-reduced-motion") && STYLE.contains(":focus-visible") && STYLE.contains("@page"));
}
