//! What the charge curve makes of a long sequence: the same for every word at one divider ratio.

use num_complex::Complex64;

use crate::tones::{
    Charge, CurveError, CurveLine, FoldedNoise, PhaseDensity, PhaseLattice, folded_noise, harmonic,
    harmonic_on_lattice, settle, settle_on_lattice,
};

use super::lines::ShortLattice;

/// Figures before the lines in the flat form.
const HEAD: usize = 3;

/// The loop's rest, the folded noise and the lines of a charge curve.
#[derive(Debug, Clone, PartialEq)]
pub struct CurvePoint {
    /// Where the loop rests on the curve \[cycles\].
    pub rest_cycles: f64,
    /// What the curve folds into the loop.
    pub folded: FoldedNoise,
    /// Lines of harmonics 1, 2, … \[cycles\], without the position of the pulses.
    pub lines: Vec<CurveLine>,
}

impl CurvePoint {
    /// Returns the point for φ_0 = `target_cycles` with `harmonics` lines; on a lattice where one is given.
    ///
    /// # Errors
    /// `CurveError` where the loop cannot rest.
    pub fn new(
        density: &PhaseDensity,
        lattice: Option<ShortLattice>,
        charge: Charge<'_>,
        target_cycles: f64,
        harmonics: u64,
    ) -> Result<Self, CurveError> {
        let lattice = lattice.map(|short| PhaseLattice::new(density, short.points, short.start_cycles)).transpose()?;
        let lattice = lattice.as_ref();
        let rest = match lattice {
            Some(lattice) => settle_on_lattice(lattice, charge, target_cycles)?,
            None => settle(density, charge, target_cycles)?,
        };
        let line = |h| match lattice {
            Some(lattice) => harmonic_on_lattice(lattice, charge, rest.offset_cycles, h),
            None => harmonic(density, charge, rest.offset_cycles, h),
        };
        Ok(Self {
            rest_cycles: rest.offset_cycles,
            folded: folded_noise(density, charge, rest.offset_cycles),
            lines: (1..=harmonics).map(line).collect(),
        })
    }

    /// Returns the line of harmonic `h` ≥ 1; zero beyond those computed.
    pub fn line(&self, h: u64) -> CurveLine {
        let place = usize::try_from(h).ok().and_then(|h| h.checked_sub(1));
        let none = CurveLine { modulator: Complex64::ZERO, nonlinearity: Complex64::ZERO };
        place.and_then(|place| self.lines.get(place)).copied().unwrap_or(none)
    }

    /// Returns the point as a row of figures.
    pub(super) fn to_row(&self) -> Vec<f64> {
        let mut row = vec![self.rest_cycles, self.folded.density_cycles2, self.folded.variance_cycles2];
        for line in &self.lines {
            row.extend([line.modulator.re, line.modulator.im, line.nonlinearity.re, line.nonlinearity.im]);
        }
        row
    }

    /// Returns the point of a row.
    pub(super) fn from_row(row: &[f64]) -> Self {
        let lines = row[HEAD..].chunks_exact(4).map(|part| CurveLine {
            modulator: Complex64::new(part[0], part[1]),
            nonlinearity: Complex64::new(part[2], part[3]),
        });
        Self {
            rest_cycles: row[0],
            folded: FoldedNoise { density_cycles2: row[1], variance_cycles2: row[2] },
            lines: lines.collect(),
        }
    }

    /// Returns whether a row stands for another one: lines to 1e-6 of themselves or −220 dBc, some 1e-5 dB; what is
    /// folded, itself a quadrature of that order, to 1e-5.
    pub(super) fn is_close(exact: &[f64], found: &[f64]) -> bool {
        let near = |i: usize, relative: f64, absolute: f64| {
            (exact[i] - found[i]).abs() <= relative * exact[i].abs() + absolute
        };
        let lines = exact[HEAD..].chunks_exact(2).zip(found[HEAD..].chunks_exact(2)).all(|(a, b)| {
            let (exact, found) = (Complex64::new(a[0], a[1]), Complex64::new(b[0], b[1]));
            (exact - found).norm() <= 1e-6 * exact.norm() + 1e-12
        });
        near(0, 1e-9, 1e-9) && near(1, 1e-5, 1e-18) && near(2, 1e-5, 1e-18) && lines
    }
}
