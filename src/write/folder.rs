//! A folder of results that appears whole or not at all.
//!
//! The files are written into a hidden folder beside the target, which takes the target's
//! name at the end. Nothing is left of it where the work fails. Files are not forced onto the
//! disk one by one (a folder may hold a hundred thousand of them): a folder that appeared is
//! complete for every program, but may not outlive a power cut in the next seconds.

use std::fs::{File, OpenOptions};
use std::io::{BufWriter, ErrorKind, Write};
use std::path::{Component, Path, PathBuf};

use tempfile::TempDir;

use super::{PART_PREFIX, PART_SUFFIX, WriteError, folder_around};

/// A folder under construction.
pub struct Folder {
    /// As named by the caller.
    path: PathBuf,
    /// Where it will be: links followed.
    real: PathBuf,
    /// Permissions of the empty folder that it replaces.
    permissions: Option<std::fs::Permissions>,
    part: TempDir,
}

impl Folder {
    /// Begins a folder, before the long work, so that a bad name costs nothing. An empty
    /// folder of that name is replaced at the end.
    ///
    /// # Errors
    /// Where the path is a file, a folder with something in it, the current folder or a mount
    /// point (neither can be replaced), or where the folder around it is missing or may not be
    /// written to.
    pub fn create(path: &Path) -> Result<Self, WriteError> {
        let fail = |reason: String| WriteError::Folder { path: path.to_path_buf(), reason };
        let mut real = path.to_path_buf();
        let mut permissions = None;
        match std::fs::metadata(path) {
            Ok(found) => {
                let obstacle = |e: std::io::Error| fail(e.to_string());
                if !found.is_dir() {
                    return Err(fail("there is a file of that name".to_owned()));
                }
                if std::fs::read_dir(path).map_err(obstacle)?.next().is_some() {
                    return Err(fail("there is a folder of that name with files in it".to_owned()));
                }
                real = path.canonicalize().map_err(obstacle)?;
                if std::env::current_dir().is_ok_and(|current| current == real) {
                    return Err(fail("it is the current folder".to_owned()));
                }
                if is_mount_point(&found, folder_around(&real)) {
                    return Err(fail("a file system is mounted there".to_owned()));
                }
                permissions = Some(found.permissions());
            }
            Err(_) if path.symlink_metadata().is_ok() => {
                return Err(fail("there is a link of that name that leads nowhere".to_owned()));
            }
            Err(e) if e.kind() == ErrorKind::NotFound => {}
            Err(e) => return Err(fail(e.to_string())),
        }
        if real.file_name().is_none() {
            return Err(fail("this is no name for a folder".to_owned()));
        }
        let around = folder_around(&real);
        if !around.is_dir() {
            return Err(fail(format!("there is no folder {}", around.display())));
        }
        let part = tempfile::Builder::new()
            .prefix(PART_PREFIX)
            .suffix(PART_SUFFIX)
            .tempdir_in(around)
            .map_err(|e| {
                fail(format!("{} cannot be written to: {}", around.display(), e.kind()))
            })?;
        Ok(Self { path: path.to_path_buf(), real, permissions, part })
    }

    /// Begins a file of the folder.
    ///
    /// # Errors
    /// A name that is taken or is a path, or the system's reason.
    pub fn file(&self, name: &str) -> Result<FolderFile, WriteError> {
        let refused = |reason| WriteError::FileName {
            path: self.path.clone(),
            name: name.to_owned(),
            reason,
        };
        let mut parts = Path::new(name).components();
        if !matches!((parts.next(), parts.next()), (Some(Component::Normal(n)), None) if n == name)
        {
            return Err(refused("it is no plain name"));
        }
        match OpenOptions::new().write(true).create_new(true).open(self.part.path().join(name)) {
            Ok(file) => Ok(FolderFile { folder: self.path.clone(), file: BufWriter::new(file) }),
            Err(e) if e.kind() == ErrorKind::AlreadyExists => Err(refused("the name is taken")),
            Err(e) => Err(WriteError::Folder { path: self.path.clone(), reason: e.to_string() }),
        }
    }

    /// Adds a whole file.
    ///
    /// # Errors
    /// As [`Self::file`], or where the system refuses the bytes (a full disk, say).
    pub fn add(&self, name: &str, bytes: &[u8]) -> Result<(), WriteError> {
        let mut file = self.file(name)?;
        file.write(bytes)?;
        file.finish()
    }

