//! Modulators weighed on a plan: the order of ranking, the gains of high orders, sampling, refusals, files.

use std::fs;

use assert_cmd::Command;
use serde_json::Value;
use thornmap::decide::compare::{Comparison, ModulatorOption, compare, default_options, order_gains};
use thornmap::modulator::{Dither, Modulus, ModulusRule, Structure};
use thornmap::plan::{Plan, parse_plan};

/// Twenty-one channels on both sides of an integer boundary.
const PLAN: &str = r#"schema = 1
[plan]
title = "weighing"
[reference]
frequency = "20 MHz"
[oscillator]
range = ["1.5 GHz", "2.0 GHz"]
gain = "30 MHz/V"
[divider]
minimum = 24
maximum = 200
[modulator]
modulus = "2^18"
seeds = [1]
[detector]
current = "2 mA"
mismatch = "2 %"
leakage = "1 nA"
[loop]
bandwidth = "60 kHz"
phase_margin = "50 deg"
[[anchor]]
mechanism = "detector"
level = "-60 dBc"
offset = "7.5 kHz"
output_divider = 1
q = 1
[limits]
spur = [["1 kHz", "-45 dBc"], ["1 MHz", "-75 dBc"]]
[[channels]]
first = "1.7 GHz"
last = "1.72 GHz"
spacing = "1 MHz"
[analysis]
record = 16384
"#;

fn plan(text: &str) -> Plan {
    parse_plan(text, "weighing", &|_| Err("none".to_owned())).unwrap()
}

fn compared(plan: &Plan, options: &[ModulatorOption], sample: u64) -> Comparison {
    compare(plan, options, sample, &|| {}).unwrap()
}

#[test]
fn an_undithered_even_seed_first_order_modulator_comes_last() {
    let plan = plan(PLAN);
    let options = default_options(&plan);
    let found = compared(&plan, &options, 1000);
    assert_eq!(found.ranked.len() + found.refused.len(), options.len());
    assert!(found.refused.is_empty(), "{:?}", found.refused);
    assert!(options.len() >= 18, "{}", options.len());
    let last = found.ranked.last().unwrap();
    assert_eq!((last.option.settings.structure, last.option.settings.order), (Structure::Mash, 1));
    assert_eq!((last.option.settings.seeds.as_slice(), last.option.settings.dither), (&[0][..], Dither::None));
    assert_eq!(found.sample.channels, 21);
    assert_eq!(found.sample.rule, "all channels");
    // Places are 1, 2, …; every place follows the stated rule's first two keys; every place has a reason.
    for (i, entry) in found.ranked.iter().enumerate() {
        assert_eq!(entry.place, i + 1);
        assert!(!entry.reason.is_empty());
        let figures = &entry.figures;
        assert_eq!(figures.bad + figures.marginal + figures.clear, 21, "{}", entry.option.name());
        if let Some(next) = found.ranked.get(i + 1) {
            let key = |entry: &thornmap::decide::compare::Ranked| (entry.figures.bad, entry.figures.marginal);
            assert!(key(entry) <= key(next), "{} before {}", entry.option.name(), next.option.name());
        }
    }
}

#[test]
fn the_gains_of_orders_four_and_five_are_those_of_an_independent_quadrature() {
    // Closed forms ε/(πh²), ε/(4πh²) for orders 2, 3; orders 4 and 5 by an independent script's quadrature.
    let expected = [
        (2, [-43.92, -55.96, -63.00]),
        (3, [-55.96, -68.00, -75.05]),
        (4, [-59.87, -72.39, -79.52]),
        (5, [-66.08, -78.18, -85.24]),
    ];
    let gains = order_gains(&plan(PLAN));
    let mut checked = 0;
    for (order, levels) in expected {
        let gain = gains.iter().find(|gain| gain.order == order).unwrap();
        for (found, level) in gain.tones_dbc.iter().zip(levels) {
            assert!((found.unwrap() - level).abs() < 0.011, "order {order}: {found:?} against {level}");
            checked += 1;
        }
    }
    assert_eq!(checked, 12);
    let of = |order| gains.iter().find(|gain| gain.order == order).unwrap();
    assert!((of(4).gain_over_three_db - 3.9).abs() < 0.05);
    assert!((of(5).gain_over_three_db - 10.1).abs() < 0.05);
    // Each for twice the range of the order before (1 − 2^(m−1) … 2^(m−1)), and twice the clearing offset.
    assert_eq!((of(3).output_range, of(4).output_range, of(5).output_range), ((-3, 4), (-7, 8), (-15, 16)));
    assert_eq!([of(2), of(3), of(4)].map(|gain| gain.clearing_offset_cycles), [1.0, 2.0, 4.0]);
}

#[test]
fn the_recommendation_speaks_from_the_figures() {
    let plan = plan(PLAN);
    let found = compared(&plan, &default_options(&plan), 1000);
    let text = found.recommendation.join("\n");
    for part in ["Order 4 lowers the mismatch tone at h = 1 by 3.9 dB", "Order 5", "10.1 dB", "-7 to 8", "-15 to 16"] {
        assert!(text.contains(part), "{part}: {text}");
    }
    let phase = |order: u8| {
        let is_it = |option: &ModulatorOption| {
            let settings = &option.settings;
            (settings.structure, settings.order, settings.dither) == (Structure::Mash, order, Dither::None)
                && settings.seeds.first() == Some(&1)
        };
        found.ranked.iter().find(|entry| is_it(&entry.option)).unwrap().figures.modulator_phase_deg.unwrap()
    };
    assert!(text.contains(&format!("phase error becomes {:.3}° (order 3: {:.3}°)", phase(4), phase(3))), "{text}");
    assert!(text.contains("What would change the choice"), "{text}");
    assert!(text.starts_with(&format!("Take {}", found.ranked[0].option.name())), "{text}");
}

