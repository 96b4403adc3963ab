//! The `.npy` array format, versions 1 to 3: a magic number, a header written as a Python
//! dictionary, then the numbers.
//!
//! Source: NumPy Enhancement Proposal 1 (R. Kern, 2007) and numpy's `format` documentation.
//! Departure: one array per file, so bytes after the array are refused.

use super::read::{Decoded, MAX_PIXELS, ReadError, Samples, reserved};

/// First bytes of every `.npy` file.
pub const MAGIC: &[u8] = b"\x93NUMPY";
/// Longest header accepted, bytes. A plain array's header has about a hundred.
const MAX_HEADER_BYTES: usize = 64 * 1024;
/// Side of the square blocks in which Fortran-ordered arrays are transposed: two blocks of
/// eight-byte numbers fit a first-level cache.
const BLOCK: usize = 64;

/// Decodes the bytes of one `.npy` file.
///
/// Axes of length one beyond two are dropped, from the front. `plane` must be 0 or absent.
///
/// # Errors
/// A damaged or lying header, a number type without a plain brightness (objects, complex
/// numbers, structures), more than two axes longer than one, too few or too many bytes.
pub fn decode(bytes: &[u8], plane: Option<u64>) -> Result<Decoded, ReadError> {
    let (header, body) = split_header(bytes)?;
    let header = Header::parse(header)?;
    let kind = NumberType::parse(&header.descr)?;
    let mut needed = kind.item_bytes() as u64;
    for &length in &header.shape {
        needed = needed.checked_mul(length).ok_or_else(|| ReadError::Truncated {
            found: body.len() as u64,
            needed: format!("more bytes than any file can hold for shape {:?}", header.shape),
        })?;
    }
    let (rows, columns) = two_axes(&header.shape, plane)?;
    if needed > body.len() as u64 {
        return Err(ReadError::Truncated {
            found: body.len() as u64,
            needed: format!("{needed} bytes after the header for shape {:?}", header.shape),
        });
    }
    if needed < body.len() as u64 {
        return Err(ReadError::TrailingBytes { extra: body.len() as u64 - needed });
    }
    let layout = Layout { rows, columns, fortran: header.fortran_order };
    Ok(Decoded {
        samples: kind.samples(body, layout)?,
        rows,
        columns,
        format: "npy",
        dtype: kind.name().to_owned(),
        shape: header.shape,
    })
}

fn damaged(message: impl Into<String>) -> ReadError {
    ReadError::DamagedHeader { message: message.into() }
}

fn split_header(bytes: &[u8]) -> Result<(&str, &[u8]), ReadError> {
    let short = || ReadError::Truncated {
        found: bytes.len() as u64,
        needed: "a complete .npy header".to_owned(),
    };
    let rest = bytes.strip_prefix(MAGIC).ok_or_else(|| damaged("no .npy magic number"))?;
    let (version, rest) = rest.split_first_chunk::<2>().ok_or_else(short)?;
    let (length, rest) = match version[0] {
        1 => {
            let (length, rest) = rest.split_first_chunk::<2>().ok_or_else(short)?;
            (usize::from(u16::from_le_bytes(*length)), rest)
        }
        2 | 3 => {
            let (length, rest) = rest.split_first_chunk::<4>().ok_or_else(short)?;
            (usize::try_from(u32::from_le_bytes(*length)).unwrap_or(usize::MAX), rest)
        }
        other => {
            return Err(damaged(format!(
                "the .npy format version is {other}, versions 1 to 3 are read"
            )));
        }
    };
    if length > MAX_HEADER_BYTES {
        return Err(damaged(format!(
            "the .npy header claims {length} bytes, at most {MAX_HEADER_BYTES} are read"
        )));
    }
    let (header, body) = rest.split_at_checked(length).ok_or_else(short)?;
    let header = std::str::from_utf8(header).map_err(|_| damaged("the .npy header is no text"))?;
    Ok((header, body))
}

struct Header {
    descr: String,
    fortran_order: bool,
    shape: Vec<u64>,
}

