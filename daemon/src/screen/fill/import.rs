//! Registers of containers and the day's specimens: what [`crate::import`] finds in a file's text, and what the
//! laboratory would say to each line.

use super::super::view::{Import, ImportLine};
use super::{Around, frame};
use crate::import::{Fault, Item, Kind, preview_as};
use serde_json::Value;
use std::collections::BTreeMap;
use tarecup_core::lab::Lab;
use tarecup_core::lab::ask::Ask;
use tarecup_core::stamp::Stamp;

/// What a file would do, and the asks of its lines without `who`. It is taken whole or not at all: with one line that
/// is refused there are no asks.
pub fn import(lab: &Lab, what: &str, text: &str, now: &Stamp, around: &Around) -> (Import, Vec<Ask>) {
    let mut view = Import { frame: frame(lab, now, around), what: what.into(), text: text.into(), ..Default::default() };
    let kind = match what {
        "containers" => Kind::Containers,
        "specimens" => Kind::Specimens,
        _ => {
            view.refused = Some(String::from("a file holds containers or specimens; say which"));
            return (view, Vec::new());
        }
    };
    let preview = preview_as(text, kind);
    // What is wrong with the first line is wrong with all of them.
    if let Some(fault) = preview.faults.first().filter(|f| preview.kind.is_none() || f.line == 1) {
        view.refused = Some(said(fault));
        return (view, Vec::new());
    }
    let raw: Vec<&str> = text.lines().collect();
    for fault in &preview.faults {
        let fields = raw.get(fault.line - 1).map(|l| l.chars().take(200).collect()).into_iter().collect();
        view.lines.push(ImportLine { no: fault.line, fields, refused: Some(said(fault)), ..Default::default() });
    }
    let asks: Vec<Ask> = preview.items.iter().filter_map(|i| serde_json::from_value(i.ask.clone()).ok()).collect();
    // Who takes the list is said when it is taken; that nobody is named yet is no fault of a line.
    let named: Vec<Ask> = preview.items.iter().filter_map(|i| somebodys(&i.ask)).collect();
    let mut refused: BTreeMap<usize, String> =
        lab.would_refuse(&named, now, around.frame.seq + 1).into_iter().map(|(n, refusal)| (n, refusal.0)).collect();
    let whole = preview.faults.is_empty() && refused.is_empty();
    for (n, item) in preview.items.iter().enumerate() {
        let note = known(lab, item).then(|| String::from("it is in the register already"));
        let (no, fields) = (item.line, fields(kind, item));
        view.lines.push(ImportLine { no, fields, refused: refused.remove(&n), note });
    }
    (view, if whole { asks } else { Vec::new() })
}

fn said(fault: &Fault) -> String {
    match &fault.column {
        Some(column) => format!("{column}: {}", fault.says),
        None => fault.says.clone(),
    }
}

/// What the line says, in the order of the columns as the handbook has them.
fn fields(kind: Kind, item: &Item) -> Vec<String> {
    let text = |value: &Value| match value {
        Value::String(text) => text.clone(),
        Value::Array(words) => words.iter().filter_map(Value::as_str).collect::<Vec<_>>().join(" "),
        other => other.to_string(),
    };
    kind.columns().iter().filter_map(|column| item.ask.get(*column)).map(text).collect()
}

fn known(lab: &Lab, item: &Item) -> bool {
    let name = item.ask.get("container").and_then(Value::as_str);
    name.is_some_and(|name| lab.containers().any(|c| c.id.as_str() == name))
}

/// An ask as somebody would make it.
fn somebodys(ask: &serde_json::Value) -> Option<Ask> {
    let mut ask = ask.clone();
    if let Some(members) = ask.as_object_mut() {
        members.entry("who").or_insert_with(|| serde_json::Value::from("XX"));
    }
    serde_json::from_value(ask).ok()
}
