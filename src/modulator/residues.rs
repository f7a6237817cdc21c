//! The last residue of an undithered MASH, many neighbouring cycles at a time.
//!
//! s_m\[n\] is a polynomial in n of degree m, modulo M. Neighbouring values therefore advance together by a table of
//! differences of that stride, each lane on its own, and the compiler turns every row into machine vectors; the loops are
//! compiled for several instruction sets and picked at run time. What the modulator does follows from s_m alone:
//! M·y = K − Δ^m s_m, and M·φ + Δ^(m−1) s_m is constant.

use pulp::{Arch, Simd, WithSimd};

use super::cascade::{Cascade, PlainStage, Silent};
use super::checked::ModulatorConfig;

/// Values between two refills: stays in the first-level cache.
const BLOCK: usize = 1024;
/// Places before a block for the values that the difference of the highest order reaches back to.
const HISTORY: usize = 5;
/// Values and their differences up to the highest order.
const ROWS: usize = 6;
/// Highest order.
const MOST_STAGES: usize = 5;
/// Lanes of the narrow word: two of the widest common machine vectors.
const MOST_LANES: usize = 16;

/// A word of an accumulator; sums wrap.
trait Word: Copy + Default + Send + 'static {
    fn keep(value: u64) -> Self;
    fn plus(self, other: Self) -> Self;
    fn minus(self, other: Self) -> Self;
    fn down(self, bits: u32) -> Self;
    /// Returns `self` or, where that is no less than the modulus, `self` minus the modulus; below twice the modulus.
    fn reduced(self, modulus: Self) -> Self;
    /// Returns a signed number as a double, exactly; below 2^51 in size.
    fn signed(self) -> f64;
    /// Returns the signed number divided by 2^twos·o, of which it is a multiple; `inverse` is that of o modulo 2^32.
    fn quotient(self, twos: u32, inverse: u32) -> i32;
}

