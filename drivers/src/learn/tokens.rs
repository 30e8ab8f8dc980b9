//! A line taken apart into numbers, words, marks and blanks.

use super::words;

/// What a token is.
#[derive(Clone, Copy, Debug, PartialEq, Eq, Hash, PartialOrd, Ord)]
pub(super) enum Sort {
    /// Digits with at most one decimal sign, without their sign.
    Number,
    /// A date, a time, or another chain of digits and separators.
    Stamp,
    /// Letters.
    Word,
    /// Anything else that is printed; the same character repeated is one token.
    Mark,
    /// Blanks.
    Blank,
}

/// A token: where it stands in its line.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub(super) struct Token {
    pub(super) sort: Sort,
    pub(super) from: usize,
    pub(super) to: usize,
}

impl Token {
    pub(super) fn of<'a>(&self, line: &'a [u8]) -> &'a [u8] {
        &line[self.from..self.to]
    }
}

/// How commas are to be understood.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub(super) enum Commas {
    /// Between two digits: a decimal comma.
    Decimal,
    /// They part fields.
    Fields,
    /// Either could be meant.
    Unclear,
}

/// How all lines together use commas.
pub(super) fn commas(lines: &[&[u8]]) -> Commas {
    // A line or two of another sort, such as a greeting, do not count among many.
    let few = if lines.len() < 8 { 0 } else { 1 + lines.len() / 30 };
    let (mut fields, mut between, mut points) = (0, 0, 0);
    for line in lines {
        let digit = |i: Option<usize>| i.and_then(|i| line.get(i)).is_some_and(u8::is_ascii_digit);
        let mut seen = [false; 3];
        for (i, b) in line.iter().enumerate() {
            let inside = digit(i.checked_sub(1)) && digit(Some(i + 1));
            match b {
                b',' if inside => seen[0] = true,
                b',' => seen[1] = true,
                b'.' if inside => seen[2] = true,
                _ => {}
            }
        }
        between += usize::from(seen[0]);
        fields += usize::from(seen[1]);
        points += usize::from(seen[2]);
    }
    let (fields, between, points) = (fields > few, between > few, points > few);
    match (fields, between) {
        (true, true) if points => Commas::Fields,
        (true, true) => Commas::Unclear,
        (true, false) => Commas::Fields,
        _ => Commas::Decimal,
    }
}

/// Takes a line apart.
pub(super) fn tokens(line: &[u8], commas: Commas) -> Vec<Token> {
    let mut out = Vec::new();
    let mut at = 0;
    while at < line.len() {
        let (sort, to) = match line[at] {
            b' ' | b'\t' => (Sort::Blank, run(line, at, |b| matches!(b, b' ' | b'\t'))),
            b if b.is_ascii_digit() => digits(line, at, commas),
            b'.' if line.get(at + 1).is_some_and(u8::is_ascii_digit) && !before_is_digit(line, at) => number_from_point(line, at),
            b if b.is_ascii_alphabetic() || b >= 0x80 => (Sort::Word, word(line, at)),
            // What parts fields stands by itself, so that an empty field stays one.
            b'|' | b';' | b',' => (Sort::Mark, at + 1),
            b => (Sort::Mark, run(line, at, |c| c == b)),
        };
        out.push(Token { sort, from: at, to });
        at = to;
    }
    out
}

fn before_is_digit(line: &[u8], at: usize) -> bool {
    at > 0 && line[at - 1].is_ascii_digit()
}

fn run(line: &[u8], at: usize, is: impl Fn(u8) -> bool) -> usize {
    line[at..].iter().position(|b| !is(*b)).map_or(line.len(), |n| at + n)
}

fn number_from_point(line: &[u8], at: usize) -> (Sort, usize) {
    (Sort::Number, run(line, at + 1, |b| b.is_ascii_digit()))
}

/// Letters; `gS` is a unit and a mark, `Sg` a mark and a unit, `netg` a label and a unit.
fn word(line: &[u8], at: usize) -> usize {
    let to = run(line, at, |b| b.is_ascii_alphabetic() || b >= 0x80);
    let capitals = run(&line[..to], at, |b| b.is_ascii_uppercase());
    let own = words::unit(&line[at..to]).is_some();
    if capitals > at && capitals < to && !own && &line[at..to] != b"Mg" && matches!(&line[capitals..to], b"g" | b"kg" | b"mg") {
        return capitals;
    }
    let labelled = ["kg", "mg", "g"].iter().filter_map(|u| line[at..to].strip_suffix(u.as_bytes()));
    if let Some(label) = labelled.into_iter().find(|stem| !own && stem.len() > 2 && words::label(stem).is_some()) {
        return at + label.len();
    }
    let small = run(&line[..to], at, |b| b.is_ascii_lowercase());
    if small < to && small > at && words::unit(&line[at..small]).is_some() { small } else { to }
}

