//! Dialects that are learned from what they say, and captures that are refused with what is missing.

use tarecup_core::quantity::{Mass, MassUnit};
use tarecup_core::signal::Basis;
use tarecup_drivers::learn::{Hints, Learned, Piece, learn};
use tarecup_drivers::profile::{Kind, Profile};

fn of(bytes: &[u8]) -> Learned {
    told(bytes, &Hints::default())
}

fn told(bytes: &[u8], hints: &Hints) -> Learned {
    learn(&[Piece { at_us: None, bytes }], hints)
}

/// A pan that is loaded twice and unloaded: hundredths of a gram, and whether it moves.
const LOADS: [(i64, bool); 22] = [
    (0, false),
    (0, false),
    (0, false),
    (412, true),
    (1893, true),
    (2346, false),
    (2346, false),
    (2346, false),
    (2347, false),
    (2346, false),
    (1120, true),
    (308, true),
    (-1, false),
    (-1, false),
    (0, false),
    (5127, true),
    (9931, true),
    (10450, false),
    (10450, false),
    (10450, false),
    (3300, true),
    (0, false),
];

/// What a line says of hundredths of a gram.
type Say = fn(i64, bool) -> String;

fn decimal(h: i64) -> String {
    format!("{}.{:02}", h.abs() / 100, h.abs() % 100)
}

fn sign(h: i64) -> char {
    if h < 0 { '-' } else { '+' }
}

fn signed(h: i64) -> String {
    if h < 0 { format!("-{}", decimal(h)) } else { decimal(h) }
}

fn capture(say: Say, end: &str) -> Vec<u8> {
    LOADS.iter().flat_map(|(h, moves)| (say(*h, *moves) + end).into_bytes()).collect()
}

/// Asserts that every line was read as it was meant.
fn assert_read(name: &str, learned: &Learned, steady: bool, basis: Basis) {
    assert!(learned.profile.is_some(), "{name}: {:?}", learned.missing);
    assert_eq!(learned.kind, Some(Kind::Balance), "{name}");
    let profile = Profile::compile(learned.profile.clone().expect("a profile")).expect("compiled");
    let text = || format!("{name}: {:#?}", profile.text());
    let got: Vec<(i64, Option<bool>, Basis)> = learned.readings.iter().map(|r| (r.mass.ug(), r.steady, r.basis)).collect();
    let want: Vec<(i64, Option<bool>, Basis)> = LOADS.iter().map(|(h, m)| (h * 10_000, steady.then_some(!m), basis)).collect();
    assert_eq!(got, want, "{}", text());
    assert!(learned.missing.is_empty() && learned.confidence > 0.6);
}

