//! The flags of every command. Those of the map description come from its table of keys, so
//! that flag, file key and schema cannot drift apart.

use std::ffi::OsString;
use std::path::PathBuf;

use clap::builder::{PossibleValue, PossibleValuesParser};
use clap::{Arg, ArgAction, ArgMatches, Command, value_parser};

use crate::map::description::{DESCRIPTION_KEYS, ValueKind};
use crate::physics::{Cosmology, Flow};
use crate::settings::Settings;

const MEASURE_HELP: &str = "\
A map is an array or image file: .npy, PNG (8 or 16 bit gray) or a text grid of numbers, \
recognised by its content. What the file cannot say (pixel scale, beam, unit, orientation, \
host, redshift) is its description. Four layers give it, each over the one before: \
--defaults FILE, a row of --manifest FILE, the file beside the map (NAME.map.json for \
NAME.npy), and flags. All of it is optional: what is missing makes the quantities that need \
it missing, with the reason.";

const MEASURE_EXAMPLES: &str = "\
Examples:
  One map, its description beside it, table on the screen:
    jetspan measure lantern-double.npy
  A map described by flags, record to standard output:
    jetspan measure field.png --pixel-scale-arcsec 1.5 --beam-major-arcsec 5 \\
        --unit mJy/beam --value-scale 0.02 --redshift 0.12 --json -
  All maps of a manifest, one record a line:
    jetspan measure --manifest maps.csv --json records.jsonl

Exit status: 0 all maps measured (also where nothing was found), 1 some map failed,
2 the call was wrong or its output could not be written.";

const SIMULATE_HELP: &str = "\
Makes maps of sources whose truth is known: what a scenario describes, seen through a beam \
and noise. Use them to learn how well a measurement recovers what was put in, or to plan \
an observation. Every map comes with its description, so that it can be measured as it is; \
the truth stands apart, so that no measurement sees it.

The folder holds the maps, NAME.map.json beside each, manifest.csv (all maps), truth.jsonl \
(what is true, a line a map) and scenario.toml, from which the same folder can be made \
again. It appears whole or not at all. The same scenario and seed give the same bytes on \
every machine and with any number of threads.";

const SIMULATE_EXAMPLES: &str = "\
Examples:
  Ten maps of a built-in scenario, measured:
    jetspan simulate bright-double --out made --count 10
    jetspan measure --manifest made/manifest.csv --json made.jsonl
  The same scenario changed by hand, with other noise:
    jetspan simulate my-double.toml --out mine --seed 7

Exit status: 0 all written, 2 the call or the scenario was wrong or the folder
could not be written.";

const EXAMPLES: &str = "\
Examples:
  jetspan measure lantern-double.npy
  jetspan simulate bright-double --out made
  jetspan explain jet_to_counter_jet_ratio
  jetspan schema record
`jetspan measure --help` says what a map may be and how it is described.";

const EXPLAIN_EXAMPLES: &str = "\
A path is looked up with or without its indices. The end of a path is enough, because
many groups hold the same key: all that end so are shown.

Examples:
  jetspan explain sides[0].length_arcsec
  jetspan explain position_angle_deg
  jetspan explain

Exit status: 0 found, 2 no such quantity (the nearest is named).";

const SCHEMA_EXAMPLES: &str = "\
The schema (draft 2020-12) says which keys a record holds and which a description may
hold, because other programs write the one and read the other.

Examples:
  jetspan schema record > record.schema.json
  jetspan schema description";

/// Most sources of one scenario.
const MAX_COUNT: u64 = crate::simulate::scenario::MAX_COUNT as u64;

/// The whole command line.
pub fn command() -> Command {
    Command::new("jetspan")
        .version(env!("CARGO_PKG_VERSION"))
        .about("Measures the jets of active galaxies on radio maps held as plain arrays or images")
        .subcommand_required(true)
        .arg_required_else_help(true)
        .disable_help_subcommand(true)
        .max_term_width(80)
        .after_long_help(EXAMPLES)
        .subcommand(measure_command())
        .subcommand(simulate_command())
        .subcommand(
            Command::new("explain")
                .about("Says what a quantity of the record means, with unit, formula and source")
                .after_long_help(EXPLAIN_EXAMPLES)
                .arg(
                    Arg::new("KEY")
                        .help("path such as sides[0].length_arcsec, or its end; none: list all"),
                ),
        )
        .subcommand(
            Command::new("schema")
                .about("Prints the JSON schema of a record or of a map description")
                .after_long_help(SCHEMA_EXAMPLES)
                .arg(
                    Arg::new("OF")
                        .required(true)
                        .value_parser(PossibleValuesParser::new(["record", "description"]))
                        .help("which schema"),
                ),
        )
}

