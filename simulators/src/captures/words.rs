//! Words that the invented instruments use: words of everyday language and made-up ones, of no maker.

/// Words before a mass.
pub(super) const PREFIXES: [&str; 16] = [
    "LOAD", "Massa:", "VEKT", "PESO", "Last", "sample=", "Ori", "tulo:", "M>", "PAN", "Vaha", "w", "AK7", "Schale", "netra:", "#",
];

/// Steady and moving, as words.
pub(super) const STEADY_WORDS: [(&str, &str); 10] = [
    ("REST", "MOVE"),
    ("ruhig", "laeuft"),
    ("OK", ".."),
    ("STA", "DYN"),
    ("calm", "busy"),
    ("FIX", "VAR"),
    ("quieto", "mueve"),
    ("still", "swing"),
    ("<=>", "<~>"),
    ("lepo", "liike"),
];

/// Steady and moving, as one character.
pub(super) const STEADY_SIGNS: [(&str, &str); 12] = [
    ("S", "U"),
    ("s", "d"),
    ("R", "M"),
    ("=", "~"),
    ("!", "?"),
    ("A", "B"),
    ("1", "0"),
    ("0", "1"),
    ("*", "%"),
    ("Q", "W"),
    ("F", "V"),
    ("_", "^"),
];

/// Only steady is marked.
pub(super) const STEADY_ONLY: [&str; 6] = ["*", "=", "ok", "S", "!", "rest"];
/// Only moving is marked.
pub(super) const MOVING_ONLY: [&str; 6] = ["~", "?", "mv", "%", "D", "swing"];

/// Gross and net, in words of the trade.
pub(super) const BASIS_WORDS: [(&str, &str); 7] =
    [("G", "N"), ("GROSS", "NET"), ("Brutto", "Netto"), ("BR", "NT"), ("BRUT", "NET"), ("lordo", "netto"), ("gross", "net")];

/// Gross, tare and net on slips.
pub(super) const SLIP_WORDS: [(&str, &str, &str); 6] = [
    ("GROSS", "TARE", "NET"),
    ("Brutto", "Tara", "Netto"),
    ("BRUT", "TARE", "NET"),
    ("lordo", "tara", "netto"),
    ("Gross", "Tare", "Net"),
    ("BRUTO", "TARA", "NETO"),
];

/// A balance that holds too much, or cannot weigh.
pub(super) const ERRORS: [&str; 8] = ["OVER", "-OL-", "Err 3", "E 04", "^^^^^^", "------", "too much", "FAULT 12"];

/// Before numbers of runs.
pub(super) const DROP_WORDS: [&str; 10] = ["DROP", "tick", "Fall", "golpe", "blow", "n=", "Coup:", "hit", "isku", "#"];
/// When a run is over.
pub(super) const END_WORDS: [&str; 8] = ["STOP", "total", "Ende", "fin", "SUM=", "done", "loppu", "Result:"];
