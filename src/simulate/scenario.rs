//! Scenarios: what to make, how often, and how each parameter varies from one made source to the
//! next.
//!
//! A scenario is a TOML text with the tables of [`PARAMETERS`]. Each number is one, a list, or a
//! distribution. What is wrong with a scenario is found when it is read, with the line;
//! only normal distributions, which have no ends, and powers of the boost that vary between
//! sources are checked source by source. The parameters of a made source are then a pure function
//! of seed and index.

use std::fmt;
use std::ops::Range as Span;

use toml::Spanned;
use toml::de::{DeString, DeTable, DeValue};

use super::noise::{Draws, stream_seed};
use super::parameters::{
    PARAMETER_TABLES, PARAMETERS, ParameterKind, ParameterSpec, ParameterValue, Parameters, Range,
};
use crate::map::description::nearest;
use crate::physics::Flow;
use crate::physics::beaming::{lorentz_factor, speed_from_lorentz_factor};
use crate::physics::priors::{
    AnglePrior, Priors, Sampler, Selection, SpeedPrior, exponential_quantile,
    isotropic_quantile_deg,
};

/// Longest text of a scenario, bytes.
const MAX_TEXT_BYTES: usize = 1_000_000;
/// Most sources of a scenario.
pub const MAX_COUNT: usize = 10_000_000;
/// Most pixels of a map.
const MAX_PIXELS: f64 = 1e8;
/// Most epochs of a source.
const MAX_EPOCHS: usize = 1000;
/// Longest name of a scenario, characters.
const MAX_NAME: usize = 64;
/// Longest line about a scenario, characters.
const MAX_ABOUT: usize = 200;
/// Years an epoch may lie in.
const YEARS: Range = Range { low: 1900.0, high: 2200.0, with_low: true, with_high: false };
/// Least share of a normal distribution inside the parameter's range.
const MIN_SHARE_INSIDE: f64 = 0.01;
/// Draws until one is inside: at the least share all miss with a probability of 2e-44.
const MAX_REDRAWS: usize = 10_000;
/// Columns of the page of parameters.
const PAGE_COLUMNS: usize = 80;

/// The scenarios that come with the program: name, text.
const BUILT_IN: &[(&str, &str)] = &[
    ("bright-double", include_str!("scenarios/bright-double.toml")),
    ("one-sided", include_str!("scenarios/one-sided.toml")),
    ("plumes", include_str!("scenarios/plumes.toml")),
    ("core-jet", include_str!("scenarios/core-jet.toml")),
    ("faint", include_str!("scenarios/faint.toml")),
    ("bridged", include_str!("scenarios/bridged.toml")),
    ("bent", include_str!("scenarios/bent.toml")),
    ("precessing", include_str!("scenarios/precessing.toml")),
    ("double-double", include_str!("scenarios/double-double.toml")),
    ("crowded", include_str!("scenarios/crowded.toml")),
    ("short-jets", include_str!("scenarios/short-jets.toml")),
    ("weak-core", include_str!("scenarios/weak-core.toml")),
    ("beamed-sample", include_str!("scenarios/beamed-sample.toml")),
    ("three-epochs", include_str!("scenarios/three-epochs.toml")),
    ("point-sources", include_str!("scenarios/point-sources.toml")),
    ("empty", include_str!("scenarios/empty.toml")),
    ("hard-beam", include_str!("scenarios/hard-beam.toml")),
    ("hard-edge", include_str!("scenarios/hard-edge.toml")),
    ("hard-strip", include_str!("scenarios/hard-strip.toml")),
];

/// The keys of a scenario outside of its tables.
const TOP_KEYS: &[(&str, &str)] = &[
    ("name", "name of the scenario: letters, digits, hyphens; needed"),
    ("about", "one line about it"),
    ("seed", "seed of all random numbers, 0 where not given"),
    ("count", "number of sources to make, 1 to 10000000; 1 where not given"),
    ("epochs", "[[epochs]] tables with the optional keys frequency_ghz and year"),
];

/// The keys of an epoch.
const EPOCH_KEYS: &[&str] = &["frequency_ghz", "year"];

/// The distributions a number may have: name, names of its numbers, what it is.
const DISTRIBUTIONS: &[(&str, &[&str], &str)] = &[
    ("uniform", &["low", "high"], "all values alike"),
    ("log_uniform", &["low", "high"], "all logarithms alike"),
    ("normal", &["mean", "sigma"], "Gaussian, drawn again until it is in the range"),
    ("power_law", &["low", "high", "slope"], "dN/dx falls as x^-slope"),
    ("isotropic", &["low", "high"], "angles in degrees: flat in the cosine"),
];

/// Pairs that say the same in two ways.
const EXCLUSIVE: &[[(&str, &str); 2]] = &[
    [("core", "flux_density_mjy"), ("core", "unbeamed_flux_density_mjy")],
    [("core", "speed"), ("core", "lorentz_factor")],
    [("jet", "speed"), ("jet", "lorentz_factor")],
    [("jet", "flux_density_mjy"), ("jet", "unbeamed_flux_density_mjy")],
    [("arms", "length_arcsec"), ("arms", "length_kpc")],
];

/// Pairs of which the first must not be above the second, nor equal where it says so.
const ORDERED: &[([(&str, &str); 2], bool)] = &[
    ([("jet", "slowing_from"), ("jet", "slowing_to")], false),
    ([("bend", "from"), ("bend", "to")], true),
    ([("map", "beam_minor_arcsec"), ("map", "beam_major_arcsec")], true),
    ([("neighbours", "flux_min_mjy"), ("neighbours", "flux_max_mjy")], true),
];