fn measure_command() -> Command {
    let defaults = Settings::default();
    let file = |id: &'static str, help: &'static str, long: &'static str| {
        Arg::new(id)
            .long(id)
            .value_name("FILE")
            .value_parser(value_parser!(PathBuf))
            .help(help)
            .long_help(long)
    };
    let mut command = Command::new("measure")
        .about("Measures one or more maps: a table on the screen, a record as JSON")
        .long_about(MEASURE_HELP)
        .after_long_help(MEASURE_EXAMPLES)
        .arg(
            Arg::new("MAP")
                .num_args(0..)
                .value_parser(value_parser!(PathBuf))
                .help("map files; none: all maps of the manifest"),
        )
        .next_help_heading("Input and output")
        .arg(file("defaults", "description for all maps (JSON object)", "A JSON object with description keys that hold for all maps: the lowest layer."))
        .arg(file("manifest", "table with a row of description per map", "CSV with a header, or JSON Lines. Column `file` names the map, relative to the manifest; every other column is a description key. An empty cell means not given."))
        .arg(file("json", "write records here; - for standard output", "One map: one JSON object. Several maps: JSON Lines, one record a line, failed maps too. With - there is no table. The file appears whole or not at all."));
    command = command
        .next_help_heading("Detection")
        .arg(number(
            "detection-sigma",
            "SIGMA",
            "peak a region must reach",
            "In local rms. Lower it to look for faint sources and expect false ones.",
            defaults.detection_sigma,
        ))
        .arg(number(
            "outline-sigma",
            "SIGMA",
            "level down to which a region is followed",
            "In local rms; also the lowest contour for sizes.",
            defaults.outline_sigma,
        ));
    command = command
        .next_help_heading("Brightness ratio")
        .arg(number("confidence", "SHARE", "one-sided confidence of limits", "Limits hold at least this often.", defaults.confidence))
        .arg(number("ratio-value-sigma", "SIGMA", "both strips above this: a value, else a limit", "Signal-to-noise that both strip fluxes need for the jet to counter-jet ratio to be given as a value.", defaults.ratio_value_sigma))
        .arg(number("sidedness-sigma", "SIGMA", "difference that makes a side the jet", "Difference of the two strip fluxes over its error from which the roles jet and counter-jet are given; below, the sides are called first and second.", defaults.sidedness_sigma))
        .arg(number("strip-inner-beams", "BEAMS", "inner end of the strips", "In beam majors from the core. The core's own beam has fallen to 2^-16 at 2.", defaults.strip_inner_beams))
        .arg(number("strip-half-width-beams", "BEAMS", "half width of the strips", "In projected beam widths; wider where the jet is resolved.", defaults.strip_half_width_beams))
        .arg(number("follow-ridge-sigma", "SIGMA", "ridge strength from which the counter-jet's is followed", "Below it the counter-jet's strip is the jet's turned by 180 degrees: a strip that follows noise would be biased.", defaults.follow_ridge_sigma));
    command = command
        .next_help_heading("Physics")
        .arg(
            Arg::new("flow")
                .long("flow")
                .value_name("KIND")
                .value_parser(PossibleValuesParser::new(["continuous", "blob"]))
                .default_value("continuous")
                .help("exponent of the boost: continuous 2+a, blob 3+a")
                .long_help("A continuous jet is boosted with exponent 2 + spectral index, a single blob with 3 + spectral index. The other is always given beside it."),
        )
        .arg(number("hubble-km-s-mpc", "H0", "Hubble constant", "In km/s/Mpc.", defaults.cosmology.hubble_km_s_mpc))
        .arg(number("omega-matter", "OM", "matter density", "Today, over the critical density. Old papers: twice their q0, with --omega-lambda 0.", defaults.cosmology.omega_matter))
        .arg(number("omega-lambda", "OL", "dark energy density", "Today, over the critical density; curvature makes up the rest.", defaults.cosmology.omega_lambda));
    for key in DESCRIPTION_KEYS {
        let mut arg = Arg::new(key.name)
            .long(key.name.replace('_', "-"))
            .value_name(key.value_name)
            .help(key.help)
            .help_heading(key.group)
            .allow_hyphen_values(true)
            .action(ArgAction::Set);
        if let ValueKind::Choice(words) = key.kind {
            // A micro sign, of which there are two, is as good as a u.
            let value = |word: &'static str| {
                let micro = ['µ', 'μ'].map(|sign| word.replace('u', &sign.to_string()));
                PossibleValue::new(word).aliases(micro.into_iter().filter(|m| m != word))
            };
            arg = arg.value_parser(PossibleValuesParser::new(words.iter().copied().map(value)));
        }
        command = command.arg(arg);
    }
    command
}

