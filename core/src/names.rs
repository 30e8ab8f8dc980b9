//! Identifiers. One alphabet for all of them, chosen so that every name is
//! also a safe MQTT topic level, file name and HTML attribute.

use alloc::string::{String, ToString};
use core::fmt;
use serde::{Deserialize, Serialize};

/// Longest identifier, in characters.
pub const LONGEST: usize = 32;

/// Why a text is not an identifier.
#[derive(Clone, Debug, PartialEq, Eq, thiserror::Error)]
pub enum NameError {
    /// Nothing was given.
    #[error("a name needs at least one character; use letters, digits, '.', '_' or '-'")]
    Empty,
    /// More than [`LONGEST`] characters.
    #[error("the name is {0} characters long; at most 32 fit")]
    TooLong(usize),
    /// A character outside the alphabet.
    #[error("'{0}' cannot stand in a name; use letters, digits, '.', '_' or '-'")]
    Character(char),
}

/// Checks a text against the alphabet `[A-Za-z0-9._-]{1,32}`.
pub fn check(text: &str) -> Result<(), NameError> {
    if text.is_empty() {
        return Err(NameError::Empty);
    }
    let allowed = |c: char| c.is_ascii_alphanumeric() || matches!(c, '.' | '_' | '-');
    if let Some(c) = text.chars().find(|&c| !allowed(c)) {
        return Err(NameError::Character(c));
    }
    match text.len() {
        n if n > LONGEST => Err(NameError::TooLong(n)),
        _ => Ok(()),
    }
}

macro_rules! names {
    ($($(#[$doc:meta])* $name:ident;)*) => {$(
        $(#[$doc])*
        #[derive(Clone, Debug, PartialEq, Eq, PartialOrd, Ord, Hash, Serialize, Deserialize)]
        #[serde(try_from = "String", into = "String")]
        pub struct $name(String);

        impl $name {
            /// Takes a text that keeps to the alphabet.
            pub fn new(text: &str) -> Result<Self, NameError> {
                check(text).map(|()| Self(text.to_string()))
            }
            /// The text itself.
            pub fn as_str(&self) -> &str {
                &self.0
            }
        }
        impl TryFrom<String> for $name {
            type Error = NameError;
            fn try_from(text: String) -> Result<Self, NameError> {
                check(&text).map(|()| Self(text))
            }
        }
        impl From<$name> for String {
            fn from(name: $name) -> String {
                name.0
            }
        }
        impl core::str::FromStr for $name {
            type Err = NameError;
            fn from_str(text: &str) -> Result<Self, NameError> {
                Self::new(text)
            }
        }
        impl fmt::Display for $name {
            fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
                f.write_str(&self.0)
            }
        }
    )*};
}

names! {
    /// A soil specimen under test.
    SpecimenId;
    /// A numbered moisture container.
    ContainerId;
    /// A bench: one place with a balance and a cup counter.
    BenchName;
    /// A balance, cup counter or scanner.
    InstrumentName;
    /// A person, by initials.
    Operator;
    /// A test method.
    MethodName;
    /// A running service with one ledger.
    StationName;
    /// An instrument profile.
    ProfileName;
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn the_alphabet_is_exact() {
        for good in ["C11", "a", "S-101", "pan_1.b", "0123456789abcdef0123456789abcdef"] {
            assert!(ContainerId::new(good).is_ok(), "{good}");
        }
        assert_eq!(ContainerId::new(""), Err(NameError::Empty));
        assert_eq!(ContainerId::new("+plastic"), Err(NameError::Character('+')));
        assert_eq!(ContainerId::new("a/b"), Err(NameError::Character('/')));
        assert_eq!(ContainerId::new("a b"), Err(NameError::Character(' ')));
        assert_eq!(ContainerId::new("é"), Err(NameError::Character('é')));
        assert_eq!(ContainerId::new(&"x".repeat(33)), Err(NameError::TooLong(33)));
    }

    #[test]
    fn a_bad_name_does_not_deserialise() {
        assert!(serde_json::from_str::<SpecimenId>("\"S 1\"").is_err());
        assert_eq!(serde_json::from_str::<SpecimenId>("\"S1\"").unwrap().as_str(), "S1");
    }
}
