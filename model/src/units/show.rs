//! Quantities for people.

use super::Dimension;

/// How numbers are shown to people.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Default, serde::Serialize, serde::Deserialize)]
#[serde(rename_all = "kebab-case")]
pub enum UnitSystem {
    /// kPa, m, m3/d.
    #[default]
    Metric,
    /// psi, ft, bbl/d.
    Field,
    /// Metres of water, m, m3/d.
    Head,
}

impl UnitSystem {
    /// Its name in the site file.
    #[must_use]
    pub fn name(self) -> &'static str {
        match self {
            Self::Metric => "metric",
            Self::Field => "field",
            Self::Head => "head",
        }
    }

    /// The system of a name.
    #[must_use]
    pub fn from_name(name: &str) -> Option<Self> {
        [Self::Metric, Self::Field, Self::Head]
            .into_iter()
            .find(|s| s.name() == name)
    }

    /// The unit a quantity is shown in; empty for a plain number.
    #[must_use]
    pub fn unit(self, dimension: Dimension) -> &'static str {
        use Dimension as D;
        match (dimension, self) {
            (D::Pressure, Self::Metric) => "kPa",
            (D::Pressure, Self::Field) => "psi",
            (D::Pressure, Self::Head) => "m H2O",
            (D::Length, Self::Metric | Self::Head) => "m",
            (D::Length, Self::Field) => "ft",
            (D::Rate, Self::Metric | Self::Head) => "m3/d",
            (D::Rate, Self::Field) => "bbl/d",
            (D::Permeability, _) => "mD",
            (D::Viscosity, _) => "cP",
            (D::Compressibility, Self::Metric | Self::Head) => "/Pa",
            (D::Compressibility, Self::Field) => "/psi",
            (D::Time, _) => "h",
            (D::Transmissivity, Self::Metric) => "m3/(Pa s)",
            (D::Transmissivity, Self::Field) => "mD ft/cP",
            (D::Transmissivity, Self::Head) => "m2/d",
            (D::Storativity, Self::Metric) => "m/Pa",
            (D::Storativity, Self::Field) => "ft/psi",
            (D::SpecificStorage, Self::Metric) => "/Pa",
            (D::SpecificStorage, Self::Field) => "/psi",
            (D::SpecificStorage, Self::Head) => "/m",
            (D::Leakance, Self::Metric | Self::Field) => "m/(Pa s)",
            (D::Leakance, Self::Head) => "/d",
            (D::Conductance, Self::Metric | Self::Field) => "m3/(Pa s m)",
            (D::Conductance, Self::Head) => "m/d",
            (D::Storage, Self::Metric) => "m3/Pa",
            (D::Storage, Self::Field) => "bbl/psi",
            (D::Storage, Self::Head) => "m2",
            (D::Drift, Self::Metric) => "kPa/yr",
            (D::Drift, Self::Field) => "psi/yr",
            (D::Drift, Self::Head) => "mm H2O/yr",
            (D::Storativity, Self::Head) => "",
            (D::Ratio, _) => "%",
            (D::Size, _) => "GB",
            (D::Temperature, Self::Metric | Self::Head) => "degC",
            (D::Temperature, Self::Field) => "degF",
            (D::Density, Self::Metric | Self::Head) => "kg/m3",
            (D::Density, Self::Field) => "lb/ft3",
            (D::Rain, Self::Metric | Self::Head) => "mm/h",
            (D::Rain, Self::Field) => "in/h",
            (D::Angle, _) => "deg",
        }
    }

    /// The number of an SI value in the unit it is shown in.
    #[must_use]
    pub fn number(self, dimension: Dimension, si: f64) -> f64 {
        // Every unit of the table above converts: a test walks it.
        dimension
            .conversion(self.unit(dimension))
            .map_or(f64::NAN, |c| c.from_si(si))
    }

    /// An SI value with its unit, to four significant digits: `"6100 kPa"`.
    #[must_use]
    pub fn show(self, dimension: Dimension, si: f64) -> String {
        if dimension == Dimension::Time {
            return time(si);
        }
        let unit = self.unit(dimension);
        let gap = if unit.is_empty() { "" } else { " " };
        format!("{}{gap}{unit}", significant(self.number(dimension, si), 4))
    }
}

/// A time in the largest unit that keeps it at one or above.
fn time(seconds: f64) -> String {
    const UNITS: [(f64, &str); 4] = [
        (super::YEAR, "yr"),
        (super::DAY, "d"),
        (3600.0, "h"),
        (60.0, "min"),
    ];
    let (size, unit) = UNITS
        .into_iter()
        .find(|(size, _)| seconds.abs() >= *size)
        .unwrap_or((1.0, "s"));
    format!("{} {unit}", significant(seconds / size, 4))
}

/// A number to so many significant digits: plain from 0.001 to below a million, else with an exponent; no trailing zeros.
#[must_use]
pub fn significant(value: f64, digits: usize) -> String {
    if value == 0.0 {
        return "0".to_owned();
    }
    if !value.is_finite() {
        return format!("{value}");
    }
    let scientific = format!("{value:.*e}", digits.saturating_sub(1));
    let (mantissa, exponent) = scientific.split_once('e').unwrap_or((&scientific, "0"));
    let exponent: i32 = exponent.parse().unwrap_or(0);
    let trimmed = |text: &str| {
        if text.contains('.') {
            text.trim_end_matches('0').trim_end_matches('.').to_owned()
        } else {
            text.to_owned()
        }
    };
    if (-3..6).contains(&exponent) {
        let last = i32::try_from(digits).unwrap_or(i32::MAX).saturating_sub(1);
        let decimals = usize::try_from(last.saturating_sub(exponent)).unwrap_or(0);
        trimmed(&format!("{value:.decimals$}"))
    } else {
        format!("{}e{exponent}", trimmed(mantissa))
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn numbers_are_short() {
        for (value, text) in [
            (0.0, "0"),
            (6100.0, "6100"),
            (123_456.7, "123457"),
            (1.5, "1.5"),
            (-0.012_345_6, "-0.01235"),
            (9.5e-10, "9.5e-10"),
            (2.0e9, "2e9"),
            (99.999, "100"),
            (0.000_999_99, "0.001"),
        ] {
            assert_eq!(significant(value, 4), text);
        }
    }

    #[test]
    fn every_shown_unit_converts() {
        for system in [UnitSystem::Metric, UnitSystem::Field, UnitSystem::Head] {
            for dimension in Dimension::ALL {
                assert!(system.number(dimension, 1.0).is_finite(), "{dimension:?}");
            }
            assert_eq!(UnitSystem::from_name(system.name()), Some(system));
        }
        assert_eq!(UnitSystem::Field.show(Dimension::Pressure, 1e6), "145 psi");
        assert_eq!(
            UnitSystem::Head.show(Dimension::Storativity, 1e-8),
            "9.807e-5"
        );
        assert_eq!(UnitSystem::Metric.show(Dimension::Time, 5400.0), "1.5 h");
        assert_eq!(UnitSystem::Metric.show(Dimension::Ratio, 0.005), "0.5 %");
    }
}
