//! Coarse readings: how coarse they are, and the dither that keeps a lattice from looking like
//! structure (six equal readings on the curve are no proof that the noise has gone).

/// Readings coarser than this fraction of their noise are dithered.
pub const DITHER_ABOVE_SIGMAS: f64 = 0.2;
/// Repeats of neighbours needed before a lattice is believed in.
const REPEATS_MIN: usize = 2;
/// Differences below this fraction of the largest |y| are rounding of arithmetic, not resolution.
const ROUNDING: f64 = 1e-12;

/// Estimates the resolution of readings: the smallest non-zero step between neighbours.
///
/// # Arguments
/// `y` — readings in time order, their own unit.
/// # Outcomes
/// `None` when fewer than two neighbours repeat, or nothing ever changes.
pub(crate) fn resolution_of(y: &[f64]) -> Option<f64> {
    let largest = y.iter().fold(0.0_f64, |m, v| m.max(v.abs()));
    let mut repeats = 0;
    let mut smallest = f64::INFINITY;
    for pair in y.windows(2) {
        let step = (pair[1] - pair[0]).abs();
        if step <= ROUNDING * largest {
            repeats += 1;
        } else {
            smallest = smallest.min(step);
        }
    }
    (repeats >= REPEATS_MIN && smallest.is_finite()).then_some(smallest)
}

/// Returns a number uniform within ± resolution/2 that depends on the point's age alone.
///
/// # Arguments
/// `x` — age of the point, days; `resolution` — in y's unit.
/// # Numerics
/// The bits of x through the finaliser of splitmix64, so that a restart or a replay finds the same
/// value; the top 53 bits make the fraction.
/// # Source
/// G. L. Steele, D. Lea and C. H. Flood, Fast splittable pseudorandom number generators, OOPSLA
/// 2014. Rectangular dither of one step: L. Schuchman, Dither signals and their effect on
/// quantization noise, IEEE Transactions on Communication Technology 12, 1964.
pub(crate) fn dither(x: f64, resolution: f64) -> f64 {
    let mut z = x.to_bits().wrapping_add(0x9E37_79B9_7F4A_7C15);
    z = (z ^ (z >> 30)).wrapping_mul(0xBF58_476D_1CE4_E5B9);
    z = (z ^ (z >> 27)).wrapping_mul(0x94D0_49BB_1331_11EB);
    z ^= z >> 31;
    let fraction = (z >> 11) as f64 / (1_u64 << 53) as f64;
    (fraction - 0.5) * resolution
}

#[cfg(test)]
mod tests {
    #![allow(clippy::unwrap_used)]

    use super::*;

    #[test]
    fn resolution_is_the_lattice_step() {
        let y: Vec<f64> = [1.0, 1.0, 1.2, 1.1, 1.1, 1.4].iter().map(|v| v - 4.01).collect();
        assert!((resolution_of(&y).unwrap() - 0.1).abs() < 1e-12);
    }

    #[test]
    fn fine_or_constant_readings_have_no_known_resolution() {
        assert_eq!(resolution_of(&[1.0, 1.1, 1.35, 1.2]), None);
        assert_eq!(resolution_of(&[2.0; 9]), None);
        assert_eq!(resolution_of(&[]), None);
    }

    #[test]
    fn dither_is_uniform_and_repeatable() {
        let d: Vec<f64> = (0..4000).map(|i| dither(f64::from(i) / 24.0, 2.0)).collect();
        let mean = d.iter().sum::<f64>() / 4000.0;
        let var = d.iter().map(|v| v * v).sum::<f64>() / 4000.0;
        assert!(d.iter().all(|v| v.abs() <= 1.0));
        // A uniform on ±1 has mean 0 (standard error .009) and variance 1/3.
        assert!(mean.abs() < 0.04 && (var - 1.0 / 3.0).abs() < 0.03, "{mean} {var}");
        let neighbours: f64 = d.windows(2).map(|w| w[0] * w[1]).sum::<f64>() / 4000.0 / var;
        assert!(neighbours.abs() < 0.06, "neighbours correlate: {neighbours}");
        assert_eq!(dither(3.25, 2.0).to_bits(), dither(3.25, 2.0).to_bits());
    }
}
