//! A mass was taken: whose is it?

use super::entities::{Hand, LooseWhat, Specimen, Weighing};
use super::{Lab, New};
use crate::fact::{Fact, Link, Weighed};
use crate::names::{BenchName, InstrumentName};
use crate::sense::{InputNo, LeftOnPan, MassTaken, Stayed};
use crate::sheet::Seq;
use crate::stamp::Stamp;
use alloc::format;
use alloc::string::String;
use alloc::vec;
use alloc::vec::Vec;

/// A drift over less time tells nothing (common practice, no source).
const WATCHED_MS: u32 = 3_000;

/// A container in hand whose mass a balance may take.
struct Reach<'a> {
    /// Where it is in hand.
    bench: &'a BenchName,
    hand: &'a Hand,
    /// Benches the mass may be for: more than one only when the scanner is shared.
    places: Vec<BenchName>,
}

impl Lab {
    pub(super) fn mass_taken(&self, balance: &InstrumentName, taken: MassTaken) -> Vec<New> {
        if let Some(weighing) = self.repeated_slip(balance, &taken) {
            return vec![New::plain(Fact::SlipRepeated { weighing, input: taken.input }).through(taken.input)];
        }
        if self.check_waits(balance, &taken.at) {
            let why = String::from("it is the check of the balance with a reference mass");
            return vec![self.weighed(balance, taken, self.only_bench(balance), Err(why))];
        }
        let reach = self.hands_at(balance);
        let (bench, link) = match reach.as_slice() {
            [] => (
                self.only_bench(balance),
                Err(String::from(
                    "no container is in hand: read the code of the container on the pan, or tie the weighing later",
                )),
            ),
            [one] => (one.places.first().cloned(), self.link_hand(one, &taken)),
            several => (None, Err(several_hands(several))),
        };
        let hand_at = match reach.as_slice() {
            [one] => Some(one.bench.clone()),
            _ => None,
        };
        let printed_link = taken.printed && link.is_ok();
        let mut facts = vec![self.weighed(balance, taken, bench, link)];
        if let Some(bench) = hand_at.filter(|_| printed_link) {
            // A balance with a print key cannot show an empty pan: one code, one weighing.
            let why = String::from("its mass was printed");
            facts.push(New::plain(Fact::HandEmptied { bench, why }).through(taken.input));
        }
        facts
    }

    fn weighed(&self, balance: &InstrumentName, taken: MassTaken, bench: Option<BenchName>, link: Result<Link, String>) -> New {
        let who = self.signed_in(bench.as_ref());
        let (link, loose) = match link {
            Ok(link) => (Some(link), None),
            Err(why) => (None, Some(why)),
        };
        // Whoever shares the balance sees the loose mass and can say whose it is.
        let others = self.benches_of(balance).iter().filter(|b| link.is_none() && Some(*b) != bench.as_ref());
        let or_at = others.cloned().collect();
        let (mass_ug, balance, input) = (taken.mass, Some(balance.clone()), taken.input);
        let weighed = Weighed { mass_ug, bench, or_at, balance, taken: Some(taken), link, loose };
        New::by(who, Fact::Weighed(weighed)).through(input)
    }

    /// The pan is empty: containers that got their mass leave the hand, and a
    /// loose mass is no longer what a code is read for.
    pub(super) fn unloaded(&self, balance: &InstrumentName, input: InputNo) -> Vec<New> {
        let pan = self.instruments.get(balance).and_then(|i| i.pan.as_ref()).filter(|p| !p.printed);
        let done = |r: &Reach| {
            // A code that was read for the mass on the pan, in vain, is used up as well.
            r.hand.weighing.is_some() || pan.is_some_and(|p| self.benches.get(r.bench).and_then(|b| b.code) > Some(p.seq))
        };
        let emptied = |r: Reach| {
            let why = String::from("the pan is empty again");
            New::plain(Fact::HandEmptied { bench: r.bench.clone(), why }).through(input)
        };
        let mut facts: Vec<New> = self.hands_at(balance).into_iter().filter(done).map(emptied).collect();
        if pan.is_some() {
            facts.push(New::plain(Fact::PanCleared { balance: balance.clone() }).through(input));
        }
        facts
    }

