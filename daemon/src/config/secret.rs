//! Secrets, which live in files of their own.

use std::fmt;
use std::path::{Path, PathBuf};

use thiserror::Error;

/// A file that holds a secret. It is read when it is used; neither it nor its text is ever printed.
#[derive(Debug, Clone, PartialEq, Eq)]
pub struct SecretFile(PathBuf);

/// A secret that cannot be read.
#[derive(Debug, Error)]
#[error("the secret file {} cannot be used: {why}", path.display())]
pub struct SecretError {
    /// The file.
    pub path: PathBuf,
    /// Why.
    pub why: String,
}

impl SecretFile {
    /// A secret in this file.
    #[must_use]
    pub fn new(path: PathBuf) -> Self {
        Self(path)
    }

    /// The file.
    #[must_use]
    pub fn path(&self) -> &Path {
        &self.0
    }

    /// Whether others than the owner may read it.
    #[must_use]
    pub fn open_to_others(&self) -> bool {
        use std::os::unix::fs::PermissionsExt as _;
        std::fs::metadata(&self.0).is_ok_and(|m| m.permissions().mode() & 0o077 != 0)
    }

    /// Reads the secret; a line end at its end is dropped.
    ///
    /// # Errors
    /// The file cannot be read, is not text, or is empty.
    pub fn read(&self) -> Result<Secret, SecretError> {
        let wrong = |why: String| SecretError {
            path: self.0.clone(),
            why,
        };
        let text = std::fs::read_to_string(&self.0).map_err(|e| wrong(e.to_string()))?;
        let secret = text.trim_end_matches(['\r', '\n']);
        if secret.is_empty() {
            return Err(wrong("it is empty".to_owned()));
        }
        Ok(Secret(secret.to_owned()))
    }
}

/// A secret; shown as dots.
#[derive(Clone, PartialEq, Eq)]
pub struct Secret(String);

impl Secret {
    /// The secret itself, for the one call that needs it.
    #[must_use]
    pub fn expose(&self) -> &str {
        &self.0
    }
}

impl fmt::Debug for Secret {
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        f.write_str("Secret(…)")
    }
}
