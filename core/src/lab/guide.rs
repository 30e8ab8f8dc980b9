//! What comes next at a bench, in one sentence.

use super::Lab;
use super::entities::{Bench, Hand, Standing};
use crate::fact::Intention;
use crate::names::{BenchName, ContainerId};
use crate::sheet::Kind;
use alloc::format;
use alloc::string::String;
use serde::Serialize;

/// What comes next.
#[derive(Clone, Debug, PartialEq, Eq, Serialize)]
pub struct Guide {
    /// One sentence for the person at the bench.
    pub next: String,
    /// It needs a person now: something was refused, loose, or owed for long.
    pub urgent: bool,
}

impl Lab {
    /// What comes next at a bench.
    pub fn guide(&self, bench: &BenchName) -> Option<Guide> {
        let bench = self.benches.get(bench)?;
        let say = |next: String| Some(Guide { next, urgent: false });
        if let Some(refusal) = &bench.refusal {
            return Some(Guide { next: refusal.clone(), urgent: true });
        }
        if let Some(hand) = &bench.hand {
            return say(self.hand_next(bench, hand));
        }
        if let Some(owed) = &bench.owed {
            let found =
                owed.penetration_mm.map_or_else(|| format!("{} drops", owed.drops), |mm| format!("{mm} mm of penetration"));
            let next = format!("{found} for {}: take a slice, read its container's code and weigh it wet", owed.specimen);
            return Some(Guide { next, urgent: owed.said });
        }
        let Some(work) = &bench.intention else {
            return say(String::from("Read a specimen's code to begin, or a container's code to weigh it"));
        };
        let specimen = &work.specimen;
        say(match work.intention {
            Intention::Liquid => self.liquid_next(specimen),
            Intention::Plastic => {
                format!("Plastic limit of {specimen}: roll threads, read a container's code and weigh it with the threads")
            }
            Intention::Natural => format!("Natural water content of {specimen}: read a container's code and weigh it wet"),
        })
    }

    fn liquid_next(&self, specimen: &crate::names::SpecimenId) -> String {
        let method = self.specimens.get(specimen).and_then(|s| self.setup.methods.get(&s.method));
        let kind = method.map_or(Kind::Liquid, |m| m.limit_kind());
        let done = self
            .specimens
            .get(specimen)
            .map_or(0, |s| s.trials.iter().filter(|t| t.kind == kind && t.set_aside.is_none()).count());
        let wanted = method.map_or(0, |m| m.liquid.trials as usize);
        match done < wanted {
            true if kind == Kind::Cone => {
                format!("Liquid limit of {specimen}, trial {} of {wanted}: let the cone fall and enter its penetration", done + 1)
            }
            true => format!("Liquid limit of {specimen}, trial {} of {wanted}: cut the groove and start the cup", done + 1),
            false => format!("Liquid limit of {specimen}: {done} trials are in; go on to the plastic limit, or count another"),
        }
    }

    fn hand_next(&self, bench: &Bench, hand: &Hand) -> String {
        let id = &hand.container;
        if hand.weighing.is_some() {
            return format!("{id} is recorded: take it off the pan");
        }
        let standing = self.containers.get(id).map_or(Standing::Unknown, |c| c.standing);
        let opens = bench.owed.is_some() || bench.intention.as_ref().is_some_and(|w| w.intention != Intention::Liquid);
        let what = if bench.owed.is_some() { "the slice" } else { "the soil" };
        let how = match (standing, opens) {
            (Standing::Wet, _) if self.gathers_threads(id) => String::from("with more threads, or dried"),
            (Standing::Wet | Standing::InOven, _) => String::from("with its dried soil"),
            (Standing::Drying, _) => String::from("dried again"),
            (Standing::Dry, false) => String::from("dried again, or emptied"),
            (Standing::Unknown, true) => format!("with {what} (its empty mass is not known: weigh it empty afterwards)"),
            (Standing::Dry | Standing::Free, true) => format!("with {what}"),
            (Standing::Unknown | Standing::Free, false) => String::from("empty"),
        };
        let instead = hand.instead_of.as_ref().map_or(String::new(), |other| format!(" instead of {other}, which got no mass"));
        format!("Container {id} is in hand{instead}: put it on the pan, {how}")
    }

    fn gathers_threads(&self, id: &ContainerId) -> bool {
        let holding = self.containers.get(id).and_then(|c| c.holding.as_ref());
        holding.is_some_and(|h| h.trial.kind == Kind::Thread && !h.oven.recorded)
    }
}
