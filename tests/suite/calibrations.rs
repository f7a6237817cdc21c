//! Measured tones fed back: known truth recovered, intervals that cover, tables and plans read and written.

use std::fmt::Write as _;
use std::fs;

use rand::rngs::StdRng;
use rand::{RngExt, SeedableRng};
use thornmap::assess::Setup;
use thornmap::decide::calibrate::calibrate;
use thornmap::plan::{Measured, Plan, parse_measurements, parse_plan};

/// Eight channels on both sides of an integer boundary; the anchor falls fast, so harmonics show the mismatch.
fn text(level: &str, mismatch: &str) -> String {
    format!(
        r#"schema = 1
# kept as typed
[reference]
frequency = "20 MHz"
[oscillator]
range = ["1.5 GHz", "2.0 GHz"]
gain = "30 MHz/V"
[modulator]
modulus = {{ step = "1 kHz" }}
order = 3
[detector]
current = "2 mA"
mismatch = {mismatch} # of the pump
leakage = "1 pA"
[loop]
bandwidth = "100 kHz"
phase_margin = "50 deg"
[boundary]
largest_q = 1
harmonics = 3
[[anchor]]
mechanism = "detector"
level = {level}
at = "1.70003 GHz"
roll_off = "40 dB"
[[channels]]
list = ["1.699953 GHz", "1.699971 GHz", "1.699983 GHz", "1.699989 GHz", "1.700013 GHz", "1.700019 GHz", "1.700031 GHz", "1.700047 GHz"]
[analysis]
record = 32768
"#
    )
}

fn plan(level: &str, mismatch: &str) -> Plan {
    parse_plan(&text(level, mismatch), "bench", &|_| Err("none".to_owned())).unwrap()
}

/// The levels that a true board shows at h = 1 and 2 of every channel, as a table, and the rows without noise.
fn true_rows(truth: &Plan) -> Vec<Measured> {
    let setup = Setup::new(truth).unwrap();
    let mut rows = String::from("channel,offset,level,rbw,note,group\n");
    for index in 0..8 {
        let channel = setup.assess_index(0, index, &mut setup.scratch()).unwrap();
        for tone in channel.tones.iter().filter(|tone| matches!(tone.harmonic, Some(1 | 2)) && !tone.after_loop) {
            let level = tone.known_level_dbc.unwrap();
            writeln!(rows, "{},{} Hz,{level} dBc,10 Hz,,", channel.channel, tone.offset_hz).unwrap();
        }
    }
    parse_measurements(&rows).unwrap()
}

/// A normal deviate by the method of Box and Muller.
fn normal(random: &mut StdRng) -> f64 {
    let (u, v): (f64, f64) = (random.random_range(1e-12..1.0), random.random_range(0.0..1.0));
    (-2.0 * u.ln()).sqrt() * (std::f64::consts::TAU * v).cos()
}

#[test]
fn known_truth_is_recovered_and_intervals_cover_it() {
    // Truth: anchor −45 dBc, mismatch 3 %; the plan believes −50 dBc and 2 %. Noise 1 dB on 8 channels.
    let (true_level, true_mismatch) = (-45.0, 0.03);
    let rows = true_rows(&plan("\"-45 dBc\"", "\"3 %\""));
    assert_eq!(rows.len(), 16);
    let believed = plan("\"-50 dBc\"", "\"2 %\"");
    // Without noise the truth comes back, but for the pulses' width, which does not scale with the mismatch.
    let exact = calibrate(&believed, &rows).unwrap();
    assert_eq!(exact.fitted.len(), 2, "{:?}", exact.not_fitted);
    assert!((exact.fitted[0].fitted - true_level).abs() < 0.05, "{:?}", exact.fitted[0]);
    assert!((exact.fitted[1].fitted / true_mismatch - 1.0).abs() < 0.01, "{:?}", exact.fitted[1]);
    let mut random = StdRng::seed_from_u64(77);
    let (mut trials, mut near, mut covered) = (0, [0, 0], [0, 0]);
    for _ in 0..200 {
        let mut noisy = rows.clone();
        for row in &mut noisy {
            row.level_dbc += normal(&mut random);
        }
        let found = calibrate(&believed, &noisy).unwrap();
        let (anchor, mismatch) = (&found.fitted[0], &found.fitted[1]);
        near[0] += u32::from((anchor.fitted - true_level).abs() < 1.0);
        near[1] += u32::from((mismatch.fitted / true_mismatch - 1.0).abs() < 0.15);
        covered[0] += u32::from(anchor.interval.0 <= true_level && true_level <= anchor.interval.1);
        covered[1] += u32::from(mismatch.interval.0 <= true_mismatch && true_mismatch <= mismatch.interval.1);
        trials += 1;
    }
    assert_eq!(trials, 200);
    assert!(near.iter().all(|n| *n >= 180), "within 1 dB and 15 %: {near:?} of 200");
    assert!(covered.iter().all(|n| *n >= 180), "covered: {covered:?} of 200");
}

