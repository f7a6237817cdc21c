//! Two surveys compared: the changed input is named, and nothing is guessed.

use serde_json::{Value, json};
use thornmap::assess::Verdict;
use thornmap::decide::diff::{Cause, Difference, SurveyFile, SurveyFileError, compare_surveys, parse_survey};
use thornmap::plan::parse_plan;
use thornmap::report::{Detail, RenderOptions, difference_html, difference_json, difference_text, survey_json};
use thornmap::survey::survey;

/// The demonstration plan cut down to a few channels: near an integer, exactly on it, on a third, on a half.
fn demo_text() -> String {
    // A modulus of 2^16 keeps every period short: the whole of it is transformed in a blink.
    std::fs::read_to_string(concat!(env!("CARGO_MANIFEST_DIR"), "/configs/demo.toml"))
        .unwrap()
        .replace("modulus = \"2^24\"", "modulus = \"2^16\"")
        .replace(
            "first = \"433.0750 MHz\"\nlast = \"434.7750 MHz\"",
            "first = \"433.0875 MHz\"\nlast = \"433.1125 MHz\"",
        )
        .replace(
            "first = \"439.0750 MHz\"\nlast = \"441.7750 MHz\"",
            "first = \"439.1875 MHz\"\nlast = \"439.2125 MHz\"",
        )
}

fn survey_text(plan: &str, detail: Detail) -> String {
    let plan = parse_plan(plan, "demo", &|_| Err("none".to_owned())).unwrap();
    survey_json(&survey(&plan, &|_| {}).unwrap(), &RenderOptions { detail, ..RenderOptions::default() }).unwrap()
}

fn surveyed(plan: &str) -> SurveyFile {
    parse_survey(survey_text(plan, Detail::All).as_bytes()).unwrap()
}

/// One change to the plan text: what stands there, what shall, and the key that must be named.
const CHANGES: [(&str, &str, &str); 26] = [
    ("value = \"19.2 MHz\"", "value = \"19.2001 MHz\"", "reference.frequency"),
    ("value = \"2 ppm\"", "value = \"3 ppm\"", "reference.tolerance"),
    ("[\"1 kHz\", \"-145 dBc/Hz\"]", "[\"1 kHz\", \"-140 dBc/Hz\"]", "reference.noise"),
    ("value = [\"1.65 GHz\", \"1.85 GHz\"]", "value = [\"1.65 GHz\", \"1.95 GHz\"]", "oscillator.range"),
    ("[\"1.75 GHz\", \"32 MHz/V\"]", "[\"1.75 GHz\", \"33 MHz/V\"]", "oscillator.gain"),
    ("[\"1 MHz\", \"-133 dBc/Hz\"]", "[\"1 MHz\", \"-136 dBc/Hz\"]", "oscillator.noise"),
    ("minimum = 24", "minimum = 32", "divider.minimum"),
    ("maximum = 4095", "maximum = 2047", "divider.maximum"),
    ("value = \"-160 dBc/Hz\"", "value = \"-150 dBc/Hz\"", "divider.floor"),
    ("order = 3\n", "order = 4\n", "modulator.order"),
    ("modulus = \"2^16\"", "modulus = 6144", "modulator.modulus"),
    ("seeds = [1, 0, 0]", "seeds = [3, 0, 0]", "modulator.seeds"),
    ("current = \"2.5 mA\"", "current = \"2 mA\"", "detector.current"),
    ("value = \"2 %\"", "value = \"3 %\"", "detector.mismatch"),
    ("value = \"1 nA\"", "value = \"20 nA\"", "detector.leakage"),
    ("value = \"-226 dBc/Hz\"", "value = \"-220 dBc/Hz\"", "detector.floor"),
    ("value = \"-118 dBc/Hz\"", "value = \"-110 dBc/Hz\"", "detector.flicker"),
    ("bandwidth = \"60 kHz\"", "bandwidth = \"70 kHz\"", "loop.bandwidth"),
    ("phase_margin = \"50 deg\"", "phase_margin = \"55 deg\"", "loop.phase_margin"),
    ("guard = \"100 kHz\"", "guard = \"0.4 %\"", "boundary.guard"),
    ("harmonics = 5", "harmonics = 4", "boundary.harmonics"),
    ("value = \"-58 dBc\"", "value = \"-50 dBc\"", "anchor[1].level"),
    ("frequency = \"26 MHz\"", "frequency = \"27 MHz\"", "clock[1].frequency"),
    ("value = \"4 dB\"", "value = \"9 dB\"", "limits.margin"),
    ("injection = \"-10.7 MHz\"", "injection = \"-10.8 MHz\"", "channels[1].injection"),
    ("span = \"3 MHz\"", "span = \"2 MHz\"", "analysis.span"),
];

