//! Who a tone hits: receivers, adjacent channels, protected bands named in the plan.

use crate::plan::{ChannelGroup, Plan, Victim};

/// Returns the victims that a tone at an offset from an output frequency \[Hz\] hits, on either side of the carrier.
pub fn hit(plan: &Plan, output_hz: f64, offset_hz: f64) -> impl Iterator<Item = &Victim> {
    plan.victims.iter().filter(move |victim| {
        let half_hz = victim.width_hz / 2.0;
        let overlaps = |range: &(f64, f64), at: f64| range.0 - half_hz <= at && at <= range.1 + half_hz;
        victim.offsets_hz.as_ref().is_some_and(|range| overlaps(range, offset_hz))
            || victim
                .band_hz
                .as_ref()
                .is_some_and(|range| overlaps(range, output_hz + offset_hz) || overlaps(range, output_hz - offset_hz))
    })
}

/// Returns the limit of a tone \[dBc\]: the strictest of the group's mask and the limits of the victims it hits; `None`
/// where none applies.
pub fn limit_dbc(plan: &Plan, group: &ChannelGroup, output_hz: f64, offset_hz: f64) -> Option<f64> {
    let mask = group.limits.spur.as_ref().map(|mask| mask.limit_dbc(offset_hz));
    hit(plan, output_hz, offset_hz).filter_map(|victim| victim.limit_dbc).chain(mask).reduce(f64::min)
}
