//! Lists of containers and specimens from a spreadsheet (CSV, RFC 4180): shown
//! line by line first, then taken through the same asks as everything else.

use super::view::ImportLine;
use serde_json::{Map, Value};
use std::collections::BTreeSet;
use tarecup_core::lab::Lab;
use tarecup_core::lab::entities::Standing;
use tarecup_core::names::{ContainerId, MethodName, SpecimenId};
use tarecup_core::quantity::{Mass, MassUnit};

/// Most lines of a file.
pub const LINES_MOST: usize = 5_000;
/// Longest field, in characters.
const FIELD_LONGEST: usize = 1_000;

/// What a file lists.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub enum What {
    /// Containers for the register.
    Containers,
    /// Specimens to open.
    Specimens,
}

impl What {
    /// By its word.
    pub fn named(word: &str) -> Option<Self> {
        match word {
            "containers" => Some(Self::Containers),
            "specimens" => Some(Self::Specimens),
            _ => None,
        }
    }

    /// Its word.
    pub const fn word(self) -> &'static str {
        match self {
            Self::Containers => "containers",
            Self::Specimens => "specimens",
        }
    }

    /// Columns; the first must be there and filled in.
    pub const fn columns(self) -> &'static [&'static str] {
        match self {
            Self::Containers => &["container", "lid_g"],
            Self::Specimens => {
                &["specimen", "description", "method", "edition", "preparation", "passing_75um_percent", "clay_percent"]
            }
        }
    }

    const fn ask(self) -> &'static str {
        match self {
            Self::Containers => "register_container",
            Self::Specimens => "open_specimen",
        }
    }
}

/// A file as it was understood.
#[derive(Clone, Debug, Default, PartialEq)]
pub struct Read {
    /// Its lines, the heading left out.
    pub lines: Vec<ImportLine>,
    /// The ask of each line that can be taken.
    pub asks: Vec<(usize, Map<String, Value>)>,
}

/// Reads a file. Errors are about the file as a whole.
pub fn read(what: What, text: &str, lab: &Lab) -> Result<Read, String> {
    let text = text.strip_prefix('\u{feff}').unwrap_or(text);
    let first = text.lines().next().unwrap_or_default();
    let separator = [',', ';', '\t'].into_iter().max_by_key(|s| (first.matches(*s).count(), *s == ',')).unwrap_or(',');
    let rows = rows(text, separator)?;
    let mut rows = rows.into_iter().filter(|(_, fields)| fields.iter().any(|f| !f.trim().is_empty()));
    let columns = what.columns();
    let (_, heading) =
        rows.next().ok_or_else(|| format!("the file is empty; its first line names the columns: {}", columns.join(",")))?;
    let heading: Vec<String> = heading.iter().map(|h| h.trim().to_ascii_lowercase()).collect();
    for name in &heading {
        if !columns.contains(&name.as_str()) {
            let name: String = name.chars().take(40).collect();
            return Err(format!("there is no column \"{name}\"; the first line names the columns: {}", columns.join(",")));
        }
    }
    if heading.iter().collect::<BTreeSet<_>>().len() != heading.len() {
        return Err(String::from("the first line names a column twice"));
    }
    if !heading.iter().any(|h| h == columns[0]) {
        return Err(format!("the first line names no column \"{}\"; the columns are: {}", columns[0], columns.join(",")));
    }
    let mut read = Read::default();
    let mut seen = BTreeSet::new();
    for (no, fields) in rows {
        if read.lines.len() >= LINES_MOST {
            return Err(format!("the file has more than {LINES_MOST} lines; split it"));
        }
        let (mut refused, mut note) = (None, None);
        match ask(what, &heading, &fields, lab, &mut seen) {
            Ok((ask, said)) => {
                read.asks.push((no, ask));
                note = said;
            }
            Err(says) => refused = Some(says),
        }
        read.lines.push(ImportLine { no, fields, refused, note });
    }
    if read.lines.is_empty() {
        return Err(String::from("the file has a heading and no line below it"));
    }
    Ok(read)
}

type Judged = (Map<String, Value>, Option<String>);

