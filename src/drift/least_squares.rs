//! Linear least squares for a handful of columns, by orthogonal columns.

use crate::drift::family::{COEFFICIENTS_MAX, Coefficients};
use crate::drift::lanes::{add, dot};
use crate::drift::workspace::refill;
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
pub(crate) fn solve(rows: &[Coefficients], r: &[f64], p: usize) -> Option<Solved> {
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

/// The same from columns, by Gram–Schmidt in place: no less exact, and nothing is allocated.
///
/// # Arguments
/// `columns` — p of them, of r's length; `room` — buffers, one more than columns are used.
///
/// # Source
/// Modified Gram–Schmidt with the right side as last column: Björck (1967), BIT 7. From memory.
pub(crate) fn solve_columns(
    columns: &[Vec<f64>],
    r: &[f64],
    room: &mut [Vec<f64>; COEFFICIENTS_MAX + 1],
) -> Option<Solved> {
    let p = columns.len();
    let (room, right) = room.split_at_mut(COEFFICIENTS_MAX);
    refill(&mut right[0], r.iter().copied());
    let mut scale = [1.0; COEFFICIENTS_MAX];
    for (k, column) in columns.iter().enumerate() {
        scale[k] = dot(column, column).sqrt();
        if !(scale[k].is_finite() && scale[k] > 0.0) {
            return None;
        }
        refill(&mut room[k], column.iter().map(|v| v / scale[k]));
    }
    let (mut upper, mut explained) = (Matrix4::identity(), Vector4::zeros());
    for k in 0..p {
        let (this, later) = room[k..].split_first_mut().expect("p columns");
        let length = dot(this, this).sqrt();
        if length.is_nan() || length < RANK_MIN {
            return None;
        }
        this.iter_mut().for_each(|v| *v /= length);
        upper[(k, k)] = length;
        for (j, other) in later.iter_mut().enumerate().take(p - k - 1) {
            let share = dot(this, other);
            upper[(k, k + 1 + j)] = share;
            add(other, -share, this);
        }
        explained[k] = dot(this, &right[0]);
        add(&mut right[0], -explained[k], this);
    }
    let solution = upper.solve_upper_triangular(&explained)?;
    let mut factor = upper.solve_upper_triangular(&Matrix4::identity())?;
    let mut coefficients = [0.0; COEFFICIENTS_MAX];
    for k in 0..COEFFICIENTS_MAX {
        for i in 0..COEFFICIENTS_MAX {
            factor[(k, i)] = if k < p && i < p { factor[(k, i)] / scale[k] } else { 0.0 };
        }
        coefficients[k] = solution[k] / scale[k];
    }
    let finite = coefficients.iter().chain(factor.iter()).all(|v| v.is_finite());
    finite.then(|| Solved { coefficients, factor, explained: explained.norm() })
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
        let columns = [0, 1].map(|k| ROWS.map(|row| row[k]).to_vec());
        let same = solve_columns(&columns, &r, &mut Default::default()).unwrap();
        for solved in [exact, same] {
            for (got, want) in solved.coefficients.iter().zip([0.7, 2.2]) {
                assert!((got - want).abs() < 1e-14, "{solved:?}");
            }
            // (AᵀA)⁻¹ = [14 −6; −6 4]/20 by hand.
            let inverse = solved.factor * solved.factor.transpose();
            assert!((inverse[(0, 0)] - 0.7).abs() < 1e-14 && (inverse[(0, 1)] + 0.3).abs() < 1e-14);
            // |r|² = 90, residuals 0.3, 0.1, −1.1, 0.7: 90 − 1.8 is explained.
            assert!((solved.explained.powi(2) - 88.2).abs() < 1e-12, "{solved:?}");
        }
    }

    #[test]
    fn dependent_columns_are_refused() {
        let rows = ROWS.map(|row| [row[1], 2.0 * row[1], 0.0, 0.0]);
        assert_eq!(solve(&rows, &[1.0; 4], 2), None);
        assert_eq!(solve(&[[0.0; 4]; 4], &[1.0; 4], 1), None);
        let columns = [0, 1].map(|k| rows.map(|row| row[k]).to_vec());
        assert_eq!(solve_columns(&columns, &[1.0; 4], &mut Default::default()), None);
    }
}
