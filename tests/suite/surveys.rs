//! Whole surveys: counts against an independent script, speed and memory bounds, fast path against slow path.

use thornmap::assess::{Method, Setup, Verdict};
use thornmap::base::{Exact, Frequency};
use thornmap::plan::{Plan, parse_plan};
use thornmap::survey::survey;
use thornmap::tones::nearest_fraction;

/// Returns a plan of 400–470 MHz inclusive in 12.5 kHz steps.
fn wide_plan(reference: &str, output: u64, guard: &str, modulus: &str) -> Plan {
    let (low, high) = if output == 4 { ("1.5 GHz", "2.0 GHz") } else { ("3.1 GHz", "3.9 GHz") };
    let text = format!(
        r#"
schema = 1
[reference]
frequency = "{reference}"
[oscillator]
range = ["{low}", "{high}"]
gain = "32 MHz/V"
[divider]
output = [{output}]
[modulator]
modulus = {modulus}
[detector]
current = "2.5 mA"
mismatch = "2 %"
leakage = "1 nA"
[loop]
bandwidth = "60 kHz"
phase_margin = "50 deg"
[boundary]
guard = "{guard}"
[[channels]]
first = "400 MHz"
last = "470 MHz"
spacing = "12.5 kHz"
"#
    );
    parse_plan(&text, "wide", &|name| Err(format!("no file {name}"))).unwrap()
}

/// Every count was found by an independent script in exact arithmetic: 400–470 MHz inclusive, 12.5 kHz, q = 1,
/// 0 < tone offset ≤ guard.
pub(super) const NEAR_INTEGER: [(&str, u64, i128, usize); 8] = [
    ("19.2 MHz", 4, 200_000, 112),
    ("20 MHz", 4, 200_000, 112),
    ("19.2 MHz", 4, 199_999, 84),
    ("20 MHz", 4, 199_999, 84),
    ("19.2 MHz", 8, 200_000, 116),
    ("20 MHz", 8, 200_000, 112),
    ("19.2 MHz", 8, 199_999, 58),
    ("20 MHz", 8, 199_999, 56),
];

#[test]
fn near_integer_channels_are_counted_exactly_and_inclusively() {
    for (reference, output, guard_hz, want) in NEAR_INTEGER {
        let plan = wide_plan(reference, output, &format!("{guard_hz} Hz"), "\"2^24\"");
        let channels = &plan.groups[0].channels;
        assert_eq!(channels.len(), 5601);
        let pfd = plan.reference.pfd().unwrap();
        let guard = Frequency::from_whole_hz(guard_hz);
        let found = (0..channels.len())
            .filter(|index| {
                let vco = channels.get(*index).unwrap().hz().times(&Exact::from_integer(output.into())).unwrap();
                let offset = nearest_fraction(Frequency::from_hz(vco), pfd, 1).unwrap().tone_offset();
                offset.hz().sign() > 0 && offset <= guard
            })
            .count();
        assert_eq!(found, want, "{reference}, output divider {output}, guard {guard_hz} Hz");
    }
}

#[test]
fn the_survey_counts_what_the_words_achieve() {
    // A modulus that makes the raster exact gives the script's 112. With M = 2^24 the words at exactly 200 kHz are
    // rounded to 200 000.38 Hz, which is outside an inclusive guard of 200 kHz: 84.
    for (modulus, want) in [("{ step = \"12.5 kHz\" }", 112), ("{ largest = 4095 }", 112)] {
        let plan = wide_plan("19.2 MHz", 4, "200 kHz", modulus);
        let result = survey(&plan, &|_| {}).unwrap();
        let near = |channel: &&thornmap::assess::ChannelResult| {
            channel.boundaries.iter().any(|b| b.family == "comparison" && b.q == 1 && b.inside_guard)
        };
        assert_eq!(result.channels.iter().filter(near).count(), want, "{modulus}");
        assert_eq!(result.summary.channels, 5601);
        assert_eq!(result.summary.clear + result.summary.marginal + result.summary.bad, 5601);
    }
    let plan = wide_plan("19.2 MHz", 4, "200 kHz", "\"2^24\"");
    let setup = Setup::new(&plan).unwrap();
    let mut scratch = setup.scratch();
    // 403.25 MHz · 4 = 84 · 19.2 MHz + 200 kHz.
    let channel = Frequency::from_whole_hz(403_250_000);
    let place = plan.locate(channel, None).unwrap();
    let result = setup.assess(place.0, place.1.unwrap(), channel, &mut scratch).unwrap();
    let offset = result.boundary.unwrap().tone_offset_hz;
    assert!(offset > 200_000.3 && offset < 200_000.4, "{offset}");
}

