//! Frames of Modbus TCP. Pure.
//!
//! After "MODBUS messaging on TCP/IP implementation guide" V1.0b (Modbus Organization).

use thiserror::Error;

use super::codec::Request;

/// Bytes before the device's address: number of the request, protocol, length of what follows.
const HEADER: usize = 6;

/// A frame as it came.
#[derive(Debug, Clone, PartialEq, Eq)]
pub struct Frame {
    /// Number of the request it answers.
    pub transaction: u16,
    /// Device, function, and what follows: what [`Request::read_reply`] reads.
    pub body: Vec<u8>,
}

/// The peer speaks something else, or the stream has lost its frames: there is no way back into it.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Error)]
#[error("what came is no Modbus TCP (protocol {protocol}, length {length})")]
pub struct NotModbus {
    /// Must be 0.
    pub protocol: u16,
    /// Must be 3 to 254.
    pub length: u16,
}

/// The frame to send.
#[must_use]
pub fn frame(transaction: u16, request: &Request) -> [u8; 12] {
    let [t, u] = transaction.to_be_bytes();
    let [function, a, b, c, d] = request.pdu();
    [t, u, 0, 0, 0, 6, request.unit, function, a, b, c, d]
}

/// Takes the first frame off what has come; `None` while it is not complete.
///
/// # Errors
/// It is no frame.
pub fn next_frame(buffer: &mut Vec<u8>) -> Result<Option<Frame>, NotModbus> {
    let Some(&[t, u, p, q, l, m]) = buffer.first_chunk::<HEADER>() else {
        return Ok(None);
    };
    let protocol = u16::from_be_bytes([p, q]);
    let length = u16::from_be_bytes([l, m]);
    if protocol != 0 || !(3..=254).contains(&length) {
        return Err(NotModbus { protocol, length });
    }
    let end = HEADER + usize::from(length);
    let Some(body) = buffer.get(HEADER..end).map(<[u8]>::to_vec) else {
        return Ok(None);
    };
    buffer.drain(..end);
    Ok(Some(Frame {
        transaction: u16::from_be_bytes([t, u]),
        body,
    }))
}

#[cfg(test)]
mod tests {
    use super::super::codec::Reply;
    use super::*;
    use crate::config::RegisterTable;
    use proptest::prelude::*;

    const REQUEST: Request = Request {
        unit: 0x11,
        table: RegisterTable::Holding,
        address: 0x6B,
        count: 3,
    };

    /// The registers of the application protocol specification's example (section 6.3) in the frame of the TCP guide.
    #[test]
    fn the_specifications_example_is_asked_and_read() {
        let sent = [0x15, 0x01, 0, 0, 0, 6, 0x11, 3, 0, 0x6B, 0, 3];
        assert_eq!(frame(0x1501, &REQUEST), sent);
        let mut came = vec![
            0x15, 0x01, 0, 0, 0, 9, 0x11, 3, 6, 0xAE, 0x41, 0x56, 0x52, 0x43,
        ];
        assert_eq!(
            next_frame(&mut came),
            Ok(None),
            "the last byte is still to come"
        );
        came.extend([0x40, 0x15]);
        let answer = next_frame(&mut came).unwrap().unwrap();
        assert_eq!(answer.transaction, 0x1501);
        let registers = vec![0xAE41, 0x5652, 0x4340];
        assert_eq!(
            REQUEST.read_reply(&answer.body),
            Ok(Reply::Registers(registers))
        );
        assert_eq!(came, [0x15], "the next frame's beginning stays");
    }

    #[test]
    fn another_protocol_is_told() {
        let mut http = b"HTTP/1.1 400".to_vec();
        assert!(next_frame(&mut http).is_err());
        let mut long = vec![0, 1, 0, 0, 1, 0, 1];
        assert!(next_frame(&mut long).is_err());
    }

    proptest! {
        #[test]
        fn frames_come_out_as_they_went_in(
            bodies in prop::collection::vec((any::<u16>(), prop::collection::vec(any::<u8>(), 3..254)), 0..6),
            cuts in prop::collection::vec(1_usize..40, 1..8),
        ) {
            let mut stream = Vec::new();
            for (transaction, body) in &bodies {
                stream.extend(transaction.to_be_bytes());
                stream.extend([0, 0]);
                stream.extend(u16::try_from(body.len()).unwrap().to_be_bytes());
                stream.extend(body);
            }
            let mut buffer = Vec::new();
            let mut found = Vec::new();
            let mut cuts = cuts.iter().cycle();
            while !stream.is_empty() {
                let cut = (*cuts.next().unwrap()).min(stream.len());
                buffer.extend(stream.drain(..cut));
                while let Some(frame) = next_frame(&mut buffer).unwrap() {
                    found.push((frame.transaction, frame.body));
                }
            }
            prop_assert_eq!(found, bodies);
        }

        #[test]
        fn no_bytes_upset_the_reader(mut bytes in prop::collection::vec(any::<u8>(), 0..600)) {
            while let Ok(Some(frame)) = next_frame(&mut bytes) {
                let _ = REQUEST.read_reply(&frame.body);
            }
        }
    }
}
