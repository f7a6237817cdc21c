//! The report set, from one result to a folder on disk: figures here, the page and the writer below.

#![allow(clippy::unwrap_used, reason = "a test that cannot go on fails")]

mod fixture;
mod page;
mod signed;
mod writing;

use serde_json::Value;
use thornmap::report::{COLUMNS, Detail, RenderOptions, ReportError, ReportSet, render};
use thornmap::survey::SurveyResult;

const ALL: RenderOptions = RenderOptions { detail: Detail::All, markdown: false, png: false };
const FLAGGED: RenderOptions = RenderOptions { detail: Detail::Flagged, markdown: false, png: false };

fn text(set: &ReportSet, path: &str) -> String {
    String::from_utf8(set.get(path).unwrap_or_else(|| panic!("{path} is in the set")).to_vec()).unwrap()
}

fn json(set: &ReportSet) -> Value {
    serde_json::from_str(&text(set, "survey.json")).unwrap()
}

/// Asserts that names appear in the text in this order, each as a key.
fn assert_key_order(text: &str, names: &[&str]) {
    let mut rest = text;
    for name in names {
        let key = format!("\"{name}\":");
        let at = rest.find(&key).unwrap_or_else(|| panic!("{name} is missing or out of order"));
        rest = &rest[at + key.len()..];
    }
}

#[test]
fn survey_json_has_the_named_keys_in_order() {
    let set = render(&fixture::survey(40), &ALL).unwrap();
    let text = text(&set, "survey.json");
    let top: Vec<&str> =
        text.lines().filter(|line| line.starts_with('"')).map(|l| l.split('"').nth(1).unwrap()).collect();
    let want = [
        "schema",
        "version",
        "plan_sha256",
        "plan",
        "conventions",
        "detail",
        "channels_omitted",
        "assumptions",
        "loop",
        "summary",
        "method_check",
        "channels",
        "warnings",
    ];
    assert_eq!(top, want);
    let line = |key: &str| text.lines().find(|line| line.starts_with(&format!("\"{key}\""))).unwrap().to_owned();
    assert_key_order(
        &line("summary"),
        &[
            "channels",
            "clear",
            "marginal",
            "bad",
            "illegal",
            "unknown_tones",
            "reasons",
            "B1",
            "B2",
            "B3",
            "B4",
            "M1",
            "M2",
            "M3",
            "M4",
            "M5",
        ],
    );
    assert_key_order(
        &line("loop"),
        &["components", "design_divider", "unity_gain_hz", "minimum", "design", "maximum", "phase_margin_deg"],
    );
    assert_key_order(&line("assumptions"), &["key", "value", "basis"]);
    let channel = text.lines().find(|line| line.starts_with("{\"group\"")).unwrap();
    assert_key_order(
        channel,
        &[
            "group",
            "group_index",
            "index",
            "channel_hz",
            "channel_exact",
            "injection_hz",
            "output_hz",
            "output_exact",
            "achieved_hz",
            "error_hz",
            "vco_hz",
            "reference_hz",
            "doubler",
            "reference_divider",
            "pfd_hz",
            "output_divider",
            "legal",
            "illegal",
            "n",
            "k",
            "m",
            "k_reduced",
            "m_reduced",
            "period",
            "period_is_exact",
            "structure",
            "order",
            "seeds",
            "unity_gain_hz",
            "phase_margin_deg",
            "closed_loop_3db_hz",
            "peaking_db",
            "boundary",
            "family",
            "p",
            "q",
            "tone_offset_hz",
            "vco_distance_hz",
            "inside_guard",
            "inside_loop",
            "boundaries",
            "tones",
            "origin",
            "label",
            "harmonic",
            "offset_hz",
            "level_dbc",
            "level_uncertainty_db",
            "known_level_dbc",
            "basis",
            "p",
            "q",
            "contributions",
            "coupling_dbc",
            "nonlinearity_dbc",
            "modulator_dbc",
            "leakage_dbc",
            "clock_dbc",
            "limit_dbc",
            "margin_db",
            "inside_loop",
            "unknown_tones",
            "tones_below_floor",
            "method",
            "phase_error_deg",
            "phase_error_with_tones_deg",
            "phase_error_known_deg",
            "noise_unknown",
            "jitter_s",
            "residual_fm_hz",
            "evm_percent",
            "verdict",
            "reasons",
            "rule",
            "text",
            "k",
            "m",
            "q",
            "residue",
            "offset_hz",
        ],
    );
}

