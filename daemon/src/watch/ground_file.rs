//! The ground file: mesh reduced to modes, calibration and certificate, with a checksum and what it was made for.

use std::fs;
use std::io::Write as _;
use std::path::{Path, PathBuf};

use borewake_model::commission::Commissioned;
use borewake_model::watch::{Basis, Foundation, WatchSettings, WatchState};
use borewake_model::{ModelError, lagged};
use serde::{Deserialize, Serialize};
use sha2::{Digest as _, Sha256};
use thiserror::Error;

use crate::record::Stamp;

/// First bytes of every ground file; the digit is the layout's version.
const MAGIC: &[u8] = b"borewake ground 6\n";

/// Name of the ground file in the store folder.
pub const FILE_NAME: &str = "ground.bin";

/// What `commission` makes and `run` reads.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize)]
pub struct GroundFile {
    /// Digest of the ground part of the site file it was made for.
    pub site_digest: String,
    /// When it was made.
    pub made: Stamp,
    /// The site as commissioned.
    pub commissioned: Model,
    /// What the site asked of the watch.
    pub settings: WatchSettings,
    /// The watch at the end of commissioning; the first block it judges is the one after.
    pub start: WatchState,
    /// Last block of the commissioning history.
    pub last_block: i64,
}

/// A site as commissioned, of either kind.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize)]
#[expect(
    clippy::large_enum_variant,
    reason = "there is one of it, held for as long as the daemon runs"
)]
pub enum Model {
    /// A field of wells: a ground, reduced and calibrated.
    Ground(Commissioned),
    /// An embankment: the answers of its gauges.
    Embankment(lagged::Commissioned),
}

impl Model {
    /// The ground, where the site is a field of wells.
    #[must_use]
    pub fn ground(&self) -> Option<&Commissioned> {
        match self {
            Self::Ground(ground) => Some(ground),
            Self::Embankment(_) => None,
        }
    }
}

impl Basis for Model {
    fn foundation(&self) -> Result<Foundation, ModelError> {
        match self {
            Self::Ground(ground) => ground.foundation(),
            Self::Embankment(embankment) => embankment.foundation(),
        }
    }
}

/// Why a ground file cannot be used.
#[derive(Debug, Error)]
pub enum GroundFileError {
    /// There is none.
    #[error("there is no ground file {0}")]
    Missing(PathBuf),
    /// It cannot be read or written.
    #[error("{path}: {source}")]
    Io {
        /// The file.
        path: PathBuf,
        /// What the system said.
        source: std::io::Error,
    },
    /// Its content is damaged or of another version.
    #[error("{path} is damaged or was made by another version: {why}")]
    Damaged {
        /// The file.
        path: PathBuf,
        /// What does not fit.
        why: String,
    },
    /// It was made for another ground.
    #[error("{0} was made for another ground than the site file now describes")]
    Stale(PathBuf),
}

impl GroundFile {
    /// Digest of the file's content, as journalled at start \[hexadecimal SHA-256 of the payload\].
    ///
    /// # Errors
    /// The content cannot be encoded.
    pub fn digest(&self) -> Result<String, GroundFileError> {
        Ok(hex(&Sha256::digest(self.payload(Path::new(FILE_NAME))?)))
    }

    fn payload(&self, path: &Path) -> Result<Vec<u8>, GroundFileError> {
        postcard::to_stdvec(self).map_err(|e| GroundFileError::Damaged {
            path: path.into(),
            why: e.to_string(),
        })
    }

    /// Writes the file so that a crash leaves the old one or the new one.
    ///
    /// # Errors
    /// The folder cannot be written.
    pub fn write(&self, folder: &Path) -> Result<PathBuf, GroundFileError> {
        let path = folder.join(FILE_NAME);
        let fresh = folder.join(format!("{FILE_NAME}.new"));
        let payload = self.payload(&path)?;
        let io = |source| GroundFileError::Io {
            path: path.clone(),
            source,
        };
        fs::create_dir_all(folder).map_err(io)?;
        let mut file = fs::File::create(&fresh).map_err(io)?;
        file.write_all(MAGIC).map_err(io)?;
        file.write_all(&Sha256::digest(&payload)).map_err(io)?;
        file.write_all(&payload).map_err(io)?;
        file.sync_all().map_err(io)?;
        fs::rename(&fresh, &path).map_err(io)?;
        if let Ok(dir) = fs::File::open(folder) {
            dir.sync_all().map_err(io)?;
        }
        Ok(path)
    }

    /// Reads and checks the file of a store folder against the digest of the ground the site file describes.
    ///
    /// # Errors
    /// It is missing, damaged, or made for another ground.
    pub fn read(folder: &Path, site_digest: &str) -> Result<Self, GroundFileError> {
        let path = folder.join(FILE_NAME);
        let bytes = match fs::read(&path) {
            Ok(bytes) => bytes,
            Err(e) if e.kind() == std::io::ErrorKind::NotFound => {
                return Err(GroundFileError::Missing(path));
            }
            Err(source) => return Err(GroundFileError::Io { path, source }),
        };
        let damaged = |why: &str| GroundFileError::Damaged {
            path: path.clone(),
            why: why.into(),
        };
        let rest = bytes.strip_prefix(MAGIC).ok_or_else(|| {
            damaged("its first line is not that of a ground file of this version")
        })?;
        let (sum, payload) = rest
            .split_at_checked(32)
            .ok_or_else(|| damaged("it is cut short"))?;
        if Sha256::digest(payload).as_slice() != sum {
            return Err(damaged("its checksum does not fit"));
        }
        let file: Self = postcard::from_bytes(payload).map_err(|e| damaged(&e.to_string()))?;
        if file.site_digest != site_digest {
            return Err(GroundFileError::Stale(path));
        }
        Ok(file)
    }
}

/// Lower-case hexadecimal text.
fn hex(bytes: &[u8]) -> String {
    bytes.iter().map(|b| format!("{b:02x}")).collect()
}