impl Header {
    fn parse(text: &str) -> Result<Self, ReadError> {
        let mut scanner = Scanner { rest: text };
        let (mut descr, mut fortran_order, mut shape) = (None, None, None);
        scanner.expect('{')?;
        while !scanner.take('}') {
            let key = scanner.quoted()?;
            scanner.expect(':')?;
            match key {
                "descr" if descr.is_none() => {
                    if scanner.peek() == Some('[') {
                        return Err(ReadError::UnsupportedNumbers {
                            found: "a structured array".to_owned(),
                        });
                    }
                    descr = Some(scanner.quoted()?.to_owned());
                }
                "fortran_order" if fortran_order.is_none() => {
                    fortran_order = Some(scanner.boolean()?);
                }
                "shape" if shape.is_none() => shape = Some(scanner.shape()?),
                other => {
                    return Err(damaged(format!(
                        "the .npy header has an unexpected or repeated key '{}'",
                        other.escape_debug()
                    )));
                }
            }
            if !scanner.take(',') {
                scanner.expect('}')?;
                break;
            }
        }
        match (descr, fortran_order, shape) {
            (Some(descr), Some(fortran_order), Some(shape)) => {
                Ok(Self { descr, fortran_order, shape })
            }
            _ => Err(damaged("the .npy header lacks descr, fortran_order or shape")),
        }
    }
}

struct Scanner<'a> {
    rest: &'a str,
}

impl<'a> Scanner<'a> {
    fn peek(&mut self) -> Option<char> {
        self.rest = self.rest.trim_start();
        self.rest.chars().next()
    }

    fn take(&mut self, wanted: char) -> bool {
        if self.peek() == Some(wanted) {
            self.rest = self.rest.get(wanted.len_utf8()..).unwrap_or("");
            return true;
        }
        false
    }

    fn expect(&mut self, wanted: char) -> Result<(), ReadError> {
        if self.take(wanted) {
            return Ok(());
        }
        let found = self.peek().map_or("its end".to_owned(), |c| format!("{c:?}"));
        Err(damaged(format!("the .npy header has {found} where '{wanted}' is needed")))
    }

    fn quoted(&mut self) -> Result<&'a str, ReadError> {
        let quote = if self.take('"') {
            '"'
        } else {
            self.expect('\'')?;
            '\''
        };
        let (inside, rest) = self
            .rest
            .split_once(quote)
            .ok_or_else(|| damaged("the .npy header has an unclosed quotation mark"))?;
        self.rest = rest;
        Ok(inside)
    }

    fn boolean(&mut self) -> Result<bool, ReadError> {
        self.peek();
        for (word, value) in [("True", true), ("False", false)] {
            if let Some(rest) = self.rest.strip_prefix(word) {
                self.rest = rest;
                return Ok(value);
            }
        }
        Err(damaged("the .npy header's fortran_order is neither True nor False"))
    }

    fn shape(&mut self) -> Result<Vec<u64>, ReadError> {
        self.expect('(')?;
        let mut shape = Vec::new();
        while !self.take(')') {
            self.peek();
            let digits =
                self.rest.len() - self.rest.trim_start_matches(|c: char| c.is_ascii_digit()).len();
            let (number, rest) = self.rest.split_at(digits);
            let length = number.parse().map_err(|_| {
                damaged("the .npy header's shape holds something else than whole numbers")
            })?;
            shape.push(length);
            if shape.len() > 32 {
                return Err(damaged("the .npy header's shape has more than 32 axes"));
            }
            // Python 2 wrote long integers with a trailing L.
            self.rest = rest.strip_prefix('L').unwrap_or(rest);
            if !self.take(',') {
                self.expect(')')?;
                break;
            }
        }
        Ok(shape)
    }
}

/// Rows and columns of an array whose other axes have length one.
fn two_axes(shape: &[u64], plane: Option<u64>) -> Result<(usize, usize), ReadError> {
    let mut axes = shape.to_vec();
    while axes.len() > 2 {
        let Some(single) = axes.iter().position(|&length| length == 1) else {
            return Err(ReadError::TooManyAxes { shape: shape.to_vec() });
        };
        axes.remove(single);
    }
    let &[rows, columns] = axes.as_slice() else {
        return Err(ReadError::TooFewAxes { shape: shape.to_vec() });
    };
    if let Some(plane) = plane.filter(|&plane| plane != 0) {
        return Err(ReadError::NoSuchPlane { plane });
    }
    check_size(rows, columns)
}

