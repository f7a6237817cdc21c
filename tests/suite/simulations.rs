//! The event-driven simulation against closed forms, and predictions against it.

use std::f64::consts::TAU;

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
    let (mut buffer, mut place, mut sum) = (vec![0; 4096], 4096, 0i64);
    let mut count = 0.0;
    let _ = m;
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
        println!("h {h} {offset_hz} seen {seen} wanted {wanted}");
        assert!((seen - wanted).abs() < 0.1, "h = {h}: {seen} against {wanted}");
    }
    assert_eq!(within.cycles, 4096);
    let _ = (TAU, reference_tone_dbc as fn(&FilterNetwork, f64, f64, f64, f64, u64) -> Option<f64>);
}
