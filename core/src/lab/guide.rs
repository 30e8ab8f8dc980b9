//! What comes next at a bench: one sentence, one action, and the caution that belongs to it.

use super::Lab;
use super::advice::{Fit, Wish, ranges_text};
use super::entities::{Bench, Hand, LooseWhat, Owed, Standing};
use super::role::Role;
use crate::fact::Intention;
use crate::names::{BenchName, ContainerId, SpecimenId};
use crate::quantity::Mass;
use crate::sheet::{Kind, Seq};
use crate::stamp::Stamp;
use alloc::format;
use alloc::string::String;
use serde::Serialize;

/// What comes next.
#[derive(Clone, Debug, PartialEq, Serialize)]
pub struct Guide {
    /// One sentence for the person at the bench.
    pub next: String,
    /// It needs a person now: something was refused, loose, out of the windows, weighed too early, or owed for long.
    pub urgent: bool,
    /// What may hurt in this step.
    pub caution: Option<Caution>,
    /// The one thing to do now.
    pub action: Option<ActionHint>,
    /// Since when this is the next step.
    pub since: Option<Stamp>,
    /// What was recorded here last.
    pub recorded: Option<JustRecorded>,
    /// Why the latest code, weighing or count could not be used.
    pub refused: Option<String>,
}

/// What may hurt.
#[derive(Clone, Copy, Debug, PartialEq, Eq, Serialize)]
pub struct Caution {
    /// What.
    pub about: Hazard,
    /// In words.
    pub says: &'static str,
}

/// What may hurt.
#[derive(Clone, Copy, Debug, PartialEq, Eq, Serialize)]
#[serde(rename_all = "snake_case")]
pub enum Hazard {
    /// Ovens and containers at 110 °C.
    Burn,
    /// Dust of dry soil.
    Dust,
    /// The motorised cam of the cup.
    Cam,
}

/// The one thing to do now.
#[derive(Clone, Debug, PartialEq, Eq, Serialize)]
#[serde(tag = "do", rename_all = "snake_case")]
#[allow(missing_docs)]
pub enum ActionHint {
    /// Read a specimen's or container's code.
    ReadCode,
    /// Read the code of the container that gets the soil.
    ReadContainer { specimen: SpecimenId },
    /// Put the container in hand on the pan.
    PutOn { container: ContainerId },
    /// Take it off the pan.
    TakeOff { container: ContainerId },
    /// Let the cone fall and enter its penetration.
    ReadPenetration { specimen: SpecimenId },
    /// Cut the groove and start the cup.
    StartCup { specimen: SpecimenId },
    /// Take a slice and weigh it wet.
    TakeSlice { specimen: SpecimenId, drops: u32 },
    /// Add water to the paste, or let it dry by mixing; then count again.
    ChangeWater { specimen: SpecimenId, drops: u32, add: bool },
    /// Roll threads and weigh them.
    RollThreads { specimen: SpecimenId },
    /// Say what a loose weighing is of.
    SayWeighing { weighing: Seq },
    /// Say which specimen a loose count belongs to.
    SayCount { count: Seq },
    /// Put the container back in the oven, or answer that it is dry.
    BackIntoOven { container: ContainerId, specimen: SpecimenId, about: String },
}

/// What was recorded last at a bench.
#[derive(Clone, Debug, PartialEq, Eq, Serialize)]
pub struct JustRecorded {
    /// The fact.
    pub seq: Seq,
    /// The mass, of a weighing.
    #[serde(rename = "mass_ug")]
    pub mass: Option<Mass>,
    /// The drops, of a count.
    pub drops: Option<u32>,
    /// The container.
    pub container: Option<ContainerId>,
    /// What the mass is of.
    pub role: Option<Role>,
    /// The specimen of a count.
    pub specimen: Option<SpecimenId>,
    /// Why it is loose.
    pub loose: Option<String>,
    /// When.
    pub at: Stamp,
}

/// Cautions, where they matter.
const BURN: Caution = Caution {
    about: Hazard::Burn,
    says: "Oven and containers at 110 °C burn: use tongs, cool with the lid on, weigh only what is cool.",
};
const DUST: Caution = Caution {
    about: Hazard::Dust,
    says: "Dust of dry soil can carry silica or asbestos: empty it without raising dust; contaminated soil has rules of its own.",
};
const CAM: Caution = Caution { about: Hazard::Cam, says: "Keep fingers and sleeves from the cam while the motor turns." };

/// A container weighed dry before the method's time.
pub(super) struct Early {
    pub container: ContainerId,
    pub specimen: SpecimenId,
    pub about: String,
    pub hours: f64,
    pub wanted: f64,
    pub again: f64,
    pub recorded: bool,
}

