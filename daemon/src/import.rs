//! A register of containers, or the day's specimens, from a table with commas.
//!
//! A file is taken whole or not at all: one line that is wrong and nothing of
//! it is asked for. What a spreadsheet may have done to the numbers on its way
//! (semicolons, decimal commas, another character set) is refused in words
//! rather than guessed.

mod cells;

use crate::ledger::Digest;
use cells::Row;
use serde_json::{Map, Value, json};
use std::collections::BTreeMap;
use tarecup_core::fact::Intention;
use tarecup_core::names::{ContainerId, MethodName, Operator, SpecimenId};
use tarecup_core::near::{meant, nearest};
use tarecup_core::quantity::{Mass, MassUnit};

/// Largest file, in bytes.
pub const LARGEST: usize = 1 << 20;
/// Most lines after the first.
pub const MOST_ROWS: usize = 5_000;
/// Faults that are told; more are counted.
const FAULTS_TOLD: usize = 100;
/// Longest text of a cell, in characters: what an ask takes.
const LONGEST: usize = 1_000;

/// What a file holds.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub enum Kind {
    /// A register of containers: `container`, `tare_g`, `lid_g`.
    Containers,
    /// Specimens to be opened: `specimen`, `method`, `description` and so on.
    Specimens,
}

impl Kind {
    /// Its word.
    pub fn word(self) -> &'static str {
        match self {
            Kind::Containers => "containers",
            Kind::Specimens => "specimens",
        }
    }
    /// Columns it may have; the first is needed.
    pub fn columns(self) -> &'static [&'static str] {
        match self {
            Kind::Containers => &["container", "tare_g", "lid_g"],
            Kind::Specimens => {
                &["specimen", "method", "edition", "description", "preparation", "passing_75um_percent", "clay_percent", "wanted"]
            }
        }
    }
}

/// What is wrong with a line.
#[derive(Clone, Debug, PartialEq, Eq)]
pub struct Fault {
    /// The line of the file, from 1.
    pub line: usize,
    /// The column, where it is about one.
    pub column: Option<String>,
    /// What is wrong, and what to try.
    pub says: String,
}

/// One line that may be asked for.
#[derive(Clone, Debug, PartialEq)]
pub struct Item {
    /// The line of the file.
    pub line: usize,
    /// The ask, without who asks.
    pub ask: Value,
}

/// What a file would do. With a fault there are no items.
#[derive(Clone, Debug, PartialEq)]
pub struct Preview {
    /// What it holds; `None` when its first line does not tell.
    pub kind: Option<Kind>,
    /// Lines to be asked for, in order.
    pub items: Vec<Item>,
    /// What is wrong, in the order of the lines.
    pub faults: Vec<Fault>,
    /// Faults beyond those.
    pub more_faults: usize,
    digest: String,
}

impl Preview {
    /// Whether it may be taken.
    pub fn fine(&self) -> bool {
        self.faults.is_empty() && !self.items.is_empty()
    }

    /// The asks in the name of a person. Asked again from the same file by the same client they do nothing twice.
    pub fn asks(&self, who: &Operator) -> Vec<Value> {
        let one = |item: &Item| {
            let mut ask = item.ask.clone();
            ask["who"] = json!(who);
            ask["ask_id"] = json!(format!("import-{}-{}", self.digest, item.line));
            ask
        };
        self.items.iter().map(one).collect()
    }
}

/// Looks at a file's text; its first line tells what it holds.
pub fn preview(text: &str) -> Preview {
    look(text, None)
}

/// Looks at a file's text that must hold containers, or specimens.
pub fn preview_as(text: &str, kind: Kind) -> Preview {
    look(text, Some(kind))
}

/// Looks at a file's bytes.
pub fn preview_bytes(bytes: &[u8], kind: Option<Kind>) -> Preview {
    if bytes.starts_with(&[0xFF, 0xFE]) || bytes.starts_with(&[0xFE, 0xFF]) {
        return whole(1, "the file is UTF-16; save it as CSV in UTF-8");
    }
    match std::str::from_utf8(bytes) {
        Ok(text) => look(text, kind),
        Err(e) => {
            let line = 1 + bytes[..e.valid_up_to()].iter().filter(|b| **b == b'\n').count();
            whole(line, "there are characters that are not UTF-8; save the file as CSV in UTF-8")
        }
    }
}