/// Why a scenario cannot be used. The message says where, what was found, what is needed and
/// what to do.
#[derive(Clone, Debug, PartialEq, thiserror::Error)]
pub enum ScenarioError {
    /// A text that is too long.
    #[error(
        "{place}: the scenario has {bytes} bytes, needed are at most {MAX_TEXT_BYTES}: give a scenario, not a map or a table"
    )]
    TooLong {
        /// Which text.
        place: String,
        /// Its length.
        bytes: usize,
    },
    /// A text that is no TOML.
    #[error("{place}: this is not TOML ({message}): correct it there")]
    Syntax {
        /// File, line and column.
        place: String,
        /// What was found and needed.
        message: String,
    },
    /// A table or key that is not known.
    #[error("{place}: unknown {what} {found:?}: the nearest known one is {nearest}")]
    Unknown {
        /// File and line.
        place: String,
        /// Table or key.
        what: &'static str,
        /// The one found, with its table.
        found: String,
        /// The nearest known one, with its table.
        nearest: String,
    },
    /// A value of the wrong type or outside its range.
    #[error("{place}: {key} is {found}, needed is {needed}: {advice}")]
    BadValue {
        /// File and line.
        place: String,
        /// The key, with its table.
        key: String,
        /// The value found, as it is written.
        found: String,
        /// What is needed.
        needed: String,
        /// What to do.
        advice: String,
    },
    /// Two keys that say the same in two ways.
    #[error("{place}: {first} and {second} say the same thing twice: keep one of them")]
    Conflict {
        /// File and line of the later one.
        place: String,
        /// The one key.
        first: String,
        /// The other.
        second: String,
    },
    /// A key that is needed.
    #[error("{place}: there is no {needed}: {advice}")]
    Missing {
        /// File, and line where another key needs it.
        place: String,
        /// What is needed.
        needed: &'static str,
        /// What to do.
        advice: &'static str,
    },
}

/// One observation of a made source.
#[derive(Clone, Copy, Debug, Default, PartialEq)]
pub struct Epoch {
    /// Frequency in GHz; that of the map where it is not given.
    pub frequency_ghz: Option<f64>,
    /// Decimal year.
    pub year: Option<f64>,
}

/// How a number is distributed; the ends lie in the range of the parameter.
#[derive(Clone, Copy, Debug, PartialEq)]
enum Distribution {
    Uniform { low: f64, high: f64 },
    Normal { mean: f64, sigma: f64 },
    PowerLaw { low: f64, high: f64, slope: f64 },
    Isotropic { low_deg: f64, high_deg: f64 },
}

impl Distribution {
    /// A number inside the range; `None` where all redraws of a normal one miss it.
    fn draw(self, draws: &mut Draws, range: &Range) -> Option<f64> {
        Some(match self {
            Self::Uniform { low, high } => {
                let share = draws.uniform();
                ((1.0 - share) * low + share * high).clamp(low, high)
            }
            Self::Normal { mean, sigma } => {
                return (0..MAX_REDRAWS)
                    .map(|_| mean + sigma * draws.normal())
                    .find(|&value| range.contains(value));
            }
            Self::PowerLaw { low, high, slope } => {
                let (start, end) = (libm::log(low), libm::log(high));
                let share = exponential_quantile(draws.uniform(), (1.0 - slope) * (end - start));
                libm::exp(start + share * (end - start)).clamp(low, high)
            }
            Self::Isotropic { low_deg, high_deg } => {
                isotropic_quantile_deg(draws.uniform(), low_deg, high_deg)
            }
        })
    }

    /// Smallest and largest number; of a normal one its mean, as it has no ends.
    fn ends(self) -> (f64, f64) {
        match self {
            Self::Uniform { low, high } | Self::PowerLaw { low, high, .. } => (low, high),
            Self::Isotropic { low_deg, high_deg } => (low_deg, high_deg),
            Self::Normal { mean, .. } => (mean, mean),
        }
    }
}

/// What a scenario says about one parameter.
#[derive(Clone, Debug, PartialEq)]
enum Choice {
    /// Nothing: the default.
    Default,
    /// These values in turn, never none.
    Listed { values: Vec<ParameterValue>, line: usize },
    /// A number of its own for each source.
    Drawn { distribution: Distribution, line: usize },
}

impl Choice {
    /// The line of the scenario, where it says anything.
    fn line(&self) -> Option<usize> {
        match *self {
            Self::Default => None,
            Self::Listed { line, .. } | Self::Drawn { line, .. } => Some(line),
        }
    }

    /// Whether all sources have the same value.
    fn is_single(&self) -> bool {
        match self {
            Self::Default => true,
            Self::Listed { values, .. } => values.len() == 1,
            Self::Drawn { .. } => false,
        }
    }

    /// Smallest and largest number; `None` for words and what is absent.
    fn ends(&self, spec: &ParameterSpec) -> Option<(f64, f64)> {
        let of_values = |values: &[ParameterValue]| {
            let numbers = values.iter().filter_map(|&value| as_number(value));
            numbers.fold(None, |ends: Option<(f64, f64)>, number| {
                let (low, high) = ends.unwrap_or((number, number));
                Some((low.min(number), high.max(number)))
            })
        };
        match self {
            Self::Default => of_values(&[spec.default_value()]),
            Self::Listed { values, .. } => of_values(values),
            Self::Drawn { distribution, .. } => Some(distribution.ends()),
        }
    }
}

