use super::*;
use crate::profile::{Profile, ProfileText};
use proptest::prelude::*;

const LARGEST: Mass = Mass::from_ug(60_000_000_000);

fn compiled(toml: &str) -> Result<Profile, String> {
    Profile::compile(toml::from_str::<ProfileText>(toml).map_err(|e| e.to_string())?).map_err(|e| e.to_string())
}

fn balance(reads: &str) -> String {
    format!("kind = \"balance\"\n[modbus]\nunit = 17\nevery_ms = 200\n{reads}")
}

const MASS: &str = "[[modbus.read]]\nwhat = \"mass\"\naddress = 107\nwidth = 32\nscale = \"0.1\"\nunit = \"mg\"\n";
const STATUS: &str = "[[modbus.read]]\nwhat = \"status\"\naddress = 109\nmoving_bit = 15\nunderload_bit = 0\n";

/// The answer with its check.
fn answer(body: &[u8]) -> Vec<u8> {
    let mut frame = body.to_vec();
    frame.extend(crc(body).to_le_bytes());
    frame
}

#[test]
fn the_check_is_that_of_the_standard() {
    // Catalogue of parametrised CRC algorithms, CRC-16/MODBUS: check 0x4B37 for "123456789".
    assert_eq!(crc(b"123456789"), 0x4B37);
    // Modbus over Serial Line V1.02, appendix B, example of a frame 02 07 (from memory): 41 12 follow.
    assert_eq!(crc(&[0x02, 0x07]).to_le_bytes(), [0x41, 0x12]);
}

#[test]
fn the_answer_of_the_standard_is_understood() {
    // Modbus Application Protocol V1.1b3, 6.3: registers 108 to 110 hold 555, 0 and 100.
    let profile = compiled(&balance(&format!("{MASS}{STATUS}"))).expect("a profile");
    let plan = profile.modbus().expect("registers");
    assert_eq!(plan.blocks(), [Block { table: Table::Holding, start: 107, count: 3 }], "neighbours are asked for at once");
    let frame = answer(&[17, 3, 6, 0x02, 0x2B, 0x00, 0x00, 0x00, 0x64]);
    let What::Signal(Signal::Mass(reading)) = profile.decode(&frame) else { panic!("no mass") };
    // 555 in the high word, in tenths of a milligram.
    assert_eq!((reading.mass.ug(), reading.step.ug()), (555 * 65_536 * 100, 100));
    assert_eq!((reading.mark, reading.basis), (Mark::Steady, Basis::Unmarked));
}

#[test]
fn a_frame_that_is_not_the_whole_answer_is_refused() {
    let profile = compiled(&balance(&format!("{MASS}{STATUS}"))).expect("a profile");
    let whole = answer(&[17, 3, 6, 0, 0, 0, 1, 0x80, 0]);
    assert!(matches!(profile.decode(&whole), What::Signal(Signal::Mass(r)) if r.mark == Mark::Moving));
    for cut in 0..whole.len() {
        assert_eq!(profile.decode(&whole[..cut]), What::Reject(Reject::CutOff), "{cut} bytes");
    }
    for flipped in 0..whole.len() {
        let mut frame = whole.clone();
        frame[flipped] ^= 0x10;
        assert!(matches!(profile.decode(&frame), What::Reject(_)), "byte {flipped}");
    }
    let twice = [whole.clone(), whole.clone()].concat();
    for (frame, why) in [
        (answer(&[18, 3, 6, 0, 0, 0, 1, 0, 0]), Reject::NoPattern),
        (answer(&[17, 4, 6, 0, 0, 0, 1, 0, 0]), Reject::NoPattern),
        (answer(&[17, 3, 4, 0, 0, 0, 1]), Reject::NoPattern),
        (answer(&[17, 0x83, 2]), Reject::NoPattern),
        (twice, Reject::NoPattern),
    ] {
        assert_eq!(profile.decode(&frame), What::Reject(why), "{frame:?}");
    }
    for code in [4, 5, 6, 10, 11] {
        assert_eq!(profile.decode(&answer(&[17, 0x83, code])), What::Signal(Signal::NotReady), "{code}");
    }
    assert_eq!(profile.decode(&answer(&[17, 3, 6, 0, 0, 0, 1, 0, 1])), What::Signal(Signal::Underload));
}

#[test]
fn values_of_every_width_sign_and_order() {
    let read = |width: u8, signed: bool, order: &str, data: &[u8]| {
        let order = if width == 32 { format!("word_order = \"{order}\"\n") } else { String::new() };
        let reads = format!(
            "[[modbus.read]]\nwhat = \"mass\"\nregister = 30001\nwidth = {width}\nsigned = {signed}\n{order}scale = \"1\"\nunit = \"g\"\n"
        );
        let mut body = vec![17, 4, data.len() as u8];
        body.extend(data);
        match compiled(&balance(&reads)).expect("a profile").decode(&answer(&body)) {
            What::Signal(Signal::Mass(r)) => Some(r.mass.ug() / 1_000_000),
            _ => None,
        }
    };
    assert_eq!(read(16, true, "", &[0xFF, 0xFE]), Some(-2));
    assert_eq!(read(16, false, "", &[0x9C, 0x40]), Some(40_000));
    assert_eq!(read(32, true, "high-first", &[0xFF, 0xFF, 0xFF, 0xFE]), Some(-2));
    assert_eq!(read(32, true, "low-first", &[0xFF, 0xFE, 0xFF, 0xFF]), Some(-2));
    assert_eq!(read(32, true, "low-first", &[0x12, 0x34, 0, 0]), Some(0x1234));
    assert_eq!(read(32, false, "high-first", &[0xFF; 4]), None, "more than a balance weighs");
}

