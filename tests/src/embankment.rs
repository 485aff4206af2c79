//! The record of an embankment that never was: invented, seeded, and made from other formulas than the model's columns.
//!
//! Each piezometer sits in a slab of its own between pool and toe, through which pressure diffuses; the answer is the
//! closed form of the slab (a Fourier series, Carslaw and Jaeger 1959, section 3.4), superposed over the pool's history.
//! Beside it: a free surface that answers a little more when it is high, rain through a gamma-shaped delay, a yearly wave,
//! settling with age, noise, and a slow wander.

use std::f64::consts::{PI, TAU};

/// First instant: 2028-01-01T00:00:00Z \[s since the epoch\].
pub const START: f64 = 1_830_297_600.0;
/// Seconds in a day.
pub const DAY: f64 = 86_400.0;
/// Place of each piezometer between pool (0) and toe (1), and the time the slab takes \[days\].
pub const PIEZOMETERS: [(f64, f64); 6] = [
    (0.15, 30.0),
    (0.30, 60.0),
    (0.45, 90.0),
    (0.55, 140.0),
    (0.70, 200.0),
    (0.88, 260.0),
];
/// Weight of water \[Pa/m\].
const WATER: f64 = 9_806.65;
/// Terms of the series.
const TERMS: usize = 40;
/// Standard deviation of one reading \[Pa\].
pub const NOISE: f64 = 60.0;

/// What happens in the record; days count from its start.
#[derive(Debug, Clone, Copy, Default)]
pub struct Story {
    /// The core loses pressure drop: from this day on, over ten days, two piezometers (3 and 4) come to feel this share of
    /// the pool more than before.
    pub rise: Option<(f64, f64)>,
    /// A gauge's zero jumps: day, gauge, by how much \[Pa\].
    pub step: Option<(f64, usize, f64)>,
    /// A gauge drifts: from which day, gauge, how fast \[Pa a year\].
    pub drift: Option<(f64, usize, f64)>,
    /// A flood fills the pool beyond all that was: from which day, by how much \[m\], for thirty days.
    pub flood: Option<(f64, f64)>,
    /// Chooses weather and noise.
    pub seed: u64,
}

/// All that is read at one instant.
#[derive(Debug, Clone)]
pub struct Sample {
    /// When \[s since the epoch\].
    pub time: f64,
    /// Level of the pool \[m\].
    pub pool: f64,
    /// Rain since the instant before \[m/s\].
    pub rain: f64,
    /// Temperature of the air \[degC\].
    pub temperature: f64,
    /// Pressure at each piezometer \[Pa\].
    pub gauges: Vec<f64>,
}

/// Draws of a seeded generator (xorshift, Marsaglia 2003).
struct Dice(u64);

impl Dice {
    fn even(&mut self) -> f64 {
        self.0 ^= self.0 << 13;
        self.0 ^= self.0 >> 7;
        self.0 ^= self.0 << 17;
        (self.0 >> 11) as f64 / (1_u64 << 53) as f64
    }

    fn normal(&mut self) -> f64 {
        (0..12).map(|_| self.even()).sum::<f64>() - 6.0
    }
}

/// The record over some days, read every `step` seconds.
pub fn record(days: f64, step: f64, story: &Story) -> Vec<Sample> {
    let mut dice =
        Dice(0x9E37_79B9_7F4A_7C15 ^ (story.seed + 1).wrapping_mul(0xD134_2543_DE82_EF95));
    let count = (days * DAY / step) as usize;
    let mut inflow = 0.0_f64;
    let mut soil = (0.0_f64, 0.0_f64);
    let mut modes = vec![vec![f64::NAN; TERMS]; PIEZOMETERS.len()];
    let mut wander = vec![0.0_f64; PIEZOMETERS.len()];
    let mut samples = Vec::with_capacity(count);
    for index in 0..count {
        let since = index as f64 * step;
        let day = since / DAY;
        let year = TAU * (START + since) / (365.25 * DAY);
        let storm = dice.even() < 0.12 * step / DAY;
        let rain = if storm {
            3e-7 * dice.even() * DAY / step
        } else {
            0.0
        };
        inflow += 35.0 * rain * step - inflow * step / (25.0 * DAY);
        let flood = story
            .flood
            .filter(|(from, _)| (*from..from + 30.0).contains(&day))
            .map_or(0.0, |(from, by)| by * ((day - from) / 10.0).min(1.0));
        // A spillway holds the pool at its full level; only a flood goes beyond.
        let level = 37.0 + 5.5 * (year - 2.1).sin() + inflow + 0.3 * (TAU * day / 71.0).sin();
        let pool = level.min(42.5) + flood;
        // Two stores in a row: a gamma-shaped delay of rain.
        soil.0 += rain * step - soil.0 * step / (6.0 * DAY);
        soil.1 += (soil.0 - soil.1) * step / (6.0 * DAY);
        let temperature = 11.0 + 9.0 * (year - 1.9).sin() + 2.0 * dice.normal();
        let head = pool + 0.006 * (pool - 38.0).powi(2);
        let mut gauges = Vec::with_capacity(PIEZOMETERS.len());
        for (gauge, &(place, time)) in PIEZOMETERS.iter().enumerate() {
            let mut slab = (1.0 - place) * head;
            for (term, state) in modes[gauge].iter_mut().enumerate() {
                let n = (term + 1) as f64;
                let keep = (-n * n * PI * PI * step / (time * DAY)).exp();
                *state = if state.is_nan() {
                    head
                } else {
                    keep * *state + (1.0 - keep) * head
                };
                slab -= 2.0 / (n * PI) * (n * PI * place).sin() * (head - *state);
            }
            let keep = (-step / (4.0 * DAY)).exp();
            wander[gauge] =
                keep * wander[gauge] + 50.0 * (1.0 - keep * keep).sqrt() * dice.normal();
            let gauge_at = gauge as f64;
            let mut pressure =
                WATER * slab + 250.0 * (year - 0.4 * gauge_at).cos() + 2.0e4 * place * soil.1
                    - 700.0 * (1.0 - (-day / 500.0).exp())
                    + wander[gauge]
                    + NOISE * dice.normal();
            if let Some((from, share)) = story.rise
                && (gauge == 3 || gauge == 4)
                && day >= from
            {
                pressure += share * ((day - from) / 10.0).min(1.0) * WATER * pool;
            }
            if let Some((from, which, by)) = story.step
                && which == gauge
                && day >= from
            {
                pressure += by;
            }
            if let Some((from, which, rate)) = story.drift
                && which == gauge
                && day >= from
            {
                pressure += rate * (day - from) / 365.25;
            }
            gauges.push(pressure);
        }
        samples.push(Sample {
            time: START + since,
            pool,
            rain,
            temperature,
            gauges,
        });
    }
    samples
}