fn as_number(value: ParameterValue) -> Option<f64> {
    match value {
        ParameterValue::Number(number) => number,
        ParameterValue::Whole(whole) => Some(whole as f64),
        ParameterValue::Word(_) => None,
    }
}

/// A scenario that has been read and found good.
#[derive(Clone, Debug, PartialEq)]
pub struct Scenario {
    name: String,
    about: String,
    seed: u64,
    count: usize,
    epochs: Vec<Epoch>,
    /// One for each of [`PARAMETERS`].
    choices: Vec<Choice>,
    /// What errors call it.
    place: String,
    /// As given, with the bytes where count and seed stand.
    text: String,
    count_at: Option<Span<usize>>,
    seed_at: Option<Span<usize>>,
    /// The joint distribution of speed and angle where it is the same for all sources.
    sampler: Option<Sampler>,
}

impl Scenario {
    /// Reads a scenario; `place` is what errors call the text, for instance its file.
    ///
    /// # Errors
    /// Whatever makes it useless; see [`ScenarioError`].
    pub fn parse(text: &str, place: &str) -> Result<Self, ScenarioError> {
        if text.len() > MAX_TEXT_BYTES {
            return Err(ScenarioError::TooLong { place: place.to_owned(), bytes: text.len() });
        }
        let text = text.strip_prefix('\u{feff}').unwrap_or(text);
        let reader = Reader { text, place };
        let document = DeTable::parse(text).map_err(|error| reader.syntax(&error))?;
        let mut scenario = Self {
            name: String::new(),
            about: String::new(),
            seed: 0,
            count: 1,
            epochs: vec![Epoch::default()],
            choices: vec![Choice::Default; PARAMETERS.len()],
            place: place.to_owned(),
            text: text.to_owned(),
            count_at: None,
            seed_at: None,
            sampler: None,
        };
        for (key, value) in in_order(document.get_ref()) {
            scenario.take(&reader, key, value)?;
        }
        if scenario.name.is_empty() {
            return Err(ScenarioError::Missing {
                place: place.to_owned(),
                needed: "name",
                advice: "write one at the top, for instance name = \"my-sample\"",
            });
        }
        scenario.check()?;
        let fixed = [("jet", "flow"), ("jet", "spectral_index"), ("sample", "counts_slope")];
        if scenario.may_be_flux_limited() {
            let priors = scenario.priors(&Parameters::from_values(&scenario.values(0)?))?;
            if fixed.iter().all(|&at| scenario.choice(at).is_single()) {
                scenario.sampler = Some(Sampler::new(priors));
            }
        }
        Ok(scenario)
    }

    /// A scenario that comes with the program; `None` where there is none of that name.
    pub fn named(name: &str) -> Option<Result<Self, ScenarioError>> {
        let (name, text) = BUILT_IN.iter().find(|(known, _)| *known == name)?;
        Some(Self::parse(text, &format!("built-in scenario {name}")))
    }

    /// The scenarios that come with the program: name, one line about each.
    pub fn names() -> Vec<(&'static str, String)> {
        let about = |name| Self::named(name)?.ok().map(|scenario| scenario.about);
        BUILT_IN.iter().map(|&(name, _)| (name, about(name).unwrap_or_default())).collect()
    }

    /// Its name: letters, digits, hyphens.
    pub fn name(&self) -> &str {
        &self.name
    }

    /// One line about it.
    pub fn about(&self) -> &str {
        &self.about
    }

    /// Number of sources to make.
    pub fn count(&self) -> usize {
        self.count
    }

    /// Seed of all random numbers.
    pub fn seed(&self) -> u64 {
        self.seed
    }

    /// The observations of each source, at least one.
    pub fn epochs(&self) -> &[Epoch] {
        &self.epochs
    }

    /// The same with another count or seed. A count beyond 1 to [`MAX_COUNT`] is brought there:
    /// who asks for one says so before.
    pub fn with(mut self, count: Option<usize>, seed: Option<u64>) -> Self {
        self.count = count.unwrap_or(self.count).clamp(1, MAX_COUNT);
        self.seed = seed.unwrap_or(self.seed);
        self
    }

    /// The text as given, comments too, with count and seed as used: reading it gives the same
    /// scenario.
    pub fn to_toml(&self) -> String {
        let mut edits = [
            ("count", self.count_at.clone(), self.count.to_string()),
            ("seed", self.seed_at.clone(), self.seed.to_string()),
        ];
        // From the end, so that the places before stay where they are.
        edits.sort_by_key(|(_, at, _)| std::cmp::Reverse(at.as_ref().map(|span| span.start)));
        let (mut head, mut text) = (String::new(), self.text.clone());
        for (key, at, number) in edits {
            match at {
                Some(span) => text.replace_range(span, &number),
                None => head += &format!("{key} = {number}\n"),
            }
        }
        head + &text
    }

