//! A count run ended: whose slice is owed?

use super::ask::depth_believable;
use super::entities::{Count, Loose, LooseWhat, Owed, Specimen};
use super::{Lab, New, Refusal};
use crate::fact::{Counted, Fact, Intention, RunFailed};
use crate::method::Device;
use crate::names::{BenchName, InstrumentName, Operator, SpecimenId};
use crate::sense::CountRun;
use crate::sheet::Seq;
use crate::stamp::Stamp;
use alloc::format;
use alloc::string::String;
use alloc::vec;
use alloc::vec::Vec;

/// More counts than any test of one specimen has.
const COUNTS_OF_SPECIMEN: usize = 300;
/// More closures than any paste has before a slice is taken.
const CLOSURES_OF_PASTE: usize = 20;

impl Lab {
    /// A penetration read by eye: another of the same paste, or the first of a new one.
    pub(super) fn penetration_typed(
        &self,
        bench: BenchName,
        penetration_mm: f64,
        who: Operator,
        at: &Stamp,
    ) -> Result<Vec<New>, Refusal> {
        self.bench_there(&bench)?;
        depth_believable(penetration_mm)?;
        if self.liquid_at(&bench).is_none() {
            return Err(Refusal(format!("no liquid limit is in work at bench {bench}; say which specimen first")));
        }
        let specimen = self.room_for_count(&bench).map_err(Refusal)?;
        let method = self.specimens.get(&specimen).and_then(|s| self.setup.methods.get(&s.method));
        if method.is_none_or(|m| m.device() != Device::Cone) {
            return Err(Refusal(format!(
                "the method of {specimen} has no cone: enter drops with type_drops, or open the specimen by a cone method"
            )));
        }
        let owed = self.benches.get(&bench).and_then(|b| b.owed.as_ref());
        if owed.is_some_and(|o| o.specimen == specimen && o.penetration_mm.is_none()) {
            return Err(Refusal(String::from(
                "a slice is owed for drops of the cup, and cup and cone are never mixed: weigh it or give up its paste first",
            )));
        }
        let mut facts = self.late_paste(&bench, &specimen, at);
        facts.push(New::by(Some(who), Fact::PenetrationEntered { penetration_mm, bench, specimen }));
        Ok(facts)
    }

    pub(super) fn count_ended(&self, cup: &InstrumentName, run: CountRun) -> Vec<New> {
        let (at, through, drops) = (run.at, run.last_input, run.drops);
        let cup_ = Some(cup.clone());
        if let Some((specimen, first)) = self.told_before(cup, &run) {
            let (bench, replaces) = (first.bench.clone(), Some(first.seq));
            let who = first.by.clone().or_else(|| self.signed_in(bench.as_ref()));
            let specimen = Some(specimen.id.clone());
            let counted = Counted { drops, bench, cup: cup_, run: Some(run), specimen, replaces, loose: None, failed: None };
            return vec![New::by(who, Fact::Counted(counted)).through(through)];
        }
        let replaces = self.loose_before(cup, &run);
        let again = self.failed_before(cup, &run);
        let benches: Vec<&BenchName> = self.benches_of(cup).iter().collect();
        let (bench, specimen) = self.count_for(&benches);
        let bench = bench.or_else(|| self.only_bench(cup));
        let who = self.signed_in(bench.as_ref());
        let mut facts = match (&bench, &specimen) {
            (Some(bench), Ok(specimen)) => self.late_slice(bench, specimen, &at),
            _ => Vec::new(),
        };
        let (specimen, loose) = match specimen {
            Ok(specimen) => (Some(specimen), None),
            Err(why) => (None, Some(why)),
        };
        let failed = specimen.as_ref().and_then(|_| again.or_else(|| self.failed_at(bench.as_ref(), &run)));
        let counted = Counted { drops, bench, cup: cup_, run: Some(run), specimen, replaces, loose, failed };
        facts.push(New::by(who, Fact::Counted(counted)).through(through));
        facts
    }

    /// A count of a specimen that this run tells again: it begins with the same
    /// line. A run that only went on after a pause is another one once the slice
    /// of the first was taken.
    fn told_before(&self, cup: &InstrumentName, run: &CountRun) -> Option<(&Specimen, &Count)> {
        let all = self.specimens.values().flat_map(|s| s.counts.iter().map(move |c| (s, c)));
        let (specimen, latest) = all.filter(|(_, c)| is_told_by(c, cup, run)).max_by_key(|(_, c)| c.seq)?;
        let sliced = specimen.trials.iter().any(|t| t.counts.contains(&latest.seq));
        let same = latest.bench.is_some() && (began_with(latest, run) || !sliced);
        same.then_some((specimen, latest))
    }

