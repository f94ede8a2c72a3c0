//! Sums over long slices in eight lanes: several times as fast as one running sum, and never less
//! exact. The order of additions is fixed, so the same numbers always give the same sum.

const LANES: usize = 8;

/// Returns Σ a.
///
/// # Arguments
/// `a` — numbers, any unit; 0 of none.
pub(crate) fn sum(a: &[f64]) -> f64 {
    sum_of(a, |v| v)
}

/// Returns Σ f(a).
///
/// # Arguments
/// `a` — numbers; `f` — of one number, the same at every call.
pub(crate) fn sum_of(a: &[f64], f: impl Fn(f64) -> f64) -> f64 {
    let (whole, rest) = a.as_chunks::<LANES>();
    let mut lanes = [0.0; LANES];
    for a in whole {
        for k in 0..LANES {
            lanes[k] += f(a[k]);
        }
    }
    total(&lanes) + rest.iter().map(|&v| f(v)).sum::<f64>()
}

/// Returns Σ a b.
///
/// # Arguments
/// `a`, `b` — of one length.
pub(crate) fn dot(a: &[f64], b: &[f64]) -> f64 {
    assert_eq!(a.len(), b.len(), "two columns of one length");
    let ((whole_a, rest_a), (whole_b, rest_b)) = (a.as_chunks::<LANES>(), b.as_chunks::<LANES>());
    let mut lanes = [0.0; LANES];
    for (a, b) in whole_a.iter().zip(whole_b) {
        for k in 0..LANES {
            lanes[k] += a[k] * b[k];
        }
    }
    total(&lanes) + rest_a.iter().zip(rest_b).map(|(a, b)| a * b).sum::<f64>()
}

/// Returns Σ (a − centre)² and Σ (a − centre) b.
///
/// # Arguments
/// `a`, `b` — of one length; `centre` — in a's unit.
pub(crate) fn about(a: &[f64], centre: f64, b: &[f64]) -> (f64, f64) {
    assert_eq!(a.len(), b.len(), "two columns of one length");
    let ((whole_a, rest_a), (whole_b, rest_b)) = (a.as_chunks::<LANES>(), b.as_chunks::<LANES>());
    let (mut squares, mut products) = ([0.0; LANES], [0.0; LANES]);
    for (a, b) in whole_a.iter().zip(whole_b) {
        for k in 0..LANES {
            let off = a[k] - centre;
            squares[k] += off * off;
            products[k] += off * b[k];
        }
    }
    let (mut square, mut product) = (total(&squares), total(&products));
    for (a, b) in rest_a.iter().zip(rest_b) {
        square += (a - centre) * (a - centre);
        product += (a - centre) * b;
    }
    (square, product)
}

/// Adds `times` b to a.
///
/// # Arguments
/// `a`, `b` — of one length; `times` — a factor.
pub(crate) fn add(a: &mut [f64], times: f64, b: &[f64]) {
    assert_eq!(a.len(), b.len(), "two columns of one length");
    for (a, b) in a.iter_mut().zip(b) {
        *a += times * b;
    }
}

fn total(lanes: &[f64; LANES]) -> f64 {
    let [a, b, c, d, e, f, g, h] = *lanes;
    ((a + e) + (c + g)) + ((b + f) + (d + h))
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn sums_are_those_of_whole_numbers() {
        // Whole numbers: exact in any order. Σ i = n (n − 1)/2, Σ i² = n (n − 1)(2n − 1)/6.
        for n in [0_u32, 1, 7, 8, 9, 64, 77] {
            let a: Vec<f64> = (0..n).map(f64::from).collect();
            let n = f64::from(n);
            let (first, second) = (n * (n - 1.0) / 2.0, n * (n - 1.0) * (2.0 * n - 1.0) / 6.0);
            assert!((sum(&a) - first).abs() < f64::EPSILON);
            assert!((dot(&a, &a) - second).abs() < f64::EPSILON);
            let (squares, products) = about(&a, 2.0, &a);
            assert!((squares - (second - 4.0 * first + 4.0 * n)).abs() < f64::EPSILON);
            assert!((products - (second - 2.0 * first)).abs() < f64::EPSILON);
        }
        let mut a = [1.0, 2.0, 3.0];
        add(&mut a, 2.0, &[10.0, 0.0, -1.0]);
        assert!(a.iter().zip([21.0, 2.0, 1.0]).all(|(a, want)| (a - want).abs() < f64::EPSILON));
    }
}
