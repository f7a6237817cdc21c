//! The committed example report is what the program writes today.
//!
//! `THORNMAP_UPDATE=1 cargo test --test suite examples` rewrites it.

use std::fs;
use std::path::PathBuf;

use serde_json::Value;
use thornmap::plan::demo_plan;
use thornmap::report::{RenderOptions, render, write_set};
use thornmap::survey::survey;

/// Figures of different machines agree to this share; levels to this many decibels.
const RELATIVE: f64 = 1e-6;
const ABSOLUTE: f64 = 2e-3;

fn folder() -> PathBuf {
    PathBuf::from(env!("CARGO_MANIFEST_DIR")).join("reports/demo")
}

/// Compares two JSON values, figures with tolerance; returns how many figures were compared.
fn compare(path: &str, ours: &Value, theirs: &Value) -> usize {
    match (ours, theirs) {
        (Value::Number(a), Value::Number(b)) => {
            if a != b {
                let (a, b) = (a.as_f64().unwrap(), b.as_f64().unwrap());
                // Levels of weak lines lose digits that strong ones keep: a few thousandths of a decibel.
                let is_level = ["_db", "_dbc", "_dbc_per_hz"].iter().any(|suffix| path.ends_with(suffix));
                let allowed = if is_level { ABSOLUTE } else { RELATIVE * b.abs() };
                assert!((a - b).abs() <= allowed, "{path}: {a} against {b}");
            }
            1
        }
        (Value::Array(a), Value::Array(b)) => {
            assert_eq!(a.len(), b.len(), "{path}");
            a.iter().zip(b).enumerate().map(|(i, (a, b))| compare(&format!("{path}[{i}]"), a, b)).sum()
        }
        (Value::Object(a), Value::Object(b)) => {
            assert!(a.keys().eq(b.keys()), "{path}");
            a.iter().map(|(key, value)| compare(&format!("{path}.{key}"), value, &b[key])).sum()
        }
        _ => {
            assert_eq!(ours, theirs, "{path}");
            0
        }
    }
}

/// Returns a text with every figure blanked out: the words must be the same everywhere, the figures are compared as JSON.
fn without_figures(bytes: &[u8]) -> String {
    let mut out = String::new();
    for character in String::from_utf8_lossy(bytes).chars() {
        let is_figure = character.is_ascii_digit() || matches!(character, '.' | '-' | '\u{2212}');
        if !is_figure {
            out.push(character);
        }
    }
    out
}

#[test]
fn the_committed_demo_report_is_current() {
    let result = survey(&demo_plan(), &|_| {}).unwrap();
    let set = render(&result, &RenderOptions::default()).unwrap();
    if std::env::var_os("THORNMAP_UPDATE").is_some() {
        write_set(&folder(), &set).unwrap();
    }
    let mut files = 0;
    for file in &set.files {
        let committed = fs::read(folder().join(&file.path)).unwrap();
        files += 1;
        if file.path == "survey.json" {
            let ours: Value = serde_json::from_slice(&file.bytes).unwrap();
            let theirs: Value = serde_json::from_slice(&committed).unwrap();
            assert!(compare("survey", &ours, &theirs) > 20_000);
        } else if file.path == "report.html" {
            assert!(without_figures(&file.bytes) == without_figures(&committed), "the words of report.html changed");
        } else {
            // Plots and rows follow from the same figures: same number of lines, no word changed.
            let lines = |bytes: &[u8]| String::from_utf8_lossy(bytes).lines().count();
            assert_eq!(lines(&file.bytes), lines(&committed), "{}", file.path);
        }
    }
    assert_eq!(files, 8);
}
