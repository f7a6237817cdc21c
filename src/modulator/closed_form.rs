//! The residues of an undithered MASH at any step, and its sequence length, without running it.
//!
//! With in_{i+1} = s_i\[n\] every residue is a polynomial in n with binomial coefficients, modulo M:
//! s_i\[n\] = Σ_{j=0}^{i−1} s_{i−j}(0)·C(n − 1 + j, j) + K·C(n + i − 1, i).

use super::checked::ModulatorConfig;

/// Highest order.
const MOST_STAGES: usize = 5;

/// Returns C(top, count) mod modulus for count ≤ 5: the factors of count! are cancelled first, then the rest is
/// multiplied modulo M, so nothing passes 128 bits.
///
/// `top` itself may be of any size; `modulus` is at most 2^48. Where `top < count` the value is 0.
pub(super) fn binomial_modulo(top: u128, count: u32, modulus: u64) -> u64 {
    let m = u128::from(modulus);
    if top < u128::from(count) {
        return 0;
    }
    let mut factors = [1u128; 5];
    for (j, factor) in (0u128..).zip(factors.iter_mut()).take(count as usize) {
        *factor = top - j;
    }
    for divisor in 2..=u128::from(count) {
        let mut rest = divisor;
        for factor in &mut factors {
            let shared = num_integer::gcd(*factor, rest);
            *factor /= shared;
            rest /= shared;
        }
        assert_eq!(rest, 1, "a binomial is an integer");
    }
    let product = factors.iter().fold(1 % m, |product, factor| product * (factor % m) % m);
    u64::try_from(product).expect("a residue of a 48-bit modulus")
}

/// Returns a·b mod m.
fn product_modulo(a: u64, b: u64, modulus: u64) -> u64 {
    let wide = u128::from(a) * u128::from(b) % u128::from(modulus);
    u64::try_from(wide).expect("a residue of a 48-bit modulus")
}

/// Returns the residues s_1 … s_order after `step` outputs of an undithered MASH; zeros behind them.
pub(super) fn residues_at(config: &ModulatorConfig, step: u128) -> [u64; MOST_STAGES] {
    let m = config.modulus().get();
    let mut residues = [0; MOST_STAGES];
    // C(n + a, j) mod M repeats in n with M·j!: 120 = 5! covers every order, and n + 4 cannot overflow any more.
    if step == 0 {
        residues[..config.seeds().len()].copy_from_slice(config.seeds());
        return residues;
    }
    let n = (step - 1) % (u128::from(m) * 120) + 1;
    for (i, residue) in (1..=u32::from(config.order())).zip(&mut residues) {
        let own = (0..i).map(|j| {
            let seed = config.seeds()[(i - j - 1) as usize];
            product_modulo(seed, binomial_modulo(n - 1 + u128::from(j), j, m), m)
        });
        let driven = product_modulo(config.k(), binomial_modulo(n + u128::from(i) - 1, i, m), m);
        *residue = own.chain([driven]).fold(0, |sum, term| (sum + term) % m);
    }
    residues
}

/// Returns the exact length of the sequence of an undithered MASH (state and output), at any seeds.
///
/// T_1 = M/gcd(K, M); T_{i+1} = T_i·M/gcd(d_i, M), where d_i is what stage i + 1 gains over T_i.
pub(super) fn cascade_period(k: u64, seeds: &[u64], modulus: u64) -> u128 {
    let m = u128::from(modulus);
    let mut period = m / u128::from(num_integer::gcd(k, modulus));
    for i in 1..u32::try_from(seeds.len()).expect("at most five stages") {
        let own = (0..i).map(|j| {
            let seed = seeds[(i - j - 1) as usize];
            product_modulo(seed, binomial_modulo(period + u128::from(j), j + 1, modulus), modulus)
        });
        let driven = product_modulo(k, binomial_modulo(period + u128::from(i), i + 1, modulus), modulus);
        let gain = own.chain([driven]).fold(0, |sum, term| (sum + term) % modulus);
        period *= m / u128::from(num_integer::gcd(gain, modulus));
    }
    period
}

#[cfg(test)]
mod tests {
    use super::*;
    use num_bigint::BigUint;

    #[test]
    fn binomials_equal_those_of_unbounded_integers() {
        let mut checked = 0;
        let tops = (0..12u128).chain([1 << 24, (1 << 53) - 1, (1 << 60) + 7, (1 << 100) + 4, u128::MAX]);
        for top in tops {
            for count in 0..=5u32 {
                let product = (0..u128::from(count)).map(|j| BigUint::from(top.saturating_sub(j))).product::<BigUint>();
                let exact = product / BigUint::from((1..=count).product::<u32>());
                let exact = if top < u128::from(count) { BigUint::ZERO } else { exact };
                for modulus in [1u64, 2, 7, 60, 1 << 24, (1 << 48) - 59, 1 << 48] {
                    let want = &exact % BigUint::from(modulus);
                    assert_eq!(BigUint::from(binomial_modulo(top, count, modulus)), want, "C({top}, {count})");
                    checked += 1;
                }
            }
        }
        assert_eq!(checked, 17 * 6 * 7);
    }
}
