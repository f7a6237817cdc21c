//! How fast sequences are made, in samples a second on one core: `cargo bench --bench generation`.

use divan::counter::ItemsCount;
use divan::{Bencher, black_box};
use thornmap::modulator::{Dither, ModulatorConfig, ModulatorSettings, Modulus, Structure, jump_to, period, start};

/// Outputs in one call.
const COUNT: usize = 1 << 20;

fn main() {
    divan::main();
}

fn config_of(structure: Structure, order: u8, modulus: u64, dither: Dither) -> ModulatorConfig {
    let settings =
        ModulatorSettings { structure, order, seeds: vec![1], dither, noise_transfer: None, runs_at_zero: false };
    let modulus = Modulus::new(modulus).expect("benches use moduli up to 2^48");
    ModulatorConfig::new(&settings, modulus, modulus.get() / 3 + 1, true).expect("benches use legal settings")
}

fn generate(bencher: Bencher, config: &ModulatorConfig) {
    let mut modulator = start(config);
    let mut outputs = vec![0; COUNT];
    bencher.counter(ItemsCount::new(COUNT)).bench_local(|| {
        modulator.fill(black_box(&mut outputs));
    });
}

#[divan::bench(args = [1, 2, 3, 4, 5])]
fn mash_24_bits(bencher: Bencher, order: u8) {
    generate(bencher, &config_of(Structure::Mash, order, 1 << 24, Dither::None));
}

#[divan::bench(args = [1, 2, 3, 4, 5])]
fn mash_32_bits(bencher: Bencher, order: u8) {
    generate(bencher, &config_of(Structure::Mash, order, 1 << 32, Dither::None));
}

#[divan::bench(args = [1, 2, 3, 4, 5])]
fn mash_decimal_modulus(bencher: Bencher, order: u8) {
    generate(bencher, &config_of(Structure::Mash, order, 10_000_000, Dither::None));
}

#[divan::bench(args = [2, 3, 4])]
fn mash_dithered(bencher: Bencher, order: u8) {
    let dither = Dither::Register { stage: 1, register: 23, seed: 1, weight: 1 };
    generate(bencher, &config_of(Structure::Mash, order, 1 << 24, dither));
}

#[divan::bench]
fn prime_mash_order_3(bencher: Bencher) {
    generate(bencher, &config_of(Structure::PrimeMash, 3, (1 << 24) - 3, Dither::None));
}

#[divan::bench]
fn output_fed_order_3(bencher: Bencher) {
    generate(bencher, &config_of(Structure::OutputFed, 3, 1 << 24, Dither::None));
}

#[divan::bench]
fn error_feedback_order_3(bencher: Bencher) {
    generate(bencher, &config_of(Structure::ErrorFeedback, 3, 1 << 24, Dither::None));
}

#[divan::bench]
fn closed_period_order_5(bencher: Bencher) {
    let config = config_of(Structure::Mash, 5, 10_000_000, Dither::None);
    bencher.bench(|| period(black_box(&config)));
}

#[divan::bench]
fn jump_order_5(bencher: Bencher) {
    let config = config_of(Structure::Mash, 5, 10_000_000, Dither::None);
    bencher.bench(|| jump_to(black_box(&config), 1 << 70));
}
