//! Which registers are asked for together.

use super::codec::{MOST_REGISTERS, Request};
use crate::config::{ByteOrder, ModbusChannel, RegisterNumber};
use crate::record::ChannelId;

/// One request and the channels whose numbers its answer holds.
#[derive(Debug, Clone, PartialEq, Eq)]
pub(crate) struct Block {
    pub(crate) request: Request,
    pub(crate) members: Vec<Member>,
}

/// A channel within an answer.
#[derive(Debug, Clone, PartialEq, Eq)]
pub(crate) struct Member {
    pub(crate) channel: ChannelId,
    /// Registers of the answer before its own.
    pub(crate) offset: u16,
    pub(crate) kind: RegisterNumber,
    pub(crate) order: ByteOrder,
}

/// Blocks for these channels: registers of one device and table that touch or overlap are asked for together, as they then
/// belong to one instant and one exchange. A register that no channel uses is never asked for: it may not exist.
pub(crate) fn plan(channels: &[ModbusChannel]) -> Vec<Block> {
    let mut sorted: Vec<&ModbusChannel> = channels.iter().collect();
    sorted.sort_by_key(|c| (c.unit_id, c.register.table, c.register.address));
    let mut blocks: Vec<Block> = Vec::new();
    for channel in sorted {
        let alone = single(channel);
        match blocks.last_mut() {
            Some(block) if joins(block.request, alone.request) => {
                let offset = alone.request.address - block.request.address;
                let end = offset + alone.request.count;
                block.request.count = block.request.count.max(end);
                let moved = |m| Member { offset, ..m };
                block.members.extend(alone.members.into_iter().map(moved));
            }
            _ => blocks.push(alone),
        }
    }
    blocks
}

/// Whether `next`, which does not begin before `block`, touches it and fits into one request with it.
fn joins(block: Request, next: Request) -> bool {
    let begin = |r: Request| u32::from(r.address);
    let end = |r: Request| begin(r) + u32::from(r.count);
    (block.unit, block.table) == (next.unit, next.table)
        && begin(next) <= end(block)
        && end(next) - begin(block) <= u32::from(MOST_REGISTERS)
}

/// A block of one channel.
fn single(channel: &ModbusChannel) -> Block {
    let register = channel.register;
    Block {
        request: Request {
            unit: channel.unit_id,
            table: register.table,
            address: register.address,
            count: register.number.registers(),
        },
        members: vec![Member {
            channel: channel.id.clone(),
            offset: 0,
            kind: register.number,
            order: register.order,
        }],
    }
}

impl Block {
    /// A block for each member, so that one register the device does not have costs its own channel only.
    pub(crate) fn split(&self) -> Vec<Self> {
        let alone = |member: &Member| Self {
            request: Request {
                address: self.request.address.saturating_add(member.offset),
                count: member.kind.registers(),
                ..self.request
            },
            members: vec![Member {
                offset: 0,
                ..member.clone()
            }],
        };
        self.members.iter().map(alone).collect()
    }
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::config::{Register, RegisterTable};

    fn channel(id: &str, unit_id: u8, address: u16, number: RegisterNumber) -> ModbusChannel {
        ModbusChannel {
            id: id.into(),
            unit_id,
            register: Register {
                table: RegisterTable::Holding,
                address,
                number,
                order: ByteOrder::Big,
            },
        }
    }

    fn shape(blocks: &[Block]) -> Vec<(u8, u16, u16, usize)> {
        let one = |b: &Block| {
            (
                b.request.unit,
                b.request.address,
                b.request.count,
                b.members.len(),
            )
        };
        blocks.iter().map(one).collect()
    }

    #[test]
    fn neighbours_are_joined_and_strangers_are_not() {
        let blocks = plan(&[
            channel("c", 3, 104, RegisterNumber::U16),
            channel("a", 3, 100, RegisterNumber::F32),
            channel("b", 3, 102, RegisterNumber::F32),
            channel("gap", 3, 106, RegisterNumber::U16),
            channel("other", 4, 105, RegisterNumber::U16),
            channel("twice", 3, 100, RegisterNumber::U16),
        ]);
        assert_eq!(
            shape(&blocks),
            [(3, 100, 5, 4), (3, 106, 1, 1), (4, 105, 1, 1)]
        );
        let offsets: Vec<_> = blocks[0]
            .members
            .iter()
            .map(|m| (&*m.channel.0, m.offset))
            .collect();
        assert_eq!(offsets, [("a", 0), ("twice", 0), ("b", 2), ("c", 4)]);
        assert_eq!(
            shape(&blocks[0].split()),
            [
                (3, 100, 2, 1),
                (3, 100, 1, 1),
                (3, 102, 2, 1),
                (3, 104, 1, 1)
            ]
        );
    }

    #[test]
    fn no_request_is_longer_than_the_protocol_allows() {
        let many: Vec<_> = (0..80)
            .map(|i| channel("x", 1, 65_376 + 2 * i, RegisterNumber::F32))
            .collect();
        let blocks = plan(&many);
        assert_eq!(shape(&blocks), [(1, 65_376, 124, 62), (1, 65_500, 36, 18)]);
    }
}
