//! Cycles a second of the simulation in time, on one core.

#![allow(clippy::unwrap_used, reason = "a bench fails by panicking")]

use thornmap::loop_model::{FilterDesign, FilterNetwork, SimulatedDetector, Simulation, SimulationInput};

const CYCLES: u64 = 1_000_000;

fn main() {
    divan::main();
}

/// Runs a mismatched detector on a sequence of order 3, `poles` further poles in the filter.
fn run(pole_ratios: (Option<f64>, Option<f64>), dead_zone_s: f64) -> f64 {
    let design = FilterDesign { bandwidth_hz: 60e3, phase_margin_deg: 50.0, design_divider: None, pole_ratios };
    let network = FilterNetwork::new(&design.components(2.5e-3, 32e6, 90.0).unwrap()).unwrap();
    let input = SimulationInput {
        network: &network,
        gain_hz_per_v: 32e6,
        pfd_hz: 20e6,
        target_hz: 90.25 * 20e6,
        detector: SimulatedDetector {
            up_a: 2.525e-3,
            down_a: 2.475e-3,
            drain_a: 1e-9,
            dead_zone_s,
            reset_delay_s: 0.0,
        },
        start_error_hz: 0.0,
        start_phase_cycles: 0.0,
    };
    // A cheap stand-in for a sequence: the shape of the phase does not matter to the time it takes.
    let mut state = 1u32;
    let phases = Box::new(move || {
        state = state.wrapping_mul(1_664_525).wrapping_add(1_013_904_223);
        f64::from(state >> 8) / f64::from(1 << 24) - 0.5
    });
    let (record, _) = Simulation::new(input, phases).unwrap().record(0, CYCLES, &|_| {}).unwrap();
    record.iter().sum()
}

#[divan::bench]
fn second_order(bencher: divan::Bencher) {
    bencher.counter(divan::counter::ItemsCount::new(CYCLES)).bench(|| run((None, None), 0.0));
}

#[divan::bench]
fn fourth_order(bencher: divan::Bencher) {
    bencher.counter(divan::counter::ItemsCount::new(CYCLES)).bench(|| run((Some(0.4), Some(0.4)), 0.0));
}

#[divan::bench]
fn second_order_with_dead_zone(bencher: divan::Bencher) {
    bencher.counter(divan::counter::ItemsCount::new(CYCLES)).bench(|| run((None, None), 20e-12));
}
