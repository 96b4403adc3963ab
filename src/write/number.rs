//! Numbers for people: rounded to what is known, in a unit of handy size. Data files never
//! pass through here.
//!
//! A value is rounded to two significant digits of its error, a limit to three significant
//! digits of its own towards the side that keeps it true (lower limits down, upper limits
//! up). Numbers of at least a million or below a thousandth are written as `1.23e25`. The
//! minus sign is U+2212.

use crate::measurement::{Because, Measurement};

/// What stands where there is no number.
pub const NO_NUMBER: &str = "–";

/// A measurement in words of figures: `12.34 ± 0.56`, `12.30 +0.60 −0.40`, `> 12.3`,
/// `< 0.45`, `(1.23 ± 0.12)e25`, or `–` where it is missing.
///
/// Asymmetric errors are both written with the decimals the smaller one needs, but never
/// finer than a tenth of the larger one's second digit; errors that read alike become one ±.
/// A value whose errors are zero is exact and written without them.
pub fn measurement(measurement: Measurement) -> String {
    match measurement {
        Measurement::Value { value, minus, plus, .. } => value_with_errors(value, minus, plus),
        Measurement::LowerLimit { lower_limit, .. } => format!("> {}", limit(lower_limit, false)),
        Measurement::UpperLimit { upper_limit, .. } => format!("< {}", limit(upper_limit, true)),
        Measurement::Missing { .. } => NO_NUMBER.to_owned(),
    }
}

/// The same, with the reason beside the dash where it is missing: `– (no redshift or
/// distance given)`.
pub fn measurement_or_reason(shown: Measurement) -> String {
    match shown {
        Measurement::Missing { missing } => format!("{NO_NUMBER} ({})", reason(missing)),
        present => measurement(present),
    }
}

/// A bare number with this many significant digits (1 to 17): `12.3`, `1.23e25`, `0`.
pub fn significant(value: f64, digits: i32) -> String {
    if !value.is_finite() {
        return NO_NUMBER.to_owned();
    }
    if value == 0.0 {
        return "0".to_owned();
    }
    let digits = digits.clamp(1, 17);
    let leading = leading_digit(value, digits);
    if (-3..6).contains(&leading) {
        fixed(value, digits - 1 - leading)
    } else {
        let mantissa = shift(value, -leading).unwrap_or(value);
        format!("{}e{}", fixed(mantissa, digits - 1), sign(&leading.to_string()))
    }
}

/// Why a number is missing, as a phrase.
pub const fn reason(because: Because) -> &'static str {
    match because {
        Because::NoBeam => "beam not known",
        Because::NoPixelScale => "no pixel scale given",
        Because::NoFluxUnit => "no flux unit given",
        Because::NoRedshift => "no redshift or distance given",
        Because::NoFrequency => "no frequency given",
        Because::NoCoordinates => "no sky coordinates given",
        Because::NoSource => "no source found",
        Because::NoCore => "no core found",
        Because::Unresolved => "not resolved by the beam",
        Because::SideNotDetected => "side not detected",
        Because::JetNotDetected => "jet not detected",
        Because::NoHotspot => "no hot spot on this side",
        Because::NoLobe => "no lobe beyond the jet",
        Because::NoRoomForStrip => "no room between core and lobe",
        Because::BothSidesBelowNoise => "both sides below the noise",
        Because::BlankPixels => "too many blank pixels",
        Because::OutOfDomain => "no solution for what was measured",
        Because::NoNoiseEstimate => "noise not known",
        Because::TooFewFeatures => "too few features",
        Because::LeavesMap => "the source leaves the map",
        Because::CoreUnsure => "the core is too unsure; give it or the host",
        Because::NotRead => "file not read",
        Because::NotImplemented => "not measured by this version",
    }
}

/// Unit for angles, chosen once for a map so that all its numbers share it.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub enum AngularUnit {
    /// Seconds of arc.
    Arcsec,
    /// Thousandths of an arcsec.
    Mas,
    /// Millionths of an arcsec.
    MicroArcsec,
}

