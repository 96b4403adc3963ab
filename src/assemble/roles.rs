//! Which side comes first in the record, and what the sides are called.

use super::{Findings, MOST_BLANK};
use crate::flags::{self, Flag};
use crate::record::Role;
use crate::source::sides::end_offset;
use crate::units::{SkyOffset, wrap_difference_deg};

/// Which of the model's sides comes first, and both roles.
pub(super) struct Order {
    /// Index into the model's sides of the record's first and second.
    pub(super) index: [usize; 2],
    /// Role of the record's first and second.
    pub(super) role: [Role; 2],
    /// Difference of the strip fluxes over its error, absolute.
    pub(super) sidedness: Option<f64>,
}

impl Order {
    pub(super) fn role_of(&self, model_index: usize) -> Role {
        if self.index[0] == model_index { self.role[0] } else { self.role[1] }
    }
}

/// The jet comes first where the strips tell, or the observer; else the side whose end lies
/// in [0, 180).
pub(super) fn order_sides(findings: &Findings, flags: &mut Vec<Flag>) -> Order {
    let map = findings.map;
    let undecided = |sidedness| {
        let index = findings.model.sides.as_ref().map_or([0, 1], |(ridges, features)| {
            let ends = [0, 1].map(|k| {
                end_offset(&ridges[k], &features[k])
                    .unwrap_or(SkyOffset::polar(1.0, ridges[k].start_deg))
            });
            // Both ends on one half: the side to which the chord points into [0, 180).
            let eastern = ends.map(|end| end.position_angle_deg() < 180.0);
            let chord = ends[0].minus(ends[1]).position_angle_deg() < 180.0;
            let first_leads = if eastern[0] == eastern[1] { chord } else { eastern[0] };
            if first_leads { [0, 1] } else { [1, 0] }
        });
        Order { index, role: [Role::First, Role::Second], sidedness }
    };
    let jet_first = |first: usize, sidedness| Order {
        index: [first, 1 - first],
        role: [Role::Jet, Role::CounterJet],
        sidedness,
    };
    let strips = findings.strips.as_ref();
    let difference = strips.and_then(|s| {
        let pair = &s.pair;
        let variance = pair.variance[0] + pair.variance[1] - 2.0 * pair.covariance;
        (variance > 0.0).then(|| (pair.fluxes[0].sum - pair.fluxes[1].sum) / variance.sqrt())
    });
    let sidedness = difference.map(f64::abs);
    if let (Some(given), Some((ridges, _))) =
        (map.description.jet_side_pa_deg, &findings.model.sides)
    {
        let turn = |k: usize| wrap_difference_deg(ridges[k].start_deg - given).abs();
        return jet_first(usize::from(turn(1) < turn(0)), sidedness);
    }
    // Roles need a core to stand on, strips that are there, and the faint half of the noise.
    let trusted = !findings.core_is_unsure()
        && map.clipped_floor.is_none()
        && strips.is_some_and(|s| s.blank_fraction <= MOST_BLANK);
    match difference {
        Some(d) if trusted && d.abs() >= findings.settings.sidedness_sigma => {
            jet_first(usize::from(d < 0.0), sidedness)
        }
        Some(d) => {
            flags.push(Flag::new(flags::ROLES_UNDECIDED, &[("sigma", d.abs())]));
            undecided(sidedness)
        }
        None => undecided(sidedness),
    }
}
