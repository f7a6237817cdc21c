//! The event-driven simulation against closed forms, and predictions against it.

#![allow(clippy::cast_possible_truncation, clippy::cast_sign_loss, reason = "random settings of known size")]

use rand::rngs::StdRng;
use rand::{RngExt, SeedableRng};
use rayon::prelude::*;
use thornmap::loop_model::{
    FilterComponents, FilterDesign, FilterNetwork, LoopPoint, LoopResponse, SimulatedDetector, Simulation,
    SimulationInput, StepResponse, reference_tone_dbc,
};
use thornmap::modulator::{Dither, ModulatorConfig, ModulatorSettings, Modulus, Structure, phase_numerators, start};
use thornmap::spectrum::{Window, correlate, sideband_dbc};

const CURRENT_A: f64 = 2.5e-3;
const GAIN_HZ_PER_V: f64 = 32e6;

/// A loop of 60 kHz at 50 deg around N + K/M, at `ratio` times its bandwidth.
fn network(divider: f64, more: (Option<f64>, Option<f64>)) -> FilterNetwork {
    let design = FilterDesign { bandwidth_hz: 60e3, phase_margin_deg: 50.0, design_divider: None, pole_ratios: more };
    FilterNetwork::new(&design.components(CURRENT_A, GAIN_HZ_PER_V, divider).unwrap()).unwrap()
}

fn ideal() -> SimulatedDetector {
    SimulatedDetector { up_a: CURRENT_A, down_a: CURRENT_A, drain_a: 0.0, dead_zone_s: 0.0, reset_delay_s: 0.0 }
}

fn config(order: u8, k: u64, m: u64) -> ModulatorConfig {
    let settings = ModulatorSettings {
        structure: Structure::Mash,
        order,
        seeds: vec![1],
        dither: Dither::None,
        noise_transfer: None,
        runs_at_zero: false,
    };
    ModulatorConfig::new(&settings, Modulus::new(m).unwrap(), k, true).unwrap()
}

/// φ of a modulator \[cycles\], one after the other.
fn phases(config: &ModulatorConfig) -> Box<dyn FnMut() -> f64> {
    let mut modulator = start(config);
    let (k, m) = (config.k() as f64, config.modulus().get() as f64);
    let (mut buffer, mut place, mut sum, mut count) = (vec![0; 4096], 4096, 0i64, 0.0);
    Box::new(move || {
        if place == buffer.len() {
            modulator.fill(&mut buffer);
            place = 0;
        }
        sum += i64::from(buffer[place]);
        place += 1;
        count += 1.0;
        sum as f64 - count * (k / m)
    })
}

#[test]
fn first_order_lines_in_the_loop_are_those_of_the_linear_prediction() {
    // Matched sources, no leakage: only quantisation, through H.
    let (n, k, m) = (90.0, 33u64, 8192u64);
    let pfd_hz = 20e6;
    let divider = n + k as f64 / m as f64;
    let network = network(divider, (None, None));
    let response =
        LoopResponse::new(&network, LoopPoint { current_a: CURRENT_A, gain_hz_per_v: GAIN_HZ_PER_V, divider, pfd_hz })
            .unwrap();
    let config = config(1, k, m);
    let input = SimulationInput {
        network: &network,
        gain_hz_per_v: GAIN_HZ_PER_V,
        pfd_hz,
        target_hz: divider * pfd_hz,
        detector: ideal(),
        start_error_hz: 0.0,
        start_phase_cycles: 0.0,
    };
    let cycles = 16 * 8192;
    let (record, within) = Simulation::new(input, phases(&config)).unwrap().record(20_000, cycles, &|_| {}).unwrap();
    let mut outputs = vec![0; 8192];
    start(&config).fill(&mut outputs);
    let mut sums = vec![0; 8192];
    phase_numerators(&outputs, k, config.modulus(), &mut sums).unwrap();
    let ideal: Vec<f64> = sums.iter().map(|sum| *sum as f64 / m as f64).collect();
    for h in [1u64, 2, 3] {
        let residue = h * k;
        let offset_hz = residue as f64 / m as f64 * pfd_hz;
        let sinc = (std::f64::consts::PI * offset_hz / pfd_hz).sin() / (std::f64::consts::PI * offset_hz / pfd_hz);
        let seen = correlate(&record, residue, m, Window::Rectangular).norm() / sinc;
        let wanted = correlate(&ideal, residue, m, Window::Rectangular).norm() * response.closed_loop(offset_hz).norm();
        let (seen, wanted) = (sideband_dbc(seen).unwrap(), sideband_dbc(wanted).unwrap());
        assert!((seen - wanted).abs() < 0.1, "h = {h}: {seen} against {wanted}");
    }
    assert_eq!(within.cycles, 4096);
}

