//! The sequence command: runs against published and computed values, files that come back, captures made with numpy.

use std::fs;
use std::path::{Path, PathBuf};
use std::process::Output;

use assert_cmd::Command;
use rayon::prelude::*;
use serde_json::Value;
use tempfile::TempDir;
use thornmap::assess::{Recognition, Search, recognise};
use thornmap::report::read_capture;

fn run_in(folder: &Path, arguments: &[&str]) -> Output {
    Command::cargo_bin("thornmap").unwrap().current_dir(folder).arg("sequence").args(arguments).output().unwrap()
}

fn json(arguments: &[&str]) -> Value {
    let folder = TempDir::new().unwrap();
    let mut all = arguments.to_vec();
    all.push("--json");
    let output = run_in(folder.path(), &all);
    assert_eq!(output.status.code(), Some(0), "{}", String::from_utf8_lossy(&output.stderr));
    serde_json::from_slice(&output.stdout).unwrap()
}

fn captures() -> PathBuf {
    PathBuf::from(env!("CARGO_MANIFEST_DIR")).join("tests/data/captures")
}

fn truth() -> Vec<Value> {
    serde_json::from_str(&fs::read_to_string(captures().join("truth.json")).unwrap()).unwrap()
}

fn captured(name: &str) -> Vec<i64> {
    read_capture(&fs::read(captures().join(name)).unwrap(), Some("division"))
        .or_else(|_| read_capture(&fs::read(captures().join(name)).unwrap(), None))
        .unwrap()
}

/// Returns whether the true settings are among those found; scaled K/M are the same run.
fn holds(found: &Recognition, truth: &Value) -> bool {
    let number = |key: &str| truth[key].as_u64().unwrap();
    found.found.iter().any(|made| {
        let settings = &made.settings;
        settings.structure.word() == truth["structure"].as_str().unwrap()
            && u64::from(settings.order) == number("order")
            && u128::from(made.k) * u128::from(number("m"))
                == u128::from(number("k")) * u128::from(made.working_modulus)
            && made.integer == truth["integer"].as_i64().unwrap()
    })
}

#[test]
fn first_outputs_of_the_table_come_out_of_the_command() {
    // Computed twice, agrees with crate `idsp`; n = 4, K = 3, zero seeds.
    let table = [
        [0, 0, 0, 0, 0, 1, 0, 0, 0, 0, 1, 0, 0, 0, 0, 1, 0, 0, 0, 0],
        [0, 0, 1, -1, 1, 0, 1, -1, 1, 0, 0, 0, 1, -1, 1, 0, 0, 1, -1, 1],
        [0, 0, 1, 0, 0, 0, 0, 1, -1, 2, -2, 2, -1, 1, -1, 2, -2, 2, 0, -1],
        [0, 0, 2, -2, 1, -1, 3, -3, 3, -1, -2, 4, -1, -2, 2, 1, -1, 0, 0, 2],
    ];
    for (order, outputs) in (1..).zip(table) {
        let found = json(&["--word", "3/16", "--order", &order.to_string(), "--length", "64"]);
        assert_eq!(found["schema"], "thornmap.sequence/1");
        let first: Vec<i64> = found["first"].as_array().unwrap().iter().map(|y| y.as_i64().unwrap()).collect();
        assert_eq!(first[..20], outputs, "order {order}");
        assert_eq!(first.len(), 64);
    }
}