#[test]
fn what_the_rows_do_not_tell_stays_as_planned() {
    let believed = plan("\"-50 dBc\"", "\"0.001 %\"");
    let rows: Vec<Measured> = true_rows(&plan("\"-45 dBc\"", "\"0.001 %\"")).into_iter().step_by(2).collect();
    let found = calibrate(&believed, &rows).unwrap();
    assert_eq!(found.fitted.len(), 1);
    assert!(
        found
            .not_fitted
            .iter()
            .any(|why| why.contains("detector.mismatch: at its planned value no measured tone depends on it"))
    );
    assert!(found.covered.iter().any(|sentence| sentence == "8 rows, channels 1.699953 GHz to 1.700047 GHz"));
    // A row where nothing is predicted is named, not used.
    let mut stray = rows;
    stray[0].offset = thornmap::base::Frequency::from_whole_hz(123_456);
    let found = calibrate(&believed, &stray).unwrap();
    assert!(found.rows[0].unused.as_ref().unwrap().contains("no tone is predicted"));
    assert_eq!(found.rows[0].fitted_dbc, None);
}

#[test]
fn an_upper_bound_counts_only_where_it_is_passed() {
    let believed = plan("\"-50 dBc\"", "\"2 %\"");
    let rows = true_rows(&plan("\"-45 dBc\"", "\"3 %\""));
    let with = |level: f64| {
        let mut rows = rows.clone();
        rows[0].is_bound = true;
        rows[0].level_dbc = level;
        calibrate(&believed, &rows).unwrap().fitted[0].fitted
    };
    let free = with(0.0);
    assert!((free + 45.0).abs() < 0.05, "a bound far above tells nothing: {free}");
    assert!(with(-60.0) < free - 0.1, "a bound below the fit pulls it down");
}

#[test]
fn tables_are_read_in_both_manners_and_faults_are_named_together() {
    let comma = parse_measurements("channel,offset,level\n433.2 MHz,7.5 kHz,-52 dBc\n433.3 MHz,8 kHz,\n").unwrap();
    assert_eq!(comma.len(), 1, "a row without a level was not measured");
    let semicolon =
        parse_measurements("note;channel;offset;level;rbw\nx;433,2 MHz;7,5 kHz;-52,0 dBc;100 Hz\n").unwrap();
    assert_eq!((semicolon[0].channel, semicolon[0].offset), (comma[0].channel, comma[0].offset));
    assert_eq!((semicolon[0].level_dbc, semicolon[0].rbw_hz), (-52.0, Some(100.0)));
    let problems =
        parse_measurements("channel,offset,level\n433.2,1 kHz,-52 dBc\n433.2 MHz,0 Hz,-5 dBm\n").unwrap_err();
    let text: Vec<String> = problems.iter().map(ToString::to_string).collect();
    assert_eq!(text.len(), 2, "{text:?}");
    assert!(text[0].starts_with("line 2, column channel") && text[1].starts_with("line 3, column level"), "{text:?}");
    let problems = parse_measurements("channel,ofset,level\n").unwrap_err();
    assert!(problems[0].to_string().contains("found the columns channel, ofset, level"), "{problems:?}");
}