#[test]
fn reference_sidebands_of_leakage_and_offset_current_follow_the_formula() {
    let (divider, pfd_hz) = (88.0, 19.2e6);
    let mut checked = 0;
    for more in [(None, None), (Some(0.4), None)] {
        let network = network(divider, more);
        for drain_a in [1e-9, 1e-6, 14e-6, 60e-6] {
            let detector = SimulatedDetector { drain_a, ..ideal() };
            let input = SimulationInput {
                network: &network,
                gain_hz_per_v: GAIN_HZ_PER_V,
                pfd_hz,
                target_hz: divider * pfd_hz,
                detector,
                start_error_hz: 0.0,
                start_phase_cycles: -divider * drain_a / CURRENT_A,
            };
            let integer = Box::new(|| 0.0);
            let (_, within) = Simulation::new(input, integer).unwrap().record(20_000, 4096, &|_| {}).unwrap();
            for (h, line) in (1u64..).zip(within.lines) {
                let wanted = reference_tone_dbc(&network, drain_a, CURRENT_A, GAIN_HZ_PER_V, pfd_hz, h).unwrap();
                let seen = sideband_dbc(line.norm()).unwrap();
                assert!((seen - wanted).abs() < 0.3, "{drain_a} A, h = {h}: {seen} against {wanted}");
                checked += 1;
            }
        }
    }
    assert_eq!(checked, 24);
}

#[test]
fn a_small_step_settles_as_the_linear_loop_does() {
    // f_pfd 400 times the bandwidth: sampling is negligible. The step response of E(s) = 1/(1 + A(s)) by trapezoidal
    // steps far finer than the loop, from the impedance's modes alone.
    let divider = 90.25;
    let pfd_hz = 24e6;
    for more in [(None, None), (Some(0.4), None), (Some(0.4), Some(0.4))] {
        let network = network(divider, more);
        let step_hz = 1e4;
        let input = SimulationInput {
            network: &network,
            gain_hz_per_v: GAIN_HZ_PER_V,
            pfd_hz,
            target_hz: divider * pfd_hz,
            detector: ideal(),
            start_error_hz: -step_hz,
            start_phase_cycles: 0.0,
        };
        let samples = Simulation::new(input, Box::new(|| 0.0)).unwrap().transient(2400).unwrap();
        // Linear: current = -I·phase/N averaged over the cycle; fourth-order Runge-Kutta.
        let poles = network.poles();
        let slope = |x: &[f64]| -> Vec<f64> {
            let (phase, direct, modes) = (x[0], x[1], &x[2..]);
            let current = -CURRENT_A * phase / divider;
            let mut out = vec![GAIN_HZ_PER_V * (direct + modes.iter().sum::<f64>()), network.integrator() * current];
            out.extend(poles.iter().zip(modes).map(|(pole, mode)| pole.residue * current - pole.rate * mode));
            out
        };
        let mut x = vec![0.0; 2 + poles.len()];
        x[1] = -step_hz / GAIN_HZ_PER_V;
        let substeps = 40;
        let h = 1.0 / pfd_hz / f64::from(substeps);
        let mut worst: f64 = 0.0;
        for sample in &samples {
            let linear = GAIN_HZ_PER_V * x[1..].iter().sum::<f64>();
            worst = worst.max((sample.frequency_hz - linear).abs() / step_hz);
            for _ in 0..substeps {
                let add =
                    |x: &[f64], k: &[f64], by: f64| -> Vec<f64> { x.iter().zip(k).map(|(a, b)| a + by * b).collect() };
                let k1 = slope(&x);
                let k2 = slope(&add(&x, &k1, h / 2.0));
                let k3 = slope(&add(&x, &k2, h / 2.0));
                let k4 = slope(&add(&x, &k3, h));
                for (i, value) in x.iter_mut().enumerate() {
                    *value += h / 6.0 * (k1[i] + 2.0 * k2[i] + 2.0 * k3[i] + k4[i]);
                }
            }
        }
        assert!(worst < 0.02, "{worst} of the step with {} poles", poles.len());
        assert!(samples.last().unwrap().frequency_hz.abs() < 1e-3 * step_hz);
    }
}

