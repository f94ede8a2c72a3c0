//! Dense algebra of at most [`ORDER_MAX`] unknowns on fixed arrays: no allocation in a look.

/// Curve coefficients (4) plus two candidate columns.
pub(crate) const ORDER_MAX: usize = 6;

/// A small square matrix; only the leading p × p part is used.
pub(crate) type Matrix = [[f64; ORDER_MAX]; ORDER_MAX];

/// Solves A z = b for the leading p unknowns by elimination with row pivoting.
///
/// # Outcomes
/// `None` when a pivot vanishes against the largest entry or the result is not finite.
pub(crate) fn solve(a: &Matrix, b: &[f64; ORDER_MAX], p: usize) -> Option<[f64; ORDER_MAX]> {
    let mut m = *a;
    let mut z = *b;
    let largest = m.iter().take(p).flat_map(|r| &r[..p]).fold(0.0_f64, |v, e| v.max(e.abs()));
    for c in 0..p {
        let pivot = (c..p).max_by(|&i, &j| m[i][c].abs().total_cmp(&m[j][c].abs()))?;
        if m[pivot][c].abs() <= 1e-15 * largest {
            return None;
        }
        m.swap(c, pivot);
        z.swap(c, pivot);
        let top = m[c];
        for r in c + 1..p {
            let f = m[r][c] / top[c];
            for k in c..p {
                m[r][k] -= f * top[k];
            }
            z[r] -= f * z[c];
        }
    }
    for c in (0..p).rev() {
        for k in c + 1..p {
            z[c] -= m[c][k] * z[k];
        }
        z[c] /= m[c][c];
    }
    z[..p].iter().all(|v| v.is_finite()).then_some(z)
}

/// Returns the inverse of the leading p × p part, `None` as in [`solve`].
pub(crate) fn inverse(a: &Matrix, p: usize) -> Option<Matrix> {
    let mut out = [[0.0; ORDER_MAX]; ORDER_MAX];
    for c in 0..p {
        let mut unit = [0.0; ORDER_MAX];
        unit[c] = 1.0;
        let column = solve(a, &unit, p)?;
        for r in 0..p {
            out[r][c] = column[r];
        }
    }
    Some(out)
}

#[cfg(test)]
mod tests {
    #![allow(clippy::unwrap_used)]

    use super::*;

    #[test]
    fn inverse_multiplies_back_to_one() {
        let mut a = [[0.0; ORDER_MAX]; ORDER_MAX];
        for (i, row) in a.iter_mut().enumerate() {
            for (j, v) in row.iter_mut().enumerate() {
                *v = 1.0 / (1.0 + i as f64 + j as f64) + if i == j { 0.5 } else { 0.0 };
            }
        }
        let inv = inverse(&a, 5).unwrap();
        for i in 0..5 {
            for j in 0..5 {
                let v: f64 = (0..5).map(|k| a[i][k] * inv[k][j]).sum();
                assert!((v - f64::from(u8::from(i == j))).abs() < 1e-12);
            }
        }
    }

    #[test]
    fn singular_matrix_has_no_solution() {
        let a = [[1.0; ORDER_MAX]; ORDER_MAX];
        assert!(solve(&a, &[1.0; ORDER_MAX], 3).is_none());
    }
}
