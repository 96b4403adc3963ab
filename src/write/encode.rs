//! A made map as the bytes of one file: the opposite of `map::read`.
//!
//! The same array gives the same bytes on every machine: no clock, no name of the system and,
//! but for PNG, no compressor goes into them. Rows are written in the order of the array.
//!
//! Sources: NumPy Enhancement Proposal 1 (R. Kern, 2007) for `.npy`; PKWARE's APPNOTE 6.3 for
//! the archive of an `.npz`; TIFF 6.0 (Aldus, 1992), baseline gray, with the sample formats of
//! its section 19; the Netpbm formats PGM (raw) and PFM; PNG (W3C, third edition).

use image::codecs::png::{CompressionType, FilterType, PngEncoder};
use image::{ExtendedColorType, ImageEncoder};
use ndarray::Array2;
use serde_json::Value;

use crate::simulate::{ByteOrder, Dtype, FileFormat, Format};

/// Longest file written, bytes: the offsets of TIFF and zip have 32 bits.
const MAX_BYTES: usize = u32::MAX as usize - (1 << 16);
/// Name of the only array in an `.npz` archive.
const NPZ_MEMBER: &str = "map.npy";

/// Why an array cannot be stored as asked. The message leaves the map's name to the caller.
#[derive(Clone, Debug, PartialEq, thiserror::Error)]
pub enum EncodeError {
    /// The format has no such numbers.
    #[error(
        "found dtype {dtype} for a {format} file, which holds {possible}: choose one of these or another format"
    )]
    CannotHold {
        /// The format.
        format: &'static str,
        /// The type asked for.
        dtype: &'static str,
        /// What the format can hold.
        possible: String,
    },
    /// Whole numbers without a usable step.
    #[error(
        "found an integer step of {step} with offset {offset}, needed are a finite step other than 0 and a finite offset: give the brightness of one count"
    )]
    BadStep {
        /// The step.
        step: f64,
        /// The offset.
        offset: f64,
    },
    /// A brightness beyond single precision.
    #[error(
        "found the brightness {value:e} in row {row}, column {column}, beyond single precision: store the map as f8 or in a larger unit"
    )]
    BeyondSinglePrecision {
        /// The brightness.
        value: f64,
        /// Its row.
        row: usize,
        /// Its column.
        column: usize,
    },
    /// No pixel at all.
    #[error("the map has {rows} rows and {columns} columns, at least one of each is needed")]
    NoPixels {
        /// Rows found.
        rows: usize,
        /// Columns found.
        columns: usize,
    },
    /// Too many bytes for one file.
    #[error(
        "{rows} rows of {columns} columns make a file of more than {MAX_BYTES} bytes: make a smaller map"
    )]
    TooLarge {
        /// Rows found.
        rows: usize,
        /// Columns found.
        columns: usize,
    },
    /// The picture's encoder gave up.
    #[error("the picture cannot be encoded: {message}: choose another format")]
    Picture {
        /// What it says.
        message: String,
    },
}

/// The ending of a format's files.
pub const fn extension(format: Format) -> &'static str {
    match format {
        Format::Npy => "npy",
        Format::Npz => "npz",
        Format::Png => "png",
        Format::Tiff => "tiff",
        Format::Pgm => "pgm",
        Format::Pfm => "pfm",
        Format::Text => "txt",
    }
}

const fn dtype_word(dtype: Dtype) -> &'static str {
    match dtype {
        Dtype::F4 => "f4",
        Dtype::F8 => "f8",
        Dtype::I2 => "i2",
        Dtype::I4 => "i4",
        Dtype::U1 => "u1",
        Dtype::U2 => "u2",
    }
}

const fn item_bytes(dtype: Dtype) -> usize {
    match dtype {
        Dtype::U1 => 1,
        Dtype::I2 | Dtype::U2 => 2,
        Dtype::F4 | Dtype::I4 => 4,
        Dtype::F8 => 8,
    }
}

