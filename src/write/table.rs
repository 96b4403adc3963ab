//! A record for people: one page a map, or one line a map where there are several. Rounding
//! and units are those of [`crate::write::number`].

use crate::flags::Severity;
use crate::measurement::{Bare, Measurement, OrMissing};
use crate::record::{FailedRecord, FrClassName, MapRecord, Record, Role, SideRecord, Status};
use crate::write::number::{
    AngularUnit, NO_NUMBER, angle, flux_density, measurement, measurement_or_reason, reason,
    significant, with_unit,
};

/// Width of the column of names.
const NAME_WIDTH: usize = 26;
/// Width of a column of values where there are two.
const VALUE_WIDTH: usize = 26;
/// Width to which sentences are wrapped.
const TEXT_WIDTH: usize = 92;

/// One page for one map.
pub fn full(record: &Record) -> String {
    match record {
        Record::Failed(record) => failed(record),
        Record::Map(record) => page(record),
    }
}

/// Head of the lines of [`summary_row`].
pub fn summary_head() -> String {
    format!(
        "{:<18} {:<12} {:>18} {:>14} {:>18} {:<10} {}\n",
        "map", "status", "largest size", "axis PA / deg", "R", "FR class", "cautions"
    )
}

/// One line for one map.
pub fn summary_row(record: &Record) -> String {
    match record {
        Record::Failed(record) => {
            format!("{:<18} {:<12} {}\n", record.id, "failed", record.error.message)
        }
        Record::Map(record) => {
            let unit = angular_unit(record);
            let cautions: Vec<&str> = record
                .flags
                .iter()
                .filter(|f| f.severity == Severity::Caution)
                .map(|f| f.code.as_str())
                .collect();
            let class = match record.status {
                Status::NoDetection => NO_NUMBER,
                _ => class(record.source.fr_class.class),
            };
            let line = format!(
                "{:<18} {:<12} {:>18} {:>14} {:>18} {:<10} {}",
                record.id,
                status(record.status),
                size(
                    record,
                    record.source.largest_angular_size_arcsec,
                    record.source.largest_size_px,
                    unit
                ),
                measurement(record.source.position_angle_deg),
                measurement(record.brightness.jet_to_counter_jet_ratio),
                class,
                cautions.join(" "),
            );
            format!("{}\n", line.trim_end())
        }
    }
}

fn failed(record: &FailedRecord) -> String {
    format!("{}  ({})\n  failed: {}\n", record.id, record.file, record.error.message)
}

fn status(status: Status) -> &'static str {
    match status {
        Status::Measured => "measured",
        Status::Unresolved => "unresolved",
        Status::NoDetection => "no detection",
        Status::Failed => "failed",
    }
}

fn class(class: FrClassName) -> &'static str {
    match class {
        FrClassName::I => "I",
        FrClassName::II => "II",
        FrClassName::Hybrid => "hybrid",
        FrClassName::Unresolved => "unresolved",
        FrClassName::Undecided => "undecided",
    }
}

fn role(role: Role) -> &'static str {
    match role {
        Role::Jet => "jet",
        Role::CounterJet => "counter-jet",
        Role::First => "first",
        Role::Second => "second",
    }
}

/// The unit that suits the whole page: the beam's, or the source's size.
fn angular_unit(record: &MapRecord) -> AngularUnit {
    let size = match record.source.largest_angular_size_arcsec {
        Measurement::Value { value, .. } => Some(value),
        Measurement::LowerLimit { lower_limit, .. } => Some(lower_limit),
        _ => None,
    };
    let beam = record.map.get("beam_major_arcsec").and_then(|d| d.value.as_f64());
    size.or(beam).map_or(AngularUnit::Arcsec, AngularUnit::for_size)
}

