//! The fast multi-stage noise-shaping modulator.
//!
//! For M = 2^n the accumulators need not wrap: with S_i\[n\] = S_i\[n − 1\] + S_{i−1}\[n\], S_0 = K, kept modulo 2^32 or
//! 2^64, the output is y = Δ^m ⌊S_m/M⌋ (from M·y = K − Δ^m s_m and Δ^m S_m = K). S_m is a polynomial in n, so several
//! neighbouring values advance at once by a table of differences of that stride, and the compiler vectorises both
//! passes. Other moduli run one output at a time.

use super::cascade::{self, Cascade, PlainStage, Silent};
use super::checked::ModulatorConfig;
use super::config::Dither;
use super::sequence::Modulator;

/// Neighbouring outputs that advance together: two or four machine vectors, and no fewer than the highest order.
const LANES: usize = 8;
/// Values between two passes: stays in the first-level cache.
const BLOCK: usize = 1024;
/// Places before a block for the values that the difference of the highest order reaches back to.
const HISTORY: usize = 5;

/// Starts a MASH.
pub(super) fn start(config: &ModulatorConfig) -> Box<dyn Modulator + Send> {
    let modulus = config.modulus().get();
    if config.dither() != Dither::None || !modulus.is_power_of_two() {
        return cascade::start(config, PlainStage { modulus });
    }
    match config.order() {
        1 => start_unwrapped::<1>(config),
        2 => start_unwrapped::<2>(config),
        3 => start_unwrapped::<3>(config),
        4 => start_unwrapped::<4>(config),
        5 => start_unwrapped::<5>(config),
        other => unreachable!("a checked MASH has order 1 … 5, not {other}"),
    }
}

/// Starts a MASH from given residues with empty carry delays.
pub(super) fn start_at(config: &ModulatorConfig, residues: &[u64]) -> Box<dyn Modulator + Send> {
    start(&config.with_seeds(residues))
}

/// Picks the narrower accumulator where outputs of the order still fit above the n bits of the modulus.
fn start_unwrapped<const ORDER: usize>(config: &ModulatorConfig) -> Box<dyn Modulator + Send> {
    let bits = config.modulus().get().trailing_zeros();
    if bits as usize + ORDER < 32 {
        Box::new(Unwrapped::<ORDER, u32>::new(config, bits))
    } else {
        Box::new(Unwrapped::<ORDER, u64>::new(config, bits))
    }
}

/// An accumulator word whose sums wrap.
trait Accumulator: Copy + Send + Default + 'static {
    fn keep(value: u64) -> Self;
    fn widen(self) -> u64;
    fn plus(self, other: Self) -> Self;
    fn minus(self, other: Self) -> Self;
    /// Returns the part above the modulus.
    fn above(self, bits: u32) -> Self;
    /// Returns a small signed number of which only the bits that `above` leaves are right.
    fn signed(self, bits: u32) -> i32;
}

macro_rules! accumulator {
    ($word:ty, $signed:ty) => {
        #[allow(
            clippy::cast_possible_truncation,
            clippy::cast_possible_wrap,
            clippy::cast_sign_loss,
            reason = "arithmetic modulo the word length is what is meant; outputs have at most 6 bits"
        )]
        impl Accumulator for $word {
            #[inline(always)]
            fn keep(value: u64) -> Self {
                value as $word
            }
            #[inline(always)]
            fn widen(self) -> u64 {
                u64::from(self)
            }
            #[inline(always)]
            fn plus(self, other: Self) -> Self {
                self.wrapping_add(other)
            }
            #[inline(always)]
            fn minus(self, other: Self) -> Self {
                self.wrapping_sub(other)
            }
            #[inline(always)]
            fn above(self, bits: u32) -> Self {
                self >> bits
            }
            #[inline(always)]
            fn signed(self, bits: u32) -> i32 {
                (((self << bits) as $signed) >> bits) as i32
            }
        }
    };
}
accumulator!(u32, i32);
accumulator!(u64, i64);

/// Returns Δ^order at v\[0\], where v\[j\] is j places back: Σ (−1)^j·C(order, j)·v\[j\], by additions only, which every
/// machine vector has.
#[inline(always)]
fn difference<const ORDER: usize, A: Accumulator>(v: [A; HISTORY + 1]) -> A {
    let twice = |x: A| x.plus(x);
    match ORDER {
        1 => v[0].minus(v[1]),
        2 => v[0].minus(v[1]).minus(v[1].minus(v[2])),
        3 => {
            let inner = v[1].minus(v[2]);
            v[0].minus(v[3]).minus(inner.plus(twice(inner)))
        }
        4 => {
            let (outer, middle) = (v[0].plus(v[4]), twice(v[2]));
            outer.minus(twice(twice(v[1].plus(v[3])))).plus(middle).plus(twice(middle))
        }
        5 => {
            let (outer, middle, inner) = (v[0].minus(v[5]), v[1].minus(v[4]), twice(v[2].minus(v[3])));
            outer.minus(middle).minus(twice(twice(middle))).plus(inner).plus(twice(twice(inner)))
        }
        other => unreachable!("a MASH has order 1 … 5, not {other}"),
    }
}

/// The next `LANES` values of S_m and their differences of stride `LANES`; the last row is constant.
#[derive(Clone, Copy)]
struct Strides<const ORDER: usize, A> {
    values: [A; LANES],
    steps: [[A; LANES]; ORDER],
}