fn simulate_command() -> Command {
    let whole = |id: &'static str, range: std::ops::RangeInclusive<u64>| {
        Arg::new(id).long(id).value_name("N").value_parser(value_parser!(u64).range(range))
    };
    Command::new("simulate")
        .about("Makes maps with known truth: a folder of maps, descriptions and truth")
        .override_usage("jetspan simulate <SCENARIO> --out <DIR> [OPTIONS]\n       jetspan simulate --list | --parameters")
        .long_about(SIMULATE_HELP)
        .after_long_help(SIMULATE_EXAMPLES)
        .arg(
            Arg::new("SCENARIO")
                .required_unless_present_any(["list", "parameters"])
                .value_parser(value_parser!(PathBuf))
                .help("scenario file (TOML), - for standard input, or a built-in name")
                .long_help("A scenario: a TOML file, - for standard input, or the name of a built-in scenario. Where there is a file of that name, the file is taken."),
        )
        .arg(
            Arg::new("out")
                .long("out")
                .value_name("DIR")
                .required_unless_present_any(["list", "parameters"])
                .value_parser(value_parser!(PathBuf))
                .help("new folder for the maps")
                .long_help("The folder to make, inside one that exists. A folder with something in it is never touched: a mixture of two samples would be measured as one."),
        )
        .arg(
            whole("count", 1..=MAX_COUNT)
                .help("number of sources [the scenario's]")
                .long_help("How many sources are made; a source has a map at each of its epochs. The first ones stay the same when more are made. Default: the scenario's count."),
        )
        .arg(
            // A TOML file holds whole numbers up to this one, and scenario.toml holds the seed.
            whole("seed", 0..=i64::MAX.unsigned_abs())
                .help("seed of everything random [the scenario's]")
                .long_help("Another seed gives other noise and other draws from the same distributions. Default: the scenario's seed."),
        )
        .arg(
            whole("threads", 1..=1024)
                .help("threads used [the machine's]")
                .long_help("Maps made at the same time; fewer need less memory. The bytes written do not depend on it. Default: as many as the machine has."),
        )
        .arg(
            Arg::new("list")
                .long("list")
                .action(ArgAction::SetTrue)
                .exclusive(true)
                .help("list the built-in scenarios and end")
                .long_help("Prints the name of every built-in scenario with a line about it, and makes nothing."),
        )
        .arg(
            Arg::new("parameters")
                .long("parameters")
                .action(ArgAction::SetTrue)
                .exclusive(true)
                .help("list what a scenario may say and end")
                .long_help("Prints every table and key of a scenario with its range, default and meaning, and how numbers are drawn; makes nothing."),
        )
}

fn number(
    id: &'static str,
    value_name: &'static str,
    help: &'static str,
    long: &'static str,
    default: f64,
) -> Arg {
    Arg::new(id)
        .long(id)
        .value_name(value_name)
        .value_parser(value_parser!(f64))
        .allow_negative_numbers(true)
        .help(format!("{help} [{default}]"))
        .long_help(format!("{}. {long} Default {default}.", capitalised(help)))
}

fn capitalised(text: &str) -> String {
    let mut chars = text.chars();
    chars.next().map_or(String::new(), |first| first.to_uppercase().chain(chars).collect())
}

/// Settings from the flags, over the defaults.
pub fn settings(matches: &ArgMatches) -> Result<Settings, super::CliError> {
    let defaults = Settings::default();
    let get = |id: &str, default: f64| matches.get_one::<f64>(id).copied().unwrap_or(default);
    let flow = match matches.get_one::<String>("flow").map(String::as_str) {
        Some("blob") => Flow::Blob,
        _ => Flow::Continuous,
    };
    let settings = Settings {
        detection_sigma: get("detection-sigma", defaults.detection_sigma),
        outline_sigma: get("outline-sigma", defaults.outline_sigma),
        confidence: get("confidence", defaults.confidence),
        ratio_value_sigma: get("ratio-value-sigma", defaults.ratio_value_sigma),
        sidedness_sigma: get("sidedness-sigma", defaults.sidedness_sigma),
        strip_inner_beams: get("strip-inner-beams", defaults.strip_inner_beams),
        strip_half_width_beams: get("strip-half-width-beams", defaults.strip_half_width_beams),
        follow_ridge_sigma: get("follow-ridge-sigma", defaults.follow_ridge_sigma),
        flow,
        cosmology: Cosmology::new(
            get("hubble-km-s-mpc", defaults.cosmology.hubble_km_s_mpc),
            get("omega-matter", defaults.cosmology.omega_matter),
            get("omega-lambda", defaults.cosmology.omega_lambda),
        )?,
    };
    settings.check()?;
    Ok(settings)
}

/// Description keys given as flags.
pub fn description_flags(matches: &ArgMatches) -> Vec<(&'static str, String)> {
    DESCRIPTION_KEYS
        .iter()
        .filter_map(|key| {
            let mut raw = matches.try_get_raw(key.name).ok().flatten()?;
            let text: OsString = raw.next()?.to_os_string();
            Some((key.name, text.to_string_lossy().into_owned()))
        })
        .collect()
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn every_flag_has_one_line_of_help_within_eighty_columns() {
        // Parsing tables are checked by clap itself.
        command().debug_assert();
        let mut measure = measure_command().term_width(80);
        let short = measure.render_help().to_string();
        for line in short.lines() {
            assert!(line.chars().count() <= 80, "{line}");
        }
        for key in DESCRIPTION_KEYS {
            assert!(short.contains(&format!("--{}", key.name.replace('_', "-"))), "{}", key.name);
        }
    }
}
