//! Folders and files for tests.

use std::path::{Path, PathBuf};

/// The committed test data.
pub fn data(name: &str) -> PathBuf {
    Path::new(env!("CARGO_MANIFEST_DIR")).join("tests/data").join(name)
}

/// A temporary folder that goes away with the value.
pub fn temporary() -> tempfile::TempDir {
    tempfile::tempdir().expect("a temporary folder")
}

/// Writes bytes to a new file in a folder.
pub fn write(folder: &tempfile::TempDir, name: &str, bytes: &[u8]) -> PathBuf {
    let path = folder.path().join(name);
    std::fs::write(&path, bytes).expect("a writable temporary folder");
    path
}