#[test]
fn lines_of_every_look_are_understood() {
    let table: [(&str, Say, &str, bool, Basis); 20] = [
        ("bare", |h, _| format!("{:>10} g", signed(h)), "\r\n", false, Basis::Unmarked),
        ("left aligned", |h, _| format!("{} g", signed(h)), "\n", false, Basis::Unmarked),
        (
            "sign apart",
            |h, m| format!("{}{:>9} g {}", sign(h), decimal(h), if m { "D" } else { "S" }),
            "\r",
            true,
            Basis::Unmarked,
        ),
        (
            "fields",
            |h, m| format!("{},GS,{}{:>08},g", if m { "US" } else { "ST" }, sign(h), decimal(h)),
            "\r\n",
            true,
            Basis::Gross,
        ),
        (
            "glued mark",
            |h, m| format!("W={}{:>07}g{}", sign(h), decimal(h), if m { 'Q' } else { 'K' }),
            "\n\r",
            true,
            Basis::Unmarked,
        ),
        ("only at rest", |h, m| format!("{:>9} g{}", signed(h), if m { "" } else { " *" }), "\r\n", true, Basis::Unmarked),
        ("only moving", |h, m| format!("{} g  {:>8}", if m { "~" } else { " " }, signed(h)), "\r\n", true, Basis::Unmarked),
        ("unit at rest", |h, m| format!("{:>9}{}", signed(h), if m { "" } else { " g" }), "\r\n", true, Basis::Unmarked),
        (
            "comma",
            |h, m| format!("g {}{:>8}{}", sign(h), decimal(h).replace('.', ","), if m { '?' } else { ' ' }),
            "\r\n",
            true,
            Basis::Unmarked,
        ),
        ("sign after", |h, _| format!("N {:>8}{} g", decimal(h), if h < 0 { '-' } else { ' ' }), "\r\n", false, Basis::Net),
        (
            "kilograms",
            |h, m| format!("{}{}0.{:05} kg {}", if m { '!' } else { '=' }, sign(h), h.abs(), "B"),
            "\r\n",
            true,
            Basis::Gross,
        ),
        ("milligrams", |h, _| format!("{:>9} mg", h * 10), "\r\n", false, Basis::Unmarked),
        ("semicolon", |h, _| format!("{}{:>07}g", sign(h), decimal(h)), ";", false, Basis::Unmarked),
        ("nul", |h, m| format!("{} {:>8} g", if m { "MOVING" } else { "RESTING" }, signed(h)), "\0", true, Basis::Unmarked),
        ("counted", |h, m| format!("#17 {:>8} g {}", signed(h), if m { 'x' } else { 'o' }), "\r\n", true, Basis::Unmarked),
        ("dated", |h, _| format!("2031-04-05 10:20:30 {:>8} g", signed(h)), "\r\n", false, Basis::Unmarked),
        ("written out", |h, _| format!("Net weight: {:>8} grams", signed(h)), "\r\n", false, Basis::Net),
        (
            "etx",
            |h, m| format!("\u{2}{}{:>8}g{}", sign(h), decimal(h), if m { 'M' } else { ' ' }),
            "\u{3}",
            true,
            Basis::Unmarked,
        ),
        (
            "stx crlf",
            |h, m| format!("\u{2}{}{:>8}g{}", sign(h), decimal(h), if m { 'M' } else { ' ' }),
            "\u{3}\r\n",
            true,
            Basis::Unmarked,
        ),
        ("no end", |h, m| format!("{}{:>07}g{}", sign(h), decimal(h), if m { 'M' } else { 'R' }), "", true, Basis::Unmarked),
    ];
    for (name, say, end, steady, basis) in table {
        assert_read(name, &of(&capture(say, end)), steady, basis);
    }
}

fn crc(bytes: &[u8]) -> u16 {
    let mut crc = 0xFFFFu16;
    for b in bytes {
        crc ^= u16::from(*b);
        for _ in 0..8 {
            crc = if crc & 1 == 1 { (crc >> 1) ^ 0xA001 } else { crc >> 1 };
        }
    }
    crc
}

#[test]
fn check_digits_are_found_and_verified() {
    type Frame = fn(&str) -> Vec<u8>;
    let table: [(&str, Frame); 6] = [
        ("xor after etx", |t| format!("\u{2}{t}\u{3}{:02X}", t.bytes().fold(0, |a, b| a ^ b)).into_bytes()),
        ("sum before crlf", |t| format!("{t}{:02x}\r\n", t.bytes().fold(0, u8::wrapping_add)).into_bytes()),
        ("two's complement after a star", |t| format!("{t}*{:02X}\r", t.bytes().fold(0, u8::wrapping_sub)).into_bytes()),
        ("sum with stx and etx", |t| {
            let body = format!("\u{2}{t}\u{3}");
            format!("{body}{:02X}\r\n", body.bytes().fold(0, u8::wrapping_add)).into_bytes()
        }),
        ("crc in hex", |t| format!("{t}{:04X}\r\n", crc(t.as_bytes())).into_bytes()),
        ("crc in binary", |t| [b"\x02", t.as_bytes(), b"\x03", &crc(t.as_bytes()).to_le_bytes()[..]].concat()),
    ];
    for (name, frame) in table {
        let line = |h: i64, m: bool| format!("{}{:>8} g {}", sign(h), decimal(h), if m { 'U' } else { 'S' });
        let mut bytes: Vec<u8> = LOADS.iter().flat_map(|(h, m)| frame(&line(*h, *m))).collect();
        let learned = of(&bytes);
        assert_read(name, &learned, true, Basis::Unmarked);
        assert!(learned.profile.as_ref().is_some_and(|p| p.check.is_some()), "{name}");
        // A digit that changed on the way takes its line with it.
        let at = bytes.len() / 2 + bytes[bytes.len() / 2..].iter().position(|b| *b == b'.').unwrap_or(0) - 1;
        bytes[at] = if bytes[at] == b'7' { b'8' } else { b'7' };
        let damaged = of(&bytes);
        assert_eq!(damaged.readings.len(), LOADS.len() - 1, "{name} {:?}", damaged.missing);
    }
}

