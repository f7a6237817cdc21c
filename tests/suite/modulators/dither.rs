//! Dither registers: sequences, means, lengths.

use thornmap::base::Exact;
use thornmap::modulator::{
    Dither, ModulatorConfig, ModulatorSettings, Modulus, REGISTER_LENGTHS, Register, Structure, oracle, output_range,
    period, period_within, start, tap_pair, transient,
};

use super::{Draw, config_of, run, settings};

fn dithered(structure: Structure, order: u8, seeds: &[u64], dither: (u8, u8, u64)) -> ModulatorSettings {
    let (stage, register, weight) = dither;
    ModulatorSettings {
        dither: Dither::Register { stage, register, seed: 1, weight },
        ..settings(structure, order, seeds)
    }
}

/// Source: ITU-T O.150 §5.1 (published text) and computed: x^9 + x^5 + 1 from all ones.
#[test]
fn nine_bit_register_from_all_ones() {
    let mut register = Register::new(9, 511).unwrap();
    let bits: Vec<u64> = (0..1022).map(|_| register.next_bit()).collect();
    let text: String = bits[..40].iter().map(u64::to_string).collect();
    assert_eq!(text, "1111111110000011110111110001011100110010");
    assert_eq!(bits[..511], bits[511..]);
    assert_eq!(bits[..511].iter().sum::<u64>(), 256);
    assert_eq!(register, Register::new(9, 511).unwrap());
}

/// Source: polynomials of ITU-T O.150 (9, 11, 15, 20, 23, 29, 31) and maximal-length tables (7, 17, 25).
#[test]
fn listed_registers_have_their_taps_and_full_length() {
    let taps = [(7, 6), (9, 5), (11, 9), (15, 14), (17, 14), (20, 3), (23, 18), (25, 22), (29, 27), (31, 28)];
    assert_eq!(REGISTER_LENGTHS.map(|length| tap_pair(length).unwrap()), taps);
    let mut run_through = 0;
    for length in REGISTER_LENGTHS.into_iter().filter(|length| *length <= 20) {
        let first = Register::new(length, 1).unwrap();
        let mut register = first;
        let (mut steps, mut ones) = (0u64, 0u64);
        loop {
            ones += register.next_bit();
            steps += 1;
            if register == first {
                break;
            }
        }
        assert_eq!((steps, ones), ((1 << length) - 1, 1 << (length - 1)), "{length} bits");
        run_through += 1;
    }
    // The longer ones are proven primitive beside the table.
    assert_eq!(run_through, 6);
}

/// The mean moves by exactly w·2^(L−1)/((2^L − 1)·M) for dither at the first stage, and not at all above it; the
/// length is that of the whole state. Order 2, every K of two moduli, all stages.
#[test]
fn means_and_lengths_with_a_register() {
    let mut checked = 0;
    for structure in [Structure::Mash, Structure::OutputFed, Structure::PrimeMash] {
        for (m, weight) in [(7, 1), (7, 3), (8, 1), (8, 2)] {
            if structure == Structure::PrimeMash && m != 7 {
                continue;
            }
            for order in 1..=2u8 {
                for stage in 1..=order {
                    for k in 0..m {
                        let config = config_of(&dithered(structure, order, &[1], (stage, 7, weight)), m, k);
                        let found = period(&config);
                        assert!(found.is_exact);
                        let length = u64::try_from(found.length.unwrap()).unwrap();
                        assert_eq!(oracle::state_period(&config, 200_000), Some(length), "{config:?}");
                        let skip = transient(&config);
                        let length = usize::try_from(length).unwrap();
                        let outputs = run(&config, skip + 2 * length);
                        let (once, again) = outputs[skip..].split_at(length);
                        assert_eq!(once, again, "{config:?}");
                        let sum: i64 = once.iter().map(|y| i64::from(*y)).sum();
                        let mean = Exact::new(sum.into(), i128::try_from(length).unwrap()).unwrap();
                        let word = Exact::new(k.into(), m.into()).unwrap();
                        let shift = match stage {
                            1 => Exact::new(i128::from(weight) * 64, 127 * i128::from(m)).unwrap(),
                            _ => Exact::ZERO,
                        };
                        assert_eq!(config.mean_shift(), shift);
                        assert_eq!(mean, word.plus(&shift).unwrap(), "{config:?}");
                        assert_eq!(config.mean(), Some(mean));
                        checked += 1;
                    }
                }
            }
        }
    }
    assert_eq!(checked, (2 * (2 * 7 + 2 * 8) + 2 * 7) * 3);
}

