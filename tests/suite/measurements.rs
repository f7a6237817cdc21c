//! The list of things to measure: as short as can be, and nothing left out.

use std::collections::BTreeSet;
use std::sync::LazyLock;

use serde_json::Value;
use thornmap::assess::{Setup, Verdict, spectrum_view};
use thornmap::base::{Dimension, Frequency, parse_quantity};
use thornmap::decide::measure_list::{
    Classes, DISTANCES, Distance, Need, Side, demand, line_at, measure_list, shortest_cover,
};
use thornmap::plan::parse_plan;
use thornmap::report::{MEASURED_COLUMNS, measure_files, measure_json, measure_text};
use thornmap::survey::{SurveyResult, survey};

/// A plan around 81 · 20 MHz with a half, thirds, one channel beyond the oscillator, and short periods.
const PLAN: &str = r#"
schema = 1
[plan]
title = "<b>bench</b>"
[reference]
frequency = "40 MHz"
divider = 2
[oscillator]
range = ["1.6 GHz", "1.66 GHz"]
gain = "30 MHz/V"
[divider]
output = [4, 2]
[modulator]
modulus = { step = "6.25 kHz" }
[detector]
current = "2 mA"
mismatch = "2 %"
leakage = "1 nA"
[loop]
bandwidth = "60 kHz"
phase_margin = "50 deg"
[[anchor]]
mechanism = "detector"
level = "-58 dBc"
at = "405.0125 MHz"
[limits]
spur = [["1 kHz", "-45 dBc"], ["1 MHz", "-75 dBc"]]
[[channels]]
name = "=band"
first = "404.75 MHz"
last = "405.5 MHz"
spacing = "6.25 kHz"
[[channels]]
name = "few"
list = ["400 MHz", "400.00625 MHz", "407.5125 MHz", "410 MHz", "410.00625 MHz", "430 MHz"]
"#;

/// The same plan with every source of noise given.
const NOISE: &str = r#"
[reference]
noise = [["10 Hz", "-95 dBc/Hz"], ["1 kHz", "-145 dBc/Hz"]]
[oscillator]
noise = [["10 kHz", "-78 dBc/Hz"], ["1 MHz", "-118 dBc/Hz"]]
[detector]
floor = "-205 dBc/Hz"
flicker = "-118 dBc/Hz"
"#;

/// Returns the plan with the keys of `NOISE` in their sections.
fn with_noise() -> String {
    NOISE.split("\n[").filter(|part| !part.trim().is_empty()).fold(PLAN.to_owned(), |plan, part| {
        let (section, keys) = part.split_once("]\n").unwrap();
        plan.replacen(&format!("[{section}]\n"), &format!("[{section}]\n{keys}\n"), 1)
    })
}

static RESULT: LazyLock<SurveyResult> =
    LazyLock::new(|| survey(&parse_plan(PLAN, "bench", &|_| Err("none".to_owned())).unwrap(), &|_| {}).unwrap());

/// A small generator: the cases are the same on every machine.
struct Random(u64);

impl Random {
    fn below(&mut self, bound: usize) -> usize {
        self.0 = self.0.wrapping_mul(6_364_136_223_846_793_005).wrapping_add(1_442_695_040_888_963_407);
        usize::try_from(self.0 >> 33).unwrap() % bound
    }
}

/// Returns the size of the smallest cover by trying every choice of sets.
fn smallest_by_trial(sets: &[Vec<usize>], needs: usize) -> usize {
    let masks: Vec<u32> = sets.iter().map(|set| set.iter().fold(0, |mask, need| mask | 1 << need)).collect();
    let all = masks.iter().fold(0, |all, mask| all | mask);
    assert!(needs <= 32);
    (0u32..1 << sets.len())
        .filter(|choice| (0..sets.len()).filter(|i| choice >> i & 1 == 1).fold(0, |u, i| u | masks[i]) == all)
        .map(u32::count_ones)
        .min()
        .unwrap() as usize
}

