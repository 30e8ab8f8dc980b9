//! A TOML text as a tree whose every key and value knows its place, with
//! readers that note a fault and go on, so that one pass finds many.

use crate::fault::{Fault, Faults, MOST_FAULTS, Place, Placed, quote, remedy_for_name};
use crate::text::{LARGEST_FILE, Lines, too_large};
use std::cell::{Cell, RefCell};
use std::collections::BTreeSet;
use std::ops::{Range, RangeInclusive};
use tarecup_core::names::NameError;
use tarecup_core::quantity::{Mass, MassUnit};
use toml::Spanned;
use toml::de::{DeTable, DeValue};

/// Keys that would hold a secret, and what to write instead.
const SECRETS: [&str; 8] = ["password", "passwd", "pass", "passphrase", "secret", "token", "pin", "private_key"];

/// One file being read.
pub(crate) struct Reading<'t> {
    file: &'t str,
    lines: Lines<'t>,
    noted: RefCell<Vec<Noted>>,
    /// Faults beyond [`MOST_NOTED`], not kept.
    beyond: Cell<usize>,
}

/// Faults kept while a file is read; enough to sort the first out of them.
const MOST_NOTED: usize = 10 * MOST_FAULTS;
/// Larger files with broken syntax are told their first fault only: the
/// parser keeps every one it finds.
const RECOVERABLE: usize = 64 << 10;

struct Noted {
    fault: Fault,
    /// Something is missing: not believed where the text itself is broken.
    absence: bool,
}

/// Reads a whole text: syntax first, then whatever `read` makes of the tree.
pub(crate) fn read<T>(file: &str, text: &str, read: impl FnOnce(&Table<'_>) -> Option<T>) -> Result<T, Faults> {
    if text.len() > LARGEST_FILE {
        return Err(too_large(file).into());
    }
    let text = text.strip_prefix('\u{feff}').unwrap_or(text);
    let reading = Reading::new(file, text);
    crate::depth::check(&reading, text)?;
    if text.len() > RECOVERABLE
        && let Err(e) = DeTable::parse(text)
    {
        return Err(reading.syntax(&e).into());
    }
    let (root, errors) = DeTable::parse_recoverable(text);
    let syntax: Vec<Fault> = errors.iter().map(|e| reading.syntax(e)).collect();
    let table = Table { reading: &reading, name: String::new(), at: 0, entries: root.get_ref() };
    let value = read(&table);
    let (noted, beyond) = (reading.noted.into_inner(), reading.beyond.get());
    match value {
        Some(value) if noted.is_empty() && syntax.is_empty() => Ok(value),
        None if noted.is_empty() && syntax.is_empty() => Err(Reading::new(file, text)
            .fault(0, "", "has nothing that can be used", "a complete file", "starting from an example")
            .into()),
        _ => Err(gather(syntax, noted, beyond)),
    }
}

/// Puts all faults in the order of the file. Where the text itself is broken,
/// a missing key may only be unreadable, and a broken line says it once.
fn gather(syntax: Vec<Fault>, noted: Vec<Noted>, beyond: usize) -> Faults {
    let broken: BTreeSet<u32> = syntax.iter().map(|f| f.line).collect();
    let believable = |n: &Noted| broken.is_empty() || (!n.absence && !broken.contains(&n.fault.line));
    let mut list: Vec<Fault> = noted.into_iter().filter(believable).map(|n| n.fault).collect();
    list.extend(syntax);
    list.sort_by_key(|f| (f.line, f.column));
    list.dedup();
    let more = list.len().saturating_sub(MOST_FAULTS) + beyond;
    list.truncate(MOST_FAULTS);
    Faults { list, more }
}

impl<'t> Reading<'t> {
    fn new(file: &'t str, text: &'t str) -> Self {
        Self { file, lines: Lines::new(text), noted: RefCell::default(), beyond: Cell::new(0) }
    }

    /// A fault at a byte offset.
    pub(crate) fn fault(&self, offset: usize, path: &str, says: &str, expected: &str, try_this: &str) -> Fault {
        let Place { line, column } = self.lines.place(offset);
        let (path, says, expected, try_this) = (path.into(), says.into(), expected.into(), try_this.into());
        Fault { file: self.file.into(), line, column, path, says, expected, try_this }
    }

    fn note(&self, fault: Fault, absence: bool) {
        let mut noted = self.noted.borrow_mut();
        match noted.len() < MOST_NOTED {
            true => noted.push(Noted { fault, absence }),
            false => self.count_only(1),
        }
    }

    /// Whether enough faults are known: further ones are not kept, and long lists need not be read on.
    pub(crate) fn is_full(&self) -> bool {
        self.noted.borrow().len() >= MOST_NOTED
    }

    fn count_only(&self, faults: usize) {
        self.beyond.set(self.beyond.get().saturating_add(faults));
    }

    fn syntax(&self, e: &toml::de::Error) -> Fault {
        let message = e.message();
        let (expected, try_this) = match message {
            m if m.contains("duplicate key") => ("each key or table once", "removing or renaming one of the two"),
            m if m.contains("recursion limit") => ("tables nested a few levels deep", "writing the tables as [table] headers"),
            m if m.contains("string") || m.contains("quote") => {
                ("a complete text in quotes", "closing the quotes on the same line")
            }
            m if m.contains("cannot extend") => ("a table", "writing the value once, or the table, not both"),
            _ => ("key = value, [table] or [[list]] as TOML has them", "looking for a missing quote, bracket or '=' here"),
        };
        self.fault(e.span().map_or(0, |s| s.start), "", &format!("cannot be understood: {message}"), expected, try_this)
    }
}

/// A table of the tree.
#[derive(Clone)]
pub(crate) struct Table<'a> {
    pub(crate) reading: &'a Reading<'a>,
    /// For messages, such as `specimen 2, liquid 1`; empty for the file itself.
    pub(crate) name: String,
    /// Where its header stands.
    pub(crate) at: usize,
    entries: &'a DeTable<'a>,
}

