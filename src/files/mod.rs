//! What is read and written: detector and study files, run directories.

mod interrupt;
mod number;
mod run_read;
mod run_record;
mod run_target;
mod run_write;

pub use interrupt::remove_unfinished_on_interrupt;
pub use number::shortest;
pub use run_read::{Run, read_run};
pub use run_record::{FileDigest, FoldSummary, RunRecord, Skipped};
pub use run_target::{Committed, Staging, Target, TargetError};
pub use run_write::{NOMINAL, RunContents, write_templates};
