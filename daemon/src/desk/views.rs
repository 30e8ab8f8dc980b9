//! What the laboratory's state looks like from outside: the payloads of
//! retained topics. Views only; nothing is decided here.

use super::Desk;
use crate::asks::{Read, refusal};
use crate::keys::hex;
use serde_json::{Map, Value, json};
use tarecup_core::fact::{Fact, Recorded};
use tarecup_core::lab::entities::{BalanceCheck, Bench, Container, CupCheck, Entity, Instrument, Specimen};
use tarecup_core::lab::statistics::Sums;
use tarecup_core::lab::{Lab, LooseThing, OnShelf, Wish};
use tarecup_core::limits::{Limits, State};
use tarecup_core::names::{BenchName, SpecimenId};
use tarecup_core::near::meant;
use tarecup_core::quantity::Mass;
use tarecup_core::stamp::{Stamp, rfc3339};

/// Name of the one document of what all results say together.
pub(crate) const STATISTICS: &str = "all";

/// Name of the one document of what is known of the wall clock.
pub(crate) const CLOCK: &str = "wall";

/// Version of the payloads.
const V: u32 = 1;

/// Topic and payload of an entity; loose things have no topic.
pub(super) fn of(lab: &Lab, entity: &Entity, seq: u64) -> Option<(String, Value)> {
    match entity {
        Entity::Specimen(id) => lab.specimen(id).map(|s| (format!("specimen/{id}"), specimen(s, seq))),
        Entity::Container(id) => lab.container(id).map(|c| (format!("container/{id}"), container(lab, c, seq))),
        Entity::Bench(name) => lab.bench(name).map(|b| (format!("bench/{name}"), bench(lab, b, seq))),
        // Its counters are the desk's: the desk fills it in.
        Entity::Instrument(name) => Some((format!("instrument/{name}"), Value::Null)),
        Entity::Loose(_) | Entity::Statistics | Entity::Clock => None,
    }
}

fn grams(mass: Mass) -> Value {
    json!(mass.grams())
}

/// A bench: who, in hand, intention, slice owed, what comes next.
pub(crate) fn bench(lab: &Lab, bench: &Bench, seq: u64) -> Value {
    let guide = lab.guide(&bench.name);
    let loose = lab.loose_open().filter(|l| l.bench.as_ref() == Some(&bench.name)).count();
    json!({
        "v": V, "seq": seq, "at": (bench.active != Stamp::default()).then(|| bench.active.rfc3339()), "bench": bench.name,
        "signed_in": bench.signed_in,
        "in_hand": bench.hand.as_ref().map(|h| json!({"container": h.container, "since": h.since.rfc3339(), "weighed": h.weighing.is_some()})),
        "intention": bench.intention.as_ref().map(|w| json!({"specimen": w.specimen, "intention": w.intention})),
        "slice_owed": bench.owed.as_ref().map(|o| json!({
            "specimen": o.specimen, "drops": o.drops, "penetration_mm": o.penetration_mm, "closures": o.counts.len(), "since": o.ended.rfc3339(), "overdue": o.said,
        })),
        "latest": bench.latest.as_ref().map(|l| json!({
            "seq": l.seq, "mass_g": grams(l.mass), "container": l.container, "role": l.role, "loose": l.loose, "at": l.at.rfc3339(),
        })),
        "loose": loose,
        "next": guide.as_ref().map(|g| g.next.as_str()),
        "urgent": guide.as_ref().is_some_and(|g| g.urgent),
        "caution": guide.as_ref().and_then(|g| g.caution).map(|c| c.says),
        "action": guide.as_ref().and_then(|g| g.action.clone()),
        "advice": lab.advice(&bench.name, &Wish::default()).map_or(Vec::new(), |a| a.says),
        "clock": lab.clock().says(),
        "next_since": guide.as_ref().and_then(|g| g.since).map(|s| s.rfc3339()),
    })
}

/// What is drying, and what comes next for it.
pub fn shelf(lab: &Lab, now: &Stamp) -> Vec<Value> {
    let one = |s: &OnShelf| {
        json!({
            "container": s.container, "specimen": s.specimen, "trial": s.trial.kind, "no": s.trial.no, "standing": s.standing,
            "wet_g": s.wet.map(grams), "dry_g": s.dry.map(grams), "since": s.since.rfc3339(), "recorded": s.recorded,
            "celsius": s.celsius, "hours": s.hours, "hours_since_dry": s.hours_since_dry, "hours_wanted": s.hours_wanted,
            "ready": s.ready, "ready_in_hours": s.ready_in_hours, "overdue": s.overdue, "set_aside": s.set_aside, "wrong_heat": s.wrong_heat, "next": s.next,
        })
    };
    lab.shelf(now).iter().map(one).collect()
}

