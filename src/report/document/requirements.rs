//! What the plan must meet, group by group, with where each figure comes from.

use crate::base::{Assumption, Basis};
use crate::plan::{Guard, Limits};
use crate::report::figures::{decibel, significant, with_prefix};
use crate::survey::SurveyResult;

/// One requirement.
pub(crate) struct Requirement {
    /// What is limited, and for which groups.
    pub what: String,
    /// The figure.
    pub value: String,
    /// Basis and note of the input.
    pub source: String,
}

/// Returns the requirements: groups that share limits share their rows.
pub(super) fn requirements(result: &SurveyResult) -> Vec<Requirement> {
    let plan = &result.plan;
    let source = |group: Option<usize>, name: &str| source(result, group, name);
    let mut shared: Vec<(Vec<&str>, usize, &Limits)> = Vec::new();
    for (number, group) in plan.groups.iter().enumerate() {
        match shared.iter_mut().find(|(_, _, limits)| same(limits, &group.limits)) {
            Some((names, ..)) => names.push(&group.name),
            None => shared.push((vec![&group.name], number + 1, &group.limits)),
        }
    }
    let whole = shared.len() == 1;
    let mut rows = Vec::new();
    for (names, number, limits) in &shared {
        let of = if whole { String::new() } else { format!(" ({})", names.join(", ")) };
        let mut add = |what: &str, value: String, name: &str| {
            rows.push(Requirement { what: format!("{what}{of}"), value, source: source(Some(*number), name) });
        };
        match &limits.spur {
            None => add("Spur mask", "none: a level alone makes no channel bad".to_owned(), "spur"),
            Some(mask) => {
                let points: Vec<String> = mask
                    .points
                    .iter()
                    .map(|(hz, dbc)| format!("{} dBc at {}", decibel(*dbc), with_prefix(*hz, "Hz", 6)))
                    .collect();
                let rule = "straight in the logarithm of the offset between, end values held";
                add("Spur mask at the output", format!("{}; {rule}", points.join(", ")), "spur");
            }
        }
        add("Internal margin", format!("{} dB below the mask", significant(limits.margin_db, 4)), "margin");
        let phase =
            limits.phase_error_deg.map_or_else(|| "none".to_owned(), |deg| format!("{}° rms", significant(deg, 5)));
        add("Phase error with tones", phase, "phase_error");
        let (low, high) = limits.integration_hz;
        let band = format!("{} to {}", with_prefix(low, "Hz", 6), with_prefix(high, "Hz", 6));
        add("Integrated over", band, "integration");
    }
    let guard = match &plan.boundary.guard {
        Guard::LoopEdge => "the channel's own loop edge".to_owned(),
        Guard::Offset(offset) => format!("{offset} of tone offset"),
        Guard::ShareOfPfd(share) => {
            format!("{} % of the PFD frequency, of tone offset", significant(share.to_f64() * 100.0, 6))
        }
    };
    rows.push(Requirement { what: "Guard, inclusive".to_owned(), value: guard, source: source(None, "guard") });
    rows.extend(plan.victims.iter().map(|victim| {
        Requirement {
            what: format!("Victim {}", victim.name),
            value: victim
                .limit_dbc
                .map_or_else(|| "the mask alone".to_owned(), |limit| format!("{} dBc at the output", decibel(limit))),
            source: "plan".to_owned(),
        }
    }));
    rows
}

/// Returns where a requirement comes from: the group's own limits, the plan's, or the program.
fn source(result: &SurveyResult, group: Option<usize>, name: &str) -> String {
    let keys = match group {
        Some(number) => vec![format!("channels[{number}].limits.{name}"), format!("limits.{name}")],
        None => vec![format!("boundary.{name}")],
    };
    let listed = result.plan.required.iter().chain(&result.assumptions);
    let found = keys.iter().find_map(|key| listed.clone().find(|found| found.key == *key));
    match found {
        Some(Assumption { note: Some(note), .. }) => note.clone(),
        Some(found) if found.basis == Basis::Default => "default of the program".to_owned(),
        Some(_) => "the plan, without a note".to_owned(),
        None => "not given".to_owned(),
    }
}

fn same(a: &Limits, b: &Limits) -> bool {
    a.spur == b.spur
        && a.margin_db == b.margin_db
        && a.phase_error_deg == b.phase_error_deg
        && a.integration_hz == b.integration_hz
}
