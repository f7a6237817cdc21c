//! The engine against numpy, scipy and Python's fractions (tests/data/reference.py; see PROVENANCE.md there).

use serde::Deserialize;
use sha2::{Digest, Sha256};
use thornmap::base::{Exact, Frequency, parse_number};
use thornmap::loop_model::{ChargeCurve, ChargeTerms};
use thornmap::modulator::{
    Dither, ModulatorConfig, ModulatorSettings, Modulus, ModulusRule, Register, Structure, period, phase_numerators,
    start, transient, word,
};
use thornmap::spectrum::{DensitySettings, FftScratch, FftStage, Window};
use thornmap::tones::{Charge, settle_samples};

#[derive(Deserialize)]
struct Reference {
    sequences: Vec<Sequence>,
    words: Vec<WordCase>,
    near_integer: Vec<(i128, u64, i128, usize)>,
    registers: Vec<RegisterCase>,
}

#[derive(Deserialize)]
struct Sequence {
    order: u8,
    m: u64,
    k: u64,
    seeds: Vec<u64>,
    dither: Option<DitherCase>,
    first: Vec<i32>,
    sha256_20000: String,
    period: Option<u64>,
    density: Vec<(usize, f64)>,
    lines: Option<Lines>,
}

#[derive(Deserialize)]
struct DitherCase {
    stage: u8,
    register: u8,
    seed: u64,
    weight: u64,
}

#[derive(Deserialize)]
struct Lines {
    mismatch: f64,
    dead_zone: f64,
    target: f64,
    rest: f64,
    power: f64,
    bins: Vec<(usize, f64, f64, f64, f64)>,
}

#[derive(Deserialize)]
struct WordCase {
    ratio: String,
    rule: String,
    m: u64,
    word: (u64, u64, u64),
}

#[derive(Deserialize)]
struct RegisterCase {
    register: u8,
    period: usize,
    ones: usize,
    repeats: bool,
}

fn reference() -> Reference {
    serde_json::from_str(include_str!("../data/reference.json")).unwrap()
}

fn config(case: &Sequence) -> ModulatorConfig {
    let dither = case.dither.as_ref().map_or(Dither::None, |d| Dither::Register {
        stage: d.stage,
        register: d.register,
        seed: d.seed,
        weight: d.weight,
    });
    let settings = ModulatorSettings {
        structure: Structure::Mash,
        order: case.order,
        seeds: case.seeds.clone(),
        dither,
        noise_transfer: None,
        runs_at_zero: false,
    };
    ModulatorConfig::new(&settings, Modulus::new(case.m).unwrap(), case.k, true).unwrap()
}

/// Returns φ \[cycles\] of the outputs from `skipped` on, less its mean.
fn phase(config: &ModulatorConfig, skipped: usize, length: usize) -> Vec<f64> {
    let mut outputs = vec![0; skipped + length];
    let mut numerators = vec![0; skipped + length];
    start(config).fill(&mut outputs);
    phase_numerators(&outputs, config.k(), config.modulus(), &mut numerators).unwrap();
    let phase: Vec<f64> = numerators[skipped..].iter().map(|n| *n as f64 / config.modulus().get() as f64).collect();
    let mean = phase.iter().sum::<f64>() / length as f64;
    phase.into_iter().map(|p| p - mean).collect()
}

#[test]
fn sequences_equal_numpy_output_for_output() {
    let reference = reference();
    for case in &reference.sequences {
        let mut outputs = vec![0; 20_000];
        start(&config(case)).fill(&mut outputs);
        assert_eq!(outputs[..64], case.first, "order {} M {} K {}", case.order, case.m, case.k);
        let bytes: Vec<u8> = outputs.iter().flat_map(|y| y.to_le_bytes()).collect();
        let digest: String = Sha256::digest(&bytes).iter().map(|byte| format!("{byte:02x}")).collect();
        assert_eq!(digest, case.sha256_20000, "order {} M {} K {}", case.order, case.m, case.k);
        if let Some(length) = case.period {
            assert_eq!(period(&config(case)).length, Some(length.into()));
        }
    }
    assert_eq!(reference.sequences.len(), 24);
}

