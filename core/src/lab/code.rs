//! A code was read: a card, a specimen, or a container.

use super::ask::Ask;
use super::entities::{Bench, Loose, LooseWhat, Pan};
use super::{Lab, New};
use crate::fact::{Fact, Intention, Limit};
use crate::names::{BenchName, ContainerId, InstrumentName, Operator, SpecimenId};
use crate::near::meant;
use crate::sense::InputNo;
use crate::stamp::Stamp;
use alloc::format;
use alloc::string::String;
use alloc::vec;
use alloc::vec::Vec;

/// Every card that stands for an ask, with what it does in plain words. That of
/// `+by-` ends with somebody's initials.
pub const CARDS: [(&str, &str); 14] = [
    ("+liquid", "this bench works on the liquid limit"),
    ("+plastic", "this bench works on the plastic limit"),
    ("+natural", "this bench works on the natural water content"),
    ("+nothing", "this bench works on nothing in particular"),
    ("+new-paste", "new paste: no slice was taken of the counts so far"),
    ("+slid", "the soil slid in the groove: the count does not stand"),
    ("+tore", "the groove tore: the count does not stand"),
    ("+undo", "takes back the latest weighing or count"),
    ("+oven-in", "the container just read goes into the oven"),
    ("+oven-out", "the container just read comes out of the oven"),
    ("+no-liquid-limit", "the liquid limit of this specimen is not obtainable"),
    ("+no-plastic-limit", "the plastic limit of this specimen is not obtainable"),
    ("+by-", "signs in"),
    ("+sign-out", "signs out"),
];

impl Lab {
    /// ` (did you mean …?)` for the container nearest to what was written.
    pub(super) fn container_meant(&self, written: &ContainerId) -> String {
        match self.containers.contains_key(written) {
            true => String::new(),
            false => meant(written.as_str(), self.containers.keys().map(ContainerId::as_str)),
        }
    }

    pub(super) fn code_read(&self, scanner: &InstrumentName, text: &str, at: &Stamp, input: InputNo) -> Vec<New> {
        let benches = self.benches_of(scanner);
        let Some((first, others)) = benches.split_first() else { return vec![] };
        let facts = self.code_at(first, others, text, at).unwrap_or_else(|says| vec![self.refused(first, says)]);
        facts.into_iter().map(|f| f.through(input)).collect()
    }

    /// Somebody read a code and nothing usable came: the container that was in hand
    /// before is not the one in hand now.
    pub(super) fn code_unread(&self, scanner: &InstrumentName, input: InputNo) -> Vec<New> {
        let Some(bench) = self.benches_of(scanner).first() else { return vec![] };
        let waiting = self.benches.get(bench).and_then(|b| b.hand.as_ref()).is_some_and(|h| h.weighing.is_none());
        let emptied =
            || Fact::HandEmptied { bench: bench.clone(), why: String::from("another code was read and not understood") };
        let says = String::from("a code came that could not be understood: read it again");
        let facts =
            waiting.then(|| New::by(self.signed_in(Some(bench)), emptied())).into_iter().chain([self.refused(bench, says)]);
        facts.map(|f| f.through(input)).collect()
    }

    pub(super) fn refused(&self, bench: &BenchName, says: String) -> New {
        New::by(self.signed_in(Some(bench)), Fact::Refused { bench: bench.clone(), says })
    }

    /// What a code means at a bench.
    pub(super) fn code_at(&self, bench: &BenchName, or_at: &[BenchName], text: &str, at: &Stamp) -> Result<Vec<New>, String> {
        let text = text.trim();
        if let Some(card) = text.strip_prefix('+') {
            return self.card(bench, card, at);
        }
        if let Ok(specimen) = SpecimenId::new(text)
            && self.specimens.contains_key(&specimen)
        {
            let intention = self.benches.get(bench).and_then(|b| b.intention.as_ref()).map_or(Intention::Liquid, |w| w.intention);
            return Ok(self.intend(bench, &specimen, intention, None));
        }
        let container = ContainerId::new(text)
            .map_err(|e| format!("the code read as \"{}\" is no container: {}", printable(text), printable(&format!("{e}"))))?;
        self.container_read(bench, or_at, &container, at)
    }

    fn container_read(
        &self,
        bench: &BenchName,
        or_at: &[BenchName],
        container: &ContainerId,
        at: &Stamp,
    ) -> Result<Vec<New>, String> {
        let here = self.benches.get(bench).ok_or_else(|| format!("there is no bench {bench}"))?;
        let in_hand = || {
            let unused = here.hand.as_ref().filter(|h| h.weighing.is_none() && h.container != *container);
            let instead_of = unused.map(|h| h.container.clone());
            let (bench, container, or_at) = (bench.clone(), container.clone(), or_at.to_vec());
            New::by(here.signed_in.clone(), Fact::TakenInHand { bench, container, or_at, instead_of })
        };
        let places: Vec<BenchName> = [bench].into_iter().chain(or_at).cloned().collect();
        if let Some((balance, pan)) = self.loose_on_pan(&places, at) {
            let served = self.benches_of(balance);
            let places: Vec<BenchName> = places.into_iter().filter(|b| served.contains(b)).collect();
            return Ok(self.tie_late(bench, &places, container, pan, in_hand()));
        }
        // The same code again: nothing new, and it stays in hand.
        let same = here.hand.as_ref().is_some_and(|h| h.container == *container && h.or_at == or_at);
        Ok(if same { vec![] } else { vec![in_hand()] })
    }

