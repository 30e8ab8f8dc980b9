//! Operators and their PINs: a file in the state directory, its owner's alone.
//!
//! No PIN stands in it: only what argon2 makes of one. Wrong tries are counted
//! in the file before they are judged, so that neither a restart nor a kill
//! gives anybody more of them.

use argon2::password_hash::{PasswordHash, PasswordHasher, PasswordVerifier, SaltString};
use argon2::{Algorithm, Argon2, Params, Version};
use serde::{Deserialize, Serialize};
use std::io::Write;
use std::os::unix::fs::{OpenOptionsExt, PermissionsExt};
use std::path::{Path, PathBuf};
use tarecup_core::names::Operator;
use tarecup_core::stamp::{SECOND_US, parse_rfc3339, rfc3339};

/// Name of the file in the state directory.
pub const NAME: &str = "operators.json";
/// Wrong tries until no more are taken.
pub const TRIES: u32 = 5;
/// For how long at first; each further five wrong tries double it.
const LOCKED_US: i64 = 5 * 60 * SECOND_US;
/// At most.
const LOCKED_MOST_US: i64 = 24 * 3_600 * SECOND_US;
/// Shortest and longest PIN, in characters.
const PIN_LENGTH: std::ops::RangeInclusive<usize> = 4..=64;
/// Most operators.
const OPERATORS_MOST: usize = 200;

/// One operator.
#[derive(Clone, Debug, PartialEq, Eq, Serialize, Deserialize)]
#[serde(deny_unknown_fields)]
pub struct Entry {
    /// Initials.
    pub initials: Operator,
    /// What argon2 made of the PIN.
    pin: String,
    /// Wrong tries since the last right one.
    #[serde(default)]
    pub wrong: u32,
    /// No try is taken before this moment.
    #[serde(default)]
    pub locked_until: Option<String>,
}

impl Entry {
    /// When the next try is taken, when that is later than now.
    pub fn locked(&self, now_utc_us: i64) -> Option<&str> {
        let until = self.locked_until.as_deref()?;
        parse_rfc3339(until).is_none_or(|u| u > now_utc_us).then_some(until)
    }
}

/// All operators.
#[derive(Clone, Debug, Default, PartialEq, Eq, Serialize, Deserialize)]
#[serde(deny_unknown_fields)]
pub struct Book {
    v: u32,
    /// In the order they were added.
    pub operators: Vec<Entry>,
}

/// Why somebody is not believed.
#[derive(Clone, Debug, PartialEq, Eq, thiserror::Error)]
pub enum Denied {
    /// No PIN stands for these initials.
    #[error("{0} has no PIN here; `tarecup operator add {0}` gives one")]
    Nobody(Operator),
    /// Too many wrong tries.
    #[error("too many wrong PINs for {who}: no more are taken before {until}; `tarecup operator unlock {who}` ends that")]
    Locked {
        /// Who.
        who: Operator,
        /// Until when.
        until: String,
    },
    /// Wrong.
    #[error("that is not the PIN of {who}; {left} more tries")]
    Wrong {
        /// Who.
        who: Operator,
        /// Tries left before it is locked.
        left: u32,
    },
    /// The file.
    #[error("{0}")]
    Trouble(String),
}

/// Path of the file.
pub fn path(state_dir: &Path) -> PathBuf {
    state_dir.join(NAME)
}

/// Reads the file; an empty book where there is none.
pub fn load(state_dir: &Path) -> Result<Book, String> {
    let path = path(state_dir);
    let trouble = |what: String| format!("{}: {what}", path.display());
    let meta = match std::fs::metadata(&path) {
        Err(e) if e.kind() == std::io::ErrorKind::NotFound => return Ok(Book { v: 1, operators: Vec::new() }),
        other => other.map_err(|e| trouble(e.to_string()))?,
    };
    if meta.permissions().mode() & 0o077 != 0 {
        return Err(trouble(String::from("others may read it; take that right away (chmod 600)")));
    }
    if meta.len() > 1 << 20 {
        return Err(trouble(String::from("it is too large to be a list of operators")));
    }
    let text = std::fs::read_to_string(&path).map_err(|e| trouble(e.to_string()))?;
    serde_json::from_str(&text).map_err(|e| trouble(format!("{e}; take it away and add the operators again")))
}