#[test]
fn every_configuration_is_surveyed_and_checks_itself() {
    for name in ["demo", "wide_dividers", "exact_modulus", "integer"] {
        let path = format!("{}/configs/{name}.toml", env!("CARGO_MANIFEST_DIR"));
        let plan = thornmap::plan::read_plan_file(path.as_ref()).unwrap();
        let result = survey(&plan, &|_| {}).unwrap();
        assert_eq!(result.summary.channels, result.channels.len() as u64);
        assert!(result.channels.iter().all(|channel| channel.legal), "{name}");
        let check = &result.method_check;
        assert!(check.worst_difference_db.is_none_or(|worst| worst < 0.5), "{name}: {check:?}");
        assert!(!result.warnings.iter().any(|warning| warning.starts_with("method check")), "{:?}", result.warnings);
        if name == "demo" {
            assert!(result.summary.clear > 0 && result.summary.marginal > 0 && result.summary.bad > 0);
            assert_eq!(check.channels, 4);
        }
    }
}

#[test]
fn order_of_threads_changes_nothing() {
    let plan =
        thornmap::plan::read_plan_file(format!("{}/configs/exact_modulus.toml", env!("CARGO_MANIFEST_DIR")).as_ref())
            .unwrap();
    let run = |threads| {
        let pool = rayon::ThreadPoolBuilder::new().num_threads(threads).build().unwrap();
        let result = pool.install(|| survey(&plan, &|_| {}).unwrap());
        thornmap::report::survey_json(&result, &thornmap::report::RenderOptions::default()).unwrap()
    };
    assert_eq!(run(1), run(3));
}

#[test]
fn a_channel_without_a_legal_word_is_bad_with_the_limit_named() {
    let text = thornmap::plan::example_plan().replace("last = \"424.0000 MHz\"", "last = \"470.0000 MHz\"");
    let plan = parse_plan(&text, "edge", &|name| Err(format!("no file {name}"))).unwrap();
    let setup = Setup::new(&plan).unwrap();
    let mut scratch = setup.scratch();
    let last = plan.groups[0].channels.len() - 1;
    let result = setup.assess_index(0, last, &mut scratch).unwrap();
    assert!(!result.legal);
    assert_eq!(result.verdict, Verdict::Bad);
    assert_eq!(result.illegal[0].limit, "oscillator range, upper end");
    assert!((result.illegal[0].missed_by - 30e6).abs() < 200.0, "{:?}", result.illegal);
    assert!(result.reasons[0].text.contains("oscillator range, upper end missed by 30"), "{}", result.reasons[0].text);
}

