//! From a file to an array of stored numbers: the decoder is chosen by the content, never by
//! the file's ending.

use std::fs::File;
use std::io::Read;
use std::path::Path;

use sha2::{Digest, Sha256};

use super::{image, npy, text};

/// A map must have fewer pixels than this.
pub const MAX_PIXELS: u64 = 1 << 31;
/// Longest file read, bytes: the largest map in double precision and room for a header.
const MAX_FILE_BYTES: u64 = MAX_PIXELS * 8 + (1 << 20);

/// The numbers of a map, row after row as stored.
#[derive(Clone, Debug, PartialEq)]
pub enum Samples {
    /// Single precision: holds 8- and 16-bit integers and half precision exactly.
    F32(Vec<f32>),
    /// Double precision.
    F64(Vec<f64>),
}

impl Samples {
    /// How many numbers there are.
    pub const fn len(&self) -> usize {
        match self {
            Self::F32(numbers) => numbers.len(),
            Self::F64(numbers) => numbers.len(),
        }
    }

    /// Whether there are none.
    pub const fn is_empty(&self) -> bool {
        self.len() == 0
    }

    /// The number at `index` (row × columns + column); NaN beyond the end.
    pub fn get(&self, index: usize) -> f64 {
        match self {
            Self::F32(numbers) => numbers.get(index).map_or(f64::NAN, |&n| f64::from(n)),
            Self::F64(numbers) => numbers.get(index).copied().unwrap_or(f64::NAN),
        }
    }
}

/// A two-dimensional array as a file stores it, with where it came from.
#[derive(Clone, Debug, PartialEq)]
pub struct StoredArray {
    /// The numbers, row-major; row 0 is the first row stored.
    pub samples: Samples,
    /// Number of rows.
    pub rows: usize,
    /// Number of columns.
    pub columns: usize,
    /// `npy`, `png` or `text`.
    pub format: &'static str,
    /// Type of the stored numbers: `bool`, `int16`, `uint8`, `float32` and so on.
    pub dtype: String,
    /// Shape as stored, axes of length one included.
    pub shape: Vec<u64>,
    /// SHA-256 of the file's bytes, 64 hexadecimal digits.
    pub sha256: String,
}

impl StoredArray {
    /// Whether the file stores whole numbers.
    pub fn is_integer(&self) -> bool {
        self.dtype == "bool" || self.dtype.starts_with("int") || self.dtype.starts_with("uint")
    }
}

/// What a decoder hands over.
#[derive(Clone, Debug, PartialEq)]
pub struct Decoded {
    /// See [`StoredArray::samples`].
    pub samples: Samples,
    /// See [`StoredArray::rows`].
    pub rows: usize,
    /// See [`StoredArray::columns`].
    pub columns: usize,
    /// See [`StoredArray::format`].
    pub format: &'static str,
    /// See [`StoredArray::dtype`].
    pub dtype: String,
    /// See [`StoredArray::shape`].
    pub shape: Vec<u64>,
}