#[test]
fn covers_of_random_cases_are_as_short_as_any() {
    let mut random = Random(7);
    let (mut cases, mut beyond_greedy) = (0, 0);
    for case in 0..600 {
        let (needs, count) = (1 + random.below(14), 1 + random.below(11));
        let sets: Vec<Vec<usize>> = (0..count)
            .map(|_| {
                let share = 2 + random.below(5);
                (0..needs).filter(|_| random.below(share) == 0).collect()
            })
            .collect();
        let cover = shortest_cover(&sets, needs, 100_000);
        let want = smallest_by_trial(&sets, needs);
        assert_eq!(cover.chosen.len(), want, "case {case}: {sets:?}");
        assert!(cover.is_proven_shortest(), "case {case}");
        let held: BTreeSet<usize> = cover.chosen.iter().flat_map(|set| sets[*set].iter().copied()).collect();
        let all: BTreeSet<usize> = sets.iter().flatten().copied().collect();
        assert_eq!(held, all, "case {case}");
        let left_over: Vec<usize> = (0..needs).filter(|need| !all.contains(need)).collect();
        assert_eq!(cover.not_coverable, left_over);
        // Without any branch the answer is still a cover, and its bound still holds.
        let quick = shortest_cover(&sets, needs, 0);
        assert!(quick.lower_bound <= want && quick.chosen.len() >= want, "case {case}");
        let held: BTreeSet<usize> = quick.chosen.iter().flat_map(|set| sets[*set].iter().copied()).collect();
        assert_eq!(held, all, "case {case}");
        beyond_greedy += usize::from(!quick.is_proven_shortest());
        cases += 1;
    }
    assert_eq!(cases, 600);
    assert!(beyond_greedy > 0, "the search itself was never needed");
}

#[test]
fn every_coverable_need_is_shown_by_the_list() {
    let mut needs_seen = 0;
    for classes in [Classes::Fraction, Classes::Denominator] {
        let demand = demand(&RESULT, classes).unwrap();
        let list = measure_list(&RESULT, classes).unwrap();
        let chosen: Vec<usize> = list
            .channels
            .iter()
            .map(|channel| {
                let is_it = |place: &usize| {
                    let c = &RESULT.channels[demand.candidates[*place]];
                    (c.group.as_str(), c.index) == (channel.group.as_str(), channel.index)
                };
                (0..demand.candidates.len()).find(is_it).unwrap()
            })
            .collect();
        let shown: BTreeSet<&Need> = list.channels.iter().flat_map(|c| c.shows.iter().map(|line| &line.need)).collect();
        for (place, need) in demand.needs.iter().enumerate() {
            let coverable = demand.met.iter().any(|met| met.contains_key(&place));
            let covered = chosen.iter().any(|candidate| demand.met[*candidate].contains_key(&place));
            assert_eq!(covered, coverable, "{need:?}");
            assert_eq!(shown.contains(need), coverable, "{need:?}");
            assert_eq!(list.not_coverable.iter().any(|line| line.need == *need), !coverable, "{need:?}");
            needs_seen += 1;
        }
        assert!(list.proven_shortest && list.lower_bound == list.channels.len());
        assert!(list.channels.iter().all(|channel| !channel.shows.is_empty() && !channel.lines.is_empty()));
    }
    assert!(needs_seen >= 90, "{needs_seen}");
    let (fine, coarse) = (measure_list(&RESULT, Classes::Fraction), measure_list(&RESULT, Classes::Denominator));
    assert!(coarse.unwrap().channels.len() < fine.unwrap().channels.len());
}

