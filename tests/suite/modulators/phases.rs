//! The phase error without outputs against the running sum of the slow definition's outputs.

use super::*;
use thornmap::modulator::PhaseRun;

/// Every structure, dither and both kinds and widths of moduli; uneven calls, across the blocks of the engine.
#[test]
fn a_phase_run_equals_the_sum_of_the_slow_definition() {
    let mut draw = Draw(71);
    let (mut checked, mut closed) = (0, 0);
    for round in 0..200u64 {
        let structure = match round % 8 {
            0 => Structure::PrimeMash,
            1 => Structure::OutputFed,
            2 => Structure::ErrorFeedback,
            _ => Structure::Mash,
        };
        let (_, highest) = structure.orders();
        let order = u8::try_from(1 + draw.below(highest.into())).unwrap();
        let bits = 3 + draw.below(46);
        let m = match structure {
            Structure::PrimeMash => (1 << bits) - prime_feedback(u32::try_from(bits).unwrap()).unwrap(),
            _ if draw.below(2) == 0 => 1 << bits,
            _ => 2 + draw.below((1 << bits) - 1),
        };
        let seeds: Vec<u64> = (0..order).map(|_| draw.below(m)).collect();
        let mut chosen = settings(structure, order, &seeds);
        if draw.below(4) == 0 {
            chosen.dither = Dither::Register { stage: 1, register: 9, seed: 1 + draw.below(511), weight: 1 };
        }
        let config = config_of(&chosen, m, draw.below(m));
        let skip = transient(&config);
        let count = 2500;
        let (mut want, mut sum) = (Vec::new(), 0i128);
        for output in oracle::outputs(&config, skip + count) {
            sum += output * i128::from(m) - i128::from(config.k());
            want.push(sum);
        }
        let mut run = PhaseRun::new(&config).unwrap();
        let mut found = vec![0.0; count];
        let (mut at, mut size) = (0, 0);
        while at < count {
            let end = (at + size).min(count);
            run.fill(&mut found[at..end]).unwrap();
            (at, size) = (end, (size * 2 + 1) % 1500);
        }
        // Equality of doubles: below 2^53 every whole number has one.
        assert!(want[skip..].iter().map(|sum| *sum as f64).eq(found), "{config:?}");
        if let Some(mean) = PhaseRun::new(&config).unwrap().mean_numerator(count as u64) {
            let exact = want[skip..].iter().sum::<i128>() as f64 / count as f64;
            // Two roundings of numbers up to 2^(order − 1)·M.
            let rounding = (m << (order - 1)) as f64 * 2f64.powi(-52);
            assert!((mean - exact).abs() <= rounding, "{mean} {exact}, {config:?}");
            closed += 1;
        }
        checked += 1;
    }
    assert_eq!(checked, 200);
    assert!(closed > 70, "{closed} closed means");
}

/// A drifting noise transfer is refused where the sum passes 63 bits, not wrapped.
#[test]
fn a_phase_run_refuses_what_drifts_away() {
    let mut chosen = settings(Structure::ErrorFeedback, 2, &[1]);
    chosen.noise_transfer = Some(vec![4, 4]);
    let m = 1 << 48;
    let config = config_of(&chosen, m, m - 1);
    let total = transient(&config) + (1 << 20);
    let mut outputs = vec![0; total];
    start(&config).fill(&mut outputs);
    let want = phase_numerators(&outputs, config.k(), config.modulus(), &mut vec![0; total]);
    let found = PhaseRun::new(&config).and_then(|mut run| run.fill(&mut vec![0.0; 1 << 20]));
    assert_eq!(found, want);
    assert!(want.is_err(), "the case drifts");
}
