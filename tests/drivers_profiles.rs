//! Every shipped profile against lines of its dialect, lines that say
//! something else, damaged lines, and lines of other instruments.
//!
//! The dialects are the project's own; their legends stand in the profile
//! files, and the lines here were written from those legends by hand.

use std::sync::Arc;
use tarecup_core::signal::{Basis, Mark, Reading, Signal};
use tarecup_drivers::frame::{Framer, How};
use tarecup_drivers::heard::What;
use tarecup_drivers::profile::{Kind, Profile, ProfileText, Talks};

macro_rules! shipped {
    ($($name:literal),* $(,)?) => {
        const SHIPPED: &[(&str, &str)] = &[$(($name, include_str!(concat!("../config/profiles/", $name, ".toml")))),*];
    };
}
shipped!(
    "signed-steady",
    "plain-stream",
    "print-line",
    "slip-gross-net",
    "asked-long",
    "comma-stream",
    "framed-xor",
    "drop-line",
    "running-total",
    "byte-per-drop",
    "contact-closure",
    "plain-code",
    "framed-code",
);

fn profile(name: &str) -> Arc<Profile> {
    let (_, toml) = SHIPPED.iter().find(|(n, _)| *n == name).expect("a shipped profile");
    let text: ProfileText = toml::from_str(toml).unwrap_or_else(|e| panic!("{name}: {e}"));
    Arc::new(Profile::compile(text).unwrap_or_else(|e| panic!("{name}: {e}")))
}

/// One line of words for what a frame meant.
fn words(what: &What) -> String {
    match what {
        What::Signal(Signal::Mass(Reading { mass, step, mark, basis })) => {
            let mark = match mark {
                Mark::Steady => " steady",
                Mark::Moving => " moving",
                Mark::Unmarked => "",
            };
            let basis = match basis {
                Basis::Gross => " gross",
                Basis::Net => " net",
                Basis::Unmarked => "",
            };
            format!("{} ug by {}{mark}{basis}", mass.ug(), step.ug())
        }
        What::Signal(Signal::Overload) => "overload".into(),
        What::Signal(Signal::Underload) => "underload".into(),
        What::Signal(Signal::NotReady) => "not ready".into(),
        What::Signal(Signal::Drop) => "drop".into(),
        What::Signal(Signal::Total(n)) => format!("total {n}"),
        What::Signal(Signal::End(Some(n))) => format!("end {n}"),
        What::Signal(Signal::End(None)) => "end".into(),
        What::Signal(Signal::Code(text)) => format!("code {text}"),
        What::Nothing => "nothing".into(),
        What::Reject(reason) => reason.word().into(),
    }
}

/// Feeds bytes through framer and decoder as a port does; what each frame meant.
fn heard(profile: &Arc<Profile>, bytes: &[u8]) -> Vec<String> {
    let mut framer = Framer::new(profile.framing().clone());
    let mut decoder = profile.decoder();
    framer.opened(true);
    let mut out = Vec::new();
    framer.push(bytes, |piece| {
        let what = decoder.decode_piece(piece);
        // A stored frame means the same when it is decoded again later.
        if piece.how == How::Whole {
            assert_eq!(what, profile.decode(piece.bytes));
        }
        out.push(words(&what));
    });
    framer.lost(|piece| out.push(words(&decoder.decode_piece(piece))));
    out
}

fn check(name: &str, cases: &[(&str, &str)]) {
    let profile = profile(name);
    for (bytes, wanted) in cases {
        let got = heard(&profile, bytes.as_bytes()).join("; ");
        assert_eq!(&got, wanted, "{name}: {bytes:?}");
    }
}

