//! An independent model of what was done to a station: which lines were written
//! to its ports and which asks were answered. From that alone it says what the
//! ledger must hold and what subscribers must have heard, each exactly once.
//! It reads the ledger's file as plain SQLite and shares no code with the program.

use serde_json::Value;
use std::collections::BTreeMap;
use std::path::Path;

/// What was done.
#[derive(Clone, Debug, Default)]
pub struct Stimulus {
    /// Lines written to each instrument, in order.
    pub lines: BTreeMap<String, Vec<String>>,
    /// Asks that were answered with `ok`, and the answers.
    pub asks: Vec<(Value, Value)>,
}

/// How much of the lines must have been heard.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub enum Hearing {
    /// The service ran all the time: every line, in order.
    Every,
    /// The service was away now and then: nothing that was not written, nothing twice, in order.
    InOrder,
}

/// A row of what was heard.
#[derive(Clone, Debug, PartialEq)]
pub struct Input {
    pub no: u64,
    pub kind: String,
    pub instrument: Option<String>,
    pub text: String,
}

/// What the ledger holds.
#[derive(Clone, Debug, Default)]
pub struct Kept {
    pub inputs: Vec<Input>,
    pub facts: Vec<Value>,
}

impl Kept {
    pub fn read(state: &Path) -> Self {
        let flags = rusqlite::OpenFlags::SQLITE_OPEN_READ_ONLY;
        let db = rusqlite::Connection::open_with_flags(state.join("ledger.sqlite"), flags).expect("the ledger opens");
        db.busy_timeout(std::time::Duration::from_secs(5)).expect("set");
        let sql = "SELECT i.no, i.kind, n.name, i.bytes FROM input i LEFT JOIN instrument n ON n.id = i.instrument ORDER BY i.no";
        let row = |r: &rusqlite::Row<'_>| {
            let bytes: Vec<u8> = r.get(3)?;
            let text = String::from_utf8_lossy(&bytes).trim().to_owned();
            Ok(Input { no: r.get::<_, i64>(0)?.unsigned_abs(), kind: r.get(1)?, instrument: r.get(2)?, text })
        };
        let inputs = db.prepare(sql).expect("rows").query_map([], row).expect("rows").collect::<Result<_, _>>().expect("rows");
        let body = |r: &rusqlite::Row<'_>| r.get::<_, Vec<u8>>(0);
        let bodies: Vec<Vec<u8>> = db
            .prepare("SELECT body FROM fact ORDER BY seq")
            .expect("facts")
            .query_map([], body)
            .expect("facts")
            .collect::<Result<_, _>>()
            .expect("facts");
        let facts = bodies.iter().map(|b| serde_json::from_slice(b).expect("JSON")).collect();
        Self { inputs, facts }
    }
}

/// Everything that does not agree: written and asked = stored = published.
pub fn judge(done: &Stimulus, kept: &Kept, published: Option<&[Value]>, hearing: Hearing) -> Vec<String> {
    let mut wrong = Vec::new();
    numbered(kept, &mut wrong);
    for (instrument, written) in &done.lines {
        heard(instrument, written, kept, hearing, &mut wrong);
        if hearing == Hearing::Every {
            weighed(instrument, written, kept, &mut wrong);
        }
    }
    rest_on_their_lines(kept, &mut wrong);
    asked(done, kept, &mut wrong);
    if let Some(published) = published {
        told(kept, published, &mut wrong);
    }
    wrong
}

fn numbered(kept: &Kept, wrong: &mut Vec<String>) {
    for (want, input) in (1..).zip(&kept.inputs) {
        if input.no != want {
            return wrong.push(format!("input {} where {want} is due", input.no));
        }
    }
    for (want, fact) in (1u64..).zip(&kept.facts) {
        if fact["seq"] != want {
            return wrong.push(format!("fact {} where {want} is due", fact["seq"]));
        }
    }
}

