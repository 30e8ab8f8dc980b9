//! Instrument profiles: the shipped ones and those of `[profile.NAME]` tables.

use crate::embedded;
use crate::fault::{Faults, Place, harmless, quote};
use crate::reader::{Table, read};
use crate::station::InstrumentKind;
use serde::Deserialize;
use std::collections::{BTreeMap, BTreeSet};
use std::sync::OnceLock;
use tarecup_core::names::ProfileName;
use tarecup_core::sense::Talks;
use tarecup_drivers::port::{CharFrame, Flow};
use tarecup_drivers::profile::{self, Profile, ProfileFault, ProfileText};

/// A profile that has been checked.
#[derive(Clone, Debug, PartialEq, Eq)]
pub struct ProfileSource {
    /// Its name.
    pub name: ProfileName,
    /// Whose lines it reads.
    pub kind: InstrumentKind,
    /// What it says; [`tarecup_drivers::profile::Profile::compile`] takes it without fault.
    pub text: ProfileText,
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
    /// It is read over Modbus.
    pub modbus: bool,
}

impl From<&ProfileText> for Usual {
    fn from(text: &ProfileText) -> Self {
        let talks = text.talks.map(|t| match t {
            profile::Talks::PrintOnKey => Talks::PrintOnKey,
            profile::Talks::Stream | profile::Talks::Asked => Talks::Continuous,
        });
        let serial = text.serial.clone().unwrap_or_default();
        Self { baud: serial.baud, frame: serial.frame, flow: serial.flow, talks, modbus: text.modbus.is_some() }
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
    let text = match ProfileText::deserialize(toml::Deserializer::from(table.to_tree())) {
        Ok(text) => text,
        Err(e) => {
            table.refuse(&e, "profile");
            return None;
        }
    };
    if let Some(other) = text.name.as_ref().filter(|n| *n != name.as_str()) {
        let says = format!("is {}, but the file or table calls it {}", quote(other), quote(name.as_str()));
        table.fault_at(table.locate("name"), &table.path("name"), &says, "one name", "taking this line out, or renaming one");
        return None;
    }
    if let Err(ProfileFault { key, says }) = Profile::compile(text.clone()) {
        let (path, says) = (table.path(&key), format!("is wrong: {}", harmless(&says)));
        table.fault_at(table.locate(&key), &path, &says, "a profile that can be used", "comparing with a shipped profile");
        return None;
    }
    let kind = match text.kind {
        profile::Kind::Balance => InstrumentKind::Balance,
        profile::Kind::Counter => InstrumentKind::Counter,
        profile::Kind::Scanner => InstrumentKind::Scanner,
    };
    let usual = Usual::from(&text);
    Some(ProfileSource { name, kind, text, file: file.into(), at: table.place(), shipped: false, usual })
}
