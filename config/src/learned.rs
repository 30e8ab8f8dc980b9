//! What was learned of an instrument, as text at the end of a configuration file.

use crate::station::Station;
use std::fmt::Write;
use tarecup_core::names::{InstrumentName, ProfileName};
use tarecup_drivers::port::CharFrame;
use tarecup_drivers::profile::text::{CheckText, FrameText, LineText};
use tarecup_drivers::profile::{Profile, ProfileText};

/// An instrument to be added.
#[derive(Clone, Debug)]
pub struct NewInstrument<'a> {
    /// Its name; the profile is called `learned-NAME`.
    pub name: &'a str,
    /// The bench it serves.
    pub bench: Option<&'a str>,
    /// Its port; without one the profile alone is added.
    pub port: Option<&'a str>,
    /// Speed that was found.
    pub baud: Option<u32>,
    /// Character frame that was found.
    pub frame: Option<CharFrame>,
    /// Where the profile comes from, for people; one line.
    pub from: &'a str,
    /// What was learned.
    pub profile: &'a ProfileText,
}

impl NewInstrument<'_> {
    /// The name of its profile.
    pub fn profile_name(&self) -> String {
        format!("learned-{}", self.name)
    }
}

/// The text of the configuration with the instrument at its end. Everything
/// that stood there stays; the whole must be checked again before it is used.
///
/// # Errors
/// In words, when a name is no name or is already taken.
pub fn appended(text: &str, station: &Station, new: &NewInstrument<'_>) -> Result<String, String> {
    let profile = new.profile_name();
    let bad =
        |e: &dyn std::fmt::Display| format!("\"{}\" cannot be the instrument's name: {e}; choose another with --name", new.name);
    InstrumentName::new(new.name).map_err(|e| bad(&e))?;
    ProfileName::new(&profile).map_err(|e| bad(&e))?;
    if station.instruments.iter().any(|i| i.name.as_str() == new.name) {
        return Err(format!("there is already an instrument \"{}\"; choose another name with --name", new.name));
    }
    if station.profiles.keys().any(|p| p.as_str() == profile) {
        return Err(format!("there is already a profile \"{profile}\"; choose another name with --name"));
    }
    if let Some(port) = new.port
        && let Some(other) = station.instruments.iter().find(|i| i.port.path == port)
    {
        return Err(format!("the instrument \"{}\" already has the port {port}; take its table out first", other.name));
    }
    let mut out = text.to_owned();
    if !out.is_empty() && !out.ends_with('\n') {
        out.push('\n');
    }
    if !out.is_empty() {
        out.push('\n');
    }
    let one_line: String = new.from.chars().map(|c| if c.is_control() { ' ' } else { c }).collect();
    let _ = writeln!(out, "# {one_line}");
    if let Some(port) = new.port {
        instrument(&mut out, new, port, &profile);
    }
    profile_table(&mut out, &profile, new.profile);
    same(&out[text.len()..], &profile, new.profile)?;
    Ok(out)
}

/// What was written must be read as it was meant.
fn same(added: &str, name: &str, meant: &ProfileText) -> Result<(), String> {
    let broken =
        |e: &dyn std::fmt::Display| format!("the profile cannot be written as text ({e}); keep the capture and report this");
    let root: toml::Table = added.parse().map_err(|e| broken(&e))?;
    let table = root.get("profile").and_then(|p| p.get(name)).cloned().ok_or_else(|| broken(&"it is missing"))?;
    let read: ProfileText = table.try_into().map_err(|e: toml::de::Error| broken(&e))?;
    if read != (ProfileText { name: None, ..meant.clone() }) {
        return Err(broken(&"it reads otherwise"));
    }
    Profile::compile(read).map(|_| ()).map_err(|e| broken(&e))
}

fn instrument(out: &mut String, new: &NewInstrument<'_>, port: &str, profile: &str) {
    let _ = writeln!(out, "[[instrument]]\nname = {}\nkind = {}", quoted(new.name), quoted(new.profile.kind.word()));
    if let Some(bench) = new.bench {
        let _ = writeln!(out, "bench = {}", quoted(bench));
    }
    let _ = writeln!(out, "port = {}", quoted(port));
    if let Some(baud) = new.baud {
        let _ = writeln!(out, "baud = {baud}");
    }
    if let Some(frame) = new.frame {
        let _ = writeln!(out, "frame = {}", quoted(&String::from(frame)));
    }
    let _ = writeln!(out, "profile = {}\n", quoted(profile));
}

