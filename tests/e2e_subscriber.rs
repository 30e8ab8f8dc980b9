//! Subscribers that know nothing of the program: at the built-in broker during
//! a demonstration, and at Debian's broker, also when that is killed.

mod e2e_support;

use e2e_support::operator::{Cup, Operator, PORTS, Station, limits_of};
use e2e_support::subscriber::{Mosquitto, MosquittoSub, RustSub, gaps, last, seqs};
use e2e_support::*;
use rumqttc::v5::mqttbytes::QoS;
use rumqttc::v5::mqttbytes::v5::PublishProperties;
use serde_json::{Value, json};
use std::collections::{BTreeMap, BTreeSet};
use std::process::{Command, Stdio};
use std::time::Duration;

const ALL: &str = "tarecup/v1/#";

fn sheets() -> [Sheet; 2] {
    // Published: a laboratory report, tables 4-1 and 4-2; and the same masses as a second specimen.
    let one = |id: &str, c: &str| {
        let c = |n: u32| format!("{c}{n}");
        sheet(
            id,
            "d4318-multipoint",
            vec![
                liquid(&[28], &c(1), "50.94", "66.74", &["62.99"]),
                liquid(&[21], &c(2), "51.55", "67.56", &["63.53"]),
                liquid(&[15], &c(3), "51.78", "66.90", &["62.94"]),
            ],
            vec![slice(&c(4), "51.80", "67.50", &["65.04"]), slice(&c(5), "50.90", "65.50", &["63.26"])],
        )
    };
    [one("S-101", "A"), one("S-102", "B")]
}

/// What is missing among retained topics, or does not say what it should.
fn retained_faults(topics: &BTreeMap<String, String>, sheets: &[Sheet]) -> Vec<String> {
    let mut wrong = Vec::new();
    let payload = |tail: &str| -> Value {
        let text = topics.get(&format!("tarecup/v1/wet-room/{tail}"));
        text.and_then(|t| serde_json::from_str(t).ok()).unwrap_or(Value::Null)
    };
    let mut want = |what: &str, ok: bool| {
        if !ok {
            wrong.push(what.to_owned());
        }
    };
    want("presence", payload("presence")["state"] == "up");
    for bench in ["north", "south"] {
        want(&format!("bench {bench}"), payload(&format!("bench/{bench}"))["bench"] == bench);
    }
    let head = payload("head");
    want("head", head["seq"].is_u64() && head["hash"].is_string());
    for sheet in sheets {
        want(&format!("specimen {}", sheet.id), payload(&format!("specimen/{}", sheet.id))["specimen"] == sheet.id.as_str());
        let limits = payload(&format!("specimen/{}/limits", sheet.id));
        let theirs = &judged(std::slice::from_ref(sheet))[0];
        want(&format!("limits of {}: {:?}", sheet.id, differences(&limits, theirs)), differences(&limits, theirs).is_empty());
        for l in &sheet.liquid {
            let container = payload(&format!("container/{}", l.slice.container));
            want(&format!("container {}", l.slice.container), container["tare_g"].is_f64());
        }
    }
    wrong
}

/// Waits until a subscriber has everything; the last complaint is shown.
fn until_retained(what: &str, got: &subscriber::Got, sheets: &[Sheet]) {
    let complete = |got: &subscriber::Got| {
        let have = last(got);
        sheets.iter().all(|s| have.contains_key(&format!("tarecup/v1/wet-room/specimen/{}/limits", s.id)))
            && have.contains_key("tarecup/v1/wet-room/presence")
    };
    let start = std::time::Instant::now();
    while !(complete(got) && retained_faults(&last(got), sheets).is_empty()) {
        assert!(start.elapsed() < PATIENCE, "{what}: {:#?}", retained_faults(&last(got), sheets));
        std::thread::sleep(Duration::from_millis(100));
    }
}

/// What the service answers to an ask over MQTT.
fn asked(rust: &RustSub, wanted: Value) -> Value {
    let topic = "tarecup/v1/wet-room/answer/reader";
    let answers = || rust.got.lock().expect("messages").iter().filter(|(t, _)| t == topic).count();
    let before = answers();
    let properties = PublishProperties {
        response_topic: Some(topic.into()),
        correlation_data: Some("7".into()),
        ..PublishProperties::default()
    };
    let ask = "tarecup/v1/wet-room/ask";
    rust.client.publish_with_properties(ask, QoS::AtLeastOnce, false, wanted.to_string(), properties).expect("asked");
    until("an ask over MQTT is answered", PATIENCE, || answers() > before);
    serde_json::from_str(&last(&rust.got)[topic]).expect("JSON")
}

