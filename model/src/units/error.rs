//! What is wrong with a quantity, and the mend.

use std::fmt;

use super::Dimension;

/// A quantity that cannot be read.
#[derive(Debug, Clone, PartialEq, Eq)]
#[non_exhaustive]
pub enum UnitError {
    /// There is no number in front.
    NoNumber {
        /// What is due.
        dimension: Dimension,
    },
    /// The number uses a decimal comma or groups of digits.
    Separators {
        /// What is due.
        dimension: Dimension,
    },
    /// The number is not finite.
    NotFinite {
        /// What is due.
        dimension: Dimension,
    },
    /// A number without unit.
    NoUnit {
        /// What is due.
        dimension: Dimension,
        /// The number as written.
        number: String,
    },
    /// Something that is no unit.
    Unknown {
        /// What is due.
        dimension: Dimension,
        /// The unit as written.
        unit: String,
        /// The nearest spelling.
        nearest: Option<String>,
    },
    /// A unit of something else.
    Mismatch {
        /// What is due.
        dimension: Dimension,
        /// The unit as written.
        unit: String,
        /// What it is a unit of, where that is one of ours.
        of: Option<Dimension>,
        /// The nearest spelling.
        nearest: Option<String>,
    },
}

impl UnitError {
    /// What is due.
    #[must_use]
    pub fn dimension(&self) -> Dimension {
        match self {
            Self::NoNumber { dimension }
            | Self::Separators { dimension }
            | Self::NotFinite { dimension }
            | Self::NoUnit { dimension, .. }
            | Self::Unknown { dimension, .. }
            | Self::Mismatch { dimension, .. } => *dimension,
        }
    }

    /// What is wrong.
    #[must_use]
    pub fn what(&self) -> String {
        let due = self.dimension().name();
        match self {
            Self::NoNumber { .. } => format!("a {due} starts with a number"),
            Self::Separators { .. } => {
                "a number takes a point for its decimals and nothing between its digits".to_owned()
            }
            Self::NotFinite { .. } => format!("a {due} must be finite"),
            Self::NoUnit { .. } => format!("a {due} needs a unit"),
            Self::Unknown { unit, .. } => format!("\"{unit}\" is no unit of {due}"),
            Self::Mismatch { unit, of: None, .. } => format!("\"{unit}\" is no unit of {due}"),
            Self::Mismatch {
                unit, of: Some(of), ..
            } => format!("\"{unit}\" is a unit of {}, and a {due} is due", of.name()),
        }
    }

    /// How to mend it.
    #[must_use]
    pub fn mend(&self) -> String {
        let dimension = self.dimension();
        let accepted = format!(
            "{} takes {}",
            dimension.name(),
            listed(dimension.accepted(), "or")
        );
        match self {
            Self::NoNumber { .. } | Self::NotFinite { .. } => {
                format!("write it as \"{}\"; {accepted}", dimension.example())
            }
            Self::Separators { .. } => "write 1234.5".to_owned(),
            Self::NoUnit { number, .. } => format!(
                "write \"{}\" or another unit; {accepted}",
                dimension.with_first_unit(number)
            ),
            Self::Unknown { unit, nearest, .. } | Self::Mismatch { unit, nearest, .. } => {
                if let Some(plain) = referred(unit) {
                    return format!(
                        "write \"{plain}\", and say absolute or vented with the gauge's `reference`"
                    );
                }
                match nearest {
                    Some(nearest) => format!("did you mean {nearest}? {accepted}"),
                    None => accepted,
                }
            }
        }
    }
}

/// The unit without what its last letter says of the pressure's zero.
fn referred(unit: &str) -> Option<&'static str> {
    match unit {
        "psia" | "psig" => Some("psi"),
        "bara" | "barg" => Some("bar"),
        "kPaa" | "kPag" => Some("kPa"),
        _ => None,
    }
}

/// Names in a row, the last joined by a word.
fn listed(names: &[&str], word: &str) -> String {
    match names {
        [] => String::new(),
        [one] => (*one).to_owned(),
        [first @ .., last] => format!("{} {word} {last}", first.join(", ")),
    }
}

impl fmt::Display for UnitError {
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        write!(f, "{}: {}", self.what(), self.mend())
    }
}

impl std::error::Error for UnitError {}
