//! A laboratory to play with: a clock that only the test moves, scans, weighings, counts, asks. Every fact is
//! checked on the way: facts applied alone to another laboratory must lead to the same documents.
#![allow(dead_code)]

use std::collections::BTreeMap;
use tarecup_core::fact::{Fact, Recorded};
use tarecup_core::lab::entities::{Bench, Container, Entity, Instrument, Loose, Specimen, TrialRecord};
use tarecup_core::lab::role::Role;
use tarecup_core::lab::{Input, Lab, Linking, Loaded, Outcome, Refusal, Setup};
use tarecup_core::method::Method;
use tarecup_core::names::{BenchName, ContainerId, InstrumentName, SpecimenId};
use tarecup_core::quantity::{Mass, MassUnit};
use tarecup_core::sense::{CountRun, EndedBy, MassTaken};
use tarecup_core::signal::Basis;
use tarecup_core::stamp::{Boot, Stamp};

pub const SECOND: i64 = 1_000_000;
pub const MINUTE: i64 = 60 * SECOND;
pub const HOUR: i64 = 60 * MINUTE;

pub fn bench_name(text: &str) -> BenchName {
    BenchName::new(text).unwrap()
}
pub fn specimen_id(text: &str) -> SpecimenId {
    SpecimenId::new(text).unwrap()
}
pub fn container_id(text: &str) -> ContainerId {
    ContainerId::new(text).unwrap()
}
pub fn instrument(text: &str) -> InstrumentName {
    InstrumentName::new(text).unwrap()
}
/// A mass in grams, written as on the balance.
pub fn g(text: &str) -> Mass {
    Mass::parse(text, MassUnit::Gram).unwrap()
}

pub fn shipped_method(name: &str) -> Method {
    let file = format!("{}/../config/methods/{name}.toml", env!("CARGO_MANIFEST_DIR"));
    toml::from_str(&std::fs::read_to_string(file).unwrap()).unwrap()
}

/// Benches north and south, each with a balance, a cup and a scanner of its own.
pub fn two_benches() -> Setup {
    setup(&[
        ("pan-n", &["north"]),
        ("cup-n", &["north"]),
        ("scan-n", &["north"]),
        ("pan-s", &["south"]),
        ("cup-s", &["south"]),
        ("scan-s", &["south"]),
    ])
}

/// The same with one balance, `pan-n`, for both.
pub fn shared_balance() -> Setup {
    setup(&[
        ("pan-n", &["north", "south"]),
        ("cup-n", &["north"]),
        ("scan-n", &["north"]),
        ("cup-s", &["south"]),
        ("scan-s", &["south"]),
    ])
}

/// One balance and one scanner, `scan-n`, for both.
pub fn shared_balance_and_scanner() -> Setup {
    setup(&[("pan-n", &["north", "south"]), ("cup-n", &["north"]), ("cup-s", &["south"]), ("scan-n", &["north", "south"])])
}

pub fn setup(instruments: &[(&str, &[&str])]) -> Setup {
    let benches = |names: &[&str]| names.iter().map(|b| bench_name(b)).collect::<Vec<_>>();
    let method = shipped_method("d4318-multipoint");
    Setup {
        benches: benches(&["north", "south"]),
        instruments: instruments.iter().map(|(i, b)| (instrument(i), benches(b))).collect(),
        default_method: method.name.clone(),
        methods: BTreeMap::from([(method.name.clone(), method)]),
        linking: Linking::default(),
        balances: BTreeMap::new(),
        balance_rule: None,
    }
}

/// Every document of a laboratory as JSON text.
pub fn documents(lab: &Lab) -> BTreeMap<String, String> {
    let json = |v: &dyn erased::Doc| v.json();
    let specimens = lab.specimens().map(|s| (format!("specimen {}", s.id), json(s)));
    let containers = lab.containers().map(|c| (format!("container {}", c.id), json(c)));
    let benches = lab.benches().map(|b| (format!("bench {}", b.name), json(b)));
    let instruments = lab.instruments().map(|i| (format!("instrument {}", i.name), json(i)));
    let loose = lab.loose_things().map(|l| (format!("loose {}", l.seq), json(l)));
    let statistics = [(String::from("statistics"), json(lab.statistics()))];
    let clock = [(String::from("clock"), json(lab.clock()))];
    specimens.chain(containers).chain(benches).chain(instruments).chain(loose).chain(statistics).chain(clock).collect()
}

mod erased {
    pub trait Doc {
        fn json(&self) -> String;
    }
    impl<T: serde::Serialize> Doc for T {
        fn json(&self) -> String {
            serde_json::to_string(self).unwrap()
        }
    }
}