/// Why a file gave no array. The message leaves the path to the caller.
#[derive(Clone, Debug, PartialEq, thiserror::Error)]
pub enum ReadError {
    /// There is no such file.
    #[error("the file does not exist: check the path")]
    FileNotFound,
    /// The operating system does not let us read it.
    #[error("the file may not be read: give yourself permission to read it")]
    PermissionDenied,
    /// It is a folder.
    #[error("this is a folder: name a map file inside it")]
    IsFolder,
    /// It is a pipe, a socket or a device.
    #[error("this is a pipe, socket or device, a regular file is needed: save the map to a file")]
    NotARegularFile,
    /// Another failure of the operating system.
    #[error("the file cannot be read: {message}")]
    Io {
        /// What the operating system says.
        message: String,
    },
    /// The file has no bytes.
    #[error("the file is empty: save the map again")]
    EmptyFile,
    /// The file is longer than any map that is read.
    #[error("the file has {bytes} bytes, at most {MAX_FILE_BYTES} are read: cut the map out")]
    FileTooLarge {
        /// Its length.
        bytes: u64,
    },
    /// The content is something else than what is read.
    #[error("found {found}; read are .npy arrays, gray PNG images and text grids: {advice}")]
    UnsupportedFormat {
        /// What was recognised.
        found: String,
        /// What to do.
        advice: &'static str,
    },
    /// Numbers that are no plain brightness.
    #[error("found {found}, needed are plain real or whole numbers: save the map as float32")]
    UnsupportedNumbers {
        /// What was found.
        found: String,
    },
    /// A picture that is not plain gray.
    #[error(
        "found a PNG with {found}, needed is 8- or 16-bit gray without transparency: save as single-channel gray"
    )]
    UnsupportedPixels {
        /// What was found.
        found: String,
    },
    /// A header that contradicts itself or its format.
    #[error("the header is damaged: {message}: save the map again")]
    DamagedHeader {
        /// What is wrong.
        message: String,
    },
    /// The compressed image data cannot be decoded.
    #[error("the image data are damaged: {message}: save the map again")]
    DamagedData {
        /// What is wrong.
        message: String,
    },
    /// Fewer bytes than the header promises.
    #[error("the file is cut short: found {found} bytes, needed {needed}: copy it again")]
    Truncated {
        /// Bytes there are.
        found: u64,
        /// What was needed.
        needed: String,
    },
    /// More bytes than the header promises.
    #[error(
        "{extra} bytes follow the array: the header is wrong or there are several arrays: save one array per file"
    )]
    TrailingBytes {
        /// How many.
        extra: u64,
    },
    /// More than two axes longer than one.
    #[error(
        "the array has shape {shape:?}, needed are two axes: save one plane (a later version will choose it by the key plane)"
    )]
    TooManyAxes {
        /// The shape found.
        shape: Vec<u64>,
    },
    /// Fewer than two axes.
    #[error("the array has shape {shape:?}, needed are two axes (rows, columns): reshape it")]
    TooFewAxes {
        /// The shape found.
        shape: Vec<u64>,
    },
    /// A plane beyond the only one.
    #[error(
        "plane {plane} was asked for, but the file holds one plane: set plane to 0 or leave it out"
    )]
    NoSuchPlane {
        /// The plane asked for.
        plane: u64,
    },
    /// A named array in a file that has no names.
    #[error(
        "array {array:?} was asked for, but the file holds one array without a name: leave array out"
    )]
    NoSuchArray {
        /// The name asked for.
        array: String,
    },
    /// No pixel at all.
    #[error("the map has {rows} rows and {columns} columns, at least one of each is needed")]
    NoPixels {
        /// Rows found.
        rows: u64,
        /// Columns found.
        columns: u64,
    },
    /// Too many pixels.
    #[error(
        "the map has {rows} rows of {columns} columns, fewer than {MAX_PIXELS} pixels are read: cut the map out"
    )]
    TooManyPixels {
        /// Rows found.
        rows: u64,
        /// Columns found.
        columns: u64,
    },
    /// The memory does not suffice.
    #[error("{pixels} pixels do not fit into memory: cut the map out or use a larger machine")]
    OutOfMemory {
        /// How many there are.
        pixels: u64,
    },
    /// A text field that is no number.
    #[error(
        "line {line}, field {field}: found {found:?}, needed a number (nan for a blank; # starts a comment)"
    )]
    BadNumber {
        /// Line, counted from 1.
        line: usize,
        /// Field in the line, counted from 1.
        field: usize,
        /// The text found.
        found: String,
    },
    /// A line with another number of fields than the first.
    #[error(
        "line {line} has {found} numbers, needed {needed} as in the first row: write nan for blanks"
    )]
    RaggedRow {
        /// Line, counted from 1.
        line: usize,
        /// Numbers in it.
        found: usize,
        /// Numbers in the first row.
        needed: usize,
    },
    /// Commas and semicolons in one file.
    #[error(
        "line {line} has commas in a file with semicolons: write decimal points and one kind of separator"
    )]
    MixedSeparators {
        /// Line, counted from 1.
        line: usize,
    },
}

