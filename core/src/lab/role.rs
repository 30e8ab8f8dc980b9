//! What a mass is of: the container's state first, then the bench.

use crate::quantity::Mass;
use crate::sheet::Kind;
use alloc::format;
use alloc::string::String;
use serde::{Deserialize, Serialize};

/// What a mass is of.
#[derive(Clone, Copy, Debug, PartialEq, Eq, Serialize, Deserialize)]
#[serde(rename_all = "snake_case")]
pub enum Role {
    /// Empty container, first time or after a wet weighing that went before it.
    Tare,
    /// Empty container again.
    TareCheck,
    /// Empty container with its registered lid.
    TareWithLid,
    /// Container with wet soil: a determination begins.
    Wet,
    /// The wet container once more; changes nothing.
    Repeat,
    /// Threads were added to the container; the last wet mass counts.
    Grown,
    /// Container with dried soil.
    Dry,
    /// The dried container once more.
    FurtherDry,
    /// The container after its soil was thrown out: free again.
    Emptied,
}

/// What is known of the container before the mass.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub struct Before {
    /// Mass of the empty container, when known.
    pub tare: Option<Mass>,
    /// Mass of its registered lid.
    pub lid: Option<Mass>,
    /// The determination it holds.
    pub held: Option<Held>,
    /// The bench has something to weigh wet: a slice owed by a recent count, or threads or natural soil.
    pub wet_open: bool,
}

/// The determination a container holds.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub struct Held {
    /// Liquid, thread or natural.
    pub kind: Kind,
    /// Latest wet mass.
    pub wet: Mass,
    /// Latest dry mass.
    pub dry: Option<Mass>,
    /// Dried as the method wants it, or set aside: a new determination may use the container.
    pub finished: bool,
    /// It was set aside: the container is free whatever is in it.
    pub set_aside: bool,
    /// It has been in the oven, by the record or because it was weighed wet long ago.
    pub been_in_oven: bool,
    /// Somebody recorded the oven.
    pub oven_recorded: bool,
    /// Weighed dry before the method's time, and in the oven again since.
    pub dried_on: bool,
}

/// Decides the role of a gross mass, or says why a person has to.
pub fn role(before: &Before, mass: Mass, near: Mass) -> Result<Role, String> {
    match (before.held, before.tare) {
        (Some(held), tare) => held_role(&held, tare, before, mass, near),
        (None, None) if before.wet_open => Ok(Role::Wet),
        (None, None) => Ok(Role::Tare),
        (None, Some(tare)) => empty_role(tare, before, mass, near),
    }
}

fn is_near(a: Mass, b: Mass, near: Mass) -> bool {
    (a - b).abs() <= near
}

/// A mass like the empty container, with or without its registered lid.
fn empty_like(tare: Mass, lid: Option<Mass>, mass: Mass, near: Mass) -> Option<Role> {
    if is_near(mass, tare, near) {
        return Some(Role::TareCheck);
    }
    lid.filter(|&lid| is_near(mass, tare + lid, near)).map(|_| Role::TareWithLid)
}

fn empty_role(tare: Mass, before: &Before, mass: Mass, near: Mass) -> Result<Role, String> {
    if let Some(role) = empty_like(tare, before.lid, mass, near) {
        return Ok(role);
    }
    if mass < tare {
        return Err(format!(
            "{mass} g is lighter than this container's empty mass of {tare} g: is it another container, or was the balance tared with something on it? Read the code again or say what the mass is"
        ));
    }
    match before.wet_open {
        true => Ok(Role::Wet),
        false => Err(format!(
            "the container should be empty ({tare} g) but weighs {mass} g, and no slice is owed here and no plastic limit or natural water content is in work: say what the mass is"
        )),
    }
}

fn held_role(held: &Held, tare: Option<Mass>, before: &Before, mass: Mass, near: Mass) -> Result<Role, String> {
    match held.dry {
        None => wet_role(held, tare, before, mass, near),
        Some(dry) => dried_role(held, dry, tare, before, mass, near),
    }
}

