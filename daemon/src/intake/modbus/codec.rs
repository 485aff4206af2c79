//! Requests, answers and numbers of Modbus, as every kind of line carries them. Pure: bytes in, bytes or values out.
//!
//! After the MODBUS application protocol specification V1.1b3 (Modbus Organization). [`super::rtu`] and [`super::tcp`] put
//! frames round what is here.

use thiserror::Error;

use crate::config::{ByteOrder, RegisterNumber, RegisterTable};

/// Registers one request may ask for.
pub const MOST_REGISTERS: u16 = 125;

/// A request for neighbouring registers of one device.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub struct Request {
    /// Address of the device on the line.
    pub unit: u8,
    /// Which table.
    pub table: RegisterTable,
    /// First register, from 0.
    pub address: u16,
    /// How many, 1 to [`MOST_REGISTERS`].
    pub count: u16,
}

/// What a device answered.
#[derive(Debug, Clone, PartialEq, Eq)]
pub enum Reply {
    /// The registers asked for.
    Registers(Vec<u16>),
    /// It refuses.
    Exception(Exception),
}

/// Bytes that are not the answer to the request.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Error)]
pub enum FrameError {
    /// The checksum does not fit.
    #[error("checksum is {found:04X}, should be {due:04X}")]
    Checksum {
        /// As delivered.
        found: u16,
        /// As computed.
        due: u16,
    },
    /// The answer carries another number than the request: it belongs to an earlier one.
    #[error("answer to request {found}, request {due} was asked")]
    Transaction {
        /// As delivered.
        found: u16,
        /// As asked.
        due: u16,
    },
    /// Another device speaks.
    #[error("device {found} answered where device {due} was asked")]
    Unit {
        /// Who answered.
        found: u8,
        /// Who was asked.
        due: u8,
    },
    /// An answer to another kind of request.
    #[error("answer to function {found}, function {due} was asked")]
    Function {
        /// As delivered.
        found: u8,
        /// As asked.
        due: u8,
    },
    /// An answer of another length: late, from an earlier request.
    #[error("answer has {found} bytes of registers, {due} were asked")]
    Length {
        /// As delivered.
        found: u8,
        /// As asked.
        due: u8,
    },
    /// Bytes follow the answer.
    #[error("{0} bytes too many")]
    Trailing(usize),
    /// The frame is not complete.
    #[error("answer broke off after {0} bytes")]
    Short(usize),
}

impl Request {
    /// Function code.
    #[must_use]
    pub fn function(&self) -> u8 {
        match self.table {
            RegisterTable::Holding => 3,
            RegisterTable::Input => 4,
        }
    }

    /// What is asked, without address of the device, number or checksum.
    #[must_use]
    pub fn pdu(&self) -> [u8; 5] {
        let [a, b] = self.address.to_be_bytes();
        let [c, d] = self.count.to_be_bytes();
        [self.function(), a, b, c, d]
    }

    /// Bytes of registers in the answer; a request over the limit gives 250, which no answer of its own can have.
    #[must_use]
    pub fn payload(&self) -> u8 {
        u8::try_from(self.count.min(MOST_REGISTERS) * 2).unwrap_or(u8::MAX)
    }

    /// Length of the answer that begins with `head`: first the device, then the function; `None` while it cannot be told.
    ///
    /// # Errors
    /// It is not the beginning of an answer to this request.
    pub fn reply_length(&self, head: &[u8]) -> Result<Option<usize>, FrameError> {
        let function = self.function();
        match *head {
            [found, ..] if found != self.unit => Err(FrameError::Unit {
                found,
                due: self.unit,
            }),
            [_, found, ..] if found == function | 0x80 => Ok(Some(3)),
            [_, found, ..] if found != function => Err(FrameError::Function {
                found,
                due: function,
            }),
            [_, _, found, ..] if found != self.payload() => Err(FrameError::Length {
                found,
                due: self.payload(),
            }),
            [_, _, payload, ..] => Ok(Some(usize::from(payload) + 3)),
            _ => Ok(None),
        }
    }

    /// Reads a whole answer: device, function, and what follows.
    ///
    /// # Errors
    /// It is not an answer to this request.
    pub fn read_reply(&self, body: &[u8]) -> Result<Reply, FrameError> {
        let short = FrameError::Short(body.len());
        let length = self.reply_length(body)?.ok_or(short)?;
        if body.len() > length {
            return Err(FrameError::Trailing(body.len() - length));
        }
        if body.len() < length {
            return Err(short);
        }
        match *body {
            [_, _, code] => Ok(Reply::Exception(Exception(code))),
            [_, _, _, ref payload @ ..] => {
                let (pairs, _) = payload.as_chunks::<2>();
                let registers = pairs.iter().map(|pair| u16::from_be_bytes(*pair));
                Ok(Reply::Registers(registers.collect()))
            }
            _ => Err(short),
        }
    }
}

/// A device's refusal, by its code.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub struct Exception(pub u8);

/// What to do about a refusal.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum Remedy {
    /// The settings ask for what the device does not have: asking again does not help.
    Settings,
    /// The device is busy: ask again after a while.
    Later,
    /// The device says that it is broken.
    Device,
}

impl Exception {
    /// What to do about it.
    #[must_use]
    pub fn remedy(self) -> Remedy {
        match self.0 {
            1..=3 => Remedy::Settings,
            5 | 6 | 0x0A | 0x0B => Remedy::Later,
            _ => Remedy::Device,
        }
    }

    /// Whether a gateway says that the device behind it does not answer.
    #[must_use]
    pub fn unreachable(self) -> bool {
        matches!(self.0, 0x0A | 0x0B)
    }

