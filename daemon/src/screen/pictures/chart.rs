//! The plasticity chart.

use super::super::view::Chart;
use super::super::words::{Words, fill};
use super::axis::{Axis, label, ticks};
use maud::{Markup, html};
use tarecup_core::soil::chart::{a_line, u_line};

const WIDTH: f64 = 440.0;
const HEIGHT: f64 = 300.0;
const LEFT: f64 = 46.0;
const RIGHT: f64 = 428.0;
const TOP: f64 = 14.0;
const BOTTOM: f64 = 256.0;
/// The chart ends here, unless a specimen of the laboratory lies beyond.
const LL_TO: f64 = 100.0;
const PI_TO: f64 = 60.0;
/// Groups with the place of their names, liquid limit and index.
const GROUPS: [(&str, f64, f64); 5] =
    [("CL", 38.0, 21.0), ("CH", 68.0, 43.0), ("ML", 40.0, 8.0), ("MH", 75.0, 22.0), ("CL-ML", 14.5, 9.5)];

fn p(value: f64) -> String {
    format!("{value:.1}")
}

/// The chart with the A-line, the U-line, this specimen and the laboratory's others.
pub fn plasticity_chart(specimen: &str, chart: &Chart, w: &Words) -> Markup {
    let all = || chart.this.into_iter().chain(chart.others.iter().map(|(_, ll, pi)| (*ll, *pi)));
    let finite = || all().filter(|(ll, pi)| ll.is_finite() && pi.is_finite());
    let ll_to = finite().map(|(ll, _)| ll * 1.05).fold(LL_TO, f64::max).min(1_000.0);
    let pi_to = finite().map(|(_, pi)| pi * 1.05).fold(PI_TO, f64::max).min(1_000.0);
    let (x, y) = (Axis::linear(0.0, ll_to, LEFT, RIGHT), Axis::linear(0.0, pi_to, BOTTOM, TOP));
    let this = chart.this.filter(|(ll, pi)| ll.is_finite() && pi.is_finite());
    let said = match this {
        Some((ll, pi)) => fill(w.chart_said, &[specimen, &format!("{ll:.0}"), &format!("{pi:.0}")]),
        None => fill(w.chart_said_none, &[specimen]),
    };
    html! {
        svg.picture.chart viewBox=(format!("0 0 {WIDTH} {HEIGHT}")) role="img" aria-label=(said) {
            (grid(&x, &y, ll_to, pi_to, w))
            (lines(&x, &y, ll_to, pi_to, w))
            @for (id, ll, pi) in chart.others.iter().filter(|o| o.1.is_finite() && o.2.is_finite()) {
                circle.other cx=(p(x.place(*ll))) cy=(p(y.place(*pi))) r="4" { title { (id) } }
            }
            @if let Some((ll, pi)) = this {
                path.here d=(format!("M{} {}l8 8 -8 8 -8 -8Z", p(x.place(ll)), p(y.place(pi) - 8.0))) {}
                text.value x=(p(x.place(ll) + 12.0)) y=(p(y.place(pi) - 6.0)) { (specimen) }
            }
        }
    }
}

fn grid(x: &Axis, y: &Axis, ll_to: f64, pi_to: f64, w: &Words) -> Markup {
    html! {
        @for pi in ticks(0.0, pi_to, 6) {
            path.rule d=(format!("M{LEFT} {}H{RIGHT}", p(y.place(pi)))) {}
            text.scale x=(p(LEFT - 7.0)) y=(p(y.place(pi) + 4.5)) text-anchor="end" { (label(pi)) }
        }
        @for ll in ticks(0.0, ll_to, 10) {
            text.scale x=(p(x.place(ll))) y=(p(BOTTOM + 17.0)) text-anchor="middle" { (label(ll)) }
        }
        path.frame d=(format!("M{LEFT} {TOP}V{BOTTOM}H{RIGHT}")) {}
        text.scale x=(p((LEFT + RIGHT) / 2.0)) y=(p(HEIGHT - 6.0)) text-anchor="middle" { (w.chart_x) }
        text.scale x="13" y=(p((TOP + BOTTOM) / 2.0)) text-anchor="middle" transform=(format!("rotate(-90 13 {})", p((TOP + BOTTOM) / 2.0))) { (w.chart_y) }
    }
}

/// The lines of the chart are the core's; here they are only drawn.
fn lines(x: &Axis, y: &Axis, ll_to: f64, pi_to: f64, w: &Words) -> Markup {
    let at = |ll: f64, pi: f64| format!("{} {}", p(x.place(ll)), p(y.place(pi)));
    // Where a straight line leaves the chart at its top or its right end.
    let end = |line: fn(f64) -> f64| {
        let steps = (0..=2_000).map(|i| ll_to * f64::from(i) / 2_000.0);
        steps.filter(|ll| line(*ll) <= pi_to).fold(0.0, f64::max)
    };
    let (a_end, u_end) = (end(a_line), end(u_line));
    let corner = 4.0 / 0.73 + 20.0;
    let flat = 7.0 / 0.73 + 20.0;
    html! {
        path.a-line d=(format!("M{}L{}L{}", at(8.0 + 4.0 / 0.9, 4.0), at(corner, 4.0), at(a_end, a_line(a_end)))) {}
        path.a-line d=(format!("M{}L{}", at(8.0 + 7.0 / 0.9, 7.0), at(flat, 7.0))) {}
        path.u-line d=(format!("M{}L{}L{}", at(16.0, 0.0), at(16.0, u_line(16.0)), at(u_end, u_line(u_end)))) {}
        path.mark d=(format!("M{} {TOP}V{BOTTOM}", p(x.place(50.0)))) {}
        text.scale x=(p(x.place(a_end) - 4.0)) y=(p(y.place(a_line(a_end)) + 26.0)) text-anchor="end" { (w.a_line) }
        text.scale x=(p(x.place(u_end) - 26.0)) y=(p(y.place(u_line(u_end)) + 16.0)) text-anchor="end" { (w.u_line) }
        @for (name, ll, pi) in GROUPS { text.zone x=(p(x.place(ll))) y=(p(y.place(pi))) text-anchor="middle" { (name) } }
    }
}

#[cfg(test)]
mod tests {
    use super::super::super::words::ENGLISH;
    use super::*;

    #[test]
    fn a_point_on_the_a_line_lies_on_the_drawn_one() {
        // LL 60: PI = 0.73 · 40 = 29.2; x = 46 + 0.6 · 382 = 275.2; y = 256 − 29.2/60 · 242 = 138.2
        let drawn = plasticity_chart("S-1", &Chart { this: Some((60.0, 29.2)), others: vec![] }, &ENGLISH).into_string();
        assert!(drawn.contains("M275.2 130.2l8 8"), "{drawn}");
        // Its end at LL 100: PI 58.4, so x 428, y 256 − 58.4/60 · 242 = 20.5.
        assert!(drawn.contains("L428.0 20.5"), "{drawn}");
    }

    #[test]
    fn hostile_names_and_numbers() {
        let others = vec![("<script>alert(1)</script>\"'".to_string(), 41.0, 19.0), ("x".to_string(), f64::NAN, f64::INFINITY)];
        let drawn = plasticity_chart("\"><svg onload=x>", &Chart { this: Some((f64::NAN, 1.0)), others }, &ENGLISH).into_string();
        assert!(
            !drawn.contains("<script>") && !drawn.contains("<svg onload") && !drawn.contains("NaN,") && !drawn.contains("inf")
        );
        assert_eq!(drawn.matches("class=\"other\"").count(), 1);
    }
}