/// What a format can hold.
const fn possible(format: Format) -> &'static [Dtype] {
    match format {
        Format::Npy | Format::Npz | Format::Tiff | Format::Text => {
            &[Dtype::F4, Dtype::F8, Dtype::I2, Dtype::I4, Dtype::U1, Dtype::U2]
        }
        Format::Png | Format::Pgm => &[Dtype::U1, Dtype::U2],
        Format::Pfm => &[Dtype::F4],
    }
}

/// The levels of a whole-number type, `None` for floating-point numbers.
#[derive(Clone, Copy, Debug, PartialEq)]
struct Levels {
    /// Stored where there is no brightness.
    blank: f64,
    /// Lowest level that means a brightness.
    lowest: f64,
    /// Highest one.
    highest: f64,
}

const fn levels(dtype: Dtype) -> Option<Levels> {
    let (lowest, highest) = match dtype {
        Dtype::F4 | Dtype::F8 => return None,
        Dtype::I2 => (i16::MIN as f64, i16::MAX as f64),
        Dtype::I4 => (i32::MIN as f64, i32::MAX as f64),
        Dtype::U1 => (0.0, u8::MAX as f64),
        Dtype::U2 => (0.0, u16::MAX as f64),
    };
    Some(Levels { blank: lowest, lowest: lowest + 1.0, highest })
}

/// The bytes of one map file.
///
/// `brightness` is in the unit described; what is not finite is blank. Floating-point files
/// hold it as it is. Whole numbers hold round((brightness − offset) / step), halves away from
/// zero, held within the type: its lowest value is blank, so 16-bit signed levels run from
/// −32767 to 32767 and unsigned ones from 1. PNG and PGM have one byte order (big-endian) and
/// text none, so that `byte_order` is of no effect there. Text holds the number that the type
/// would hold, as the shortest decimal that gives it back, and blanks as `nan`.
///
/// # Errors
/// A format that cannot hold the type, a step of no use, a brightness beyond the type, no
/// pixels or too many.
pub fn encode(brightness: &Array2<f64>, file: &FileFormat) -> Result<Vec<u8>, EncodeError> {
    let (rows, columns) = brightness.dim();
    check(rows, columns, file)?;
    let stored = stored_numbers(brightness, file)?;
    let (width, height) = match (u32::try_from(columns), u32::try_from(rows)) {
        (Ok(width), Ok(height)) => (width, height),
        _ => return Err(EncodeError::TooLarge { rows, columns }),
    };
    Ok(match file.format {
        Format::Npy => npy(rows, columns, file, &stored),
        Format::Npz => npz(&npy(rows, columns, file, &stored)),
        Format::Png => png(width, height, file, &stored)?,
        Format::Tiff => tiff(width, height, file, &stored),
        Format::Pgm => {
            let highest = levels(file.dtype).map_or(0.0, |levels| levels.highest);
            let header = format!("P5\n{columns} {rows}\n{highest}\n");
            [header.into_bytes(), packed(&stored, file.dtype, ByteOrder::Big)].concat()
        }
        Format::Pfm => {
            // The sign of the scale is the byte order.
            let scale = if file.byte_order == ByteOrder::Big { "1.0" } else { "-1.0" };
            let header = format!("Pf\n{columns} {rows}\n{scale}\n");
            [header.into_bytes(), packed(&stored, file.dtype, file.byte_order)].concat()
        }
        Format::Text => text(columns, file.dtype, &stored),
    })
}

/// The description keys without which the stored numbers are no brightness: none for
/// floating-point numbers.
pub fn description_of(file: &FileFormat) -> Vec<(&'static str, Value)> {
    let Some(levels) = levels(file.dtype) else { return Vec::new() };
    let mut keys = vec![
        ("value_scale", Value::from(file.integer_step)),
        ("value_offset", Value::from(file.integer_offset)),
    ];
    if file.format != Format::Text {
        keys.push(("blank_value", Value::from(levels.blank)));
    }
    keys
}

