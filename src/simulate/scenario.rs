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
    ("beamed-sample", include_str!("scenarios/beamed-sample.toml")),
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
mod tests {
    use super::*;

    /// A scenario with nothing but what is needed, and these lines from line 3 on.
    fn text(lines: &str) -> String {
        format!("name = \"made\"\narms.length_arcsec = 60\n{lines}")
    }

    fn scenario(lines: &str) -> Scenario {
        Scenario::parse(&text(lines), "made.toml").expect(lines)
    }

    fn at(scenario: &Scenario, index: usize) -> Parameters {
        scenario.parameters(index).expect("good")
    }

    #[test]
    fn bad_scenarios_say_where_what_was_found_and_what_is_needed() {
        let long = format!("about = \"{}\"", "x".repeat(MAX_TEXT_BYTES));
        let deep = format!("jet.speed = {}", "[".repeat(100_000));
        let limited = "[sample]\nselection = 'flux-limited'\n";
        let speed = "[jet]\nspeed = { uniform = [0.1, 0.9] }\n";
        let limited_at_rest = format!("{limited}{speed}");
        let limited_list = format!("{limited}[jet]\nspeed = [0.1, 0.9]\n");
        let limited_wrong =
            format!("{limited}{speed}[source]\nviewing_angle_deg = {{ uniform = [0, 90] }}\n");
        let limited_steep = format!(
            "{limited}counts_slope = 10\n[jet]\nspectral_index = 9\nspeed = {{ uniform = [0.1, 0.9] }}\n[source]\nviewing_angle_deg = {{ isotropic = [0, 90] }}\n"
        );
        let bad: &[(&str, &[&str])] = &[
            // Text.
            ("[jet]\nspeed = = 2", &["made.toml:4:9", "not TOML", "correct it"]),
            ("[jet]\nspeed = 0.1\nspeed = 0.2", &["made.toml:5:1", "duplicate key"]),
            (&long, &["made.toml", "1000", "at most 1000000"]),
            (&deep, &["made.toml:3", "recursion"]),
            // Names.
            (
                "[jets]\nspeed = 0.5",
                &["made.toml:3", "unknown table \"jets\"", "nearest known one is jet"],
            ),
            ("[jet]\nsped = 0.5", &["made.toml:4", "unknown key \"jet.sped\"", "jet.speed"]),
            ("[jet]\nredshift = 0.5", &["made.toml:4", "\"jet.redshift\"", "source.redshift"]),
            ("viewing_angle_deg = 5", &["made.toml:3", "source.viewing_angle_deg"]),
            ("sed = 5", &["made.toml:3", "unknown key \"sed\"", "is seed"]),
            ("jet = 5", &["made.toml:3", "jet is 5", "a table", "[jet]"]),
            // Values.
            (
                "[jet]\nspeed = 1.0",
                &["made.toml:4", "jet.speed is 1.0", "at least 0 and below 1", "0.9"],
            ),
            ("[jet]\nspeed = nan", &["jet.speed is nan", "a number at least 0"]),
            ("[jet]\nend_speed = 2", &["jet.end_speed is 2", "correct it or leave the key out"]),
            ("[jet]\nspeed = 'fast'", &["jet.speed is 'fast'", "a number at least 0"]),
            ("[jet]\nspeed = [0.1,\n 1.5]", &["made.toml:5", "jet.speed is 1.5", "below 1"]),
            ("[jet]\nspeed = []", &["jet.speed is []", "at least one"]),
            ("[jet]\nspeed = [[0.1]]", &["jet.speed is [0.1]"]),
            (
                "[map]\ncolumns = 10.5",
                &["map.columns is 10.5", "a whole number from 1 to 20000", "300"],
            ),
            ("[map]\ncolumns = 0", &["map.columns is 0", "from 1 to 20000"]),
            ("[map]\nrows = { uniform = [1, 5] }", &["map.rows is { uniform", "whole number"]),
            ("[bend]\nshape = 'sine'", &["bend.shape is 'sine'", "none, inversion, mirror"]),
            ("[bend]\nshape = ['mirror', 3]", &["bend.shape is 3", "none, inversion, mirror"]),
            // Distributions.
            (
                "[jet]\nspeed = { gaussian = [0.5, 0.1] }",
                &["gaussian", "uniform, log_uniform, normal, power_law, isotropic"],
            ),
            (
                "[jet]\nspeed = { uniform = [0, 0.1], normal = [0.5, 0.1] }",
                &["one distribution out of"],
            ),
            ("[jet]\nspeed = {}", &["jet.speed is {}", "one distribution out of"]),
            ("[jet]\nspeed = { uniform = [0.5, 0.6, 0.7] }", &["[low, high]", "2 finite numbers"]),
            ("[jet]\nspeed = { uniform = 0.5 }", &["[low, high]", "2 finite numbers"]),
            (
                "[jet]\nspeed = { power_law = [0.5, 0.6] }",
                &["[low, high, slope]", "3 finite numbers"],
            ),
            ("[jet]\nspeed = { uniform = [0.5, inf] }", &["2 finite numbers"]),
            ("[jet]\nspeed = { uniform = [0.6, 0.5] }", &["low below high"]),
            (
                "[jet]\nspeed = { uniform = [0.5, 1.0] }",
                &["ends are each a number at least 0 and below 1"],
            ),
            ("[jet]\nspeed = { log_uniform = [0, 0.5] }", &["low above 0"]),
            ("[jet]\nspeed = { power_law = [0, 0.5, 2] }", &["low above 0"]),
            ("[jet]\nspeed = { power_law = [0.1, 0.5, 1e300] }", &["slope from -100 to 100"]),
            ("[jet]\nspeed = { normal = [0.5, 0] }", &["sigma above 0"]),
            ("[jet]\nspeed = { normal = [7, 0.1] }", &["at least 1 %", "below 1"]),
            ("[jet]\nspeed = { isotropic = [0, 0.5] }", &["isotropic is for angles"]),
            ("[map]\nbeam_pa_deg = { isotropic = [-10, 90] }", &["from 0 to 180 degrees"]),
            // Top level.
            ("count = 0", &["made.toml:3", "count is 0", "from 1 to 10000000"]),
            ("count = 10000001", &["count is 10000001"]),
            ("count = 2.5", &["count is 2.5", "a whole number"]),
            ("seed = -1", &["seed is -1", "from 0"]),
            ("about = \"two\\nlines\"", &["about is", "one line"]),
            ("epochs = []", &["epochs is []", "1 to 1000 epochs"]),
            ("epochs = 5", &["epochs is 5", "a list of tables", "[[epochs]]"]),
            ("epochs = [5]", &["epochs is 5", "a table"]),
            ("[[epochs]]\nyears = 2000", &["made.toml:4", "\"epochs.years\"", "epochs.year"]),
            ("[[epochs]]\nyear = 1800", &["epochs.year is 1800", "at least 1900 and below 2200"]),
            (
                "[[epochs]]\nfrequency_ghz = [1, 2]",
                &["epochs.frequency_ghz is [1, 2]", "one number above 0"],
            ),
            // Several keys.
            (
                "[jet]\nspeed = 0.5\nlorentz_factor = 2",
                &["made.toml:5", "jet.speed and jet.lorentz_factor", "keep one"],
            ),
            (
                "[core]\nlorentz_factor = 2\nspeed = 0.5",
                &["made.toml:5", "core.speed and core.lorentz_factor"],
            ),
            (
                "[core]\nflux_density_mjy = 5\nunbeamed_flux_density_mjy = 2",
                &["core.flux_density_mjy and core.unbeamed"],
            ),
            (
                "[jet]\nflux_density_mjy = 5\nunbeamed_flux_density_mjy = 2",
                &["jet.flux_density_mjy and jet.unbeamed"],
            ),
            ("arms.length_kpc = 5", &["made.toml:3", "arms.length_arcsec and arms.length_kpc"]),
            (
                "[jet]\nslowing_from = 0.5\nslowing_to = [0.9, 0.5]",
                &["made.toml:4", "jet.slowing_from is 0.5", "below jet.slowing_to, which is 0.5"],
            ),
            ("[jet]\nslowing_to = 0", &["made.toml:4", "below jet.slowing_to, which is 0"]),
            ("[bend]\nfrom = 0.5\nto = 0.4", &["bend.from is 0.5", "at most bend.to"]),
            (
                "[map]\nbeam_minor_arcsec = 6",
                &["made.toml:4", "at most map.beam_major_arcsec, which is 5"],
            ),
            (
                "[map]\nbeam_minor_arcsec = { uniform = [1, 4] }\nbeam_major_arcsec = { uniform = [3, 8] }",
                &["is 4", "which is 3"],
            ),
            (
                "[neighbours]\nflux_min_mjy = 200",
                &["at most neighbours.flux_max_mjy, which is 100"],
            ),
            (
                "[map]\ncolumns = [5, 20000]\nrows = 20000",
                &["made.toml:4", "20000 columns by 20000 rows", "100000000 pixels"],
            ),
            // Populations.
            (limited, &["jet.speed is not given", "power_law", "uniform"]),
            (
                &limited_list,
                &["made.toml:6", "jet.speed is a number", "lorentz_factor = { power_law"],
            ),
            (&limited_at_rest, &["source.viewing_angle_deg is not given", "isotropic"]),
            (&limited_wrong, &["made.toml:8", "another distribution", "isotropic = [low, high]"]),
            (
                &limited_steep,
                &["made.toml:5", "sample.counts_slope is 10", "exponent 11", "-100 to 100"],
            ),
        ];
        for (lines, words) in bad {
            let error = Scenario::parse(&text(lines), "made.toml").expect_err(lines).to_string();
            assert!(error.starts_with("made.toml"), "{error}");
            assert!(error.chars().count() < 400, "{error}");
            for word in *words {
                assert!(error.contains(word), "no {word:?} in: {error}");
            }
        }
        let whole: &[(&str, &[&str])] = &[
            ("arms.length_arcsec = 60", &["there is no name", "my-sample"]),
            ("name = 'made'", &["there is no arms.length_arcsec or arms.length_kpc", "[arms]"]),
            (
                "name = 'made'\narms.length_kpc = 60",
                &["made.toml:2", "source.redshift or source.distance_mpc"],
            ),
            (
                "name = 'a/b'\narms.length_arcsec = 60",
                &["made.toml:1", "name is 'a/b'", "letters, digits and hyphens"],
            ),
            ("name = '-a'", &["no hyphen first"]),
            ("name = 5", &["name is 5"]),
            ("", &["there is no name"]),
        ];
        for (text, words) in whole {
            let error = Scenario::parse(text, "made.toml").expect_err(text).to_string();
            for word in *words {
                assert!(error.contains(word), "no {word:?} in: {error}");
            }
        }
    }