/// Loose weighings and counts.
pub fn loose(lab: &Lab) -> Vec<Value> {
    let one = |l: LooseThing| {
        json!({
            "seq": l.seq, "bench": l.bench, "instrument": l.instrument, "mass_g": l.mass.map(grams), "drops": l.drops,
            "why": l.why, "explained": l.explained, "at": l.at.rfc3339(),
            "first_input": l.inputs.map(|i| i[0]), "input": l.inputs.map(|i| i[1]),
        })
    };
    lab.loose_list().map(one).collect()
}

/// A container: where it stands.
pub(crate) fn container(lab: &Lab, c: &Container, seq: u64) -> Value {
    let at = c.tares.last().map(|t| t.at.rfc3339());
    let holding = c.holding.as_ref().map(|h| {
        let trial = lab.specimen(&h.specimen).and_then(|s| s.trial(h.trial));
        json!({
            "specimen": h.specimen, "trial": h.trial.kind, "no": h.trial.no,
            "wet_g": trial.and_then(|t| t.wets.last()).map(|w| grams(w.mass)),
            "dry_g": trial.and_then(|t| t.dries.last()).map(|d| grams(d.weighing.mass)),
            "in_oven_since": h.oven.since.map(|s| s.rfc3339()),
            "oven_recorded": h.oven.recorded,
        })
    });
    json!({
        "v": V, "seq": seq, "at": at, "container": c.id, "standing": c.standing,
        "tare_g": c.tare().map(|t| grams(t.mass)), "lid_g": c.lid.map(grams), "holding": holding,
    })
}

/// A specimen: what is done, what is missing.
pub(crate) fn specimen(s: &Specimen, seq: u64) -> Value {
    let trials: Vec<Value> = s
        .trials
        .iter()
        .map(|t| {
            let count = t.counts.last().and_then(|&c| s.count(c));
            let (drops, mm) = (count.map(|c| c.drops), count.and_then(|c| c.penetration_mm));
            json!({
                "kind": t.kind, "no": t.no, "container": t.container, "drops": drops.filter(|_| mm.is_none()), "penetration_mm": mm,
                "tare": t.tare.is_some(), "wet": !t.wets.is_empty(), "dry": t.dries.len(),
                "set_aside": t.set_aside.as_ref().map(|a| a.why.as_str()),
            })
        })
        .collect();
    let missing: Vec<&str> =
        s.limits.iter().flat_map(|l| &l.checks).filter(|c| c.answered.is_none()).map(|c| c.says.as_str()).collect();
    json!({
        "v": V, "seq": seq, "at": s.opened.rfc3339(), "specimen": s.id, "method": s.method, "edition": s.edition,
        "description": s.description, "preparation": s.preparation,
        "state": s.limits.as_ref().map_or(State::Provisional, |l| l.state),
        "revision": s.revision, "trials": trials, "checks": missing,
    })
}

/// The limits of a specimen as they are published.
pub fn limits(limits: &Limits, revision: u32, seq: u64, at: Option<String>, changed: &[String], ledger: Value) -> Value {
    let mut view = Map::new();
    view.insert("v".into(), json!(V));
    let body = serde_json::to_value(limits).unwrap_or_default();
    view.insert("specimen".into(), json!(limits.specimen));
    view.insert("revision".into(), json!(revision));
    view.insert("seq".into(), json!(seq));
    view.insert("at".into(), json!(at));
    if let Value::Object(members) = body {
        view.extend(members);
    }
    view.insert("changed".into(), json!(changed));
    view.insert("ledger".into(), ledger);
    Value::Object(view)
}

/// How far the laboratory's own finished trials lie from their lines and its thread containers from their means.
fn own_scatter(lab: &Lab) -> Value {
    let one = |sums: Sums| {
        let pooled = sums.pooled();
        let sd = (pooled.df > 0).then(|| pooled.variance().sqrt());
        json!({"sd_percent": sd, "degrees_of_freedom": pooled.df, "specimens": sums.specimens})
    };
    let all = lab.statistics();
    json!({"cup": one(all.cup), "cone": one(all.cone), "threads": one(all.threads)})
}

impl Desk {
    pub(super) fn limits_view(&self, r: &Recorded) -> Option<Value> {
        let Fact::LimitsComputed { revision, changed, limits: body, .. } = &r.fact else { return None };
        let hash = self.reader.fact(r.seq).ok().flatten().map(|f| f.hash.to_string());
        let tail = self.ledger.tail();
        let ledger = json!({"id": tail.id.to_string(), "epoch": tail.epoch, "seq": r.seq, "hash": hash});
        Some(limits(body, *revision, r.seq, Some(r.at.rfc3339()), changed, ledger))
    }

