//! The HTTP interface against its own description: every path is asked, every answer is judged by a JSON Schema
//! validator (draft 2020-12) that is no part of the program.

#[path = "screen_support.rs"]
mod support;

use serde_json::{Value, json};
use std::collections::BTreeSet;
use support::{Answer, Station, begin, weighed};

const PIN: &str = "739146";

/// The document as served, and what of it was tried.
struct Described {
    document: Value,
    tried: BTreeSet<String>,
}

impl Described {
    fn of(station: &Station) -> Self {
        let document = station.get("/api/openapi.json").json();
        assert_eq!(document["openapi"], "3.1.0");
        Self { document, tried: BTreeSet::new() }
    }

    /// A schema of the document, with what it refers to.
    fn validator(&self, schema: &Value) -> jsonschema::Validator {
        let whole = json!({"allOf": [schema], "components": self.document["components"]});
        jsonschema::draft202012::new(&whole).expect("a schema")
    }

    /// Judges an answer by the description of its path.
    fn judge(&mut self, method: &str, path: &str, answer: &Answer) {
        let status = answer.status.to_string();
        let operation = &self.document["paths"][path][method];
        assert!(operation.is_object(), "{method} {path} is not described");
        let response = &operation["responses"][&status];
        assert!(response.is_object(), "{method} {path}: {status} is not described: {}", answer.body);
        let schema = &response["content"]["application/json"]["schema"];
        let body = answer.json();
        let errors: Vec<String> =
            self.validator(schema).iter_errors(&body).map(|e| format!("{}: {e}", e.instance_path())).collect();
        assert!(errors.is_empty(), "{method} {path} {status}: {errors:?}\n{body}");
        self.tried.insert(format!("{method} {path} {}", if answer.status == 200 { "200" } else { "refused" }));
    }

    fn body(&self, path: &str) -> jsonschema::Validator {
        self.validator(&self.document["paths"][path]["post"]["requestBody"]["content"]["application/json"]["schema"])
    }
}

#[test]
fn every_path_answers_as_described() {
    let station = Station::start("");
    station.operator("AB", PIN);
    begin(&station, "S-1");
    for (container, tare, wet) in [("C1", 19.81, 32.18), ("C2", 22.95, 38.19)] {
        weighed(&station, container, tare);
        station.count(25);
        support::until("the count is in", || station.get("/api/bench/north").json()["slice_owed"].is_object());
        weighed(&station, container, wet);
    }
    // A mass without a container is loose.
    station.weigh(9.99);
    support::until("it is loose", || station.get("/api/loose").json()["loose"].as_array().is_some_and(|l| l.len() == 1));
    let mut described = Described::of(&station);
    for (path, asked) in [
        ("/api/status", "/api/status"),
        ("/api/benches", "/api/benches"),
        ("/api/bench/{bench}", "/api/bench/north"),
        ("/api/specimens", "/api/specimens"),
        ("/api/specimen/{specimen}", "/api/specimen/S-1"),
        ("/api/specimen/{specimen}/limits", "/api/specimen/S-1/limits"),
        ("/api/containers", "/api/containers"),
        ("/api/container/{container}", "/api/container/C1"),
        ("/api/instruments", "/api/instruments"),
        ("/api/instrument/{instrument}", "/api/instrument/pan-1"),
        ("/api/loose", "/api/loose"),
        ("/api/facts", "/api/facts?after=3&limit=1000"),
        ("/api/session", "/api/session"),
        ("/api/openapi.json", "/api/openapi.json"),
    ] {
        let answer = station.get(asked);
        assert_eq!(answer.status, 200, "{asked}: {}", answer.body);
        described.judge("get", path, &answer);
    }
    for (path, asked) in [
        ("/api/bench/{bench}", "/api/bench/east"),
        ("/api/specimen/{specimen}", "/api/specimen/S-9"),
        ("/api/specimen/{specimen}/limits", "/api/specimen/S-9/limits"),
        ("/api/container/{container}", "/api/container/C9"),
        ("/api/instrument/{instrument}", "/api/instrument/pan-9"),
        ("/api/facts", "/api/facts?after=x"),
    ] {
        let answer = station.get(asked);
        assert!(answer.status >= 400, "{asked}");
        described.judge("get", path, &answer);
    }
    // A foreign name and a foreign page are refused everywhere in the same form.
    described.judge("get", "/api/status", &station.send("GET", "/api/status", &[("Host", "evil.example")], b""));
    asks(&station, &mut described);
    lists(&station, &mut described);
    sessions(&station, &mut described);
    let paths = described.document["paths"].as_object().expect("paths").clone();
    for (path, methods) in &paths {
        for method in methods.as_object().expect("methods").keys() {
            assert!(described.tried.contains(&format!("{method} {path} 200")), "{method} {path} was not tried");
        }
    }
}

