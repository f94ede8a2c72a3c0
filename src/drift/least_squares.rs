//! Linear least squares for a handful of columns: QR where digits count, normal equations where
//! time does.

use crate::drift::family::{COEFFICIENTS_MAX, Coefficients};
use nalgebra::{DMatrix, DVector, Matrix4, Vector4};

/// Columns of unit length count as dependent when a diagonal entry of R falls below this.
const RANK_MIN: f64 = 1e-13;

/// A solved least-squares problem.
#[derive(Clone, Debug, PartialEq)]
pub struct Solved {
    /// The coefficients.
    pub coefficients: Coefficients,
    /// L with (AᵀA)⁻¹ = L Lᵀ, upper triangular; unused places 0.
    pub factor: Matrix4<f64>,
    /// Length of the part of the right side that the columns explain.
    pub explained: f64,
}

/// Solves min ‖A c − r‖ by QR with columns scaled to unit length. None when a column is 0 or not
/// finite, or columns are dependent.
///
/// # Arguments
/// `rows` — the rows of A, n of them, p entries used; `r` — n numbers; `p` — columns, p ≤ n.
///
/// # Numerics
/// Householder reflections of nalgebra, O(n p²).
pub fn solve(rows: &[Coefficients], r: &[f64], p: usize) -> Option<Solved> {
    let mut a = DMatrix::from_fn(rows.len(), p, |i, k| rows[i][k]);
    let mut scale = [1.0; COEFFICIENTS_MAX];
    for (k, mut column) in a.column_iter_mut().enumerate() {
        scale[k] = column.norm();
        if !(scale[k].is_finite() && scale[k] > 0.0) {
            return None;
        }
        column /= scale[k];
    }
    let qr = a.qr();
    let upper = qr.r();
    let smallest = (0..p).map(|k| upper[(k, k)].abs()).fold(f64::INFINITY, f64::min);
    if smallest < RANK_MIN {
        return None;
    }
    let mut right = DVector::from_column_slice(r);
    qr.q_tr_mul(&mut right);
    let right = right.rows(0, p).into_owned();
    let solution = upper.solve_upper_triangular(&right)?;
    let inverse = upper.solve_upper_triangular(&DMatrix::identity(p, p))?;
    let mut solved = Solved {
        coefficients: [0.0; COEFFICIENTS_MAX],
        factor: Matrix4::zeros(),
        explained: right.norm(),
    };
    for k in 0..p {
        solved.coefficients[k] = solution[k] / scale[k];
        for i in 0..p {
            solved.factor[(k, i)] = inverse[(k, i)] / scale[k];
        }
    }
    let finite = solved.coefficients.iter().chain(solved.factor.iter()).all(|v| v.is_finite());
    finite.then_some(solved)
}

/// Solves min ‖A c − r‖ by the normal equations, columns scaled to a largest entry of 1. None when
/// they are not positive definite. Half the digits of [`solve`], at a fraction of its cost.
pub fn solve_fast(rows: &[Coefficients], r: &[f64], p: usize) -> Option<Coefficients> {
    let mut scale = [0.0_f64; COEFFICIENTS_MAX];
    for row in rows {
        for k in 0..p {
            scale[k] = scale[k].max(row[k].abs());
        }
    }
    let (mut squares, mut right) = (Matrix4::<f64>::zeros(), Vector4::<f64>::zeros());
    for (row, &v) in rows.iter().zip(r) {
        for i in 0..p {
            let a = row[i] / scale[i];
            right[i] += a * v;
            for k in 0..=i {
                squares[(i, k)] += a * row[k] / scale[k];
            }
        }
    }
    for i in 0..COEFFICIENTS_MAX {
        if i >= p {
            squares[(i, i)] = 1.0;
        }
        for k in 0..i {
            squares[(k, i)] = squares[(i, k)];
        }
    }
    let solution = squares.cholesky()?.solve(&right);
    let mut c = [0.0; COEFFICIENTS_MAX];
    for k in 0..p {
        c[k] = solution[k] / scale[k];
    }
    c.iter().all(|v| v.is_finite()).then_some(c)
}

#[cfg(test)]
mod tests {
    use super::*;

    const ROWS: [Coefficients; 4] =
        [[1.0, 0.0, 0.0, 0.0], [1.0, 1.0, 0.0, 0.0], [1.0, 2.0, 0.0, 0.0], [1.0, 3.0, 0.0, 0.0]];

    #[test]
    fn both_ways_solve_a_line_by_hand() {
        // By hand: x̄ = 1.5, ȳ = 4, Sxy = 11, Sxx = 5: slope 2.2, intercept 0.7.
        let r = [1.0, 3.0, 4.0, 8.0];
        let exact = solve(&ROWS, &r, 2).unwrap();
        let fast = solve_fast(&ROWS, &r, 2).unwrap();
        for (got, want) in exact.coefficients.iter().zip([0.7, 2.2]) {
            assert!((got - want).abs() < 1e-14, "{exact:?}");
        }
        assert!((0..2).all(|k| (fast[k] - exact.coefficients[k]).abs() < 1e-12));
        // (AᵀA)⁻¹ = [14 −6; −6 4]/20 by hand.
        let inverse = exact.factor * exact.factor.transpose();
        assert!((inverse[(0, 0)] - 0.7).abs() < 1e-14 && (inverse[(0, 1)] + 0.3).abs() < 1e-14);
        // |r|² = 90, residuals 0.3, 0.1, −1.1, 0.7: 90 − 1.8 is explained.
        assert!((exact.explained.powi(2) - 88.2).abs() < 1e-12, "{exact:?}");
    }

    #[test]
    fn dependent_columns_are_refused() {
        let rows = ROWS.map(|row| [row[1], 2.0 * row[1], 0.0, 0.0]);
        assert_eq!(solve(&rows, &[1.0; 4], 2), None);
        assert_eq!(solve(&[[0.0; 4]; 4], &[1.0; 4], 1), None);
    }
}
