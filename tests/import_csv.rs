//! Registers of containers and lists of specimens from tables with commas (RFC 4180 for the double quotes): what is
//! taken, what is refused and in which words, and that a file is taken whole or not at all.

mod e2e_support;

use e2e_support::*;
use proptest::prelude::*;
use serde_json::{Value, json};
use std::path::Path;
use std::process::{Command, Stdio};
use tarecup::import::{Kind, Preview, preview, preview_as, preview_bytes};
use tarecup_core::names::Operator;

fn asks(text: &str) -> Vec<Value> {
    let seen = preview(text);
    assert_eq!(seen.faults, [], "{text}");
    assert!(seen.fine());
    seen.items.into_iter().map(|i| i.ask).collect()
}

#[test]
fn a_register_of_containers_becomes_asks() {
    let text = "\u{feff}Container, tare_g ,lid_g\r\nC1,21.43,5.20\r\n\r\n\"C2\", 20.1 ,\r\nC3,,\r\n,,\r\n";
    assert_eq!(
        asks(text),
        [
            json!({"ask": "register_container", "container": "C1", "tare_g": "21.43", "lid_g": "5.20"}),
            json!({"ask": "register_container", "container": "C2", "tare_g": "20.1"}),
            json!({"ask": "register_container", "container": "C3"}),
        ]
    );
    let seen = preview(text);
    assert_eq!((seen.kind, seen.items[1].line), (Some(Kind::Containers), 4), "lines are those of the file");
    let who = Operator::new("AB").unwrap();
    let signed = seen.asks(&who);
    assert_eq!(signed[0]["who"], "AB");
    let ids: std::collections::BTreeSet<&str> = signed.iter().filter_map(|a| a["ask_id"].as_str()).collect();
    assert!(ids.len() == 3 && ids.iter().all(|id| id.len() <= 64));
    assert_eq!(signed, preview(text).asks(&who), "the same file, the same asks");
    assert_ne!(signed[0]["ask_id"], preview(&text.replace("5.20", "5.30")).asks(&who)[0]["ask_id"]);
}

#[test]
fn the_day_s_specimens_become_asks() {
    let text = "specimen,description,method,clay_percent,wanted\nS-1,\"clay, \"\"fat\"\" and brown\",t89-t90,31.5,natural\nS-2,,,,liquid plastic\n";
    assert_eq!(
        asks(text),
        [
            json!({"ask": "open_specimen", "specimen": "S-1", "description": "clay, \"fat\" and brown", "method": "t89-t90",
                   "clay_percent": 31.5, "wanted": ["natural"]}),
            json!({"ask": "open_specimen", "specimen": "S-2", "wanted": ["liquid", "plastic"]}),
        ]
    );
}

#[test]
fn what_is_wrong_is_said_with_its_line_and_nothing_is_taken() {
    let long = format!("specimen,description\nS-1,{}\n", "x".repeat(1_001));
    let wide = format!("container\n{}\n", "C1,".repeat(30));
    let huge = format!("container,lid_g\nC1,{}\n", "1".repeat(9_000));
    for (text, line, words) in [
        ("", 1, "the file is empty"),
        ("\n\n", 1, "the file is empty"),
        ("container\n", 1, "no line below the first one"),
        ("name,mass\nC1,20\n", 1, "one of them is container or specimen"),
        ("container,specimen\nC1,S-1\n", 1, "one of them is container or specimen"),
        ("container;tare_g\nC1;21,43\n", 1, "21,43 could be read in two ways"),
        ("container\ttare_g\nC1\t21.43\n", 1, "parted by tabs"),
        ("container,tare\nC1,21.43\n", 1, "there is no column of this name"),
        ("container,trae_g\nC1,21.43\n", 1, "did you mean tare_g?"),
        ("container,lid_g,lid_g\nC1,1,1\n", 1, "there twice"),
        ("container,tare_g\nC1,\"21,43\"\n", 2, "write grams with a decimal point"),
        ("container,tare_g\nC1,21,43\n", 2, "3 cells and the first line names 2"),
        ("container,tare_g\nC1\n", 2, "1 cells and the first line names 2"),
        ("container,tare_g\nC1,0\n", 2, "more than nothing"),
        ("container,tare_g\nC1,-3\n", 2, "more than nothing"),
        ("container,tare_g\nC1,2e1\n", 2, "not a mass"),
        ("container,tare_g\nC1,21.43 g\n", 2, "not a mass"),
        ("container,tare_g\nC1,99999999\n", 2, "1000 kg"),
        ("container,tare_g\n,21.43\n", 2, "the cell is empty"),
        ("container\nC 1\n", 2, "is no name"),
        ("container\n=1+1\n", 2, "is no name"),
        ("container\nC1\nC2\nC1\n", 4, "C1 stands in line 2 already"),
        ("container,tare_g\nC1,\"21.43\n", 2, "is not closed on this line"),
        ("container,tare_g\nC1,\"21\"43\n", 2, "text after a closing double quote"),
        ("container,tare_g\nC1,2\"1\n", 2, "in the middle of a cell"),
        ("specimen,clay_percent\nS-1,101\n", 2, "no percentage"),
        ("specimen,clay_percent\nS-1,NaN\n", 2, "no percentage"),
        ("specimen,clay_percent\nS-1,1e1\n", 2, "no percentage"),
        ("specimen,wanted\nS-1,plastics\n", 2, "did you mean plastic?"),
        ("specimen,description\nS-1,a\u{7}b\n", 2, "cannot be printed"),
        ("container\nC1\u{0}\n", 2, "cannot be printed"),
        (&long, 2, "at most 1000 characters"),
        (&wide, 2, "more than 20 cells"),
        (&huge, 2, "longer than 8000 bytes"),
    ] {
        let seen = preview(text);
        let first = seen.faults.first().unwrap_or_else(|| panic!("{text} was taken"));
        assert!(first.line == line && first.says.contains(words), "{text}: {first:?}");
        assert!(seen.items.is_empty() && !seen.fine(), "{text}");
        assert!(!first.says.chars().any(char::is_control), "{first:?}");
    }
}

