//! The progress bar, and the way to stop a run.

use crate::job::Progress;
use indicatif::{ProgressBar, ProgressDrawTarget, ProgressStyle};
use std::io::IsTerminal;
use std::sync::atomic::{AtomicBool, Ordering};
use std::sync::{Once, OnceLock};

static STOPPED: AtomicBool = AtomicBool::new(false);

/// The first Ctrl-C (or request to end) stops the run cleanly; the second ends the process at once.
fn listen() {
    static LISTENING: Once = Once::new();
    LISTENING.call_once(|| {
        // If no handler can be set, the system's own ends the process: outputs never stand under their name half-written.
        let _ = ctrlc::set_handler(|| {
            if STOPPED.swap(true, Ordering::SeqCst) {
                std::process::exit(1);
            }
        });
    });
}

/// A bar on stderr, drawn only on a terminal.
pub struct Bar {
    name: String,
    quiet: bool,
    bar: OnceLock<ProgressBar>,
}

impl Bar {
    pub fn new(name: &str, quiet: bool) -> Self {
        listen();
        Bar { name: name.to_owned(), quiet: quiet || !std::io::stderr().is_terminal(), bar: OnceLock::new() }
    }

    /// Takes the bar off the screen.
    pub fn clear(&self) {
        if let Some(bar) = self.bar.get() {
            bar.finish_and_clear();
        }
    }
}

impl Progress for Bar {
    fn advance(&self, done: u64, total: u64) {
        if self.quiet {
            return;
        }
        let bar = self.bar.get_or_init(|| {
            let bar = ProgressBar::with_draw_target(Some(total), ProgressDrawTarget::stderr_with_hz(8));
            let style = ProgressStyle::with_template("{msg} {wide_bar} {percent:>3} %  {eta} left");
            bar.set_style(style.unwrap_or_else(|_| ProgressStyle::default_bar()));
            bar.set_message(self.name.clone());
            bar
        });
        bar.set_position(done);
    }

    fn stopped(&self) -> bool {
        STOPPED.load(Ordering::SeqCst)
    }
}