#[test]
fn the_command_writes_a_plan_that_check_accepts() {
    let folder = tempfile::TempDir::new().unwrap();
    fs::write(folder.path().join("bench.toml"), text("\"-50 dBc\"", "\"2 %\"")).unwrap();
    let mut table = String::from("channel;offset;level;rbw;note;group\n");
    for row in true_rows(&plan("\"-45 dBc\"", "\"3 %\"")) {
        writeln!(table, "{};{};{} dBc;10 Hz;;", row.channel, row.offset, row.level_dbc).unwrap();
    }
    fs::write(folder.path().join("seen.csv"), table).unwrap();
    let run = |arguments: &[&str]| {
        assert_cmd::Command::cargo_bin("thornmap").unwrap().current_dir(folder.path()).args(arguments).output().unwrap()
    };
    let output = run(&["calibrate", "bench.toml", "seen.csv", "--write-plan", "after.toml", "--json"]);
    assert_eq!(output.status.code(), Some(0), "{}", String::from_utf8_lossy(&output.stderr));
    let json: serde_json::Value = serde_json::from_slice(&output.stdout).unwrap();
    assert_eq!(json["schema"], "thornmap.calibration/1");
    let fitted = json["fitted"][0]["fitted"].as_f64().unwrap();
    assert!((fitted + 45.0).abs() < 0.05, "{fitted}");
    let after = fs::read_to_string(folder.path().join("after.toml")).unwrap();
    assert!(after.contains("# kept as typed") && after.contains("# of the pump"), "{after}");
    assert_eq!(run(&["check", "after.toml"]).status.code(), Some(0));
    let plan = parse_plan(&after, "after", &|_| Err("none".to_owned())).unwrap();
    assert!((plan.anchors[0].level_dbc - fitted).abs() < 1e-3);
    assert_eq!(plan.anchors[0].basis, thornmap::base::Basis::Measured);
    // Calibrated again by the same rows, nothing moves.
    let output = run(&["calibrate", "after.toml", "seen.csv", "--json"]);
    let json: serde_json::Value = serde_json::from_slice(&output.stdout).unwrap();
    assert!(json["rows"][0]["residual_db"].as_f64().unwrap().abs() < 0.05);
    assert_eq!(run(&["calibrate", "bench.toml", "none.csv"]).status.code(), Some(1));
    fs::write(folder.path().join("bad.csv"), "channel,offset\n").unwrap();
    let output = run(&["calibrate", "bench.toml", "bad.csv"]);
    assert_eq!(output.status.code(), Some(2));
    assert!(String::from_utf8_lossy(&output.stderr).contains("column level: missing"));
}

/// The plan with its single mismatch and an offset current, and the anchor's text replaced.
fn offset_plan(offset: &str, mismatch: &str) -> Plan {
    let text = text("\"-150 dBc\"", &format!("\"{mismatch}\"")).replace("leakage =", &format!("{offset}\nleakage ="));
    parse_plan(&text, "bench", &|_| Err("none".to_owned())).unwrap()
}

#[test]
fn an_offset_current_is_fitted_where_the_rows_tell_it() {
    // Order 3, offset a good part of the way to the clear side, where the tone falls steeply and in no straight line.
    let rows = true_rows(&offset_plan("offset_current = \"31 uA\"", "3 %"));
    for (start, mismatch) in [("30 uA", "2 %"), ("29 uA", "4 %"), ("31 uA", "3 %")] {
        let found = calibrate(&offset_plan(&format!("offset_current = \"{start}\""), mismatch), &rows).unwrap();
        let figure = |key: &str| found.fitted.iter().find(|figure| figure.key == key).expect(key);
        let (current, share) = (figure("detector.offset_current"), figure("detector.mismatch"));
        assert!((current.fitted / 31e-6 - 1.0).abs() < 1e-3, "{start}: {current:?}");
        assert!((share.fitted / 0.03 - 1.0).abs() < 3e-3, "{start}: {share:?}");
        for (figure, truth) in [(current, 31e-6), (share, 0.03)] {
            assert!(figure.interval.0 < truth && truth < figure.interval.1, "{start}: {figure:?}");
            assert!(figure.interval.1 - figure.interval.0 > 1e-4 * truth, "no width: {figure:?}");
        }
        for row in found.rows.iter().filter(|row| row.unused.is_none()) {
            assert!((row.fitted_dbc.unwrap() - row.measured_dbc).abs() < 0.02, "{row:?}");
        }
    }
}

