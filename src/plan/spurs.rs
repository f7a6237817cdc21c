//! Boundary, anchors, clocks, victims and limits.

use crate::base::{Dimension, Exact, Frequency, parse_quantity};
use crate::tones::Mechanism;

use super::checked::{Anchor, AnchorPlace, Boundary, Clock, Guard, Limits, LoopEdge, Mask, Victim};
use super::reader::{Located, Reader, Section, describe};

/// Margin when the plan gives none \[dB\].
const DEFAULT_MARGIN_DB: f64 = 6.0;
/// Lower integration limit when the plan gives none \[Hz\].
const DEFAULT_INTEGRATION_HZ: f64 = 1e3;
/// Upper end of integration and span when the plan gives none, unless half the PFD frequency is lower \[Hz\].
pub const DEFAULT_SPAN_HZ: f64 = 10e6;

/// Reads `[boundary]`.
pub fn boundary(reader: &mut Reader, section: &Section, edge: LoopEdge) -> Boundary {
    let guard = guard(reader, section).unwrap_or(Guard::LoopEdge);
    let largest_q = reader.whole(section, "largest_q").map_or(3, |found| found.value);
    let harmonics = reader.whole(section, "harmonics").map_or(5, |found| found.value);
    Boundary { edge, guard, largest_q, harmonics }
}

fn guard(reader: &mut Reader, section: &Section) -> Option<Guard> {
    let value = reader.plain(section, "guard")?;
    let path = section.key("guard");
    let Some(typed) = value.get_ref().as_str() else {
        let text = format!(
            "found {}, expected a frequency or a share of the PFD frequency such as \"1.25 %\"",
            describe(value.get_ref())
        );
        reader.problem(&path, &value.span(), text);
        return None;
    };
    let guard = if typed.trim_end().ends_with('%') {
        parse_quantity(typed, Dimension::Ratio).map(Guard::ShareOfPfd)
    } else {
        parse_quantity(typed, Dimension::Frequency).map(|hz| Guard::Offset(Frequency::from_hz(hz)))
    };
    match guard {
        Ok(guard) => {
            let size = match guard {
                Guard::Offset(offset) => offset.hz(),
                Guard::ShareOfPfd(share) => share,
                Guard::LoopEdge => Exact::ZERO,
            };
            if size.sign() < 0 {
                reader.problem(&path, &value.span(), format!("found \"{typed}\", must be zero or above"));
                return None;
            }
            Some(guard)
        }
        Err(error) => {
            reader.problem(
                &path,
                &value.span(),
                format!("{error}; or a share of the PFD frequency such as \"1.25 %\""),
            );
            None
        }
    }
}

/// Reads one `[[anchor]]`, or the anchor of a clock.
pub fn anchor(reader: &mut Reader, section: &Section, first_output_divider: u64) -> Option<Anchor> {
    let mechanism = match reader.word(section, "mechanism").map(|found| found.value) {
        Some("detector") => Some(Mechanism::Detector),
        Some("tuning") => Some(Mechanism::Tuning),
        Some("output") => Some(Mechanism::Output),
        _ => None,
    };
    let level = reader.real(section, "level");
    let at = reader.frequency(section, "at");
    let offset = reader.frequency(section, "offset");
    let place = match (at, offset) {
        (Some(channel), None) => {
            if let Some(extra) = section.value("output_divider") {
                reader.problem(&section.key("output_divider"), &extra.span(), "belongs to offset, not to at");
            }
            Some(AnchorPlace::Channel(channel.value))
        }
        (None, Some(offset)) => {
            let output_divider =
                reader.whole(section, "output_divider").map_or(first_output_divider, |found| found.value);
            Some(AnchorPlace::Offset { offset: offset.value, output_divider })
        }
        (Some(_), Some(offset)) => {
            reader.problem(&section.key("offset"), &offset.span, "give at or offset, not both");
            None
        }
        (None, None) => {
            if section.value("at").is_none() && section.value("offset").is_none() {
                reader.problem(&section.path, &section.head(), "missing: at (a channel) or offset (a tone offset)");
            }
            None
        }
    };
    let q = reader.whole(section, "q").map_or(1, |found| found.value);
    let roll_off_db = reader.real(section, "roll_off").unwrap_or(0.0);
    let basis = reader.basis.get(&section.key("level")).copied();
    Some(Anchor {
        mechanism: mechanism?,
        level_dbc: level?,
        place: place?,
        q,
        roll_off_db,
        basis: basis.unwrap_or(crate::base::Basis::Assumed),
    })
}

/// Reads one `[[clock]]`.
pub fn clock(reader: &mut Reader, section: &Section, first_output_divider: u64) -> Option<Clock> {
    let name = reader.text(section, "name");
    let frequency = reader.frequency(section, "frequency");
    let anchor = match reader.table(section, "anchor", "anchor") {
        Some(table) => anchor(reader, &table, first_output_divider),
        None => {
            if section.value("anchor").is_none() {
                reader.default(section.key("anchor"), "unknown level");
            }
            None
        }
    };
    Some(Clock { name: name?.value, frequency: frequency?.value, anchor })
}

/// Reads one `[[victim]]`.
pub fn victim(reader: &mut Reader, section: &Section) -> Option<Victim> {
    let name = reader.text(section, "name");
    let to_hz = |found: Located<(Exact, Exact)>| (found.value.0.to_f64(), found.value.1.to_f64());
    let offsets_hz = reader.range(section, "offsets").map(to_hz);
    let band_hz = reader.range(section, "band").map(to_hz);
    if section.value("offsets").is_some() == section.value("band").is_some() {
        reader.problem(&section.path, &section.head(), "give offsets or band, one of them");
    }
    let width_hz = reader.real(section, "width").unwrap_or(0.0);
    let limit_dbc = reader.real(section, "limit");
    Some(Victim { name: name?.value, offsets_hz, band_hz, width_hz, limit_dbc })
}

/// Reads `[limits]`, or the limits of a group, whose missing keys are the plan's.
pub fn limits(reader: &mut Reader, section: &Section, pfd_hz: Option<f64>, parent: Option<&Limits>) -> Limits {
    // A group's own limits stand on the plan's: their absent keys are no defaults of the program.
    let given = |name: &str| parent.is_none() || section.value(name).is_some();
    let spur =
        if given("spur") { reader.pairs(section, "spur").map(|found| Mask { points: found.value }) } else { None };
    let margin = if given("margin") { reader.real(section, "margin") } else { None };
    let phase = if given("phase_error") { reader.real(section, "phase_error") } else { None };
    let integration = if given("integration") { reader.range(section, "integration") } else { None };
    if let Some(found) = &integration
        && found.value.0.sign() <= 0
    {
        reader.problem(&section.key("integration"), &found.span, "the lower integration limit must be above zero");
    }
    let default_high = DEFAULT_SPAN_HZ.min(pfd_hz.map_or(f64::INFINITY, |pfd| pfd / 2.0));
    let default_band = (DEFAULT_INTEGRATION_HZ.min(default_high / 10.0), default_high);
    Limits {
        spur: spur.or_else(|| parent.and_then(|limits| limits.spur.clone())),
        margin_db: margin.unwrap_or_else(|| parent.map_or(DEFAULT_MARGIN_DB, |limits| limits.margin_db)),
        phase_error_deg: phase.or_else(|| parent.and_then(|limits| limits.phase_error_deg)),
        integration_hz: integration.map_or_else(
            || parent.map_or(default_band, |limits| limits.integration_hz),
            |found| (found.value.0.to_f64(), found.value.1.to_f64()),
        ),
    }
}
