//! Cascades of accumulators, one output at a time: every multi-stage structure, with or without dither.

use super::checked::ModulatorConfig;
use super::config::Dither;
use super::register::Register;
use super::sequence::Modulator;
use super::white::WhiteBits;

/// What one stage does with its input: the only place where the multi-stage structures differ.
pub(super) trait StageRule: Copy + Send {
    /// Takes an input, updates the stage, returns (carry, input of the next stage).
    fn step(self, input: u64, stage: &mut Stage) -> (u64, u64);
    /// Returns s_1 reduced so that M·φ + s_1 is constant modulo M.
    fn ramp(self, stage: &Stage) -> u64;
}

/// State of one stage.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Default)]
pub(super) struct Stage {
    /// Residue s.
    pub(super) residue: u64,
    /// Last carry; only the prime-modulus stage reads it.
    pub(super) carry: u64,
}

/// Accumulator with modulus M; the residue goes on.
#[derive(Debug, Clone, Copy)]
pub(super) struct PlainStage {
    pub(super) modulus: u64,
}

impl PlainStage {
    /// Returns (carry, residue). Inputs stay below 2·M, so at most two subtractions.
    #[inline(always)]
    fn reduce(self, input: u64, residue: u64) -> (u64, u64) {
        let mut value = input + residue;
        let mut carry = 0;
        while value >= self.modulus {
            value -= self.modulus;
            carry += 1;
        }
        (carry, value)
    }
}

impl StageRule for PlainStage {
    #[inline(always)]
    fn step(self, input: u64, stage: &mut Stage) -> (u64, u64) {
        let (carry, residue) = self.reduce(input, stage.residue);
        *stage = Stage { residue, carry };
        (carry, residue)
    }

    fn ramp(self, stage: &Stage) -> u64 {
        stage.residue
    }
}

/// Accumulator with modulus M; residue plus carry goes on.
#[derive(Debug, Clone, Copy)]
pub(super) struct OutputFedStage {
    pub(super) plain: PlainStage,
}

impl StageRule for OutputFedStage {
    #[inline(always)]
    fn step(self, input: u64, stage: &mut Stage) -> (u64, u64) {
        let (carry, residue) = self.plain.step(input, stage);
        (carry, residue + carry)
    }

    fn ramp(self, stage: &Stage) -> u64 {
        stage.residue
    }
}

/// Accumulator of `bits` bits whose carry comes back with weight a = 2^bits − M: v = in + s + a·c\[n − 1\].
/// The carry may be 2 and is kept: a register that drops it breaks the sequence for a ≥ 3.
#[derive(Debug, Clone, Copy)]
pub(super) struct PrimeStage {
    pub(super) bits: u32,
    pub(super) feedback: u64,
    pub(super) modulus: u64,
}

impl StageRule for PrimeStage {
    #[inline(always)]
    fn step(self, input: u64, stage: &mut Stage) -> (u64, u64) {
        let value = input + stage.residue + self.feedback * stage.carry;
        let carry = value >> self.bits;
        let residue = value & ((1 << self.bits) - 1);
        *stage = Stage { residue, carry };
        (carry, residue)
    }

    fn ramp(self, stage: &Stage) -> u64 {
        (stage.residue + self.feedback * stage.carry) % self.modulus
    }
}

/// Where extra input comes from; the undithered source vanishes at compile time.
pub(super) trait InputSource: Copy + Send {
    /// Returns what is added to the input of stage `index` (from 0) in this cycle.
    fn added_at(&mut self, index: usize) -> u64;
}

/// No dither.
#[derive(Debug, Clone, Copy)]
pub(super) struct Silent;

impl InputSource for Silent {
    #[inline(always)]
    fn added_at(&mut self, _index: usize) -> u64 {
        0
    }
}

/// Where the bits come from.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub(super) enum Bits {
    /// A maximal-length register.
    Register(Register),
    /// A seeded generator of independent bits.
    White(WhiteBits),
}

/// A bit with a weight, at one stage.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub(super) struct WeightedBit {
    pub(super) index: usize,
    pub(super) weight: u64,
    pub(super) bits: Bits,
}

