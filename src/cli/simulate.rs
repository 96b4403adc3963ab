//! `jetspan simulate SCENARIO --out DIR`: makes the maps of a scenario, several at a time, and
//! writes them in order.

use std::fs::File;
use std::io::Read;
use std::path::{Path, PathBuf};

use clap::ArgMatches;
use rayon::prelude::*;
use serde_json::{Map, Value};

use super::{ALL_MEASURED, CliError, messages};
use crate::map::description::{nearest, sidecar_path};
use crate::simulate::{Made, MadeMap, Scenario, parameter_page};
use crate::write::encode::{description_of, encode, extension};
use crate::write::folder::{Folder, FolderFile};
use crate::write::{WriteError, print};

/// Longest scenario read, bytes.
const MAX_SCENARIO_BYTES: u64 = 1 << 20;
/// Most sources made before their maps are written.
const CHUNK: usize = 32;
/// Most bytes of encoded maps held, as far as the maps so far tell their size.
const CHUNK_BYTES: usize = 256 << 20;
/// Keys of the description that the manifest repeats, where a map has them.
const MANIFEST_KEYS: [&str; 2] = ["host_x_px", "host_y_px"];
/// Name of the manifest.
const MANIFEST: &str = "manifest.csv";

/// Runs the command and gives its exit status.
pub fn run(matches: &ArgMatches) -> Result<u8, CliError> {
    if matches.get_flag("list") {
        print(&list())?;
        return Ok(ALL_MEASURED);
    }
    if matches.get_flag("parameters") {
        print(&parameter_page())?;
        return Ok(ALL_MEASURED);
    }
    let path = |id: &str| matches.get_one::<PathBuf>(id).cloned().unwrap_or_default();
    let whole = |id: &str| matches.get_one::<u64>(id).copied();
    let size = |id: &str| whole(id).map(|n| usize::try_from(n).unwrap_or(usize::MAX));
    let out = path("out");
    let scenario = scenario(&path("SCENARIO"))?.with(size("count"), whole("seed"));
    let threads = size("threads").unwrap_or_else(|| {
        std::thread::available_parallelism().map_or(1, std::num::NonZeroUsize::get)
    });
    let mut sample = Sample::begin(Folder::create(&out)?, &scenario)?;
    make(&scenario, threads, &mut sample)?;
    let maps = sample.finish()?;
    let manifest = out.join(MANIFEST);
    print(&format!(
        "{maps} {} written to {}; measure with: jetspan measure --manifest {}\n",
        if maps == 1 { "map" } else { "maps" },
        shell_word(&out),
        shell_word(&manifest)
    ))?;
    Ok(ALL_MEASURED)
}

/// A line for every built-in scenario.
fn list() -> String {
    let names = Scenario::names();
    let width = names.iter().map(|(name, _)| name.len()).max().unwrap_or(0);
    names.iter().map(|(name, about)| format!("{name:width$}  {about}\n")).collect()
}

/// The scenario of this name: standard input, a file, or a built-in one.
fn scenario(path: &Path) -> Result<Scenario, CliError> {
    let unreadable = |reason: String| CliError::ScenarioFile { path: path.to_path_buf(), reason };
    if path == Path::new("-") {
        let text = text(std::io::stdin().lock()).map_err(unreadable)?;
        return Ok(Scenario::parse(&text, "standard input")?);
    }
    let missing = std::fs::metadata(path).is_err_and(|e| e.kind() == std::io::ErrorKind::NotFound);
    if missing || path.is_dir() {
        let name = path.to_str().unwrap_or_default();
        return Ok(Scenario::named(name).ok_or_else(|| unknown(path))??);
    }
    let file = File::open(path).map_err(|e| unreadable(e.to_string()))?;
    let text = text(file).map_err(unreadable)?;
    Ok(Scenario::parse(&text, &path.display().to_string())?)
}

fn unknown(path: &Path) -> CliError {
    let found = path.display().to_string();
    let names: Vec<&'static str> = Scenario::names().into_iter().map(|(name, _)| name).collect();
    let near = nearest(&found, names.iter().copied())
        .map_or(String::new(), |name| format!(" (nearest: `{name}`)"));
    CliError::UnknownScenario { found, near, names: names.join(", ") }
}

fn text(source: impl Read) -> Result<String, String> {
    let mut bytes = Vec::new();
    source
        .take(MAX_SCENARIO_BYTES + 1)
        .read_to_end(&mut bytes)
        .map_err(|error| error.to_string())?;
    if bytes.len() as u64 > MAX_SCENARIO_BYTES {
        return Err(format!("it has more than {MAX_SCENARIO_BYTES} bytes"));
    }
    String::from_utf8(bytes).map_err(|_| "it is no text in UTF-8".to_owned())
}

