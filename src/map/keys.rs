//! The keys of the map description: one table for flags, schema and reading.

/// What a key's value must be.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub enum ValueKind {
    /// A finite number.
    Number,
    /// A finite number, or two of them: along columns (x), along rows (y).
    NumberOrPair,
    /// Any text.
    Text,
    /// One of these words.
    Choice(&'static [&'static str]),
    /// A whole number from 0.
    Integer,
    /// A decimal year or an ISO date.
    Epoch,
}

/// One key of the map description.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub struct KeySpec {
    /// The key; the flag is the same with hyphens.
    pub name: &'static str,
    /// What stands for the value in help: its unit, in capitals.
    pub value_name: &'static str,
    /// What the value must be.
    pub kind: ValueKind,
    /// One line of help.
    pub help: &'static str,
    /// Heading under which help shows it.
    pub group: &'static str,
}

const fn key(
    name: &'static str,
    value_name: &'static str,
    kind: ValueKind,
    group: &'static str,
    help: &'static str,
) -> KeySpec {
    KeySpec { name, value_name, kind, help, group }
}

const UNITS: &[&str] =
    &["Jy/beam", "mJy/beam", "uJy/beam", "Jy/pixel", "mJy/pixel", "uJy/pixel", "none"];

use ValueKind::{Choice, Epoch as EpochKind, Integer, Number, NumberOrPair, Text};

/// Every key of the map description: flags, schema and reading come from this table.
pub static DESCRIPTION_KEYS: &[KeySpec] = &[
    key(
        "pixel_scale_arcsec",
        "ARCSEC",
        NumberOrPair,
        "Scale and beam",
        "size of a pixel, or X,Y for oblong pixels",
    ),
    key("pixel_scale_mas", "MAS", NumberOrPair, "Scale and beam", "the same in milliarcseconds"),
    key(
        "beam_major_arcsec",
        "ARCSEC",
        Number,
        "Scale and beam",
        "restoring beam: FWHM of its long axis (alone: a round beam)",
    ),
    key(
        "beam_minor_arcsec",
        "ARCSEC",
        Number,
        "Scale and beam",
        "restoring beam: FWHM of its short axis",
    ),
    key("beam_major_mas", "MAS", Number, "Scale and beam", "the long axis in milliarcseconds"),
    key("beam_minor_mas", "MAS", Number, "Scale and beam", "the short axis in milliarcseconds"),
    key(
        "beam_pa_deg",
        "DEG",
        Number,
        "Scale and beam",
        "restoring beam: position angle of its long axis on the sky",
    ),
    key(
        "unit",
        "UNIT",
        Choice(UNITS),
        "Brightness",
        "unit of the brightness; none = arbitrary, fluxes are missing",
    ),
    key(
        "value_scale",
        "FACTOR",
        Number,
        "Brightness",
        "brightness = offset + scale x f(stored value): the scale",
    ),
    key(
        "value_offset",
        "BRIGHTNESS",
        Number,
        "Brightness",
        "brightness = offset + scale x f(stored value): the offset",
    ),
    key(
        "value_transfer",
        "STRETCH",
        Choice(&["linear", "sqrt", "log10"]),
        "Brightness",
        "how the stored values were stretched",
    ),
    key("blank_value", "STORED", Number, "Brightness", "stored value that means no data"),
    key(
        "saturation_value",
        "STORED",
        Number,
        "Brightness",
        "stored value that means at least this bright",
    ),
    key(
        "rows",
        "ORDER",
        Choice(&["bottom-up", "top-down"]),
        "Orientation",
        "whether the first row stored is the bottom or the top",
    ),
    key(
        "east",
        "SIDE",
        Choice(&["left", "right"]),
        "Orientation",
        "where east is with north up as displayed; right = mirrored",
    ),
    key(
        "up_pa_deg",
        "DEG",
        Number,
        "Orientation",
        "position angle of the direction displayed as up",
    ),
    key("centre_ra_deg", "DEG", Number, "Position", "right ascension of the centre position"),
    key("centre_dec_deg", "DEG", Number, "Position", "declination of the centre position"),
    key(
        "centre_x_px",
        "PX",
        Number,
        "Position",
        "column of the centre position, 0-based (default: the middle)",
    ),
    key(
        "centre_y_px",
        "PX",
        Number,
        "Position",
        "row of the centre position, 0-based (default: the middle)",
    ),
    key("host_ra_deg", "DEG", Number, "Position", "right ascension of the host galaxy"),
    key("host_dec_deg", "DEG", Number, "Position", "declination of the host galaxy"),
    key("host_x_px", "PX", Number, "Position", "column of the host galaxy, 0-based"),
    key("host_y_px", "PX", Number, "Position", "row of the host galaxy, 0-based"),
    key("core_x_px", "PX", Number, "Position", "column of the core, used as it is, 0-based"),
    key("core_y_px", "PX", Number, "Position", "row of the core, used as it is, 0-based"),
    key(
        "jet_side_pa_deg",
        "DEG",
        Number,
        "Position",
        "position angle of the jet side, known from another map",
    ),
    key("frequency_ghz", "GHZ", Number, "Source", "observing frequency"),
    key("redshift", "Z", Number, "Source", "redshift of the host galaxy"),
    key("redshift_error", "Z", Number, "Source", "its error, 1 sigma"),
    key(
        "distance_mpc",
        "MPC",
        Number,
        "Source",
        "distance of a nearby source; replaces the redshift's",
    ),
    key("epoch", "DATE", EpochKind, "Source", "when it was observed: decimal year or ISO date"),
    key(
        "spectral_index",
        "ALPHA",
        Number,
        "Source",
        "of the jet, S ~ frequency^-alpha (assumed 0.6 +- 0.2)",
    ),
    key("spectral_index_error", "ALPHA", Number, "Source", "its error, 1 sigma"),
    key("core_spectral_index", "ALPHA", Number, "Source", "of the core (assumed 0)"),
    key("total_spectral_index", "ALPHA", Number, "Source", "of the whole source (assumed 0.75)"),
    key(
        "apparent_speed",
        "C",
        Number,
        "Source",
        "apparent speed known from other work, over that of light",
    ),
    key("apparent_speed_error", "C", Number, "Source", "its error, 1 sigma"),
    key(
        "proper_motion_mas_per_year",
        "MAS_PER_YEAR",
        Number,
        "Source",
        "proper motion known from other work",
    ),
    key("proper_motion_mas_per_year_error", "MAS_PER_YEAR", Number, "Source", "its error, 1 sigma"),
    key(
        "flux_scale_error",
        "FRACTION",
        Number,
        "Noise and limits",
        "calibration error as a fraction (default 0.05)",
    ),
    key(
        "rms",
        "BRIGHTNESS",
        Number,
        "Noise and limits",
        "noise of the map in its unit, where it is known",
    ),
    key(
        "clip_floor",
        "BRIGHTNESS",
        Number,
        "Noise and limits",
        "the map was clipped below this brightness",
    ),
    key("contour_floor", "BRIGHTNESS", Number, "Noise and limits", "lowest contour to trust"),
    key(
        "largest_recoverable_scale_arcsec",
        "ARCSEC",
        Number,
        "Noise and limits",
        "emission wider than this is lost",
    ),
    key("id", "NAME", Text, "Input", "name of the source"),
    key("plane", "N", Integer, "Input", "plane of an array with more than two axes, from 0"),
    key("array", "NAME", Text, "Input", "array of an archive of several"),
];