/// A text in quotes: as it stands where that can be, for patterns are hard enough to read.
fn quoted(text: &str) -> String {
    let plain = !text.contains('\'') && !text.chars().any(char::is_control);
    match plain && text.contains(['\\', '"']) {
        true => format!("'{text}'"),
        false => {
            let escape = |c: char| match c {
                '"' | '\\' => format!("\\{c}"),
                '\r' => "\\r".into(),
                '\n' => "\\n".into(),
                '\t' => "\\t".into(),
                '\u{c}' => "\\f".into(),
                c if c.is_control() => format!("\\u{:04X}", u32::from(c)),
                c => c.to_string(),
            };
            format!("\"{}\"", text.chars().map(escape).collect::<String>())
        }
    }
}

/// A stable word as serde writes it.
fn word<T: serde::Serialize>(value: T) -> String {
    toml::Value::try_from(value).map(|v| v.to_string()).unwrap_or_default()
}

fn profile_table(out: &mut String, name: &str, p: &ProfileText) {
    let _ = writeln!(out, "[profile.{}]", if name.contains('.') { quoted(name) } else { name.into() });
    let _ = writeln!(out, "kind = {}", quoted(p.kind.word()));
    let mut put = |key: &str, value: Option<String>| {
        if let Some(value) = value {
            let _ = writeln!(out, "{key} = {value}");
        }
    };
    put("about", (!p.about.is_empty()).then(|| quoted(&p.about)));
    put("talks", p.talks.map(word));
    put("unit", p.unit.as_deref().map(quoted));
    put("decimals", p.decimals.map(|d| d.to_string()));
    put("largest_g", p.largest_g.map(|d| d.to_string()));
    let basis: Vec<String> = p.basis.iter().map(|(text, basis)| format!("{} = {}", quoted_key(text), word(basis))).collect();
    put("basis", (!basis.is_empty()).then(|| format!("{{ {} }}", basis.join(", "))));
    put("frame", Some(frame(&p.frame)));
    put("check", p.check.map(check));
    put("serial", p.serial.as_ref().map(inline));
    for line in &p.line {
        let _ = writeln!(out, "\n[[profile.{}.line]]", if name.contains('.') { quoted(name) } else { name.into() });
        line_table(out, line);
    }
}

fn quoted_key(text: &str) -> String {
    let bare = !text.is_empty() && text.bytes().all(|b| b.is_ascii_alphanumeric());
    if bare { text.into() } else { quoted(text) }
}

/// Any table in one line.
fn inline<T: serde::Serialize>(value: T) -> String {
    let pair = |(key, value): (&String, &toml::Value)| format!("{key} = {value}");
    match toml::Value::try_from(value) {
        Ok(toml::Value::Table(t)) => format!("{{ {} }}", t.iter().map(pair).collect::<Vec<_>>().join(", ")),
        Ok(other) => other.to_string(),
        Err(_) => String::new(),
    }
}

fn frame(f: &FrameText) -> String {
    let mut parts = Vec::new();
    if !f.starts.is_empty() {
        parts.push(format!("starts = {}", quoted(&f.starts)));
    }
    if !f.ends.is_empty() {
        parts.push(format!("ends = [{}]", f.ends.iter().map(|e| quoted(e)).collect::<Vec<_>>().join(", ")));
    }
    if !f.single.is_empty() {
        parts.push(format!("single = {}", quoted(&f.single)));
    }
    if f.tail > 0 {
        parts.push(format!("tail = {}", f.tail));
    }
    if let Some(length) = f.length {
        parts.push(format!("length = {length}, columns = {}", quoted(&f.columns)));
    }
    if let Some(longest) = f.longest {
        parts.push(format!("longest = {longest}"));
    }
    format!("{{ {} }}", parts.join(", "))
}

fn check(c: CheckText) -> String {
    inline(c)
}

fn line_table(out: &mut String, line: &LineText) {
    let _ = writeln!(out, "pattern = {}", quoted(&line.pattern));
    if let Some(width) = line.width {
        let _ = writeln!(out, "width = {width}");
    }
    if let Some(means) = line.means {
        let _ = writeln!(out, "means = {}", word(means));
    }
    if let Some(basis) = line.means_basis {
        let _ = writeln!(out, "means_basis = {}", word(basis));
    }
}
