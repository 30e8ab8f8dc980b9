//! `[[instrument]]` tables.

use super::{Bench, Instrument, InstrumentKind, address};
use crate::fault::{Placed, quote, remedy_for_name};
use crate::profiles::{ProfileSource, Profiles, Usual};
use crate::reader::{Entry, Table};
use crate::{defaults, keys};
use std::collections::BTreeSet;
use tarecup_core::names::{BenchName, InstrumentName, ProfileName};
use tarecup_core::quantity::Mass;
use tarecup_core::sense::{CountLimits, SettleLimits, Talks};
use tarecup_core::soil::uncertainty::Balance;
use tarecup_drivers::port::pulse::PulseSettings;
use tarecup_drivers::port::{CharFrame, Flow, PortSettings};
use tarecup_drivers::pulse::{self, ModemLine};

/// The profile of what the program writes for a switch.
const CONTACT: &str = "contact-closure";
/// More instruments than one station can listen to in a sensible way.
const MOST_INSTRUMENTS: usize = 200;

pub(super) fn all(root: &Table<'_>, benches: &[Bench], profiles: &Profiles, broken: &BTreeSet<ProfileName>) -> Vec<Instrument> {
    let tables = root
        .get("instrument")
        .filter(|e| e.at_most(MOST_INSTRUMENTS))
        .map(|e| e.tables("instrument", keys::INSTRUMENT))
        .unwrap_or_default();
    let known = Known { benches, profiles, broken };
    let mut taken = Taken::default();
    tables.iter().filter_map(|t| one(t, &known, &mut taken)).collect()
}

/// What an instrument may name.
struct Known<'p> {
    benches: &'p [Bench],
    profiles: &'p Profiles,
    broken: &'p BTreeSet<ProfileName>,
}

/// What instruments above have taken already.
#[derive(Default)]
struct Taken {
    names: Vec<Placed<InstrumentName>>,
    ports: Vec<Placed<String>>,
}

/// Each part is read before any is missed, so that all faults are told.
fn one(table: &Table<'_>, known: &Known<'_>, taken: &mut Taken) -> Option<Instrument> {
    let name = name(table, taken);
    let kind = table
        .need("kind", "balance, counter or scanner", "kind = \"balance\" below [[instrument]]")
        .and_then(|e| e.one_of(&InstrumentKind::WORDS));
    let benches = at_benches(table, known.benches, kind);
    let pulse = pulse(table);
    // A line that is named wrongly is a switch all the same.
    let switch = table.get("pulse").is_some() && kind.is_none_or(|k| k == InstrumentKind::Counter);
    let profile = if switch { contact(table, known) } else { profile(table, kind, known) };
    let usual = profile.map(|p| p.usual).unwrap_or_default();
    let port = port(table, taken, usual);
    let (settle, count) = (settle(table, usual), count(table, usual));
    let grams = |key: &str, what: &str| table.get(key).and_then(|e| e.number(0.0..=10.0, what));
    let weighs = Balance {
        repeatability_g: grams("repeatability_g", "the standard deviation of repeated readings in grams"),
        linearity_g: grams("linearity_g", "the largest departure from a straight line in grams"),
    };
    if let Some(kind) = kind {
        not_of_this_kind(table, kind);
    }
    let pulse = pulse.and_then(|line| contact_settings(table, line, count));
    let (name, kind, benches, port, profile) = (name?, kind?, benches?, port?, profile?.name.clone());
    Some(Instrument { name, kind, benches, port, pulse, profile, settle, count, weighs })
}

fn name(table: &Table<'_>, taken: &mut Taken) -> Option<InstrumentName> {
    let entry = table.need("name", "a name for the instrument", "name = \"pan-1\" below [[instrument]]")?;
    let name: InstrumentName = entry.name()?;
    if let Some(first) = taken.names.iter().find(|t| t.value == name) {
        let says = format!("is \"{name}\", as the instrument of line {}", first.at.line);
        entry.fault(&says, "a name of its own for each instrument", "another name");
        return None;
    }
    taken.names.push(Placed { value: name.clone(), at: entry.place() });
    Some(name)
}

