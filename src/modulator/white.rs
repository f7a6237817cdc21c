//! Independent fair bits from a seeded generator.

/// A generator of bits: SplitMix64 (Steele, Lea & Flood 2014), its top bit; the state steps by an odd constant, so the
/// bits repeat after 2^64.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub(super) struct WhiteBits(u64);

impl WhiteBits {
    pub(super) fn new(seed: u64) -> Self {
        Self(seed)
    }

    /// Returns the next bit, 0 or 1.
    #[inline(always)]
    pub(super) fn next_bit(&mut self) -> u64 {
        self.0 = self.0.wrapping_add(0x9e37_79b9_7f4a_7c15);
        let mut mixed = self.0;
        mixed = (mixed ^ (mixed >> 30)).wrapping_mul(0xbf58_476d_1ce4_e5b9);
        mixed = (mixed ^ (mixed >> 27)).wrapping_mul(0x94d0_49bb_1331_11eb);
        (mixed ^ (mixed >> 31)) >> 63
    }
}