/// A key with its value.
#[derive(Clone)]
pub(crate) struct Entry<'a> {
    pub(crate) reading: &'a Reading<'a>,
    table: String,
    key: String,
    pub(crate) key_at: usize,
    span: Range<usize>,
    value: &'a DeValue<'a>,
}

impl<'a> Table<'a> {
    /// The entry with this key, if it is there.
    pub(crate) fn get(&self, key: &str) -> Option<Entry<'a>> {
        let (spanned, value) = self.entries.get_key_value(key)?;
        Some(self.entry(spanned.span().start, key, value))
    }

    /// The entry with this key; its absence is a fault of the table.
    pub(crate) fn need(&self, key: &str, expected: &str, try_this: &str) -> Option<Entry<'a>> {
        let found = self.get(key);
        if found.is_none() {
            let path = self.path(key);
            self.reading.note(self.reading.fault(self.at, &path, "is missing", expected, try_this), true);
        }
        found
    }

    /// All entries, in the order of the tree.
    pub(crate) fn entries(&self) -> Vec<Entry<'a>> {
        self.entries.iter().map(|(k, v)| self.entry(k.span().start, k.get_ref(), v)).collect()
    }

    /// The file it stands in.
    pub(crate) fn file(&self) -> &'a str {
        self.reading.file
    }

    /// Where its header stands.
    pub(crate) fn place(&self) -> Place {
        self.reading.lines.place(self.at)
    }

    fn entry(&self, key_at: usize, key: &str, value: &'a Spanned<DeValue<'a>>) -> Entry<'a> {
        let key = key.to_string();
        Entry { reading: self.reading, table: self.name.clone(), key, key_at, span: value.span(), value: value.get_ref() }
    }

    /// Puts a deserialiser's one error into our words; `what` names the kind of file.
    pub(crate) fn refuse(&self, e: &toml::de::Error, what: &str) {
        let at = e.span().map_or(self.at, |s| s.start);
        let message = e.message().lines().next().unwrap_or_default();
        let mut quoted = message.split('`').skip(1).step_by(2);
        let name = if self.name.is_empty() { what } else { &self.name };
        let (says, expected, try_this) = if message.starts_with("unknown field") || message.starts_with("unknown variant") {
            let word = quoted.next().unwrap_or_default();
            let known: Vec<&str> = quoted.collect();
            let says = format!("does not know {}", quote(word));
            (says, format!("one of {}", known.join(", ")), remedy_for_name(word, &known))
        } else if message.starts_with("missing field") {
            let says = format!("lacks {}", quoted.next().unwrap_or_default());
            (says, format!("every key that a {what} needs"), format!("copying the line from a shipped {what}"))
        } else {
            let says = format!("is wrong here: {}", message.escape_debug());
            (says, format!("the form of a shipped {what}"), format!("comparing with a shipped {what}"))
        };
        self.fault_at(at, name, &says, &expected, &try_this);
    }

    /// `table: key`, for messages.
    pub(crate) fn path(&self, key: &str) -> String {
        if self.name.is_empty() { key.into() } else { format!("{}: {key}", self.name) }
    }

    /// Notes a fault of the table as a whole.
    pub(crate) fn fault(&self, says: &str, expected: &str, try_this: &str) {
        let name = if self.name.is_empty() { "the file" } else { &self.name };
        self.reading.note(self.reading.fault(self.at, name, says, expected, try_this), true);
    }

    /// Notes every key that is not among `known`.
    pub(crate) fn only(&self, known: &[&str]) {
        for entry in self.entries() {
            let key = entry.key.as_str();
            if known.contains(&key) {
                continue;
            }
            if self.reading.is_full() {
                self.reading.count_only(1);
                continue;
            }
            let (says, try_this) = if SECRETS.contains(&key.to_lowercase().as_str()) {
                (
                    "is a secret, and this file must not hold one",
                    "password_file = \"a file that only the service may read\"".to_string(),
                )
            } else if let Some(home) =
                crate::keys::home_of(key).filter(|_| crate::fault::did_you_mean(key, known.iter().copied()).is_none())
            {
                ("does not belong here", format!("moving it to {home}"))
            } else {
                ("is not a known key", remedy_for_name(key, known))
            };
            let path = self.path(quote(key).trim_matches('"'));
            let expected = format!("one of {}", known.join(", "));
            self.reading.note(self.reading.fault(entry.key_at, &path, says, &expected, &try_this), false);
        }
    }

    /// The tree as a deserialiser wants it.
    pub(crate) fn to_tree(&self) -> Spanned<DeTable<'a>> {
        Spanned::new(self.at..self.at, self.entries.clone())
    }

    /// Where a key path such as `liquid.trials` or `line[2].pattern` stands:
    /// as much of it as there is. What is left of the path may also be one key
    /// in quotes, as in `[source]`.
    pub(crate) fn locate(&self, path: &str) -> usize {
        let (mut at, mut entries) = (self.at, Some(self.entries));
        let mut left = Some(path);
        while let Some(path) = left {
            let whole = entries.and_then(|t| t.get_key_value(path));
            let part = if whole.is_some() { path } else { path.split('.').next().unwrap_or(path) };
            left = path[part.len()..].strip_prefix('.');
            let (key, nth) = match part.strip_suffix(']').and_then(|p| p.split_once('[')) {
                Some((key, nth)) => (key, nth.parse::<usize>().ok()),
                None => (part, None),
            };
            let Some((key, value)) = entries.and_then(|t| t.get_key_value(key)) else { break };
            at = key.span().start;
            let member = nth.and_then(|n| value.get_ref().as_array().and_then(|a| a.get(n.checked_sub(1)?)));
            at = member.map_or(at, |m| m.span().start);
            entries = member.unwrap_or(value).get_ref().as_table();
        }
        at
    }

    /// Notes a fault at a byte offset within this table.
    pub(crate) fn fault_at(&self, offset: usize, path: &str, says: &str, expected: &str, try_this: &str) {
        self.reading.note(self.reading.fault(offset, path, says, expected, try_this), false);
    }
}

