//! A progress bar with rate and time left, on standard error and only on a terminal.

use indicatif::{ProgressBar, ProgressDrawTarget, ProgressStyle};

use super::output::Voice;

/// A bar that counts finished items; hidden off a terminal or when quiet.
#[derive(Debug)]
pub struct Bar(ProgressBar);

impl Bar {
    /// Returns a bar over `total` items called `what`.
    #[must_use]
    pub fn new(total: u64, what: &'static str, voice: Voice) -> Self {
        let target = match voice {
            Voice::Normal => ProgressDrawTarget::stderr_with_hz(5),
            Voice::Quiet => ProgressDrawTarget::hidden(),
        };
        let bar = ProgressBar::with_draw_target(Some(total), target);
        let template = "{prefix} {bar:30} {human_pos}/{human_len}  {per_sec}  {eta} left";
        if let Ok(style) = ProgressStyle::with_template(template) {
            bar.set_style(style);
        }
        bar.set_prefix(what);
        Self(bar)
    }

    /// Counts finished items.
    pub fn advance(&self, items: u64) {
        self.0.inc(items);
    }

    /// Removes the bar.
    pub fn finish(&self) {
        self.0.finish_and_clear();
    }
}