#[test]
fn slips_give_the_gross_mass() {
    let slip = |g: i64, t: i64| {
        format!("SAMPLE 12\r\nGROSS {:>8} g\r\nTARE  {:>8} g\r\nNET   {:>8} g\r\n\r\n", decimal(g), decimal(t), decimal(g - t))
    };
    let learned = of([slip(3339, 2143), slip(4518, 2143), slip(5120, 2143)].concat().as_bytes());
    let got: Vec<_> = learned.readings.iter().map(|r| (r.mass.ug() / 10_000, r.basis)).collect();
    assert_eq!(got, [(3339, Basis::Gross), (4518, Basis::Gross), (5120, Basis::Gross)], "{learned:#?}");
    let one = |g: i64, t: i64| format!("G {:>8} g T {:>8} g N {:>8} g\r\n", decimal(g), decimal(t), decimal(g - t));
    let learned = of([one(3339, 2143), one(4518, 2143), one(5120, 2200)].concat().as_bytes());
    let got: Vec<_> = learned.readings.iter().map(|r| (r.mass.ug() / 10_000, r.basis)).collect();
    assert_eq!(got, [(3339, Basis::Gross), (4518, Basis::Gross), (5120, Basis::Gross)], "{learned:#?}");
}

#[test]
fn counters_and_scanners() {
    let lines = |l: &[&str]| l.iter().flat_map(|l| [l.as_bytes(), b"\r\n"].concat()).collect::<Vec<u8>>();
    for (name, bytes, kind, counts) in [
        (
            "total",
            lines(&["DROP 1", "DROP 2", "DROP 3", "STOP 3", "DROP 1", "DROP 2", "STOP 2"]),
            Kind::Counter,
            &[1, 2, 3, 3, 1, 2, 2][..],
        ),
        ("bare total", lines(&["001", "002", "003", "004", "005"]), Kind::Counter, &[1, 2, 3, 4, 5]),
        ("each", lines(&["tok", "tok", "tok", "tok", "over=4", "tok", "tok", "over=2"]), Kind::Counter, &[4, 2]),
        ("final", lines(&["drops 27", "drops 31", "drops 22"]), Kind::Counter, &[27, 31, 22]),
        ("bytes", b"****=4\r\n******=6\r\n".to_vec(), Kind::Counter, &[4, 6]),
        ("bytes alone", b"........".to_vec(), Kind::Counter, &[]),
        ("codes", lines(&["C11", "C12", "S-101", "B7"]), Kind::Scanner, &[]),
        ("item numbers", lines(&["4006381333931", "0012345678905", "9780201379624"]), Kind::Scanner, &[]),
    ] {
        let learned = of(&bytes);
        assert_eq!((learned.kind, learned.counts.as_slice()), (Some(kind), counts), "{name} {learned:#?}");
        assert!(learned.profile.is_some() && learned.readings.is_empty(), "{name}");
        assert_eq!(learned.codes.is_empty(), kind == Kind::Counter, "{name}");
    }
}