/// Rows and columns as `usize`, where there is a pixel and there are not too many.
///
/// # Errors
/// No pixel at all, or [`MAX_PIXELS`] and more.
pub(super) fn check_size(rows: u64, columns: u64) -> Result<(usize, usize), ReadError> {
    if rows == 0 || columns == 0 {
        return Err(ReadError::NoPixels { rows, columns });
    }
    match (rows.checked_mul(columns), usize::try_from(rows), usize::try_from(columns)) {
        (Some(pixels), Ok(rows), Ok(columns)) if pixels < MAX_PIXELS => Ok((rows, columns)),
        _ => Err(ReadError::TooManyPixels { rows, columns }),
    }
}

#[derive(Clone, Copy)]
struct Layout {
    rows: usize,
    columns: usize,
    fortran: bool,
}

#[derive(Clone, Copy)]
enum Kind {
    Bool,
    Int,
    Unsigned,
    Float,
}

#[derive(Clone, Copy)]
struct NumberType {
    kind: Kind,
    bytes: usize,
    big_endian: bool,
}

impl NumberType {
    fn parse(descr: &str) -> Result<Self, ReadError> {
        let unsupported = || ReadError::UnsupportedNumbers {
            found: match descr.trim_start_matches(['<', '>', '|', '=']).chars().next() {
                Some('c') => format!("complex numbers ('{}')", descr.escape_debug()),
                Some('O') => "Python objects ('|O')".to_owned(),
                _ => format!("numbers of type '{}'", descr.escape_debug()),
            },
        };
        let mut characters = descr.chars();
        let big_endian = match characters.next() {
            Some('<' | '|') => false,
            Some('>') => true,
            Some('=') => cfg!(target_endian = "big"),
            _ => return Err(unsupported()),
        };
        let kind = match characters.next() {
            Some('b') => Kind::Bool,
            Some('i') => Kind::Int,
            Some('u') => Kind::Unsigned,
            Some('f') => Kind::Float,
            _ => return Err(unsupported()),
        };
        let bytes = match (kind, characters.as_str()) {
            (Kind::Bool | Kind::Int | Kind::Unsigned, "1") => 1,
            (Kind::Int | Kind::Unsigned | Kind::Float, "2") => 2,
            (Kind::Int | Kind::Unsigned | Kind::Float, "4") => 4,
            (Kind::Int | Kind::Unsigned | Kind::Float, "8") => 8,
            _ => return Err(unsupported()),
        };
        // Without a byte order only one-byte numbers have a meaning.
        if descr.starts_with('|') && bytes > 1 {
            return Err(unsupported());
        }
        Ok(Self { kind, bytes, big_endian })
    }

    const fn item_bytes(self) -> usize {
        self.bytes
    }

    const fn name(self) -> &'static str {
        match (self.kind, self.bytes) {
            (Kind::Bool, _) => "bool",
            (Kind::Int, 1) => "int8",
            (Kind::Int, 2) => "int16",
            (Kind::Int, 4) => "int32",
            (Kind::Int, _) => "int64",
            (Kind::Unsigned, 1) => "uint8",
            (Kind::Unsigned, 2) => "uint16",
            (Kind::Unsigned, 4) => "uint32",
            (Kind::Unsigned, _) => "uint64",
            (Kind::Float, 2) => "float16",
            (Kind::Float, 4) => "float32",
            (Kind::Float, _) => "float64",
        }
    }

    fn samples(self, body: &[u8], layout: Layout) -> Result<Samples, ReadError> {
        let big = self.big_endian;
        macro_rules! numbers {
            ($type:ty, $convert:expr) => {
                fill(body, layout, move |item| {
                    let number = if big {
                        <$type>::from_be_bytes(item)
                    } else {
                        <$type>::from_le_bytes(item)
                    };
                    ($convert)(number)
                })
            };
        }
        // Integers of 64 bits beyond 2⁵³ are rounded to the nearest double.
        Ok(match (self.kind, self.bytes) {
            (Kind::Bool, _) => Samples::F32(fill(
                body,
                layout,
                |[byte]: [u8; 1]| {
                    if byte == 0 { 0.0 } else { 1.0 }
                },
            )?),
            (Kind::Int, 1) => Samples::F32(numbers!(i8, f32::from)?),
            (Kind::Int, 2) => Samples::F32(numbers!(i16, f32::from)?),
            (Kind::Int, 4) => Samples::F64(numbers!(i32, f64::from)?),
            (Kind::Int, _) => Samples::F64(numbers!(i64, |n| n as f64)?),
            (Kind::Unsigned, 1) => Samples::F32(numbers!(u8, f32::from)?),
            (Kind::Unsigned, 2) => Samples::F32(numbers!(u16, f32::from)?),
            (Kind::Unsigned, 4) => Samples::F64(numbers!(u32, f64::from)?),
            (Kind::Unsigned, _) => Samples::F64(numbers!(u64, |n| n as f64)?),
            (Kind::Float, 2) => Samples::F32(numbers!(u16, half_to_f32)?),
            (Kind::Float, 4) => Samples::F32(numbers!(f32, |n| n)?),
            (Kind::Float, _) => Samples::F64(numbers!(f64, |n| n)?),
        })
    }
}