    /// The parameters of the made source with this index, from 0: a pure function of scenario,
    /// seed and index, whatever the count.
    ///
    /// Each drawn parameter has a random stream of its own. Listed ones run through all their
    /// combinations, the first in the order of the table fastest. Where a Lorentz factor is given,
    /// the speed is that of the Lorentz factor.
    ///
    /// # Errors
    /// Normal distributions that break the order of two parameters or never meet the range;
    /// a boost too steep for a number.
    pub fn parameters(&self, index: usize) -> Result<Parameters, ScenarioError> {
        let values = self.values(index)?;
        let ends = |i: usize| {
            let number = values.get(i).copied().and_then(as_number)?;
            Some((number, number))
        };
        self.check_order(ends, &format!(" (source {index})"))?;
        let mut parameters = Parameters::from_values(&values);
        let speed = |gamma: Option<f64>| gamma.and_then(speed_from_lorentz_factor);
        parameters.core.speed =
            speed(parameters.core.lorentz_factor).unwrap_or(parameters.core.speed);
        parameters.jet.speed = speed(parameters.jet.lorentz_factor).unwrap_or(parameters.jet.speed);
        if parameters.sample.selection == "flux-limited" {
            let share = |table, key| self.draws(index, table, key).uniform();
            let is_speed = parameters.jet.lorentz_factor.is_none();
            let of_speed = share("jet", if is_speed { "speed" } else { "lorentz_factor" });
            let of_angle = share("source", "viewing_angle_deg");
            let (beta, angle_deg) = match &self.sampler {
                Some(sampler) => sampler.sample(of_speed, of_angle),
                None => Sampler::new(self.priors(&parameters)?).sample(of_speed, of_angle),
            };
            parameters.jet.speed = beta;
            parameters.jet.lorentz_factor =
                parameters.jet.lorentz_factor.and_then(|_| lorentz_factor(beta));
            parameters.source.viewing_angle_deg = angle_deg;
        }
        Ok(parameters)
    }

    fn draws(&self, index: usize, table: &str, key: &str) -> Draws {
        Draws::new(stream_seed(self.seed, index as u64, &format!("{table}.{key}")))
    }

    /// One value for each of [`PARAMETERS`].
    fn values(&self, index: usize) -> Result<Vec<ParameterValue>, ScenarioError> {
        let mut combination = index;
        let value = |(spec, choice): (&ParameterSpec, &Choice)| match (choice, spec.kind) {
            (Choice::Listed { values, .. }, _) => {
                let place = combination.checked_rem(values.len()).unwrap_or(0);
                combination = combination.checked_div(values.len()).unwrap_or(0);
                Ok(values.get(place).copied().unwrap_or_else(|| spec.default_value()))
            }
            (Choice::Drawn { distribution, .. }, ParameterKind::Number { range, .. }) => {
                let mut draws = self.draws(index, spec.table, spec.key);
                let number = distribution.draw(&mut draws, &range);
                let number = number.ok_or_else(|| {
                    let found = "outside its range in every draw";
                    self.bad((spec.table, spec.key), found, &needed(spec), "move the mean inside")
                })?;
                Ok(ParameterValue::Number(Some(number)))
            }
            _ => Ok(spec.default_value()),
        };
        PARAMETERS.iter().zip(&self.choices).map(value).collect()
    }

    /// The choice of a parameter.
    fn choice(&self, (table, key): (&str, &str)) -> &Choice {
        position(table, key).and_then(|i| self.choices.get(i)).unwrap_or(&Choice::Default)
    }

    /// File and line of a parameter; the file alone where nothing is said about it.
    fn place_of(&self, at: (&str, &str)) -> String {
        let line = self.choice(at).line();
        line.map_or(self.place.clone(), |line| format!("{}:{line}", self.place))
    }

    fn bad(
        &self,
        at: (&str, &str),
        found: impl fmt::Display,
        needed: &str,
        advice: &str,
    ) -> ScenarioError {
        ScenarioError::BadValue {
            place: self.place_of(at),
            key: dotted(at),
            found: found.to_string(),
            needed: needed.to_owned(),
            advice: advice.to_owned(),
        }
    }

    /// Takes one key of the top level.
    fn take(
        &mut self,
        reader: &Reader,
        key: &Spanned<DeString>,
        value: &Spanned<DeValue>,
    ) -> Result<(), ScenarioError> {
        let bad = |needed: &str, advice: &str| {
            reader.bad_value(key.get_ref().to_string(), value, needed.to_owned(), advice.to_owned())
        };
        let text = || value.get_ref().as_str();
        match key.get_ref().as_ref() {
            "name" => {
                self.name =
                    text().filter(|name| is_name(name)).map(str::to_owned).ok_or_else(|| {
                        bad(
                            "a text of 1 to 64 letters, digits and hyphens, no hyphen first",
                            "files are named after it: write for instance \"my-sample\"",
                        )
                    })?;
            }
            "about" => {
                self.about =
                    text().filter(|about| is_line(about)).map(str::to_owned).ok_or_else(|| {
                        bad("one line of text, up to 200 characters", "shorten it, in quotes")
                    })?;
            }
            "seed" => {
                self.seed = whole(value.get_ref()).ok_or_else(|| {
                    bad("a whole number from 0 to 18446744073709551615", "choose another")
                })?;
                self.seed_at = Some(value.span());
            }
            "count" => {
                let count = whole(value.get_ref()).and_then(|count| usize::try_from(count).ok());
                self.count =
                    count.filter(|count| (1..=MAX_COUNT).contains(count)).ok_or_else(|| {
                        bad("a whole number from 1 to 10000000", "say how many sources to make")
                    })?;
                self.count_at = Some(value.span());
            }
            "epochs" => self.epochs = epochs(reader, value)?,
            table if PARAMETER_TABLES.iter().any(|(known, _)| *known == table) => {
                let entries = value.get_ref().as_table().ok_or_else(|| {
                    let advice = format!("write [{table}] on a line and its keys below");
                    bad("a table of keys", &advice)
                })?;
                for (key, value) in in_order(entries) {
                    let name = key.get_ref().as_ref();
                    let place = position(table, name)
                        .ok_or_else(|| reader.unknown_key(table, name, key.span()))?;
                    let spec = PARAMETERS.get(place);
                    if let (Some(spec), Some(choice)) = (spec, self.choices.get_mut(place)) {
                        *choice = reader.choice(spec, value)?;
                    }
                }
            }
            other => return Err(reader.unknown_top(other, value.get_ref(), key.span())),
        }
        Ok(())
    }

