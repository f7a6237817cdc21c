//! Causes of a tone: exact positions, ranking, and the experiment that separates the first two.

use thornmap::base::Frequency;
use thornmap::decide::identify::{Experiment, Identification, Mechanism, identify};
use thornmap::plan::{Plan, parse_plan};

/// A plan at 20 MHz with R as given and one clock.
fn plan(divider: u64, clock_hz: u64) -> Plan {
    let text = format!(
        r#"
schema = 1
[reference]
frequency = "20 MHz"
divider = {divider}
[oscillator]
range = ["1.5 GHz", "2.0 GHz"]
gain = "30 MHz/V"
[divider]
output = [4, 2]
[modulator]
modulus = {{ step = "1 kHz" }}
[detector]
current = "2 mA"
[loop]
bandwidth = "60 kHz"
phase_margin = "50 deg"
[[clock]]
name = "logic"
frequency = "{clock_hz} Hz"
[[channels]]
first = "400 MHz"
last = "480 MHz"
spacing = "100 kHz"
"#
    );
    parse_plan(&text, "plan", &|_| Err("none".to_owned())).unwrap()
}

fn found(plan: &Plan, channel_hz: i128, offset_hz: i128, within_hz: i128) -> Identification {
    let hz = Frequency::from_whole_hz;
    identify(plan, 0, hz(channel_hz), hz(offset_hz), hz(within_hz)).unwrap()
}

fn shift(identification: &Identification, cause: usize, experiment: Experiment) -> f64 {
    identification.causes[cause].shifts.iter().find(|s| s.experiment == experiment).unwrap().shift_hz
}

#[test]
fn a_boundary_tone_moves_with_the_channel_and_hardly_with_the_reference() {
    // 405.1 MHz · 4 = 1620.4 MHz = 81 · 20 MHz + 400 kHz.
    let result = found(&plan(1, 48_000_000), 405_100_000, 400_000, 100);
    assert_eq!((result.causes[0].mechanism, result.causes[0].order), (Mechanism::Family, 1));
    assert!(result.causes[0].distance_hz.abs() < 1e-9);
    assert!(result.causes[0].proof.contains("81"));
    // One step of 100 kHz at the output is 400 kHz at the VCO; 1 ppm of 400 kHz is 0.4 Hz.
    assert!((shift(&result, 0, Experiment::ChannelUp) - 400_000.0).abs() < 1e-6);
    assert!((shift(&result, 0, Experiment::ReferencePpm) - 0.4).abs() < 1e-6);
    assert!(shift(&result, 0, Experiment::ClockPpm).abs() < 1e-9);
}

#[test]
fn a_clock_on_the_same_offset_is_told_apart() {
    // 34 · 47.67 MHz is 380 kHz above 1620.4 MHz: no, m ≤ 20. Through the detector 1 · 20.4 MHz mod 20 MHz = 400 kHz.
    let result = found(&plan(1, 20_400_000), 405_100_000, 400_000, 100);
    let mechanisms: Vec<_> = result.causes.iter().map(|cause| cause.mechanism).collect();
    assert!(matches!(mechanisms[0], Mechanism::Family));
    assert!(mechanisms.iter().any(|m| matches!(m, Mechanism::Clock { .. })), "{mechanisms:?}");
    let clock = mechanisms.iter().position(|m| matches!(m, Mechanism::Clock { .. })).unwrap();
    assert!(shift(&result, clock, Experiment::ChannelUp).abs() < 1e-9);
    // 1 ppm of the reference moves the sampled clock by −20 Hz.
    assert!((shift(&result, clock, Experiment::ReferencePpm) + 20.0).abs() < 1e-6);
    assert!(result.advice.unwrap().contains("tune one channel step up"));
}

#[test]
fn the_raw_reference_shows_itself_when_r_doubles() {
    // R = 2: PFD frequency 10 MHz; 407.6 MHz · 4 = 1630.4 MHz = 163 · 10 MHz + 400 kHz, and 81.5 · 20 MHz + 400 kHz.
    let result = found(&plan(2, 48_000_000), 407_600_000, 400_000, 50);
    assert_eq!(result.causes[0].mechanism, Mechanism::Family);
    // q = 2 of the raw reference: 2·1630.4 MHz = 163·20 MHz + 800 kHz, outside the window.
    assert!(!result.causes.iter().any(|cause| cause.mechanism == Mechanism::RawReference));
    let wide = found(&plan(2, 48_000_000), 407_600_000, 800_000, 50);
    assert!(wide.causes.iter().any(|cause| cause.mechanism == Mechanism::RawReference && cause.order == 2));
}

#[test]
fn nothing_in_the_window_is_said_as_such() {
    let result = found(&plan(1, 48_000_000), 405_100_000, 123_457, 1);
    let known: Vec<_> =
        result.causes.iter().filter(|c| !matches!(c.mechanism, Mechanism::SubFractional { .. })).collect();
    assert!(known.is_empty(), "{known:?}");
}

#[test]
fn rank_is_by_distance_and_then_order() {
    let result = found(&plan(1, 48_000_000), 405_100_000, 400_000, 1_000_000);
    let steps: Vec<f64> = result.causes.iter().map(|cause| (cause.distance_hz.abs() / 50_000.0).floor()).collect();
    assert!(steps.windows(2).all(|pair| pair[0] <= pair[1]), "{steps:?}");
    assert!(result.causes.len() >= 3);
}