/// A size on the sky, or in pixels where the scale is not known.
fn size(record: &MapRecord, arcsec: Measurement, px: Measurement, unit: AngularUnit) -> String {
    let no_scale = !record.map.contains_key("pixel_scale_arcsec");
    if no_scale && !px.is_missing() { with_unit(px, "px") } else { angle(arcsec, unit) }
}

struct Page {
    text: String,
}

impl Page {
    fn head(&mut self, name: &str) {
        self.text += &format!("\n{name}\n");
    }

    fn row(&mut self, name: &str, value: &str) {
        self.text += &format!("  {name:<NAME_WIDTH$}{value}\n");
    }

    fn pair(&mut self, name: &str, values: [String; 2]) {
        let line = format!("  {name:<NAME_WIDTH$}{:<VALUE_WIDTH$}{}", values[0], values[1]);
        self.text += line.trim_end();
        self.text.push('\n');
    }

    fn sentence(&mut self, mark: &str, text: &str) {
        let mut line = format!("  {mark} ");
        for word in text.split(' ') {
            if line.chars().count() + word.chars().count() + 1 > TEXT_WIDTH {
                self.text += line.trim_end();
                self.text.push('\n');
                line = "    ".to_owned();
            }
            line += word;
            line.push(' ');
        }
        self.text += line.trim_end();
        self.text.push('\n');
    }
}

fn bare(value: &Bare, digits: i32, unit: &str) -> String {
    match value {
        OrMissing::Present(v) if unit.is_empty() => significant(*v, digits),
        OrMissing::Present(v) => format!("{} {unit}", significant(*v, digits)),
        OrMissing::Missing { missing } => format!("{NO_NUMBER} ({})", reason(*missing)),
    }
}

fn shown(value: Measurement, unit: &str) -> String {
    if value.is_missing() { measurement_or_reason(value) } else { with_unit(value, unit) }
}

fn shown_angle(value: Measurement, unit: AngularUnit) -> String {
    if value.is_missing() { measurement_or_reason(value) } else { angle(value, unit) }
}

fn shown_flux(value: Measurement) -> String {
    if value.is_missing() { measurement_or_reason(value) } else { flux_density(value) }
}

fn page(record: &MapRecord) -> String {
    let mut page =
        Page { text: format!("{}  ({})  {}\n", record.id, record.file, status(record.status)) };
    let unit = angular_unit(record);
    noise(&mut page, record);
    if record.status != Status::NoDetection {
        source(&mut page, record, unit);
        sides(&mut page, record, unit);
        brightness(&mut page, record, unit);
        physics(&mut page, record);
    }
    flags(&mut page, record);
    page.text
}

fn noise(page: &mut Page, record: &MapRecord) {
    page.head("noise");
    let noise = &record.noise;
    let rms = match noise.rms_mjy_per_beam {
        OrMissing::Present(v) => format!("{}/beam", flux_density_bare(v)),
        OrMissing::Missing { missing } => format!("{NO_NUMBER} ({})", reason(missing)),
    };
    page.row("rms at the core", &rms);
    if record.status != Status::NoDetection {
        page.row("dynamic range", &bare(&noise.dynamic_range, 3, ""));
    }
    page.row("correlated over", &bare(&noise.correlation_fwhm_px, 3, "px"));
}

/// A bare flux density with a fitting unit and three digits.
fn flux_density_bare(mjy: f64) -> String {
    use crate::write::number::FluxUnit;
    let unit = FluxUnit::for_size(mjy);
    format!("{} {}", significant(mjy * unit.per_mjy(), 3), unit.symbol())
}

