//! Seeded made-up series for the tests: of this folder, the budget, the forecast and the engine.

use crate::drift::family::{Coefficients, Family};

/// How the ages of a made-up series are spaced.
#[derive(Clone, Copy, Debug)]
pub(crate) enum Sampling {
    Even,
    /// Exponential gaps: a Poisson stream of readings.
    Uneven,
}

/// splitmix64 with Box–Muller on top.
pub(crate) struct Noise {
    state: u64,
    spare: Option<f64>,
}

impl Noise {
    pub(crate) fn new(seed: u64) -> Noise {
        Noise { state: seed, spare: None }
    }

    /// Uniform in (0, 1).
    pub(crate) fn uniform(&mut self) -> f64 {
        self.state = self.state.wrapping_add(0x9E37_79B9_7F4A_7C15);
        let mut z = self.state;
        z = (z ^ (z >> 30)).wrapping_mul(0xBF58_476D_1CE4_E5B9);
        z = (z ^ (z >> 27)).wrapping_mul(0x94D0_49BB_1331_11EB);
        z ^= z >> 31;
        ((z >> 11) as f64 + 0.5) / (1_u64 << 53) as f64
    }

    pub(crate) fn normal(&mut self) -> f64 {
        if let Some(v) = self.spare.take() {
            return v;
        }
        let r = (-2.0 * self.uniform().ln()).sqrt();
        let angle = 2.0 * std::f64::consts::PI * self.uniform();
        self.spare = Some(r * angle.sin());
        r * angle.cos()
    }

    /// Ages of n points with mean spacing `gap`, the first at n/10 gaps.
    pub(crate) fn ages(&mut self, n: usize, gap: f64, sampling: Sampling) -> Vec<f64> {
        let mut x = 0.1 * n as f64 * gap;
        let mut out = Vec::with_capacity(n);
        for _ in 0..n {
            out.push(x);
            x += match sampling {
                Sampling::Even => gap,
                Sampling::Uneven => -gap * self.uniform().ln(),
            };
        }
        out
    }

    /// Unit noise with correlation rho at a spacing of 1.
    pub(crate) fn dependent(&mut self, spacing: &[f64], rho: f64) -> Vec<f64> {
        let mut last = self.normal();
        let mut out = vec![last];
        for r in &spacing[1..] {
            let f = if rho > 0.0 { rho.powf(*r) } else { 0.0 };
            last = f * last + (1.0 - f * f).sqrt() * self.normal();
            out.push(last);
        }
        out
    }
}

/// n values of unit noise whose neighbours are correlated by `phi`, evenly spaced.
pub(crate) fn noise(seed: u64, n: usize, phi: f64) -> Vec<f64> {
    println!("seed {seed}");
    Noise::new(seed).dependent(&vec![1.0; n], phi)
}

/// Least squares for the families that are linear in their coefficients.
pub(crate) fn least_squares(family: Family, x: &[f64], y: &[f64]) -> Coefficients {
    assert!(family.is_linear_in_coefficients());
    let p = family.parameter_count();
    let mut h = [[0.0; super::small::ORDER_MAX]; super::small::ORDER_MAX];
    let mut g = [0.0; super::small::ORDER_MAX];
    for (&x, &y) in x.iter().zip(y) {
        let row = family.gradient(&[0.0; 4], x);
        for a in 0..p {
            g[a] += row[a] * y;
            for c in 0..p {
                h[a][c] += row[a] * row[c];
            }
        }
    }
    let z = super::small::solve(&h, &g, p).expect("made-up series determine their curve");
    [z[0], z[1], z[2], z[3]]
}
