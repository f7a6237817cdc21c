//! The binary as a user runs it: exit status, messages, files.

use std::fs;
use std::path::Path;
use std::process::Output;

use assert_cmd::Command;
use serde_json::Value;
use tempfile::TempDir;

/// A small valid plan that runs in a blink.
const PLAN: &str = r#"schema = 1
[plan]
title = "two channels"
[reference]
frequency = "20 MHz"
[oscillator]
range = ["1.5 GHz", "2.0 GHz"]
gain = "30 MHz/V"
[modulator]
modulus = 1000
[detector]
current = "2 mA"
mismatch = "2 %"
leakage = "1 nA"
[loop]
bandwidth = "60 kHz"
phase_margin = "50 deg"
[limits]
spur = [["1 kHz", "-50 dBc"], ["1 MHz", "-80 dBc"]]
[[channels]]
name = "pair"
list = ["1.7 GHz", "1.70802 GHz"]
"#;

/// Returns the output of the program run in a folder.
fn run_in(folder: &Path, arguments: &[&str]) -> Output {
    Command::cargo_bin("thornmap").unwrap().current_dir(folder).args(arguments).output().unwrap()
}

/// Returns a folder that holds a plan file.
fn with_plan(text: &str) -> TempDir {
    let folder = TempDir::new().unwrap();
    fs::write(folder.path().join("plan.toml"), text).unwrap();
    folder
}

fn stderr(output: &Output) -> String {
    String::from_utf8(output.stderr.clone()).unwrap()
}

fn stdout(output: &Output) -> String {
    String::from_utf8(output.stdout.clone()).unwrap()
}

/// No message may look like a crash.
fn assert_calm(output: &Output) {
    for word in ["panicked", "RUST_BACKTRACE", "stack backtrace", "unwrap"] {
        assert!(!stderr(output).contains(word), "{}", stderr(output));
    }
}

#[test]
fn survey_writes_the_report_set() {
    let folder = with_plan(PLAN);
    let output = run_in(folder.path(), &["survey", "plan.toml"]);
    assert_eq!(output.status.code(), Some(0), "{}", stderr(&output));
    assert!(stdout(&output).is_empty());
    assert!(stderr(&output).contains("two channels: 2 channels"), "{}", stderr(&output));
    let set = folder.path().join("reports/plan");
    for name in ["report.html", "channels.csv", "survey.json"] {
        assert!(fs::metadata(set.join(name)).unwrap().len() > 100, "{name}");
    }
    assert!(fs::read_dir(set.join("plots")).unwrap().count() >= 3);
    let json: Value = serde_json::from_str(&fs::read_to_string(set.join("survey.json")).unwrap()).unwrap();
    assert_eq!(json["schema"], "thornmap.survey/1");
    assert_eq!(json["channels"].as_array().unwrap().len(), 2);
    // The same again: the set is replaced, and is the same to the byte.
    let first = fs::read(set.join("report.html")).unwrap();
    assert_eq!(run_in(folder.path(), &["survey", "plan.toml", "--quiet", "--jobs", "1"]).status.code(), Some(0));
    assert_eq!(fs::read(set.join("report.html")).unwrap(), first);
}

#[test]
fn json_is_alone_on_standard_output_and_equals_the_file() {
    let folder = with_plan(PLAN);
    let output = run_in(folder.path(), &["survey", "plan.toml", "--json", "--out", "set"]);
    let printed: Value = serde_json::from_str(&stdout(&output)).unwrap();
    let written: Value =
        serde_json::from_str(&fs::read_to_string(folder.path().join("set/survey.json")).unwrap()).unwrap();
    assert_eq!(printed, written);
    let output = run_in(folder.path(), &["channel", "plan.toml", "1.70802 GHz", "--json"]);
    let channel: Value = serde_json::from_str(&stdout(&output)).unwrap();
    assert_eq!(channel["schema"], "thornmap.channel/1");
    assert_eq!(channel["channel"], written["channels"][1]);
    let spectrum = &channel["spectrum"];
    assert_eq!(spectrum["offset_hz"].as_array().unwrap().len(), spectrum["total_dbc_per_hz"].as_array().unwrap().len());
}

