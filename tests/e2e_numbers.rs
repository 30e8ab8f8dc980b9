//! Numbers by the built program: validation, sheets of the cone, comparison, and the record across a restart.

mod e2e_support;

use e2e_support::{PATIENCE, Running, TARECUP, free_port, until};
use serde_json::Value;
use std::path::Path;
use std::process::{Command, Output};

fn tarecup(args: &[&str]) -> Output {
    Command::new(TARECUP).args(args).output().expect("the program starts")
}

fn text(bytes: &[u8]) -> String {
    String::from_utf8_lossy(bytes).into_owned()
}

#[test]
fn a_validation_is_reported_and_never_overwritten() {
    let dir = tempfile::tempdir().expect("a folder");
    let file = dir.path().join("validation.json");
    let ran = tarecup(&["validate", "--json", "--out", &file.to_string_lossy()]);
    assert_eq!(ran.status.code(), Some(0), "{}", text(&ran.stdout));
    let told: Value = serde_json::from_slice(&ran.stdout).expect("JSON");
    let kept: Value = serde_json::from_slice(&std::fs::read(&file).expect("a report")).expect("JSON");
    assert_eq!(told, kept);
    assert_eq!((&told["ok"], &told["failed"], &told["signature"]), (&Value::Bool(true), &Value::from(0), &Value::Null));
    assert!(told["at"].as_str().is_some_and(|t| t.ends_with('Z')));
    // The file that ran, digested by another program.
    let other = Command::new("sha256sum").arg(TARECUP).output().expect("sha256sum");
    assert_eq!(told["executable_sha256"].as_str(), text(&other.stdout).split(' ').next());
    let values = told["values"].as_array().expect("values");
    assert!(values.len() > 60);
    for v in values {
        assert!(v["ok"] == true && !v["source"].as_str().unwrap_or_default().is_empty() && !v["got"].is_null(), "{v}");
    }
    let again = tarecup(&["validate", "--out", &file.to_string_lossy()]);
    assert_eq!(again.status.code(), Some(2));
    assert!(text(&again.stderr).contains("name a new file"), "{}", text(&again.stderr));
    let people = text(&tarecup(&["validate"]).stdout);
    assert!(people.contains("JCGM 100:2008, example H.3") && people.contains(" 0 wrong;"), "{people}");
}

const CONE: &str = r#"method = "bs1377-cone"
[[specimen]]
id = "E5"
cone = [
    { penetration_mm = 15.9, tare_g = 6.91, wet_g = 84.06, dry_g = 64.07 },
    { penetration_mm = 18.8, tare_g = 6.63, wet_g = 66.40, dry_g = 50.13 },
    { penetration_mm = 21.4, tare_g = 6.62, wet_g = 77.71, dry_g = 58.27 },
    { penetration_mm = [24.0, 24.2], tare_g = 6.84, wet_g = 77.86, dry_g = 57.91 },
]
plastic = [
    { tare_g = 21.95, wet_g = 35.61, dry_g = 32.88 },
    { tare_g = 21.74, wet_g = 35.55, dry_g = 32.75 },
]
"#;

/// BS 1377-2, a published sheet of the cone: printed 37.3, 25.2, 12.0.
#[test]
fn a_sheet_of_the_cone_is_worked() {
    let dir = tempfile::tempdir().expect("a folder");
    let file = dir.path().join("cone.toml");
    std::fs::write(&file, CONE).expect("written");
    let file = file.to_string_lossy();
    let ran = tarecup(&["work", "--json", &file]);
    let limits: Value = serde_json::from_slice(&ran.stdout).unwrap_or_else(|e| panic!("{e}: {}", text(&ran.stderr)));
    let near = |v: &Value, wanted: f64, within: f64| (v.as_f64().unwrap_or(f64::NAN) - wanted).abs() < within;
    assert!(near(&limits["liquid_limit"]["value"], 37.25, 0.005), "{limits}");
    assert!(near(&limits["plastic_limit"]["value"], 25.2, 0.05) && near(&limits["plasticity_index"]["value"], 12.0, 0.1));
    assert_eq!((&limits["liquid_limit"]["how"], &limits["state"]), (&Value::from("cone"), &Value::from("complete")));
    assert_eq!(limits["trials"][3]["penetration_mm"], 24.1);
    assert!(limits["trials"].as_array().expect("trials").iter().all(|t| t["typed"] == true), "typed, and marked so");
    let people = text(&tarecup(&["work", &file]).stdout);
    assert!(people.contains("95 %  E5 LL ") && people.contains("(stated prior)"), "{people}");
}

