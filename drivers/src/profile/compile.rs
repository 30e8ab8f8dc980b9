//! From a profile as written to one that can be run, or a pointed fault.

use super::text::{BasisWord, CheckDigits, CheckPlace, FrameText, LineText, Means, ProfileText};
use super::{Ask, Groups, Kind, Line, LineMeans, Profile, Talks};
use crate::frame::{Framing, LONGEST_DEFAULT};
use crate::modbus;
use regex::bytes::{Regex, RegexBuilder};
use tarecup_core::names;
use tarecup_core::near::nearest;
use tarecup_core::quantity::{LARGEST, Mass, MassUnit, UG_PER_G};
use tarecup_core::signal::Basis;

/// The largest mass believed unless a profile says otherwise, in grams.
pub const LARGEST_G_DEFAULT: u32 = 60_000;
const LINES_MAX: usize = 32;
const PATTERN_MAX: usize = 1_000;
const REGEX_BYTES: usize = 256 * 1024;
const SKIP_MAX: usize = 8;
const SEND_MAX: usize = 512;
const EVERY_MS: std::ops::RangeInclusive<u32> = 20..=3_600_000;
const GROUPS: [&str; 10] = ["mass", "sign", "unit", "steady", "moving", "basis", "drops", "total", "end", "code"];

/// Why a profile cannot be used: which key, and what to do about it.
#[derive(Clone, Debug, PartialEq, Eq, thiserror::Error)]
#[error("{key}: {says}")]
pub struct ProfileFault {
    /// The key, such as `line[2].pattern` (counted from 1).
    pub key: String,
    /// What is wrong and what to write.
    pub says: String,
}

fn fault<T>(key: impl Into<String>, says: impl Into<String>) -> Result<T, ProfileFault> {
    Err(ProfileFault { key: key.into(), says: says.into() })
}

pub(super) fn compile(text: ProfileText) -> Result<Profile, ProfileFault> {
    if let Some(name) = &text.name {
        names::check(name).map_err(|e| ProfileFault { key: "name".into(), says: e.to_string() })?;
    }
    let unit = unit(&text)?;
    let largest = largest(&text)?;
    if let Some(modbus) = &text.modbus {
        no_lines(&text)?;
        let plan = modbus::text::compile(modbus, text.kind, unit)?;
        let (framing, talks) = (framing_unused()?, talks(&text, true)?);
        serial(&text)?;
        return Ok(Profile { framing, lines: vec![], unit, largest, talks, ask: None, modbus: Some(plan), text });
    }
    let framing = framing(&text)?;
    let ask = ask(&text)?;
    let talks = talks(&text, ask.is_some())?;
    check_digits(&text)?;
    if text.line.is_empty() {
        return fault("line", "there is no line pattern; add a [[line]] with a pattern");
    }
    if text.line.len() > LINES_MAX {
        return fault("line", format!("{} line patterns; at most {LINES_MAX} fit", text.line.len()));
    }
    let mut lines = Vec::with_capacity(text.line.len());
    for (i, line) in text.line.iter().enumerate() {
        lines.push(compile_line(&text, line, &format!("line[{}]", i + 1), unit)?);
    }
    if !lines.iter().any(|l| l.means.serves(text.kind)) {
        let wants = match text.kind {
            Kind::Balance => "a pattern with the group 'mass'",
            Kind::Counter => "a pattern with the group 'total' or 'drops', or a line with means = \"drop\"",
            Kind::Scanner => "a pattern with the group 'code'",
        };
        return fault("line", format!("no line says what a {} is for; it needs {wants}", text.kind.word()));
    }
    serial(&text)?;
    Ok(Profile { framing, lines, unit, largest, talks, ask, modbus: None, text })
}

/// Keys of an instrument that sends lines.
fn no_lines(text: &ProfileText) -> Result<(), ProfileFault> {
    let of_lines = [
        ("line", !text.line.is_empty()),
        ("frame", text.frame != FrameText::default()),
        ("ask", text.ask.is_some()),
        ("check", text.check.is_some()),
        ("basis", !text.basis.is_empty()),
    ];
    match of_lines.into_iter().find(|(_, given)| *given) {
        Some((key, _)) => fault(key, "an instrument that is read over [modbus] sends no lines; leave it out"),
        None => Ok(()),
    }
}

