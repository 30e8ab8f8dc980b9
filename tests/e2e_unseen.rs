//! Scenario files that nobody has seen: drawn by chance, played through
//! pseudo-terminals, judged by numpy. `TARECUP_SEED` repeats a run.

mod e2e_support;

use e2e_support::operator::Dice;
use e2e_support::*;
use std::collections::BTreeMap;

const METHODS: [&str; 4] = ["d4318-multipoint", "d4318-one-point", "t89-t90", "iso17892-cup"];

/// Grams of a whole number of steps, as a balance with so many decimals shows them.
fn grams(steps: u64, decimals: u32) -> String {
    let one = 10u64.pow(decimals);
    format!("{}.{:0width$}", steps / one, steps % one, width = decimals as usize)
}

/// A container with soil of a water content near `percent`.
fn soil(dice: &mut Dice, container: String, percent: f64, decimals: u32) -> Slice {
    let one = 10u64.pow(decimals);
    let tare = 15 * one + dice.below(45 * one);
    let dry_soil = 4 * one + dice.below(20 * one);
    let water = (dry_soil as f64 * percent / 100.0) as u64 + 1;
    let dry = tare + dry_soil;
    let mut dries = vec![grams(dry, decimals)];
    // Not quite dry at first, then weighed again.
    if dice.below(4) == 0 {
        dries.insert(0, grams(dry + 1 + dice.below((water / 50).max(1)), decimals));
    }
    Slice { container, tare: grams(tare, decimals), wet: grams(dry + water, decimals), dry: dries, set_aside: false }
}

/// One specimen of a soil drawn by chance; trials fall with the number of drops, roughly.
fn drawn(dice: &mut Dice, no: usize, decimals: u32) -> Sheet {
    let mut free: Vec<u64> = (1..=60).collect();
    let mut container = |dice: &mut Dice| {
        let at = dice.below(free.len() as u64) as usize;
        format!("T{}", free.swap_remove(at))
    };
    let method = METHODS[dice.below(4) as usize];
    let limit = 20.0 + dice.below(900) as f64 / 10.0;
    let slope = 2.0 + dice.below(300) as f64 / 10.0;
    let trials = 2 + dice.below(5);
    let mut liquid = Vec::new();
    for _ in 0..trials {
        let drops = 8 + dice.below(48) as u32;
        let percent = limit - slope * (f64::from(drops) / 25.0).log10() + dice.below(100) as f64 / 100.0;
        let name = container(dice);
        let slice = soil(dice, name, percent.max(8.0), decimals);
        let closures = if dice.below(3) == 0 { vec![drops + 1, drops] } else { vec![drops] };
        liquid.push(Liquid { drops: closures, slice });
    }
    let plastic_at = limit * (0.4 + dice.below(70) as f64 / 100.0);
    let several = |dice: &mut Dice, n: u64, percent: f64, container: &mut dyn FnMut(&mut Dice) -> String| -> Vec<Slice> {
        let mut one = |dice: &mut Dice| {
            let name = container(dice);
            soil(dice, name, percent, decimals)
        };
        (0..n).map(|_| one(dice)).collect()
    };
    let threads = dice.below(4);
    let plastic = several(dice, threads, plastic_at, &mut container);
    let natural_count = dice.below(3);
    let natural = several(dice, natural_count, plastic_at * 1.1, &mut container);
    let mut sheet = sheet(&format!("U-{no}"), method, liquid, plastic);
    sheet.natural = natural;
    if threads == 0 {
        sheet.not_obtainable = Some("plastic".into());
    }
    // Somebody sets one trial aside.
    if sheet.liquid.len() > 3 && dice.below(2) == 0 {
        sheet.liquid[1].slice.set_aside = true;
    }
    sheet
}

#[test]
fn scenarios_drawn_by_chance_come_out_as_numpy_has_them() {
    let mut dice = Dice::thrown("unseen scenarios");
    let dir = tempfile::tempdir().expect("a folder");
    let mut methods = BTreeMap::<String, usize>::new();
    let (mut specimens, mut took) = (0, 0.0);
    for round in 0..3 {
        let decimals = 2 + round as u32;
        let sheets: Vec<Sheet> = (0..16).map(|no| drawn(&mut dice, no, decimals)).collect();
        let file = dir.path().join(format!("unseen-{round}.toml"));
        std::fs::write(&file, scenario(&sheets)).expect("written");
        let (ended, lines) = demo(&file, None);
        // Some lack trials that the method wants: that is told by the code, and the numbers stand all the same.
        assert!(ended.code == 0 || ended.code == 3, "code {}: {}\n{}", ended.code, ended.err, scenario(&sheets));
        assert_judged(&lines, &sheets);
        sheets.iter().for_each(|s| *methods.entry(s.method.clone()).or_default() += 1);
        specimens += sheets.len();
        took += ended.took.as_secs_f64();
    }
    println!("{specimens} specimens drawn by chance {methods:?} in {took:.1} s as numpy has them");
    assert!(methods.len() == METHODS.len(), "every method was drawn: {methods:?}");
}