/// A file that is refused as a whole.
fn whole(line: usize, says: &str) -> Preview {
    let faults = vec![Fault { line, column: None, says: says.to_string() }];
    Preview { kind: None, items: Vec::new(), faults, more_faults: 0, digest: String::new() }
}

fn look(text: &str, wanted: Option<Kind>) -> Preview {
    if text.len() > LARGEST {
        return whole(1, &format!("the file is {} bytes long; at most {LARGEST} fit: divide it", text.len()));
    }
    let text = text.strip_prefix('\u{feff}').unwrap_or(text);
    let mut rows = match cells::rows(text, MOST_ROWS + 1) {
        Ok(rows) => rows.into_iter(),
        Err(fault) => return whole(fault.line, &fault.says),
    };
    let Some(head) = rows.next() else {
        return whole(1, "the file is empty; its first line names the columns, such as container,tare_g,lid_g");
    };
    let columns: Vec<String> = head.cells.iter().map(|c| c.trim().to_ascii_lowercase()).collect();
    let kind = match kind_of(&columns, wanted) {
        Ok(kind) => kind,
        Err(says) => return whole(head.line, &says),
    };
    let digest: String = Digest::of(text.as_bytes()).to_string().chars().take(16).collect();
    let mut preview = Preview { kind: Some(kind), items: Vec::new(), faults: Vec::new(), more_faults: 0, digest };
    check_columns(kind, &columns, head.line, &mut preview);
    let mut seen: BTreeMap<String, usize> = BTreeMap::new();
    for row in rows {
        match ask_of(kind, &columns, &row, &mut seen) {
            Ok(ask) => preview.items.push(Item { line: row.line, ask }),
            Err(faults) => preview.add(faults),
        }
    }
    if preview.items.is_empty() && preview.faults.is_empty() {
        preview.add(vec![Fault { line: head.line, column: None, says: String::from("there is no line below the first one") }]);
    }
    if !preview.faults.is_empty() {
        preview.items.clear();
    }
    preview
}

impl Preview {
    fn add(&mut self, faults: Vec<Fault>) {
        for fault in faults {
            match self.faults.len() < FAULTS_TOLD {
                true => self.faults.push(fault),
                false => self.more_faults += 1,
            }
        }
    }
}

/// What the first line says that the file holds.
fn kind_of(columns: &[String], wanted: Option<Kind>) -> Result<Kind, String> {
    let has = |name: &str| columns.iter().any(|c| c == name);
    let found = match (has("container"), has("specimen")) {
        (true, false) => Some(Kind::Containers),
        (false, true) => Some(Kind::Specimens),
        _ => None,
    };
    match (wanted, found) {
        (Some(wanted), Some(found)) if wanted != found => Err(format!(
            "the file holds {}, not {}: its first line has the column {}",
            found.word(),
            wanted.word(),
            found.columns()[0]
        )),
        (Some(kind), _) if has(kind.columns()[0]) => Ok(kind),
        (None, Some(kind)) => Ok(kind),
        _ => Err(format!(
            "the first line names the columns, and one of them is {}; it reads \"{}\"",
            wanted.map_or("container or specimen", |k| k.columns()[0]),
            short(&columns.join(","))
        )),
    }
}

fn check_columns(kind: Kind, columns: &[String], line: usize, preview: &mut Preview) {
    for (n, column) in columns.iter().enumerate() {
        let says = if columns[..n].contains(column) {
            String::from("the column is there twice: leave one out")
        } else if !kind.columns().contains(&column.as_str()) {
            let hint = meant(column, kind.columns().iter().copied());
            format!("there is no column of this name{hint}; the columns are {}", kind.columns().join(", "))
        } else {
            continue;
        };
        preview.add(vec![Fault { line, column: Some(short(column)), says }]);
    }
}

/// A text of the file in a sentence.
fn short(text: &str) -> String {
    text.chars().take(60).flat_map(char::escape_default).collect()
}

