//! The plasticity chart.
//!
//! Groups are decided on the **reported** limits (rounded as the method says),
//! so that a reader of the report finds the same group. Lines and groups:
//! ASTM D2487, from memory, not checked against the text.

/// A point this close to a line lies on it: reported limits have at most a
/// few decimals, the rest is the arithmetic of doubles.
const ON_LINE: f64 = 1e-9;

/// Group of inorganic fines.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub enum Group {
    /// Lean clay.
    Cl,
    /// Silt.
    Ml,
    /// Silty clay.
    ClMl,
    /// Fat clay.
    Ch,
    /// Elastic silt.
    Mh,
}

impl Group {
    /// The symbol of the chart.
    pub fn symbol(self) -> &'static str {
        match self {
            Self::Cl => "CL",
            Self::Ml => "ML",
            Self::ClMl => "CL-ML",
            Self::Ch => "CH",
            Self::Mh => "MH",
        }
    }
}

/// A-line: PI = 0.73 (LL − 20), horizontal at PI 4 up to LL 25.5.
pub fn a_line(liquid_limit: f64) -> f64 {
    (0.73 * (liquid_limit - 20.0)).max(4.0)
}

/// U-line: PI = 0.9 (LL − 8). No natural soil was known above it when it was drawn.
pub fn u_line(liquid_limit: f64) -> f64 {
    0.9 * (liquid_limit - 8.0)
}

/// Whether a point lies above the U-line, whose lower part is vertical at
/// LL 16: such a point calls for another look at the data.
pub fn above_u_line(liquid_limit: f64, plasticity_index: f64) -> bool {
    plasticity_index > u_line(liquid_limit) + ON_LINE || liquid_limit < 16.0 - ON_LINE
}

/// Group of the fines by the reported limits.
pub fn group(liquid_limit: f64, plasticity_index: f64) -> Group {
    let on_or_above = plasticity_index >= a_line(liquid_limit) - ON_LINE;
    match (liquid_limit < 50.0, on_or_above) {
        (false, true) => Group::Ch,
        (false, false) => Group::Mh,
        (true, false) => Group::Ml,
        (true, true) if plasticity_index > 7.0 + ON_LINE => Group::Cl,
        (true, true) => Group::ClMl,
    }
}

/// Group of fines that are non-plastic: silt, elastic when a liquid limit of
/// 50 or more was obtained.
pub fn group_of_non_plastic(liquid_limit: Option<f64>) -> Group {
    match liquid_limit {
        Some(limit) if limit >= 50.0 => Group::Mh,
        _ => Group::Ml,
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn each_zone_and_its_edges() {
        for (ll, pi, symbol) in [
            (34.0, 15.0, "CL"),
            (30.0, 8.0, "CL"),
            (29.0, 7.0, "CL-ML"),
            (30.0, 7.0, "ML"), // the A-line is at 7.3 here
            (30.0, 7.3, "CL"), // exactly on it
            (20.0, 4.0, "CL-ML"),
            (20.0, 3.0, "ML"),
            (25.0, 5.0, "CL-ML"),
            (49.0, 22.0, "CL"),
            (49.0, 21.0, "ML"), // A-line 21.17
            (50.0, 22.0, "CH"), // A-line 21.9
            (50.0, 21.0, "MH"),
            (80.0, 43.8, "CH"), // exactly on it
            (80.0, 43.0, "MH"),
        ] {
            assert_eq!(group(ll, pi).symbol(), symbol, "LL {ll} PI {pi}");
        }
        assert_eq!(group_of_non_plastic(None), Group::Ml);
        assert_eq!(group_of_non_plastic(Some(50.0)), Group::Mh);
    }

    #[test]
    fn the_u_line_has_a_vertical_foot() {
        assert!(!above_u_line(50.0, 37.8));
        assert!(above_u_line(50.0, 38.0));
        assert!(!above_u_line(16.0, 7.0));
        assert!(above_u_line(15.0, 3.0));
    }
}