impl ReadError {
    /// The stable code of this kind of error, in kebab case.
    pub const fn code(&self) -> &'static str {
        match self {
            Self::FileNotFound => "file-not-found",
            Self::PermissionDenied => "permission-denied",
            Self::IsFolder => "is-folder",
            Self::NotARegularFile => "not-a-regular-file",
            Self::Io { .. } => "io",
            Self::EmptyFile => "empty-file",
            Self::FileTooLarge { .. } => "file-too-large",
            Self::UnsupportedFormat { .. } => "unsupported-format",
            Self::UnsupportedNumbers { .. } => "unsupported-numbers",
            Self::UnsupportedPixels { .. } => "unsupported-pixels",
            Self::DamagedHeader { .. } => "damaged-header",
            Self::DamagedData { .. } => "damaged-data",
            Self::Truncated { .. } => "truncated",
            Self::TrailingBytes { .. } => "trailing-bytes",
            Self::TooManyAxes { .. } => "too-many-axes",
            Self::TooFewAxes { .. } => "too-few-axes",
            Self::NoSuchPlane { .. } => "no-such-plane",
            Self::NoSuchArray { .. } => "no-such-array",
            Self::NoPixels { .. } => "no-pixels",
            Self::TooManyPixels { .. } => "too-many-pixels",
            Self::OutOfMemory { .. } => "out-of-memory",
            Self::BadNumber { .. } => "bad-number",
            Self::RaggedRow { .. } => "ragged-row",
            Self::MixedSeparators { .. } => "mixed-separators",
        }
    }
}

/// Reads one map file.
///
/// `array` names a member of an archive of arrays, `plane` one plane of a stack; no format
/// read today has either, so only `None` (or plane 0) is accepted.
///
/// # Errors
/// Anything that is no regular, readable file, and everything [`decode`] refuses.
pub fn read_map_file(
    path: &Path,
    array: Option<&str>,
    plane: Option<u64>,
) -> Result<StoredArray, ReadError> {
    decode(&read_regular_file(path, MAX_FILE_BYTES)?, array, plane)
}

/// The bytes of a regular file of at most `most` bytes.
///
/// # Errors
/// A missing or unreadable file, a folder, pipe or device, too long a file.
pub(super) fn read_regular_file(path: &Path, most: u64) -> Result<Vec<u8>, ReadError> {
    let metadata = std::fs::metadata(path).map_err(|error| from_io(&error))?;
    if metadata.is_dir() {
        return Err(ReadError::IsFolder);
    }
    if !metadata.is_file() {
        return Err(ReadError::NotARegularFile);
    }
    if metadata.len() > most {
        return Err(ReadError::FileTooLarge { bytes: metadata.len() });
    }
    let file = File::open(path).map_err(|error| from_io(&error))?;
    let mut bytes = Vec::new();
    let length = usize::try_from(metadata.len()).unwrap_or(usize::MAX);
    bytes
        .try_reserve_exact(length)
        .map_err(|_| ReadError::OutOfMemory { pixels: metadata.len() })?;
    // One byte more than allowed, so that a file that grows meanwhile is noticed.
    file.take(most.saturating_add(1)).read_to_end(&mut bytes).map_err(|error| from_io(&error))?;
    if bytes.len() as u64 > most {
        return Err(ReadError::FileTooLarge { bytes: bytes.len() as u64 });
    }
    Ok(bytes)
}

fn from_io(error: &std::io::Error) -> ReadError {
    match error.kind() {
        std::io::ErrorKind::NotFound => ReadError::FileNotFound,
        std::io::ErrorKind::PermissionDenied => ReadError::PermissionDenied,
        _ => ReadError::Io { message: error.to_string() },
    }
}

/// Room for `length` numbers, or an error instead of an abort.
pub(super) fn reserved<T>(length: usize) -> Result<Vec<T>, ReadError> {
    let mut numbers = Vec::new();
    numbers
        .try_reserve_exact(length)
        .map_err(|_| ReadError::OutOfMemory { pixels: length as u64 })?;
    Ok(numbers)
}

