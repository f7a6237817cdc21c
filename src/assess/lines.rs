//! Lines of the modulator family before the loop: from one exact period where it fits, else from the shared curve.

use num_complex::Complex64;
use num_traits::ToPrimitive;

use crate::modulator::{ModulatorConfig, ModulatorError, Period, PhaseRun};
use crate::spectrum::{Density, DensitySettings, FftScratch, FftStage, SpectrumError, Window, correlate_each};
use crate::tones::{
    Charge, CurveError, FamilyTone, FoldedNoise, LONGEST_LATTICE, PhaseDensity, lattice_is_short, level_uncertainty_db,
    line_noise_cycles2, settle_samples,
};

use super::curve_point::CurvePoint;
use super::result::Method;

/// Cycles generated at a time: stay in the first-level cache.
const BLOCK: usize = 1024;

/// Buffers of one worker; they grow to the record length once.
#[derive(Debug, Default)]
pub struct Scratch {
    fft: FftScratch,
    phase_cycles: Vec<f64>,
    excess_cycles: Vec<f64>,
}

/// One line before the loop \[cycles\].
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct Line {
    /// Line of ψ.
    pub modulator: Complex64,
    /// Line of g(ψ + a) − ψ; `None` when the charge curve is unknown.
    pub nonlinearity: Option<Complex64>,
    /// Half width of the uncertainty from the method \[dB\]; `None` where the line does not stand above its noise.
    pub uncertainty_db: Option<f64>,
}

/// A line of the exact period that is no multiple of K/M.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct PeriodLine {
    /// Position k of the line at k·f_pfd/T.
    pub bin: u64,
    /// The line.
    pub line: Line,
}

/// All lines of a channel's modulator.
#[derive(Debug, Clone)]
pub struct FamilyLines {
    /// How they were found.
    pub method: Method,
    /// Lines in the order of the family.
    pub family: Vec<Line>,
    /// Every other line of an exact period, rising in `bin`; empty for longer sequences.
    pub others: Vec<PeriodLine>,
    /// T of an exact period.
    pub period: Option<u64>,
    /// Where the loop rests on the charge curve, a \[cycles\]; `None` without a known curve.
    pub rest_cycles: Option<f64>,
    /// Noise that the nonlinearity folds into the loop, for sequences that are no exact period.
    pub folded: Option<FoldedNoise>,
    /// Whether s_1 visits so few values that harmonics alias.
    pub on_lattice: bool,
}