impl WeightedBit {
    /// Returns the dither source of a configuration; `None` without dither.
    pub(super) fn of(config: &ModulatorConfig) -> Option<Self> {
        match config.dither() {
            Dither::None => None,
            Dither::Register { stage, register, seed, weight } => Some(Self {
                index: usize::from(stage) - 1,
                weight,
                bits: Bits::Register(
                    Register::new(register, seed).expect("a checked configuration holds a listed register"),
                ),
            }),
            Dither::White { stage, seed, weight } => {
                Some(Self { index: usize::from(stage) - 1, weight, bits: Bits::White(WhiteBits::new(seed)) })
            }
        }
    }
}

impl InputSource for WeightedBit {
    #[inline(always)]
    fn added_at(&mut self, index: usize) -> u64 {
        if index != self.index {
            return 0;
        }
        self.weight
            * match &mut self.bits {
                Bits::Register(register) => register.next_bit(),
                Bits::White(white) => white.next_bit(),
            }
    }
}

/// A cascade of `ORDER` stages with the combiner y = c_1 + Δ(c_2 + Δ(c_3 + …)), Δ = 1 − z⁻¹, delays 0 at start.
#[derive(Debug, Clone, Copy)]
pub(super) struct Cascade<const ORDER: usize, R, S> {
    pub(super) rule: R,
    pub(super) source: S,
    pub(super) k: u64,
    pub(super) stages: [Stage; ORDER],
    /// `delays[i]` is the last value of c_{i+1} + Δ(c_{i+2} + …), index from 0; `delays[0]` is not used.
    pub(super) delays: [i32; ORDER],
}

impl<const ORDER: usize, R: StageRule, S: InputSource> Cascade<ORDER, R, S> {
    /// Returns a cascade at its start.
    ///
    /// # Panics
    /// If the configuration is of another order: a broken internal contract.
    pub(super) fn new(config: &ModulatorConfig, rule: R, source: S) -> Self {
        let mut stages = [Stage::default(); ORDER];
        assert_eq!(config.seeds().len(), ORDER, "one seed for each stage");
        for (stage, seed) in stages.iter_mut().zip(config.seeds()) {
            stage.residue = *seed;
        }
        Self { rule, source, k: config.k(), stages, delays: [0; ORDER] }
    }

    /// Returns the next output.
    #[inline(always)]
    pub(super) fn next_output(&mut self) -> i32 {
        let mut input = self.k;
        let mut carries = [0i32; ORDER];
        for (index, stage) in self.stages.iter_mut().enumerate() {
            let (carry, forward) = self.rule.step(input + self.source.added_at(index), stage);
            // A carry is at most 3 by the limits on seeds and weight.
            #[allow(clippy::cast_possible_truncation, clippy::cast_possible_wrap, reason = "carries are at most 3")]
            {
                carries[index] = carry as i32;
            }
            input = forward;
        }
        let mut sum = carries[ORDER - 1];
        for index in (1..ORDER).rev() {
            let difference = sum - self.delays[index];
            self.delays[index] = sum;
            sum = carries[index - 1] + difference;
        }
        sum
    }
}

impl<const ORDER: usize, R: StageRule, S: InputSource> Modulator for Cascade<ORDER, R, S> {
    fn fill(&mut self, outputs: &mut [i32]) {
        // A local copy keeps the state in machine registers.
        let mut local = *self;
        for output in outputs {
            *output = local.next_output();
        }
        *self = local;
    }

    fn first_residue(&self) -> Option<u64> {
        Some(self.rule.ramp(&self.stages[0]))
    }
}

/// Starts a cascade of any order with a rule, dithered or not.
pub(super) fn start<R: StageRule + 'static>(config: &ModulatorConfig, rule: R) -> Box<dyn Modulator + Send> {
    match WeightedBit::of(config) {
        None => start_with(config, rule, Silent),
        Some(source) => start_with(config, rule, source),
    }
}

/// Picks the compiled loop of the order.
fn start_with<R: StageRule + 'static, S: InputSource + 'static>(
    config: &ModulatorConfig,
    rule: R,
    source: S,
) -> Box<dyn Modulator + Send> {
    match config.order() {
        1 => Box::new(Cascade::<1, R, S>::new(config, rule, source)),
        2 => Box::new(Cascade::<2, R, S>::new(config, rule, source)),
        3 => Box::new(Cascade::<3, R, S>::new(config, rule, source)),
        4 => Box::new(Cascade::<4, R, S>::new(config, rule, source)),
        5 => Box::new(Cascade::<5, R, S>::new(config, rule, source)),
        other => unreachable!("a checked cascade has order 1 … 5, not {other}"),
    }
}
