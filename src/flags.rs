//! Flags: what to handle with care in a result, as data. The sentence is made last, from
//! one table, and always ends in advice.

use std::collections::BTreeMap;

use schemars::JsonSchema;
use serde::{Deserialize, Serialize};

/// How much care a flag asks for.
#[derive(
    Clone, Copy, Debug, PartialEq, Eq, PartialOrd, Ord, Serialize, Deserialize, JsonSchema,
)]
#[serde(rename_all = "kebab-case")]
pub enum Severity {
    /// Good to know: an assumed value, a choice made.
    Note,
    /// A number of this record may mislead; read the message.
    Caution,
}

/// One flag of a record.
#[derive(Clone, Debug, PartialEq, Serialize, Deserialize, JsonSchema)]
pub struct Flag {
    /// Stable code, kebab-case.
    pub code: String,
    /// Note or caution.
    pub severity: Severity,
    /// The stage that raised it.
    pub stage: String,
    /// What was seen and what to do, one sentence or two.
    pub message: String,
    /// The numbers behind it, by name.
    pub numbers: BTreeMap<String, f64>,
}

/// One kind of flag: its code, and how it is worded.
#[derive(Clone, Copy, Debug)]
pub struct FlagKind {
    /// Stable code, kebab-case.
    pub code: &'static str,
    /// Note or caution.
    pub severity: Severity,
    /// The stage that raises it.
    pub stage: &'static str,
    /// Sentence with `{name}` where a number of that name goes.
    pub template: &'static str,
}

macro_rules! flag_kinds {
    ($($name:ident = $code:literal, $severity:ident, $stage:literal, $template:literal;)*) => {
        $(
            #[doc = concat!("`", $code, "`")]
            pub const $name: FlagKind = FlagKind {
                code: $code, severity: Severity::$severity, stage: $stage, template: $template,
            };
        )*
        /// Every kind of flag, in the order of the stages.
        pub const FLAG_KINDS: &[FlagKind] = &[$($name),*];
    };
}