#[test]
fn survey_json_holds_the_figures_of_the_result() {
    let result = fixture::survey(200);
    let set = render(&result, &ALL).unwrap();
    let json = json(&set);
    let channels = json["channels"].as_array().unwrap();
    assert_eq!(channels.len(), result.channels.len());
    let mut tones = 0;
    for (written, channel) in channels.iter().zip(&result.channels) {
        assert_eq!(written["channel_hz"].as_f64(), Some(channel.channel_hz));
        assert_eq!(written["k"].as_u64(), channel.k);
        assert_eq!(written["verdict"], channel.verdict.word());
        for (written, tone) in written["tones"].as_array().unwrap().iter().zip(&channel.tones) {
            assert_eq!(written["offset_hz"].as_f64(), Some(tone.offset_hz));
            match (written["level_dbc"].as_f64(), tone.level_dbc) {
                // Four decimals: half a unit of the last place, and the rounding of the comparison itself.
                (Some(a), Some(b)) => assert!((a - b).abs() <= 0.5e-4 + 1e-12),
                (a, b) => assert_eq!(a, b),
            }
            tones += 1;
        }
    }
    assert!(tones > 1000, "{tones} tones compared");
    assert_eq!(channels[0]["period"].to_string(), "4700000000000000000001");
    assert_eq!(channels.last().unwrap()["channel_exact"], "1300000000/3 Hz");
    assert_eq!(json["summary"]["reasons"].as_object().unwrap().len(), 9);
}

#[test]
fn flagged_detail_lists_only_bad_and_marginal_channels() {
    let result = fixture::survey(200);
    let set = render(&result, &FLAGGED).unwrap();
    let json = json(&set);
    let flagged = result.summary.bad + result.summary.marginal;
    assert!(flagged > 0 && result.summary.clear > 0);
    assert_eq!(json["channels"].as_array().unwrap().len() as u64, flagged);
    assert_eq!(json["channels_omitted"].as_u64(), Some(result.summary.clear));
    assert_eq!(json["detail"], "flagged");
    assert!(json["channels"].as_array().unwrap().iter().all(|channel| channel["verdict"] != "clear"));
    // The table keeps every channel.
    assert_eq!(text(&set, "channels.csv").lines().count(), result.channels.len() + 1);
}

/// Returns the worst tone by the words of the interface: B2 and B3 first, then the smallest margin, then the offset.
fn worst_tone(channel: &Value) -> Option<&Value> {
    let deciding = |tone: &Value| {
        let meant = |reason: &&Value| reason["offset_hz"] == tone["offset_hz"];
        let mut found = channel["reasons"].as_array().unwrap().iter().filter(meant);
        found.any(|reason| reason["rule"] == "B2" || reason["rule"] == "B3")
    };
    let mut ranked: Vec<&Value> = channel["tones"].as_array().unwrap().iter().collect();
    ranked.retain(|tone| deciding(tone) || !tone["margin_db"].is_null());
    let margin = |tone: &Value| tone["margin_db"].as_f64().unwrap_or(f64::NEG_INFINITY);
    ranked.sort_by(|a, b| deciding(b).cmp(&deciding(a)).then(margin(a).total_cmp(&margin(b))));
    ranked.first().copied()
}

#[test]
fn the_table_agrees_with_survey_json_column_by_column() {
    let result = fixture::survey(120);
    let set = render(&result, &ALL).unwrap();
    let json = json(&set);
    let bytes = set.get("channels.csv").unwrap();
    let mut reader = csv::Reader::from_reader(bytes);
    let header = reader.headers().unwrap().clone();
    assert_eq!(header.iter().collect::<Vec<_>>(), COLUMNS.iter().map(|column| column.name).collect::<Vec<_>>());
    let mut compared = 0;
    for (row, channel) in reader.records().zip(json["channels"].as_array().unwrap()) {
        let row = row.unwrap();
        for (name, cell) in header.iter().zip(&row) {
            let value = match name.split_once('_') {
                Some(("boundary", key)) => &channel["boundary"][key],
                Some(("worst", key)) => worst_tone(channel).map_or(&Value::Null, |tone| &tone[key]),
                _ if name == "rules" => {
                    let mut rules: Vec<_> =
                        channel["reasons"].as_array().unwrap().iter().map(|r| r["rule"].as_str().unwrap()).collect();
                    rules.sort_unstable();
                    rules.dedup();
                    assert_eq!(cell, rules.join(" "));
                    continue;
                }
                _ => &channel[name],
            };
            match value {
                Value::Null => assert_eq!(cell, "", "{name}: null is an empty cell; or the key is not in survey.json"),
                Value::Number(number) => assert_eq!(cell, number.to_string(), "{name}"),
                Value::Bool(flag) => assert_eq!(cell, flag.to_string(), "{name}"),
                Value::String(text) => assert_eq!(cell.trim_start_matches('\''), text, "{name}"),
                Value::Array(_) | Value::Object(_) => continue,
            }
            compared += 1;
        }
    }
    assert!(compared > 121 * 30, "{compared} cells compared");
}

