//! Made-up histories of drift: a logarithmic curve, noise that remembers, and knocks.

use crate::common::client::Message;
use std::fmt::Write;

/// 2025-01-01T00:00:00Z in seconds since 1970: age 0 in the settings of the tests.
pub const AGE_ZERO_S: i64 = 1_735_689_600;
/// From one reading of a channel to the next, seconds.
pub const SPACING_S: i64 = 6 * 3600;
/// Standard deviation of the noise's innovations, bar.
const NOISE_SD: f64 = 0.02;
/// How much of the noise stays from one reading to the next.
const NOISE_MEMORY: f64 = 0.3;

/// One reading of one channel.
#[derive(Clone, Debug, PartialEq)]
pub struct Reading {
    /// Where the instrument is.
    pub area: &'static str,
    /// Its tag.
    pub tag: &'static str,
    /// When, seconds since 1970.
    pub time_s: i64,
    /// Deviation, bar.
    pub value: f64,
}

impl Reading {
    /// Where it is published.
    pub fn topic(&self) -> String {
        format!("plant/{}/{}/deviation", self.area, self.tag)
    }

    /// As its gateway publishes it.
    pub fn message(&self) -> Message {
        let (value, time) = (self.value, self.time());
        Message::new(self.topic(), format!(r#"{{"v":{value},"ts":"{time}"}}"#))
    }

    fn time(&self) -> String {
        let time = jiff::Timestamp::from_second(self.time_s).expect("a time of our age");
        time.to_string()
    }
}

/// Three instruments, one after the other at each time: one knocked by 0.2 bar after `n / 2`
/// readings, one that drifts as it should, one whose knock of -0.15 bar comes after `n / 3`.
pub fn three_instruments(seed: u64, n: usize) -> Vec<Reading> {
    println!("seed {seed}");
    let mut random = fastrand::Rng::with_seed(seed);
    let knocks = [
        ("press", "PT-4107", n / 2, 0.2),
        ("press", "PT-4108", n, 0.0),
        ("kiln", "PT-7", n / 3, -0.15),
    ];
    let mut noise = [0.0; 3];
    let mut readings = Vec::with_capacity(3 * n);
    for i in 0..n {
        for ((area, tag, from, size), noise) in knocks.iter().zip(&mut noise) {
            *noise = NOISE_MEMORY * *noise + NOISE_SD * gaussian(&mut random);
            let time_s = AGE_ZERO_S + (i as i64 + 1) * SPACING_S;
            let age_d = (i as f64 + 1.0) * SPACING_S as f64 / 86_400.0;
            let knock = if i >= *from { *size } else { 0.0 };
            let value = 0.5 * age_d.ln() + *noise + knock;
            readings.push(Reading { area, tag, time_s, value });
        }
    }
    readings
}

/// The sum of twelve uniform numbers, less its mean: near enough to a Gaussian here.
fn gaussian(random: &mut fastrand::Rng) -> f64 {
    (0..12).map(|_| random.f64()).sum::<f64>() - 6.0
}

/// The messages that an instrument's gateway would publish.
pub fn messages(readings: &[Reading]) -> Vec<Message> {
    readings.iter().map(Reading::message).collect()
}

/// The same readings as a table for `replay`.
pub fn csv(readings: &[Reading]) -> String {
    let mut table = "time,channel,value\n".to_owned();
    for r in readings {
        writeln!(table, "{},{}.{},{}", r.time(), r.area, r.tag, r.value).expect("text");
    }
    table
}
