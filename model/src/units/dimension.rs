//! What a quantity measures, and reading it from text.

use super::UnitError;
use super::expression::{ExpressionError, Product, product};
use super::nearest::nearest;
use super::symbols::{Powers, SYMBOLS, WATER_WEIGHT};

/// What a quantity measures.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Hash)]
pub enum Dimension {
    /// Pressure \[Pa\].
    Pressure,
    /// Length, elevation, coordinate \[m\].
    Length,
    /// Volume rate \[m3/s\].
    Rate,
    /// Permeability \[m2\].
    Permeability,
    /// Dynamic viscosity \[Pa s\].
    Viscosity,
    /// Compressibility \[1/Pa\].
    Compressibility,
    /// Time \[s\].
    Time,
    /// Transmissivity `k h / mu` \[m3/(Pa s)\]; hydraulic `K b` converts by [`WATER_WEIGHT`].
    Transmissivity,
    /// Storativity `phi c_t h` \[m/Pa\]; the hydraulic one, a bare number, converts by [`WATER_WEIGHT`].
    Storativity,
    /// Specific storage `phi c_t` \[1/Pa\]; the hydraulic one in 1/m converts by [`WATER_WEIGHT`].
    SpecificStorage,
    /// Exchange between layers \[m/(Pa s)\]; the hydraulic one in 1/d converts by [`WATER_WEIGHT`].
    Leakance,
    /// Flow through a line by its length and the difference \[m3/(Pa s m)\]; the hydraulic one in m/d converts by [`WATER_WEIGHT`].
    Conductance,
    /// Wellbore storage \[m3/Pa\]; the free surface of a bore in m2 converts by [`WATER_WEIGHT`].
    Storage,
    /// Drift of a pressure \[Pa/s\].
    Drift,
    /// A share, without unit; a percentage is one.
    Ratio,
    /// Size of a store \[bytes\].
    Size,
    /// Temperature \[degC\].
    Temperature,
    /// Density \[kg/m3\].
    Density,
    /// Rain \[m/s\].
    Rain,
    /// Angle \[radians\].
    Angle,
}

/// From a number in some unit to SI: `scale * number + offset`.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct UnitConversion {
    /// SI units in one of the unit's.
    pub scale: f64,
    /// SI value of its zero; not zero for temperatures only.
    pub offset: f64,
}

impl UnitConversion {
    /// To SI.
    #[must_use]
    pub fn to_si(self, number: f64) -> f64 {
        // Not `mul_add`: without an offset the product must be the plain one.
        self.scale * number + self.offset
    }

    /// From SI.
    #[must_use]
    pub fn from_si(self, si: f64) -> f64 {
        (si - self.offset) / self.scale
    }
}

/// Powers a dimension takes, and what multiplies such a number to SI.
type Form = (Powers, f64);

/// Hydraulic quantities are per metre of water; ours are per Pascal.
const PER_HEAD: f64 = 1.0 / WATER_WEIGHT;

/// Spellings of temperature units, with scale and offset to degC.
const TEMPERATURES: &[(&str, f64, f64)] = &[
    ("degC", 1.0, 0.0),
    ("°C", 1.0, 0.0),
    ("C", 1.0, 0.0),
    ("K", 1.0, -273.15),
    ("degF", 5.0 / 9.0, -160.0 / 9.0),
    ("°F", 5.0 / 9.0, -160.0 / 9.0),
    ("F", 5.0 / 9.0, -160.0 / 9.0),
];

/// Spellings of angle units, with scale to radians.
const ANGLES: &[(&str, f64, f64)] = &[
    ("deg", std::f64::consts::PI / 180.0, 0.0),
    ("°", std::f64::consts::PI / 180.0, 0.0),
    ("rad", 1.0, 0.0),
];

impl Dimension {
    /// All of them.
    pub const ALL: [Self; 20] = [
        Self::Pressure,
        Self::Length,
        Self::Rate,
        Self::Permeability,
        Self::Viscosity,
        Self::Compressibility,
        Self::Time,
        Self::Transmissivity,
        Self::Storativity,
        Self::SpecificStorage,
        Self::Leakance,
        Self::Conductance,
        Self::Storage,
        Self::Drift,
        Self::Ratio,
        Self::Size,
        Self::Temperature,
        Self::Density,
        Self::Rain,
        Self::Angle,
    ];