#[test]
fn periods_means_and_statistics_are_exact() {
    // Zero seeds, n = 9, K odd: 512, 1024, 1024, 2048, 2048 (computed).
    for (order, period) in (1..).zip([512u64, 1024, 1024, 2048, 2048]) {
        let found = json(&["--word", "77/2^9", "--order", &order.to_string()]);
        assert_eq!(found["period"].as_u64(), Some(period));
        assert_eq!((found["mean"]["numerator"].as_u64(), found["mean"]["denominator"].as_u64()), (Some(77), Some(512)));
        let histogram = found["histogram"].as_object().unwrap();
        let (mut count, mut sum) = (0, 0);
        for (value, times) in histogram {
            count += times.as_i64().unwrap();
            sum += value.parse::<i64>().unwrap() * times.as_i64().unwrap();
        }
        assert_eq!(Some(count), found["samples"].as_i64());
        // The default length is one period; without a first transient the sum is K/M of it.
        assert_eq!(count, i64::try_from(period).unwrap());
        if order == 1 {
            assert_eq!(sum, 77);
        }
    }
    // M = 512, K = 257, order 3, first seed 1: period 1024 (computed). Prime modulus, 24 bits: about 4.7e21.
    assert_eq!(json(&["--word", "257/512", "--seeds", "1"])["period"].as_u64(), Some(1024));
    let long = json(&["--word", "1/2^24", "--structure", "prime-mash"])["period"].to_string();
    assert_eq!(long, "4722363949595307802597", "(2^24 - 3)^3");
    // Dither at stage 1, nine bits: mean shift 256/511 of a step.
    let dithered = json(&["--word", "5/64", "--dither", "1:9:511", "--order", "2"]);
    assert_eq!(dithered["dither_facts"]["mean_shift"], serde_json::json!(["4", "511"]), "256/(511*64)");
    assert_eq!(dithered["dither_facts"]["can_whiten"], true);
    assert_eq!(json(&["--word", "5/64", "--dither", "2:9:511", "--order", "2"])["dither_facts"]["can_whiten"], false);
    assert_eq!(json(&["--word", "5/64", "--dither", "white:1:4"])["period"], Value::Null);
}

#[test]
fn own_noise_of_dither_is_the_computed_one() {
    // n = 18, 26 MHz, 10 kHz: r = 1 −120.242, r = 2 −172.578 dBc/Hz (computed). The command gives it at shares of the
    // rate: 260 kHz, 2.6 MHz and 26 kHz; from 10 kHz it follows [2 sin(πf/f_pfd)]^(2(r − 2)).
    for (stage, at_ten_khz) in [(1, -120.242), (2, -172.578)] {
        let found = json(&["--word", "1001/2^18", "--rate", "26 MHz", "--dither", &format!("{stage}:23:1")]);
        let mut checked = 0;
        for pair in found["dither_facts"]["own_noise_dbc"].as_array().unwrap() {
            let (share, level) = (pair[0].as_f64().unwrap(), pair[1].as_f64().unwrap() - 10.0 * 26e6f64.log10());
            let shape = |share: f64| 20.0 * f64::from(stage - 2) * (2.0 * (std::f64::consts::PI * share).sin()).log10();
            let expected = at_ten_khz - shape(10e3 / 26e6) + shape(share);
            assert!((level - expected).abs() < 1e-3, "stage {stage}, {share}: {level} against {expected}");
            checked += 1;
        }
        assert_eq!(checked, 3);
    }
}

#[test]
fn first_order_lines_are_the_closed_form() {
    // M = 10, K = 3, lines 1 … 5 (computed from π/(M'·sin(πr/M'))).
    let found = json(&["--word", "3/10", "--order", "1", "--rate", "10 MHz"]);
    let expected = [(1, -8.2162), (2, -9.6211), (3, 0.1434), (4, -5.4414), (5, -10.0570)];
    let lines = found["lines"].as_array().unwrap();
    for (bin, level) in expected {
        let line = lines.iter().find(|line| line["bin"] == bin).unwrap();
        assert!((line["level_dbc"].as_f64().unwrap() - level).abs() < 1e-4, "{line}");
        assert_eq!(line["offset_hz"].as_f64(), Some(f64::from(bin) * 1e6));
        // Every line of a first-order run is some h·K mod± M.
        let h = line["harmonic"].as_i64().unwrap();
        let residue = (3 * h).rem_euclid(10);
        assert!(residue == i64::from(bin) || 10 - residue == i64::from(bin));
    }
    // Order 3, even K: half the lines at least are sub-fractional.
    let found = json(&["--word", "6/16", "--seeds", "1"]);
    assert!(found["sub_fractional_count"].as_u64().unwrap() > 0);
}