fn asks(station: &Station, described: &mut Described) {
    let shape = described.body("/api/ask");
    for ask in [
        json!({"ask": "register_container", "container": "C50", "lid_g": "4.1", "ask_id": "1"}),
        json!({"ask": "into_oven", "containers": ["C1", "C2"], "celsius": 110}),
        json!({"ask": "type_mass", "bench": "south", "container": "C51", "mass_g": 20.5, "who": "KL"}),
        json!({"ask": "not_obtainable", "specimen": "S-1", "limit": "plastic", "because": "it crumbles", "who": "AB", "pin": PIN}),
        json!({"ask": "status"}),
        json!({"ask": "latest", "bench": "north"}),
        json!({"ask": "document", "kind": "container", "id": "C1"}),
        json!({"ask": "facts_after", "seq": 2, "limit": 3}),
    ] {
        assert!(shape.is_valid(&ask), "{ask}");
        let answer = station.post("/api/ask", &ask);
        assert_eq!(answer.status, 200, "{ask}: {}", answer.body);
        described.judge("post", "/api/ask", &answer);
    }
    for (ask, status) in [
        (json!({"ask": "no_such"}), 400),
        (json!({"ask": "sign_in", "bench": "north"}), 400),
        (json!({"ask": "code", "bench": "east", "text": "C1"}), 422),
        (json!({"ask": "review", "specimen": "S-1", "who": "AB"}), 403),
    ] {
        let answer = station.post("/api/ask", &ask);
        assert_eq!(answer.status, status, "{ask}: {}", answer.body);
        assert!(status != 400 || !shape.is_valid(&ask), "what cannot be read is not of the shape: {ask}");
        described.judge("post", "/api/ask", &answer);
    }
    described.judge("post", "/api/ask", &station.send("POST", "/api/ask", &[("Content-Type", "text/plain")], b"{}"));
    let large = vec![b' '; 70_000];
    described.judge("post", "/api/ask", &station.send("POST", "/api/ask", &[("Content-Type", "application/json")], &large));
    // Asked again with the same id, it is answered the same and done once.
    let ask = json!({"ask": "sign_in", "bench": "south", "operator": "KL", "ask_id": "again"});
    let (first, second) = (station.post("/api/ask", &ask).json(), station.post("/api/ask", &ask).json());
    assert_eq!(first, second);
}

