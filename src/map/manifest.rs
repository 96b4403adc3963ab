//! Manifests: one row per map, as CSV or JSON Lines, chosen by the content.

use std::collections::HashMap;
use std::path::{Component, Path, PathBuf};

use serde_json::Value;

use super::description::{
    DESCRIPTION_KEYS, DescriptionError, Layer, Origin, json_pairs, key_spec, nearest, read_text,
    value_from_text,
};

/// Longest manifest read, bytes: a million rows of two hundred.
const MAX_MANIFEST_BYTES: u64 = 256 << 20;
/// The column or key that names the map.
const FILE: &str = "file";

/// One map of a manifest.
#[derive(Clone, Debug, PartialEq)]
pub struct ManifestEntry {
    /// The map, relative paths put after the manifest's folder.
    pub file: PathBuf,
    /// What its row says.
    pub layer: Layer,
    /// Line of the manifest, counted from 1.
    pub line: u64,
}

/// All maps of a manifest, in its order.
#[derive(Clone, Debug, Default)]
pub struct Manifest {
    entries: Vec<ManifestEntry>,
    by_path: HashMap<PathBuf, usize>,
}

impl Manifest {
    /// Reads a manifest.
    ///
    /// CSV has a header of `file` and description keys (separated by commas, semicolons or
    /// tabs; `#` starts a comment line; an empty cell means not given). JSON Lines has one
    /// object per line with the key `file`.
    ///
    /// # Errors
    /// An unreadable file, unknown keys, rows of another length than the header, a map that
    /// is named twice, values of the wrong type.
    pub fn read(path: &Path) -> Result<Self, DescriptionError> {
        let text = read_text(path, MAX_MANIFEST_BYTES)?;
        let folder = path.parent().unwrap_or_else(|| Path::new(""));
        Self::from_text(&text, folder, &path.display().to_string())
    }

    /// The same from its text; `folder` is the manifest's, `name` stands in messages.
    ///
    /// # Errors
    /// As [`Self::read`].
    pub fn from_text(text: &str, folder: &Path, name: &str) -> Result<Self, DescriptionError> {
        let text = text.strip_prefix('\u{feff}').unwrap_or(text);
        let mut manifest = Self::default();
        if text.trim_start().starts_with('{') {
            for (index, line) in text.lines().enumerate().filter(|(_, l)| !l.trim().is_empty()) {
                manifest.add_json(line, index as u64 + 1, folder, name)?;
            }
        } else {
            manifest.add_csv(text, folder, name)?;
        }
        Ok(manifest)
    }

    fn add_json(
        &mut self,
        text: &str,
        line: u64,
        folder: &Path,
        name: &str,
    ) -> Result<(), DescriptionError> {
        let place = format!("{name}, line {line}");
        let mut file = None;
        let mut pairs = Vec::new();
        for (key, value) in json_pairs(text, &place)? {
            if key != FILE {
                pairs.push((key, value));
            } else if file.is_some() {
                return Err(DescriptionError::DuplicateKey { place, key });
            } else {
                file = Some(value);
            }
        }
        let Some(Value::String(file)) = file else {
            let message = "needed is the key file, a text that names the map".to_owned();
            return Err(DescriptionError::Syntax { place, message });
        };
        self.add(&file, pairs, line, folder, place)
    }

