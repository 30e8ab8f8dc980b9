//! The demonstration from outside: scenario files in, JSON lines out, judged by numpy.

mod e2e_support;

use e2e_support::*;
use serde_json::{Value, json};
use std::collections::{BTreeMap, BTreeSet};
use std::path::Path;

const MULTI: &str = "d4318-multipoint";

/// E1–E4: published sheets. E1 and E2 print water contents; masses that give them exactly are made up for them.
fn published() -> Vec<Sheet> {
    let wet = |drops: u32, container: &str, tenths: u32| Liquid { drops: vec![drops], slice: from_water(container, tenths) };
    // B. M. Das, Principles of Geotechnical Engineering, example 4.3.
    let e1 = sheet(
        "E1",
        MULTI,
        vec![wet(15, "A1", 420), wet(20, "A2", 408), wet(28, "A3", 391)],
        vec![from_water("A4", 187), from_water("A5", 187)],
    );
    // A published university course problem on soils: five readings, PL 23, w 38.
    let mut e2 = sheet(
        "E2",
        MULTI,
        vec![wet(6, "B1", 525), wet(12, "B2", 471), wet(20, "B3", 432), wet(28, "B4", 386), wet(32, "B5", 370)],
        vec![from_water("B6", 230), from_water("B7", 230)],
    );
    e2.natural = vec![from_water("B8", 380)];
    // A college's soil laboratory data sheet of 2004.
    let e3 = sheet(
        "E3",
        MULTI,
        vec![
            liquid(&[34], "D1", "17.33", "48.61", &["41.19"]),
            liquid(&[27], "D2", "17.41", "55.53", &["46.05"]),
            liquid(&[22], "D3", "17.45", "51.71", &["42.98"]),
            liquid(&[17], "D4", "17.36", "50.51", &["41.54"]),
        ],
        vec![slice("D5", "20.63", "29.26", &["27.90"]), slice("D6", "20.66", "30.03", &["28.53"])],
    );
    // A published laboratory report, tables 4-1 and 4-2.
    let e4 = sheet(
        "E4",
        MULTI,
        vec![
            liquid(&[28], "F1", "50.94", "66.74", &["62.99"]),
            liquid(&[21], "F2", "51.55", "67.56", &["63.53"]),
            liquid(&[15], "F3", "51.78", "66.90", &["62.94"]),
        ],
        vec![slice("F4", "51.80", "67.50", &["65.04"]), slice("F5", "50.90", "65.50", &["63.26"])],
    );
    vec![e1, e2, e3, e4]
}