#[test]
fn signed_steady() {
    check(
        "signed-steady",
        &[
            ("+   23.4571 g  S\r\n", "23457100 ug by 100 steady"),
            ("-    0.0002 g  U\r\n", "-200 ug by 100 moving"),
            ("+     21.43 g  S\r\n", "21430000 ug by 10000 steady"),
            ("+    0.0213 kg  S\r\n", "21300000 ug by 100000 steady"),
            ("+  21430.02 mg  S\r\n", "21430020 ug by 10 steady"),
            ("+---------- g  O\r\n", "overload"),
            ("+ ---------- g  O\r\n", "overload"),
            ("----------- g  O\r\n", "underload"),
            ("\r\n", "nothing"),
            // A digit lost on the way is not another mass.
            ("+   23.457 g  S\r\n", "no_pattern"),
            ("+   2.4571 g  S\r\n", "no_pattern"),
            ("+   23.4571 g  X\r\n", "no_pattern"),
            ("+   23\x004571 g  S\r\n", "no_pattern"),
            ("x+   23.4571 g  S\r\n", "no_pattern"),
            ("+   23.4571 lb  S\r\n", "no_pattern"),
            ("+  999999.9 g  S\r\n", "mass"),
            ("+0.00000001 g  S\r\n", "mass"),
            ("DROP 17\r\n", "wrong_kind"),
            ("STOP 17\r\n", "wrong_kind"),
            ("+   23.4571 g", "cut_off"),
        ],
    );
}

#[test]
fn plain_stream() {
    check(
        "plain-stream",
        &[
            ("     23.46 g\r\n", "23460000 ug by 10000"),
            ("     -0.02 g\r\n", "-20000 ug by 10000"),
            ("   0.02346 kg\r\n", "23460000 ug by 10000"),
            ("OVER\r\n", "overload"),
            ("      OVER g\r\n", "overload"),
            ("     UNDER g\r\n", "underload"),
            ("     23.46\r\n", "no_pattern"),
            ("     23,46 g\r\n", "no_pattern"),
            ("     2 3.46 g\r\n", "no_pattern"),
            ("     1e3.0 g\r\n", "no_pattern"),
            ("END 25\r\n", "wrong_kind"),
        ],
    );
}

#[test]
fn print_line() {
    check(
        "print-line",
        &[
            ("G      23.46 g\r\n", "23460000 ug by 10000 gross"),
            ("N      -0.02 g\r\n", "-20000 ug by 10000 net"),
            ("       23.46 g\r\n", "23460000 ug by 10000"),
            ("N    0.02346 kg\r\n", "23460000 ug by 10000 net"),
            ("WAIT\r\n", "not ready"),
            ("OVER\r\n", "overload"),
            ("UNDER\r\n", "underload"),
            ("T      23.46 g\r\n", "no_pattern"),
            ("G     23.46 g\r\n", "no_pattern"),
            ("tick\r\n", "no_pattern"),
        ],
    );
    assert_eq!(profile("print-line").talks(), Talks::PrintOnKey);
}

#[test]
fn slip_gross_net() {
    check(
        "slip-gross-net",
        &[
            ("GROSS       33.39 g\r\nTARE        21.43 g\r\nNET         11.96 g\r\n\r\n", "33390000 ug by 10000 gross"),
            ("GROSS       33.39 g\r\nTARE        21.43 g\r\nNET         11.96 g\r\n\x0c", "33390000 ug by 10000 gross"),
            ("GROSS       33.39 g\r\n\r\n", "33390000 ug by 10000 gross"),
            ("NET         11.96 g\r\n\r\n", "11960000 ug by 10000 net"),
            (
                "GROSS       33.39 g\r\n\x0c\r\n\r\nGROSS       33.40 g\r\n\r\n",
                "33390000 ug by 10000 gross; nothing; 33400000 ug by 10000 gross",
            ),
            ("GROSS OVER\r\n\r\n", "overload"),
            ("NOT AT REST\r\n\r\n", "not ready"),
            // Half a slip has no gross mass to take, and its net one is not taken instead.
            ("TARE        21.43 g\r\nNET         11.96 g\r\n\r\n", "no_pattern"),
            ("GROSS       33.39 g\r\nT", "cut_off"),
            ("GROSS       33.39\r\n\r\n", "no_pattern"),
        ],
    );
    assert_eq!(profile("slip-gross-net").talks(), Talks::PrintOnKey);
}

