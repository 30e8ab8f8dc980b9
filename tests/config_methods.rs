//! Method files: shipped ones are right, wrong ones are pointed at.

mod config_help;

use config_help::expect_fault;
use tarecup_config::{methods, station};
use tarecup_core::method::Tie;

/// A method with invented numbers, as a file.
const OWN: &str = r#"name = "own"
title = "Our own way"
edition = "house rule 3"
[liquid]
how = "flow-line"
trials = 3
windows = [[25, 35], [20, 30], [15, 25]]
drops = [15, 35]
rate_per_s = [1.9, 2.1]
closure_mm = 13
closures_within = 2
balance_reads_g = 0.01
[plastic]
thread_mm = [3.0, 3.2]
containers = 2
[drying]
hours = 16
constant_percent = 0.1
constant_hours = 1
oven_celsius = [105, 115]
[rounding]
decimals = 0
tie = "half-even"
index_from = "rounded"
[non_plastic]
compare = "rounded"
[source]
"liquid.trials" = "invented"
"liquid.drops" = "invented"
"liquid.windows" = "invented"
"liquid.rate_per_s" = "invented"
"liquid.closure_mm" = "invented"
"liquid.closures_within" = "invented"
"liquid.balance_reads_g" = "invented"
"plastic.thread_mm" = "invented"
"plastic.containers" = "invented"
"drying.hours" = "invented"
"drying.constant_percent" = "invented"
"drying.constant_hours" = "invented"
"drying.oven_celsius" = "invented"
"rounding.decimals" = "invented"
"#;

#[test]
fn the_shipped_methods_are_right() {
    let shipped = methods::shipped().unwrap_or_else(|f| panic!("{f}"));
    let names: Vec<&str> = shipped.keys().map(|n| n.as_str()).collect();
    assert_eq!(
        names,
        [
            "bs1377-cone",
            "d4318-multipoint",
            "d4318-one-point",
            "is2720-cup",
            "iso17892-cone-60",
            "iso17892-cone-80",
            "iso17892-cup",
            "t89-t90"
        ]
    );
}

#[test]
fn an_own_method_is_read_from_a_file() {
    let method = methods::parse("it.toml", OWN).unwrap_or_else(|f| panic!("{f}"));
    assert_eq!((method.name.as_str(), method.liquid.trials, method.rounding.tie), ("own", 3, Tie::HalfEven));
    assert_eq!(method.liquid.closure_mm, 13.0);
}

/// The same method inside a configuration file.
fn inside() -> String {
    let body = OWN.split_once('\n').expect("a first line").1;
    let body = ["liquid", "plastic", "drying", "rounding", "non_plastic", "source"]
        .iter()
        .fold(body.to_string(), |text, table| text.replace(&format!("[{table}]"), &format!("[method.own.{table}]")));
    format!("default_method = \"own\"\n[method.own]\n{body}")
}

#[test]
fn an_own_method_is_read_from_the_configuration() {
    let station = station::parse("it.toml", &inside()).unwrap_or_else(|f| panic!("{f}"));
    assert_eq!(station.default_method.as_str(), "own");
    assert_eq!(station.methods[&station.default_method], methods::parse("it.toml", OWN).expect("right"));
    assert_eq!(station.methods.len(), 9);
}

#[test]
fn a_method_file_beside_the_configuration_is_found() {
    let folder = tempfile::tempdir().expect("a folder");
    let config = folder.path().join("tarecup.toml");
    std::fs::write(folder.path().join("own.toml"), OWN).expect("written");
    std::fs::write(&config, "method_files = \"own.toml\"\ndefault_method = \"own\"\n").expect("written");
    let station = station::load(&config).unwrap_or_else(|f| panic!("{f}"));
    assert_eq!(station.default_method.as_str(), "own");

    std::fs::write(folder.path().join("own.toml"), OWN.replace("trials = 3", "trials = 2")).expect("written");
    let faults = station::load(&config).expect_err("a contradiction");
    let fault = faults.list.iter().find(|f| f.file.ends_with("own.toml")).expect("a fault of the method file");
    assert_eq!((fault.line, fault.column), (6, 1), "{faults}");

    std::fs::remove_file(folder.path().join("own.toml")).expect("removed");
    let faults = station::load(&config).expect_err("a missing file").to_string();
    assert!(faults.contains("own.toml:1:1: cannot be read"), "{faults}");
    let nowhere = station::load(&folder.path().join("none.toml")).expect_err("no file").to_string();
    assert!(nowhere.contains("none.toml:1:1: cannot be read") && nowhere.contains("creating the file"), "{nowhere}");
    let directory = station::load(folder.path()).expect_err("a folder").to_string();
    assert!(directory.contains("is not a plain file"), "{directory}");
}

