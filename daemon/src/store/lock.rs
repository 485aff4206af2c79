//! Keeps two daemons out of one folder.

use std::fs::{File, OpenOptions, TryLockError};
use std::io::{Read, Seek, Write};
use std::path::Path;

use super::error::{Result, StoreError};

/// An exclusive hold on a folder, for as long as it lives. The system lets go of it when the process ends,
/// however it ends.
#[derive(Debug)]
pub(super) struct FolderLock {
    file: File,
}

/// Unlocks rather than only closing: a process that is just being started holds a copy of every open file until
/// it runs its own program, and would hold the lock as long.
impl Drop for FolderLock {
    fn drop(&mut self) {
        let _ = self.file.unlock();
    }
}

impl FolderLock {
    pub(super) fn take(folder: &Path) -> Result<Self> {
        let path = folder.join("borewake.lock");
        let file_error = |doing| {
            let path = path.clone();
            move |source| StoreError::File {
                path,
                doing,
                source,
            }
        };
        let mut file = OpenOptions::new()
            .read(true)
            .write(true)
            .create(true)
            .truncate(false)
            .open(&path)
            .map_err(file_error("open the lock"))?;
        match file.try_lock() {
            Ok(()) => {}
            Err(TryLockError::WouldBlock) => {
                let mut holder = String::new();
                // The text only serves the message.
                let _ = file.read_to_string(&mut holder);
                return Err(StoreError::Locked {
                    folder: folder.to_owned(),
                    holder: holder.trim().to_owned(),
                });
            }
            Err(TryLockError::Error(source)) => {
                return Err(file_error("take the lock")(source));
            }
        }
        file.set_len(0)
            .and_then(|()| file.rewind())
            .and_then(|()| writeln!(file, "{}", std::process::id()))
            .map_err(file_error("write the lock"))?;
        Ok(Self { file })
    }
}