#[allow(
    clippy::cast_possible_truncation,
    clippy::cast_possible_wrap,
    clippy::cast_sign_loss,
    reason = "arithmetic modulo the word length is what is meant; quotients have at most 6 bits"
)]
impl Word for u32 {
    #[inline(always)]
    fn keep(value: u64) -> Self {
        value as Self
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
    fn down(self, bits: u32) -> Self {
        self >> bits
    }
    #[inline(always)]
    fn reduced(self, modulus: Self) -> Self {
        // Below the modulus the difference wraps to something larger.
        self.min(self.wrapping_sub(modulus))
    }
    #[inline(always)]
    fn signed(self) -> f64 {
        f64::from(self as i32)
    }
    #[inline(always)]
    fn quotient(self, twos: u32, inverse: u32) -> i32 {
        ((self as i32) >> twos).wrapping_mul(inverse as i32)
    }
}

#[allow(
    clippy::cast_possible_truncation,
    clippy::cast_possible_wrap,
    clippy::cast_sign_loss,
    reason = "arithmetic modulo the word length is what is meant; quotients have at most 6 bits"
)]
impl Word for u64 {
    #[inline(always)]
    fn keep(value: u64) -> Self {
        value
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
    fn down(self, bits: u32) -> Self {
        self >> bits
    }
    #[inline(always)]
    fn reduced(self, modulus: Self) -> Self {
        // By the sign: few machines compare unsigned 64-bit vectors.
        let less = self.wrapping_sub(modulus);
        if (less as i64) < 0 { self } else { less }
    }
    #[inline(always)]
    fn signed(self) -> f64 {
        // Few machines convert 64-bit vectors: the number is put into the fraction of 1.5·2^52, which is then taken off.
        const PLACE: f64 = 6_755_399_441_055_744.0;
        f64::from_bits(self.wrapping_add(PLACE.to_bits())) - PLACE
    }
    #[inline(always)]
    fn quotient(self, twos: u32, inverse: u32) -> i32 {
        (((self as i64) >> twos) as i32).wrapping_mul(inverse as i32)
    }
}

/// How sums stay below the modulus.
trait Reduction<A>: Copy {
    fn add(self, a: A, b: A) -> A;
    fn residue(self, kept: A) -> A;
}

/// M = 2^n: residues are kept at the top of the word, where the machine itself wraps.
#[derive(Clone, Copy)]
struct AtTheTop {
    shift: u32,
}

impl<A: Word> Reduction<A> for AtTheTop {
    #[inline(always)]
    fn add(self, a: A, b: A) -> A {
        a.plus(b)
    }
    #[inline(always)]
    fn residue(self, kept: A) -> A {
        kept.down(self.shift)
    }
}

/// Any M: at most one subtraction a sum.
#[derive(Clone, Copy)]
struct Subtracting<A> {
    modulus: A,
}

impl<A: Word> Reduction<A> for Subtracting<A> {
    #[inline(always)]
    fn add(self, a: A, b: A) -> A {
        a.plus(b).reduced(self.modulus)
    }
    #[inline(always)]
    fn residue(self, kept: A) -> A {
        kept
    }
}

/// Returns Δ^degree at v\[0\], where v\[j\] is j places back: Σ (−1)^j·C(degree, j)·v\[j\], by additions only, which every
/// machine vector has.
#[inline(always)]
fn difference<A: Word>(degree: usize, v: [A; HISTORY + 1]) -> A {
    let twice = |x: A| x.plus(x);
    match degree {
        0 => v[0],
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

/// What the first m − 1 outputs, whose carry delays are empty, leave behind.
struct StartUp {
    outputs: [i32; MOST_STAGES - 1],
    /// M·φ + Δ^(m−1) s_m from here on.
    phase_sum: i64,
    /// s_m after these outputs and before, the latest first; zero where nothing reaches.
    past: [u64; HISTORY],
    /// s_m of the following cycles.
    next: [u64; ROWS * MOST_LANES],
}

/// Runs the start-up and the cycles that fill a table, one at a time.
fn start_up<const ORDER: usize>(config: &ModulatorConfig) -> StartUp {
    let modulus = config.modulus().get();
    let signed = |value: u64| i64::try_from(value).expect("residues are below 2^48");
    let mut plain = Cascade::<ORDER, _, _>::new(config, PlainStage { modulus }, Silent);
    let mut outputs = [0; MOST_STAGES - 1];
    let mut past = [0; HISTORY];
    past[0] = plain.stages[ORDER - 1].residue;
    let mut phase = 0;
    for output in &mut outputs[..ORDER - 1] {
        *output = plain.next_output();
        phase += i64::from(*output) * signed(modulus) - signed(config.k());
        past.rotate_right(1);
        past[0] = plain.stages[ORDER - 1].residue;
    }
    let mut ladder = past.map(signed);
    for level in 1..ORDER {
        for j in 0..HISTORY - level {
            ladder[j] -= ladder[j + 1];
        }
    }
    let next = std::array::from_fn(|_| {
        plain.next_output();
        plain.stages[ORDER - 1].residue
    });
    StartUp { outputs, phase_sum: phase + ladder[0], past, next }
}

/// The values of s_m from here on and their differences of stride `LANES`; row `order` is constant.
struct Lanes<A, const LANES: usize> {
    order: usize,
    rows: [[A; LANES]; ROWS],
    reduction: AnyReduction<A>,
    k: A,
    twos: u32,
    inverse: u32,
    phase_sum: f64,
    /// s_m: `HISTORY` values of the block before, then a block.
    buffer: [A; HISTORY + BLOCK],
    /// Place of the next cycle in the buffer.
    at: usize,
}

/// The reduction that a modulus asks for.
#[derive(Clone, Copy)]
enum AnyReduction<A> {
    AtTheTop(AtTheTop),
    Subtracting(Subtracting<A>),
}

impl<A: Word, const LANES: usize> Lanes<A, LANES> {
    fn new(config: &ModulatorConfig, first: &StartUp) -> Self {
        let (order, modulus) = (usize::from(config.order()), config.modulus().get());
        let twos = modulus.trailing_zeros();
        let mut buffer = [A::default(); HISTORY + BLOCK];
        for (place, value) in buffer[BLOCK..].iter_mut().rev().zip(first.past) {
            *place = A::keep(value);
        }
        let bits = u32::try_from(8 * size_of::<A>()).expect("a word has at most 64 bits");
        let at_the_top = modulus.is_power_of_two() && modulus > 1;
        let (rows, reduction) = if at_the_top {
            let shift = bits - twos;
            let rows = table(order, &first.next, |a, b| a.wrapping_sub(b) & (modulus - 1));
            let rows = rows.map(|row| row.map(|value| A::keep(value << shift)));
            (rows, AnyReduction::AtTheTop(AtTheTop { shift }))
        } else {
            let rows = table(order, &first.next, |a, b| if a < b { a + modulus - b } else { a - b });
            (rows.map(|row| row.map(A::keep)), AnyReduction::Subtracting(Subtracting { modulus: A::keep(modulus) }))
        };
        Self {
            order,
            rows,
            reduction,
            k: A::keep(config.k()),
            twos,
            inverse: inverse_of_odd(modulus >> twos),
            phase_sum: first.phase_sum as f64,
            buffer,
            at: HISTORY + BLOCK,
        }
    }

    /// Writes the next block of s_m behind the end of the one before.
    #[inline(always)]
    fn refill<R: Reduction<A>, const ORDER: usize>(&mut self, reduction: R) {
        self.buffer.copy_within(BLOCK.., 0);
        // A local copy keeps the rows in machine registers.
        let mut rows = self.rows;
        for target in self.buffer[HISTORY..].chunks_exact_mut(LANES) {
            for (place, value) in target.iter_mut().zip(rows[0]) {
                *place = reduction.residue(value);
            }
            for row in 0..ORDER {
                let steps = rows[row + 1];
                for (value, step) in rows[row].iter_mut().zip(steps) {
                    *value = reduction.add(*value, step);
                }
            }
        }
        self.rows = rows;
        self.at = HISTORY;
    }

    /// Writes what `combine` makes of Δ^degree s_m in the next cycles.
    #[inline(always)]
    fn each<T, R: Reduction<A>, const ORDER: usize>(
        &mut self,
        reduction: R,
        degree: usize,
        out: &mut [T],
        combine: impl Fn(A) -> T,
    ) {
        let mut rest = out;
        while !rest.is_empty() {
            if self.at == HISTORY + BLOCK {
                self.refill::<R, ORDER>(reduction);
            }
            let count = rest.len().min(HISTORY + BLOCK - self.at);
            let (part, later) = rest.split_at_mut(count);
            let seen = &self.buffer[self.at - HISTORY..self.at + count];
            for (place, seen) in part.iter_mut().zip(seen.windows(HISTORY + 1)) {
                *place = combine(difference(degree, [seen[5], seen[4], seen[3], seen[2], seen[1], seen[0]]));
            }
            self.at += count;
            rest = later;
        }
    }

    /// Compiles a job for the machine at hand.
    fn run<T: Target<A>>(&mut self, out: &mut [T]) {
        match self.order {
            1 => self.run_order::<T, 1>(out),
            2 => self.run_order::<T, 2>(out),
            3 => self.run_order::<T, 3>(out),
            4 => self.run_order::<T, 4>(out),
            5 => self.run_order::<T, 5>(out),
            other => unreachable!("a checked MASH has order 1 … 5, not {other}"),
        }
    }

    fn run_order<T: Target<A>, const ORDER: usize>(&mut self, out: &mut [T]) {
        match self.reduction {
            AnyReduction::AtTheTop(reduction) => {
                Arch::new().dispatch(Job::<_, _, _, ORDER, LANES> { lanes: self, reduction, out })
            }
            AnyReduction::Subtracting(reduction) => {
                Arch::new().dispatch(Job::<_, _, _, ORDER, LANES> { lanes: self, reduction, out });
            }
        }
    }
}

/// What can be written of a modulator: outputs, or numerators of the phase error.
trait Target<A: Word>: Sized {
    /// Fills the next cycles.
    fn fill<R: Reduction<A>, const ORDER: usize, const LANES: usize>(
        lanes: &mut Lanes<A, LANES>,
        reduction: R,
        out: &mut [Self],
    );
}

impl<A: Word> Target<A> for i32 {
    #[inline(always)]
    fn fill<R: Reduction<A>, const ORDER: usize, const LANES: usize>(
        lanes: &mut Lanes<A, LANES>,
        reduction: R,
        out: &mut [Self],
    ) {
        let (k, twos, inverse) = (lanes.k, lanes.twos, lanes.inverse);
        lanes.each::<_, _, ORDER>(reduction, ORDER, out, |step| k.minus(step).quotient(twos, inverse));
    }
}

impl<A: Word> Target<A> for f64 {
    #[inline(always)]
    fn fill<R: Reduction<A>, const ORDER: usize, const LANES: usize>(
        lanes: &mut Lanes<A, LANES>,
        reduction: R,
        out: &mut [Self],
    ) {
        let phase_sum = lanes.phase_sum;
        lanes.each::<_, _, ORDER>(reduction, ORDER - 1, out, |step| phase_sum - step.signed());
    }
}

/// A loop that is compiled once for each instruction set.
struct Job<'a, A, R, T, const ORDER: usize, const LANES: usize> {
    lanes: &'a mut Lanes<A, LANES>,
    reduction: R,
    out: &'a mut [T],
}

impl<A: Word, R: Reduction<A>, T: Target<A>, const ORDER: usize, const LANES: usize> WithSimd
    for Job<'_, A, R, T, ORDER, LANES>
{
    type Output = ();

    #[inline(always)]
    fn with_simd<S: Simd>(self, _simd: S) {
        T::fill::<R, ORDER, LANES>(self.lanes, self.reduction, self.out);
    }
}

/// Returns rows of neighbouring values turned into differences of one row's stride; rows above the order are not used.
fn table<const LANES: usize>(order: usize, values: &[u64], minus: impl Fn(u64, u64) -> u64) -> [[u64; LANES]; ROWS] {
    let mut rows: [[u64; LANES]; ROWS] =
        std::array::from_fn(|row| std::array::from_fn(|lane| values[row * LANES + lane]));
    for level in 1..=order {
        for row in (level..=order).rev() {
            rows[row] = std::array::from_fn(|lane| minus(rows[row][lane], rows[row - 1][lane]));
        }
    }
    rows
}

/// Returns the inverse modulo 2^32: each of Newton's steps doubles the right bits, an odd number is its own for three.
fn inverse_of_odd(odd: u64) -> u32 {
    let odd = u32::try_from(odd & 0xffff_ffff).expect("32 bits");
    (0..4).fold(odd, |inverse, _| inverse.wrapping_mul(2u32.wrapping_sub(odd.wrapping_mul(inverse))))
}

/// The steady part of an undithered MASH: from output m − 1 on.
#[allow(clippy::large_enum_variant, reason = "a box would allocate for every channel")]
enum Steady {
    /// Where M·2^(m−1), the largest M·y, has at most 31 bits.
    Narrow(Lanes<u32, MOST_LANES>),
    /// Any other: differences have at most 48 + 5 bits.
    Wide(Lanes<u64, { MOST_LANES / 2 }>),
}

/// A running undithered MASH that makes outputs or phase errors.
pub(super) struct Residues {
    start_up: [i32; MOST_STAGES - 1],
    steady: Steady,
}

impl Residues {
    /// Returns the modulator at its start.
    pub(super) fn new(config: &ModulatorConfig) -> Self {
        let first = match config.order() {
            1 => start_up::<1>(config),
            2 => start_up::<2>(config),
            3 => start_up::<3>(config),
            4 => start_up::<4>(config),
            5 => start_up::<5>(config),
            other => unreachable!("a checked MASH has order 1 … 5, not {other}"),
        };
        let bits = u64::BITS - (config.modulus().get() - 1).leading_zeros();
        let steady = if bits + u32::from(config.order()) <= 31 {
            Steady::Narrow(Lanes::new(config, &first))
        } else {
            Steady::Wide(Lanes::new(config, &first))
        };
        Self { start_up: first.outputs, steady }
    }

    /// Writes the next outputs of the start-up: m − 1 in all.
    pub(super) fn start_up(&mut self, out: &mut [i32]) {
        out.copy_from_slice(&self.start_up[..out.len()]);
        self.start_up.rotate_left(out.len());
    }

    /// Writes the next outputs after the start-up.
    pub(super) fn outputs(&mut self, out: &mut [i32]) {
        match &mut self.steady {
            Steady::Narrow(lanes) => lanes.run(out),
            Steady::Wide(lanes) => lanes.run(out),
        }
    }

    /// Writes M·φ of the next cycles after the start-up, exactly: |M·φ| ≤ 2^52.
    pub(super) fn phase_numerators(&mut self, out: &mut [f64]) {
        match &mut self.steady {
            Steady::Narrow(lanes) => lanes.run(out),
            Steady::Wide(lanes) => lanes.run(out),
        }
    }

    /// Returns M·φ + Δ^(m−1) s_m, which is constant after the start-up.
    pub(super) fn phase_sum(&self) -> f64 {
        match &self.steady {
            Steady::Narrow(lanes) => lanes.phase_sum,
            Steady::Wide(lanes) => lanes.phase_sum,
        }
    }
}
