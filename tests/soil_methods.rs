//! The shipped method files, and the contradictions a method file can hold.

mod soil_common;

use soil_common::{METHODS, method};
use tarecup_core::method::{LiquidHow, Method};

#[test]
fn shipped_methods_have_no_fault_and_a_marked_source_for_each_number() {
    for (name, _) in METHODS {
        let method = method(name);
        assert_eq!(method.name.as_str(), *name);
        assert_eq!(method.faults(), [], "{name}");
        assert_eq!(method.edition, "as stated by the laboratory");
        for (key, source) in &method.source {
            let marked = ["[pub]", "[mem]", "[calc]", "[practice]"].iter().any(|mark| source.contains(mark));
            assert!(marked, "{name}: {key} has no mark: {source}");
        }
    }
}

/// One change to a method, and the key path that must be named for it.
fn fault_of(change: impl FnOnce(&mut Method)) -> Vec<String> {
    let mut method = method("d4318-multipoint");
    change(&mut method);
    method
        .faults()
        .into_iter()
        .map(|(key, says)| {
            assert!(says.contains(": "), "no remedy in: {says}");
            key
        })
        .collect()
}

#[test]
fn each_contradiction_is_named_by_its_key() {
    assert_eq!(fault_of(|m| m.liquid.windows[1] = [30, 20]), ["liquid.windows"]);
    assert_eq!(fault_of(|m| m.liquid.windows[0] = [25, 36]), ["liquid.windows"]);
    assert_eq!(fault_of(|m| m.liquid.trials = 2), ["liquid.trials"]);
    assert_eq!(fault_of(|m| m.liquid.trials = 101), ["liquid.trials"]);
    assert_eq!(fault_of(|m| m.plastic.containers = 0), ["plastic.containers"]);
    assert_eq!(fault_of(|m| m.liquid.rate_per_s = [2.1, 1.9]), ["liquid.rate_per_s"]);
    assert_eq!(fault_of(|m| m.liquid.rate_per_s = [f64::NAN, 2.0]), ["liquid.rate_per_s"]);
    assert_eq!(fault_of(|m| m.drying.hours = 0.0), ["drying.hours"]);
    assert_eq!(fault_of(|m| m.drying.constant_hours = -1.0), ["drying.constant_hours"]);
    assert_eq!(fault_of(|m| m.drying.oven_celsius = [115.0, 105.0]), ["drying.oven_celsius"]);
    assert_eq!(fault_of(|m| m.rounding.decimals = 9), ["rounding.decimals"]);
    assert_eq!(fault_of(|m| m.liquid.balance_reads_g = f64::INFINITY), ["liquid.balance_reads_g"]);
    assert_eq!(fault_of(|m| m.liquid.how = LiquidHow::OnePoint), ["liquid.exponent"]);
    assert_eq!(fault_of(|m| drop(m.source.remove("drying.hours"))), ["drying.hours"]);
    assert_eq!(fault_of(|m| drop(m.source.insert("liquid.wndows".into(), "x".into()))), ["source.liquid.wndows"]);
    // New numbers bring their own want of a source.
    assert_eq!(fault_of(|m| m.liquid.spread_at_least = Some(10)), ["liquid.spread_at_least"]);
    assert_eq!(fault_of(|m| m.liquid.exponent = Some(0.121)), ["liquid.exponent", "liquid.exponent"]);
    let reversed = fault_of(|m| m.liquid.drops = [35, 15]);
    assert!(reversed.contains(&"liquid.drops".into()));
}

#[test]
fn an_unknown_key_is_refused() {
    let text = METHODS[0].1.replace("trials = 3", "trials = 3\ntrails = 3");
    let refused = toml::from_str::<Method>(&text).unwrap_err().to_string();
    assert!(refused.contains("trails"), "{refused}");
}