#[test]
fn subscribers_at_the_built_in_broker_see_the_demonstration() {
    let dir = tempfile::tempdir().expect("a folder");
    let sheets = sheets();
    let file = dir.path().join("day.toml");
    std::fs::write(&file, scenario(&sheets)).expect("written");
    let port = free_port();
    let early = MosquittoSub::on(port, "#");
    let mut command = Command::new(TARECUP);
    command.args(["demo", "--speed", "3000", "--scenario"]).arg(&file).args(["--mqtt", &format!("127.0.0.1:{port}")]);
    // Without --once the broker stays up when the day is over.
    let mut demo = Running::start(command.stdout(Stdio::null()).stderr(Stdio::null()).stdin(Stdio::null()));
    let rust = RustSub::on(port, ALL);
    until_retained("mosquitto_sub from the beginning", &early.got, &sheets);
    until_retained("a Rust client", &rust.got, &sheets);
    let late = MosquittoSub::on(port, "#");
    until_retained("mosquitto_sub after the day", &late.got, &sheets);
    assert!(seqs(&late.got).is_empty(), "facts are not retained");

    // Facts: in order for who listened, and by number for who came late.
    let head = last(&late.got)["tarecup/v1/wet-room/head"].clone();
    let head = serde_json::from_str::<Value>(&head).expect("JSON")["seq"].as_u64().expect("a number");
    for (who, got) in [("mosquitto_sub", &early.got), ("Rust", &rust.got)] {
        let seqs = seqs(got);
        assert_eq!(gaps(&seqs, seqs[0], head), Vec::<String>::new(), "{who}");
    }
    let answer = asked(&rust, json!({"ask": "facts_after", "seq": 0, "limit": 20}));
    let first: Vec<u64> = answer["facts"].as_array().into_iter().flatten().filter_map(|f| f["seq"].as_u64()).collect();
    assert_eq!(gaps(&first, 1, first.len().max(1) as u64), Vec::<String>::new(), "{answer}");

    // Live drops were seen, and a stranger may not publish where the station does.
    assert!(early.got.lock().expect("messages").iter().any(|(t, p)| t.ends_with("live/cup-1") && p.contains("\"drops\"")));
    let forged = "tarecup/v1/wet-room/specimen/S-101/limits";
    rust.client.publish(forged, QoS::AtLeastOnce, true, "{\"forged\":true}").expect("sent");
    std::thread::sleep(Duration::from_millis(500));
    let look = MosquittoSub::on(port, "#");
    until_retained("after a forged message", &look.got, &sheets);

    // Control: a topic that is missing is noticed, and so is a wrong number.
    let mut have = last(&late.got);
    have.remove("tarecup/v1/wet-room/bench/south");
    let limits = have["tarecup/v1/wet-room/specimen/S-102/limits"].replace("\"value\":32.", "\"value\":33.");
    have.insert("tarecup/v1/wet-room/specimen/S-102/limits".into(), limits);
    assert_eq!(retained_faults(&have, &sheets).len(), 2);
    assert_eq!(gaps(&[1, 2, 4], 1, 5).len(), 2);

    demo.signal(rustix::process::Signal::INT);
    assert_eq!(demo.wait(PATIENCE).code(), Some(0));
    let presence = || last(&early.got)["tarecup/v1/wet-room/presence"].clone();
    until("presence says stopped", PATIENCE, || presence().contains("\"stopped\""));
    println!("{head} facts in order to mosquitto_sub and a Rust client; retained topics complete for who came late");
}

#[test]
fn a_subscriber_of_a_demonstration_played_once_gets_the_results() {
    let dir = tempfile::tempdir().expect("a folder");
    let sheets = sheets();
    let file = dir.path().join("day.toml");
    std::fs::write(&file, scenario(&sheets)).expect("written");
    let port = free_port();
    let sub = MosquittoSub::on(port, "#");
    let mut command = Command::new(TARECUP);
    command.args(["demo", "--once", "--scenario"]).arg(&file).args(["--mqtt", &format!("127.0.0.1:{port}")]);
    let mut demo = Running::start(command.stdout(Stdio::null()).stderr(Stdio::null()).stdin(Stdio::null()));
    assert_eq!(demo.wait(PATIENCE).code(), Some(0));
    let presence = || last(&sub.got).get("tarecup/v1/wet-room/presence").cloned().unwrap_or_default();
    until("the end is told", PATIENCE, || presence().contains("\"stopped\""));
    // All is there but a presence that says "up".
    assert_eq!(retained_faults(&last(&sub.got), &sheets), ["presence"]);
}

