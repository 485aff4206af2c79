//! One round of all devices of a line.

use std::collections::BTreeMap;
use std::io;
use std::time::Duration;

use tokio::time::Instant;

use super::codec::{Exception, FrameError, Remedy, number};
use super::master::{Line, Master, ReadError};
use super::plan::{Block, Member, plan};
use crate::config::ModbusChannel;
use crate::intake::Surroundings;
use crate::intake::absence::Absence;
use crate::intake::decode::{Refusal, When, reading};
use crate::intake::poll::{Round, Scan};
use crate::record::{ChannelId, DeviceStatus, Reading, RejectReason, SourceName};

/// Asks all devices, and remembers which of them are not worth asking for a while.
pub(crate) struct Scanner {
    source: SourceName,
    blocks: Vec<Planned>,
    units: BTreeMap<u8, Absence>,
}

/// A block, and until when it is not asked for.
struct Planned {
    block: Block,
    held: Option<Instant>,
}

impl Scanner {
    /// A block whose settings the device refuses is asked for again after this long, in case the device was mended.
    const REFUSED: Duration = Duration::from_secs(600);

    pub(crate) fn new(channels: &[ModbusChannel], source: SourceName) -> Self {
        let planned = |block| Planned { block, held: None };
        Self {
            source,
            blocks: plan(channels).into_iter().map(planned).collect(),
            units: BTreeMap::new(),
        }
    }

    /// Rounds through this master.
    pub(crate) fn over<L>(&mut self, master: Master<L>) -> Over<'_, L> {
        Over {
            scanner: self,
            master,
        }
    }

    /// What an answer, or the want of one, means for a block's channels. True where the block must be taken apart: which
    /// of several channels is at fault is found out by asking for each alone.
    fn settle(
        &mut self,
        index: usize,
        answer: Result<Vec<u16>, ReadError>,
        scan: &mut Scan,
        around: &Surroundings,
    ) -> io::Result<bool> {
        let when = When::arrival(around.clock.read());
        let Some(planned) = self.blocks.get_mut(index) else {
            return Ok(false);
        };
        let block = &planned.block;
        let unit = self.units.entry(block.request.unit).or_default();
        let silent = matches!(answer, Err(ReadError::Silent { .. }));
        if is_absent(&answer) {
            unit.missed();
        } else {
            unit.answered();
        }
        scan.answered |= !silent;
        match answer {
            Ok(registers) => take(scan, block, &registers, when, &self.source, around),
            Err(ReadError::Gone(error)) => return Err(error),
            Err(ReadError::Silent { unit: address }) => {
                scan.lose(block.channels(), when, DeviceStatus::Normal);
                scan.trouble = Some(format!("device {address} does not answer"));
            }
            Err(ReadError::Garbled { why, raw }) => {
                scan.lose(block.channels(), when, DeviceStatus::Normal);
                let reason = match why {
                    FrameError::Checksum { .. } => RejectReason::Checksum,
                    _ => RejectReason::Malformed,
                };
                let refusal = Refusal::new(reason, format!("{}: {why}", describe(block)));
                let raw = hex(&raw);
                scan.refuse(
                    block.channels(),
                    &refusal,
                    when,
                    &self.source,
                    raw.as_bytes(),
                );
            }
            Err(ReadError::Exception(exception)) => {
                let remedy = exception.remedy();
                let device = match remedy {
                    Remedy::Device => DeviceStatus::Failure,
                    Remedy::Settings | Remedy::Later => DeviceStatus::Normal,
                };
                scan.lose(block.channels(), when, device);
                if remedy == Remedy::Settings && block.members.len() > 1 {
                    return Ok(true);
                }
                let refusal = refused(block, exception);
                let raw = format!("exception {:02X}", exception.0);
                scan.refuse(
                    block.channels(),
                    &refusal,
                    when,
                    &self.source,
                    raw.as_bytes(),
                );
                if remedy == Remedy::Settings {
                    planned.held = Some(Instant::now() + Self::REFUSED);
                }
            }
        }
        Ok(false)
    }

    /// Whether a block is left alone for now.
    fn held(&self, planned: &Planned) -> bool {
        let unit = self.units.get(&planned.block.request.unit);
        planned.held.is_some_and(|until| until > Instant::now())
            || unit.is_some_and(Absence::is_held)
    }
}

/// Rounds of all devices through one master.
pub(crate) struct Over<'s, L> {
    scanner: &'s mut Scanner,
    master: Master<L>,
}

impl<L: Line> Round for Over<'_, L> {
    async fn round(&mut self, around: &Surroundings) -> io::Result<Scan> {
        let scanner = &mut *self.scanner;
        let mut scan = Scan::default();
        let mut silent_now = Vec::new();
        let mut split = Vec::new();
        for index in 0..scanner.blocks.len() {
            let Some(planned) = scanner.blocks.get(index).filter(|p| !scanner.held(p)) else {
                continue;
            };
            let request = planned.block.request;
            if silent_now.contains(&request.unit) {
                let when = When::arrival(around.clock.read());
                scan.lose(planned.block.channels(), when, DeviceStatus::Normal);
                continue;
            }
            let answer = self.master.read(&request).await;
            if is_absent(&answer) {
                silent_now.push(request.unit);
            }
            if scanner.settle(index, answer, &mut scan, around)? {
                split.push(index);
            }
        }
        for index in split.into_iter().rev() {
            let parts = scanner.blocks.remove(index).block.split();
            let planned = |block| Planned { block, held: None };
            scanner
                .blocks
                .splice(index..index, parts.into_iter().map(planned));
        }
        Ok(scan)
    }
}

impl Block {
    /// Its channels.
    fn channels(&self) -> impl Iterator<Item = &ChannelId> {
        self.members.iter().map(|m| &m.channel)
    }
}

/// Whether the device does not answer, or a gateway says so of it.
fn is_absent(answer: &Result<Vec<u16>, ReadError>) -> bool {
    match answer {
        Err(ReadError::Silent { .. }) => true,
        Err(ReadError::Exception(exception)) => exception.unreachable(),
        _ => false,
    }
}

/// Decodes an answer.
fn take(
    scan: &mut Scan,
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
            Ok(reading) => scan.readings.push(reading),
            Err(refusal) => {
                let words: Vec<String> = own.iter().map(|r| format!("{r:04X}")).collect();
                let raw = words.join(" ");
                scan.refuse([&member.channel], &refusal, when, source, raw.as_bytes());
            }
        }
    }
}

/// A device's refusal in words, with what can be mended.
fn refused(block: &Block, exception: Exception) -> Refusal {
    let mend = match exception.remedy() {
        Remedy::Settings => "; mend unit_id, table, address or type in the site file",
        Remedy::Later | Remedy::Device => "",
    };
    let detail = format!(
        "{}: exception {:02X}, {}{mend}",
        describe(block),
        exception.0,
        exception.name(),
    );
    Refusal::new(RejectReason::DeviceError, detail)
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
