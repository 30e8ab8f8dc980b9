//! Refuses texts that nest without end before a parser builds them: the
//! parser bounds brackets and dotted keys each by itself, but not together,
//! and taking down a very deep tree would exhaust the stack.

use crate::fault::Faults;
use crate::reader::Reading;

/// Brackets within brackets, and parts of one dotted key. Our files need four.
const DEEPEST: usize = 16;

/// Checks a whole text.
pub(crate) fn check(reading: &Reading<'_>, text: &str) -> Result<(), Faults> {
    let bytes = text.as_bytes();
    let (mut at, mut brackets, mut dots) = (0, 0usize, 0usize);
    while at < bytes.len() {
        match bytes[at] {
            b'"' | b'\'' => {
                at = end_of_string(bytes, at);
                continue;
            }
            b'#' => {
                at += bytes[at..].iter().position(|b| *b == b'\n').unwrap_or(bytes.len() - at);
                continue;
            }
            b'[' | b'{' => (brackets, dots) = (brackets + 1, 0),
            b']' | b'}' => (brackets, dots) = (brackets.saturating_sub(1), 0),
            b'.' => dots += 1,
            b if b.is_ascii_alphanumeric() || matches!(b, b'_' | b'-' | b' ' | b'\t') => {}
            _ => dots = 0,
        }
        if brackets > DEEPEST || dots > DEEPEST {
            let says = "tables or lists lie more than 16 deep here";
            return Err(reading
                .fault(at, "", says, "tables a few levels deep", "taking out what is not part of this file")
                .into());
        }
        at += 1;
    }
    Ok(())
}

/// The offset after the string that begins at `at`; strings in single marks end with their line at the latest.
fn end_of_string(bytes: &[u8], at: usize) -> usize {
    let mark = bytes[at];
    let long = bytes[at..].starts_with(&[mark; 3]);
    let mut i = at + if long { 3 } else { 1 };
    while i < bytes.len() {
        match bytes[i] {
            b'\\' if mark == b'"' => i += 1,
            b'\n' if !long => return i,
            b if b == mark && !long => return i + 1,
            b if b == mark && bytes[i..].starts_with(&[mark; 3]) => return i + 3,
            _ => {}
        }
        i += 1;
    }
    bytes.len()
}