/// Dithered error feedback: shift and length as for a first stage.
#[test]
fn dithered_error_feedback() {
    for order in 1..=3u8 {
        for k in 0..5 {
            let config = config_of(&dithered(Structure::ErrorFeedback, order, &[1], (1, 7, 1)), 5, k);
            let length = u64::try_from(period(&config).length.unwrap()).unwrap();
            assert_eq!(oracle::state_period(&config, 200_000), Some(length), "{config:?}");
            let outputs = run(&config, usize::try_from(length).unwrap());
            let sum: i64 = outputs.iter().map(|y| i64::from(*y)).sum();
            assert_eq!(config.mean(), Some(Exact::new(sum.into(), length.into()).unwrap()), "{config:?}");
        }
    }
}

/// Source: computed; Pamarti & Galton 2007 (from memory): only r ≤ order − 1 whitens.
#[test]
fn only_dither_before_the_last_stage_whitens() {
    let verdict = |order, stage| {
        config_of(&dithered(Structure::Mash, order, &[], (stage, 23, 1)), 1 << 18, 1 << 17).dither_can_whiten()
    };
    assert_eq!([verdict(2, 1), verdict(2, 2)], [Some(true), Some(false)]);
    assert_eq!([verdict(3, 1), verdict(3, 2), verdict(3, 3)], [Some(true), Some(true), Some(false)]);
    assert_eq!(verdict(1, 1), Some(false));
    assert_eq!(config_of(&settings(Structure::Mash, 3, &[]), 16, 3).dither_can_whiten(), None);
}

/// K = M/2, zero seeds: past r = order − 1 the first residues stay those of the pure tone, which is why such dither
/// cannot whiten. Source: computed.
#[test]
fn late_dither_leaves_the_ramp_of_the_stage_before() {
    let config = config_of(&dithered(Structure::Mash, 2, &[], (2, 9, 1)), 1 << 18, 1 << 17);
    let residues = oracle::residues(&config, 64);
    assert!(residues.chunks(2).all(|pair| pair[0][0] == 1 << 17 && pair[1][0] == 0));
    let early = config_of(&dithered(Structure::Mash, 2, &[], (1, 9, 1)), 1 << 18, 1 << 17);
    assert!(oracle::residues(&early, 64).iter().any(|stage| stage[0] % (1 << 17) != 0));
}

/// With dither at the first stage the mean shift is +½ LSB for long registers. Source: computed.
#[test]
fn the_shift_is_half_a_step_of_the_modulus() {
    let config = config_of(&dithered(Structure::Mash, 3, &[], (1, 23, 1)), 1 << 24, 5);
    let half = Exact::new(1, 1 << 25).unwrap();
    let excess = config.mean_shift().over(&half).unwrap().minus(&Exact::ONE).unwrap();
    assert_eq!(excess, Exact::new(1, (1 << 23) - 1).unwrap());
    assert!(period(&config).length.is_none());
}

/// Heavy dither may carry twice: ranges still hold.
#[test]
fn ranges_hold_under_heavy_dither() {
    let mut draw = Draw(21);
    let mut checked = 0;
    for structure in [Structure::Mash, Structure::OutputFed, Structure::PrimeMash, Structure::ErrorFeedback] {
        for _ in 0..60 {
            let order = u8::try_from(1 + draw.below(structure.orders().1.into())).unwrap();
            let stage = u8::try_from(1 + draw.below(structure.last_dither_stage(order).into())).unwrap();
            let m = if structure == Structure::PrimeMash {
                [7, 13, 31, 61][usize::try_from(draw.below(4)).unwrap()]
            } else {
                2 + draw.below(40)
            };
            let weight = m - draw.below(2);
            let config = config_of(&dithered(structure, order, &[m - 1], (stage, 9, weight)), m, m - 1 - draw.below(2));
            let (low, high) = output_range(&config);
            let outputs = run(&config, 5000);
            assert!(outputs.iter().all(|y| (low..=high).contains(&i64::from(*y))), "{low} … {high} {config:?}");
            checked += 1;
        }
    }
    assert_eq!(checked, 240);
}