fn check(rows: usize, columns: usize, file: &FileFormat) -> Result<(), EncodeError> {
    let possible = possible(file.format);
    if !possible.contains(&file.dtype) {
        let words: Vec<&str> = possible.iter().map(|&dtype| dtype_word(dtype)).collect();
        return Err(EncodeError::CannotHold {
            format: extension(file.format),
            dtype: dtype_word(file.dtype),
            possible: words.join(" or "),
        });
    }
    let (step, offset) = (file.integer_step, file.integer_offset);
    let usable = step.is_finite() && step.abs() > 0.0 && offset.is_finite();
    if levels(file.dtype).is_some() && !usable {
        return Err(EncodeError::BadStep { step, offset });
    }
    if rows == 0 || columns == 0 {
        return Err(EncodeError::NoPixels { rows, columns });
    }
    let bytes = rows.checked_mul(columns).and_then(|n| n.checked_mul(item_bytes(file.dtype)));
    if bytes.is_none_or(|bytes| bytes > MAX_BYTES) {
        return Err(EncodeError::TooLarge { rows, columns });
    }
    Ok(())
}

/// The numbers as stored, row after row: levels, or the brightness itself with NaN for blanks.
fn stored_numbers(brightness: &Array2<f64>, file: &FileFormat) -> Result<Vec<f64>, EncodeError> {
    if let Some(levels) = levels(file.dtype) {
        let blank = if file.format == Format::Text { f64::NAN } else { levels.blank };
        let level = |&value: &f64| {
            let exact = (value - file.integer_offset) / file.integer_step;
            if value.is_finite() {
                exact.round().clamp(levels.lowest, levels.highest)
            } else {
                blank
            }
        };
        return Ok(brightness.iter().map(level).collect());
    }
    brightness
        .indexed_iter()
        .map(|((row, column), &value)| {
            if !value.is_finite() {
                Ok(f64::NAN)
            } else if file.dtype == Dtype::F4 && !(value as f32).is_finite() {
                Err(EncodeError::BeyondSinglePrecision { value, row, column })
            } else {
                Ok(value)
            }
        })
        .collect()
}

/// The numbers as bytes, one after the other.
fn packed(stored: &[f64], dtype: Dtype, order: ByteOrder) -> Vec<u8> {
    let mut bytes = Vec::with_capacity(stored.len() * item_bytes(dtype));
    for &value in stored {
        match dtype {
            Dtype::F4 => put(&mut bytes, single(value).to_le_bytes(), order),
            Dtype::F8 => put(&mut bytes, double(value).to_le_bytes(), order),
            Dtype::I2 => put(&mut bytes, (value as i16).to_le_bytes(), order),
            Dtype::I4 => put(&mut bytes, (value as i32).to_le_bytes(), order),
            Dtype::U1 => put(&mut bytes, (value as u8).to_le_bytes(), order),
            Dtype::U2 => put(&mut bytes, (value as u16).to_le_bytes(), order),
        }
    }
    bytes
}

/// Single precision; every NaN has the same bits.
const fn single(value: f64) -> f32 {
    if value.is_nan() { f32::NAN } else { value as f32 }
}

/// Double precision; every NaN has the same bits.
const fn double(value: f64) -> f64 {
    if value.is_nan() { f64::NAN } else { value }
}

fn put<const N: usize>(bytes: &mut Vec<u8>, mut little: [u8; N], order: ByteOrder) {
    if order == ByteOrder::Big {
        little.reverse();
    }
    bytes.extend(little);
}

/// Version 1 of the format; the numbers start at a multiple of 64 bytes.
fn npy(rows: usize, columns: usize, file: &FileFormat, stored: &[f64]) -> Vec<u8> {
    /// Magic number, version and length of the header.
    const PREFIX: usize = 10;
    let order = match (file.dtype, file.byte_order) {
        (Dtype::U1, _) => '|',
        (_, ByteOrder::Little) => '<',
        (_, ByteOrder::Big) => '>',
    };
    let mut header = format!(
        "{{'descr': '{order}{}', 'fortran_order': False, 'shape': ({rows}, {columns}), }}",
        dtype_word(file.dtype)
    );
    header += &" ".repeat((64 - (PREFIX + header.len() + 1) % 64) % 64);
    header.push('\n');
    // Two counts of at most twenty digits: far below the 65535 bytes of version 1.
    let length = header.len() as u16;
    let mut bytes = b"\x93NUMPY\x01\x00".to_vec();
    bytes.extend(length.to_le_bytes());
    bytes.extend(header.bytes());
    bytes.extend(packed(stored, file.dtype, file.byte_order));
    bytes
}