/// A number, or a chain such as a date.
fn digits(line: &[u8], at: usize, commas: Commas) -> (Sort, usize) {
    let joins = |b: u8| matches!(b, b'.' | b':' | b'/') || (b == b',' && commas != Commas::Fields);
    let mut to = at;
    let (mut separators, mut colon) = (0, false);
    loop {
        to = run(line, to, |b| b.is_ascii_digit());
        match line.get(to) {
            Some(&b) if joins(b) && line.get(to + 1).is_some_and(u8::is_ascii_digit) => {
                separators += 1;
                colon |= matches!(b, b':' | b'/');
                to += 1;
            }
            _ => break,
        }
    }
    // 2024-01-05: a minus sign between digits, twice.
    if separators == 0 {
        let part = |from: usize| {
            let has = line.get(from) == Some(&b'-') && line.get(from + 1).is_some_and(u8::is_ascii_digit);
            has.then(|| run(line, from + 1, |b| b.is_ascii_digit()))
        };
        if let Some(end) = part(to).and_then(part) {
            return (Sort::Stamp, end);
        }
        // 12. is a whole number with its point.
        let point = line.get(to) == Some(&b'.') && line.get(to + 1).is_none_or(|b| *b != b'.');
        return (Sort::Number, if point { to + 1 } else { to });
    }
    (if separators > 1 || colon { Sort::Stamp } else { Sort::Number }, to)
}

#[cfg(test)]
mod tests {
    use super::*;

    fn parts(line: &str, how: Commas) -> Vec<(Sort, &str)> {
        let tokens = tokens(line.as_bytes(), how);
        tokens.iter().filter(|t| t.sort != Sort::Blank).map(|t| (t.sort, &line[t.from..t.to])).collect()
    }

    #[test]
    fn lines_are_taken_apart() {
        use Sort::{Mark, Number, Stamp, Word};
        for (line, how, want) in [
            (
                "ST,GS,+0012.34g",
                Commas::Fields,
                vec![(Word, "ST"), (Mark, ","), (Word, "GS"), (Mark, ","), (Mark, "+"), (Number, "0012.34"), (Word, "g")],
            ),
            ("-  12,34 kg", Commas::Decimal, vec![(Mark, "-"), (Number, "12,34"), (Word, "kg")]),
            ("Sg12.34", Commas::Decimal, vec![(Word, "S"), (Word, "g"), (Number, "12.34")]),
            ("12.34gS", Commas::Decimal, vec![(Number, "12.34"), (Word, "g"), (Word, "S")]),
            ("2024-01-05 10:20:30", Commas::Decimal, vec![(Stamp, "2024-01-05"), (Stamp, "10:20:30")]),
            ("5.1.2024 7/8", Commas::Decimal, vec![(Stamp, "5.1.2024"), (Stamp, "7/8")]),
            ("12.34- g", Commas::Decimal, vec![(Number, "12.34"), (Mark, "-"), (Word, "g")]),
            (".50 12. **", Commas::Decimal, vec![(Number, ".50"), (Number, "12."), (Mark, "**")]),
            ("17,12.5", Commas::Fields, vec![(Number, "17"), (Mark, ","), (Number, "12.5")]),
        ] {
            assert_eq!(parts(line, how), want, "{line}");
        }
    }

    #[test]
    fn commas_part_fields_or_are_decimal_or_cannot_be_told() {
        let of = |lines: &[&str]| commas(&lines.iter().map(|l| l.as_bytes()).collect::<Vec<_>>());
        assert_eq!(of(&["12,34 g"]), Commas::Decimal);
        assert_eq!(of(&["ST,12.34,g"]), Commas::Fields);
        assert_eq!(of(&["ST,12,34,g"]), Commas::Unclear);
        assert_eq!(of(&["17,12.34,g"]), Commas::Fields);
    }
}
