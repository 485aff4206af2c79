//! What the site file says of an instrument whose number is no plain multiple of what it measures.

use std::time::Duration;

use crate::record::ChannelId;

/// How an instrument's number, after the channel's `scale` and `offset`, becomes the channel's SI value.
#[derive(Debug, Clone, PartialEq)]
pub enum Instrument {
    /// A current of 4 to 20 mA.
    CurrentLoop(CurrentLoop),
    /// A vibrating wire.
    VibratingWire(VibratingWire),
    /// A thermistor's resistance \[ohm\].
    Thermistor(Thermistor),
    /// A quartz gauge's two frequencies.
    Quartz(Quartz),
    /// A polynomial in the number.
    Polynomial(Polynomial),
    /// A meter that counts up.
    Totaliser(Totaliser),
}

impl Instrument {
    /// The kind as the site file spells it.
    #[must_use]
    pub fn kind(&self) -> &'static str {
        match self {
            Self::CurrentLoop(_) => "current-loop",
            Self::VibratingWire(_) => "vibrating-wire",
            Self::Thermistor(_) => "thermistor",
            Self::Quartz(_) => "quartz",
            Self::Polynomial(_) => "polynomial",
            Self::Totaliser(_) => "totaliser",
        }
    }

    /// Channels it needs beside its own.
    pub fn companions(&self) -> impl Iterator<Item = &Companion> {
        let (first, second) = match self {
            Self::VibratingWire(wire) => (
                wire.thermal.as_ref().map(|t| &t.temperature),
                wire.barometric.as_ref().map(|b| &b.barometer),
            ),
            Self::Quartz(quartz) => (Some(&quartz.temperature), None),
            Self::CurrentLoop(_)
            | Self::Thermistor(_)
            | Self::Polynomial(_)
            | Self::Totaliser(_) => (None, None),
        };
        first.into_iter().chain(second)
    }
}

/// Another channel whose value a conversion needs.
#[derive(Debug, Clone, PartialEq)]
pub struct Companion {
    /// The channel.
    pub channel: ChannelId,
    /// How far apart the two readings may lie before the value is suspect.
    pub within: Duration,
}

/// A current of 4 to 20 mA, judged by the bands of NAMUR NE 43.
#[derive(Debug, Clone, PartialEq)]
pub struct CurrentLoop {
    /// SI value at 4 mA.
    pub low: f64,
    /// SI value at 20 mA.
    pub high: f64,
    /// How long a current may stay between measurement and fault before it counts as a fault.
    pub hold: Duration,
}

/// A vibrating wire.
#[derive(Debug, Clone, PartialEq)]
pub struct VibratingWire {
    /// What the readout delivers.
    pub reads: WireReading,
    /// From digits to pressure.
    pub form: WireForm,
    /// Reading at installation \[digits\].
    pub zero: f64,
    /// Thermal term.
    pub thermal: Option<Thermal>,
    /// Barometric term, for an unvented gauge that feels the atmosphere.
    pub barometric: Option<Barometric>,
}

/// What a readout of a vibrating wire delivers.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum WireReading {
    /// Digits: the square of the frequency over 1000.
    Digits,
    /// Frequency \[Hz\].
    Hertz,
    /// Period \[us\].
    Microseconds,
}

/// From digits to pressure. R0 is the zero reading, R1 the reading now.
#[derive(Debug, Clone, Copy, PartialEq)]
pub enum WireForm {
    /// G (R0 - R1), the sign as stated.
    Linear {
        /// G \[Pa/digit\].
        factor: f64,
        /// Which of the two is taken from which: makers differ.
        sense: WireSense,
    },
    /// A R1^2 + B R1 + C, with C such that the zero reading gives 0: the certificate's belongs to another day's atmosphere.
    Polynomial {
        /// A \[Pa/digit2\].
        a: f64,
        /// B \[Pa/digit\].
        b: f64,
    },
}

/// Which reading is taken from which.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum WireSense {
    /// R0 - R1.
    ZeroMinusReading,
    /// R1 - R0.
    ReadingMinusZero,
}

/// K (T1 - T0).
#[derive(Debug, Clone, PartialEq)]
pub struct Thermal {
    /// K \[Pa/K\].
    pub factor: f64,
    /// T0 \[degC\].
    pub zero: f64,
    /// T1.
    pub temperature: Companion,
}

/// -(S1 - S0).
#[derive(Debug, Clone, PartialEq)]
pub struct Barometric {
    /// S0 \[Pa\].
    pub zero: f64,
    /// S1.
    pub barometer: Companion,
}

/// The equation of Steinhart and Hart (1968): 1/T = A + B ln R + C (ln R)^3, T in kelvin, R in ohm.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct Thermistor {
    /// A \[1/K\].
    pub a: f64,
    /// B \[1/K\].
    pub b: f64,
    /// C \[1/K\].
    pub c: f64,
}

/// A polynomial in two frequencies, within the rectangle it was calibrated in.
#[derive(Debug, Clone, PartialEq)]
pub struct Quartz {
    /// The channel of the temperature crystal, whose number (its frequency, whatever its value) is taken.
    pub temperature: Companion,
    /// Pressure frequency that the polynomial counts from.
    pub zero: f64,
    /// Temperature frequency that the polynomial counts from.
    pub temperature_zero: f64,
    /// Row i has the coefficients of the i-th power of the pressure frequency, in rising powers of the temperature frequency.
    pub coefficients: Vec<Vec<f64>>,
    /// Pressure frequencies calibrated.
    pub range: (f64, f64),
    /// Temperature frequencies calibrated.
    pub temperature_range: (f64, f64),
    /// SI units per unit of the polynomial's result, and SI value of its zero.
    pub unit: (f64, f64),
}

/// A polynomial in one number, within the range it was calibrated in.
#[derive(Debug, Clone, PartialEq)]
pub struct Polynomial {
    /// Number that the polynomial counts from.
    pub zero: f64,
    /// Coefficients, in rising powers.
    pub coefficients: Vec<f64>,
    /// Numbers calibrated.
    pub range: (f64, f64),
    /// SI units per unit of the polynomial's result, and SI value of its zero.
    pub unit: (f64, f64),
}

/// A meter that counts up.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct Totaliser {
    /// Volume of a count \[m3\].
    pub count: f64,
    /// Count at which it begins again at 0; `None` where it never does.
    pub wrap: Option<f64>,
    /// Largest rate that can be \[m3/s\]: what is more is a reset or a fault.
    pub most: f64,
}

/// What the zero of a channel's pressures is, and what it shall be.
#[derive(Debug, Clone, PartialEq)]
pub struct ReferenceChange {
    /// As delivered.
    pub from: Zero,
    /// As kept.
    pub to: Zero,
    /// The barometer, where either is the atmosphere.
    pub barometer: Option<Companion>,
}

/// What the zero of a pressure is.
#[derive(Debug, Clone, Copy, PartialEq)]
pub enum Zero {
    /// Vacuum.
    Absolute,
    /// The atmosphere at the time.
    Vented,
    /// The air sealed in, at this pressure \[Pa\].
    Sealed(f64),
}

/// A column of fluid between the sensor and the depth its pressures are kept for.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct FluidColumn {
    /// How far the datum lies below the sensor \[m\]; negative above it.
    pub depth: f64,
    /// Density of the fluid between \[kg/m3\].
    pub density: f64,
    /// Gravity at the site \[m/s2\].
    pub gravity: f64,
}