fn wet_role(held: &Held, tare: Option<Mass>, before: &Before, mass: Mass, near: Mass) -> Result<Role, String> {
    let wet = held.wet;
    if is_near(mass, wet, near) {
        return match (held.been_in_oven, held.oven_recorded) {
            _ if held.set_aside => Ok(Role::Repeat),
            (true, true) if mass <= wet => Ok(Role::Dry),
            (true, false) => Err(format!(
                "{mass} g is the wet mass of {wet} g, weighed hours ago, and nobody recorded the oven: say whether this is the dry mass or the wet one again"
            )),
            _ => Ok(Role::Repeat),
        };
    }
    if mass > wet {
        if held.kind == Kind::Thread && !held.oven_recorded && !held.finished {
            return Ok(Role::Grown);
        }
        return new_use(held, before, || {
            format!(
                "the container already holds a determination weighed wet at {wet} g, and {mass} g is heavier: take another container, or say what the mass is"
            )
        });
    }
    match tare.and_then(|t| empty_like(t, before.lid, mass, near)) {
        Some(Role::TareCheck) if held.set_aside => Ok(Role::Emptied),
        Some(lid) if held.set_aside => Ok(lid),
        Some(_) => Err(format!(
            "{mass} g is the mass of the empty container, but its soil has not been weighed dry: was it dropped or emptied? Set the trial aside, or say what the mass is"
        )),
        None if tare.is_some_and(|t| mass < t) => {
            Err(format!("{mass} g is lighter than the empty container: read the code again or say what the mass is"))
        }
        None if held.set_aside && before.wet_open && held.been_in_oven => Err(String::from(
            "this may be the dried soil of the trial that was set aside, or a new wet one: say what the mass is",
        )),
        None if held.set_aside && before.wet_open => Ok(Role::Wet),
        None => Ok(Role::Dry),
    }
}

fn dried_role(held: &Held, dry: Mass, tare: Option<Mass>, before: &Before, mass: Mass, near: Mass) -> Result<Role, String> {
    if is_near(mass, dry, near) {
        return Ok(Role::FurtherDry);
    }
    // Soil that was not yet dry loses a little more, and dried soil takes up a
    // little moisture from the air. Both are small against what it has lost.
    let little = Mass::from_ug((held.wet - dry).ug().max(0) / 4);
    let a_little_off = (mass - dry).abs() <= little && tare.is_none_or(|t| mass > t + near);
    // Weighed too early, it loses as much as it still held.
    if held.dried_on && mass < dry && tare.is_none_or(|t| mass > t + near) {
        return Ok(Role::FurtherDry);
    }
    if a_little_off && mass < dry {
        return match held.finished && before.wet_open {
            true => Err(format!(
                "{mass} g is a little lighter than the dried soil at {dry} g: say whether it is weighed dry again, or wet with new soil"
            )),
            false => Ok(Role::FurtherDry),
        };
    }
    let heavier = || {
        format!(
            "{mass} g is heavier than the dried soil at {dry} g: did it take up moisture, or is it another container? Say what the mass is"
        )
    };
    if mass > dry {
        return if a_little_off { Err(heavier()) } else { new_use(held, before, heavier) };
    }
    let Some(tare) = tare else {
        // The tare is owed: the only thing left to weigh is the empty container.
        return Ok(Role::Tare);
    };
    match empty_like(tare, before.lid, mass, near) {
        Some(Role::TareCheck) if held.finished => Ok(Role::Emptied),
        Some(lid) if held.finished => Ok(lid),
        Some(_) => Err(format!(
            "{mass} g is the empty container, but its soil is not dry yet by the method: if it was emptied, say so; the dry mass of {dry} g then stays as it is"
        )),
        None if mass < tare => {
            Err(format!("{mass} g is lighter than the empty container: read the code again or say what the mass is"))
        }
        None => Err(format!(
            "{mass} g lies between the empty container ({tare} g) and its dried soil ({dry} g): was soil lost, or is it another container? Say what the mass is"
        )),
    }
}

