//! The instruments of the made-up site "saltmarsh" and what befalls each of them: one line of honest
//! drift, at most one story. `README.md` beside this file tells the same in words.

use crate::noise::{Noise, Random};

/// Change it, and every reading changes.
const SEED: u64 = 0x5a17_3a25_4e11_2026;

/// All instruments were calibrated at this time, unless they came later: age zero.
pub const CALIBRATED: &str = "2025-10-31T08:00:00Z";
/// The first and the last moment of the history.
pub const FROM: &str = "2025-11-01T00:00:00Z";
pub const UNTIL: &str = "2026-10-31T23:59:59Z";

const HOUR_S: i64 = 3_600;
const DAY_S: f64 = 86_400.0;

/// What a broken transmitter sends in place of a number.
const GARBAGE: [&str; 5] = ["nan", "", "#ERR", "over range", "1e999"];

/// Honest drift: deviation in the instrument's unit against age x in days.
#[derive(Clone, Copy)]
pub enum Drift {
    /// a + b ln x
    Logarithmic { a: f64, b: f64 },
    /// a x^b
    Power { a: f64, b: f64 },
    /// a + b x
    Straight { a: f64, b: f64 },
}

impl Drift {
    fn at(self, x: f64) -> f64 {
        match self {
            Drift::Logarithmic { a, b } => a + b * x.ln(),
            Drift::Power { a, b } => a * x.powf(b),
            Drift::Straight { a, b } => a + b * x,
        }
    }
}