#[test]
fn one_changed_key_is_named_and_no_other() {
    let plan = demo_text();
    let old = surveyed(&plan);
    let (mut cases, mut explained) = (0, 0);
    for (find, replace, key) in CHANGES {
        assert_eq!(plan.matches(find).count(), 1, "{find}");
        let found = compare_surveys(&old, &surveyed(&plan.replace(find, replace)));
        let acting: Vec<&str> = found.inputs.iter().filter(|input| input.acts()).map(|i| i.input.as_str()).collect();
        assert_eq!(acting, [key]);
        let input = found.inputs.iter().find(|input| input.input == key).unwrap();
        assert!(input.keys.iter().all(|change| change.old != change.new));
        match &found.cause {
            Cause::OneInput { input } => {
                assert_eq!(input, key);
                explained += 1;
            }
            Cause::NothingToExplain => assert!(found.channels.is_empty()),
            other => panic!("{key}: {other:?}"),
        }
        assert!(difference_text(&found).contains(&input.keys[0].key), "{key}");
        cases += 1;
    }
    assert_eq!(cases, 26);
    assert!(explained >= 10, "only {explained} changes reached a channel");
}

#[test]
fn several_changed_inputs_are_all_named_and_none_is_picked() {
    let plan = demo_text();
    let both = plan.replace("value = \"-58 dBc\"", "value = \"-50 dBc\"").replace("order = 3\n", "order = 4\n");
    let found = compare_surveys(&surveyed(&plan), &surveyed(&both));
    let Cause::SeveralInputs { inputs, version_changed } = &found.cause else { panic!("{:?}", found.cause) };
    assert_eq!(
        (inputs.as_slice(), *version_changed),
        (["anchor[1].level".into(), "modulator.order".into()].as_slice(), false)
    );
    assert!(difference_text(&found).contains("cannot be told from two surveys"));
}

#[test]
fn equal_surveys_differ_in_nothing() {
    let survey = surveyed(&demo_text());
    let found = compare_surveys(&survey, &survey);
    assert_eq!(found.cause, Cause::NothingToExplain);
    assert!(found.channels.is_empty() && found.inputs.is_empty() && found.warnings.is_empty());
    assert_eq!((found.counts.common, found.worse_to(Verdict::Marginal)), (6, 0));
    // Comments change the file's hash and nothing else.
    let found = compare_surveys(&survey, &surveyed(&format!("# a comment\n{}", demo_text())));
    assert_eq!(found.cause, Cause::NothingToExplain);
    assert!(found.warnings.iter().any(|warning| warning.contains("plan files differ")), "{:?}", found.warnings);
}

/// A survey put together by hand: levels and verdicts are free.
fn by_hand(edit: &dyn Fn(&mut Value)) -> SurveyFile {
    let tone = |label: &str, level: Value| json!({ "origin": "boundary", "label": label, "offset_hz": 50000.0, "level_dbc": level, "known_level_dbc": level });
    let channel = |hz: &str, verdict: &str| {
        json!({ "group": "g", "channel_exact": hz, "verdict": verdict, "reasons": [], "legal": true, "n": 88, "k": 1,
            "m": 16, "tones": [tone("boundary 88/1", json!(-60.0)), tone("2 × K/M", Value::Null)] })
    };
    let mut survey = json!({
        "schema": "thornmap.survey/1", "version": "0.1.0", "plan_sha256": "00",
        "plan": { "identity": { "title": "t" }, "detector": { "mismatch": { "constant": 0.02 } }, "groups": [
            { "name": "g", "channels": { "raster": { "first": "400 Hz", "spacing": "25/3 Hz", "count": 3 } } } ] },
        "channels_omitted": 0, "assumptions": [],
        "channels": [channel("400 Hz", "clear"), channel("1225/3 Hz", "marginal"), channel("1250/3 Hz", "bad")]
    });
    edit(&mut survey);
    parse_survey(survey.to_string().as_bytes()).unwrap()
}

fn against(edit: &dyn Fn(&mut Value)) -> Difference {
    compare_surveys(&by_hand(&|_| {}), &by_hand(edit))
}

