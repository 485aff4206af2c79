//! Units against published constants, and round trips.

use proptest::prelude::*;

use super::super::{BARREL, DARCY, DAY, PSI, UnitError, YEAR};
use super::Dimension;

fn close(a: f64, b: f64, share: f64) -> bool {
    (a - b).abs() <= share * b.abs()
}

fn parse(dimension: Dimension, text: &str) -> f64 {
    dimension
        .parse(text)
        .unwrap_or_else(|e| panic!("{text}: {e}"))
}

#[test]
fn base_constants_are_the_exact_ones() {
    // From SI definitions.
    assert!(close(1e-3 * DARCY, 9.869_232_667_160_128e-16, 1e-15));
    assert!(close(PSI, 6_894.757_293_168_361, 1e-15));
    assert!(close(BARREL, 0.158_987_294_928, 1e-15));
    // Weight of fresh water, 0.4335 psi/ft.
    let gradient = parse(Dimension::Pressure, "1 ft H2O") / PSI;
    assert!(close(gradient, 0.433_527_504_001_004_2, 1e-14));
}

#[test]
fn the_oilfield_constants_follow() {
    // Exact values of the constants of well-test analysis in field units (Earlougher 1977, SPE Monograph 5, prints 141.2,
    // 162.6, 0.0002637, 948, 1688), derived from the SI definitions.
    let q = parse(Dimension::Rate, "1 bbl/d");
    let mu = parse(Dimension::Viscosity, "1 cP");
    let k = parse(Dimension::Permeability, "1 mD");
    let h = parse(Dimension::Length, "1 ft");
    let psi = parse(Dimension::Pressure, "1 psi");
    let c = parse(Dimension::Compressibility, "1 /psi");
    let hour = parse(Dimension::Time, "1 h");
    let steady = q * mu / (2.0 * std::f64::consts::PI * k * h) / psi;
    assert!(close(steady, 141.205_455_522_552_8, 1e-14), "{steady}");
    let semilog = steady * std::f64::consts::LN_10 / 2.0;
    assert!(close(semilog, 162.568_788_467_831_9, 1e-14), "{semilog}");
    let eta = k / (mu * c) * hour / (h * h);
    assert!(close(eta, 0.000_263_678_637_508_05, 1e-13), "{eta}");
    assert!(close(24.0 * eta, 0.006_328_287_300_19, 1e-11));
    assert!(close(1.0 / (4.0 * eta), 948.123_831_201_025_7, 1e-13));
    let slope = q * hour / (h * h * h);
    assert!(close(slope, 0.233_940_972_222_222_2, 1e-14), "{slope}");
}

#[test]
fn spellings_of_all_trades_are_read() {
    use Dimension as D;
    for (dimension, text, si) in [
        (D::Permeability, "120 mD", 120e-3 * DARCY),
        (D::Permeability, "120 md", 120e-3 * DARCY),
        (D::Length, "18 m", 18.0),
        (D::Length, "-1480 m", -1480.0),
        (D::Length, "−2 km", -2000.0),
        (D::Length, "4.5in", 0.1143),
        (D::Viscosity, "0.6 cP", 6e-4),
        (D::Viscosity, "0.6 mPa s", 6e-4),
        (D::Viscosity, "0.6 mPa·s", 6e-4),
        (D::Pressure, "250 psi", 250.0 * PSI),
        (D::Pressure, "3.2 m H2O", 3.2 * 9806.65),
        (D::Pressure, "3.2 mH2O", 3.2 * 9806.65),
        (D::Pressure, "6.1 MPa", 6.1e6),
        (D::Pressure, "1 atm", 101_325.0),
        (D::Pressure, "1 mm Hg", 133.322_387_415),
        (D::Rate, "12 bbl/d", 12.0 * BARREL / DAY),
        (D::Rate, "12 STB/day", 12.0 * BARREL / DAY),
        (D::Rate, "30 m³/d", 30.0 / DAY),
        (D::Rate, "100 gal/min", 100.0 * BARREL / 42.0 / 60.0),
        (D::Rate, "100 gpm", 100.0 * BARREL / 42.0 / 60.0),
        (D::Rate, "5 L/s", 5e-3),
        (D::Compressibility, "9.5e-10 /Pa", 9.5e-10),
        (D::Compressibility, "9.5e-10/Pa", 9.5e-10),
        (D::Compressibility, "9.5e-10 1/Pa", 9.5e-10),
        (D::Compressibility, "6e-6 psi-1", 6e-6 / PSI),
        (D::Transmissivity, "35 m2/d", 35.0 / DAY / 9806.65),
        (D::Transmissivity, "1e-9 m3/(Pa s)", 1e-9),
        (D::Transmissivity, "1000 mD m/cP", DARCY * 1e3),
        (D::Storativity, "2e-4", 2e-4 / 9806.65),
        (D::Storativity, "1e-8 m/Pa", 1e-8),
        (D::SpecificStorage, "1e-5 /m", 1e-5 / 9806.65),
        (D::Leakance, "1e-3 /d", 1e-3 / DAY / 9806.65),
        (D::Conductance, "0 m3/(Pa s m)", 0.0),
        (D::Storage, "0.02 bbl/psi", 0.02 * BARREL / PSI),
        (D::Drift, "2 kPa/yr", 2000.0 / YEAR),
        (D::Ratio, "0.5 %", 0.005),
        (D::Ratio, "0.5", 0.5),
        (D::Size, "20 GB", 2e10),
        (D::Time, "400 d", 400.0 * DAY),
        (D::Density, "1.03 g/cm3", 1030.0),
        (D::Angle, "30 deg", std::f64::consts::FRAC_PI_6),
        (D::Angle, "-90°", -std::f64::consts::FRAC_PI_2),
        (D::Temperature, "50 degF", 10.0),
        (D::Temperature, "283.15 K", 10.0),
        (D::Rain, "36 mm/h", 1e-5),
    ] {
        let found = parse(dimension, text);
        assert!(
            (found - si).abs() <= 1e-12 * si.abs().max(1e-30),
            "{text}: {found} {si}"
        );
    }
}

