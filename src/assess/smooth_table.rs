//! A smooth function of one variable, tabulated on Chebyshev points and checked while it is built.

use std::f64::consts::PI;

/// Intervals of the coarsest rule tried on a piece.
const FEWEST_INTERVALS: usize = 4;
/// Intervals of the finest rule tried before a piece is halved.
const MOST_INTERVALS: usize = 16;
/// Times a piece is halved before it is left to the direct route.
const MOST_HALVINGS: u32 = 6;

/// Several functions of one variable on pieces between given breaks.
///
/// A piece is accepted where the interpolant on n + 1 points agrees with the function itself at all points between them;
/// the one kept has 2n + 1. A piece that never agrees holds no values: there the caller computes.
#[derive(Debug, Clone)]
pub(super) struct SmoothTable {
    pieces: Vec<Piece>,
}

#[derive(Debug, Clone)]
struct Piece {
    low: f64,
    high: f64,
    /// Values at the points from `low` to `high`, all functions side by side; empty where the direct route is due.
    rows: Vec<Vec<f64>>,
}

/// What a table is built from.
pub(super) struct TableSource<'a> {
    /// The functions; `None` where they have no value.
    pub function: &'a dyn Fn(f64) -> Option<Vec<f64>>,
    /// Whether values (exact first) agree within the error allowed.
    pub is_close: &'a dyn Fn(&[f64], &[f64]) -> bool,
    /// Most calls of the function.
    pub most_calls: usize,
}

impl SmoothTable {
    /// Returns the table over `breaks`, which rise; places where the function may not be smooth belong among them.
    pub(super) fn new(breaks: &[f64], source: &TableSource) -> Self {
        let mut builder = Builder { source, calls: 0, pieces: Vec::new() };
        for pair in breaks.windows(2) {
            if pair[1] > pair[0] {
                builder.piece(pair[0], pair[1], 0);
            }
        }
        Self { pieces: builder.pieces }
    }

    /// Returns the values at `x`; `None` outside the table and on pieces that are left to the direct route.
    pub(super) fn at(&self, x: f64) -> Option<Vec<f64>> {
        let after = self.pieces.partition_point(|piece| piece.low <= x);
        let piece = self.pieces.get(after.checked_sub(1)?)?;
        (x <= piece.high && !piece.rows.is_empty()).then(|| piece.at(x))
    }

    /// Multiplies every value: a wrong table for the test of the run's own check.
    #[cfg(test)]
    pub(super) fn bend(&mut self, by: f64) {
        self.pieces.iter_mut().flat_map(|piece| &mut piece.rows).flatten().for_each(|value| *value *= by);
    }
}

struct Builder<'a> {
    source: &'a TableSource<'a>,
    calls: usize,
    pieces: Vec<Piece>,
}

impl Builder<'_> {
    fn piece(&mut self, low: f64, high: f64, halvings: u32) {
        match self.accepted(low, high) {
            Some(piece) => self.pieces.push(piece),
            None if halvings < MOST_HALVINGS && self.calls < self.source.most_calls => {
                let middle = f64::midpoint(low, high);
                self.piece(low, middle, halvings + 1);
                self.piece(middle, high, halvings + 1);
            }
            None => self.pieces.push(Piece { low, high, rows: Vec::new() }),
        }
    }

    fn call(&mut self, x: f64) -> Option<Vec<f64>> {
        self.calls += 1;
        (self.source.function)(x).filter(|values| values.iter().all(|value| value.is_finite()))
    }

    fn accepted(&mut self, low: f64, high: f64) -> Option<Piece> {
        let mut piece = Piece { low, high, rows: Vec::new() };
        for j in 0..=FEWEST_INTERVALS {
            piece.rows.push(self.call(node(low, high, j, FEWEST_INTERVALS))?);
        }
        let mut intervals = FEWEST_INTERVALS;
        while intervals < MOST_INTERVALS {
            let mut all_close = true;
            let mut finer = Vec::with_capacity(2 * intervals + 1);
            for (j, row) in piece.rows.iter().enumerate() {
                finer.push(row.clone());
                if j < intervals {
                    let x = node(low, high, 2 * j + 1, 2 * intervals);
                    let exact = self.call(x)?;
                    all_close = all_close && (self.source.is_close)(&exact, &piece.at(x));
                    finer.push(exact);
                }
            }
            piece.rows = finer;
            intervals *= 2;
            if all_close {
                return Some(piece);
            }
        }
        None
    }
}