flag_kinds! {
    BEAM_MISSING = "beam-missing", Caution, "map",
        "No beam is given and the noise shows none: fluxes, deconvolved sizes and strips in beams are missing or rough; give beam_major_arcsec.";
    BEAM_ESTIMATED = "beam-estimated", Caution, "noise",
        "No beam is given; one of {major_px} x {minor_px} px was read off the noise's autocorrelation. Fluxes carry at least 15 % from this; give beam_major_arcsec.";
    BEAM_UNDERSAMPLED = "beam-undersampled", Caution, "map",
        "The beam's minor axis is only {minor_px} px (1.5 wanted): peaks and sizes near the beam are unsure.";
    BEAM_FILLS_MAP = "beam-fills-map", Caution, "map",
        "The beam ({major_px} px) is wider than a third of the map ({size_px} px): noise and sizes cannot be told apart; check beam and pixel scale.";
    SATURATED = "saturated-pixels", Caution, "map",
        "{percent} % of the pixels ({count}) are at the highest value the map can hold: peaks are lower limits and fluxes too small. Where that is much of the map, it is an inverted picture or has a border: invert or crop it.";
    CLIPPED_FLOOR = "clipped-floor", Caution, "noise",
        "{percent} % of the pixels sit at the map's lowest value: the map was clipped before it came here. Noise, faint emission and everything near the noise are rough; no side is called the jet.";
    QUANTISED = "quantised", Caution, "noise",
        "The brightness steps ({step_over_rms} rms) are coarser than the noise: faint emission and errors are limited by the image format.";
    NOISE_GIVEN = "noise-given", Note, "noise",
        "The rms was given with the map and used as it is.";
    NOISE_VARIES = "noise-varies", Note, "noise",
        "The rms varies by a factor {factor} over the map; local values are used.";
    NOISE_STRUCTURED = "noise-structured", Note, "noise",
        "Equal apertures on empty sky scatter {factor} times more than the noise's autocorrelation predicts (stripes, sidelobes); errors of strips are widened by that factor.";
    CORRELATION_UNLIKE_BEAM = "correlation-unlike-beam", Note, "noise",
        "The noise is correlated over {correlation_px} px where the beam has {beam_px} px: errors follow the measured correlation, but check the beam.";
    PARTNERS_JOINED = "regions-joined", Note, "source",
        "{count} separate regions were taken as one source (expected chance groups: {chance}); check the map if that matters.";
    PARTNERS_UNSURE = "regions-joined-unsure", Caution, "source",
        "The source is made of separate regions that chance could have brought together (expected chance groups: {chance}); check against other maps, or give the host.";
    HOST_UNPLACED = "host-unplaced", Caution, "source",
        "host_ra_deg and host_dec_deg cannot be placed on the map: centre_ra_deg, centre_dec_deg and the pixel scale are needed for that.";
    NOTHING_AT_HOST = "nothing-at-host", Note, "source",
        "Regions above the noise were found, none near enough to the host to be its source; the nearest begins {distance_px} px away.";
    HOST_UNKNOWN = "host-unknown", Note, "source",
        "No host position is given: the source nearest the map's middle was taken; give host_ra_deg and host_dec_deg where known.";
    CORE_UNSURE = "core-unsure", Caution, "source",
        "The core was chosen with confidence {confidence} only; rivals are listed. Give core_x_px, core_y_px or the host where known: everything measured from the core hangs on it.";
    CORE_NOT_FOUND = "core-not-found", Caution, "source",
        "No core could be chosen: what is measured from the core is missing. Give core_x_px, core_y_px or the host.";
    CORE_UNDETECTED = "core-undetected", Note, "source",
        "No compact component stands at the host's position: the host marks the core, its flux is an upper limit.";
    CORE_BLENDED = "core-blended", Note, "source",
        "Emission within one beam of the core ({share} of the brightness there) is as bright as half the core or could not be told from it to a tenth: the core's flux depends on how it was separated.";
    COMPONENTS_UNSETTLED = "components-unsettled", Note, "components",
        "The fit of {count} Gaussian components was stopped before it settled or before all emission was described: the source is too intricate; single components are rough.";
    EDGE = "source-leaves-map", Caution, "extent",
        "The source's contour reaches the edge of the map or a blank patch: sizes are lower limits and fluxes may be incomplete; use a larger map.";
    LARGE_SCALE_LOSS = "scale-near-limit", Caution, "extent",
        "The source ({size_arcsec} arcsec) comes near the largest recoverable scale ({limit_arcsec} arcsec): extended emission may be missing.";
    ROLES_UNDECIDED = "jet-side-undecided", Note, "brightness",
        "The two sides' strips differ by {sigma} sigma only: which side is the jet is left open and the ratio is first over second.";
    JET_SIDE_GIVEN = "jet-side-given", Note, "brightness",
        "The jet side was given by the observer and used as it is: the ratio may be below 1.";
    STRIP_BLANKS = "strip-blanks", Caution, "brightness",
        "{percent} % of the strip is blank or off the map; both strips leave out the same places.";
    STRIP_OFF_AXIS = "strip-off-axis", Caution, "brightness",
        "The two sides are {misalignment_deg} degrees from opposition and the fainter one's ridge is too weak to follow: its strip, the brighter one's turned by 180 degrees, may miss its jet, and the ratio come out too high.";
    STRIP_NEAR_BRIGHT = "strip-near-bright", Note, "brightness",
        "Residuals at the strip's distances exceed the map's rms by {factor}; the larger value is used in the errors.";
    INVERTED_INDEX = "spectral-index-rising", Caution, "physics",
        "spectral_index is {value}: here S falls as frequency to the power -spectral_index, so this is a spectrum that rises with frequency. Where S is written as frequency^+index, turn the sign.";
    ODD_FREQUENCY = "frequency-odd", Caution, "physics",
        "frequency_ghz is {value}; check whether it was meant in Hz or MHz.";
    SYMMETRY_ASSUMED = "symmetry-assumed", Note, "physics",
        "The beaming formulas take the two jets as intrinsically equal and steady; projection and environment are not known from one map. Hot spots and lobes say little about the flow.";
    SPECTRAL_INDEX_ASSUMED = "spectral-index-assumed", Note, "physics",
        "No spectral index is given: 0.6 +- 0.2 is taken for the jet, 0 for the core, 0.75 for the whole source where not given.";
    REDSHIFT_AND_DISTANCE = "distance-replaces-redshift", Note, "physics",
        "A distance is given and replaces the redshift's.";
}

impl Flag {
    /// A flag of one kind with the numbers behind it.
    pub fn new(kind: FlagKind, numbers: &[(&str, f64)]) -> Self {
        let mut message = kind.template.to_owned();
        let mut kept = BTreeMap::new();
        for &(name, value) in numbers {
            message = message.replace(&format!("{{{name}}}"), &short_number(value));
            if value.is_finite() {
                kept.insert(name.to_owned(), value);
            }
        }
        Self {
            code: kind.code.to_owned(),
            severity: kind.severity,
            stage: kind.stage.to_owned(),
            message,
            numbers: kept,
        }
    }
}

/// Three significant digits, without an exponent where that stays short.
fn short_number(value: f64) -> String {
    if value == 0.0 || !value.is_finite() {
        return format!("{value}");
    }
    let magnitude = value.abs().log10().floor();
    if !(-3.0..6.0).contains(&magnitude) {
        return format!("{value:.2e}");
    }
    if value.fract() == 0.0 && value.abs() < 1e6 {
        return format!("{value:.0}");
    }
    let decimals = (2.0 - magnitude).max(0.0) as usize;
    format!("{value:.decimals$}")
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn codes_are_unique_and_every_message_is_a_sentence() {
        let mut codes: Vec<_> = FLAG_KINDS.iter().map(|kind| kind.code).collect();
        codes.sort_unstable();
        codes.dedup();
        assert_eq!(codes.len(), FLAG_KINDS.len());
        for kind in FLAG_KINDS {
            assert!(kind.template.ends_with('.'), "{}", kind.code);
        }
    }

    #[test]
    fn numbers_enter_the_sentence() {
        let flag = Flag::new(BEAM_UNDERSAMPLED, &[("minor_px", 1.2345)]);
        assert!(flag.message.contains("only 1.23 px"), "{}", flag.message);
        assert_eq!(flag.numbers.len(), 1);
    }
}