/// A laboratory made of the documents of another.
pub fn reloaded(lab: &Lab) -> Lab {
    fn again<T: serde::Serialize + serde::de::DeserializeOwned>(value: &T) -> T {
        serde_json::from_str(&serde_json::to_string(value).unwrap()).unwrap()
    }
    let mut new = Lab::new(lab.setup().clone());
    lab.specimens().for_each(|s| new.load(Loaded::Specimen(Box::new(again::<Specimen>(s)))));
    lab.containers().for_each(|c| new.load(Loaded::Container(again::<Container>(c))));
    lab.benches().for_each(|b| new.load(Loaded::Bench(again::<Bench>(b))));
    lab.instruments().for_each(|i| new.load(Loaded::Instrument(again::<Instrument>(i))));
    lab.loose_things().for_each(|l| new.load(Loaded::Loose(again::<Loose>(l))));
    new.load(Loaded::Statistics(again(lab.statistics())));
    new.load(Loaded::Clock(again(lab.clock())));
    new
}

/// The laboratory under test.
pub struct Play {
    pub lab: Lab,
    /// Knows nothing but the facts.
    pub shadow: Lab,
    pub now: Stamp,
    pub facts: Vec<Recorded>,
    next_input: u64,
}

impl Play {
    pub fn new(setup: Setup) -> Self {
        let now = Stamp { utc_us: 1_772_434_800_000_000, mono_us: 5 * SECOND, boot: Boot(1) };
        Self { lab: Lab::new(setup.clone()), shadow: Lab::new(setup), now, facts: Vec::new(), next_input: 1 }
    }