#[test]
fn distances_and_sides_follow_from_the_words_alone() {
    // Second route: offsets from K and M by integers, no exact fractions and no placement.
    let demand = demand(&RESULT, Classes::Fraction).unwrap();
    let mut seen = 0;
    for (candidate, met) in demand.candidates.iter().zip(&demand.met) {
        let channel = &RESULT.channels[*candidate];
        let (n, k, m) = (channel.n.unwrap(), channel.k.unwrap(), channel.m.unwrap());
        for (need, meeting) in met {
            let Need::Boundary { family: "comparison", q, p: Some(p), side, distance } = &demand.needs[*need] else {
                continue;
            };
            // q·(N·M + K) − p·M, in units of f_pfd/M.
            let residue = i128::from(*q) * (i128::from(n) * i128::from(m) + i128::from(k)) - p * i128::from(m);
            assert!(residue.abs() * 2 <= i128::from(m) && residue != 0);
            assert_eq!(*side, if residue > 0 { Side::Above } else { Side::Below });
            let offset_hz = residue.unsigned_abs() as f64 / m as f64 * channel.pfd_hz;
            assert!((offset_hz - meeting.unwrap().offset.to_f64_hz()).abs() < 1e-6);
            if let Distance::Bandwidths(step) = distance {
                let ratio = offset_hz / channel.unity_gain_hz.unwrap() / DISTANCES[*step];
                assert!((ratio.log10()).abs() <= 0.25 + 1e-9, "{ratio}");
            }
            seen += 1;
        }
    }
    assert!(seen >= 80, "{seen}");
    // One step: no channel of that class and side is nearer.
    let nearest = |side| {
        let distance = Distance::OneStep;
        let wanted = Need::Boundary { family: "comparison", q: 1, p: Some(81), side, distance };
        let place = demand.needs.iter().position(|need| *need == wanted).unwrap();
        let mut channels = demand.candidates.iter().zip(&demand.met).filter(|(_, met)| met.contains_key(&place));
        let found = RESULT.channels[*channels.next().unwrap().0].channel;
        assert!(channels.next().is_none());
        found
    };
    assert_eq!(nearest(Side::Above), Frequency::from_whole_hz(405_006_250));
    assert_eq!(nearest(Side::Below), Frequency::from_whole_hz(404_993_750));
}

#[test]
fn the_other_needs_are_met_by_the_right_channels() {
    let list = measure_list(&RESULT, Classes::Fraction).unwrap();
    let by_need = |wanted: &dyn Fn(&Need) -> bool| {
        let channel = list.channels.iter().find(|channel| channel.shows.iter().any(|line| wanted(&line.need)));
        channel.map(|channel| {
            RESULT.channels.iter().find(|c| c.group == channel.group && c.index == channel.index).unwrap()
        })
    };
    assert_eq!(by_need(&|need| *need == Need::ExactInteger).unwrap().k, Some(0));
    let control = by_need(&|need| *need == Need::CleanControl).unwrap();
    assert!(control.verdict == Verdict::Clear && control.boundaries.is_empty() && control.k != Some(0));
    let edge = |group, side| by_need(&|need| *need == Need::BandEdge { group, side }).map(|c| c.channel);
    assert_eq!(edge(0, Side::Below), Some(Frequency::from_whole_hz(404_750_000)));
    assert_eq!(edge(0, Side::Above), Some(Frequency::from_whole_hz(405_500_000)));
    // 430 MHz has no legal word, and with 4 always legal the divider 2 is never used: both are said.
    assert_eq!(edge(1, Side::Above), None);
    let texts: Vec<(&str, &str)> =
        list.not_coverable.iter().map(|need| (need.text.as_str(), need.reason.as_str())).collect();
    assert!(texts.contains(&("highest channel of group \"few\"", "this channel has no legal word")), "{texts:?}");
    assert!(texts.iter().any(|(text, _)| *text == "output divider 2"));
    assert!(texts.iter().any(|(text, _)| text.starts_with("rule B1")));
    for (rule, count) in &RESULT.summary.reasons {
        let is_shown = by_need(&|need| *need == Need::RuleFired { rule: rule.name() }).is_some();
        assert_eq!(is_shown, *count > 0 && rule.name() != "B1", "{}", rule.name());
    }
}

