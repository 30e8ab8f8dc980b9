//! Frozen shapes of what is published: every topic's members and their types,
//! from the own day of the demonstration. When this fails, do not change the
//! frozen file: a member that went or changed is a new version of the payload.
//! What is added is added to the file with `TARECUP_FREEZE=1`.

mod e2e_support;

use e2e_support::{PATIENCE, free_port, messages, tail, tarecup, tests_dir};
use serde_json::Value;
use std::collections::{BTreeMap, BTreeSet};

/// For each topic: path of a member, and the types seen there.
type Shapes = BTreeMap<String, BTreeMap<String, BTreeSet<String>>>;

/// The topic without names: what stands there has one shape.
fn sort_of(topic: &str, payload: &Value) -> String {
    let parts: Vec<&str> = tail(topic).split('/').collect();
    match parts.as_slice() {
        ["fact"] => format!("fact {}", payload["kind"].as_str().unwrap_or("?")),
        ["live", _] if payload.get("drops").is_some() => String::from("live/CUP"),
        ["live", _] => String::from("live/BALANCE"),
        ["specimen", _, "limits"] => String::from("specimen/ID/limits"),
        [kind, _] => format!("{kind}/ID"),
        other => other.join("/"),
    }
}

fn note(path: &str, value: &Value, into: &mut BTreeMap<String, BTreeSet<String>>) {
    let kind = match value {
        Value::Null => "null",
        Value::Bool(_) => "boolean",
        Value::Number(_) => "number",
        Value::String(_) => "text",
        Value::Array(_) => "list",
        Value::Object(_) => "object",
    };
    into.entry(path.to_owned()).or_default().insert(kind.to_owned());
    match value {
        // Members of `rejects` are reasons, not names of members.
        Value::Object(_) if path == "rejects" => (),
        Value::Object(members) => {
            for (key, value) in members {
                let path = if path.is_empty() { key.clone() } else { format!("{path}.{key}") };
                note(&path, value, into);
            }
        }
        Value::Array(items) => items.iter().for_each(|i| note(&format!("{path}[]"), i, into)),
        _ => (),
    }
}

fn shapes(messages: &[Value]) -> Shapes {
    let mut shapes = Shapes::new();
    for m in messages.iter().filter(|m| !m["payload"].is_null()) {
        let sort = sort_of(m["topic"].as_str().unwrap_or_default(), &m["payload"]);
        note("", &m["payload"], shapes.entry(sort).or_default());
    }
    shapes
}

/// What was promised and is not there any more, or is of a type that was not there before.
fn broken(frozen: &Shapes, now: &Shapes) -> Vec<String> {
    let mut broken = Vec::new();
    for (topic, members) in frozen {
        for (path, types) in members {
            match now.get(topic).and_then(|m| m.get(path)) {
                None => broken.push(format!("{topic}: {path} is gone")),
                Some(found) => {
                    let new: Vec<&String> = found.difference(types).collect();
                    if !new.is_empty() {
                        broken.push(format!("{topic}: {path} was {types:?} and is {new:?} too"));
                    }
                }
            }
        }
    }
    broken
}

#[test]
fn payloads_keep_their_members_and_types() {
    let ended = tarecup(&["demo", "--once", "--json", "--mqtt", &format!("127.0.0.1:{}", free_port())]);
    assert_eq!(ended.code, 0, "{}", ended.err);
    assert!(ended.took < PATIENCE);
    let now = shapes(&messages(&ended.out));
    let path = tests_dir().join("frozen/payloads.json");
    if std::env::var_os("TARECUP_FREEZE").is_some() {
        std::fs::write(&path, format!("{:#}\n", serde_json::to_value(&now).expect("JSON"))).expect("written");
    }
    let text = std::fs::read_to_string(&path).expect("tests/frozen/payloads.json");
    let frozen: Shapes = serde_json::from_str(&text).expect("JSON");
    for topic in [
        "presence",
        "head",
        "instrument/ID",
        "bench/ID",
        "container/ID",
        "specimen/ID",
        "specimen/ID/limits",
        "live/CUP",
        "live/BALANCE",
        "fact weighed",
        "fact counted",
        "fact limits_computed",
    ] {
        assert!(frozen.get(topic).is_some_and(|m| m.len() >= 6), "{topic} is frozen");
    }
    assert_eq!(broken(&frozen, &now), Vec::<String>::new(), "a change that subscribers notice is a new version");

    // Control: a member removed, renamed, or of another type is noticed; one that is added is not.
    let mut other = now.clone();
    let limits = other.get_mut("specimen/ID/limits").expect("limits");
    limits.remove("liquid_limit.value").expect("a member");
    let renamed = limits.remove("trials[].wet_g").expect("a member");
    limits.insert("trials[].wet_mass_g".into(), renamed);
    limits.insert("revision".into(), BTreeSet::from(["text".to_owned()]));
    assert_eq!(broken(&frozen, &other).len(), 3, "{:#?}", broken(&frozen, &other));
}