#[test]
fn what_is_ambiguous_is_refused_with_what_is_missing() {
    let lines = |l: &[&str]| l.iter().flat_map(|l| [l.as_bytes(), b"\r\n"].concat()).collect::<Vec<u8>>();
    for (bytes, word) in [
        (lines(&["  0.00", " 12.34", " 12.34", " 25.00"]), "--unit"),
        (lines(&["000000 g", "001234 g", "001234 g", "002500 g"]), "--mass"),
        (lines(&["1,234 g", "1,234 g", "2,500 g", "2,500 g"]), "thousands"),
        (lines(&["ST,1,23,g", "ST,1,23,g", "ST,4,56,g", "ST,4,56,g"]), "commas"),
        (lines(&["12.34 g", "12.34 g", "12.34 g", "12.34 g"]), "load and unload"),
        (lines(&["1.00 g A", "1.00 g B", "1.00 g A", "1.00 g B", "5.00 g B", "5.00 g A", "5.00 g A", "5.00 g B"]), "'A' and 'B'"),
        (lines(&["-1.00 g", "-1.00 g", "-2.00 g", "-3.00 g"]), "minus sign"),
        (lines(&["1.00 g 2.00 g", "1.50 g 2.50 g", "1.75 g 3.00 g"]), "gross from net"),
        (lines(&["C1", "C2", "C3", "C4"]), "--kind"),
        (lines(&["1042", "1042", "3071", "2215"]), "--kind"),
        (lines(&["1.00 oz", "2.00 oz", "2.00 oz", "3.00 oz"]), "unit"),
        (lines(&["0.00 g", "DROP 1", "0.00 g", "DROP 2", "5.00 g", "DROP 3", "5.00 g", "5.00 g"]), "two kinds"),
        (b"\r\n\r\n".to_vec(), "nothing was heard"),
        (lines(&["1.00 g"]), "too few"),
        ((0..400u32).map(|i| (i.wrapping_mul(2_654_435_761) >> 13) as u8).collect(), ""),
    ] {
        let learned = of(&bytes);
        let shown = String::from_utf8_lossy(&bytes);
        assert!(learned.profile.is_none() && learned.readings.is_empty(), "{shown} {learned:#?}");
        assert!(learned.missing.len() == 1 && learned.missing[0].contains(word), "{shown} {:?}", learned.missing);
    }
}

#[test]
fn known_masses_and_a_unit_settle_what_the_lines_do_not_say() {
    let lines = |l: &[&str]| l.iter().flat_map(|l| [l.as_bytes(), b"\r\n"].concat()).collect::<Vec<u8>>();
    let grams = |g: &[i64]| g.iter().map(|g| Mass::from_ug(g * 1_000_000)).collect::<Vec<_>>();
    let masses = |g: &[i64]| Hints { masses: grams(g), ..Hints::default() };
    let implied = lines(&["000000 g", "000000 g", "010000 g", "010001 g", "010000 g"]);
    let learned = told(&implied, &masses(&[0, 100]));
    assert_eq!(learned.profile.as_ref().and_then(|p| p.decimals), Some(2), "{learned:#?}");
    assert_eq!(learned.readings[3].mass, Mass::from_ug(100_010_000));
    assert!(told(&implied, &masses(&[0, 55])).missing[0].contains("55.00 g was not read"));
    let bare = lines(&["0.0000", "0.0000", "0.1000", "0.1000"]);
    let learned = told(&bare, &masses(&[0, 100]));
    assert_eq!(learned.profile.as_ref().and_then(|p| p.unit.clone()).as_deref(), Some("kg"), "{learned:#?}");
    let learned = told(&bare, &Hints { unit: Some(MassUnit::Gram), ..Hints::default() });
    assert_eq!(learned.readings[2].mass, Mass::from_ug(100_000));
    let comma = lines(&["1,234 kg", "1,234 kg", "2,500 kg", "2,500 kg"]);
    assert_eq!(told(&comma, &masses(&[2500])).readings[0].mass, Mass::from_ug(1_234_000_000));
}

#[test]
fn a_cut_first_line_is_never_a_mass() {
    let whole = capture(|h, _| format!("{} g", signed(h + 1234)), "\r\n");
    for cut in 1..7 {
        let learned = of(&whole[cut..]);
        let first = learned.readings.first().map(|r| r.mass.ug());
        assert!(learned.profile.is_some(), "{:?}", learned.missing);
        assert_eq!(first, Some(12_340_000), "cut after {cut}");
        assert_eq!(learned.readings.len(), LOADS.len() - 1);
    }
    assert_eq!(of(&whole).readings.len(), LOADS.len());
}

