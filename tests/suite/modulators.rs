//! Modulator checks against hand cases, the slow definition, invariants and outside references.

use num_bigint::BigUint;
use thornmap::base::Exact;
use thornmap::modulator::{
    Dither, ModulatorConfig, ModulatorSettings, Modulus, ModulusRule, PeriodBasis, Register, Structure, jump_to,
    oracle, output_range, period, period_within, phase_numerators, prime_feedback, start, transient,
};

fn settings(structure: Structure, order: u8, seeds: &[u64]) -> ModulatorSettings {
    ModulatorSettings {
        structure,
        order,
        seeds: seeds.to_vec(),
        dither: Dither::None,
        noise_transfer: None,
        runs_at_zero: true,
    }
}

fn config_of(settings: &ModulatorSettings, m: u64, k: u64) -> ModulatorConfig {
    ModulatorConfig::new(settings, Modulus::new(m).unwrap(), k, true).unwrap()
}

fn mash(order: u8, m: u64, k: u64, seeds: &[u64]) -> ModulatorConfig {
    config_of(&settings(Structure::Mash, order, seeds), m, k)
}

fn run(config: &ModulatorConfig, count: usize) -> Vec<i32> {
    let mut outputs = vec![0; count];
    start(config).fill(&mut outputs);
    outputs
}

fn length_of(config: &ModulatorConfig) -> u64 {
    let found = period(config);
    assert!(found.is_exact);
    u64::try_from(found.length.unwrap()).unwrap()
}

/// Splitmix64: seeded, so that every run tries the same settings.
struct Draw(u64);

impl Draw {
    fn next(&mut self) -> u64 {
        self.0 = self.0.wrapping_add(0x9e37_79b9_7f4a_7c15);
        let mut z = self.0;
        z = (z ^ (z >> 30)).wrapping_mul(0xbf58_476d_1ce4_e5b9);
        z = (z ^ (z >> 27)).wrapping_mul(0x94d0_49bb_1331_11eb);
        z ^ (z >> 31)
    }

    /// A number in 0 … below − 1.
    fn below(&mut self, below: u64) -> u64 {
        self.next() % below
    }
}

/// Source: computed twice by independent scripts and with crate `idsp`; M = 16, K = 3, zero seeds.
#[test]
fn first_outputs_of_orders_one_to_four() {
    let table: [[i32; 20]; 4] = [
        [0, 0, 0, 0, 0, 1, 0, 0, 0, 0, 1, 0, 0, 0, 0, 1, 0, 0, 0, 0],
        [0, 0, 1, -1, 1, 0, 1, -1, 1, 0, 0, 0, 1, -1, 1, 0, 0, 1, -1, 1],
        [0, 0, 1, 0, 0, 0, 0, 1, -1, 2, -2, 2, -1, 1, -1, 2, -2, 2, 0, -1],
        [0, 0, 2, -2, 1, -1, 3, -3, 3, -1, -2, 4, -1, -2, 2, 1, -1, 0, 0, 2],
    ];
    for (order, want) in (1..).zip(table) {
        assert_eq!(run(&mash(order, 16, 3, &[]), 20), want, "order {order}");
    }
}

/// Source: computed by independent scripts.
#[test]
fn period_table_for_nine_bits() {
    for (order, want) in (1u8..).zip([512, 1024, 1024, 2048, 2048]) {
        for k in (1..512).step_by(2) {
            assert_eq!(length_of(&mash(order, 512, k, &[])), want, "order {order}, K = {k}");
        }
    }
    for (order, want) in (1u8..).zip([128, 256, 256, 512, 512]) {
        assert_eq!(length_of(&mash(order, 512, 4, &[])), want, "order {order}");
    }
    let seeded = mash(3, 512, 257, &[1]);
    assert_eq!(length_of(&seeded), 1024);
    let outputs = run(&seeded, 2 + 1024);
    assert_eq!(outputs[2..].iter().sum::<i32>(), 514);
}