    #[test]
    fn no_text_brings_the_reader_down() {
        for (_, text) in BUILT_IN {
            for end in 0..text.len() {
                drop(text.get(..end).map(|part| Scenario::parse(part, "cut")));
            }
            for (i, other) in text.bytes().enumerate().step_by(3) {
                for letter in ["0", "]", "é", "\"", "\n", "-", "="] {
                    let mut changed = text.to_string();
                    if other.is_ascii() {
                        changed.replace_range(i..=i, letter);
                    }
                    if let Ok(scenario) = Scenario::parse(&changed, "changed") {
                        drop(scenario.parameters(usize::MAX));
                    }
                }
            }
        }
        assert!(Scenario::parse("\u{0}", "zero").is_err());
    }

    #[test]
    fn built_in_scenarios_are_good_and_named_after_their_text() {
        assert!(Scenario::named("no-such").is_none());
        for (name, about) in Scenario::names() {
            let scenario = Scenario::named(name).expect("known").expect("good");
            assert_eq!(scenario.name(), name);
            assert!(!about.is_empty() && about == scenario.about());
            for index in 0..200 {
                let values = scenario.values(index).expect("good");
                for (spec, value) in PARAMETERS.iter().zip(values) {
                    if let (ParameterKind::Number { range, .. }, Some(number)) =
                        (spec.kind, as_number(value))
                    {
                        assert!(
                            range.contains(number),
                            "{name} {}.{} {number}",
                            spec.table,
                            spec.key
                        );
                    }
                }
                at(&scenario, index);
            }
        }
    }

