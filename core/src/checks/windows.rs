//! Drop windows of the method that no trial of its own lies in.

use super::{LIQUID_LIMIT, Worked, drops_text, facts, note};
use crate::limits::CheckRow;
use crate::method::LiquidHow;
use crate::sheet::Kind;
use alloc::format;
use alloc::vec;
use alloc::vec::Vec;

/// A method with more windows than this is a mistake, and named so when it is read.
pub(crate) const MOST_WINDOWS: usize = 16;

pub(super) fn check(worked: &Worked, rows: &mut Vec<CheckRow>) {
    let windows = &worked.method.liquid.windows;
    let windows = &windows[..windows.len().min(MOST_WINDOWS)];
    match worked.method.liquid.how {
        LiquidHow::FlowLine => uncovered(worked, windows, rows),
        // The cone has a range of penetrations, and its own check.
        LiquidHow::Cone => (),
        LiquidHow::OnePoint => outside(worked, windows, rows),
    }
}

fn uncovered(worked: &Worked, windows: &[[u32; 2]], rows: &mut Vec<CheckRow>) {
    let counted: Vec<f64> = worked.of(Kind::Liquid).filter_map(|t| t.drops).collect();
    // Before the first count there is nothing to say but "begin".
    let Some(&latest) = counted.last() else { return };
    for [low, high] in missing(windows, &counted) {
        let remedy = if latest < f64::from(low) {
            "let the paste dry by mixing; never add dry soil"
        } else if latest > f64::from(high) {
            "add water and mix well"
        } else {
            "count once more near the present water content"
        };
        let says = format!(
            "no trial of its own lies in the window {low} to {high} drops (the latest took {}); {remedy}, then count again.",
            drops_text(latest)
        );
        let about = format!("{LIQUID_LIMIT} {low}-{high}");
        rows.push(note("window", &about, says, worked.facts_of(Kind::Liquid)));
    }
}

/// Windows that are left when every trial is given to one window, as many as
/// possible. Trials in ascending order, each to the window that ends first:
/// for windows on a line this leaves the fewest uncovered.
pub fn missing(windows: &[[u32; 2]], counted: &[f64]) -> Vec<[u32; 2]> {
    let mut counted = counted.to_vec();
    counted.sort_by(f64::total_cmp);
    let mut covered = vec![false; windows.len()];
    for drops in counted {
        let open = |i: &usize| !covered[*i] && f64::from(windows[*i][0]) <= drops && drops <= f64::from(windows[*i][1]);
        if let Some(first) = (0..windows.len()).filter(open).min_by_key(|&i| windows[i][1]) {
            covered[first] = true;
        }
    }
    windows.iter().zip(covered).filter(|(_, covered)| !covered).map(|(w, _)| *w).collect()
}

/// One-point trials must each lie in a window.
fn outside(worked: &Worked, windows: &[[u32; 2]], rows: &mut Vec<CheckRow>) {
    if windows.is_empty() {
        return;
    }
    for t in worked.of(Kind::Liquid) {
        let Some(drops) = t.drops else { continue };
        if windows.iter().any(|[low, high]| f64::from(*low) <= drops && drops <= f64::from(*high)) {
            continue;
        }
        let remedy = if windows.iter().all(|[low, _]| drops < f64::from(*low)) {
            "let the paste dry by mixing, never add dry soil"
        } else {
            "add water and mix well"
        };
        let says = format!(
            "{} drops lie outside what the one-point formula holds for; {remedy}, then count again. The trial is used as it is.",
            drops_text(drops)
        );
        rows.push(note("window", &t.about, says, facts(t.trial)));
    }
}

#[cfg(test)]
mod tests {
    use super::missing;

    const T89: [[u32; 2]; 3] = [[25, 35], [20, 30], [15, 25]];

    #[test]
    fn each_window_wants_a_trial_of_its_own() {
        assert!(missing(&T89, &[31.0, 24.0, 17.0]).is_empty());
        assert!(missing(&T89, &[28.0, 20.0, 15.0]).is_empty());
        // 25 lies in all three, and still fills only one.
        assert_eq!(missing(&T89, &[25.0, 25.0]).len(), 1);
        assert!(missing(&T89, &[25.0, 25.0, 25.0]).is_empty());
        assert_eq!(missing(&T89, &[31.0, 33.0, 17.0]), [[20, 30]]);
        assert_eq!(missing(&T89, &[40.0, 10.0]), T89);
    }

    #[test]
    fn greedy_choice_is_as_good_as_trying_everything() {
        fn best(windows: &[[u32; 2]], trials: &[f64]) -> usize {
            let Some((first, rest)) = windows.split_first() else { return 0 };
            let fits = |d: f64| f64::from(first[0]) <= d && d <= f64::from(first[1]);
            let with = (0..trials.len()).filter(|&i| fits(trials[i])).map(|i| {
                let mut others = trials.to_vec();
                others.remove(i);
                1 + best(rest, &others)
            });
            with.max().unwrap_or(0).max(best(rest, trials))
        }
        let drops = [14.0, 15.0, 20.0, 25.0, 30.0, 35.0, 36.0];
        for code in 0..7usize.pow(4) {
            let trials: alloc::vec::Vec<f64> = (0..4).map(|i| drops[code / 7usize.pow(i) % 7]).collect();
            assert_eq!(3 - missing(&T89, &trials).len(), best(&T89, &trials), "{trials:?}");
        }
    }
}