/// Stages, registers, seeds and weights outside their range are refused with what is allowed.
#[test]
fn refusals_of_dither() {
    let with = |stage, register, seed, weight| ModulatorSettings {
        dither: Dither::Register { stage, register, seed, weight },
        ..settings(Structure::Mash, 3, &[])
    };
    let cases = [
        (with(4, 23, 1, 1), "dither stage 4 is outside 1 … 3"),
        (with(0, 23, 1, 1), "dither stage 0 is outside 1 … 3"),
        (with(1, 22, 1, 1), "register length 22 is not listed; listed are 7, 9, 11, 15, 17, 20, 23, 25, 29, 31"),
        (with(1, 9, 512, 1), "register seed 512 is outside 1 … 511 for 9 bits"),
        (with(1, 9, 0, 1), "register seed 0 is outside 1 … 511 for 9 bits"),
        (with(1, 9, 1, 0), "dither weight 0 is outside 1 … 281474976710656"),
    ];
    for (case, want) in cases {
        assert_eq!(case.check().unwrap_err().to_string(), want);
    }
    let integer = ModulatorSettings { structure: Structure::Integer, order: 0, ..with(1, 9, 1, 1) };
    assert_eq!(
        integer.check().unwrap_err().to_string(),
        "structure \"integer\" has no input for dither; set dither to \"none\""
    );
    let single = ModulatorSettings { structure: Structure::ErrorFeedback, ..with(2, 9, 1, 1) };
    assert_eq!(single.check().unwrap_err().to_string(), "dither stage 2 is outside 1 … 1");
    let heavy = ModulatorConfig::new(&with(1, 9, 1, 17), thornmap::modulator::Modulus::new(16).unwrap(), 3, true);
    assert_eq!(heavy.unwrap_err().to_string(), "dither weight 17 is outside 1 … 16");
}

/// A register of 7 bits on 8 bits of MASH: the combination is found by running, and refused where it is too long.
#[test]
fn combined_length_is_bounded() {
    let config = config_of(&dithered(Structure::Mash, 3, &[1], (2, 7, 1)), 256, 77);
    assert!(period_within(&config, 1000).length.is_none());
    assert!(period_within(&config, 1 << 26).is_exact);
}

#[test]
fn white_bits_are_fair_independent_and_run_as_defined() {
    let settings = |order: u8, stage: u8, seed: u64| ModulatorSettings {
        structure: Structure::Mash,
        order,
        seeds: vec![],
        dither: Dither::White { stage, seed, weight: 1 },
        noise_transfer: None,
        runs_at_zero: false,
    };
    let mut cases = 0;
    for order in 1..=5 {
        for stage in 1..=order {
            let config =
                ModulatorConfig::new(&settings(order, stage, 7), Modulus::new(1 << 10).unwrap(), 321, true).unwrap();
            let mut fast = vec![0; 3000];
            start(&config).fill(&mut fast);
            let fast: Vec<i128> = fast.into_iter().map(i128::from).collect();
            assert_eq!(fast, oracle::outputs(&config, 3000), "order {order}, stage {stage}");
            assert_eq!(period(&config).length, None);
            cases += 1;
        }
    }
    assert_eq!(cases, 15);
    // A first-order modulator with K = 0 counts the bits: the mean is half a step, each generator's own.
    let run = |seed: u64| {
        let mut held = settings(1, 1, seed);
        held.runs_at_zero = true;
        let config = ModulatorConfig::new(&held, Modulus::new(2).unwrap(), 0, true).unwrap();
        let mut outputs = vec![0; 1 << 16];
        start(&config).fill(&mut outputs);
        outputs
    };
    let (a, b) = (run(1), run(2));
    assert_ne!(a, b);
    for outputs in [&a, &b] {
        let mean = outputs.iter().map(|y| f64::from(*y)).sum::<f64>() / 65_536.0;
        // Bits of variance 1/4: six sigma of the mean of 2^16 halved bits.
        assert!((mean - 0.25).abs() < 6.0 * 0.25 / 256.0, "{mean}");
    }
    assert_eq!(
        settings(3, 4, 1).check().unwrap_err().to_string(),
        settings(3, 4, 2).check().unwrap_err().to_string(),
        "no fourth stage"
    );
}
