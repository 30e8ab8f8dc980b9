//! Shares of the grading that are no shares.

use super::{SPECIMEN, Worked, note};
use crate::limits::CheckRow;
use alloc::format;
use alloc::vec::Vec;

pub(super) fn check(worked: &Worked, rows: &mut Vec<CheckRow>) {
    let shares = [
        ("clay share", "clay_percent", worked.sheet.clay_percent),
        ("share passing 0.075 mm", "passing_75um_percent", worked.sheet.passing_75um_percent),
    ];
    for (what, name, share) in shares {
        if let Some(share) = share.filter(|s| !(0.0..=100.0).contains(s)) {
            let says = format!("the {what} is given as {share} %; a share lies between 0 and 100 %. It is not used.");
            rows.push(note(name, SPECIMEN, says, Vec::new()));
        }
    }
}
