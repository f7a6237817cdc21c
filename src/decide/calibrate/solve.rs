//! Least squares of a few parameters: Gauss–Newton with damping, intervals from the covariance.

/// Two-sided 95 % quantiles of Student's t for 1 … 30 degrees of freedom (Student 1908; tables in any statistics text).
const STUDENT: [f64; 30] = [
    12.706, 4.303, 3.182, 2.776, 2.571, 2.447, 2.365, 2.306, 2.262, 2.228, 2.201, 2.179, 2.160, 2.145, 2.131, 2.120,
    2.110, 2.101, 2.093, 2.086, 2.080, 2.074, 2.069, 2.064, 2.060, 2.056, 2.052, 2.048, 2.045, 2.042,
];
/// The same for the normal distribution.
const NORMAL: f64 = 1.960;
/// Least scatter that is believed \[dB\]: levels are read to a tenth of a decibel (common practice, no source), so rows
/// that agree more closely agree by chance.
const LEAST_SCATTER_DB: f64 = 0.05;
/// Scatter of a level that is taken where too few rows tell it \[dB\].
const ASSUMED_SCATTER_DB: f64 = 1.0;
/// Longest step of a parameter in one round \[dB\]: a part that shrinks away is not found again.
const LONGEST_STEP: f64 = 2.0;
/// Rounds at most.
const MOST_ROUNDS: usize = 100;

/// A fit.
#[derive(Debug, Clone, PartialEq)]
pub(super) struct Fit {
    pub values: Vec<f64>,
    /// Half widths of the 95 % intervals.
    pub half_widths: Vec<f64>,
    /// Root mean square of the residuals over the degrees of freedom; at least `LEAST_SCATTER_DB`.
    pub scatter_db: f64,
    /// Degrees of freedom; with none the scatter is assumed.
    pub freedom: usize,
}

/// Solves `A·x = b` by elimination with pivots; `None` where A is singular.
pub(super) fn solved(mut a: Vec<Vec<f64>>, mut b: Vec<f64>) -> Option<Vec<f64>> {
    let n = b.len();
    for column in 0..n {
        let pivot = (column..n).max_by(|i, j| a[*i][column].abs().total_cmp(&a[*j][column].abs()))?;
        if a[pivot][column].abs() < 1e-12 {
            return None;
        }
        a.swap(column, pivot);
        b.swap(column, pivot);
        let (head, row_value) = (a[column].clone(), b[column]);
        for row in 0..n {
            if row != column {
                let factor = a[row][column] / head[column];
                for (value, of_head) in a[row].iter_mut().zip(&head).skip(column) {
                    *value -= factor * of_head;
                }
                b[row] -= factor * row_value;
            }
        }
    }
    Some((0..n).map(|i| b[i] / a[i][i]).collect())
}

/// Residuals with their derivatives by row; `None` for a row that does not count where the parameters are.
type Rows = Vec<Option<(f64, Vec<f64>)>>;

/// Returns the two-sided 95 % quantile of Student's t.
fn quantile(freedom: usize) -> f64 {
    STUDENT.get(freedom.wrapping_sub(1)).copied().unwrap_or_else(|| {
        // First terms of the expansion about the normal distribution (Abramowitz and Stegun 26.7.5).
        let n = freedom as f64;
        let z = NORMAL;
        z + (z.powi(3) + z) / (4.0 * n) + (5.0 * z.powi(5) + 16.0 * z.powi(3) + 3.0 * z) / (96.0 * n * n)
    })
}

/// Fits parameters so that residuals are smallest, starting from zero.
///
/// Returns `None` where the rows do not settle them.
pub(super) fn fitted(count: usize, model: impl Fn(&[f64]) -> Rows) -> Option<Fit> {
    let mut values = vec![0.0; count];
    let mut damping = 1e-3;
    let mut rows = model(&values);
    let cost = |rows: &Rows| rows.iter().flatten().map(|(residual, _)| residual * residual).sum::<f64>();
    for _ in 0..MOST_ROUNDS {
        let (normal, gradient) = normal_equations(&rows, count);
        let mut damped = normal.clone();
        for (i, row) in damped.iter_mut().enumerate() {
            row[i] *= 1.0 + damping;
        }
        let step = solved(damped, gradient)?;
        let next: Vec<f64> = values.iter().zip(&step).map(|(v, s)| v + s.clamp(-LONGEST_STEP, LONGEST_STEP)).collect();
        let there = model(&next);
        if cost(&there) <= cost(&rows) {
            let is_done = step.iter().all(|s| s.abs() < 1e-9);
            (values, rows) = (next, there);
            damping = (damping * 0.2).max(1e-12);
            if is_done {
                break;
            }
        } else {
            damping *= 10.0;
            if damping > 1e12 {
                break;
            }
        }
    }
    let freedom = rows.iter().flatten().count().saturating_sub(count);
    let (scatter_db, quantile) = match freedom {
        0 => (ASSUMED_SCATTER_DB, NORMAL),
        n => ((cost(&rows) / n as f64).sqrt().max(LEAST_SCATTER_DB), quantile(n)),
    };
    let (normal, _) = normal_equations(&rows, count);
    let half_widths = (0..count)
        .map(|i| {
            let unit = (0..count).map(|j| f64::from(u8::from(i == j))).collect();
            solved(normal.clone(), unit).map(|column| quantile * scatter_db * column[i].max(0.0).sqrt())
        })
        .collect::<Option<Vec<_>>>()?;
    Some(Fit { values, half_widths, scatter_db, freedom })
}

