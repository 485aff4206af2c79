//! Several log files as one stream in time order.

use std::collections::{BTreeMap, HashMap};
use std::path::PathBuf;

use thiserror::Error;

use super::table::{Sink, Table};
use crate::config::{ChannelSettings, Site};
use crate::intake::Appraiser;
use crate::intake::conversions::Meaning;
use crate::record::{ChannelId, Delivery, SourceName, Stamp};

/// A log that cannot be used.
#[derive(Debug, Error)]
pub enum LogError {
    /// The file cannot be read.
    #[error("{}: {why}", path.display())]
    Unreadable {
        /// The file.
        path: PathBuf,
        /// Why.
        why: String,
    },
    /// The header is of no known form.
    #[error(
        "{}: the header is \"{found}\"; a log has the columns time, channel, value and may have quality, or has time first and then one column for each channel",
        path.display()
    )]
    Header {
        /// The file.
        path: PathBuf,
        /// Its header.
        found: String,
    },
}

/// Reads log files, merged by the instants of their rows.
///
/// Rows are never turned round within a file, so what was late in a log stays late; rows of one instant come in the order in
/// which the files were named. Values are in the units of the channels. Readings are stamped as received when they were
/// sampled: a log has no other clock, and reading it twice gives the same.
pub struct LogReader {
    tables: Vec<Table>,
    sink: Sink,
    source: SourceName,
    appraiser: Appraiser,
}

impl LogReader {
    /// Readings of one delivery, about.
    const CHUNK: usize = 1024;

    /// Opens log files.
    ///
    /// # Errors
    /// A file cannot be read, or its header is of no known form.
    pub fn open<M: Into<Meaning>>(
        paths: &[PathBuf],
        channels: impl IntoIterator<Item = (ChannelId, M)>,
    ) -> Result<Self, LogError> {
        let named =
            |(id, meaning): (ChannelId, M)| (id.0.as_bytes().to_vec(), (id, meaning.into()));
        let mut sink = Sink {
            channels: channels.into_iter().map(named).collect::<HashMap<_, _>>(),
            unknown: BTreeMap::new(),
            readings: Vec::new(),
            rejected: Vec::new(),
            now: Stamp::default(),
        };
        let tables = paths.iter().map(|path| Table::open(path, &mut sink));
        let tables = tables.collect::<Result<_, _>>()?;
        Ok(Self {
            tables,
            sink,
            source: "log".into(),
            appraiser: Appraiser::default(),
        })
    }

    /// Opens log files of a site: their numbers are what the site's instruments deliver, and come out converted and judged
    /// as they do live.
    ///
    /// # Errors
    /// A file cannot be read, or its header is of no known form.
    pub fn of_site(paths: &[PathBuf], site: &Site) -> Result<Self, LogError> {
        let meaning = |settings: &ChannelSettings| Meaning {
            unit: None,
            ..Meaning::from(settings)
        };
        let channels = site.channels.iter().map(|(id, c)| (id.clone(), meaning(c)));
        Ok(Self {
            appraiser: Appraiser::new(site),
            ..Self::open(paths, channels)?
        })
    }

    /// The next readings and refusals; `None` at the end of all files. Rows of one instant of one file are never parted.
    ///
    /// # Errors
    /// A file cannot be read on.
    pub fn next_delivery(&mut self) -> Result<Option<Delivery>, LogError> {
        while self.sink.readings.len() + self.sink.rejected.len() < Self::CHUNK {
            let next = self.tables.iter_mut().filter(|t| t.next_time().is_some());
            // The first of several smallest: the order in which files were named.
            let Some(table) = next.min_by_key(|t| t.next_time()) else {
                break;
            };
            table.take(&mut self.sink)?;
        }
        let readings = std::mem::take(&mut self.sink.readings);
        let rejected = std::mem::take(&mut self.sink.rejected);
        if readings.is_empty() && rejected.is_empty() {
            return Ok(None);
        }
        let mut delivery = Delivery {
            source: self.source.clone(),
            readings,
            rejected,
            ack: None,
        };
        self.appraiser.appraise(std::slice::from_mut(&mut delivery));
        Ok(Some(delivery))
    }

    /// Instant of the next row; `None` at the end of all files.
    #[must_use]
    pub fn next_instant(&self) -> Option<Stamp> {
        self.tables.iter().filter_map(Table::next_time).min()
    }

    /// Size of all files \[bytes\].
    #[must_use]
    pub fn total_bytes(&self) -> u64 {
        self.tables.iter().map(|t| t.bytes).sum()
    }

    /// How much of it has been read \[bytes\].
    #[must_use]
    pub fn read_bytes(&self) -> u64 {
        self.tables.iter().map(Table::position).sum()
    }

    /// Channels in the files that are not among those asked for, with the number of their rows (a column counts once).
    #[must_use]
    pub fn unknown_channels(&self) -> &BTreeMap<String, u64> {
        &self.sink.unknown
    }
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::config::Conversion;
    use crate::record::{Quality, RejectReason};
    use std::path::Path;

    fn channels() -> Vec<(ChannelId, Conversion)> {
        let of = |scale| Conversion { scale, offset: 0.0 };
        vec![("p".into(), of(1e3)), ("q".into(), of(1.0 / 86_400.0))]
    }

    fn file(folder: &Path, name: &str, text: &str) -> PathBuf {
        let path = folder.join(name);
        std::fs::write(&path, text).unwrap();
        path
    }