#[test]
fn asked_long() {
    check(
        "asked-long",
        &[
            ("THE PAN HOLDS +   23.4571 g AT REST\r\n", "23457100 ug by 100 steady"),
            ("THE PAN HOLDS -    0.0012 g MOVING\r\n", "-1200 ug by 100 moving"),
            ("THE PAN HOLDS TOO MUCH\r\n", "overload"),
            ("THE PAN HOLDS TOO LITTLE\r\n", "underload"),
            ("NOT READY\r\n", "not ready"),
            ("WHAT MASS IS ON THE PAN NOW PLEASE\r\n", "nothing"),
            ("THE PAN HOLDS +   23.4571 g\r\n", "no_pattern"),
            ("HOLDS +   23.4571 g AT REST\r\n", "no_pattern"),
        ],
    );
    let profile = profile("asked-long");
    assert_eq!(profile.talks(), Talks::Asked);
    let ask = profile.ask().expect("an asked balance");
    assert_eq!(ask.send, b"WHAT MASS IS ON THE PAN NOW PLEASE\r\n");
    assert_eq!(ask.every.as_millis(), 250);
}

#[test]
fn comma_stream() {
    check(
        "comma-stream",
        &[
            ("g  +    23,4571  \r\n", "23457100 ug by 100 steady"),
            ("g  -     0,0012 ~\r\n", "-1200 ug by 100 moving"),
            ("kg +    0,02346  \r\n", "23460000 ug by 10000 steady"),
            ("g  + ^^^^^^^^^^  \r\n", "overload"),
            ("g  - __________ ~\r\n", "underload"),
            ("g  +    23.4571  \r\n", "no_pattern"),
            ("g  +   23,4571  \r\n", "no_pattern"),
            ("   +    23,4571  \r\n", "no_pattern"),
        ],
    );
}

#[test]
fn framed_xor() {
    // Check digits by hand: the exclusive or of the ASCII codes, as in the legend.
    check(
        "framed-xor",
        &[
            ("\x02+0023.4571g S\x0317", "23457100 ug by 100 steady"),
            ("\x02-0000.0012g U\x0312", "-1200 ug by 100 moving"),
            ("\x02OVERLOAD\x0308", "overload"),
            ("\x02+0023.4571g S\x0318", "checksum"),
            ("\x02+0023.4572g S\x0317", "checksum"),
            ("\x02+0023.4571g S\x03zz", "checksum"),
            ("+0023.4571g S\x0317", "no_pattern"),
            ("\x02+0023.4\x02+0023.4571g S\x0317", "no_pattern; 23457100 ug by 100 steady"),
            ("\x02+0023.4571g S\x0317\r\n\x02OVERLOAD\x0308", "23457100 ug by 100 steady; nothing; overload"),
            ("\x02\x0300", "nothing"),
        ],
    );
}

#[test]
fn drop_line() {
    check(
        "drop-line",
        &[
            ("tick\r\ntick\r\n", "drop; drop"),
            ("done\r\n", "end"),
            ("done 27\r\n", "end 27"),
            ("ticktick\r\n", "no_pattern"),
            ("tic\r\n", "no_pattern"),
            ("+   23.4571 g  S\r\n", "wrong_kind"),
            ("g  +    23,4571  \r\n", "wrong_kind"),
        ],
    );
}

#[test]
fn running_total() {
    check(
        "running-total",
        &[
            ("DROP 1\r\n", "total 1"),
            ("DROP 17\r\n", "total 17"),
            ("STOP 17\r\n", "end 17"),
            ("END 25\r\n", "end 25"),
            ("DROP 0\r\n", "total 0"),
            ("DROP 9999999999\r\n", "number"),
            ("DROP 1000000\r\n", "number"),
            ("DROP -1\r\n", "no_pattern"),
            ("DROP 17 g\r\n", "no_pattern"),
            ("     17.00 g\r\n", "wrong_kind"),
        ],
    );
}

