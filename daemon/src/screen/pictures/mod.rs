//! Pictures: SVG from numbers. Colours come from the style sheet by class, so
//! that they follow dark and light and are tested in one place.

mod axis;
mod chart;
mod flow;
mod icon;
mod trace;

pub use chart::plasticity_chart;
pub use flow::flow_line;
pub use icon::icon;
pub use trace::trace;