    fn all(paths: &[PathBuf]) -> (Vec<crate::record::Reading>, Vec<crate::record::Rejected>) {
        let mut reader = LogReader::open(paths, channels()).unwrap();
        let (mut readings, mut rejected) = (Vec::new(), Vec::new());
        while let Some(delivery) = reader.next_delivery().unwrap() {
            readings.extend(delivery.readings);
            rejected.extend(delivery.rejected);
        }
        assert_eq!(reader.read_bytes(), reader.total_bytes());
        (readings, rejected)
    }

    #[test]
    fn long_and_wide_are_merged_in_time_order() {
        let folder = tempfile::tempdir().unwrap();
        let long = "time,channel,value,quality\n\
            2031-03-01T00:00:00Z,p,1.5,\n\
            2031-03-01T03:00:00+02:00,p,2.5,3\n\
            2031-03-01T02:00:00Z,p,,9\n";
        let wide = "time,p,q,comment\n\
            2031-03-01T01:00:00Z,3.5,864,fine\n\
            2031-03-01T01:30:00Z,,43.2,\n";
        let paths = [
            file(folder.path(), "a.csv", long),
            file(folder.path(), "b.csv", wide),
        ];
        let (readings, rejected) = all(&paths);
        let seen: Vec<_> = readings
            .iter()
            .map(|r| {
                (
                    r.sampled.to_string()[11..16].to_owned(),
                    r.channel.to_string(),
                    r.raw,
                    r.quality,
                )
            })
            .collect();
        let row = |t: &str, c: &str, raw, quality| (t.to_owned(), c.to_owned(), raw, quality);
        assert_eq!(
            seen,
            [
                row("00:00", "p", Some(1.5), Quality::Good),
                row("01:00", "p", Some(2.5), Quality::Suspect),
                row("01:00", "p", Some(3.5), Quality::Good),
                row("01:00", "q", Some(864.0), Quality::Good),
                row("01:30", "q", Some(43.2), Quality::Good),
                row("02:00", "p", None, Quality::Missing),
            ]
        );
        assert_eq!(readings[0].value, Some(1500.0));
        assert!((readings[3].value.unwrap() - 0.01).abs() < 1e-15);
        assert_eq!(readings[1].received, readings[1].sampled);
        // The comment column is no channel, and is said once.
        let reasons: Vec<_> = rejected.iter().map(|r| (r.reason, &*r.raw)).collect();
        assert_eq!(reasons, [(RejectReason::UnknownChannel, "comment")]);
    }

    #[test]
    fn a_bad_row_costs_itself_and_names_its_line() {
        let folder = tempfile::tempdir().unwrap();
        let text = "time,channel,value,quality\n\
            2031-03-01T00:00:00Z,p,1,\n\
            2031-03-01 00:10,p,1,\n\
            2031-03-01T00:20:00Z,p,NaN,\n\
            2031-03-01T00:30:00Z,p,1 kPa,\n\
            2031-03-01T00:40:00Z,p\n\
            2031-03-01T00:50:00Z,p,1,7\n\
            2031-03-01T01:00:00Z,r,1,\n\
            2031-03-01T01:10:00Z,r,1,\n\
            2031-03-01T01:20:00Z,p,2,good\n";
        let paths = [file(folder.path(), "a.csv", text)];
        let (readings, rejected) = all(&paths);
        assert_eq!(readings.len(), 2);
        let reasons: Vec<_> = rejected
            .iter()
            .map(|r| (r.reason, r.detail.split(':').next().unwrap().to_owned()))
            .collect();
        let at = |reason, line: u32| (reason, format!("line {line}"));
        assert_eq!(
            reasons,
            [
                at(RejectReason::Time, 3),
                at(RejectReason::NotANumber, 4),
                at(RejectReason::Unit, 5),
                at(RejectReason::Malformed, 6),
                at(RejectReason::Malformed, 7),
                at(RejectReason::UnknownChannel, 8),
            ]
        );
        assert_eq!(rejected[1].raw, "2031-03-01T00:20:00Z,p,NaN,");
        assert_eq!(rejected[1].channel, Some("p".into()));
        let mut reader = LogReader::open(&paths, channels()).unwrap();
        while reader.next_delivery().unwrap().is_some() {}
        assert_eq!(reader.unknown_channels()["r"], 2);
    }

    #[test]
    fn late_rows_stay_late_and_no_file_is_parted_within_an_instant() {
        let folder = tempfile::tempdir().unwrap();
        let text = "time,channel,value\n\
            2031-03-01T02:00:00Z,p,1\n\
            2031-03-01T01:00:00Z,p,2\n\
            2031-03-01T03:00:00Z,p,3\n";
        let other = "time,channel,value\n2031-03-01T02:00:00Z,p,4\n2031-03-01T02:30:00Z,p,5\n";
        let paths = [
            file(folder.path(), "a.csv", text),
            file(folder.path(), "b.csv", other),
        ];
        let raws: Vec<_> = all(&paths).0.iter().map(|r| r.raw.unwrap()).collect();
        assert_eq!(raws, [1.0, 2.0, 4.0, 5.0, 3.0]);
    }

    #[test]
    fn what_is_no_log_is_said_with_its_header() {
        let folder = tempfile::tempdir().unwrap();
        let path = file(folder.path(), "a.csv", "date,p\n1,2\n");
        let error = LogReader::open(&[path], channels()).err().unwrap();
        assert!(error.to_string().contains("\"date,p\""), "{error}");
        assert!(matches!(
            LogReader::open(&["nowhere.csv".into()], channels()),
            Err(LogError::Unreadable { .. })
        ));
    }
}