#[test]
fn every_wrong_line_is_told_and_a_good_one_beside_it_is_not_taken() {
    let seen = preview("container,tare_g,lid_g\nC1,x,y\nC2,20.00,\nC 3,20.00,\n");
    let told: Vec<(usize, Option<&str>)> = seen.faults.iter().map(|f| (f.line, f.column.as_deref())).collect();
    assert_eq!(told, [(2, Some("tare_g")), (2, Some("lid_g")), (4, Some("container"))]);
    assert!(seen.items.is_empty());
    let many: String = std::iter::once("container\n".to_owned()).chain((0..300).map(|n| format!("a b{n}\n"))).collect();
    let seen = preview(&many);
    assert_eq!((seen.faults.len(), seen.more_faults), (100, 200));
}

#[test]
fn files_that_are_too_large_or_no_text_are_refused() {
    let first = |seen: Preview| seen.faults[0].says.clone();
    let lines: String = std::iter::once("container\n".to_owned()).chain((0..5_001).map(|n| format!("C{n}\n"))).collect();
    assert!(first(preview(&lines)).contains("more than 5000 lines"));
    assert!(first(preview(&"x".repeat((1 << 20) + 1))).contains("at most 1048576"));
    assert!(first(preview_bytes(b"\xff\xfec\0o\0", None)).contains("UTF-16"));
    let latin = preview_bytes(b"specimen,description\nS-1,Lehm\nS-2,L\xf6ss\n", None);
    assert!(latin.faults[0].line == 3 && latin.faults[0].says.contains("not UTF-8"), "{latin:?}");
    assert!(first(preview_as("container\nC1\n", Kind::Specimens)).contains("holds containers, not specimens"));
    assert!(preview_as("container\nC1\n", Kind::Containers).fine());
}

proptest! {
    #![proptest_config(ProptestConfig { failure_persistence: None, ..ProptestConfig::default() })]

    #[test]
    fn any_bytes_are_answered(bytes: Vec<u8>) {
        let _ = preview_bytes(&bytes, None);
    }

    #[test]
    fn any_table_is_answered_and_what_is_fine_is_an_ask(rows in prop::collection::vec("[\"C1a,; .=\u{e9}\\r\\t-]{0,30}", 0..20)) {
        let seen = preview(&format!("container,tare_g,lid_g\n{}", rows.join("\n")));
        prop_assert!(seen.items.is_empty() || seen.faults.is_empty());
        for ask in seen.asks(&Operator::new("AB").unwrap()) {
            prop_assert!(tarecup::asks::parse(&ask.to_string()).is_ok(), "{ask}");
        }
    }
}

fn import(state: &Path, file: &Path, kind: &str, words: &[&str]) -> Ended {
    let (state, file) = (state.display().to_string(), file.display().to_string());
    tarecup(&[&["import", &file, "--kind", kind, "--state", &state], words].concat())
}

