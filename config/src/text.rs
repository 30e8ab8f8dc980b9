//! From a file to text: bounded, UTF-8, and in words when it cannot be.

use crate::fault::{Fault, Faults, Place};
use std::io::Read;
use std::path::Path;

/// Largest file that is read: 1 MiB.
pub const LARGEST_FILE: usize = 1 << 20;

/// Reads a text file of at most [`LARGEST_FILE`] bytes.
///
/// # Errors
/// One fault that says in words why the file cannot be read, is too large, or
/// is not UTF-8 text (with the line and column of the first wrong byte).
pub fn read_file(path: &Path) -> Result<String, Faults> {
    let name = path.display().to_string();
    let whole = |says: String, expected: &str, try_this: &str| {
        Faults::from(Fault {
            file: name.clone(),
            line: 1,
            column: 1,
            path: String::new(),
            says,
            expected: expected.into(),
            try_this: try_this.into(),
        })
    };
    let unreadable = |e: std::io::Error| {
        let try_this = match e.kind() {
            std::io::ErrorKind::NotFound => "another path, or creating the file",
            std::io::ErrorKind::PermissionDenied => "giving this user the right to read it",
            _ => "opening it with another program to see whether the disk is at fault",
        };
        whole(format!("cannot be read ({e})"), "a readable text file", try_this)
    };
    let kind = std::fs::metadata(path).map_err(unreadable)?;
    if !kind.is_file() {
        // A pipe or terminal would make us wait for ever.
        return Err(whole("is not a plain file".into(), "a text file", "the path of the file itself"));
    }
    let mut bytes = Vec::new();
    let file = std::fs::File::open(path).map_err(unreadable)?;
    file.take(LARGEST_FILE as u64 + 1).read_to_end(&mut bytes).map_err(unreadable)?;
    from_bytes(&name, bytes)
}

/// Takes bytes as the text of the named file.
///
/// # Errors
/// As [`read_file`], except that nothing is read.
pub fn from_bytes(file: &str, bytes: Vec<u8>) -> Result<String, Faults> {
    if bytes.len() > LARGEST_FILE {
        return Err(too_large(file).into());
    }
    String::from_utf8(bytes).map_err(|e| {
        let good = e.utf8_error().valid_up_to();
        let text = String::from_utf8_lossy(&e.as_bytes()[..good]).into_owned();
        let at = Lines::new(&text).place(text.len());
        Faults::from(Fault {
            file: file.into(),
            line: at.line,
            column: at.column,
            path: String::new(),
            says: format!("holds the byte 0x{:02x}, which is not UTF-8", e.as_bytes()[good]),
            expected: "UTF-8 text".into(),
            try_this: "saving the file as UTF-8 in the editor".into(),
        })
    })
}

pub(crate) fn too_large(file: &str) -> Fault {
    Fault {
        file: file.into(),
        line: 1,
        column: 1,
        path: String::new(),
        says: "is larger than 1 MiB".into(),
        expected: "a text file of at most 1 MiB".into(),
        try_this: "looking whether this is the right file, or splitting it".into(),
    }
}

/// Where lines begin, to turn byte offsets into places: in constant time, as
/// all of a file may stand on one line.
pub(crate) struct Lines<'t> {
    text: &'t str,
    starts: Vec<usize>,
    /// Characters before every [`STRIDE`] bytes.
    characters: Vec<usize>,
}

const STRIDE: usize = 512;

impl<'t> Lines<'t> {
    pub(crate) fn new(text: &'t str) -> Self {
        let ends = text.bytes().enumerate().filter(|(_, b)| *b == b'\n').map(|(i, _)| i + 1);
        let starts = std::iter::once(0).chain(ends).collect();
        let mut characters = vec![0];
        for block in text.as_bytes().chunks(STRIDE) {
            characters.push(characters[characters.len() - 1] + characters_in(block));
        }
        Self { text, starts, characters }
    }

    /// Line and column of a byte offset; an offset beyond the end is the end.
    pub(crate) fn place(&self, offset: usize) -> Place {
        let offset = offset.min(self.text.len());
        let line = self.starts.partition_point(|s| *s <= offset);
        let column = self.characters_before(offset) - self.characters_before(self.starts[line - 1]);
        Place { line: count(line), column: count(column + 1) }
    }

    fn characters_before(&self, offset: usize) -> usize {
        let block = offset / STRIDE;
        self.characters[block] + characters_in(&self.text.as_bytes()[block * STRIDE..offset])
    }
}

/// Continuation bytes are not characters of their own.
fn characters_in(bytes: &[u8]) -> usize {
    bytes.iter().filter(|b| **b & 0xC0 != 0x80).count()
}

/// Files end at 1 MiB, so this never saturates in use.
fn count(n: usize) -> u32 {
    u32::try_from(n).unwrap_or(u32::MAX)
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn places_count_characters_not_bytes() {
        let lines = Lines::new("é=1\r\nab\n");
        for (offset, line, column) in [(0, 1, 1), (2, 1, 2), (6, 2, 1), (7, 2, 2), (9, 3, 1), (999, 3, 1)] {
            assert_eq!(lines.place(offset), Place { line, column }, "{offset}");
        }
        let text = "é".repeat(3 * STRIDE);
        let long = Lines::new(&text).place(2 * (2 * STRIDE + 7));
        assert_eq!(long.column as usize, 2 * STRIDE + 8);
    }
}
