// Made-up views for tests and for looking at the pages; nothing of it ships.

use super::*;

fn s(text: &str) -> Option<String> {
    Some(text.into())
}

/// A moment of the made-up day.
pub fn at(clock: &str) -> Time {
    format!("2026-03-02T{clock}.000000Z")
}

pub fn frame() -> Frame {
    Frame {
        lab: "Mosswick materials laboratory".into(),
        station: "wet-room".into(),
        benches: vec!["north".into(), "south".into()],
        bench: s("north"),
        who: s("AB"),
        asks_pin: true,
        not_recording: None,
        seq: 412,
        now: at("10:42:30"),
        token: "f00d".into(),
        loose: 1,
        ready: 2,
    }
}

fn weighed(mass_g: &str, seq: u64) -> Option<Weighed> {
    Some(Weighed { mass_g: mass_g.into(), seq, typed: false })
}

#[allow(clippy::too_many_arguments)]
fn trial(kind: Kind, no: u32, drops: &[(u32, u64)], container: &str, masses: [&str; 3], water: Option<f64>) -> Trial {
    let seq = u64::from(no) * 10 + kind as u64 * 100;
    Trial {
        kind,
        no,
        container: s(container),
        drops: drops.to_vec(),
        rate_per_s: (!drops.is_empty()).then_some(1.98),
        tare: weighed(masses[0], seq),
        wet: weighed(masses[1], seq + 1),
        dry: if masses[2].is_empty() { None } else { weighed(masses[2], seq + 2) },
        water_percent: water,
        used: water.is_some(),
        set_aside: None,
        typed: false,
        by: s("AB"),
    }
}

pub fn trials() -> Vec<Trial> {
    let mut all = vec![
        trial(Kind::Liquid, 1, &[(32, 40)], "C1", ["19.81", "32.18", "29.10"], Some(33.153)),
        trial(Kind::Liquid, 2, &[(24, 41), (25, 42)], "C2", ["22.95", "38.19", "34.31"], Some(34.155)),
        trial(Kind::Liquid, 3, &[(18, 43)], "C3", ["23.28", "40.58", "36.05"], Some(35.474)),
        trial(Kind::Liquid, 4, &[(29, 44)], "C7", ["21.36", "32.44", "29.20"], Some(41.33)),
        trial(Kind::Thread, 1, &[], "C4", ["23.25", "32.11", "30.75"], Some(18.133)),
        trial(Kind::Thread, 2, &[], "C5", ["23.18", "32.05", ""], None),
    ];
    all[3].set_aside = s("the paste had stood too long");
    all[3].used = false;
    all[1].typed = true;
    all[1].wet = Some(Weighed { mass_g: "38.19".into(), seq: 21, typed: true });
    all
}

pub fn flow() -> Flow {
    let point = |no, drops, water_percent, used| FlowPoint { no, drops, water_percent, used };
    let line = |d: f64| 46.35 - 8.75 * f64::log10(d);
    let band = (0..=20).map(|i| {
        let d = 15.0 * (36.0f64 / 15.0).powf(f64::from(i) / 20.0);
        let half = 0.35 + 4.0 * (d.log10() - 1.39).powi(2) * 4.0;
        (d, line(d) - half, line(d) + half)
    });
    Flow {
        points: vec![
            point(1, 32.0, 33.153, true),
            point(2, 25.0, 34.155, true),
            point(3, 18.0, 35.474, true),
            point(4, 29.0, 36.9, false),
        ],
        waiting: vec![],
        fit: Some(Fit { at_one: 46.35, slope: -8.75, band: band.collect() }),
    }
}

pub fn results() -> Results {
    let figure = |rounded: &str, value, u| Some(Figure { rounded: rounded.into(), value, u });
    Results {
        liquid: figure("34", 34.152, Some(0.05)),
        plastic: figure("18", 18.36, Some(0.23)),
        index: figure("16", 15.79, Some(0.24)),
        group: s("CL"),
        natural_percent: Some(21.6),
        liquidity: Some(0.205),
        flow: Some(8.75),
        ..Default::default()
    }
}