fn two(dir: &Path, pl: [&str; 2]) -> String {
    let one = |id: &str, pl: &str| {
        format!(
            "[[specimen]]\nid = \"{id}\"\nliquid = [{{ drops = 31, water_percent = 41 }}, {{ drops = 24, water_percent = 42 }}, \
             {{ drops = 17, water_percent = 44 }}]\nplastic = {{ water_percent = {pl} }}\n"
        )
    };
    let file = dir.join("two.toml");
    std::fs::write(&file, format!("method = \"t89-t90\"\n{}{}", one("A", pl[0]), one("B", pl[1]))).expect("written");
    file.to_string_lossy().into_owned()
}

/// T 90-16, section 8: 10 % of the mean for one operator, 18 % for two laboratories.
#[test]
fn two_results_are_compared_by_the_published_precision() {
    let dir = tempfile::tempdir().expect("a folder");
    let file = two(dir.path(), ["20.0", "22.5"]);
    let agree = |args: &[&str]| -> Vec<bool> {
        let ran = tarecup(&[&["work", "--json", &file], args].concat());
        assert_eq!(ran.status.code(), Some(0), "{}", text(&ran.stderr));
        let rows = text(&ran.stdout);
        rows.lines().map(|l| serde_json::from_str::<Value>(l).expect("JSON")["compared"]["agree"] == true).collect()
    };
    assert_eq!(agree(&["--compare", "A", "B"]), [true, false]);
    assert_eq!(agree(&["--two-laboratories", "--compare", "A", "B"]), [true, true]);
    let says = text(&tarecup(&["work", &file, "--compare", "A", "B"]).stdout);
    assert!(says.contains("11.8 % of their mean, more than the 10 %") && says.contains("test again"), "{says}");
    let nobody = tarecup(&["work", &file, "--compare", "A", "C"]);
    assert!(nobody.status.code() == Some(2) && text(&nobody.stderr).contains("no specimen C"));
    std::fs::write(&file, CONE).expect("written");
    let stated = tarecup(&["work", &file, "--compare", "E5", "E5"]);
    assert!(stated.status.code() == Some(2) && text(&stated.stderr).contains("states no precision"));
}

/// What a started service says of the laboratory's own scatter.
fn own_scatter(dir: &Path) -> Value {
    let config = dir.join("tarecup.toml");
    std::fs::write(&config, format!("[broker]\nlisten = \"127.0.0.1:{}\"\n", free_port())).expect("written");
    let mut command = Command::new(TARECUP);
    command.arg("run").arg("--config").arg(&config).arg("--state").arg(dir);
    let mut service = Running::start(&mut command);
    let mut status = Value::Null;
    until("the service answers", PATIENCE, || {
        let ran = tarecup(&["status", "--json", "--state", &dir.to_string_lossy()]);
        status = serde_json::from_slice(&ran.stdout).unwrap_or_default();
        ran.status.code() == Some(0)
    });
    service.kill9();
    status["own_scatter"].clone()
}

#[test]
fn the_record_stands_after_a_restart_and_is_made_of_an_older_ledger() {
    let dir = tempfile::tempdir().expect("a folder");
    let state = dir.path().to_string_lossy().into_owned();
    let ran = tarecup(&["demo", "--once", "--state", &state]);
    assert_eq!(ran.status.code(), Some(0), "{}", text(&ran.stderr));
    let stored = own_scatter(dir.path());
    // Five specimens with a line of three trials each, and five with two thread containers each.
    assert_eq!(
        (&stored["cup"]["degrees_of_freedom"], &stored["threads"]["degrees_of_freedom"]),
        (&Value::from(5), &Value::from(5))
    );
    let file = rusqlite::Connection::open(dir.path().join("ledger.sqlite")).expect("the ledger");
    let gone = file.execute("DELETE FROM document WHERE kind = 'statistics'", []).expect("a document may go");
    assert_eq!(gone, 1, "it was stored");
    drop(file);
    assert_eq!(own_scatter(dir.path()), stored, "an older ledger has no such document: its results tell");
}
