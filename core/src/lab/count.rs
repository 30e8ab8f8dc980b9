//! A count run ended: whose slice is owed?

use super::{Lab, New};
use crate::fact::{Counted, Fact, Intention};
use crate::names::{BenchName, InstrumentName, SpecimenId};
use crate::sense::CountRun;
use crate::sheet::Seq;
use crate::stamp::Stamp;
use alloc::string::String;
use alloc::vec;
use alloc::vec::Vec;

impl Lab {
    pub(super) fn count_ended(&self, cup: &InstrumentName, run: CountRun, _next_seq: Seq) -> Vec<New> {
        let benches: Vec<&BenchName> = self.benches_of(cup).iter().collect();
        let (bench, specimen) = self.count_for(&benches);
        let (at, through, drops) = (run.at, run.last_input, run.drops);
        let bench = bench.or_else(|| self.only_bench(cup));
        let who = self.signed_in(bench.as_ref());
        let mut facts = match (&bench, &specimen) {
            (Some(bench), Ok(_)) => self.late_slice(bench, &at),
            _ => Vec::new(),
        };
        let (specimen, loose) = match specimen {
            Ok(specimen) => (Some(specimen), None),
            Err(why) => (None, Some(why)),
        };
        let counted = Counted { drops, bench, cup: Some(cup.clone()), run: Some(run), specimen, loose };
        facts.push(New::by(who, Fact::Counted(counted)).through(through));
        facts
    }

    /// The bench whose liquid limit is in work, among those the counter serves.
    fn count_for(&self, benches: &[&BenchName]) -> (Option<BenchName>, Result<SpecimenId, String>) {
        let liquid = |b: &&&BenchName| self.liquid_at(b).is_some();
        match benches.iter().filter(liquid).collect::<Vec<_>>().as_slice() {
            [one] => (Some((**one).clone()), self.liquid_at(one).cloned().ok_or_else(String::new)),
            [] => (None, Err(String::from("no liquid limit is in work at this bench: say which specimen the count belongs to"))),
            _ => (
                None,
                Err(String::from(
                    "several benches that share this cup have a liquid limit in work: say which specimen the count belongs to",
                )),
            ),
        }
    }

    fn liquid_at(&self, bench: &BenchName) -> Option<&SpecimenId> {
        let work = self.benches.get(bench)?.intention.as_ref()?;
        (work.intention == Intention::Liquid).then_some(&work.specimen)
    }

    /// Counts whose slice can no longer come: the paste has stood too long.
    pub(super) fn late_slice(&self, bench: &BenchName, now: &Stamp) -> Vec<New> {
        let Some(owed) = self.benches.get(bench).and_then(|b| b.owed.as_ref()) else { return vec![] };
        if now.since(&owed.ended).us < self.setup.linking.slice_us {
            return vec![];
        }
        let gone = |&count: &Seq| {
            New::plain(Fact::CountSuperseded { count, why: String::from("no slice was taken in time, and a new count began") })
        };
        owed.counts.iter().map(gone).collect()
    }
}
