//! Whole files or none: written beside their final name, then renamed.

use std::fs::{self, OpenOptions};
use std::io::{self, BufWriter, Write};
use std::path::{Path, PathBuf};

use super::error::IoError;

/// Folder a file lies in.
fn folder_of(path: &Path) -> PathBuf {
    match path.parent() {
        Some(parent) if !parent.as_os_str().is_empty() => parent.to_owned(),
        _ => PathBuf::from("."),
    }
}

/// Whether the path is something that is not an ordinary file (a device such as /dev/stdout): written in place.
fn is_special(path: &Path) -> bool {
    path.metadata().is_ok_and(|m| !m.is_file() && !m.is_dir())
}

/// Refuses early what could not be written at the end: a folder in place of the file, a missing or read-only folder.
///
/// # Errors
/// [`IoError::System`] with what the system said, [`IoError::Setting`] for a folder.
pub fn ensure_writable(path: &Path) -> Result<(), IoError> {
    if path.is_dir() {
        return Err(IoError::setting("--out", format!("{} is a folder; name a file", path.display())));
    }
    if is_special(path) {
        return OpenOptions::new().write(true).open(path).map(drop).map_err(|e| IoError::system("write", path, e));
    }
    let folder = folder_of(path);
    if !folder.is_dir() {
        return Err(IoError::setting("--out", format!("the folder {} does not exist", folder.display())));
    }
    tempfile::Builder::new()
        .prefix(".isopsi-")
        .tempfile_in(&folder)
        .map(drop)
        .map_err(|e| IoError::system("write into", folder, e))
}

/// Writes a file through `fill`; it appears under its name only when everything was written.
///
/// # Errors
/// [`IoError::System`]; the temporary file is removed.
pub fn write_whole(path: &Path, fill: impl FnOnce(&mut dyn Write) -> io::Result<()>) -> Result<(), IoError> {
    let failed = |e| IoError::system("write", path, e);
    if is_special(path) {
        let mut file = BufWriter::new(OpenOptions::new().write(true).open(path).map_err(failed)?);
        return fill(&mut file).and_then(|()| file.flush()).map_err(failed);
    }
    replace(path, |temporary| {
        let file = OpenOptions::new().write(true).open(temporary).map_err(failed)?;
        let mut writer = BufWriter::new(file);
        fill(&mut writer).and_then(|()| writer.flush()).map_err(failed)?;
        writer.get_ref().sync_all().map_err(failed)
    })
}

/// Lets `make` write a temporary file beside `path`, then renames it.
///
/// # Errors
/// What `make` returns, or [`IoError::System`]; the temporary file is removed.
pub fn replace(path: &Path, make: impl FnOnce(&Path) -> Result<(), IoError>) -> Result<(), IoError> {
    let failed = |e| IoError::system("write", path, e);
    if path.is_dir() {
        return Err(IoError::setting("--out", format!("{} is a folder; name a file", path.display())));
    }
    let mut builder = tempfile::Builder::new();
    builder.prefix(".isopsi-").suffix(".tmp");
    // Ordinary permissions: a result is for colleagues too.
    #[cfg(unix)]
    {
        use std::os::unix::fs::PermissionsExt;
        builder.permissions(fs::Permissions::from_mode(0o666));
    }
    let temporary = builder.tempfile_in(folder_of(path)).map_err(failed)?.into_temp_path();
    make(&temporary)?;
    temporary.persist(path).map_err(|e| failed(e.error))
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn a_failed_write_leaves_nothing_behind_and_keeps_the_old_file() {
        let folder = tempfile::tempdir().unwrap();
        let path = folder.path().join("a.txt");
        fs::write(&path, "old").unwrap();
        let error = write_whole(&path, |w| {
            w.write_all(b"half")?;
            Err(io::Error::new(io::ErrorKind::StorageFull, "no space left on device"))
        })
        .unwrap_err();
        assert!(error.to_string().contains("no space left"), "{error}");
        assert_eq!(fs::read_to_string(&path).unwrap(), "old");
        assert_eq!(fs::read_dir(folder.path()).unwrap().count(), 1);
    }

    #[test]
    fn a_full_device_and_impossible_places_are_named() {
        let full = write_whole(Path::new("/dev/full"), |w| w.write_all(&[0; 100_000])).unwrap_err();
        assert_eq!(full.blame(), crate::io::Blame::Machine);
        assert!(ensure_writable(Path::new("/no/such/folder/file")).unwrap_err().to_string().contains("does not exist"));
        assert!(ensure_writable(Path::new("/tmp")).unwrap_err().to_string().contains("is a folder"));
    }
}
