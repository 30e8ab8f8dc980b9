//! Small shapes. Each state has one of its own, so that no state is told by colour alone.

use maud::{Markup, PreEscaped, html};

/// Paths of a shape on a field of 24 × 24, drawn with strokes unless filled.
fn paths(name: &str) -> &'static str {
    match name {
        "live" => r#"<circle class="solid" cx="12" cy="12" r="7"/>"#,
        "stale" => r#"<circle cx="12" cy="12" r="8"/><path d="M12 7v5l4 2"/>"#,
        "never" => r#"<circle cx="12" cy="12" r="8" stroke-dasharray="3 3"/>"#,
        "alarm" => r#"<path class="solid" d="M12 2 23 21H1Z"/><path class="cut" d="M12 9v6M12 17.6v.8"/>"#,
        "caution" => r#"<path d="M12 3 22 20H2Z"/><path d="M12 9v6M12 17v.6"/>"#,
        "steady" => r#"<path class="solid" d="M3 9h18v6H3z"/>"#,
        "moving" => r#"<path d="M2 14c3-8 6 6 10-2s7 4 10-2"/>"#,
        "unmarked" => r#"<path d="M3 12h18" stroke-dasharray="4 3"/>"#,
        "scan" => r#"<path d="M3 6v12M7 6v12M10 6v12M14 6v12M17 6v12M21 6v12"/>"#,
        "weigh" => r#"<path d="M12 3v7m-4-4 4 4 4-4M3 14h18M5 14l2 6h10l2-6"/>"#,
        "take-off" => r#"<path d="M12 11V3m-4 4 4-4 4 4M3 14h18M5 14l2 6h10l2-6"/>"#,
        "slice" => r#"<path d="M4 13a8 8 0 0 0 16 0ZM8 4l4 9 4-9"/>"#,
        "cup" => r#"<path d="M4 9a8 8 0 0 0 16 0ZM12 9v8M3 20h18"/>"#,
        "oven" => r#"<path d="M3 3h18v18H3zM3 8h18M7 12c2 2-2 3 0 5m5-5c2 2-2 3 0 5m5-5c2 2-2 3 0 5"/>"#,
        "loose" => r#"<path d="M10 14 6 18a3 3 0 0 1-4-4l4-4M14 10l4-4a3 3 0 0 1 4 4l-4 4M9 5V2M5 9H2M15 19v3M19 15h3"/>"#,
        "list" => r#"<path d="M3 5h18M3 12h18M3 19h12"/>"#,
        "lab" => r#"<path d="M9 3h6M10 3v6L4 20h16L14 9V3M7 15h10"/>"#,
        "undo" => r#"<path d="M8 4 3 9l5 5M3 9h10a7 7 0 0 1 0 12H9"/>"#,
        "hand" => r#"<path d="M4 20h4L20 8l-4-4L4 16ZM13 7l4 4"/>"#,
        "keys" => r#"<path d="M2 5h20v14H2zM6 9h1M10 9h1M14 9h1M18 9h0M6 12h1M10 12h1M14 12h1M18 12h0M8 16h8"/>"#,
        "close" => r#"<path d="M4 4 20 20M20 4 4 20"/>"#,
        "check" => r#"<path d="M4 13 9 18 20 5"/>"#,
        "sound" => r#"<path d="M3 9h4l5-5v16l-5-5H3ZM16 8a6 6 0 0 1 0 8M19 5a10 10 0 0 1 0 14"/>"#,
        "person" => r#"<circle cx="12" cy="7" r="4"/><path d="M4 21c0-9 16-9 16 0"/>"#,
        "drop" => r#"<path d="M12 3c4 6 6 8 6 12a6 6 0 0 1-12 0c0-4 2-6 6-12Z"/>"#,
        "thread" => r#"<path d="M3 17c5 0 3-10 8-10s3 10 10 8"/>"#,
        "water" => r#"<path d="M2 8c4-4 6 4 10 0s6 4 10 0M2 15c4-4 6 4 10 0s6 4 10 0"/>"#,
        "tin" => r#"<path d="M4 8h16v11H4zM3 5h18v3H3z"/>"#,
        "slid" => r#"<path d="M3 18 20 6M10 18h11M13 5l-4 3 4 3"/>"#,
        "tore" => r#"<path d="M3 7h6l3 4-3 3 3 4H3M21 7h-6M21 18h-6"/>"#,
        "paste" => r#"<path d="M4 14a8 6 0 0 0 16 0ZM12 3v6M9 6h6"/>"#,
        "no" => r#"<circle cx="12" cy="12" r="9"/><path d="M6 6 18 18"/>"#,
        _ => "",
    }
}

/// A shape; hidden from screen readers because a word always stands beside it.
pub fn icon(name: &str) -> Markup {
    html! { svg.icon viewBox="0 0 24 24" aria-hidden="true" focusable="false" { (PreEscaped(paths(name))) } }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn states_differ_in_shape() {
        let states = ["live", "stale", "never", "alarm", "caution", "steady", "moving", "unmarked", "check"];
        for (i, a) in states.iter().enumerate() {
            assert!(!paths(a).is_empty(), "{a}");
            assert!(states[i + 1..].iter().all(|b| paths(a) != paths(b)), "{a}");
        }
        assert!(paths("something else").is_empty());
    }
}