fn ask(what: What, heading: &[String], fields: &[String], lab: &Lab, seen: &mut BTreeSet<String>) -> Result<Judged, String> {
    if fields.len() > heading.len() {
        return Err(format!("has {} fields, and the heading names {}", fields.len(), heading.len()));
    }
    let mut ask = Map::new();
    ask.insert("ask".into(), what.ask().into());
    for (name, field) in heading.iter().zip(fields) {
        let field = unarmed(field.trim());
        if field.chars().count() > FIELD_LONGEST {
            return Err(format!("{name}: at most {FIELD_LONGEST} characters fit"));
        }
        if field.is_empty() {
            continue;
        }
        let value = match name.as_str() {
            "passing_75um_percent" | "clay_percent" => percent(name, field)?,
            "lid_g" => Value::from(lid(field)?),
            _ => Value::from(field),
        };
        ask.insert(name.clone(), value);
    }
    let key = what.columns()[0];
    let id = ask.get(key).and_then(Value::as_str).ok_or_else(|| format!("{key}: is missing"))?.to_string();
    if !seen.insert(id.clone()) {
        return Err(format!("{id}: stands in the file twice"));
    }
    let note = match what {
        What::Containers => container(&id, lab)?,
        What::Specimens => specimen(&id, &ask, lab)?,
    };
    Ok((ask, note))
}

/// A text that a spreadsheet could take for a formula was written with `'` in front; it is not part of it.
fn unarmed(field: &str) -> &str {
    match field.strip_prefix('\'') {
        Some(rest) if rest.starts_with(['=', '+', '-', '@']) => rest,
        _ => field,
    }
}

fn percent(name: &str, field: &str) -> Result<Value, String> {
    let number: Option<f64> = field.replace(',', ".").parse().ok().filter(|n: &f64| (0.0..=100.0).contains(n));
    number.map(Value::from).ok_or_else(|| format!("{name}: is \"{}\", not a percentage between 0 and 100", short(field)))
}

fn lid(field: &str) -> Result<String, String> {
    let grams = field.replace(',', ".");
    match Mass::parse(&grams, MassUnit::Gram) {
        Ok(mass) if mass > Mass::ZERO => Ok(grams),
        _ => Err(format!("lid_g: is \"{}\", not a mass in grams", short(field))),
    }
}

fn short(field: &str) -> String {
    field.chars().take(40).collect()
}

fn container(id: &str, lab: &Lab) -> Result<Option<String>, String> {
    let id = ContainerId::new(id).map_err(|e| format!("container: {e}"))?;
    if SpecimenId::new(id.as_str()).is_ok_and(|s| lab.specimen(&s).is_some()) {
        return Err(format!("{id} is a specimen; a code can mean only one thing"));
    }
    let known = lab.container(&id);
    Ok(known.map(|c| match c.standing {
        Standing::Unknown | Standing::Free => String::from("is in the register already"),
        _ => String::from("is in the register already, and in use"),
    }))
}

fn specimen(id: &str, ask: &Map<String, Value>, lab: &Lab) -> Result<Option<String>, String> {
    let id = SpecimenId::new(id).map_err(|e| format!("specimen: {e}"))?;
    if lab.specimen(&id).is_some() {
        return Err(format!("{id} is open already; give a new one another identifier"));
    }
    if ContainerId::new(id.as_str()).is_ok_and(|c| lab.container(&c).is_some()) {
        return Err(format!("{id} is a container; a code can mean only one thing"));
    }
    if let Some(method) = ask.get("method").and_then(Value::as_str) {
        let methods = &lab.setup().methods;
        if MethodName::new(method).is_ok_and(|m| methods.contains_key(&m)) {
            return Ok(None);
        }
        let names: Vec<&str> = methods.keys().map(MethodName::as_str).collect();
        return Err(format!(
            "method: is \"{}\", and there is no such method; the methods are {}",
            short(method),
            names.join(", ")
        ));
    }
    Ok(None)
}

type Row = (usize, Vec<String>);