/// What happens to an instrument besides honest drift. Times are RFC 3339; sizes are in its unit.
#[derive(Clone, Copy)]
pub enum Story {
    /// Nothing.
    Honest,
    /// A jump of `size` at `at`.
    Knock { at: &'static str, size: f64 },
    /// From `at` on, `extra` more drift a day.
    NewRate { at: &'static str, extra: f64 },
    /// A daily cycle, coming up within ten days of `from` and gone at `until`.
    DailyCycle { from: &'static str, until: &'static str, amplitude: f64 },
    /// Noise grows over 20 days from `from` to `times` its size.
    Noisier { from: &'static str, times: f64 },
    /// From `from` on the noise keeps its size but hangs together: correlation `phi` at one step.
    Dependent { from: &'static str, phi: f64 },
    /// The last reading comes before `at`.
    Dies { at: &'static str },
    /// The first reading comes at `at`, right after a calibration of its own.
    Installed { at: &'static str, calibrated: &'static str },
    /// One reading in so many is no number.
    Garbage { one_in: u64 },
}

/// One instrument of the site.
pub struct Instrument {
    pub channel: &'static str,
    /// Hours between readings.
    pub every_h: i64,
    pub decimals: usize,
    pub drift: Drift,
    /// Standard deviation of the noise about the drift, in the instrument's unit.
    pub sigma: f64,
    /// Correlation of the noise between neighbouring readings.
    pub phi: f64,
    pub story: Story,
}

const fn instrument(
    channel: &'static str,
    every_h: i64,
    decimals: usize,
    drift: Drift,
    (sigma, phi): (f64, f64),
    story: Story,
) -> Instrument {
    Instrument { channel, every_h, decimals, drift, sigma, phi, story }
}

/// Every instrument of the site.
pub const INSTRUMENTS: [Instrument; 15] = {
    use Drift::{Logarithmic, Power, Straight};
    use Story::{DailyCycle, Dependent, Dies, Garbage, Honest, Installed, Knock, NewRate, Noisier};
    let pump_changed = "2026-02-17T10:00:00Z";
    [
        instrument("press.PT-4103", 3, 4, Logarithmic { a: 0.010, b: 0.016 }, (0.010, 0.3), Honest),
        instrument(
            "press.PT-4107",
            3,
            4,
            Logarithmic { a: 0.006, b: 0.013 },
            (0.012, 0.3),
            Knock { at: "2026-04-14T22:00:00Z", size: 0.06 },
        ),
        instrument("press.PT-4112", 3, 4, Power { a: 0.008, b: 0.5 }, (0.004, 0.25), Honest),
        instrument("flow.FT-2201", 3, 3, Straight { a: 0.15, b: 0.0020 }, (0.06, 0.3), Honest),
        instrument(
            "flow.FT-2204",
            3,
            3,
            Straight { a: 0.10, b: 0.0010 },
            (0.05, 0.25),
            NewRate { at: pump_changed, extra: 0.004 },
        ),
        instrument(
            "temp.TT-3302",
            1,
            3,
            Logarithmic { a: 0.02, b: 0.030 },
            (0.020, 0.4),
            DailyCycle {
                from: "2026-06-20T00:00:00Z",
                until: "2026-09-20T00:00:00Z",
                amplitude: 0.030,
            },
        ),
        instrument("temp.TT-3305", 2, 3, Straight { a: 0.03, b: 0.0006 }, (0.018, 0.3), Honest),
        instrument("cond.CT-5101", 3, 2, Logarithmic { a: 0.8, b: 0.9 }, (0.5, 0.25), Honest),
        instrument(
            "cond.CT-5104",
            3,
            2,
            Power { a: 0.30, b: 0.5 },
            (0.4, 0.3),
            Noisier { from: "2026-06-10T00:00:00Z", times: 3.0 },
        ),
        instrument(
            "level.LT-6102",
            3,
            2,
            Straight { a: 1.0, b: 0.015 },
            (0.6, 0.3),
            Dies { at: "2026-08-09T14:00:00Z" },
        ),
        instrument(
            "level.LT-6105",
            6,
            2,
            Logarithmic { a: 1.2, b: 0.8 },
            (0.5, 0.2),
            Garbage { one_in: 60 },
        ),
        // Reaches the tolerance of 0.2 at age 335 d: on 2026-10-01.
        instrument("dose.AT-7103", 3, 4, Power { a: 0.006_11, b: 0.6 }, (0.003, 0.3), Honest),
        instrument(
            "dose.AT-7106",
            3,
            4,
            Logarithmic { a: 0.020, b: 0.010 },
            (0.004, 0.25),
            Dependent { from: "2026-05-20T00:00:00Z", phi: 0.95 },
        ),
        instrument("brine.DT-8101", 6, 3, Power { a: 0.09, b: 0.5 }, (0.05, 0.2), Honest),
        instrument(
            "product.QT-9102",
            3,
            4,
            Logarithmic { a: 0.030, b: 0.020 },
            (0.012, 0.3),
            Installed { at: "2026-05-12T12:00:00Z", calibrated: "2026-05-12T09:00:00Z" },
        ),
    ]
};

/// One row of the history; `value` is text because some of it is garbage.
pub struct Row {
    pub time_s: i64,
    pub channel: &'static str,
    pub value: String,
}

/// Returns the whole history, ordered by time, then by place in [`INSTRUMENTS`].
pub fn history() -> Vec<Row> {
    let mut rows: Vec<(usize, Row)> = Vec::new();
    for (place, instrument) in INSTRUMENTS.iter().enumerate() {
        rows.extend(readings(place, instrument).into_iter().map(|row| (place, row)));
    }
    rows.sort_by_key(|(place, row)| (row.time_s, *place));
    rows.into_iter().map(|(_, row)| row).collect()
}

fn readings(place: usize, instrument: &Instrument) -> Vec<Row> {
    let mut random = Random::named(SEED, instrument.channel);
    let mut noise = Noise::new(Random::new(random.bits()));
    let (first, last, age_zero) = match instrument.story {
        Story::Dies { at } => (seconds(FROM), seconds(at) - 1, seconds(CALIBRATED)),
        Story::Installed { at, calibrated } => (seconds(at), seconds(UNTIL), seconds(calibrated)),
        _ => (seconds(FROM), seconds(UNTIL), seconds(CALIBRATED)),
    };
    // Each instrument reads at its own minute of the hour, as they do where nobody lined them up.
    let mut time_s = first + 180 * i64::try_from(place).expect("fifteen instruments");
    let mut rows = Vec::new();
    while time_s <= last {
        let garbage = match instrument.story {
            Story::Garbage { one_in } if random.below(one_in) == 0 => {
                Some(random.below(5) as usize)
            }
            _ => None,
        };
        let y = deviation(instrument, time_s, age_zero, &mut noise);
        let value = garbage.map_or_else(
            || format!("{y:.decimals$}", decimals = instrument.decimals),
            |which| GARBAGE[which].to_owned(),
        );
        rows.push(Row { time_s, channel: instrument.channel, value });
        time_s += instrument.every_h * HOUR_S;
    }
    rows
}

/// Returns one reading: drift, noise and story. The noise takes one step per call.
fn deviation(instrument: &Instrument, time_s: i64, age_zero_s: i64, noise: &mut Noise) -> f64 {
    let days_past = |t: &str| (time_s - seconds(t)) as f64 / DAY_S;
    let (mut sigma, mut phi, mut extra) = (instrument.sigma, instrument.phi, 0.0);
    match instrument.story {
        Story::Knock { at, size } if days_past(at) >= 0.0 => extra = size,
        Story::NewRate { at, extra: rate } => extra = rate * days_past(at).max(0.0),
        Story::DailyCycle { from, until, amplitude } if days_past(until) < 0.0 => {
            let grown = (days_past(from) / 10.0).clamp(0.0, 1.0);
            let day = time_s.rem_euclid(86_400) as f64 / DAY_S;
            // Highest in the afternoon, at 15:00.
            extra = amplitude * grown * (std::f64::consts::TAU * (day - 0.625)).cos();
        }
        Story::Noisier { from, times } => {
            sigma *= 1.0 + (times - 1.0) * (days_past(from) / 20.0).clamp(0.0, 1.0);
        }
        Story::Dependent { from, phi: then } if days_past(from) >= 0.0 => phi = then,
        _ => {}
    }
    let age_d = (time_s - age_zero_s) as f64 / DAY_S;
    instrument.drift.at(age_d) + extra + sigma * noise.next(phi)
}

/// Returns a time of the tables above as seconds since the Unix epoch.
pub fn seconds(rfc3339: &str) -> i64 {
    rfc3339.parse::<jiff::Timestamp>().expect("times in this file are RFC 3339").as_second()
}
