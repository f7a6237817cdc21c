//! Structures beside the MASH, and what a configuration refuses.

use num_bigint::BigUint;
use thornmap::base::Exact;
use thornmap::modulator::{
    Dither, ModulatorConfig, ModulatorSettings, Modulus, ModulusRule, PeriodBasis, Structure, oracle, output_range,
    period, period_within, prime_feedback, start, transient,
};

use super::{Draw, config_of, mash, run, settings};

/// Source: OEIS A013603, n = 5 … 25.
#[test]
fn feedback_of_the_largest_prime_below_a_power_of_two() {
    let published = [1, 3, 1, 5, 3, 3, 9, 3, 1, 3, 19, 15, 1, 5, 1, 3, 9, 3, 15, 3, 39];
    let found: Vec<u64> = (5..=25).map(|bits| prime_feedback(bits).unwrap()).collect();
    assert_eq!(found, published);
}

/// Source: computed; the structure is Hosseini & Kennedy 2007 (from memory).
#[test]
fn prime_modulus_of_five_bits() {
    let mut checked = 0;
    for k in 1..31u64 {
        let config = config_of(&settings(Structure::PrimeMash, 3, &[1]), 31, k);
        let length = period(&config);
        assert_eq!(length.length, Some(BigUint::from(29_791u32)));
        assert_eq!(length.basis, PeriodBasis::ClosedRule);
        assert_eq!(oracle::state_period(&config, 100_000), Some(29_791), "K = {k}");
        let skip = transient(&config);
        let outputs = run(&config, skip + 2 * 29_791);
        let (once, again) = outputs[skip..].split_at(29_791);
        assert_eq!(once, again, "K = {k}: the transient is longer than {skip}");
        assert_eq!(once.iter().sum::<i32>(), i32::try_from(k * 961).unwrap(), "K = {k}");
        assert_ne!(once[..29_791 - 961], once[961..], "K = {k}");
        assert_eq!(config.mean(), Some(Exact::new(k.into(), 31).unwrap()));
        checked += 1;
    }
    assert_eq!(checked, 30);
}

/// Returns the state period of a prime-modulus MASH of order 3, 6 bits, whose stages drop a second carry.
fn period_with_dropped_carry(k: u64) -> u64 {
    let mut state = ([0u64; 3], [0u64; 3]);
    let advance = |(residues, carries): &mut ([u64; 3], [u64; 3])| {
        let mut input = k;
        for i in 0..3 {
            let value = input + residues[i] + 3 * carries[i];
            carries[i] = u64::from(value >= 64);
            residues[i] = value % 64;
            input = residues[i];
        }
    };
    for _ in 0..1_000_000 {
        advance(&mut state);
    }
    let mark = state;
    (1..)
        .find(|_| {
            advance(&mut state);
            state == mark
        })
        .unwrap()
}

/// Source: computed. With a = 3 later stages reach v ≥ 2·2^6; dropping that carry breaks the sequence.
#[test]
fn the_second_carry_of_a_prime_modulus_is_kept() {
    for k in [1, 6, 35] {
        let config = config_of(&settings(Structure::PrimeMash, 3, &[]), 61, k);
        assert_eq!(period(&config).length, Some(BigUint::from(226_981u32)));
        assert_eq!(oracle::state_period(&config, 1_000_000), Some(226_981), "K = {k}");
    }
    assert_eq!(period_with_dropped_carry(6), 63_257);
}

/// Source: computed, 16,777,213³ = 4.7·10^21.
#[test]
fn prime_modulus_of_twenty_four_bits() {
    let config = config_of(&settings(Structure::PrimeMash, 3, &[]), (1 << 24) - 3, 5);
    assert_eq!(period(&config).length.unwrap().to_string(), (16_777_213u128.pow(3)).to_string());
}