impl Lab {
    /// What comes next at a bench.
    pub fn guide(&self, bench: &BenchName) -> Option<Guide> {
        let bench = self.benches.get(bench)?;
        let step = self.step(bench);
        let heard = (bench.active != Stamp::default()).then_some(bench.active);
        Some(Guide { recorded: self.just_recorded(bench), refused: bench.refusal.clone(), since: step.since.or(heard), ..step })
    }

    fn step(&self, bench: &Bench) -> Guide {
        if let Some(refusal) = &bench.refusal {
            let action = self.say_loose(bench);
            return Guide { urgent: true, ..plain(refusal.clone(), action, None) };
        }
        if let Some(early) = self.early_here(bench) {
            return early_step(&early);
        }
        if let Some(hand) = &bench.hand {
            return self.hand_next(bench, hand);
        }
        if let Some(owed) = &bench.owed {
            return self.slice_next(bench, owed);
        }
        let Some(work) = &bench.intention else {
            let next = String::from("Read a specimen's code to begin, or a container's code to weigh it");
            return plain(next, Some(ActionHint::ReadCode), None);
        };
        let specimen = work.specimen.clone();
        match work.intention {
            Intention::Liquid => self.liquid_next(&bench.name, &specimen),
            Intention::Plastic => {
                let next =
                    format!("Plastic limit of {specimen}: roll threads, read a container's code and weigh it with the threads");
                plain(next, Some(ActionHint::RollThreads { specimen }), None)
            }
            Intention::Natural => {
                let next = format!("Natural water content of {specimen}: read a container's code and weigh it wet");
                plain(next, Some(ActionHint::ReadContainer { specimen }), None)
            }
        }
    }

    /// What a refusal is about, when it is a loose thing of this bench.
    fn say_loose(&self, bench: &Bench) -> Option<ActionHint> {
        let latest = bench.latest.as_ref().filter(|l| l.loose.is_some() && l.loose == bench.refusal);
        if let Some(latest) = latest {
            return Some(ActionHint::SayWeighing { weighing: latest.seq });
        }
        let here = |l: &&super::entities::Loose| {
            matches!(l.what, LooseWhat::Count(_))
                && l.bench.as_ref() == Some(&bench.name)
                && Some(&l.why) == bench.refusal.as_ref()
        };
        self.loose.values().rev().find(here).map(|l| ActionHint::SayCount { count: l.seq })
    }

    fn slice_next(&self, bench: &Bench, owed: &Owed) -> Guide {
        let (drops, specimen) = (owed.drops, owed.specimen.clone());
        if let Some(mm) = owed.penetration_mm {
            let next = format!("{mm} mm of penetration for {specimen}: take a slice, read its container's code and weigh it wet");
            let action = ActionHint::TakeSlice { specimen, drops };
            return Guide { urgent: owed.said, ..plain(next, Some(action), Some(owed.ended)) };
        }
        let advice = self.advice(&bench.name, &Wish::default());
        let fit = advice.as_ref().and_then(|a| a.count.as_ref()).map(|c| c.fit);
        let range = self.method_of(&specimen).map_or([1, u32::MAX], |m| m.liquid.drops);
        let out = |says: String, add: bool| {
            let action = ActionHint::ChangeWater { specimen: specimen.clone(), drops, add };
            Guide { urgent: true, ..plain(says, Some(action), Some(owed.ended)) }
        };
        match fit {
            Some(Fit::TooMany) => out(
                format!(
                    "{drops} drops for {specimen} are too many, the method permits {} to {}: add water, mix well and count again",
                    range[0], range[1]
                ),
                true,
            ),
            Some(Fit::TooFew) => out(
                format!(
                    "{drops} drops for {specimen} are too few, the method permits {} to {}: let the paste dry by mixing, never add dry soil, and count again",
                    range[0], range[1]
                ),
                false,
            ),
            _ => {
                let spare = if fit == Some(Fit::Spare) { " (it fills no window that still wants a trial)" } else { "" };
                let next =
                    format!("{drops} drops for {specimen}{spare}: take a slice, read its container's code and weigh it wet");
                let action = ActionHint::TakeSlice { specimen: specimen.clone(), drops };
                Guide { urgent: owed.said, ..plain(next, Some(action), Some(owed.ended)) }
            }
        }
    }

    fn liquid_next(&self, bench: &BenchName, specimen: &SpecimenId) -> Guide {
        if self.method_of(specimen).is_some_and(|m| m.limit_kind() == Kind::Cone) {
            return self.cone_next(specimen);
        }
        let advice = self.advice(bench, &Wish::default());
        let (done, wanted) = advice.as_ref().map_or_else(|| self.begun(specimen), |a| (a.trials, a.trials_wanted));
        let open = advice.map(|a| ranges_text(&a.wanted_drops)).filter(|t| !t.is_empty());
        let windows = open.as_ref().filter(|_| done > 0).map_or(String::new(), |w| format!("; drops still wanted: {w}"));
        let next = match done < wanted || (wanted > 0 && open.is_some()) {
            true if done < wanted => {
                format!("Liquid limit of {specimen}, trial {} of {wanted}: cut the groove and start the cup{windows}", done + 1)
            }
            true => format!("Liquid limit of {specimen}: {done} trials are in{windows}; count another"),
            false => format!("Liquid limit of {specimen}: {done} trials are in; go on to the plastic limit, or count another"),
        };
        Guide { caution: Some(CAM), ..plain(next, Some(ActionHint::StartCup { specimen: specimen.clone() }), None) }
    }

