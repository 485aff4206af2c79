//! The checksum that Modbus RTU and SDI-12 share.

/// CRC-16 with the polynomial 0xA001, reflected. Modbus begins with 0xFFFF, SDI-12 with 0.
#[must_use]
pub(crate) fn crc16(beginning: u16, bytes: &[u8]) -> u16 {
    bytes.iter().fold(beginning, |crc, &byte| {
        (0..8).fold(crc ^ u16::from(byte), |crc, _| {
            if crc & 1 == 1 {
                crc >> 1 ^ 0xA001
            } else {
                crc >> 1
            }
        })
    })
}