    /// A loose weighing that still lies on a pan of these benches, or was printed just now.
    fn loose_on_pan(&self, places: &[BenchName], at: &Stamp) -> Option<(&InstrumentName, &Pan)> {
        let near = |balance: &InstrumentName| self.benches_of(balance).iter().any(|b| places.contains(b));
        let in_time = 0..=self.setup.linking.code_after_us;
        let waits = |p: &Pan| p.loose && self.loose.contains_key(&p.seq) && (!p.printed || in_time.contains(&at.since(&p.at).us));
        let pans = self.instruments.iter().filter_map(|(balance, i)| i.pan.as_ref().map(|p| (balance, p)));
        pans.filter(|(balance, p)| near(balance) && waits(p)).max_by_key(|(_, p)| p.seq)
    }

    /// The code came after the mass.
    fn tie_late(&self, bench: &BenchName, places: &[BenchName], container: &ContainerId, pan: &Pan, in_hand: New) -> Vec<New> {
        let (weighing, here) = (pan.seq, places.first().unwrap_or(bench));
        let Some(Loose { what: LooseWhat::Weighing { weighing: w, basis }, .. }) = self.loose.get(&weighing) else {
            return vec![in_hand];
        };
        match self.link(places, container, w.mass, *basis, &w.at) {
            Ok(link) => {
                let fact = self.tied(weighing, link, here, String::from("the code was read after the mass"));
                let mut facts = vec![in_hand, New::by(self.signed_in(Some(here)), fact)];
                if pan.printed {
                    let why = String::from("its mass was printed");
                    facts.push(New::plain(Fact::HandEmptied { bench: bench.clone(), why }));
                }
                facts
            }
            Err(says) => vec![in_hand, self.refused(bench, says)],
        }
    }

    fn card(&self, bench: &BenchName, card: &str, at: &Stamp) -> Result<Vec<New>, String> {
        let current = self.benches.get(bench).and_then(|b| b.intention.as_ref()).map(|w| w.specimen.clone());
        let intend = |intention| match &current {
            Some(specimen) => Ok(self.intend(bench, specimen, intention, None)),
            None => Err(no_specimen()),
        };
        let who = self.signed_in(Some(bench));
        let ask = match card {
            "liquid" => return intend(Intention::Liquid),
            "plastic" => return intend(Intention::Plastic),
            "natural" => return intend(Intention::Natural),
            "nothing" => Ask::IntendNothing { bench: bench.clone(), who },
            "undo" => Ask::Undo { bench: bench.clone(), who, why: None },
            "slid" => Ask::Slid { bench: bench.clone(), who, why: None },
            "tore" => Ask::GrooveTore { bench: bench.clone(), who, why: None },
            "new-paste" => Ask::NewPaste { bench: bench.clone(), who, why: None },
            "sign-out" => Ask::SignOut { bench: bench.clone() },
            "oven-in" | "oven-out" => return self.oven_card(bench, card == "oven-in", who, at),
            "no-liquid-limit" | "no-plastic-limit" => {
                let specimen = current.ok_or_else(no_specimen)?;
                let limit = if card == "no-liquid-limit" { Limit::Liquid } else { Limit::Plastic };
                Ask::NotObtainable { specimen, limit, because: String::from("said by its card"), who }
            }
            other => match other.strip_prefix("by-").map(Operator::new) {
                Some(Ok(operator)) => Ask::SignIn { bench: bench.clone(), operator },
                _ => {
                    return Err(format!(
                        "no card is called \"+{}\": the cards are {} and +by-INITIALS",
                        printable(other),
                        CARDS
                            .map(|(card, _)| card)
                            .into_iter()
                            .filter(|card| !card.ends_with('-'))
                            .collect::<Vec<_>>()
                            .join(", ")
                    ));
                }
            },
        };
        self.asked(ask, at).map_err(|r| r.0)
    }

    /// The container in hand goes into the oven or comes out, and is in hand no longer.
    fn oven_card(&self, bench: &BenchName, inside: bool, who: Option<Operator>, at: &Stamp) -> Result<Vec<New>, String> {
        let hand = self.benches.get(bench).and_then(|b| b.hand.as_ref());
        let Some(hand) = hand else {
            return Err(String::from("no container is in hand here: read its code first, then the card of the oven"));
        };
        let containers = vec![hand.container.clone()];
        let (ask, why) = match inside {
            true => (Ask::IntoOven { containers, celsius: None, who: who.clone() }, "it went into the oven"),
            false => (Ask::OutOfOven { containers, who: who.clone() }, "it came out of the oven"),
        };
        let mut facts = self.asked(ask, at).map_err(|r| r.0)?;
        // What lies on the pan leaves the hand when it is taken off.
        if hand.weighing.is_none() {
            facts.push(New::by(who, Fact::HandEmptied { bench: bench.clone(), why: String::from(why) }));
        }
        Ok(facts)
    }

    pub(super) fn intend(
        &self,
        bench: &BenchName,
        specimen: &SpecimenId,
        intention: Intention,
        who: Option<Operator>,
    ) -> Vec<New> {
        let same = |b: &Bench| b.intention.as_ref().is_some_and(|w| w.specimen == *specimen && w.intention == intention);
        if self.benches.get(bench).is_some_and(same) {
            return vec![];
        }
        let who = who.or_else(|| self.signed_in(Some(bench)));
        vec![New::by(who, Fact::IntentionSet { bench: bench.clone(), specimen: specimen.clone(), intention })]
    }
}

fn no_specimen() -> String {
    String::from("no specimen is in work here: read the specimen's code first")
}

/// A text that may hold anything, made fit to be shown.
fn printable(text: &str) -> String {
    text.chars().take(100).map(|c| if c.is_ascii_graphic() || c == ' ' { c } else { '?' }).collect()
}
