//! Events as lines of JSON, to a file or to standard output.

use std::fs::File;
use std::io::{self, BufWriter, Write};
use std::path::{Path, PathBuf};

use thiserror::Error;

/// Why a line could not be written.
#[derive(Debug, Error)]
#[error("events cannot be written to {}: {source}", path.display())]
pub struct NdjsonError {
    path: PathBuf,
    source: io::Error,
}

/// Writes one event a line. Each line is handed to the system at once, so that a reader following the file sees whole
/// lines; [`Ndjson::close`] waits until they are on disk.
#[derive(Debug)]
pub struct Ndjson {
    path: PathBuf,
    to: Target,
}

#[derive(Debug)]
enum Target {
    File(BufWriter<File>),
    Stdout(io::Stdout),
}

impl Ndjson {
    /// Starts a file anew; what it held is gone.
    ///
    /// # Errors
    /// The file cannot be created.
    pub fn create(path: &Path) -> Result<Self, NdjsonError> {
        let file = File::create(path).map_err(|source| NdjsonError {
            path: path.to_owned(),
            source,
        })?;
        Ok(Self {
            path: path.to_owned(),
            to: Target::File(BufWriter::new(file)),
        })
    }

    /// Goes on with a file, or starts it.
    ///
    /// # Errors
    /// The file cannot be opened.
    pub fn append(path: &Path) -> Result<Self, NdjsonError> {
        let file = File::options()
            .create(true)
            .append(true)
            .open(path)
            .map_err(|source| NdjsonError {
                path: path.to_owned(),
                source,
            })?;
        Ok(Self {
            path: path.to_owned(),
            to: Target::File(BufWriter::new(file)),
        })
    }

    /// Writes to standard output.
    #[must_use]
    pub fn stdout() -> Self {
        Self {
            path: PathBuf::from("standard output"),
            to: Target::Stdout(io::stdout()),
        }
    }

    /// Writes one event; an empty payload (one that only clears a retained topic) is no event.
    ///
    /// # Errors
    /// The line cannot be written.
    pub fn write(&mut self, event: &str) -> Result<(), NdjsonError> {
        if event.is_empty() {
            return Ok(());
        }
        let out: &mut dyn Write = match &mut self.to {
            Target::File(file) => file,
            Target::Stdout(out) => out,
        };
        let done = out
            .write_all(event.as_bytes())
            .and_then(|()| out.write_all(b"\n"))
            .and_then(|()| out.flush());
        done.map_err(|source| self.error(source))
    }

    /// Waits until everything is on disk.
    ///
    /// # Errors
    /// The system could not write it.
    pub fn close(mut self) -> Result<(), NdjsonError> {
        let done = match &mut self.to {
            Target::File(file) => file.flush().and_then(|()| file.get_ref().sync_all()),
            Target::Stdout(out) => out.flush(),
        };
        done.map_err(|source| self.error(source))
    }

    fn error(&self, source: io::Error) -> NdjsonError {
        NdjsonError {
            path: self.path.clone(),
            source,
        }
    }
}

#[cfg(test)]
mod tests {
    use super::Ndjson;

    #[test]
    fn lines_are_whole_and_clears_are_none() {
        let folder = tempfile::tempdir().unwrap();
        let path = folder.path().join("events.ndjson");
        let mut out = Ndjson::create(&path).unwrap();
        out.write(r#"{"a":1}"#).unwrap();
        out.write("").unwrap();
        // Seen before the end, too.
        assert_eq!(std::fs::read_to_string(&path).unwrap(), "{\"a\":1}\n");
        out.write(r#"{"a":2}"#).unwrap();
        out.close().unwrap();
        assert_eq!(std::fs::read_to_string(&path).unwrap().lines().count(), 2);
    }

    #[test]
    fn errors_name_the_file() {
        let why = Ndjson::create(std::path::Path::new("/nowhere/events.ndjson")).unwrap_err();
        assert!(why.to_string().contains("/nowhere/events.ndjson"));
    }
}