/// What else a laboratory meets.
fn varied() -> Vec<Sheet> {
    // Containers of E1 again: used after the first specimen is finished with them.
    let again = sheet(
        "AGAIN",
        MULTI,
        vec![
            liquid(&[31], "A1", "20.00", "36.79", &["31.96"]),
            liquid(&[24], "A2", "20.00", "37.29", &["32.09"]),
            liquid(&[17], "A3", "20.00", "38.12", &["32.40"]),
        ],
        vec![slice("A4", "20.00", "28.43", &["26.92"]), slice("A5", "20.00", "29.13", &["27.48"])],
    );
    let repeated = sheet(
        "REPEATED",
        MULTI,
        vec![
            liquid(&[30], "G1", "19.39", "34.82", &["29.63", "29.58"]),
            liquid(&[25], "G2", "22.77", "37.05", &["32.18", "32.13"]),
            liquid(&[19], "G3", "23.54", "39.91", &["34.19", "34.14"]),
        ],
        vec![slice("G4", "21.51", "32.21", &["29.35", "29.30"]), slice("G5", "20.21", "28.98", &["26.67", "26.62"])],
    );
    let one_point = sheet(
        "ONE-POINT",
        "d4318-one-point",
        vec![liquid(&[24], "H1", "20.68", "33.77", &["30.23"]), liquid(&[26], "H2", "22.19", "37.56", &["33.44"])],
        vec![slice("H3", "23.74", "33.12", &["31.59"]), slice("H4", "23.07", "31.06", &["29.73"])],
    );
    let t89 = sheet(
        "T89",
        "t89-t90",
        vec![
            liquid(&[33], "J1", "19.81", "32.18", &["29.10"]),
            liquid(&[25], "J2", "22.95", "38.19", &["34.31"]),
            liquid(&[18], "J3", "23.28", "40.58", &["36.05"]),
        ],
        vec![slice("J4", "23.25", "32.11", &["30.75"])],
    );
    // Two closures of one paste: the last one counts.
    let iso = sheet(
        "ISO",
        "iso17892-cup",
        vec![
            liquid(&[43, 44], "K1", "20.60", "38.12", &["31.08"]),
            liquid(&[31], "K2", "19.62", "40.66", &["32.08"]),
            liquid(&[22, 21], "K3", "21.15", "39.14", &["31.72"]),
            liquid(&[14], "K4", "20.33", "41.20", &["32.40"]),
        ],
        vec![slice("K5", "23.27", "32.07", &["30.22"]), slice("K6", "21.07", "31.58", &["29.34"])],
    );
    let mut stated = sheet(
        "NP-STATED",
        MULTI,
        vec![
            liquid(&[29], "L1", "21.36", "32.44", &["30.36"]),
            liquid(&[23], "L2", "20.12", "31.65", &["29.45"]),
            liquid(&[18], "L3", "19.52", "31.50", &["29.16"]),
        ],
        vec![],
    );
    stated.not_obtainable = Some("plastic".into());
    stated.natural = vec![slice("L4", "19.30", "55.66", &["49.20"]), slice("L5", "19.90", "50.10", &["44.80"])];
    // PL above LL as weighed; one trial at 47 drops stands outside every window and still enters the line.
    let reversed = sheet(
        "REVERSED",
        MULTI,
        vec![
            Liquid { drops: vec![47], slice: from_water("M1", 198) },
            Liquid { drops: vec![28], slice: from_water("M2", 205) },
            Liquid { drops: vec![21], slice: from_water("M3", 209) },
            Liquid { drops: vec![16], slice: from_water("M4", 213) },
        ],
        vec![from_water("M5", 231), from_water("M6", 229)],
    );
    // One trial a person set aside.
    let mut aside = published().remove(3);
    aside.id = "ASIDE".into();
    aside.liquid.iter_mut().for_each(|l| l.slice.container.replace_range(..1, "P"));
    aside.plastic.iter_mut().for_each(|s| s.container.replace_range(..1, "P"));
    aside.liquid.push(liquid(&[40], "P9", "20.50", "39.00", &["33.49"]));
    aside.liquid[3].slice.set_aside = true;
    vec![again, repeated, one_point, t89, iso, stated, reversed, aside]
}

fn written(dir: &Path, name: &str, sheets: &[Sheet]) -> std::path::PathBuf {
    let path = dir.join(name);
    std::fs::write(&path, scenario(sheets)).expect("written");
    path
}

fn number(value: &Value) -> f64 {
    value.as_f64().unwrap_or(f64::NAN)
}

#[test]
fn published_sheets_come_out_as_published_and_as_numpy_has_them() {
    let dir = tempfile::tempdir().expect("a folder");
    let sheets = published();
    let file = written(dir.path(), "published.toml", &sheets);
    let (ended, lines) = demo(&file, None);
    assert_eq!(ended.code, 0, "{}", ended.err);
    assert_judged(&lines, &sheets);
    // Printed beside the sheets, or least squares of the printed readings: LL, PL, PI and what printing allows.
    let answers = [
        ("E1", 39.7, 18.7, 21.0, 0.1),
        ("E2", 39.97, 23.0, 16.97, 0.005),
        ("E3", 33.60, 18.88, 14.72, 0.005),
        ("E4", 32.09, 18.35, 13.74, 0.005),
    ];
    for (id, ll, pl, pi, within) in answers {
        let ours = last_limits(&lines, id);
        let got = [("liquid_limit", ll), ("plastic_limit", pl), ("plasticity_index", pi)];
        for (part, want) in got {
            let value = number(&ours[part]["value"]);
            assert!((value - want).abs() <= within, "{id} {part}: {value} against {want}");
        }
        assert_eq!(ours["state"], "complete", "{id}");
    }
    // E2: (38 - 23) / 17 printed as 0.88. E3: the sheet says CL.
    assert!((number(&last_limits(&lines, "E2")["liquidity_index"]) - 0.88).abs() < 0.005);
    assert_eq!(last_limits(&lines, "E3")["group"], "CL");
    same_as_work(&file, &sheets, &lines);
    println!("four published sheets through pseudo-terminals in {:.1} s", ended.took.as_secs_f64());
}