#[test]
fn a_file_is_taken_by_the_running_service_whole_or_not_at_all() {
    let folder = tempfile::tempdir().unwrap();
    let (state, config) = (folder.path().join("state"), folder.path().join("c.toml"));
    std::fs::write(&config, format!("[broker]\nlisten = \"127.0.0.1:{}\"\n", free_port())).unwrap();
    let register = folder.path().join("containers.csv");
    std::fs::write(&register, "container,tare_g,lid_g\nC1,21.43,5.20\nC2,20.00,\n").unwrap();
    let take = ["--take", "--who", "AB"];

    let seen = import(&state, &register, "containers", &[]);
    assert!(
        seen.code == 0 && seen.out.contains("2 containers to be taken") && seen.out.contains("Nothing was taken"),
        "{}",
        seen.out
    );
    assert_eq!(import(&state, &register, "containers", &take).code, 5, "no service answers");
    assert_eq!(import(&state, &register, "containers", &["--take"]).code, 2, "nobody takes it");

    let mut service = Running::start(
        Command::new(TARECUP).args(["run", "--config"]).arg(&config).arg("--state").arg(&state).stderr(Stdio::null()),
    );
    until("the service answers", PATIENCE, || status(&state).is_some());
    let tare = |id: &str| {
        let found = ask(&state, &json!({"ask": "document", "kind": "container", "id": id})).unwrap();
        found["document"]["tares"][0]["mass"].clone()
    };
    let taken = import(&state, &register, "containers", &take);
    assert!(taken.code == 0 && taken.out.contains("2 taken"), "{} {}", taken.out, taken.err);
    assert_eq!((tare("C1"), tare("C2")), (json!(21_430_000), json!(20_000_000)));

    let specimens = folder.path().join("specimens.csv");
    std::fs::write(&specimens, "specimen,method\nS-1,\nS-2,d4318-multpoint\nC1,\n").unwrap();
    let refused = import(&state, &specimens, "specimens", &take);
    assert_eq!(refused.code, 2, "{}", refused.out);
    for words in
        [":3: there is no method d4318-multpoint (did you mean d4318-multipoint?)", ":4: C1 is a container", "Nothing was taken"]
    {
        assert!(refused.err.contains(words), "{words}: {}", refused.err);
    }
    let none = ask(&state, &json!({"ask": "document", "kind": "specimen", "id": "S-1"})).unwrap();
    assert_eq!(none["ok"], false, "the good line was not taken either");
    std::fs::write(&specimens, "specimen,wanted\nS-1,natural\nS-2,\n").unwrap();
    assert_eq!(import(&state, &specimens, "specimens", &take).code, 0);
    let again = import(&state, &specimens, "specimens", &take);
    assert!(again.code == 2 && again.err.contains("open already"), "{}", again.err);
    let opened = ask(&state, &json!({"ask": "document", "kind": "specimen", "id": "S-1"})).unwrap();
    assert_eq!(opened["document"]["wanted"], json!(["natural"]));

    // The reading asks of the bench answer over the same socket.
    let shelf = ask(&state, &json!({"ask": "shelf"})).unwrap();
    assert_eq!(shelf, json!({"ok": true, "shelf": []}));
    assert_eq!(ask(&state, &json!({"ask": "loose"})).unwrap(), json!({"ok": true, "loose": []}));
    let advice = ask(&state, &json!({"ask": "advice", "specimen": "S-2", "drops": 45, "paste_g": 200})).unwrap();
    assert!((advice["advice"]["water"]["water_g"].as_f64().unwrap() - 4.1087).abs() < 1e-3, "{advice}");
    let meant = ask(&state, &json!({"ask": "document", "kind": "container", "id": "C11"})).unwrap();
    assert!(meant["error"]["says"].as_str().unwrap().contains("did you mean C1?"), "{meant}");
    let would = ask(&state, &json!({"ask": "would", "asks": [{"ask": "open_specimen", "specimen": "S-1"}, {"ask": "open_specimen", "specimen": "S-3"}, {"ask": "open_specimen", "specimen": "S-3"}]})).unwrap();
    let refused: Vec<u64> = would["refused"].as_array().unwrap().iter().filter_map(|r| r["n"].as_u64()).collect();
    assert_eq!(refused, [0, 2], "one after the other: {would}");
    assert_eq!(ask(&state, &json!({"ask": "document", "kind": "specimen", "id": "S-3"})).unwrap()["ok"], false);
    service.kill9();
}
