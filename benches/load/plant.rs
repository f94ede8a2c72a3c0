//! The made-up plant: its settings, and the same readings for the same seed every time.
//!
//! Every channel drifts by a logarithm under autoregressive noise; one in a hundred gets a knock.
//! All readings of a run span the same event time, however many there are: the refits and the looks
//! at residuals of a channel do not depend on rate and duration.

use crate::args::Args;
use crate::noise::{Noise, Random};
use std::collections::BTreeSet;
use std::fmt::Write as _;

/// The site's name in the settings.
pub const SITE: &str = "load";
/// 2025-01-01T00:00:00Z: past on every machine, since readings from the future are refused.
const START_US: i64 = 1_735_689_600_000_000;
/// One channel in so many is knocked.
const CHANNELS_PER_KNOCK: usize = 100;
/// When the knock comes, as part of the run: after the sixtieth point, so that the first curve
/// stands, and early enough for the next refits to see it.
const KNOCK_AT: f64 = 0.62;
/// Size of the knock, bar: eight standard deviations of the noise.
const KNOCK_BAR: f64 = 0.08;
/// Standard deviation of the noise, bar, and correlation of neighbouring readings.
const NOISE: (f64, f64) = (0.01, 0.3);
/// Drift, bar per natural logarithm of the age in days.
const DRIFT_BAR: f64 = 0.02;
/// How often the settings ask for a refit.
pub const REFIT_EVERY: &str = "1d";

/// What is published, and how the daemon is told to look at it.
#[derive(Clone, Debug)]
pub struct Plant {
    seed: u64,
    /// How many channels there are.
    pub channels: usize,
    /// Readings of each channel.
    pub rounds: u64,
    /// Event time between two readings of a channel, µs.
    pub step_us: i64,
    /// The channels that get a knock.
    pub knocked: BTreeSet<usize>,
}

/// One reading as it is published.
#[derive(Clone, Copy, Debug)]
pub struct Made {
    /// Which channel.
    pub channel: usize,
    /// Event time, µs.
    pub time_us: i64,
    /// Deviation, bar.
    pub value: f64,
}

impl Plant {
    /// The plant that these options describe; the error is one sentence for the user.
    pub fn new(args: &Args) -> Result<Plant, String> {
        let rounds = args.readings() / args.channels as u64;
        // The window's bin is an hour: fewer rounds would leave bins empty.
        if rounds < args.hours {
            return Err(format!(
                "rate × seconds / channels is {rounds}; at least one reading an hour is needed, \
                 {} in all",
                args.hours
            ));
        }
        let span_us = i64::try_from(args.hours * 3_600_000_000).expect("at most 2000 hours");
        let step_us = span_us / i64::try_from(rounds).expect("at most 360 million readings");
        let mut random = Random::named(args.seed, "knocks");
        let mut knocked = BTreeSet::new();
        while knocked.len() < args.channels.div_ceil(CHANNELS_PER_KNOCK) {
            let channel = random.below(args.channels as u64);
            knocked.insert(usize::try_from(channel).expect("below a usize"));
        }
        Ok(Plant { seed: args.seed, channels: args.channels, rounds, step_us, knocked })
    }

    /// How many readings there are.
    pub fn total(&self) -> u64 {
        self.rounds * self.channels as u64
    }

    /// All readings in the order in which they are published: round by round.
    pub fn readings(&self) -> impl Iterator<Item = Made> + use<> {
        let plant = self.clone();
        let mut noises: Vec<Noise> =
            (0..plant.channels).map(|c| Noise::new(Random::named(plant.seed, &name(c)))).collect();
        (0..plant.total()).map(move |n| {
            let (round, channel) = (n / plant.channels as u64, n % plant.channels as u64);
            let channel = usize::try_from(channel).expect("below a usize");
            let noise = noises[channel].next(NOISE.1);
            plant.made(round, channel, noise)
        })
    }

    fn made(&self, round: u64, channel: usize, noise: f64) -> Made {
        let since_us = i64::try_from(round).expect("at most 360 million readings") * self.step_us;
        let age_d = since_us as f64 / 86_400e6;
        let knock =
            self.knocked.contains(&channel) && round as f64 >= KNOCK_AT * self.rounds as f64;
        let value = DRIFT_BAR * age_d.ln_1p() + NOISE.0 * noise + f64::from(knock) * KNOCK_BAR;
        // Four places, as an instrument sends them; the zero added makes -0 a plain 0.
        Made { channel, time_us: START_US + since_us, value: (value * 1e4).round() / 1e4 + 0.0 }
    }

    /// The daemon's settings file.
    pub fn settings(&self, port: u16) -> String {
        format!(
            r#"[site]
name = "{SITE}"
[broker]
url = "mqtt://127.0.0.1:{port}"
[store]
directory = "store"
[[watch]]
topic = "load/{{tag}}/deviation"
payload = {{ format = "json", value = "/v", time = "/ts" }}
unit = "bar"
tolerance = 0.25
window = {{ span = "90d", points = 256, bin = "1h" }}
refit_every = "{REFIT_EVERY}"
look_ahead = "5d"
"#
        )
    }

    /// The same readings as a table, in the order of publication, for a replay.
    pub fn table(&self) -> String {
        let mut text = String::from("time,channel,value\n");
        for made in self.readings() {
            let Made { channel, time_us, value } = made;
            writeln!(text, "{},{},{value}", time(time_us), name(channel))
                .expect("writing to a string does not fail");
        }
        text
    }
}

impl Made {
    /// The topic it goes to.
    pub fn topic(&self) -> String {
        format!("load/{}/deviation", name(self.channel))
    }

    /// What is published.
    pub fn payload(&self) -> String {
        format!(r#"{{"v":{},"ts":"{}"}}"#, self.value, time(self.time_us))
    }
}

/// A channel's name.
pub fn name(channel: usize) -> String {
    format!("PT-{channel:05}")
}

fn time(us: i64) -> String {
    jiff::Timestamp::from_microsecond(us).expect("a time of the year 2025").to_string()
}
