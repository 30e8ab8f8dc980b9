//! Indices that follow from the limits. Each is `None` where it has no meaning.

/// Keeps a quotient that is a number.
fn ratio(top: f64, bottom: f64) -> Option<f64> {
    let value = top / bottom;
    (bottom > 0.0 && value.is_finite()).then_some(value)
}

/// Liquidity index (w − PL) / PI.
pub fn liquidity(water: f64, plastic_limit: f64, plasticity_index: f64) -> Option<f64> {
    ratio(water - plastic_limit, plasticity_index)
}

/// Consistency index (LL − w) / PI.
pub fn consistency(water: f64, liquid_limit: f64, plasticity_index: f64) -> Option<f64> {
    ratio(liquid_limit - water, plasticity_index)
}

/// Flow index: fall of water content per tenfold number of drops, the
/// negative slope of the flow line. `None` where the line does not fall.
pub fn flow(slope_per_decade: f64) -> Option<f64> {
    (slope_per_decade < 0.0 && slope_per_decade.is_finite()).then_some(-slope_per_decade)
}

/// Toughness index PI / flow index.
pub fn toughness(plasticity_index: f64, flow_index: f64) -> Option<f64> {
    ratio(plasticity_index, flow_index)
}

/// Activity PI / clay percent.
pub fn activity(plasticity_index: f64, clay_percent: f64) -> Option<f64> {
    ratio(plasticity_index, clay_percent).filter(|_| clay_percent <= 100.0)
}

/// Group index of M 145 from the share passing 0.075 mm (percent) and the
/// reported limits: `(F−35)[0.2+0.005(LL−40)] + 0.01(F−15)(PI−10)`, not below
/// zero; reported as a whole number.
pub fn group_index(passing_75um: f64, liquid_limit: f64, plasticity_index: f64) -> f64 {
    let first = (passing_75um - 35.0) * (0.2 + 0.005 * (liquid_limit - 40.0));
    (first + second_term(passing_75um, plasticity_index)).max(0.0)
}

/// Group index of the groups A-2-6 and A-2-7: the second term alone (M 145,
/// from memory, not checked against the text).
pub fn group_index_of_a2(passing_75um: f64, plasticity_index: f64) -> f64 {
    second_term(passing_75um, plasticity_index).max(0.0)
}

/// Group index as it is reported, for a group of M 145: a whole number, halves
/// up. Of the other groups of A-2, and of non-plastic soil, it is 0.
pub fn group_index_of(group: &str, passing_75um: f64, liquid_limit: f64, plasticity_index: f64) -> u32 {
    let index = match group {
        "A-2-6" | "A-2-7" => group_index_of_a2(passing_75um, plasticity_index),
        "A-2-4" | "A-2-5" => 0.0,
        _ => group_index(passing_75um, liquid_limit, plasticity_index),
    };
    super::rounding::round(index, 0, crate::method::Tie::HalfUp) as u32
}

fn second_term(passing_75um: f64, plasticity_index: f64) -> f64 {
    0.01 * (passing_75um - 15.0) * (plasticity_index - 10.0)
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn nothing_divides_by_nothing() {
        assert_eq!(liquidity(20.0, 15.0, 0.0), None);
        assert_eq!(consistency(20.0, 30.0, f64::NAN), None);
        assert_eq!(toughness(10.0, -1.0), None);
        assert_eq!(flow(3.0), None);
        assert_eq!(activity(10.0, 101.0), None);
        assert_eq!(activity(10.0, 20.0), Some(0.5));
        assert_eq!(flow(-9.8), Some(9.8));
    }

    #[test]
    fn a_group_index_is_never_negative() {
        assert_eq!(group_index(10.0, 30.0, 5.0), 0.0);
        assert_eq!(group_index_of_a2(30.0, 5.0), 0.0);
        assert!((group_index_of_a2(30.0, 20.0) - 1.5).abs() < 1e-12);
        assert_eq!(group_index_of("A-2-6", 30.0, 38.0, 20.0), 2);
        assert_eq!(group_index_of("A-2-4", 34.0, 38.0, 9.0), 0);
        assert_eq!(group_index_of("A-7-5", 72.0, 52.0, 21.0), 16);
    }
}