#[test]
fn quiet_says_nothing_and_no_bar_is_drawn_off_a_terminal() {
    let folder = with_plan(PLAN);
    assert!(run_in(folder.path(), &["survey", "plan.toml", "--quiet"]).stderr.is_empty());
    let loud = run_in(folder.path(), &["survey", "plan.toml"]);
    assert_eq!(stderr(&loud).lines().count(), 1, "{}", stderr(&loud));
    assert!(!stderr(&loud).contains('\u{1b}'));
}

#[test]
fn fail_on_writes_everything_and_exits_with_three() {
    let folder = with_plan(PLAN);
    let bad = run_in(folder.path(), &["survey", "plan.toml", "--fail-on", "bad"]);
    assert_eq!(bad.status.code(), Some(3));
    assert!(folder.path().join("reports/plan/report.html").exists());
    let strict = PLAN.replace("list = [\"1.7 GHz\", \"1.70802 GHz\"]", "list = [\"1.7 GHz\"]");
    let clear = with_plan(&strict);
    assert_eq!(run_in(clear.path(), &["survey", "plan.toml", "--fail-on", "marginal"]).status.code(), Some(0));
    let channel = run_in(folder.path(), &["channel", "plan.toml", "1.70802 GHz", "--fail-on", "marginal"]);
    assert_eq!(channel.status.code(), Some(3));
}

#[test]
fn channel_shows_the_proof_of_its_verdict() {
    let folder = with_plan(PLAN);
    // 1708.02 MHz = 85·20 MHz + 401/1000·20 MHz: q = 5 at 5·401 mod 1000 = 5.
    let output = run_in(folder.path(), &["channel", "plan.toml", "1708.02 MHz"]);
    let text = stdout(&output);
    for part in ["N 85  K 401  M 1000", "verdict: ", "no compliance measurement", "local rules decide", "unity gain"] {
        assert!(text.contains(part), "{part} in\n{text}");
    }
    let off_raster = run_in(folder.path(), &["channel", "plan.toml", "1.705 GHz", "--group", "pair"]);
    assert_eq!(off_raster.status.code(), Some(0));
    assert!(stderr(&off_raster).contains("not on the raster"));
}

#[test]
fn frequencies_that_no_group_holds_are_refused_with_the_ranges() {
    let folder = with_plan(PLAN);
    for (typed, part) in [
        ("1.9 GHz", "no group holds channel 1.9 GHz"),
        ("1.9", "has no unit"),
        ("-1 GHz", "must be above zero"),
        ("fast", "is not a number"),
        ("1.9 ghz", "did you mean"),
    ] {
        let output = run_in(folder.path(), &["channel", "plan.toml", typed]);
        // A leading minus is taken for an option by the command line's own rules.
        assert_eq!(output.status.code(), Some(2), "{typed}");
        assert!(stderr(&output).contains(part) || typed.starts_with('-'), "{typed}: {}", stderr(&output));
        assert_calm(&output);
    }
    let output = run_in(folder.path(), &["channel", "plan.toml", "1.7 GHz", "--group", "third"]);
    assert!(stderr(&output).contains("the plan has no group \"third\""));
    assert!(stderr(&output).contains("\"pair\": 1.7 GHz to 1.70802 GHz"));
}

