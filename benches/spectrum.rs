//! What a channel costs: transform, correlation, curve.

use std::hint::black_box;

use divan::Bencher;
use thornmap::spectrum::{DensitySettings, FftScratch, FftStage, Window, correlate_each};
use thornmap::tones::{Charge, PhaseDensity, folded_noise, harmonic, settle, settle_samples};

fn main() {
    divan::main();
}

fn samples(count: usize) -> Vec<f64> {
    (0..count).map(|n| ((n * n * 40_503) % 65_521) as f64 / 65_521.0 - 0.5).collect()
}

fn mismatch(p: f64) -> f64 {
    p + 0.01 * p.abs()
}

#[divan::bench(args = [1 << 17, 131_071, 3 << 15])]
fn lines(bencher: Bencher<'_, '_>, count: usize) {
    let (stage, mut scratch, record) = (FftStage::new(), FftScratch::new(), samples(count));
    bencher.bench_local(|| stage.lines(black_box(&record), &mut scratch));
}

#[divan::bench]
fn density(bencher: Bencher<'_, '_>) {
    let (stage, mut scratch, record) = (FftStage::new(), FftScratch::new(), samples(1 << 17));
    let settings = DensitySettings { segment: 1 << 13, window: Window::FourTerm, sample_rate_hz: 26e6 };
    bencher.bench_local(|| stage.density(black_box(&record), settings, &mut scratch));
}

#[divan::bench]
fn ten_correlations(bencher: Bencher<'_, '_>) {
    let record = samples(1 << 17);
    let residues: Vec<u64> = (1..=10).map(|h| h * 1_234_567 % (1 << 24)).collect();
    bencher.bench_local(|| correlate_each(black_box(&record), &residues, 1 << 24, Window::Hann));
}

#[divan::bench(args = [2, 3, 4, 5])]
fn curve_of_ten_harmonics(bencher: Bencher<'_, '_>, order: u8) {
    let density = PhaseDensity::mash(order).expect("an order with a density");
    let charge = Charge::new(&mismatch, &[0.0]);
    bencher.bench_local(|| {
        let rest = settle(&density, charge, black_box(0.1)).expect("a curve that rises without end");
        (1..=10).map(|h| harmonic(&density, charge, rest.offset_cycles, h).nonlinearity.norm()).sum::<f64>()
    });
}

#[divan::bench(args = [2, 3, 4, 5])]
fn fold(bencher: Bencher<'_, '_>, order: u8) {
    let density = PhaseDensity::mash(order).expect("an order with a density");
    bencher.bench_local(|| folded_noise(&density, Charge::new(&mismatch, &[0.0]), black_box(0.1)));
}

#[divan::bench]
fn rest_of_a_record(bencher: Bencher<'_, '_>) {
    let record = samples(1 << 17);
    bencher.bench_local(|| settle_samples(black_box(&record), Charge::new(&mismatch, &[0.0]), 0.1));
}
