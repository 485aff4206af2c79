//! Density, viscosity and compressibility of water and of sodium-chloride brine.
//!
//! Fresh water: IAPWS Industrial Formulation 1997 for liquid water (IAPWS R7-97(2012), region 1) and the IAPWS 2008 viscosity
//! without its critical enhancement (IAPWS R12-08). Against the reference formulations: density within 2e-5, compressibility
//! within 0.5 %, viscosity within 0.1 %.
//!
//! Brine: Batzle and Wang 1992 (Geophysics 57(11), equations 27b and 32), as an addition to the density and a factor on
//! the viscosity of fresh water. Against tables of sodium-chloride solutions: density within 0.5 %, viscosity within 5 %;
//! other salts differ by as much again. A site that knows its fluid better states it.

use crate::ModelError;

/// Properties of a fluid at one temperature and pressure.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct Fluid {
    /// Density \[kg/m3\].
    pub density: f64,
    /// Dynamic viscosity \[Pa s\].
    pub viscosity: f64,
    /// Isothermal compressibility \[1/Pa\].
    pub compressibility: f64,
}

/// Specific gas constant of water used with the formulation \[J/(kg K)\].
const GAS_CONSTANT: f64 = 461.526;
/// Reducing pressure of region 1 \[Pa\].
const REDUCING_PRESSURE: f64 = 16.53e6;
/// Reducing temperature of region 1 \[K\].
const REDUCING_TEMPERATURE: f64 = 1386.0;
/// Critical temperature \[K\] and density \[kg/m3\] of water.
const CRITICAL: (f64, f64) = (647.096, 322.0);
/// Highest salinity taken \[kg/kg\]: near saturation.
const MOST_SALT: f64 = 0.26;

/// IAPWS R7-97, table 2: exponents I and J and coefficients n of the terms that depend on pressure.
const REGION_1: [(i32, i32, f64); 26] = [
    (1, -9, 0.283_190_801_238_04e-3),
    (1, -7, -0.607_063_015_658_74e-3),
    (1, -1, -0.189_900_682_184_19e-1),
    (1, 0, -0.325_297_487_705_05e-1),
    (1, 1, -0.218_417_171_754_14e-1),
    (1, 3, -0.528_383_579_699_30e-4),
    (2, -3, -0.471_843_210_732_67e-3),
    (2, 0, -0.300_017_807_930_26e-3),
    (2, 1, 0.476_613_939_069_87e-4),
    (2, 3, -0.441_418_453_308_46e-5),
    (2, 17, -0.726_949_962_975_94e-15),
    (3, -4, -0.316_796_448_450_54e-4),
    (3, 0, -0.282_707_979_853_12e-5),
    (3, 6, -0.852_051_281_201_03e-9),
    (4, -5, -0.224_252_819_080_00e-5),
    (4, -2, -0.651_712_228_956_01e-6),
    (4, 10, -0.143_417_299_379_24e-12),
    (5, -8, -0.405_169_968_601_17e-6),
    (8, -11, -0.127_343_017_416_41e-8),
    (8, -6, -0.174_248_712_306_34e-9),
    (21, -29, -0.687_621_312_955_31e-18),
    (23, -31, 0.144_783_078_285_21e-19),
    (29, -38, 0.263_357_816_627_95e-22),
    (30, -39, -0.119_476_226_400_71e-22),
    (31, -40, 0.182_280_945_814_04e-23),
    (32, -41, -0.935_370_872_924_58e-25),
];

/// IAPWS R12-08, table 1.
const VISCOSITY_DILUTE: [f64; 4] = [1.677_52, 2.204_62, 0.636_656_4, -0.241_605];

/// IAPWS R12-08, table 2: i, j and coefficient.
const VISCOSITY_DENSE: [(i32, i32, f64); 21] = [
    (0, 0, 5.200_94e-1),
    (1, 0, 8.508_95e-2),
    (2, 0, -1.083_74),
    (3, 0, -2.895_55e-1),
    (0, 1, 2.225_31e-1),
    (1, 1, 9.991_15e-1),
    (2, 1, 1.887_97),
    (3, 1, 1.266_13),
    (5, 1, 1.205_73e-1),
    (0, 2, -2.813_78e-1),
    (1, 2, -9.068_51e-1),
    (2, 2, -7.724_79e-1),
    (3, 2, -4.898_37e-1),
    (4, 2, -2.570_40e-1),
    (0, 3, 1.619_13e-1),
    (1, 3, 2.573_99e-1),
    (0, 4, -3.253_72e-2),
    (3, 4, 6.984_52e-2),
    (4, 5, 8.721_02e-3),
    (3, 6, -4.356_73e-3),
    (5, 6, -5.932_64e-4),
];

