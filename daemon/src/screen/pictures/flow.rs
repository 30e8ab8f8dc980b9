//! The flow line: water content against drops on a logarithmic axis.

use super::super::view::Flow;
use super::super::words::{Words, fill};
use super::axis::{Axis, label, ticks};
use maud::{Markup, html};

/// Size of the picture and of its margins.
const WIDTH: f64 = 440.0;
const HEIGHT: f64 = 250.0;
const LEFT: f64 = 46.0;
const RIGHT: f64 = 428.0;
const TOP: f64 = 14.0;
const BOTTOM: f64 = 206.0;
/// Drops that are labelled when they lie on the axis.
const LABELLED: [f64; 9] = [5.0, 10.0, 15.0, 20.0, 25.0, 30.0, 40.0, 50.0, 100.0];

struct Axes {
    x: Axis,
    y: Axis,
    span: (f64, f64),
}

/// The axes that hold every point, and 25 drops in any case.
fn axes(flow: &Flow) -> Axes {
    let drops = flow.points.iter().map(|p| p.drops).chain(flow.waiting.iter().copied());
    let (lo, hi) = drops.filter(|d| d.is_finite()).fold((12.0f64, 40.0f64), |(lo, hi), d| (lo.min(d * 0.85), hi.max(d * 1.15)));
    let at_25 = flow.fit.as_ref().map(|f| on_line(f.at_one, f.slope, 25.0));
    let waters = flow.points.iter().map(|p| p.water_percent).chain(at_25).filter(|w| w.is_finite());
    let (low, high) = waters.fold((f64::INFINITY, f64::NEG_INFINITY), |(l, h), w| (l.min(w), h.max(w)));
    let (low, high) = if low <= high { (low, high) } else { (20.0, 40.0) };
    let room = ((high - low) * 0.25).max(1.0);
    let span = (low - room, high + room);
    Axes { x: Axis::log(lo, hi, LEFT, RIGHT), y: Axis::linear(span.0, span.1, BOTTOM, TOP), span }
}

fn on_line(at_one: f64, slope: f64, drops: f64) -> f64 {
    at_one + slope * drops.log10()
}

fn p(value: f64) -> String {
    format!("{value:.1}")
}

/// The flow line of a specimen, whatever there is of it yet.
pub fn flow_line(specimen: &str, flow: &Flow, w: &Words) -> Markup {
    let axes = axes(flow);
    let at_25 = flow.fit.as_ref().map(|f| on_line(f.at_one, f.slope, 25.0)).filter(|v| v.is_finite());
    let said = match at_25 {
        Some(v) => fill(w.flow_said, &[specimen, &flow.points.len().to_string(), &format!("{v:.1}")]),
        None => fill(w.flow_said_no_line, &[specimen, &flow.points.len().to_string(), &flow.waiting.len().to_string()]),
    };
    html! {
        svg.picture.flow viewBox=(format!("0 0 {WIDTH} {HEIGHT}")) role="img" aria-label=(said) {
            (grid(&axes, w))
            @if let Some(fit) = &flow.fit { (line(fit, &axes, at_25)) }
            @for d in flow.waiting.iter().filter(|d| axes.x.holds(**d)) {
                path.waiting d=(format!("M{} {}v10", p(axes.x.place(*d)), p(BOTTOM - 10.0))) {}
            }
            @for point in &flow.points {
                @let (x, y) = (p(axes.x.place(point.drops)), p(axes.y.place(point.water_percent)));
                @if point.used { circle.point cx=(x) cy=(y) r="5.5" {} }
                @else { path.aside d=(format!("M{x} {y}m-5 -5l10 10m0 -10l-10 10")) {} }
            }
        }
    }
}

fn grid(axes: &Axes, w: &Words) -> Markup {
    let x25 = axes.x.place(25.0);
    html! {
        @for tick in ticks(axes.span.0, axes.span.1, 4) {
            @let y = axes.y.place(tick);
            path.rule d=(format!("M{LEFT} {}H{RIGHT}", p(y))) {}
            text.scale x=(p(LEFT - 7.0)) y=(p(y + 4.5)) text-anchor="end" { (label(tick)) }
        }
        @for drops in LABELLED.iter().filter(|d| axes.x.holds(**d)) {
            @let x = axes.x.place(*drops);
            @if *drops != 25.0 { path.rule d=(format!("M{} {TOP}V{BOTTOM}", p(x))) {} }
            text.scale.strong[*drops == 25.0] x=(p(x)) y=(p(BOTTOM + 17.0)) text-anchor="middle" { (label(*drops)) }
        }
        path.mark d=(format!("M{} {TOP}V{BOTTOM}", p(x25))) {}
        path.frame d=(format!("M{LEFT} {TOP}V{BOTTOM}H{RIGHT}")) {}
        text.scale x=(p((LEFT + RIGHT) / 2.0)) y=(p(HEIGHT - 6.0)) text-anchor="middle" { (w.flow_x) }
        text.scale x="13" y=(p((TOP + BOTTOM) / 2.0)) text-anchor="middle" transform=(format!("rotate(-90 13 {})", p((TOP + BOTTOM) / 2.0))) { (w.flow_y) }
    }
}