/// Changes the file; one change at a time, also from several programs.
pub fn change<T>(state_dir: &Path, change: impl FnOnce(&mut Book) -> Result<T, String>) -> Result<T, String> {
    let path = path(state_dir);
    let trouble = |e: std::io::Error| format!("{}: {e}", path.display());
    let open = |path: &Path| std::fs::OpenOptions::new().create(true).truncate(false).write(true).mode(0o600).open(path);
    let lock = open(&state_dir.join("operators.lock")).map_err(trouble)?;
    rustix::fs::flock(&lock, rustix::fs::FlockOperation::LockExclusive).map_err(|e| trouble(e.into()))?;
    let mut book = load(state_dir)?;
    let outcome = change(&mut book)?;
    book.v = 1;
    let beside = state_dir.join("operators.json.new");
    let write = || {
        let _ = std::fs::remove_file(&beside);
        let mut file = std::fs::OpenOptions::new().create_new(true).write(true).mode(0o600).open(&beside)?;
        file.write_all(serde_json::to_string_pretty(&book)?.as_bytes())?;
        file.sync_all()?;
        std::fs::rename(&beside, &path)
    };
    write().map_err(trouble)?;
    Ok(outcome)
}

/// 19 MiB and two passes: what a guess costs, and what a try may cost this machine.
fn argon2() -> Argon2<'static> {
    Argon2::new(Algorithm::Argon2id, Version::V0x13, Params::new(19 * 1024, 2, 1, None).unwrap_or_default())
}

fn hashed(pin: &str) -> Result<String, String> {
    let mut salt = [0u8; 16];
    getrandom::fill(&mut salt).map_err(|e| format!("the system gives no random numbers: {e}"))?;
    let salt = SaltString::encode_b64(&salt).map_err(|e| e.to_string())?;
    argon2().hash_password(pin.as_bytes(), &salt).map(|h| h.to_string()).map_err(|e| e.to_string())
}

fn good_enough(initials: &Operator, pin: &str) -> Result<(), String> {
    let length = pin.chars().count();
    let one = pin.chars().next().is_some_and(|first| pin.chars().all(|c| c == first));
    if !PIN_LENGTH.contains(&length) {
        return Err(format!("a PIN has {} to {} characters", PIN_LENGTH.start(), PIN_LENGTH.end()));
    }
    if one || pin.eq_ignore_ascii_case(initials.as_str()) || "0123456789876543210".contains(pin) {
        return Err(String::from("that PIN is the first that anybody would try; choose another"));
    }
    if pin.chars().any(char::is_control) {
        return Err(String::from("a PIN is made of characters that can be typed"));
    }
    Ok(())
}

/// Adds an operator, or gives one another PIN.
pub fn add(state_dir: &Path, initials: &Operator, pin: &str) -> Result<(), String> {
    good_enough(initials, pin)?;
    let pin = hashed(pin)?;
    change(state_dir, |book| {
        book.operators.retain(|e| !same(&e.initials, initials));
        if book.operators.len() >= OPERATORS_MOST {
            return Err(format!("at most {OPERATORS_MOST} operators fit; remove one first"));
        }
        book.operators.push(Entry { initials: initials.clone(), pin, wrong: 0, locked_until: None });
        Ok(())
    })
}

/// Removes an operator.
pub fn remove(state_dir: &Path, initials: &Operator) -> Result<(), String> {
    change(state_dir, |book| {
        let before = book.operators.len();
        book.operators.retain(|e| !same(&e.initials, initials));
        if book.operators.len() == before { Err(format!("{initials} has no PIN here")) } else { Ok(()) }
    })
}

/// Takes tries again.
pub fn unlock(state_dir: &Path, initials: &Operator) -> Result<(), String> {
    change(state_dir, |book| {
        let entry = book.operators.iter_mut().find(|e| same(&e.initials, initials));
        let entry = entry.ok_or_else(|| format!("{initials} has no PIN here"))?;
        (entry.wrong, entry.locked_until) = (0, None);
        Ok(())
    })
}

/// The same initials in another case are the same person.
fn same(a: &Operator, b: &Operator) -> bool {
    a.as_str().eq_ignore_ascii_case(b.as_str())
}

/// Judges a PIN; gives the initials as they were added. It takes a good part of a second and 19 MiB: never on the desk.
pub fn prove(state_dir: &Path, initials: &Operator, pin: &str, now_utc_us: i64) -> Result<Operator, Denied> {
    let trouble = |says: String| Denied::Trouble(says);
    if !load(state_dir).map_err(trouble)?.operators.iter().any(|e| same(&e.initials, initials)) {
        return Err(Denied::Nobody(initials.clone()));
    }
    // Counted as wrong first, then judged.
    let counted = change(state_dir, |book| Ok(count(book, initials, now_utc_us))).map_err(trouble)?;
    let entry = counted?;
    let hash = PasswordHash::new(&entry.pin).map_err(|_| {
        Denied::Trouble(format!(
            "what is kept of the PIN of {initials} cannot be read; `tarecup operator add {initials}` gives a new one"
        ))
    })?;
    if pin.chars().count() > *PIN_LENGTH.end() || argon2().verify_password(pin.as_bytes(), &hash).is_err() {
        return Err(match entry.locked(now_utc_us) {
            Some(until) => Denied::Locked { who: entry.initials.clone(), until: until.into() },
            None => Denied::Wrong { who: entry.initials.clone(), left: TRIES - entry.wrong % TRIES },
        });
    }
    unlock(state_dir, initials).map_err(trouble)?;
    Ok(entry.initials)
}

