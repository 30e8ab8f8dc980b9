//! Registers of containers and the day's specimens from a file of comma-separated
//! values: each line is judged before anything is taken.

use super::super::view::{Import, ImportLine};
use super::{Around, frame};
use std::collections::BTreeSet;
use tarecup_core::lab::Lab;
use tarecup_core::lab::ask::Ask;
use tarecup_core::names::{ContainerId, MethodName, SpecimenId};
use tarecup_core::quantity::{Mass, MassUnit};
use tarecup_core::stamp::Stamp;

/// Lines of one file at most, and its size in bytes.
const LINES: usize = 5_000;
const BYTES: usize = 1024 * 1024;

/// What a file would do, and the asks of the lines that can be taken, without `who`.
/// `what` is `containers` (columns container, lid_g) or `specimens` (specimen, description, preparation, method).
pub fn import(lab: &Lab, what: &str, text: &str, now: &Stamp, around: &Around) -> (Import, Vec<Ask>) {
    let mut view = Import { frame: frame(lab, now, around), what: what.into(), text: text.into(), ..Default::default() };
    match read(what, text) {
        Err(why) => view.refused = Some(why),
        Ok((columns, rows)) => {
            let mut seen = BTreeSet::new();
            let mut asks = Vec::new();
            for (no, fields) in rows {
                let judged = judge(lab, what, &columns, &fields, &mut seen);
                let mut line = ImportLine { no, fields, ..Default::default() };
                match judged {
                    Ok((ask, note)) => {
                        asks.push(ask);
                        line.note = note;
                    }
                    Err(why) => line.refused = Some(why),
                }
                view.lines.push(line);
            }
            return (view, asks);
        }
    }
    (view, Vec::new())
}

type Rows = Vec<(usize, Vec<String>)>;

/// Columns by name, and the rows with their line numbers.
fn read(what: &str, text: &str) -> Result<(Vec<String>, Rows), String> {
    let known: &[&str] = match what {
        "containers" => &["container", "lid_g"],
        "specimens" => &["specimen", "description", "preparation", "method"],
        _ => return Err(String::from("a file holds containers or specimens; say which")),
    };
    if text.len() > BYTES {
        return Err(format!("the file is larger than {} KiB; split it", BYTES / 1024));
    }
    let text = text.trim_start_matches('\u{feff}');
    let first = text.lines().next().unwrap_or("");
    // A spreadsheet of a country with decimal commas separates by semicolons.
    let by = [';', '\t', ','].into_iter().find(|c| first.contains(*c)).unwrap_or(',');
    let mut rows = text.lines().enumerate().filter(|(_, l)| !l.trim().is_empty()).map(|(i, l)| (i + 1, l));
    let (_, head) = rows.next().ok_or_else(|| String::from("the file is empty; its first line names the columns"))?;
    let columns: Vec<String> = split(head, by).unwrap_or_default().iter().map(|c| c.to_lowercase()).collect();
    if let Some(odd) = columns.iter().find(|c| !known.contains(&c.as_str())) {
        let odd: String = odd.chars().take(40).collect();
        return Err(format!("there is no column \"{odd}\"; the columns are {}", known.join(", ")));
    }
    if !columns.iter().any(|c| c == known[0]) {
        return Err(format!("the column \"{}\" is missing", known[0]));
    }
    if columns.iter().collect::<BTreeSet<_>>().len() < columns.len() {
        return Err(String::from("a column stands twice in the first line"));
    }
    let rows: Rows = rows.map(|(no, line)| (no, split(line, by).unwrap_or_else(|| vec![line.to_string()]))).collect();
    match rows.len() {
        0 => Err(String::from("there is no line below the first one")),
        n if n > LINES => Err(format!("the file has {n} lines and at most {LINES} are taken at once; split it")),
        _ => Ok((columns, rows)),
    }
}

/// Fields of a line, quoted ones as RFC 4180 has them; `None` when a quote is not closed.
fn split(line: &str, by: char) -> Option<Vec<String>> {
    let mut fields = vec![String::new()];
    let mut quoted = false;
    let mut chars = line.chars().peekable();
    while let Some(c) = chars.next() {
        let field = fields.last_mut()?;
        match c {
            '"' if quoted && chars.peek() == Some(&'"') => {
                chars.next();
                field.push('"');
            }
            '"' if quoted || field.trim().is_empty() => quoted = !quoted,
            c if c == by && !quoted => fields.push(String::new()),
            c => field.push(c),
        }
    }
    (!quoted).then(|| fields.iter().map(|f| f.trim().to_string()).collect())
}

fn judge(
    lab: &Lab,
    what: &str,
    columns: &[String],
    fields: &[String],
    seen: &mut BTreeSet<String>,
) -> Result<(Ask, Option<String>), String> {
    if fields.len() != columns.len() {
        return Err(format!("there are {} fields and {} columns; look at commas and quotes", fields.len(), columns.len()));
    }
    let get = |name: &str| columns.iter().position(|c| c == name).and_then(|i| fields.get(i)).filter(|f| !f.is_empty());
    let id = get(if what == "containers" { "container" } else { "specimen" }).map_or("", String::as_str);
    if !seen.insert(id.to_string()) {
        return Err(format!("{id} stands in an earlier line already"));
    }
    if what == "containers" {
        let container = ContainerId::new(id).map_err(|e| e.to_string())?;
        if SpecimenId::new(id).is_ok_and(|s| lab.specimen(&s).is_some()) {
            return Err(format!("{id} is a specimen: a code can mean only one thing"));
        }
        let lid_g = get("lid_g").map(|l| l.replace(',', "."));
        let lid = lid_g.as_deref().map(|l| Mass::parse(l, MassUnit::Gram)).transpose().map_err(|e| e.to_string())?;
        if lid.is_some_and(|m| m <= Mass::ZERO) {
            return Err(String::from("a lid weighs more than nothing; leave the field empty where there is none"));
        }
        let note = lab.container(&container).map(|_| String::from("it is in the register already"));
        return Ok((Ask::RegisterContainer { container, lid_g, tare_g: None, who: None }, note));
    }
    let specimen = SpecimenId::new(id).map_err(|e| e.to_string())?;
    if lab.specimen(&specimen).is_some() {
        return Err(format!("specimen {id} is open already"));
    }
    if ContainerId::new(id).is_ok_and(|c| lab.container(&c).is_some()) {
        return Err(format!("{id} is a container: a code can mean only one thing"));
    }
    let method = get("method").map(|m| MethodName::new(m)).transpose().map_err(|e| e.to_string())?;
    if let Some(unknown) = method.as_ref().filter(|m| !lab.setup().methods.contains_key(*m)) {
        let names: Vec<&str> = lab.setup().methods.keys().map(MethodName::as_str).collect();
        return Err(format!("there is no method {unknown}; the methods are {}", names.join(", ")));
    }
    let (description, preparation) = (get("description").cloned(), get("preparation").cloned());
    if description.iter().chain(&preparation).any(|t| t.chars().count() > 1_000) {
        return Err(String::from("at most 1000 characters fit into a field"));
    }
    let (edition, passing_75um_percent, clay_percent, who) = (None, None, None, None);
    let (liquid_limit_oven_dried, wanted) = (None, Vec::new());
    let ask = Ask::OpenSpecimen {
        specimen,
        method,
        edition,
        description,
        preparation,
        passing_75um_percent,
        clay_percent,
        wanted,
        liquid_limit_oven_dried,
        who,
    };
    Ok((ask, None))
}