#[test]
fn byte_per_drop() {
    check(
        "byte-per-drop",
        &[
            ("***", "drop; drop; drop"),
            ("*=1\r\n", "drop; end 1"),
            ("\r\n", "nothing"),
            ("x*", "no_pattern; drop"),
            ("=99999999\r\n", "number"),
            ("+   23.4571 g  S\r\n", "wrong_kind"),
        ],
    );
}

#[test]
fn plain_code() {
    check(
        "plain-code",
        &[
            ("C11\r", "code C11"),
            ("C11\r\n", "code C11; nothing"),
            ("C11\n", "code C11"),
            ("C11\r\nC12\r\n", "code C11; code C12; nothing"),
            ("]C1C11\r", "code C11"),
            ("]Q1C11\t\r", "code C11"),
            ("]Q1+by-AB\r", "code +by-AB"),
            ("+plastic\r", "code +plastic"),
            ("\r\n", "nothing; nothing"),
            ("C\x0711\r", "code"),
            (" \t \r", "nothing"),
            (
                "0123456789012345678901234567890123456789012345678901234567890123\n",
                "code 0123456789012345678901234567890123456789012345678901234567890123",
            ),
            ("01234567890123456789012345678901234567890123456789012345678901234\n", "code"),
            ("+   23.4571 g  S\r\n", "wrong_kind; nothing"),
            ("DROP 17\r\n", "wrong_kind; nothing"),
        ],
    );
    let profile = profile("plain-code");
    assert_eq!(heard(&profile, b"C\xff11\r"), ["code"]);
}

#[test]
fn framed_code() {
    check(
        "framed-code",
        &[
            ("\x02C11\x03", "code C11"),
            ("\x02]C1C11\x03", "code C11"),
            ("\x02]Q1+oven-in\x03\r\n", "code +oven-in; nothing"),
            ("\x02C11\x03\x02C12\x03", "code C11; code C12"),
            // Half a code is none, before or after the whole one.
            ("11\x03\x02C12\x03", "no_pattern; code C12"),
            ("\x02C1\x02C12\x03", "no_pattern; code C12"),
            ("\x02\x03", "nothing"),
            ("\x02+   23.4571 g  S\x03", "wrong_kind"),
        ],
    );
}

#[test]
fn contact_closure() {
    check(
        "contact-closure",
        &[
            ("CTS closed\nDSR closed\nDCD closed\nRI closed\n", "drop; drop; drop; drop"),
            ("CTS opened, 3 edges\n", "nothing"),
            ("CTS chatters\n", "not ready"),
            ("CTS unwatched for 45 ms\n", "not ready"),
            ("CTS close\n", "no_pattern"),
            ("DTR closed\n", "no_pattern"),
        ],
    );
}

/// Lines of every dialect that carry a mass, a count or a code.
const SPOKEN: &[(&str, Kind, &str)] = &[
    ("signed-steady", Kind::Balance, "+   23.4571 g  S\r\n"),
    ("plain-stream", Kind::Balance, "     23.46 g\r\n"),
    ("print-line", Kind::Balance, "G      23.46 g\r\n"),
    ("slip-gross-net", Kind::Balance, "GROSS       33.39 g\r\nTARE        21.43 g\r\nNET         11.96 g\r\n\r\n"),
    ("asked-long", Kind::Balance, "THE PAN HOLDS +   23.4571 g AT REST\r\n"),
    ("comma-stream", Kind::Balance, "g  +    23,4571  \r\n"),
    ("framed-xor", Kind::Balance, "\x02+0023.4571g S\x0317"),
    ("drop-line", Kind::Counter, "tick\r\n"),
    ("running-total", Kind::Counter, "DROP 17\r\nSTOP 17\r\n"),
    ("byte-per-drop", Kind::Counter, "***=3\r\n"),
    ("contact-closure", Kind::Counter, "CTS closed\nCTS opened, 3 edges\n"),
    ("plain-code", Kind::Scanner, "C11\r\n"),
    ("framed-code", Kind::Scanner, "\x02C11\x03"),
];