#[test]
fn what_a_laboratory_meets_comes_out_as_numpy_has_it() {
    let dir = tempfile::tempdir().expect("a folder");
    let mut sheets = vec![published().remove(0)];
    sheets.extend(varied());
    let file = written(dir.path(), "varied.toml", &sheets);
    let (ended, lines) = demo(&file, None);
    assert_eq!(ended.code, 0, "{}", ended.err);
    assert_judged(&lines, &sheets);
    for id in ["NP-STATED", "REVERSED"] {
        let index = &last_limits(&lines, id)["plasticity_index"];
        assert_eq!((&index["non_plastic"], &index["value"]), (&json!(true), &Value::Null), "{id}");
    }
    let checks = |id: &str| -> BTreeSet<String> {
        let checks = last_limits(&lines, id)["checks"].as_array().cloned().unwrap_or_default();
        checks.iter().map(|c| c["check"].as_str().unwrap_or_default().to_owned()).collect()
    };
    assert!(checks("REVERSED").contains("drops"), "47 drops are spoken about: {:?}", checks("REVERSED"));
    let trials = last_limits(&lines, "ISO")["trials"].clone();
    assert_eq!((&trials[0]["drops"], &trials[0]["closures"]), (&json!(44), &json!([43, 44])));
    let aside = last_limits(&lines, "ASIDE")["trials"].clone();
    assert_eq!((&aside[3]["used"], &aside[3]["set_aside"]), (&json!(false), &json!("the soil slid")));
    let twice = last_limits(&lines, "REPEATED")["trials"][0].clone();
    assert_eq!(twice["dry_g"], json!(29.58), "the last dry weighing counts");
    let reused = last_limits(&lines, "AGAIN")["trials"][0].clone();
    assert_eq!((&reused["container"], &reused["tare_g"]), (&json!("A1"), &json!(20.0)), "the tare in force at the wet weighing");
    same_as_work(&file, &sheets, &lines);
    println!("{} specimens in {:.1} s", sheets.len(), ended.took.as_secs_f64());
}

/// A limit without what the record of other specimens puts in it, which `work` does not have.
fn without_record(limit: &Value) -> Value {
    let mut limit = limit.clone();
    if let Value::Object(members) = &mut limit {
        members.retain(|k, _| !["u", "interval_95", "u_from"].contains(&k.as_str()));
    }
    limit
}

/// `work --json` on the same file: the same numbers, no revision, no ledger.
fn same_as_work(file: &Path, sheets: &[Sheet], lines: &[Value]) {
    let ended = tarecup(&["work", &file.display().to_string(), "--json"]);
    assert_eq!(ended.code, 0, "{}", ended.err);
    let worked = messages(&ended.out);
    assert_eq!(worked.len(), sheets.len(), "one line a specimen");
    for (worked, sheet) in worked.iter().zip(sheets) {
        let played = last_limits(lines, &sheet.id);
        assert_eq!((&worked["specimen"], &worked["revision"], &worked["ledger"]), (&json!(sheet.id), &json!(0), &Value::Null));
        for part in
            ["liquid_limit", "plastic_limit", "plasticity_index", "natural_water_percent", "liquidity_index", "group", "method"]
        {
            assert_eq!(without_record(&worked[part]), without_record(&played[part]), "{} {part}", sheet.id);
        }
        let row = |t: &Value| -> Vec<Value> {
            ["kind", "no", "drops", "closures", "container", "tare_g", "wet_g", "dry_g", "water_percent", "used"]
                .map(|k| t[k].clone())
                .into()
        };
        let rows = |v: &Value| -> Vec<Vec<Value>> { v["trials"].as_array().into_iter().flatten().map(row).collect() };
        assert_eq!(rows(worked), rows(&played), "{}", sheet.id);
        let keys = |v: &Value| -> BTreeSet<String> { v.as_object().into_iter().flatten().map(|(k, _)| k.clone()).collect() };
        assert_eq!(keys(worked), keys(&played), "{}", sheet.id);
    }
}