/// An archive of one member, stored without compression, dated at the format's first day.
fn npz(member: &[u8]) -> Vec<u8> {
    /// 1980-01-01 in the format of MS-DOS.
    const DATE: u16 = 1 << 5 | 1;
    /// Version of the format that a reader needs: the first.
    const VERSION: u16 = 10;
    let mut common = Vec::new();
    for word in [VERSION, 0, 0, 0, DATE] {
        common.extend(word.to_le_bytes());
    }
    // `check` has kept the length below 32 bits.
    let length = member.len() as u32;
    for word in [crc32fast::hash(member), length, length] {
        common.extend(word.to_le_bytes());
    }
    common.extend((NPZ_MEMBER.len() as u16).to_le_bytes());
    common.extend(0u16.to_le_bytes());

    let mut bytes = b"PK\x03\x04".to_vec();
    bytes.extend(&common);
    bytes.extend(NPZ_MEMBER.bytes());
    bytes.extend(member);
    let directory_start = bytes.len() as u32;
    bytes.extend(b"PK\x01\x02");
    bytes.extend(VERSION.to_le_bytes());
    bytes.extend(&common);
    // No comment, the first disk, no attributes, the member starts at 0.
    bytes.extend([0; 14]);
    bytes.extend(NPZ_MEMBER.bytes());
    let directory_length = bytes.len() as u32 - directory_start;
    bytes.extend(b"PK\x05\x06");
    for word in [0u16, 0, 1, 1] {
        bytes.extend(word.to_le_bytes());
    }
    bytes.extend(directory_length.to_le_bytes());
    bytes.extend(directory_start.to_le_bytes());
    bytes.extend(0u16.to_le_bytes());
    bytes
}

fn png(width: u32, height: u32, file: &FileFormat, stored: &[f64]) -> Result<Vec<u8>, EncodeError> {
    let color =
        if file.dtype == Dtype::U2 { ExtendedColorType::L16 } else { ExtendedColorType::L8 };
    // The encoder takes the machine's byte order and turns it into the format's.
    let native = if cfg!(target_endian = "big") { ByteOrder::Big } else { ByteOrder::Little };
    let mut bytes = Vec::new();
    PngEncoder::new_with_quality(&mut bytes, CompressionType::Default, FilterType::Adaptive)
        .write_image(&packed(stored, file.dtype, native), width, height, color)
        .map_err(|error| EncodeError::Picture { message: error.to_string() })?;
    Ok(bytes)
}

/// A baseline gray image: header, one strip, one directory. Black is zero.
fn tiff(width: u32, height: u32, file: &FileFormat, stored: &[f64]) -> Vec<u8> {
    /// Where the strip starts: after the header.
    const STRIP: u32 = 8;
    const SHORT: u16 = 3;
    const LONG: u16 = 4;
    const RATIONAL: u16 = 5;
    let order = file.byte_order;
    let strip = packed(stored, file.dtype, order);
    // `check` has kept the length below 32 bits. A directory starts at an even byte.
    let strip_bytes = strip.len() as u32;
    let directory = (STRIP + strip_bytes).next_multiple_of(2);
    let sample_format = match file.dtype {
        Dtype::U1 | Dtype::U2 => 1,
        Dtype::I2 | Dtype::I4 => 2,
        Dtype::F4 | Dtype::F8 => 3,
    };
    let mut entries = [
        (256, LONG, width),
        (257, LONG, height),
        (258, SHORT, 8 * item_bytes(file.dtype) as u32),
        // Not compressed, black is zero.
        (259, SHORT, 1),
        (262, SHORT, 1),
        // One strip of one sample a pixel.
        (273, LONG, STRIP),
        (277, SHORT, 1),
        (278, LONG, height),
        (279, LONG, strip_bytes),
        // One pixel a unit of no length, both ways.
        (282, RATIONAL, 0),
        (283, RATIONAL, 0),
        (296, SHORT, 1),
        (339, SHORT, sample_format),
    ];
    let resolution = directory + 2 + 12 * entries.len() as u32 + 4;
    for entry in entries.iter_mut().filter(|(_, kind, _)| *kind == RATIONAL) {
        entry.2 = resolution;
    }

    let mut bytes = if order == ByteOrder::Big { b"MM".to_vec() } else { b"II".to_vec() };
    put(&mut bytes, 42u16.to_le_bytes(), order);
    put(&mut bytes, directory.to_le_bytes(), order);
    bytes.extend(strip);
    bytes.resize(directory as usize, 0);
    put(&mut bytes, (entries.len() as u16).to_le_bytes(), order);
    for (tag, kind, value) in entries {
        put(&mut bytes, (tag as u16).to_le_bytes(), order);
        put(&mut bytes, kind.to_le_bytes(), order);
        put(&mut bytes, 1u32.to_le_bytes(), order);
        if kind == SHORT {
            // A short value stands in the first two of four bytes.
            put(&mut bytes, (value as u16).to_le_bytes(), order);
            bytes.extend([0; 2]);
        } else {
            put(&mut bytes, value.to_le_bytes(), order);
        }
    }
    for word in [0u32, 1, 1] {
        put(&mut bytes, word.to_le_bytes(), order);
    }
    bytes
}

