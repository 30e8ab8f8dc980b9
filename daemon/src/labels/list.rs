//! Lists of names as a person types them: `C1..C40,C99`.

use super::MOST_LABELS;
use std::collections::BTreeSet;
use tarecup_core::names;

/// Reads a list of names and ranges, in its order, each name once.
///
/// # Errors
/// What is wrong, with what to write.
pub fn names(text: &str) -> Result<Vec<String>, String> {
    let mut all = Vec::new();
    let mut seen = BTreeSet::new();
    for part in text.split(',').map(str::trim).filter(|p| !p.is_empty()) {
        let names = match part.split_once("..") {
            Some((from, to)) => range(from.trim(), to.trim())?,
            None => vec![part.to_owned()],
        };
        for name in names {
            names::check(&name).map_err(|e| format!("\"{}\": {e}", name.escape_debug()))?;
            if seen.insert(name.clone()) {
                all.push(name);
            }
        }
        if all.len() > MOST_LABELS {
            return Err(format!("more than {MOST_LABELS} labels at once; print them in parts"));
        }
    }
    if all.is_empty() {
        return Err(String::from("the list is empty; write names or a range, such as C1..C40 or C1,C2"));
    }
    Ok(all)
}

/// `C1` to `C40`; leading zeros are kept.
fn range(from: &str, to: &str) -> Result<Vec<String>, String> {
    let wrong = |why: &str| Err(format!("\"{from}..{to}\" is no range: {why}; write it like C1..C40 or C001..C120"));
    let (head, first) = split(from);
    let (other, last) = split(to);
    if head != other {
        return wrong("what stands before the number differs");
    }
    let (Ok(low), Ok(high)) = (first.parse::<u32>(), last.parse::<u32>()) else {
        return wrong("both ends need a number at their end");
    };
    if low > high {
        return wrong("it runs backwards");
    }
    if (high - low) as usize >= MOST_LABELS {
        return Err(format!("\"{from}..{to}\" has more than {MOST_LABELS} names; print them in parts"));
    }
    Ok((low..=high).map(|n| format!("{head}{n:0width$}", width = first.len())).collect())
}

/// A name's head and the digits at its end.
fn split(name: &str) -> (&str, &str) {
    name.split_at(name.trim_end_matches(|c: char| c.is_ascii_digit()).len())
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn names_and_ranges() {
        assert_eq!(names("C1, C3 ,C1").unwrap(), ["C1", "C3"]);
        assert_eq!(names("C8..C11").unwrap(), ["C8", "C9", "C10", "C11"]);
        assert_eq!(names("T-098..T-101").unwrap(), ["T-098", "T-099", "T-100", "T-101"]);
        assert_eq!(names("7..9").unwrap(), ["7", "8", "9"]);
        for (text, says) in [
            ("", "the list is empty"),
            ("C1..", "before the number differs"),
            ("C..C", "need a number"),
            ("C1..D4", "before the number differs"),
            ("C4..C1", "backwards"),
            ("C1..C99999", "more than 2000"),
            ("C1..C99999999999", "need a number"),
            ("tin 4", "cannot stand in a name"),
            ("+liquid", "cannot stand in a name"),
            ("é\u{1b}[2J", "cannot stand in a name"),
        ] {
            let fault = names(text).unwrap_err();
            assert!(fault.contains(says) && fault.chars().all(|c| !c.is_control()), "{text}: {fault}");
        }
    }
}