#[test]
fn tone_changes_start_at_a_tenth_of_a_decibel() {
    let cases: [(Value, Option<&str>); 8] = [
        (json!(-60.0), None),
        (json!(-60.0999), None),
        (json!(-59.9001), None),
        (json!(-60.1), Some("level")),
        (json!(-59.9), Some("level")),
        (json!(-70), Some("level")),
        (Value::Null, Some("became unknown")),
        (json!("gone"), Some("gone")),
    ];
    let mut count = 0;
    for (level, want) in cases {
        let found = against(&|survey| {
            let tones = survey["channels"][0]["tones"].as_array_mut().unwrap();
            if level == "gone" {
                tones.remove(0);
            } else {
                tones[0]["level_dbc"] = level.clone();
            }
        });
        let change = found.channels.first().map(|channel| channel.tones[0].change);
        assert_eq!(change, want, "{level}");
        count += 1;
    }
    assert_eq!(count, 8);
    let known = against(&|survey| survey["channels"][0]["tones"][1]["level_dbc"] = json!(-80.0));
    assert_eq!(known.channels[0].tones[0].change, "became known");
    assert_eq!(known.channels[0].tones[0].change_db, None, "no figure stands for unknown");
    let part = against(&|survey| survey["channels"][0]["tones"][1]["known_level_dbc"] = json!(-80.0));
    assert_eq!(part.channels[0].tones[0].change, "known part");
    let moved = against(&|survey| survey["channels"][0]["tones"][0]["offset_hz"] = json!(50001.0));
    assert_eq!(moved.channels[0].tones[0].change, "moved");
    // The channel has changed, no input has: unknown, and said so.
    assert_eq!(moved.cause, Cause::Unknown);
}

#[test]
fn words_verdicts_and_lone_channels_are_found() {
    let found = against(&|survey| {
        survey["channels"][0]["k"] = json!(2);
        survey["channels"][0]["verdict"] = json!("bad");
        survey["channels"][1]["verdict"] = json!("clear");
        survey["channels"][2]["channel_exact"] = json!("500 Hz");
    });
    assert_eq!(found.channels.len(), 2);
    let word = &found.channels[0].word[0];
    assert_eq!((word.key, word.old.as_str(), word.new.as_str()), ("k", "1", "2"));
    assert_eq!((found.counts.worse, found.counts.better, found.counts.added, found.counts.removed), (1, 1, 1, 1));
    assert_eq!(
        (found.added[0].channel_exact.as_str(), found.removed[0].channel_exact.as_str()),
        ("500 Hz", "1250/3 Hz")
    );
    assert_eq!((found.worse_to(Verdict::Bad), found.worse_to(Verdict::Marginal)), (1, 1));
    let only_marginal = against(&|survey| survey["channels"][0]["verdict"] = json!("marginal"));
    assert_eq!((only_marginal.worse_to(Verdict::Bad), only_marginal.worse_to(Verdict::Marginal)), (0, 1));
}

#[test]
fn a_survey_that_lists_flagged_channels_only_is_no_survey_without_the_others() {
    // The new survey leaves out its clear channel: that one is not removed, and its tones are not gone.
    let flagged = |survey: &mut Value| {
        survey["channels"].as_array_mut().unwrap().remove(0);
        survey["channels_omitted"] = json!(1);
    };
    let found = against(&flagged);
    assert!(found.removed.is_empty() && found.channels.is_empty(), "{found:?}");
    assert!(found.warnings.iter().any(|warning| warning.contains("leaves out 1 clear")));
    let worse = compare_surveys(&by_hand(&flagged), &by_hand(&|s| s["channels"][0]["verdict"] = json!("bad")));
    let change = &worse.channels[0];
    assert_eq!(change.verdict.as_ref().map(|v| (v.old, v.new)), Some((Verdict::Clear, Verdict::Bad)));
    assert!(!change.compared_in_full && worse.added.is_empty());
    // The real thing: the same plan in full and flagged only.
    let (all, few) = (survey_text(&demo_text(), Detail::All), survey_text(&demo_text(), Detail::Flagged));
    let found = compare_surveys(&parse_survey(all.as_bytes()).unwrap(), &parse_survey(few.as_bytes()).unwrap());
    assert!(found.channels.is_empty() && found.removed.is_empty() && found.added.is_empty());
}

#[test]
fn versions_and_layouts_are_warned_about() {
    let found = against(&|survey| survey["version"] = json!("0.2.0"));
    assert!(found.warnings[0].contains("different versions (0.1.0, 0.2.0)"), "{:?}", found.warnings);
    assert_eq!(found.cause, Cause::NothingToExplain);
    let changed = against(&|survey| {
        survey["version"] = json!("0.2.0");
        survey["channels"][0]["verdict"] = json!("bad");
    });
    assert_eq!(changed.cause, Cause::ProgramVersion);
    let both = against(&|survey| {
        survey["version"] = json!("0.2.0");
        survey["plan"]["detector"]["mismatch"] = json!({ "table": [[0, 0.02]] });
        survey["channels"][0]["verdict"] = json!("bad");
    });
    assert_eq!(both.cause, Cause::SeveralInputs { inputs: vec!["detector.mismatch".into()], version_changed: true });
    let layout = against(&|survey| survey["schema"] = json!("thornmap.survey/2"));
    assert!(layout.warnings.iter().any(|warning| warning.contains("different layouts")), "{:?}", layout.warnings);
}

