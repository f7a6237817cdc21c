//! The committed example reports are what the program writes today.
//!
//! `THORNMAP_UPDATE=1 cargo test --test suite examples` rewrites them.

use std::fs;
use std::path::PathBuf;

use serde_json::Value;
use thornmap::decide::dossier::dossier;
use thornmap::plan::{Plan, demo_plan, parse_plan};
use thornmap::report::{RenderOptions, render_with, write_set};
use thornmap::survey::survey;

/// Figures of different machines agree to this share; levels to this many decibels.
const RELATIVE: f64 = 1e-6;
const ABSOLUTE: f64 = 2e-3;

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

/// Holds a committed example against what the program writes; returns how many figures were compared.
fn check(plan: &Plan) -> usize {
    let folder = PathBuf::from(env!("CARGO_MANIFEST_DIR")).join("reports").join(&plan.stem);
    let result = survey(plan, &|_| {}).unwrap();
    let made = dossier(&result, &|| {}).unwrap();
    let set = render_with(&result, &made, &RenderOptions::default()).unwrap();
    if std::env::var_os("THORNMAP_UPDATE").is_some() {
        write_set(&folder, &set).unwrap();
    }
    let (mut files, mut figures) = (0, 0);
    for file in &set.files {
        let committed = fs::read(folder.join(&file.path)).unwrap();
        files += 1;
        if file.path == "survey.json" {
            let ours: Value = serde_json::from_slice(&file.bytes).unwrap();
            let theirs: Value = serde_json::from_slice(&committed).unwrap();
            figures = compare("survey", &ours, &theirs);
        } else if file.path == "report.html" {
            assert!(without_figures(&file.bytes) == without_figures(&committed), "the words of report.html changed");
        } else {
            // Plots and rows follow from the same figures: same number of lines, no word changed.
            let lines = |bytes: &[u8]| String::from_utf8_lossy(bytes).lines().count();
            assert_eq!(lines(&file.bytes), lines(&committed), "{}", file.path);
        }
    }
    assert_eq!(files, 10, "page, data, six plots, marker");
    figures
}

fn config(stem: &str) -> Plan {
    let path = PathBuf::from(env!("CARGO_MANIFEST_DIR")).join("configs").join(format!("{stem}.toml"));
    parse_plan(&fs::read_to_string(path).unwrap(), stem, &|name| Err(format!("no file {name}"))).unwrap()
}

#[test]
fn the_committed_demo_report_is_current() {
    assert!(check(&demo_plan()) > 20_000);
}

#[test]
fn the_committed_report_of_wide_dividers_is_current() {
    assert!(check(&config("wide_dividers")) > 5_000);
}

#[test]
fn the_committed_report_of_an_exact_modulus_is_current() {
    assert!(check(&config("exact_modulus")) > 1_000);
}
