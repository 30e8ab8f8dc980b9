//! Scenario and sheet files: what a right one means, and where a wrong one is wrong.

mod config_help;

use config_help::expect_fault;
use tarecup_config::methods::{self, Methods};
use tarecup_config::scenario::{self, Mode, Scenario, Water, to_sheet};
use tarecup_config::{Faults, Place};
use tarecup_core::names::MethodName;
use tarecup_core::quantity::Mass;
use tarecup_core::sheet::Kind;

fn shipped() -> Methods {
    methods::shipped().unwrap_or_else(|f| panic!("{f}"))
}

fn read(text: &str, mode: Mode) -> Result<Scenario, Faults> {
    scenario::parse("it.toml", text, mode, &shipped())
}

/// Every key there is, with invented masses.
const WHOLE: &str = r#"title = "One day"
method = "d4318-multipoint"
[[specimen]]
id = "S-101"
method = "t89-t90"
description = "brown clay"
preparation = "wet, 0.425 mm"
bench = "north"
passing_75um_percent = 81
clay_percent = 34.5
natural = { container = "C9", tare_g = 20, wet_g = 50.5, dry_g = 44.25 }
[[specimen.liquid]]
drops = [30, 31]
container = "C11"
tare_g = 21.43
wet_g  = 38.22
dry_g  = [33.43, 33.39]
rate_per_s = 1.95
[[specimen.liquid]]
drops = 17
container = "C12"
tare_g = 21.1
wet_g  = 40.000001
dry_g  = 34.0
set_aside = "fell on the floor"
[[specimen.plastic]]
container = "C14"
tare_g = 20.88
wet_g  = 29.31
dry_g  = 27.80
[[specimen]]
id = "S-102"
not_obtainable = "plastic"
because = "threads crumble"
[[specimen.liquid]]
drops = 25
container = "C11"
tare_g = 21.43
wet_g  = 38.22
dry_g  = 33.39
"#;

#[test]
fn every_key_arrives() {
    let s = read(WHOLE, Mode::Demo).unwrap_or_else(|f| panic!("{f}"));
    assert_eq!((s.title.as_str(), s.method.as_ref().map(|m| m.as_str())), ("One day", Some("d4318-multipoint")));
    let [first, second] = &s.specimens[..] else { panic!("two specimens") };
    let default = MethodName::new("iso17892-cup").expect("a name");
    assert_eq!(s.method_of(first, &default).as_str(), "t89-t90");
    assert_eq!(s.method_of(second, &default).as_str(), "d4318-multipoint");
    assert_eq!((first.id.as_str(), first.at), ("S-101", Place { line: 3, column: 1 }));
    assert_eq!(first.description.as_deref(), Some("brown clay"));
    assert_eq!(first.preparation.as_deref(), Some("wet, 0.425 mm"));
    assert_eq!(first.bench.as_ref().map(|b| b.as_str()), Some("north"));
    assert_eq!((first.passing_75um_percent, first.clay_percent), (Some(81.0), Some(34.5)));
    let row = &first.liquid[0];
    assert_eq!(row.drops.iter().map(|d| d.value).collect::<Vec<_>>(), [30, 31]);
    assert_eq!((row.rate_per_s, row.rate(), first.liquid[1].rate()), (Some(1.95), 1.95, 2.0));
    let Water::Masses(m) = &row.weighed.water else { panic!("masses") };
    assert_eq!((m.tare.value, m.tare.at), (Mass::from_ug(21_430_000), Place { line: 15, column: 10 }));
    assert_eq!(m.dry.iter().map(|d| d.value.ug()).collect::<Vec<_>>(), [33_430_000, 33_390_000]);
    assert_eq!(m.dry[1].at, Place { line: 17, column: 18 });
    let Water::Masses(m) = &first.liquid[1].weighed.water else { panic!("masses") };
    assert_eq!(m.wet.value, Mass::from_ug(40_000_001), "exact to the microgram");
    assert_eq!(first.liquid[1].weighed.set_aside.as_deref(), Some("fell on the floor"));
    assert_eq!((first.natural.len(), first.plastic.len()), (1, 1));
    assert_eq!(second.plastic_not_obtainable.as_deref(), Some("threads crumble"));
    assert_eq!(second.liquid_not_obtainable, None);
}

#[test]
fn line_ends_and_byte_order_marks_change_nothing() {
    let windows = format!("\u{feff}{}", WHOLE.replace('\n', "\r\n"));
    assert_eq!(read(&windows, Mode::Work), read(WHOLE, Mode::Work));
}