fn at_benches(table: &Table<'_>, benches: &[Bench], kind: Option<InstrumentKind>) -> Option<Vec<BenchName>> {
    let known: Vec<&str> = benches.iter().map(|b| b.name.as_str()).collect();
    let Some(entry) = table.get("bench") else {
        if let [only] = benches {
            return Some(vec![only.name.clone()]);
        }
        table.need("bench", &format!("one of {}", known.join(", ")), &format!("bench = \"{}\"", known[0]));
        return None;
    };
    let mut names: Vec<BenchName> = Vec::new();
    for entry in entry.one_or_list() {
        let Some(name) = entry.name::<BenchName>() else { continue };
        if !known.contains(&name.as_str()) {
            let try_this = format!("{}, or [[bench]] with name = \"{name}\"", remedy_for_name(name.as_str(), &known));
            let says = format!("is \"{name}\", and there is no such bench");
            entry.fault(&says, &format!("the name of a bench: {}", known.join(", ")), &try_this);
        } else if names.contains(&name) {
            entry.fault(&format!("names \"{name}\" twice"), "each bench once", "taking one of the two out");
        } else {
            names.push(name);
        }
    }
    if names.len() > 1 && kind.is_some_and(|k| k != InstrumentKind::Balance) {
        let says = "names several benches; what is counted or read there could belong to any of them";
        entry.fault(says, "one bench (only a balance may be shared)", "the bench where it stands");
        return None;
    }
    (!names.is_empty()).then_some(names)
}

fn port(table: &Table<'_>, taken: &mut Taken, usual: Usual) -> Option<PortSettings> {
    let entry = table.need("port", address::PORT, "`tarecup ports`, which lists the ports there are");
    let baud = table.get("baud");
    let speed = match &baud {
        Some(e) => e.whole(50..=4_000_000, "the speed in baud"),
        None => usual.baud.or(Some(defaults::BAUD)),
    };
    let frame = match table.get("frame") {
        Some(e) => frame(&e),
        None => Some(usual.frame.unwrap_or_default()),
    };
    let flows = [("none", Flow::None), ("hardware", Flow::Hardware), ("software", Flow::Software)];
    let flow = match table.get("flow") {
        Some(e) => e.one_of(&flows),
        None => Some(usual.flow.unwrap_or_default()),
    };
    let entry = entry?;
    let path = address::port(&entry, usual.modbus)?;
    if path.starts_with("tcp://") {
        for entry in ["baud", "frame", "flow"].iter().filter_map(|k| table.get(k)) {
            let says = "is set at the device server, not here: the port is on the network";
            entry.fault_of_key(says, "no such key for a port on the network", "taking this line out");
        }
    }
    if let Some(first) = taken.ports.iter().find(|t| t.value == path) {
        let says = format!("is the port of the instrument in line {} too", first.at.line);
        entry.fault(&says, "a port of its own for each instrument", "`tarecup ports`, which lists the ports there are");
        return None;
    }
    taken.ports.push(Placed { value: path.clone(), at: entry.place() });
    Some(PortSettings { path, baud: speed?, frame: frame?, flow: flow? })
}

fn frame(entry: &Entry<'_>) -> Option<CharFrame> {
    let text = entry.text()?;
    let frame: Result<CharFrame, String> = text.parse();
    if frame.is_err() {
        let says = format!("is {}", quote(text));
        entry.fault(&says, "data bits, parity and stop bits", "\"8N1\", \"7E1\", \"7O1\" or what the instrument's manual says");
    }
    frame.ok()
}

fn profile<'p>(table: &Table<'_>, kind: Option<InstrumentKind>, known: &Known<'p>) -> Option<&'p ProfileSource> {
    let of_kind = |k: InstrumentKind| known.profiles.values().filter(move |p| p.kind == k).map(|p| p.name.as_str());
    let fitting: Vec<&str> = match kind {
        Some(kind) => of_kind(kind).collect(),
        None => known.profiles.keys().map(ProfileName::as_str).collect(),
    };
    let expected = format!("what the instrument speaks: {}", fitting.join(", "));
    let try_this =
        "one of these or, where the instrument speaks otherwise, a [profile.NAME] of your own, and then `tarecup check`";
    let entry = table.need("profile", &expected, try_this)?;
    let name: ProfileName = entry.name()?;
    if known.broken.contains(&name) {
        return None;
    }
    let Some(found) = known.profiles.get(&name) else {
        let says = format!("is \"{name}\", and there is no such profile");
        entry.fault(&says, &expected, &remedy_for_name(name.as_str(), &fitting));
        return None;
    };
    if let Some(kind) = kind.filter(|k| *k != found.kind) {
        let says = format!("is \"{name}\", the profile of a {}, and the instrument is a {}", found.kind.word(), kind.word());
        entry.fault(&says, &expected, "one of these profiles, or another kind");
        return None;
    }
    Some(found)
}

