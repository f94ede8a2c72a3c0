//! How much each point of a window weighs in a fit: a bin's mean of many readings is known better
//! than one of few.

use crate::drift::serial::count;
use crate::watch::window::Point;

/// The heaviest point weighs at most so many times the lightest: what is left of the scatter between
/// bins is an estimate, and where it comes out too small a few full bins must not decide alone (own
/// rule).
pub const WEIGHT_RATIO_MAX: f64 = 100.0;

/// Below this ratio of the heaviest to the lightest, weights change nothing worth having (own rule).
const WEIGHT_RATIO_MIN: f64 = 1.1;

/// Returns the weight of each point, their mean 1.
///
/// w_i ∝ 1/(σ_b² + s_w²/m_i), with m_i the readings of point i; s_w² = Σ (m_i − 1) s_i² / Σ (m_i − 1), the
/// variance of a reading within its bin, unit²; σ_b² = max(0, v − s_w² · mean(1/m_i)), the variance of
/// bins beyond that, unit²; v the residual variance of points, unit².
///
/// # Arguments
/// `points` — the window; `residual_sd` — standard deviation of its points about a curve, all points
/// alike, in the channel's unit; None: no curve yet.
///
/// # Outcomes
/// None, for all points weigh alike: without a curve; where all counts are alike, or no bin holds two
/// readings that differ; where the heaviest weighs less than 1.1 times the lightest; where a number is
/// not finite. No point weighs less than 1/100 of the heaviest.
///
/// # Source
/// Inverse-variance weighting: Aitken (1935), Proceedings of the Royal Society of Edinburgh 55. From
/// memory.
pub fn weights<'a>(
    points: impl Iterator<Item = &'a Point> + Clone,
    residual_sd: Option<f64>,
) -> Option<Vec<f64>> {
    let residual_sd = residual_sd?;
    let (mut squares, mut freedom, mut reciprocals, mut n) = (0.0, 0.0, 0.0, 0_usize);
    for point in points.clone() {
        let further = f64::from(point.count.max(1) - 1);
        squares += further * point.spread * point.spread;
        freedom += further;
        reciprocals += f64::from(point.count.max(1)).recip();
        n += 1;
    }
    let within = squares / freedom;
    if !(within.is_finite() && within > 0.0 && residual_sd.is_finite()) {
        return None;
    }
    let between = (residual_sd * residual_sd - within * reciprocals / count(n)).max(0.0);
    let variance = |point: &Point| between + within / f64::from(point.count.max(1));
    let largest = points.clone().map(variance).fold(0.0, f64::max);
    let smallest = points.clone().map(variance).fold(f64::INFINITY, f64::min);
    if !(largest.is_finite() && largest >= WEIGHT_RATIO_MIN * smallest) {
        return None;
    }
    let floor = largest / WEIGHT_RATIO_MAX;
    // Shares of the largest variance: no reciprocal overflows.
    let mut weights: Vec<f64> = points.map(|p| largest / variance(p).max(floor)).collect();
    let mean = weights.iter().sum::<f64>() / count(n);
    weights.iter_mut().for_each(|w| *w /= mean);
    Some(weights)
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::watch::time::EventTime;

    /// The weights of points of (readings, spread).
    fn check(points: &[(u32, f64)], residual_sd: Option<f64>) -> Option<Vec<f64>> {
        let points: Vec<Point> = points
            .iter()
            .enumerate()
            .map(|(i, &(count, spread))| Point {
                time: EventTime(i as i64),
                mean: 1.0,
                count,
                spread,
            })
            .collect();
        weights(points.iter(), residual_sd)
    }

    fn close(got: Option<Vec<f64>>, want: &[f64]) {
        let got = got.unwrap();
        assert_eq!(got.len(), want.len());
        assert!(got.iter().zip(want).all(|(a, b)| (a - b).abs() < 1e-12), "{got:?}, {want:?}");
    }

    #[test]
    fn weights_are_reciprocal_variances_of_mean_one() {
        // By hand. s_w² = (3·4 + 0)/3 = 4; mean(1/m) = (1/4 + 1)/2 = 0.625; s_w² times that 2.5.
        // v = 2.5: σ_b² = 0, variances 1 and 4, weights 4 : 1.
        close(check(&[(4, 2.0), (1, 0.0)], Some(2.5_f64.sqrt())), &[1.6, 0.4]);
        // v = 4.5: σ_b² = 2, variances 3 and 6, weights 2 : 1.
        close(check(&[(4, 2.0), (1, 0.0)], Some(4.5_f64.sqrt())), &[4.0 / 3.0, 2.0 / 3.0]);
        // v below what the readings alone explain: as with σ_b² = 0.
        close(check(&[(4, 2.0), (1, 0.0)], Some(0.1)), &[1.6, 0.4]);
        // Pooled: (1·1 + 3·5)/4 = 4.
        close(check(&[(2, 1.0), (4, 5.0_f64.sqrt())], Some(0.0)), &[2.0 / 3.0, 4.0 / 3.0]);
    }

    #[test]
    fn points_alike_have_no_weights() {
        assert_eq!(check(&[(50, 1.0); 30], Some(0.3)), None);
        assert_eq!(check(&[(1, 0.0); 30], Some(0.3)), None);
        // 50 and 51 readings: a ratio of 1.02 at most.
        assert_eq!(check(&[(50, 1.0), (51, 1.0)], Some(0.0)), None);
        // Bins differ by much more than their readings do: 1 + 0.01 against 1 + 0.0001.
        assert_eq!(check(&[(1, 0.0), (100, 0.1)], Some(1.0)), None);
    }

    #[test]
    fn without_a_curve_there_are_no_weights() {
        assert_eq!(check(&[(1, 0.0), (100, 1.0)], None), None);
    }

    #[test]
    fn a_bin_of_one_reading_among_bins_of_100_weighs_less() {
        let mut points = vec![(100, 1.0); 20];
        points[7] = (1, 0.0);
        let weights = check(&points, Some(0.3)).unwrap();
        assert!((0..20).all(|i| i == 7 || weights[i] > 5.0 * weights[7]), "{weights:?}");
    }

    #[test]
    fn no_point_weighs_less_than_a_hundredth_of_the_heaviest() {
        let weights = check(&[(1, 0.0), (u32::MAX, 1.0), (3, 2.0)], Some(0.0)).unwrap();
        assert!((weights[1] / weights[0] - WEIGHT_RATIO_MAX).abs() < 1e-9, "{weights:?}");
    }

    proptest::proptest! {
        #[test]
        fn weights_are_finite_above_zero_and_of_mean_one(
            points in proptest::collection::vec((0_u32..200, -1e-3_f64..1e6), 0..40),
            residual_sd in proptest::option::of(proptest::num::f64::ANY),
        ) {
            if let Some(weights) = check(&points, residual_sd) {
                let most = weights.iter().copied().fold(0.0, f64::max);
                let ok = weights.iter().all(|w| w.is_finite() && *w * 100.01 >= most && *w > 0.0);
                proptest::prop_assert!(ok, "{:?}", weights);
                let mean = weights.iter().sum::<f64>() / weights.len() as f64;
                proptest::prop_assert!((mean - 1.0).abs() < 1e-9, "{mean}");
            }
        }

        #[test]
        fn spreads_that_are_no_numbers_give_no_weights(spread in proptest::num::f64::ANY) {
            let weights = check(&[(1, 0.0), (9, spread)], Some(1.0));
            proptest::prop_assert!(weights.is_none_or(|w| w.iter().all(|w| w.is_finite())));
        }
    }
}