#[test]
fn the_sheet_holds_what_was_typed_and_nothing_else() {
    let s = read(WHOLE, Mode::Work).unwrap_or_else(|f| panic!("{f}"));
    let sheet = to_sheet(&s.specimens[0]);
    let kinds: Vec<(Kind, u32)> = sheet.trials.iter().map(|t| (t.kind, t.no)).collect();
    assert_eq!(kinds, [(Kind::Liquid, 1), (Kind::Liquid, 2), (Kind::Thread, 1), (Kind::Natural, 1)]);
    let first = &sheet.trials[0];
    assert_eq!(
        first.closures.iter().map(|c| (c.drops, c.rate_per_s, c.typed)).collect::<Vec<_>>(),
        [(30, Some(1.95), true), (31, Some(1.95), true)]
    );
    assert_eq!((first.tare, first.wet), (Some(Mass::from_ug(21_430_000)), Some(Mass::from_ug(38_220_000))));
    assert_eq!(first.dry.last().map(|d| (d.mass, d.oven_hours)), Some((Mass::from_ug(33_390_000), None)));
    assert_eq!(sheet.trials[1].closures[0].rate_per_s, None, "a rate that nobody stated stays unknown");
    assert_eq!(sheet.trials[1].set_aside.as_deref(), Some("fell on the floor"));
    assert!(sheet.trials.iter().all(|t| t.typed && t.by.is_none() && t.facts.is_empty()));
    assert_eq!(to_sheet(&s.specimens[1]).plastic_not_obtainable.as_deref(), Some("threads crumble"));
}

/// Das, *Principles of Geotechnical Engineering*, example 4.3: drops and water contents as printed.
const DAS: &str = r#"
[[specimen]]
id = "E1"
liquid = [
  { drops = 15, water_percent = 42 },
  { drops = 20, water_percent = 40.8 },
  { drops = 28, water_percent = 39.1 },
]
plastic = { water_percent = 18.7 }
"#;

#[test]
fn a_paper_sheet_may_give_water_contents() {
    let s = read(DAS, Mode::Work).unwrap_or_else(|f| panic!("{f}"));
    assert_eq!(s.title, "it", "without a title the file's name stands in");
    let sheet = to_sheet(&s.specimens[0]);
    let points: Vec<(Option<u32>, Option<f64>)> =
        sheet.trials.iter().map(|t| (t.closures.first().map(|c| c.drops), t.water_percent)).collect();
    assert_eq!(points, [(Some(15), Some(42.0)), (Some(20), Some(40.8)), (Some(28), Some(39.1)), (None, Some(18.7))]);
    let faults = read(DAS, Mode::Demo).expect_err("nothing to weigh").to_string();
    assert_eq!(faults.matches("cannot be weighed at a simulated balance").count(), 4, "{faults}");
    assert_eq!(faults.matches("container is missing").count(), 4, "{faults}");
}

#[test]
fn slips_of_a_laboratory_are_not_faults_of_the_file() {
    // Dry above wet, dry below tare: the checks of a weighing speak about them.
    for (from, to) in
        [("dry_g  = 27.80", "dry_g  = 31.00"), ("dry_g  = 27.80", "dry_g = 12.0"), ("wet_g  = 29.31", "wet_g = 29310")]
    {
        let text = WHOLE.replace(from, to);
        assert_ne!(text, WHOLE);
        assert!(read(&text, Mode::Demo).is_ok(), "{to}");
    }
    let reused = WHOLE.replace("container = \"C14\"", "container = \"C12\"");
    assert!(read(&reused, Mode::Demo).is_ok(), "a container set aside is free");
}