#[test]
fn an_offset_given_as_a_time_is_written_as_the_current_that_was_fitted() {
    let folder = tempfile::TempDir::new().unwrap();
    // 0.75 ns at 20 MHz of 2 mA is 30 uA.
    let believed = text("\"-150 dBc\"", "\"2 %\"").replace("leakage =", "offset_time = \"0.75 ns\" # bleed\nleakage =");
    fs::write(folder.path().join("bench.toml"), &believed).unwrap();
    let mut table = String::from("channel,offset,level\n");
    for row in true_rows(&offset_plan("offset_current = \"31 uA\"", "3 %")) {
        writeln!(table, "{},{},{} dBc", row.channel, row.offset, row.level_dbc).unwrap();
    }
    fs::write(folder.path().join("seen.csv"), table).unwrap();
    let run = |arguments: &[&str]| {
        assert_cmd::Command::cargo_bin("thornmap").unwrap().current_dir(folder.path()).args(arguments).output().unwrap()
    };
    // The plan read is never the plan written.
    let output = run(&["calibrate", "bench.toml", "seen.csv", "--write-plan", "./bench.toml"]);
    assert_eq!(output.status.code(), Some(2));
    assert!(String::from_utf8_lossy(&output.stderr).contains("is one of the files read"));
    assert_eq!(fs::read_to_string(folder.path().join("bench.toml")).unwrap(), believed);
    let output = run(&["calibrate", "bench.toml", "seen.csv", "--write-plan", "after.toml"]);
    assert_eq!(output.status.code(), Some(0), "{}", String::from_utf8_lossy(&output.stderr));
    assert!(String::from_utf8_lossy(&output.stderr).contains("places with a fitted figure: 2"));
    let after = fs::read_to_string(folder.path().join("after.toml")).unwrap();
    assert!(!after.contains("offset_time") && after.contains("# bleed"), "{after}");
    let plan = parse_plan(&after, "after", &|_| Err("none".to_owned())).unwrap();
    assert!((plan.detector.offset_current_a / 31e-6 - 1.0).abs() < 1e-3, "{}", plan.detector.offset_current_a);
}

#[test]
fn anchors_of_one_coupling_are_fitted_and_written_as_one() {
    let second = "[[anchor]]\nmechanism = \"detector\"\nlevel = \"-46 dBc\" # second board\noffset = \"50 kHz\"\nroll_off = \"40 dB\"\n[[channels]]";
    let two = text("\"-50 dBc\"", "\"2 %\"").replace("[[channels]]", second);
    let believed = parse_plan(&two, "bench", &|_| Err("none".to_owned())).unwrap();
    let rows = true_rows(&plan("\"-45 dBc\"", "\"3 %\""));
    let found = calibrate(&believed, &rows).unwrap();
    let coupling = &found.fitted[0];
    assert_eq!(coupling.key, "anchors 1, 2 as one coupling, level");
    assert!((coupling.fitted + 45.0).abs() < 0.05, "{coupling:?}");
    assert_eq!(coupling.places.len(), 2);
    assert!(!found.not_fitted.iter().any(|why| why.contains("anchor 2")), "{:?}", found.not_fitted);
    // Both are written, each with what the one coupling gives where it was taken: read again, they agree.
    let written = thornmap::report::calibrated_plan(&two, &found);
    assert_eq!((written.written, written.missed.len()), (3, 0));
    let after = parse_plan(&written.text, "after", &|_| Err("none".to_owned())).unwrap();
    let setup = Setup::new(&after).unwrap();
    assert_eq!(setup.anchors().len(), 1);
    assert!((setup.anchors()[0].level_dbc + 45.0).abs() < 0.05);
    assert!(!setup.warnings().iter().any(|warning| warning.contains("do not agree")), "{:?}", setup.warnings());
    let again = calibrate(&after, &rows).unwrap();
    assert!(again.rows.iter().all(|row| row.residual_db.unwrap().abs() < 0.05));
}