/// (what is exchanged, by what, phrases of the message).
const BAD_PLANS: &[(&str, &str, &[&str])] = &[
    ("\"20 MHz\"", "\"20 mA\"", &["reference.frequency", "\"mA\"", "accepted are Hz, kHz, MHz, GHz"]),
    ("\"20 MHz\"", "\"20\"", &["has no unit", "accepted are Hz"]),
    ("\"20 MHz\"", "20e6", &["accepted are Hz", "in quotes"]),
    ("\"20 MHz\"", "\"20 mhz\"", &["case-sensitive", "did you mean"]),
    ("\"20 MHz\"", "\"-20 MHz\"", &["must be above zero"]),
    ("\"20 MHz\"", "\"NaN MHz\"", &["is not a number"]),
    ("\"20 MHz\"", "\"1e31 Hz\"", &["1e30"]),
    ("frequency =", "freqency =", &["unknown key", "did you mean \"frequency\"?", "missing"]),
    ("[oscillator]", "[oscilator]", &["unknown section", "did you mean \"oscillator\"?"]),
    ("modulus = 1000", "modulus = 1000\nseeds = [1000]", &["seed", "1000"]),
    ("modulus = 1000", "modulus = 1000\norder = 9", &["modulator.order", "9", "0 to 5"]),
    ("modulus = 1000", "modulus = 1", &["modulator.modulus", "2"]),
    ("modulus = 1000", "modulus = \"2^60\"", &["2^b", "1 to 48"]),
    ("modulus = 1000", "structure = \"mosh\"", &["found \"mosh\"", "did you mean \"mash\"?"]),
    ("list = [\"1.7 GHz\", \"1.70802 GHz\"]", "list = []", &["empty list"]),
    ("list = [\"1.7 GHz\", \"1.70802 GHz\"]", "", &["no channels"]),
    (
        "list = [\"1.7 GHz\", \"1.70802 GHz\"]",
        "first = \"1.8 GHz\"\nlast = \"1.7 GHz\"\nspacing = \"1 MHz\"",
        &["below first", "exchange first and last"],
    ),
    (
        "list = [\"1.7 GHz\", \"1.70802 GHz\"]",
        "first = \"1.7 GHz\"\nlast = \"1.8 GHz\"\nspacing = \"0 Hz\"",
        &["spacing", "must be above zero"],
    ),
    (
        "list = [\"1.7 GHz\", \"1.70802 GHz\"]",
        "first = \"1 Hz\"\nlast = \"1 GHz\"\nspacing = \"1 Hz\"",
        &["1000000000 channels", "at most 10000000"],
    ),
    ("schema = 1", "schema = 2", &["schema", "found 2"]),
    ("schema = 1\n", "", &["schema", "missing"]),
    ("phase_margin = \"50 deg\"", "phase_margin = \"95 deg\"", &["below 90 deg"]),
    ("phase_margin = \"50 deg\"", "", &["phase_margin", "missing"]),
    ("title = \"two channels\"", "title = \"two channels", &["not valid TOML"]),
    ("\"-80 dBc\"", "\"-80 dB\"", &["limits.spur", "dBc"]),
    ("[\"1 MHz\", \"-80 dBc\"]", "[\"1 kHz\", \"-80 dBc\"]", &["rise strictly"]),
    (
        "mismatch = \"2 %\"",
        "mismatch = { value = \"2 %\", basis = \"guessed\" }",
        &["\"measured\", \"datasheet\", \"assumed\""],
    ),
];

#[test]
fn bad_plans_are_refused_with_line_column_and_a_way_out() {
    for (from, to, phrases) in BAD_PLANS {
        let text = PLAN.replacen(from, to, 1);
        assert_ne!(text, PLAN, "{from} is in the plan");
        let folder = with_plan(&text);
        for command in [&["check", "plan.toml"][..], &["survey", "plan.toml"][..]] {
            let output = run_in(folder.path(), command);
            let message = stderr(&output);
            assert_eq!(output.status.code(), Some(2), "{to}: {message}");
            for phrase in *phrases {
                assert!(message.contains(phrase), "{phrase} in:\n{message}");
            }
            assert!(message.contains("plan.toml:"), "{message}");
            assert_calm(&output);
        }
        assert!(!folder.path().join("reports").exists(), "nothing is half-written");
    }
    assert_eq!(BAD_PLANS.len(), 27);
}