fn source(page: &mut Page, record: &MapRecord, unit: AngularUnit) {
    let s = &record.source;
    let core = &record.core;
    page.head("core");
    match &core.position {
        OrMissing::Present(p) => {
            let error = match core.position_error_arcsec {
                OrMissing::Present(e) if e > 0.0 => {
                    format!(" ± {} {}", significant(e * unit.per_arcsec(), 2), unit.symbol())
                }
                _ => String::new(),
            };
            page.row("position", &format!("x {:.2} px, y {:.2} px{error}", p.x_px, p.y_px));
            if let (OrMissing::Present(ra), OrMissing::Present(dec)) = (p.ra_deg, p.dec_deg) {
                page.row("", &format!("RA {ra:.6}°, Dec {dec:+.6}°"));
            }
        }
        OrMissing::Missing { missing } => {
            page.row("position", &format!("{NO_NUMBER} ({})", reason(*missing)))
        }
    }
    let basis = serde_json::to_value(core.basis)
        .ok()
        .and_then(|v| v.as_str().map(str::to_owned))
        .unwrap_or_default();
    page.row("chosen by", &format!("{basis}, confidence {:.2}", core.confidence));
    page.row("flux density", &shown_flux(core.flux_density_mjy));

    page.head("source");
    page.row("total flux density", &shown_flux(s.total_flux_density_mjy));
    page.row("peak over local rms", &bare(&s.peak_signal_to_noise, 3, ""));
    page.row("largest size", &size(record, s.largest_angular_size_arcsec, s.largest_size_px, unit));
    page.row("  beam taken off", &shown_angle(s.largest_angular_size_deconvolved_arcsec, unit));
    page.row("hot-spot separation", &shown_angle(s.hotspot_separation_arcsec, unit));
    if !s.component_separation_arcsec.is_missing() {
        page.row("component separation", &shown_angle(s.component_separation_arcsec, unit));
    }
    page.row("axis position angle", &shown(s.position_angle_deg, "°"));
    page.row("axial ratio", &shown(s.axial_ratio, ""));
    page.row("bend", &shown(s.bend_deg, "°"));
    page.row("arm-length ratio", &shown(s.arm_length_ratio, ""));
    page.row(
        "FR ratio",
        &format!(
            "{}  (beam taken off: {})",
            measurement(s.fr_ratio),
            measurement(s.fr_ratio_deconvolved)
        ),
    );
    let probability = s
        .fr_class
        .probability
        .get(&FrClassName::II)
        .map_or(String::new(), |p| format!("  (P(II) = {p:.2} from the ratio's error alone)"));
    page.row("FR class", &format!("{}{probability}", class(s.fr_class.class)));
    page.row("core prominence", &format!("{}  (core over the rest)", shown(s.core_prominence, "")));
}

fn sides(page: &mut Page, record: &MapRecord, unit: AngularUnit) {
    let sides = &record.sides;
    page.head("sides");
    page.pair("", [role(sides[0].role).to_owned(), role(sides[1].role).to_owned()]);
    let mut both = |name: &str, value: &dyn Fn(&SideRecord) -> String| {
        page.pair(name, [value(&sides[0]), value(&sides[1])]);
    };
    both("position angle, end", &|s| with_unit(s.end_position_angle_deg, "°"));
    both("  two beams out", &|s| with_unit(s.inner_position_angle_deg, "°"));
    both("length", &|s| size(record, s.length_arcsec, s.length_px, unit));
    if sides.iter().any(|s| !s.length_kpc.is_missing()) {
        both("  projected", &|s| with_unit(s.length_kpc, "kpc"));
    }
    both("flux density", &|s| flux_density(s.flux_density_mjy));
    both("hot spot at", &|s| {
        s.hotspot.present().map_or(NO_NUMBER.to_owned(), |h| angle(h.distance_arcsec, unit))
    });
    both("lobe flux density", &|s| {
        s.lobe.present().map_or(NO_NUMBER.to_owned(), |l| flux_density(l.flux_density_mjy))
    });
    both("jet seen in the strip", &|s| {
        let answer = if s.jet.detected { "yes" } else { "no" };
        if s.jet.flux_density_mjy.is_missing() && !s.jet.detected { NO_NUMBER } else { answer }
            .to_owned()
    });
}

