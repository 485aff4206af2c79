//! SDI-12 sensors behind a transparent serial adapter.
//!
//! [`codec`] is commands and answers, `recorder` one measurement with all that keeps a late answer from being taken for the
//! next, and this file one round of all sensors.

pub mod codec;
pub(crate) mod recorder;

use std::collections::BTreeMap;
use std::io;
use std::time::Duration;

use super::Surroundings;
use super::absence::Absence;
use super::decode::{Refusal, When, reading};
use super::link::{self, Over, SourceEnd, Talk};
use super::outlet::Outlet;
use super::poll::{Round, Scan, poll};
use super::serial::Wire;
use crate::config::{Sdi12Address, Sdi12Channel, Sdi12Command, Sdi12Kind, Sdi12Source};
use crate::record::{ChannelId, DeviceStatus, RejectReason, SourceName};
use codec::AnswerError;
use recorder::{Begun, Failure, Recorder, Timing};

/// Asks the sensors until shutdown.
pub(super) async fn run(settings: Sdi12Source, outlet: Outlet, around: Surroundings) {
    let sensors = Sensors {
        timing: Timing::of(&settings),
        every: settings.every,
        waves: waves(&settings.channels),
        absences: BTreeMap::new(),
        source: outlet.source().clone(),
    };
    link::run(settings.serial, sensors, outlet, around).await;
}

/// One measurement of one sensor, and the channels that take their values from it.
#[derive(Debug, Clone, PartialEq, Eq)]
pub(crate) struct Measurement {
    pub(crate) address: Sdi12Address,
    pub(crate) command: Sdi12Command,
    /// Each with the position of its value, from 1.
    pub(crate) channels: Vec<(ChannelId, usize)>,
}

impl Measurement {
    fn ids(&self) -> impl Iterator<Item = &ChannelId> {
        self.channels.iter().map(|(id, _)| id)
    }
}

/// Measurements in the order in which they are made: a sensor does one at a time, so each wave has one of each sensor, and
/// within a wave concurrent ones are begun together.
pub(crate) fn waves(channels: &[Sdi12Channel]) -> Vec<Vec<Measurement>> {
    let mut sensors: BTreeMap<Sdi12Address, Vec<Measurement>> = BTreeMap::new();
    for channel in channels {
        let own = sensors.entry(channel.address).or_default();
        let entry = (channel.id.clone(), channel.value);
        match own.iter_mut().find(|m| m.command == channel.command) {
            Some(measurement) => measurement.channels.push(entry),
            None => own.push(Measurement {
                address: channel.address,
                command: channel.command,
                channels: vec![entry],
            }),
        }
    }
    let mut waves: Vec<Vec<Measurement>> = Vec::new();
    for own in sensors.into_values() {
        for (index, measurement) in own.into_iter().enumerate() {
            match waves.get_mut(index) {
                Some(wave) => wave.push(measurement),
                None => waves.push(vec![measurement]),
            }
        }
    }
    waves
}

/// The sensors of a line. What is known of them outlives a pulled adapter.
struct Sensors {
    timing: Timing,
    every: Duration,
    waves: Vec<Vec<Measurement>>,
    absences: BTreeMap<Sdi12Address, Absence>,
    source: SourceName,
}

impl<W: Wire> Talk<W> for Sensors {
    async fn talk(&mut self, wire: W, end: &mut SourceEnd) -> Over {
        let every = self.every;
        let mut rounds = Rounds {
            recorder: Recorder::new(wire, self.timing),
            sensors: self,
        };
        poll(&mut rounds, every, end).await
    }
}

/// Rounds of all sensors through one recorder.
struct Rounds<'s, W> {
    recorder: Recorder<W>,
    sensors: &'s mut Sensors,
}