#[test]
fn line_spectra_equal_numpy_before_and_after_the_charge_curve() {
    let stage = FftStage::new();
    let mut scratch = FftScratch::new();
    let (mut settings, mut bins) = (0, 0);
    for case in &reference().sequences {
        let Some(lines) = &case.lines else { continue };
        let config = config(case);
        let length = usize::try_from(case.period.unwrap()).unwrap();
        let psi = phase(&config, transient(&config), length);
        let power = psi.iter().map(|p| p * p).sum::<f64>() / length as f64;
        assert!((power / lines.power - 1.0).abs() < 1e-12);
        let curve = ChargeCurve::from_terms(&ChargeTerms {
            mismatch: lines.mismatch,
            dead_zone_cycles: lines.dead_zone,
            quadratic_per_cycle: 0.0,
            cubic_per_cycle2: 0.0,
        });
        let at = |p: f64| curve.at(p);
        let rest = settle_samples(&psi, Charge::new(&at, curve.kinks()), lines.target).unwrap().offset_cycles;
        assert!((rest - lines.rest).abs() < 1e-11, "rest {rest} against {}", lines.rest);
        let bent: Vec<f64> = psi.iter().map(|p| curve.at(p + rest) - p).collect();
        let (c, b) = (stage.lines(&psi, &mut scratch), stage.lines(&bent, &mut scratch));
        for (bin, re, im, bent_re, bent_im) in &lines.bins {
            let worst = [(c[*bin].re, re), (c[*bin].im, im), (b[*bin].re, bent_re), (b[*bin].im, bent_im)]
                .into_iter()
                .map(|(ours, theirs)| (ours - theirs).abs())
                .fold(0.0, f64::max);
            // Lines are of order 0.1 cycle; both sides round at 1e-16 a sample.
            assert!(worst < 1e-12, "order {} M {} K {} bin {bin}: {worst}", case.order, case.m, case.k);
            bins += 1;
        }
        settings += 1;
    }
    assert!(settings >= 20 && bins >= 150, "{settings} settings, {bins} bins");
}

#[test]
fn densities_equal_scipy_welch() {
    let stage = FftStage::new();
    let mut scratch = FftScratch::new();
    let mut compared = 0;
    for case in &reference().sequences {
        let config = config(case);
        let psi: Vec<f64> = phase(&config, 0, 1 << 16).iter().map(|p| p * std::f64::consts::TAU).collect();
        let settings = DensitySettings { segment: 4096, window: Window::Hann, sample_rate_hz: 20e6 };
        let density = stage.density(&psi, settings, &mut scratch).unwrap();
        for (bin, theirs) in &case.density {
            let ours = density.at_bin(*bin).unwrap();
            // Relative, or absolute at the rounding floor of lines that are exactly between bins.
            let allowed = 1e-7 * theirs + 1e-24;
            assert!(
                (ours - theirs).abs() < allowed,
                "order {} M {} bin {bin}: {ours} against {theirs}",
                case.order,
                case.m
            );
            compared += 1;
        }
    }
    assert_eq!(compared, 24 * 6);
}

#[test]
fn words_equal_exact_fractions() {
    let reference = reference();
    for case in &reference.words {
        let ratio: Exact = parse_number(&case.ratio).unwrap();
        let modulus = Modulus::new(case.m).unwrap();
        let rule = match case.rule.as_str() {
            "fixed" => ModulusRule::Fixed(modulus),
            _ => ModulusRule::Largest(modulus),
        };
        let found = word::nearest(ratio, &rule, Frequency::from_whole_hz(19_200_000), 4).unwrap();
        assert_eq!((found.n, found.k, found.modulus.get()), case.word, "{} {} {}", case.ratio, case.rule, case.m);
    }
    assert_eq!(reference.words.len(), 655);
}

#[test]
fn near_integer_counts_are_those_of_the_survey_tests() {
    let reference = reference();
    assert_eq!(reference.near_integer.len(), super::surveys::NEAR_INTEGER.len());
    for (pfd, output, guard, count) in reference.near_integer {
        let named = if pfd == 19_200_000 { "19.2 MHz" } else { "20 MHz" };
        assert!(super::surveys::NEAR_INTEGER.contains(&(named, output, guard, count)));
    }
}

#[test]
fn registers_have_the_periods_that_scipy_finds() {
    for case in &reference().registers {
        let mut register = Register::new(case.register, 1).unwrap();
        let bits: Vec<u64> = (0..2 * case.period).map(|_| register.next_bit()).collect();
        assert!(case.repeats);
        assert_eq!(bits[..case.period], bits[case.period..]);
        assert_eq!(bits[..case.period].iter().filter(|bit| **bit == 1).count(), case.ones);
    }
}
