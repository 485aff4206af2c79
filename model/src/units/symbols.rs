//! The table of unit symbols, each with its factor to SI.

/// Exponents of metre, kilogram, second and byte.
pub(super) type Powers = [i32; 4];

/// Standard gravity \[m/s2\] (CGPM, 1901).
const GRAVITY: f64 = 9.806_65;
/// International foot \[m\] (1959).
const FOOT: f64 = 0.3048;
/// International inch \[m\] (1959).
const INCH: f64 = 0.0254;
/// International pound \[kg\] (1959).
const POUND: f64 = 0.453_592_37;
/// US gallon, 231 cubic inches \[m3\].
const GALLON: f64 = 231.0 * INCH * INCH * INCH;
/// Standard atmosphere \[Pa\] (CGPM, 1954).
const ATMOSPHERE: f64 = 101_325.0;

/// Pound-force per square inch \[Pa\].
pub const PSI: f64 = POUND * GRAVITY / (INCH * INCH);
/// Oilfield barrel, 42 US gallons \[m3\].
pub const BARREL: f64 = 42.0 * GALLON;
/// Darcy \[m2\]: 1 cm/s through 1 cP under 1 atm/cm.
pub const DARCY: f64 = 1e-7 / ATMOSPHERE;
/// Day \[s\].
pub const DAY: f64 = 86_400.0;
/// Julian year of 365.25 days \[s\].
pub const YEAR: f64 = 365.25 * DAY;
/// Pressure under a metre of the conventional column of water \[Pa/m\]: 1000 kg/m3 under standard gravity.
pub const WATER_WEIGHT: f64 = 1000.0 * GRAVITY;
/// Pressure under a metre of the conventional column of mercury \[Pa/m\] (ISO 80000-4).
const MERCURY_WEIGHT: f64 = 133_322.387_415;

const LENGTH: Powers = [1, 0, 0, 0];
const MASS: Powers = [0, 1, 0, 0];
const TIME: Powers = [0, 0, 1, 0];
const AREA: Powers = [2, 0, 0, 0];
const VOLUME: Powers = [3, 0, 0, 0];
const RATE: Powers = [3, 0, -1, 0];
const PRESSURE: Powers = [-1, 1, -2, 0];
const COLUMN: Powers = [-2, 1, -2, 0];
const VISCOSITY: Powers = [-1, 1, -1, 0];
const NUMBER: Powers = [0, 0, 0, 0];
const BYTE: Powers = [0, 0, 0, 1];

/// A unit symbol: its spellings, its size in SI, its powers.
pub(super) struct Symbol {
    pub(super) names: &'static [&'static str],
    pub(super) factor: f64,
    pub(super) powers: Powers,
}

const fn unit(names: &'static [&'static str], factor: f64, powers: Powers) -> Symbol {
    Symbol {
        names,
        factor,
        powers,
    }
}

