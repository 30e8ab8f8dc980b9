//! The exact bytes of each dialect, through real pseudo-terminals, and what a placement looks like to a reader.
//!
//! The dialects are this project's own; their columns are described in the heads of the shipped profiles.

use proptest::prelude::*;
use std::io::Read;
use tarecup_simulators::balance::{Balance, Noise, STEADY_LINES, Settings, Shown, Value, placement_lasts_us};
use tarecup_simulators::counter::{CupDialect, CupRun};
use tarecup_simulators::dialect::BalanceDialect;
use tarecup_simulators::pty::Pty;
use tarecup_simulators::rng::Rng;
use tarecup_simulators::{Timed, scanner_bytes};

/// What a program that opens the port as a file reads.
fn through_a_pty(bytes: &[u8]) -> Vec<u8> {
    let dir = tempfile::tempdir().unwrap();
    let link = dir.path().join("port");
    let mut pty = Pty::open(&link).unwrap();
    let mut reader = std::fs::File::open(&link).unwrap();
    pty.write(bytes).unwrap();
    let mut got = vec![0; bytes.len()];
    reader.read_exact(&mut got).unwrap();
    got
}

fn shown(value: Value, steady: bool) -> Shown {
    Shown { value, steady, tared_ug: 0 }
}

fn line(dialect: BalanceDialect, decimals: u8, shown: Shown) -> String {
    let got = through_a_pty(&dialect.line(decimals, &shown));
    String::from_utf8(got).unwrap()
}

#[test]
fn each_dialect_writes_its_columns() {
    use BalanceDialect::*;
    let mass = Value::Mass(23_457_100);
    let minus = Value::Mass(-60_000);
    for (dialect, decimals, state, want) in [
        (SignedSteady, 4, shown(mass, true), "+   23.4571 g  S\r\n"),
        (SignedSteady, 4, shown(mass, false), "+   23.4571 g  U\r\n"),
        (SignedSteady, 2, shown(Value::Mass(23_460_000), true), "+     23.46 g  S\r\n"),
        (SignedSteady, 1, shown(minus, true), "-       0.0 g  S\r\n"),
        (SignedSteady, 2, shown(minus, true), "-      0.06 g  S\r\n"),
        (SignedSteady, 3, shown(Value::Mass(0), true), "+     0.000 g  S\r\n"),
        (SignedSteady, 4, shown(Value::Overload, false), "+---------- g  O\r\n"),
        (SignedSteady, 4, shown(Value::Underload, false), "----------- g  O\r\n"),
        (SignedSteady, 4, shown(Value::NotReady, false), ""),
        (PlainStream, 2, shown(mass, true), "     23.45 g\r\n"),
        (PlainStream, 2, shown(minus, false), "     -0.06 g\r\n"),
        (PlainStream, 2, shown(Value::Overload, true), "      OVER g\r\n"),
        (PlainStream, 2, shown(Value::Underload, true), "     UNDER g\r\n"),
        (CommaStream, 4, shown(mass, true), "g  +    23,4571  \r\n"),
        (CommaStream, 4, shown(mass, false), "g  +    23,4571 ~\r\n"),
        (CommaStream, 4, shown(Value::Overload, true), "g  +^^^^^^^^^^^  \r\n"),
        (CommaStream, 4, shown(Value::Underload, true), "g  -___________  \r\n"),
        // 2B 30 30 32 33 2E 34 35 37 31 67 20 53, exclusive or worked out by hand: 17.
        (FramedXor, 4, shown(mass, true), "\u{2}+0023.4571g S\u{3}17"),
        (PrintLine, 2, shown(mass, true), "G      23.45 g\r\n"),
        (PrintLine, 2, shown(mass, false), "        WAIT\r\n"),
        (PrintLine, 2, shown(Value::Overload, true), "        OVER\r\n"),
        (PrintLine, 2, shown(minus, true), "G      -0.06 g\r\n"),
        (PrintLine, 2, Shown { value: mass, steady: true, tared_ug: 1 }, "N      23.45 g\r\n"),
        (AskedLong, 4, shown(mass, true), "THE PAN HOLDS +   23.4571 g AT REST\r\n"),
        (AskedLong, 4, shown(mass, false), "THE PAN HOLDS +   23.4571 g MOVING\r\n"),
        (AskedLong, 4, shown(Value::Overload, true), "THE PAN HOLDS TOO MUCH\r\n"),
        (AskedLong, 4, shown(Value::Underload, true), "THE PAN HOLDS TOO LITTLE\r\n"),
        (AskedLong, 4, shown(Value::NotReady, true), "NOT READY\r\n"),
        (
            SlipGrossNet,
            2,
            Shown { value: Value::Mass(11_960_000), steady: true, tared_ug: 21_430_000 },
            "GROSS       33.39 g\r\nTARE        21.43 g\r\nNET         11.96 g\r\n\r\n",
        ),
        (SlipGrossNet, 2, shown(mass, false), "NOT AT REST\r\n\r\n"),
        (SlipGrossNet, 2, shown(Value::Overload, true), "GROSS        OVER\r\n\r\n"),
    ] {
        assert_eq!(line(dialect, decimals, state), want, "{}", dialect.name());
    }
}