/// What a value is, in words.
fn kind(value: &DeValue<'_>) -> &'static str {
    match value {
        DeValue::String(_) => "a text in quotes",
        DeValue::Integer(_) => "a whole number",
        DeValue::Float(_) => "a number",
        DeValue::Boolean(_) => "true or false",
        DeValue::Datetime(_) => "a date or time",
        DeValue::Array(_) => "a list",
        DeValue::Table(_) => "a table",
    }
}

impl<'a> Entry<'a> {
    /// `table: key`, for messages.
    pub(crate) fn path(&self) -> String {
        if self.table.is_empty() { self.key.clone() } else { format!("{}: {}", self.table, self.key) }
    }

    /// Where the value stands.
    pub(crate) fn place(&self) -> Place {
        self.reading.lines.place(self.span.start)
    }

    /// Notes a fault of the value.
    pub(crate) fn fault(&self, says: &str, expected: &str, try_this: &str) {
        self.reading.note(self.reading.fault(self.span.start, &self.path(), says, expected, try_this), false);
    }

    /// Notes a fault of the key: that it stands here at all.
    pub(crate) fn fault_of_key(&self, says: &str, expected: &str, try_this: &str) {
        self.reading.note(self.reading.fault(self.key_at, &self.path(), says, expected, try_this), false);
    }

    fn wrong_kind(&self, expected: &str, try_this: &str) {
        self.fault(&format!("is {}", kind(self.value)), expected, try_this);
    }

    /// A text; an empty one only where that means something.
    pub(crate) fn text(&self) -> Option<&'a str> {
        if let DeValue::String(text) = self.value {
            if text.trim().is_empty() {
                self.fault("is empty", "some text", "writing it, or leaving the key out");
                return None;
            }
            return Some(text.as_ref());
        }
        self.wrong_kind("a text in quotes", "putting it in quotes");
        None
    }

    /// A text that is shown to people: one line of at most 200 characters.
    pub(crate) fn words(&self) -> Option<String> {
        let text = self.text()?;
        if text.chars().any(char::is_control) {
            self.fault("holds a control character", "one line of text", "taking line breaks and tabs out");
            return None;
        }
        if text.chars().count() > 200 {
            self.fault("is longer than 200 characters", "one line of at most 200 characters", "shortening it");
            return None;
        }
        Some(text.to_string())
    }

    /// A name; numbers without quotes are told so.
    pub(crate) fn name<N: std::str::FromStr<Err = NameError>>(&self) -> Option<N> {
        if matches!(self.value, DeValue::Integer(_) | DeValue::Float(_)) {
            self.wrong_kind(A_NAME, "putting it in quotes");
            return None;
        }
        let text = self.text()?;
        match text.parse() {
            Ok(name) => Some(name),
            Err(why) => {
                let says = format!("{} is not a name: {}", quote(text), short_reason(&why));
                let try_this = "writing it with letters, digits, '.', '_' and '-' only, such as \"C11\" or \"wet-room\"";
                self.fault(&says, A_NAME, try_this);
                None
            }
        }
    }

    /// One of a few words.
    pub(crate) fn one_of<T: Copy>(&self, choices: &[(&str, T)]) -> Option<T> {
        let words: Vec<&str> = choices.iter().map(|(w, _)| *w).collect();
        let text = self.text()?;
        let found = choices.iter().find(|(w, _)| *w == text).map(|(_, t)| *t);
        if found.is_none() {
            let expected = format!("one of {}", words.join(", "));
            self.fault(&format!("is {}", quote(text)), &expected, &remedy_for_name(text, &words));
        }
        found
    }

    /// Yes or no.
    pub(crate) fn truth(&self) -> Option<bool> {
        let DeValue::Boolean(value) = self.value else {
            self.wrong_kind("true or false", "true or false, without quotes");
            return None;
        };
        Some(*value)
    }

    /// A whole number within bounds.
    pub(crate) fn whole(&self, bounds: RangeInclusive<u32>, what: &str) -> Option<u32> {
        let expected = format!("{what}, {} to {}", bounds.start(), bounds.end());
        let DeValue::Integer(i) = self.value else {
            self.wrong_kind(&expected, "digits without point or quotes");
            return None;
        };
        let value =
            i64::from_str_radix(i.as_str(), i.radix()).ok().and_then(|v| u32::try_from(v).ok()).filter(|v| bounds.contains(v));
        if value.is_none() {
            self.fault(&format!("is {}", shorten(&i.to_string())), &expected, "a number within these bounds");
        }
        value
    }

    /// A finite number within bounds.
    pub(crate) fn number(&self, bounds: RangeInclusive<f64>, what: &str) -> Option<f64> {
        let expected = format!("{what}, {} to {}", bounds.start(), bounds.end());
        let (shown, value) = match self.value {
            DeValue::Integer(i) if i.radix() == 10 => (i.as_str(), i.as_str().parse::<f64>().ok()),
            DeValue::Float(f) => (f.as_str(), f.as_str().parse::<f64>().ok()),
            _ => {
                self.wrong_kind(&expected, "digits, with a decimal point if need be, without quotes");
                return None;
            }
        };
        let value = value.filter(|v| v.is_finite() && bounds.contains(v));
        if value.is_none() {
            self.fault(&format!("is {}", shorten(shown)), &expected, "a number within these bounds");
        }
        value
    }

    /// Grams, exactly as written, more than nothing and at most `most`.
    pub(crate) fn grams(&self, most: Mass) -> Option<Placed<Mass>> {
        let expected = format!("grams as the balance showed them, above 0 and up to {}", most.grams());
        let shown = match self.value {
            DeValue::Integer(i) if i.radix() == 10 => i.as_str(),
            DeValue::Float(f) => f.as_str(),
            DeValue::String(_) => {
                self.wrong_kind(&expected, "the number without quotes, with a decimal point");
                return None;
            }
            _ => {
                self.wrong_kind(&expected, "a number such as 21.43");
                return None;
            }
        };
        match Mass::parse(shown, MassUnit::Gram) {
            Ok(mass) if mass > Mass::ZERO && mass <= most => Some(Placed { value: mass, at: self.place() }),
            Ok(mass) => {
                let try_this =
                    if mass > most { "looking at the unit: the file has grams" } else { "the mass as the balance showed it" };
                self.fault(&format!("is {}", shorten(shown)), &expected, try_this);
                None
            }
            Err(why) => {
                let why =
                    if shown.contains("inf") || shown.contains("nan") { "not a finite number".into() } else { why.to_string() };
                self.fault(&format!("is {}: {why}", shorten(shown)), &expected, "digits with one decimal point, such as 21.43");
                None
            }
        }
    }

    /// The value itself, or each value of a list. An empty list is a fault.
    pub(crate) fn one_or_list(&self) -> Vec<Entry<'a>> {
        let DeValue::Array(array) = self.value else { return vec![self.clone()] };
        if array.is_empty() {
            self.fault("is an empty list", "one value or a list of values", "writing the value, or leaving the key out");
        }
        let numbered = |(i, v): (usize, &'a Spanned<DeValue<'a>>)| Entry {
            key: format!("{}[{}]", self.key, i + 1),
            span: v.span(),
            value: v.get_ref(),
            ..self.clone()
        };
        array.iter().enumerate().map(numbered).collect()
    }

    /// A table, named so in messages.
    pub(crate) fn table(&self, name: &str, known: &[&str]) -> Option<Table<'a>> {
        let DeValue::Table(entries) = self.value else {
            self.wrong_kind("a table", &format!("[{}] with its keys on the lines below it", self.key));
            return None;
        };
        let at = self.span.start;
        let table = Table { reading: self.reading, name: self.under(name), at, entries };
        table.only(known);
        Some(table)
    }

    /// Whether this is a list of at most `most`; a longer one is a fault.
    pub(crate) fn at_most(&self, most: usize) -> bool {
        let DeValue::Array(array) = self.value else { return true };
        if let Some(beyond) = array.get(most) {
            let says = format!("has {} of them from here on too many", array.len() - most);
            let at = beyond.span().start;
            self.reading.note(
                self.reading.fault(at, &self.path(), &says, &format!("at most {most}"), "taking out what is not in use"),
                false,
            );
        }
        array.len() <= most
    }

    /// A list of tables, or one; numbered in messages as `name 1`, `name 2`, …
    pub(crate) fn tables(&self, name: &str, known: &[&str]) -> Vec<Table<'a>> {
        let one = |(i, e): (usize, Entry<'a>)| {
            let DeValue::Table(entries) = e.value else {
                e.wrong_kind("a table", &format!("[[{}]] with its keys on the lines below it", self.key));
                return None;
            };
            let table =
                Table { reading: self.reading, name: self.under(&format!("{name} {}", i + 1)), at: e.span.start, entries };
            table.only(known);
            Some(table)
        };
        self.one_or_list().into_iter().enumerate().filter_map(one).collect()
    }

    /// A table whose keys are somebody else's matter.
    pub(crate) fn any_table(&self, name: &str) -> Option<Table<'a>> {
        let DeValue::Table(entries) = self.value else {
            self.wrong_kind("a table", &format!("[{}.NAME] with its keys on the lines below it", self.key));
            return None;
        };
        Some(Table { reading: self.reading, name: self.under(name), at: self.span.start, entries })
    }

    /// The key itself as a name.
    pub(crate) fn key_name<N: std::str::FromStr<Err = NameError>>(&self) -> Option<N> {
        let name = self.key.parse();
        if let Err(why) = &name {
            let says = format!("is not a name: {}", short_reason(why));
            let path = format!("{} {}", self.table, quote(&self.key));
            let fault = self.reading.fault(self.key_at, &path, &says, A_NAME, "a name such as own-1 in the [header]");
            self.reading.note(fault, false);
        }
        name.ok()
    }

    /// Notes the faults of another file that this entry names.
    pub(crate) fn foreign(&self, faults: Faults) {
        for fault in faults.list {
            self.reading.note(fault, false);
        }
        self.reading.count_only(faults.more);
    }

    /// The tables of a list, or the one, without a word about what is none.
    pub(crate) fn subtables(&self) -> Vec<Table<'a>> {
        let DeValue::Array(array) = self.value else { return self.subtable(self.span.start, self.value).into_iter().collect() };
        array.iter().filter_map(|v| self.subtable(v.span().start, v.get_ref())).collect()
    }

    fn subtable(&self, at: usize, value: &'a DeValue<'a>) -> Option<Table<'a>> {
        let entries = value.as_table()?;
        Some(Table { reading: self.reading, name: self.under(&self.key), at, entries })
    }

    /// The text, if it is one, without a word if it is none.
    pub(crate) fn quiet_text(&self) -> Option<&'a str> {
        self.value.as_str()
    }

    fn under(&self, name: &str) -> String {
        if self.table.is_empty() { name.into() } else { format!("{}, {name}", self.table) }
    }
}

const A_NAME: &str = "a name of 1 to 32 letters, digits, '.', '_' or '-'";

/// What is wrong with a name, without the advice that the message gives anyway.
fn short_reason(why: &NameError) -> String {
    let why = why.to_string();
    why.split(';').next().unwrap_or_default().to_string()
}

/// A number that fits into a message.
fn shorten(number: &str) -> String {
    if number.len() <= 24 { number.into() } else { format!("{}…", number.chars().take(24).collect::<String>()) }
}
