//! Tokens: who may read and who may change things over HTTP.
//!
//! A token is 160 random bits in text. Only its SHA-256 is kept, in `tokens.json` in the store's folder, so that the file
//! gives nobody entry; a token of that length needs no slow hash. The running daemon reads the file again when it changes.

use std::fmt::Write as _;
use std::fs::{self, File, OpenOptions};
use std::io::{self, Read as _, Write as _};
use std::os::unix::fs::OpenOptionsExt as _;
use std::path::{Path, PathBuf};

use serde::{Deserialize, Serialize};
use sha2::{Digest, Sha256};
use thiserror::Error;

use crate::record::Stamp;

/// Name of the file in the store's folder.
pub const FILE: &str = "tokens.json";
/// What every token begins with, so that scanners for leaked secrets can know it.
const PREFIX: &str = "borewake_";
/// Largest file read \[bytes\].
const LARGEST: u64 = 1 << 20;
/// Most tokens of a site.
const MOST: usize = 500;
/// Longest name of a token \[characters\].
const LONGEST_NAME: usize = 64;

/// What a token allows; each scope allows what those before it do.
#[derive(
    Debug,
    Clone,
    Copy,
    PartialEq,
    Eq,
    PartialOrd,
    Ord,
    Hash,
    Serialize,
    Deserialize,
    clap::ValueEnum,
)]
#[serde(rename_all = "kebab-case")]
pub enum Scope {
    /// To look.
    Read,
    /// To acknowledge, shelve, bring back and reset.
    Operate,
    /// To adopt findings and take alarms out of service.
    Admin,
}

impl Scope {
    /// The name used in commands and answers.
    #[must_use]
    pub fn name(self) -> &'static str {
        match self {
            Self::Read => "read",
            Self::Operate => "operate",
            Self::Admin => "admin",
        }
    }
}

/// Why tokens cannot be read, made or revoked.
#[derive(Debug, Error)]
pub enum TokenError {
    /// The file cannot be read or written.
    #[error("the tokens in {} cannot be used while {doing}: {source}", path.display())]
    Io {
        /// The file.
        path: PathBuf,
        /// What was being done.
        doing: &'static str,
        /// What the system said.
        source: io::Error,
    },
    /// The file is none of ours.
    #[error("{} is no file of tokens: {source}; move it away and make tokens anew", path.display())]
    Unreadable {
        /// The file.
        path: PathBuf,
        /// What is wrong.
        source: serde_json::Error,
    },
    /// A name that is taken.
    #[error("there is a token {0} already; revoke it first, or take another name")]
    Taken(String),
    /// A name that cannot be.
    #[error("a token's name is 1 to {LONGEST_NAME} characters without control characters")]
    Name,
    /// A name that is not there.
    #[error("there is no token {name}; there is {known}")]
    Unknown {
        /// What was asked for.
        name: String,
        /// What there is.
        known: String,
    },
    /// Too many.
    #[error("there are {MOST} tokens already; revoke those that nobody uses")]
    TooMany,
    /// No randomness.
    #[error("the system gives no random numbers: {0}")]
    Random(String),
}

/// A token as it is kept.
#[derive(Debug, Clone, PartialEq, Eq, Serialize, Deserialize)]
pub struct Token {
    /// Whose it is: it stands in the journal beside everything done with it.
    pub name: String,
    /// What it allows.
    pub scope: Scope,
    /// SHA-256 of the whole text, in hexadecimal.
    hash: String,
    /// When it was made.
    pub made: Stamp,
    /// When it ends by itself; `None` for never.
    pub until: Option<Stamp>,
}

/// All tokens of a site.
#[derive(Debug, Clone, Default, PartialEq, Eq, Serialize, Deserialize)]
pub struct Tokens {
    tokens: Vec<Token>,
}

/// Whom a token is for.
#[derive(Debug, Clone, PartialEq, Eq)]
pub struct Bearer {
    /// The token's name.
    pub name: String,
    /// What it allows.
    pub scope: Scope,
}

