//! Where the loop comes to rest: the phase offset at which the mean charge balances the static currents.

use super::{Charge, CurveError, PhaseDensity, PhaseLattice};

/// The resting point of the loop.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct Settled {
    /// Offset a with `mean g(ψ + a) = φ_0`.
    pub offset_cycles: f64,
    /// Width of the interval of such offsets: zero as a rule; where the whole phase lies inside the dead zone any offset
    /// of the interval balances, a real loop wanders in it, and its middle is given.
    pub plateau_cycles: f64,
}

/// Steps of the search; at least every fourth halves the bracket, so doubles run out of bits before.
const MOST_STEPS: u32 = 300;
/// Farthest offset that is tried.
const FARTHEST_CYCLES: f64 = 1e9;
/// Half the distance at which a plateau is looked for.
const PROBE_CYCLES: f64 = 1e-6;
/// Resolution of a mean, relative to 1 plus its magnitude: some roundings of the sum.
const MEAN_RESOLUTION: f64 = 2e-14;
/// Terms added before the partial sum is closed: keeps the rounding of long sums near that of short ones.
const PARTIAL_SUM: usize = 1024;

/// Returns the offset at which the mean charge over the density is `target_cycles` (φ_0 > 0 for a discharging current).
///
/// # Errors
/// `Unreachable` where the curve saturates below the target, `NotFinite` for a curve or target that is no number.
///
/// # Examples
/// ```
/// use thornmap::tones::{Charge, PhaseDensity, settle};
/// let linear = |p: f64| p;
/// let rest = settle(&PhaseDensity::mash(3).unwrap(), Charge::new(&linear, &[]), 0.25).unwrap();
/// assert!((rest.offset_cycles - 0.25).abs() < 1e-12);
/// ```
pub fn settle(density: &PhaseDensity, charge: Charge<'_>, target_cycles: f64) -> Result<Settled, CurveError> {
    let mean = |offset: f64| {
        let mut sum = 0.0;
        density.each_node(&charge.kinks_around(offset), 0, |x, weight| sum += weight * charge.at(x + offset));
        sum
    };
    balance(&mean, target_cycles, density.reach_cycles())
}

/// Returns the offset at which the mean charge over a short lattice is `target_cycles`.
///
/// # Errors
/// As [`settle`].
pub fn settle_on_lattice(
    lattice: &PhaseLattice,
    charge: Charge<'_>,
    target_cycles: f64,
) -> Result<Settled, CurveError> {
    let mean = |offset: f64| {
        long_sum(lattice.points(), |(phase, weight)| weight * charge.at(phase + offset)) / lattice.whole_weight()
    };
    let reach = lattice.points().iter().fold(0.0f64, |most, (phase, _)| most.max(phase.abs()));
    balance(&mean, target_cycles, reach)
}

/// Returns the offset at which the mean charge over the samples of ψ (zero mean, a whole period) is `target_cycles`.
///
/// Five to ten passes over the samples.
///
/// # Errors
/// `NoSamples`, else as [`settle`].
pub fn settle_samples(phase_cycles: &[f64], charge: Charge<'_>, target_cycles: f64) -> Result<Settled, CurveError> {
    if phase_cycles.is_empty() {
        return Err(CurveError::NoSamples);
    }
    let count = phase_cycles.len() as f64;
    let mean = |offset: f64| long_sum(phase_cycles, |phase| charge.at(phase + offset)) / count;
    let reach = phase_cycles.iter().fold(0.0f64, |most, phase| most.max(phase.abs()));
    balance(&mean, target_cycles, reach)
}

/// Returns a sum by partial sums.
fn long_sum<T>(items: &[T], term: impl Fn(&T) -> f64) -> f64 {
    items.chunks(PARTIAL_SUM).map(|part| part.iter().map(&term).sum::<f64>()).sum()
}

/// One evaluated offset.
#[derive(Clone, Copy)]
struct Trial {
    offset: f64,
    excess: f64,
}

