//! Documents made anew from the facts, beside those that are stored.
//!
//! Queries, screen and retained topics are views of documents. A document that
//! does not follow from the facts shows something nobody decided.

use super::{Difference, MOST_DIFFERENCES};
use crate::desk::{CLOCK, STATISTICS};
use crate::ledger::{FactStored, LedgerError, Reader, Which};
use crate::service::setup_of;
use serde_json::Value;
use std::collections::BTreeSet;
use tarecup_core::fact::{Fact, Recorded};
use tarecup_core::lab::entities::Entity;
use tarecup_core::lab::{Lab, Setup};
use tarecup_core::names::{MethodName, Operator};

/// Rows read at a time.
const PAGE: usize = 1_000;
/// The kinds of document that follow from facts alone; the others are the
/// senses', which follow from lines.
const KINDS: [&str; 7] = ["bench", "clock", "container", "instrument", "loose", "specimen", "statistics"];

/// A stored fact as the laboratory takes it.
pub(crate) fn recorded(stored: &FactStored) -> Result<Recorded, String> {
    #[derive(serde::Deserialize)]
    struct Said {
        #[serde(default)]
        through: Option<u64>,
        #[serde(default)]
        who: Option<Operator>,
        #[serde(flatten)]
        fact: Fact,
    }
    let said: Said = serde_json::from_slice(&stored.body).map_err(|e| format!("this program cannot read it: {e}"))?;
    Ok(Recorded { seq: stored.seq, at: stored.at, who: said.who, through: said.through, fact: said.fact })
}

/// Folds all facts and compares what comes out with the stored documents.
pub(super) fn compare(reader: &Reader, progress: &mut dyn FnMut(u64)) -> Result<Vec<Difference>, LedgerError> {
    let mut differences = Vec::new();
    let (lab, touched, seq) = fold(reader, &mut differences, progress)?;
    for kind in KINDS {
        compare_kind(reader, kind, &lab, (&touched, seq), &mut differences)?;
    }
    Ok(differences)
}

fn fold(
    reader: &Reader,
    differences: &mut Vec<Difference>,
    progress: &mut dyn FnMut(u64),
) -> Result<(Lab, BTreeSet<Entity>, u64), LedgerError> {
    let (mut lab, mut touched, mut seq) = (Lab::new(nothing()), BTreeSet::new(), 0);
    loop {
        let page = reader.facts_after(seq, PAGE)?;
        let Some(last) = page.last() else { return Ok((lab, touched, seq)) };
        seq = last.seq;
        for stored in &page {
            match recorded(stored) {
                Ok(fact) => {
                    lab = under_settings(lab, &fact, reader, differences)?;
                    touched.append(&mut lab.fold(&fact));
                }
                Err(why) => note(differences, stored.seq, why),
            }
        }
        progress(seq);
    }
}

/// A service begins by saying that it came up, and its settings follow in the
/// same moment when they have changed: they hold for both.
fn under_settings(lab: Lab, fact: &Recorded, reader: &Reader, differences: &mut Vec<Difference>) -> Result<Lab, LedgerError> {
    let next = match fact.fact {
        Fact::ServiceStarted { .. } => reader.fact(fact.seq + 1)?,
        _ => return Ok(lab),
    };
    let Some(Ok(Recorded { fact: Fact::SettingsTaken { input, .. }, .. })) = next.as_ref().map(recorded) else { return Ok(lab) };
    let row = reader.inputs_from(input, 1, None)?.into_iter().next();
    match setup_of(&row.map(|r| String::from_utf8_lossy(&r.bytes).into_owned()).unwrap_or_default()) {
        Ok(setup) => Ok(lab.set_up_anew(setup.lab)),
        Err(why) => {
            note(differences, fact.seq + 1, why);
            Ok(lab)
        }
    }
}

/// A laboratory before its first settings.
pub(crate) fn nothing() -> Setup {
    Setup {
        benches: Vec::new(),
        instruments: Default::default(),
        methods: Default::default(),
        default_method: MethodName::new("none").unwrap_or_else(|_| unreachable!("a plain name")),
        balances: Default::default(),
        balance_rule: None,
        linking: Default::default(),
    }
}