/// One line a row, blanks between the numbers.
fn text(columns: usize, dtype: Dtype, stored: &[f64]) -> Vec<u8> {
    let number = |value: f64| match dtype {
        _ if value.is_nan() => "nan".to_owned(),
        Dtype::F4 => format!("{:?}", value as f32),
        Dtype::F8 => format!("{value:?}"),
        // A level, without a decimal point; never the −0 that rounding can leave.
        _ => format!("{}", value as i64),
    };
    let mut lines = String::new();
    for row in stored.chunks(columns) {
        for (column, &value) in row.iter().enumerate() {
            if column > 0 {
                lines.push(' ');
            }
            lines += &number(value);
        }
        lines.push('\n');
    }
    lines.into_bytes()
}

#[cfg(test)]
mod tests {
    use std::io::{Cursor, Read};

    use ndarray::array;
    use tiff::decoder::{Decoder, DecodingResult};
    use tiff::tags::Tag;

    use super::*;
    use crate::map::SkyMap;
    use crate::map::description::{Layer, Origin, resolve};
    use crate::map::read::{StoredArray, decode};

    const ALL: [Dtype; 6] = [Dtype::F4, Dtype::F8, Dtype::I2, Dtype::I4, Dtype::U1, Dtype::U2];
    const ORDERS: [ByteOrder; 2] = [ByteOrder::Little, ByteOrder::Big];

    /// Whole numbers of a quarter from −1: the brightness −1 is the level 0.
    fn file(format: Format, dtype: Dtype, byte_order: ByteOrder) -> FileFormat {
        FileFormat { format, dtype, byte_order, integer_step: 0.25, integer_offset: -1.0 }
    }

    /// Two rows of three; no two alike, one blank, numbers that quarters hold exactly.
    fn map() -> Array2<f64> {
        array![[0.0, 1.5, -0.5], [f64::NAN, 12.25, 3.0]]
    }

    /// What the six types store of [`map`]; NaN is checked as [`levels`]' blank.
    fn wanted(dtype: Dtype) -> [f64; 6] {
        let Some(levels) = levels(dtype) else {
            return [0.0, 1.5, -0.5, f64::NAN, 12.25, 3.0];
        };
        // (b + 1) / 0.25
        [4.0, 10.0, 2.0, levels.blank, 53.0, 16.0]
    }

    fn same(found: impl IntoIterator<Item = f64>, wanted: &[f64]) -> bool {
        let found: Vec<f64> = found.into_iter().collect();
        found.len() == wanted.len()
            && found
                .iter()
                .zip(wanted)
                .all(|(a, b)| a.to_bits() == b.to_bits() || (a.is_nan() && b.is_nan()))
    }

    fn numbers(stored: &StoredArray) -> Vec<f64> {
        (0..stored.samples.len()).map(|i| stored.samples.get(i)).collect()
    }