    fn add_csv(&mut self, text: &str, folder: &Path, name: &str) -> Result<(), DescriptionError> {
        let syntax = |place: String, message: String| DescriptionError::Syntax { place, message };
        let mut reader = csv::ReaderBuilder::new()
            .delimiter(delimiter(text))
            .trim(csv::Trim::All)
            .comment(Some(b'#'))
            .flexible(false)
            .from_reader(text.as_bytes());
        let header = reader
            .headers()
            .map_err(|error| {
                syntax(name.to_owned(), format!("the header cannot be read: {error}"))
            })?
            .clone();
        let mut columns = Vec::new();
        for (index, key) in header.iter().enumerate() {
            let place = || format!("{name}, header");
            if header.iter().take(index).any(|earlier| earlier == key) {
                return Err(DescriptionError::DuplicateKey { place: place(), key: key.to_owned() });
            }
            if key == FILE {
                columns.push(None);
            } else if let Some(spec) = key_spec(key) {
                columns.push(Some(spec));
            } else {
                let known = DESCRIPTION_KEYS.iter().map(|spec| spec.name).chain([FILE]);
                return Err(DescriptionError::UnknownKey {
                    place: place(),
                    found: key.chars().take(60).collect(),
                    nearest: nearest(key, known).unwrap_or(FILE),
                });
            }
        }
        if !header.iter().any(|key| key == FILE) {
            let message = "needed is a column file that names the maps".to_owned();
            return Err(syntax(format!("{name}, header"), message));
        }
        for record in reader.records() {
            let record = record.map_err(|error| {
                let line = error.position().map_or(0, |position| line_of(text, position));
                let message = match error.kind() {
                    csv::ErrorKind::UnequalLengths { expected_len, len, .. } => {
                        format!("the row has {len} cells, the header {expected_len}: mend the row")
                    }
                    _ => format!("the row cannot be read: {error}"),
                };
                syntax(format!("{name}, line {line}"), message)
            })?;
            let line = record.position().map_or(0, |position| line_of(text, position));
            let place = format!("{name}, line {line}");
            let mut file = "";
            let mut pairs = Vec::new();
            for (spec, cell) in columns.iter().zip(record.iter()) {
                match spec {
                    None => file = cell,
                    Some(_) if cell.is_empty() => {}
                    Some(spec) => {
                        pairs.push((spec.name.to_owned(), value_from_text(spec, cell, &place)?));
                    }
                }
            }
            self.add(file, pairs, line, folder, place)?;
        }
        Ok(())
    }

    fn add(
        &mut self,
        file: &str,
        pairs: Vec<(String, Value)>,
        line: u64,
        folder: &Path,
        place: String,
    ) -> Result<(), DescriptionError> {
        if file.trim().is_empty() {
            let message = "the row names no map: fill in file".to_owned();
            return Err(DescriptionError::Syntax { place, message });
        }
        let path = folder.join(file);
        let index = self.entries.len();
        if let Some(&first) = self.by_path.get(&same_path(&path)) {
            return Err(DescriptionError::DuplicateFile {
                place,
                file: file.to_owned(),
                first_line: self.entries.get(first).map_or(0, |entry| entry.line),
            });
        }
        self.by_path.insert(same_path(&path), index);
        let layer = Layer::from_pairs(pairs, Origin::Manifest, &place)?;
        self.entries.push(ManifestEntry { file: path, layer, line });
        Ok(())
    }

    /// All entries, in the manifest's order.
    pub fn entries(&self) -> &[ManifestEntry] {
        &self.entries
    }

    /// The maps, in the manifest's order.
    pub fn files(&self) -> impl Iterator<Item = &Path> {
        self.entries.iter().map(|entry| entry.file.as_path())
    }

    /// The row of a map, however its path is written.
    pub fn layer(&self, map_path: &Path) -> Option<&Layer> {
        let &index = self.by_path.get(&same_path(map_path))?;
        self.entries.get(index).map(|entry| &entry.layer)
    }
}

/// Line of the row read from `position`, which lies before any empty and comment lines.
fn line_of(text: &str, position: &csv::Position) -> u64 {
    let start = usize::try_from(position.byte()).unwrap_or(usize::MAX);
    let ahead = text.as_bytes().get(start..).unwrap_or_default();
    let skipped = ahead
        .split(|&byte| byte == b'\n')
        .take_while(|line| line.trim_ascii().is_empty() || line.starts_with(b"#"))
        .count();
    position.line() + skipped as u64
}

/// The most frequent separator of the header line.
fn delimiter(text: &str) -> u8 {
    let header = text
        .lines()
        .find(|line| !line.trim().is_empty() && !line.starts_with('#'))
        .unwrap_or_default();
    let mut best = (header.matches(',').count(), b',');
    for (mark, byte) in [(';', b';'), ('\t', b'\t')] {
        let count = header.matches(mark).count();
        if count > best.0 {
            best = (count, byte);
        }
    }
    best.1
}

