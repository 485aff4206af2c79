//! Frames of Modbus RTU. Pure.
//!
//! After the MODBUS over serial line guide V1.02 (Modbus Organization).

use super::codec::{FrameError, Reply, Request};
use crate::intake::crc;

/// Bytes of the checksum.
const CRC: usize = 2;

/// CRC-16 of the serial line guide: polynomial 0xA001 reflected, beginning with 0xFFFF. Sent low byte first.
#[must_use]
pub fn crc16(bytes: &[u8]) -> u16 {
    crc::crc16(0xFFFF, bytes)
}

/// The frame to send.
#[must_use]
pub fn frame(request: &Request) -> [u8; 8] {
    let unit = request.unit;
    let [function, a, b, c, d] = request.pdu();
    let [low, high] = crc16(&[unit, function, a, b, c, d]).to_le_bytes();
    [unit, function, a, b, c, d, low, high]
}

/// Length of the frame that answers `request` and begins with `head`; `None` while that cannot be told.
///
/// # Errors
/// It is not the beginning of an answer to this request.
pub fn reply_length(request: &Request, head: &[u8]) -> Result<Option<usize>, FrameError> {
    let body = request.reply_length(head)?;
    Ok(body.map(|length| length + CRC))
}

/// Reads a whole frame.
///
/// # Errors
/// It is not an answer to this request, or is damaged.
pub fn read_reply(request: &Request, frame: &[u8]) -> Result<Reply, FrameError> {
    let short = FrameError::Short(frame.len());
    let length = reply_length(request, frame)?.ok_or(short)?;
    if frame.len() > length {
        return Err(FrameError::Trailing(frame.len() - length));
    }
    if frame.len() < length {
        return Err(short);
    }
    let (body, crc) = frame.split_last_chunk::<CRC>().ok_or(short)?;
    let (found, due) = (u16::from_le_bytes(*crc), crc16(body));
    if found != due {
        return Err(FrameError::Checksum { found, due });
    }
    request.read_reply(body)
}

#[cfg(test)]
mod tests {
    use super::super::codec::Exception;
    use super::*;
    use crate::config::RegisterTable;
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
        assert_eq!(frame(&SPEC).to_vec(), hex("11 03 00 6B 00 03 76 87"));
        let reply = hex("11 03 06 AE 41 56 52 43 40 49 AD");
        let registers = vec![0xAE41, 0x5652, 0x4340];
        assert_eq!(read_reply(&SPEC, &reply), Ok(Reply::Registers(registers)));
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
        let read = |r: Request| read_reply(&r, &reply).unwrap_err();
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
            read_reply(&SPEC, &reply[..10]),
            Err(FrameError::Short(10))
        ));
        assert!(matches!(
            read_reply(&SPEC, &[&reply[..], &[0]].concat()),
            Err(FrameError::Trailing(1))
        ));
        let exception = read_reply(&Request { unit: 1, ..SPEC }, &hex("01 83 02 C0 F1"));
        assert_eq!(exception, Ok(Reply::Exception(Exception(2))));
    }

    proptest! {
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
            prop_assert_eq!(read_reply(&request, &frame), Ok(Reply::Registers(words)));
            let bit = flip.index(frame.len() * 8);
            frame[bit / 8] ^= 1 << (bit % 8);
            prop_assert!(read_reply(&request, &frame).is_err());
        }

        #[test]
        fn no_bytes_upset_the_reader(bytes in prop::collection::vec(any::<u8>(), 0..300), count in 1_u16..=125) {
            let request = Request { count, ..SPEC };
            let _ = reply_length(&request, &bytes);
            let _ = read_reply(&request, &bytes);
        }
    }
}