#[test]
fn a_broker_killed_in_mid_scenario_loses_nothing() {
    let mut broker = Mosquitto::start();
    let sheets = sheets();
    let station = Station::new(&format!("[screen]\nenabled = false\n[mqtt]\nurl = \"mqtt://127.0.0.1:{}\"\n", broker.port));
    station.start();
    let (sub, rust) = (MosquittoSub::on(broker.port, "#"), RustSub::on(broker.port, ALL));
    wait_up(&station.state, PORTS);
    let mut facts = Vec::new();
    std::thread::scope(|scope| {
        let work = scope.spawn(|| {
            let mut facts = Vec::new();
            for (cup, sheet) in [Cup::Numbered, Cup::Unnumbered].into_iter().zip(&sheets) {
                let mut operator = Operator::at(&station, cup, true);
                operator.facts = facts;
                operator.play(sheet);
                assert_eq!(operator.repeated, 0, "a missing broker never stops the work");
                facts = operator.facts;
            }
            facts
        });
        // Killed three times while the work goes on; once it stays away for a while.
        for away in [50, 1_500, 200] {
            std::thread::sleep(Duration::from_millis(1_500));
            broker.kill9();
            std::thread::sleep(Duration::from_millis(away));
            broker.again();
        }
        facts = work.join().expect("the work is done");
    });
    let through = facts.len() as u64;
    until("everything is delivered", PATIENCE, || {
        status(&station.state).is_some_and(|s| s["delivered_through"].as_u64().is_some_and(|d| d >= through))
    });
    for sheet in &sheets {
        let limits = limits_of(&facts, &sheet.id);
        assert_eq!(differences(&limits, &judged(std::slice::from_ref(sheet))[0]), Vec::<String>::new());
    }
    // What is retained was forgotten by the broker and is there again, for who comes now.
    let late = MosquittoSub::on(broker.port, "#");
    until_retained("after three kills", &late.got, &sheets);

    // A broker killed with -9 loses what it had acknowledged and not passed on: who misses a number asks for it.
    for (who, got) in [("mosquitto_sub", &sub.got), ("Rust", &rust.got)] {
        let mut heard: BTreeSet<u64> = seqs(got).into_iter().filter(|s| *s <= through).collect();
        let live = heard.len() as u64;
        assert!(live > through / 3, "{who} heard {live} of {through}");
        while let Some(missing) = (1..=through).find(|s| !heard.contains(s)) {
            let answer = asked(&rust, json!({"ask": "facts_after", "seq": missing - 1, "limit": 10}));
            let facts = answer["facts"].as_array().cloned().unwrap_or_default();
            assert_eq!(facts.first().map(|f| &f["seq"]), Some(&json!(missing)), "{answer}");
            heard.extend(facts.iter().filter_map(|f| f["seq"].as_u64()));
        }
        println!("{who}: {live} of {through} facts heard live across three kills, {} more asked for by number", through - live);
    }
    // Control: a service that only publishes what happens now leaves a hole; who came late has one.
    assert!(!gaps(&seqs(&late.got), 1, through).is_empty());
    assert_eq!(station.term(), Some(0), "{}", station.log());
    until("presence says stopped", PATIENCE, || last(&late.got)["tarecup/v1/wet-room/presence"].contains("\"stopped\""));
}

#[test]
fn a_service_killed_is_told_as_lost_by_the_broker() {
    let broker = Mosquitto::start();
    let station = Station::new(&format!("[screen]\nenabled = false\n[mqtt]\nurl = \"mqtt://127.0.0.1:{}\"\n", broker.port));
    let sub = MosquittoSub::on(broker.port, "tarecup/v1/+/presence");
    let says = |state: &str| last(&sub.got).values().any(|p| p.contains(&format!("\"state\":\"{state}\"")));
    station.start();
    until("up", PATIENCE, || says("up"));
    station.kill9();
    until("lost", PATIENCE, || says("lost"));
    station.start();
    until("up again", PATIENCE, || says("up"));
    station.term();
    until("stopped", PATIENCE, || says("stopped"));
}