#[test]
fn settling_agrees_with_the_step_response_of_scipy() {
    // tests/data/settling_reference.py: scipy.signal.step of E(s).
    let path = concat!(env!("CARGO_MANIFEST_DIR"), "/tests/data/settling_reference.json");
    let data: serde_json::Value = serde_json::from_str(&std::fs::read_to_string(path).unwrap()).unwrap();
    let number = |value: &serde_json::Value| value.as_f64().unwrap();
    let (pfd_hz, divider) = (40e6, number(&data["divider"]));
    let mut checked = 0;
    for case in data["loops"].as_array().unwrap() {
        let c = &case["components"];
        let ladder: Vec<(f64, f64)> =
            c["ladder"].as_array().unwrap().iter().map(|rc| (number(&rc[0]), number(&rc[1]))).collect();
        let components = FilterComponents {
            c1_farad: Some(number(&c["c1"])),
            r2_ohm: number(&c["r2"]),
            c2_farad: number(&c["c2"]),
            r3_c3: ladder.first().copied(),
            r4_c4: ladder.get(1).copied(),
        };
        let network = FilterNetwork::new(&components).unwrap();
        let input = SimulationInput {
            network: &network,
            gain_hz_per_v: number(&data["gain"]),
            pfd_hz,
            target_hz: divider * pfd_hz,
            detector: ideal(),
            start_error_hz: -1e4,
            start_phase_cycles: 0.0,
        };
        let samples = Simulation::new(input, Box::new(|| 0.0)).unwrap().transient(80 * 40).unwrap();
        let linear = StepResponse::new(&network, number(&data["current"]), number(&data["gain"]), divider).unwrap();
        for (i, wanted) in case["error"].as_array().unwrap().iter().enumerate() {
            let seen = samples[i * 40].frequency_hz / -1e4;
            assert!((seen - number(wanted)).abs() < 0.02, "{i} us: {seen} against {wanted}");
            let closed = linear.error_at(i as f64 * number(&data["step_s"]));
            assert!((closed - number(wanted)).abs() < 1e-6, "{i} us, closed form: {closed} against {wanted}");
            checked += 1;
        }
        // The closed form settles where the simulation does, to one comparison cycle.
        let last = samples.iter().rposition(|sample| sample.frequency_hz.abs() > 10.0).unwrap();
        let settled_s = linear.settled_after_s(1e-3);
        assert!((settled_s / samples[last + 1].time_s - 1.0).abs() < 0.02, "{settled_s}");
        assert!(linear.error_at(settled_s).abs() <= 1e-3 && linear.settled_after_s(2.0) == 0.0);
    }
    assert_eq!(checked, 3 * 81);
}

#[test]
fn the_command_compares_and_settles() {
    let plan = concat!(env!("CARGO_MANIFEST_DIR"), "/configs/demo.toml");
    let folder = tempfile::TempDir::new().unwrap();
    let run = |arguments: &[&str]| {
        assert_cmd::Command::cargo_bin("thornmap")
            .unwrap()
            .current_dir(folder.path())
            .args(["simulate", plan])
            .args(arguments)
            .output()
            .unwrap()
    };
    let output = run(&["433.0875 MHz", "--cycles", "131072", "--out", "set", "--json", "--quiet"]);
    assert_eq!(output.status.code(), Some(0), "{}", String::from_utf8_lossy(&output.stderr));
    let found: serde_json::Value = serde_json::from_slice(&output.stdout).unwrap();
    assert_eq!(found["schema"], "thornmap.simulation/1");
    let first = &found["tones"][0];
    assert_eq!(first["harmonic"], 1);
    // A cut record of this length knows the line to about 1 dB.
    assert!(first["difference_db"].as_f64().unwrap().abs() < 1.0, "{first}");
    let rms = &found["rms_phase_deg"];
    let ratio = rms["predicted"].as_f64().unwrap() / rms["simulated"].as_f64().unwrap();
    assert!((ratio - 1.0).abs() < 0.1, "{rms}");
    assert_eq!(std::fs::read(folder.path().join("set/simulation.json")).unwrap(), output.stdout);
    assert!(folder.path().join("set/simulation.svg").exists());
    let output = run(&["440.5 MHz", "--step", "5 MHz", "--tolerance", "100 Hz", "--out", "set", "--json", "--quiet"]);
    let found: serde_json::Value = serde_json::from_slice(&output.stdout).unwrap();
    assert_eq!(found["schema"], "thornmap.settling/1");
    let settled_s = found["settled_after_s"].as_f64().unwrap();
    assert!(settled_s > 20e-6 && settled_s < 200e-6, "{settled_s}");
    let linear_s = found["linear_settled_after_s"].as_f64().unwrap();
    assert!((linear_s / settled_s - 1.0).abs() < 0.1, "no slips at 5 MHz: {linear_s} against {settled_s}");
    assert!(found["samples"][5]["linear_frequency_error_hz"].is_f64());
    assert!(folder.path().join("set/settling.svg").exists());
    for (arguments, said) in [
        (vec!["440.5 MHz", "--step", "0 Hz"], "settles at once"),
        (vec!["440.5 MHz", "--step", "5"], "unit"),
        (vec!["440.5 MHz", "--cycles", "10"], "10"),
        (vec!["440.5 MHz", "--tolerance", "1 Hz"], "--step"),
        (vec!["900 MHz"], "no group holds"),
    ] {
        let output = run(&arguments);
        let message = String::from_utf8_lossy(&output.stderr).into_owned();
        assert_eq!(output.status.code(), Some(2), "{message}");
        assert!(message.contains(said), "{message}");
    }
}