#[test]
fn a_row_of_which_a_part_is_unknown_is_not_used() {
    // Without an anchor the whole of the tone would be taken for mismatch: 2 % for a true 2 % and a coupling.
    let whole = text("\"-45 dBc\"", "\"2 %\"");
    let rows = true_rows(&parse_plan(&whole, "bench", &|_| Err("none".to_owned())).unwrap());
    let start = whole.find("[[anchor]]").unwrap();
    let end = whole.find("[[channels]]").unwrap();
    let without = format!("{}{}", &whole[..start], &whole[end..]);
    let found = calibrate(&parse_plan(&without, "bench", &|_| Err("none".to_owned())).unwrap(), &rows).unwrap();
    assert!(found.fitted.is_empty(), "{:?}", found.fitted);
    for row in &found.rows {
        let why = row.unused.as_ref().unwrap();
        assert!(why.contains("coupling: no anchor for q = 1") && why.contains("[[anchor]]"), "{why}");
        assert_eq!((row.predicted_dbc, row.fitted_dbc), (None, None));
    }
}

#[test]
fn a_roll_off_is_fitted_where_harmonics_show_it() {
    // Small mismatch, so that the harmonics are the coupling's own.
    let with = |level: &str, roll_off: &str| {
        let text = text(level, "\"0.01 %\"").replace("roll_off = \"40 dB\"", roll_off);
        parse_plan(&text, "bench", &|_| Err("none".to_owned())).unwrap()
    };
    let rows = true_rows(&with("\"-45 dBc\"", "roll_off = \"7 dB\""));
    let found = calibrate(&with("\"-50 dBc\"", ""), &rows).unwrap();
    let named = |key: &str| found.fitted.iter().find(|figure| figure.key == key).expect(key);
    let (level, roll_off) = (named("anchor 1 level"), named("anchor 1 roll-off"));
    assert!((level.fitted + 45.0).abs() < 0.05, "{level:?}");
    assert!((roll_off.fitted - 7.0).abs() < 0.05 && roll_off.planned == 0.0, "{roll_off:?}");
    assert!(roll_off.covered[0].starts_with("8 rows"), "only the harmonics tell it: {:?}", roll_off.covered);
    assert!(level.covered[0].starts_with("16 rows"), "{:?}", level.covered);
}

#[test]
fn couplings_of_two_boundaries_are_fitted_apart() {
    // Four channels near a whole multiple, four near a half: each coupling is told by its own.
    let with = |first: &str, second: &str| {
        let text = text(&format!("\"{first} dBc\""), "\"0.01 %\"").replace("largest_q = 1", "largest_q = 2").replace(
            "[[channels]]",
            &format!("[[anchor]]\nmechanism = \"detector\"\nq = 2\nlevel = \"{second} dBc\"\noffset = \"50 kHz\"\n[[channels]]"),
        );
        let text = ["1.699953", "1.699971", "1.700031", "1.700047"].iter().fold(text, |text, channel| {
            text.replace(channel, &channel.replace("1.70", "1.71").replace("1.699", "1.709"))
        });
        parse_plan(&text, "bench", &|_| Err("none".to_owned())).unwrap()
    };
    let rows = true_rows(&with("-45", "-60"));
    let found = calibrate(&with("-50", "-57"), &rows).unwrap();
    let named = |key: &str| found.fitted.iter().find(|figure| figure.key == key).expect(key);
    assert!((named("anchor 1 level").fitted + 45.0).abs() < 0.05, "{found:?}");
    assert!((named("anchor 2 level").fitted + 60.0).abs() < 0.05, "{found:?}");
}