fn ask_of(kind: Kind, columns: &[String], row: &Row, seen: &mut BTreeMap<String, usize>) -> Result<Value, Vec<Fault>> {
    if row.cells.len() != columns.len() {
        let says = format!(
            "the line has {} cells and the first line names {} columns: put text with a comma in double quotes",
            row.cells.len(),
            columns.len()
        );
        return Err(vec![Fault { line: row.line, column: None, says }]);
    }
    let (mut ask, mut faults) = (Map::new(), Vec::new());
    let word = if kind == Kind::Containers { "register_container" } else { "open_specimen" };
    ask.insert("ask".into(), json!(word));
    for (column, cell) in columns.iter().zip(&row.cells) {
        let cell = cell.trim();
        let fault = |says: String| Fault { line: row.line, column: Some(short(column)), says };
        match value_of(column, cell) {
            Ok(None) if Some(&column.as_str()) == kind.columns().first() => faults.push(fault(String::from("the cell is empty"))),
            Ok(None) => (),
            Ok(Some(value)) => drop(ask.insert(column.clone(), value)),
            Err(says) => faults.push(fault(says)),
        }
    }
    let first = kind.columns()[0];
    if let Some(id) = ask.get(first).and_then(Value::as_str) {
        match seen.get(id) {
            Some(line) => faults.push(Fault {
                line: row.line,
                column: Some(first.into()),
                says: format!("{id} stands in line {line} already: each has one line"),
            }),
            None => drop(seen.insert(id.to_string(), row.line)),
        }
    }
    if faults.is_empty() { Ok(Value::Object(ask)) } else { Err(faults) }
}

/// A cell as the member of an ask; `None` when it is empty.
fn value_of(column: &str, cell: &str) -> Result<Option<Value>, String> {
    if cell.is_empty() {
        return Ok(None);
    }
    if let Some(c) = cell.chars().find(|c| c.is_control()) {
        return Err(format!("there is a character that cannot be printed ({}): take it out", c.escape_default()));
    }
    let name = |e: tarecup_core::names::NameError| format!("\"{}\" is no name: {e}", short(cell));
    Ok(Some(match column {
        "container" => json!(ContainerId::new(cell).map_err(name)?),
        "specimen" => json!(SpecimenId::new(cell).map_err(name)?),
        "method" => json!(MethodName::new(cell).map_err(name)?),
        "tare_g" | "lid_g" => json!(grams(cell)?),
        "passing_75um_percent" | "clay_percent" => json!(percent(cell)?),
        "wanted" => json!(wanted(cell)?),
        _ if cell.chars().count() > LONGEST => return Err(format!("at most {LONGEST} characters fit")),
        _ => json!(cell),
    }))
}

/// A mass in grams, kept as it is written.
fn grams(cell: &str) -> Result<String, String> {
    if cell.contains(',') {
        return Err(format!("\"{}\" has a comma: write grams with a decimal point, such as 21.43", short(cell)));
    }
    let mass = Mass::parse(cell, MassUnit::Gram).map_err(|e| format!("\"{}\" is not a mass in grams: {e}", short(cell)))?;
    match mass > Mass::ZERO {
        true => Ok(cell.to_string()),
        false => Err(format!("\"{}\" g is not more than nothing", short(cell))),
    }
}

fn percent(cell: &str) -> Result<f64, String> {
    let plain = cell.chars().all(|c| c.is_ascii_digit() || c == '.');
    match cell.parse::<f64>().ok().filter(|p| plain && (0.0..=100.0).contains(p)) {
        Some(percent) => Ok(percent),
        None => Err(format!("\"{}\" is no percentage: write a number between 0 and 100 with a decimal point", short(cell))),
    }
}

/// `liquid plastic natural`, any of them.
fn wanted(cell: &str) -> Result<Vec<Intention>, String> {
    let words = ["liquid", "plastic", "natural"];
    let one = |word: &str| match word {
        "liquid" => Ok(Intention::Liquid),
        "plastic" => Ok(Intention::Plastic),
        "natural" => Ok(Intention::Natural),
        other => {
            let hint = nearest(other, words.into_iter()).map_or(String::new(), |w| format!(" (did you mean {w}?)"));
            Err(format!("\"{}\" is not known{hint}: write liquid, plastic, natural, with blanks in between", short(other)))
        }
    };
    cell.split_whitespace().map(one).collect()
}