fn serial(text: &ProfileText) -> Result<(), ProfileFault> {
    match &text.serial {
        Some(serial) if serial.baud == Some(0) => {
            fault("serial.baud", "0 baud would hang up; write the instrument's speed, such as 9600")
        }
        _ => Ok(()),
    }
}

fn framing(text: &ProfileText) -> Result<Framing, ProfileFault> {
    let frame = &text.frame;
    let ends: Vec<Vec<u8>> = frame.ends.iter().map(|e| e.clone().into_bytes()).collect();
    for (key, bytes) in [("frame.starts", &frame.starts), ("frame.single", &frame.single)] {
        if !bytes.is_ascii() {
            return fault(key, "only characters of one byte can stand here; use ASCII");
        }
    }
    let longest = frame.longest.unwrap_or(LONGEST_DEFAULT);
    if frame.length.is_some() || !frame.columns.is_empty() {
        return fixed(text);
    }
    let raw = text.check.is_some_and(|c| c.digits == CheckDigits::Binary);
    Framing::new(&ends, frame.starts.as_bytes(), frame.single.as_bytes(), frame.tail, longest)
        .map(|f| if raw { f.with_raw_tail() } else { f })
        .map_err(|e| ProfileFault { key: "frame".into(), says: e.to_string() })
}

/// A profile without lines never cuts frames.
fn framing_unused() -> Result<Framing, ProfileFault> {
    Framing::new(&[b"\n".to_vec()], b"", b"", 0, LONGEST_DEFAULT)
        .map_err(|e| ProfileFault { key: "frame".into(), says: e.to_string() })
}

/// Frames without terminator.
fn fixed(text: &ProfileText) -> Result<Framing, ProfileFault> {
    let frame = &text.frame;
    if !(frame.ends.is_empty() && frame.single.is_empty() && frame.starts.is_empty() && frame.tail == 0) {
        return fault("frame.length", "frames of a fixed length have no 'ends', 'single', 'starts' or 'tail'; leave them out");
    }
    let columns = frame.columns.as_bytes();
    if frame.length != Some(columns.len()) {
        let says = format!("'columns' shows {} bytes; write one character for each of the 'length' bytes", columns.len());
        return fault("frame.columns", says);
    }
    Framing::fixed(columns).map_err(|e| ProfileFault { key: "frame.columns".into(), says: e.to_string() })
}

fn ask(text: &ProfileText) -> Result<Option<Ask>, ProfileFault> {
    let Some(ask) = &text.ask else { return Ok(None) };
    if ask.send.is_empty() || ask.send.len() > SEND_MAX {
        return fault("ask.send", format!("{} bytes; write 1 to {SEND_MAX}", ask.send.len()));
    }
    if !EVERY_MS.contains(&ask.every_ms) {
        return fault("ask.every_ms", format!("{} ms; choose 20 to 3600000", ask.every_ms));
    }
    let every = std::time::Duration::from_millis(u64::from(ask.every_ms));
    Ok(Some(Ask { send: ask.send.clone().into_bytes(), every }))
}

fn talks(text: &ProfileText, asked: bool) -> Result<Talks, ProfileFault> {
    match (text.talks, asked) {
        (None, true) | (Some(Talks::Asked), true) => Ok(Talks::Asked),
        (None, false) => Ok(Talks::Stream),
        (Some(Talks::Asked), false) => fault("talks", "\"asked\" needs an [ask] table with what to send"),
        (Some(Talks::Stream | Talks::PrintOnKey), true) => {
            fault("talks", "with an [ask] table the instrument is asked; leave 'talks' out or write \"asked\"")
        }
        (Some(Talks::PrintOnKey), false) if text.kind != Kind::Balance => {
            fault("talks", "only balances print on a key; leave 'talks' out")
        }
        (Some(talks), false) => Ok(talks),
    }
}

fn unit(text: &ProfileText) -> Result<Option<MassUnit>, ProfileFault> {
    let Some(word) = &text.unit else { return Ok(None) };
    match MassUnit::parse(word) {
        Some(unit) => Ok(Some(unit)),
        None => fault("unit", format!("'{word}' is not a unit of mass known here; write ug, mg, g or kg")),
    }
}

