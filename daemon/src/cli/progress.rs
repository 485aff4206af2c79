//! Progress bars: on a terminal, and nowhere else.

use indicatif::{ProgressBar, ProgressDrawTarget, ProgressStyle};

/// A bar over so many bytes of input.
#[must_use]
pub(super) fn bytes(total: u64, what: &'static str) -> ProgressBar {
    styled(
        total,
        what,
        "{msg:24} [{bar:30}] {percent:>3} %  {eta} left",
    )
}

/// A bar over shares of a thousand.
#[must_use]
pub(super) fn share(what: &'static str) -> ProgressBar {
    styled(1000, what, "{msg:24} [{bar:30}] {percent:>3} %  {elapsed}")
}

fn styled(total: u64, what: &'static str, template: &str) -> ProgressBar {
    // indicatif draws nothing where standard error is no terminal.
    let bar = ProgressBar::with_draw_target(Some(total), ProgressDrawTarget::stderr());
    if let Ok(style) = ProgressStyle::with_template(template) {
        bar.set_style(style.progress_chars("=> "));
    }
    bar.set_message(what);
    bar
}
