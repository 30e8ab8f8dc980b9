//! Facts about counts change the state.

use super::{Lab, Touched};
use crate::fact::{Counted, Recorded};
use crate::lab::entities::{Count, Entity, Loose, LooseWhat, Owed, Said};
use crate::names::{BenchName, SpecimenId};
use crate::sheet::Seq;
use alloc::string::String;
use alloc::vec::Vec;

impl Lab {
    pub(super) fn apply_counted(&mut self, counted: &Counted, r: &Recorded, touched: &mut Touched) {
        let count = new_count(counted, r);
        let replaced = counted.replaces.filter(|&old| self.drop_loose(old, touched));
        match (&counted.specimen, &counted.bench) {
            (Some(specimen), Some(bench)) => match counted.replaces {
                Some(old) if replaced.is_none() => self.replace_count(old, count, specimen, touched),
                _ => self.count_belongs(count, specimen, bench, r, touched),
            },
            _ => {
                let why = counted.loose.clone().unwrap_or_default();
                let (at, what) = (count.at, LooseWhat::Count(count));
                self.loose.insert(r.seq, {
                    let inputs = counted.run.as_ref().map(|r| [r.first_input, r.last_input]);
                    Loose { seq: r.seq, bench: counted.bench.clone(), what, why: why.clone(), at, inputs, explained: None }
                });
                touched.insert(Entity::Loose(r.seq));
                if let Some(state) = counted.bench.as_ref().and_then(|b| self.benches.get_mut(b)) {
                    state.refusal = Some(why);
                    touched.insert(Entity::Bench(state.name.clone()));
                }
            }
        }
    }

    pub(super) fn apply_penetration(
        &mut self,
        mm: f64,
        bench: &BenchName,
        specimen: &SpecimenId,
        r: &Recorded,
        touched: &mut Touched,
    ) {
        let mut count = Count::typed(r.seq, r.at, r.who.clone());
        count.penetration_mm = Some(mm);
        self.count_belongs(count, specimen, bench, r, touched);
    }

    pub(super) fn apply_penetration_amended(&mut self, seq: Seq, mm: f64, said: &Said, touched: &mut Touched) {
        self.with_count(seq, touched, |c| (c.penetration_mm, c.typed, c.corrected) = (Some(mm), true, Some(said.clone())));
        for bench in self.benches.values_mut() {
            if let Some(owed) = bench.owed.as_mut().filter(|o| o.counts.last() == Some(&seq)) {
                owed.penetration_mm = Some(mm);
                touched.insert(Entity::Bench(bench.name.clone()));
            }
        }
    }

    fn drop_loose(&mut self, seq: Seq, touched: &mut Touched) -> bool {
        let was = self.loose.remove(&seq).is_some();
        if was {
            touched.insert(Entity::Loose(seq));
        }
        was
    }

    /// The same run, told anew: it takes the place of what was told first, wherever that stands.
    fn replace_count(&mut self, old: Seq, mut new: Count, id: &SpecimenId, touched: &mut Touched) {
        let (seq, drops, ended) = (new.seq, new.drops, new.at);
        if let Some(specimen) = self.specimens.get_mut(id) {
            if let Some(first) = specimen.counts.iter_mut().find(|c| c.seq == old) {
                new.superseded.clone_from(&first.superseded);
                first.superseded = Some(String::from("the counter told this run again, see the later count"));
            }
            let slices = specimen.trials.iter_mut().flat_map(|t| &mut t.counts);
            slices.filter(|c| **c == old).for_each(|c| *c = seq);
            specimen.counts.push(new);
            touched.insert(Entity::Specimen(id.clone()));
        }
        for bench in self.benches.values_mut() {
            let Some(owed) = bench.owed.as_mut().filter(|o| o.counts.contains(&old)) else { continue };
            owed.counts.iter_mut().filter(|c| **c == old).for_each(|c| *c = seq);
            if owed.counts.last() == Some(&seq) {
                (owed.drops, owed.penetration_mm, owed.ended) = (drops, None, ended);
            }
            touched.insert(Entity::Bench(bench.name.clone()));
        }
    }

    fn count_belongs(&mut self, mut count: Count, id: &SpecimenId, bench: &BenchName, r: &Recorded, touched: &mut Touched) {
        let seq = count.seq;
        let stands = count.set_aside.is_none();
        count.bench = Some(bench.clone());
        let Some(specimen) = self.specimens.get_mut(id) else { return };
        let place = specimen.counts.partition_point(|c| c.seq < seq);
        specimen.counts.insert(place, count);
        touched.insert(Entity::Specimen(id.clone()));
        if let Some(state) = self.benches.get_mut(bench).filter(|_| !stands) {
            // It leaves what was owed before as it is.
            (state.active, state.refusal, state.failed) = (r.at, None, None);
            touched.insert(Entity::Bench(bench.clone()));
        } else if let Some(state) = self.benches.get_mut(bench) {
            state.failed = None;
            let mut counts = state.owed.take().filter(|o| o.specimen == *id).map_or(Vec::new(), |o| o.counts);
            counts.push(seq);
            counts.sort_unstable();
            state.owed = owed_for(specimen, counts);
            (state.active, state.refusal) = (r.at, None);
            touched.insert(Entity::Bench(bench.clone()));
        }
    }