    fn bytes(format: Format, dtype: Dtype, order: ByteOrder) -> Vec<u8> {
        encode(&map(), &file(format, dtype, order)).expect("can be stored")
    }

    #[test]
    fn npy_holds_every_type_in_both_orders() {
        for (dtype, name) in
            ALL.iter().zip(["float32", "float64", "int16", "int32", "uint8", "uint16"])
        {
            for order in ORDERS {
                let bytes = bytes(Format::Npy, *dtype, order);
                // The array starts at a multiple of 64 (NumPy Enhancement Proposal 1).
                assert_eq!((bytes.len() - 6 * item_bytes(*dtype)) % 64, 0, "{name}");
                let stored = decode(&bytes, None, None).expect("an array");
                assert_eq!((stored.rows, stored.columns, stored.dtype.as_str()), (2, 3, name));
                assert!(same(numbers(&stored), &wanted(*dtype)), "{name} {order:?}: {stored:?}");
            }
        }
        // The first number is 4: its bytes stand in the order that the header names.
        assert!(
            bytes(Format::Npy, Dtype::I2, ByteOrder::Little)[128..]
                .starts_with(b"\x04\x00\x0a\x00")
        );
        assert!(
            bytes(Format::Npy, Dtype::I2, ByteOrder::Big)[128..].starts_with(b"\x00\x04\x00\x0a")
        );
    }

    #[test]
    fn npz_is_an_archive_of_one_npy() {
        let bytes = bytes(Format::Npz, Dtype::F8, ByteOrder::Big);
        let mut archive = zip::ZipArchive::new(Cursor::new(&bytes)).expect("an archive");
        assert_eq!(archive.len(), 1);
        let mut member = archive.by_index(0).expect("a member");
        assert_eq!(member.name().expect("a name"), "map.npy");
        let date = member.last_modified().expect("a date");
        assert_eq!((date.year(), date.month(), date.day(), date.hour()), (1980, 1, 1, 0));
        let mut inside = Vec::new();
        // Reading to the end checks the check sum.
        member.read_to_end(&mut inside).expect("whole");
        assert!(inside == self::bytes(Format::Npy, Dtype::F8, ByteOrder::Big));
    }

    #[test]
    fn pictures_hold_gray_levels() {
        for (dtype, color) in
            [(Dtype::U1, image::ColorType::L8), (Dtype::U2, image::ColorType::L16)]
        {
            for (format, kind) in
                [(Format::Png, image::ImageFormat::Png), (Format::Pgm, image::ImageFormat::Pnm)]
            {
                let bytes = bytes(format, dtype, ByteOrder::Little);
                let picture = image::load_from_memory_with_format(&bytes, kind).expect("a picture");
                assert_eq!((picture.width(), picture.height(), picture.color()), (3, 2, color));
                let levels = picture.to_luma16().into_raw();
                // Eight bits are spread over sixteen by the factor 65535/255.
                let factor = if dtype == Dtype::U1 { 257.0 } else { 1.0 };
                let found = levels.into_iter().map(|level| f64::from(level) / factor);
                assert!(same(found, &wanted(dtype)), "{format:?} {dtype:?}");
            }
        }
        let stored = decode(&bytes(Format::Png, Dtype::U2, ByteOrder::Big), None, None);
        assert!(same(numbers(&stored.expect("a map")), &wanted(Dtype::U2)));
    }