/// Decodes the bytes of one map file, whatever its name was.
///
/// # Errors
/// Content that is not read, damaged or cut short; the sizes a header claims are checked
/// against the number of bytes before any memory is taken.
pub fn decode(
    bytes: &[u8],
    array: Option<&str>,
    plane: Option<u64>,
) -> Result<StoredArray, ReadError> {
    if bytes.is_empty() {
        return Err(ReadError::EmptyFile);
    }
    let decoded = if bytes.starts_with(npy::MAGIC) {
        npy::decode(bytes, plane)?
    } else if bytes.starts_with(image::MAGIC) {
        image::decode(bytes)?
    } else if let Some((found, advice)) = recognise(bytes) {
        return Err(ReadError::UnsupportedFormat { found: found.to_owned(), advice });
    } else {
        text::decode(bytes)?
    };
    if let Some(array) = array {
        return Err(ReadError::NoSuchArray { array: array.to_owned() });
    }
    if let Some(plane) = plane.filter(|&plane| plane != 0) {
        return Err(ReadError::NoSuchPlane { plane });
    }
    let digest = Sha256::digest(bytes);
    Ok(StoredArray {
        samples: decoded.samples,
        rows: decoded.rows,
        columns: decoded.columns,
        format: decoded.format,
        dtype: decoded.dtype,
        shape: decoded.shape,
        sha256: digest.iter().map(|byte| format!("{byte:02x}")).collect(),
    })
}