    /// Its name in messages.
    #[must_use]
    pub fn name(self) -> &'static str {
        match self {
            Self::Pressure => "pressure",
            Self::Length => "length",
            Self::Rate => "rate",
            Self::Permeability => "permeability",
            Self::Viscosity => "viscosity",
            Self::Compressibility => "compressibility",
            Self::Time => "time",
            Self::Transmissivity => "transmissivity",
            Self::Storativity => "storativity",
            Self::SpecificStorage => "specific storage",
            Self::Leakance => "leakance",
            Self::Conductance => "conductance",
            Self::Storage => "wellbore storage",
            Self::Drift => "drift",
            Self::Ratio => "ratio",
            Self::Size => "size",
            Self::Temperature => "temperature",
            Self::Density => "density",
            Self::Rain => "rain",
            Self::Angle => "angle",
        }
    }

    /// Units that messages name; the SI one is among them. Other products of the same powers are taken too.
    #[must_use]
    pub fn accepted(self) -> &'static [&'static str] {
        match self {
            Self::Pressure => &[
                "Pa", "kPa", "MPa", "bar", "mbar", "psi", "m H2O", "ft H2O", "mm H2O", "mm Hg",
                "atm",
            ],
            Self::Length => &["m", "km", "cm", "mm", "ft", "in"],
            Self::Rate => &[
                "m3/s", "m3/h", "m3/d", "L/s", "L/min", "bbl/d", "gal/min", "ft3/d", "ft3/s",
                "ML/d",
            ],
            Self::Permeability => &["mD", "D", "m2"],
            Self::Viscosity => &["cP", "mPa s", "Pa s"],
            Self::Compressibility => &["/Pa", "/kPa", "/MPa", "/bar", "/psi"],
            Self::Time => &["s", "min", "h", "d", "yr"],
            Self::Transmissivity => &[
                "m2/d",
                "m2/s",
                "ft2/d",
                "gal/d/ft",
                "m3/(Pa s)",
                "mD ft/cP",
                "mD m/cP",
            ],
            Self::Storativity => &["a bare number", "m/Pa", "ft/psi"],
            Self::SpecificStorage => &["/m", "/ft", "/Pa", "/psi"],
            Self::Leakance => &["/d", "/s", "m/(Pa s)"],
            Self::Conductance => &["m3/(Pa s m)", "m3/(bar d m)", "m/d", "m/s"],
            Self::Storage => &["m3/Pa", "m3/bar", "bbl/psi", "m2"],
            Self::Drift => &["kPa/yr", "Pa/d", "psi/yr", "mbar/yr", "mm H2O/yr", "Pa/s"],
            Self::Ratio => &["%", "ppm", "a bare number"],
            Self::Size => &["GB", "MB", "TB", "GiB"],
            Self::Temperature => &["degC", "degF", "K"],
            Self::Density => &["kg/m3", "g/cm3", "lb/ft3", "lb/gal"],
            Self::Rain => &["mm/h", "mm/d", "in/h", "in/d", "m/s"],
            Self::Angle => &["deg", "rad"],
        }
    }

    /// A quantity as it may be written.
    #[must_use]
    pub fn example(self) -> &'static str {
        match self {
            Self::Pressure => "250 kPa",
            Self::Length => "18 m",
            Self::Rate => "35 m3/d",
            Self::Permeability => "120 mD",
            Self::Viscosity => "0.6 cP",
            Self::Compressibility => "9.5e-10 /Pa",
            Self::Time => "30 min",
            Self::Transmissivity => "35 m2/d",
            Self::Storativity => "2e-4",
            Self::SpecificStorage => "1e-5 /m",
            Self::Leakance => "1e-4 /d",
            Self::Conductance => "2e-12 m3/(Pa s m)",
            Self::Storage => "1e-7 m3/Pa",
            Self::Drift => "2 kPa/yr",
            Self::Ratio => "0.5 %",
            Self::Size => "20 GB",
            Self::Temperature => "12 degC",
            Self::Density => "1030 kg/m3",
            Self::Rain => "4 mm/h",
            Self::Angle => "30 deg",
        }
    }

    /// Whether a bare number is one of it.
    #[must_use]
    pub fn takes_bare_number(self) -> bool {
        self.forms().iter().any(|(powers, _)| *powers == [0; 4])
    }

    /// Reads a quantity such as `"120 mD"` to SI.
    ///
    /// # Errors
    /// No number, no unit, an unknown unit or one of something else; the message names the units accepted and the nearest spelling.
    pub fn parse(self, text: &str) -> Result<f64, UnitError> {
        let (number, unit) = self.split(text)?;
        let value: f64 = number
            .parse()
            .map_err(|_| UnitError::NoNumber { dimension: self })?;
        if unit.is_empty() && !self.takes_bare_number() {
            return Err(UnitError::NoUnit {
                dimension: self,
                number,
            });
        }
        let si = self.conversion(unit)?.to_si(value);
        if si.is_finite() {
            Ok(si)
        } else {
            Err(UnitError::NotFinite { dimension: self })
        }
    }

    /// The conversion of a unit such as `"m3/d"` to SI.
    ///
    /// # Errors
    /// An unknown unit or one of something else.
    pub fn conversion(self, unit: &str) -> Result<UnitConversion, UnitError> {
        let unit = unit.trim();
        match self {
            Self::Temperature => return self.listed(TEMPERATURES, unit),
            Self::Angle => return self.listed(ANGLES, unit),
            _ => {}
        }
        if unit.is_empty() {
            return self.fit(
                Product {
                    factor: 1.0,
                    powers: [0; 4],
                },
                unit,
            );
        }
        match product(unit) {
            Ok(found) => self.fit(found, unit),
            Err(why) => Err(UnitError::Unknown {
                dimension: self,
                unit: unit.to_owned(),
                nearest: self.suggest(unit, &why),
            }),
        }
    }

    /// What the number in front and the unit behind are.
    fn split(self, text: &str) -> Result<(String, &str), UnitError> {
        let text = text.trim();
        let mut end = 0;
        let mut digits = false;
        let mut before = ' ';
        let mut chars = text.char_indices().peekable();
        while let Some((start, c)) = chars.next() {
            let sign = matches!(c, '-' | '+' | '−') && matches!(before, ' ' | 'e' | 'E');
            let exponent = matches!(c, 'e' | 'E')
                && digits
                && !matches!(before, 'e' | 'E')
                && chars
                    .peek()
                    .is_some_and(|(_, n)| n.is_ascii_digit() || matches!(n, '-' | '+' | '−'));
            if c.is_ascii_digit() {
                digits = true;
            } else if !(sign || exponent || c == '.') {
                break;
            }
            before = c;
            end = start + c.len_utf8();
        }
        let (number, unit) = text.split_at_checked(end).unwrap_or((text, ""));
        if !digits {
            return Err(UnitError::NoNumber { dimension: self });
        }
        let unit_text = unit.trim_start();
        let grouped = |c: char| matches!(c, ',' | '_' | '\'');
        let digit_next = unit_text
            .trim_start_matches(grouped)
            .starts_with(|c: char| c.is_ascii_digit());
        // `1/Pa` is a unit; `1 200 m` and `0,6 cP` are numbers gone wrong.
        if digit_next && !unit_text.starts_with("1/") {
            return Err(UnitError::Separators { dimension: self });
        }
        Ok((number.replace('−', "-"), unit_text))
    }

    /// The number followed by the first unit messages name.
    pub(super) fn with_first_unit(self, number: &str) -> String {
        let unit = self.accepted().first().copied().unwrap_or_default();
        format!("{number} {unit}")
    }

    /// Powers it takes.
    fn forms(self) -> &'static [Form] {
        match self {
            Self::Pressure => &[([-1, 1, -2, 0], 1.0)],
            Self::Length => &[([1, 0, 0, 0], 1.0)],
            Self::Rate => &[([3, 0, -1, 0], 1.0)],
            Self::Permeability => &[([2, 0, 0, 0], 1.0)],
            Self::Viscosity => &[([-1, 1, -1, 0], 1.0)],
            Self::Compressibility => &[([1, -1, 2, 0], 1.0)],
            Self::Time => &[([0, 0, 1, 0], 1.0)],
            Self::Transmissivity => &[([4, -1, 1, 0], 1.0), ([2, 0, -1, 0], PER_HEAD)],
            Self::Storativity => &[([2, -1, 2, 0], 1.0), ([0, 0, 0, 0], PER_HEAD)],
            Self::SpecificStorage => &[([1, -1, 2, 0], 1.0), ([-1, 0, 0, 0], PER_HEAD)],
            Self::Leakance => &[([2, -1, 1, 0], 1.0), ([0, 0, -1, 0], PER_HEAD)],
            Self::Conductance => &[([3, -1, 1, 0], 1.0), ([1, 0, -1, 0], PER_HEAD)],
            Self::Storage => &[([4, -1, 2, 0], 1.0), ([2, 0, 0, 0], PER_HEAD)],
            Self::Drift => &[([-1, 1, -3, 0], 1.0)],
            Self::Ratio => &[([0, 0, 0, 0], 1.0)],
            Self::Size => &[([0, 0, 0, 1], 1.0)],
            Self::Density => &[([-3, 1, 0, 0], 1.0)],
            Self::Rain => &[([1, 0, -1, 0], 1.0)],
            Self::Temperature | Self::Angle => &[],
        }
    }

    /// The conversion of a unit with these powers, if they are among those taken.
    fn fit(self, found: Product, unit: &str) -> Result<UnitConversion, UnitError> {
        let form = self.forms().iter().find(|(p, _)| *p == found.powers);
        match form {
            // 6.1 mPa where 6.1 MPa was meant would be a billionth of it.
            Some((_, more)) if !(self == Self::Pressure && unit == "mPa") => Ok(UnitConversion {
                scale: found.factor * more,
                offset: 0.0,
            }),
            _ => Err(UnitError::Mismatch {
                dimension: self,
                unit: unit.to_owned(),
                of: of_powers(found.powers).filter(|of| *of != self),
                nearest: self.suggest(unit, &ExpressionError::Shape),
            }),
        }
    }

    /// The conversion of a unit that is no product of symbols.
    fn listed(self, units: &[(&str, f64, f64)], unit: &str) -> Result<UnitConversion, UnitError> {
        let found = units.iter().find(|(name, _, _)| *name == unit);
        if let Some(&(_, scale, offset)) = found {
            return Ok(UnitConversion { scale, offset });
        }
        Err(UnitError::Unknown {
            dimension: self,
            unit: unit.to_owned(),
            nearest: nearest(unit, self.accepted().iter().copied()).map(str::to_owned),
        })
    }

    /// The nearest spelling of a unit: one that messages name, or the same unit with its one unknown word mended.
    fn suggest(self, unit: &str, why: &ExpressionError) -> Option<String> {
        if let Some(near) = nearest(unit, self.accepted().iter().copied()) {
            return Some(near.to_owned());
        }
        let ExpressionError::Unknown(word) = why else {
            return None;
        };
        let names = SYMBOLS.iter().flat_map(|s| s.names.iter().copied());
        let fitting = names.filter(|name| {
            let mended = unit.replacen(word.as_str(), name, 1);
            product(&mended).is_ok_and(|p| self.forms().iter().any(|(f, _)| *f == p.powers))
        });
        nearest(word, fitting).map(|name| unit.replacen(word.as_str(), name, 1))
    }
}

/// The dimension whose first form has these powers.
fn of_powers(powers: Powers) -> Option<Dimension> {
    Dimension::ALL
        .into_iter()
        .find(|d| d.forms().first().is_some_and(|(p, _)| *p == powers))
}

#[cfg(test)]
#[path = "tests.rs"]
mod tests;