fn largest(text: &ProfileText) -> Result<Mass, ProfileFault> {
    let g = text.largest_g.unwrap_or(LARGEST_G_DEFAULT);
    let mass = Mass::from_ug(i64::from(g) * UG_PER_G);
    if g == 0 || mass > LARGEST {
        return fault("largest_g", format!("{g} g; choose 1 to 1000000"));
    }
    Ok(mass)
}

fn check_digits(text: &ProfileText) -> Result<(), ProfileFault> {
    if let Some(decimals) = text.decimals
        && !(1..=9).contains(&decimals)
    {
        return fault("decimals", format!("{decimals} decimals; write 1 to 9, or leave it out where the point is printed"));
    }
    let Some(check) = &text.check else { return Ok(()) };
    if check.skip > SKIP_MAX {
        return fault(
            "check.skip",
            format!("{} bytes; at most {SKIP_MAX} stand between the line and its check digits", check.skip),
        );
    }
    let (width, tail) = (check.width(), text.frame.tail);
    match check.place {
        CheckPlace::AfterEnd if tail != width => fault(
            "frame.tail",
            format!("{width} check digits come after the terminator, but tail is {tail}; write tail = {width}"),
        ),
        CheckPlace::BeforeEnd if tail != 0 => {
            fault("frame.tail", "check digits before the end are part of the line; leave 'tail' out")
        }
        _ => Ok(()),
    }
}

fn regex(pattern: &str, key: &str) -> Result<Regex, ProfileFault> {
    let key = format!("{key}.pattern");
    if pattern.len() > PATTERN_MAX {
        return fault(key, format!("{} characters; at most {PATTERN_MAX} fit", pattern.len()));
    }
    // The whole line must match: a pattern that may start anywhere would find
    // a mass in the middle of noise.
    let bounded = |text: &str| {
        RegexBuilder::new(text).unicode(false).size_limit(REGEX_BYTES).dfa_size_limit(4 * REGEX_BYTES).nest_limit(32).build()
    };
    let wrapped = bounded(pattern).and_then(|_| bounded(&format!(r"\A(?:{pattern})\z")));
    let regex = match wrapped {
        Ok(regex) => regex,
        Err(regex::Error::CompiledTooBig(_)) => return fault(key, "the pattern becomes too large; repeat less, or fewer times"),
        Err(e) => {
            let last = e.to_string();
            let last = last.lines().last().unwrap_or("").trim().trim_start_matches("error: ").to_owned();
            return fault(key, format!("not a regular expression: {last}; quote patterns with '…' so that \\ stays as written"));
        }
    };
    if regex.is_match(b"") {
        return fault(key, "the pattern matches an empty line; ask for at least one character");
    }
    Ok(regex)
}

fn compile_line(text: &ProfileText, line: &LineText, key: &str, unit: Option<MassUnit>) -> Result<Line, ProfileFault> {
    let regex = regex(&line.pattern, key)?;
    let groups = groups(&regex, key)?;
    let means = line_means(text.kind, line, &groups, key)?;
    if means == LineMeans::Mass && groups.unit.is_none() && unit.is_none() {
        return fault(
            format!("{key}.pattern"),
            "the mass has no unit; add a group (?<unit>g|kg), or unit = \"g\" to the profile",
        );
    }
    if groups.basis.is_some() && text.basis.is_empty() {
        return fault(
            "basis",
            "the group 'basis' needs to know what its texts mean; write for instance basis = { G = \"gross\", N = \"net\" }",
        );
    }
    if line.means_basis.is_some() && (means != LineMeans::Mass || groups.basis.is_some()) {
        return fault(format!("{key}.means_basis"), "belongs to a line with a mass and without a group 'basis'");
    }
    let basis = line.means_basis.map_or(Basis::Unmarked, basis_of);
    let longest = text.frame.longest.unwrap_or(LONGEST_DEFAULT);
    if line.width.is_some_and(|w| w == 0 || w > longest) {
        return fault(format!("{key}.width"), format!("no line has so many characters; choose 1 to {longest}"));
    }
    Ok(Line { regex, groups, means, basis, width: line.width })
}