    /// What holds between several parameters.
    fn check(&self) -> Result<(), ScenarioError> {
        for &[first, second] in EXCLUSIVE {
            if let (Some(a), Some(b)) = (self.choice(first).line(), self.choice(second).line()) {
                let place = format!("{}:{}", self.place, a.max(b));
                let (first, second) = (dotted(first), dotted(second));
                return Err(ScenarioError::Conflict { place, first, second });
            }
        }
        let given = |at| self.choice(at).line().is_some();
        let in_space = given(("arms", "length_kpc"));
        if !in_space && !given(("arms", "length_arcsec")) {
            return Err(ScenarioError::Missing {
                place: self.place.clone(),
                needed: "arms.length_arcsec or arms.length_kpc",
                advice: "say how long the arms are, for instance length_arcsec = 60 below [arms]",
            });
        }
        if in_space && !given(("source", "redshift")) && !given(("source", "distance_mpc")) {
            return Err(ScenarioError::Missing {
                place: self.place_of(("arms", "length_kpc")),
                needed: "source.redshift or source.distance_mpc for arms.length_kpc",
                advice: "give one of them, or arms.length_arcsec instead",
            });
        }
        let ends = |i: usize| self.choices.get(i)?.ends(PARAMETERS.get(i)?);
        self.check_order(ends, "")?;
        let most = |key| position("map", key).and_then(ends).map_or(0.0, |(_, most)| most);
        let (columns, rows) = (most("columns"), most("rows"));
        if columns * rows > MAX_PIXELS {
            let longer = ("map", if given(("map", "columns")) { "columns" } else { "rows" });
            let found = format!("part of a map of {columns} columns by {rows} rows");
            let needed = "at most 100000000 pixels";
            return Err(self.bad(longer, found, needed, "take fewer columns or rows"));
        }
        if self.may_be_flux_limited() {
            self.population_prior()?;
        }
        Ok(())
    }

    /// That no pair that has an order can break it; `ends` gives the smallest and largest number
    /// of a parameter by its place in [`PARAMETERS`].
    fn check_order(
        &self,
        ends: impl Fn(usize) -> Option<(f64, f64)>,
        whose: &str,
    ) -> Result<(), ScenarioError> {
        for &([first, second], may_be_equal) in ORDERED {
            let ends = |(table, key): (&str, &str)| position(table, key).and_then(&ends);
            let (Some((_, most)), Some((least, _))) = (ends(first), ends(second)) else {
                continue;
            };
            if most > least || (most >= least && !may_be_equal) {
                let at = if self.choice(first).line().is_some() { first } else { second };
                let size = if may_be_equal { "at most" } else { "below" };
                return Err(ScenarioError::BadValue {
                    place: self.place_of(at),
                    key: dotted(first),
                    found: format!("{most}{whose}"),
                    needed: format!("a number {size} {}, which is {least}", dotted(second)),
                    advice: "lower the one or raise the other, over the whole of their ranges"
                        .to_owned(),
                });
            }
        }
        Ok(())
    }

    /// Whether some source is one of a flux-limited sample.
    fn may_be_flux_limited(&self) -> bool {
        match self.choice(("sample", "selection")) {
            Choice::Listed { values, .. } => values.contains(&ParameterValue::Word("flux-limited")),
            _ => false,
        }
    }

    /// The priors on speed and angle of a flux-limited sample.
    fn population_prior(&self) -> Result<(SpeedPrior, AnglePrior), ScenarioError> {
        let drawn = |at| match *self.choice(at) {
            Choice::Drawn { distribution, .. } => Some(distribution),
            _ => None,
        };
        let speed = drawn(("jet", "speed"));
        let speed = match (speed, drawn(("jet", "lorentz_factor"))) {
            (Some(Distribution::Uniform { low, high }), None) => SpeedPrior::Uniform { low, high },
            (None, Some(Distribution::PowerLaw { low, high, slope })) => {
                SpeedPrior::LorentzPowerLaw { low, high, slope }
            }
            _ => {
                let gamma = ("jet", "lorentz_factor");
                let at = if self.choice(gamma).line().is_some() { gamma } else { ("jet", "speed") };
                return Err(self.bad(
                    at,
                    self.said(at),
                    "speed = { uniform = [low, high] } or lorentz_factor = { power_law = [low, high, slope] }",
                    "write one of these below [jet], or take selection = \"all\"",
                ));
            }
        };
        let at = ("source", "viewing_angle_deg");
        let Some(Distribution::Isotropic { low_deg, high_deg }) = drawn(at) else {
            return Err(self.bad(
                at,
                self.said(at),
                "viewing_angle_deg = { isotropic = [low, high] }",
                "write this below [source], or take selection = \"all\"",
            ));
        };
        Ok((speed, AnglePrior::Isotropic { low_deg, high_deg }))
    }

