//! Files that appear whole: written aside, synced, renamed.

use std::fs::{self, File};
use std::io::{self, Write};
use std::path::Path;

/// Writes a file so that its name shows either nothing, the former content, or all of the new,
/// also after a power cut.
pub(crate) fn write_durably(path: &Path, content: &[u8]) -> io::Result<()> {
    let folder = path.parent().filter(|folder| !folder.as_os_str().is_empty()).unwrap_or(Path::new("."));
    fs::create_dir_all(folder)?;
    let name = path.file_name().ok_or_else(|| io::Error::from(io::ErrorKind::InvalidInput))?;
    let aside = folder.join(format!(".{}.{}", name.to_string_lossy(), std::process::id()));
    let written = File::create(&aside).and_then(|mut file| {
        file.write_all(content)?;
        file.sync_all()
    });
    if let Err(error) = written.and_then(|()| fs::rename(&aside, path)) {
        // The first error is the one to tell; what was written aside is of no use.
        let _ = fs::remove_file(&aside);
        return Err(error);
    }
    sync_folder(folder)
}

/// Makes a rename in a folder last through a power cut.
pub(crate) fn sync_folder(folder: &Path) -> io::Result<()> {
    File::open(folder)?.sync_all()
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn a_file_is_replaced_whole_and_nothing_is_left_aside() {
        let folder = tempfile::tempdir().unwrap();
        let path = folder.path().join("a/b.json");
        write_durably(&path, b"one").unwrap();
        write_durably(&path, b"two").unwrap();
        assert_eq!(fs::read(&path).unwrap(), b"two");
        assert_eq!(fs::read_dir(path.parent().unwrap()).unwrap().count(), 1);
        assert!(write_durably(&path.join("below a file"), b"x").is_err());
    }
}