pub(super) fn basis_of(word: BasisWord) -> Basis {
    match word {
        BasisWord::Gross => Basis::Gross,
        BasisWord::Net => Basis::Net,
        BasisWord::Unmarked => Basis::Unmarked,
    }
}

fn groups(regex: &Regex, key: &str) -> Result<Groups, ProfileFault> {
    let mut groups = Groups::default();
    for (at, name) in regex.capture_names().enumerate() {
        let Some(name) = name else { continue };
        let place = match name {
            "mass" => &mut groups.mass,
            "sign" => &mut groups.sign,
            "unit" => &mut groups.unit,
            "steady" => &mut groups.steady,
            "moving" => &mut groups.moving,
            "basis" => &mut groups.basis,
            "drops" => &mut groups.drops,
            "total" => &mut groups.total,
            "end" => &mut groups.end,
            "code" => &mut groups.code,
            other => {
                let hint = nearest(other, GROUPS.into_iter()).map(|g| format!("; did you mean '{g}'?")).unwrap_or_default();
                return fault(format!("{key}.pattern"), format!("unknown group '{other}'{hint} Known are {}", GROUPS.join(", ")));
            }
        };
        *place = Some(at);
    }
    Ok(groups)
}

/// What a line means by its groups or by its own word.
fn line_means(kind: Kind, line: &LineText, groups: &Groups, key: &str) -> Result<LineMeans, ProfileFault> {
    let weighs = groups.mass.is_some();
    let counts = groups.total.is_some() || groups.drops.is_some() || groups.end.is_some();
    let reads = groups.code.is_some();
    if u8::from(weighs) + u8::from(counts) + u8::from(reads) > 1 {
        return fault(
            format!("{key}.pattern"),
            "one line cannot be a mass, a count and a code at once; write a [[line]] for each",
        );
    }
    let of_mass = [groups.sign, groups.unit, groups.steady, groups.moving, groups.basis].iter().any(Option::is_some);
    if of_mass && !weighs {
        return fault(format!("{key}.pattern"), "sign, unit, steady, moving and basis belong to a mass; add the group 'mass'");
    }
    let by_groups = match (weighs, counts, reads) {
        (true, ..) => Some((LineMeans::Mass, Kind::Balance)),
        (_, true, _) => Some((LineMeans::Count, Kind::Counter)),
        (.., true) => Some((LineMeans::Code, Kind::Scanner)),
        _ => None,
    };
    match (by_groups, line.means) {
        (Some(_), Some(Means::OtherKind)) => Ok(LineMeans::OtherKind),
        (Some((_, Kind::Counter)), Some(Means::End)) if kind == Kind::Counter => Ok(LineMeans::End),
        (Some(_), Some(_)) => fault(format!("{key}.means"), "the groups already say what this line means; leave 'means' out"),
        // A line of another kind of instrument is worth knowing: it tells of swapped cables.
        (Some((means, of)), None) => Ok(if of == kind { means } else { LineMeans::OtherKind }),
        (None, Some(means)) => plain_means(kind, means, key),
        (None, None) => fault(
            format!("{key}.pattern"),
            "the line means nothing yet; name a group, such as (?<mass>…), or write means = \"nothing\"",
        ),
    }
}

fn plain_means(kind: Kind, means: Means, key: &str) -> Result<LineMeans, ProfileFault> {
    let (means, of) = match means {
        Means::Nothing => (LineMeans::Nothing, None),
        Means::NotReady => (LineMeans::NotReady, None),
        Means::OtherKind => (LineMeans::OtherKind, None),
        Means::Overload => (LineMeans::Overload, Some(Kind::Balance)),
        Means::Underload => (LineMeans::Underload, Some(Kind::Balance)),
        Means::Drop => (LineMeans::Drop, Some(Kind::Counter)),
        Means::End => (LineMeans::End, Some(Kind::Counter)),
    };
    match of {
        Some(of) if of != kind => fault(
            format!("{key}.means"),
            format!("only a {} says so; for a line that betrays swapped cables write \"other-kind\"", of.word()),
        ),
        _ => Ok(means),
    }
}
