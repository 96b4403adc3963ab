//! Text grids: one row of the map per line, first line = first row stored.
//!
//! Numbers are separated by blanks and tabs, or by commas, or by semicolons. `#` starts a
//! comment, empty lines are skipped, `nan` and `inf` are blanks. Every row has the same
//! number of fields.

use super::npy::check_size;
use super::read::{Decoded, ReadError, Samples};

/// Longest piece of a wrong field quoted in an error, characters.
const QUOTED_CHARACTERS: usize = 24;

/// Decodes the bytes of a text grid.
///
/// # Errors
/// A field that is no number, rows of unequal length, commas and semicolons together, or no
/// numbers at all; each names the line.
pub fn decode(bytes: &[u8]) -> Result<Decoded, ReadError> {
    let bytes = bytes.strip_prefix(b"\xef\xbb\xbf").unwrap_or(bytes);
    let mut numbers: Vec<f64> = Vec::new();
    let (mut rows, mut columns) = (0usize, 0usize);
    let (mut commas, mut semicolons) = (false, false);
    for (index, line) in bytes.split(|&byte| byte == b'\n').enumerate() {
        let data = line.split(|&byte| byte == b'#').next().unwrap_or_default().trim_ascii();
        if data.is_empty() {
            continue;
        }
        let before = numbers.len();
        commas |= data.contains(&b',');
        semicolons |= data.contains(&b';');
        let line = index + 1;
        if commas && semicolons {
            // 1,5;2,5 would else be read as four numbers.
            return Err(ReadError::MixedSeparators { line });
        }
        let separator = if commas && data.contains(&b',') {
            Some(b',')
        } else if data.contains(&b';') {
            Some(b';')
        } else {
            None
        };
        match separator {
            Some(separator) => {
                for (field, cell) in data.split(|&byte| byte == separator).enumerate() {
                    numbers.push(number(cell.trim_ascii(), line, field + 1)?);
                }
            }
            None => {
                let cells = data
                    .split(|byte| byte.is_ascii_whitespace() || *byte == 0x0b)
                    .filter(|cell| !cell.is_empty());
                for (field, cell) in cells.enumerate() {
                    numbers.push(number(cell, line, field + 1)?);
                }
            }
        }
        let found = numbers.len() - before;
        if rows == 0 {
            columns = found;
        } else if found != columns {
            return Err(ReadError::RaggedRow { line, found, needed: columns });
        }
        rows += 1;
    }
    let (rows, columns) = check_size(rows as u64, columns as u64)?;
    Ok(Decoded {
        samples: Samples::F64(numbers),
        rows,
        columns,
        format: "text",
        dtype: "float64".to_owned(),
        shape: vec![rows as u64, columns as u64],
    })
}

fn number(cell: &[u8], line: usize, field: usize) -> Result<f64, ReadError> {
    std::str::from_utf8(cell).ok().and_then(|text| text.parse().ok()).ok_or_else(|| {
        let found = String::from_utf8_lossy(cell).chars().take(QUOTED_CHARACTERS).collect();
        ReadError::BadNumber { line, field, found }
    })
}

#[cfg(test)]
mod tests {
    use super::*;

    fn grid(text: &str) -> Result<(usize, usize, Vec<f64>), ReadError> {
        let map = decode(text.as_bytes())?;
        let values = (0..map.samples.len()).map(|i| map.samples.get(i)).collect();
        Ok((map.rows, map.columns, values))
    }

    #[test]
    fn every_separator_gives_the_same_grid() {
        let wanted = (2, 3, vec![1.0, -2.5, 3e-4, 4.0, 5.0, 6.0]);
        for text in [
            "1 -2.5 3e-4\n4 5 6\n",
            "1\t-2.5\t3e-4\r\n4\t5\t6\r\n",
            "1, -2.5, 3e-4\n4,5,6",
            "1;-2.5;3e-4\n4; 5; 6\n",
            "# a map\n\n  1 -2.5 3e-4  # first row\n\n4 5 6\n# end",
            "\u{feff}1 -2.5 3E-4\n+4 5. 6\n",
        ] {
            assert_eq!(grid(text).as_ref(), Ok(&wanted), "{text:?}");
        }
    }

    #[test]
    fn blanks_are_words() {
        let (rows, columns, values) = grid("nan 1\nNaN -inf\ninf 2\n").expect("a grid");
        assert_eq!((rows, columns), (3, 2));
        assert!(values[0].is_nan() && values[2].is_nan());
        assert!(values[3].is_infinite() && values[4].is_infinite());
    }

    #[test]
    fn errors_name_the_line() {
        for (text, code, part) in [
            ("1 2\n3\n", "ragged-row", "line 2 has 1"),
            ("# c\n1 2\n\n3 x\n", "bad-number", "line 4, field 2"),
            ("1,,2\n", "bad-number", "line 1, field 2"),
            ("1,2,\n", "bad-number", "line 1, field 3"),
            ("1,5;2,5\n", "mixed-separators", "line 1"),
            ("1,5 2,5\n", "bad-number", "line 1, field 2"),
            ("# nothing\n", "no-pixels", "0 rows"),
            ("hello there\n", "bad-number", "\"hello\""),
        ] {
            let error = grid(text).expect_err(text);
            assert_eq!(error.code(), code, "{text:?}");
            assert!(error.to_string().contains(part), "{error}");
        }
    }
}
