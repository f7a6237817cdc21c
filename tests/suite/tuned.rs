//! Figures that vary over the band: each channel takes its own, and a measured table is as good as the model it was
//! sampled from.

use std::fmt::Write as _;

use thornmap::assess::{ChannelResult, Setup, Verdict};
use thornmap::loop_model::LoopResponse;
use thornmap::plan::{Plan, parse_plan};

const CHANNELS: [&str; 3] = ["1.600037 GHz", "1.700037 GHz", "1.800037 GHz"];

/// A plan with lines of the test's own in the sections of VCO, detector and loop.
fn plan(vco: &str, detector: &str, loop_lines: &str, file: &str) -> Plan {
    let text = format!(
        r#"schema = 1
[reference]
frequency = "20 MHz"
[oscillator]
range = ["1.5 GHz", "1.9 GHz"]
{vco}
[modulator]
modulus = {{ step = "1 kHz" }}
order = 3
[detector]
current = "2 mA"
leakage = "1 pA"
{detector}
[loop]
{loop_lines}
[boundary]
largest_q = 1
harmonics = 3
[[anchor]]
mechanism = "detector"
level = "-90 dBc"
at = "1.700037 GHz"
[[channels]]
list = ["{}"]
[analysis]
record = 32768
"#,
        CHANNELS.join("\", \"")
    );
    parse_plan(&text, "bench", &|_| Ok(file.to_owned())).unwrap()
}

const GAIN: &str = "gain = \"30 MHz/V\"";
const TUNING: &str = "tuning = [[\"0.5 V\", \"1.55 GHz\"], [\"1.5 V\", \"1.69 GHz\"], [\"2.5 V\", \"1.85 GHz\"]]";
const COMPONENTS: &str = "components = { c1 = \"330 pF\", r2 = \"6.8 kohm\", c2 = \"3.3 nF\" }";

fn assessed(plan: &Plan) -> Vec<ChannelResult> {
    let setup = Setup::new(plan).unwrap();
    (0..CHANNELS.len()).map(|i| setup.assess_index(0, i as u64, &mut setup.scratch()).unwrap()).collect()
}

/// The part of the detector's nonlinearity in the first harmonic \[dBc\].
fn bent(channel: &ChannelResult) -> f64 {
    channel.tones.iter().find(|tone| tone.harmonic == Some(1)).unwrap().contributions.nonlinearity_dbc.unwrap()
}

#[test]
fn mismatch_follows_the_tuning_voltage_of_each_channel() {
    let table = "mismatch = [[\"0.5 V\", \"-1 %\"], [\"1.5 V\", \"2 %\"], [\"2.5 V\", \"6 %\"]]";
    let found = assessed(&plan(&format!("{GAIN}\n{TUNING}"), table, COMPONENTS, ""));
    // By hand: the voltage on the straight pieces of the tuning curve, then the mismatch on those of its own.
    for (i, vco_hz) in [1.600037e9, 1.700037e9, 1.800037e9f64].into_iter().enumerate() {
        let volts = if vco_hz < 1.69e9 { 0.5 + (vco_hz - 1.55e9) / 0.14e9 } else { 1.5 + (vco_hz - 1.69e9) / 0.16e9 };
        let mismatch = if volts < 1.5 { -0.01 + (volts - 0.5) * 0.03 } else { 0.02 + (volts - 1.5) * 0.04 };
        let single = format!("mismatch = \"{:.7} %\"", mismatch * 100.0);
        let alone = assessed(&plan(GAIN, &single, COMPONENTS, ""));
        assert!((bent(&found[i]) - bent(&alone[i])).abs() < 1e-4, "{vco_hz}: {mismatch}");
    }
    // 0.07 %, 2.25 % and 4.8 %: the channels differ by far more than the loop does.
    assert!(bent(&found[2]) - bent(&found[1]) > 5.0 && bent(&found[1]) - bent(&found[0]) > 15.0);
}