#[test]
fn check_digits_are_the_exclusive_or_of_what_lies_between_the_frame_bytes() {
    for (value, steady) in [(Value::Mass(23_457_100), true), (Value::Mass(-1_000_000), false), (Value::Overload, true)] {
        let bytes = BalanceDialect::FramedXor.line(4, &shown(value, steady));
        let end = bytes.iter().position(|&b| b == 3).unwrap();
        let (mut want, body) = (0u8, &bytes[1..end]);
        for bit in 0..8 {
            // Parity of each bit column: the definition, worked another way than the writer does.
            let ones = body.iter().filter(|b| **b >> bit & 1 == 1).count();
            want |= ((ones % 2) as u8) << bit;
        }
        assert_eq!(bytes[0], 2);
        assert_eq!(&bytes[end + 1..], format!("{want:02X}").as_bytes());
    }
}

#[test]
fn counters_and_scanners_write_their_bytes() {
    let all = |dialect| -> String {
        let timed = CupRun::clean(3, 2.0).bytes(dialect, &mut Rng::new(1)).unwrap();
        let bytes: Vec<u8> = timed.into_iter().flat_map(|(_, b)| b).collect();
        String::from_utf8(through_a_pty(&bytes)).unwrap()
    };
    assert_eq!(all(CupDialect::RunningTotal), "DROP 1\r\nDROP 2\r\nDROP 3\r\nSTOP 3\r\n");
    assert_eq!(all(CupDialect::DropLine), "tick\r\ntick\r\ntick\r\n");
    assert_eq!(all(CupDialect::BytePerDrop), "***=3\r\n");
    assert_eq!(through_a_pty(&scanner_bytes("C11")), b"C11\r\n");
}

#[test]
fn names_are_found_again_and_no_other() {
    assert!(BalanceDialect::ALL.iter().all(|d| BalanceDialect::named(d.name()) == Some(*d)));
    assert!(CupDialect::ALL.iter().all(|d| CupDialect::named(d.name()) == Some(*d)));
    assert_eq!(BalanceDialect::named("signed"), None);
    assert_eq!(CupDialect::named(""), None);
}

#[test]
fn a_question_is_taken_once_wherever_it_was_cut() {
    let dialect = BalanceDialect::AskedLong;
    let question = dialect.question().unwrap();
    for cut in 0..question.len() {
        let mut received = b"noise".to_vec();
        received.extend_from_slice(&question[..cut]);
        assert!(!dialect.take_request(&mut received), "cut at {cut}");
        received.extend_from_slice(&question[cut..]);
        assert!(dialect.take_request(&mut received), "cut at {cut}");
        assert!(!dialect.take_request(&mut received));
    }
    let mut flood = vec![b'x'; 1_000_000];
    assert!(!dialect.take_request(&mut flood));
    assert!(flood.len() < question.len());
}

