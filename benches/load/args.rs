//! The options of the measurement, from the command line.

/// What is measured, and how hard.
#[derive(Clone, Copy, Debug)]
pub struct Args {
    /// How many channels publish.
    pub channels: usize,
    /// Readings published each second, all channels together.
    pub rate: u64,
    /// How long is published, seconds.
    pub seconds: u64,
    /// When the daemon is killed, seconds after the first reading.
    pub kill_at: Option<u64>,
    /// Event time from the first to the last round of readings, hours.
    pub hours: u64,
    /// Seed of all noise.
    pub seed: u64,
    /// Leave the run's folder behind.
    pub keep: bool,
}

/// How to call it.
pub const USAGE: &str = "usage: cargo bench --bench load -- [--channels 1000] [--rate 5000] \
                         [--seconds 60] [--kill-at S] [--hours 100] [--seed N] [--keep]";

impl Args {
    /// Reads the options; the error is one sentence for the user.
    pub fn read(words: impl Iterator<Item = String>) -> Result<Args, String> {
        let mut args = Args {
            channels: 1000,
            rate: 5000,
            seconds: 60,
            kill_at: None,
            hours: 100,
            seed: 4107,
            keep: false,
        };
        let mut words = words;
        while let Some(word) = words.next() {
            // `cargo bench` adds this one to every bench program.
            if word == "--bench" {
                continue;
            }
            if word == "--keep" {
                args.keep = true;
                continue;
            }
            let value = words
                .next()
                .and_then(|text| text.parse::<u64>().ok())
                .ok_or_else(|| format!("{word} needs a whole number; {USAGE}"))?;
            match word.as_str() {
                "--channels" => args.channels = usize::try_from(value).unwrap_or(usize::MAX),
                "--rate" => args.rate = value,
                "--seconds" => args.seconds = value,
                "--kill-at" => args.kill_at = Some(value),
                "--hours" => args.hours = value,
                "--seed" => args.seed = value,
                _ => return Err(format!("{word} is no option; {USAGE}")),
            }
        }
        let in_range = |name: &str, value: u64, max: u64| {
            let fits = (1..=max).contains(&value);
            fits.then_some(()).ok_or_else(|| format!("{name} must be 1 to {max}, not {value}"))
        };
        in_range("--channels", args.channels as u64, 100_000)?;
        in_range("--rate", args.rate, 100_000)?;
        in_range("--seconds", args.seconds, 3600)?;
        // Below, no channel has the points that residuals need to be examined and a few more for the
        // knock to be seen; above, the window's span would end.
        if !(90..=2000).contains(&args.hours) {
            return Err(format!("--hours must be 90 to 2000, not {}", args.hours));
        }
        if let Some(at) = args.kill_at {
            in_range("--kill-at", at, args.seconds)?;
        }
        Ok(args)
    }

    /// How many readings are published in all.
    pub fn readings(&self) -> u64 {
        self.rate * self.seconds
    }
}