/// Returns Chebyshev point j of n intervals, `low` first.
fn node(low: f64, high: f64, j: usize, intervals: usize) -> f64 {
    match j {
        0 => low,
        j if j == intervals => high,
        j => f64::midpoint(low, high) - (high - low) / 2.0 * (PI * j as f64 / intervals as f64).cos(),
    }
}

impl Piece {
    /// Returns the interpolant by the second barycentric form, whose weights are ±1 with halves at the ends.
    fn at(&self, x: f64) -> Vec<f64> {
        let intervals = self.rows.len() - 1;
        let mut values = vec![0.0; self.rows[0].len()];
        let mut whole = 0.0;
        for (j, row) in self.rows.iter().enumerate() {
            let distance = x - node(self.low, self.high, j, intervals);
            if distance == 0.0 {
                return row.clone();
            }
            let size = if j == 0 || j == intervals { 0.5 } else { 1.0 };
            let weight = if j % 2 == 0 { size } else { -size } / distance;
            whole += weight;
            values.iter_mut().zip(row).for_each(|(value, own)| *value += weight * own);
        }
        values.iter_mut().for_each(|value| *value /= whole);
        values
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    fn close(exact: &[f64], found: &[f64]) -> bool {
        exact.iter().zip(found).all(|(a, b)| (a - b).abs() <= 1e-9 * a.abs())
    }

    #[test]
    fn agrees_with_the_function_everywhere() {
        let function = |x: f64| Some(vec![x.ln(), (x / 30.0).sin() + 2.0, 1.0]);
        let source = TableSource { function: &function, is_close: &close, most_calls: 1000 };
        let table = SmoothTable::new(&[80.0, 104.0], &source);
        let mut checked = 0;
        for i in 0..=1000 {
            let x = 80.0 + 24.0 * f64::from(i) / 1000.0;
            assert!(close(&function(x).unwrap(), &table.at(x).unwrap()), "{x}");
            checked += 1;
        }
        assert_eq!(checked, 1001);
        assert!(table.at(79.9).is_none() && table.at(104.1).is_none());
    }

    #[test]
    fn a_kink_is_left_to_the_direct_route_and_the_rest_is_not() {
        let function = |x: f64| Some(vec![1.0 + (x - 1.0 / 3.0).abs()]);
        let source = TableSource { function: &function, is_close: &close, most_calls: 10_000 };
        let table = SmoothTable::new(&[0.0, 1.0], &source);
        assert!(table.at(1.0 / 3.0).is_none());
        for x in [0.0, 0.1, 0.3, 0.4, 0.9, 1.0] {
            assert!((table.at(x).unwrap()[0] - 1.0 - (x - 1.0 / 3.0).abs()).abs() < 1e-9, "{x}");
        }
        // With the kink among the breaks nothing is left out.
        assert!(SmoothTable::new(&[0.0, 1.0 / 3.0, 1.0], &source).at(1.0 / 3.0).is_some());
    }

    #[test]
    fn calls_are_bounded() {
        let calls = std::cell::Cell::new(0usize);
        let function = |x: f64| {
            calls.set(calls.get() + 1);
            Some(vec![(x * 1e6).sin()])
        };
        let source = TableSource { function: &function, is_close: &close, most_calls: 100 };
        assert!(SmoothTable::new(&[0.0, 1.0], &source).at(0.5).is_none());
        assert!(calls.get() < 200, "{}", calls.get());
    }
}