fn recorded(seq: u64, mass: &str, container: &str, role: &str, clock: &str) -> Recorded {
    Recorded {
        seq,
        mass_g: s(mass),
        container: s(container),
        role: s(role),
        specimen: s("S-101"),
        at: at(clock),
        by: s("AB"),
        ..Default::default()
    }
}

/// A bench in full work.
pub fn bench() -> Bench {
    let mut flow = flow();
    flow.points.truncate(2);
    let mut trials = trials();
    trials.truncate(2);
    Bench {
        frame: frame(),
        name: "north".into(),
        signed_in: s("AB"),
        next: Next {
            sentence: "Container C14 is in hand: put it on the pan, with the slice".into(),
            urgent: false,
            step: Step::Weigh,
        },
        balances: vec![Balance {
            name: "pan-1".into(),
            connected: Connected::Speaking,
            detail: None,
            freshness: Freshness::Live,
            reading: Some(Reading { mass_g: "38.19".into(), steady: Steady::Steady }),
            shared_with: vec!["south".into()],
        }],
        cups: vec![Cup {
            name: "cup-1".into(),
            connected: Connected::Speaking,
            detail: None,
            freshness: Freshness::Live,
            drops: Some(27),
            rate_per_s: Some(1.98),
            rate_wanted: Some([1.9, 2.1]),
            running: false,
        }],
        hand: s("C14"),
        owed: Some(Owed { specimen: "S-101".into(), drops: 27, since: at("10:41:50"), overdue: false }),
        work: Some(Work {
            specimen: "S-101".into(),
            description: s("brown lean clay"),
            intention: "liquid".into(),
            liquid_wanted: 3,
            threads_wanted: 2,
            trials,
            flow,
            results: Results::default(),
        }),
        recorded: vec![
            Recorded { drops: Some(27), mass_g: None, container: None, role: None, ..recorded(411, "", "", "", "10:41:50") },
            recorded(405, "38.19", "C2", "wet", "10:30:12"),
            Recorded {
                drops: Some(25),
                mass_g: None,
                container: None,
                role: None,
                typed: true,
                ..recorded(404, "", "", "", "10:29:40")
            },
            recorded(398, "32.18", "C1", "wet", "10:14:02"),
        ],
        specimens: vec![
            SpecimenKey { id: "S-101".into(), description: s("brown lean clay"), chosen: true },
            SpecimenKey { id: "S-102".into(), description: s("grey silt"), chosen: false },
            SpecimenKey { id: "S-103".into(), description: None, chosen: false },
        ],
        containers: (1..=24)
            .map(|n| ContainerKey { id: format!("C{n}"), standing: if n % 3 == 0 { "wet".into() } else { "free".into() } })
            .collect(),
        advice: Advice {
            says: vec![
                "27 drops are of use: take the slice.".into(),
                "1 trial more, of 3; a window wants one of 15–25 drops.".into(),
            ],
            loud: false,
            threads_needed: 2,
            water: Some(Water { per_gram: 0.0042, per_gram_u: 0.0011, from: "2 dried trials of this soil".into() }),
            paste_g: None,
        },
        loose: 0,
    }
}

/// A bench at which nothing has happened, with an instrument never heard.
pub fn bench_idle() -> Bench {
    Bench {
        frame: Frame { loose: 0, ready: 0, who: None, ..frame() },
        signed_in: None,
        next: Next {
            sentence: "Read a specimen's code to begin, or a container's code to weigh it".into(),
            urgent: false,
            step: Step::Scan,
        },
        balances: vec![Balance { name: "pan-1".into(), ..Default::default() }],
        cups: vec![Cup { name: "cup-1".into(), ..Default::default() }],
        hand: None,
        owed: None,
        work: None,
        recorded: vec![],
        advice: Advice::default(),
        ..bench()
    }
}