#[test]
fn every_problem_is_told_at_once() {
    let text = PLAN.replace("\"20 MHz\"", "\"20\"").replace("\"2 mA\"", "2").replace("bandwidth", "bandwith");
    let folder = with_plan(&text);
    let message = stderr(&run_in(folder.path(), &["check", "plan.toml"]));
    for part in ["reference.frequency", "detector.current", "bandwith", "plan.toml:5:", "plan.toml:12:"] {
        assert!(message.contains(part), "{part} in:\n{message}");
    }
}

#[test]
fn paths_that_cannot_be_used_exit_with_one() {
    let folder = with_plan(PLAN);
    let root = folder.path();
    fs::create_dir(root.join("folder.toml")).unwrap();
    fs::write(root.join("file"), "mine").unwrap();
    fs::create_dir(root.join("full")).unwrap();
    fs::write(root.join("full/mine.txt"), "mine").unwrap();
    let cases: [(&[&str], &str); 5] = [
        (&["survey", "absent.toml"], "no such file"),
        (&["survey", "folder.toml"], "is a folder"),
        (&["survey", "plan.toml", "--out", "file"], "file"),
        (&["survey", "plan.toml", "--out", "file/below"], "file"),
        (&["survey", "plan.toml", "--out", "full"], "full"),
    ];
    for (arguments, part) in cases {
        let output = run_in(root, arguments);
        assert_eq!(output.status.code(), Some(1), "{arguments:?}: {}", stderr(&output));
        assert!(stderr(&output).contains(part), "{arguments:?}: {}", stderr(&output));
        assert_calm(&output);
    }
    assert_eq!(fs::read_to_string(root.join("file")).unwrap(), "mine");
    assert_eq!(fs::read_dir(root.join("full")).unwrap().count(), 1);
}

#[test]
fn text_that_is_not_utf_8_is_refused_as_content() {
    let folder = TempDir::new().unwrap();
    let mut bytes = PLAN.as_bytes().to_vec();
    bytes.extend([b'#', 0xff, b'\n']);
    fs::write(folder.path().join("plan.toml"), bytes).unwrap();
    let output = run_in(folder.path(), &["survey", "plan.toml"]);
    assert_eq!(output.status.code(), Some(2));
    assert!(stderr(&output).contains("UTF-8"), "{}", stderr(&output));
}

#[test]
fn plans_that_cannot_work_are_refused_as_a_whole() {
    let cases = [
        (
            "[\"1.5 GHz\", \"2.0 GHz\"]",
            "[\"2.5 GHz\", \"3.0 GHz\"]",
            "no channel has a legal word",
            "oscillator range, lower end",
        ),
        ("bandwidth = \"60 kHz\"", "bandwidth = \"6 MHz\"", "unstable", "raise the PFD frequency"),
        (
            "leakage = \"1 nA\"",
            "maximum_frequency = \"10 MHz\"",
            "no channel has a legal word",
            "maximum PFD frequency",
        ),
    ];
    for (from, to, one, two) in cases {
        let folder = with_plan(&PLAN.replacen(from, to, 1));
        let output = run_in(folder.path(), &["survey", "plan.toml"]);
        assert_eq!(output.status.code(), Some(2), "{}", stderr(&output));
        assert!(stderr(&output).contains(one) && stderr(&output).contains(two), "{}", stderr(&output));
        assert_calm(&output);
        assert!(!folder.path().join("reports").exists());
    }
    let folder = with_plan(&PLAN.replacen("bandwidth = \"60 kHz\"", "bandwidth = \"1.2 MHz\"", 1));
    let output = run_in(folder.path(), &["survey", "plan.toml"]);
    assert_eq!(output.status.code(), Some(0));
    assert!(stderr(&output).contains("more than a twentieth of the PFD frequency"), "{}", stderr(&output));
}