#[test]
fn wrong_methods_are_pointed_at() {
    let cases: [(&str, &str, &[&str]); 15] = [
        ("how = \"flow-line\"", "how = @@\"flowline\"", &["does not know \"flowline\"", "\"flow-line\": did you mean"]),
        ("trials = 3\n", "@@trails = 3\ntrials = 3\n", &["\"trails\"", "\"trials\": did you mean"]),
        ("[plastic]\nthread_mm = [3.0, 3.2]\n", "@@[plastic]\n", &["lacks thread_mm", "shipped method"]),
        ("trials = 3", "trials = @@\"3\"", &["is wrong here"]),
        ("trials = 3", "@@trials = 2", &["liquid.trials", "windows"]),
        ("[15, 35]", "[15, 30]", &[]),
        ("rate_per_s = [1.9, 2.1]", "@@rate_per_s = [2.1, 1.9]", &["liquid.rate_per_s", "smaller"]),
        ("[liquid]\nhow = \"flow-line\"", "[@@liquid]\nhow = \"one-point\"", &["liquid.exponent", "one-point"]),
        ("hours = 16", "@@hours = nan", &["drying.hours", "above 0"]),
        ("decimals = 0", "@@decimals = 7", &["rounding.decimals"]),
        ("name = \"own\"", "name = @@\"my own\"", &["is wrong here", "cannot stand in a name"]),
        ("\"liquid.trials\" = \"invented\"\n", "", &["liquid.trials is wrong", "no source", "under [source]"]),
        ("\"drying.hours\" = \"inv", "@@\"drying.ours\" = \"x\"\n\"drying.hours\" = \"inv", &["source.drying.ours is wrong"]),
        ("\"drying.hours\" = \"inv", "@@\"\\u001b\" = \"x\"\n\"drying.hours\" = \"inv", &["source.\\u{1b} is wrong"]),
        ("title = \"Our own way\"", "@@title = \" \"", &["is empty"]),
    ];
    for (right, wrong, words) in cases {
        let text = OWN.replacen(right, wrong, 1);
        // Where what is wrong is missing, the mark stands at the key that lacks it.
        let text = match (words.first(), wrong) {
            (None, _) => text.replacen("windows", "@@windows", 1),
            (Some(_), "") => text.replacen("trials", "@@trials", 1),
            _ => text,
        };
        expect_fault(&text, words, |t| methods::parse("it.toml", t));
    }
    let cone = OWN.replacen("how = \"flow-line\"", "how = \"cone\"", 1);
    let faults = methods::parse("it.toml", &cone).expect_err("a cone method with drops").to_string();
    assert!(faults.contains("it.toml:5:1") && faults.contains("add [cone] with its numbers"), "{faults}");
    assert!(faults.contains("it.toml:8:1") && faults.contains("which has no drops"), "{faults}");
    let weighed = OWN.replacen("[rounding]", "[severity]\n@@thread = \"hold\"\n[rounding]", 1);
    expect_fault(&weighed, &["severity.thread", "no check of this name"], |t| methods::parse("it.toml", t));
    let twice = inside().replacen("title", "@@name = \"own\"\ntitle", 1);
    expect_fault(&twice, &["method, own: name", "taking this line out"], |t| station::parse("it.toml", t));
    let named = inside().replacen("decimals = 0", "@@decimals = 7", 1);
    let faults = station::parse("it.toml", &named.replace("@@", "")).expect_err("a contradiction");
    assert!(faults.list.iter().any(|f| f.path == "method, own: rounding.decimals"), "{faults}");
}