#[test]
fn the_table_holds_no_formula() {
    let set = render(&fixture::survey(20), &ALL).unwrap();
    let mut hostile = 0;
    for row in csv::Reader::from_reader(set.get("channels.csv").unwrap()).records() {
        for cell in &row.unwrap() {
            assert!(cell.parse::<f64>().is_ok() || !cell.starts_with(['=', '+', '-', '@']), "{cell}");
            hostile += usize::from(cell.starts_with("'=cmd"));
        }
    }
    assert!(hostile >= 1, "the hostile group name of the fixture is there");
}

#[test]
fn refuses_figures_that_are_not_finite_and_names_them() {
    type Breaker = (&'static str, fn(&mut SurveyResult));
    let breakers: [Breaker; 5] = [
        ("level_dbc", |r| r.channels[3].tones[0].level_dbc = Some(f64::NAN)),
        ("channel_hz", |r| r.channels[3].channel_hz = f64::INFINITY),
        ("worst_difference_db", |r| r.method_check.worst_difference_db = Some(f64::NEG_INFINITY)),
        ("current_a", |r| r.plan.detector.current_a = f64::NAN),
        ("minimum", |r| r.loop_summary.unity_gain_hz.as_mut().unwrap().minimum = f64::NAN),
    ];
    for (name, breaker) in breakers {
        let mut result = fixture::survey(6);
        breaker(&mut result);
        match render(&result, &ALL) {
            Err(ReportError::NotFinite { key, .. }) => assert_eq!(key, name),
            other => panic!("{name}: {:?}", other.map(|set| set.files.len())),
        }
    }
}

#[test]
fn the_same_result_gives_the_same_bytes() {
    assert_eq!(render(&fixture::survey(50), &ALL).unwrap(), render(&fixture::survey(50), &ALL).unwrap());
}

/// Asserts that two values have the same shape and, within the stated rounding, the same figures; returns their number.
fn assert_same(ours: &Value, usual: &Value, at: &str) -> usize {
    match (ours, usual) {
        (Value::Object(a), Value::Object(b)) => {
            assert_eq!(a.keys().collect::<Vec<_>>(), b.keys().collect::<Vec<_>>(), "{at}");
            a.iter().map(|(key, value)| assert_same(value, &b[key], key)).sum()
        }
        (Value::Array(a), Value::Array(b)) => {
            assert_eq!(a.len(), b.len(), "{at}");
            a.iter().zip(b).map(|(a, b)| assert_same(a, b, at)).sum()
        }
        (Value::Number(a), Value::Number(b)) => {
            let (a, b) = (a.as_f64().unwrap(), b.as_f64().unwrap());
            // Half a unit of the fourth decimal for decibels, of the tenth digit for everything else.
            let slack = if at.contains("_db") { 0.5e-4 + 1e-12 } else { 5e-10 * b.abs() };
            assert!((a - b).abs() <= slack, "{at}: {a} {b}");
            1
        }
        (a, b) => {
            assert_eq!(a, b, "{at}");
            0
        }
    }
}

#[test]
fn survey_json_agrees_with_the_usual_writer_but_for_rounding() {
    let result = fixture::survey(60);
    let json = json(&render(&result, &ALL).unwrap());
    let mut figures = assert_same(&json["plan"], &serde_json::to_value(&result.plan).unwrap(), "plan");
    for (written, channel) in json["channels"].as_array().unwrap().iter().zip(&result.channels) {
        figures += assert_same(written, &serde_json::to_value(channel).unwrap(), "channel");
    }
    assert!(figures > 5000, "{figures} figures compared");
}
