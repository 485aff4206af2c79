//! Room on the disk: a low-water mark for readings, a reserve for alarms.

use std::fs::{self, File};
use std::io::Write;
use std::path::{Path, PathBuf};

use super::error::{Result, StoreError};
use super::options::StoreOptions;

/// Watches the free space of the folder's file system and keeps the reserve file.
#[derive(Debug)]
pub(super) struct Space {
    folder: PathBuf,
    reserve_path: PathBuf,
    low_water: u64,
    floor: u64,
    reserve: u64,
}

impl Space {
    pub(super) fn new(folder: &Path, options: &StoreOptions) -> Self {
        Self {
            folder: folder.to_owned(),
            reserve_path: folder.join("borewake.reserve"),
            low_water: options.low_water,
            floor: options.floor,
            reserve: options.reserve,
        }
    }

    /// Bytes an ordinary user may still write.
    fn available(&self) -> Result<u64> {
        let stat = rustix::fs::statvfs(&self.folder).map_err(|e| StoreError::File {
            path: self.folder.clone(),
            doing: "ask for free space",
            source: e.into(),
        })?;
        Ok(stat.f_bavail.saturating_mul(stat.f_frsize))
    }

    /// Before readings are committed: refuses below the low-water mark, and makes the reserve again once
    /// there is room for both.
    pub(super) fn for_readings(&self) -> Result<()> {
        if self.low_water == 0 {
            return Ok(());
        }
        let available = self.available()?;
        if available < self.low_water {
            return Err(StoreError::LowSpace {
                folder: self.folder.clone(),
                available,
                low_water: self.low_water,
            });
        }
        if available >= self.low_water.saturating_add(self.reserve) {
            self.make_reserve();
        }
        Ok(())
    }

    /// Before alarms are written: gives up the reserve where nothing else is left.
    pub(super) fn for_alarms(&self) -> Result<()> {
        if self.floor > 0 && self.available()? < self.floor {
            self.release();
        }
        Ok(())
    }

    /// Gives up the reserve; says whether there was one.
    pub(super) fn release(&self) -> bool {
        let released = fs::remove_file(&self.reserve_path).is_ok();
        if released {
            tracing::warn!(folder = %self.folder.display(), "disk nearly full: the reserve is given up");
        }
        released
    }

    /// Makes the reserve if it is not there. A failure is only logged: readings still have their room.
    fn make_reserve(&self) {
        if self.reserve == 0 || self.reserve_path.exists() {
            return;
        }
        if let Err(error) = write_zeros(&self.reserve_path, self.reserve) {
            tracing::warn!(path = %self.reserve_path.display(), %error, "the reserve cannot be made");
            let _ = fs::remove_file(&self.reserve_path);
        }
    }
}

/// Written out rather than allocated: not every file system of a small device can allocate.
fn write_zeros(path: &Path, bytes: u64) -> std::io::Result<()> {
    let mut file = File::create(path)?;
    let block = [0_u8; 64 << 10];
    let mut left = bytes;
    while left > 0 {
        let now = usize::try_from(left).map_or(block.len(), |n| n.min(block.len()));
        file.write_all(block.get(..now).unwrap_or(&block))?;
        left = left.saturating_sub(64 << 10);
    }
    file.sync_all()
}

#[cfg(test)]
mod tests {
    use super::{Space, StoreOptions};

    fn space(folder: &std::path::Path, low_water: u64, floor: u64) -> Space {
        let options = StoreOptions {
            low_water,
            floor,
            reserve: 100_000,
            ..StoreOptions::default()
        };
        Space::new(folder, &options)
    }

    #[test]
    fn reserve_is_made_given_up_and_made_again() {
        let dir = tempfile::tempdir().unwrap();
        let reserve = dir.path().join("borewake.reserve");
        let roomy = space(dir.path(), 1, 1);
        let scarce = space(dir.path(), u64::MAX, u64::MAX);

        roomy.for_readings().unwrap();
        assert_eq!(reserve.metadata().unwrap().len(), 100_000);
        assert!(scarce.for_readings().unwrap_err().is_space());
        assert!(
            reserve.exists(),
            "a refused commit leaves the reserve to alarms"
        );
        scarce.for_alarms().unwrap();
        assert!(!reserve.exists());
        roomy.for_readings().unwrap();
        assert!(reserve.exists());
    }
}
