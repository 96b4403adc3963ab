//! Results for people and programs: records in, text out; made maps in, a folder of files out.

pub mod encode;
pub mod folder;
pub mod json;
pub mod number;
pub mod table;

use std::io::{ErrorKind, Write};
use std::path::{Path, PathBuf};

use tempfile::NamedTempFile;

/// How the name of an unfinished file or folder begins.
const PART_PREFIX: &str = ".jetspan-";
/// How it ends.
const PART_SUFFIX: &str = ".part";

/// Why a result could not be written.
#[derive(Debug, thiserror::Error)]
pub enum WriteError {
    /// The target cannot be opened or written.
    #[error("cannot write {}: {reason}; name a file in a folder that exists and may be written to", path.display())]
    Target {
        /// The target.
        path: PathBuf,
        /// The system's reason.
        reason: String,
    },
    /// A folder cannot be made or filled.
    #[error("cannot make the folder {}: {reason}; name a new folder inside one that exists and may be written to", path.display())]
    Folder {
        /// The folder.
        path: PathBuf,
        /// What is in the way.
        reason: String,
    },
    /// Two files of a folder have one name, or a name is a path.
    #[error("a file in {} cannot be called {name:?}: {reason}; give every map a name of its own", path.display())]
    FileName {
        /// The folder.
        path: PathBuf,
        /// The name.
        name: String,
        /// What is wrong with it.
        reason: &'static str,
    },
    /// The target is one of the files read.
    #[error("{} is read by this call; name another file for the output", path.display())]
    OutputIsInput {
        /// The file.
        path: PathBuf,
    },
    /// Standard output cannot be written.
    #[error("cannot write to standard output: {reason}")]
    StandardOutput {
        /// The system's reason.
        reason: String,
    },
    /// Whoever read standard output has stopped reading: no failure, but no reason to go on.
    #[error("standard output was closed")]
    ClosedPipe,
}

/// Where results go: standard output, or a file that appears whole or not at all.
pub struct Target {
    path: PathBuf,
    sink: Sink,
}

enum Sink {
    StandardOutput,
    /// A new file that takes the target's place at the end.
    Replacing(NamedTempFile),
    /// A device or pipe, written as it comes.
    Stream(std::fs::File),
}

impl Target {
    /// Opens the target before the long work, so that a bad name costs nothing.
    ///
    /// # Errors
    /// Where it is a folder, or its folder is missing or may not be written to.
    pub fn open(path: &Path) -> Result<Self, WriteError> {
        let fail = |reason: String| WriteError::Target { path: path.to_path_buf(), reason };
        if path == Path::new("-") {
            return Ok(Self { path: path.to_path_buf(), sink: Sink::StandardOutput });
        }
        let existing = std::fs::metadata(path).ok();
        if existing.as_ref().is_some_and(std::fs::Metadata::is_dir) {
            return Err(fail("it is a folder".to_owned()));
        }
        if existing.as_ref().is_some_and(|m| !m.is_file()) {
            let file = std::fs::OpenOptions::new()
                .write(true)
                .open(path)
                .map_err(|e| fail(e.to_string()))?;
            return Ok(Self { path: path.to_path_buf(), sink: Sink::Stream(file) });
        }
        if existing.as_ref().is_some_and(|m| m.permissions().readonly()) {
            return Err(fail("it is read-only".to_owned()));
        }
        // A link is written through: its target is what gets replaced.
        let real = path.canonicalize().unwrap_or_else(|_| path.to_path_buf());
        let file = new_file_in(folder_around(&real)).map_err(|e| fail(e.to_string()))?;
        Ok(Self { path: real, sink: Sink::Replacing(file) })
    }

    /// Whether this is standard output.
    pub fn is_standard_output(&self) -> bool {
        matches!(self.sink, Sink::StandardOutput)
    }

    /// Adds bytes.
    ///
    /// # Errors
    /// Where the system refuses them (a full disk, say).
    pub fn write(&mut self, bytes: &[u8]) -> Result<(), WriteError> {
        let result = match &mut self.sink {
            Sink::StandardOutput => return print_bytes(bytes),
            Sink::Replacing(file) => file.write_all(bytes),
            Sink::Stream(file) => file.write_all(bytes),
        };
        result.map_err(|e| WriteError::Target { path: self.path.clone(), reason: e.to_string() })
    }

    /// Puts the file in its place.
    ///
    /// # Errors
    /// Where that fails; the old file, if any, is then still there.
    pub fn finish(self) -> Result<(), WriteError> {
        let fail = |reason: String| WriteError::Target { path: self.path.clone(), reason };
        match self.sink {
            Sink::Replacing(file) => {
                file.as_file().sync_all().map_err(|e| fail(e.to_string()))?;
                file.persist(&self.path).map_err(|e| fail(e.error.to_string()))?;
            }
            Sink::StandardOutput | Sink::Stream(_) => {}
        }
        Ok(())
    }
}

/// The folder that holds this path.
fn folder_around(path: &Path) -> &Path {
    path.parent().filter(|parent| !parent.as_os_str().is_empty()).unwrap_or(Path::new("."))
}

/// A file beside the target, with the permissions of an ordinary new file.
fn new_file_in(folder: &Path) -> std::io::Result<NamedTempFile> {
    let mut builder = tempfile::Builder::new();
    builder.prefix(PART_PREFIX).suffix(PART_SUFFIX);
    #[cfg(unix)]
    {
        use std::os::unix::fs::PermissionsExt;
        builder.permissions(std::fs::Permissions::from_mode(0o666));
    }
    builder.tempfile_in(folder)
}

/// Prints text.
///
/// # Errors
/// [`WriteError::ClosedPipe`] where nobody reads any more, else the system's reason.
pub fn print(text: &str) -> Result<(), WriteError> {
    print_bytes(text.as_bytes())
}

fn print_bytes(bytes: &[u8]) -> Result<(), WriteError> {
    let mut out = std::io::stdout().lock();
    match out.write_all(bytes).and_then(|()| out.flush()) {
        Ok(()) => Ok(()),
        Err(e) if e.kind() == ErrorKind::BrokenPipe => Err(WriteError::ClosedPipe),
        Err(e) => Err(WriteError::StandardOutput { reason: e.to_string() }),
    }
}