    #[test]
    fn a_scenario_without_tables_gives_the_defaults() {
        let scenario = scenario("");
        let mut expected = Parameters::default();
        expected.arms.length_arcsec = Some(60.0);
        assert_eq!(at(&scenario, 0), expected);
        assert_eq!(at(&scenario, usize::MAX), expected);
        assert_eq!((scenario.count(), scenario.seed(), scenario.about()), (1, 0, ""));
        assert_eq!(scenario.epochs(), [Epoch::default()]);
    }

    #[test]
    fn lists_run_through_all_their_combinations_the_first_fastest() {
        // In the order of the table, not of the text: source, jet, map.
        let scenario = scenario(
            "[map]\ncolumns = [100, 200]\n[jet]\nflow = ['blob', 'continuous']\n[source]\nviewing_angle_deg = [10, 20.5, 0x1e]",
        );
        let found: Vec<_> = (0..13)
            .map(|i| at(&scenario, i))
            .map(|p| (p.source.viewing_angle_deg, p.jet.flow, p.map.columns))
            .collect();
        assert_eq!(
            found[..7],
            [
                (10.0, "blob", 100),
                (20.5, "blob", 100),
                (30.0, "blob", 100),
                (10.0, "continuous", 100),
                (20.5, "continuous", 100),
                (30.0, "continuous", 100),
                (10.0, "blob", 200),
            ]
        );
        assert_eq!(found[11], (30.0, "continuous", 200));
        assert_eq!(found[12], found[0]);
    }

