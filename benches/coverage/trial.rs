//! Simulated windows, and how they are shared out among threads.

use crate::noise::{Noise, Random};
use asfound::drift::family::{Coefficients, Family};
use asfound::drift::fit::{Fit, FitOutcome, fit};

/// The window spans these ages; its unit is its own newest age.
pub const AGES: (f64, f64) = (0.05, 1.0);
/// Where statements past the window are held against the truth: 25 % beyond its end.
pub const BEYOND: f64 = 1.25;
/// The machine has at least two cores, or waits.
const THREADS: u32 = 2;

/// A drift curve and the noise about it.
#[derive(Clone, Copy, Debug)]
pub struct Truth {
    /// The curve's family, which is also the one that is fitted.
    pub family: Family,
    /// Its coefficients.
    pub theta: Coefficients,
    /// Standard deviation of the noise.
    pub sigma: f64,
    /// Correlation of neighbouring readings.
    pub rho: f64,
}

/// How a curve is fitted.
#[derive(Clone, Copy, Debug)]
pub enum Way {
    /// Plain least squares, as for a one-off table.
    Plain,
    /// As the watch does it: residuals clipped at 3 robust standard deviations.
    Robust,
}

impl Way {
    /// Both.
    pub const ALL: [Way; 2] = [Way::Plain, Way::Robust];

    /// As the tables name it.
    pub const fn name(self) -> &'static str {
        match self {
            Way::Plain => "plain",
            Way::Robust => "robust",
        }
    }
}

impl Truth {
    /// The curve without noise.
    pub fn at(&self, x: f64) -> f64 {
        self.family.value(&self.theta, x)
    }

    /// Draws the window that belongs to `seed`: ages and deviations, n of each.
    pub fn window(&self, n: u32, seed: u64) -> (Vec<f64>, Vec<f64>) {
        let mut noise = Noise::new(Random::new(seed));
        let step = (AGES.1 - AGES.0) / f64::from(n - 1);
        let ages = (0..n).map(|i| AGES.0 + step * f64::from(i));
        ages.map(|x| (x, self.at(x) + self.sigma * noise.next(self.rho))).unzip()
    }

    /// Fits the truth's own family; None where there is no curve.
    pub fn fitted(&self, x: &[f64], y: &[f64], way: Way) -> Option<Fit> {
        match fit(self.family, x, y, matches!(way, Way::Robust)) {
            FitOutcome::Fitted(fit) => Some(*fit),
            _ => None,
        }
    }
}

/// Runs `trial` once for each seed, shared out among the threads, and returns what came of each, in
/// an order that does not depend on the threads. `cell` keeps the seeds of two cells apart.
pub fn run<T: Send>(runs: u32, seed: u64, cell: &str, trial: impl Fn(u64) -> T + Sync) -> Vec<T> {
    let share = |thread: u32| {
        let mut mine = Vec::new();
        for i in (thread..runs).step_by(THREADS as usize) {
            mine.push(trial(Random::named(seed, &format!("{cell} {i}")).bits()));
        }
        mine
    };
    std::thread::scope(|scope| {
        let threads: Vec<_> =
            (0..THREADS).map(|thread| scope.spawn(move || share(thread))).collect();
        let shares = threads.into_iter().map(|thread| thread.join().expect("a trial panicked"));
        shares.flatten().collect()
    })
}
