//! The largest prime below a power of two: the working modulus of a prime-modulus MASH.

/// Returns base^exponent mod modulus (modulus below 2^63).
fn power_modulo(base: u64, mut exponent: u64, modulus: u64) -> u64 {
    let product = |a: u64, b: u64| -> u64 {
        let wide = u128::from(a) * u128::from(b) % u128::from(modulus);
        u64::try_from(wide).expect("a residue of a 64-bit modulus has 64 bits")
    };
    let (mut base, mut result) = (base % modulus, 1);
    while exponent > 0 {
        if exponent & 1 == 1 {
            result = product(result, base);
        }
        base = product(base, base);
        exponent >>= 1;
    }
    result
}

/// Returns whether a number is prime; decided, not guessed.
///
/// Strong-probable-prime test to the bases 2 … 37, which has no exception below 3.3·10^24.
/// Source: Sorenson & Webster 2015 (bound from memory).
#[must_use]
pub fn is_prime(number: u64) -> bool {
    const BASES: [u64; 12] = [2, 3, 5, 7, 11, 13, 17, 19, 23, 29, 31, 37];
    if number < 2 {
        return false;
    }
    if let Some(small) = BASES.into_iter().find(|p| number.is_multiple_of(*p)) {
        return number == small;
    }
    let twos = (number - 1).trailing_zeros();
    let odd = (number - 1) >> twos;
    BASES.into_iter().all(|base| {
        let mut x = power_modulo(base, odd, number);
        if x == 1 || x == number - 1 {
            return true;
        }
        for _ in 1..twos {
            x = power_modulo(x, 2, number);
            if x == number - 1 {
                return true;
            }
        }
        false
    })
}

/// Returns the feedback a for which 2^bits − a is the largest prime below 2^bits; `None` outside 2 … 48 bits.
///
/// Source: OEIS A013603.
///
/// # Examples
/// ```
/// assert_eq!(thornmap::modulator::prime_feedback(24), Some(3));
/// ```
#[must_use]
pub fn prime_feedback(bits: u32) -> Option<u64> {
    if !(2..=48).contains(&bits) {
        return None;
    }
    let power = 1u64 << bits;
    (1..power - 1).find(|a| is_prime(power - a))
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn agrees_with_trial_division_on_every_small_number() {
        let mut primes = 0;
        for number in 0..20_000u64 {
            let slow = number >= 2 && (2..).take_while(|d| d * d <= number).all(|d| number % d != 0);
            assert_eq!(is_prime(number), slow, "{number}");
            primes += u32::from(slow);
        }
        // π(20,000), from the same trial division: the loop must have seen them all.
        assert_eq!(primes, 2262);
    }
}