#[test]
fn instruments_are_set_from_distance_level_and_limit() {
    let list = measure_list(&RESULT, Classes::Fraction).unwrap();
    let (mut lines, mut levels, mut floors) = (0, 0, 0);
    for channel in &list.channels {
        let judged = RESULT.channels.iter().find(|c| c.group == channel.group && c.index == channel.index).unwrap();
        assert_eq!((channel.settings.n, channel.settings.k), (judged.n, judged.k));
        for line in &channel.lines {
            lines += 1;
            assert!(line.rbw_hz <= line.distance_hz / 10.0 * (1.0 + 1e-12) && line.rbw_hz > 0.0);
            assert!(line.distance_hz <= line.offset_hz && line.span_hz >= 4.0 * line.offset_hz * (1.0 - 1e-12));
            let tone = judged.tones.iter().find(|tone| (tone.offset_hz - line.offset_hz).abs() < 1e-6);
            assert_eq!(line.expected_dbc, tone.and_then(|tone| tone.level_dbc));
            assert_eq!(line.expected_dbc.is_none(), !line.unknown.is_empty());
            for other in judged.tones.iter().filter(|other| (other.offset_hz - line.offset_hz).abs() > 1e-6) {
                assert!(line.rbw_hz * 10.0 <= (other.offset_hz - line.offset_hz).abs() * (1.0 + 1e-12));
            }
            levels += usize::from(line.expected_dbc.is_some());
            if let Some(floor) = line.floor_dbc_per_hz {
                let in_rbw = floor + 10.0 * line.rbw_hz.log10();
                for level in [line.expected_dbc, line.limit_dbc].into_iter().flatten() {
                    assert!(in_rbw <= level - 10.0 + 1e-9);
                }
                floors += 1;
            }
        }
    }
    assert!(lines >= 15 && levels >= 10 && floors >= levels, "{lines} {levels} {floors}");
}

#[test]
fn the_own_noise_narrows_the_bandwidth_and_is_said() {
    let result = survey(&parse_plan(&with_noise(), "bench", &|_| Err("none".to_owned())).unwrap(), &|_| {}).unwrap();
    let list = measure_list(&result, Classes::Fraction).unwrap();
    let quiet = measure_list(&RESULT, Classes::Fraction).unwrap();
    assert!(quiet.channels.iter().flat_map(|c| &c.lines).all(|line| line.own_noise_dbc.is_none()), "noise unknown");
    let setup = Setup::new(&result.plan).unwrap();
    let (mut lines, mut narrowed) = (0, 0);
    for channel in &list.channels {
        let view = spectrum_view(&setup, usize::from(channel.group == "few"), channel.channel, &mut setup.scratch());
        let view = view.unwrap();
        for line in &channel.lines {
            let Some(noise) = line.own_noise_dbc else { continue };
            let density = noise - 10.0 * line.rbw_hz.log10();
            // Second route: the total of the plotted spectrum, which stands on its own grid of offsets.
            if let Some(view) = &view
                && let Some(at) =
                    view.offset_hz.windows(2).position(|w| w[0] <= line.offset_hz && line.offset_hz < w[1])
            {
                let ends = [view.total_dbc_per_hz[at].unwrap(), view.total_dbc_per_hz[at + 1].unwrap()];
                let (low, high) = (ends[0].min(ends[1]), ends[0].max(ends[1]));
                assert!((low - 0.1..=high + 0.1).contains(&density), "{density} {low} {high}");
                lines += 1;
            }
            let weakest = [line.expected_dbc, line.limit_dbc].into_iter().flatten().reduce(f64::min);
            if let Some(weakest) = weakest {
                assert!(noise <= weakest - 10.0 + 1e-9 || line.rbw_hz <= 1.0, "{noise} {weakest}");
            }
            narrowed += usize::from(line.rbw_hz < line.distance_hz / 35.0 && line.rbw_hz < 3000.0);
            assert_eq!(line.in_own_noise, line.expected_dbc.map(|level| noise > level - 10.0));
        }
    }
    assert!(lines >= 10 && narrowed >= 1, "{lines} {narrowed}");
    // A tone 5 dB above the noise in 1 Hz is read with noise; 60 dB above it is not; with unknown noise nobody knows.
    let channel = result.channels.iter().find(|channel| channel.tones.iter().any(|t| t.level_dbc.is_some())).unwrap();
    let tone = channel.tones.iter().find(|tone| tone.level_dbc.is_some()).unwrap();
    let weakest = tone.level_dbc.unwrap().min(tone.limit_dbc.unwrap());
    for (noise, want) in
        [(Some(tone.level_dbc.unwrap() - 5.0), Some(true)), (Some(weakest - 60.0), Some(false)), (None, None)]
    {
        let line = line_at(channel, tone.offset_hz, "tone", noise);
        assert_eq!(line.in_own_noise, want);
        assert_eq!(line.rbw_hz <= 1.0, want == Some(true));
    }
}