/// The table's row of a key.
pub fn key_spec(name: &str) -> Option<&'static KeySpec> {
    DESCRIPTION_KEYS.iter().find(|spec| spec.name == name)
}

/// Keys that say one quantity in two ways: either list, not both.
pub(super) const ALTERNATIVES: &[(&[&str], &[&str])] = &[
    (&["pixel_scale_arcsec"], &["pixel_scale_mas"]),
    (&["beam_major_arcsec"], &["beam_major_mas"]),
    (&["beam_minor_arcsec"], &["beam_minor_mas"]),
    (&["host_ra_deg", "host_dec_deg"], &["host_x_px", "host_y_px"]),
    (
        &["apparent_speed", "apparent_speed_error"],
        &["proper_motion_mas_per_year", "proper_motion_mas_per_year_error"],
    ),
];

/// Keys of which the first needs the second.
pub(super) const NEEDS: &[(&str, &str)] = &[
    ("centre_ra_deg", "centre_dec_deg"),
    ("centre_dec_deg", "centre_ra_deg"),
    ("centre_x_px", "centre_y_px"),
    ("centre_y_px", "centre_x_px"),
    ("host_ra_deg", "host_dec_deg"),
    ("host_dec_deg", "host_ra_deg"),
    ("host_x_px", "host_y_px"),
    ("host_y_px", "host_x_px"),
    ("core_x_px", "core_y_px"),
    ("core_y_px", "core_x_px"),
];

/// The candidate with the smallest edit distance; the first of equals.
pub fn nearest(
    word: &str,
    candidates: impl IntoIterator<Item = &'static str>,
) -> Option<&'static str> {
    let word: String = word.to_lowercase().replace('-', "_").chars().take(80).collect();
    candidates.into_iter().min_by_key(|candidate| {
        // pixel_scale is nearer to pixel_scale_arcsec than to value_scale.
        if !word.is_empty() && candidate.starts_with(&word) {
            return 0;
        }
        edit_distance(&word, &candidate.to_lowercase())
    })
}

/// Number of letters to insert, remove or replace (V. I. Levenshtein 1966).
pub(super) fn edit_distance(a: &str, b: &str) -> usize {
    let b: Vec<char> = b.chars().collect();
    let mut row: Vec<usize> = (0..=b.len()).collect();
    for (i, from) in a.chars().enumerate() {
        let mut next = vec![i + 1];
        for ((j, &to), pair) in b.iter().enumerate().zip(row.windows(2)) {
            let (diagonal, above) = match pair {
                &[diagonal, above] => (diagonal, above),
                _ => continue,
            };
            let left = next.get(j).copied().unwrap_or(usize::MAX - 1);
            next.push((diagonal + usize::from(from != to)).min(above + 1).min(left + 1));
        }
        row = next;
    }
    row.last().copied().unwrap_or(0)
}