/// Why the lines of a channel cannot be computed.
#[derive(Debug, Clone, PartialEq, thiserror::Error)]
pub enum LinesError {
    /// The loop cannot rest, or an order has no curve.
    #[error(transparent)]
    Curve(#[from] CurveError),
    /// The sequence leaves its range.
    #[error(transparent)]
    Modulator(#[from] ModulatorError),
    /// A density cannot be estimated.
    #[error(transparent)]
    Spectrum(#[from] SpectrumError),
}

/// What the lines of one channel depend on.
#[derive(Clone, Copy)]
pub struct LineInput<'a> {
    /// The modulator with its word.
    pub modulator: &'a ModulatorConfig,
    /// Length of its sequence.
    pub period: &'a Period,
    /// The tones asked for.
    pub family: &'a [FamilyTone],
    /// Charge curve in cycles; `None` is unknown.
    pub charge: Option<Charge<'a>>,
    /// Charge that the loop must supply each cycle, φ_0 \[cycles\].
    pub target_cycles: f64,
    /// Longest period that is transformed whole, and the length of a cut record.
    pub record: u64,
    /// PFD frequency \[Hz\].
    pub pfd_hz: f64,
    /// VCO frequency \[Hz\].
    pub vco_hz: f64,
    /// The curve at this divider ratio, on the sequence's short lattice if it has one, where it is already known.
    pub known_curve: Option<&'a CurvePoint>,
}

impl LineInput<'_> {
    /// Returns −jω/(2·f_vco) at a signed offset in residues: what a line of p² adds to the charge's line.
    ///
    /// A pulse from one edge to the other has its charge not at the reference edge but half a pulse from it:
    /// `∫ e^(−jωt) dt` over it is `τ·(1 − jωτ/2)`, so a pulse of p cycles acts as `p − jω·p²/(2·f_vco)`.
    fn pulse_position(&self, residue: f64) -> Complex64 {
        let offset_hz = residue / self.modulator.modulus().get() as f64 * self.pfd_hz;
        Complex64::new(0.0, -std::f64::consts::TAU * offset_hz / (2.0 * self.vco_hz))
    }
}

/// Returns the line of ψ² given the first residue, long randomised sequence: E\[ψ²|u\] is u² − u + ¼ for order 1,
/// u·(1 − u) for order 2, without a harmonic above.
fn square_line(order: u8, harmonic: u64) -> f64 {
    let size = 1.0 / (2.0 * (std::f64::consts::PI * harmonic as f64).powi(2));
    match order {
        1 => size,
        2 => -size,
        _ => 0.0,
    }
}

impl Scratch {
    /// Runs the modulator from its start and leaves ψ of `length` cycles after the transient in `phase_cycles`.
    fn run(&mut self, config: &ModulatorConfig, length: usize) -> Result<(), ModulatorError> {
        self.phase_cycles.resize(length, 0.0);
        let mut run = PhaseRun::new(config)?;
        let scale = 1.0 / config.modulus().get() as f64;
        if let Some(mean) = run.mean_numerator(length as u64) {
            for part in self.phase_cycles.chunks_mut(BLOCK) {
                run.fill(part)?;
                part.iter_mut().for_each(|phase| *phase = (*phase - mean) * scale);
            }
            return Ok(());
        }
        run.fill(&mut self.phase_cycles)?;
        let drift = config.mean_shift().to_f64();
        // Dither at the first stage moves the mean: φ is counted from the shifted one.
        self.phase_cycles.iter_mut().enumerate().for_each(|(n, phase)| *phase = *phase * scale - drift * n as f64);
        let mean = self.phase_cycles.iter().sum::<f64>() / length as f64;
        self.phase_cycles.iter_mut().for_each(|phase| *phase -= mean);
        Ok(())
    }

    /// Returns the density of ψ \[cycles²/Hz, two-sided\] over a record.
    ///
    /// # Errors
    /// `LinesError` when the sequence leaves its range or the settings do not fit the record.
    pub(super) fn density(
        &mut self,
        config: &ModulatorConfig,
        fft: &FftStage,
        length: usize,
        settings: DensitySettings,
    ) -> Result<Density, LinesError> {
        self.run(config, length)?;
        Ok(fft.density(&self.phase_cycles, settings, &mut self.fft)?)
    }

    /// Leaves (ψ + a)² in `excess_cycles`.
    fn square(&mut self, offset_cycles: f64) {
        self.excess_cycles.clear();
        self.excess_cycles.extend(self.phase_cycles.iter().map(|phase| (phase + offset_cycles).powi(2)));
    }