fn heard(instrument: &str, written: &[String], kept: &Kept, hearing: Hearing, wrong: &mut Vec<String>) {
    let of = |i: &&Input| i.instrument.as_deref() == Some(instrument) && matches!(i.kind.as_str(), "line" | "reject");
    // The second half of a line end that comes by itself carries nothing.
    let stored: Vec<&str> = kept.inputs.iter().filter(of).map(|i| i.text.as_str()).filter(|t| !t.is_empty()).collect();
    match hearing {
        Hearing::Every => {
            let first = written.iter().zip(&stored).position(|(w, s)| w != s);
            if let Some(n) = first {
                wrong.push(format!("{instrument}: line {n} was {:?}, stored is {:?}", written[n], stored[n]));
            } else if written.len() != stored.len() {
                wrong.push(format!("{instrument}: {} lines were written, {} are stored", written.len(), stored.len()));
            }
        }
        Hearing::InOrder => {
            let mut left = written.iter();
            for (n, line) in stored.iter().enumerate() {
                // A line cut by a kill is stored as what was left of it.
                if !left.by_ref().any(|w| w == line || (!line.is_empty() && w.ends_with(line))) {
                    return wrong.push(format!(
                        "{instrument}: stored line {n}, {line:?}, was not written, or not so often, or not there"
                    ));
                }
            }
        }
    }
}

/// The mass on a line of the plain sort that the station's balances speak, µg.
fn micrograms(line: &str) -> Option<i64> {
    let grams = line.trim_start_matches('+').split(" g").next()?.trim();
    let (whole, part) = grams.split_once('.')?;
    Some(whole.parse::<i64>().ok()? * 1_000_000 + format!("{part:0<6}").parse::<i64>().ok()?)
}

/// Each mass that lay on the pan for at least three steady lines is one weighing.
fn weighed(instrument: &str, written: &[String], kept: &Kept, wrong: &mut Vec<String>) {
    let mut expected: Vec<i64> = Vec::new();
    let mut run: (i64, u32) = (0, 0);
    for mass in written.iter().filter_map(|l| micrograms(l)) {
        run = if mass == run.0 { (mass, run.1 + 1) } else { (mass, 1) };
        if mass != 0 && run.1 == 3 {
            expected.push(mass);
        }
    }
    let of = |f: &&Value| f["kind"] == "weighed" && f["fact"]["balance"] == instrument;
    let found: Vec<i64> = kept.facts.iter().filter(of).filter_map(|f| f["fact"]["mass_ug"].as_i64()).collect();
    if expected != found {
        wrong.push(format!("{instrument}: masses {expected:?} were laid on the pan, weighed are {found:?}"));
    }
}

/// A weighing is the mass on the one line that it names, and no line is two weighings.
fn rest_on_their_lines(kept: &Kept, wrong: &mut Vec<String>) {
    let mut used: BTreeMap<u64, u64> = BTreeMap::new();
    for fact in kept.facts.iter().filter(|f| f["kind"] == "weighed") {
        let Some(no) = fact["fact"]["taken"]["input"].as_u64() else { continue };
        let line = usize::try_from(no - 1).ok().and_then(|n| kept.inputs.get(n));
        let mass = line.and_then(|l| micrograms(&l.text));
        if mass.is_none() || mass != fact["fact"]["mass_ug"].as_i64() {
            wrong.push(format!("fact {}: {} µg is not what input {no} says: {line:?}", fact["seq"], fact["fact"]["mass_ug"]));
        }
        if let Some(other) = used.insert(no, fact["seq"].as_u64().unwrap_or(0)) {
            wrong.push(format!("input {no} is two weighings: {other} and {}", fact["seq"]));
        }
    }
}

