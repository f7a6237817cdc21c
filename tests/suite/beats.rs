//! Several plans on one board: beats against a search over every pair of channels.

use std::fs;

use thornmap::base::Exact;
use thornmap::plan::{Plan, parse_plan};
use thornmap::survey::{beats, survey};

fn text(title: &str, reference: &str, first: &str, last: &str) -> String {
    format!(
        r#"schema = 1
[plan]
title = "{title}"
[reference]
frequency = "{reference}"
[oscillator]
range = ["1.5 GHz", "2.0 GHz"]
gain = "30 MHz/V"
[divider]
output = [4]
[modulator]
modulus = {{ step = "25 kHz" }}
[detector]
current = "2 mA"
[loop]
bandwidth = "60 kHz"
phase_margin = "50 deg"
[[channels]]
first = "{first}"
last = "{last}"
spacing = "25 kHz"
[analysis]
record = 1024
"#
    )
}

fn plan(text: &str) -> Plan {
    parse_plan(text, "board", &|_| Err("none".to_owned())).unwrap()
}

#[test]
fn the_nearest_beat_is_that_of_a_search_over_every_pair() {
    let own = plan(&text("own", "20 MHz", "430 MHz", "430.5 MHz"));
    // The second plan's VCO, or its multiples, fall near the first one's at scattered places.
    let other = plan(&text("other", "26 MHz", "429.9 MHz", "431 MHz"));
    let result = survey(&own, &|_| {}).unwrap();
    let found = beats(&result.channels, &own, std::slice::from_ref(&other)).unwrap();
    assert_eq!(found.len(), result.channels.len());
    let times = |hz: Exact, by: i128| hz.times(&Exact::from_integer(by)).unwrap();
    let four = Exact::from_integer(4);
    let mut pairs = 0;
    for (channel, beat) in result.channels.iter().zip(&found) {
        let mut nearest = f64::INFINITY;
        let mut inside = 0;
        for index in 0..other.groups[0].channels.len() {
            let theirs = other.groups[0].channels.get(index).unwrap().hz();
            let mut is_inside = false;
            for own_hz in [channel.channel.hz().times(&four).unwrap(), channel.channel.hz()] {
                for their_hz in [theirs.times(&four).unwrap(), theirs] {
                    for (n, m) in [(1, 1), (1, 2), (2, 1), (1, 3), (3, 1), (2, 3), (3, 2)] {
                        let offset = times(their_hz, m).minus(&times(own_hz, n)).unwrap().abs().to_f64();
                        nearest = nearest.min(offset);
                        is_inside |= offset <= channel.loop_edge_hz.unwrap();
                        pairs += 1;
                    }
                }
            }
            inside += u64::from(is_inside);
        }
        assert_eq!(beat.offset.to_f64_hz(), nearest, "{}", channel.channel);
        assert_eq!(beat.neighbours_inside, inside, "{}", channel.channel);
        assert_eq!(beat.inside_loop, inside > 0);
    }
    assert_eq!(pairs, 21 * 45 * 4 * 7);
}

#[test]
fn survey_writes_the_beats_beside_its_report() {
    let folder = tempfile::TempDir::new().unwrap();
    fs::write(folder.path().join("own.toml"), text("own", "20 MHz", "430 MHz", "430.1 MHz")).unwrap();
    fs::write(folder.path().join("other.toml"), text("other =1", "26 MHz", "430.05 MHz", "430.05 MHz")).unwrap();
    let output = assert_cmd::Command::cargo_bin("thornmap")
        .unwrap()
        .current_dir(folder.path())
        .args(["survey", "own.toml", "--beside", "other.toml"])
        .output()
        .unwrap();
    let message = String::from_utf8_lossy(&output.stderr).into_owned();
    assert_eq!(output.status.code(), Some(0), "{message}");
    // 430.05 MHz itself beats at zero, its neighbours at the output by one and two spacings.
    assert!(message.contains("beats with \"other =1\": 5 of 5 channels"), "{message}");
    let set = folder.path().join("reports/own");
    let json: serde_json::Value = serde_json::from_str(&fs::read_to_string(set.join("beats.json")).unwrap()).unwrap();
    let found = json["beats"].as_array().unwrap();
    let offsets: Vec<&str> = found.iter().map(|beat| beat["offset_exact"].as_str().unwrap()).collect();
    assert_eq!(offsets, ["50000 Hz", "25000 Hz", "0 Hz", "25000 Hz", "50000 Hz"]);
    assert_eq!(found[0]["nodes"], serde_json::json!(["output", "output"]));
    assert_eq!(fs::read_to_string(set.join("beats.csv")).unwrap().lines().count(), 6);
    assert!(set.join("report.html").exists());
}
