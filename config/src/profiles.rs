//! Instrument profiles: the shipped ones and those of `[profile.NAME]` tables.

use crate::embedded;
use crate::fault::{Faults, Place};
use crate::reader::{Table, read};
use crate::station::InstrumentKind;
use serde::Deserialize;
use std::collections::{BTreeMap, BTreeSet};
use std::sync::OnceLock;
use tarecup_core::names::ProfileName;
use tarecup_core::sense::Talks;
use tarecup_drivers::port::{CharFrame, Flow};

/// A profile as it was written, ready to be compiled.
#[derive(Clone, Debug, PartialEq, Eq)]
pub struct ProfileSource {
    /// Its name.
    pub name: ProfileName,
    /// Whose lines it reads.
    pub kind: InstrumentKind,
    /// What it says, as a TOML text with its keys at the top level.
    pub toml: String,
    /// The file it comes from.
    pub file: String,
    /// Where it begins in that file.
    pub at: Place,
    /// It comes with the program.
    pub shipped: bool,
    /// What holds where an instrument's own table says nothing.
    pub usual: Usual,
}

/// How instruments of a profile are usually set.
#[derive(Clone, Copy, Debug, Default, PartialEq, Eq)]
pub struct Usual {
    /// Speed in baud.
    pub baud: Option<u32>,
    /// Character frame.
    pub frame: Option<CharFrame>,
    /// Flow control.
    pub flow: Option<Flow>,
    /// How a balance tells a weighing.
    pub talks: Option<Talks>,
}

/// The keys of a profile that an instrument's table can override.
#[derive(Deserialize)]
struct UsualText {
    talks: Option<String>,
    #[serde(default)]
    serial: SerialText,
}

#[derive(Default, Deserialize)]
struct SerialText {
    baud: Option<u32>,
    frame: Option<CharFrame>,
    flow: Option<Flow>,
}

impl From<UsualText> for Usual {
    fn from(text: UsualText) -> Self {
        let talks = text.talks.map(|t| if t == "print-on-key" { Talks::PrintOnKey } else { Talks::Continuous });
        Self { baud: text.serial.baud, frame: text.serial.frame, flow: text.serial.flow, talks }
    }
}

/// Profiles by name.
pub type Profiles = BTreeMap<ProfileName, ProfileSource>;

/// The profiles that come with the program.
///
/// # Errors
/// Only when a shipped file is broken, which a test excludes.
pub fn shipped() -> Result<Profiles, Faults> {
    static SHIPPED: OnceLock<Result<Profiles, Faults>> = OnceLock::new();
    let one = |(file, text): &(&str, &str)| parse(file, text).map(|p| (p.name.clone(), ProfileSource { shipped: true, ..p }));
    SHIPPED.get_or_init(|| embedded::PROFILES.iter().map(one).collect()).clone()
}

/// Reads a profile file; its name is that of the file.
///
/// # Errors
/// What is wrong, with its place.
pub fn parse(file: &str, text: &str) -> Result<ProfileSource, Faults> {
    read(file, text, |table| {
        let stem = std::path::Path::new(file).file_stem().unwrap_or_default().to_string_lossy();
        let Ok(name) = ProfileName::new(&stem) else {
            table.fault("has a file name that is not a profile's name", "letters, digits, '.', '_' or '-'", "renaming the file");
            return None;
        };
        source(table, name, file)
    })
}

/// Adds the profiles of `[profile.NAME]` tables; gives the names of the broken ones.
pub(crate) fn own(root: &Table<'_>, profiles: &mut Profiles) -> BTreeSet<ProfileName> {
    let mut broken = BTreeSet::new();
    let Some(table) = root.get("profile").and_then(|e| e.any_table("profile")) else { return broken };
    for entry in table.entries() {
        let Some(name) = entry.key_name::<ProfileName>() else { continue };
        match entry.any_table(name.as_str()).and_then(|t| source(&t, name.clone(), root.file())) {
            Some(source) => drop(profiles.insert(name, source)),
            None => drop(broken.insert(name)),
        }
    }
    broken
}

/// The one place where a profile's table is understood.
fn source(table: &Table<'_>, name: ProfileName, file: &str) -> Option<ProfileSource> {
    let kind = table.need("kind", "balance, counter or scanner", "kind = \"balance\"")?.one_of(&InstrumentKind::WORDS)?;
    let tree = || toml::Deserializer::from(table.to_tree());
    let read = UsualText::deserialize(tree()).and_then(|usual| toml::Table::deserialize(tree()).map(|plain| (usual, plain)));
    let (usual, plain) = match read {
        Ok(read) => read,
        Err(e) => {
            table.refuse(&e, "profile");
            return None;
        }
    };
    Some(ProfileSource {
        name,
        kind,
        toml: plain.to_string(),
        file: file.into(),
        at: table.place(),
        shipped: false,
        usual: usual.into(),
    })
}