#[test]
fn messages_name_units_and_the_nearest_spelling() {
    use Dimension as D;
    for (dimension, text, message) in [
        (
            D::Permeability,
            "110",
            "a permeability needs a unit: write \"110 mD\" or another unit; permeability takes mD, D or m2",
        ),
        (
            D::Pressure,
            "6.1 MPA",
            "\"MPA\" is no unit of pressure: did you mean MPa? pressure takes Pa, kPa, MPa, bar, mbar, psi, m H2O, ft H2O, mm H2O, mm Hg or atm",
        ),
        (
            D::Pressure,
            "6.1 mPa",
            "\"mPa\" is no unit of pressure: did you mean MPa? pressure takes Pa, kPa, MPa, bar, mbar, psi, m H2O, ft H2O, mm H2O, mm Hg or atm",
        ),
        (
            D::Pressure,
            "20 psig",
            "\"psig\" is no unit of pressure: write \"psi\", and say absolute or vented with the gauge's `reference`",
        ),
        (
            D::Rate,
            "12 bbl/dy",
            "\"bbl/dy\" is no unit of rate: did you mean bbl/d? rate takes m3/s, m3/h, m3/d, L/s, L/min, bbl/d, gal/min, ft3/d, ft3/s or ML/d",
        ),
        (
            D::Rate,
            "12 kPa",
            "\"kPa\" is a unit of pressure, and a rate is due: rate takes m3/s, m3/h, m3/d, L/s, L/min, bbl/d, gal/min, ft3/d, ft3/s or ML/d",
        ),
        (
            D::Viscosity,
            "0,6 cP",
            "a number takes a point for its decimals and nothing between its digits: write 1234.5",
        ),
        (
            D::Time,
            "soon",
            "a time starts with a number: write it as \"30 min\"; time takes s, min, h, d or yr",
        ),
        (
            D::Length,
            "1e999 m",
            "a length must be finite: write it as \"18 m\"; length takes m, km, cm, mm, ft or in",
        ),
    ] {
        assert_eq!(dimension.parse(text).unwrap_err().to_string(), message);
    }
}

#[test]
fn numbers_gone_wrong_are_refused() {
    for text in ["1 200 m", "1,200 m", "1_200 m", "1'200 m"] {
        assert!(
            matches!(
                Dimension::Length.parse(text),
                Err(UnitError::Separators { .. })
            ),
            "{text}"
        );
    }
    for text in ["", "m", "- m", "1.2.3 m", "--1 m", "NaN m", "inf m"] {
        assert!(Dimension::Length.parse(text).is_err(), "{text}");
    }
}

proptest! {
    #[test]
    fn every_accepted_unit_goes_to_si_and_back(mantissa in 0.1_f64..10.0, exponent in -6..6_i32) {
        let number = mantissa * 10_f64.powi(exponent);
        for dimension in Dimension::ALL {
            for unit in dimension.accepted().iter().filter(|u| **u != "a bare number") {
                let si = parse(dimension, &format!("{number} {unit}"));
                let back = dimension.conversion(unit).unwrap().from_si(si);
                // Temperatures lose digits to their offset.
                let zero = if dimension == Dimension::Temperature { 1000.0 } else { 0.0 };
                prop_assert!((back - number).abs() <= 1e-14 * (number + zero), "{number} {unit}: {back}");
            }
        }
    }

    #[test]
    fn no_text_is_too_strange(text in ".{0,80}", head in -1e9_f64..1e9) {
        for dimension in Dimension::ALL {
            if let Err(wrong) = dimension.parse(&text) {
                let _ = wrong.to_string();
            }
            let _ = dimension.parse(&format!("{head}{text}"));
        }
    }
}
