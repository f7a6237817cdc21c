//! The modulator family: every tone that is a multiple of K/M, once per exact offset.

use num_integer::Integer;

use super::boundary::signed_residue;

/// A boundary q of which a tone is the harmonic `order`: where coupling may add to the tone.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub struct CouplingOrder {
    /// Boundary denominator.
    pub q: u64,
    /// Harmonic of that boundary's tone.
    pub order: u64,
    /// Offset of that boundary's own tone in units of f_pfd/M.
    pub base_residue: u64,
}

/// A tone of the modulator family.
#[derive(Debug, Clone, PartialEq, Eq)]
pub struct FamilyTone {
    /// Smallest h ≥ 1 whose residue has this size.
    pub harmonic: u64,
    /// `h·K mod± M`, signed; its size times f_pfd/M is the offset.
    pub residue: i64,
    /// Numerator p of the nearest fraction p/h of the PFD frequency.
    pub p: i128,
    /// `h ≤ largest_q` and gcd(p, h) = 1: the tone is that of the boundary p/h.
    pub is_boundary: bool,
    /// Boundaries of which this is a harmonic, smallest q first.
    pub couplings: Vec<CouplingOrder>,
}

/// Returns the tones h·K/M for h = 1 … max(harmonics, largest_q), one per exact offset, in order of h.
///
/// Two harmonics whose residues differ only in sign are the two sidebands of one tone. A residue of zero is
/// no tone. `n`, `k`, `m` are the divider word (k < m).
///
/// # Examples
/// K/M = 51/100 has its q = 2 boundary tone at 2/100 of the PFD frequency:
/// ```
/// let tones = thornmap::tones::modulator_family(10, 51, 100, 3, 5);
/// assert_eq!((tones[1].harmonic, tones[1].residue, tones[1].is_boundary), (2, 2, true));
/// ```
#[must_use]
pub fn modulator_family(n: u64, k: u64, m: u64, largest_q: u64, harmonics: u64) -> Vec<FamilyTone> {
    let (n, k, m) = (i128::from(n), i128::from(k), i128::from(m));
    let fraction_of = |h: u64| {
        let residue = signed_residue(i128::from(h) * k, m);
        let turned = i128::from(h) * k - residue;
        // In 64 bits where they hold it: a division of 128 bits costs ten times as much.
        let turns = match (i64::try_from(turned), i64::try_from(m)) {
            (Ok(turned), Ok(m)) => i128::from(turned / m),
            _ => turned / m,
        };
        let p = i128::from(h) * n + turns;
        (residue, p)
    };
    let is_boundary = |q: u64, p: i128| match u64::try_from(p.unsigned_abs()) {
        Ok(p) => p.gcd(&q) == 1,
        Err(_) => p.gcd(&i128::from(q)) == 1,
    };
    let mut tones: Vec<FamilyTone> = Vec::new();
    for harmonic in 1..=largest_q.max(harmonics) {
        let (residue, p) = fraction_of(harmonic);
        if residue == 0 || tones.iter().any(|tone| i128::from(tone.residue).abs() == residue.abs()) {
            continue;
        }
        let couplings = (1..=largest_q.min(harmonic))
            .filter(|q| harmonic.is_multiple_of(*q))
            .filter_map(|q| {
                let order = harmonic / q;
                let (base, p) = fraction_of(q);
                // The h-th harmonic of a boundary's tone lies at h·d: only where that has not folded back.
                let unfolded = base != 0 && i128::from(order) * base.abs() * 2 <= m;
                let base_residue = u64::try_from(base.abs()).ok()?;
                (is_boundary(q, p) && unfolded).then_some(CouplingOrder { q, order, base_residue })
            })
            .collect();
        let Ok(residue) = i64::try_from(residue) else { continue };
        tones.push(FamilyTone {
            harmonic,
            residue,
            p,
            is_boundary: harmonic <= largest_q && is_boundary(harmonic, p),
            couplings,
        });
    }
    tones
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn near_an_integer_every_harmonic_belongs_to_the_integer_boundary() {
        let tones = modulator_family(90, 7, 1000, 3, 5);
        assert_eq!(tones.len(), 5);
        for (tone, h) in tones.iter().zip(1u64..) {
            assert_eq!(tone.harmonic, h);
            assert_eq!(tone.residue, 7 * i64::try_from(h).unwrap());
            assert_eq!(tone.is_boundary, h == 1, "2/2 and 3/3 are no boundaries of their own");
            assert_eq!(tone.couplings, [CouplingOrder { q: 1, order: h, base_residue: 7 }]);
        }
    }

    #[test]
    fn a_half_has_one_tone() {
        let tones = modulator_family(20, 8, 16, 3, 5);
        assert_eq!(tones.len(), 1);
        assert_eq!((tones[0].harmonic, tones[0].residue), (1, 8));
    }

    #[test]
    fn offsets_are_unique_and_zero_is_no_tone() {
        let mut cases = 0;
        for m in 2..40u64 {
            for k in 0..m {
                let tones = modulator_family(30, k, m, 4, 7);
                let mut offsets: Vec<_> = tones.iter().map(|t| t.residue.abs()).collect();
                assert!(offsets.iter().all(|r| *r > 0 && 2 * r.unsigned_abs() <= m));
                offsets.sort_unstable();
                offsets.dedup();
                assert_eq!(offsets.len(), tones.len());
                assert_eq!(tones.is_empty(), k == 0);
                cases += 1;
            }
        }
        assert_eq!(cases, (2..40).sum::<i32>());
    }
}
