//! One round of all devices of a line.

use std::collections::BTreeMap;
use std::io;
use std::time::Duration;

use tokio::time::Instant;

use super::codec::{FrameError, Remedy, number};
use super::master::{Master, ReadError};
use super::plan::{Block, Member, plan};
use crate::config::ModbusRtuSource;
use crate::intake::Surroundings;
use crate::intake::backoff::Backoff;
use crate::intake::decode::{Refusal, When, missing, reading};
use crate::intake::serial::Wire;
use crate::record::{DeviceStatus, Reading, RejectReason, Rejected, SourceName};

/// What a round brought.
#[derive(Debug, Default)]
pub(crate) struct Scan {
    pub(crate) readings: Vec<Reading>,
    pub(crate) rejected: Vec<Rejected>,
    /// Whether any device answered at all.
    pub(crate) answered: bool,
    /// What else to say.
    pub(crate) trouble: Option<String>,
}

/// Asks all devices, and remembers which of them are not worth asking for a while.
pub(crate) struct Scanner {
    source: SourceName,
    blocks: Vec<Planned>,
    units: BTreeMap<u8, Unit>,
}

/// A block, and until when it is not asked for.
struct Planned {
    block: Block,
    held: Option<Instant>,
}

/// A device on the line.
#[derive(Default)]
struct Unit {
    /// Scans in a row without an answer.
    silent: u32,
    backoff: Backoff,
    held: Option<Instant>,
}

impl Scanner {
    /// A block whose settings the device refuses is asked for again after this long, in case the device was mended.
    const REFUSED: Duration = Duration::from_secs(600);

    /// Scans without an answer after which a device is asked less often, so that it does not slow down the others.
    const SILENT: u32 = 3;

    pub(crate) fn new(settings: &ModbusRtuSource, source: SourceName) -> Self {
        let planned = |block| Planned { block, held: None };
        Self {
            source,
            blocks: plan(&settings.channels).into_iter().map(planned).collect(),
            units: BTreeMap::new(),
        }
    }

    /// Asks every device once.
    ///
    /// # Errors
    /// The port is gone.
    pub(crate) async fn scan<W: Wire>(
        &mut self,
        master: &mut Master<W>,
        around: &Surroundings,
    ) -> io::Result<Scan> {
        let mut scan = Scan::default();
        let mut silent_now = Vec::new();
        let mut split = Vec::new();
        for (index, planned) in self.blocks.iter_mut().enumerate() {
            let now = Instant::now();
            let request = planned.block.request;
            let unit = self.units.entry(request.unit).or_default();
            let held = |until: Option<Instant>| until.is_some_and(|u| u > now);
            if held(planned.held) || held(unit.held) {
                continue;
            }
            if silent_now.contains(&request.unit) {
                let when = When::arrival(around.clock.read());
                scan.lose(&planned.block, when, DeviceStatus::Normal);
                continue;
            }
            let answer = master.read(&request).await;
            let when = When::arrival(around.clock.read());
            if !matches!(answer, Err(ReadError::Silent { .. })) {
                *unit = Unit::default();
                scan.answered = true;
            }
            match answer {
                Ok(registers) => scan.take(&planned.block, &registers, when, &self.source, around),
                Err(ReadError::Gone(error)) => return Err(error),
                Err(ReadError::Silent { unit: address }) => {
                    scan.lose(&planned.block, when, DeviceStatus::Normal);
                    scan.trouble = Some(format!("device {address} does not answer"));
                    silent_now.push(address);
                    unit.silent += 1;
                    if unit.silent >= Self::SILENT {
                        unit.held = Some(Instant::now() + unit.backoff.wait());
                    }
                }
                Err(ReadError::Garbled { why, raw }) => {
                    scan.lose(&planned.block, when, DeviceStatus::Normal);
                    let reason = match why {
                        FrameError::Checksum { .. } => RejectReason::Checksum,
                        _ => RejectReason::Malformed,
                    };
                    let detail = format!("{}: {why}", describe(&planned.block));
                    scan.refuse(
                        &planned.block,
                        Refusal::new(reason, detail),
                        when,
                        &self.source,
                        &hex(&raw),
                    );
                }
                Err(ReadError::Exception(exception)) => {
                    if exception.remedy() == Remedy::Settings {
                        // Which of several channels is at fault is found out by asking for each alone.
                        if planned.block.members.len() > 1 {
                            split.push(index);
                            scan.lose(&planned.block, when, DeviceStatus::Normal);
                            continue;
                        }
                        planned.held = Some(Instant::now() + Self::REFUSED);
                    }
                    let device = match exception.remedy() {
                        Remedy::Device => DeviceStatus::Failure,
                        Remedy::Settings | Remedy::Later => DeviceStatus::Normal,
                    };
                    scan.lose(&planned.block, when, device);
                    let mend = match exception.remedy() {
                        Remedy::Settings => {
                            "; mend unit_id, table, address or type in the site file"
                        }
                        Remedy::Later | Remedy::Device => "",
                    };
                    let detail = format!(
                        "{}: exception {:02X}, {}{mend}",
                        describe(&planned.block),
                        exception.0,
                        exception.name(),
                    );
                    let raw = format!("exception {:02X}", exception.0);
                    scan.refuse(
                        &planned.block,
                        Refusal::new(RejectReason::DeviceError, detail),
                        when,
                        &self.source,
                        &raw,
                    );
                }
            }
        }
        for index in split.into_iter().rev() {
            let parts = self.blocks.remove(index).block.split();
            let planned = |block| Planned { block, held: None };
            self.blocks
                .splice(index..index, parts.into_iter().map(planned));
        }
        Ok(scan)
    }
}

