//! The parameters of a made source and of its observation: one table for reading scenarios,
//! for their errors and their documentation, and the plain numbers of one made map.

/// The range a number must lie in; it must be finite besides.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Range {
    /// Lower end.
    pub low: f64,
    /// Upper end.
    pub high: f64,
    /// Whether the lower end itself is allowed.
    pub with_low: bool,
    /// Whether the upper end itself is allowed.
    pub with_high: bool,
}

/// Any finite number.
const ANY: Range = Range::open(f64::NEG_INFINITY, f64::INFINITY);

impl Range {
    const fn closed(low: f64, high: f64) -> Self {
        Self { low, high, with_low: true, with_high: true }
    }

    const fn open(low: f64, high: f64) -> Self {
        Self { low, high, with_low: false, with_high: false }
    }

    const fn open_above(low: f64, high: f64) -> Self {
        Self { low, high, with_low: true, with_high: false }
    }

    const fn open_below(low: f64, high: f64) -> Self {
        Self { low, high, with_low: false, with_high: true }
    }

    /// Whether a number lies in the range.
    pub fn contains(&self, value: f64) -> bool {
        value.is_finite()
            && (value > self.low || (self.with_low && value >= self.low))
            && (value < self.high || (self.with_high && value <= self.high))
    }
}

/// What a parameter must be.
#[derive(Clone, Copy, Debug, PartialEq)]
pub enum ParameterKind {
    /// A number.
    Number {
        /// Where it must lie.
        range: Range,
        /// What it is where it is not given; `None`: it is then absent.
        default: Option<f64>,
    },
    /// A whole number.
    Whole {
        /// Smallest.
        low: usize,
        /// Largest.
        high: usize,
        /// What it is where it is not given.
        default: usize,
    },
    /// One of these words, the first where none is given.
    Word(&'static [&'static str]),
}

/// One parameter of a scenario.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct ParameterSpec {
    /// The table it stands in.
    pub table: &'static str,
    /// Its key there.
    pub key: &'static str,
    /// What it must be.
    pub kind: ParameterKind,
    /// What it is, one line.
    pub help: &'static str,
}

/// The value of a parameter for one made source.
#[derive(Clone, Copy, Debug, PartialEq)]
pub enum ParameterValue {
    /// A number, or its absence.
    Number(Option<f64>),
    /// A whole number.
    Whole(usize),
    /// A word.
    Word(&'static str),
}

impl ParameterSpec {
    /// The value where a scenario does not give one.
    pub fn default_value(&self) -> ParameterValue {
        match self.kind {
            ParameterKind::Number { default, .. } => ParameterValue::Number(default),
            ParameterKind::Whole { default, .. } => ParameterValue::Whole(default),
            ParameterKind::Word(words) => {
                ParameterValue::Word(words.first().copied().unwrap_or_default())
            }
        }
    }
}

impl ParameterValue {
    fn optional(self) -> Option<f64> {
        match self {
            Self::Number(value) => value,
            Self::Whole(value) => Some(value as f64),
            Self::Word(_) => None,
        }
    }

    fn number(self) -> f64 {
        self.optional().unwrap_or(0.0)
    }

    fn whole(self) -> usize {
        match self {
            Self::Whole(value) => value,
            _ => 0,
        }
    }

    fn word(self) -> &'static str {
        match self {
            Self::Word(word) => word,
            _ => "",
        }
    }
}

