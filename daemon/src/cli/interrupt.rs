//! What SIGINT and SIGTERM do to a verb that is no daemon: it ends at once with its own code and leaves no scratch behind.

use std::io;
use std::path::{Path, PathBuf};
use std::sync::{Mutex, PoisonError};

use tokio::signal::unix::{SignalKind, signal};

use super::Exit;

/// Folders that go when the program ends before its time.
static SCRATCH: Mutex<Vec<PathBuf>> = Mutex::new(Vec::new());

/// Ends the program with [`Exit::Interrupted`] when somebody interrupts it. Needs no runtime, and works while the main
/// thread computes. Files the verbs write are whole or marked as their own, so that nothing else need be undone.
///
/// # Errors
/// The system gives no thread.
pub(super) fn end_when_interrupted() -> io::Result<()> {
    std::thread::Builder::new()
        .name("signals".into())
        .spawn(|| {
            if let Err(why) = wait() {
                tracing::warn!(%why, "signals cannot be waited for");
                return;
            }
            let folders = SCRATCH.lock().unwrap_or_else(PoisonError::into_inner);
            for folder in folders.iter() {
                let _ = std::fs::remove_dir_all(folder);
            }
            eprintln!("borewake: interrupted");
            std::process::exit(Exit::Interrupted.code().into());
        })?;
    Ok(())
}

fn wait() -> io::Result<()> {
    let runtime = tokio::runtime::Builder::new_current_thread()
        .enable_all()
        .build()?;
    runtime.block_on(async {
        let mut terminate = signal(SignalKind::terminate())?;
        let mut interrupt = signal(SignalKind::interrupt())?;
        tokio::select! {
            _ = terminate.recv() => {}
            _ = interrupt.recv() => {}
        }
        Ok(())
    })
}

/// This folder goes if the program is interrupted.
pub(super) fn scratch(folder: &Path) {
    let mut folders = SCRATCH.lock().unwrap_or_else(PoisonError::into_inner);
    folders.push(folder.to_owned());
}