/// One line of `signed-steady`, read by its columns: value in the last digit's steps, and whether at rest.
fn read_columns(bytes: &[u8], decimals: u8) -> (i64, bool) {
    let text = std::str::from_utf8(bytes).unwrap();
    assert_eq!(text.len(), 18, "{text:?}");
    let digits: String = text[1..11].chars().filter(char::is_ascii_digit).collect();
    assert_eq!(text[1..11].trim().split('.').nth(1).unwrap().len(), usize::from(decimals));
    let steps: i64 = digits.parse().unwrap();
    (if &text[..1] == "-" { -steps } else { steps }, &text[15..16] == "S")
}

fn readings(timed: &[Timed], decimals: u8) -> Vec<(i64, bool)> {
    timed.iter().map(|(_, b)| read_columns(b, decimals)).collect()
}

/// The value of the eighth line in a row that agrees within two digits, marks left out of account, of a loaded pan.
fn eighth_agreeing(values: &[i64], load_from: i64) -> Option<i64> {
    let mut run: Vec<i64> = Vec::new();
    for &value in values {
        run.push(value);
        while run.iter().max().unwrap() - run.iter().min().unwrap() > 2 {
            run.remove(0);
        }
        if run.len() >= 8 && value >= load_from {
            return Some(value);
        }
    }
    None
}

proptest! {
    #![proptest_config(ProptestConfig::with_cases(300))]

    #[test]
    fn a_placement_shows_the_exact_mass_where_it_may_be_taken(
        mass_mg in 500i64..600_000, decimals in 2u8..=4, noisy: bool, seed: u64,
    ) {
        let settings = Settings::new(BalanceDialect::SignedSteady, decimals);
        let mass_ug = mass_mg * 1000 / settings.step_ug() * settings.step_ug();
        let noise = if noisy { Noise::BENCH } else { Noise::NONE };
        let mut balance = Balance::new(settings, Noise { zero_flicker: 0.0, ..noise }, seed);
        for _again in 0..2 {
            let timed = balance.placement(mass_ug);
            prop_assert_eq!(timed.iter().map(|(d, _)| *d as i64).sum::<i64>(), placement_lasts_us(&settings));
            let lines = readings(&timed, decimals);
            let want = mass_ug / settings.step_ug();
            prop_assert!(lines.starts_with(&[(0, true), (0, true)]));
            prop_assert!(lines.ends_with(&[(0, true), (0, true)]));
            let rest: Vec<i64> = lines.iter().filter(|(v, s)| *s && (v - want).abs() <= 1).map(|(v, _)| *v).collect();
            prop_assert_eq!(rest.len(), STEADY_LINES);
            prop_assert!(rest.len() >= 12);
            prop_assert!(rest[3..].iter().all(|v| *v == want));
            prop_assert!(noisy || rest.iter().all(|v| *v == want));
            // Swinging lines agree with no line at rest.
            prop_assert!(lines.iter().filter(|(_, s)| !s).all(|(v, _)| (v - want).abs() > 2 && v.abs() > 2));
            let values: Vec<i64> = lines.iter().map(|(v, _)| *v).collect();
            prop_assert_eq!(eighth_agreeing(&values, 500_000 / settings.step_ug() / 2), Some(want));
        }
    }

    #[test]
    fn no_state_of_a_balance_breaks_its_columns(loads in prop::collection::vec(any::<i64>(), 1..20), decimals: u8, seed: u64) {
        for dialect in BalanceDialect::ALL {
            let mut balance = Balance::new(Settings::new(dialect, decimals), Noise::BENCH, seed);
            for (n, &load) in loads.iter().enumerate() {
                balance.put(load);
                balance.drift(load / 1000);
                if n % 3 == 1 {
                    balance.tare_key();
                }
                for _ in 0..8 {
                    balance.next_line();
                }
            }
        }
    }
}

#[test]
fn early_noise_does_occur() {
    let settings = Settings::new(BalanceDialect::SignedSteady, 2);
    let seen = (0..20).any(|seed| {
        let lines = readings(&Balance::new(settings, Noise::BENCH, seed).placement(33_390_000), 2);
        lines.iter().any(|(v, s)| *s && (v - 3339).abs() == 1)
    });
    assert!(seen);
}

