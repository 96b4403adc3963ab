//! Gray PNG images. The row stored first is the top one.
//!
//! Gray levels are taken as they are stored; gamma and colour profiles are not applied,
//! because a map's levels are brightness, not light for the eye.

use std::io::Cursor;

use ::image::codecs::png::PngDecoder;
use ::image::{ColorType, ImageDecoder, Limits};

use super::npy::check_size;
use super::read::{Decoded, ReadError, Samples, reserved};

/// First bytes of every PNG file.
pub const MAGIC: &[u8] = b"\x89PNG\r\n\x1a\n";
/// Deflate packs at most about 1032 bytes into one (P. Deutsch, RFC 1951: 258 bytes in two
/// bits), so a file cannot hold more pixels than this factor times its length.
const MAX_DEFLATE_RATIO: u64 = 1040;
/// Memory the decoder may take beside the picture itself, bytes.
const DECODER_BYTES: u64 = 64 << 20;

/// Decodes the bytes of one gray PNG file with 8 or 16 bits.
///
/// # Errors
/// Colour, palette, transparency or other depths; damaged or cut data; a size that the
/// file's length cannot hold (refused before memory is taken).
pub fn decode(bytes: &[u8]) -> Result<Decoded, ReadError> {
    let header = Header::parse(bytes)?;
    let (rows, columns) = check_size(u64::from(header.height), u64::from(header.width))?;
    let item_bytes: u64 = if header.depth == 16 { 2 } else { 1 };
    let needed = rows as u64 * columns as u64 * item_bytes;
    if needed / MAX_DEFLATE_RATIO > bytes.len() as u64 {
        return Err(ReadError::Truncated {
            found: bytes.len() as u64,
            needed: format!(
                "at least {} for {columns} x {rows} pixels",
                needed / MAX_DEFLATE_RATIO
            ),
        });
    }
    let mut limits = Limits::no_limits();
    limits.max_image_width = Some(header.width);
    limits.max_image_height = Some(header.height);
    limits.max_alloc = Some(needed + DECODER_BYTES);
    let failed = |error: ::image::ImageError| ReadError::DamagedData { message: error.to_string() };
    let decoder = PngDecoder::with_limits(Cursor::new(bytes), limits).map_err(failed)?;
    let color = decoder.color_type();
    let (wanted, dtype) =
        if header.depth == 16 { (ColorType::L16, "uint16") } else { (ColorType::L8, "uint8") };
    if color != wanted {
        return Err(ReadError::UnsupportedPixels { found: "a transparent colour".to_owned() });
    }
    if decoder.total_bytes() != needed {
        return Err(ReadError::DamagedHeader { message: "the PNG's sizes disagree".to_owned() });
    }
    let length = usize::try_from(needed)
        .map_err(|_| ReadError::TooManyPixels { rows: rows as u64, columns: columns as u64 })?;
    let mut buffer = reserved::<u8>(length)?;
    buffer.resize(length, 0);
    decoder.read_image(&mut buffer).map_err(failed)?;
    let mut numbers = reserved::<f32>(rows * columns)?;
    if header.depth == 16 {
        let (items, _) = buffer.as_chunks::<2>();
        numbers.extend(items.iter().map(|&item| f32::from(u16::from_ne_bytes(item))));
    } else {
        numbers.extend(buffer.iter().map(|&byte| f32::from(byte)));
    }
    Ok(Decoded {
        samples: Samples::F32(numbers),
        rows,
        columns,
        format: "png",
        dtype: dtype.to_owned(),
        shape: vec![rows as u64, columns as u64],
    })
}

struct Header {
    width: u32,
    height: u32,
    depth: u8,
}

