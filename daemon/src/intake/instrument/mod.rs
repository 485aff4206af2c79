//! From an instrument's number to what it measures, where that is more than a factor and an offset. Pure.

mod current_loop;
mod quartz;
mod reference;
mod thermistor;
mod totaliser;
mod vibrating_wire;

use crate::config::{Companion, Instrument};
use crate::record::{ClockEpoch, DeviceStatus, Quality, Stamp};

pub use reference::{GRAVITY, head};

pub(crate) use reference::change;

/// What a conversion gives.
#[derive(Debug, Clone, Copy, PartialEq)]
pub(crate) struct Outcome {
    /// SI.
    pub(crate) value: Option<f64>,
    pub(crate) quality: Quality,
    pub(crate) device: DeviceStatus,
}

impl Outcome {
    /// Of a device that reports nothing of itself.
    pub(crate) fn of(value: Option<f64>, quality: Quality) -> Self {
        Self {
            value,
            quality,
            device: DeviceStatus::Normal,
        }
    }

    /// No value, since the device says so or cannot be believed.
    pub(crate) fn failed(device: DeviceStatus) -> Self {
        Self {
            value: None,
            quality: Quality::Bad,
            device,
        }
    }
}

/// What is wanted of another channel.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub(crate) enum Wanted {
    /// Its SI value.
    Value,
    /// The number its instrument delivers, after scale and offset.
    Number,
}

/// A value of another channel, as near in time as there is one.
#[derive(Debug, Clone, Copy, PartialEq)]
pub(crate) struct Beside {
    pub(crate) value: f64,
    /// Whether it is as near as was asked for.
    pub(crate) fresh: bool,
}

impl Beside {
    /// Quality of what is made with it.
    pub(crate) fn worst(self, quality: Quality) -> Quality {
        if self.fresh {
            quality
        } else {
            quality.max_concern(Quality::Suspect)
        }
    }
}

/// What an instrument's channel remembers from reading to reading.
#[derive(Debug, Clone, Copy, Default)]
pub(crate) struct Memory {
    between: current_loop::Between,
    total: Option<totaliser::Last>,
}

impl Instrument {
    /// Converts a number, after the channel's scale and offset. `beside` gives the value of a companion.
    pub(crate) fn convert(
        &self,
        number: f64,
        sampled: Stamp,
        epoch: ClockEpoch,
        memory: &mut Memory,
        beside: impl Fn(&Companion, Wanted) -> Option<Beside>,
    ) -> Outcome {
        match self {
            Self::CurrentLoop(settings) => {
                current_loop::convert(settings, &mut memory.between, number, sampled)
            }
            Self::VibratingWire(settings) => {
                let temperature = settings
                    .thermal
                    .as_ref()
                    .and_then(|t| beside(&t.temperature, Wanted::Value));
                let barometer = settings
                    .barometric
                    .as_ref()
                    .and_then(|b| beside(&b.barometer, Wanted::Value));
                vibrating_wire::convert(settings, number, temperature, barometer)
            }
            Self::Thermistor(settings) => match settings.temperature(number) {
                Some(value) => Outcome::of(Some(value), Quality::Good),
                None => Outcome::of(None, Quality::Bad),
            },
            // Both frequencies belong to one instant: an old one is none.
            Self::Quartz(settings) => {
                match beside(&settings.temperature, Wanted::Number).filter(|b| b.fresh) {
                    None => Outcome::of(None, Quality::Missing),
                    Some(temperature) => match settings.pressure(number, temperature.value) {
                        Some(value) => Outcome::of(Some(value), Quality::Good),
                        None => Outcome::failed(DeviceStatus::OutOfSpecification),
                    },
                }
            }
            Self::Polynomial(settings) => match settings.value(number) {
                Some(value) => Outcome::of(Some(value), Quality::Good),
                None => Outcome::failed(DeviceStatus::OutOfSpecification),
            },
            Self::Totaliser(settings) => {
                totaliser::convert(settings, &mut memory.total, number, sampled, epoch)
            }
        }
    }
}