#[test]
fn best_seeds_have_the_longest_sequence_first() {
    let found = json(&["--word", "36/512", "--order", "3", "--best-seed", "512"]);
    let seeds = found["best_seeds"].as_array().unwrap();
    assert_eq!(seeds.len(), 512);
    let period = |seed: &Value| seed["period"].as_u64().unwrap();
    assert!(seeds.windows(2).all(|pair| period(&pair[0]) >= period(&pair[1])));
    // Odd first seeds of order 3 give 2^(n+1) for every K (Borkowski & Kostamovaara 2005, from memory; computed).
    assert_eq!(period(&seeds[0]), 1024);
    for seed in seeds.iter().filter(|seed| seed["seed"].as_u64().unwrap() % 2 == 1) {
        assert_eq!(period(seed), 1024);
    }
    let level = |seed: &Value| seed["worst_line"]["level_dbc"].as_f64().unwrap();
    let same: Vec<&Value> = seeds.iter().filter(|seed| period(seed) == 1024).collect();
    assert!(same.windows(2).all(|pair| level(pair[0]) <= level(pair[1])));
}

#[test]
fn twenty_captures_made_with_numpy_are_recognised() {
    let truth = truth();
    let recognised: Vec<bool> = truth
        .par_iter()
        .map(|truth| {
            let name = truth["file"].as_str().unwrap();
            let found = recognise(&captured(name), &Search::default());
            assert!(found.matching && found.first_difference.is_none(), "{name}: {found:?}");
            assert!(holds(&found, truth), "{name}: {found:?}");
            true
        })
        .collect();
    assert_eq!(recognised.len(), 20);
}

#[test]
fn corrupted_captures_do_not_match_and_name_the_index() {
    let truth = truth();
    let checked: usize = truth
        .par_iter()
        .map(|truth| {
            let whole = captured(truth["file"].as_str().unwrap());
            // The modulus is known here, so that the search is short.
            let modulus = truth["m"].as_u64().unwrap();
            let known = Search { modulus: Some(modulus), ..Search::default() };
            let at = usize::try_from(truth["changed_at"].as_u64().unwrap()).unwrap();
            let mut changed = whole.clone();
            changed[at] += 1;
            let mut dropped = whole;
            dropped.remove(at);
            for (run, index) in
                [(changed, at), (dropped, usize::try_from(truth["dropped_differs_at"].as_u64().unwrap()).unwrap())]
            {
                let found = recognise(&run, &known);
                assert!(!found.matching, "{truth}");
                assert_eq!(found.first_difference, Some(index), "{truth}");
                assert_eq!(found.found[0].agreeing, index);
            }
            2
        })
        .sum();
    assert_eq!(checked, 40);
    // The same through the command, from files that numpy corrupted.
    for (file, index) in [("04-changed.npy", 1148), ("12-changed.npy", 1444), ("18-changed.txt", 1666)] {
        let path = captures().join(file);
        let modulus = ["65536", "251", "1024"][["04", "12", "18"].iter().position(|n| file.starts_with(n)).unwrap()];
        let found = json(&["--read", path.to_str().unwrap(), "--modulus", modulus]);
        assert_eq!(found["schema"], "thornmap.capture/1");
        assert_eq!(found["recognition"]["matching"], false);
        assert_eq!(found["recognition"]["first_difference"], index, "{file}");
    }
}

#[test]
fn written_files_are_read_back_as_the_run_that_made_them() {
    let folder = TempDir::new().unwrap();
    for name in ["run.csv", "run.hex", "run.npy"] {
        let settings = ["--word", "1001/2^12", "--order", "4", "--seeds", "1", "--length", "2500"];
        let mut all = settings.to_vec();
        all.extend(["--write", name, "--plot", "run.svg", "--quiet"]);
        let output = run_in(folder.path(), &all);
        assert_eq!(output.status.code(), Some(0), "{}", String::from_utf8_lossy(&output.stderr));
        let output = run_in(folder.path(), &["--read", name, "--json"]);
        let found: Value = serde_json::from_slice(&output.stdout).unwrap();
        assert_eq!(found["recognition"]["matching"], true, "{name}");
        let made = &found["recognition"]["found"][0];
        assert_eq!((made["k"].as_u64(), made["modulus"].as_u64()), (Some(1001), Some(4096)), "{name}");
        assert_eq!(made["settings"]["order"], 4);
        assert_eq!(found["capture"]["samples"], 2500);
    }
    let picture = fs::read_to_string(folder.path().join("run.svg")).unwrap();
    assert!(picture.starts_with("<svg") || picture.starts_with("<?xml"), "{}", &picture[..40]);
    assert!(fs::read_to_string(folder.path().join("run.hex")).unwrap().starts_with("// thornmap sequence 1\n"));
}