macro_rules! parameters {
    (@type number) => { f64 };
    (@type optional) => { Option<f64> };
    (@type whole) => { usize };
    (@type word) => { &'static str };
    (@kind number(range: $range:expr, default: $default:expr)) => {
        ParameterKind::Number { range: $range, default: Some($default) }
    };
    (@kind optional(range: $range:expr)) => {
        ParameterKind::Number { range: $range, default: None }
    };
    (@kind whole(range: ($low:expr, $high:expr), default: $default:expr)) => {
        ParameterKind::Whole { low: $low, high: $high, default: $default }
    };
    (@kind word(words: $($word:literal),*)) => { ParameterKind::Word(&[$($word),*]) };
    ($($table:ident: $Table:ident $about:literal {
        $($key:ident: $kind:ident($($arguments:tt)*) $help:literal;)*
    })*) => {
        $(
            #[doc = $about]
            #[derive(Clone, Copy, Debug, PartialEq)]
            pub struct $Table {
                $(#[doc = $help] pub $key: parameters!(@type $kind),)*
            }
        )*

        /// All parameters of one made source and its observation.
        #[derive(Clone, Copy, Debug, PartialEq)]
        pub struct Parameters {
            $(#[doc = $about] pub $table: $Table,)*
        }

        /// Every parameter, table by table.
        pub static PARAMETERS: &[ParameterSpec] = &[$($(ParameterSpec {
            table: stringify!($table),
            key: stringify!($key),
            kind: parameters!(@kind $kind($($arguments)*)),
            help: $help,
        },)*)*];

        /// The tables of a scenario with a line about each.
        pub static PARAMETER_TABLES: &[(&str, &str)] = &[$((stringify!($table), $about),)*];

        impl Parameters {
            /// The parameters whose values are given in the order of [`PARAMETERS`]; what is
            /// missing at the end takes its default.
            pub fn from_values(values: &[ParameterValue]) -> Self {
                let given = values.iter().copied();
                let defaults = PARAMETERS.iter().skip(values.len()).map(|spec| spec.default_value());
                let mut values = given.chain(defaults);
                let mut next = || values.next().unwrap_or(ParameterValue::Number(None));
                Self { $($table: $Table { $($key: next().$kind(),)* },)* }
            }
        }
    };
}

parameters! {
    source: Source "Where the source is and how its axis lies." {
        viewing_angle_deg: number(range: Range::closed(0.0, 90.0), default: 60.0) "angle between the approaching jet and the line of sight";
        position_angle_deg: number(range: ANY, default: 90.0) "position angle of the approaching jet where it leaves the core";
        redshift: optional(range: Range::open_below(0.0, 20.0)) "redshift";
        distance_mpc: optional(range: Range::open_below(0.0, 1e6)) "distance of a nearby source; replaces the redshift's";
        ra_deg: number(range: Range::open_above(0.0, 360.0), default: 150.0) "right ascension of the core";
        dec_deg: number(range: Range::closed(-90.0, 90.0), default: 20.0) "declination of the core";
    }
    core: Core "The compact core: the innermost flow on both sides." {
        flux_density_mjy: optional(range: Range::open_above(0.0, f64::INFINITY)) "flux density as observed";
        unbeamed_flux_density_mjy: optional(range: Range::open_above(0.0, f64::INFINITY)) "flux density of each of its two opposite flows in their own frame";
        speed: number(range: Range::open_above(0.0, 1.0), default: 0.9) "speed of the innermost flow over that of light";
        lorentz_factor: optional(range: Range::closed(1.0, 1e6)) "Lorentz factor of the innermost flow, instead of its speed";
        spectral_index: number(range: ANY, default: 0.0) "spectral index, S falls as frequency^-index";
        fwhm_arcsec: number(range: Range::open_above(0.0, f64::INFINITY), default: 0.0) "FWHM";
    }
    jet: Jet "The two jets, alike in their own frames." {
        speed: number(range: Range::open_above(0.0, 1.0), default: 0.9) "speed of the flow over that of light";
        lorentz_factor: optional(range: Range::closed(1.0, 1e6)) "Lorentz factor of the flow, instead of its speed";
        end_speed: optional(range: Range::open_above(0.0, 1.0)) "speed where slowing ends; without it the speed is constant";
        slowing_from: number(range: Range::closed(0.0, 1.0), default: 0.0) "share of the arm at which slowing begins";
        slowing_to: number(range: Range::closed(0.0, 1.0), default: 1.0) "share of the arm at which slowing ends";
        flow: word(words: "continuous", "blob") "sets the exponent of the boost: 2 + index or 3 + index";
        spectral_index: number(range: ANY, default: 0.6) "spectral index, S falls as frequency^-index";
        flux_density_mjy: optional(range: Range::open_above(0.0, f64::INFINITY)) "flux density of the approaching jet as observed";
        unbeamed_flux_density_mjy: optional(range: Range::open_above(0.0, f64::INFINITY)) "flux density of each jet in its own frame";
        start_arcsec: number(range: Range::open_above(0.0, f64::INFINITY), default: 0.0) "gap between core and jet";
        end_share: number(range: Range::open_below(0.0, 1.0), default: 1.0) "where the jet ends, as a share of its arm";
        width_arcsec: number(range: Range::open_above(0.0, f64::INFINITY), default: 0.0) "FWHM across the jet at its end";
        inner_width_arcsec: number(range: Range::open_above(0.0, f64::INFINITY), default: 0.0) "FWHM across the jet at its start";
        width_exponent: number(range: Range::closed(0.0, 4.0), default: 1.0) "width grows as distance^exponent: 1 cone, 0.5 paraboloid, 0 cylinder";
        fade: number(range: Range::closed(-20.0, 20.0), default: 0.0) "brightness along the jet falls as exp(-fade x share of the arm)";
    }
    arms: Arms "How far the two sides reach." {
        length_arcsec: optional(range: Range::open(0.0, f64::INFINITY)) "projected length of an arm, mean of both";
        length_kpc: optional(range: Range::open(0.0, f64::INFINITY)) "length of an arm in space; needs redshift or distance";
        advance_speed: number(range: Range::open_above(0.0, 1.0), default: 0.0) "speed of the ends over that of light: the nearer one is seen older";
        environment_ratio: number(range: Range::open(0.0, f64::INFINITY), default: 1.0) "approaching over receding arm by unequal surroundings";
    }
    bend: Bend "How the path of the jets departs from a straight line." {
        shape: word(words: "none", "inversion", "mirror") "symmetry of the two bends about the core";
        angle_deg: number(range: Range::closed(-90.0, 90.0), default: 0.0) "turn of a jet, positive from north towards east on the approaching side";
        from: number(range: Range::closed(0.0, 1.0), default: 0.3) "share of the arm at which the bend begins";
        to: number(range: Range::closed(0.0, 1.0), default: 1.0) "share of the arm at which the bend ends";
        helix_amplitude_arcsec: number(range: Range::open_above(0.0, f64::INFINITY), default: 0.0) "sideways swing of a projected helix";
        helix_period_arcsec: number(range: Range::open(0.0, f64::INFINITY), default: 20.0) "its period along the arm";
        helix_phase_deg: number(range: ANY, default: 0.0) "its phase at the core";
    }
    knots: Knots "Bright knots in the jets." {
        count: whole(range: (0, 1000), default: 0) "number in each jet";
        flux_share: number(range: Range::closed(0.0, 1.0), default: 0.3) "share of the jet's flux density in knots";
        fwhm_arcsec: number(range: Range::open_above(0.0, f64::INFINITY), default: 0.0) "FWHM of a knot";
        motion: word(words: "standing", "moving") "whether knots stay or move with the flow between epochs";
    }
    hotspots: Hotspots "Hot spots at the ends." {
        flux_density_mjy: number(range: Range::open_above(0.0, f64::INFINITY), default: 0.0) "flux density, mean of the two";
        flux_ratio: number(range: Range::open(0.0, f64::INFINITY), default: 1.0) "approaching over receding side";
        fwhm_arcsec: number(range: Range::open_above(0.0, f64::INFINITY), default: 0.0) "FWHM";
    }
    lobes: Lobes "Lobes that fall back from the ends." {
        flux_density_mjy: number(range: Range::open_above(0.0, f64::INFINITY), default: 0.0) "flux density, mean of the two";
        flux_ratio: number(range: Range::open(0.0, f64::INFINITY), default: 1.0) "approaching over receding side";
        length_share: number(range: Range::open_below(0.0, 1.0), default: 0.4) "reach back from the end, as a share of the arm";
        width_arcsec: number(range: Range::open_above(0.0, f64::INFINITY), default: 10.0) "FWHM across";
        spectral_index: number(range: ANY, default: 0.8) "of lobes, hot spots, plumes, bridge and halo";
        texture: number(range: Range::closed(0.0, 1.0), default: 0.5) "irregularity of lobes, plumes and bridge; 0: smooth";
    }
    bridge: Bridge "Faint emission between the ends, over the core." {
        flux_density_mjy: number(range: Range::open_above(0.0, f64::INFINITY), default: 0.0) "flux density";
        width_arcsec: number(range: Range::open_above(0.0, f64::INFINITY), default: 10.0) "FWHM across";
    }
    halo: Halo "Round diffuse emission about the core." {
        flux_density_mjy: number(range: Range::open_above(0.0, f64::INFINITY), default: 0.0) "flux density";
        fwhm_arcsec: number(range: Range::open_above(0.0, f64::INFINITY), default: 60.0) "FWHM";
    }
    plumes: Plumes "Plumes and tails into which the jets flare." {
        flux_density_mjy: number(range: Range::open_above(0.0, f64::INFINITY), default: 0.0) "flux density, mean of the two";
        flux_ratio: number(range: Range::open(0.0, f64::INFINITY), default: 1.0) "approaching over receding side";
        length_arcsec: number(range: Range::open_above(0.0, f64::INFINITY), default: 0.0) "length beyond the jet's end, along the path";
        opening_deg: number(range: Range::closed(0.0, 170.0), default: 40.0) "full opening angle";
        fade: number(range: Range::closed(-20.0, 20.0), default: 2.0) "brightness along the plume falls as exp(-fade x share of its length)";
        turn_deg: number(range: Range::closed(-170.0, 170.0), default: 0.0) "turn of the path over the plume, in the bend's sense";
    }
    outer: Outer "An older pair of lobes farther out." {
        flux_density_mjy: number(range: Range::open_above(0.0, f64::INFINITY), default: 0.0) "flux density, mean of the two";
        flux_ratio: number(range: Range::open(0.0, f64::INFINITY), default: 1.0) "approaching over receding side";
        length_ratio: number(range: Range::open_above(1.0, f64::INFINITY), default: 3.0) "outer over inner arm";
        turn_deg: number(range: Range::closed(-90.0, 90.0), default: 0.0) "turn of the outer axis against the inner one";
        width_arcsec: number(range: Range::open_above(0.0, f64::INFINITY), default: 20.0) "FWHM across";
    }
    map: Map "The array and the beam." {
        columns: whole(range: (1, 20000), default: 300) "columns";
        rows: whole(range: (1, 20000), default: 300) "rows";
        pixel_scale_arcsec: number(range: Range::open(0.0, f64::INFINITY), default: 1.0) "size of a pixel along columns";
        pixel_aspect: number(range: Range::open(0.0, f64::INFINITY), default: 1.0) "size along rows over size along columns";
        beam_major_arcsec: number(range: Range::open(0.0, f64::INFINITY), default: 5.0) "FWHM of the beam's long axis";
        beam_minor_arcsec: optional(range: Range::open(0.0, f64::INFINITY)) "FWHM of its short axis; without it the beam is round";
        beam_pa_deg: number(range: ANY, default: 0.0) "position angle of its long axis";
        unit: word(words: "mJy/beam", "Jy/beam", "uJy/beam", "mJy/pixel", "Jy/pixel", "uJy/pixel") "unit of the brightness";
        row_order: word(words: "bottom-up", "top-down") "order of the rows as stored";
        east: word(words: "left", "right") "where east is with north up";
        up_pa_deg: number(range: ANY, default: 0.0) "position angle of the direction that is up";
        offset_x_px: number(range: ANY, default: 0.0) "core from the array's middle, columns";
        offset_y_px: number(range: ANY, default: 0.0) "core from the array's middle, rows as stored";
        frequency_ghz: number(range: Range::open(0.0, f64::INFINITY), default: 1.4) "frequency";
        host: word(words: "known", "unknown") "whether the description gives the host's place";
        host_error_arcsec: number(range: Range::open_above(0.0, f64::INFINITY), default: 0.0) "1 sigma per axis by which the host given is off the core";
        describe: word(words: "full", "plain") "plain leaves redshift and spectral indices out of the description";
    }
    noise: Noise "Noise and what an instrument adds." {
        kind: word(words: "beam", "white", "smooth") "correlated as the beam, not at all, or over a width of its own";
        rms_mjy_per_beam: number(range: Range::open_above(0.0, f64::INFINITY), default: 0.1) "rms at the array's middle";
        fwhm_arcsec: number(range: Range::open(0.0, f64::INFINITY), default: 5.0) "width of the kernel where the kind is smooth";
        gradient: number(range: Range::open(0.0, f64::INFINITY), default: 1.0) "rms at one edge over that at the other";
        gradient_pa_deg: number(range: ANY, default: 90.0) "position angle towards which the rms grows";
        edge_rise: number(range: Range::open(0.0, f64::INFINITY), default: 1.0) "rms at the corners over that at the middle";
        stripes: number(range: Range::open_above(0.0, f64::INFINITY), default: 0.0) "rms of stripes over that of the noise";
        stripe_period_arcsec: number(range: Range::open(0.0, f64::INFINITY), default: 30.0) "their period";
        stripe_pa_deg: number(range: ANY, default: 30.0) "position angle along which they run";
        rings: number(range: Range::closed(0.0, 1.0), default: 0.0) "amplitude of sidelobe rings over the brightest feature";
        ring_period_arcsec: number(range: Range::open(0.0, f64::INFINITY), default: 30.0) "their period";
        spokes: number(range: Range::closed(0.0, 1.0), default: 0.0) "amplitude of sidelobe spokes over the brightest feature";
        spoke_count: whole(range: (1, 100), default: 6) "number of spokes";
        bowl: number(range: Range::closed(0.0, 1.0), default: 0.0) "negative flux around the source over its total flux";
        bowl_fwhm_arcsec: number(range: Range::open(0.0, f64::INFINITY), default: 120.0) "FWHM of that bowl";
        offset_mjy_per_beam: number(range: ANY, default: 0.0) "brightness added everywhere";
        flux_scale_error: number(range: Range::closed(0.0, 0.5), default: 0.0) "1 sigma of the calibration's factor, drawn for each map";
    }
    neighbours: Neighbours "Unrelated point sources." {
        per_square_arcmin: number(range: Range::closed(0.0, 1000.0), default: 0.0) "their density";
        flux_min_mjy: number(range: Range::open(0.0, f64::INFINITY), default: 1.0) "the faintest";
        flux_max_mjy: number(range: Range::open(0.0, f64::INFINITY), default: 100.0) "the brightest";
        slope: number(range: ANY, default: 1.5) "dN/dS falls as S^-slope";
    }
    file: File "How the map is stored." {
        format: word(words: "npy", "npz", "png", "tiff", "pgm", "pfm", "text") "file format";
        dtype: word(words: "f4", "f8", "i2", "i4", "u1", "u2") "sample type";
        byte_order: word(words: "little", "big") "byte order, where the format leaves a choice";
        step_mjy_per_beam: number(range: Range::open_above(0.0, f64::INFINITY), default: 0.0) "quantisation step; 0: none, integers take an eighth of the rms";
        clip: word(words: "none", "zero", "blank", "floor") "what becomes of brightness below clip_sigma";
        clip_sigma: number(range: ANY, default: 0.0) "level of clipping in units of the rms";
        border_px: whole(range: (0, 10000), default: 0) "width of a blank border";
        holes: whole(range: (0, 10000), default: 0) "number of blank discs";
        hole_radius_px: number(range: Range::open_above(0.0, f64::INFINITY), default: 4.0) "their radius";
        hole_place: word(words: "anywhere", "strip") "where they lie";
    }
    registration: Registration "How well several epochs are aligned." {
        error_arcsec: number(range: Range::open_above(0.0, f64::INFINITY), default: 0.0) "1 sigma per axis between epochs";
    }
    sample: Sample "Which sources of a population are kept." {
        selection: word(words: "all", "flux-limited") "flux-limited: boosted sources are over-represented";
        counts_slope: number(range: Range::closed(0.0, 10.0), default: 1.5) "parent population: N(>L) falls as L^-slope";
    }
}

impl Default for Parameters {
    fn default() -> Self {
        Self::from_values(&[])
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn defaults_lie_in_their_ranges_and_names_are_single() {
        let mut names: Vec<_> = PARAMETERS.iter().map(|spec| (spec.table, spec.key)).collect();
        for spec in PARAMETERS {
            match spec.kind {
                ParameterKind::Number { range, default: Some(default) } => {
                    assert!(range.contains(default), "{}.{}", spec.table, spec.key);
                }
                ParameterKind::Whole { low, high, default } => {
                    assert!((low..=high).contains(&default), "{}.{}", spec.table, spec.key);
                }
                ParameterKind::Number { default: None, .. } => {}
                ParameterKind::Word(words) => assert!(!words.is_empty()),
            }
        }
        names.sort_unstable();
        let count = names.len();
        names.dedup();
        assert_eq!(names.len(), count);
    }

    #[test]
    fn values_reach_the_field_of_their_name() {
        let mut values: Vec<_> = PARAMETERS.iter().map(ParameterSpec::default_value).collect();
        let place = |table, key| {
            PARAMETERS.iter().position(|s| (s.table, s.key) == (table, key)).expect("known")
        };
        values[place("jet", "speed")] = ParameterValue::Number(Some(0.25));
        values[place("bend", "shape")] = ParameterValue::Word("mirror");
        values[place("map", "rows")] = ParameterValue::Whole(17);
        let parameters = Parameters::from_values(&values);
        assert_eq!(parameters.jet.speed.to_bits(), 0.25f64.to_bits());
        assert_eq!((parameters.bend.shape, parameters.map.rows), ("mirror", 17));
        assert_eq!(parameters.source.redshift, None);
        assert_eq!(parameters.map.columns, Parameters::default().map.columns);
    }

    #[test]
    fn open_ends_are_outside() {
        assert!(!Range::open_above(0.0, 1.0).contains(1.0));
        assert!(Range::open_above(0.0, 1.0).contains(0.0));
        assert!(!Range::open_below(0.0, 1.0).contains(0.0));
        assert!(!ANY.contains(f64::NAN) && !ANY.contains(f64::INFINITY) && ANY.contains(-1e300));
    }
}