impl Tokens {
    /// Reads the tokens of a store's folder; none where there is no file.
    ///
    /// # Errors
    /// The file cannot be read.
    pub fn read(folder: &Path) -> Result<Self, TokenError> {
        let path = folder.join(FILE);
        let failed = |source| TokenError::Io {
            path: path.clone(),
            doing: "reading",
            source,
        };
        let file = match File::open(&path) {
            Ok(file) => file,
            Err(e) if e.kind() == io::ErrorKind::NotFound => return Ok(Self::default()),
            Err(e) => return Err(failed(e)),
        };
        let mut text = String::new();
        file.take(LARGEST)
            .read_to_string(&mut text)
            .map_err(failed)?;
        serde_json::from_str(&text).map_err(|source| TokenError::Unreadable {
            path: path.clone(),
            source,
        })
    }

    /// Writes the tokens of a store's folder, for the daemon's own user only; the file is whole at every instant.
    ///
    /// # Errors
    /// The file cannot be written.
    pub fn write(&self, folder: &Path) -> Result<(), TokenError> {
        let path = folder.join(FILE);
        let new = folder.join(format!("{FILE}.new"));
        let failed = |source| TokenError::Io {
            path: path.clone(),
            doing: "writing",
            source,
        };
        fs::create_dir_all(folder).map_err(failed)?;
        match fs::remove_file(&new) {
            Err(e) if e.kind() != io::ErrorKind::NotFound => return Err(failed(e)),
            _ => {}
        }
        let mut text = serde_json::to_vec_pretty(self).map_err(|e| failed(e.into()))?;
        text.push(b'\n');
        let mut file = OpenOptions::new()
            .write(true)
            .create_new(true)
            .mode(0o600)
            .open(&new)
            .map_err(failed)?;
        file.write_all(&text)
            .and_then(|()| file.sync_all())
            .and_then(|()| fs::rename(&new, &path))
            .map_err(failed)
    }

    /// All tokens, in the order made.
    #[must_use]
    pub fn all(&self) -> &[Token] {
        &self.tokens
    }

    /// Makes a token. Its text is given back this once and kept nowhere.
    ///
    /// # Errors
    /// The name is taken or cannot be, or there are too many.
    pub fn make(
        &mut self,
        name: &str,
        scope: Scope,
        now: Stamp,
        until: Option<Stamp>,
    ) -> Result<String, TokenError> {
        let length = name.chars().count();
        if name.trim().is_empty() || length > LONGEST_NAME || name.chars().any(char::is_control) {
            return Err(TokenError::Name);
        }
        if self.tokens.iter().any(|t| t.name == name) {
            return Err(TokenError::Taken(name.to_owned()));
        }
        if self.tokens.len() >= MOST {
            return Err(TokenError::TooMany);
        }
        let mut bits = [0_u8; 20];
        getrandom::fill(&mut bits).map_err(|e| TokenError::Random(e.to_string()))?;
        let text = format!("{PREFIX}{}", hex(&bits));
        self.tokens.push(Token {
            name: name.to_owned(),
            scope,
            hash: hash(&text),
            made: now,
            until,
        });
        Ok(text)
    }

    /// Revokes a token.
    ///
    /// # Errors
    /// There is none of that name.
    pub fn revoke(&mut self, name: &str) -> Result<(), TokenError> {
        let before = self.tokens.len();
        self.tokens.retain(|t| t.name != name);
        if self.tokens.len() < before {
            return Ok(());
        }
        let known: Vec<&str> = self.tokens.iter().map(|t| t.name.as_str()).collect();
        Err(TokenError::Unknown {
            name: name.to_owned(),
            known: if known.is_empty() {
                "none".to_owned()
            } else {
                known.join(", ")
            },
        })
    }

