//! SDI-12 sources.

use std::time::Duration;

use super::super::section::Section;
use super::super::{Parity, Sdi12Address, Sdi12Channel, Sdi12Command, Sdi12Source, SourceConfig};
use super::serial::{Usual, serial};
use super::sources::{KindRead, LONGEST_SCAN, channel, plain_id};
use crate::record::SourceName;

/// SDI-12 1.4, section 4: 1200 baud, 7 data bits, even parity.
const USUAL: Usual = Usual {
    baud: 1200,
    data_bits: 7,
    parity: Parity::Even,
};

/// Most values one measurement gives.
const MOST_VALUES: i64 = 99;

/// Reads an SDI-12 source.
pub(super) fn source(section: &mut Section<'_>, source: &SourceName) -> KindRead {
    let (serial, port) = serial(section, USUAL);
    let every = section.duration("every", Duration::from_secs(1), LONGEST_SCAN);
    let least = Duration::from_millis(20);
    let timeout = section.duration("timeout", least, Duration::from_secs(60));
    let retries = section.whole_number::<u32>("retries", 0, 10);
    let wake = section.word("wake", &[("adapter", false), ("port", true)]);
    let mut reads = Vec::new();
    let mut channels = Vec::new();
    for mut table in section.list("channel") {
        let read = channel(&mut table, source);
        plain_id(&table, &read);
        let address = table.must("address", "address = \"0\", the sensor's own", address);
        let command = table.must("command", "command = \"M\"", command);
        let value = table.whole_number::<usize>("value", 1, MOST_VALUES);
        table.close();
        if let (Some(address), Some(command)) = (address, command) {
            channels.push(Sdi12Channel {
                id: read.settings.id.clone(),
                address,
                command,
                value: value.map_or(1, |v| v.value),
            });
        }
        reads.push(read);
    }
    let config = SourceConfig::Sdi12(Sdi12Source {
        serial,
        every: every.map_or(Duration::from_secs(60), |e| e.value),
        timeout: timeout.map_or(Duration::from_millis(500), |t| t.value),
        retries: retries.map_or(2, |r| r.value),
        wake: wake.unwrap_or(false),
        channels,
    });
    (config, reads, port)
}

fn address(table: &mut Section<'_>, key: &'static str) -> Option<Sdi12Address> {
    let text = table.text(key)?;
    let mut letters = text.value.chars();
    let found = match (letters.next(), letters.next()) {
        (Some(letter), None) => Sdi12Address::new(letter),
        _ => None,
    };
    if found.is_none() {
        let what = "an address is one digit or letter";
        table.wrong(key, &text, what, "such as \"0\"");
    }
    found
}

fn command(table: &mut Section<'_>, key: &'static str) -> Option<Sdi12Command> {
    let text = table.text(key)?;
    let found = Sdi12Command::parse(&text.value);
    if found.is_none() {
        let what = format!("\"{}\" is no command that measures", text.value);
        let mend = "it takes M, M1 to M9, C, C1 to C9, R0 to R9, and MC, CC, RC with a checksum, without address and `!`";
        table.wrong(key, &text, what, mend);
    }
    found
}