    /// A drift is told when it was watched for a while and is more than two steps of the
    /// balance: less can be the display alone.
    pub(super) fn pan_watched(&self, balance: InstrumentName, stayed: &Stayed, input: InputNo) -> Vec<New> {
        let Stayed { taken_at, step, watched_ms, drift_ug_per_s, .. } = *stayed;
        let change = drift_ug_per_s.unsigned_abs().saturating_mul(u64::from(watched_ms)) / 1_000;
        let told = watched_ms >= WATCHED_MS && change >= step.ug().unsigned_abs().saturating_mul(2).max(1);
        let weighing = self.taken_at(&balance, &taken_at).filter(|_| told);
        let fact = |weighing| Fact::PanWatched { balance, weighing, drift_ug_per_s, watched_ms };
        weighing.map(|w| New::plain(fact(w)).through(input)).into_iter().collect()
    }

    pub(super) fn left_on_pan(&self, balance: InstrumentName, seen: &LeftOnPan) -> Vec<New> {
        let weighing = self.taken_at(&balance, &seen.taken_at);
        let fact = |weighing| Fact::LeftOnPan { balance, weighing, left: seen.left };
        weighing.map(|w| New::plain(fact(w)).through(seen.zero.input)).into_iter().collect()
    }

    /// The weighing that a balance took at a moment, wherever it stands.
    fn taken_at(&self, balance: &InstrumentName, at: &Stamp) -> Option<Seq> {
        let here = |w: &&Weighing| w.at == *at && w.balance.as_ref() == Some(balance);
        let loose = self.loose.values().rev().filter_map(|l| match &l.what {
            LooseWhat::Weighing { weighing, .. } => Some(weighing),
            LooseWhat::Count(_) => None,
        });
        let of_containers = self.containers.values().flat_map(|c| c.tares.iter().chain(&c.with_lid));
        let of_trials = self.specimens.values().flat_map(Specimen::weighings);
        loose.chain(of_containers).chain(of_trials).find(here).map(|w| w.seq)
    }

    /// The weighing of which this slip is a second print.
    fn repeated_slip(&self, balance: &InstrumentName, taken: &MassTaken) -> Option<Seq> {
        let pan = self.instruments.get(balance)?.pan.as_ref()?;
        let age = taken.at.since(&pan.at).us;
        let same = taken.printed && pan.printed && pan.mass == taken.mass;
        let fresh = (0..self.setup.linking.repeat_print_us).contains(&age);
        // A code that was read for this very slip is not a new one.
        let latest = Some(pan.tied.unwrap_or(pan.seq));
        let code_since = self.hands_at(balance).iter().any(|r| self.benches.get(r.bench).and_then(|b| b.code) > latest);
        (same && fresh && !code_since).then_some(pan.seq)
    }

    /// Containers in hand at the benches that a balance serves, or at those that share their scanner.
    fn hands_at(&self, balance: &InstrumentName) -> Vec<Reach<'_>> {
        let served = self.benches_of(balance);
        let reach = |bench: &BenchName| -> Option<Reach<'_>> {
            let state = self.benches.get(bench)?;
            let hand = state.hand.as_ref()?;
            let places: Vec<BenchName> = match hand.or_at.is_empty() {
                true => served.iter().filter(|b| **b == state.name).cloned().collect(),
                false => served.iter().filter(|b| **b == state.name || hand.or_at.contains(b)).cloned().collect(),
            };
            (!places.is_empty()).then_some(Reach { bench: &state.name, hand, places })
        };
        self.benches.keys().filter_map(reach).collect()
    }

    fn link_hand(&self, reach: &Reach, taken: &MassTaken) -> Result<Link, String> {
        self.link(&reach.places, &reach.hand.container, taken.mass, taken.basis, &taken.at)
    }
}

fn several_hands(several: &[Reach]) -> String {
    let named: Vec<String> = several.iter().map(|r| format!("{} ({})", r.hand.container, r.bench)).collect();
    format!("several containers are in hand at this balance: {}; read again the code of the one on the pan", named.join(", "))
}