    pub(super) fn apply_count_tied(&mut self, seq: Seq, bench: &BenchName, id: &SpecimenId, r: &Recorded, touched: &mut Touched) {
        let loose = match self.loose.remove(&seq) {
            Some(Loose { what: LooseWhat::Count(count), .. }) => {
                touched.insert(Entity::Loose(seq));
                Some(count)
            }
            _ => self.take_count(seq, touched),
        };
        if let Some(mut count) = loose {
            count.superseded = None;
            if count.failed.take().is_some() {
                count.set_aside = None;
            }
            count.by = count.by.or_else(|| r.who.clone());
            self.count_belongs(count, id, bench, r, touched);
        }
    }

    /// Takes a count out of its specimen.
    fn take_count(&mut self, seq: Seq, touched: &mut Touched) -> Option<Count> {
        self.no_longer_owed(seq, touched);
        for specimen in self.specimens.values_mut() {
            if let Some(n) = specimen.counts.iter().position(|c| c.seq == seq) {
                touched.insert(Entity::Specimen(specimen.id.clone()));
                return Some(specimen.counts.remove(n));
            }
        }
        None
    }

    pub(super) fn apply_superseded(&mut self, seq: Seq, why: &str, touched: &mut Touched) {
        self.with_count(seq, touched, |c| c.superseded = Some(String::from(why)));
        self.no_longer_owed(seq, touched);
    }

    pub(super) fn no_longer_owed(&mut self, seq: Seq, touched: &mut Touched) {
        for bench in self.benches.values_mut() {
            let Some(owed) = bench.owed.as_ref().filter(|o| o.counts.contains(&seq)) else { continue };
            let left: Vec<Seq> = owed.counts.iter().copied().filter(|&c| c != seq).collect();
            let said = owed.said;
            bench.owed = self.specimens.get(&owed.specimen).and_then(|s| owed_for(s, left)).map(|o| Owed { said, ..o });
            touched.insert(Entity::Bench(bench.name.clone()));
        }
    }

    /// The weighing of a slice was taken back: the slice is owed again where its count ended, unless another is owed there.
    pub(super) fn owe_again(&mut self, id: &SpecimenId, counts: &[Seq], touched: &mut Touched) {
        let Some(specimen) = self.specimens.get(id) else { return };
        let Some(bench) = counts.last().and_then(|&c| specimen.count(c)).and_then(|c| c.bench.as_ref()) else { return };
        let Some(state) = self.benches.get_mut(bench).filter(|b| b.owed.is_none()) else { return };
        state.owed = owed_for(specimen, counts.to_vec());
        touched.insert(Entity::Bench(bench.clone()));
    }

    pub(super) fn apply_drops_amended(&mut self, seq: Seq, drops: u32, said: &Said, touched: &mut Touched) {
        let amend = |c: &mut Count| {
            (c.drops, c.typed, c.interrupted, c.corrected) = (drops, true, None, Some(said.clone()));
        };
        self.with_count(seq, touched, amend);
        if let Some(Loose { what: LooseWhat::Count(count), .. }) = self.loose.get_mut(&seq) {
            amend(count);
            touched.insert(Entity::Loose(seq));
        }
        for bench in self.benches.values_mut() {
            if let Some(owed) = bench.owed.as_mut().filter(|o| o.counts.last() == Some(&seq)) {
                owed.drops = drops;
                touched.insert(Entity::Bench(bench.name.clone()));
            }
        }
    }

    pub(super) fn with_count(&mut self, seq: Seq, touched: &mut Touched, change: impl FnOnce(&mut Count)) {
        for specimen in self.specimens.values_mut() {
            if let Some(count) = specimen.counts.iter_mut().find(|c| c.seq == seq) {
                touched.insert(Entity::Specimen(specimen.id.clone()));
                return change(count);
            }
        }
    }
}

fn new_count(counted: &Counted, r: &Recorded) -> Count {
    let run = counted.run.as_ref();
    let failed = counted.failed.as_ref();
    let aside = failed.map(|f| Said { by: f.by.clone(), why: f.why.clone(), seq: r.seq });
    Count {
        drops: counted.drops,
        rate_per_s: run.and_then(|r| r.rate_per_s),
        gaps: run.map_or(0, |r| r.gaps),
        doubles: run.map_or(0, |r| r.doubles),
        interrupted: run.and_then(|r| r.interrupted.clone()),
        cup: counted.cup.clone(),
        at: run.map_or(r.at, |r| r.at),
        typed: run.is_none(),
        set_aside: aside,
        failed: failed.map(|f| f.fault),
        bench: counted.bench.clone(),
        run: run.map(|r| (r.first_input, r.began)),
        ..Count::typed(r.seq, r.at, r.who.clone())
    }
}

/// What is owed after these counts of a specimen.
fn owed_for(specimen: &crate::lab::entities::Specimen, counts: Vec<Seq>) -> Option<Owed> {
    let last = counts.last().and_then(|&c| specimen.count(c))?;
    let (drops, penetration_mm, ended) = (last.drops, last.penetration_mm, last.at);
    Some(Owed { specimen: specimen.id.clone(), counts, drops, penetration_mm, ended, said: false })
}