#[test]
fn an_old_set_survives_a_failed_run() {
    let folder = with_plan(PLAN);
    assert!(run_in(folder.path(), &["survey", "plan.toml", "--out", "set"]).status.success());
    let before = fs::read(folder.path().join("set/survey.json")).unwrap();
    fs::write(folder.path().join("plan.toml"), PLAN.replace("20 MHz", "20")).unwrap();
    assert_eq!(run_in(folder.path(), &["survey", "plan.toml", "--out", "set"]).status.code(), Some(2));
    assert_eq!(fs::read(folder.path().join("set/survey.json")).unwrap(), before);
    let left: Vec<_> = fs::read_dir(folder.path()).unwrap().map(|entry| entry.unwrap().file_name()).collect();
    assert_eq!(left.len(), 2, "{left:?}");
}

#[test]
fn usage_errors_exit_with_two_and_help_with_zero() {
    let folder = TempDir::new().unwrap();
    for arguments in [&["surwey"][..], &["survey", "--jobs", "0"], &["survey", "--fail-on", "never"], &["channel"], &[]]
    {
        let output = run_in(folder.path(), arguments);
        assert_eq!(output.status.code(), Some(2), "{arguments:?}");
        assert_calm(&output);
    }
    for arguments in [&["--help"][..], &["survey", "--help"], &["--version"]] {
        assert_eq!(run_in(folder.path(), arguments).status.code(), Some(0), "{arguments:?}");
    }
}

#[test]
fn example_checks_itself_and_schema_is_json() {
    let folder = TempDir::new().unwrap();
    let example = run_in(folder.path(), &["example"]);
    fs::write(folder.path().join("start.toml"), &example.stdout).unwrap();
    let check = run_in(folder.path(), &["check", "start.toml"]);
    assert_eq!(check.status.code(), Some(0), "{}", stderr(&check));
    assert!(stdout(&check).contains("valid plan"));
    let schema: Value = serde_json::from_str(&stdout(&run_in(folder.path(), &["schema"]))).unwrap();
    assert_eq!(schema["$schema"], "https://json-schema.org/draft/2020-12/schema");
    for shell in ["bash", "zsh", "fish"] {
        assert!(stdout(&run_in(folder.path(), &["completions", shell])).contains("thornmap"));
    }
    assert!(stdout(&run_in(folder.path(), &["man"])).contains(".TH thornmap"));
}

#[test]
fn a_reader_that_goes_away_is_no_fault() {
    let folder = with_plan(PLAN);
    let binary = assert_cmd::cargo::cargo_bin("thornmap");
    let status = std::process::Command::new("sh")
        .current_dir(folder.path())
        .args(["-c", &format!("'{}' schema | head -c 1 >/dev/null; echo done", binary.display())])
        .output()
        .unwrap();
    assert!(String::from_utf8_lossy(&status.stderr).is_empty(), "{}", String::from_utf8_lossy(&status.stderr));
}

#[test]
fn the_built_in_plan_needs_no_file() {
    let folder = TempDir::new().unwrap();
    let output = run_in(folder.path(), &["survey", "--quiet"]);
    assert_eq!(output.status.code(), Some(0), "{}", stderr(&output));
    assert!(folder.path().join("reports/demo/report.html").exists());
}

#[test]
fn channel_draws_its_budget_and_what_an_offset_current_does() {
    let folder = with_plan(PLAN);
    let output = run_in(folder.path(), &["channel", "plan.toml", "1.70802 GHz", "--out", "pictures", "--json"]);
    assert_eq!(output.status.code(), Some(0), "{}", stderr(&output));
    for name in ["budget.svg", "offset.svg", "channel.json"] {
        assert!(fs::metadata(folder.path().join("pictures").join(name)).unwrap().len() > 1000, "{name}");
    }
    let json: Value = serde_json::from_str(&stdout(&output)).unwrap();
    assert!(json["assumptions"].as_array().unwrap().iter().any(|a| a["key"] == "loop.design_divider"));
    // Order 3 clears its kink at 2 cycles: 2·I/(N + K/M) = 2 · 2 mA / 85.401.
    let said = stderr(&output);
    assert!(said.contains("46.8379 uA (2 VCO cycles)"), "{said}");
}