fn lists(station: &Station, described: &mut Described) {
    let csv = [("Content-Type", "text/csv; charset=utf-8")];
    let text = "container,lid_g\nD1,4.1\nD 2,\nD1,5\nC1,\n";
    let send = |path: &str, text: &str| station.send("POST", path, &csv, text.as_bytes());
    let looked = send("/api/import/containers", text);
    described.judge("post", "/api/import/{list}", &looked);
    let refused = |answer: &Answer| -> Vec<u64> {
        let lines = answer.json()["lines"].as_array().expect("lines").clone();
        lines.iter().filter(|l| l["refused"].is_string()).map(|l| l["line"].as_u64().expect("a number")).collect()
    };
    assert_eq!((refused(&looked), looked.json()["taken"].as_bool()), (vec![3, 4], Some(false)));
    assert_eq!(station.get("/api/container/D1").status, 404, "it was only looked at");
    let taken = send("/api/import/containers?take=true", text);
    described.judge("post", "/api/import/{list}", &taken);
    assert_eq!((refused(&taken), taken.json()["taken"].as_bool()), (vec![3, 4], Some(false)), "whole or not at all");
    let taken = send("/api/import/containers?take=true", "container,lid_g\nD1,4.1\nC1,\n");
    assert_eq!((refused(&taken), taken.json()["taken"].as_bool()), (vec![], Some(true)), "{}", taken.body);
    support::until("the container is known", || station.get("/api/container/D1").status == 200);
    assert_eq!(station.get("/api/container/D1").json()["lid_g"], 4.1);
    let taken = send("/api/import/specimens?take=true", "specimen,description\nS-7,\"grey, fat\"\nS-1,\n");
    assert_eq!((taken.status, refused(&taken)), (200, vec![3]), "{}", taken.body);
    for (path, text, status) in [
        ("/api/import/containers", "", 422),
        ("/api/import/containers", "colour\nred\n", 422),
        ("/api/import/ovens", "container\nC1\n", 404),
    ] {
        let answer = send(path, text);
        assert_eq!(answer.status, status, "{path} {text}: {}", answer.body);
        described.judge("post", "/api/import/{list}", &answer);
    }
    let answer = station.send("POST", "/api/import/containers", &csv, b"container\n\xff\n");
    assert_eq!(answer.status, 400);
    // By the page's form: first looked at, then taken.
    let form = [("Content-Type", "application/x-www-form-urlencoded")];
    let body = "what=containers&text=container%0AE1%0AE+2%0A";
    let page = station.send("POST", "/import", &form, body.as_bytes());
    assert!(page.status == 200 && !page.body.contains("/import/take"), "one line is bad: {}", page.body);
    let page = station.send("POST", "/import/take", &form, body.as_bytes());
    assert_eq!((page.status, station.get("/api/container/E1").status), (422, 404), "nothing is taken");
    let body = "what=containers&text=container%0AE1%0AE2%0A";
    let page = station.send("POST", "/import", &form, body.as_bytes());
    assert!(page.status == 200 && page.body.contains("/import/take"), "{}", page.body);
    let page = station.send("POST", "/import/take", &form, body.as_bytes());
    assert_eq!(page.status, 303);
    support::until("both are taken", || station.get("/api/container/E1").status == 200);
}

fn sessions(station: &Station, described: &mut Described) {
    let answer = station.post("/api/session", &json!({"operator": "AB", "pin": PIN}));
    described.judge("post", "/api/session", &answer);
    let cookie = answer.cookie();
    described.judge("post", "/api/session", &station.post("/api/session", &json!({"operator": "AB", "pin": "0"})));
    described.judge("post", "/api/session", &station.post("/api/session", &json!({"operator": "A B", "pin": "0"})));
    described.judge("delete", "/api/session", &station.send("DELETE", "/api/session", &[("Cookie", &cookie)], b""));
}

/// A judge that cannot complain is no judge.
#[test]
fn the_judge_sees_what_is_not_described() {
    let station = Station::start("");
    let described = Described::of(&station);
    let schema =
        &described.document["paths"]["/api/bench/{bench}"]["get"]["responses"]["200"]["content"]["application/json"]["schema"];
    let judge = described.validator(schema);
    let good = station.get("/api/bench/north").json();
    assert!(judge.is_valid(&good), "{good}");
    for (member, value) in
        [("seq", json!("7")), ("intention", json!({"specimen": "S-1", "intention": "baking"})), ("more", json!(1))]
    {
        let mut bad = good.clone();
        bad[member] = value;
        assert!(!judge.is_valid(&bad), "{bad}");
    }
    let mut bad = good;
    bad.as_object_mut().expect("an object").remove("loose");
    assert!(!judge.is_valid(&bad));
    let ask = described.body("/api/ask");
    assert!(!ask.is_valid(&json!({"ask": "tie"})) && !ask.is_valid(&json!({})));
}