/// A finished container may be opened in a new determination.
fn new_use(held: &Held, before: &Before, otherwise: impl FnOnce() -> String) -> Result<Role, String> {
    if held.finished && before.wet_open { Ok(Role::Wet) } else { Err(otherwise()) }
}

#[cfg(test)]
mod tests {
    use super::*;

    fn g(grams: f64) -> Mass {
        Mass::from_ug(libm::round(grams * 1e6) as i64)
    }

    const NEAR: Mass = Mass::from_ug(50_000);

    fn empty(tare: Option<f64>, wet_open: bool) -> Before {
        Before { tare: tare.map(g), lid: None, held: None, wet_open }
    }

    fn held(tare: Option<f64>, wet: f64, dry: Option<f64>, kind: Kind) -> Before {
        let held = Held {
            kind,
            wet: g(wet),
            dry: dry.map(g),
            finished: dry.is_some(),
            set_aside: false,
            been_in_oven: false,
            oven_recorded: false,
            dried_on: false,
        };
        Before { tare: tare.map(g), lid: None, held: Some(held), wet_open: false }
    }

    #[test]
    fn every_row_of_the_table() {
        use Role::*;
        let liquid = Kind::Liquid;
        let rows: &[(&str, Before, f64, Option<Role>)] = &[
            ("unknown tare, slice owed", empty(None, true), 38.22, Some(Wet)),
            ("unknown tare, otherwise", empty(None, false), 21.43, Some(Tare)),
            ("empty, near tare", empty(Some(21.43), true), 21.45, Some(TareCheck)),
            ("empty, heavier, slice owed", empty(Some(21.43), true), 38.22, Some(Wet)),
            ("empty, heavier, nothing owed", empty(Some(21.43), false), 38.22, None),
            ("empty, lighter", empty(Some(21.43), true), 20.00, None),
            ("wet, near wet", held(Some(21.43), 38.22, None, liquid), 38.20, Some(Repeat)),
            ("wet threads, heavier", held(Some(21.43), 25.00, None, Kind::Thread), 28.00, Some(Grown)),
            ("wet slice, heavier", held(Some(21.43), 25.00, None, liquid), 28.00, None),
            ("wet, between", held(Some(21.43), 38.22, None, liquid), 33.39, Some(Dry)),
            ("wet, between, tare owed", held(None, 38.22, None, liquid), 33.39, Some(Dry)),
            ("wet, like empty", held(Some(21.43), 38.22, None, liquid), 21.44, None),
            ("wet, lighter than empty", held(Some(21.43), 38.22, None, liquid), 20.00, None),
            ("dry, near dry", held(Some(21.43), 38.22, Some(33.39), liquid), 33.40, Some(FurtherDry)),
            ("dry, loses a little more", held(Some(21.43), 38.22, Some(33.99), liquid), 33.39, Some(FurtherDry)),
            ("dry, near tare", held(Some(21.43), 38.22, Some(33.39), liquid), 21.43, Some(Emptied)),
            ("dry, near nothing", held(Some(21.43), 38.22, Some(33.39), liquid), 27.00, None),
            ("dry, heavier", held(Some(21.43), 38.22, Some(33.39), liquid), 35.00, None),
            ("dry, tare owed, lighter", held(None, 38.22, Some(33.39), liquid), 21.43, Some(Tare)),
        ];
        for (name, before, mass, want) in rows {
            assert_eq!(role(before, g(*mass), NEAR).ok(), *want, "{name}");
        }
    }

    #[test]
    fn a_registered_lid_is_recognised() {
        let mut before = empty(Some(21.43), false);
        assert!(role(&before, g(26.63), NEAR).is_err());
        before.lid = Some(g(5.20));
        assert_eq!(role(&before, g(26.63), NEAR), Ok(Role::TareWithLid));
    }