impl Scan {
    /// Decodes an answer.
    fn take(
        &mut self,
        block: &Block,
        registers: &[u16],
        when: When,
        source: &SourceName,
        around: &Surroundings,
    ) {
        for member in &block.members {
            let range =
                usize::from(member.offset)..usize::from(member.offset + member.kind.registers());
            let own = registers.get(range).unwrap_or_default();
            match decode(member, own, when, around) {
                Ok(reading) => self.readings.push(reading),
                Err(refusal) => {
                    let words: Vec<String> = own.iter().map(|r| format!("{r:04X}")).collect();
                    let raw = words.join(" ");
                    let kept =
                        refusal.keep(source, Some(&member.channel), when.received, raw.as_bytes());
                    self.rejected.push(kept);
                }
            }
        }
    }

    /// Readings without a value for all channels of a block.
    fn lose(&mut self, block: &Block, when: When, device: DeviceStatus) {
        let gap = |m: &Member| missing(&m.channel, when, device);
        self.readings.extend(block.members.iter().map(gap));
    }

    /// The same refusal for all channels of a block.
    fn refuse(
        &mut self,
        block: &Block,
        refusal: Refusal,
        when: When,
        source: &SourceName,
        raw: &str,
    ) {
        for member in &block.members {
            let kept =
                refusal
                    .clone()
                    .keep(source, Some(&member.channel), when.received, raw.as_bytes());
            self.rejected.push(kept);
        }
    }
}

fn decode(
    member: &Member,
    registers: &[u16],
    when: When,
    around: &Surroundings,
) -> Result<Reading, Refusal> {
    let meaning = around.conversions.of(&member.channel)?;
    let raw = number(registers, member.kind, member.order)
        .ok_or_else(|| Refusal::new(RejectReason::Malformed, "the answer is too short"))?;
    reading(&member.channel, when, raw, meaning)
}

/// A request in words.
fn describe(block: &Block) -> String {
    let r = block.request;
    format!(
        "device {}, function {:02}, address {}, {} registers",
        r.unit,
        r.function(),
        r.address,
        r.count
    )
}

fn hex(bytes: &[u8]) -> String {
    let pairs: Vec<String> = bytes.iter().map(|b| format!("{b:02X}")).collect();
    pairs.join(" ")
}