/// Everything that can be wrong at once.
pub fn bench_trouble() -> Bench {
    let why = "40.12 g is lighter than this container's empty mass of 42.30 g: is it another container, or was the balance tared with something on it? Read the code again or say what the mass is";
    let mut b = bench();
    b.frame.not_recording = s("the disk under /var/lib/tarecup is full: free some room on it");
    b.next = Next { sentence: why.into(), urgent: true, step: Step::Refused };
    b.loose = 1;
    b.balances[0].freshness = Freshness::Stale { since: Some(at("10:40:01")) };
    b.balances[0].connected = Connected::PortLost;
    b.balances[0].detail = s("the port is gone: is the cable in?");
    b.cups[0].rate_per_s = Some(2.31);
    b.owed = Some(Owed { specimen: "S-101".into(), drops: 27, since: at("10:36:00"), overdue: true });
    b.recorded[0] = Recorded { loose: s(why), specimen: None, role: None, ..recorded(412, "40.12", "C14", "", "10:42:20") };
    b.advice.loud = true;
    b.advice.says[0] =
        "12 drops are too few (the method permits 15 to 35): let the paste dry by mixing, never by dry soil, and count again."
            .into();
    b
}

/// While the cup runs.
pub fn bench_cup() -> Bench {
    let mut b = bench();
    b.next = Next {
        sentence: "Liquid limit of S-101, trial 3 of 3: cut the groove and start the cup".into(),
        urgent: false,
        step: Step::Cup,
    };
    b.hand = None;
    b.owed = None;
    b.cups[0].running = true;
    b.balances[0].reading = Some(Reading { mass_g: "0.04".into(), steady: Steady::Moving });
    b
}

pub fn shelf() -> Shelf {
    let row = |container: &str, kind, no, place, due, hours| Drying {
        container: container.into(),
        specimen: "S-101".into(),
        kind,
        no,
        place,
        since: Some(at("17:20:00")),
        recorded: no != 2,
        hours,
        hours_wanted: 12.0,
        ready_at: Some("2026-03-03T05:20:00.000000Z".into()),
        due,
    };
    Shelf {
        frame: Frame { bench: s("north"), ..frame() },
        rows: vec![
            row("C5", Kind::Thread, 2, Place::In, Due::Overdue, 61),
            row("C1", Kind::Liquid, 1, Place::In, Due::Ready, 16),
            row("C2", Kind::Liquid, 2, Place::In, Due::Ready, 14),
            row("C9", Kind::Liquid, 3, Place::Out, Due::Ready, 13),
            row("C11", Kind::Liquid, 4, Place::In, Due::NotYet, 3),
            row("C12", Kind::Natural, 1, Place::Drying, Due::NotYet, 4),
            row("C14", Kind::Liquid, 5, Place::Wet, Due::NotYet, 0),
            row("C15", Kind::Thread, 3, Place::Wet, Due::NotYet, 0),
        ],
        celsius: 110.0,
        celsius_wanted: Some([105.0, 115.0]),
        off_since: None,
        holds_outage: true,
    }
}

pub fn subject() -> Subject {
    Subject {
        seq: 398,
        bench: s("north"),
        what: What::Weighing { mass_g: "38.19".into() },
        container: s("C2"),
        role: s("wet"),
        specimen: s("S-101"),
        trial: Some((Kind::Liquid, 2)),
        instrument: s("pan-1"),
        typed: false,
        at: at("10:14:02"),
        by: s("AB"),
        set_aside: None,
        before: vec![history()[3].clone()],
    }
}