    /// What stands where a distribution of a population is needed.
    fn said(&self, at: (&str, &str)) -> &'static str {
        match self.choice(at) {
            Choice::Default => "not given for a flux-limited sample",
            Choice::Listed { .. } => "a number, in a flux-limited sample",
            Choice::Drawn { .. } => "another distribution, in a flux-limited sample",
        }
    }

    /// The joint prior of a source of a flux-limited sample: the boost is that of its jet.
    fn priors(&self, parameters: &Parameters) -> Result<Priors, ScenarioError> {
        let (speed, angle) = self.population_prior()?;
        let flow = if parameters.jet.flow == "blob" { Flow::Blob } else { Flow::Continuous };
        let exponent = flow.exponent(parameters.jet.spectral_index);
        let counts_slope = parameters.sample.counts_slope;
        let selection = Selection::FluxLimited { counts_slope, exponent };
        Priors::new(speed, angle, selection).map_err(|error| {
            self.bad(
                ("sample", "counts_slope"),
                format!("{counts_slope} with a boost of exponent {exponent}"),
                &format!("less ({error})"),
                "check jet.spectral_index and the distribution of the speed",
            )
        })
    }
}

fn dotted((table, key): (&str, &str)) -> String {
    format!("{table}.{key}")
}

/// The place of a parameter in [`PARAMETERS`].
fn position(table: &str, key: &str) -> Option<usize> {
    PARAMETERS.iter().position(|spec| spec.table == table && spec.key == key)
}

fn is_name(name: &str) -> bool {
    (1..=MAX_NAME).contains(&name.len())
        && !name.starts_with('-')
        && name.bytes().all(|byte| byte.is_ascii_alphanumeric() || byte == b'-')
}

fn is_line(about: &str) -> bool {
    about.chars().count() <= MAX_ABOUT && !about.chars().any(char::is_control)
}

/// The entries of a table in the order of the text.
fn in_order<'a, 'i>(
    table: &'a DeTable<'i>,
) -> Vec<(&'a Spanned<DeString<'i>>, &'a Spanned<DeValue<'i>>)> {
    let mut entries: Vec<_> = table.iter().collect();
    entries.sort_by_key(|(key, _)| key.span().start);
    entries
}

/// A number, whole or not; may be infinite or none.
fn number(value: &DeValue) -> Option<f64> {
    match value {
        DeValue::Integer(integer) if integer.radix() == 10 => integer.as_str().parse().ok(),
        DeValue::Integer(_) => whole(value).map(|whole| whole as f64),
        DeValue::Float(float) => float.as_str().parse().ok(),
        _ => None,
    }
}

/// A whole number, not negative.
fn whole(value: &DeValue) -> Option<u64> {
    let integer = value.as_integer()?;
    u64::from_str_radix(integer.as_str(), integer.radix()).ok()
}

/// What a parameter must be.
fn needed(spec: &ParameterSpec) -> String {
    match spec.kind {
        ParameterKind::Number { range, .. } => format!("a number {range}"),
        ParameterKind::Whole { low, high, .. } => format!("a whole number from {low} to {high}"),
        ParameterKind::Word(words) => format!("one of {}", words.join(", ")),
    }
}

/// What a parameter is where it is not given.
fn without(spec: &ParameterSpec) -> String {
    match spec.default_value() {
        ParameterValue::Number(Some(number)) => number.to_string(),
        ParameterValue::Number(None) => "none".to_owned(),
        ParameterValue::Whole(whole) => whole.to_string(),
        ParameterValue::Word(word) => word.to_owned(),
    }
}

impl fmt::Display for Range {
    /// In words: from 0 to 90; at least 0 and below 1; above 0; of any size.
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        let Self { low, high, with_low, with_high } = *self;
        if low.is_finite() && high.is_finite() && with_low && with_high {
            return write!(f, "from {low} to {high}");
        }
        if low.is_finite() {
            write!(f, "{} {low}", if with_low { "at least" } else { "above" })?;
        }
        if low.is_finite() && high.is_finite() {
            f.write_str(" and ")?;
        }
        if high.is_finite() {
            write!(f, "{} {high}", if with_high { "at most" } else { "below" })?;
        }
        if !low.is_finite() && !high.is_finite() {
            f.write_str("of any size")?;
        }
        Ok(())
    }
}

/// The epochs of a scenario.
fn epochs(reader: &Reader, value: &Spanned<DeValue>) -> Result<Vec<Epoch>, ScenarioError> {
    let bad = |value: &Spanned<DeValue>, needed: &str| {
        let advice = "write [[epochs]] on a line and its keys below, once for each epoch";
        reader.bad_value("epochs".to_owned(), value, needed.to_owned(), advice.to_owned())
    };
    let list = value.get_ref().as_array().ok_or_else(|| bad(value, "a list of tables"))?;
    if !(1..=MAX_EPOCHS).contains(&list.len()) {
        return Err(bad(value, "a list of 1 to 1000 epochs"));
    }
    list.iter()
        .map(|item| {
            let table = item.get_ref().as_table().ok_or_else(|| bad(item, "a table"))?;
            let mut epoch = Epoch::default();
            for (key, value) in in_order(table) {
                let (range, field) = match key.get_ref().as_ref() {
                    "frequency_ghz" => (frequencies(), &mut epoch.frequency_ghz),
                    "year" => (YEARS, &mut epoch.year),
                    other => {
                        return Err(ScenarioError::Unknown {
                            place: reader.at(key.span()),
                            what: "key",
                            found: shortened(&format!("epochs.{other}")),
                            nearest: nearest(other, EPOCH_KEYS.iter().copied())
                                .map_or(String::new(), |near| dotted(("epochs", near))),
                        });
                    }
                };
                let given = number(value.get_ref()).filter(|&number| range.contains(number));
                *field = Some(given.ok_or_else(|| {
                    let name = dotted(("epochs", key.get_ref()));
                    let advice = "correct it or leave the key out".to_owned();
                    reader.bad_value(name, value, format!("one number {range}"), advice)
                })?);
            }
            Ok(epoch)
        })
        .collect()
}