#[test]
fn a_large_step_slips_cycles_and_still_locks() {
    let (divider, pfd_hz) = (90.0, 20e6);
    let network = network(divider, (None, None));
    let step_hz = 400e6;
    let input = SimulationInput {
        network: &network,
        gain_hz_per_v: GAIN_HZ_PER_V,
        pfd_hz,
        target_hz: divider * pfd_hz,
        detector: ideal(),
        start_error_hz: -step_hz,
        start_phase_cycles: 0.0,
    };
    let samples = Simulation::new(input, Box::new(|| 0.0)).unwrap().transient(12_000).unwrap();
    let last = samples.last().unwrap();
    assert!(last.frequency_hz.abs() < 1.0, "{last:?}");
    // Whole comparisons were lost: the phase ends on a multiple of N, not on zero.
    let slips = last.phase_cycles / divider;
    assert!(slips < -0.5 && (slips - slips.round()).abs() < 1e-6, "{slips}");
}

#[test]
fn a_dead_zone_and_a_reset_delay_keep_the_loop_locked() {
    let (divider, pfd_hz) = (90.3, 20e6);
    let network = network(divider, (Some(0.4), None));
    let config = config(3, 3 << 10, 10 << 10);
    for detector in [
        SimulatedDetector { dead_zone_s: 20e-12, ..ideal() },
        SimulatedDetector { reset_delay_s: 2e-9, up_a: 1.01 * CURRENT_A, down_a: 0.99 * CURRENT_A, ..ideal() },
    ] {
        let input = SimulationInput {
            network: &network,
            gain_hz_per_v: GAIN_HZ_PER_V,
            pfd_hz,
            target_hz: divider * pfd_hz,
            detector,
            start_error_hz: 1e5,
            start_phase_cycles: 0.0,
        };
        let (record, _) = Simulation::new(input, phases(&config)).unwrap().record(20_000, 10_000, &|_| {}).unwrap();
        let mean = record.iter().sum::<f64>() / record.len() as f64;
        let spread = record.iter().map(|p| (p - mean).powi(2)).sum::<f64>() / record.len() as f64;
        assert!(mean.abs() < 2.0 && spread.sqrt() < 0.1, "mean {mean}, spread {}", spread.sqrt());
    }
}

/// One random case of prediction against simulation.
struct Case {
    order: u8,
    mismatch_percent: f64,
    offset_ua: f64,
    modulus: u64,
    k: u64,
    ratio: f64,
}

