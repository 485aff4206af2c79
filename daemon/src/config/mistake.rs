//! What is wrong with a site file: where, what, and the mend.

use std::fmt;
use std::path::PathBuf;

use serde::Serialize;
use thiserror::Error;

/// One thing wrong with a site file.
#[derive(Debug, Clone, PartialEq, Eq, Serialize)]
pub struct Mistake {
    /// Line, from 1.
    pub line: usize,
    /// Column in characters, from 1.
    pub column: usize,
    /// Where in the file's own terms, such as `gauge "O-2": noise`.
    pub key: String,
    /// The value as written, cut at 60 characters; empty where there is none.
    pub value: String,
    /// What is wrong.
    pub what: String,
    /// How to mend it.
    pub mend: String,
}

impl fmt::Display for Mistake {
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        write!(f, "{}:{}: {}", self.line, self.column, self.key)?;
        if !self.value.is_empty() {
            write!(f, " = {}", self.value)?;
        }
        write!(f, "\n    {}\n    mend: {}", self.what, self.mend)
    }
}

/// Something accepted that is not acted on, or looks odd; it stops nothing.
#[derive(Debug, Clone, PartialEq, Eq, Serialize)]
pub struct Note {
    /// Line, from 1.
    pub line: usize,
    /// Column in characters, from 1.
    pub column: usize,
    /// Where in the file's own terms.
    pub key: String,
    /// What to know.
    pub text: String,
}

impl fmt::Display for Note {
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        write!(
            f,
            "{}:{}: {}: {}",
            self.line, self.column, self.key, self.text
        )
    }
}

/// A site file that cannot be used.
#[derive(Debug, Error)]
pub enum ConfigError {
    /// The file cannot be read at all.
    #[error("{} cannot be read: {why}", path.display())]
    Unreadable {
        /// The file.
        path: PathBuf,
        /// Why.
        why: String,
    },
    /// The file was read, and is wrong.
    #[error("{}", listing(path, mistakes))]
    Wrong {
        /// The file.
        path: PathBuf,
        /// All that is wrong, in file order; never empty.
        mistakes: Vec<Mistake>,
    },
}

/// All mistakes under one heading.
fn listing(path: &std::path::Path, mistakes: &[Mistake]) -> String {
    use fmt::Write as _;
    let count = mistakes.len();
    let noun = if count == 1 { "mistake" } else { "mistakes" };
    let mut text = format!("{}: {count} {noun}", path.display());
    for mistake in mistakes {
        // Writing to a String cannot fail.
        let _ = write!(text, "\n\n{}:{mistake}", path.display());
    }
    text
}