/// The band, the line between its ends, and where it crosses 25.
fn line(fit: &super::super::view::Fit, axes: &Axes, at_25: Option<f64>) -> Markup {
    let y = |v: f64| axes.y.place(v).clamp(TOP, BOTTOM);
    let upper = fit.band.iter().map(|(d, _, high)| format!("{},{}", p(axes.x.place(*d)), p(y(*high))));
    let lower = fit.band.iter().rev().map(|(d, low, _)| format!("{},{}", p(axes.x.place(*d)), p(y(*low))));
    let band: Vec<String> = upper.chain(lower).collect();
    // Clipped to the frame by walking along it: a steep line never leaves the picture.
    let steps = (0..=40).map(|i| LEFT + (RIGHT - LEFT) * f64::from(i) / 40.0);
    let (from, to) = (axes.x.place(1.0), axes.x.place(10.0));
    let along = steps.map(|x| (x, axes.y.place(fit.at_one + fit.slope * (x - from) / (to - from))));
    let inside: Vec<String> =
        along.filter(|(_, v)| (TOP..=BOTTOM).contains(v)).map(|(x, v)| format!("{},{}", p(x), p(v))).collect();
    html! {
        @if band.len() > 2 { polygon.band points=(band.join(" ")) {} }
        @if inside.len() > 1 { polyline.line points=(inside.join(" ")) {} }
        @if let Some(v) = at_25 {
            @let (x, y) = (axes.x.place(25.0), axes.y.place(v));
            path.read d=(format!("M{} {}H{LEFT}", p(x), p(y))) {}
            path.here d=(format!("M{} {}l7 7 -7 7 -7 -7Z", p(x), p(y - 7.0))) {}
            text.value x=(p(x + 11.0)) y=(p(y - 9.0)) data-number=(format!("{v:.1}")) { (format!("{v:.1}")) }
        }
    }
}

#[cfg(test)]
mod tests {
    use super::super::super::view::{Fit, FlowPoint};
    use super::super::super::words::ENGLISH;
    use super::*;

    fn flow(slope: f64) -> Flow {
        let point = |no, drops, water_percent| FlowPoint { no, drops, water_percent, used: no != 3 };
        Flow {
            points: vec![point(1, 32.0, 33.16), point(2, 25.0, 34.15), point(3, 18.0, 35.47)],
            waiting: vec![28.0],
            fit: Some(Fit { at_one: 46.95, slope, band: vec![(15.0, 35.0, 37.0), (25.0, 33.7, 34.6), (40.0, 31.0, 33.0)] }),
        }
    }

    #[test]
    fn the_value_at_25_is_read_off_the_line() {
        // 46.95 − 9.16 · log10 25 = 46.95 − 9.16 · 1.39794 = 34.145
        let drawn = flow_line("S-1", &flow(-9.16), &ENGLISH).into_string();
        assert!(drawn.contains(">34.1<"), "{drawn}");
        assert_eq!(drawn.matches("<circle class=\"point\"").count(), 2);
        assert_eq!(drawn.matches("class=\"aside\"").count(), 1);
        assert_eq!(drawn.matches("class=\"waiting\"").count(), 1);
        assert!(drawn.contains("class=\"band\"") && drawn.contains("class=\"mark\""));
    }

    #[test]
    fn any_numbers_are_drawn_and_names_are_escaped() {
        for slope in [0.0, 1e9, -1e9, f64::NAN, f64::INFINITY] {
            let drawn = flow_line("<script>\"", &flow(slope), &ENGLISH).into_string();
            assert!(!drawn.contains("NaN") && !drawn.contains("inf,") && !drawn.contains("<script>"), "{slope}: {drawn}");
        }
        let empty = flow_line("S-1", &Flow::default(), &ENGLISH).into_string();
        assert!(empty.contains("class=\"mark\"") && !empty.contains("polyline"));
    }
}