pub fn loose() -> LoosePage {
    let mut points: Vec<(f64, f64)> = (-80..0).map(|i| (f64::from(i) / 10.0, if i < -22 { 0.0 } else { 23.46 })).collect();
    for (i, p) in points.iter_mut().enumerate().skip(58).take(6) {
        p.1 = 23.46 + 9.0 * (-(i as f64 - 57.0)).exp() * if i % 2 == 0 { 1.0 } else { -1.0 };
    }
    points.extend((0..60).map(|i| (f64::from(i) / 10.0, if i < 40 { 23.46 } else { 0.0 })));
    let thing = |seq, what, why: &str, trace| LooseThing {
        subject: Subject { seq, what, container: None, role: None, specimen: None, trial: None, before: vec![], ..subject() },
        why: why.into(),
        trace,
    };
    LoosePage {
        frame: frame(),
        things: vec![
            thing(
                412,
                What::Weighing { mass_g: "23.46".into() },
                "no container was in hand: read its code while the mass is on the pan, or tie it here",
                Some(Trace { points, taken_g: 23.46 }),
            ),
            thing(377, What::Count { drops: 22 }, "no specimen was in work at this bench", None),
        ],
        specimens: bench().specimens,
        containers: (1..=24).map(|n| format!("C{n}")).collect(),
    }
}

pub fn correction() -> Correction {
    Correction {
        frame: frame(),
        subject: subject(),
        specimens: bench().specimens,
        containers: (1..=24).map(|n| format!("C{n}")).collect(),
        then: "/bench/north".into(),
    }
}

pub fn history() -> Vec<Change> {
    let change =
        |seq, clock: &str, what: &str| Change { seq, at: at(clock), who: s("AB"), what: what.into(), ..Default::default() };
    vec![
        change(31, "08:55:10", "opened"),
        Change { is: s("32"), ..change(40, "09:40:10", "counted") },
        Change { is: s("32.18 g"), ..change(45, "09:42:10", "weighed C1, wet") },
        Change {
            was: s("38.91 g"),
            is: s("38.19 g"),
            why: s("it was misread"),
            correction: true,
            ..change(402, "10:20:10", "mass corrected: C2, wet")
        },
        Change { why: s("the paste had stood too long"), correction: true, ..change(406, "10:31:00", "set aside: Liquid 4") },
        change(410, "10:40:00", "limits computed, revision 3"),
    ]
}

pub fn specimen() -> SpecimenPage {
    let check = |check: &str, hold, about: &str, says: &str, answered: Option<&str>| Check {
        check: check.into(),
        hold,
        about: about.into(),
        says: says.into(),
        answered: answered.map(String::from),
    };
    SpecimenPage {
        frame: frame(),
        id: "S-101".into(),
        description: s("brown lean clay"),
        preparation: s("wet, through 0.425 mm"),
        method: "ASTM D4318, liquid limit by the multipoint method, plastic limit by hand rolling".into(),
        edition: "as stated by the laboratory".into(),
        opened: at("08:55:10"),
        state: "provisional".into(),
        revision: 3,
        reviewed_by: None,
        trials: trials(),
        other_counts: vec![OtherCount { seq: 39, drops: 12, why: "the groove tore".into(), at: at("09:31:00") }],
        checks: vec![
            check(
                "not_dry",
                true,
                "liquid 1",
                "container C1 was 3.2 h in the oven and the method wants 12.0 h: put it back, or weigh it again after an hour more",
                None,
            ),
            check(
                "missing",
                false,
                "plastic limit",
                "1 container with threads is needed and its dry mass is not there yet",
                None,
            ),
            check(
                "closures",
                true,
                "liquid 2",
                "the closures of this paste differ by 1 drop",
                Some("looked into, the value stands"),
            ),
        ],
        results: results(),
        flow: flow(),
        chart: Chart {
            this: Some((34.0, 16.0)),
            others: [("S-88", 41.0, 19.0), ("S-90", 52.0, 27.0), ("S-91", 28.0, 6.0), ("S-93", 63.0, 30.0), ("S-95", 36.0, 15.0)]
                .map(|(id, ll, pi)| (id.into(), ll, pi))
                .into(),
        },
        history: history(),
        head: Some(Head { epoch: 1, seq: 412, hash: "3f2a9c8177d04be1".into(), at: at("10:42:30") }),
    }
}