    #[test]
    fn tiff_holds_every_type_in_both_orders() {
        for dtype in ALL {
            for order in ORDERS {
                let bytes = bytes(Format::Tiff, dtype, order);
                let mut decoder = Decoder::new(Cursor::new(&bytes)).expect("a TIFF");
                assert_eq!(decoder.dimensions().expect("a size"), (3, 2));
                let mut tag = |tag| decoder.get_tag_u32(tag).expect("a tag");
                // Black is zero (1), else the decoder would turn the levels round.
                let tags = [Tag::PhotometricInterpretation, Tag::Compression, Tag::ResolutionUnit];
                assert_eq!(tags.map(&mut tag), [1, 1, 1]);
                assert!(decoder.get_tag(Tag::XResolution).is_ok());
                let found: Vec<f64> = match (dtype, decoder.read_image().expect("an image")) {
                    (Dtype::F4, DecodingResult::F32(n)) => n.into_iter().map(f64::from).collect(),
                    (Dtype::F8, DecodingResult::F64(n)) => n,
                    (Dtype::I2, DecodingResult::I16(n)) => n.into_iter().map(f64::from).collect(),
                    (Dtype::I4, DecodingResult::I32(n)) => n.into_iter().map(f64::from).collect(),
                    (Dtype::U1, DecodingResult::U8(n)) => n.into_iter().map(f64::from).collect(),
                    (Dtype::U2, DecodingResult::U16(n)) => n.into_iter().map(f64::from).collect(),
                    (_, other) => panic!("{dtype:?} came back as {other:?}"),
                };
                assert!(same(found, &wanted(dtype)), "{dtype:?} {order:?}");
            }
        }
        // An odd number of bytes in the strip: the directory starts at an even place.
        let odd = encode(&array![[0.0, 1.0, 2.0]], &file(Format::Tiff, Dtype::U1, ByteOrder::Big));
        let odd = odd.expect("can be stored");
        assert_eq!(&odd[..8], b"MM\0\x2a\0\0\0\x0c");
        let mut decoder = Decoder::new(Cursor::new(&odd)).expect("a TIFF");
        assert!(matches!(decoder.read_image(), Ok(DecodingResult::U8(n)) if n == [4, 8, 12]));
    }

    #[test]
    fn pfm_says_its_byte_order_by_the_sign_of_the_scale() {
        let row = array![[1.0, -2.0]];
        let stored = |order| encode(&row, &file(Format::Pfm, Dtype::F4, order)).expect("stored");
        // 1 and −2 in single precision (IEEE 754).
        assert_eq!(stored(ByteOrder::Little), b"Pf\n2 1\n-1.0\n\0\0\x80\x3f\0\0\0\xc0");
        assert_eq!(stored(ByteOrder::Big), b"Pf\n2 1\n1.0\n\x3f\x80\0\0\xc0\0\0\0");
        // The first row of the array comes first.
        let column = encode(&array![[1.0], [0.0]], &file(Format::Pfm, Dtype::F4, ByteOrder::Big));
        assert_eq!(column.expect("stored"), b"Pf\n1 2\n1.0\n\x3f\x80\0\0\0\0\0\0");
    }

    #[test]
    fn text_gives_every_number_back() {
        let map = array![[0.1, 1e-7, -1.0 / 3.0], [f64::NAN, 1e22, 4.0]];
        let text = |dtype| {
            let file = file(Format::Text, dtype, ByteOrder::Little);
            String::from_utf8(encode(&map, &file).expect("stored")).expect("text")
        };
        assert_eq!(text(Dtype::F8), "0.1 1e-7 -0.3333333333333333\nnan 1e22 4.0\n");
        // The shortest decimals of single precision: nine digits at most.
        assert_eq!(text(Dtype::F4), "0.1 1e-7 -0.33333334\nnan 1e22 4.0\n");
        // (b + 1) / 0.25, held within the type.
        assert_eq!(text(Dtype::I2), "4 4 3\nnan 32767 20\n");
        let stored = decode(text(Dtype::F8).as_bytes(), None, None).expect("a grid");
        assert!(same(numbers(&stored), &map.iter().copied().collect::<Vec<_>>()));
    }

    #[test]
    fn levels_are_rounded_and_held_within_the_type() {
        let map = array![[-9e9, 9e9, 0.1, 0.125, 0.13, f64::INFINITY, f64::NEG_INFINITY]];
        for (dtype, wanted) in [
            // 0.1 is level 4.4, 0.125 is 4.5, 0.13 is 4.52; what is infinite is blank.
            (Dtype::U1, [1.0, 255.0, 4.0, 5.0, 5.0, 0.0, 0.0]),
            (Dtype::U2, [1.0, 65535.0, 4.0, 5.0, 5.0, 0.0, 0.0]),
            (Dtype::I2, [-32767.0, 32767.0, 4.0, 5.0, 5.0, -32768.0, -32768.0]),
            (Dtype::I4, [-2147483647.0, 2147483647.0, 4.0, 5.0, 5.0, -2147483648.0, -2147483648.0]),
        ] {
            let bytes = encode(&map, &file(Format::Npy, dtype, ByteOrder::Little)).expect("stored");
            let stored = decode(&bytes, None, None).expect("an array");
            // Our reader holds 32-bit integers in double precision.
            assert!(same(numbers(&stored), &wanted), "{dtype:?}: {stored:?}");
        }
    }