/// The rule M^m and the transient, on every word of small primes, seeds of all kinds, K = 0 included.
#[test]
fn prime_modulus_lengths_by_running() {
    let mut checked = 0;
    let mut draw = Draw(11);
    for (m, order) in [(7u64, 1u8), (7, 2), (7, 3), (13, 2), (13, 3), (31, 2), (61, 2), (127, 2), (251, 2)] {
        for k in (0..m).step_by(usize::try_from(1 + m / 16).unwrap()) {
            for seeds in [vec![], vec![draw.below(m), draw.below(m)], vec![0, draw.below(m)]] {
                let seeds = &seeds[..seeds.len().min(order.into())];
                let config = config_of(&settings(Structure::PrimeMash, order, seeds), m, k);
                let rule = u64::try_from(period(&config).length.unwrap()).unwrap();
                assert_eq!(oracle::state_period(&config, 200_000), Some(rule), "{config:?}");
                let length = usize::try_from(rule).unwrap();
                let skip = transient(&config);
                let outputs = run(&config, skip + 2 * length);
                let (once, again) = outputs[skip..].split_at(length);
                assert_eq!(once, again, "{config:?}: the transient is longer than {skip}");
                let (low, high) = output_range(&config);
                assert!(outputs.iter().all(|y| (low..=high).contains(&i64::from(*y))));
                checked += 1;
            }
        }
    }
    assert_eq!(checked, 3 * (3 * 7 + 2 * 13 + 4 * 16));
}

/// Lengths of the output-fed MASH by its closed rule and by sums over runs, against the slow definition.
#[test]
fn output_fed_lengths_by_running() {
    let (mut by_rule, mut by_run) = (0, 0);
    for order in 1..=3u8 {
        for m in 2..=12u64 {
            for k in 0..m {
                for seed in [0, 1] {
                    let config = config_of(&settings(Structure::OutputFed, order, &[seed]), m, k);
                    let found = period(&config);
                    let length = u64::try_from(found.length.unwrap()).unwrap();
                    assert_eq!(oracle::state_period(&config, 10_000), Some(length), "order {order}, {k}/{m}");
                    let skip = transient(&config);
                    let outputs = run(&config, skip + usize::try_from(length).unwrap());
                    let sum: i64 = outputs[skip..].iter().map(|y| i64::from(*y)).sum();
                    assert_eq!(config.mean(), Some(Exact::new(sum.into(), length.into()).unwrap()));
                    match found.basis {
                        PeriodBasis::ClosedRule => by_rule += 1,
                        _ => by_run += 1,
                    }
                }
            }
        }
    }
    assert_eq!(by_rule + by_run, 3 * 2 * 77);
    assert!(by_rule > 200 && by_run > 100, "{by_rule} by rule, {by_run} by run");
}

/// With (1 − z⁻¹)^m an error-feedback modulator is a MASH whose last residue is its error: the same output for zero
/// seeds, the same length for all.
#[test]
fn error_feedback_equals_mash() {
    let mut draw = Draw(12);
    let mut checked = 0;
    for order in 1..=4u8 {
        for m in (2..40u64).chain([1 << 24, 10_000_000]) {
            let k = draw.below(m);
            let single = config_of(&settings(Structure::ErrorFeedback, order, &[]), m, k);
            assert_eq!(run(&single, 400), run(&mash(order, m, k, &[]), 400), "order {order}, {k}/{m}");
            let seeds: Vec<u64> = (0..order).map(|_| draw.below(m)).collect();
            let seeded = config_of(&settings(Structure::ErrorFeedback, order, &seeds), m, k);
            assert_eq!(transient(&seeded), 0);
            if m < 40 {
                let length = u64::try_from(period(&seeded).length.unwrap()).unwrap();
                assert_eq!(oracle::state_period(&seeded, 10_000), Some(length), "{seeded:?}");
            }
            checked += 1;
        }
    }
    assert_eq!(checked, 4 * 40);
}

/// Hand case: h = 1, 1 on M = 4, K = 1 from zero errors. v = 1, 2, 4, 3, 4, 4, 1, … so y = 0, 0, 1, 0, 1, 1, 0 and
/// e = 1, 2, 0, 3, 0, 0, 1. NTF(1) = 1 − 2 is not 0: the mean is not K/M, and none is claimed.
#[test]
fn a_given_error_filter_by_hand() {
    let given = ModulatorSettings { noise_transfer: Some(vec![1, 1]), ..settings(Structure::ErrorFeedback, 2, &[]) };
    let config = config_of(&given, 4, 1);
    assert_eq!(run(&config, 7), [0, 0, 1, 0, 1, 1, 0]);
    assert_eq!(config.mean(), None);
    assert_eq!(output_range(&config), (0, 1));
}

