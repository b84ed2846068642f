//! Leaving nothing behind when the program is interrupted.
//!
//! Directories that are being written are on a list. The handler of Ctrl-C (and of a request to terminate) removes them
//! and ends the process. It waits for the lock of the list, which is held while a finished result takes its place, so
//! that this is done either wholly or not at all.

use std::path::{Path, PathBuf};
use std::sync::{Mutex, MutexGuard, PoisonError};

/// Exit status after an interrupt: 128 + 2, as shells report a process that SIGINT ended.
const INTERRUPTED: i32 = 130;

static UNFINISHED: Mutex<Vec<PathBuf>> = Mutex::new(Vec::new());

/// While it lives, an interrupt waits.
pub(super) struct Undisturbed(MutexGuard<'static, Vec<PathBuf>>);

impl Undisturbed {
    pub fn enter() -> Self {
        // The list stays meaningful even if a thread panicked while it held the lock.
        Undisturbed(UNFINISHED.lock().unwrap_or_else(PoisonError::into_inner))
    }

    pub fn add(&mut self, directory: &Path) {
        self.0.push(directory.to_path_buf());
    }

    pub fn forget(&mut self, directory: &Path) {
        self.0.retain(|d| d != directory);
    }
}

/// Makes Ctrl-C remove what is unfinished and end the process with status 130. To be called once, by the program.
///
/// # Errors
/// When the system refuses the handler, or there is one already.
pub fn remove_unfinished_on_interrupt() -> Result<(), ctrlc::Error> {
    ctrlc::set_handler(|| {
        let list = Undisturbed::enter();
        for directory in list.0.iter() {
            // Nothing can be done about a failure here, and the process is about to end.
            let _ = std::fs::remove_dir_all(directory);
        }
        // An empty list: the result took its place while this waited, or there was nothing to write yet.
        let outcome = if list.0.is_empty() { "" } else { "; nothing was written" };
        eprintln!("interrupted{outcome}");
        std::process::exit(INTERRUPTED);
    })
}
