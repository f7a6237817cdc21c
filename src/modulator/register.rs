//! Maximal-length shift registers: the one-bit sequences used as dither.

/// Length and second tap of each listed register: b\[n\] = b\[n − length\] ⊕ b\[n − tap\].
///
/// Source: ITU-T O.150 for 9, 11, 15, 20, 23, 29, 31; maximal-length tables for 7, 17, 25.
/// A unit test proves each polynomial primitive.
const TAPS: [(u8, u8); 10] =
    [(7, 6), (9, 5), (11, 9), (15, 14), (17, 14), (20, 3), (23, 18), (25, 22), (29, 27), (31, 28)];

/// Lengths for which taps are listed, ascending \[bits\].
pub const REGISTER_LENGTHS: [u8; 10] = [7, 9, 11, 15, 17, 20, 23, 25, 29, 31];

/// Returns the taps of the register of a length: the length itself and the second tap, both counted from 1 at the
/// input; `None` where no register is listed.
///
/// # Examples
/// ```
/// assert_eq!(thornmap::modulator::tap_pair(9), Some((9, 5)));
/// assert_eq!(thornmap::modulator::tap_pair(8), None);
/// ```
#[must_use]
pub fn tap_pair(length: u8) -> Option<(u8, u8)> {
    TAPS.into_iter().find(|(listed, _)| *listed == length)
}

/// Returns the listed lengths as a sentence part for messages.
pub(super) fn lengths_in_words() -> String {
    REGISTER_LENGTHS.map(|length| length.to_string()).join(", ")
}

/// A running register; its value holds the next `length` bits, the first one in the most significant place.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub struct Register {
    value: u64,
    last: u32,
    tap: u32,
    mask: u64,
}

impl Register {
    /// Returns a register that starts with the bits of `seed`, most significant first; `None` for a length that is
    /// not listed or a seed outside 1 … 2^length − 1.
    #[must_use]
    pub fn new(length: u8, seed: u64) -> Option<Self> {
        let (length, tap) = tap_pair(length)?;
        let mask = (1u64 << length) - 1;
        (1..=mask).contains(&seed).then(|| Self {
            value: seed,
            last: u32::from(length) - 1,
            tap: u32::from(tap) - 1,
            mask,
        })
    }

    /// Returns the next bit, 0 or 1.
    #[inline]
    pub fn next_bit(&mut self) -> u64 {
        let bit = self.value >> self.last;
        let fed_back = bit ^ ((self.value >> self.tap) & 1);
        self.value = ((self.value << 1) | fed_back) & self.mask;
        bit
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    /// Product of two polynomials over GF(2) modulo x^length + x^(length − tap) + 1.
    fn times(a: u64, b: u64, length: u8, tap: u8) -> u64 {
        let (mut a, mut b, mut product) = (a, b, 0u64);
        while b != 0 {
            if b & 1 == 1 {
                product ^= a;
            }
            b >>= 1;
            a <<= 1;
            if a >> length == 1 {
                a ^= (1 << length) | (1 << (length - tap)) | 1;
            }
        }
        product
    }

    fn power(mut exponent: u64, length: u8, tap: u8) -> u64 {
        let (mut base, mut result) = (2u64, 1u64);
        while exponent > 0 {
            if exponent & 1 == 1 {
                result = times(result, base, length, tap);
            }
            base = times(base, base, length, tap);
            exponent >>= 1;
        }
        result
    }

    #[test]
    fn every_listed_polynomial_is_primitive() {
        let mut checked = 0;
        for (length, tap) in TAPS {
            let period = (1u64 << length) - 1;
            assert_eq!(power(period, length, tap), 1, "{length}");
            let mut rest = period;
            let mut factor = 3;
            while rest > 1 {
                if factor * factor > rest {
                    factor = rest;
                }
                if rest.is_multiple_of(factor) {
                    assert_ne!(power(period / factor, length, tap), 1, "{length}: order divides by {factor}");
                    while rest.is_multiple_of(factor) {
                        rest /= factor;
                    }
                }
                factor += 2;
            }
            checked += 1;
        }
        assert_eq!(checked, REGISTER_LENGTHS.len());
        assert_eq!(TAPS.map(|(length, _)| length), REGISTER_LENGTHS);
    }

    #[test]
    fn refuses_zero_and_oversized_seeds() {
        assert_eq!(Register::new(9, 0), None);
        assert_eq!(Register::new(9, 512), None);
        assert_eq!(Register::new(8, 1), None);
        assert!(Register::new(9, 511).is_some());
    }
}
