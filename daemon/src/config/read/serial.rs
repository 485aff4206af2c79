//! Sources on a serial line: text lines and Modbus RTU.

use std::path::PathBuf;
use std::time::Duration;

use super::super::section::{At, Section};
use super::super::{
    ByteOrder, Checksum, ModbusChannel, ModbusRtuSource, Parity, Register, RegisterNumber,
    RegisterTable, Separator, SerialSettings, SourceConfig, TextChannel, TextLineSource,
};
use super::sources::{KindRead, LONGEST_SCAN, channel, plain_id};
use crate::record::SourceName;

/// Speed where none is stated.
const USUAL_BAUD: u32 = 9600;
/// Longest line of text read where the site file states none \[bytes\].
const USUAL_LINE: usize = 1024;
/// Most fields a line of text may have.
const MOST_FIELDS: i64 = 1000;

/// Reads the keys of a serial device. Parity is even where a Modbus line states none, as its standard has it.
fn serial(section: &mut Section<'_>, usual: Parity) -> (SerialSettings, Option<At<String>>) {
    let port = section.must("port", "port = \"/dev/serial/by-id/…\"", |s, k| s.text(k));
    let baud = section.whole_number::<u32>("baud", 50, 4_000_000);
    let parities = [
        ("none", Parity::None),
        ("even", Parity::Even),
        ("odd", Parity::Odd),
    ];
    let parity = section.word("parity", &parities);
    let data_bits = section.whole_number::<u8>("data_bits", 7, 8);
    let stop_bits = section.whole_number::<u8>("stop_bits", 1, 2);
    let settings = SerialSettings {
        port: port
            .as_ref()
            .map(|p| PathBuf::from(&p.value))
            .unwrap_or_default(),
        baud: baud.map_or(USUAL_BAUD, |b| b.value),
        data_bits: data_bits.map_or(8, |b| b.value),
        parity: parity.unwrap_or(usual),
        stop_bits: stop_bits.map_or(1, |b| b.value),
    };
    (settings, port)
}

/// Reads a text-line source.
pub(super) fn text_line(section: &mut Section<'_>, source: &SourceName) -> KindRead {
    let (serial, port) = serial(section, Parity::None);
    let separator = separator(section);
    let time_field = field(section, "time_field");
    let checksums = [("none", Checksum::None), ("xor", Checksum::Xor)];
    let checksum = section.word("checksum", &checksums);
    let max_line = section.whole_number::<usize>("max_line", 16, 65_536);
    let mut reads = Vec::new();
    let mut channels = Vec::new();
    for mut table in section.list("channel") {
        let read = channel(&mut table, source);
        plain_id(&table, &read);
        let field = field(&mut table, "field");
        let prefix = table.text("prefix").map(|p| p.value);
        if field.is_none() && prefix.is_none() && !table.has("field") && !table.has("prefix") {
            table.report.missing(
                &table.span,
                table.whole(),
                "it is not said where in the line its number stands",
                "add field = 2, counted from 1, or prefix = \"P1=\"",
            );
        }
        if field.is_some() && field == time_field {
            table.report.place(
                &table.key_span("field"),
                table.key("field"),
                "this field holds the time",
                "count fields from 1 and give each number its own",
            );
        }
        table.close();
        channels.push(TextChannel {
            id: read.settings.id.clone(),
            field,
            prefix,
        });
        reads.push(read);
    }
    let config = SourceConfig::TextLine(TextLineSource {
        serial,
        separator,
        time_field,
        checksum: checksum.unwrap_or(Checksum::None),
        max_line: max_line.map_or(USUAL_LINE, |m| m.value),
        channels,
    });
    (config, reads, port)
}

/// Reads the number of a field, from 1.
fn field(section: &mut Section<'_>, key: &'static str) -> Option<usize> {
    section
        .whole_number::<usize>(key, 1, MOST_FIELDS)
        .map(|f| f.value)
}

/// Reads `separator`: a character, "tab", or "blank".
fn separator(section: &mut Section<'_>) -> Separator {
    if !section.has("separator") {
        section.take("separator");
        return Separator::CommaOrBlank;
    }
    let Some(text) = section.text("separator") else {
        return Separator::CommaOrBlank;
    };
    let mut chars = text.value.chars();
    match (text.value.as_str(), chars.next(), chars.next()) {
        ("tab", _, _) => Separator::Char('\t'),
        ("blank", _, _) => Separator::Blank,
        (_, Some(c), None) if !c.is_alphanumeric() && !"+-.*".contains(c) => Separator::Char(c),
        _ => {
            let what = "one character that stands in no number, \"tab\" or \"blank\" is due";
            section.wrong(
                "separator",
                &text,
                what,
                "such as \";\"; without it commas or blanks separate",
            );
            Separator::CommaOrBlank
        }
    }
}

/// Reads a Modbus RTU source.
pub(super) fn modbus(section: &mut Section<'_>, source: &SourceName) -> KindRead {
    let (serial, port) = serial(section, Parity::Even);
    if serial.data_bits != 8 {
        section.report.place(
            &section.key_span("data_bits"),
            section.key("data_bits"),
            "Modbus RTU has 8 data bits",
            "leave the key out",
        );
    }
    let least = Duration::from_millis(10);
    let every = section.duration("every", least, LONGEST_SCAN);
    let timeout = section.duration("timeout", least, Duration::from_secs(60));
    let retries = section.whole_number::<u32>("retries", 0, 10);
    let mut reads = Vec::new();
    let mut channels = Vec::new();
    for mut table in section.list("channel") {
        let read = channel(&mut table, source);
        plain_id(&table, &read);
        let unit_id = table.must(
            "unit_id",
            "unit_id = 1, the device's address on the line",
            |t, k| t.whole_number::<u8>(k, 1, 247),
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
    let config = SourceConfig::ModbusRtu(ModbusRtuSource {
        serial,
        every: every.map_or(Duration::from_secs(1), |e| e.value),
        timeout: timeout.map_or(Duration::from_millis(500), |t| t.value),
        retries: retries.map_or(1, |r| r.value),
        channels,
    });
    (config, reads, port)
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