/// Solves `mean(a) = target`: bracket outwards from the target (the mean is near a), close in, then look for a plateau.
fn balance(mean: &dyn Fn(f64) -> f64, target: f64, reach: f64) -> Result<Settled, CurveError> {
    let resolution = MEAN_RESOLUTION * (1.0 + target.abs());
    let trial = |offset: f64| {
        let found = mean(offset);
        if found.is_finite() && target.is_finite() {
            Ok(Trial { offset, excess: found - target })
        } else {
            Err(CurveError::NotFinite { at_cycles: offset, charge_cycles: found })
        }
    };
    let (low, high) = bracket(&trial, target, reach, resolution)?;
    let root = close_in(&trial, low, high, resolution)?;
    let flat = |offset: f64| Ok(trial(offset)?.excess.abs() <= resolution);
    let (left_flat, right_flat) = (flat(root - PROBE_CYCLES)?, flat(root + PROBE_CYCLES)?);
    if !left_flat && !right_flat {
        return Ok(Settled { offset_cycles: root, plateau_cycles: 0.0 });
    }
    let left = if left_flat { edge(&flat, root, low.offset)? } else { root };
    let right = if right_flat { edge(&flat, root, high.offset)? } else { root };
    Ok(Settled { offset_cycles: f64::midpoint(left, right), plateau_cycles: right - left })
}

/// Returns trials strictly below and above the target.
fn bracket(
    trial: &dyn Fn(f64) -> Result<Trial, CurveError>,
    target: f64,
    reach: f64,
    resolution: f64,
) -> Result<(Trial, Trial), CurveError> {
    // Near the answer first: with a few percent of mismatch a lies this close to the target.
    let mut step = 0.01 * (reach + target.abs()) + 1e-3;
    let mut low = trial(target - step)?;
    let mut high = trial(target + step)?;
    while low.excess >= -resolution || high.excess <= resolution {
        if step > FARTHEST_CYCLES {
            return Err(CurveError::Unreachable {
                target_cycles: target,
                lowest_cycles: low.excess + target,
                highest_cycles: high.excess + target,
            });
        }
        step *= 4.0;
        if low.excess >= -resolution {
            low = trial(target - step)?;
        }
        if high.excess <= resolution {
            high = trial(target + step)?;
        }
    }
    Ok((low, high))
}

/// Returns an offset whose mean is on target: the secant through the last two trials, which is quick as the mean is nearly
/// straight, and a bisection wherever it leaves the bracket or four steps have not halved it.
fn close_in(
    trial: &dyn Fn(f64) -> Result<Trial, CurveError>,
    mut low: Trial,
    mut high: Trial,
    resolution: f64,
) -> Result<f64, CurveError> {
    let (mut previous, mut last) = (low, high);
    let mut watched_width = high.offset - low.offset;
    for count in 1..=MOST_STEPS {
        let secant = last.offset - last.excess * (last.offset - previous.offset) / (last.excess - previous.excess);
        let mut bisect = !(secant > low.offset && secant < high.offset);
        if count % 4 == 0 {
            bisect |= high.offset - low.offset > watched_width / 2.0;
            watched_width = high.offset - low.offset;
        }
        let next = trial(if bisect { f64::midpoint(low.offset, high.offset) } else { secant })?;
        if next.excess.abs() <= resolution || high.offset - low.offset <= f64::EPSILON * next.offset.abs().max(1e-6) {
            return Ok(next.offset);
        }
        if next.excess < 0.0 {
            low = next;
        } else {
            high = next;
        }
        (previous, last) = (last, next);
    }
    Ok(f64::midpoint(low.offset, high.offset))
}

