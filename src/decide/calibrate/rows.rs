//! Measured rows beside what the plan predicts: which tone a row is, and what it can tell.

use std::collections::BTreeMap;

use super::{CalibratedRow, MechanismResidual};
use crate::assess::{AssessError, Setup, Tone};
use crate::base::Frequency;
use crate::plan::Measured;

/// Where a row's tone is found again: group, place in the group, and the tone's offset \[Hz\].
#[derive(Debug, Clone, Copy, PartialEq)]
pub(super) struct Spot {
    pub group: usize,
    pub place: u64,
    pub channel: Frequency,
    pub offset_hz: f64,
}

/// A row's tone: where it is, the tone as the plan predicts it, the output divider.
pub(super) struct Found {
    pub spot: Spot,
    pub tone: Tone,
    pub output_divider: u64,
}

/// Returns the tone of a row, or why there is none.
pub(super) fn tone_of(setup: &Setup, row: &Measured) -> Result<Result<Found, String>, AssessError> {
    let plan = setup.plan();
    let Some((group, place)) = plan.locate(row.channel, row.group.as_deref()) else {
        return Ok(Err("no group holds the channel".to_owned()));
    };
    let place = place.unwrap_or_else(|| plan.groups[group].channels.len());
    let result = setup.assess(group, place, row.channel, &mut setup.scratch())?;
    if !result.legal {
        return Ok(Err("the channel has no legal word".to_owned()));
    }
    let reach_hz = row.rbw_hz.unwrap_or(0.0).max(1.0);
    let offset_hz = row.offset.to_f64_hz();
    let nearest = result
        .tones
        .into_iter()
        .filter(|tone| (tone.offset_hz - offset_hz).abs() <= reach_hz)
        .min_by(|a, b| (a.offset_hz - offset_hz).abs().total_cmp(&(b.offset_hz - offset_hz).abs()));
    Ok(match nearest {
        None => Err(format!("no tone is predicted within {reach_hz} Hz of this offset")),
        Some(tone) if !tone.unknown.is_empty() => Err(unknown_part(&tone)),
        Some(tone) if tone.known_level_dbc.is_none() => Err("no part of the tone is predicted".to_owned()),
        Some(tone) => {
            let spot = Spot { group, place, channel: row.channel, offset_hz: tone.offset_hz };
            Ok(Found { spot, tone, output_divider: result.output_divider.unwrap_or(1) })
        }
    })
}

/// Returns why a tone of which a part is unknown tells nothing: the known parts would be taken for all of it.
fn unknown_part(tone: &Tone) -> String {
    let cure = if tone.unknown.iter().any(|part| part.starts_with("coupling")) {
        "; an [[anchor]] of the path it takes, with a level near the measured one, can be fitted"
    } else {
        ""
    };
    format!("a part of the tone is unknown ({}){cure}", tone.unknown.join("; "))
}

/// Returns the shown row of a measurement whose tone was looked for.
pub(super) fn shown(row: &Measured, found: Result<&Found, &String>) -> CalibratedRow {
    let tone = found.ok().map(|found| &found.tone);
    let predicted_dbc = tone.and_then(|tone| tone.known_level_dbc);
    CalibratedRow {
        line: row.line,
        channel: row.channel,
        offset_hz: row.offset.to_f64_hz(),
        measured_dbc: row.level_dbc,
        is_bound: row.is_bound,
        label: tone.map(|tone| tone.label.clone()),
        predicted_dbc,
        fitted_dbc: None,
        residual_db: predicted_dbc
            .map(|predicted| row.level_dbc - predicted)
            .filter(|residual| !row.is_bound || *residual < 0.0),
        mechanism: tone.and_then(largest_part),
        unused: found.err().cloned(),
    }
}

fn largest_part(tone: &Tone) -> Option<&'static str> {
    tone.contributions.known().max_by(|a, b| a.1.total_cmp(&b.1)).map(|(name, _)| name)
}

/// Returns the residuals of the rows by the mechanism that dominates them.
pub(super) fn by_mechanism(rows: &[CalibratedRow]) -> Vec<MechanismResidual> {
    let mut residuals: BTreeMap<&'static str, Vec<f64>> = BTreeMap::new();
    for row in rows.iter().filter(|row| !row.is_bound) {
        if let (Some(mechanism), Some(residual)) = (row.mechanism, row.residual_db) {
            residuals.entry(mechanism).or_default().push(residual);
        }
    }
    residuals
        .into_iter()
        .map(|(mechanism, residuals)| {
            let count = residuals.len();
            let mean_db = residuals.iter().sum::<f64>() / count as f64;
            let square: f64 = residuals.iter().map(|r| (r - mean_db).powi(2)).sum();
            let spread_db = (count > 1).then(|| (square / (count - 1) as f64).sqrt());
            MechanismResidual { mechanism, count, mean_db, spread_db }
        })
        .collect()
}

/// Ranges that rows cover.
#[derive(Default)]
pub(super) struct Covered {
    channels: Option<(Frequency, Frequency)>,
    offsets: Option<(Frequency, Frequency)>,
    q: Vec<u64>,
    dividers: Vec<u64>,
    rows: usize,
}

impl Covered {
    pub fn note(&mut self, row: &Measured, found: &Found) {
        let wider = |range: Option<(Frequency, Frequency)>, value: Frequency| {
            let (low, high) = range.unwrap_or((value, value));
            Some((low.min(value), high.max(value)))
        };
        self.channels = wider(self.channels, row.channel);
        self.offsets = wider(self.offsets, row.offset);
        self.q.extend(found.tone.q);
        self.dividers.push(found.output_divider);
        self.rows += 1;
    }

    pub fn sentences(mut self) -> Vec<String> {
        let (Some(channels), Some(offsets)) = (self.channels, self.offsets) else { return Vec::new() };
        let list = |values: &mut Vec<u64>| {
            values.sort_unstable();
            values.dedup();
            values.iter().map(u64::to_string).collect::<Vec<_>>().join(", ")
        };
        let (q, dividers) = (list(&mut self.q), list(&mut self.dividers));
        let q = if q.is_empty() { "none".to_owned() } else { q };
        vec![
            format!("{} rows, channels {} to {}", self.rows, channels.0, channels.1),
            format!("offsets {} to {}", offsets.0, offsets.1),
            format!("boundaries of q = {q}; output dividers {dividers}"),
        ]
    }
}