/// The cases, seeded: orders 1 to 3, mismatch 0.5 to 5 %, offset from nothing to beyond the kink, moduli 2^b, prime and
/// composite, the first line between 0.05 and 3 loop bandwidths.
fn cases(count: usize, ratios: (f64, f64)) -> Vec<Case> {
    let mut random = StdRng::seed_from_u64(404);
    (0..count)
        .map(|i| {
            let order = 1 + (i % 3) as u8;
            let modulus = [1 << 20, 1_048_573, 999_990, 1 << 17, 65_521][random.random_range(0..5usize)];
            let ratio = random.random_range(ratios.0..ratios.1);
            let share = 10f64.powf(random.random_range(0.05f64.log10()..3f64.log10())) / ratio;
            let clear_ua = 2500.0 * 2f64.powi(i32::from(order) - 2) / 90.0;
            Case {
                order,
                mismatch_percent: random.random_range(0.5..5.0),
                offset_ua: [0.0, 0.3 * clear_ua, clear_ua, 1.3 * clear_ua][random.random_range(0..4usize)],
                modulus,
                k: ((share * modulus as f64) as u64).clamp(1, modulus - 1) | 1,
                ratio,
            }
        })
        .collect()
}

/// Returns a case simulated.
fn simulated(case: &Case, cycles: u64) -> thornmap::assess::SimulatedChannel {
    let pfd_hz = 20e6;
    let text = format!(
        r#"schema = 1
[reference]
frequency = "20 MHz"
[oscillator]
range = ["1.7 GHz", "1.9 GHz"]
gain = "32 MHz/V"
[modulator]
order = {}
modulus = {}
seeds = [1]
[detector]
current = "2.5 mA"
mismatch = "{} %"
offset_current = "{} uA"
leakage = "1 nA"
[loop]
bandwidth = "{} Hz"
phase_margin = "50 deg"
design_divider = 90
[boundary]
largest_q = 1
harmonics = 3
[[channels]]
list = ["{} Hz"]
[analysis]
record = 2097152
"#,
        case.order,
        case.modulus,
        case.mismatch_percent,
        case.offset_ua,
        pfd_hz / case.ratio,
        format_args!("{}/{}", 20_000_000u128 * (90 * u128::from(case.modulus) + u128::from(case.k)), case.modulus),
    );
    let plan = thornmap::plan::parse_plan(&text, "case", &|_| Err("none".to_owned())).unwrap();
    let setup = thornmap::assess::Setup::new(&plan).unwrap();
    let channel = plan.groups[0].channels.get(0).unwrap();
    thornmap::assess::simulate_channel(&setup, 0, channel, Some(cycles), &|_| {}).unwrap()
}

/// Returns predicted and simulated level of the strongest line in the loop of a case; `None` where the static model is
/// not claimed or the line does not stand clear of the noise.
fn compared(case: &Case, cycles: u64) -> Option<(f64, f64)> {
    let found = simulated(case, cycles);
    // The strongest by either route: a line that one of them overstates is judged as well.
    let size = |tone: &thornmap::assess::ComparedTone| {
        tone.predicted_dbc.unwrap_or(-999.0).max(tone.simulated_dbc.unwrap_or(-999.0))
    };
    let strongest = found.tones.iter().filter(|tone| tone.inside_loop).max_by(|a, b| size(a).total_cmp(&size(b)))?;
    let (predicted, simulated) = strongest.predicted_dbc.zip(strongest.simulated_dbc)?;
    // Over whole periods both are exact; in a cut record a line must stand clear of the noise to have a level.
    let clear = found.whole_periods || strongest.floor_dbc.is_some_and(|floor| simulated - floor > 25.0);
    clear.then_some((predicted, simulated))
}

/// A judged case: predicted and simulated level.
struct Judged<'a> {
    case: &'a Case,
    predicted: f64,
    simulated: f64,
}

impl Judged<'_> {
    fn is_off(&self) -> bool {
        (self.predicted - self.simulated).abs() > 0.5
    }

    fn text(&self) -> String {
        let case = self.case;
        format!(
            "order {}, {:.2} %, {:.1} uA, {}/{}, ratio {:.1}: predicted {:.2}, simulated {:.2}",
            case.order,
            case.mismatch_percent,
            case.offset_ua,
            case.k,
            case.modulus,
            case.ratio,
            self.predicted,
            self.simulated
        )
    }
}

/// Returns every case whose strongest line in the loop is predicted or simulated above −75 dBc.
fn judged(cases: &[Case], cycles: u64) -> Vec<Judged<'_>> {
    cases
        .par_iter()
        .filter_map(|case| {
            let (predicted, simulated) = compared(case, cycles)?;
            (predicted.max(simulated) >= -75.0).then_some(Judged { case, predicted, simulated })
        })
        .collect()
}