/// The line that a switch closes, if there is one.
fn pulse(table: &Table<'_>) -> Option<ModemLine> {
    let line = table.get("pulse");
    if let (None, Some(entry)) = (&line, table.get("bounce_ms")) {
        entry.fault_of_key(
            "is of a switch, and there is no pulse",
            "pulse = \"cts\" with it",
            "naming the line, or taking this line out",
        );
    }
    line.and_then(|e| e.one_of(&ModemLine::WORDS))
}

/// A switch speaks one language, that of the program itself.
fn contact<'p>(table: &Table<'_>, known: &Known<'p>) -> Option<&'p ProfileSource> {
    if let Some(entry) = table.get("profile").filter(|e| e.quiet_text() != Some(CONTACT)) {
        entry.fault_of_key("says how lines are read, and a switch sends none", "no profile beside pulse", "taking this line out");
    }
    if let Some(entry) = table.get("flow").filter(|e| e.quiet_text() == Some("hardware")) {
        entry.fault("waits for the very line that the switch closes", "\"none\"", "taking this line out");
    }
    known.profiles.values().find(|p| p.name.as_str() == CONTACT)
}

fn contact_settings(table: &Table<'_>, line: ModemLine, count: CountLimits) -> Option<PulseSettings> {
    let bounce_ms = match table.get("bounce_ms") {
        Some(entry) => {
            let ms: u32 = entry.whole(1..=100, "milliseconds that the switch bounces")?;
            if ms >= count.debounce_ms {
                let says = format!("is {ms} ms, no less than debounce_ms ({} ms)", count.debounce_ms);
                entry.fault(&says, "less than debounce_ms", "20, which is long for a microswitch");
            }
            ms
        }
        None => pulse::BOUNCE_MS,
    };
    Some(PulseSettings { line, bounce_ms })
}

/// Keys that mean nothing for this kind of instrument.
fn not_of_this_kind(table: &Table<'_>, kind: InstrumentKind) {
    let foreign: [(&[&str], InstrumentKind); 2] =
        [(keys::SETTLE, InstrumentKind::Balance), (keys::COUNT, InstrumentKind::Counter)];
    for (keys, owner) in foreign.into_iter().filter(|(_, owner)| *owner != kind) {
        for entry in keys.iter().filter_map(|k| table.get(k)) {
            let says = format!("means something for a {} only, and this is a {}", owner.word(), kind.word());
            entry.fault_of_key(&says, &format!("no such key for a {}", kind.word()), "taking this line out");
        }
    }
}

fn settle(table: &Table<'_>, usual: Usual) -> SettleLimits {
    let mut limits = SettleLimits::default();
    let most = Mass::from_ug(1_000_000_000);
    let grams = |key: &str| table.get(key).and_then(|e| e.grams(most)).map(|m| m.value);
    let talks = [("continuous", Talks::Continuous), ("print-on-key", Talks::PrintOnKey)];
    limits.talks = table.get("talks").and_then(|e| e.one_of(&talks)).or(usual.talks).unwrap_or_default();
    if let Some(readings) = table.get("steady_readings").and_then(|e| e.whole(2..=200, "readings in a row")) {
        limits.steady_readings = readings;
    }
    limits.steady_span = grams("steady_span_g").or(limits.steady_span);
    limits.load_from = grams("load_from_g").unwrap_or(limits.load_from);
    limits.change_from = grams("change_from_g").unwrap_or(limits.change_from);
    if let Some(ms) = table.get("steady_ms").and_then(|e| e.whole(1..=60_000, "milliseconds")) {
        limits.steady_ms = ms;
    }
    if let (Some(span), Some(entry)) = (limits.steady_span, table.get("steady_span_g"))
        && span >= limits.load_from
    {
        let says = format!("is {span} g, so that a load of load_from_g ({} g) could pass for none", limits.load_from);
        entry.fault(&says, "less than load_from_g", "two steps of the balance's last digit, such as 0.02");
    }
    limits
}

fn count(table: &Table<'_>, usual: Usual) -> CountLimits {
    let mut limits = CountLimits { polled: usual.modbus, ..CountLimits::default() };
    if let Some(ms) = table.get("debounce_ms").and_then(|e| e.whole(1..=400, "milliseconds, less than two drops are apart")) {
        limits.debounce_ms = ms;
    }
    if let Some(ms) = table.get("pause_ms").and_then(|e| e.whole(1_000..=120_000, "milliseconds")) {
        limits.pause_ms = ms;
    }
    if let Some(percent) = table.get("gap_percent").and_then(|e| e.whole(110..=1_000, "percent of the usual interval")) {
        limits.gap_percent = percent;
    }
    limits
}
