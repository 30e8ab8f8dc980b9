//! The name that was meant: for refusals, wherever names are written.

use alloc::format;
use alloc::string::String;
use alloc::vec::Vec;

/// More names than this are not looked through: a refusal must stay cheap.
const LOOKED_AT: usize = 5_000;
/// No name is so long, in characters.
const LONGEST: usize = 64;

/// ` (did you mean …?)` for the known name nearest to what was written, if one is near; else nothing.
pub fn meant<'n>(written: &str, known: impl Iterator<Item = &'n str>) -> String {
    nearest(written, known).map_or(String::new(), |name| format!(" (did you mean {name}?)"))
}

/// The known name nearest to what was written: at most a third of its characters differ, case apart.
pub fn nearest<'n>(written: &str, known: impl Iterator<Item = &'n str>) -> Option<&'n str> {
    let length = written.chars().take(LONGEST + 1).count();
    if length > LONGEST {
        return None;
    }
    let most = (length / 3).max(1);
    let near = known.take(LOOKED_AT).map(|name| (distance(written, name, most), name)).filter(|(d, _)| *d <= most);
    near.min_by_key(|(d, _)| *d).map(|(_, name)| name)
}

/// Changed, missing, added or exchanged neighbouring characters, case apart; beyond `most` only that it is more.
fn distance(a: &str, b: &str, most: usize) -> usize {
    let lower = |t: &str| -> Vec<char> { t.chars().map(|c| c.to_ascii_lowercase()).collect() };
    let (a, b) = (lower(a), lower(b));
    if a.len().abs_diff(b.len()) > most {
        return most + 1;
    }
    let mut before: Vec<usize> = Vec::new();
    let mut above: Vec<usize> = (0..=b.len()).collect();
    for (i, x) in a.iter().enumerate() {
        let mut row = alloc::vec![i + 1];
        for (j, y) in b.iter().enumerate() {
            let mut best = (above[j] + usize::from(x != y)).min(above[j + 1] + 1).min(row[j] + 1);
            if i > 0 && j > 0 && *x == b[j - 1] && a[i - 1] == *y {
                best = best.min(before[j - 1] + 1);
            }
            row.push(best);
        }
        (before, above) = (above, row);
    }
    above[b.len()]
}

#[cfg(test)]
mod tests {
    use super::{distance, nearest};

    #[test]
    fn the_nearest_name_is_found_and_a_far_one_is_not() {
        let known = ["north", "south", "S-101", "S-102", "C11"];
        let near = |written: &str| nearest(written, known.into_iter());
        assert_eq!(near("nroth"), Some("north"));
        assert_eq!(near("NORTH"), Some("north"));
        assert_eq!(near("S101"), Some("S-101"));
        assert_eq!(near("c11"), Some("C11"));
        assert_eq!(near("east"), None);
        assert_eq!(near(""), None);
        assert_eq!(near(&"x".repeat(1_000)), None);
    }
    #[test]
    fn each_kind_of_slip_counts_once() {
        for (a, b, d) in [("", "", 0), ("abc", "", 3), ("ab", "ba", 1), ("kitten", "sitting", 3), ("wet_g", "wetg", 1)] {
            assert_eq!(distance(a, b, 9), d, "{a} {b}");
        }
    }
}