#[test]
fn counts_come_with_two_tables_and_two_requests() {
    let text = "kind = \"counter\"\n[modbus]\nunit = 3\nevery_ms = 100\n[[modbus.read]]\nwhat = \"total\"\nregister = 30008\nwidth = 32\n\
                [[modbus.read]]\nwhat = \"status\"\nregister = 40001\nerror_bit = 0\n";
    let profile = compiled(text).expect("a profile");
    let blocks = profile.modbus().expect("registers").blocks().to_vec();
    assert_eq!(
        blocks.iter().map(|b| (b.table, b.start, b.count)).collect::<Vec<_>>(),
        [(Table::Holding, 0, 1), (Table::Input, 7, 2)]
    );
    let poll = |bits: u8, total: u32| {
        let [a, b, c, d] = total.to_be_bytes();
        [answer(&[3, 3, 2, 0, bits]), answer(&[3, 4, 4, a, b, c, d])].concat()
    };
    assert_eq!(profile.decode(&poll(0, 27)), What::Signal(Signal::Total(27)));
    assert_eq!(profile.decode(&poll(1, 27)), What::Signal(Signal::NotReady));
    assert_eq!(profile.decode(&poll(0, 1_000_000)), What::Reject(Reject::Number));
    // The second was not answered.
    assert_eq!(profile.decode(&answer(&[3, 3, 2, 0, 0])), What::Reject(Reject::CutOff));
}

#[test]
fn mistakes_are_named_with_their_key() {
    let mass = |more: &str| balance(&format!("[[modbus.read]]\nwhat = \"mass\"\n{more}"));
    let plain = "address = 0\nscale = \"1\"\nunit = \"g\"\n";
    let counter = "kind = \"counter\"\n[modbus]\nunit = 1\nevery_ms = 500\n[[modbus.read]]\nwhat = \"total\"\naddress = 0\n";
    let scanner = "kind = \"scanner\"\n[modbus]\nunit = 1\nevery_ms = 500\nread = []\n";
    let cases: [(String, &str); 19] = [
        (mass("address = 0\nscale = \"1\"\n"), "modbus.read[1].unit: a mass needs its unit"),
        (mass("address = 0\nunit = \"g\"\n"), "modbus.read[1].scale: a mass needs what one count"),
        (mass("address = 0\nunit = \"g\"\nscale = \"0\"\n"), "more than nothing"),
        (mass("address = 0\nunit = \"g\"\nscale = \"0.0000001\"\n"), "more decimals"),
        (mass("address = 0\nunit = \"g\"\nscale = \"1e-2\"\n"), "does not belong"),
        (mass("scale = \"1\"\nunit = \"g\"\n"), "it has no place"),
        (mass("register = 40000\nscale = \"1\"\nunit = \"g\"\n"), "40000 is no register"),
        (mass("register = 40001\naddress = 0\nscale = \"1\"\nunit = \"g\"\n"), "leave one out"),
        (mass("register = 40001\ntable = \"input\"\nscale = \"1\"\nunit = \"g\"\n"), "first digit"),
        (mass(&format!("{plain}width = 24\n")), "16 or 32"),
        (mass(&format!("{plain}word_order = \"low-first\"\n")), "two registers"),
        (mass(&format!("{plain}net_bit = 1\n")), "modbus.read[1].net_bit: belongs to a status"),
        (mass("address = 65535\nwidth = 32\nscale = \"1\"\nunit = \"g\"\n"), "beyond 65535"),
        (balance(&format!("{MASS}{MASS}")), "has one [[modbus.read]]"),
        (balance(&format!("{MASS}{STATUS}steady_bit = 2\n")), "leave the other out"),
        (balance(&format!("{MASS}[[modbus.read]]\nwhat = \"status\"\naddress = 1\nnet_bit = 16\n")), "from 0 to 15"),
        (counter.into(), "at most 400"),
        (scanner.into(), "not read over Modbus"),
        (format!("{}[[line]]\npattern = 'x'\nmeans = \"nothing\"\n", mass(plain)), "line: an instrument that is read"),
    ];
    for (text, words) in cases {
        let says = compiled(&text).expect_err(&text);
        assert!(says.contains(words), "{text}\n{says}");
    }
    let unit =
        |n: u8, framing: &str| compiled(&mass(plain).replace("unit = 17\n", &format!("unit = {n}\nframing = \"{framing}\"\n")));
    assert!(unit(0, "rtu").is_err_and(|e| e.contains("1 to 247")));
    assert!(unit(255, "tcp").is_ok());
}

proptest! {
    #[test]
    fn any_bytes_are_answered(bytes in proptest::collection::vec(any::<u8>(), 0..300), tcp: bool) {
        let framing = if tcp { "tcp" } else { "rtu" };
        let text = balance(&format!("framing = \"{framing}\"\n{MASS}{STATUS}"));
        let profile = compiled(&text).expect("a profile");
        let _ = profile.decode(&bytes);
        let plan = profile.modbus().expect("registers");
        prop_assert!(plan.answer_len(&bytes, &plan.blocks()[0]).is_none_or(|n| n <= bytes.len()));
    }

    #[test]
    fn every_mass_is_exact(counts: i32) {
        let profile = compiled(&balance(MASS)).expect("a profile");
        let [a, b, c, d] = counts.to_be_bytes();
        let what = profile.decode(&answer(&[17, 3, 4, a, b, c, d]));
        let ug = i64::from(counts) * 100;
        match what {
            What::Signal(Signal::Mass(r)) => prop_assert_eq!(r.mass.ug(), ug),
            _ => prop_assert!(ug.abs() > LARGEST.ug()),
        }
    }
}