/// One spelling for all paths to a file: resolved where it exists, else tidied by name.
fn same_path(path: &Path) -> PathBuf {
    if let Ok(path) = path.canonicalize() {
        return path;
    }
    let absolute = std::path::absolute(path).unwrap_or_else(|_| path.to_path_buf());
    let mut tidy = PathBuf::new();
    for part in absolute.components() {
        match part {
            Component::ParentDir => {
                tidy.pop();
            }
            Component::CurDir => {}
            other => tidy.push(other),
        }
    }
    tidy
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::map::description::resolve;

    fn manifest(text: &str) -> Result<Manifest, DescriptionError> {
        Manifest::from_text(text, Path::new("/maps"), "list.csv")
    }

    #[test]
    fn csv_and_json_lines_say_the_same() {
        let texts = [
            "file,redshift,unit,pixel_scale_arcsec,id\na.npy,0.1,Jy/beam,\"0.5,0.6\",3\nb/c.png,,,0.2,\n",
            "# list\nfile;redshift;unit;pixel_scale_arcsec;id\na.npy;0.1;Jy/beam;0.5 0.6;3\nb/c.png;;;0.2;\n",
            "\u{feff}file\tredshift\tunit\tpixel_scale_arcsec\tid\r\na.npy\t0.1\tJy/beam\t[0.5, 0.6]\t3\r\nb/c.png\t\t\t0.2\t\r\n",
            "{\"file\":\"a.npy\",\"redshift\":0.1,\"unit\":\"Jy/beam\",\"pixel_scale_arcsec\":[0.5,0.6],\"id\":\"3\"}\n\n{\"file\":\"b/c.png\",\"redshift\":null,\"pixel_scale_arcsec\":0.2}\n",
        ];
        for text in texts {
            let list = manifest(text).unwrap_or_else(|error| panic!("{text}: {error}"));
            let files: Vec<_> = list.files().collect();
            assert_eq!(files, [Path::new("/maps/a.npy"), Path::new("/maps/b/c.png")]);
            let first = list.layer(Path::new("/maps/x/../a.npy")).expect("listed").clone();
            let description = resolve(vec![first]).expect("good values");
            assert_eq!(description.redshift, Some(0.1));
            assert_eq!(description.pixel_scale_arcsec, Some([0.5, 0.6]));
            assert_eq!(description.id.as_deref(), Some("3"));
            assert_eq!(description.origins.get("redshift"), Some(&Origin::Manifest));
            let second = list.layer(Path::new("/maps/b/c.png")).expect("listed");
            assert_eq!(second.values.len(), 1, "empty cells are not given: {second:?}");
            assert!(list.layer(Path::new("/maps/c.png")).is_none());
        }
    }

    #[test]
    fn errors_say_where() {
        for (text, code, part) in [
            ("file,redshif\na.npy,1\n", "unknown-key", "redshift"),
            ("fil,redshift\na.npy,1\n", "unknown-key", "file"),
            ("redshift\n1\n", "description-syntax", "column file"),
            ("file,redshift,redshift\na.npy,1,1\n", "duplicate-key", "redshift"),
            ("file,redshift\na.npy,x\n", "bad-description-value", "line 2"),
            ("file,redshift\na.npy,1\n\nb.npy\n", "description-syntax", "line 4"),
            ("file,redshift\na.npy,1\n./a.npy,2\n", "duplicate-file", "line 2"),
            ("file,redshift\n,1\n", "description-syntax", "names no map"),
            ("{\"redshift\":1}\n", "description-syntax", "key file"),
            ("{\"file\":\"a\"}\n{\"file\":\"b\",}\n", "description-syntax", "line 2"),
            (
                "{\"file\":\"a\",\"unit\":\"Jy/beem\"}\n",
                "bad-description-value",
                "nearest is Jy/beam",
            ),
            ("", "description-syntax", "column file"),
        ] {
            let error = manifest(text).expect_err(text);
            assert_eq!(error.code(), code, "{text:?}: {error}");
            assert!(error.to_string().contains(part), "{error}");
        }
    }

    #[test]
    fn links_and_relative_paths_lead_to_the_same_row() {
        let folder = tempfile::tempdir().expect("a folder");
        std::fs::write(folder.path().join("a.npy"), b"x").expect("written");
        let list = folder.path().join("list.csv");
        std::fs::write(&list, "file,redshift\na.npy,0.5\n").expect("written");
        let list = Manifest::read(&list).expect("a manifest");
        assert!(list.layer(&folder.path().join("./a.npy")).is_some());
        assert_eq!(list.entries().len(), 1);
    }
}