pub fn laboratory() -> Laboratory {
    let row = |id: &str, about: &str, state: &str, holds| SpecimenRow {
        id: id.into(),
        description: s(about),
        state: state.into(),
        liquid: (3, 3),
        threads: (1, 2),
        liquid_limit: s("34"),
        plastic_limit: None,
        index: None,
        group: None,
        holds,
    };
    let done = |id: &str, state: &str, pi: &str, group: &str| SpecimenRow {
        threads: (2, 2),
        plastic_limit: s("22"),
        index: s(pi),
        group: s(group),
        ..row(id, "grey silt", state, 0)
    };
    let instrument = |name: &str, kind: &str, connected, last: Option<&str>| InstrumentRow {
        name: name.into(),
        kind: kind.into(),
        benches: vec!["north".into()],
        connected,
        detail: None,
        last_heard: last.map(at),
        rejects: u64::from(name == "cup-1") * 3,
    };
    Laboratory {
        frame: frame(),
        open: vec![row("S-101", "brown lean clay", "provisional", 1), row("S-102", "grey silt", "provisional", 0)],
        results: vec![done("S-99", "complete", "12", "CL"), done("S-98", "reviewed", "NP", "ML")],
        instruments: vec![
            instrument("pan-1", "balance", Connected::Speaking, Some("10:42:29")),
            instrument("cup-1", "counter", Connected::Silent, Some("10:41:50")),
            instrument("scan-1", "scanner", Connected::PortLost, Some("09:12:00")),
            instrument("pan-2", "balance", Connected::Waiting, None),
        ],
        due: vec![
            DueCheck {
                what: "pan-1 with the 50 g weight".into(),
                last: Some(at("07:55:00")),
                due: Some("2026-03-03T08:00:00Z".into()),
                overdue: false,
            },
            DueCheck { what: "cup-1 height of drop".into(), last: None, due: Some("2026-03-01T08:00:00Z".into()), overdue: true },
        ],
        backup_proven: None,
        containers: (1..=6)
            .map(|n| ContainerRow {
                id: format!("C{n}"),
                standing: if n < 4 { "in_oven".into() } else { "free".into() },
                tare_g: s("19.81"),
                lid_g: None,
                weighed: Some(at("09:10:00")),
                specimen: (n < 4).then(|| "S-101".into()),
            })
            .collect(),
        methods: vec![
            ("d4318-multipoint".into(), "ASTM D4318, liquid limit by the multipoint method".into()),
            ("t89-t90".into(), "AASHTO T 89 and T 90".into()),
        ],
    }
}

pub fn import() -> Import {
    let line = |no, fields: &[&str], refused: Option<&str>, note: Option<&str>| ImportLine {
        no,
        fields: fields.iter().map(|f| f.to_string()).collect(),
        refused: refused.map(String::from),
        note: note.map(String::from),
    };
    Import {
        frame: frame(),
        what: "containers".into(),
        text: "container,lid_g\nC30,4.12\nC 31,4.10\nC1,\n".into(),
        lines: vec![
            line(2, &["C30", "4.12"], None, None),
            line(3, &["C 31", "4.10"], Some("' ' cannot stand in a name; use letters, digits, '.', '_' or '-'"), None),
            line(4, &["C1", ""], None, Some("it is in the register already")),
        ],
        refused: None,
    }
}

pub fn sign_in() -> SignIn {
    SignIn {
        frame: Frame { who: None, ..frame() },
        operators: ["AB", "CD", "KL", "MN"].map(String::from).into(),
        then: "/bench/north".into(),
        refused: s("these initials and this PIN do not belong together: try again"),
        locked_until: None,
    }
}

pub fn problem() -> Problem {
    Problem { frame: Frame { bench: None, ..frame() }, says: "there is no bench east; the benches are north, south".into() }
}
