//! Modbus sources, over a serial line and over TCP.

use std::time::Duration;

use super::super::section::Section;
use super::super::{
    ByteOrder, ModbusChannel, ModbusRtuSource, ModbusTcpSource, Parity, Register, RegisterNumber,
    RegisterTable, SourceConfig,
};
use super::serial::{Usual, serial};
use super::sources::{ChannelRead, KindRead, LONGEST_SCAN, channel, plain_id};
use crate::record::SourceName;

/// Serial line guide V1.02: even parity where nothing is agreed.
const USUAL: Usual = Usual {
    baud: 9600,
    data_bits: 8,
    parity: Parity::Even,
};

/// The protocol's own port.
const USUAL_PORT: u16 = 502;

/// When and how patiently the devices are asked.
struct Asking {
    every: Duration,
    timeout: Duration,
    retries: u32,
}

/// Reads a Modbus RTU source.
pub(super) fn rtu(section: &mut Section<'_>, source: &SourceName) -> KindRead {
    let (serial, port) = serial(section, USUAL);
    if serial.data_bits != 8 {
        section.report.place(
            &section.key_span("data_bits"),
            section.key("data_bits"),
            "Modbus RTU has 8 data bits",
            "leave the key out",
        );
    }
    let asking = asking(section, Duration::from_millis(500));
    let (channels, reads) = channels(section, source, 1..=247);
    let config = SourceConfig::ModbusRtu(ModbusRtuSource {
        serial,
        every: asking.every,
        timeout: asking.timeout,
        retries: asking.retries,
        channels,
    });
    (config, reads, port)
}

/// Reads a Modbus TCP source.
pub(super) fn tcp(section: &mut Section<'_>, source: &SourceName) -> KindRead {
    let host = section.must(
        "host",
        "host = \"192.168.10.20\", name or address of the device or gateway",
        |s, k| s.text(k),
    );
    if let Some(host) = &host
        && host
            .value
            .contains(|c: char| c.is_whitespace() || "/@".contains(c))
    {
        let what = "this is no name or address of a machine";
        section.wrong(
            "host",
            host,
            what,
            "such as \"192.168.10.20\"; the port goes under `port`",
        );
    }
    let port = section.whole_number::<u16>("port", 1, 65_535);
    // A gateway waits about a second for its own devices before it says that they do not answer.
    let asking = asking(section, Duration::from_secs(2));
    let (channels, reads) = channels(section, source, 0..=255);
    let config = SourceConfig::ModbusTcp(ModbusTcpSource {
        host: host.map(|h| h.value).unwrap_or_default(),
        port: port.map_or(USUAL_PORT, |p| p.value),
        every: asking.every,
        timeout: asking.timeout,
        retries: asking.retries,
        channels,
    });
    (config, reads, None)
}

/// Reads `every`, `timeout` and `retries`.
fn asking(section: &mut Section<'_>, timeout: Duration) -> Asking {
    let least = Duration::from_millis(10);
    let every = section.duration("every", least, LONGEST_SCAN);
    let stated = section.duration("timeout", least, Duration::from_secs(60));
    let retries = section.whole_number::<u32>("retries", 0, 10);
    Asking {
        every: every.map_or(Duration::from_secs(1), |e| e.value),
        timeout: stated.map_or(timeout, |t| t.value),
        retries: retries.map_or(1, |r| r.value),
    }
}

/// Reads the channels of devices with these addresses.
fn channels(
    section: &mut Section<'_>,
    source: &SourceName,
    units: std::ops::RangeInclusive<u8>,
) -> (Vec<ModbusChannel>, Vec<ChannelRead>) {
    let mut reads = Vec::new();
    let mut channels = Vec::new();
    for mut table in section.list("channel") {
        let read = channel(&mut table, source);
        plain_id(&table, &read);
        let (least, most) = (i64::from(*units.start()), i64::from(*units.end()));
        let unit_id = table.must(
            "unit_id",
            "unit_id = 1, the device's address on the line",
            |t, k| t.whole_number::<u8>(k, least, most),
        );
        let register = register(&mut table);
        table.close();
        if let (Some(unit_id), Some(register)) = (unit_id, register) {
            channels.push(ModbusChannel {
                id: read.settings.id.clone(),
                unit_id: unit_id.value,
                register,
            });
        }
        reads.push(read);
    }
    (channels, reads)
}

/// Reads `register`.
fn register(channel: &mut Section<'_>) -> Option<Register> {
    let example =
        "register = { table = \"holding\", address = 102, type = \"f32\", order = \"big\" }";
    let mut table = channel.must("register", example, |c, k| c.table(k))?;
    let tables = [
        ("holding", RegisterTable::Holding),
        ("input", RegisterTable::Input),
    ];
    let numbers = [
        ("u16", RegisterNumber::U16),
        ("i16", RegisterNumber::I16),
        ("u32", RegisterNumber::U32),
        ("i32", RegisterNumber::I32),
        ("u64", RegisterNumber::U64),
        ("i64", RegisterNumber::I64),
        ("f32", RegisterNumber::F32),
        ("f64", RegisterNumber::F64),
    ];
    let orders = [
        ("big", ByteOrder::Big),
        ("little", ByteOrder::Little),
        ("word-swapped", ByteOrder::WordSwapped),
        ("byte-swapped", ByteOrder::ByteSwapped),
    ];
    let which = table.must("table", "table = \"holding\" or \"input\"", |t, k| {
        t.word(k, &tables)
    });
    let address = table.must("address", "address = 102, counted from 0", |t, k| {
        t.whole_number::<u16>(k, 0, 65_535)
    });
    let number = table.must("type", "type = \"f32\"", |t, k| t.word(k, &numbers));
    let order = table.word("order", &orders);
    if let (Some(address), Some(number)) = (&address, number) {
        // A manual that counts from 40001 is the commonest slip.
        if address.value.checked_add(number.registers() - 1).is_none() {
            let what = "the number would reach beyond register 65535";
            table.wrong("address", address, what, "addresses count from 0");
        } else if (30_001..=49_999).contains(&address.value) {
            let text =
                "addresses here count from 0: a manual's 40103 is table \"holding\", address 102";
            table.report.note(&address.span, table.key("address"), text);
        }
    }
    table.close();
    Some(Register {
        table: which?,
        address: address?.value,
        number: number?,
        order: order.unwrap_or(ByteOrder::Big),
    })
}
