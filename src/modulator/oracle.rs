//! The slow definition: recurrences as they are written, in 128 bits, with no shortcut shared with the engine.
//!
//! Every fast path is tested against this. With in_1 = K and dither added at its stage, each cycle does for stage i
//! - MASH: v = in_i + s_i, c_i = ⌊v/M⌋, s_i = v mod M, in_{i+1} = s_i;
//! - output-fed: the same with in_{i+1} = s_i + c_i;
//! - prime-modulus (Hosseini & Kennedy 2007, from memory): v = in_i + s_i + a·c_i\[n − 1\], c_i = ⌊v/2^b⌋,
//!   s_i = v mod 2^b, a = 2^b − M;
//!
//! and y\[n\] = Σ_i (1 − z⁻¹)^(i−1) c_i\[n\]. Error feedback: v = K + Σ h_j·e\[n − j\], y = ⌊v/M⌋, e = v mod M.

use super::checked::ModulatorConfig;
use super::config::{Dither, Structure};
use super::register::tap_pair;
use super::white::WhiteBits;

/// A modulator that is stepped by its recurrences.
#[derive(Debug, Clone, PartialEq, Eq)]
struct Definition {
    /// Residues s_1 … s_m; error feedback: e\[n − 1\] … e\[n − m\].
    residues: Vec<i128>,
    /// Last carries.
    carries: Vec<i128>,
    /// Bits of the register, the next one first; empty without one.
    bits: Vec<u8>,
    /// Generator of white bits.
    white: WhiteBits,
}

impl Definition {
    fn new(config: &ModulatorConfig) -> Self {
        let bits = match config.dither() {
            Dither::None | Dither::White { .. } => Vec::new(),
            Dither::Register { register, seed, .. } => {
                (0..register).rev().map(|place| u8::from((seed >> place) & 1 == 1)).collect()
            }
        };
        Self {
            residues: config.seeds().iter().map(|seed| i128::from(*seed)).collect(),
            carries: vec![0; config.seeds().len()],
            bits,
            white: WhiteBits::new(match config.dither() {
                Dither::White { seed, .. } => seed,
                Dither::None | Dither::Register { .. } => 0,
            }),
        }
    }

    /// Takes one bit: b\[n\] = b\[n − L\] ⊕ b\[n − t\] goes in at the end.
    fn next_bit(&mut self) -> i128 {
        let length = self.bits.len();
        let (_, tap) = tap_pair(u8::try_from(length).expect("at most 31 bits")).expect("a listed register");
        let bit = self.bits.remove(0);
        // After the removal the bit of t cycles before the new one sits t places before the end of the old list.
        let other = self.bits[length - usize::from(tap) - 1];
        self.bits.push(bit ^ other);
        i128::from(bit)
    }

    /// Steps every stage once; returns the carries c_1 … c_m, or the output of an error-feedback modulator alone.
    fn advance(&mut self, config: &ModulatorConfig) -> Vec<i128> {
        let m = i128::from(config.modulus().get());
        let (dither_stage, dither) = match config.dither() {
            Dither::None => (0, 0),
            Dither::Register { stage, weight, .. } => (usize::from(stage), i128::from(weight) * self.next_bit()),
            Dither::White { stage, weight, .. } => {
                (usize::from(stage), i128::from(weight) * i128::from(self.white.next_bit()))
            }
        };
        let mut input = i128::from(config.k());
        if config.structure() == Structure::ErrorFeedback {
            let taps = config.error_filter();
            let fed_back: i128 = taps.iter().zip(&self.residues).map(|(h, e)| i128::from(*h) * e).sum();
            let value = input + dither + fed_back;
            self.residues.insert(0, value.rem_euclid(m));
            self.residues.pop();
            return vec![value.div_euclid(m)];
        }
        // Accumulators wrap at M; those of a prime-modulus MASH at the power of two above it.
        let wrap = match config.structure() {
            Structure::PrimeMash => i128::from(config.modulus().get().next_power_of_two()),
            _ => m,
        };
        for i in 0..self.residues.len() {
            let added = if i + 1 == dither_stage { dither } else { 0 };
            let value = input + added + self.residues[i] + (wrap - m) * self.carries[i];
            self.carries[i] = value.div_euclid(wrap);
            self.residues[i] = value.rem_euclid(wrap);
            input = self.residues[i];
            if config.structure() == Structure::OutputFed {
                input += self.carries[i];
            }
        }
        self.carries.clone()
    }
}

/// Returns C(top, below) for small arguments.
fn binomial(top: usize, below: usize) -> i128 {
    (0..below).fold(1i128, |value, j| value * (top - j) as i128 / (j as i128 + 1))
}

/// Returns the first `count` outputs: y\[n\] = Σ_i (1 − z⁻¹)^(i−1) c_i\[n\], with c_i\[n\] = 0 before the start.
#[must_use]
pub fn outputs(config: &ModulatorConfig, count: usize) -> Vec<i128> {
    if config.is_held() {
        return vec![0; count];
    }
    let mut definition = Definition::new(config);
    let carries: Vec<Vec<i128>> = (0..count).map(|_| definition.advance(config)).collect();
    (0..count)
        .map(|n| {
            let stages = carries[n].len();
            (0..stages)
                .flat_map(|i| (0..=i.min(n)).map(move |j| (i, j)))
                .map(|(i, j)| if j % 2 == 0 { 1 } else { -1 } * binomial(i, j) * carries[n - j][i])
                .sum()
        })
        .collect()
}

/// Returns the residues after each of the first `count` outputs.
#[must_use]
pub fn residues(config: &ModulatorConfig, count: usize) -> Vec<Vec<i128>> {
    let mut definition = Definition::new(config);
    (0..count)
        .map(|_| {
            definition.advance(config);
            definition.residues.clone()
        })
        .collect()
}

/// Returns the length of the cycle that the whole state falls into, by two runners of speed 1 and 2; `None` if it is
/// not found within `most_steps`.
#[must_use]
pub fn state_period(config: &ModulatorConfig, most_steps: u64) -> Option<u64> {
    if config.is_held() {
        return Some(1);
    }
    let mut slow = Definition::new(config);
    let mut fast = slow.clone();
    let mut met = false;
    for _ in 0..most_steps {
        slow.advance(config);
        fast.advance(config);
        fast.advance(config);
        if slow == fast {
            met = true;
            break;
        }
    }
    if !met {
        return None;
    }
    let mark = slow.clone();
    let mut length = 0;
    loop {
        slow.advance(config);
        length += 1;
        if slow == mark {
            return Some(length);
        }
    }
}