fn names(names: &[&str]) -> BTreeSet<String> {
    names.iter().map(|n| (*n).to_owned()).collect()
}

/// Members that stand there only when there is something in them.
const MAY_LACK: [&str; 10] = [
    "set_aside",
    "u_from",
    "interval_95_classical",
    "slope_per_mm",
    "penetrations_mm",
    "water_u",
    "group_en_iso_14688_2",
    "group_m145",
    "group_index",
    "interval_95",
];

/// The members of the limits payload, written out: they are a contract.
fn limits_members() -> BTreeMap<&'static str, BTreeSet<String>> {
    let fixed = "v specimen revision seq at state method edition liquid_limit plastic_limit plasticity_index natural_water_percent liquidity_index group trials checks ledger";
    // Added since, which version 1 allows.
    let added = "consistency_index flow_index toughness_index activity changed";
    let row = "kind no drops closures rate_per_s penetration_mm container tare_g wet_g dry_g water_percent used typed by balance cup at";
    let split = |text: &str| text.split(' ').map(str::to_owned).collect::<BTreeSet<String>>();
    let liquid = "value rounded u interval_95 points slope_per_decade residual_sd how";
    BTreeMap::from([
        ("", split(fixed).union(&split(added)).cloned().collect()),
        ("liquid_limit", split(liquid)),
        ("plastic_limit", split("value rounded u points")),
        ("plasticity_index", split("value rounded u non_plastic")),
        ("ledger", split("id epoch seq hash")),
        ("trials", split(row)),
        ("checks", split("check severity about says answered facts")),
    ])
}

fn members_differ(limits: &Value) -> Vec<String> {
    let mut wrong = Vec::new();
    let mut look = |name: &str, value: &Value, want: &BTreeSet<String>| {
        if let Value::Object(members) = value {
            let have: BTreeSet<String> =
                members.keys().filter(|k| want.contains(*k) || !MAY_LACK.contains(&k.as_str())).cloned().collect();
            let off: Vec<&String> = have.symmetric_difference(want).collect();
            if !off.is_empty() {
                wrong.push(format!("{name}: {off:?}"));
            }
        }
    };
    for (name, want) in limits_members() {
        match (name, &limits[name]) {
            ("", _) => look("limits", limits, &want),
            (_, Value::Array(rows)) => rows.iter().for_each(|r| look(name, r, &want)),
            (_, value) => look(name, value, &want),
        }
    }
    wrong
}

#[test]
fn lines_are_messages_and_facts_come_in_order() {
    let dir = tempfile::tempdir().expect("a folder");
    let sheets = [published().remove(3), varied().remove(0)];
    let (ended, lines) = demo(&written(dir.path(), "shape.toml", &sheets), None);
    assert_eq!(ended.code, 0, "{}", ended.err);
    let mut expected = 0;
    let mut kinds = BTreeSet::new();
    for line in &lines {
        let keys: BTreeSet<String> = line.as_object().expect("an object").keys().cloned().collect();
        assert_eq!(keys, names(&["topic", "payload", "retain", "qos"]));
        let topic = line["topic"].as_str().expect("a text");
        assert!(topic.starts_with("tarecup/v1/wet-room/"), "{topic}");
        let kind = tail(topic).split('/').next().unwrap_or_default().to_owned();
        let want = match kind.as_str() {
            "live" => (false, 0),
            "fact" => (false, 1),
            _ => (true, 1),
        };
        assert_eq!((&line["retain"], &line["qos"]), (&json!(want.0), &json!(want.1)), "{topic}");
        let payload = &line["payload"];
        if !payload.is_null() {
            assert!(payload["v"] == 1 && payload["seq"].is_u64() && payload.get("at").is_some(), "{topic}: {payload}");
        }
        if kind == "fact" {
            expected += 1;
            assert_eq!(payload["seq"], json!(expected), "facts come in order without a gap");
            for key in ["ledger", "epoch", "kind", "fact"] {
                assert!(payload.get(key).is_some(), "a fact says its {key}: {payload}");
            }
        }
        if topic.ends_with("/limits") {
            assert_eq!(members_differ(payload), Vec::<String>::new());
        }
        kinds.insert(kind);
    }
    assert!(expected > 40, "{expected} facts");
    assert_eq!(kinds, names(&["presence", "instrument", "bench", "live", "fact", "container", "specimen", "head", "offer"]));
    // Control: a member that went or came is noticed.
    let mut limits = last_limits(&lines, "E4");
    assert!(limits["ledger"]["hash"].is_string());
    limits["liquid_limit"].as_object_mut().expect("an object").remove("u");
    limits["trials"][0]["slope"] = json!(1);
    assert_eq!(members_differ(&limits).len(), 2);
}