impl AngularUnit {
    /// The unit for a map whose beam (or, without one, whose source) has this size in
    /// arcsec: mas below 0.1 arcsec, µas below 1e-4 arcsec.
    pub fn for_size(size_arcsec: f64) -> Self {
        let size = size_arcsec.abs();
        if size > 0.0 && size < 1e-4 {
            Self::MicroArcsec
        } else if size > 0.0 && size < 0.1 {
            Self::Mas
        } else {
            Self::Arcsec
        }
    }

    /// How many of this unit make one arcsec.
    pub const fn per_arcsec(self) -> f64 {
        match self {
            Self::Arcsec => 1.0,
            Self::Mas => 1e3,
            Self::MicroArcsec => 1e6,
        }
    }

    /// The unit's symbol.
    pub const fn symbol(self) -> &'static str {
        match self {
            Self::Arcsec => "arcsec",
            Self::Mas => "mas",
            Self::MicroArcsec => "µas",
        }
    }
}

/// Unit for flux densities and, per beam, for brightnesses.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub enum FluxUnit {
    /// Jansky.
    Jy,
    /// Thousandths of a jansky.
    MilliJy,
    /// Millionths of a jansky.
    MicroJy,
}

impl FluxUnit {
    /// The unit for a number of this size in mJy: Jy from 1000 mJy, µJy below 1 mJy, mJy for
    /// zero.
    pub fn for_size(flux_density_mjy: f64) -> Self {
        let size = flux_density_mjy.abs();
        if size >= 1e3 {
            Self::Jy
        } else if size > 0.0 && size < 1.0 {
            Self::MicroJy
        } else {
            Self::MilliJy
        }
    }

    /// The unit for a measurement in mJy: by its value or limit.
    pub fn for_measurement(measured_mjy: Measurement) -> Self {
        match measured_mjy {
            Measurement::Value { value, minus, plus, .. } => {
                Self::for_size(value.abs().max(minus).max(plus))
            }
            Measurement::LowerLimit { lower_limit, .. } => Self::for_size(lower_limit),
            Measurement::UpperLimit { upper_limit, .. } => Self::for_size(upper_limit),
            Measurement::Missing { .. } => Self::MilliJy,
        }
    }

    /// How many of this unit make one mJy.
    pub const fn per_mjy(self) -> f64 {
        match self {
            Self::Jy => 1e-3,
            Self::MilliJy => 1.0,
            Self::MicroJy => 1e3,
        }
    }

    /// The unit's symbol.
    pub const fn symbol(self) -> &'static str {
        match self {
            Self::Jy => "Jy",
            Self::MilliJy => "mJy",
            Self::MicroJy => "µJy",
        }
    }
}

/// An angle in arcsec as text with the unit: `12.3 ± 1.2 mas`; a dash alone where missing.
pub fn angle(measured_arcsec: Measurement, unit: AngularUnit) -> String {
    with_unit(measured_arcsec.scaled(unit.per_arcsec()), unit.symbol())
}

/// A flux density in mJy as text with the unit that suits it: `1.23 ± 0.12 Jy`.
pub fn flux_density(measured_mjy: Measurement) -> String {
    let unit = FluxUnit::for_measurement(measured_mjy);
    with_unit(measured_mjy.scaled(unit.per_mjy()), unit.symbol())
}

/// A measurement with a unit behind it; a dash alone where missing.
pub fn with_unit(shown: Measurement, unit: &str) -> String {
    let text = measurement(shown);
    if shown.is_missing() || unit.is_empty() { text } else { format!("{text} {unit}") }
}

/// A value with its errors.
fn value_with_errors(value: f64, minus: f64, plus: f64) -> String {
    let (smaller, larger) = (minus.min(plus), minus.max(plus));
    if larger == 0.0 {
        return significant(value, 6);
    }
    // The finer of the two errors sets the decimals, within a factor ten of the coarser.
    let sets = smaller.max(0.1 * larger);
    let last = leading_digit(sets, 2) - 1;
    // The exponent comes from the number as it will be read, after rounding.
    let size = round_to(value, last).abs().max(round_to(larger, last));
    let leading = leading_digit(size, 17);
    if (-3..6).contains(&leading) {
        errors_beside(&fixed(value, -last), &fixed(minus, -last), &fixed(plus, -last))
    } else {
        let part = |x: f64| fixed(shift(x, -leading).unwrap_or(x), leading - last);
        let text = errors_beside(&part(value), &part(minus), &part(plus));
        format!("({text})e{}", sign(&leading.to_string()))
    }
}