    fn cone_next(&self, specimen: &SpecimenId) -> Guide {
        let (done, wanted) = self.begun(specimen);
        let next = match done < wanted {
            true => {
                format!("Liquid limit of {specimen}, trial {} of {wanted}: let the cone fall and enter its penetration", done + 1)
            }
            false => {
                format!("Liquid limit of {specimen}: {done} trials are in; go on to the plastic limit, or let it fall again")
            }
        };
        plain(next, Some(ActionHint::ReadPenetration { specimen: specimen.clone() }), None)
    }

    /// Trials of the liquid limit begun, and wanted, where no drops are advised on.
    fn begun(&self, specimen: &SpecimenId) -> (u32, u32) {
        let trials = self.specimens.get(specimen).into_iter().flat_map(|s| &s.trials);
        let of_limit = trials.filter(|t| !matches!(t.kind, Kind::Thread | Kind::Natural) && t.set_aside.is_none());
        (of_limit.count() as u32, self.method_of(specimen).map_or(0, |m| m.liquid.trials))
    }

    fn hand_next(&self, bench: &Bench, hand: &Hand) -> Guide {
        let id = &hand.container;
        if hand.weighing.is_some() {
            let next = format!("{id} is recorded: take it off the pan");
            return plain(next, Some(ActionHint::TakeOff { container: id.clone() }), Some(hand.since));
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
        let caution = match (standing, opens) {
            (Standing::InOven | Standing::Drying, _) => Some(BURN),
            (Standing::Dry, false) => Some(DUST),
            _ => None,
        };
        let instead = hand.instead_of.as_ref().map_or(String::new(), |other| format!(" instead of {other}, which got no mass"));
        let next = format!("Container {id} is in hand{instead}: put it on the pan, {how}");
        Guide { caution, ..plain(next, Some(ActionHint::PutOn { container: id.clone() }), Some(hand.since)) }
    }

    fn gathers_threads(&self, id: &ContainerId) -> bool {
        let holding = self.containers.get(id).and_then(|c| c.holding.as_ref());
        holding.is_some_and(|h| h.trial.kind == Kind::Thread && !h.oven.recorded)
    }

    /// The latest weighing of the bench is a dry one before the method's time, and nobody has answered it yet.
    fn early_here(&self, bench: &Bench) -> Option<Early> {
        let latest = bench.latest.as_ref().filter(|l| matches!(l.role, Some(Role::Dry | Role::FurtherDry)))?;
        let other_in_hand = bench.hand.as_ref().is_some_and(|h| Some(&h.container) != latest.container.as_ref());
        if other_in_hand {
            return None;
        }
        self.early(latest.container.as_ref()?, latest.seq)
    }

    fn just_recorded(&self, bench: &Bench) -> Option<JustRecorded> {
        let weighing = bench.latest.as_ref().map(|l| JustRecorded {
            seq: l.seq,
            mass: Some(l.mass),
            drops: None,
            container: l.container.clone(),
            role: l.role,
            specimen: None,
            loose: l.loose.clone(),
            at: l.at,
        });
        let count = bench.owed.as_ref().and_then(|o| o.counts.last().map(|&seq| (seq, o))).map(|(seq, o)| JustRecorded {
            seq,
            mass: None,
            drops: Some(o.drops),
            container: None,
            role: None,
            specimen: Some(o.specimen.clone()),
            loose: None,
            at: o.ended,
        });
        match (weighing, count) {
            (Some(w), Some(c)) => Some(if w.seq > c.seq { w } else { c }),
            (w, c) => w.or(c),
        }
    }
}

fn plain(next: String, action: Option<ActionHint>, since: Option<Stamp>) -> Guide {
    Guide { next, urgent: false, caution: None, action, since, recorded: None, refused: None }
}

fn early_step(early: &Early) -> Guide {
    let Early { container, specimen, about, hours, wanted, again, recorded } = early;
    let clock = if *recorded { "in the oven only" } else { "weighed wet only" };
    let ago = if *recorded { "" } else { " ago" };
    let next = format!(
        "{container} was {clock} {hours:.1} h{ago}, and the method asks for {wanted} h or for a constant mass after {again} h more: put it back, or say that it is dry by answering the check; if it is another container, take the weighing back"
    );
    let action = ActionHint::BackIntoOven { container: container.clone(), specimen: specimen.clone(), about: about.clone() };
    Guide { urgent: true, caution: Some(BURN), ..plain(next, Some(action), None) }
}