    pub(super) fn head_view(&self, at: &Stamp) -> Value {
        let tail = self.ledger.tail();
        let signed = self.signed.as_ref().filter(|s| s.seq == tail.last_seq && s.epoch == tail.epoch);
        json!({
            "v": V, "seq": tail.last_seq, "at": signed.map_or_else(|| at.rfc3339(), |s| rfc3339(s.at_utc_us)),
            "ledger": tail.id.to_string(), "epoch": tail.epoch, "hash": tail.last_hash.to_string(),
            "signature": signed.map(|s| hex(&s.signature)), "key": signed.map(|s| hex(&s.key)),
        })
    }

    pub(super) fn instrument_view(&self, index: usize) -> Value {
        let ear = &self.ears[index];
        let setup = &self.setup.instruments[index];
        let state = self.lab.instrument(&setup.name);
        json!({
            "v": V, "seq": self.next_seq - 1,
            "at": ear.last_heard.or(state.and_then(|s| s.since)).map(|s| s.rfc3339()),
            "instrument": setup.name, "kind": setup.kind, "benches": setup.benches, "profile": setup.profile, "port": setup.port,
            "state": ear.connection, "port_open": ear.port_open, "detail": state.and_then(|s| s.detail.clone()),
            "since": state.and_then(|s| s.since).map(|s| s.rfc3339()),
            "last_heard": ear.last_heard.map(|s| s.rfc3339()),
            "stale": ear.stale(), "unconfirmed": ear.unconfirmed,
            "live": ear.reading.map(|(reading, at)| json!({
                "mass_g": reading.mass.grams(), "steady": reading.mark, "basis": reading.basis, "at": at.rfc3339(), "stale": ear.stale(),
            })),
            "lines": ear.understood, "rejects": ear.rejects, "last_reject": ear.last_reject,
            "overrun_lines": state.map_or(0, |s| s.overrun_lines),
            "balance_checks": state.map(balance_checks), "cup_check": state.and_then(|s| s.cup_checks.last()).map(cup_check),
        })
    }

    /// Ports that are there and that no instrument of the settings has.
    pub(super) fn offer_view(&self, at: &Stamp) -> Value {
        let ports = self.beside.get(super::OFFERS).cloned().unwrap_or_else(|| json!([]));
        json!({"v": V, "seq": self.next_seq - 1, "at": at.rfc3339(), "ports": ports})
    }

    pub(super) fn offer_topic(&self, at: &Stamp) -> super::Publish {
        super::Publish { topic: String::from("offer"), payload: Some(super::group::payload(&self.offer_view(at))) }
    }

    /// Presence, as it is published.
    pub fn presence(&self, state: &str, at: &Stamp) -> Value {
        let tail = self.ledger.tail();
        json!({
            "v": V, "seq": tail.last_seq, "at": at.rfc3339(), "state": state, "not_recording": self.not_recording,
            "room": self.watched.says(), "clock": self.lab.clock().says(),
            "ledger": tail.id.to_string(), "epoch": tail.epoch, "program": env!("CARGO_PKG_VERSION"),
        })
    }

    /// Answers an ask that only reads.
    pub(super) fn read(&self, read: &Read, now: &Stamp) -> String {
        match read {
            Read::Status => json!({"ok": true, "status": self.status(now)}).to_string(),
            Read::Latest(bench) => self.read_latest(bench),
            Read::Document { kind, id } => self.read_document(kind, id),
            Read::FactsAfter { seq, limit } => self.read_facts(*seq, *limit),
            Read::Advice { bench, specimen, wish } => self.read_advice(bench.as_ref(), specimen.as_ref(), wish),
            Read::Would(asks) => {
                let refused = self.lab.would_refuse(asks, now, self.next_seq);
                let refused: Vec<Value> = refused.iter().map(|(n, r)| json!({"n": n, "says": r.0})).collect();
                json!({"ok": true, "refused": refused}).to_string()
            }
            Read::Shelf => json!({"ok": true, "shelf": shelf(&self.lab, now)}).to_string(),
            Read::Loose => json!({"ok": true, "loose": loose(&self.lab)}).to_string(),
        }
    }

    fn read_latest(&self, bench: &str) -> String {
        let Some(bench) = BenchName::new(bench).ok().and_then(|b| self.lab.bench(&b)) else {
            let hint = meant(bench, self.lab.benches().map(|b| b.name.as_str()));
            return refusal(&format!("there is no bench {bench}{hint}"));
        };
        let latest = bench.latest.as_ref().map(|l| {
            json!({
                "seq": l.seq, "mass_ug": l.mass, "container": l.container, "role": l.role, "loose": l.role.is_none(),
                "why": l.loose, "at": l.at.rfc3339(),
            })
        });
        let guide = self.lab.guide(&bench.name);
        json!({"ok": true, "latest": latest, "next": guide.map(|g| g.next)}).to_string()
    }

