//! The plasticity chart.
//!
//! Groups are decided on the **reported** limits (rounded as the method says),
//! so that a reader of the report finds the same group. Lines and groups:
//! ASTM D2487, from memory, not checked against the text.

/// A point this close to a line lies on it: reported limits have at most a
/// few decimals, the rest is the arithmetic of doubles.
const ON_LINE: f64 = 1e-9;

/// Group of fines.
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
    /// Organic silt or clay of low liquid limit.
    Ol,
    /// Organic silt or clay of high liquid limit.
    Oh,
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
            Self::Ol => "OL",
            Self::Oh => "OH",
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

/// Plasticity index as a share of that of the A-line at the same liquid limit; nothing where the A-line is so low
/// (PI 4, up to LL 25.5) that a share of it says little.
pub fn a_line_ratio(liquid_limit: f64, plastic_limit: f64) -> Option<f64> {
    let line = a_line(liquid_limit);
    (line > 4.0).then(|| (liquid_limit - plastic_limit) / line)
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

/// Organic fines: drying in the oven takes more than a quarter off the liquid
/// limit (ratio below 0.75). `None` for fines that are not organic.
pub fn organic(liquid_limit: f64, oven_dried: f64) -> Option<Group> {
    let ratio = oven_dried / liquid_limit;
    let group = if liquid_limit < 50.0 { Group::Ol } else { Group::Oh };
    (0.0..0.75).contains(&ratio).then_some(group)
}

/// Plasticity by the liquid limit, EN ISO 14688-2: low below 35, intermediate to 50, high above.
pub fn plasticity_by_liquid_limit(liquid_limit: f64) -> &'static str {
    match liquid_limit {
        l if l < 35.0 => "low",
        l if l <= 50.0 => "intermediate",
        _ => "high",
    }
}

/// Group of AASHTO M 145 by the reported limits and the share passing 0.075 mm
/// (from memory, not checked against the text). Non-plastic soil has PI 0, and
/// perhaps no liquid limit. `None` where the coarser sieves would decide: up to
/// 25 % passing with a PI up to 6 it may be an A-1, up to 10 % non-plastic an A-3.
pub fn m145(passing_75um: f64, liquid_limit: Option<f64>, plasticity_index: f64) -> Option<&'static str> {
    if !(0.0..=100.0).contains(&passing_75um) || (passing_75um <= 25.0 && plasticity_index <= 6.0) {
        return None;
    }
    // A non-plastic soil without a liquid limit is not a wet one.
    let high = liquid_limit.is_some_and(|l| l > 40.0);
    let plastic = plasticity_index > 10.0;
    Some(match (passing_75um > 35.0, high, plastic) {
        (true, false, false) => "A-4",
        (true, true, false) => "A-5",
        (true, false, true) => "A-6",
        (true, true, true) if liquid_limit.is_some_and(|l| plasticity_index <= l - 30.0 + ON_LINE) => "A-7-5",
        (true, true, true) => "A-7-6",
        (false, false, false) => "A-2-4",
        (false, true, false) => "A-2-5",
        (false, false, true) => "A-2-6",
        (false, true, true) => "A-2-7",
    })
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
    fn organic_fines_lose_a_quarter_in_the_oven() {
        assert_eq!(organic(48.0, 35.9), Some(Group::Ol));
        assert_eq!(organic(48.0, 36.0), None); // 0.75 itself
        assert_eq!(organic(60.0, 40.0), Some(Group::Oh));
        assert_eq!(organic(0.0, 0.0), None);
    }

    #[test]
    fn plasticity_has_its_edges_in_the_middle_class() {
        let of = [34.9, 35.0, 50.0, 50.1].map(plasticity_by_liquid_limit);
        assert_eq!(of, ["low", "intermediate", "intermediate", "high"]);
    }

    #[test]
    fn each_group_of_m145_and_its_edges() {
        for (passing, ll, pi, group) in [
            (36.0, Some(40.0), 10.0, Some("A-4")),
            (36.0, Some(41.0), 10.0, Some("A-5")),
            (36.0, Some(40.0), 11.0, Some("A-6")),
            (72.0, Some(52.0), 21.0, Some("A-7-5")), // 21 ≤ 52 − 30
            (72.0, Some(51.0), 21.0, Some("A-7-5")), // exactly
            (72.0, Some(50.0), 21.0, Some("A-7-6")),
            (35.0, Some(30.0), 8.0, Some("A-2-4")),
            (35.0, Some(45.0), 8.0, Some("A-2-5")),
            (20.0, Some(38.0), 14.0, Some("A-2-6")),
            (20.0, Some(45.0), 14.0, Some("A-2-7")),
            (30.0, None, 0.0, Some("A-2-4")),
            (60.0, None, 0.0, Some("A-4")),
            (25.0, Some(20.0), 6.0, None), // may be an A-1-b
            (8.0, None, 0.0, None),        // may be an A-3
            (101.0, Some(30.0), 12.0, None),
            (f64::NAN, Some(30.0), 12.0, None),
        ] {
            assert_eq!(m145(passing, ll, pi), group, "{passing} {ll:?} {pi}");
        }
    }

    #[test]
    fn the_u_line_has_a_vertical_foot() {
        assert!(!above_u_line(50.0, 37.8));
        assert!(above_u_line(50.0, 38.0));
        assert!(!above_u_line(16.0, 7.0));
        assert!(above_u_line(15.0, 3.0));
    }
}