impl<W: Wire> Round for Rounds<'_, W> {
    async fn round(&mut self, around: &Surroundings) -> io::Result<Scan> {
        let mut scan = Scan::default();
        let Sensors {
            waves,
            absences,
            source,
            timing,
            ..
        } = &mut *self.sensors;
        for wave in waves.iter() {
            let here = |m: &&Measurement| !absences.get(&m.address).is_some_and(Absence::is_held);
            let due: Vec<&Measurement> = wave.iter().filter(here).collect();
            let (concurrent, alone): (Vec<_>, Vec<_>) = due
                .into_iter()
                .partition(|m| m.command.kind == Sdi12Kind::Concurrent);
            let mut begun: Vec<(&Measurement, Result<Begun, Failure>)> = Vec::new();
            for measurement in concurrent {
                let Measurement {
                    address, command, ..
                } = *measurement;
                let announced = self.recorder.begin(address, command).await;
                begun.push((measurement, announced));
            }
            for measurement in alone {
                let result = self
                    .recorder
                    .measure(measurement.address, measurement.command)
                    .await;
                settle(&mut scan, measurement, result, absences, source, around)?;
            }
            begun.sort_by_key(|(_, begun)| begun.as_ref().ok().map(|b| b.ready));
            for (measurement, begun) in begun {
                let Measurement {
                    address, command, ..
                } = *measurement;
                let result = match begun {
                    Ok(begun) => self.recorder.collect(address, command, begun).await,
                    Err(failure) => Err(failure),
                };
                // What went wrong among others is tried again alone.
                let result = match result {
                    Err(Failure::Gone(error)) => return Err(error),
                    Err(_) if timing.retries > 0 => self.recorder.measure(address, command).await,
                    other => other,
                };
                settle(&mut scan, measurement, result, absences, source, around)?;
            }
        }
        Ok(scan)
    }
}

/// What a measurement, or the want of one, means for its channels.
fn settle(
    scan: &mut Scan,
    measurement: &Measurement,
    result: Result<Vec<f64>, Failure>,
    absences: &mut BTreeMap<Sdi12Address, Absence>,
    source: &SourceName,
    around: &Surroundings,
) -> io::Result<()> {
    let when = When::arrival(around.clock.read());
    let absence = absences.entry(measurement.address).or_default();
    let failure = match result {
        Ok(values) => {
            absence.answered();
            scan.answered = true;
            take(scan, measurement, &values, when, source, around);
            return Ok(());
        }
        Err(Failure::Gone(error)) => return Err(error),
        Err(failure) => failure,
    };
    scan.lose(measurement.ids(), when, DeviceStatus::Normal);
    if matches!(failure, Failure::Silent(_)) {
        absence.missed();
        scan.trouble = Some(failure.to_string());
        return Ok(());
    }
    absence.answered();
    scan.answered = true;
    let (reason, raw) = match &failure {
        Failure::Garbled { why, raw, .. } => (reason(why), raw.as_str()),
        _ => (RejectReason::DeviceError, ""),
    };
    let refusal = Refusal::new(reason, failure.to_string());
    scan.refuse(measurement.ids(), &refusal, when, source, raw.as_bytes());
    Ok(())
}

fn reason(why: &AnswerError) -> RejectReason {
    match why {
        AnswerError::Checksum { .. } => RejectReason::Checksum,
        _ => RejectReason::Malformed,
    }
}

/// Gives each channel its value.
fn take(
    scan: &mut Scan,
    measurement: &Measurement,
    values: &[f64],
    when: When,
    source: &SourceName,
    around: &Surroundings,
) {
    for (id, position) in &measurement.channels {
        let raw = position.checked_sub(1).and_then(|p| values.get(p)).copied();
        let read = raw
            .ok_or_else(|| {
                let Measurement {
                    address, command, ..
                } = measurement;
                let found = values.len();
                let detail = format!(
                    "\"{address}{command}!\" gave {found} values, value {position} is asked for"
                );
                Refusal::new(RejectReason::Payload, detail)
            })
            .and_then(|raw| reading(id, when, raw, around.conversions.of(id)?));
        match read {
            Ok(reading) => scan.readings.push(reading),
            Err(refusal) => {
                scan.lose([id], when, DeviceStatus::Normal);
                let raw = format!("{values:?}");
                scan.refuse([id], &refusal, when, source, raw.as_bytes());
            }
        }
    }
}

#[cfg(test)]
mod tests;
