//! `borewake export`: readings, expectations, findings and alarms as CSV, or as JSON values a line.

mod sheet;
mod tables;
#[cfg(test)]
mod tests;

use std::fs::{self, File};
use std::io::{self, BufWriter, ErrorKind, Write};
use std::path::{Path, PathBuf};

use anyhow::{Context as _, Result};
use clap::{Args, ValueEnum};
use indicatif::{ProgressBar, ProgressStyle};

use self::sheet::Sheet;
use self::tables::{Legend, Span};
use super::{Context, Exit, Failure};
use crate::config::{self, Site};
use crate::record::Stamp;
use crate::store::Reader;

/// Writes readings, expectations, findings and alarms of a stretch of time as CSV
#[derive(Debug, Args)]
#[command(after_help = "\
Examples:
  borewake export site.toml --what alarms
  borewake export site.toml --from 2031-03-01 --to 2031-04-01 --out march

It works beside a running daemon. Instants are RFC 3339 in UTC; columns end in their unit. Of the readings, `value` is
the number as delivered, which `borewake replay` reads again with the same site file; `si_value` is after conversion.")]
pub(super) struct Export {
    /// The site file
    #[arg(value_name = "SITE")]
    site: PathBuf,
    /// First instant, RFC 3339 or a date (UTC) [default: the beginning]
    #[arg(long, value_parser = instant)]
    from: Option<Stamp>,
    /// Instant after the last one [default: the end]
    #[arg(long, value_parser = instant)]
    to: Option<Stamp>,
    /// What to write [default with --out: everything]
    #[arg(long, value_enum, required_unless_present = "out")]
    what: Option<What>,
    /// Folder for the files, made where need be; without it, standard output
    #[arg(long, value_name = "DIR")]
    out: Option<PathBuf>,
}

/// The tables there are.
#[derive(Debug, Clone, Copy, PartialEq, Eq, ValueEnum)]
enum What {
    /// Every reading kept
    Readings,
    /// What each gauge should have shown in each block
    Expectations,
    /// The weighed causes of each block that had a finding
    Findings,
    /// Every step in the life of every alarm
    Alarms,
}

impl What {
    fn name(self) -> &'static str {
        match self {
            Self::Readings => "readings",
            Self::Expectations => "expectations",
            Self::Findings => "findings",
            Self::Alarms => "alarms",
        }
    }
}

impl Export {
    pub(super) fn run(self, context: &Context) -> Result<Exit, Failure> {
        let site = config::load(&self.site)?;
        let runtime = tokio::runtime::Builder::new_current_thread()
            .enable_all()
            .build()
            .map_err(Failure::unusable)?;
        match runtime.block_on(self.export(&site, context.json)) {
            // A reader that has gone away (`| head`) is no failure.
            Err(error) if is_broken_pipe(&error) => Ok(Exit::Done),
            Err(error) => Err(Failure::unusable(error)),
            Ok(()) => Ok(Exit::Done),
        }
    }

    async fn export(&self, site: &Site, json: bool) -> Result<()> {
        let reader = Reader::open(&site.store.folder).await?;
        let legend = legend(site, &reader).await?;
        let span = Span {
            from: self.from.unwrap_or(Stamp(i64::MIN)),
            to: self.to.unwrap_or(Stamp(i64::MAX)),
        };
        let tables = match self.what {
            Some(what) => vec![what],
            None => What::value_variants().to_vec(),
        };
        for what in tables {
            let Some(folder) = &self.out else {
                let out = BufWriter::new(io::stdout().lock());
                let bar = ProgressBar::hidden();
                write(what, &reader, &legend, span, out, json, &bar).await?;
                continue;
            };
            let bar = progress(what.name());
            let ending = if json { "ndjson" } else { "csv" };
            let path = folder.join(format!("{}.{ending}", what.name()));
            let part = folder.join(format!("{}.{ending}.part", what.name()));
            let out = create(folder, &part)?;
            write(what, &reader, &legend, span, out, json, &bar).await?;
            // Whole or not at all: a file cut short must not pass for an export.
            fs::rename(&part, &path).with_context(|| path.display().to_string())?;
            bar.finish_and_clear();
        }
        reader.close().await;
        Ok(())
    }
}