/// Lengths, transient and range of given filters, also of those that cannot be traced back (last coefficient 2 or 0).
#[test]
fn given_error_filters_by_running() {
    let mut draw = Draw(13);
    let mut checked = 0;
    for _ in 0..200 {
        let order = u8::try_from(1 + draw.below(3)).unwrap();
        let m = 2 + draw.below(15);
        let taps: Vec<i64> = (0..order).map(|_| i64::try_from(draw.below(9)).unwrap() - 4).collect();
        let seeds: Vec<u64> = (0..order).map(|_| draw.below(m)).collect();
        let balanced = taps.iter().sum::<i64>() == 1;
        let given =
            ModulatorSettings { noise_transfer: Some(taps), ..settings(Structure::ErrorFeedback, order, &seeds) };
        let config = config_of(&given, m, draw.below(m));
        let found = period(&config);
        let length = u64::try_from(found.length.unwrap()).unwrap();
        assert_eq!(oracle::state_period(&config, 10_000), Some(length), "{config:?}");
        let length = usize::try_from(length).unwrap();
        let skip = transient(&config);
        let outputs = run(&config, skip + 2 * length);
        let (once, again) = outputs[skip..].split_at(length);
        assert_eq!(once, again, "{config:?}");
        let (low, high) = output_range(&config);
        assert!(outputs.iter().all(|y| (low..=high).contains(&i64::from(*y))), "{config:?}");
        assert_eq!(config.mean().is_some(), balanced);
        if let Some(mean) = config.mean() {
            let sum: i64 = once.iter().map(|y| i64::from(*y)).sum();
            assert_eq!(mean, Exact::new(sum.into(), i128::try_from(length).unwrap()).unwrap(), "{config:?}");
        }
        checked += 1;
    }
    assert_eq!(checked, 200);
}

/// A length beyond the steps allowed is unknown, not guessed.
#[test]
fn an_unfound_length_is_unknown() {
    let given = ModulatorSettings { noise_transfer: Some(vec![3, -2]), ..settings(Structure::ErrorFeedback, 2, &[]) };
    let found = period_within(&config_of(&given, (1 << 40) - 87, 12_345), 1000);
    assert_eq!((found.length, found.is_exact, found.basis), (None, false, PeriodBasis::Unknown));
}

/// Held: an integer divider, and K = 0 where the modulator does not run.
#[test]
fn held_modulators_stand_still() {
    let integer = config_of(&settings(Structure::Integer, 0, &[]), 1, 0);
    let mut resting = settings(Structure::Mash, 3, &[1]);
    resting.runs_at_zero = false;
    let resting = config_of(&resting, 1 << 24, 0);
    for config in [&integer, &resting] {
        assert!(config.is_held());
        assert_eq!(run(config, 100), [0; 100]);
        assert_eq!(period(config).length, Some(BigUint::from(1u32)));
        assert_eq!((output_range(config), transient(config)), ((0, 0), 0));
        assert_eq!(config.mean(), Some(Exact::ZERO));
    }
    let running = mash(3, 1 << 24, 0, &[1]);
    assert!(!running.is_held());
    assert!(run(&running, 100_000).iter().any(|y| *y != 0));
}

/// Seeds: padded, refused under a fixed modulus, reduced under one found channel by channel.
#[test]
fn seeds_fit_the_modulus() {
    let chosen = settings(Structure::Mash, 3, &[20, 3]);
    let modulus = Modulus::new(16).unwrap();
    let error = ModulatorConfig::new(&chosen, modulus, 3, true).unwrap_err().to_string();
    assert_eq!(error, "seed 20 of stage 1 is outside 0 … 15");
    let reduced = ModulatorConfig::new(&chosen, modulus, 3, false).unwrap();
    assert!(reduced.seeds_reduced());
    assert_eq!(reduced.seeds(), [4, 3, 0]);
    assert!(!ModulatorConfig::new(&settings(Structure::Mash, 3, &[15]), modulus, 3, false).unwrap().seeds_reduced());
}