    #[test]
    fn a_parameter_more_or_another_count_changes_no_draw() {
        let lines = "[source]\nposition_angle_deg = { uniform = [0, 360] }\nredshift = { log_uniform = [0.1, 2] }\n";
        let one = scenario(lines);
        let two = scenario(&format!("{lines}[halo]\nflux_density_mjy = {{ normal = [5, 1] }}\n"))
            .with(Some(7), None);
        let other_seed = scenario(lines).with(None, Some(1));
        for index in [0, 1, 99, 12_345] {
            let (a, b) = (at(&one, index), at(&two, index));
            assert_eq!(a.source, b.source);
            assert!(b.halo.flux_density_mjy > 0.0 && a.halo.flux_density_mjy == 0.0);
            assert_eq!(a, at(&one, index), "the same at any time");
            assert!(a.source.redshift != at(&other_seed, index).source.redshift);
            assert!(a.source.redshift != at(&one, index + 1).source.redshift);
        }
    }

    /// Mean of what `f` says of 20 000 sources, with 1/√12 of a unit as the largest scatter.
    fn mean(scenario: &Scenario, f: impl Fn(&Parameters) -> f64) -> f64 {
        (0..20_000).map(|i| f(&at(scenario, i))).sum::<f64>() / 20_000.0
    }

