//! Pictures: SVG from numbers.