impl Header {
    /// The image header, which must be the first chunk (PNG specification, third edition,
    /// 11.2.1), where it says gray of 8 or 16 bits.
    fn parse(bytes: &[u8]) -> Result<Self, ReadError> {
        let short = || ReadError::Truncated {
            found: bytes.len() as u64,
            needed: "a complete PNG header".to_owned(),
        };
        let rest = bytes.get(MAGIC.len()..).ok_or_else(short)?;
        let (chunk, rest) = rest.split_first_chunk::<8>().ok_or_else(short)?;
        if chunk != b"\0\0\0\x0dIHDR" {
            return Err(ReadError::DamagedHeader {
                message: "the PNG does not begin with its IHDR chunk".to_owned(),
            });
        }
        let (width, rest) = rest.split_first_chunk::<4>().ok_or_else(short)?;
        let (height, rest) = rest.split_first_chunk::<4>().ok_or_else(short)?;
        let (&[depth, color], _) = rest.split_first_chunk::<2>().ok_or_else(short)?;
        let found = match (color, depth) {
            (0, 8 | 16) => {
                return Ok(Self {
                    width: u32::from_be_bytes(*width),
                    height: u32::from_be_bytes(*height),
                    depth,
                });
            }
            (0, _) => format!("{depth}-bit gray"),
            (2, _) => "colours".to_owned(),
            (3, _) => "a colour palette".to_owned(),
            (4, _) => "gray and transparency".to_owned(),
            (6, _) => "colours and transparency".to_owned(),
            _ => format!("the unknown colour type {color}"),
        };
        Err(ReadError::UnsupportedPixels { found })
    }
}

#[cfg(test)]
mod tests {
    use super::*;
    use ::image::{
        DynamicImage, GrayAlphaImage, ImageBuffer, ImageFormat, Luma, RgbImage, RgbaImage,
    };

    fn png(image: impl Into<DynamicImage>) -> Vec<u8> {
        let mut bytes = Cursor::new(Vec::new());
        image.into().write_to(&mut bytes, ImageFormat::Png).expect("written to memory");
        bytes.into_inner()
    }

    fn gray16() -> Vec<u8> {
        let pixels = vec![0u16, 1, 256, 65535, 7, 300];
        png(ImageBuffer::<Luma<u16>, _>::from_raw(3, 2, pixels).expect("3 x 2"))
    }

    #[test]
    fn gray_levels_come_back_in_rows() {
        let map = decode(&gray16()).expect("16-bit gray");
        assert_eq!(map.samples, Samples::F32(vec![0.0, 1.0, 256.0, 65535.0, 7.0, 300.0]));
        assert_eq!((map.rows, map.columns, map.dtype.as_str()), (2, 3, "uint16"));
        let eight = ImageBuffer::<Luma<u8>, _>::from_raw(2, 1, vec![9u8, 255]).expect("2 x 1");
        let map = decode(&png(eight)).expect("8-bit gray");
        assert_eq!(map.samples, Samples::F32(vec![9.0, 255.0]));
    }

    #[test]
    fn colour_and_transparency_are_refused_with_advice() {
        for bytes in
            [png(RgbImage::new(2, 2)), png(RgbaImage::new(2, 2)), png(GrayAlphaImage::new(2, 2))]
        {
            let error = decode(&bytes).expect_err("not plain gray");
            assert_eq!(error.code(), "unsupported-pixels");
            assert!(error.to_string().contains("single-channel gray"), "{error}");
        }
    }

    #[test]
    fn a_bomb_of_dimensions_is_refused_by_its_header() {
        let mut bytes = gray16();
        bytes[16..20].copy_from_slice(&40_000u32.to_be_bytes());
        bytes[20..24].copy_from_slice(&40_000u32.to_be_bytes());
        assert_eq!(decode(&bytes).expect_err("3 GB").code(), "truncated");
        bytes[16..20].copy_from_slice(&100_000u32.to_be_bytes());
        bytes[20..24].copy_from_slice(&100_000u32.to_be_bytes());
        assert_eq!(decode(&bytes).expect_err("20 GB").code(), "too-many-pixels");
    }

    #[test]
    fn no_truncation_and_no_changed_byte_panics() {
        let good = gray16();
        // The last twelve bytes are the end chunk, which holds no pixels.
        for end in 0..good.len() - 12 {
            assert!(decode(&good[..end]).is_err(), "{end} bytes");
        }
        for place in 0..good.len() {
            for value in [0, 1, 0x7f, 0xff] {
                let mut changed = good.clone();
                changed[place] = value;
                // Any answer will do, as long as there is one.
                let _ = decode(&changed);
            }
        }
    }
}
