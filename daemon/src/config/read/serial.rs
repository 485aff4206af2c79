//! Serial devices, and lines of text over them.

use std::path::PathBuf;

use super::super::section::{At, Section};
use super::super::{
    Checksum, Parity, Separator, SerialSettings, SourceConfig, TextChannel, TextLineSource,
};
use super::sources::{KindRead, channel, plain_id};
use crate::record::SourceName;

/// Longest line of text read where the site file states none \[bytes\].
const USUAL_LINE: usize = 1024;
/// Most fields a line of text may have.
const MOST_FIELDS: i64 = 1000;

/// What stands where the site file states nothing.
#[derive(Debug, Clone, Copy)]
pub(super) struct Usual {
    pub(super) baud: u32,
    pub(super) data_bits: u8,
    pub(super) parity: Parity,
}

impl Usual {
    /// Of text lines.
    const TEXT: Self = Self {
        baud: 9600,
        data_bits: 8,
        parity: Parity::None,
    };
}

/// Reads the keys of a serial device.
pub(super) fn serial(
    section: &mut Section<'_>,
    usual: Usual,
) -> (SerialSettings, Option<At<String>>) {
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
        baud: baud.map_or(usual.baud, |b| b.value),
        data_bits: data_bits.map_or(usual.data_bits, |b| b.value),
        parity: parity.unwrap_or(usual.parity),
        stop_bits: stop_bits.map_or(1, |b| b.value),
    };
    (settings, port)
}

/// Reads a text-line source.
pub(super) fn text_line(section: &mut Section<'_>, source: &SourceName) -> KindRead {
    let (serial, port) = serial(section, Usual::TEXT);
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