#[test]
fn no_mass_becomes_a_count_and_no_count_a_mass() {
    let mut understood = 0;
    for (own, kind, _) in SPOKEN {
        let profile = profile(own);
        for (other, other_kind, lines) in SPOKEN {
            let got = heard(&profile, lines.as_bytes());
            let of_kind = |w: &String| match other_kind {
                Kind::Balance => w.contains(" ug by "),
                Kind::Counter => ["drop", "total", "end"].iter().any(|c| w.starts_with(c)),
                Kind::Scanner => w.starts_with("code "),
            };
            if own == other {
                // The control: on its own port every line is understood.
                understood += got.iter().filter(|w| of_kind(w)).count();
            } else if kind != other_kind && *kind != Kind::Scanner {
                let taken = got.iter().filter(|w| !is_reject(w));
                assert_eq!(taken.count(), 0, "{other} heard by {own}: {got:?}");
            } else if *kind == Kind::Scanner {
                assert!(!got.iter().any(|w| w.contains(" ug by ") || w.starts_with("total")), "{other} heard by {own}: {got:?}");
            }
        }
    }
    assert_eq!(understood, 17);
}

fn is_reject(words: &str) -> bool {
    tarecup_drivers::heard::Reject::from_word(words).is_some() || words == "nothing"
}

#[test]
fn every_shipped_profile_is_described_and_keeps_its_name() {
    for (name, toml) in SHIPPED {
        let profile = profile(name);
        assert_eq!(profile.name(), *name);
        assert!(!profile.about().is_empty(), "{name}");
        assert!(profile.serial().baud.is_some() && profile.serial().frame.is_some(), "{name}");
        assert!(toml.starts_with("# A "), "{name}: a legend stands at the top");
        let again: ProfileText = toml::from_str(&toml::to_string(profile.text()).expect("written")).expect("read");
        assert_eq!(&again, profile.text(), "{name}");
    }
}

fn refused(toml: &str) -> (String, String) {
    let text: ProfileText = toml::from_str(toml).unwrap_or_else(|e| panic!("{e}"));
    let fault = Profile::compile(text).expect_err("refused");
    (fault.key, fault.says)
}

fn balance(rest: &str) -> String {
    format!("kind = \"balance\"\n{rest}")
}