#[test]
fn overload_and_parity_are_understood() {
    let mut bytes = capture(|h, _| format!("{:>8} g", signed(h)), "\r\n");
    bytes.extend(b"  ^^^^^^ g\r\n  ^^^^^^ g\r\n    0.00 g\r\n");
    let learned = of(&bytes);
    assert_eq!(learned.readings.len(), LOADS.len() + 1, "{:?}", learned.missing);
    let even: Vec<u8> = bytes.iter().map(|b| if b.count_ones() % 2 == 1 { b | 0x80 } else { *b }).collect();
    let stripped = of(&even);
    assert_eq!(stripped.readings, learned.readings);
    let frame = stripped.profile.and_then(|p| p.serial).and_then(|s| s.frame).map(String::from);
    assert_eq!(frame.as_deref(), Some("7E1"));
}

/// Masses in hundredths of a gram, with steadiness and basis, as they were read.
fn read(learned: &Learned) -> Vec<(i64, Option<bool>, Basis)> {
    learned.readings.iter().map(|r| (r.mass.ug() / 10_000, r.steady, r.basis)).collect()
}

#[test]
fn gross_and_net_by_turns_with_marks_of_rest() {
    let mut bytes = Vec::new();
    let mut want = Vec::new();
    for (i, (h, moves)) in LOADS.iter().chain(&LOADS).enumerate() {
        let net = i >= LOADS.len();
        bytes.extend(
            format!("{} {} {:>8} g\r\n", if net { "N" } else { "G" }, if *moves { "o" } else { "." }, signed(*h)).into_bytes(),
        );
        want.push((*h, Some(!moves), if net { Basis::Net } else { Basis::Gross }));
    }
    assert_eq!(read(&of(&bytes)), want);
}

#[test]
fn slips_of_other_kinds() {
    let one = |n: i64, h: i64| format!("No. {n:03}\r\nDATE 2031-04-0{n}\r\nWEIGHT {:>8} g\r\n\r\n", decimal(h));
    let bytes: String = [2346, 5120, 3300, 10450, 812].iter().zip(1..).map(|(h, n)| one(n, *h)).collect();
    let learned = of(bytes.as_bytes());
    assert_eq!(read(&learned).iter().map(|r| r.0).collect::<Vec<_>>(), [2346, 5120, 3300, 10450, 812], "{learned:#?}");
    let net = |h: i64, t: i64| format!("N {:>8} g\r\nT {:>8} g\r\n", decimal(h), decimal(t));
    let bytes: String = [(2346, 1000), (5120, 1010), (3300, 1020), (812, 990)].iter().map(|(h, t)| net(*h, *t)).collect();
    assert_eq!(read(&of(bytes.as_bytes())), [2346, 5120, 3300, 812].map(|h| (h, None, Basis::Net)));
    // Masses under words that say nothing of tare.
    let odd = |a: i64, b: i64| format!("TIN {:>8} g\r\nSOIL {:>8} g\r\n\r\n", decimal(a), decimal(b));
    let bytes: String = [(2346, 1000), (5120, 1010), (3300, 1020), (812, 990)].iter().map(|(a, b)| odd(*a, *b)).collect();
    assert!(of(bytes.as_bytes()).missing[0].contains("gross from net"), "{:?}", of(bytes.as_bytes()).missing);
    let full = |a: i64| format!("LOAD {:>8} g\r\nFULL   210.00 g\r\n\r\n", decimal(a));
    let bytes: String = [2346, 5120, 3300, 812].iter().map(|a| full(*a)).collect();
    assert_eq!(read(&of(bytes.as_bytes())), [2346, 5120, 3300, 812].map(|h| (h, None, Basis::Unmarked)));
}