/// Messages without what is drawn anew at every start: the ledger's id, hashes and signatures.
fn comparable(lines: &[Value]) -> (Vec<Value>, BTreeMap<String, Value>) {
    fn clean(value: &mut Value) {
        match value {
            Value::Object(members) => {
                for (key, value) in members.iter_mut() {
                    match key.as_str() {
                        "ledger" if value.is_string() => *value = json!("id"),
                        "id" | "hash" | "signature" if value.as_str().is_some_and(|t| t.len() >= 16) => *value = json!("drawn"),
                        _ => clean(value),
                    }
                }
            }
            Value::Array(items) => items.iter_mut().for_each(clean),
            _ => (),
        }
    }
    let (mut facts, mut last) = (Vec::new(), BTreeMap::new());
    for line in lines {
        let mut payload = line["payload"].clone();
        clean(&mut payload);
        let topic = line["topic"].as_str().unwrap_or_default();
        match tail(topic) {
            "fact" => facts.push(payload),
            // How many readings a second are shown depends on how they were gathered.
            tail if tail.starts_with("live/pan") => (),
            _ => drop(last.insert(topic.to_owned(), payload)),
        }
    }
    (facts, last)
}

#[test]
fn the_same_day_twice_gives_the_same_messages() {
    let dir = tempfile::tempdir().expect("a folder");
    let file = written(dir.path(), "twice.toml", &[published().remove(2), varied().remove(1), varied().remove(4)]);
    let state = dir.path().join("state");
    let played = || {
        let _ = std::fs::remove_dir_all(&state);
        let (ended, lines) = demo(&file, Some(&state));
        assert_eq!(ended.code, 0, "{}", ended.err);
        lines
    };
    let (first, second) = (played(), played());
    let (a, b) = (comparable(&first), comparable(&second));
    for (a, b) in a.0.iter().zip(&b.0) {
        assert_eq!(a, b);
    }
    assert_eq!(a.0.len(), b.0.len());
    for (topic, payload) in &a.1 {
        assert_eq!(Some(payload), b.1.get(topic), "{topic}");
    }
    // Control: ids do differ, and are the only thing taken out.
    assert_ne!(last_limits(&first, "E3")["ledger"]["id"], last_limits(&second, "E3")["ledger"]["id"]);
    assert!(a.0.iter().any(|f| f["kind"] == "weighed" && f["fact"]["mass_ug"].is_i64()), "{:?}", a.0.get(20));
}

