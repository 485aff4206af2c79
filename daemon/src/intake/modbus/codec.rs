//! Frames and numbers of Modbus RTU. Pure: bytes in, bytes or values out.
//!
//! After the MODBUS application protocol specification V1.1b3 and the MODBUS over serial line guide V1.02 (Modbus Organization).

use thiserror::Error;

use crate::config::{ByteOrder, RegisterNumber, RegisterTable};

/// Registers one request may ask for.
pub const MOST_REGISTERS: u16 = 125;

/// CRC-16 of the serial line guide: polynomial 0xA001 reflected, beginning with 0xFFFF. Sent low byte first.
#[must_use]
pub fn crc16(bytes: &[u8]) -> u16 {
    bytes.iter().fold(0xFFFF, |crc, &byte| {
        (0..8).fold(crc ^ u16::from(byte), |crc, _| {
            if crc & 1 == 1 {
                crc >> 1 ^ 0xA001
            } else {
                crc >> 1
            }
        })
    })
}

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

    /// The frame to send.
    #[must_use]
    pub fn frame(&self) -> [u8; 8] {
        let [a, b] = self.address.to_be_bytes();
        let [c, d] = self.count.to_be_bytes();
        let (unit, function) = (self.unit, self.function());
        let [low, high] = crc16(&[unit, function, a, b, c, d]).to_le_bytes();
        [unit, function, a, b, c, d, low, high]
    }

    /// Bytes of registers in the answer; a request over the limit gives 250, which no answer of its own can have.
    #[must_use]
    pub fn payload(&self) -> u8 {
        u8::try_from(self.count.min(MOST_REGISTERS) * 2).unwrap_or(u8::MAX)
    }

    /// Length of the answer that begins with `head`; `None` while that cannot be told.
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
            [_, found, ..] if found == function | 0x80 => Ok(Some(5)),
            [_, found, ..] if found != function => Err(FrameError::Function {
                found,
                due: function,
            }),
            [_, _, found, ..] if found != self.payload() => Err(FrameError::Length {
                found,
                due: self.payload(),
            }),
            [_, _, payload, ..] => Ok(Some(usize::from(payload) + 5)),
            _ => Ok(None),
        }
    }

    /// Reads a whole answer.
    ///
    /// # Errors
    /// It is not an answer to this request, or is damaged.
    pub fn read_reply(&self, frame: &[u8]) -> Result<Reply, FrameError> {
        let short = FrameError::Short(frame.len());
        let length = self.reply_length(frame)?.ok_or(short)?;
        if frame.len() > length {
            return Err(FrameError::Trailing(frame.len() - length));
        }
        if frame.len() < length {
            return Err(short);
        }
        let (body, crc) = frame.split_last_chunk::<2>().ok_or(short)?;
        let (found, due) = (u16::from_le_bytes(*crc), crc16(body));
        if found != due {
            return Err(FrameError::Checksum { found, due });
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
        RegisterNumber::F64 => f64::from_be_bytes(bytes),
    })
}

#[cfg(test)]
mod tests {
    use super::*;
    use proptest::prelude::*;

    fn hex(text: &str) -> Vec<u8> {
        text.split(' ')
            .map(|b| u8::from_str_radix(b, 16).unwrap())
            .collect()
    }

    /// Serial line guide V1.02 and application protocol V1.1b3: the example 11 03 00 6B 00 03; the check value of
    /// CRC-16/MODBUS over "123456789"; the rest computed with the same polynomial.
    #[test]
    fn checksums_fit_the_published_frames() {
        assert_eq!(crc16(b"123456789"), 0x4B37);
        for (frame, crc) in [
            ("11 03 00 6B 00 03", "76 87"),
            ("11 03 06 AE 41 56 52 43 40", "49 AD"),
            ("01 03 00 00 00 0A", "C5 CD"),
            ("01 04 00 00 00 02", "71 CB"),
            ("01 83 02", "C0 F1"),
            ("11 05 00 AC FF 00", "4E 8B"),
            ("11 06 00 01 00 03", "9A 9B"),
            ("11 10 00 01 00 02 04 00 0A 01 02", "C6 F0"),
        ] {
            let mut bytes = hex(frame);
            assert_eq!(crc16(&bytes).to_le_bytes().to_vec(), hex(crc), "{frame}");
            bytes.extend(hex(crc));
            assert_eq!(crc16(&bytes), 0, "over its own checksum: {frame}");
        }
    }

    const SPEC: Request = Request {
        unit: 0x11,
        table: RegisterTable::Holding,
        address: 0x6B,
        count: 3,
    };

    /// The example of the application protocol specification, section 6.3.
    #[test]
    fn the_specifications_example_is_asked_and_read() {
        assert_eq!(SPEC.frame().to_vec(), hex("11 03 00 6B 00 03 76 87"));
        let reply = hex("11 03 06 AE 41 56 52 43 40 49 AD");
        let registers = vec![0xAE41, 0x5652, 0x4340];
        assert_eq!(SPEC.read_reply(&reply), Ok(Reply::Registers(registers)));
    }

    #[test]
    fn what_is_no_answer_is_told_apart() {
        let reply = hex("11 03 06 AE 41 56 52 43 40 49 AD");
        let other = |unit, table, count| Request {
            unit,
            table,
            count,
            ..SPEC
        };
        let read = |r: Request| r.read_reply(&reply).unwrap_err();
        assert!(matches!(
            read(other(1, RegisterTable::Holding, 3)),
            FrameError::Unit { .. }
        ));
        assert!(matches!(
            read(other(0x11, RegisterTable::Input, 3)),
            FrameError::Function { .. }
        ));
        assert!(matches!(
            read(other(0x11, RegisterTable::Holding, 2)),
            FrameError::Length { .. }
        ));
        assert!(matches!(
            SPEC.read_reply(&reply[..10]),
            Err(FrameError::Short(10))
        ));
        assert!(matches!(
            SPEC.read_reply(&[&reply[..], &[0]].concat()),
            Err(FrameError::Trailing(1))
        ));
        let exception = Request { unit: 1, ..SPEC }.read_reply(&hex("01 83 02 C0 F1"));
        assert_eq!(exception, Ok(Reply::Exception(Exception(2))));
        assert_eq!(Exception(2).remedy(), Remedy::Settings);
        assert_eq!(Exception(6).remedy(), Remedy::Later);
        assert_eq!(Exception(4).remedy(), Remedy::Device);
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

        #[test]
        fn registers_come_back_and_any_flipped_bit_is_seen(
            words in prop::collection::vec(any::<u16>(), 1..=125),
            flip in any::<prop::sample::Index>(),
        ) {
            let count = u16::try_from(words.len()).unwrap();
            let request = Request { unit: 9, table: RegisterTable::Input, address: 0, count };
            let mut frame = vec![9, 4, request.payload()];
            frame.extend(words.iter().flat_map(|w| w.to_be_bytes()));
            frame.extend(crc16(&frame).to_le_bytes());
            prop_assert_eq!(request.read_reply(&frame), Ok(Reply::Registers(words)));
            let bit = flip.index(frame.len() * 8);
            frame[bit / 8] ^= 1 << (bit % 8);
            prop_assert!(request.read_reply(&frame).is_err());
        }

        #[test]
        fn no_bytes_upset_the_reader(bytes in prop::collection::vec(any::<u8>(), 0..300), count in 1_u16..=125) {
            let request = Request { count, ..SPEC };
            let _ = request.reply_length(&bytes);
            let _ = request.read_reply(&bytes);
        }
    }
}
