//! One log file, row by row.

use std::collections::HashMap;
use std::fs::File;
use std::path::Path;

use csv::{ByteRecord, Reader, ReaderBuilder};

use super::reader::LogError;
use crate::intake::conversions::Meaning;
use crate::intake::decode::{Refusal, When, instant, missing, number, reading};
use crate::record::{
    ChannelId, DeviceStatus, Quality, Reading, RejectReason, Rejected, SourceName, Stamp,
};

/// The columns of a file.
#[derive(Debug)]
enum Form {
    /// A row for each reading.
    Long {
        time: usize,
        channel: usize,
        value: usize,
        quality: Option<usize>,
    },
    /// A row for each instant, the first column the time: a channel, or nothing of ours, for each of the others.
    Wide(Vec<Option<ChannelId>>),
}

/// A file with its next row read ahead.
pub(super) struct Table {
    rows: Reader<File>,
    form: Form,
    name: SourceName,
    /// The row read ahead; `None` at the end of the file.
    row: Option<(Stamp, ByteRecord)>,
    spare: ByteRecord,
    pub(super) bytes: u64,
}

/// Where rows go.
pub(super) struct Sink {
    pub(super) channels: HashMap<Vec<u8>, (ChannelId, Meaning)>,
    pub(super) unknown: std::collections::BTreeMap<String, u64>,
    pub(super) readings: Vec<Reading>,
    pub(super) rejected: Vec<Rejected>,
    /// Instant of the row last taken: the clock of a log.
    pub(super) now: Stamp,
}

impl Table {
    /// Opens a file and recognises its form by the header.
    pub(super) fn open(path: &Path, sink: &mut Sink) -> Result<Self, LogError> {
        let fail = |e: &dyn std::fmt::Display| LogError::Unreadable {
            path: path.to_owned(),
            why: e.to_string(),
        };
        let file = File::open(path).map_err(|e| fail(&e))?;
        let bytes = file.metadata().map_err(|e| fail(&e))?.len();
        let mut rows = ReaderBuilder::new().flexible(true).from_reader(file);
        let header = rows.byte_headers().map_err(|e| fail(&e))?.clone();
        let names: Vec<String> = header
            .iter()
            .map(|n| {
                String::from_utf8_lossy(n)
                    .trim_start_matches('\u{feff}')
                    .trim()
                    .to_owned()
            })
            .collect();
        let name = path.file_name().unwrap_or_default().to_string_lossy();
        let mut table = Self {
            rows,
            form: Form::Wide(Vec::new()),
            name: SourceName::from(name.as_ref()),
            row: None,
            spare: ByteRecord::new(),
            bytes,
        };
        table.form = table
            .recognise(&names, sink)
            .ok_or_else(|| LogError::Header {
                path: path.to_owned(),
                found: names.join(","),
            })?;
        table.read_ahead(sink)?;
        Ok(table)
    }

    fn recognise(&self, names: &[String], sink: &mut Sink) -> Option<Form> {
        let at = |name: &str| names.iter().position(|n| n.eq_ignore_ascii_case(name));
        if let (Some(time), Some(channel), Some(value)) = (at("time"), at("channel"), at("value")) {
            return Some(Form::Long {
                time,
                channel,
                value,
                quality: at("quality"),
            });
        }
        let (first, others) = names.split_first()?;
        if !first.eq_ignore_ascii_case("time") || others.is_empty() {
            return None;
        }
        let mut columns = Vec::new();
        for name in others {
            let known = sink.channels.get(name.as_bytes()).map(|(id, _)| id.clone());
            if known.is_none() {
                sink.stranger(name.as_bytes(), &self.name, 1);
            }
            columns.push(known);
        }
        Some(Form::Wide(columns))
    }

    /// Instant of the next row.
    pub(super) fn next_time(&self) -> Option<Stamp> {
        self.row.as_ref().map(|(time, _)| *time)
    }

    /// Bytes of the file read so far.
    pub(super) fn position(&self) -> u64 {
        if self.row.is_none() {
            self.bytes
        } else {
            self.rows.position().byte()
        }
    }

    /// Takes the next row into the sink.
    pub(super) fn take(&mut self, sink: &mut Sink) -> Result<(), LogError> {
        if let Some((time, row)) = self.row.take() {
            sink.now = time;
            match &self.form {
                Form::Long {
                    channel,
                    value,
                    quality,
                    ..
                } => {
                    let quality = quality.and_then(|q| row.get(q));
                    sink.long(
                        &self.name,
                        time,
                        &row,
                        row.get(*channel),
                        row.get(*value),
                        quality,
                    );
                }
                Form::Wide(columns) => sink.wide(&self.name, time, &row, columns),
            }
            self.spare = row;
        }
        self.read_ahead(sink)
    }

    /// Reads on to the next row that has an instant.
    fn read_ahead(&mut self, sink: &mut Sink) -> Result<(), LogError> {
        let time_column = match &self.form {
            Form::Long { time, .. } => *time,
            Form::Wide(_) => 0,
        };
        let mut row = std::mem::take(&mut self.spare);
        loop {
            let more = self
                .rows
                .read_byte_record(&mut row)
                .map_err(|e| LogError::Unreadable {
                    path: (&*self.name.0).into(),
                    why: e.to_string(),
                })?;
            if !more {
                return Ok(());
            }
            let field = row.get(time_column).unwrap_or_default();
            match std::str::from_utf8(field).ok().map(instant) {
                Some(Ok(time)) => {
                    self.row = Some((time, row));
                    return Ok(());
                }
                refused => {
                    let no_text = || Refusal::new(RejectReason::Malformed, "the time is no text");
                    let refusal = refused.and_then(Result::err).unwrap_or_else(no_text);
                    sink.refuse(refusal, &self.name, None, None, &row);
                }
            }
        }
    }
}