    /// Whose token a text is, while it holds. Every token is compared, and each in the same time.
    #[must_use]
    pub fn bearer(&self, text: &str, now: Stamp) -> Option<Bearer> {
        let asked = hash(text);
        let mut found = None;
        for token in &self.tokens {
            if same(token.hash.as_bytes(), asked.as_bytes()) {
                found = Some(token);
            }
        }
        found
            .filter(|t| t.until.is_none_or(|until| now < until))
            .map(|t| Bearer {
                name: t.name.clone(),
                scope: t.scope,
            })
    }
}

/// Whether two texts are the same, in a time that does not tell where they differ.
fn same(a: &[u8], b: &[u8]) -> bool {
    a.len() == b.len() && a.iter().zip(b).fold(0, |acc, (x, y)| acc | (x ^ y)) == 0
}

fn hash(text: &str) -> String {
    hex(&Sha256::digest(text.as_bytes()))
}

fn hex(bytes: &[u8]) -> String {
    let mut text = String::with_capacity(2 * bytes.len());
    for byte in bytes {
        let _ = write!(text, "{byte:02x}");
    }
    text
}

#[cfg(test)]
mod tests {
    use std::os::unix::fs::PermissionsExt as _;

    use super::*;

    const NOW: Stamp = Stamp(1_900_000_000_000_000);

    #[test]
    fn a_token_opens_what_its_scope_allows_until_it_ends() {
        let mut tokens = Tokens::default();
        let day = NOW.plus(86_400 * Stamp::SECOND);
        let text = tokens
            .make("jm phone", Scope::Operate, NOW, Some(day))
            .unwrap();
        let bearer = tokens.bearer(&text, NOW).unwrap();
        assert_eq!(
            (bearer.name.as_str(), bearer.scope),
            ("jm phone", Scope::Operate)
        );
        assert_eq!(tokens.bearer(&text, day), None);
        assert_eq!(tokens.bearer(&text[..text.len() - 1], NOW), None);
        assert_eq!(tokens.bearer("", NOW), None);
        assert!(Scope::Read < Scope::Operate && Scope::Operate < Scope::Admin);
        tokens.revoke("jm phone").unwrap();
        assert_eq!(tokens.bearer(&text, NOW), None);
        assert!(
            tokens
                .revoke("jm phone")
                .unwrap_err()
                .to_string()
                .contains("none")
        );
    }

    #[test]
    fn the_file_holds_no_token_and_is_closed_to_others() {
        let folder = tempfile::tempdir().unwrap();
        assert_eq!(Tokens::read(folder.path()).unwrap(), Tokens::default());
        let mut tokens = Tokens::default();
        let text = tokens.make("wall", Scope::Read, NOW, None).unwrap();
        tokens.write(folder.path()).unwrap();
        tokens.write(folder.path()).unwrap();
        let path = folder.path().join(FILE);
        let kept = fs::read_to_string(&path).unwrap();
        assert!(!kept.contains(&text) && !kept.contains(&text[PREFIX.len()..]));
        assert_eq!(
            fs::metadata(&path).unwrap().permissions().mode() & 0o777,
            0o600
        );
        let back = Tokens::read(folder.path()).unwrap();
        assert_eq!(back, tokens);
        assert!(back.bearer(&text, NOW).is_some());
    }

    #[test]
    fn names_are_held_to_their_form() {
        let mut tokens = Tokens::default();
        assert!(matches!(
            tokens.make(" ", Scope::Read, NOW, None),
            Err(TokenError::Name)
        ));
        assert!(matches!(
            tokens.make("a\nb", Scope::Read, NOW, None),
            Err(TokenError::Name)
        ));
        let first = tokens.make("a", Scope::Read, NOW, None).unwrap();
        assert!(matches!(
            tokens.make("a", Scope::Admin, NOW, None),
            Err(TokenError::Taken(_))
        ));
        let second = tokens.make("b", Scope::Read, NOW, None).unwrap();
        assert_ne!(first, second);
    }
}