#[test]
fn the_table_to_fill_in_reads_back() {
    let list = measure_list(&RESULT, Classes::Fraction).unwrap();
    let files = measure_files(&list).unwrap();
    let file = |name: &str| String::from_utf8(files.iter().find(|f| f.path == name).unwrap().bytes.clone()).unwrap();
    let table = file("measure.csv");
    assert_eq!(table.lines().next().unwrap(), "channel,offset,level,rbw,note,group");
    assert_eq!(MEASURED_COLUMNS.join(","), "channel,offset,level,rbw,note,group");
    let mut reader = csv::Reader::from_reader(table.as_bytes());
    let mut lines = list.channels.iter().flat_map(|channel| channel.lines.iter().map(move |line| (channel, line)));
    let mut rows = 0;
    for row in reader.records() {
        let row = row.unwrap();
        let (channel, line) = lines.next().unwrap();
        let hz = |cell: &str| Frequency::from_hz(parse_quantity(cell, Dimension::Frequency).unwrap());
        assert_eq!(hz(&row[0]), channel.channel);
        assert!(RESULT.plan.locate(hz(&row[0]), Some(channel.group.as_str())).is_some());
        assert!((hz(&row[1]).to_f64_hz() - line.offset_hz).abs() <= 0.0005 + 1e-9);
        assert_eq!(&row[2], "");
        assert!((hz(&row[3]).to_f64_hz() - line.rbw_hz).abs() <= 1e-9 * line.rbw_hz + 0.0005);
        assert!(row.iter().all(|cell| !cell.starts_with(['=', '+', '-', '@'])));
        assert_eq!(row[5].trim_start_matches('\''), channel.group);
        rows += 1;
    }
    assert!(rows >= 15 && lines.next().is_none(), "{rows}");
    let page = file("measure.html");
    for forbidden in ["<script", "<b>", "http://", "https://", "src=\""] {
        assert!(!page.contains(forbidden), "{forbidden}");
    }
    assert!(page.contains("into a load") && page.contains("damage level"));
    let json: Value = serde_json::from_str(&file("measure.json")).unwrap();
    assert_eq!(json["schema"], "thornmap.measurement/1");
    assert_eq!(json["channels"].as_array().unwrap().len(), list.channels.len());
    assert_eq!(measure_json(&list).unwrap(), file("measure.json"));
    let text = measure_text(&list);
    assert!(text.contains("proven shortest") && text.contains("caution: transmit only into a load"));
}

#[test]
fn the_binary_writes_the_set_beside_a_report() {
    let folder = tempfile::TempDir::new().unwrap();
    std::fs::write(folder.path().join("bench.toml"), PLAN.replace("6.25 kHz", "25 kHz")).unwrap();
    let run = |arguments: &[&str]| {
        assert_cmd::Command::cargo_bin("thornmap").unwrap().current_dir(folder.path()).args(arguments).output().unwrap()
    };
    let output = run(&["measure", "bench.toml", "--json", "--quiet"]);
    assert_eq!(output.status.code(), Some(0), "{}", String::from_utf8_lossy(&output.stderr));
    let json: Value = serde_json::from_slice(&output.stdout).unwrap();
    assert_eq!(json["proven_shortest"], true);
    for name in ["measure.html", "measure.csv", "measure.json"] {
        assert!(folder.path().join("reports/bench").join(name).exists(), "{name}");
    }
    let coarse = run(&["measure", "bench.toml", "--each", "denominator", "--out", "reports/bench", "--fail-on", "bad"]);
    assert_eq!(coarse.status.code(), Some(3), "{}", String::from_utf8_lossy(&coarse.stderr));
    assert_eq!(run(&["measure", "bench.toml", "--out", "bench.toml"]).status.code(), Some(1));
}
