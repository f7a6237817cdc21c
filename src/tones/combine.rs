//! Adding contributions that fall on one offset.

use crate::base::{db_from_power, power_from_db};

/// Returns the worst-case sum of levels \[dBc\]: voltages in phase; `None` for an empty list.
///
/// # Examples
/// ```
/// let sum = thornmap::tones::worst_case_sum_dbc([-60.0, -60.0]).unwrap();
/// assert!((sum + 53.9794).abs() < 1e-4);
/// ```
#[must_use]
pub fn worst_case_sum_dbc(levels_dbc: impl IntoIterator<Item = f64>) -> Option<f64> {
    let voltage: f64 = levels_dbc.into_iter().map(|level| power_from_db(level).sqrt()).sum();
    (voltage > 0.0).then(|| db_from_power(voltage * voltage))
}