#[test]
fn faults_name_the_key_and_the_remedy() {
    const FRAME: &str = "frame = { ends = [\"\\r\\n\"] }\n";
    let line = |pattern: &str| format!("{FRAME}[[line]]\npattern = '{pattern}'\n");
    let cases: &[(String, &str, &str)] = &[
        (balance(&line(r"(?<mas>\d+) (?<unit>g)")), "line[1].pattern", "did you mean 'mass'?"),
        (balance(&line(r"(?<mass>\d+)")), "line[1].pattern", "unit"),
        (balance(&line(r"(?<mass>\d*)(?<unit>g?)")), "line[1].pattern", "empty line"),
        (balance(&line(r"(?<mass>\d+")), "line[1].pattern", "not a regular expression"),
        (balance(&line(r"a) | (?<mass>b")), "line[1].pattern", "not a regular expression"),
        (balance(&line(r"(?<mass>(?:\d{100}){100}{100}) (?<unit>g)")), "line[1].pattern", "too large"),
        (balance(&line(r"\d+")), "line[1].pattern", "means nothing"),
        (balance(&line(r"(?<total>\d+)")), "line", "'mass'"),
        (balance(&line(r"(?<mass>\d+)(?<unit>g)(?<total>\d+)")), "line[1].pattern", "at once"),
        (balance(&format!("{}means = \"overload\"", line(r"(?<mass>\d+)(?<unit>g)"))), "line[1].means", "leave 'means' out"),
        (balance(&format!("{}means = \"drop\"", line("x"))), "line[1].means", "only a counter"),
        (balance(&format!("{}width = 0", line(r"(?<mass>\d+)(?<unit>g)"))), "line[1].width", "choose 1 to 256"),
        (balance(&line(r"(?<basis>G)(?<mass>\d+)(?<unit>g)")), "basis", "gross"),
        (balance("frame = {}\n[[line]]\npattern = 'x'\nmeans = 'nothing'"), "frame", "never end"),
        (balance(&format!("unit = \"stone\"\n{}", line(r"(?<mass>\d+)"))), "unit", "ug, mg, g or kg"),
        (balance(&format!("talks = \"asked\"\nunit = \"g\"\n{}", line(r"(?<mass>\d+)"))), "talks", "[ask]"),
        (balance(&format!("largest_g = 0\nunit = \"g\"\n{}", line(r"(?<mass>\d+)"))), "largest_g", "choose"),
        (balance(&format!("name = \"a b\"\nunit = \"g\"\n{}", line(r"(?<mass>\d+)"))), "name", "cannot stand"),
        (
            balance(&format!("unit = \"g\"\nask = {{ send = \"\", every_ms = 250 }}\n{}", line(r"(?<mass>\d+)"))),
            "ask.send",
            "1 to 512",
        ),
        (
            balance(&format!("unit = \"g\"\nask = {{ send = \"?\", every_ms = 1 }}\n{}", line(r"(?<mass>\d+)"))),
            "ask.every_ms",
            "20",
        ),
        (balance(&format!("unit = \"g\"\ncheck = {{ kind = \"xor\" }}\n{}", line(r"(?<mass>\d+)"))), "frame.tail", "tail = 2"),
        (format!("kind = \"counter\"\ntalks = \"print-on-key\"\n{}", line(r"(?<total>\d+)")), "talks", "only balances"),
        (format!("kind = \"scanner\"\n{}means = 'nothing'", line("x")), "line", "'code'"),
    ];
    for (toml, key, says) in cases {
        let (got_key, got_says) = refused(toml);
        assert!(got_key == *key && got_says.contains(says), "{toml}\n{got_key}: {got_says}");
    }
    // The control: without its fault the profile is taken.
    let text = toml::from_str(&balance(&line(r"(?<mass>\d+) (?<unit>g)"))).expect("read");
    assert!(Profile::compile(text).is_ok());
}

#[test]
fn unknown_keys_are_refused_by_the_reader() {
    let toml = "kind = \"balance\"\nbuad = 9600\n[frame]\nends = [\"\\n\"]\n[[line]]\npattern = 'x'";
    let error = toml::from_str::<ProfileText>(toml).expect_err("refused").to_string();
    assert!(error.contains("buad") && error.contains("line 2"), "{error}");
}

#[test]
fn groups_of_another_kind_tell_of_swapped_cables() {
    let toml = "kind = \"counter\"\nframe = { ends = [\"\\n\"] }\n[[line]]\npattern = 'n(?<total>\\d+)'\n[[line]]\npattern = '(?<mass>\\d+)'";
    let text: ProfileText = toml::from_str(toml).expect("read");
    let profile = Arc::new(Profile::compile(text).expect("compiled"));
    assert_eq!(heard(&profile, b"n3\n17\nx\n"), ["total 3", "wrong_kind", "no_pattern"]);
}

#[test]
fn a_unit_that_is_none_and_one_mark_alone() {
    let toml = "kind = \"balance\"\nlargest_g = 100\nframe = { ends = [\"\\n\"] }\n[[line]]\npattern = '(?<mass>[0-9.]+)(?<unit>[a-z]+)(?<steady>!)?'";
    let text: ProfileText = toml::from_str(toml).expect("read");
    let profile = Arc::new(Profile::compile(text).expect("compiled"));
    let got = heard(&profile, b"1lb\n1g\n1g!\n1.2.3g\n100g\n100.1g\n");
    let wanted = [
        "unit",
        "1000000 ug by 1000000 moving",
        "1000000 ug by 1000000 steady",
        "mass",
        "100000000 ug by 1000000 moving",
        "mass",
    ];
    assert_eq!(got, wanted);
}