#[test]
fn other_files_are_refused_with_the_reason() {
    let whole = survey_text(&demo_text(), Detail::All);
    let mut cuts = 0;
    for part in 1..40 {
        let cut = whole.len() * part / 40;
        let cut = (0..=cut).rev().find(|at| whole.is_char_boundary(*at)).unwrap();
        assert!(matches!(parse_survey(&whole.as_bytes()[..cut]), Err(SurveyFileError::Truncated { .. })), "{cut}");
        cuts += 1;
    }
    assert_eq!(cuts, 39);
    let refusals: [(&[u8], &str); 9] = [
        (b"", "is not JSON"),
        (b"schema = 1", "is not JSON"),
        (b"\xff\xfe", "not UTF-8"),
        (b"[]", "it is no JSON object"),
        (b"{}", "it has no schema"),
        (b"{\"schema\": 1}", "its schema is 1"),
        (b"{\"schema\": \"thornmap.channel/1\"}", "its schema is \"thornmap.channel/1\""),
        (b"{\"schema\": \"thornmap.survey/1\"}", "missing field"),
        (
            b"{\"schema\": \"thornmap.survey/1\", \"version\": \"1\", \"plan_sha256\": \"\", \"plan\": {}, \"assumptions\": [],
              \"channels\": [{\"group\": \"g\", \"channel_exact\": \"1 Hz\", \"verdict\": \"good\", \"reasons\": [], \"tones\": []}]}",
            "channel 1: verdict \"good\"",
        ),
    ];
    let mut count = 0;
    for (bytes, want) in refusals {
        let message = parse_survey(bytes).unwrap_err().to_string();
        assert!(message.contains(want), "{message}");
        count += 1;
    }
    assert_eq!(count, 9);
}

#[test]
fn the_page_is_self_contained_and_escaped() {
    let found = against(&|survey| {
        survey["plan"]["identity"]["title"] = json!("<script>alert(1)</script>");
        survey["channels"][0]["verdict"] = json!("bad");
        survey["channels"][0]["reasons"] = json!([{ "rule": "B2", "text": "<img src=x onerror=y>" }]);
        survey["channels"][0]["tones"][0]["label"] = json!("<b>label</b>");
    });
    let page = difference_html(&found).unwrap();
    for forbidden in ["<script", "<img", "<b>", "http://", "https://", "src=\"", "<link"] {
        assert!(!page.contains(forbidden), "{forbidden}");
    }
    assert!(page.contains("&#60;script&#62;") || page.contains("&lt;script&gt;"), "the title is there, escaped");
    assert!(page.contains("clear → bad") && page.contains("default-src"));
    let json: Value = serde_json::from_str(&difference_json(&found).unwrap()).unwrap();
    assert_eq!(json["schema"], "thornmap.diff/1");
    assert_eq!(json["channels"][0]["verdict"], json!({ "old": "clear", "new": "bad" }));
    assert_eq!(json["channels"][0]["tones"][0]["change_db"], Value::Null);
}

#[test]
fn the_binary_exits_by_meaning() {
    let folder = tempfile::TempDir::new().unwrap();
    let write = |name: &str, text: &str| std::fs::write(folder.path().join(name), text).unwrap();
    let plan = demo_text();
    write("old.json", &survey_text(&plan.replace("value = \"-58 dBc\"", "value = \"-90 dBc\""), Detail::All));
    write("new.json", &survey_text(&plan.replace("value = \"-58 dBc\"", "value = \"-40 dBc\""), Detail::All));
    write("plan.toml", &plan);
    let run = |arguments: &[&str]| {
        assert_cmd::Command::cargo_bin("thornmap").unwrap().current_dir(folder.path()).args(arguments).output().unwrap()
    };
    let output = run(&["diff", "old.json", "new.json", "--html", "diff.html", "--json"]);
    assert_eq!(output.status.code(), Some(0), "{}", String::from_utf8_lossy(&output.stderr));
    let json: Value = serde_json::from_slice(&output.stdout).unwrap();
    assert_eq!(json["cause"], json!({ "kind": "one-input", "input": "anchor[1].level" }));
    assert!(folder.path().join("diff.html").exists());
    let worse = json["counts"]["worse"].as_u64().unwrap();
    assert!(worse > 0);
    assert_eq!(run(&["diff", "old.json", "new.json", "--fail-on", "bad"]).status.code(), Some(3));
    assert_eq!(run(&["diff", "new.json", "old.json", "--fail-on", "marginal"]).status.code(), Some(0));
    assert_eq!(run(&["diff", "old.json", "absent.json"]).status.code(), Some(1));
    assert_eq!(run(&["diff", "old.json", "plan.toml"]).status.code(), Some(2));
    assert_eq!(run(&["diff", "old.json"]).status.code(), Some(2));
}