/// Fresh water at a temperature \[degC\] from 0 to 200 and a pressure \[Pa\] from 0.1 to 100 MPa (from 1.6 MPa above 99 degC,
/// so that it is liquid).
///
/// # Errors
/// Temperature or pressure outside that range.
pub fn water(temperature: f64, pressure: f64) -> Result<Fluid, ModelError> {
    let wrong = |what: &str, value, must| ModelError::Parameter {
        what: what.to_owned(),
        value,
        must,
    };
    if !(0.0..=200.0).contains(&temperature) {
        return Err(wrong(
            "temperature of water",
            temperature,
            "it must lie from 0 to 200 degC",
        ));
    }
    let least = if temperature > 99.0 { 1.6e6 } else { 0.1e6 };
    if !(least..=100e6).contains(&pressure) {
        let must = "it must lie from 0.1 MPa (1.6 MPa above 99 degC) to 100 MPa";
        return Err(wrong("pressure of water", pressure, must));
    }
    let kelvin = temperature + 273.15;
    let (first, second) = region_1(kelvin, pressure);
    let density = REDUCING_PRESSURE / (GAS_CONSTANT * kelvin * first);
    Ok(Fluid {
        density,
        viscosity: viscosity(kelvin, density),
        compressibility: -second / first / REDUCING_PRESSURE,
    })
}

/// Brine of sodium chloride at a salinity \[kg of salt per kg of brine\] from 0 to 0.26, within the range of [`water`].
///
/// # Errors
/// Temperature, pressure or salinity outside the range.
pub fn brine(temperature: f64, pressure: f64, salinity: f64) -> Result<Fluid, ModelError> {
    let fresh = water(temperature, pressure)?;
    if !(0.0..=MOST_SALT).contains(&salinity) {
        return Err(ModelError::Parameter {
            what: "salinity".to_owned(),
            value: salinity,
            must: "it must lie from 0 to 0.26 kg of salt per kg of brine",
        });
    }
    let (t, p, s) = (temperature, pressure / 1e6, salinity);
    // g/cm3 and MPa in the source.
    let more = s
        * (0.668
            + 0.44 * s
            + 1e-6
                * (300.0 * p - 2400.0 * p * s
                    + t * (80.0 + 3.0 * t - 3300.0 * s - 13.0 * p + 47.0 * p * s)));
    let slope = s * 1e-6 * (300.0 - 2400.0 * s + t * (-13.0 + 47.0 * s));
    let density = fresh.density + 1e3 * more;
    let stiffened = fresh.density * fresh.compressibility + 1e3 * slope / 1e6;
    Ok(Fluid {
        density,
        viscosity: fresh.viscosity * salted(t, s) / salted(t, 0.0),
        compressibility: stiffened / density,
    })
}

/// First and second derivative of the reduced Gibbs energy by reduced pressure.
fn region_1(kelvin: f64, pressure: f64) -> (f64, f64) {
    let x = 7.1 - pressure / REDUCING_PRESSURE;
    let y = REDUCING_TEMPERATURE / kelvin - 1.222;
    REGION_1
        .iter()
        .fold((0.0, 0.0), |(first, second), &(i, j, n)| {
            let term = n * y.powi(j);
            let (order, lower) = (f64::from(i), f64::from(i - 1));
            (
                first - term * order * x.powi(i - 1),
                second + term * order * lower * x.powi(i - 2),
            )
        })
}

/// Viscosity of water \[Pa s\].
fn viscosity(kelvin: f64, density: f64) -> f64 {
    let (t, rho) = (kelvin / CRITICAL.0, density / CRITICAL.1);
    let inverse = VISCOSITY_DILUTE
        .iter()
        .rev()
        .fold(0.0, |sum, h| sum / t + h);
    let dilute = 100.0 * t.sqrt() / inverse;
    let dense: f64 = VISCOSITY_DENSE
        .iter()
        .map(|&(i, j, h)| h * (1.0 / t - 1.0).powi(i) * (rho - 1.0).powi(j))
        .sum();
    1e-6 * dilute * (rho * dense).exp()
}

/// Viscosity of brine \[cP\] by the formula of Batzle and Wang, of which only ratios are used.
fn salted(t: f64, s: f64) -> f64 {
    let rate = 0.42 * (s.powf(0.8) - 0.17).powi(2) + 0.045;
    0.1 + 0.333 * s + (1.65 + 91.9 * s.powi(3)) * (-rate * t.powf(0.8)).exp()
}

#[cfg(test)]
mod tests {
    use super::*;

    fn close(a: f64, b: f64, share: f64) -> bool {
        (a - b).abs() <= share * b.abs()
    }

    #[test]
    fn verification_values_of_the_formulation() {
        // IAPWS R7-97(2012), table 5: specific volume at 300 K and 3 MPa, 300 K and 80 MPa, 500 K and 3 MPa.
        for (kelvin, pressure, volume) in [
            (300.0, 3e6, 0.100_215_168e-2),
            (300.0, 80e6, 0.971_180_894e-3),
            (500.0, 3e6, 0.120_241_800e-2),
        ] {
            let (first, _) = region_1(kelvin, pressure);
            let found = GAS_CONSTANT * kelvin * first / REDUCING_PRESSURE;
            assert!(close(found, volume, 1e-8), "{found} {volume}");
        }
        // IAPWS R12-08, table 4: viscosity at 298.15 K and 998 and 1200 kg/m3, 373.15 K and 1000 kg/m3.
        for (kelvin, density, micro) in [
            (298.15, 998.0, 889.735_100),
            (298.15, 1200.0, 1_437.649_467),
            (373.15, 1000.0, 307.883_622),
        ] {
            let found = viscosity(kelvin, density) * 1e6;
            assert!(close(found, micro, 2e-9), "{found} {micro}");
        }
    }