#[test]
fn figures_of_an_option_are_those_of_its_own_survey() {
    let plan = plan(PLAN);
    let options = default_options(&plan);
    let found = compared(&plan, &options, 1000);
    let mut checked = 0;
    for entry in found.ranked.iter().filter(|entry| entry.option.settings.order != 1) {
        let mut own = plan.clone();
        own.modulator.settings = entry.option.settings.clone();
        let survey = thornmap::survey::survey(&own, &|_| {}).unwrap();
        assert_eq!((entry.figures.bad, entry.figures.marginal), (survey.summary.bad, survey.summary.marginal));
        let worst = survey
            .channels
            .iter()
            .flat_map(|channel| &channel.tones)
            .filter_map(|tone| tone.margin_db)
            .reduce(f64::min);
        assert_eq!(entry.figures.worst_margin_db, worst);
        checked += 1;
    }
    assert!(checked >= 15, "{checked}");
}

#[test]
fn a_sample_names_itself_and_keeps_the_ends() {
    let plan = plan(&PLAN.replace("spacing = \"1 MHz\"", "spacing = \"100 kHz\""));
    let own = ModulatorOption { settings: plan.modulator.settings.clone(), modulus: plan.modulator.modulus };
    let found = compared(&plan, &[own], 30);
    assert_eq!((found.sample.channels, found.sample.of), (30, 201));
    assert_eq!(found.sample.rule, "stratified: one channel in 7 of each group, first and last always");
    let (sampled, _) = thornmap::decide::compare::Sample::of(&plan, 30);
    let channels = &sampled.groups[0].channels;
    assert_eq!(channels.get(0), plan.groups[0].channels.get(0));
    assert_eq!(channels.get(channels.len() - 1), plan.groups[0].channels.get(200));
}

#[test]
fn an_option_that_cannot_work_is_listed_with_its_reason() {
    let plan = plan(PLAN);
    let mut settings = plan.modulator.settings.clone();
    settings.seeds = vec![5000];
    let modulus = ModulusRule::Fixed(Modulus::new(4096).unwrap());
    let own = ModulatorOption { settings: plan.modulator.settings.clone(), modulus: plan.modulator.modulus };
    let found = compared(&plan, &[own, ModulatorOption { settings, modulus }], 5);
    assert_eq!((found.ranked.len(), found.refused.len()), (1, 1));
    assert!(found.refused[0].reason.contains("5000"), "{}", found.refused[0].reason);
}

#[test]
fn the_command_writes_page_table_and_json_beside_a_survey() {
    let folder = tempfile::TempDir::new().unwrap();
    fs::write(folder.path().join("weighing.toml"), PLAN).unwrap();
    let run = |arguments: &[&str]| {
        Command::cargo_bin("thornmap").unwrap().current_dir(folder.path()).args(arguments).output().unwrap()
    };
    assert_eq!(run(&["survey", "weighing.toml", "--quiet"]).status.code(), Some(0));
    let output = run(&["compare", "weighing.toml", "--orders", "1,2,3", "--seeds", "0,1", "--json", "--quiet"]);
    assert_eq!(output.status.code(), Some(0), "{}", String::from_utf8_lossy(&output.stderr));
    let json: Value = serde_json::from_slice(&output.stdout).unwrap();
    assert_eq!(json["schema"], "thornmap.comparison/1");
    let ranked = json["ranked"].as_array().unwrap();
    assert_eq!(ranked.len(), 6);
    let set = folder.path().join("reports/weighing");
    assert!(set.join("survey.json").exists(), "the survey stays");
    assert_eq!(fs::read(set.join("compare.json")).unwrap(), output.stdout);
    let page = fs::read_to_string(set.join("compare.html")).unwrap();
    let table = fs::read_to_string(set.join("compare.csv")).unwrap();
    assert_eq!(table.lines().count(), 7);
    for entry in ranked {
        let name = entry["option"].as_str().unwrap();
        assert!(page.contains(name) && table.contains(name), "{name}");
        // Bits: order × 18.
        assert_eq!(entry["accumulator_bits"].as_u64(), entry["settings"]["settings"]["order"].as_u64().map(|m| m * 18));
    }
    // A later survey leaves the comparison in place, and a wrong word is explained.
    assert_eq!(run(&["survey", "weighing.toml", "--quiet"]).status.code(), Some(0));
    assert!(set.join("compare.html").exists());
    for (arguments, said) in [
        (["--structures", "mesh"], "mesh"),
        (["--dithers", "9:1"], "9:1"),
        (["--moduli", "2^90"], "2^90"),
        (["--sample", "0"], "--sample"),
    ] {
        let mut all = vec!["compare", "weighing.toml"];
        all.extend(arguments);
        let output = run(&all);
        let message = String::from_utf8_lossy(&output.stderr).into_owned();
        assert_eq!(output.status.code(), Some(2), "{message}");
        assert!(message.contains(said), "{message}");
    }
}
