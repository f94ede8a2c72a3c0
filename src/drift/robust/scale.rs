//! The size of noise by a median: outliers, while they are few, do not touch it.

use crate::drift::workspace::refill;

/// Winsorising limit of the robust refinement, in robust standard deviations (Huber 1981).
pub const CLIP_WINSOR: f64 = 3.0;

/// Returns 1.4826 times the median of |r|: the standard deviation of normal noise, outliers or not.
///
/// # Arguments
/// `residuals` — any unit and order; 0 of none.
///
/// # Source
/// F. R. Hampel, JASA 69, 1974, as in [`crate::drift::serial::robust_sigma`]; about 0, not the
/// median.
pub fn robust_scale(residuals: &[f64]) -> f64 {
    robust_scale_in(residuals, &mut Vec::with_capacity(residuals.len()))
}

/// The same with a buffer. The bits of numbers without a sign are in the numbers' own order.
pub(crate) fn robust_scale_in(residuals: &[f64], sizes: &mut Vec<u64>) -> f64 {
    if residuals.is_empty() {
        return 0.0;
    }
    refill(sizes, residuals.iter().map(|r| r.abs().to_bits()));
    let middle = sizes.len() / 2;
    let (_, median, _) = sizes.select_nth_unstable(middle);
    1.4826 * f64::from_bits(*median)
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn the_scale_is_the_median_size_whatever_the_outliers() {
        assert!((robust_scale(&[-1.0, 3.0, 1e9, 2.0, -0.0]) - 2.0 * 1.4826).abs() < 1e-12);
        assert!(robust_scale(&[]).abs() < f64::EPSILON);
        assert!(robust_scale(&[0.0, -0.0, 5.0]).abs() < f64::EPSILON);
    }
}
