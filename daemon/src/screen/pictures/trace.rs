//! The balance around a moment, small.

use super::super::view::Trace;
use super::super::words::{Words, fill};
use super::axis::Axis;
use maud::{Markup, html};

const WIDTH: f64 = 320.0;
const HEIGHT: f64 = 84.0;
/// Points drawn at most: the picture has no more places.
const MOST: usize = 300;

/// Readings around a mass taken, with that moment marked.
pub fn trace(trace: &Trace, w: &Words) -> Markup {
    let points: Vec<(f64, f64)> = trace.points.iter().copied().filter(|(s, g)| s.is_finite() && g.is_finite()).collect();
    let every = points.len().div_ceil(MOST).max(1);
    let span = |of: fn(&(f64, f64)) -> f64, also: f64| {
        points.iter().map(of).fold((also, also), |(lo, hi): (f64, f64), v| (lo.min(v), hi.max(v)))
    };
    let (from, to) = span(|p| p.0, 0.0);
    let (low, high) = span(|p| p.1, if trace.taken_g.is_finite() { trace.taken_g } else { 0.0 });
    let (x, y) = (Axis::linear(from, to, 6.0, WIDTH - 6.0), Axis::linear(low, high, HEIGHT - 20.0, 8.0));
    let line: Vec<String> = points.iter().step_by(every).map(|(s, g)| format!("{:.1},{:.1}", x.place(*s), y.place(*g))).collect();
    let said = fill(w.trace_said, &[&format!("{from:.0}"), &format!("{to:.0}"), &format!("{low:.2}"), &format!("{high:.2}")]);
    html! {
        svg.picture.trace viewBox=(format!("0 0 {WIDTH} {HEIGHT}")) role="img" aria-label=(said) {
            path.frame d=(format!("M6 {0}H{1}", HEIGHT - 16.0, WIDTH - 6.0)) {}
            @if line.len() > 1 { polyline.line points=(line.join(" ")) {} }
            path.mark d=(format!("M{:.1} 4V{}", x.place(0.0), HEIGHT - 16.0)) {}
            circle.point cx=(format!("{:.1}", x.place(0.0))) cy=(format!("{:.1}", y.place(trace.taken_g))) r="4.5" {}
            text.scale x="6" y=(HEIGHT - 3.0) { (format!("{from:.0} ")) (w.second) }
            text.scale x=(WIDTH - 6.0) y=(HEIGHT - 3.0) text-anchor="end" { (format!("+{to:.0} ")) (w.second) }
        }
    }
}

#[cfg(test)]
mod tests {
    use super::super::super::words::ENGLISH;
    use super::*;

    #[test]
    fn the_moment_is_marked_and_the_picture_stays_small() {
        let points = (-300..300).map(|i| (f64::from(i) / 30.0, if i < 0 { 0.0 } else { 23.46 })).collect();
        let drawn = trace(&Trace { points, taken_g: 23.46 }, &ENGLISH).into_string();
        assert_eq!(drawn.matches("class=\"point\"").count(), 1);
        assert!(drawn.len() < 6_000, "{}", drawn.len());
        let odd =
            trace(&Trace { points: vec![(f64::NAN, 1.0), (0.0, f64::INFINITY)], taken_g: f64::NAN }, &ENGLISH).into_string();
        assert!(!odd.contains("NaN,") && !odd.contains("polyline"), "{odd}");
    }
}