#[test]
fn a_channel_beyond_the_tuning_window_is_illegal_and_says_so() {
    let vco = format!("{GAIN}\n{TUNING}\ntuning_range = [\"0.9 V\", \"2.1 V\"]");
    let found = assessed(&plan(&vco, "mismatch = \"2 %\"", COMPONENTS, ""));
    let legal: Vec<bool> = found.iter().map(|channel| channel.legal).collect();
    assert_eq!(legal, [false, true, false]);
    // 0.5 V + 50.037/140 V, and 1.5 V + 110.037/160 V.
    for (channel, volts) in [(&found[0], 0.857_407), (&found[2], 2.187_731)] {
        assert_eq!(channel.verdict, Verdict::Bad);
        let miss = &channel.illegal[0];
        assert!(miss.limit.contains("tuning"), "{miss:?}");
        assert!((miss.value - volts).abs() < 1e-5, "{miss:?}");
    }
}

#[test]
fn gain_over_the_band_moves_each_channels_own_loop() {
    let table = "gain = [[\"1.6 GHz\", \"20 MHz/V\"], [\"1.8 GHz\", \"40 MHz/V\"]]";
    let found = assessed(&plan(table, "mismatch = \"2 %\"", COMPONENTS, ""));
    for (i, (vco_hz, channel)) in [1.600037e9, 1.700037e9, 1.800037e9f64].into_iter().zip(&found).enumerate() {
        let gain = (20.0 + (vco_hz - 1.6e9) / 0.2e9 * 20.0).min(40.0);
        let alone = assessed(&plan(&format!("gain = \"{gain:.7} MHz/V\""), "mismatch = \"2 %\"", COMPONENTS, ""));
        let (a, b) = (channel.unity_gain_hz.unwrap(), alone[i].unity_gain_hz.unwrap());
        assert!((a / b - 1.0).abs() < 1e-6, "{vco_hz}: {a} against {b}");
        assert!((bent(channel) - bent(&alone[i])).abs() < 1e-3);
    }
    let edges: Vec<f64> = found.iter().map(|channel| channel.unity_gain_hz.unwrap()).collect();
    assert!(edges[2] / edges[0] > 1.3, "{edges:?}");
}

#[test]
fn a_charge_table_is_as_good_as_the_mismatch_it_was_sampled_from() {
    // Charge against time error of a pump of 2 mA with 3 % mismatch: the slopes differ by 3 % of the current.
    let (up, down) = (2e-3 * (1.0 + 0.03 / 2.0), 2e-3 * (1.0 - 0.03 / 2.0));
    let mut file = String::from("time_s,charge_c\n");
    for i in -20..=20 {
        let time_s = f64::from(i) * 0.5e-9;
        let charge = if time_s > 0.0 { up * time_s } else { down * time_s };
        writeln!(file, "{time_s:e},{charge:e}").unwrap();
    }
    let table = assessed(&plan(GAIN, "table = \"charge.csv\"", COMPONENTS, &file));
    let model = assessed(&plan(GAIN, "mismatch = \"3 %\"", COMPONENTS, ""));
    for (a, b) in table.iter().zip(&model) {
        assert!((bent(a) - bent(b)).abs() < 0.02, "{}: {} against {}", a.channel, bent(a), bent(b));
    }
}

#[test]
fn a_measured_response_is_as_good_as_the_filter_it_was_sampled_from() {
    let model_plan = plan(GAIN, "mismatch = \"2 %\"", COMPONENTS, "");
    let setup = Setup::new(&model_plan).unwrap();
    let response: &LoopResponse = setup.design_response();
    let mut file = String::from("offset_hz,gain_db,phase_deg\n");
    for i in 0..=400 {
        let offset_hz = 100.0 * 10f64.powf(f64::from(i) * 5.0 / 400.0);
        let gain = response.closed_loop(offset_hz);
        writeln!(file, "{offset_hz},{},{}", 20.0 * gain.norm().log10(), gain.arg().to_degrees()).unwrap();
    }
    let measured = assessed(&plan(GAIN, "mismatch = \"2 %\"", "table = \"h.csv\"", &file));
    let model = assessed(&model_plan);
    // The middle channel has the response that was sampled; the others' loops differ a little.
    let (a, b) = (&measured[1], &model[1]);
    for h in 1..=3 {
        let level = |channel: &ChannelResult| {
            channel.tones.iter().find(|tone| tone.harmonic == Some(h)).unwrap().known_level_dbc.unwrap()
        };
        assert!((level(a) - level(b)).abs() < 0.1, "h = {h}: {} against {}", level(a), level(b));
    }
}