/// Returns JᵀJ and Jᵀr.
fn normal_equations(rows: &Rows, count: usize) -> (Vec<Vec<f64>>, Vec<f64>) {
    let mut normal = vec![vec![0.0; count]; count];
    let mut gradient = vec![0.0; count];
    for (residual, slopes) in rows.iter().flatten() {
        for i in 0..count {
            gradient[i] += slopes[i] * residual;
            for j in 0..count {
                normal[i][j] += slopes[i] * slopes[j];
            }
        }
    }
    (normal, gradient)
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::base::{db_from_power, power_from_db};

    /// tests/data/calibration_reference.py: scipy.optimize.least_squares and scipy.stats.t.
    fn reference() -> serde_json::Value {
        serde_json::from_str(include_str!("../../../tests/data/calibration_reference.json")).unwrap()
    }

    fn numbers(value: &serde_json::Value) -> Vec<f64> {
        value.as_array().unwrap().iter().map(|n| n.as_f64().unwrap()).collect()
    }

    #[test]
    fn fits_and_intervals_are_those_of_scipy() {
        let reference = reference();
        let mut cases = 0;
        for case in reference["cases"].as_array().unwrap() {
            let parts: Vec<Vec<f64>> = case["parts"].as_array().unwrap().iter().map(numbers).collect();
            let measured = numbers(&case["measured_dbc"]);
            let fit = fitted(2, |shift| {
                let scale = [1.0, power_from_db(shift[0]).sqrt(), power_from_db(shift[1]).sqrt()];
                parts
                    .iter()
                    .zip(&measured)
                    .map(|(parts, measured)| {
                        let volts: Vec<f64> = parts.iter().zip(scale).map(|(part, scale)| part * scale).collect();
                        let sum: f64 = volts.iter().sum();
                        Some((measured - db_from_power(sum * sum), vec![volts[1] / sum, volts[2] / sum]))
                    })
                    .collect()
            })
            .unwrap();
            let (shift, half) = (numbers(&case["shift_db"]), numbers(&case["half_db"]));
            for i in 0..2 {
                assert!((fit.values[i] - shift[i]).abs() < 1e-4, "{fit:?} {shift:?}");
                assert!((fit.half_widths[i] / half[i] - 1.0).abs() < 1e-3, "{fit:?} {half:?}");
            }
            assert!((fit.scatter_db - case["scatter_db"].as_f64().unwrap()).abs() < 1e-5);
            assert_eq!(fit.freedom, measured.len() - 2);
            cases += 1;
        }
        assert_eq!(cases, 12);
    }

    #[test]
    fn the_quantile_is_that_of_scipy() {
        for pair in reference()["student"].as_array().unwrap() {
            let freedom = usize::try_from(pair[0].as_u64().unwrap()).unwrap();
            let (ours, theirs) = (quantile(freedom), pair[1].as_f64().unwrap());
            assert!((ours / theirs - 1.0).abs() < 5e-4, "{freedom}: {ours} {theirs}");
        }
    }

    #[test]
    fn a_row_that_fits_exactly_counts_and_one_that_does_not_count_is_left() {
        // Three rows on one parameter, the middle one met exactly; a fourth that says nothing.
        let fit = fitted(1, |x| [0.0, 1.0, 2.0].iter().map(|y| Some((y - x[0], vec![1.0]))).chain([None]).collect());
        let fit = fit.unwrap();
        assert!((fit.values[0] - 1.0).abs() < 1e-9);
        assert_eq!(fit.freedom, 2);
        assert!((fit.scatter_db - 1.0).abs() < 1e-9);
    }
}