/// A bar over shares of a thousand; drawn where standard error is a terminal.
fn progress(what: &'static str) -> ProgressBar {
    let bar = ProgressBar::new(1000).with_message(what);
    match ProgressStyle::with_template("{msg:24} [{bar:30}] {percent:>3} %  {elapsed}") {
        Ok(style) => bar.with_style(style.progress_chars("=> ")),
        Err(_) => bar,
    }
}

fn create(folder: &Path, path: &Path) -> Result<BufWriter<File>> {
    fs::create_dir_all(folder).with_context(|| folder.display().to_string())?;
    let file = File::create(path).with_context(|| path.display().to_string())?;
    Ok(BufWriter::new(file))
}

async fn write<W: Write>(
    what: What,
    reader: &Reader,
    legend: &Legend,
    span: Span,
    out: W,
    json: bool,
    bar: &ProgressBar,
) -> Result<()> {
    match what {
        What::Readings => {
            let mut share = Share::of(reader, span).await?;
            let mut sheet = Sheet::begin(out, tables::READINGS, json)?;
            tables::readings(reader, legend, span, &mut sheet, |at| share.tell(at, bar)).await?;
            sheet.finish()
        }
        What::Expectations => {
            let mut sheet = Sheet::begin(out, tables::EXPECTATIONS, json)?;
            tables::expectations(reader, legend, span, &mut sheet).await?;
            sheet.finish()
        }
        What::Findings => {
            let mut sheet = Sheet::begin(out, tables::FINDINGS, json)?;
            tables::findings(reader, legend, span, &mut sheet).await?;
            sheet.finish()
        }
        What::Alarms => {
            let mut sheet = Sheet::begin(out, tables::ALARMS, json)?;
            tables::alarms(reader, span, &mut sheet).await?;
            sheet.finish()
        }
    }
}

/// How much of the time asked for has been gone through.
struct Share {
    from: f64,
    to: f64,
    rows: u64,
}

impl Share {
    async fn of(reader: &Reader, span: Span) -> Result<Self> {
        let first = reader.first_sample().await?.unwrap_or_default();
        let last = reader.last_sample().await?.unwrap_or_default();
        Ok(Self {
            from: first.max(span.from).seconds(),
            to: last.min(span.to).seconds(),
            rows: 0,
        })
    }

    #[expect(
        clippy::cast_possible_truncation,
        clippy::cast_sign_loss,
        reason = "float-to-int casts saturate, which is what is wanted"
    )]
    fn tell(&mut self, at: Stamp, bar: &ProgressBar) {
        self.rows += 1;
        if self.rows.is_multiple_of(4096) {
            let share = (at.seconds() - self.from) / (self.to - self.from).max(1e-6);
            bar.set_position((1000.0 * share) as u64);
        }
    }
}

/// What the site file says of what is stored.
async fn legend(site: &Site, reader: &Reader) -> Result<Legend> {
    let block = i64::try_from(site.watch.block.as_micros()).context("the length of a block")?;
    let channels = reader.channels().await?;
    Ok(Legend {
        names: site.names(),
        channels: channels
            .into_iter()
            .filter_map(|id| {
                let settings = site.channel(&id)?;
                Some((id, (settings.kind, settings.conversion)))
            })
            .collect(),
        block,
    })
}

/// An instant from the command line.
fn instant(text: &str) -> Result<Stamp, String> {
    Stamp::parse(text)
        .or_else(|_| Stamp::parse(&format!("{text}T00:00:00Z")))
        .map_err(|_| format!("{text:?} is no instant; write 2031-03-01 or 2031-03-01T06:30:00Z"))
}

fn is_broken_pipe(error: &anyhow::Error) -> bool {
    error.chain().any(|cause| {
        let io = cause.downcast_ref::<io::Error>().map(io::Error::kind);
        let csv = cause
            .downcast_ref::<csv::Error>()
            .and_then(|e| match e.kind() {
                csv::ErrorKind::Io(e) => Some(e.kind()),
                _ => None,
            });
        let json = cause
            .downcast_ref::<serde_json::Error>()
            .and_then(serde_json::Error::io_error_kind);
        [io, csv, json].contains(&Some(ErrorKind::BrokenPipe))
    })
}
