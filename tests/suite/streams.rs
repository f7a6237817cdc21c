//! Surveys of large plans: what streams to disk is what a survey in memory writes.

use serde_json::Value;
use thornmap::assess::{AssessError, ChannelResult, Verdict};
use thornmap::decide::dossier::Dossier;
use thornmap::plan::{Plan, parse_plan};
use thornmap::report::{ChannelRows, Detail, RenderOptions, ReportError, StreamedSet, channels_csv, survey_json};
use thornmap::survey::{Keep, Steps, survey, survey_in_blocks};

/// Why a streamed survey stops.
#[derive(Debug)]
#[allow(dead_code, reason = "shown when a test fails")]
enum Stopped {
    Assess(AssessError),
    Report(ReportError),
}

impl From<AssessError> for Stopped {
    fn from(error: AssessError) -> Self {
        Self::Assess(error)
    }
}

impl From<ReportError> for Stopped {
    fn from(error: ReportError) -> Self {
        Self::Report(error)
    }
}

/// Returns the demonstration plan with one raster of its own.
fn plan(spacing: &str) -> Plan {
    let text = std::fs::read_to_string(concat!(env!("CARGO_MANIFEST_DIR"), "/configs/demo.toml")).unwrap();
    let head = &text[..text.find("[[channels]]").unwrap()];
    let group =
        format!("[[channels]]\nfirst = \"422 MHz\"\nlast = \"443 MHz\"\nspacing = \"{spacing}\"\noutput = [4]\n");
    parse_plan(&format!("{head}{group}"), "dense", &|_| Err("none".to_owned())).unwrap()
}

#[test]
fn a_streamed_set_holds_the_tables_of_a_survey_in_memory() {
    let plan = plan("1750 Hz");
    let options = RenderOptions { detail: Detail::Flagged, ..RenderOptions::default() };
    let home = tempfile::tempdir().unwrap();
    let out = home.path().join("set");
    let mut set = StreamedSet::new(&out).unwrap();
    let steps = Steps {
        render: &|channels: &[ChannelResult]| Ok::<_, Stopped>(ChannelRows::new(channels, &options)?),
        done: &|_| {},
    };
    let streamed = survey_in_blocks(&plan, Keep::WorstAndSample, &steps, &mut |rows| Ok(set.add(&rows)?)).unwrap();
    let files = thornmap::report::document_files(&streamed, &Dossier::default(), &options).unwrap();
    set.finish(&streamed, files, &options).unwrap();
    let whole = survey(&plan, &|_| {}).unwrap();
    assert_eq!(whole.channels.len(), 12_001);
    let csv = std::fs::read(out.join("channels.csv")).unwrap();
    assert!(csv == channels_csv(&whole.channels).unwrap(), "channels.csv");
    let read = |text: &str| serde_json::from_str::<Value>(text).unwrap();
    let json = read(&std::fs::read_to_string(out.join("survey.json")).unwrap());
    let usual = read(&survey_json(&whole, &options).unwrap());
    for key in ["plan", "channels_omitted", "summary", "loop", "channels", "detail"] {
        assert!(json[key] == usual[key], "{key}");
    }
    assert!(json["warnings"].as_array().unwrap().iter().any(|text| text.as_str().unwrap().contains("even sample")));
    assert!(out.join("report.html").exists() && !out.join("survey.json.rows").exists());
    // What stays in memory is bounded, in plan order, and holds the worst channel.
    let kept: Vec<u64> = streamed.channels.iter().map(|channel| channel.index).collect();
    assert!(kept.len() < whole.channels.len() && kept.windows(2).all(|pair| pair[0] < pair[1]), "{}", kept.len());
    assert!((0..12_001).step_by(2).all(|index| kept.binary_search(&index).is_ok()), "an even sample");
    let flagged = streamed.channels.iter().filter(|channel| channel.verdict != Verdict::Clear).count();
    assert!(flagged >= 4_000, "{flagged}");
    assert_eq!(
        streamed.spectrum.map(|view| streamed.channels[view.channel].index),
        whole.spectrum.map(|view| whole.channels[view.channel].index)
    );
}

#[test]
fn a_streamed_set_that_stops_leaves_nothing_behind() {
    let plan = plan("70 kHz");
    let home = tempfile::tempdir().unwrap();
    let mut set = StreamedSet::new(&home.path().join("set")).unwrap();
    let options = RenderOptions::default();
    let steps = Steps {
        render: &|channels: &[ChannelResult]| Ok::<_, Stopped>(ChannelRows::new(channels, &options)?),
        done: &|_| {},
    };
    let mut taken = 0;
    let stopped = survey_in_blocks(&plan, Keep::All, &steps, &mut |rows| {
        taken += 1;
        if taken == 2 {
            return Err(Stopped::Report(ReportError::NotAFolder { path: "x".into() }));
        }
        Ok(set.add(&rows)?)
    });
    assert!(matches!(stopped, Err(Stopped::Report(ReportError::NotAFolder { .. }))));
    drop(set);
    assert_eq!(std::fs::read_dir(home.path()).unwrap().count(), 0);
}