    /// A run that a person said does not stand is told again: it still does not.
    fn failed_before(&self, cup: &InstrumentName, run: &CountRun) -> Option<RunFailed> {
        let counts = self.specimens.values().flat_map(|s| &s.counts);
        let same = |c: &&Count| c.cup.as_ref() == Some(cup) && c.run == Some((run.first_input, run.began));
        let count = counts.filter(same).max_by_key(|c| c.seq)?;
        let (fault, said) = (count.failed?, count.set_aside.as_ref()?);
        Some(RunFailed { fault, by: said.by.clone(), why: said.why.clone() })
    }

    /// A person said of the run that goes on at a bench that it does not stand.
    fn failed_at(&self, bench: Option<&BenchName>, run: &CountRun) -> Option<RunFailed> {
        let failed = self.benches.get(bench?)?.failed.as_ref()?;
        let began_before = run.began.since(&failed.at).us <= 0;
        began_before.then(|| RunFailed { fault: failed.fault, by: failed.said.by.clone(), why: failed.said.why.clone() })
    }

    fn loose_before(&self, cup: &InstrumentName, run: &CountRun) -> Option<Seq> {
        let told = |l: &&Loose| matches!(&l.what, LooseWhat::Count(c) if is_told_by(c, cup, run));
        self.loose.values().rev().find(told).map(|l| l.seq)
    }

    /// The bench whose liquid limit is in work, among those the counter serves.
    fn count_for(&self, benches: &[&BenchName]) -> (Option<BenchName>, Result<SpecimenId, String>) {
        let liquid = |b: &&&BenchName| self.liquid_at(b).is_some();
        match benches.iter().filter(liquid).collect::<Vec<_>>().as_slice() {
            [one] => (Some((**one).clone()), self.room_for_count(one)),
            [] => (None, Err(String::from("no liquid limit is in work at this bench: say which specimen the count belongs to"))),
            _ => (
                None,
                Err(String::from(
                    "several benches that share this cup have a liquid limit in work: say which specimen the count belongs to",
                )),
            ),
        }
    }

    pub(super) fn liquid_at(&self, bench: &BenchName) -> Option<&SpecimenId> {
        let work = self.benches.get(bench)?.intention.as_ref()?;
        (work.intention == Intention::Liquid).then_some(&work.specimen)
    }

    pub(super) fn room_for_count(&self, bench: &BenchName) -> Result<SpecimenId, String> {
        let id = self.liquid_at(bench).ok_or_else(|| String::from("no liquid limit is in work at this bench"))?;
        match self.specimens.get(id) {
            None => Err(format!("specimen {id} could not be read from the ledger: say again what the bench works on")),
            Some(s) if s.counts.len() >= COUNTS_OF_SPECIMEN => {
                Err(format!("{COUNTS_OF_SPECIMEN} counts belong to {id} already: does the counter count by itself?"))
            }
            Some(_) => Ok(id.clone()),
        }
    }

    /// Counts whose slice can no longer come: the paste has stood too long, or is of another specimen.
    pub(super) fn late_slice(&self, bench: &BenchName, specimen: &SpecimenId, now: &Stamp) -> Vec<New> {
        match self.benches.get(bench).and_then(|b| b.owed.as_ref()).filter(|o| o.penetration_mm.is_some()) {
            Some(owed) => given_up(owed, "no slice was taken after the cone, and the bench counted in the cup"),
            None => self.late_paste(bench, specimen, now),
        }
    }

    fn late_paste(&self, bench: &BenchName, specimen: &SpecimenId, now: &Stamp) -> Vec<New> {
        let Some(owed) = self.benches.get(bench).and_then(|b| b.owed.as_ref()) else { return vec![] };
        let why = if owed.specimen != *specimen {
            format!("no slice was taken before the bench counted for {specimen}")
        } else if now.since(&owed.ended).us >= self.setup.linking.slice_us {
            String::from("no slice was taken in time, and a new count began")
        } else if owed.counts.len() >= CLOSURES_OF_PASTE {
            format!("{CLOSURES_OF_PASTE} closures without a slice are no longer one paste")
        } else {
            return vec![];
        };
        given_up(owed, &why)
    }
}

fn given_up(owed: &Owed, why: &str) -> Vec<New> {
    owed.counts.iter().map(|&count| New::plain(Fact::CountSuperseded { count, why: String::from(why) })).collect()
}

fn is_told_by(count: &Count, cup: &InstrumentName, run: &CountRun) -> bool {
    let first = count.run.map(|(first, _)| first);
    count.cup.as_ref() == Some(cup) && first == Some(run.first_input) && count.set_aside.is_none()
}

/// Whether the run is the very one that was counted, only with another final number.
fn began_with(count: &Count, run: &CountRun) -> bool {
    count.run.is_some_and(|(_, began)| began == run.began)
}