/// Turns the body's items into numbers, row after row; Fortran order is transposed.
fn fill<const BYTES: usize, T: Copy + Default>(
    body: &[u8],
    layout: Layout,
    convert: impl Fn([u8; BYTES]) -> T,
) -> Result<Vec<T>, ReadError> {
    let (items, _) = body.as_chunks::<BYTES>();
    let mut numbers = reserved(items.len())?;
    if !layout.fortran {
        numbers.extend(items.iter().map(|&item| convert(item)));
        return Ok(numbers);
    }
    numbers.resize(items.len(), T::default());
    let Layout { rows, columns, .. } = layout;
    for block_row in (0..rows).step_by(BLOCK) {
        for block_column in (0..columns).step_by(BLOCK) {
            for row in block_row..rows.min(block_row + BLOCK) {
                for column in block_column..columns.min(block_column + BLOCK) {
                    if let (Some(to), Some(&from)) =
                        (numbers.get_mut(row * columns + column), items.get(column * rows + row))
                    {
                        *to = convert(from);
                    }
                }
            }
        }
    }
    Ok(numbers)
}

/// A half-precision number (IEEE 754 binary16) as single precision, exactly.
fn half_to_f32(bits: u16) -> f32 {
    let sign = u32::from(bits >> 15) << 31;
    let exponent = u32::from(bits >> 10) & 0x1f;
    let fraction = u32::from(bits) & 0x3ff;
    match exponent {
        0 => {
            // Subnormal: fraction × 2⁻²⁴.
            let size = f32::from(bits & 0x3ff) / 16_777_216.0;
            if sign == 0 { size } else { -size }
        }
        31 => f32::from_bits(sign | 0x7f80_0000 | (fraction << 13)),
        _ => f32::from_bits(sign | ((exponent + 112) << 23) | (fraction << 13)),
    }
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::map::read::decode as decode_any;

    /// A file of format `version` around `header` and `body`.
    fn file(version: u8, header: &str, body: &[u8]) -> Vec<u8> {
        let mut bytes = MAGIC.to_vec();
        bytes.extend([version, 0]);
        if version == 1 {
            bytes.extend((header.len() as u16).to_le_bytes());
        } else {
            bytes.extend((header.len() as u32).to_le_bytes());
        }
        bytes.extend(header.as_bytes());
        bytes.extend(body);
        bytes
    }

    fn header(descr: &str, fortran: &str, shape: &str) -> String {
        format!("{{'descr': '{descr}', 'fortran_order': {fortran}, 'shape': {shape}, }}\n")
    }

    fn values(samples: &Samples) -> Vec<f64> {
        (0..samples.len()).map(|i| samples.get(i)).collect()
    }

    /// Half-precision bits of the small whole numbers used below.
    fn half(value: i32) -> u16 {
        if value == 0 {
            return 0;
        }
        let sign = if value < 0 { 0x8000 } else { 0 };
        let size = value.unsigned_abs();
        let power = 31 - size.leading_zeros();
        sign | ((15 + power) << 10) as u16 | ((size << (10 - power)) & 0x3ff) as u16
    }

    #[test]
    fn every_type_order_and_byte_order_gives_the_same_array() {
        // Two rows of three columns: the row-major values and their column-major order.
        let signed = [0, 1, 2, -3, 4, 100];
        let unsigned = [0, 1, 2, 3, 4, 100];
        let column_major = [0usize, 3, 1, 4, 2, 5];
        type Writer = fn(i32, bool) -> Vec<u8>;
        macro_rules! writer {
            ($type:ty) => {
                |v, big| {
                    let number = v as $type;
                    if big { number.to_be_bytes().to_vec() } else { number.to_le_bytes().to_vec() }
                }
            };
        }
        let half_writer: Writer = |v, big| {
            if big { half(v).to_be_bytes().to_vec() } else { half(v).to_le_bytes().to_vec() }
        };
        let types: [(&str, &str, bool, bool, Writer); 11] = [
            ("i1", "int8", true, false, writer!(i8)),
            ("i2", "int16", true, false, writer!(i16)),
            ("i4", "int32", true, true, writer!(i32)),
            ("i8", "int64", true, true, writer!(i64)),
            ("u1", "uint8", false, false, writer!(u8)),
            ("u2", "uint16", false, false, writer!(u16)),
            ("u4", "uint32", false, true, writer!(u32)),
            ("u8", "uint64", false, true, writer!(u64)),
            ("f2", "float16", true, false, half_writer),
            ("f4", "float32", true, false, writer!(f32)),
            ("f8", "float64", true, true, writer!(f64)),
        ];
        for (code, name, is_signed, wide, write) in types {
            let wanted = if is_signed { signed } else { unsigned };
            for big in [false, true] {
                for fortran in [false, true] {
                    for version in [1, 2, 3] {
                        let mark = if big { '>' } else { '<' };
                        let order = if fortran { "True" } else { "False" };
                        let body: Vec<u8> = (0..6)
                            .flat_map(|i| {
                                write(wanted[if fortran { column_major[i] } else { i }], big)
                            })
                            .collect();
                        let text = header(&format!("{mark}{code}"), order, "(2, 3)");
                        let map = decode(&file(version, &text, &body), None).expect("a good file");
                        assert_eq!(values(&map.samples), wanted.map(f64::from), "{text}");
                        assert_eq!((map.rows, map.columns, map.dtype.as_str()), (2, 3, name));
                        assert_eq!(matches!(map.samples, Samples::F64(_)), wide, "{name}");
                    }
                }
            }
        }
        let map = decode(&file(1, &header("|b1", "False", "(1, 3)"), &[0, 1, 7]), None)
            .expect("a good file");
        assert_eq!(values(&map.samples), [0.0, 1.0, 1.0]);
    }

    #[test]
    fn half_precision_is_exact_at_its_special_values() {
        // IEEE 754-2019 binary16: largest, smallest normal, smallest subnormal, infinities.
        for (bits, value) in [
            (0x7bffu16, 65504.0f32),
            (0x0400, 6.103_515_6e-5),
            (0x0001, 5.960_464_5e-8),
            (0x8001, -5.960_464_5e-8),
            (0x7c00, f32::INFINITY),
            (0xfc00, f32::NEG_INFINITY),
            (0x3555, 0.333_251_95),
        ] {
            assert_eq!(half_to_f32(bits).to_bits(), value.to_bits(), "{bits:#x}");
        }
        assert!(half_to_f32(0x7e00).is_nan());
    }

    #[test]
    fn a_large_fortran_array_is_transposed_like_the_obvious_loop() {
        let (rows, columns) = (130usize, 67usize);
        let body: Vec<u8> = (0..rows * columns).flat_map(|i| (i as u16).to_le_bytes()).collect();
        let map = decode(&file(1, &header("<u2", "True", "(130, 67)"), &body), None)
            .expect("a good file");
        for row in 0..rows {
            for column in 0..columns {
                let wanted = (column * rows + row) as f64;
                assert!((map.samples.get(row * columns + column) - wanted).abs() < 0.5);
            }
        }
    }

    #[test]
    fn axes_of_length_one_are_dropped_and_cubes_are_refused_with_advice() {
        let body = [0u8; 6];
        for (shape, rows, columns) in [
            ("(1, 1, 2, 3)", 2, 3),
            ("(2, 1, 3)", 2, 3),
            ("(2, 3, 1, 1)", 2, 3),
            ("(1, 6)", 1, 6),
            ("(6, 1)", 6, 1),
            ("(1, 1, 6)", 1, 6),
            ("(2L, 3L)", 2, 3),
        ] {
            let map = decode(&file(1, &header("|u1", "False", shape), &body), Some(0))
                .unwrap_or_else(|error| panic!("{shape}: {error}"));
            assert_eq!((map.rows, map.columns), (rows, columns), "{shape}");
        }
        let cube = decode(&file(1, &header("|u1", "False", "(2, 3, 2)"), &[0; 12]), None);
        let error = cube.expect_err("three axes");
        assert_eq!(error.code(), "too-many-axes");
        assert!(error.to_string().contains("plane"), "{error}");
        for (shape, code) in [("(6,)", "too-few-axes"), ("()", "too-few-axes")] {
            let size = if shape == "()" { 1 } else { 6 };
            let bytes = file(1, &header("|u1", "False", shape), &body[..size]);
            assert_eq!(decode(&bytes, None).expect_err(shape).code(), code);
        }
        let one_plane = file(1, &header("|u1", "False", "(2, 3)"), &body);
        assert_eq!(decode(&one_plane, Some(2)).expect_err("plane 2").code(), "no-such-plane");
    }

    #[test]
    fn lying_headers_are_refused_before_anything_is_allocated() {
        for (descr, shape, code) in [
            ("<f8", "(1000000, 1000000)", "too-many-pixels"),
            ("<f8", "(4294967296, 4294967296)", "truncated"),
            ("<f8", "(18446744073709551615, 2)", "truncated"),
            ("<f8", "(99999999999999999999, 2)", "damaged-header"),
            ("<f8", "(-2, 3)", "damaged-header"),
            ("<f8", "(30000, 30000)", "truncated"),
            ("<f8", "(0, 3)", "no-pixels"),
            ("<c16", "(1, 1)", "unsupported-numbers"),
            ("|O", "(1, 1)", "unsupported-numbers"),
            ("<f16", "(1, 1)", "unsupported-numbers"),
            ("<U8", "(1, 1)", "unsupported-numbers"),
            ("<f4", "(1, 1)", "trailing-bytes"),
            ("é", "(1, 1)", "unsupported-numbers"),
        ] {
            let bytes = file(1, &header(descr, "False", shape), &[0; 8]);
            let error = decode(&bytes, None).expect_err(shape);
            assert_eq!(error.code(), code, "{descr} {shape}: {error}");
        }
        let structured = "{'descr': [('a', '<f4')], 'fortran_order': False, 'shape': (1, 1), }";
        let error = decode(&file(1, structured, &[0; 4]), None).expect_err("structure");
        assert_eq!(error.code(), "unsupported-numbers");
        let mut huge = MAGIC.to_vec();
        huge.extend([2, 0, 0xff, 0xff, 0xff, 0xff]);
        assert_eq!(decode(&huge, None).expect_err("4 GiB header").code(), "damaged-header");
        let version_9 = file(9, "", &[]);
        assert_eq!(decode(&version_9, None).expect_err("version 9").code(), "damaged-header");
    }

    #[test]
    fn no_truncation_and_no_changed_byte_panics() {
        let good = file(1, &header("<f4", "False", "(2, 3)"), &[1; 24]);
        assert!(decode_any(&good, None, None).is_ok());
        for end in 0..good.len() {
            assert!(decode_any(&good[..end], None, None).is_err(), "{end} bytes");
        }
        for place in 0..good.len() {
            for value in [0, 0x27, 0x28, 0x30, 0x4c, 0x80, 0xff] {
                let mut changed = good.clone();
                changed[place] = value;
                // Any answer will do, as long as there is one.
                let _ = decode_any(&changed, None, None);
            }
        }
    }
}