#[test]
fn numbers_beside_the_mass_are_left_alone() {
    for say in [
        (|i: usize, h: i64| format!("{:04} {:>8} g 21.5 C", i + 1, signed(h))) as fn(usize, i64) -> String,
        |i, h| format!("S/N 4711 #{} {:>8} g", i + 1, signed(h)),
        |i, h| format!("10:20:{:02} {:>8} g", i, signed(h)),
        |_, h| format!("{:>8} g 210.00 g", signed(h)),
        |i, h| format!("{},{},g", i + 1, signed(h)),
    ] {
        let bytes: Vec<u8> = LOADS.iter().enumerate().flat_map(|(i, (h, _))| (say(i, *h) + "\r\n").into_bytes()).collect();
        let learned = of(&bytes);
        let want: Vec<_> = LOADS.iter().map(|(h, _)| (*h, None, Basis::Unmarked)).collect();
        assert!(read(&learned) == want || read(&learned) == want[1..], "{} {learned:#?}", say(1, 2346));
    }
}

#[test]
fn noise_between_lines_is_left_out() {
    let whole = capture(|h, m| format!("{:>8} g {}", signed(h), if m { 'U' } else { 'S' }), "\r\n");
    let lines: Vec<&[u8]> = whole.split_inclusive(|b| *b == b'\n').collect();
    for noise in [&b"\xF3\x81~\x00q\r\n"[..], b"#@!\r\n", b"\r\n", b"    1#.34 g S\r\n", b"BALANCE READY\r\n"] {
        let mut bytes = lines[..9].concat();
        bytes.extend(noise);
        bytes.extend(lines[9..].concat());
        bytes.extend(b"   12");
        let want: Vec<_> = LOADS.iter().map(|(h, m)| (*h, Some(!m), Basis::Unmarked)).collect();
        let learned = of(&bytes);
        assert_eq!(read(&learned), want, "{} {:?}", noise.escape_ascii(), learned.missing);
    }
}

#[test]
fn two_balances_on_one_line_are_refused() {
    let bytes: String =
        LOADS.iter().map(|(h, _)| format!("{:>8} g\r\nWT: 0.{:03} kg !\r\n", signed(*h), h.abs() % 1000)).collect();
    assert!(of(bytes.as_bytes()).profile.is_none(), "{:#?}", of(bytes.as_bytes()));
    let bytes: String =
        LOADS.iter().map(|(h, _)| format!("{:>8} g\r\n+ {}.{} g\r\n", signed(*h), h.abs() % 90, h.abs() % 10)).collect();
    assert!(of(bytes.as_bytes()).profile.is_none(), "{:#?}", of(bytes.as_bytes()));
}

#[test]
fn frames_without_an_end_are_found_where_only_one_place_fits() {
    let whole = capture(|h, m| format!("{}{}gS{}", sign(h), zeros(h), if m { 'M' } else { 'R' }), "");
    let want: Vec<_> = LOADS.iter().map(|(h, m)| (*h, Some(!m), Basis::Unmarked)).collect();
    assert_eq!(read(&of(&whole)), want);
    for cut in 1..11 {
        // The end is missing: the beginning is where a frame begins.
        let learned = of(&whole[..whole.len() - cut]);
        assert!(learned.profile.is_none() || read(&learned) == want[..21], "{cut} {learned:#?}");
        // The beginning is missing: never another number for it.
        let learned = of(&whole[cut..]);
        assert!(learned.profile.is_none() || read(&learned) == want[1..], "{cut} {learned:#?}");
    }
    assert_eq!(read(&of(&whole[..whole.len() - 3])), want[..21]);
}

fn zeros(h: i64) -> String {
    format!("{:04}.{:02}", h.abs() / 100, h.abs() % 100)
}

#[test]
fn codes_that_end_like_a_mass_are_none() {
    for lines in ["A10G\r\nA22G\r\nB31G\r\nB7G\r\n", "10G\r\n22G\r\n31G\r\n7G\r\n"] {
        let learned = of(lines.as_bytes());
        assert!(learned.kind != Some(Kind::Balance) || learned.profile.is_none(), "{learned:#?}");
    }
}