/// Returns where the plateau that holds `inside` ends towards `outside`.
fn edge(flat: &dyn Fn(f64) -> Result<bool, CurveError>, inside: f64, outside: f64) -> Result<f64, CurveError> {
    let (mut inside, mut outside) = (inside, outside);
    for _ in 0..60 {
        let middle = f64::midpoint(inside, outside);
        if flat(middle)? {
            inside = middle;
        } else {
            outside = middle;
        }
    }
    Ok(inside)
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn balances_the_mean_for_every_order_and_curve() {
        let mut checked = 0;
        for order in 1..=5 {
            let density = PhaseDensity::mash(order).unwrap();
            for epsilon in [-0.3, 0.0, 0.02, 0.4] {
                for dead in [0.0, 0.05, 0.6] {
                    let curve = |p: f64| {
                        (1.0 + f64::signum(p) * epsilon / 2.0) * (p.abs() - dead).max(0.0) * p.signum()
                            + 1e-3 * p.powi(3)
                    };
                    let kinks = [-dead, 0.0, dead];
                    for target in [-3.0, -0.1, 0.0, 1e-4, 0.02, 5.0] {
                        let rest = settle(&density, Charge::new(&curve, &kinks), target).unwrap();
                        let mut mean = 0.0;
                        let charge = Charge::new(&curve, &kinks);
                        density.each_node(&charge.kinks_around(rest.offset_cycles), 0, |x, weight| {
                            mean += weight * curve(x + rest.offset_cycles);
                        });
                        assert!(
                            (mean - target).abs() < 3e-14 * (1.0 + target.abs()),
                            "{order} {epsilon} {dead} {target}"
                        );
                        checked += 1;
                    }
                }
            }
        }
        assert_eq!(checked, 360);
    }

    #[test]
    fn order_two_mismatch_has_a_closed_form() {
        // mean (x + a) + (ε/2)·E|x + a| with E|x + a| = 1/3 + a² − a³/3 for the triangle: at target 0 solve for a.
        let mismatch = |p: f64| p + 0.01 * p.abs();
        let rest = settle(&PhaseDensity::mash(2).unwrap(), Charge::new(&mismatch, &[0.0]), 0.0).unwrap();
        let a = rest.offset_cycles;
        assert!((a + 0.01 * (1.0 / 3.0 + a * a - a.abs().powi(3) / 3.0)).abs() < 3e-14, "{a}");
        assert_eq!(rest.plateau_cycles, 0.0);
    }

    #[test]
    fn a_dead_zone_wider_than_the_phase_gives_the_middle_of_its_plateau() {
        // Order 2 reaches ±1; a dead zone −1.2 … 1.7 leaves offsets −0.2 … 0.7 balanced.
        let dead = |p: f64| if p < -1.2 { p + 1.2 } else { (p - 1.7).max(0.0) };
        let charge = Charge::new(&dead, &[-1.2, 1.7]);
        let rest = settle(&PhaseDensity::mash(2).unwrap(), charge, 0.0).unwrap();
        // The triangle's tail meets the zone's end as t³/6: below the resolution over 5e-5 cycles.
        assert!((rest.offset_cycles - 0.25).abs() < 1e-4 && (rest.plateau_cycles - 0.9).abs() < 2e-4, "{rest:?}");
        let rest = settle_samples(&[-1.0, 0.0, 1.0], charge, 0.0).unwrap();
        assert!((rest.offset_cycles - 0.25).abs() < 1e-6 && (rest.plateau_cycles - 0.9).abs() < 2e-6, "{rest:?}");
    }

    #[test]
    fn a_record_is_passed_over_a_few_times_only() {
        let phase: Vec<f64> = (0..10_007u32).map(|n| f64::from(n * n % 10_007) / 5003.0 - 1.0).collect();
        let mut checked = 0;
        for (epsilon, dead) in [(0.02, 0.0), (-0.1, 0.0), (0.02, 0.05), (0.0, 0.3)] {
            for target in [0.0, 1e-4, 0.1, 2.5] {
                let passes = std::cell::Cell::new(0usize);
                let curve = |p: f64| {
                    passes.set(passes.get() + 1);
                    (1.0 + f64::signum(p) * epsilon / 2.0) * (p.abs() - dead).max(0.0) * p.signum()
                };
                settle_samples(&phase, Charge::new(&curve, &[-dead, 0.0, dead]), target).unwrap();
                let passes = passes.get() / phase.len();
                assert!(passes <= 10, "mismatch {epsilon}, dead zone {dead}, target {target}: {passes} passes");
                checked += 1;
            }
        }
        assert_eq!(checked, 16);
    }

    #[test]
    fn what_cannot_balance_is_an_error() {
        let saturating = |p: f64| p.clamp(-0.5, 0.5);
        let density = PhaseDensity::mash(3).unwrap();
        let charge = Charge::new(&saturating, &[-0.5, 0.5]);
        let error = settle(&density, charge, 0.7).unwrap_err();
        assert!(matches!(error, CurveError::Unreachable { highest_cycles, .. } if (highest_cycles - 0.5).abs() < 1e-9));
        assert!(matches!(settle(&density, charge, f64::NAN), Err(CurveError::NotFinite { .. })));
        assert!(matches!(settle(&density, Charge::new(&|_| f64::NAN, &[]), 0.0), Err(CurveError::NotFinite { .. })));
        assert_eq!(settle_samples(&[], charge, 0.0), Err(CurveError::NoSamples));
    }
}