impl Sink {
    /// A row of one reading.
    fn long(
        &mut self,
        file: &SourceName,
        time: Stamp,
        row: &ByteRecord,
        channel: Option<&[u8]>,
        value: Option<&[u8]>,
        quality: Option<&[u8]>,
    ) {
        let (Some(channel), Some(value)) = (channel, value) else {
            let detail = format!("the row has {} fields only", row.len());
            self.refuse(
                Refusal::new(RejectReason::Malformed, detail),
                file,
                None,
                Some(time),
                row,
            );
            return;
        };
        let Some((id, meaning)) = self.channels.get(channel.trim_ascii()) else {
            self.stranger(channel.trim_ascii(), file, line_of(row));
            return;
        };
        match read_value(id, meaning, time, value, quality) {
            Ok(reading) => self.readings.push(reading),
            Err(refusal) => {
                let id = id.clone();
                self.refuse(refusal, file, Some(&id), Some(time), row);
            }
        }
    }

    /// A row of one instant; an empty cell is no reading.
    fn wide(
        &mut self,
        file: &SourceName,
        time: Stamp,
        row: &ByteRecord,
        columns: &[Option<ChannelId>],
    ) {
        if row.len() > columns.len() + 1 {
            let detail = format!(
                "the row has {} fields, the header {}",
                row.len(),
                columns.len() + 1
            );
            self.refuse(
                Refusal::new(RejectReason::Malformed, detail),
                file,
                None,
                Some(time),
                row,
            );
            return;
        }
        for (id, value) in columns.iter().zip(row.iter().skip(1)) {
            let Some(id) = id else { continue };
            if value.trim_ascii().is_empty() {
                continue;
            }
            let Some((_, meaning)) = self.channels.get(id.0.as_bytes()) else {
                continue;
            };
            match read_value(id, meaning, time, value, None) {
                Ok(reading) => self.readings.push(reading),
                Err(refusal) => self.refuse(refusal, file, Some(id), Some(time), row),
            }
        }
    }

    /// Counts a channel that the site file does not know, and refuses it where it is seen first.
    fn stranger(&mut self, name: &[u8], file: &SourceName, line: u64) {
        let name = String::from_utf8_lossy(name).into_owned();
        let count = self.unknown.entry(name.clone()).or_default();
        *count += 1;
        if *count == 1 {
            let detail = format!(
                "line {line}: the site file does not know channel \"{name}\"; its other rows are left out too"
            );
            let refusal = Refusal::new(RejectReason::UnknownChannel, detail);
            self.rejected
                .push(refusal.keep(file, None, self.now, name.as_bytes()));
        }
    }

    fn refuse(
        &mut self,
        refusal: Refusal,
        file: &SourceName,
        channel: Option<&ChannelId>,
        time: Option<Stamp>,
        row: &ByteRecord,
    ) {
        let detail = format!("line {}: {}", line_of(row), refusal.detail);
        let fields: Vec<&[u8]> = row.iter().collect();
        let refusal = Refusal { detail, ..refusal };
        let mut kept = refusal.keep(file, channel, time.unwrap_or(self.now), &fields.join(&b','));
        kept.sampled = time;
        self.rejected.push(kept);
    }
}

fn line_of(row: &ByteRecord) -> u64 {
    row.position().map_or(0, csv::Position::line)
}

/// A reading of a cell.
fn read_value(
    id: &ChannelId,
    meaning: &Meaning,
    time: Stamp,
    value: &[u8],
    quality: Option<&[u8]>,
) -> Result<Reading, Refusal> {
    let when = When::delivered(time, time);
    let quality = match quality.map(<[u8]>::trim_ascii) {
        None | Some([]) => Quality::Good,
        Some(flag) => flag_of(flag)?,
    };
    let value = value.trim_ascii();
    if value.is_empty() || quality == Quality::Missing {
        return Ok(missing(id, when, DeviceStatus::Normal));
    }
    let text = std::str::from_utf8(value)
        .map_err(|_| Refusal::new(RejectReason::Malformed, "the value is no text"))?;
    let reading = reading(id, when, number(text, meaning)?, meaning)?;
    Ok(Reading { quality, ..reading })
}

/// A quality, by its flag or its name.
fn flag_of(flag: &[u8]) -> Result<Quality, Refusal> {
    let text = String::from_utf8_lossy(flag);
    let named = match &*text {
        "good" => Some(Quality::Good),
        "not-evaluated" => Some(Quality::NotEvaluated),
        "suspect" => Some(Quality::Suspect),
        "bad" => Some(Quality::Bad),
        "missing" => Some(Quality::Missing),
        number => number.parse().ok().and_then(Quality::from_flag),
    };
    named.ok_or_else(|| {
        let detail = format!("\"{text}\" is no quality flag; flags are 1 good, 2 not-evaluated, 3 suspect, 4 bad, 9 missing");
        Refusal::new(RejectReason::Malformed, detail)
    })
}