#[test]
fn a_capture_goes_through_the_detector_and_loop_of_a_plan() {
    // The plan's own run, captured, gives the tones that its channel has; levels from a record differ within 1 dB.
    let folder = TempDir::new().unwrap();
    let plan = Path::new(env!("CARGO_MANIFEST_DIR")).join("configs/demo.toml");
    let plan = plan.to_str().unwrap();
    let output = run_in(folder.path(), &[plan, "433.0875 MHz", "--length", "131072", "--write", "c.npy", "--quiet"]);
    assert_eq!(output.status.code(), Some(0), "{}", String::from_utf8_lossy(&output.stderr));
    let output = run_in(folder.path(), &[plan, "433.0875 MHz", "--read", "c.npy", "--json"]);
    let found: Value = serde_json::from_slice(&output.stdout).unwrap();
    assert_eq!(found["recognition"]["matching"], true);
    let output =
        Command::cargo_bin("thornmap").unwrap().args(["channel", plan, "433.0875 MHz", "--json"]).output().unwrap();
    let channel: Value = serde_json::from_slice(&output.stdout).unwrap();
    let expected = channel["channel"]["tones"]
        .as_array()
        .unwrap()
        .iter()
        .find(|tone| tone["p"] == 88 && tone["harmonic"] == 1)
        .unwrap();
    let first = &found["tones"][0];
    assert_eq!(first["harmonic"], 1);
    assert_eq!(first["offset_hz"], expected["offset_hz"]);
    let (seen, curve) =
        (first["nonlinearity_dbc"].as_f64().unwrap(), expected["contributions"]["nonlinearity_dbc"].as_f64().unwrap());
    assert!((seen - curve).abs() < 1.0, "{seen} against {curve}");
    // A capture of another word is not put through it.
    let output = run_in(folder.path(), &[plan, "434.7 MHz", "--read", "c.npy", "--modulus", "2^24"]);
    assert!(String::from_utf8_lossy(&output.stderr).contains("mean is not that of the channel's word"));
}

#[test]
fn mistakes_are_explained() {
    let folder = TempDir::new().unwrap();
    fs::write(folder.path().join("bad.txt"), "1\n0\n1.5\n").unwrap();
    fs::write(folder.path().join("empty.txt"), "").unwrap();
    for (arguments, status, said) in [
        (vec!["--word", "16/16"], 2, "K must be below M"),
        (vec!["--word", "16"], 2, "K/M"),
        (vec!["--word", "3/16", "--order", "9"], 2, "9"),
        (vec!["--word", "3/16", "--structure", "mesh"], 2, "known are"),
        (vec!["--word", "3/16", "--seeds", "16"], 2, "16"),
        (vec!["--word", "3/16", "--seeds", "1,2,3,4"], 2, "4"),
        (vec!["--word", "3/16", "--dither", "1:8:1"], 2, "8"),
        (vec!["--word", "3/16", "--write", "x.wav"], 2, ".csv, .hex or .npy"),
        (vec!["--word", "3/16", "--write", "none/x.csv"], 1, "cannot be written"),
        (vec!["--word", "3/16", "--best-seed", "8", "--within", "1 kHz"], 2, "--rate"),
        (vec!["--read", "none.txt"], 1, "cannot be read"),
        (vec!["--read", "bad.txt"], 2, "line 3"),
        (vec!["--read", "empty.txt"], 2, "no output"),
        (vec![], 2, "required"),
    ] {
        let output = run_in(folder.path(), &arguments);
        let message = String::from_utf8_lossy(&output.stderr).into_owned();
        assert_eq!(output.status.code(), Some(status), "{arguments:?}: {message}");
        assert!(message.contains(said), "{arguments:?}: {message}");
        assert!(!message.contains("panicked"));
    }
}