    fn read_advice(&self, bench: Option<&BenchName>, specimen: Option<&SpecimenId>, wish: &Wish) -> String {
        let (advice, about) = match (bench, specimen) {
            (_, Some(id)) => {
                let hint = meant(id.as_str(), self.lab.specimens().map(|s| s.id.as_str()).filter(|s| *s != id.as_str()));
                (self.lab.advice_for(id, wish), format!("there is no specimen {id}{hint}, or it is finished"))
            }
            (Some(name), None) if self.lab.bench(name).is_none() => {
                let hint = meant(name.as_str(), self.lab.benches().map(|b| b.name.as_str()));
                (None, format!("there is no bench {name}{hint}"))
            }
            (Some(name), None) => {
                (self.lab.advice(name, wish), format!("no limit is in work at bench {name}: name the specimen"))
            }
            (None, None) => (None, String::from("name a bench or a specimen")),
        };
        match advice {
            Some(advice) => json!({"ok": true, "advice": advice}).to_string(),
            None => refusal(&about),
        }
    }

    fn read_document(&self, kind: &str, id: &str) -> String {
        if !["specimen", "container", "bench", "instrument", "loose", "statistics"].contains(&kind) {
            return refusal("a document is of the kind specimen, container, bench, instrument, loose or statistics");
        }
        match self.reader.document(kind, id) {
            Err(e) => refusal(&e.to_string()),
            Ok(None) => {
                let hint = match kind {
                    "specimen" => meant(id, self.lab.specimens().map(|s| s.id.as_str())),
                    "container" => meant(id, self.lab.containers().map(|c| c.id.as_str())),
                    "bench" => meant(id, self.lab.benches().map(|b| b.name.as_str())),
                    "instrument" => meant(id, self.lab.instruments().map(|i| i.name.as_str())),
                    _ => String::new(),
                };
                refusal(&format!("there is no {kind} {id}{hint}"))
            }
            Ok(Some(stored)) => {
                let document: Value = serde_json::from_slice(&stored.body).unwrap_or_default();
                json!({"ok": true, "kind": kind, "id": id, "seq": stored.seq, "document": document}).to_string()
            }
        }
    }

    fn read_facts(&self, seq: u64, limit: usize) -> String {
        match self.reader.facts_after(seq, limit) {
            Err(e) => refusal(&e.to_string()),
            Ok(facts) => {
                let facts: Vec<Value> = facts.iter().map(|f| serde_json::from_slice(&f.body).unwrap_or_default()).collect();
                json!({"ok": true, "facts": facts}).to_string()
            }
        }
    }

    fn status(&self, now: &Stamp) -> Value {
        let tail = self.ledger.tail();
        let instruments: Vec<Value> = (0..self.ears.len()).map(|i| self.instrument_view(i)).collect();
        let benches: Vec<Value> = self.lab.benches().map(|b| bench(&self.lab, b, tail.last_seq)).collect();
        let specimens: Vec<&SpecimenId> = self.lab.specimens().filter(|s| s.open()).map(|s| &s.id).collect();
        json!({
            "v": V, "at": now.rfc3339(), "program": env!("CARGO_PKG_VERSION"), "station": self.setup.station,
            "room": self.watched.says(), "clock": self.lab.clock().says(),
            "not_recording": self.not_recording, "ledger": tail.id.to_string(), "epoch": tail.epoch, "seq": tail.last_seq,
            "hash": tail.last_hash.to_string(), "inputs": tail.last_input, "delivered_through": self.delivered, "broker_trouble": self.broker,
            "state_dir": self.setup.state_dir, "open_specimens": specimens, "loose": self.lab.loose_open().count(),
            "backup": crate::backup::Note::read(std::path::Path::new(&self.setup.state_dir)).view(),
            "instruments": instruments, "benches": benches, "own_scatter": own_scatter(&self.lab),
            "offers": self.beside.get(super::OFFERS), "recording": self.beside.get("recording"), "unread": self.beside.get("unread"),
        })
    }
}

/// Checks of a balance with a reference mass, oldest first: enough for a chart of its drift.
fn balance_checks(state: &Instrument) -> Vec<Value> {
    let one = |c: &BalanceCheck| json!({"at": c.at.rfc3339(), "error_g": grams(c.error), "tolerance_g": grams(c.tolerance), "passed": c.passed(), "by": c.by});
    state.checks.iter().map(one).collect()
}

fn cup_check(c: &CupCheck) -> Value {
    json!({"at": c.at.rfc3339(), "drop_height_mm": c.drop_height_mm, "wear": c.wear, "base": c.base, "tool": c.tool, "by": c.by})
}