fn count(book: &mut Book, initials: &Operator, now_utc_us: i64) -> Result<Entry, Denied> {
    let Some(entry) = book.operators.iter_mut().find(|e| same(&e.initials, initials)) else {
        return Err(Denied::Nobody(initials.clone()));
    };
    if let Some(until) = entry.locked(now_utc_us) {
        return Err(Denied::Locked { who: entry.initials.clone(), until: until.into() });
    }
    entry.wrong = entry.wrong.saturating_add(1);
    entry.locked_until = entry.wrong.is_multiple_of(TRIES).then(|| {
        let doubled = (entry.wrong / TRIES - 1).min(16);
        rfc3339(now_utc_us.saturating_add((LOCKED_US << doubled).min(LOCKED_MOST_US)))
    });
    Ok(entry.clone())
}

#[cfg(test)]
mod tests {
    use super::*;

    const T: i64 = 1_772_436_600_000_000;

    fn op(initials: &str) -> Operator {
        Operator::new(initials).expect("initials")
    }

    #[test]
    fn five_wrong_pins_lock_and_it_grows() {
        let dir = tempfile::tempdir().expect("a folder");
        let dir = dir.path();
        add(dir, &op("AB"), "7193").expect("added");
        let text = std::fs::read_to_string(path(dir)).expect("the file");
        assert!(text.contains("$argon2id$") && !text.contains("7193"));
        assert_eq!(std::fs::metadata(path(dir)).expect("the file").permissions().mode() & 0o777, 0o600);
        assert_eq!(prove(dir, &op("ab"), "7193", T), Ok(op("AB")));
        assert!(matches!(prove(dir, &op("KL"), "7193", T), Err(Denied::Nobody(_))));
        for left in (1..TRIES).rev() {
            assert_eq!(prove(dir, &op("AB"), "7194", T), Err(Denied::Wrong { who: op("AB"), left }));
        }
        assert!(matches!(prove(dir, &op("AB"), "7194", T), Err(Denied::Locked { .. })));
        assert!(matches!(prove(dir, &op("AB"), "7193", T), Err(Denied::Locked { .. })), "the right one is not taken either");
        let later = T + LOCKED_US + 1;
        for _ in 0..TRIES {
            assert!(prove(dir, &op("AB"), "0", later).is_err());
        }
        let twice = later + LOCKED_US + 1;
        assert!(matches!(prove(dir, &op("AB"), "7193", twice), Err(Denied::Locked { .. })), "twice as long now");
        assert_eq!(prove(dir, &op("AB"), "7193", later + 2 * LOCKED_US + 1), Ok(op("AB")));
        for _ in 0..TRIES {
            assert!(prove(dir, &op("AB"), "0", later).is_err());
        }
        unlock(dir, &op("AB")).expect("unlocked");
        assert_eq!(prove(dir, &op("AB"), "7193", later), Ok(op("AB")));
        remove(dir, &op("AB")).expect("removed");
        assert!(remove(dir, &op("AB")).is_err() && unlock(dir, &op("AB")).is_err());
    }

    #[test]
    fn poor_pins_and_open_files_are_refused() {
        let dir = tempfile::tempdir().expect("a folder");
        for pin in ["", "123", "1234", "8765", "0000", "abcd\u{7}", &"1".repeat(65)] {
            assert!(add(dir.path(), &op("AB"), pin).is_err(), "{pin}");
        }
        assert!(add(dir.path(), &op("abcde"), "ABCDE").is_err());
        add(dir.path(), &op("AB"), "2580").expect("added");
        std::fs::set_permissions(path(dir.path()), std::fs::Permissions::from_mode(0o644)).expect("changed");
        assert!(load(dir.path()).is_err_and(|e| e.contains("chmod 600")));
        std::fs::write(path(dir.path()), "{").expect("written");
        std::fs::set_permissions(path(dir.path()), std::fs::Permissions::from_mode(0o600)).expect("changed");
        assert!(load(dir.path()).is_err());
    }
}