    /// With S-1 open and AB signed in at bench north.
    pub fn open() -> Self {
        let mut play = Self::new(two_benches());
        play.ask(r#"{"ask":"sign_in","bench":"north","operator":"AB"}"#);
        play.ask(r#"{"ask":"open_specimen","specimen":"S-1"}"#);
        play
    }

    pub fn wait(&mut self, us: i64) -> &mut Self {
        self.now = self.now.plus_us(us);
        self
    }

    fn line(&mut self) -> u64 {
        self.next_input += 1;
        self.next_input
    }

    /// Takes an input; the shadow must come to the same documents, and exactly what was named may have changed.
    pub fn try_take(&mut self, input: Input) -> Result<Outcome, Refusal> {
        let before = documents(&self.lab);
        let outcome = match self.lab.take(input, self.now, self.facts.len() as u64 + 1) {
            Ok(outcome) => outcome,
            Err(refusal) => {
                assert_eq!(documents(&self.lab), before, "a refused ask changed something");
                return Err(refusal);
            }
        };
        for fact in &outcome.facts {
            assert_eq!(fact.seq, self.facts.len() as u64 + 1, "numbers are gapless");
            self.facts.push(fact.clone());
            let text = serde_json::to_string(&fact.fact).unwrap();
            let read: Fact = serde_json::from_str(&text).unwrap();
            assert_eq!(serde_json::to_string(&read).unwrap(), text, "a fact reads back as it was written");
            self.shadow.apply(&Recorded { fact: read, ..fact.clone() }, &mut Default::default());
        }
        let after = documents(&self.lab);
        assert_eq!(documents(&self.shadow), after, "facts alone lead to the same documents");
        let key = |e: &Entity| match e {
            Entity::Specimen(id) => format!("specimen {id}"),
            Entity::Container(id) => format!("container {id}"),
            Entity::Bench(id) => format!("bench {id}"),
            Entity::Instrument(id) => format!("instrument {id}"),
            Entity::Loose(seq) => format!("loose {seq}"),
            Entity::Statistics => String::from("statistics"),
            Entity::Clock => String::from("clock"),
        };
        let named: Vec<String> = outcome.touched.iter().map(key).collect();
        for id in before.keys().chain(after.keys()) {
            assert!(before.get(id) == after.get(id) || named.contains(id), "{id} changed and was not named");
        }
        Ok(outcome)
    }

    pub fn take(&mut self, input: Input) -> Vec<Fact> {
        self.try_take(input).expect("not refused").facts.into_iter().map(|r| r.fact).collect()
    }

    pub fn ask(&mut self, json: &str) -> Vec<Fact> {
        let ask = serde_json::from_str(json).unwrap_or_else(|e| panic!("{json}: {e}"));
        match self.try_take(Input::Ask(ask)) {
            Ok(outcome) => outcome.facts.into_iter().map(|r| r.fact).collect(),
            Err(refusal) => panic!("{json}: {refusal}"),
        }
    }

    /// An ask that must be refused; its words.
    pub fn refused(&mut self, json: &str) -> String {
        let ask = serde_json::from_str(json).unwrap_or_else(|e| panic!("{json}: {e}"));
        match self.try_take(Input::Ask(ask)) {
            Ok(outcome) => panic!("{json} was not refused: {:?}", outcome.facts),
            Err(refusal) => refusal.0,
        }
    }

    pub fn scan(&mut self, scanner: &str, text: &str) -> Vec<Fact> {
        let input = self.line();
        self.take(Input::Code { scanner: instrument(scanner), text: text.into(), input })
    }

    pub fn mass(&mut self, pan: &str, grams: &str, printed: bool, basis: Basis) -> Vec<Fact> {
        let input = self.line();
        let taken = MassTaken {
            mass: g(grams),
            step: Mass::from_ug(10_000),
            basis,
            printed,
            input,
            first_input: input,
            readings: 8,
            span: Mass::ZERO,
            zero: None,
            at: self.now,
            trace: None,
        };
        self.take(Input::Mass { balance: instrument(pan), taken })
    }

    /// A streaming balance settles; the container stays on the pan.
    pub fn settle(&mut self, pan: &str, grams: &str) -> u64 {
        self.mass(pan, grams, false, Basis::Unmarked);
        self.last_weighing()
    }

    /// A slip of a balance with a print key.
    pub fn print(&mut self, pan: &str, grams: &str) -> Vec<Fact> {
        self.mass(pan, grams, true, Basis::Unmarked)
    }

    pub fn lift(&mut self, pan: &str) -> Vec<Fact> {
        let input = self.line();
        self.take(Input::Unloaded { balance: instrument(pan), input })
    }

    /// Code, mass, and off the pan again, at bench north; the weighing's number.
    pub fn weigh(&mut self, container: &str, grams: &str) -> u64 {
        self.weigh_at("n", container, grams)
    }

    pub fn weigh_at(&mut self, which: &str, container: &str, grams: &str) -> u64 {
        self.scan(&format!("scan-{which}"), container);
        self.wait(5 * SECOND);
        let seq = self.settle(&format!("pan-{which}"), grams);
        self.wait(5 * SECOND).lift(&format!("pan-{which}"));
        self.wait(5 * SECOND);
        seq
    }

    pub fn run(&self, drops: u32, first_input: u64, last_input: u64) -> CountRun {
        CountRun {
            drops,
            rate_per_s: Some(2.0),
            duration_us: i64::from(drops) * SECOND / 2,
            gaps: 0,
            doubles: 0,
            heard: drops,
            ended_by: EndedBy::EndLine,
            interrupted: None,
            first_input,
            last_input,
            began: self.now.plus_us(-i64::from(drops) * SECOND / 2),
            at: self.now,
        }
    }

    /// A count at bench north; its number.
    pub fn count(&mut self, drops: u32) -> u64 {
        self.count_at("cup-n", drops)
    }

    pub fn count_at(&mut self, cup: &str, drops: u32) -> u64 {
        let (first, last) = (self.line(), self.line());
        let run = self.run(drops, first, last);
        self.take(Input::Count { cup: instrument(cup), run });
        self.last_count()
    }

    pub fn intend(&mut self, bench: &str, specimen: &str, intention: &str) {
        self.ask(&format!(r#"{{"ask":"intend","bench":"{bench}","specimen":"{specimen}","intention":"{intention}"}}"#));
    }

    pub fn oven(&mut self, way: &str, containers: &[&str]) {
        self.ask(&format!(r#"{{"ask":"{way}","containers":{}}}"#, serde_json::to_string(containers).unwrap()));
    }

    pub fn say(&mut self, bench: &str, container: &str, role: &str) -> Vec<Fact> {
        self.ask(&format!(
            r#"{{"ask":"say_role","bench":"{bench}","container":"{container}","role":"{role}","who":"AB","why":"seen"}}"#
        ))
    }

    pub fn tie(&mut self, weighing: u64, container: &str, role: &str) -> Vec<Fact> {
        self.ask(&tie(weighing, container, role))
    }

    pub fn set_aside(&mut self, what: u64) -> Vec<Fact> {
        self.ask(&set_aside(what))
    }

    /// The service is started anew: the state comes from the documents, the clock from a new boot.
    pub fn restart(&mut self) {
        let new = reloaded(&self.lab);
        assert_eq!(documents(&new), documents(&self.lab), "documents read back as they were written");
        self.lab = new;
        self.now = Stamp { utc_us: self.now.utc_us, mono_us: SECOND, boot: Boot(self.now.boot.0 + 1) };
    }

    pub fn last_weighing(&self) -> u64 {
        self.facts.iter().rev().find(|r| matches!(r.fact, Fact::Weighed(_))).unwrap().seq
    }
    pub fn last_count(&self) -> u64 {
        self.facts.iter().rev().find(|r| matches!(r.fact, Fact::Counted(_))).unwrap().seq
    }

    /// The role a weighing was given at once; `None` when loose.
    pub fn role_of(&self, seq: u64) -> Option<Role> {
        match &self.facts[seq as usize - 1].fact {
            Fact::Weighed(w) => w.link.as_ref().map(|l| l.role),
            other => panic!("fact {seq} is {other:?}"),
        }
    }
    /// Why a weighing was loose.
    pub fn loose_why(&self, seq: u64) -> String {
        match &self.facts[seq as usize - 1].fact {
            Fact::Weighed(w) => w.loose.clone().unwrap_or_else(|| panic!("weighing {seq} is not loose: {w:?}")),
            other => panic!("fact {seq} is {other:?}"),
        }
    }
    pub fn who(&self, seq: u64) -> Option<String> {
        self.facts[seq as usize - 1].who.as_ref().map(|w| w.as_str().to_owned())
    }

    pub fn specimen(&self, id: &str) -> &Specimen {
        self.lab.specimen(&specimen_id(id)).unwrap()
    }
    pub fn container(&self, id: &str) -> &Container {
        self.lab.container(&container_id(id)).unwrap()
    }
    pub fn bench(&self, name: &str) -> &Bench {
        self.lab.bench(&bench_name(name)).unwrap()
    }
    pub fn next_step(&self, bench: &str) -> String {
        self.lab.guide(&bench_name(bench)).unwrap().next
    }
    /// The n-th determination of a specimen.
    pub fn trial(&self, id: &str, n: usize) -> &TrialRecord {
        &self.specimen(id).trials[n]
    }
    /// `kind no container tare wet dries…` of every determination, masses in grams.
    pub fn shown(&self, id: &str) -> Vec<String> {
        let one = |t: &TrialRecord| {
            let tare = t.tare.as_ref().map_or("owed".into(), |w| w.mass.to_string());
            let wet = t.wets.last().map_or("none".into(), |w| w.mass.to_string());
            let dries = t.dries.iter().map(|d| format!(" {}", d.weighing.mass)).collect::<String>();
            let aside = if t.set_aside.is_some() { " aside" } else { "" };
            format!("{:?} {} {} {tare} {wet}{dries}{aside}", t.kind, t.no, t.container)
        };
        self.specimen(id).trials.iter().map(one).collect()
    }
}

pub fn tie(weighing: u64, container: &str, role: &str) -> String {
    format!(
        r#"{{"ask":"tie","weighing":{weighing},"bench":"north","container":"{container}","role":"{role}","who":"CD","why":"seen in the notes"}}"#
    )
}

pub fn set_aside(what: u64) -> String {
    format!(r#"{{"ask":"set_aside","what":{what},"who":"AB","why":"slipped"}}"#)
}

pub fn kinds(facts: &[Fact]) -> Vec<&'static str> {
    facts.iter().map(Fact::kind).collect()
}

/// Liquid trials of a specimen up to the wet weighing: drops, container, tare, wet.
pub fn wet_trials(play: &mut Play, specimen: &str, rows: &[(u32, &str, &str, &str)]) {
    for (_, container, tare, _) in rows {
        play.weigh(container, tare);
    }
    play.intend("north", specimen, "liquid");
    for (drops, container, _, wet) in rows {
        play.wait(4 * MINUTE).count(*drops);
        play.wait(30 * SECOND).weigh(container, wet);
    }
}

/// A whole specimen with both limits, dried overnight. Masses: a college's data sheet of 2004.
pub fn whole_specimen(play: &mut Play, specimen: &str, prefix: &str) {
    let name = |n: u32| format!("{prefix}{n}");
    let liquid = [
        (34, "17.33", "48.61", "41.19"),
        (27, "17.41", "55.53", "46.05"),
        (22, "17.45", "51.71", "42.98"),
        (17, "17.36", "50.51", "41.54"),
    ];
    let threads = [("20.63", "29.26", "27.90"), ("20.66", "30.03", "28.53")];
    for (n, row) in (1..).zip(&liquid) {
        play.weigh(&name(n), row.1);
    }
    for (n, row) in (5..).zip(&threads) {
        play.weigh(&name(n), row.0);
    }
    play.intend("north", specimen, "liquid");
    for (n, row) in (1..).zip(&liquid) {
        play.wait(4 * MINUTE).count(row.0);
        play.wait(30 * SECOND).weigh(&name(n), row.2);
    }
    play.intend("north", specimen, "plastic");
    for (n, row) in (5..).zip(&threads) {
        play.wait(8 * MINUTE).weigh(&name(n), row.1);
    }
    play.ask(r#"{"ask":"intend_nothing","bench":"north"}"#);
    let all: Vec<String> = (1..=6).map(name).collect();
    let all: Vec<&str> = all.iter().map(String::as_str).collect();
    play.oven("into_oven", &all);
    play.wait(16 * HOUR);
    play.oven("out_of_oven", &all);
    play.wait(30 * MINUTE);
    for (n, row) in (1..).zip(&liquid) {
        play.weigh(&name(n), row.3);
    }
    for (n, row) in (5..).zip(&threads) {
        play.weigh(&name(n), row.2);
    }
}