    #[test]
    fn fresh_water_agrees_with_reference_tables() {
        // Temperature degC, pressure MPa; density by IF97 kg/m3; viscosity by IAPWS 2008 uPa s; compressibility by IAPWS-95 1/Pa.
        for (t, mpa, density, micro, compressibility) in TABLE {
            let fluid = water(t, mpa * 1e6).unwrap();
            assert!(close(fluid.density, density, 1e-8), "{t} {mpa}: {fluid:?}");
            assert!(
                close(fluid.viscosity * 1e6, micro, 1e-4),
                "{t} {mpa}: {fluid:?}"
            );
            assert!(
                close(fluid.compressibility, compressibility, 5e-3),
                "{t} {mpa}: {fluid:?}"
            );
        }
    }

    #[test]
    fn salt_makes_water_heavier_stiffer_and_thicker() {
        // Density of sodium-chloride solutions at 20 degC and 1 atm, and their viscosity (handbook tables, from memory).
        for (salinity, density, milli) in [
            (0.05, 1034.0, 1.085),
            (0.10, 1070.7, 1.193),
            (0.20, 1147.8, 1.554),
        ] {
            let fluid = brine(20.0, 0.101_325e6, salinity).unwrap();
            assert!(close(fluid.density, density, 5e-3), "{salinity}: {fluid:?}");
            assert!(
                close(fluid.viscosity * 1e3, milli, 6e-2),
                "{salinity}: {fluid:?}"
            );
            let fresh = water(20.0, 0.101_325e6).unwrap();
            assert!(fluid.compressibility < fresh.compressibility);
        }
        // The compressibility is the density's own slope.
        let at = |p: f64| brine(80.0, p, 0.1).unwrap();
        let slope = (at(20.5e6).density - at(19.5e6).density) / 1e6 / at(20e6).density;
        assert!(close(at(20e6).compressibility, slope, 1e-4));
        assert_eq!(brine(60.0, 15e6, 0.0).unwrap(), water(60.0, 15e6).unwrap());
    }

    #[test]
    fn outside_the_range_is_an_error() {
        for (t, p, s) in [
            (-1.0, 1e6, 0.0),
            (201.0, 20e6, 0.0),
            (120.0, 1e6, 0.0),
            (20.0, 1.0, 0.0),
            (20.0, 2e8, 0.0),
            (20.0, 1e6, 0.3),
            (f64::NAN, 1e6, 0.0),
            (20.0, f64::NAN, 0.0),
            (20.0, 1e6, f64::NAN),
        ] {
            assert!(brine(t, p, s).is_err(), "{t} {p} {s}");
        }
    }

    /// Tables of general property libraries after IAPWS-IF97, IAPWS 2008 and IAPWS-95.
    const TABLE: [(f64, f64, f64, f64, f64); 20] = [
        (0.01, 0.101325, 999.844983, 1791.12666, 5.088105e-10),
        (0.01, 1.0, 1000.301659, 1789.12147, 5.075090e-10),
        (0.01, 10.0, 1004.823521, 1769.97784, 4.947344e-10),
        (0.01, 20.0, 1009.739123, 1750.65593, 4.810655e-10),
        (10.0, 0.101325, 999.701540, 1305.90142, 4.780830e-10),
        (10.0, 1.0, 1000.130481, 1305.09262, 4.769451e-10),
        (10.0, 10.0, 1004.381503, 1297.41530, 4.657757e-10),
        (10.0, 20.0, 1009.010715, 1289.77286, 4.538208e-10),
        (25.0, 0.101325, 997.048032, 890.02237, 4.524617e-10),
        (25.0, 1.0, 997.452286, 889.89870, 4.514184e-10),
        (25.0, 10.0, 1001.461132, 888.80886, 4.411983e-10),
        (25.0, 20.0, 1005.832036, 887.91470, 4.303029e-10),
        (60.0, 0.101325, 983.210610, 466.04321, 4.449841e-10),
        (60.0, 1.0, 983.602020, 466.25875, 4.438718e-10),
        (60.0, 10.0, 987.480377, 468.42977, 4.330548e-10),
        (60.0, 20.0, 991.703349, 470.87067, 4.216782e-10),
        (80.0, 0.101325, 971.802900, 354.05815, 4.614968e-10),
        (80.0, 1.0, 972.204275, 354.29901, 4.602329e-10),
        (80.0, 10.0, 976.176227, 356.70724, 4.479963e-10),
        (80.0, 20.0, 980.491150, 359.37686, 4.352333e-10),
    ];
}