    /// Leaves g(ψ + a) − ψ in `excess_cycles`.
    fn bend(&mut self, charge: Charge<'_>, offset_cycles: f64) {
        self.excess_cycles.clear();
        self.excess_cycles.extend(self.phase_cycles.iter().map(|phase| charge.at(phase + offset_cycles) - phase));
    }
}

/// Returns the lines of a channel.
///
/// # Errors
/// `LinesError` where the loop cannot rest on the charge curve or the sequence leaves its range.
pub fn family_lines(input: &LineInput, fft: &FftStage, scratch: &mut Scratch) -> Result<FamilyLines, LinesError> {
    let whole = input.period.length.as_ref().and_then(ToPrimitive::to_u64).filter(|length| *length <= input.record);
    match whole {
        Some(length) if input.period.is_exact => exact_lines(input, length, fft, scratch),
        _ if input.modulator.has_ideal_shaping() => curve_lines(input),
        _ => windowed_lines(input, scratch),
    }
}

/// One DFT over one exact period.
fn exact_lines(
    input: &LineInput,
    period: u64,
    fft: &FftStage,
    scratch: &mut Scratch,
) -> Result<FamilyLines, LinesError> {
    let length = usize::try_from(period).map_err(|_| CurveError::NoSamples)?;
    scratch.run(input.modulator, length)?;
    let phase = fft.lines(&scratch.phase_cycles, &mut scratch.fft);
    let mut rest_cycles = None;
    let excess = match input.charge {
        None => None,
        Some(charge) => {
            let rest = settle_samples(&scratch.phase_cycles, charge, input.target_cycles)?;
            rest_cycles = Some(rest.offset_cycles);
            scratch.bend(charge, rest.offset_cycles);
            let mut excess = fft.lines(&scratch.excess_cycles, &mut scratch.fft);
            scratch.square(rest.offset_cycles);
            let squares = fft.lines(&scratch.excess_cycles, &mut scratch.fft);
            let step = input.modulator.modulus().get() as f64 / period as f64;
            for (bin, (line, square)) in excess.iter_mut().zip(&squares).enumerate() {
                *line += input.pulse_position(bin as f64 * step) * square;
            }
            Some(excess)
        }
    };
    let line_at = |bin: usize| Line {
        modulator: phase[bin],
        nonlinearity: excess.as_ref().map(|lines| lines[bin]),
        uncertainty_db: Some(0.0),
    };
    let m = input.modulator.modulus().get();
    let mut is_family = vec![false; phase.len()];
    let mut family = Vec::with_capacity(input.family.len());
    for tone in input.family {
        // The residue times T/M is an integer: T is a multiple of M/gcd(K, M).
        let scaled = u128::from(tone.residue.unsigned_abs()) * u128::from(period) / u128::from(m);
        let bin = usize::try_from(scaled).map_err(|_| CurveError::NoSamples)?;
        is_family[bin] = true;
        family.push(line_at(bin));
    }
    let others = (1..phase.len())
        .filter(|bin| !is_family[*bin])
        .map(|bin| PeriodLine { bin: bin as u64, line: line_at(bin) })
        .collect();
    Ok(FamilyLines {
        method: Method::ExactPeriod,
        family,
        others,
        period: Some(period),
        rest_cycles,
        folded: None,
        on_lattice: false,
    })
}

/// Levels from the conditional mean of the charge given the first residue.
fn curve_lines(input: &LineInput) -> Result<FamilyLines, LinesError> {
    let density = PhaseDensity::mash(input.modulator.order())?;
    let linear = |p: f64| p;
    let charge = input.charge.unwrap_or_else(|| Charge::new(&linear, &[]));
    let highest = input.family.iter().map(|tone| tone.harmonic).max().unwrap_or(1);
    let lattice = short_lattice(input.modulator, highest);
    let computed;
    let point = match input.known_curve {
        Some(known) => known,
        None => {
            computed = CurvePoint::new(&density, lattice, charge, input.target_cycles, highest)?;
            &computed
        }
    };
    let folded = input.charge.map(|_| point.folded);
    let folded_cycles2 = folded.as_ref().map_or(0.0, |noise| noise.density_cycles2);
    let period = input.period.length.as_ref().and_then(ToPrimitive::to_f64);
    let family: Vec<Line> = input
        .family
        .iter()
        .map(|tone| {
            let line = point.line(tone.harmonic);
            let modulator = line.modulator;
            let square = square_line(input.modulator.order(), tone.harmonic) + 2.0 * point.rest_cycles * modulator;
            let nonlinearity = line.nonlinearity + input.pulse_position(tone.residue as f64) * square;
            let size = (modulator + nonlinearity).norm();
            let noise = |cycles| line_noise_of(input, folded_cycles2, tone, cycles);
            Line {
                modulator,
                nonlinearity: input.charge.map(|_| nonlinearity),
                // Without a known period the sequence is taken as long: its own noise is spread ever thinner.
                uncertainty_db: period.map_or(Some(0.0), |cycles| level_uncertainty_db(size, noise(cycles))),
            }
        })
        .collect();
    Ok(FamilyLines {
        method: Method::SharedCurve,
        family,
        others: Vec::new(),
        period: None,
        rest_cycles: input.charge.map(|_| point.rest_cycles),
        folded,
        on_lattice: lattice.is_some(),
    })
}

/// A short lattice of s_1: its number of points and where it begins.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct ShortLattice {
    /// Reduced modulus M'.
    pub points: u64,
    /// First value \[cycles\].
    pub start_cycles: f64,
}

