//! What goes wrong in a soils laboratory.

/// A mistake of one kind.
#[derive(Clone, Copy, Debug, PartialEq, Eq, PartialOrd, Ord, Hash)]
pub enum Mistake {
    /// The dry masses of two containers of one test go to each other: their codes were read crosswise.
    DryExchanged,
    /// The wet masses of two containers of one test.
    WetExchanged,
    /// A container's dry mass goes to a container of the other specimen, and the reverse.
    DryExchangedAcross,
    /// The empty masses of two containers of one size.
    TaresExchanged,
    /// The threads of two specimens go to each other.
    LabelsExchanged,
    /// Something was left on the pan before a weighing, and nobody zeroed.
    LeftOnPan,
    /// The balance had crept away from zero, and nobody zeroed.
    NotZeroed,
    /// A lid was on at one weighing of a container and off at the other.
    LidOnce,
    /// A container was weighed warm from the oven.
    Warm,
    /// Dried soil stood open and took up moisture.
    TookUpMoisture,
    /// Wet soil stood open and lost water before it was weighed.
    LostWater,
    /// All containers came out of the oven too early.
    NotDry,
    /// The counter did not hear some drops.
    DropsMissed,
    /// The counter heard some drops twice.
    DropsDoubled,
    /// The crank was turned too fast.
    CrankFast,
    /// The crank was turned too slowly.
    CrankSlow,
    /// Soil was spilt between the wet and the dry weighing.
    Spilt,
    /// Water went into the paste between the count and the slice.
    WateredAfterCount,
    /// The code of a container in use was read for another slice.
    ContainerTwice,
    /// A mass was typed with one digit altered.
    DigitAltered,
    /// A mass was typed in kilograms.
    Kilograms,
    /// The masses of another specimen's determination were left on the form and typed again.
    LeftOverMasses,
    /// The drops were typed against the wrong water contents, first for last.
    DropsReversed,
}

impl Mistake {
    /// All kinds.
    pub const ALL: [Mistake; 23] = [
        Self::DryExchanged,
        Self::WetExchanged,
        Self::DryExchangedAcross,
        Self::TaresExchanged,
        Self::LabelsExchanged,
        Self::LeftOnPan,
        Self::NotZeroed,
        Self::LidOnce,
        Self::Warm,
        Self::TookUpMoisture,
        Self::LostWater,
        Self::NotDry,
        Self::DropsMissed,
        Self::DropsDoubled,
        Self::CrankFast,
        Self::CrankSlow,
        Self::Spilt,
        Self::WateredAfterCount,
        Self::ContainerTwice,
        Self::DigitAltered,
        Self::Kilograms,
        Self::LeftOverMasses,
        Self::DropsReversed,
    ];

    /// A stable word.
    pub fn word(self) -> &'static str {
        match self {
            Self::DryExchanged => "dry masses exchanged",
            Self::WetExchanged => "wet masses exchanged",
            Self::DryExchangedAcross => "dry masses exchanged between specimens",
            Self::TaresExchanged => "empty masses exchanged",
            Self::LabelsExchanged => "threads of two specimens exchanged",
            Self::LeftOnPan => "left on the pan",
            Self::NotZeroed => "not zeroed",
            Self::LidOnce => "lid on once",
            Self::Warm => "weighed warm",
            Self::TookUpMoisture => "took up moisture",
            Self::LostWater => "lost water before weighing",
            Self::NotDry => "not dry",
            Self::DropsMissed => "drops missed",
            Self::DropsDoubled => "drops doubled",
            Self::CrankFast => "crank too fast",
            Self::CrankSlow => "crank too slow",
            Self::Spilt => "soil spilt",
            Self::WateredAfterCount => "watered after the count",
            Self::ContainerTwice => "container twice",
            Self::DigitAltered => "digit altered",
            Self::Kilograms => "kilograms for grams",
            Self::LeftOverMasses => "masses left over",
            Self::DropsReversed => "drops reversed",
        }
    }

    /// Whether it happens where values are typed.
    pub fn typed(self) -> bool {
        matches!(self, Self::DigitAltered | Self::Kilograms | Self::LeftOverMasses | Self::DropsReversed)
    }
}

/// How a mistake can be seen at all, or why it cannot.
pub fn seen_how(mistake: Mistake) -> &'static str {
    match mistake {
        Mistake::DryExchanged | Mistake::WetExchanged => "two points leave the line, and fit it when put back",
        Mistake::DryExchangedAcross => "both tests show a point off its line",
        Mistake::TaresExchanged => "only by the container's history, or by weighing it empty again: the results hardly move",
        Mistake::LabelsExchanged => "each test is perfect by itself; only an improbable pair of limits shows it",
        Mistake::LeftOnPan | Mistake::NotZeroed => {
            "the pan's reading before loading; with a print key only the point that is off"
        }
        Mistake::LidOnce => "a jump as large as a lid",
        Mistake::Warm => "the time since it left the oven; the reading that rises, where the balance sends all the time",
        Mistake::TookUpMoisture => "seldom: the reading rises too slowly to be seen on most displays",
        Mistake::LostWater => "the time between count and weighing; the point that is off",
        Mistake::NotDry => "the time in the oven; a later dry weighing that is lower",
        Mistake::DropsMissed | Mistake::DropsDoubled => "the time between drops",
        Mistake::CrankFast | Mistake::CrankSlow => "the rate of drops",
        Mistake::Spilt | Mistake::WateredAfterCount => "the point that is off the line",
        Mistake::ContainerTwice => "identity: a container in use cannot be opened again",
        Mistake::DigitAltered | Mistake::Kilograms => "the point that is off, or impossible masses",
        Mistake::LeftOverMasses => "the same masses in two specimens",
        Mistake::DropsReversed => "the slope of the line",
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn each_kind_has_a_word_of_its_own() {
        let words: std::collections::BTreeSet<_> = Mistake::ALL.iter().map(|m| m.word()).collect();
        assert_eq!(words.len(), Mistake::ALL.len());
        assert!(Mistake::ALL.iter().all(|m| !seen_how(*m).is_empty()));
    }
}
