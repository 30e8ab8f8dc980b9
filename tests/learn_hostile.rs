//! Learning from any bytes in any pieces: the same answer, and never a panic.

use proptest::prelude::*;
use tarecup_drivers::learn::{Hints, Learned, Piece, learn};
use tarecup_drivers::profile::Profile;

/// Lines of several dialects, and noise.
fn speech() -> impl Strategy<Value = Vec<u8>> {
    let line = prop_oneof![
        6 => (0..99_999i32, any::<bool>(), 0..4u8).prop_map(|(n, s, k)| match k {
            0 => format!("{:>8}.{:02} g {}\r\n", n / 100, n % 100, if s { 'S' } else { 'U' }),
            1 => format!("\u{2}+{:05}.{:02}g\u{3}{:02X}", n / 100, n % 100, n % 256),
            2 => format!("DROP {n}\r\n"),
            _ => format!("C{n};"),
        }.into_bytes()),
        1 => prop::collection::vec(any::<u8>(), 0..20),
    ];
    prop::collection::vec(line, 0..40).prop_map(|l| l.concat())
}

fn one(bytes: &[u8]) -> Learned {
    learn(&[Piece { at_us: None, bytes }], &Hints::default())
}

proptest! {
    #![proptest_config(ProptestConfig::with_cases(120))]

    #[test]
    fn any_chunking_gives_the_same(bytes in speech(), cuts in prop::collection::vec(any::<usize>(), 0..20)) {
        let mut places: Vec<usize> = cuts.iter().map(|c| c % (bytes.len() + 1)).collect();
        places.extend([0, bytes.len()]);
        places.sort_unstable();
        let pieces: Vec<Piece<'_>> = places.windows(2).map(|w| Piece { at_us: None, bytes: &bytes[w[0]..w[1]] }).collect();
        let whole = one(&bytes);
        prop_assert_eq!(&whole, &learn(&pieces, &Hints::default()));
        prop_assert_eq!(&whole, &one(&bytes));
    }

    #[test]
    fn any_bytes_are_answered(bytes in prop::collection::vec(any::<u8>(), 0..2_000), times: bool) {
        let pieces: Vec<Piece<'_>> = bytes.chunks(7).enumerate().map(|(i, b)| Piece { at_us: times.then_some(i as i64 * 41_000), bytes: b }).collect();
        let learned = learn(&pieces, &Hints::default());
        prop_assert_eq!(learned.profile.is_none(), !learned.missing.is_empty());
        prop_assert!((0.0..=1.0).contains(&learned.confidence));
    }

    #[test]
    fn what_is_learned_can_be_run(bytes in speech()) {
        if let Some(profile) = one(&bytes).profile {
            prop_assert!(Profile::compile(profile).is_ok());
        }
    }
}

#[test]
fn much_is_answered_soon() {
    let mut bytes = Vec::new();
    for i in 0..20_000u32 {
        let h = (i / 50) % 3 * 1234;
        bytes.extend(format!("{:>8}.{:02} g\r\n", h / 100, h % 100).into_bytes());
    }
    let began = std::time::Instant::now();
    assert_eq!(one(&bytes).readings.len(), 20_000);
    // Far above what a release build takes, so that a busy machine does not fail.
    assert!(began.elapsed().as_secs() < 20, "{:?}", began.elapsed());
}