/// Makes all sources and writes their maps in the order of the sources: a chunk at a time,
/// so that only a chunk is held in memory.
fn make(scenario: &Scenario, threads: usize, sample: &mut Sample) -> Result<(), CliError> {
    let pool = rayon::ThreadPoolBuilder::new()
        .num_threads(threads)
        .build()
        .map_err(|error| CliError::Threads { threads, reason: error.to_string() })?;
    let progress = messages::Progress::over("sources", scenario.count());
    let mut done = 0;
    let mut largest_bytes = 1;
    // Nothing is known of their size before the first ones.
    let mut chunk = threads;
    let result = loop {
        progress.show(done, 0);
        if done == scenario.count() {
            break Ok(());
        }
        let next = scenario.count().min(done.saturating_add(chunk));
        let made: Vec<_> = pool.install(|| {
            (done..next).into_par_iter().map(|index| Ready::all_of(scenario, index)).collect()
        });
        // The first failure in order, whichever thread was first.
        let written = made.into_iter().try_for_each(|maps| {
            let maps = maps?;
            let bytes = maps.iter().map(|map| map.bytes.len()).sum();
            largest_bytes = largest_bytes.max(bytes);
            maps.iter().try_for_each(|map| Ok(sample.add(map)?))
        });
        if written.is_err() {
            break written;
        }
        done = next;
        chunk = (CHUNK_BYTES / largest_bytes).min(CHUNK).max(threads);
    };
    progress.end();
    result
}

/// A map as it goes into the folder.
struct Ready {
    file: String,
    bytes: Vec<u8>,
    description_file: String,
    /// As JSON.
    description: String,
    /// A line of the manifest.
    manifest: Vec<u8>,
    /// A line of the truth.
    truth: String,
}

impl Ready {
    /// The maps of one source at all its epochs.
    fn all_of(scenario: &Scenario, index: usize) -> Result<Vec<Self>, CliError> {
        scenario.make(index)?.into_iter().map(Self::new).collect()
    }

    fn new(made: Made) -> Result<Self, CliError> {
        let Made { name, map } = made;
        let MadeMap { brightness, mut description, truth, file: format } = map;
        let bytes = encode(&brightness, &format)
            .map_err(|error| CliError::Encode { name: name.clone(), error })?;
        let file = format!("{name}.{}", extension(format.format));
        let id = description.entry("id").or_insert_with(|| Value::from(name)).clone();
        for (key, value) in description_of(&format) {
            description.insert(key.to_owned(), value);
        }
        let cell = |value: Option<&Value>| match value {
            None => String::new(),
            Some(Value::String(text)) => text.clone(),
            Some(value) => value.to_string(),
        };
        let mut cells = vec![file.clone(), cell(Some(&id))];
        cells.extend(MANIFEST_KEYS.map(|key| cell(description.get(key))));
        let mut line =
            Map::from_iter([("id".to_owned(), id), ("file".to_owned(), Value::from(file.clone()))]);
        if let Value::Object(truth) = truth.values.to_json() {
            line.extend(truth.into_iter().filter(|(key, _)| key != "id" && key != "file"));
        }
        // Maps of strings, numbers and lists: writing them cannot fail.
        let description = serde_json::to_string_pretty(&description).unwrap_or_default() + "\n";
        Ok(Self {
            description_file: sidecar_path(Path::new(&file)).display().to_string(),
            manifest: csv_line(&cells),
            truth: Value::Object(line).to_string() + "\n",
            file,
            bytes,
            description,
        })
    }
}

/// A line of a table. Memory takes whatever is written.
fn csv_line(cells: &[impl AsRef<[u8]>]) -> Vec<u8> {
    let mut writer = csv::Writer::from_writer(Vec::new());
    let _ = writer.write_record(cells);
    writer.into_inner().unwrap_or_default()
}

/// The folder with its lists.
struct Sample {
    folder: Folder,
    manifest: FolderFile,
    truth: FolderFile,
    maps: usize,
}

impl Sample {
    fn begin(folder: Folder, scenario: &Scenario) -> Result<Self, WriteError> {
        folder.add("scenario.toml", scenario.to_toml().as_bytes())?;
        let mut manifest = folder.file(MANIFEST)?;
        manifest.write(&csv_line(&[&["file", "id"][..], &MANIFEST_KEYS].concat()))?;
        let truth = folder.file("truth.jsonl")?;
        Ok(Self { folder, manifest, truth, maps: 0 })
    }

    fn add(&mut self, map: &Ready) -> Result<(), WriteError> {
        self.folder.add(&map.file, &map.bytes)?;
        self.folder.add(&map.description_file, map.description.as_bytes())?;
        self.manifest.write(&map.manifest)?;
        self.truth.write(map.truth.as_bytes())?;
        self.maps += 1;
        Ok(())
    }

    /// Puts the folder in its place and says how many maps it holds.
    fn finish(self) -> Result<usize, WriteError> {
        self.manifest.finish()?;
        self.truth.finish()?;
        self.folder.finish()?;
        Ok(self.maps)
    }
}

/// A path as one word of a shell's command line.
fn shell_word(path: &Path) -> String {
    let text = path.display().to_string();
    let plain = |c: char| c.is_alphanumeric() || "/._-+,:@%".contains(c);
    if !text.is_empty() && text.chars().all(plain) {
        text
    } else {
        format!("'{}'", text.replace('\'', r"'\''"))
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn paths_are_quoted_where_a_shell_would_part_them() {
        for (path, word) in [
            ("made/a-1.csv", "made/a-1.csv"),
            ("my maps", "'my maps'"),
            ("it's", r"'it'\''s'"),
            ("$HOME", "'$HOME'"),
        ] {
            assert_eq!(shell_word(Path::new(path)), word);
        }
    }
}