fn note(differences: &mut Vec<Difference>, seq: u64, why: String) {
    if differences.len() < MOST_DIFFERENCES {
        differences.push(Difference { seq, why });
    }
}

fn compare_kind(
    reader: &Reader,
    kind: &str,
    lab: &Lab,
    (touched, folded): (&BTreeSet<Entity>, u64),
    differences: &mut Vec<Difference>,
) -> Result<(), LedgerError> {
    let mut expected: std::collections::BTreeMap<String, Value> =
        touched.iter().filter_map(|e| made_anew(lab, e)).filter(|(k, ..)| *k == kind).map(|(_, id, body)| (id, body)).collect();
    let mut after = String::new();
    loop {
        let page = reader.documents(kind, Which::All, &after, PAGE)?;
        let Some(last) = page.last() else { break };
        after.clone_from(&last.id);
        for stored in &page {
            // A running service has gone on since the facts were read.
            if stored.seq > folded {
                expected.remove(&stored.id);
                continue;
            }
            let body: Option<Value> = serde_json::from_slice(&stored.body).ok();
            match (expected.remove(&stored.id), body) {
                (Some(made), Some(kept)) if made == kept => (),
                (Some(made), Some(kept)) => {
                    let at = first_difference(&made, &kept, String::new());
                    note(differences, stored.seq, format!("{kind} {} does not follow from the facts: {at}", stored.id));
                }
                (_, None) => note(differences, stored.seq, format!("{kind} {} is no JSON", stored.id)),
                (None, _) => note(differences, stored.seq, format!("{kind} {} is stored, and no fact touches it", stored.id)),
            }
        }
    }
    for id in expected.keys() {
        note(differences, 0, format!("{kind} {id} follows from the facts and is not stored"));
    }
    Ok(())
}

fn made_anew(lab: &Lab, entity: &Entity) -> Option<(&'static str, String, Value)> {
    let json = |value: serde_json::Result<Value>| value.unwrap_or_default();
    Some(match entity {
        Entity::Specimen(id) => ("specimen", id.as_str().into(), json(serde_json::to_value(lab.specimen(id)))),
        Entity::Container(id) => ("container", id.as_str().into(), json(serde_json::to_value(lab.container(id)))),
        Entity::Bench(name) => ("bench", name.as_str().into(), json(serde_json::to_value(lab.bench(name)?))),
        Entity::Instrument(name) => ("instrument", name.as_str().into(), json(serde_json::to_value(lab.instrument(name)?))),
        Entity::Clock => ("clock", CLOCK.into(), json(serde_json::to_value(lab.clock()))),
        Entity::Statistics => ("statistics", STATISTICS.into(), json(serde_json::to_value(lab.statistics()))),
        Entity::Loose(seq) => ("loose", format!("{seq:020}"), json(serde_json::to_value(lab.loose(*seq)))),
    })
}

/// Where two JSON values first differ, as a path with both sides.
fn first_difference(made: &Value, kept: &Value, path: String) -> String {
    match (made, kept) {
        (Value::Object(a), Value::Object(b)) => {
            let keys: BTreeSet<&String> = a.keys().chain(b.keys()).collect();
            let differs = keys.into_iter().find(|k| a.get(*k) != b.get(*k));
            differs.map_or(path.clone(), |k| {
                let null = Value::Null;
                first_difference(a.get(k).unwrap_or(&null), b.get(k).unwrap_or(&null), format!("{path}.{k}"))
            })
        }
        (Value::Array(a), Value::Array(b)) if a.len() == b.len() => {
            let differs = a.iter().zip(b).position(|(x, y)| x != y);
            differs.map_or(path.clone(), |n| first_difference(&a[n], &b[n], format!("{path}[{n}]")))
        }
        _ => {
            let short = |v: &Value| v.to_string().chars().take(80).collect::<String>();
            format!("{} is {}, stored as {}", path.trim_start_matches('.'), short(made), short(kept))
        }
    }
}