#[test]
fn the_tare_key_overload_drift_and_a_missing_pan_show() {
    let settings = Settings::new(BalanceDialect::PrintLine, 2);
    let mut balance = Balance::new(settings, Noise::NONE, 1);
    let mut after = |act: &dyn Fn(&mut Balance)| {
        act(&mut balance);
        let lines: Vec<String> = (0..8).map(|_| String::from_utf8(balance.next_line()).unwrap()).collect();
        (lines[0].clone(), lines[7].clone())
    };
    assert_eq!(after(&|b| b.put(21_430_000)), ("        WAIT\r\n".into(), "G      21.43 g\r\n".into()));
    assert_eq!(after(&|b| b.tare_key()).1, "N       0.00 g\r\n");
    assert_eq!(after(&|b| b.put(33_390_000)).1, "N      11.96 g\r\n");
    assert_eq!(after(&|b| b.lift()).1, "N     -21.43 g\r\n", "the zeroed container, after lifting");
    assert_eq!(after(&|b| b.tare_key()).1, "G       0.00 g\r\n");
    assert_eq!(after(&|b| b.put(700_000_000)).1, "        OVER\r\n");
    assert_eq!(after(&|b| b.put(-100_000_000)).1, "       UNDER\r\n");
    assert_eq!(
        after(&|b| {
            b.put(30_000_000);
            b.drift(10_000)
        })
        .1,
        "G      30.08 g\r\n"
    );
    assert_eq!(after(&|b| b.lift()).1, "G       0.00 g\r\n", "drift ends with the load");
    assert_eq!(after(&|b| b.not_ready(3)), ("        WAIT\r\n".into(), "G       0.00 g\r\n".into()));
}

#[test]
fn a_press_of_the_key_is_one_line() {
    for (dialect, want) in [
        (BalanceDialect::PrintLine, "G      33.39 g\r\n"),
        (BalanceDialect::SlipGrossNet, "GROSS       33.39 g\r\nTARE         0.00 g\r\nNET         33.39 g\r\n\r\n"),
    ] {
        let settings = Settings::new(dialect, 2);
        let timed = Balance::new(settings, Noise::NONE, 1).placement(33_390_000);
        assert_eq!(timed.len(), 1);
        assert_eq!(timed[0].1, want.as_bytes());
        assert_eq!(timed[0].0 as i64, placement_lasts_us(&settings));
    }
}

/// Names of packages of this workspace that a manifest mentions as dependencies.
fn own_packages(manifest: &str) -> Vec<String> {
    let mut in_dependencies = false;
    let mut found = Vec::new();
    for line in manifest.lines().map(str::trim) {
        if line.starts_with('[') {
            in_dependencies = line.contains("dependencies");
        }
        let names_one = line.contains("tarecup") || line.contains("path =");
        if in_dependencies && names_one {
            found.push(line.to_string());
        }
    }
    found
}

#[test]
fn the_simulators_rest_on_no_other_package_of_the_project() {
    let here = std::path::Path::new(env!("CARGO_MANIFEST_DIR"));
    let manifest = std::fs::read_to_string(here.join("Cargo.toml")).unwrap();
    assert!(manifest.contains("[dependencies]"));
    assert_eq!(own_packages(&manifest), Vec::<String>::new());
    let folders = ["src", "src/drill", "src/captures"].map(|f| here.join(f));
    let files = folders.iter().flat_map(|f| std::fs::read_dir(f).unwrap()).map(|e| e.unwrap().path());
    for path in files.filter(|p| p.is_file()) {
        let text = std::fs::read_to_string(&path).unwrap();
        for package in ["tarecup_core", "tarecup_drivers", "tarecup_config", "tarecup::"] {
            assert!(!text.contains(package), "{} names {package}", path.display());
        }
    }
    // Control: the guard sees each way of writing such a dependency.
    for bad in [
        "[dependencies]\ntarecup-core = { workspace = true }",
        "[dev-dependencies]\nx = { package = \"tarecup-drivers\", path = \"../drivers\" }",
        "[dependencies.tarecup-core]\nworkspace = true",
        "[target.'cfg(unix)'.dependencies]\ncore2 = { path = \"../core\" }",
    ] {
        assert_eq!(own_packages(bad).len(), 1, "{bad}");
    }
}
