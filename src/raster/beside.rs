//! Files in the making: written beside their name, synced, renamed; gone if they are not finished.

use crate::error::{Error, Result};
use crate::raster::Positioned;
use std::fs::{File, OpenOptions};
use std::io::{Seek, SeekFrom, Write};
use std::path::{Path, PathBuf};

/// A file that takes its name only when it is finished.
pub struct Beside {
    file: File,
    path: PathBuf,
    temporary: PathBuf,
    finished: bool,
}

impl Beside {
    /// Creates the temporary file in the folder of `path`.
    ///
    /// # Errors
    /// When the folder is missing or closed, or `path` exists and `overwrite` is false.
    pub fn create(path: &Path, overwrite: bool) -> Result<Self> {
        check_free(path, overwrite)?;
        let name = path.file_name().map(|n| n.to_string_lossy().into_owned()).unwrap_or_default();
        let temporary = path.with_file_name(format!(".{name}.{}.part", std::process::id()));
        let file = OpenOptions::new()
            .read(true)
            .write(true)
            .create(true)
            .truncate(true)
            .open(&temporary)
            .map_err(|e| Error::io(path, "creating", e))?;
        Ok(Beside { file, path: path.to_owned(), temporary, finished: false })
    }

    /// The name it will have.
    pub fn path(&self) -> &Path {
        &self.path
    }

    /// Writes at a place, wherever the writing position is.
    pub fn write_at(&self, bytes: &[u8], at: u64) -> std::io::Result<()> {
        self.file.write_all_at_offset(bytes, at)
    }

    /// Syncs and renames.
    ///
    /// # Errors
    /// When the disk refuses; the temporary file goes then.
    pub fn finish(mut self) -> Result<()> {
        let io = |doing: &str, e| Error::io(&self.path, doing, e);
        self.file.sync_all().map_err(|e| io("writing to the disk", e))?;
        std::fs::rename(&self.temporary, &self.path).map_err(|e| io("giving the file its name", e))?;
        self.finished = true;
        // The new name itself must survive a power cut; not every system lets a folder be synced.
        if let Some(folder) =
            self.path.parent().filter(|p| !p.as_os_str().is_empty()).or(Some(Path::new(".")))
            && let Ok(folder) = File::open(folder)
        {
            let _ = folder.sync_all();
        }
        Ok(())
    }
}

/// Refuses a name that is taken, or whose folder is missing.
///
/// # Errors
/// Says which.
pub fn check_free(path: &Path, overwrite: bool) -> Result<()> {
    let folder = path.parent().filter(|p| !p.as_os_str().is_empty()).unwrap_or(Path::new("."));
    if !folder.is_dir() {
        let missing =
            std::io::Error::new(std::io::ErrorKind::NotFound, "this folder does not exist; make it first");
        return Err(Error::io(folder, &format!("creating {}", path.display()), missing));
    }
    if path.is_dir() {
        return Err(Error::usage(format!("{} is a folder", path.display()), "name a file"));
    }
    if path.file_name().is_none() {
        return Err(Error::usage(format!("{} is no file name", path.display()), "name a file"));
    }
    if !overwrite && path.exists() {
        return Err(Error::usage(
            format!("{} exists", path.display()),
            "give --overwrite to replace it, or another name",
        ));
    }
    Ok(())
}

impl Write for Beside {
    fn write(&mut self, buf: &[u8]) -> std::io::Result<usize> {
        self.file.write(buf)
    }
    fn flush(&mut self) -> std::io::Result<()> {
        self.file.flush()
    }
}

impl Seek for Beside {
    fn seek(&mut self, to: SeekFrom) -> std::io::Result<u64> {
        self.file.seek(to)
    }
}

impl Drop for Beside {
    fn drop(&mut self) {
        if !self.finished {
            // Nothing can be done if this fails too; the name itself was never touched.
            let _ = std::fs::remove_file(&self.temporary);
        }
    }
}
