//! Least squares of a few parameters: Gauss–Newton with damping, intervals from the covariance.

/// Two-sided 95 % quantiles of Student's t for 1 … 30 degrees of freedom (Student 1908; tables in any statistics text).
const STUDENT: [f64; 30] = [
    12.706, 4.303, 3.182, 2.776, 2.571, 2.447, 2.365, 2.306, 2.262, 2.228, 2.201, 2.179, 2.160, 2.145, 2.131, 2.120,
    2.110, 2.101, 2.093, 2.086, 2.080, 2.074, 2.069, 2.064, 2.060, 2.056, 2.052, 2.048, 2.045, 2.042,
];
/// The same for the normal distribution.
const NORMAL: f64 = 1.960;
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
    /// Root mean square of the residuals over the degrees of freedom.
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

/// Fits parameters so that residuals are smallest; `model` gives residuals and their derivatives by row.
pub(super) fn fitted(count: usize, model: impl Fn(&[f64]) -> (Vec<f64>, Vec<Vec<f64>>)) -> Option<Fit> {
    let mut values = vec![0.0; count];
    let mut damping = 1e-3;
    let (mut residuals, mut slopes) = model(&values);
    let cost = |residuals: &[f64]| residuals.iter().map(|r| r * r).sum::<f64>();
    for _ in 0..MOST_ROUNDS {
        let (normal, gradient) = normal_equations(&slopes, &residuals, count);
        let mut damped = normal.clone();
        for (i, row) in damped.iter_mut().enumerate() {
            row[i] *= 1.0 + damping;
        }
        let step = solved(damped, gradient)?;
        let next: Vec<f64> = values.iter().zip(&step).map(|(v, s)| v + s.clamp(-LONGEST_STEP, LONGEST_STEP)).collect();
        let (there, there_slopes) = model(&next);
        if cost(&there) <= cost(&residuals) {
            let is_done = step.iter().all(|s| s.abs() < 1e-9);
            (values, residuals, slopes) = (next, there, there_slopes);
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
    let used = residuals.iter().filter(|r| **r != 0.0).count();
    let freedom = used.saturating_sub(count);
    let (scatter_db, quantile) = match freedom {
        0 => (ASSUMED_SCATTER_DB, NORMAL),
        n => ((cost(&residuals) / n as f64).sqrt(), STUDENT.get(n - 1).copied().unwrap_or(NORMAL)),
    };
    let (normal, _) = normal_equations(&slopes, &residuals, count);
    let half_widths = (0..count)
        .map(|i| {
            let unit = (0..count).map(|j| f64::from(u8::from(i == j))).collect();
            solved(normal.clone(), unit).map(|column| quantile * scatter_db * column[i].max(0.0).sqrt())
        })
        .collect::<Option<Vec<_>>>()?;
    Some(Fit { values, half_widths, scatter_db, freedom })
}

/// Returns JᵀJ and Jᵀr.
fn normal_equations(slopes: &[Vec<f64>], residuals: &[f64], count: usize) -> (Vec<Vec<f64>>, Vec<f64>) {
    let mut normal = vec![vec![0.0; count]; count];
    let mut gradient = vec![0.0; count];
    for (row, residual) in slopes.iter().zip(residuals) {
        for i in 0..count {
            gradient[i] += row[i] * residual;
            for j in 0..count {
                normal[i][j] += row[i] * row[j];
            }
        }
    }
    (normal, gradient)
}