#[test]
fn a_specimen_that_cannot_be_completed_ends_with_code_3() {
    let dir = tempfile::tempdir().expect("a folder");
    // Two liquid trials only: a line can be drawn, the method wants three.
    let mut two = published().remove(3);
    two.liquid.pop();
    two.id = "TWO".into();
    // A dry mass above the wet one: a slip of the pen, or two containers exchanged.
    let mut slip = varied().remove(0);
    slip.id = "SLIP".into();
    slip.liquid[1].slice.dry = vec!["37.90".into()];
    let good = published().remove(0);
    let mut sheets = vec![good, two, slip];
    for (n, s) in sheets.iter_mut().enumerate() {
        let rows = s.liquid.iter_mut().map(|l| &mut l.slice).chain(s.plastic.iter_mut());
        rows.for_each(|r| r.container = format!("{}-{n}", r.container));
    }
    let file = written(dir.path(), "short.toml", &sheets);
    let (ended, lines) = demo(&file, None);
    assert_eq!(ended.code, 3, "{}", ended.err);
    assert_eq!(last_limits(&lines, "E1")["state"], "complete");
    assert_judged(&lines, &sheets[..2]);
    let two = last_limits(&lines, "TWO");
    assert_eq!(two["state"], "provisional");
    assert!(two["checks"].as_array().is_some_and(|c| c.iter().any(|c| c["check"] == "missing")), "{}", two["checks"]);
    let slip = last_limits(&lines, "SLIP");
    assert_eq!(slip["state"], "provisional");
    let trial = &slip["trials"][1];
    assert_eq!(
        (&trial["used"], &trial["water_percent"]),
        (&json!(false), &Value::Null),
        "no water content from impossible masses"
    );
    let masses = slip["checks"].as_array().into_iter().flatten().find(|c| c["about"] == "liquid 2" && c["severity"] == "hold");
    assert!(masses.is_some(), "the slip is held: {}", slip["checks"]);
    // Control: the same files with the slips mended end with 0.
    let mended = [published().remove(3), varied().remove(0)];
    assert_eq!(demo(&written(dir.path(), "mended.toml", &mended), None).0.code, 0);
}

#[test]
fn the_own_day_ends_with_code_0() {
    let ended = tarecup(&["demo", "--once", "--mqtt", &format!("127.0.0.1:{}", free_port())]);
    assert_eq!(ended.code, 0, "{}{}", ended.out, ended.err);
    assert!(ended.out.contains("MW-106") && ended.out.contains("NP"), "{}", ended.out);
    assert!(!ended.out.contains("NOT everything"), "{}", ended.out);
    assert!(ended.took.as_secs() < 20, "six specimens took {:?}", ended.took);
}

#[test]
fn a_wrong_scenario_starts_nothing_and_says_where() {
    let dir = tempfile::tempdir().expect("a folder");
    let good = scenario(&[published().remove(3)]);
    // What is put in, what is replaced, the line that is named and a word that is said.
    let cases: &[(&str, &str, &str, usize, &str)] = &[
        ("unknown-key", "drops = [28]", "dropps = [28]", 6, "drops"),
        ("no-number", "tare_g = 50.94", "tare_g = \"fifty\"", 8, "tare_g"),
        ("method", "method = \"d4318-multipoint\"", "method = \"d4381\"", 4, "d4318-multipoint"),
        ("drops", "drops = [28]", "drops = [0]", 6, "drops"),
        ("toml", "drops = [28]", "drops = [28", 7, "expected"),
        ("twice", "container = \"F2\"", "container = \"F1\"", 13, "F1"),
        ("precision", "tare_g = 50.94", "tare_g = 50.94000001", 8, "tare_g"),
    ];
    for (name, from, to, line, word) in cases {
        assert!(good.contains(from), "{name}: {good}");
        let file = dir.path().join(format!("{name}.toml"));
        std::fs::write(&file, good.replacen(from, to, 1)).expect("written");
        let state = dir.path().join(format!("state-{name}"));
        let (ended, lines) = demo(&file, Some(&state));
        assert_eq!(ended.code, 2, "{name}: {}", ended.err);
        let place = format!("{}:{line}:", file.display());
        let after = ended.err.split(&place).nth(1).unwrap_or_else(|| panic!("{name}: {place} is named in\n{}", ended.err));
        assert!(after.starts_with(|c: char| c.is_ascii_digit()), "{name}: a column in\n{}", ended.err);
        assert!(ended.err.to_lowercase().contains(&word.to_lowercase()), "{name}: {word} in\n{}", ended.err);
        assert!(lines.is_empty() && !state.exists(), "{name}: nothing was started");
        let worked = tarecup(&["work", &file.display().to_string()]);
        assert_eq!((worked.code, worked.out.as_str()), (2, ""), "{name}");
    }
    // Control: unharmed, the file is taken.
    let file = dir.path().join("good.toml");
    std::fs::write(&file, good).expect("written");
    assert_eq!(tarecup(&["work", &file.display().to_string()]).code, 0);
    let missing = tarecup(&["demo", "--once", "--scenario", "/nowhere/day.toml"]);
    assert!(missing.code == 2 && missing.err.contains("/nowhere/day.toml"), "{}", missing.err);
}