    #[test]
    fn a_container_not_dried_by_the_method_is_not_emptied_silently() {
        let mut before = held(Some(21.43), 38.22, Some(33.39), Kind::Liquid);
        before.held.as_mut().unwrap().finished = false;
        assert!(role(&before, g(21.43), NEAR).is_err());
    }

    #[test]
    fn a_finished_container_may_be_opened_again() {
        let mut before = held(Some(21.43), 38.22, Some(33.39), Kind::Liquid);
        assert!(role(&before, g(40.0), NEAR).is_err());
        before.wet_open = true;
        assert_eq!(role(&before, g(40.0), NEAR), Ok(Role::Wet));
        before.held.as_mut().unwrap().finished = false;
        assert!(role(&before, g(40.0), NEAR).is_err());
    }

    #[test]
    fn a_mass_like_the_wet_one_is_dry_only_when_the_oven_was_recorded() {
        let mut before = held(Some(21.43), 25.00, None, Kind::Natural);
        let near_wet = |before: &Before| role(before, g(24.97), NEAR);
        assert_eq!(near_wet(&before), Ok(Role::Repeat));
        before.held.as_mut().unwrap().been_in_oven = true;
        assert!(near_wet(&before).unwrap_err().contains("nobody recorded the oven"));
        before.held.as_mut().unwrap().oven_recorded = true;
        assert_eq!(near_wet(&before), Ok(Role::Dry));
    }

    #[test]
    fn a_container_whose_trial_was_set_aside_is_free() {
        let mut before = held(Some(21.43), 38.22, None, Kind::Liquid);
        let set = before.held.as_mut().unwrap();
        (set.set_aside, set.finished) = (true, true);
        assert_eq!(role(&before, g(21.43), NEAR), Ok(Role::Emptied));
        assert_eq!(role(&before, g(33.39), NEAR), Ok(Role::Dry), "its soil may still be dried and weighed");
        before.wet_open = true;
        assert_eq!(role(&before, g(33.39), NEAR), Ok(Role::Wet));
        assert_eq!(role(&before, g(39.00), NEAR), Ok(Role::Wet));
        before.held.as_mut().unwrap().been_in_oven = true;
        assert!(role(&before, g(33.39), NEAR).is_err(), "dry or wet: a person says");
    }

    #[test]
    fn dried_soil_that_changed_a_little_never_opens_a_new_determination() {
        let mut before = held(Some(21.43), 38.22, Some(33.39), Kind::Liquid);
        before.wet_open = true;
        for mass in [33.30, 33.50, 34.50] {
            assert!(role(&before, g(mass), NEAR).is_err(), "{mass}");
        }
    }

    #[test]
    fn soil_weighed_too_early_may_lose_much_once_it_was_back_in_the_oven() {
        let mut before = held(Some(21.43), 38.22, Some(37.90), Kind::Liquid);
        before.held.as_mut().unwrap().finished = false;
        assert!(role(&before, g(33.39), NEAR).is_err(), "it was not back in the oven: another container?");
        before.held.as_mut().unwrap().dried_on = true;
        assert_eq!(role(&before, g(33.39), NEAR), Ok(Role::FurtherDry));
        assert!(role(&before, g(21.44), NEAR).is_err() && role(&before, g(20.00), NEAR).is_err());
    }

    #[test]
    fn threads_in_the_oven_do_not_grow() {
        let mut before = held(Some(21.43), 25.00, None, Kind::Thread);
        before.held.as_mut().unwrap().been_in_oven = true;
        assert_eq!(role(&before, g(28.0), NEAR), Ok(Role::Grown), "hours later, but nobody says that it was dried");
        before.held.as_mut().unwrap().oven_recorded = true;
        assert!(role(&before, g(28.0), NEAR).is_err());
    }
}
