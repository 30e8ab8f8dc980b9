//! A mass was taken: whose is it?

use super::{Lab, New};
use crate::fact::{Fact, Weighed};
use crate::names::{BenchName, InstrumentName};
use crate::sense::{InputNo, MassTaken};
use alloc::format;
use alloc::string::String;
use alloc::vec;
use alloc::vec::Vec;

impl Lab {
    pub(super) fn mass_taken(&self, balance: &InstrumentName, taken: MassTaken) -> Vec<New> {
        if let Some(weighing) = self.repeated_slip(balance, &taken) {
            return vec![New::plain(Fact::SlipRepeated { weighing, input: taken.input }).through(taken.input)];
        }
        let (bench, link) = match self.hands_at(balance).as_slice() {
            [] => (
                self.only_bench(balance),
                Err(String::from(
                    "no container is in hand: read the code of the container on the pan, or tie the weighing later",
                )),
            ),
            [bench] => (Some((*bench).clone()), self.link_hand(bench, &taken)),
            several => (None, Err(self.several_hands(several))),
        };
        let (link, loose) = match link {
            Ok(link) => (Some(link), None),
            Err(why) => (None, Some(why)),
        };
        let who = self.signed_in(bench.as_ref());
        let printed_link = taken.printed && link.is_some();
        let weighed = Weighed {
            mass_ug: taken.mass,
            bench: bench.clone(),
            balance: Some(balance.clone()),
            taken: Some(taken),
            link,
            loose,
        };
        let mut facts = vec![New::by(who, Fact::Weighed(weighed)).through(taken.input)];
        if let Some(bench) = bench.filter(|_| printed_link) {
            // A balance with a print key cannot show an empty pan: one code, one weighing.
            let why = String::from("its mass was printed");
            facts.push(New::plain(Fact::HandEmptied { bench, why }).through(taken.input));
        }
        facts
    }

    /// The pan is empty: containers that got their mass leave the hand.
    pub(super) fn unloaded(&self, balance: &InstrumentName, input: InputNo) -> Vec<New> {
        let done = |b: &&BenchName| self.benches.get(*b).and_then(|b| b.hand.as_ref()).is_some_and(|h| h.weighing.is_some());
        let emptied = |bench: &BenchName| {
            let why = String::from("the pan is empty again");
            New::plain(Fact::HandEmptied { bench: bench.clone(), why }).through(input)
        };
        self.benches_of(balance).iter().filter(done).map(emptied).collect()
    }

    /// Forgets what lay on a pan: after this a code read no longer reaches back to it.
    pub fn pan_emptied(&mut self, balance: &InstrumentName) {
        if self.pans.get(balance).is_some_and(|p| !p.printed) {
            self.pans.remove(balance);
        }
    }

    /// The weighing of which this slip is a second print.
    fn repeated_slip(&self, balance: &InstrumentName, taken: &MassTaken) -> Option<u64> {
        let pan = self.pans.get(balance)?;
        let age = taken.at.since(&pan.at).us;
        let same = taken.printed && pan.printed && pan.mass == taken.mass && !pan.code_since;
        (same && (0..self.setup.linking.repeat_print_us).contains(&age)).then_some(pan.seq)
    }

    fn hands_at(&self, balance: &InstrumentName) -> Vec<&BenchName> {
        let in_hand = |b: &&BenchName| self.benches.get(*b).is_some_and(|b| b.hand.is_some());
        self.benches_of(balance).iter().filter(in_hand).collect()
    }

    fn link_hand(&self, bench: &BenchName, taken: &MassTaken) -> Result<crate::fact::Link, String> {
        let hand =
            self.benches.get(bench).and_then(|b| b.hand.as_ref()).ok_or_else(|| String::from("no container is in hand"))?;
        self.link(bench, &hand.container, hand.shared, taken.mass, taken.basis, &taken.at)
    }

    fn several_hands(&self, benches: &[&BenchName]) -> String {
        let named: Vec<String> = benches
            .iter()
            .filter_map(|b| self.benches.get(*b))
            .filter_map(|b| b.hand.as_ref().map(|h| format!("{} ({})", h.container, b.name)))
            .collect();
        format!("several containers are in hand at this balance: {}; read again the code of the one on the pan", named.join(", "))
    }
}
