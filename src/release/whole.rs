//! Whole or absent: write beside the target, sync, rename, sync the folder.

use std::fs::{self, File};
use std::io::Write;
use std::path::{Path, PathBuf};

use crate::columnar::guard::io_reason;
use crate::error::{Error, Result};

/// Ending of files that are not finished.
pub(super) const UNFINISHED: &str = ".tmp";

/// An I/O failure on an output as a sentence with its place.
pub(super) fn write_error(path: &Path, error: &std::io::Error) -> Error {
    Error::failed(format!("The file cannot be written: {}.", io_reason(error))).in_file(path)
}

/// `name.tmp` beside `path`.
pub(super) fn unfinished(path: &Path) -> PathBuf {
    let mut name = path.as_os_str().to_owned();
    name.push(UNFINISHED);
    PathBuf::from(name)
}

/// Makes the names in a folder survive a power cut. Some network disks cannot sync a folder; that is no failure.
pub(super) fn sync_folder(folder: &Path) -> Result<()> {
    use std::io::ErrorKind as K;
    match File::open(folder).and_then(|handle| handle.sync_all()) {
        Ok(()) => Ok(()),
        Err(error) if matches!(error.kind(), K::InvalidInput | K::Unsupported) => Ok(()),
        Err(error) => Err(write_error(folder, &error)),
    }
}

/// Gives a finished and synced temporary file its final name.
pub(super) fn publish(temporary: &Path, target: &Path) -> Result<()> {
    fs::rename(temporary, target).map_err(|error| write_error(target, &error))?;
    sync_folder(target.parent().filter(|parent| !parent.as_os_str().is_empty()).unwrap_or(Path::new(".")))
}

/// Writes `bytes` as the file `path`: afterwards the file is complete and synced, or (on error) as it was before.
pub fn write_whole(path: &Path, bytes: &[u8]) -> Result<()> {
    let temporary = unfinished(path);
    let written = File::create(&temporary).and_then(|mut file| {
        file.write_all(bytes)?;
        file.sync_all()
    });
    if let Err(error) = written {
        // best effort: the error that matters is the one being reported
        let _ = fs::remove_file(&temporary);
        return Err(write_error(path, &error));
    }
    publish(&temporary, path).inspect_err(|_| {
        let _ = fs::remove_file(&temporary);
    })
}