    #[test]
    fn draws_follow_the_cumulative_distribution_that_is_written() {
        // The cumulative distribution of what is drawn is uniform: mean ½, mean square ⅓.
        type Cumulative = (&'static str, fn(f64) -> f64);
        let cases: &[Cumulative] = &[
            ("uniform = [10, 30]", |x| (x - 10.0) / 20.0),
            ("log_uniform = [0.5, 50]", |x| (x / 0.5).ln() / 100f64.ln()),
            ("power_law = [1, 80, 2.5]", |x| (1.0 - x.powf(-1.5)) / (1.0 - 80f64.powf(-1.5))),
            ("power_law = [1, 80, -1]", |x| (x * x - 1.0) / 6399.0),
            ("isotropic = [20, 80]", |x| {
                let cosine = |angle_deg: f64| angle_deg.to_radians().cos();
                (cosine(20.0) - cosine(x)) / (cosine(20.0) - cosine(80.0))
            }),
            ("normal = [5, 10]", |x| {
                // Cut off at 0 and 90, half a sigma below the mean and 8.5 above it.
                let below = |x: f64| 0.5 * libm::erfc((5.0 - x) / 10.0 / 2f64.sqrt());
                (below(x) - below(0.0)) / (below(90.0) - below(0.0))
            }),
        ];
        for (distribution, cumulative) in cases {
            let scenario = scenario(&format!("source.viewing_angle_deg = {{ {distribution} }}"));
            let share = |p: &Parameters| cumulative(p.source.viewing_angle_deg);
            let (first, second) = (mean(&scenario, share), mean(&scenario, |p| share(p).powi(2)));
            // Scatter of the means: √(1/12/20000) = 0.0020 and √(4/45/20000) = 0.0021.
            assert!((first - 0.5).abs() < 0.008, "{distribution}: {first}");
            assert!((second - 1.0 / 3.0).abs() < 0.0085, "{distribution}: {second}");
        }
    }

    /// Kolmogorov and Smirnov's largest distance of a sample from a density over 0 to 1.
    fn distance(mut sample: Vec<f64>, density: impl Fn(f64) -> f64) -> f64 {
        sample.sort_by(f64::total_cmp);
        let steps = 20_000;
        let mut cumulative = vec![0.0];
        for i in 0..steps {
            cumulative.push(cumulative[i] + density((i as f64 + 0.5) / steps as f64));
        }
        let count = sample.len() as f64;
        let below = |x: f64| cumulative[(x * steps as f64) as usize] / cumulative[steps];
        let off = |(i, &x): (usize, &f64)| {
            (below(x) - i as f64 / count).abs().max((below(x) - (i + 1) as f64 / count).abs())
        };
        sample.iter().enumerate().map(off).fold(0.0, f64::max)
    }

    #[test]
    fn speeds_and_angles_drawn_one_by_one_follow_the_priors_too() {
        let angle = AnglePrior::Isotropic { low_deg: 10.0, high_deg: 90.0 };
        for (line, speed) in [
            ("speed = { uniform = [0.2, 0.95] }", SpeedPrior::Uniform { low: 0.2, high: 0.95 }),
            (
                "lorentz_factor = { power_law = [1.2, 10, 2] }",
                SpeedPrior::LorentzPowerLaw { low: 1.2, high: 10.0, slope: 2.0 },
            ),
        ] {
            let priors = Priors::new(speed, angle, Selection::All).expect("valid");
            let lines =
                format!("source.viewing_angle_deg = {{ isotropic = [10, 90] }}\njet.{line}");
            let scenario = scenario(&lines);
            let drawn: Vec<_> = (0..10_000).map(|i| at(&scenario, i)).collect();
            let density = |beta, cosine| priors.log_density(beta, cosine).map_or(0.0, f64::exp);
            let speeds = drawn.iter().map(|p| p.jet.speed).collect();
            let cosines =
                drawn.iter().map(|p| p.source.viewing_angle_deg.to_radians().cos()).collect();
            // A distance of 1.95/√N happens once in 1000.
            let off = distance(speeds, |beta| density(beta, 0.5));
            assert!(off < 0.0195 + 5e-4, "{line}: {off}");
            let off = distance(cosines, |cosine| density(0.8, cosine));
            assert!(off < 0.0195 + 5e-4, "{line}: {off}");
        }
    }

    #[test]
    fn a_flux_limited_sample_is_drawn_from_its_joint_prior() {
        let lines = |jet: &str| {
            format!(
                "seed = 5\n[sample]\nselection = 'flux-limited'\ncounts_slope = 1.2\n[source]\nviewing_angle_deg = {{ isotropic = [0, 90] }}\n[jet]\nlorentz_factor = {{ power_law = [2, 20, 1.5] }}\n{jet}"
            )
        };
        let speed = SpeedPrior::LorentzPowerLaw { low: 2.0, high: 20.0, slope: 1.5 };
        let angle = AnglePrior::Isotropic { low_deg: 0.0, high_deg: 90.0 };
        // p = 2 + index of a continuous jet, 3 + index of blobs.
        for (jet, exponents) in [
            ("spectral_index = 0.7", [2.7, 2.7]),
            ("flow = 'blob'", [3.6, 3.6]),
            ("flow = ['blob', 'continuous']\nspectral_index = 0.5", [3.5, 2.5]),
        ] {
            let scenario = scenario(&lines(jet));
            for (index, exponent) in exponents.into_iter().enumerate() {
                let selection = Selection::FluxLimited { counts_slope: 1.2, exponent };
                let sampler = Sampler::new(Priors::new(speed, angle, selection).expect("valid"));
                let share = |name| Draws::new(stream_seed(5, index as u64, name)).uniform();
                let expected =
                    sampler.sample(share("jet.lorentz_factor"), share("source.viewing_angle_deg"));
                let found = at(&scenario, index);
                assert_eq!((found.jet.speed, found.source.viewing_angle_deg), expected, "{jet}");
                assert_eq!(found.jet.lorentz_factor, lorentz_factor(expected.0));
            }
        }
        // Those that point at us are over-represented: isotropic axes have a mean of 57.3°.
        let mean_angle = mean(&scenario(&lines("")), |p| p.source.viewing_angle_deg);
        assert!(mean_angle < 15.0, "{mean_angle}");
        // A uniform speed leaves the Lorentz factor out.
        let uniform = lines("").replace(
            "lorentz_factor = { power_law = [2, 20, 1.5] }",
            "speed = { uniform = [0.5, 0.9] }",
        );
        let found = at(&scenario(&uniform), 3);
        assert!(found.jet.lorentz_factor.is_none() && (0.5..=0.9).contains(&found.jet.speed));
    }

    #[test]
    fn a_lorentz_factor_sets_the_speed() {
        let p = at(&scenario("[jet]\nlorentz_factor = 2\n[core]\nlorentz_factor = [1, 5]"), 0);
        // β = √(1 − 1/4); Γ = 1 is at rest.
        assert!((p.jet.speed - 0.75f64.sqrt()).abs() < 1e-15, "{}", p.jet.speed);
        assert!(p.core.speed == 0.0 && p.core.lorentz_factor == Some(1.0));
    }

    #[test]
    fn a_broken_order_of_normal_draws_is_found_with_its_source() {
        let scenario = scenario("[bend]\nfrom = { normal = [0.5, 0.2] }\nto = 0.6");
        let errors: Vec<_> = (0..100).filter_map(|i| scenario.parameters(i).err()).collect();
        // 0.6 is half a sigma above the mean: 31 % of all, a little less inside the range.
        assert!((15..45).contains(&errors.len()), "{}", errors.len());
        let message = errors[0].to_string();
        assert!(
            message.contains("made.toml:4: bend.from is") && message.contains("(source "),
            "{message}"
        );
    }

    #[test]
    fn epochs_keep_their_order_and_may_be_half_given() {
        let scenario = scenario(
            "[[epochs]]\nyear = 2001.5\n[[epochs]]\nfrequency_ghz = 5\nyear = 2003\n[[epochs]]",
        );
        let epoch = |frequency_ghz, year| Epoch { frequency_ghz, year };
        assert_eq!(
            scenario.epochs(),
            [epoch(None, Some(2001.5)), epoch(Some(5.0), Some(2003.0)), epoch(None, None)]
        );
    }

    #[test]
    fn the_text_written_gives_the_same_scenario() {
        for lines in [
            "# a comment\n[jet]\nspeed = { uniform = [0.1, 0.5] } # another",
            "count = 1_0 # ten\nseed = 0xff\n[jet]\nspeed = 0.25",
            "seed = 3\n[map]\nrows = [10, 20]",
        ] {
            let given = scenario(lines);
            for used in [given.clone(), given.with(Some(123), Some(u64::MAX))] {
                let written = used.to_toml();
                let read = Scenario::parse(&written, "made.toml").expect("good");
                assert_eq!((read.count(), read.seed()), (used.count(), used.seed()), "{written}");
                assert_eq!(at(&read, 5), at(&used, 5));
                assert_eq!(read.to_toml(), written);
            }
        }
        let written = scenario("count = 1_0 # ten\nseed = 0xff").with(Some(7), None).to_toml();
        assert_eq!(written, text("count = 7 # ten\nseed = 255"));
        // What is not given comes to the top, the rest stays as it is.
        let written = scenario("# mine\n").to_toml();
        assert_eq!(written, format!("count = 1\nseed = 0\n{}", text("# mine\n")));
        // A mark of byte order is no part of the text.
        let marked = format!("\u{feff}{}", text("seed = 4"));
        assert_eq!(
            Scenario::parse(&marked, "m").expect("good").to_toml(),
            format!("count = 1\n{}", text("seed = 4"))
        );
        // Counts stay where a scenario may have them.
        assert_eq!(scenario("").with(Some(0), None).count(), 1);
        assert_eq!(scenario("").with(Some(usize::MAX), None).count(), MAX_COUNT);
    }

    #[test]
    fn the_page_names_every_key_within_its_columns() {
        let page = parameter_page();
        for line in page.lines() {
            assert!(line.chars().count() <= PAGE_COLUMNS && line == line.trim_end(), "{line}");
        }
        for spec in PARAMETERS {
            assert!(page.contains(&format!("\n  {} ", spec.key)), "{}", spec.key);
        }
        for (table, about) in PARAMETER_TABLES {
            assert!(page.contains(&format!("\n[{table}]  {about}\n")), "{table}");
        }
        let flowed = page.split_whitespace().collect::<Vec<_>>().join(" ");
        for words in [
            "viewing_angle_deg angle between the approaching jet and the line of sight; a number from 0 to 90; 60 if not given",
            "shape symmetry of the two bends about the core; one of none, inversion, mirror; none if not given",
            "{ power_law = [low, high, slope] } dN/dx falls as x^-slope",
        ] {
            assert!(flowed.contains(words), "{words}");
        }
    }

    #[test]
    fn ranges_read_as_words() {
        let range = |low, high, with_low, with_high| Range { low, high, with_low, with_high };
        for (range, words) in [
            (range(0.0, 90.0, true, true), "from 0 to 90"),
            (range(0.0, 1.0, true, false), "at least 0 and below 1"),
            (range(0.0, 20.0, false, true), "above 0 and at most 20"),
            (range(0.0, f64::INFINITY, false, false), "above 0"),
            (range(f64::NEG_INFINITY, 3.0, false, false), "below 3"),
            (range(f64::NEG_INFINITY, f64::INFINITY, false, false), "of any size"),
        ] {
            assert_eq!(range.to_string(), words);
        }
    }
}
