//! The only two places where decibels are made or undone.

/// Returns the level of a power ratio in decibels, `10·log10(ratio)`.
///
/// A ratio of zero gives negative infinity; callers that may hold no power at all
/// carry an `Option` and never show that value. Amplitude ratios are squared first.
///
/// # Examples
/// ```
/// assert_eq!(thornmap::base::db_from_power(100.0), 20.0);
/// ```
#[must_use]
pub fn db_from_power(power_ratio: f64) -> f64 {
    10.0 * power_ratio.log10()
}

/// Returns the power ratio of a level in decibels, `10^(db/10)`.
///
/// # Examples
/// ```
/// assert_eq!(thornmap::base::power_from_db(20.0), 100.0);
/// ```
#[must_use]
pub fn power_from_db(level_db: f64) -> f64 {
    10f64.powf(level_db / 10.0)
}
