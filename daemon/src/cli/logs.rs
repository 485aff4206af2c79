//! Logs, to standard error.

use std::io::IsTerminal as _;

use tracing_subscriber::EnvFilter;

/// Starts logging once for the process. `BOREWAKE_LOG` chooses what is said; without it, warnings of others' code and
/// what the rooms say of themselves.
pub(super) fn start() {
    let chosen = std::env::var("BOREWAKE_LOG").unwrap_or_default();
    let chosen = if chosen.is_empty() {
        "warn,borewake=info".to_owned()
    } else {
        chosen
    };
    let filter = EnvFilter::builder().parse_lossy(chosen);
    // A second start, as in tests, keeps the first.
    let _ = tracing_subscriber::fmt()
        .with_env_filter(filter)
        .with_writer(std::io::stderr)
        .with_ansi(std::io::stderr().is_terminal())
        .try_init();
}