    /// Its name in the specification.
    #[must_use]
    pub fn name(self) -> &'static str {
        match self.0 {
            1 => "illegal function",
            2 => "illegal data address",
            3 => "illegal data value",
            4 => "server device failure",
            5 => "acknowledge, not done yet",
            6 => "server device busy",
            8 => "memory parity error",
            0x0A => "gateway path unavailable",
            0x0B => "gateway target does not respond",
            _ => "unknown exception",
        }
    }
}

/// The number in `registers`, as many of them as [`RegisterNumber::registers`] says; `None` for any other count.
#[must_use]
pub fn number(registers: &[u16], kind: RegisterNumber, order: ByteOrder) -> Option<f64> {
    if registers.len() != usize::from(kind.registers()) {
        return None;
    }
    // Bytes most significant first, whatever the order on the line.
    let mut bytes = [0_u8; 8];
    let swapped = |r: u16| r.swap_bytes().to_be_bytes();
    let ordered: Vec<u8> = match order {
        ByteOrder::Big => registers.iter().flat_map(|r| r.to_be_bytes()).collect(),
        ByteOrder::WordSwapped => registers
            .iter()
            .rev()
            .flat_map(|r| r.to_be_bytes())
            .collect(),
        ByteOrder::ByteSwapped => registers.iter().flat_map(|&r| swapped(r)).collect(),
        ByteOrder::Little => registers.iter().rev().flat_map(|&r| swapped(r)).collect(),
    };
    bytes.iter_mut().zip(&ordered).for_each(|(b, o)| *b = *o);
    let [a, b, c, d, ..] = bytes;
    Some(match kind {
        RegisterNumber::U16 => f64::from(u16::from_be_bytes([a, b])),
        RegisterNumber::I16 => f64::from(i16::from_be_bytes([a, b])),
        RegisterNumber::U32 => f64::from(u32::from_be_bytes([a, b, c, d])),
        RegisterNumber::I32 => f64::from(i32::from_be_bytes([a, b, c, d])),
        RegisterNumber::F32 => f64::from(f32::from_be_bytes([a, b, c, d])),
        // Counts beyond 2^53 come out as the nearest number there is.
        RegisterNumber::U64 => u64::from_be_bytes(bytes) as f64,
        RegisterNumber::I64 => i64::from_be_bytes(bytes) as f64,
        RegisterNumber::F64 => f64::from_be_bytes(bytes),
    })
}

#[cfg(test)]
mod tests {
    use super::*;
    use proptest::prelude::*;

    /// Application protocol V1.1b3, section 7: what is wrong with the request is not asked again, what passes is.
    #[test]
    fn exceptions_are_mapped_to_what_helps() {
        let remedy = |code| Exception(code).remedy();
        for settings in [1, 2, 3] {
            assert_eq!(remedy(settings), Remedy::Settings);
        }
        for later in [5, 6, 0x0A, 0x0B] {
            assert_eq!(remedy(later), Remedy::Later);
        }
        for device in [4, 8, 7, 200] {
            assert_eq!(remedy(device), Remedy::Device);
        }
        assert!(Exception(0x0B).unreachable() && !Exception(6).unreachable());
    }

    /// 123.456 as IEEE 754 single precision is 42 F6 E9 79; the four orders computed.
    #[test]
    fn floats_are_read_in_all_four_orders() {
        for (order, registers) in [
            (ByteOrder::Big, [0x42F6, 0xE979]),
            (ByteOrder::WordSwapped, [0xE979, 0x42F6]),
            (ByteOrder::ByteSwapped, [0xF642, 0x79E9]),
            (ByteOrder::Little, [0x79E9, 0xF642]),
        ] {
            let read = number(&registers, RegisterNumber::F32, order).unwrap();
            assert_eq!(read, f64::from(123.456_f32), "{order:?}");
        }
        assert_eq!(number(&[1], RegisterNumber::F32, ByteOrder::Big), None);
        assert_eq!(
            number(&[0xFFFE], RegisterNumber::I16, ByteOrder::Big),
            Some(-2.0)
        );
        assert_eq!(
            number(&[0xFEFF], RegisterNumber::I16, ByteOrder::Little),
            Some(-2.0)
        );
        assert_eq!(
            number(&[0xFFFF, 0xFFFE], RegisterNumber::I32, ByteOrder::Big),
            Some(-2.0)
        );
    }

    /// The registers a device would send for these bytes, most significant first.
    fn registers(bytes: &[u8], order: ByteOrder) -> Vec<u16> {
        let words = bytes.chunks(2).map(|c| u16::from_be_bytes([c[0], c[1]]));
        match order {
            ByteOrder::Big => words.collect(),
            ByteOrder::WordSwapped => words.rev().collect(),
            ByteOrder::ByteSwapped => words.map(u16::swap_bytes).collect(),
            ByteOrder::Little => words.rev().map(u16::swap_bytes).collect(),
        }
    }

    fn any_order() -> impl Strategy<Value = ByteOrder> {
        prop::sample::select(vec![
            ByteOrder::Big,
            ByteOrder::Little,
            ByteOrder::WordSwapped,
            ByteOrder::ByteSwapped,
        ])
    }

    proptest! {
        #[test]
        fn numbers_come_back(order in any_order(), int in any::<i32>(), float in -1e30_f64..1e30) {
            let words = registers(&int.to_be_bytes(), order);
            prop_assert_eq!(number(&words, RegisterNumber::I32, order), Some(f64::from(int)));
            let words = registers(&float.to_be_bytes(), order);
            prop_assert_eq!(number(&words, RegisterNumber::F64, order), Some(float));
        }
    }
}