/// Returns the lattice of a modulator where harmonics up to `highest` alias on it.
pub(super) fn short_lattice(modulator: &ModulatorConfig, highest: u64) -> Option<ShortLattice> {
    let points = modulator.modulus().get() / num_integer::gcd(modulator.k(), modulator.modulus().get());
    (lattice_is_short(points, highest) && points <= LONGEST_LATTICE)
        .then(|| ShortLattice { points, start_cycles: lattice_start(modulator) })
}

/// Returns (s_1(0) mod gcd(K, M))/M: where the lattice of the first residue begins.
fn lattice_start(config: &ModulatorConfig) -> f64 {
    let m = config.modulus().get();
    let shared = num_integer::gcd(config.k(), m);
    let seed = config.seeds().first().copied().unwrap_or(0);
    (seed % shared) as f64 / m as f64
}

/// Returns the noise power on one line of a sequence of `cycles` \[cycles²\].
fn line_noise_of(input: &LineInput, folded_cycles2: f64, tone: &FamilyTone, cycles: f64) -> f64 {
    let share = tone.residue.unsigned_abs() as f64 / input.modulator.modulus().get() as f64;
    line_noise_cycles2(folded_cycles2, input.modulator.order(), share * input.pfd_hz, input.pfd_hz, cycles)
}

/// Levels from a windowed record alone: for noise transfers that have no curve.
fn windowed_lines(input: &LineInput, scratch: &mut Scratch) -> Result<FamilyLines, LinesError> {
    let length = usize::try_from(input.record).map_err(|_| CurveError::NoSamples)?;
    scratch.run(input.modulator, length)?;
    let window = Window::FourTerm;
    let residues: Vec<u64> = input.family.iter().map(|tone| tone.residue.unsigned_abs()).collect();
    let m = input.modulator.modulus().get();
    let phase = correlate_each(&scratch.phase_cycles, &residues, m, window);
    let mut rest_cycles = None;
    let excess = match input.charge {
        None => None,
        Some(charge) => {
            let rest = settle_samples(&scratch.phase_cycles, charge, input.target_cycles)?;
            rest_cycles = Some(rest.offset_cycles);
            scratch.bend(charge, rest.offset_cycles);
            let mut excess = correlate_each(&scratch.excess_cycles, &residues, m, window);
            scratch.square(rest.offset_cycles);
            let squares = correlate_each(&scratch.excess_cycles, &residues, m, window);
            for ((line, square), residue) in excess.iter_mut().zip(&squares).zip(&residues) {
                *line += input.pulse_position(*residue as f64) * square;
            }
            Some(excess)
        }
    };
    let family = phase
        .iter()
        .enumerate()
        .map(|(index, modulator)| Line {
            modulator: *modulator,
            nonlinearity: excess.as_ref().map(|lines| lines[index]),
            uncertainty_db: None,
        })
        .collect();
    Ok(FamilyLines {
        method: Method::Windowed,
        family,
        others: Vec::new(),
        period: None,
        rest_cycles,
        folded: None,
        on_lattice: false,
    })
}
