//! Water content from the three masses of a moisture container.

use crate::quantity::Mass;

/// Why three masses give no water content.
#[derive(Clone, Copy, Debug, PartialEq, Eq, thiserror::Error)]
pub enum WaterError {
    /// A container cannot weigh less than nothing.
    #[error("the empty container is given as {tare} g, below zero; zero the balance and weigh it again")]
    NegativeTare {
        /// Empty container.
        tare: Mass,
    },
    /// There is no wet soil.
    #[error("the container with wet soil ({wet} g) does not weigh more than the empty one ({tare} g); look for exchanged masses")]
    WetNotAboveTare {
        /// Empty container.
        tare: Mass,
        /// With wet soil.
        wet: Mass,
    },
    /// There is no dry soil, so nothing to relate the water to.
    #[error(
        "the container with dried soil ({dry} g) does not weigh more than the empty one ({tare} g); look for exchanged masses"
    )]
    DryNotAboveTare {
        /// Empty container.
        tare: Mass,
        /// With dried soil.
        dry: Mass,
    },
    /// Drying cannot add mass, however little: the water content would be negative.
    #[error("the dried soil ({dry} g) weighs more than the wet ({wet} g): a negative water content; look for exchanged masses")]
    DryAboveWet {
        /// With wet soil.
        wet: Mass,
        /// With dried soil.
        dry: Mass,
    },
}

/// Water content `w = 100 · (m_wet − m_dry) / (m_dry − m_tare)` in percent of
/// dry mass (T 265, D2216). No water at all, `m_wet = m_dry`, is 0 %.
///
/// The differences are exact; one division rounds.
///
/// # Errors
/// Every order of the masses that no soil can have; see [`WaterError`].
pub fn water_percent(tare: Mass, wet: Mass, dry: Mass) -> Result<f64, WaterError> {
    if tare < Mass::ZERO {
        return Err(WaterError::NegativeTare { tare });
    }
    if wet <= tare {
        return Err(WaterError::WetNotAboveTare { tare, wet });
    }
    if dry <= tare {
        return Err(WaterError::DryNotAboveTare { tare, dry });
    }
    if dry > wet {
        return Err(WaterError::DryAboveWet { wet, dry });
    }
    // All three are positive or zero here, so no difference can overflow;
    // 100 times one can, hence the wider integer.
    let water = 100 * (i128::from(wet.ug()) - i128::from(dry.ug()));
    let soil = i128::from(dry.ug()) - i128::from(tare.ug());
    Ok(water as f64 / soil as f64)
}

/// Standard uncertainty of a water content, percent of dry mass, that comes
/// from the balance's display alone: each of the three readings is a
/// rectangular distribution one display step wide.
///
/// With Ms the dry soil mass: ∂w/∂m_wet = 100/Ms, ∂w/∂m_dry = −(100+w)/Ms,
/// ∂w/∂m_tare = w/Ms (derivatives of the definition).
pub fn display_uncertainty(water: f64, dry_soil_g: f64, step_g: f64) -> f64 {
    let reading = step_g / libm::sqrt(12.0);
    let sum = 100.0 * 100.0 + (100.0 + water) * (100.0 + water) + water * water;
    reading * libm::sqrt(sum) / dry_soil_g
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::quantity::MassUnit;
    use alloc::string::ToString;

    fn g(text: &str) -> Mass {
        Mass::parse(text, MassUnit::Gram).unwrap()
    }

    #[test]
    fn masses_give_the_defined_ratio() {
        // By hand: 4.83 g of water in 11.96 g of soil.
        assert_eq!(water_percent(g("21.43"), g("38.22"), g("33.39")), Ok(48_300.0 / 1_196.0));
        assert_eq!(water_percent(g("0"), g("1.5"), g("1.0")), Ok(50.0));
        assert_eq!(water_percent(g("10"), g("20"), g("20")), Ok(0.0));
    }

    #[test]
    fn impossible_orders_are_told_apart() {
        let (t, w, d) = (g("20"), g("30"), g("28"));
        assert_eq!(water_percent(t, t, d), Err(WaterError::WetNotAboveTare { tare: t, wet: t }));
        assert_eq!(water_percent(t, w, t), Err(WaterError::DryNotAboveTare { tare: t, dry: t }));
        assert_eq!(water_percent(t, d, w), Err(WaterError::DryAboveWet { wet: d, dry: w }));
        assert_eq!(water_percent(g("-1"), w, d), Err(WaterError::NegativeTare { tare: g("-1") }));
        // One hundredth of a gram the wrong way is refused, in words.
        let said = water_percent(t, g("27.99"), d).unwrap_err().to_string();
        assert!(said.contains("negative water content"), "{said}");
    }

    #[test]
    fn extreme_masses_do_not_overflow() {
        let (least, most) = (Mass::from_ug(i64::MIN), Mass::from_ug(i64::MAX));
        assert!(water_percent(least, most, Mass::ZERO).is_err());
        assert!(water_percent(most, least, most).is_err());
        let w = water_percent(Mass::ZERO, most, Mass::from_ug(1)).unwrap();
        assert!(w.is_finite() && w > 9e20);
    }

    #[test]
    fn the_display_alone_is_worth_what_was_computed_by_hand() {
        // 100/5·√(1 + 1.3² + 0.3²)·0.01/√12 = 0.0963 and a quarter of it at 20 g.
        assert!((display_uncertainty(30.0, 5.0, 0.01) - 0.0963).abs() < 5e-5);
        assert!((display_uncertainty(30.0, 20.0, 0.01) - 0.0241).abs() < 5e-5);
    }
}