/// Each refusal says what was found and what is allowed.
#[test]
fn refusals_name_found_and_allowed() {
    let base = || settings(Structure::Mash, 3, &[]);
    let filter =
        |taps: Vec<i64>| ModulatorSettings { noise_transfer: Some(taps), ..settings(Structure::ErrorFeedback, 2, &[]) };
    let cases = [
        (settings(Structure::ErrorFeedback, 5, &[]), "order 5 of structure \"error-feedback\" is outside 1 … 4"),
        (settings(Structure::Integer, 1, &[]), "order 1 of structure \"integer\" is outside 0 … 0"),
        (settings(Structure::Mash, 0, &[]), "order 0 of structure \"mash\" is outside 1 … 5"),
        (settings(Structure::Mash, 2, &[1, 2, 3]), "3 seeds for 2 stages; give at most 2"),
        (
            ModulatorSettings { noise_transfer: Some(vec![1]), ..base() },
            "structure \"mash\" has no error filter; coefficients belong to \"error-feedback\"",
        ),
        (filter(vec![1]), "1 error filter coefficients for order 2; give exactly 2"),
        (filter(vec![1, 2000]), "error filter coefficient 2000 is outside −1024 … 1024"),
    ];
    for (case, want) in cases {
        assert_eq!(case.check().unwrap_err().to_string(), want);
    }
    let modulus = |m| Modulus::new(m).unwrap();
    let numerator = ModulatorConfig::new(&base(), modulus(16), 16, true).unwrap_err().to_string();
    assert_eq!(numerator, "numerator 16 is outside 0 … 15");
    assert!(ModulatorConfig::new(&settings(Structure::PrimeMash, 3, &[]), modulus(32), 3, true).is_err());
    assert!(ModulatorConfig::new(&settings(Structure::Integer, 0, &[]), modulus(2), 0, true).is_err());
    assert_eq!(Modulus::new(0).unwrap_err().to_string(), "modulus 0 is outside 1 … 2^48");
    assert!(Modulus::new((1 << 48) + 1).is_err());
}

/// The modulus that a structure divides by.
#[test]
fn working_moduli() {
    let fixed = |m| ModulusRule::Fixed(Modulus::new(m).unwrap());
    assert_eq!(fixed(32).working(Structure::PrimeMash).unwrap(), fixed(31));
    assert_eq!(fixed(31).working(Structure::PrimeMash).unwrap(), fixed(31));
    assert_eq!(fixed(1 << 48).working(Structure::PrimeMash).unwrap(), fixed((1 << 48) - 59));
    assert_eq!(fixed(1 << 24).working(Structure::Integer).unwrap(), fixed(1));
    assert_eq!(fixed(1000).working(Structure::Mash).unwrap(), fixed(1000));
    for refused in [fixed(30), fixed(4), fixed(29), ModulusRule::Largest(Modulus::new(31).unwrap())] {
        assert!(refused.working(Structure::PrimeMash).is_err(), "{refused:?}");
    }
}

/// M·φ + s_1 is constant modulo M for every cascade, whatever its order and the dither of later stages.
#[test]
fn the_ramp_identity_holds_for_every_cascade() {
    let mut draw = Draw(14);
    let mut checked = 0;
    for structure in [Structure::Mash, Structure::PrimeMash, Structure::OutputFed] {
        for m in [31u64, 251, (1 << 24) - 3] {
            for order in 2..=5u8 {
                let mut chosen = settings(structure, order, &[draw.below(m), draw.below(m)]);
                chosen.dither = Dither::Register { stage: order, register: 15, seed: 77, weight: 1 };
                let config = config_of(&chosen, m, draw.below(m));
                let mut modulator = start(&config);
                let mut sum = 0i128;
                for _ in 0..500 {
                    let mut output = [0];
                    modulator.fill(&mut output);
                    sum += i128::from(m) * i128::from(output[0]) - i128::from(config.k());
                    let ramp = i128::from(modulator.first_residue().unwrap());
                    assert_eq!((sum + ramp).rem_euclid(m.into()), config.seeds()[0].into(), "{config:?}");
                }
                checked += 1;
            }
        }
    }
    assert_eq!(checked, 36);
}