/// Every symbol. No prefix is ever guessed: `mD` and `MPa` are here because somebody writes them.
pub(super) static SYMBOLS: &[Symbol] = &[
    unit(&["m", "metre", "metres", "meter", "meters"], 1.0, LENGTH),
    unit(&["km"], 1e3, LENGTH),
    unit(&["cm"], 1e-2, LENGTH),
    unit(&["mm"], 1e-3, LENGTH),
    unit(&["um"], 1e-6, LENGTH),
    unit(&["ft", "foot", "feet"], FOOT, LENGTH),
    unit(&["in", "inch", "inches"], INCH, LENGTH),
    unit(&["mi", "mile", "miles"], 5280.0 * FOOT, LENGTH),
    unit(&["ha"], 1e4, AREA),
    unit(&["acre", "acres"], 43_560.0 * FOOT * FOOT, AREA),
    unit(&["kg"], 1.0, MASS),
    unit(&["g"], 1e-3, MASS),
    unit(&["lb", "lbm"], POUND, MASS),
    unit(&["s", "sec", "second", "seconds"], 1.0, TIME),
    unit(&["ms"], 1e-3, TIME),
    unit(&["min", "minute", "minutes"], 60.0, TIME),
    unit(&["h", "hr", "hour", "hours"], 3600.0, TIME),
    unit(&["d", "day", "days"], DAY, TIME),
    unit(&["wk", "week", "weeks"], 7.0 * DAY, TIME),
    unit(&["yr", "year", "years", "a"], YEAR, TIME),
    unit(&["Pa", "pascal", "pascals"], 1.0, PRESSURE),
    unit(&["hPa"], 1e2, PRESSURE),
    unit(&["kPa"], 1e3, PRESSURE),
    unit(&["MPa"], 1e6, PRESSURE),
    unit(&["GPa"], 1e9, PRESSURE),
    unit(&["mPa"], 1e-3, PRESSURE),
    unit(&["bar", "bars"], 1e5, PRESSURE),
    unit(&["mbar"], 1e2, PRESSURE),
    unit(&["psi"], PSI, PRESSURE),
    unit(&["atm"], ATMOSPHERE, PRESSURE),
    // A length times one of these is a pressure: `m H2O`, `ft H2O`, `mm Hg`.
    unit(&["H2O"], WATER_WEIGHT, COLUMN),
    unit(&["Hg"], MERCURY_WEIGHT, COLUMN),
    unit(&["mH2O"], WATER_WEIGHT, PRESSURE),
    unit(&["cmH2O"], 1e-2 * WATER_WEIGHT, PRESSURE),
    unit(&["mmH2O"], 1e-3 * WATER_WEIGHT, PRESSURE),
    unit(&["ftH2O"], FOOT * WATER_WEIGHT, PRESSURE),
    unit(&["inH2O"], INCH * WATER_WEIGHT, PRESSURE),
    unit(&["mmHg"], 1e-3 * MERCURY_WEIGHT, PRESSURE),
    unit(&["inHg"], INCH * MERCURY_WEIGHT, PRESSURE),
    unit(
        &["L", "l", "litre", "litres", "liter", "liters"],
        1e-3,
        VOLUME,
    ),
    unit(&["mL", "ml"], 1e-6, VOLUME),
    unit(&["ML"], 1e3, VOLUME),
    unit(&["gal", "gallon", "gallons"], GALLON, VOLUME),
    unit(&["Mgal"], 1e6 * GALLON, VOLUME),
    unit(
        &["bbl", "bbls", "STB", "stb", "barrel", "barrels"],
        BARREL,
        VOLUME,
    ),
    unit(&["gpm"], GALLON / 60.0, RATE),
    unit(&["gpd"], GALLON / DAY, RATE),
    unit(&["bpd", "bwpd"], BARREL / DAY, RATE),
    unit(&["cfs"], FOOT * FOOT * FOOT, RATE),
    unit(&["lpm"], 1e-3 / 60.0, RATE),
    unit(&["D", "darcy", "darcies"], DARCY, AREA),
    unit(&["mD", "md", "millidarcy"], 1e-3 * DARCY, AREA),
    unit(&["uD"], 1e-6 * DARCY, AREA),
    unit(&["cP", "cp", "centipoise"], 1e-3, VISCOSITY),
    unit(&["P", "poise"], 0.1, VISCOSITY),
    unit(&["%", "percent"], 1e-2, NUMBER),
    unit(&["ppm"], 1e-6, NUMBER),
    unit(&["B", "byte", "bytes"], 1.0, BYTE),
    unit(&["kB"], 1e3, BYTE),
    unit(&["MB"], 1e6, BYTE),
    unit(&["GB"], 1e9, BYTE),
    unit(&["TB"], 1e12, BYTE),
    unit(&["KiB"], 1024.0, BYTE),
    unit(&["MiB"], 1_048_576.0, BYTE),
    unit(&["GiB"], 1_073_741_824.0, BYTE),
    unit(&["TiB"], 1_099_511_627_776.0, BYTE),
];

/// The symbol of a spelling.
pub(super) fn symbol(name: &str) -> Option<&'static Symbol> {
    SYMBOLS.iter().find(|s| s.names.contains(&name))
}
