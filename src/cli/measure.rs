//! `jetspan measure MAP...`: reads, measures and writes maps one after the other. A map that
//! fails becomes a failed record and the rest goes on.

use std::path::{Path, PathBuf};

use clap::ArgMatches;

use super::{ALL_MEASURED, CliError, SOME_FAILED, args, messages};
use crate::map::SkyMap;
use crate::map::description::{
    Layer, MapDescription, read_defaults, read_sidecar, resolve, sidecar_path,
};
use crate::map::manifest::Manifest;
use crate::map::read::read_map_file;
use crate::measurement::{Because, OrMissing};
use crate::pipeline::{MapName, measure};
use crate::record::{FailedRecord, Input, RECORD_VERSION, Record, RecordError, Software, Status};
use crate::settings::Settings;
use crate::write::{Target, WriteError, json, print, table};

/// Runs the command and gives its exit status.
pub fn run(matches: &ArgMatches) -> Result<u8, CliError> {
    let settings = args::settings(matches)?;
    let flags = Layer::from_flag_pairs(args::description_flags(matches))?;
    let defaults = matches.get_one::<PathBuf>("defaults").map(|p| read_defaults(p)).transpose()?;
    let manifest = matches.get_one::<PathBuf>("manifest").map(|p| Manifest::read(p)).transpose()?;
    let mut maps: Vec<PathBuf> =
        matches.get_many::<PathBuf>("MAP").unwrap_or_default().cloned().collect();
    if maps.is_empty() {
        maps.extend(manifest.iter().flat_map(|m| m.files().map(Path::to_path_buf)));
    }
    if maps.is_empty() {
        return Err(CliError::NoMap);
    }
    let layers = Layers { defaults, manifest, flags };
    let output = matches.get_one::<PathBuf>("json");
    let mut target = match output {
        None => None,
        Some(path) => {
            let listed = ["defaults", "manifest"];
            let descriptions =
                listed.iter().filter_map(|id| matches.get_one::<PathBuf>(id)).cloned();
            let inputs = maps.iter().flat_map(|map| [map.clone(), sidecar_path(map)]);
            refuse_input_as_output(path, inputs.chain(descriptions))?;
            Some(Target::open(path)?)
        }
    };
    let mut screen = Screen {
        open: !target.as_ref().is_some_and(Target::is_standard_output),
        alone: target.is_none(),
    };
    let many = maps.len() > 1;
    let progress = messages::Progress::new(maps.len());
    let mut failed = 0;
    if many {
        screen.print(&table::summary_head())?;
    }
    for (done, path) in maps.iter().enumerate() {
        progress.show(done, failed);
        let record = measure_file(path, &layers, &settings);
        if record.status() == Status::Failed {
            failed += 1;
        }
        if let Record::Failed(record) = &record {
            progress.end();
            messages::error(&format!("{}: {}", record.file, record.error.message));
        }
        if let Some(target) = &mut target {
            target.write(json::record(&record, many).as_bytes())?;
        }
        if screen.open {
            let text = if many { table::summary_row(&record) } else { table::full(&record) };
            screen.print(&text)?;
        }
    }
    progress.end();
    if let Some(target) = target {
        target.finish()?;
    }
    Ok(if failed > 0 { SOME_FAILED } else { ALL_MEASURED })
}

/// The layers of the description that do not lie beside a map.
struct Layers {
    defaults: Option<Layer>,
    manifest: Option<Manifest>,
    flags: Layer,
}

impl Layers {
    fn describe(&self, path: &Path) -> Result<MapDescription, RecordError> {
        let sidecar = read_sidecar(path).map_err(failure)?;
        let row = self.manifest.as_ref().and_then(|m| m.layer(path));
        let layers: Vec<Layer> = self
            .defaults
            .iter()
            .chain(row)
            .chain(sidecar.iter())
            .chain([&self.flags])
            .cloned()
            .collect();
        resolve(layers).map_err(failure)
    }
}

fn failure(error: crate::map::description::DescriptionError) -> RecordError {
    RecordError { code: error.code().to_owned(), message: error.to_string() }
}

/// Reads and measures one file; never fails but by a failed record.
fn measure_file(path: &Path, layers: &Layers, settings: &Settings) -> Record {
    let file = path.to_string_lossy().into_owned();
    let stem = path.file_stem().map_or_else(|| file.clone(), |s| s.to_string_lossy().into_owned());
    let failed = |id: String, error: RecordError, input: Option<Input>| {
        Record::Failed(Box::new(FailedRecord {
            record_version: RECORD_VERSION,
            id,
            file: file.clone(),
            status: Status::Failed,
            error,
            input: OrMissing::from_option(input, Because::NotRead),
            settings: *settings,
            software: Software::default(),
        }))
    };
    let description = match layers.describe(path) {
        Ok(description) => description,
        Err(error) => return failed(stem, error, None),
    };
    let id = description.id.clone().unwrap_or(stem);
    let stored = match read_map_file(path, description.array.as_deref(), description.plane) {
        Ok(stored) => stored,
        Err(error) => {
            let error = RecordError { code: error.code().to_owned(), message: error.to_string() };
            return failed(id, error, None);
        }
    };
    let input = Input {
        sha256: stored.sha256.clone(),
        format: stored.format.to_owned(),
        shape: stored.shape.clone(),
        dtype: stored.dtype.clone(),
    };
    let map = match SkyMap::from_stored(stored, description) {
        Ok(map) => map,
        Err(error) => return failed(id, failure(error), Some(input)),
    };
    let name = MapName { id: id.clone(), file: file.clone() };
    match measure(&map, &name, settings) {
        Ok(record) => Record::Map(Box::new(record)),
        Err(error) => {
            let error = RecordError { code: error.code().to_owned(), message: error.to_string() };
            failed(id, error, Some(input))
        }
    }
}

/// An output that would overwrite one of the files read is refused.
fn refuse_input_as_output(
    output: &Path,
    inputs: impl Iterator<Item = PathBuf>,
) -> Result<(), WriteError> {
    let Ok(output_file) = output.canonicalize() else { return Ok(()) };
    if inputs.filter_map(|input| input.canonicalize().ok()).any(|input| input == output_file) {
        return Err(WriteError::OutputIsInput { path: output.to_path_buf() });
    }
    Ok(())
}

/// The table on the screen. Once nobody reads it any more it is left out, and the records
/// that go to a file are still written.
struct Screen {
    open: bool,
    /// Whether a closed pipe ends the call: there is nothing else to write.
    alone: bool,
}

impl Screen {
    fn print(&mut self, text: &str) -> Result<(), WriteError> {
        if !self.open {
            return Ok(());
        }
        match print(text) {
            Err(WriteError::ClosedPipe) if !self.alone => {
                self.open = false;
                Ok(())
            }
            result => result,
        }
    }
}
