//! Lines and cells of a table with commas (RFC 4180: double quotes around a
//! cell, doubled inside). Stricter than spreadsheets: what could be read in two
//! ways is refused.

use super::Fault;

/// Most cells of a line.
const MOST_CELLS: usize = 20;
/// Longest cell, in bytes.
const LONGEST_CELL: usize = 8_000;

/// A line that is not empty.
#[derive(Debug, PartialEq, Eq)]
pub(super) struct Row {
    /// Its number in the file, from 1.
    pub line: usize,
    pub cells: Vec<String>,
}

fn fault(line: usize, says: impl Into<String>) -> Fault {
    Fault { line, column: None, says: says.into() }
}

/// Every line that is not empty, at most `most`.
pub(super) fn rows(text: &str, most: usize) -> Result<Vec<Row>, Fault> {
    let mut rows: Vec<Row> = Vec::new();
    for (n, line) in text.split('\n').enumerate() {
        let line = line.strip_suffix('\r').unwrap_or(line);
        if line.trim_matches([' ', '\t', ',']).is_empty() {
            continue;
        }
        if rows.is_empty() {
            parted_by_commas(line, n + 1)?;
        }
        if rows.len() >= most {
            return Err(fault(n + 1, format!("there are more than {} lines: divide the file", most - 1)));
        }
        rows.push(Row { line: n + 1, cells: cells(line, n + 1)? });
    }
    Ok(rows)
}

/// The first line tells what parts the columns.
fn parted_by_commas(line: &str, n: usize) -> Result<(), Fault> {
    for (sign, name) in [(';', "semicolons"), ('\t', "tabs")] {
        if line.contains(sign) && !line.contains(',') {
            return Err(fault(
                n,
                format!(
                    "the columns are parted by {name}; a comma in such a file may be a decimal comma, and 21,43 could be read in two ways: save it with commas between the columns and decimal points"
                ),
            ));
        }
    }
    Ok(())
}

fn cells(line: &str, n: usize) -> Result<Vec<String>, Fault> {
    let mut cells = Vec::new();
    let mut rest = line;
    loop {
        let (cell, after) = cell(rest, n)?;
        cells.push(cell);
        if cells.len() > MOST_CELLS {
            return Err(fault(n, format!("the line has more than {MOST_CELLS} cells")));
        }
        match after {
            Some(after) => rest = after,
            None => return Ok(cells),
        }
    }
}

/// The first cell, and what comes after its comma.
fn cell(text: &str, n: usize) -> Result<(String, Option<&str>), Fault> {
    let (cell, after) = match text.trim_start_matches(' ').strip_prefix('"') {
        Some(quoted) => in_quotes(quoted, n)?,
        None => {
            let (cell, after) = text.split_once(',').map_or((text, None), |(c, a)| (c, Some(a)));
            if cell.contains('"') {
                return Err(fault(
                    n,
                    "a double quote stands in the middle of a cell: put the whole cell in double quotes and double it",
                ));
            }
            (cell.to_string(), after)
        }
    };
    match cell.len() > LONGEST_CELL {
        true => Err(fault(n, format!("a cell is longer than {LONGEST_CELL} bytes"))),
        false => Ok((cell, after)),
    }
}

fn in_quotes(text: &str, n: usize) -> Result<(String, Option<&str>), Fault> {
    let mut cell = String::new();
    let mut rest = text;
    loop {
        let Some((before, after)) = rest.split_once('"') else {
            return Err(fault(n, "a double quote is not closed on this line; a cell cannot go on in the next line"));
        };
        cell.push_str(before);
        if let Some(more) = after.strip_prefix('"') {
            cell.push('"');
            rest = more;
            continue;
        }
        let after = after.trim_start_matches(' ');
        return match after.strip_prefix(',') {
            Some(next) => Ok((cell, Some(next))),
            None if after.is_empty() => Ok((cell, None)),
            None => Err(fault(n, "there is text after a closing double quote: a comma belongs there")),
        };
    }
}