/// The range of frequencies, that of the map's.
fn frequencies() -> Range {
    let spec = position("map", "frequency_ghz").and_then(|i| PARAMETERS.get(i));
    match spec.map(|spec| spec.kind) {
        Some(ParameterKind::Number { range, .. }) => range,
        _ => YEARS,
    }
}

fn shortened(text: &str) -> String {
    let text = text.split_whitespace().collect::<Vec<_>>().join(" ");
    if text.chars().count() <= 60 {
        return text;
    }
    text.chars().take(57).chain("...".chars()).collect()
}

/// The text that is read and what errors call it.
struct Reader<'a> {
    text: &'a str,
    place: &'a str,
}

impl Reader<'_> {
    /// Line of a place in the text, from 1.
    fn line(&self, span: &Span<usize>) -> usize {
        let before = self.text.as_bytes().iter().take(span.start);
        1 + before.filter(|&&byte| byte == b'\n').count()
    }

    fn at(&self, span: Span<usize>) -> String {
        format!("{}:{}", self.place, self.line(&span))
    }

    /// What stands in the text.
    fn written(&self, span: Span<usize>) -> String {
        shortened(self.text.get(span).unwrap_or(""))
    }

    fn syntax(&self, error: &toml::de::Error) -> ScenarioError {
        let span = error.span().unwrap_or(0..0);
        let before = self.text.get(..span.start).unwrap_or("");
        let column = 1 + before.chars().rev().take_while(|&letter| letter != '\n').count();
        let place = format!("{}:{column}", self.at(span));
        ScenarioError::Syntax { place, message: shortened(error.message()) }
    }

    fn bad_value(
        &self,
        key: String,
        value: &Spanned<DeValue>,
        needed: String,
        advice: String,
    ) -> ScenarioError {
        let place = self.at(value.span());
        ScenarioError::BadValue { place, key, found: self.written(value.span()), needed, advice }
    }

    /// A key that a table does not have: the same key in another table, else the nearest here.
    fn unknown_key(&self, table: &str, key: &str, span: Span<usize>) -> ScenarioError {
        let elsewhere = PARAMETERS.iter().find(|spec| spec.key == key);
        let here = PARAMETERS.iter().filter(|spec| spec.table == table).map(|spec| spec.key);
        let near = || nearest(key, here).map_or(String::new(), |near| dotted((table, near)));
        ScenarioError::Unknown {
            place: self.at(span),
            what: "key",
            found: shortened(&dotted((table, key))),
            nearest: elsewhere.map_or_else(near, |spec| dotted((spec.table, spec.key))),
        }
    }

    /// A table or key that the top level does not have: a key of that name in a table, else
    /// the nearest here.
    fn unknown_top(&self, name: &str, value: &DeValue, span: Span<usize>) -> ScenarioError {
        let tables = PARAMETER_TABLES.iter().map(|&(table, _)| table);
        let keys = TOP_KEYS.iter().map(|&(key, _)| key);
        let (what, near) = if value.is_table() {
            ("table", nearest(name, tables.chain(["epochs"])))
        } else {
            ("key", nearest(name, keys.chain(tables)))
        };
        let inside = PARAMETERS.iter().find(|spec| !value.is_table() && spec.key == name);
        let inside = inside.map(|spec| dotted((spec.table, spec.key)));
        ScenarioError::Unknown {
            place: self.at(span),
            what,
            found: shortened(name),
            nearest: inside.unwrap_or_else(|| near.unwrap_or_default().to_owned()),
        }
    }

    /// What a scenario says about a parameter.
    fn choice(
        &self,
        spec: &ParameterSpec,
        value: &Spanned<DeValue>,
    ) -> Result<Choice, ScenarioError> {
        let line = self.line(&value.span());
        match (value.get_ref(), spec.kind) {
            (DeValue::Array(items), _) if items.is_empty() => {
                let needed = format!("{}, or a list of at least one", needed(spec));
                Err(self.bad_parameter(spec, value, needed))
            }
            (DeValue::Array(items), _) => {
                let values = items.iter().map(|item| self.single(spec, item));
                Ok(Choice::Listed { values: values.collect::<Result<_, _>>()?, line })
            }
            (DeValue::Table(table), ParameterKind::Number { range, .. }) => {
                let distribution = self.distribution(spec, range, value, table)?;
                Ok(Choice::Drawn { distribution, line })
            }
            _ => Ok(Choice::Listed { values: vec![self.single(spec, value)?], line }),
        }
    }

    /// One value of a parameter.
    fn single(
        &self,
        spec: &ParameterSpec,
        value: &Spanned<DeValue>,
    ) -> Result<ParameterValue, ScenarioError> {
        let found = match spec.kind {
            ParameterKind::Number { range, .. } => number(value.get_ref())
                .filter(|&number| range.contains(number))
                .map(|number| ParameterValue::Number(Some(number))),
            ParameterKind::Whole { low, high, .. } => whole(value.get_ref())
                .and_then(|whole| usize::try_from(whole).ok())
                .filter(|whole| (low..=high).contains(whole))
                .map(ParameterValue::Whole),
            ParameterKind::Word(words) => words
                .iter()
                .find(|&&word| value.get_ref().as_str() == Some(word))
                .map(|&word| ParameterValue::Word(word)),
        };
        found.ok_or_else(|| self.bad_parameter(spec, value, needed(spec)))
    }

    fn bad_parameter(
        &self,
        spec: &ParameterSpec,
        value: &Spanned<DeValue>,
        needed: String,
    ) -> ScenarioError {
        let advice = match spec.default_value() {
            ParameterValue::Number(None) => "correct it or leave the key out".to_owned(),
            _ => format!("correct it, or leave the key out for {}", without(spec)),
        };
        self.bad_value(dotted((spec.table, spec.key)), value, needed, advice)
    }

    /// The distribution of a number.
    fn distribution(
        &self,
        spec: &ParameterSpec,
        range: Range,
        value: &Spanned<DeValue>,
        table: &DeTable,
    ) -> Result<Distribution, ScenarioError> {
        let bad = |needed: String| Err(self.bad_parameter(spec, value, needed));
        let one = in_order(table);
        let known = match one.as_slice() {
            [(key, numbers)] => DISTRIBUTIONS
                .iter()
                .find(|(name, ..)| *name == key.get_ref().as_ref())
                .map(|&(name, names, _)| (name, names, *numbers)),
            _ => None,
        };
        let Some((name, names, numbers)) = known else {
            let known: Vec<_> = DISTRIBUTIONS.iter().map(|&(name, ..)| name).collect();
            return bad(format!("one distribution out of {}", known.join(", ")));
        };
        let items = numbers.get_ref().as_array().map(|items| {
            items.iter().map(|item| number(item.get_ref()).filter(|n| n.is_finite())).collect()
        });
        let items: Option<Vec<f64>> = items.flatten();
        let distribution = match (name, items.as_deref()) {
            ("uniform", Some(&[low, high])) => Distribution::Uniform { low, high },
            ("log_uniform", Some(&[low, high])) => Distribution::PowerLaw { low, high, slope: 1.0 },
            ("normal", Some(&[mean, sigma])) => Distribution::Normal { mean, sigma },
            ("power_law", Some(&[low, high, slope])) => Distribution::PowerLaw { low, high, slope },
            ("isotropic", Some(&[low_deg, high_deg])) => {
                Distribution::Isotropic { low_deg, high_deg }
            }
            _ => {
                let (count, names) = (names.len(), names.join(", "));
                return bad(format!("{{ {name} = [{names}] }} with {count} finite numbers"));
            }
        };
        let (low, high) = distribution.ends();
        match distribution {
            Distribution::Normal { mean, sigma } => {
                if sigma <= 0.0 {
                    return bad("a normal distribution with sigma above 0".to_owned());
                }
                let below = |end: f64| {
                    0.5 * libm::erfc((mean - end) / sigma * std::f64::consts::FRAC_1_SQRT_2)
                };
                if below(range.high) - below(range.low) < MIN_SHARE_INSIDE {
                    return bad(format!(
                        "a normal distribution of which at least 1 % is {}",
                        needed(spec)
                    ));
                }
                return Ok(distribution);
            }
            Distribution::Isotropic { .. } if !spec.key.ends_with("_deg") => {
                return bad("another distribution, as isotropic is for angles".to_owned());
            }
            Distribution::Isotropic { .. } if low < 0.0 || high > 180.0 => {
                return bad("isotropic angles from 0 to 180 degrees".to_owned());
            }
            Distribution::PowerLaw { .. } if low <= 0.0 => {
                return bad(format!("a {name} with low above 0"));
            }
            Distribution::PowerLaw { slope, .. } if slope.abs() > 100.0 => {
                return bad("a power_law with a slope from -100 to 100".to_owned());
            }
            _ => {}
        }
        if low >= high {
            return bad(format!("a {name} with low below high"));
        }
        if !range.contains(low) || !range.contains(high) {
            return bad(format!("a {name} whose ends are each {}", needed(spec)));
        }
        Ok(distribution)
    }
}