    /// Puts the folder in its place.
    ///
    /// # Errors
    /// Where that fails, because somebody has put something there meanwhile, say: nothing of
    /// the new folder is then left.
    pub fn finish(self) -> Result<(), WriteError> {
        let Self { path, real, permissions, part } = self;
        let fail = |e: std::io::Error| WriteError::Folder { path, reason: e.to_string() };
        let moved = match permissions {
            Some(permissions) => std::fs::set_permissions(part.path(), permissions),
            None => Ok(()),
        }
        .and_then(|()| std::fs::rename(part.path(), &real));
        match moved {
            Ok(()) => {
                // It is no longer where it was made: there is nothing to remove.
                let _ = part.keep();
                Ok(())
            }
            Err(e) => Err(fail(e)),
        }
    }
}

/// A file of a folder, written bit by bit.
pub struct FolderFile {
    folder: PathBuf,
    file: BufWriter<File>,
}

impl FolderFile {
    /// Adds bytes.
    ///
    /// # Errors
    /// Where the system refuses them (a full disk, say).
    pub fn write(&mut self, bytes: &[u8]) -> Result<(), WriteError> {
        self.file
            .write_all(bytes)
            .map_err(|e| WriteError::Folder { path: self.folder.clone(), reason: e.to_string() })
    }

    /// Ends the file.
    ///
    /// # Errors
    /// As [`Self::write`].
    pub fn finish(mut self) -> Result<(), WriteError> {
        self.file
            .flush()
            .map_err(|e| WriteError::Folder { path: self.folder.clone(), reason: e.to_string() })
    }
}

/// Whether a folder is on another file system than the one around it: no folder made beside
/// it can take its place.
#[cfg(unix)]
fn is_mount_point(folder: &std::fs::Metadata, around: &Path) -> bool {
    use std::os::unix::fs::MetadataExt;
    std::fs::metadata(around).is_ok_and(|around| around.dev() != folder.dev())
}

#[cfg(not(unix))]
fn is_mount_point(_folder: &std::fs::Metadata, _around: &Path) -> bool {
    false
}

#[cfg(test)]
mod tests {
    use super::*;

    fn names(folder: &Path) -> Vec<String> {
        let mut names: Vec<String> = std::fs::read_dir(folder)
            .expect("a folder")
            .map(|entry| entry.expect("an entry").file_name().to_string_lossy().into_owned())
            .collect();
        names.sort();
        names
    }

    #[test]
    fn a_folder_appears_at_the_end_only() {
        let around = tempfile::tempdir().expect("a folder");
        let path = around.path().join("made");
        let folder = Folder::create(&path).expect("can be made");
        folder.add("a", b"1").expect("added");
        let mut list = folder.file("list").expect("begun");
        list.write(b"x\n").expect("written");
        list.write(b"y\n").expect("written");
        list.finish().expect("ended");
        assert!(!path.exists());
        folder.finish().expect("in its place");
        assert_eq!(names(around.path()), ["made"], "nothing else is left");
        assert_eq!(names(&path), ["a", "list"]);
        assert_eq!(std::fs::read(path.join("list")).expect("there"), b"x\ny\n");
    }

    #[test]
    fn nothing_is_left_of_a_folder_that_is_given_up() {
        let around = tempfile::tempdir().expect("a folder");
        let folder = Folder::create(&around.path().join("made")).expect("can be made");
        folder.add("a", b"1").expect("added");
        assert_eq!(names(around.path()).len(), 1);
        drop(folder);
        assert_eq!(names(around.path()), [""; 0]);
    }

    #[test]
    fn somebody_elses_folder_is_not_replaced_at_the_end() {
        let around = tempfile::tempdir().expect("a folder");
        let path = around.path().join("made");
        let folder = Folder::create(&path).expect("can be made");
        // It comes into being while we work.
        std::fs::create_dir(&path).expect("made");
        std::fs::write(path.join("theirs"), "1").expect("written");
        assert!(matches!(folder.finish(), Err(WriteError::Folder { .. })));
        assert_eq!(names(around.path()), ["made"]);
        assert_eq!(names(&path), ["theirs"]);
    }

    #[test]
    fn names_are_plain_and_taken_once() {
        let around = tempfile::tempdir().expect("a folder");
        let folder = Folder::create(&around.path().join("made")).expect("can be made");
        folder.add("a", b"1").expect("added");
        for (name, part) in [
            ("a", "taken"),
            ("", "plain"),
            ("..", "plain"),
            ("b/c", "plain"),
            ("b/", "plain"),
            ("/b", "plain"),
        ] {
            let error = folder.add(name, b"2").expect_err(name).to_string();
            assert!(error.contains(part) && error.contains(&format!("{name:?}")), "{error}");
        }
        folder.finish().expect("in its place");
        assert_eq!(std::fs::read(around.path().join("made/a")).expect("there"), b"1");
    }
}
