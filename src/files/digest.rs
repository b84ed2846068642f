//! Digests of files: what a run was made from, and whether it was touched since.

use serde::{Deserialize, Serialize};

/// A file with its digest.
#[derive(Clone, Debug, PartialEq, Eq, PartialOrd, Ord, Serialize, Deserialize)]
pub struct FileDigest {
    /// Path: of an input as it was opened, of an output relative to the run directory, with `/`.
    pub path: String,
    /// SHA-256 in lower-case hexadecimal.
    pub sha256: String,
}

/// Bytes as lower-case hexadecimal.
pub(super) fn hexadecimal(bytes: &[u8]) -> String {
    bytes.iter().map(|byte| format!("{byte:02x}")).collect()
}
