use super::*;

fn layout(kind: Kind) -> Layout {
    Layout { paper: (210.0, 297.0), label: (48.0, 25.0), margin: 10.0, gap: 0.0, outline: true, kind }
}

fn label(code: &str) -> Label {
    Label { code: code.into(), words: String::new() }
}

/// Right and lower end of a mark.
fn end(mark: &Mark) -> (f64, f64) {
    match mark {
        Mark::Bar(x, y, w, h) | Mark::Edge(x, y, w, h) => (x + w, y + h),
        Mark::Text { x, y, size, text, .. } => (x + text.len() as f64 * LETTER * size / 2.0, *y),
    }
}

#[test]
fn pages_are_filled_one_after_the_other_and_nothing_leaves_them() {
    for kind in [Kind::Code128, Kind::Qr] {
        let labels: Vec<Label> = (1..=41).map(|n| label(&format!("C{n}"))).collect();
        let pages = pages(&labels, &layout(kind)).expect("pages");
        // Three across, eleven down.
        assert_eq!(pages.len(), 41usize.div_ceil(3 * 11).max(2), "{kind:?}");
        for mark in pages.iter().flat_map(|p| &p.marks) {
            let (x, y) = end(mark);
            assert!(x <= 210.0 && y <= 297.0, "{mark:?}");
        }
        let last = &pages[1].marks;
        assert!(last.iter().any(|m| matches!(m, Mark::Text { text, .. } if text == "C41")));
        assert!(last.iter().any(|m| matches!(m, Mark::Bar(_, _, w, _) if (*w - 100.0).abs() < 1e-9)), "the bar of 100 mm");
    }
}

#[test]
fn a_printed_module_is_a_whole_number_of_dots() {
    for kind in [Kind::Code128, Kind::Qr] {
        let page = &pages(&[label("S-101")], &layout(kind)).expect("a page")[0];
        let bars = page.marks.iter().filter_map(|m| if let Mark::Bar(_, y, w, _) = m { (*y < 40.0).then_some(*w) } else { None });
        let thin = bars.clone().fold(f64::MAX, f64::min);
        assert!(thin >= 3.0 * DOT - 1e-9);
        for bar in bars {
            let modules = bar / thin;
            assert!((modules - modules.round()).abs() < 1e-6, "{bar} in modules of {thin}");
        }
    }
}

#[test]
fn what_does_not_fit_is_told_with_what_to_try() {
    let long = label("a-name-of-thirty-two-characters-");
    let fault = pages(std::slice::from_ref(&long), &layout(Kind::Code128)).expect_err("too long for lines").to_string();
    assert!(fault.contains("--symbol qr") && fault.contains("48 × 25 mm"), "{fault}");
    assert!(pages(&[long], &layout(Kind::Qr)).is_ok());
    let wide = Layout { label: (300.0, 25.0), ..layout(Kind::Qr) };
    assert!(pages(&[label("C1")], &wide).expect_err("no room").to_string().contains("smaller --size"));
    let tiny = Layout { label: (12.0, 8.0), ..layout(Kind::Qr) };
    assert!(pages(&[label("C1")], &tiny).expect_err("too fine").to_string().contains("larger --size"));
    assert!(pages(&[label("é")], &layout(Kind::Qr)).expect_err("no ASCII").to_string().contains("ASCII"));
    for odd in [f64::NAN, f64::INFINITY, -1.0, 0.0] {
        assert!(pages(&[label("C1")], &Layout { label: (odd, 25.0), ..layout(Kind::Qr) }).is_err(), "{odd}");
    }
}

#[test]
fn words_are_broken_into_lines() {
    assert_eq!(wrapped("the container just read goes into the oven", 20), ["the container just", "read goes into the", "oven"]);
    assert_eq!(wrapped("", 20), [""; 0]);
}