    #[test]
    fn the_description_turns_levels_into_brightness_again() {
        let described = |format, dtype| description_of(&file(format, dtype, ByteOrder::Little));
        assert!(described(Format::Npy, Dtype::F4).is_empty());
        for (dtype, blank) in
            [(Dtype::I2, -32768.0), (Dtype::I4, -2147483648.0), (Dtype::U1, 0.0), (Dtype::U2, 0.0)]
        {
            let keys = described(Format::Npy, dtype);
            let wanted = [("value_scale", 0.25), ("value_offset", -1.0), ("blank_value", blank)];
            assert_eq!(keys, wanted.map(|(key, number)| (key, Value::from(number))));
            let back = wanted_brightness(&keys, dtype);
            assert!(same(back, &map().iter().copied().collect::<Vec<_>>()), "{dtype:?}");
        }
        // Blanks are words in a text.
        let keys = described(Format::Text, Dtype::I2);
        assert_eq!(
            keys.iter().map(|(key, _)| *key).collect::<Vec<_>>(),
            ["value_scale", "value_offset"]
        );
    }

    /// Brightness of a type's levels as the map reader forms it.
    fn wanted_brightness(keys: &[(&str, Value)], dtype: Dtype) -> Vec<f64> {
        let description: serde_json::Map<String, Value> =
            keys.iter().map(|(key, value)| ((*key).to_owned(), value.clone())).collect();
        let text = Value::Object(description).to_string();
        let layer = Layer::from_json_text(&text, Origin::Sidecar, "test").expect("known keys");
        let description = resolve(vec![layer]).expect("good values");
        let stored = decode(&bytes(Format::Npy, dtype, ByteOrder::Big), None, None);
        let map = SkyMap::from_stored(stored.expect("an array"), description).expect("a map");
        (0..2).flat_map(|y| (0..3).map(move |x| (x, y))).map(|(x, y)| map.value(x, y)).collect()
    }

    #[test]
    fn what_a_format_cannot_hold_is_refused_with_what_it_can() {
        for (format, dtype, parts) in [
            (Format::Png, Dtype::F4, ["dtype f4 for a png file", "u1 or u2"]),
            (Format::Pgm, Dtype::I2, ["dtype i2 for a pgm file", "u1 or u2"]),
            (Format::Pfm, Dtype::F8, ["dtype f8 for a pfm file", "holds f4:"]),
        ] {
            let error = encode(&map(), &file(format, dtype, ByteOrder::Little)).expect_err("no");
            for part in parts {
                assert!(error.to_string().contains(part), "{error}");
            }
        }
        let npy = |dtype| file(Format::Npy, dtype, ByteOrder::Little);
        for step in [0.0, f64::NAN, f64::INFINITY] {
            let stepped = FileFormat { integer_step: step, ..npy(Dtype::I2) };
            assert!(matches!(encode(&map(), &stepped), Err(EncodeError::BadStep { .. })));
            // Floating-point numbers have no step.
            assert!(encode(&map(), &FileFormat { integer_step: step, ..npy(Dtype::F4) }).is_ok());
        }
        let error = encode(&array![[1.0, 1e39]], &npy(Dtype::F4)).expect_err("too bright");
        assert_eq!(error, EncodeError::BeyondSinglePrecision { value: 1e39, row: 0, column: 1 });
        assert!(encode(&array![[1.0, 1e39]], &npy(Dtype::F8)).is_ok());
        let empty = encode(&Array2::zeros((0, 3)), &npy(Dtype::F4));
        assert_eq!(empty, Err(EncodeError::NoPixels { rows: 0, columns: 3 }));
    }
}