/// Names well-known content that is not read, by its first bytes, with what to do.
fn recognise(bytes: &[u8]) -> Option<(&'static str, &'static str)> {
    const SAVE_NPY: &str = "save the map as .npy";
    const SAVE_GRAY: &str = "save as 16-bit gray PNG or .npy";
    const UNPACK: &str = "unpack it first";
    const SIGNATURES: &[(&[u8], &str, &str)] = &[
        (b"\x89PNG", "a damaged PNG image", SAVE_GRAY),
        (b"\x93NUM", "a damaged .npy array", SAVE_NPY),
        (
            b"SIMPLE  =",
            "a FITS container",
            "only plain arrays and images are read, save its image as .npy",
        ),
        (b"II*\0", "a TIFF image", SAVE_GRAY),
        (b"MM\0*", "a TIFF image", SAVE_GRAY),
        (b"II+\0", "a big TIFF image", SAVE_GRAY),
        (b"MM\0+", "a big TIFF image", SAVE_GRAY),
        (b"PK\x03\x04", "a zip archive (.npz?)", "save one array as .npy"),
        (b"PK\x05\x06", "an empty zip archive", SAVE_NPY),
        (b"\x89HDF\r\n\x1a\n", "an HDF5 file", SAVE_NPY),
        (b"CDF\x01", "a netCDF file", SAVE_NPY),
        (b"CDF\x02", "a netCDF file", SAVE_NPY),
        (b"CDF\x05", "a netCDF file", SAVE_NPY),
        (b"MATLAB 5.0", "a MATLAB file", SAVE_NPY),
        (b"PAR1", "a Parquet table", SAVE_NPY),
        (b"\x80\x02", "a Python pickle", "pickles are never read, save as .npy"),
        (b"\x80\x03", "a Python pickle", "pickles are never read, save as .npy"),
        (b"\x80\x04", "a Python pickle", "pickles are never read, save as .npy"),
        (b"\x80\x05", "a Python pickle", "pickles are never read, save as .npy"),
        (b"\x1f\x8b", "a gzip archive", UNPACK),
        (b"BZh", "a bzip2 archive", UNPACK),
        (b"\xfd7zXZ\0", "an xz archive", UNPACK),
        (b"\x28\xb5\x2f\xfd", "a zstd archive", UNPACK),
        (b"7z\xbc\xaf", "a 7z archive", UNPACK),
        (b"\xff\xd8\xff", "a JPEG image", "lossy images cannot be measured, save as .npy"),
        (b"GIF8", "a GIF image", SAVE_GRAY),
        (b"BM", "a BMP image", SAVE_GRAY),
        (b"RIFF", "a RIFF file (WebP?)", SAVE_GRAY),
        (b"%PDF", "a PDF document", "save the map's numbers as .npy"),
        (b"%!PS", "a PostScript document", "save the map's numbers as .npy"),
        (b"\xff\xfe", "text in UTF-16", "save the text as UTF-8"),
        (b"\xfe\xff", "text in UTF-16", "save the text as UTF-8"),
        (b"{", "JSON", "name the map, not its description"),
        (b"[", "JSON", "save the map as .npy"),
        (b"<", "XML, HTML or SVG", "save the map's numbers as .npy"),
    ];
    if let Some(&(_, found, advice)) =
        SIGNATURES.iter().find(|(signature, ..)| bytes.starts_with(signature))
    {
        return Some((found, advice));
    }
    match bytes {
        [b'P', b'1'..=b'7', b' ' | b'\t' | b'\n' | b'\r' | b'#', ..] => {
            return Some(("a PNM image", SAVE_GRAY));
        }
        [b'P', b'F' | b'f', b'\n' | b'\r' | b' ', ..] => return Some(("a PFM image", SAVE_NPY)),
        _ => {}
    }
    let beginning = bytes.get(..4096).unwrap_or(bytes);
    let binary = beginning
        .iter()
        .any(|&byte| byte < 0x20 && !matches!(byte, b'\t' | b'\n' | b'\r' | 0x0b | 0x0c));
    binary.then_some(("binary data of an unknown kind", SAVE_NPY))
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn other_formats_are_named_in_the_refusal() {
        let cases: [(&[u8], &str); 12] = [
            (b"SIMPLE  =                    T", "FITS"),
            (b"II*\0\x08\0\0\0", "TIFF"),
            (b"MM\0*\0\0\0\x08", "TIFF"),
            (b"P5\n2 2\n255\n\0\0\0\0", "PNM"),
            (b"PF\n2 2\n-1.0\n", "PFM"),
            (b"PK\x03\x04rest", "zip"),
            (b"\x80\x04\x95\0", "pickle"),
            (b"\x89HDF\r\n\x1a\n", "HDF5"),
            (b"\xff\xd8\xff\xe0", "JPEG"),
            (b"{\"redshift\": 1}", "JSON"),
            (b"\0\0\0\0\0\0\0\0", "binary"),
            (b"\x1f\x8b\x08", "gzip"),
        ];
        for (bytes, name) in cases {
            let error = decode(bytes, None, None).expect_err(name);
            assert_eq!(error.code(), "unsupported-format", "{name}");
            let message = error.to_string();
            assert!(message.contains(name) && message.contains(".npy"), "{message}");
        }
        assert_eq!(decode(b"", None, None).expect_err("empty").code(), "empty-file");
    }

    #[test]
    fn the_digest_is_that_of_the_bytes() {
        // Digest from coreutils' sha256sum.
        let map = decode(b"1\n", None, None).expect("a grid of one number");
        assert_eq!(map.sha256, "4355a46b19d348dc2f57c046f8ef63d4538ebb936000f3c9ee954a27460dd865");
    }

    #[test]
    fn what_is_no_regular_file_is_refused_with_its_own_code() {
        let folder = tempfile::tempdir().expect("a folder");
        let code = |path: &Path| read_map_file(path, None, None).expect_err("refused").code();
        assert_eq!(code(folder.path()), "is-folder");
        assert_eq!(code(&folder.path().join("absent.npy")), "file-not-found");
        assert_eq!(code(Path::new("")), "file-not-found");
        if Path::new("/dev/null").exists() {
            assert_eq!(code(Path::new("/dev/null")), "not-a-regular-file");
        }
        let empty = folder.path().join("empty.npy");
        std::fs::write(&empty, b"").expect("written");
        assert_eq!(code(&empty), "empty-file");
    }

    #[cfg(unix)]
    #[test]
    fn names_need_not_be_utf8_and_endings_do_not_matter() {
        use std::os::unix::ffi::OsStrExt;
        let folder = tempfile::tempdir().expect("a folder");
        let path = folder.path().join(std::ffi::OsStr::from_bytes(b"map\xff.png"));
        std::fs::write(&path, b"1 2\n3 4\n").expect("written");
        let map = read_map_file(&path, None, None).expect("a text grid");
        assert_eq!((map.rows, map.columns, map.format), (2, 2, "text"));
        let array = read_map_file(&path, Some("a"), None).expect_err("no members");
        assert_eq!(array.code(), "no-such-array");
    }
}