#[test]
fn wrong_values_are_pointed_at() {
    let cases: [(&str, &str, &[&str]); 30] = [
        ("wet_g  = 38.22", "wet_g  = @@-38.22", &["specimen 1, liquid 1: wet_g is -38.22", "above 0"]),
        ("wet_g  = 38.22", "wet_g  = @@0", &["above 0"]),
        ("wet_g  = 38.22", "wet_g  = @@0.0", &["above 0"]),
        ("wet_g  = 38.22", "wet_g  = @@60000.01", &["looking at the unit"]),
        ("wet_g  = 38.22", "wet_g  = @@nan", &["not a finite number"]),
        ("wet_g  = 38.22", "wet_g  = @@-inf", &["not a finite number"]),
        ("wet_g  = 38.22", "wet_g  = @@3.822e1", &["'e' does not belong"]),
        ("wet_g  = 38.22", "wet_g  = @@38.2200001", &["microgram"]),
        ("wet_g  = 38.22", "wet_g  = @@0x26", &["number such as 21.43"]),
        ("wet_g  = 38.22", "wet_g  = @@\"38.22\"", &["without quotes"]),
        ("wet_g  = 38.22", "wet_g  = @@[38.22]", &["is a list"]),
        ("wet_g  = 38.22", "wet_g  = @@99999999999999999999999", &["beyond 1000 kg"]),
        ("33.43, 33.39]", "33.43, @@-1]", &["liquid 1: dry_g[2] is -1"]),
        ("dry_g  = [33.43, 33.39]", "dry_g  = @@[]", &["empty list"]),
        ("drops = 17", "drops = @@0", &["is 0", "drops, 1 to 500"]),
        ("drops = 17", "drops = @@501", &["1 to 500"]),
        ("drops = 17", "drops = @@17.5", &["without point"]),
        ("[30, 31]", "[30, @@-31]", &["drops[2] is -31"]),
        ("rate_per_s = 1.95", "rate_per_s = @@nan", &["0.1 to 20"]),
        ("rate_per_s = 1.95", "rate_per_s = @@0", &["0.1 to 20"]),
        ("clay_percent = 34.5", "clay_percent = @@100.5", &["0 to 100"]),
        ("container = \"C14\"", "container = @@\"C/14\"", &["plastic 1: container", "'/' cannot stand"]),
        ("container = \"C14\"", "container = @@14", &["putting it in quotes"]),
        ("container = \"C14\"", "container = @@\"C11\"", &["which line 14 of this specimen uses already"]),
        ("container = \"C14\"", "container = @@\"C9\"", &["which line 11"]),
        ("id = \"S-102\"", "id = @@\"S-101\"", &["as the specimen of line 3"]),
        ("method = \"t89-t90\"", "method = @@\"t89\"", &["no such method", "t89-t90"]),
        ("method = \"d4318-multipoint\"", "method = @@\"d4318-multpoint\"", &["\"d4318-multipoint\": did you mean"]),
        ("not_obtainable = \"plastic\"", "not_obtainable = @@\"plastics\"", &["\"plastic\": did you mean"]),
        ("set_aside = \"fell on the floor\"", "set_aside = @@\"\"", &["is empty"]),
    ];
    for (right, wrong, words) in cases {
        let marked = WHOLE.replacen(right, wrong, 1);
        for mode in [Mode::Demo, Mode::Work] {
            expect_fault(&marked, words, |t| read(t, mode));
        }
    }
}

#[test]
fn wrong_and_missing_keys_are_pointed_at() {
    let cases: [(&str, &str, &[&str]); 12] = [
        ("id = \"S-102\"\n", "", &["specimen 2: id is missing", "id = \"S-101\""]),
        ("[[specimen.plastic]]\ncontainer = \"C14\"\n", "@@[[specimen.plastic]]\n", &["plastic 1: container is missing"]),
        (
            "[[specimen.plastic]]\ncontainer = \"C14\"\ntare_g = 20.88\n",
            "@@[[specimen.plastic]]\ncontainer = \"C14\"\n",
            &["tare_g is missing"],
        ),
        ("because = \"threads crumble\"\n", "", &["specimen 2: because is missing"]),
        ("not_obtainable = \"plastic\"\nbecause", "@@because", &["nothing is said to be not obtainable"]),
        ("clay_percent", "@@clay_procent", &["\"clay_percent\": did you mean"]),
        ("rate_per_s = 1.95", "@@rates = 1.95", &["is not a known key"]),
        ("title = \"One day\"", "@@titel = \"One day\"", &["\"title\": did you mean"]),
        ("title = \"One day\"", "@@drops = 3", &["does not belong here", "[[specimen.liquid]]"]),
        ("[[specimen.plastic]]", "[[specimen.@@plastics]]", &["\"plastic\": did you mean"]),
        (
            "clay_percent = 34.5\n",
            "clay_percent = 34.5\n@@cone = [{ penetration_mm = 20.1 }]\n",
            &["no simulated cone", "[[specimen.liquid]]"],
        ),
        ("bench = \"north\"", "bench = @@\"north east\"", &["' ' cannot stand"]),
    ];
    for (right, wrong, words) in cases {
        assert!(WHOLE.contains(right), "{right}");
        let mut marked = WHOLE.replacen(right, wrong, 1);
        if !marked.contains("@@") {
            // What is missing from a table is told at its header; here the second specimen's.
            let header = marked.rfind("[[specimen]]").expect("a header");
            marked.insert_str(header, "@@");
        }
        expect_fault(&marked, words, |t| read(t, Mode::Demo));
    }
}

/// A sheet of the cone, with invented figures.
const CONE: &str = r#"method = "bs1377-cone"
[[specimen]]
id = "S-1"
liquid_limit_oven_dried = 31.5
[[specimen.cone]]
penetration_mm = [15.8, 16]
container = "C1"
tare_g = 6.91
wet_g = 84.06
dry_g = 64.07
[[specimen.cone]]
penetration_mm = 18.8
water_percent = 37.4
"#;