/// Returns whether the long checks are asked for.
fn is_long() -> bool {
    std::env::var_os("THORNMAP_LONG").is_some()
}

#[test]
fn predictions_hold_against_the_simulation() {
    // Orders 1 to 3, f_pfd/f_c from 25 to 120. No exception is known here: order 1 is judged by its modulator lines, the
    // static model not being claimed where they are strong.
    let (count, cycles, least) = if is_long() { (170, 1 << 21, 60) } else { (14, 1 << 18, 4) };
    let cases = cases(count, (25.0, 120.0));
    let judged = judged(&cases, cycles);
    assert!(judged.len() >= least, "{}", judged.len());
    let off: Vec<String> = judged.iter().filter(|case| case.is_off()).map(Judged::text).collect();
    assert!(off.is_empty(), "{} judged, off: {off:#?}", judged.len());
}

#[test]
fn predictions_with_a_wide_loop_hold_but_for_the_known_exceptions() {
    // f_pfd/f_c from 10 to 20, through the sampled H. The VCO's own phase moves between comparisons, so the detector
    // sees φ minus that movement: a wider spread than the static model's. Two exceptions follow, and no other: mismatch
    // tones up to 1.5 dB off, and an offset current that would just clear the kink no longer clears it.
    let (count, cycles, least) = if is_long() { (45, 1 << 21, 15) } else { (8, 1 << 18, 2) };
    let cases = cases(count, (10.0, 20.0));
    let judged = judged(&cases, cycles);
    assert!(judged.len() >= least, "{}", judged.len());
    let held = judged.iter().filter(|case| !case.is_off()).count();
    assert!(2 * held >= judged.len(), "{held} of {}", judged.len());
    for case in judged.iter().filter(|case| case.is_off()) {
        let at_the_kink = case.case.order >= 2 && case.case.offset_ua > 20.0;
        let is_known = at_the_kink || (case.predicted - case.simulated).abs() < 1.5;
        assert!(is_known && case.simulated > case.predicted, "{}", case.text());
    }
}

#[test]
fn lines_of_order_four_by_the_width_of_the_pulses_are_predicted() {
    // A matched pump has no mismatch tone; what is left comes from charge that is spread over the pulse: −jω·p²/(2·f_vco).
    let mut checked = 0;
    for k in [51u64, 77, 131, 217] {
        let case = Case { order: 4, mismatch_percent: 0.0, offset_ua: 0.0, modulus: 1 << 13, k, ratio: 200.0 };
        let found = simulated(&case, 1 << 17);
        let floor = found.tones.iter().map(|tone| tone.floor_dbc.unwrap()).fold(f64::INFINITY, f64::min);
        for tone in &found.tones {
            let (predicted, seen) = (tone.predicted_dbc.unwrap(), tone.simulated_dbc.unwrap());
            if seen > floor - 10.0 {
                assert!((predicted - seen).abs() < 0.5, "k {k}: {tone:?}");
                checked += 1;
            }
        }
    }
    assert!(checked >= 6, "{checked}");
}

#[test]
fn the_noise_of_dither_at_the_first_stage_is_predicted() {
    // M = 2^16: the dither's own noise rises towards the carrier as 1/f² and is a good part of the phase error here.
    let text = std::fs::read_to_string(concat!(env!("CARGO_MANIFEST_DIR"), "/configs/demo.toml")).unwrap();
    let run = |more: &str| {
        let text = text
            .replace("modulus = \"2^24\"", &format!("modulus = \"2^16\"\n{more}"))
            .replace("integration = [\"100 Hz\", \"9.6 MHz\"]", "integration = [\"2 kHz\", \"20 kHz\"]");
        let plan = thornmap::plan::parse_plan(&text, "demo", &|_| Err("none".to_owned())).unwrap();
        let setup = thornmap::assess::Setup::new(&plan).unwrap();
        let channel = plan.groups[1].channels.get(60).unwrap();
        let found = thornmap::assess::simulate_channel(&setup, 1, channel, Some(1 << 20), &|_| {}).unwrap();
        (found.predicted_rms_deg.unwrap(), found.simulated_rms_deg)
    };
    let (predicted, simulated) = run("dither = { stage = 1, register = 23, seed = 1, weight = 1 }");
    assert!((predicted / simulated - 1.0).abs() < 0.05, "{predicted} against {simulated}");
    assert!(simulated > 1.15 * run("").1);
}