fn brightness(page: &mut Page, record: &MapRecord, unit: AngularUnit) {
    let b = &record.brightness;
    page.head("jet against counter-jet");
    let ratio = match b.jet_to_counter_jet_ratio {
        Measurement::Value { ci95: Some([low, high]), .. } => format!(
            "{}  (95 %: {} to {})",
            measurement(b.jet_to_counter_jet_ratio),
            significant(low, 3),
            significant(high, 3)
        ),
        Measurement::LowerLimit { confidence, .. } | Measurement::UpperLimit { confidence, .. } => {
            format!(
                "{}  ({:.0} % confidence)",
                measurement(b.jet_to_counter_jet_ratio),
                100.0 * confidence
            )
        }
        other => measurement_or_reason(other),
    };
    page.row("brightness ratio R", &ratio);
    if let OrMissing::Present(aperture) = &b.aperture {
        page.row(
            "strip fluxes",
            &format!(
                "{} and {}  (noise only)",
                flux_density(b.jet_flux_density_mjy),
                flux_density(b.counter_jet_flux_density_mjy)
            ),
        );
        page.row("sidedness", &format!("{} sigma", bare(&b.sidedness_sigma, 2, "")));
        let numbers =
            match (aperture.inner_arcsec, aperture.outer_arcsec, aperture.half_width_arcsec) {
                (OrMissing::Present(i), OrMissing::Present(o), OrMissing::Present(w)) => {
                    let f = unit.per_arcsec();
                    format!(
                        "from {} to {}, half width {} {}",
                        significant(i * f, 3),
                        significant(o * f, 3),
                        significant(w * f, 2),
                        unit.symbol()
                    )
                }
                _ => format!(
                    "from {} to {}, half width {} px",
                    significant(aperture.inner_px, 3),
                    significant(aperture.outer_px, 3),
                    significant(aperture.half_width_px, 2)
                ),
            };
        page.row("strip", &numbers);
    }
}

fn physics(page: &mut Page, record: &MapRecord) {
    let p = &record.physics;
    let b = &p.beaming;
    page.head("what that allows");
    if b.beta_cos_theta.is_missing() {
        page.row("speed × cos(angle)", &measurement_or_reason(b.beta_cos_theta));
    } else {
        page.row(
            "speed × cos(angle) / c",
            &format!("{}  (exponent {})", measurement(b.beta_cos_theta), bare(&b.exponent, 3, "")),
        );
        page.row("angle to line of sight", &bound("at most", b.viewing_angle_max_deg, "°"));
        page.row("speed / c", &bound("at least", b.beta_min, ""));
        page.row("Lorentz factor", &bound("at least", b.lorentz_factor_min, ""));
    }
    page.row("projected length", &shown(p.projected_length_kpc, "kpc"));
    page.row("luminosity", &shown(p.luminosity_w_per_hz, "W/Hz"));
}

/// A bound that follows from a value (`at least 0.21 ± 0.01`) or from a limit
/// (`at least 0.52 (95 %)`).
fn bound(words: &str, value: Measurement, unit: &str) -> String {
    let text = with_unit(value, unit);
    match value {
        Measurement::LowerLimit { confidence, .. } | Measurement::UpperLimit { confidence, .. } => {
            let number = text.trim_start_matches(['>', '<', ' ']);
            format!("{words} {number} ({:.0} %)", 100.0 * confidence)
        }
        Measurement::Value { .. } => format!("{words} {text}"),
        Measurement::Missing { .. } => measurement_or_reason(value),
    }
}

fn flags(page: &mut Page, record: &MapRecord) {
    for (severity, name, mark) in
        [(Severity::Caution, "cautions", "!"), (Severity::Note, "notes", "-")]
    {
        let mut chosen = record.flags.iter().filter(|f| f.severity == severity).peekable();
        if chosen.peek().is_some() {
            page.head(name);
        }
        for flag in chosen {
            page.sentence(mark, &flag.message);
        }
    }
}