/// Every table and key of a scenario with its range, its default and what it is: plain text, 80
/// columns.
pub fn parameter_page() -> String {
    let mut page = String::from("Outside of the tables\n");
    for (key, help) in TOP_KEYS {
        page += &paragraph(key, help);
    }
    page += "\nHow a number may be written\n";
    page += &paragraph("5.0", "the same for all sources");
    page += &paragraph(
        "[1, 2, 4]",
        "these in turn; several lists run through all their combinations, the first fastest; words and whole numbers may be listed too",
    );
    for (name, numbers, help) in DISTRIBUTIONS {
        page += &paragraph(&format!("{{ {name} = [{}] }}", numbers.join(", ")), help);
    }
    for (table, about) in PARAMETER_TABLES {
        page += &format!("\n[{table}]  {about}\n");
        for spec in PARAMETERS.iter().filter(|spec| spec.table == *table) {
            let text = format!("{}; {}; {} if not given", spec.help, needed(spec), without(spec));
            page += &paragraph(spec.key, &text);
        }
    }
    page
}

/// A name with its text beside it, wrapped.
fn paragraph(name: &str, text: &str) -> String {
    const INDENT: usize = 30;
    let mut page = String::new();
    let mut row = format!("  {name:<width$}", width = INDENT - 2);
    if row.len() > INDENT {
        page += &format!("{row}\n");
        row = " ".repeat(INDENT);
    }
    for word in text.split(' ') {
        if row.len() + word.len() > PAGE_COLUMNS {
            page += &format!("{}\n", row.trim_end());
            row = " ".repeat(INDENT);
        }
        row += word;
        row.push(' ');
    }
    page + row.trim_end() + "\n"
}

#[cfg(test)]
mod tests;
