//! What framing and decoding cost, in nanoseconds a line:
//! `cargo run --release -p tarecup-drivers --example decode_cost`.

use std::hint::black_box;
use std::sync::Arc;
use std::time::Instant;
use tarecup_core::stamp::Stamp;
use tarecup_drivers::intake::Intake;
use tarecup_drivers::profile::{Profile, ProfileText};

const ROUNDS: u32 = 500_000;

const MASS: &str = r#"
kind = "balance"
about = "a mass and its status in one answer"
[modbus]
unit = 1
every_ms = 200
[[modbus.read]]
what = "mass"
register = 40001
width = 32
scale = "0.01"
unit = "g"
[[modbus.read]]
what = "status"
register = 40003
steady_bit = 0
"#;

const TOTAL: &str = r#"
kind = "counter"
about = "a total"
[modbus]
unit = 1
every_ms = 200
[[modbus.read]]
what = "total"
register = 30001
"#;

fn main() -> Result<(), Box<dyn std::error::Error>> {
    let cases = [
        (include_str!("../../config/profiles/signed-steady.toml"), "+   23.4571 g  S\r\n"),
        (include_str!("../../config/profiles/plain-stream.toml"), "     23.46 g\r\n"),
        (include_str!("../../config/profiles/comma-stream.toml"), "g  +    23,4571  \r\n"),
        (include_str!("../../config/profiles/framed-xor.toml"), "\x02+0023.4571g S\x0317"),
        (include_str!("../../config/profiles/asked-long.toml"), "THE PAN HOLDS +   23.4571 g AT REST\r\n"),
        (include_str!("../../config/profiles/running-total.toml"), "DROP 17\r\n"),
        (include_str!("../../config/profiles/plain-code.toml"), "C11\r"),
        (include_str!("../../config/profiles/signed-steady.toml"), "a line of noise\r\n"),
    ];
    for (toml, line) in cases {
        let profile = Arc::new(Profile::compile(toml::from_str::<ProfileText>(toml)?)?);
        let mut decoder = profile.decoder();
        let decode = cost(|| drop(black_box(decoder.decode(black_box(line.as_bytes())))));
        let mut intake = Intake::new(0, &profile);
        intake.opened(true);
        let read = cost(|| drop(black_box(intake.read(black_box(line.as_bytes()), Stamp::default(), None))));
        println!(
            "{:<16} {:<38} decode {decode:>4.0} ns   frame, decode and batch {read:>4.0} ns",
            profile.name(),
            line.trim_end()
        );
    }
    polls()
}

/// Answers over Modbus: a mass of 32 bits and a status, a total.
fn polls() -> Result<(), Box<dyn std::error::Error>> {
    for (toml, body) in [(MASS, &[1, 3, 6, 0, 0, 0x09, 0x2A, 0, 1][..]), (TOTAL, &[1, 4, 2, 0, 17])] {
        let profile = Arc::new(Profile::compile(toml::from_str::<ProfileText>(toml)?)?);
        let mut decoder = profile.decoder();
        let mut frame = body.to_vec();
        frame.extend(tarecup_drivers::modbus::crc(body).to_le_bytes());
        let decode = cost(|| drop(black_box(decoder.decode(black_box(&frame)))));
        println!("{:<16} {:<38} decode {decode:>4.0} ns   {}", "modbus", format!("{frame:02x?}"), profile.about());
    }
    Ok(())
}

fn cost(mut work: impl FnMut()) -> f64 {
    for _ in 0..1_000 {
        work();
    }
    let began = Instant::now();
    for _ in 0..ROUNDS {
        work();
    }
    began.elapsed().as_nanos() as f64 / f64::from(ROUNDS)
}