fn asked(done: &Stimulus, kept: &Kept, wrong: &mut Vec<String>) {
    let mut stored: Vec<Value> =
        kept.inputs.iter().filter(|i| i.kind == "ask").filter_map(|i| serde_json::from_str(&i.text).ok()).collect();
    for (ask, answer) in &done.asks {
        let mut body = ask.clone();
        body.as_object_mut().expect("an object").remove("ask_id");
        match stored.iter().position(|s| *s == body) {
            Some(n) => drop(stored.remove(n)),
            None => wrong.push(format!("{ask} was answered and is not stored")),
        }
        for seq in answer["facts"].as_array().into_iter().flatten().filter_map(Value::as_u64) {
            if kept.facts.len() < seq as usize {
                wrong.push(format!("{ask} was answered with fact {seq}, which is not stored"));
            }
        }
    }
    // An ask that was refused is stored too; one that was answered is stored once.
    for left in stored {
        if done.asks.iter().any(|(a, _)| a["ask"] == left["ask"] && same_but_id(a, &left)) {
            wrong.push(format!("{left} is stored more often than it was answered"));
        }
    }
}

fn same_but_id(ask: &Value, body: &Value) -> bool {
    let mut ask = ask.clone();
    ask.as_object_mut().expect("an object").remove("ask_id");
    ask == *body
}

/// Whoever drops numbers heard before has each fact once, as it is stored, from the first that was heard on.
fn told(kept: &Kept, published: &[Value], wrong: &mut Vec<String>) {
    let mut next = published.first().and_then(|m| m["seq"].as_u64()).unwrap_or(0);
    for message in published {
        let seq = message["seq"].as_u64().unwrap_or(0);
        if seq > next {
            wrong.push(format!("fact {next} was not published before fact {seq}"));
        }
        let stored = usize::try_from(seq).ok().and_then(|n| kept.facts.get(n.wrapping_sub(1)));
        let same =
            stored.is_some_and(|s| ["seq", "at", "kind", "fact", "who", "through"].iter().all(|m| s.get(m) == message.get(m)));
        if !same {
            wrong.push(format!("fact {seq} was published as something that is not stored"));
        }
        next = next.max(seq + 1);
    }
    if next != kept.facts.len() as u64 + 1 {
        wrong.push(format!("{} facts are stored, {} were published", kept.facts.len(), next - 1));
    }
}

/// Controls: the same record with one thing wrong must be complained about. Returns the faults that went unnoticed.
pub fn blind_to(done: &Stimulus, kept: &Kept, published: &[Value], hearing: Hearing) -> Vec<&'static str> {
    let mut unnoticed = Vec::new();
    let mut tried = |what: &'static str, kept: &Kept, published: &[Value]| {
        if judge(done, kept, Some(published), hearing).is_empty() {
            unnoticed.push(what);
        }
    };
    let renumbered = |mut inputs: Vec<Input>| {
        (1..).zip(&mut inputs).for_each(|(no, i)| i.no = no);
        inputs
    };
    let used = kept.facts.iter().find_map(|f| f["fact"]["taken"]["input"].as_u64()).expect("a weighing") as usize - 1;
    let mut lost = kept.inputs.clone();
    lost.remove(used);
    tried("a line lost", &Kept { inputs: renumbered(lost), ..kept.clone() }, published);
    let mut doubled = kept.inputs.clone();
    doubled.insert(used, doubled[used].clone());
    tried("a line doubled", &Kept { inputs: renumbered(doubled), ..kept.clone() }, published);
    let ask = kept.inputs.iter().position(|i| i.kind == "ask").expect("an ask");
    let mut forgotten = kept.inputs.clone();
    forgotten[ask].text = String::from("{}");
    tried("an ask lost", &Kept { inputs: forgotten, ..kept.clone() }, published);
    let weighing = kept.facts.iter().position(|f| f["kind"] == "weighed").expect("a weighing");
    let mut other = kept.facts.clone();
    other[weighing]["fact"]["mass_ug"] = Value::from(1);
    tried("a mass changed", &Kept { facts: other, ..kept.clone() }, published);
    let mut twice = kept.facts.clone();
    twice.insert(weighing, twice[weighing].clone());
    tried("a fact doubled", &Kept { facts: twice, ..kept.clone() }, published);
    let mut missed = published.to_vec();
    missed.retain(|m| m["seq"] != kept.facts[weighing]["seq"]);
    tried("a fact not published", kept, &missed);
    unnoticed
}