impl<const ORDER: usize, A: Accumulator> Strides<ORDER, A> {
    /// Writes the parts above the modulus, `LANES` at a time, and moves on.
    #[inline(always)]
    fn write(&mut self, targets: &mut [A], bits: u32) {
        // A local copy keeps the rows in machine registers.
        let mut local = *self;
        for target in targets.chunks_exact_mut(LANES) {
            for (place, value) in target.iter_mut().zip(local.values) {
                *place = value.above(bits);
            }
            for lane in 0..LANES {
                local.values[lane] = local.values[lane].plus(local.steps[0][lane]);
            }
            for row in 1..ORDER {
                for lane in 0..LANES {
                    local.steps[row - 1][lane] = local.steps[row - 1][lane].plus(local.steps[row][lane]);
                }
            }
        }
        *self = local;
    }
}

/// A MASH with M = 2^bits and accumulators that run past M.
struct Unwrapped<const ORDER: usize, A> {
    /// The plain modulator: it makes the first m − 1 outputs, whose carry delays are empty; after them only its
    /// residues are kept up to date.
    plain: Cascade<ORDER, PlainStage, Silent>,
    /// How many of these outputs are still to come.
    start_up: usize,
    bits: u32,
    k: A,
}

impl<const ORDER: usize, A: Accumulator> Unwrapped<ORDER, A> {
    fn new(config: &ModulatorConfig, bits: u32) -> Self {
        let plain = Cascade::new(config, PlainStage { modulus: config.modulus().get() }, Silent);
        Self { plain, start_up: ORDER - 1, bits, k: A::keep(config.k()) }
    }

    /// Steps unwrapped sums forward by one cycle.
    #[inline(always)]
    fn forward(&self, sums: &mut [A; ORDER]) {
        let mut input = self.k;
        for sum in sums {
            *sum = sum.plus(input);
            input = *sum;
        }
    }

    /// Steps unwrapped sums back by one cycle.
    #[inline(always)]
    fn backward(&self, sums: &mut [A; ORDER]) {
        for i in (1..ORDER).rev() {
            sums[i] = sums[i].minus(sums[i - 1]);
        }
        sums[0] = sums[0].minus(self.k);
    }

    /// Returns the differences that follow given sums.
    fn strides(&self, sums: &[A; ORDER]) -> Strides<ORDER, A> {
        let mut sums = *sums;
        let mut vector = || {
            std::array::from_fn(|_| {
                self.forward(&mut sums);
                sums[ORDER - 1]
            })
        };
        let mut strides = Strides { values: vector(), steps: [[A::default(); LANES]; ORDER] };
        for row in &mut strides.steps {
            *row = vector();
        }
        for level in 0..ORDER {
            for row in (level..ORDER).rev() {
                let earlier = if row == 0 { strides.values } else { strides.steps[row - 1] };
                for (value, earlier) in strides.steps[row].iter_mut().zip(earlier) {
                    *value = value.minus(earlier);
                }
            }
        }
        strides
    }

    /// Fills outputs once the start-up is over.
    fn fill_steady(&mut self, outputs: &mut [i32]) {
        if outputs.is_empty() {
            return;
        }
        let mut sums = self.plain.stages.map(|stage| A::keep(stage.residue));
        let mut strides = self.strides(&sums);
        // buffer[HISTORY − 1] is ⌊S_m/M⌋ after the last output made, the places before go further back.
        let mut buffer = [A::default(); HISTORY + BLOCK];
        for place in (0..HISTORY).rev() {
            buffer[place] = sums[ORDER - 1].above(self.bits);
            self.backward(&mut sums);
        }
        let mut unused = 0;
        for block in outputs.chunks_mut(BLOCK) {
            let vectors = block.len().div_ceil(LANES);
            strides.write(&mut buffer[HISTORY..HISTORY + vectors * LANES], self.bits);
            self.combine(&buffer, block);
            buffer.copy_within(block.len()..block.len() + HISTORY, 0);
            unused = vectors * LANES - block.len();
        }
        self.keep_residues(&strides.values, unused);
    }

    /// Writes Δ^m of the buffer as outputs.
    #[inline(always)]
    fn combine(&self, buffer: &[A; HISTORY + BLOCK], block: &mut [i32]) {
        let len = block.len();
        let rows: [&[A]; HISTORY + 1] = std::array::from_fn(|j| &buffer[HISTORY - j..HISTORY - j + len]);
        for (i, output) in block.iter_mut().enumerate() {
            *output = difference::<ORDER, A>(rows.map(|row| row[i])).signed(self.bits);
        }
    }

    /// Reads the residues back from neighbouring values of S_m, the first of which belongs to the output that is
    /// `unused` + 1 after the last one written: S_{m−j} = Δ^j S_m.
    fn keep_residues(&mut self, values: &[A; LANES], unused: usize) {
        let mut differences = *values;
        let mut sums = [A::default(); ORDER];
        for stage in (0..ORDER).rev() {
            sums[stage] = differences[ORDER - 1];
            for i in (1..ORDER).rev() {
                differences[i] = differences[i].minus(differences[i - 1]);
            }
        }
        for _ in 0..ORDER + unused {
            self.backward(&mut sums);
        }
        for (stage, sum) in self.plain.stages.iter_mut().zip(sums) {
            stage.residue = sum.widen() & ((1 << self.bits) - 1);
        }
    }
}

impl<const ORDER: usize, A: Accumulator> Modulator for Unwrapped<ORDER, A> {
    fn fill(&mut self, outputs: &mut [i32]) {
        let first = self.start_up.min(outputs.len());
        let (head, rest) = outputs.split_at_mut(first);
        self.plain.fill(head);
        self.start_up -= first;
        self.fill_steady(rest);
    }

    fn first_residue(&self) -> Option<u64> {
        self.plain.first_residue()
    }
}