/// One ± where both errors read alike, else both with their signs.
fn errors_beside(value: &str, minus: &str, plus: &str) -> String {
    if minus == plus { format!("{value} ± {plus}") } else { format!("{value} +{plus} −{minus}") }
}

/// A limit with three significant digits, rounded up or down.
fn limit(bound: f64, up: bool) -> String {
    if bound == 0.0 || !bound.is_finite() {
        return significant(bound, 3);
    }
    // All digits of a double, so that 9.999 counts as a number with one digit before the point.
    let last = leading_digit(bound, 17) - 2;
    // Rounded to the nearest first and compared as read back: a bound that is already short
    // (0.29) stays as it is, although 0.29 · 100 is not 29.
    let nearest = round_to(bound, last);
    let unit = shift(1.0, last).unwrap_or(0.0);
    let kept = if up && nearest < bound {
        round_to(nearest + unit, last)
    } else if !up && nearest > bound {
        round_to(nearest - unit, last)
    } else {
        nearest
    };
    // 9.996 rounded up is 10.00: one digit fewer, still on the safe side.
    significant(kept, 3)
}

/// Power of ten of the first digit, after rounding to so many significant digits.
fn leading_digit(value: f64, digits: i32) -> i32 {
    let precision = usize::try_from(digits - 1).unwrap_or(0);
    let text = format!("{value:.precision$e}");
    text.split_once('e').and_then(|(_, exponent)| exponent.parse().ok()).unwrap_or(0)
}

/// value · 10^power through the decimal text, which rounds once; `None` beyond all numbers.
fn shift(value: f64, power: i32) -> Option<f64> {
    let text = format!("{value:e}");
    let (mantissa, exponent) = text.split_once('e')?;
    let exponent: i32 = exponent.parse().ok()?;
    let shifted: f64 = format!("{mantissa}e{}", exponent.saturating_add(power)).parse().ok()?;
    shifted.is_finite().then_some(shifted)
}

/// Rounded to a multiple of 10^last.
fn round_to(value: f64, last: i32) -> f64 {
    if last > 0 {
        shift(value, -last).and_then(|count| shift(count.round(), last)).unwrap_or(value)
    } else {
        // At most 340 decimals: beyond them every double is exact.
        let decimals = usize::try_from(-last).unwrap_or(0).min(340);
        format!("{value:.decimals$}").parse().unwrap_or(value)
    }
}

/// Fixed notation with so many decimals; negative: rounded to tens, hundreds and so on.
fn fixed(value: f64, decimals: i32) -> String {
    let places = usize::try_from(decimals).unwrap_or(0).min(340);
    sign(&format!("{:.places$}", round_to(value, -decimals)))
}