#[test]
fn short_periods_are_exact_and_agree_with_the_curve_where_both_apply() {
    // A period of 2^15 fits the record; the curve is asked for the same word by shortening the record.
    let lines = |record: u64| {
        let source = format!(
            r#"
schema = 1
[reference]
frequency = "19.2 MHz"
[oscillator]
range = ["1.6 GHz", "1.8 GHz"]
gain = "32 MHz/V"
[divider]
output = [4]
[modulator]
modulus = "2^16"
[detector]
current = "2.5 mA"
mismatch = "2 %"
leakage = "0 A"
[loop]
bandwidth = "60 kHz"
phase_margin = "50 deg"
[[channels]]
list = ["422.4131 MHz"]
[analysis]
record = {record}
"#
        );
        let plan = parse_plan(&source, "one", &|_| Err("none".to_owned())).unwrap();
        let setup = Setup::new(&plan).unwrap();
        let mut scratch = setup.scratch();
        setup.assess_index(0, 0, &mut scratch).unwrap()
    };
    let (exact, curve) = (lines(1 << 17), lines(1 << 16));
    assert_eq!((exact.method, curve.method), (Method::ExactPeriod, Method::SharedCurve));
    let first = |result: &thornmap::assess::ChannelResult| {
        let tone = result.tones.iter().find(|tone| tone.harmonic == Some(1) && tone.residue.is_some()).unwrap();
        (tone.contributions.nonlinearity_dbc.unwrap(), tone.level_uncertainty_db.unwrap())
    };
    let difference = (first(&exact).0 - first(&curve).0).abs();
    assert!(difference <= first(&curve).1 + 0.05, "{difference} dB");
}

#[test]
fn noise_carried_beyond_its_points_is_listed_and_unused_figures_are_said() {
    let text = std::fs::read_to_string(concat!(env!("CARGO_MANIFEST_DIR"), "/configs/demo.toml")).unwrap();
    let text = text.replace(
        "current = \"2.5 mA\"",
        "current = \"2.5 mA\"\nreset_delay = \"500 ps\"\npump_noise = \"20 pA/sqrt(Hz)\"",
    );
    let plan = thornmap::plan::parse_plan(&text, "demo", &|_| Err("none".to_owned())).unwrap();
    let setup = thornmap::assess::Setup::new(&plan).unwrap();
    let carried: Vec<String> = setup
        .assumptions()
        .into_iter()
        .filter(|assumption| assumption.basis == thornmap::base::Basis::Extrapolated)
        .map(|assumption| format!("{}: {}", assumption.key, assumption.value))
        .collect();
    // Integrated from 100 Hz to 9.6 MHz; the reference's points end at 10 kHz, the VCO's run from 1 kHz to 1 MHz.
    assert_eq!(
        carried,
        [
            "reference.noise: carried from 10 kHz to 9.6 MHz by flat",
            "oscillator.noise: carried from 100 Hz to 1 kHz by the first segment's slope, at least -30 dB a decade",
            "oscillator.noise: carried from 1 MHz to 9.6 MHz by -20 dB a decade",
        ]
    );
    assert!(setup.warnings().iter().any(|text| text.contains("detector.pump_noise is not added")));
    assert!(setup.warnings().iter().any(|text| text.contains("detector.reset_delay enters no prediction")));
}

/// Words at and near simple fractions drift slowly: a record of 2^17 cycles shows their lines up to 14 dB off, the whole
/// period does not.
#[test]
fn lines_of_drifting_words_agree_with_their_whole_period() {
    let fractions = [(63, 64), (1, 64), (31, 32), (9, 128), (85, 128), (7, 96), (23, 384), (1, 384)];
    let list: Vec<String> =
        fractions.iter().map(|(k, m)| format!("\"{}/{m} Hz\"", (87 * m + k) * 4_800_000i64)).collect();
    let text = std::fs::read_to_string(concat!(env!("CARGO_MANIFEST_DIR"), "/configs/demo.toml")).unwrap();
    let head = &text[..text.find("[[channels]]").unwrap()];
    let source = format!("{head}[[channels]]\nlist = [{}]\noutput = [4]\n", list.join(", "));
    let plan = parse_plan(&source, "drift", &|_| Err("none".to_owned())).unwrap();
    let setup = Setup::new(&plan).unwrap();
    let mut checked = 0;
    for index in 0..plan.groups[0].channels.len() {
        let channel = setup.assess_index(0, index, &mut setup.scratch()).unwrap();
        let Some(check) = setup.check_line(&channel).unwrap() else { continue };
        assert!(check.difference_db <= check.uncertainty_db + 0.02, "{}: {check:?}", channel.channel);
        checked += 1;
    }
    assert!(checked >= 6, "{checked}");
}
