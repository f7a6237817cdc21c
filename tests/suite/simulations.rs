//! The event-driven simulation against closed forms, and predictions against it.

#![allow(clippy::cast_possible_truncation, clippy::cast_sign_loss, reason = "random settings of known size")]

use rand::rngs::StdRng;
use rand::{RngExt, SeedableRng};
use rayon::prelude::*;
use thornmap::loop_model::{
    FilterDesign, FilterNetwork, LoopPoint, LoopResponse, SimulatedDetector, Simulation, SimulationInput,
    reference_tone_dbc,
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

/// Returns predicted and simulated level of the strongest line in the loop of a case, and whether the static model was
/// claimed.
fn compared(case: &Case, cycles: u64) -> Option<(f64, f64)> {
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
    let found = thornmap::assess::simulate_channel(&setup, 0, channel, Some(cycles), &|_| {}).unwrap();
    found
        .tones
        .iter()
        .filter(|tone| tone.inside_loop)
        .filter_map(|tone| tone.predicted_dbc.zip(tone.simulated_dbc))
        .max_by(|a, b| a.1.total_cmp(&b.1))
}

/// Holds the cases against the simulation; returns how many were judged and every one that differs by more than 0.5 dB.
fn held(cases: &[Case], cycles: u64) -> (usize, Vec<String>) {
    let found: Vec<Option<Result<(), String>>> = cases
        .par_iter()
        .map(|case| {
            let (predicted, simulated) = compared(case, cycles)?;
            if simulated < -75.0 {
                return None;
            }
            let text = format!(
                "order {}, {:.2} %, {:.1} uA, {}/{}, ratio {:.1}: predicted {predicted:.2}, simulated {simulated:.2}",
                case.order, case.mismatch_percent, case.offset_ua, case.k, case.modulus, case.ratio
            );
            Some(if (predicted - simulated).abs() <= 0.5 { Ok(()) } else { Err(text) })
        })
        .collect();
    let judged: Vec<Result<(), String>> = found.into_iter().flatten().collect();
    (judged.len(), judged.into_iter().filter_map(Result::err).collect())
}

#[test]
fn predictions_hold_against_the_simulation() {
    let is_long = std::env::var_os("THORNMAP_LONG").is_some();
    let (count, cycles) = if is_long { (90, 1 << 20) } else { (12, 1 << 17) };
    let (judged, off) = held(&cases(count, (25.0, 120.0)), cycles);
    println!("{judged} judged, off: {off:#?}");
    assert!(judged >= count / 3, "{judged}");
    assert!(off.is_empty(), "{off:#?}");
}