/// The typographic minus; none before a zero.
fn sign(text: &str) -> String {
    match text.strip_prefix('-') {
        Some(rest) if rest.chars().any(|c| c.is_ascii_digit() && c != '0') => format!("−{rest}"),
        Some(rest) => rest.to_owned(),
        None => text.to_owned(),
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    fn value(value: f64, minus: f64, plus: f64) -> String {
        measurement(Measurement::value(value, minus, plus))
    }

    #[test]
    fn values_are_rounded_to_two_digits_of_their_error() {
        let cases = [
            (12.3412, 0.5611, "12.34 ± 0.56"),
            (12.3412, 5.611, "12.3 ± 5.6"),
            (1234.1, 56.1, "1234 ± 56"),
            (12_345.0, 567.0, "12350 ± 570"),
            (0.123_456, 0.001_23, "0.1235 ± 0.0012"),
            // Carries: 9.996 stays, 9.99996 becomes 10.00; an error of 0.0996 becomes 0.10.
            (9.996, 0.05, "9.996 ± 0.050"),
            (9.999_96, 0.05, "10.000 ± 0.050"),
            (9.996, 0.5, "10.00 ± 0.50"),
            (1.0, 0.0996, "1.00 ± 0.10"),
            (99.96, 9.96, "100 ± 10"),
            (0.0, 0.5, "0.00 ± 0.50"),
            (-0.001, 0.5, "0.00 ± 0.50"),
            (-12.3412, 0.5611, "−12.34 ± 0.56"),
            // The error decides where the value is nothing.
            (2e-5, 1e-2, "0.000 ± 0.010"),
            (1.0, 1e8, "(0.0 ± 1.0)e8"),
        ];
        for (number, error, expected) in cases {
            assert_eq!(value(number, error, error), expected);
        }
    }

    #[test]
    fn very_large_and_very_small_numbers_get_an_exponent() {
        assert_eq!(value(1.234e25, 0.12e25, 0.12e25), "(1.23 ± 0.12)e25");
        assert_eq!(value(9.9996e25, 0.05e25, 0.05e25), "(1.0000 ± 0.0050)e26");
        assert_eq!(value(1.234e-9, 0.12e-9, 0.12e-9), "(1.23 ± 0.12)e−9");
        assert_eq!(value(-1.234e25, 0.12e25, 0.2e25), "(−1.23 +0.20 −0.12)e25");
        // The border is a million after rounding, and a thousandth.
        assert_eq!(value(999_999.6, 5.0, 5.0), "999999.6 ± 5.0");
        assert_eq!(value(999_999.96, 5.0, 5.0), "(1.0000000 ± 0.0000050)e6");
        assert_eq!(value(0.001, 0.0001, 0.0001), "0.00100 ± 0.00010");
        assert_eq!(value(0.0009, 0.0001, 0.0001), "(9.0 ± 1.0)e−4");
        assert_eq!(value(1e300, 1e299, 1e299), "(1.00 ± 0.10)e300");
        assert_eq!(value(f64::MAX, 1e300, 1e300), "(1.797693135 ± 0.000000010)e308");
        assert_eq!(value(5e-324, 5e-324, 5e-324), "(5.0 ± 5.0)e−324");
    }

    #[test]
    fn unequal_errors_share_their_decimals() {
        assert_eq!(value(12.3, 0.4, 0.6), "12.30 +0.60 −0.40");
        assert_eq!(value(12.3, 0.04, 6.0), "12.30 +6.00 −0.04");
        // A tenth of the larger one's second digit is fine enough.
        assert_eq!(value(12.3, 0.000_4, 6.0), "12.30 +6.00 −0.00");
        assert_eq!(value(12.3, 0.0, 6.0), "12.30 +6.00 −0.00");
        // They read alike: one sign.
        assert_eq!(value(12.3, 0.4001, 0.4002), "12.30 ± 0.40");
        assert_eq!(value(12.5, 0.0, 0.0), "12.5000");
    }

    #[test]
    fn limits_are_rounded_to_the_side_that_keeps_them_true() {
        let lower = |bound| measurement(Measurement::lower_limit(bound, 0.95));
        let upper = |bound| measurement(Measurement::upper_limit(bound, 0.95));
        assert_eq!(lower(12.39), "> 12.3");
        assert_eq!(upper(12.31), "< 12.4");
        assert_eq!(lower(0.29), "> 0.290");
        assert_eq!(upper(0.29), "< 0.290");
        assert_eq!(upper(9.991), "< 10.0");
        assert_eq!(upper(99.91), "< 100");
        assert_eq!(lower(9.999), "> 9.99");
        assert_eq!(lower(1000.9), "> 1000");
        assert_eq!(lower(1009.0), "> 1000");
        assert_eq!(upper(1001.0), "< 1010");
        assert_eq!(lower(-0.3334), "> −0.334");
        assert_eq!(upper(-0.3336), "< −0.333");
        assert_eq!(lower(0.0), "> 0");
        assert_eq!(lower(1.239e25), "> 1.23e25");
        assert_eq!(upper(1.231e-7), "< 1.24e−7");
        assert_eq!(upper(999_999.0), "< 1.00e6");
    }

    #[test]
    fn a_limit_as_read_is_never_stricter_than_it_was() {
        // Whole domain: 36 decades, both signs, read back as a number.
        for i in 0..20_000 {
            let size = 10f64.powf(-18.0 + 36.0 * f64::from(i) / 20_000.0);
            for bound in [size, -size] {
                let read = |text: &str| -> f64 {
                    text[2..].replace('−', "-").parse().expect("a number")
                };
                let low = read(&measurement(Measurement::lower_limit(bound, 0.95)));
                let high = read(&measurement(Measurement::upper_limit(bound, 0.95)));
                assert!(low <= bound && bound <= high, "{bound}: {low} {high}");
                // Three digits: off by at most one per cent.
                assert!(high - low <= 0.0101 * size, "{bound}: {low} {high}");
            }
        }
    }

    #[test]
    fn a_value_as_read_lies_within_a_twentieth_of_its_error() {
        for i in 0..5_000 {
            let error = 10f64.powf(-12.0 + 24.0 * f64::from(i) / 5_000.0);
            for number in [0.3 * error, 7.77 * error, -123.4 * error] {
                let text = value(number, error, error).replace('−', "-");
                let (bracket, power) = match text.strip_prefix('(') {
                    Some(rest) => rest.split_once(")e").expect("an exponent"),
                    None => (text.as_str(), "0"),
                };
                let (shown, shown_error) = bracket.split_once(" ± ").expect("an error");
                let read =
                    |part: &str| -> f64 { format!("{part}e{power}").parse().expect("a number") };
                assert!((read(shown) - number).abs() <= 0.0505 * error, "{number}: {text}");
                assert!((read(shown_error) - error).abs() <= 0.0505 * error, "{error}: {text}");
            }
        }
    }

    #[test]
    fn bare_numbers_have_the_digits_asked_for() {
        assert_eq!(significant(12.345, 3), "12.3");
        assert_eq!(significant(-9.996, 3), "−10.0");
        assert_eq!(significant(1.2345e25, 3), "1.23e25");
        assert_eq!(significant(9.996e25, 3), "1.00e26");
        assert_eq!(significant(0.001, 3), "0.00100");
        assert_eq!(significant(0.000_999_9, 3), "0.00100");
        assert_eq!(significant(0.000_99, 3), "9.90e−4");
        assert_eq!(significant(999_999.0, 3), "1.00e6");
        assert_eq!(significant(123_456.0, 3), "123000");
        assert_eq!(significant(0.0, 3), "0");
        assert_eq!(significant(-0.0, 3), "0");
        assert_eq!(significant(f64::NAN, 3), "–");
    }

    #[test]
    fn what_is_missing_is_a_dash_with_its_reason() {
        let missing = Measurement::missing(Because::NoRedshift);
        assert_eq!(measurement(missing), "–");
        assert_eq!(measurement_or_reason(missing), "– (no redshift or distance given)");
        assert_eq!(angle(missing, AngularUnit::Mas), "–");
    }

    #[test]
    fn units_suit_the_size() {
        assert_eq!(AngularUnit::for_size(1.5), AngularUnit::Arcsec);
        assert_eq!(AngularUnit::for_size(0.1), AngularUnit::Arcsec);
        assert_eq!(AngularUnit::for_size(0.099), AngularUnit::Mas);
        assert_eq!(AngularUnit::for_size(1e-4), AngularUnit::Mas);
        assert_eq!(AngularUnit::for_size(2e-5), AngularUnit::MicroArcsec);
        assert_eq!(AngularUnit::for_size(4000.0), AngularUnit::Arcsec);
        assert_eq!(AngularUnit::for_size(0.0), AngularUnit::Arcsec);
        let size = Measurement::symmetric(0.0123, 0.0012);
        assert_eq!(angle(size, AngularUnit::Mas), "12.3 ± 1.2 mas");
        assert_eq!(flux_density(Measurement::symmetric(1234.0, 120.0)), "1.23 ± 0.12 Jy");
        assert_eq!(flux_density(Measurement::symmetric(12.34, 1.2)), "12.3 ± 1.2 mJy");
        assert_eq!(flux_density(Measurement::upper_limit(0.0456, 0.95)), "< 45.6 µJy");
        assert_eq!(flux_density(Measurement::symmetric(-0.2, 0.1)), "−200 ± 100 µJy");
    }
}