#[test]
fn cone_rows_become_cone_trials() {
    let scenario = read(CONE, Mode::Work).unwrap_or_else(|f| panic!("{f}"));
    let sheet = to_sheet(&scenario.specimens[0]);
    assert_eq!(sheet.liquid_limit_oven_dried, Some(31.5));
    let shown: Vec<_> =
        sheet.trials.iter().map(|t| (t.kind, t.no, t.penetrations.iter().map(|p| p.mm).collect::<Vec<_>>())).collect();
    assert_eq!(shown, [(Kind::Cone, 1, vec![15.8, 16.0]), (Kind::Cone, 2, vec![18.8])]);
    assert!(sheet.trials.iter().all(|t| t.typed && t.penetrations.iter().all(|p| p.typed)), "what `work` reads was typed");
}

#[test]
fn wrong_cone_rows_are_pointed_at() {
    let cases: [(&str, &str, &[&str]); 6] = [
        ("penetration_mm = 18.8", "penetration_mm = @@0", &["millimetres of penetration, 0.1 to 60"]),
        ("penetration_mm = 18.8", "penetration_mm = @@\"18\"", &["penetration"]),
        ("penetration_mm = 18.8", "penetration_mm = @@[]", &["empty list"]),
        ("[[specimen.cone]]\npenetration_mm = 18.8", "@@[[specimen.cone]]", &["penetration_mm is missing", "19.8"]),
        ("penetration_mm = 18.8", "@@drops = 25\npenetration_mm = 18.8", &["does not belong here", "[[specimen.liquid]]"]),
        ("liquid_limit_oven_dried = 31.5", "liquid_limit_oven_dried = @@-3", &["percent of dry mass"]),
    ];
    for (right, wrong, words) in cases {
        expect_fault(&CONE.replacen(right, wrong, 1), words, |t| read(t, Mode::Work));
    }
}

#[test]
fn files_without_matter_are_pointed_at() {
    let cases: [(&str, &[&str]); 6] = [
        ("@@", &["specimen is missing", "[[specimen]]"]),
        ("specimen = @@[]", &["empty list"]),
        ("specimen = @@3", &["is a whole number", "[[specimen]]"]),
        ("@@[[specimen]]\nid = \"S\"\n", &["specimen 1 has no determination", "[[specimen.liquid]]"]),
        ("[[specimen]]\nid = \"S\"\nliquid = @@[]\n", &["empty list"]),
        ("[[specimen]]\nid = \"S\"\nplastic = [{ water_percent = 20.0, @@tare_g = 3 }]\n", &["the two may disagree"]),
    ];
    for (marked, words) in cases {
        expect_fault(marked, words, |t| read(t, Mode::Work));
    }
}

#[test]
fn a_specimen_may_have_nothing_that_can_be_obtained() {
    let text = "[[specimen]]\nid='S'\nnot_obtainable=['liquid','plastic']\nbecause='sand'\n";
    let s = read(text, Mode::Demo).unwrap_or_else(|f| panic!("{f}"));
    assert_eq!(s.specimens[0].liquid_not_obtainable.as_deref(), Some("sand"));
    assert_eq!(s.specimens[0].plastic_not_obtainable.as_deref(), Some("sand"));
}

#[test]
fn many_faults_are_told_and_the_rest_counted() {
    let rows = "[[specimen.plastic]]\nwater_percent = -1\n".repeat(300);
    let faults = read(&format!("[[specimen]]\nid = \"S\"\n{rows}"), Mode::Work).expect_err("faults");
    assert_eq!((faults.list.len(), faults.more), (100, 200));
    assert!(faults.to_string().ends_with("and at least 200 more; correct these first"));
}

#[test]
fn one_pass_tells_all_faults_in_order() {
    let text = "[[specimen]]\nid = \"a b\"\nclay_percent = -1\nbench = \"/\"\nmethod = \"x\"\ndescription = 3\n[[specimen.liquid]]\n\
                drops = 0\nrate_per_s = 0\ncontainer = \"?\"\ntare_g = 0\nwet_g = -1\ndry_g = [nan, 0]\nset_aside = 1\n[[specimen]]\n";
    let faults = read(text, Mode::Demo).expect_err("faults");
    let lines: Vec<u32> = faults.list.iter().map(|f| f.line).collect();
    assert_eq!(lines, [2, 3, 4, 5, 6, 8, 9, 10, 11, 12, 13, 13, 14, 15, 15], "{faults}");
}
