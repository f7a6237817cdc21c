//! Beats between synthesizers: CSV and JSON.

use serde_json::json;

use super::columns::{inert, word};
use super::json::json_text;
use super::{ReportError, ReportFile};
use crate::plan::Plan;
use crate::survey::Beat;

/// What the positions mean, as both files state it.
const RULE: &str = "offset = |m*f_neighbour - n*f_own| with coprime m, n up to 3, at VCO and output of both; positions only: no anchor gives a level, and offsets wander where the references are not one";

/// Returns `beats.csv` and `beats.json`.
///
/// # Errors
/// `ReportError` where a writer fails.
pub fn beat_files(plan: &Plan, beats: &[Beat]) -> Result<Vec<ReportFile>, ReportError> {
    let mut writer = csv::WriterBuilder::new().terminator(csv::Terminator::CRLF).from_writer(Vec::new());
    writer.write_record([
        "group",
        "channel",
        "neighbour",
        "neighbour_group",
        "neighbour_channel",
        "own_node",
        "neighbour_node",
        "n",
        "m",
        "offset",
        "level_dbc",
        "inside_loop",
        "neighbours_inside",
    ])?;
    for beat in beats {
        writer.write_record([
            inert(plan.groups[beat.group_index].name.clone()),
            beat.channel.to_string(),
            inert(beat.neighbour.clone()),
            inert(beat.neighbour_group.clone()),
            beat.neighbour_channel.to_string(),
            word(&beat.nodes.0),
            word(&beat.nodes.1),
            beat.multiples.0.to_string(),
            beat.multiples.1.to_string(),
            beat.offset.to_string(),
            String::new(),
            beat.inside_loop.to_string(),
            beat.neighbours_inside.to_string(),
        ])?;
    }
    let table = writer.into_inner().map_err(|error| ReportError::Csv(error.into_error().into()))?;
    let document = json!({
        "schema": "thornmap.beats/1",
        "version": env!("CARGO_PKG_VERSION"),
        "plan_sha256": plan.sha256,
        "rule": RULE,
        "beats": beats,
    });
    Ok(vec![
        ReportFile { path: "beats.csv".into(), bytes: table },
        ReportFile { path: "beats.json".into(), bytes: format!("{}\n", json_text("beats", &document)?).into_bytes() },
    ])
}

/// Returns the beats in a sentence for each neighbour.
#[must_use]
pub fn beats_text(beats: &[Beat]) -> String {
    let mut names: Vec<&str> = beats.iter().map(|beat| beat.neighbour.as_str()).collect();
    names.dedup();
    names.sort_unstable();
    names.dedup();
    names
        .into_iter()
        .map(|name| {
            let own = beats.iter().filter(|beat| beat.neighbour == name);
            let (inside, all) = own.fold((0, 0), |(i, n), beat| (i + u64::from(beat.inside_loop), n + 1));
            format!(
                "beats with \"{name}\": {inside} of {all} channels have one of its channels within their loop edge (levels unknown)\n"
            )
        })
        .collect()
}