/// Fields of each line, with the number of the line they begin in.
fn rows(text: &str, separator: char) -> Result<Vec<Row>, String> {
    let mut rows: Vec<Row> = Vec::new();
    let (mut fields, mut field) = (Vec::new(), String::new());
    let (mut line, mut began, mut quoted, mut was_quoted) = (1, 1, false, false);
    let mut chars = text.chars().peekable();
    while let Some(c) = chars.next() {
        line += usize::from(c == '\n');
        match c {
            '"' if quoted && chars.peek() == Some(&'"') => {
                chars.next();
                field.push('"');
            }
            '"' if quoted => quoted = false,
            '"' if field.is_empty() && !was_quoted => (quoted, was_quoted) = (true, true),
            _ if quoted => field.push(c),
            '"' => {
                return Err(format!(
                    "line {line}: a quotation mark stands inside a field; put it around the field and double those inside"
                ));
            }
            '\r' if chars.peek() == Some(&'\n') => (),
            '\n' | '\r' => {
                fields.push(std::mem::take(&mut field));
                rows.push((began, std::mem::take(&mut fields)));
                (began, was_quoted) = (line, false);
            }
            c if c == separator => {
                fields.push(std::mem::take(&mut field));
                was_quoted = false;
            }
            c if c.is_control() && c != '\t' => {
                return Err(format!("line {line}: holds a control character; save the list as CSV in UTF-8"));
            }
            c => field.push(c),
        }
        if rows.len() > LINES_MOST + 1 {
            return Err(format!("the file has more than {LINES_MOST} lines; split it"));
        }
    }
    if quoted {
        return Err(format!("line {began}: a quotation mark is opened and never closed"));
    }
    if !field.is_empty() || !fields.is_empty() {
        fields.push(field);
        rows.push((began, fields));
    }
    Ok(rows)
}

#[cfg(test)]
mod tests {
    use super::*;
    use tarecup_core::lab::{Linking, Setup};

    fn lab() -> Lab {
        let methods = tarecup_config::methods::shipped().expect("methods");
        let default_method = MethodName::new(tarecup_config::defaults::METHOD).expect("a name");
        let (benches, instruments) = (Vec::new(), Default::default());
        let mut lab = Lab::new(Setup { benches, instruments, methods, default_method, linking: Linking::default() });
        let known = ContainerId::new("C1").expect("a name");
        lab.load(tarecup_core::lab::Loaded::Container(tarecup_core::lab::entities::Container::new(known)));
        lab
    }

    fn refusals(what: What, text: &str) -> Vec<(usize, String)> {
        let read = read(what, text, &lab()).expect("a list");
        read.lines.into_iter().filter_map(|l| l.refused.map(|r| (l.no, r))).collect()
    }

    #[test]
    fn good_lines_become_asks() {
        let text = "\u{feff}Specimen;description;clay_percent\r\nS-1;\"lean; \"\"brown\"\"\nclay\";31,5\r\n\r\nS-2;;\r\n";
        let read = read(What::Specimens, text, &lab()).expect("a list");
        assert_eq!(read.lines.iter().map(|l| l.no).collect::<Vec<_>>(), [2, 5]);
        assert_eq!(read.asks[0].1["description"], "lean; \"brown\"\nclay");
        assert_eq!(read.asks[0].1["clay_percent"], 31.5);
        assert_eq!(Value::Object(read.asks[1].1.clone()), serde_json::json!({"ask": "open_specimen", "specimen": "S-2"}));
        for (_, ask) in read.asks {
            assert!(crate::asks::parse(&Value::Object(ask).to_string()).is_ok());
        }
    }

    #[test]
    fn bad_lines_are_told_by_number() {
        let text = "container,lid_g\nC2,4.1\nC2,4.2\nC 3,\n,4.1\nC4,heavy\nC5,4.1,more\nC6,-1\nC1,4\n";
        let told = refusals(What::Containers, text);
        let lines: Vec<usize> = told.iter().map(|(no, _)| *no).collect();
        assert_eq!(lines, [3, 4, 5, 6, 7, 8], "{told:?}");
        let text = "specimen,method,clay_percent\nC1,,\nS-1,no-such,\nS-2,,101\nS-3,,\n";
        let told = refusals(What::Specimens, text);
        assert_eq!(told.iter().map(|(no, _)| *no).collect::<Vec<_>>(), [2, 3, 4], "{told:?}");
    }

    #[test]
    fn a_bad_file_is_refused_as_a_whole() {
        for (text, words) in [
            ("", "empty"),
            ("lid_g\n4", "no column \"container\""),
            ("container,colour\nC1,red", "no column \"colour\""),
            ("container,container\nC1,C2", "twice"),
            ("container\n", "no line below"),
            ("container\n\"C1", "never closed"),
            ("container\nC\"1", "quotation mark"),
            ("container\nC\u{0}1", "control character"),
        ] {
            let says = read(What::Containers, text, &lab()).expect_err(text);
            assert!(says.contains(words), "{text:?}: {says}");
        }
        let many = format!("container\n{}", "C\n".repeat(LINES_MOST + 5));
        assert!(read(What::Containers, &many, &lab()).is_err_and(|e| e.contains("more than")));
    }
}
