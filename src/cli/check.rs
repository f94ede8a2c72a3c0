//! `asfound check`: are these settings good, and what do they mean?
//!
//! Nothing is started and nothing is changed. What holds goes to the output, what is wrong to the
//! error output.

use crate::service::clock;
use crate::service::settings::{Environment, Settings};
use crate::service::shown::Shown;
use std::io::{self, Write};
use std::path::PathBuf;

/// Exit code: done.
pub const EXIT_DONE: u8 = 0;
/// Exit code: failed while running.
pub const EXIT_FAILED: u8 = 1;
/// Exit code: wrong use or wrong settings; nothing was started or changed.
pub const EXIT_WRONG_USE: u8 = 2;

/// Read settings, report all problems, show what holds
#[derive(clap::Args, Clone, Debug)]
pub struct CheckArgs {
    /// The settings file (TOML)
    #[arg(long, value_name = "FILE")]
    pub config: PathBuf,
    /// Also try the broker, the grant of each subscription, and the store
    #[arg(long)]
    pub connect: bool,
}

/// One thing that `--connect` tried.
#[derive(Clone, Debug, PartialEq, Eq)]
pub struct Trial {
    /// What was tried, such as `broker mqtt://127.0.0.1:1883` or `subscription plant/+/+/deviation`.
    pub what: String,
    /// What was found, or what is wrong; one sentence without full stop. May hold foreign text.
    pub outcome: Result<String, String>,
}

/// Checks settings and says what was found. Returns the exit code.
///
/// # Arguments
/// `args` — the command's options; `environment` — what to lay over the file; `budget` — says what
/// the budget of false alerts means for these settings; `connect` — tries the outside, called only
/// with `--connect`; `out`, `err` — where to write.
///
/// # Outcomes
/// 0: the settings are good and each trial went well. 1: a trial failed, or the output cannot be
/// written. 2: the settings have problems.
pub fn check(
    args: &CheckArgs,
    environment: &Environment,
    budget: impl FnOnce(&Settings) -> String,
    connect: impl FnOnce(&Settings) -> Vec<Trial>,
    out: &mut dyn Write,
    err: &mut dyn Write,
) -> u8 {
    let written = match Settings::load(&args.config, environment) {
        Ok(settings) => report(&settings, args, budget, connect, out, err),
        Err(error) => writeln!(err, "{error}").map(|()| EXIT_WRONG_USE),
    };
    // A reader that went away, such as `head`, is no reason for words that nobody sees.
    written.unwrap_or(EXIT_FAILED)
}

fn report(
    settings: &Settings,
    args: &CheckArgs,
    budget: impl FnOnce(&Settings) -> String,
    connect: impl FnOnce(&Settings) -> Vec<Trial>,
    out: &mut dyn Write,
    err: &mut dyn Write,
) -> io::Result<u8> {
    write!(out, "{}", settings.shown())?;
    let budget = budget(settings);
    if !budget.is_empty() {
        writeln!(out)?;
    }
    for line in budget.lines() {
        writeln!(out, "# {line}")?;
    }
    for caution in settings.cautions(clock::now()) {
        writeln!(err, "caution: {caution}")?;
    }
    let mut code = EXIT_DONE;
    for trial in if args.connect { connect(settings) } else { Vec::new() } {
        let what = Shown(&trial.what, 120);
        match &trial.outcome {
            Ok(found) => writeln!(err, "good: {what}: {}", Shown(found, 400))?,
            Err(wrong) => {
                code = EXIT_FAILED;
                writeln!(err, "wrong: {what}: {}", Shown(wrong, 400))?;
            }
        }
    }
    Ok(code)
}

#[cfg(test)]
mod tests {
    use super::*;

    const GOOD: &str = "site.name = \"saltmarsh\"\nbroker.url = \"mqtt://broker.example\"\n\
                        [[watch]]\ntopic = \"plant/{tag}\"\nunit = \"bar\"\n";

    fn run(text: &str, connect: bool, trials: Vec<Trial>) -> (u8, String, String) {
        let folder = tempfile::tempdir().unwrap();
        let config = folder.path().join("asfound.toml");
        std::fs::write(&config, text).unwrap();
        let (mut out, mut err) = (Vec::new(), Vec::new());
        let budget = |s: &Settings| format!("{} alerts a year", s.site.false_alerts_per_year);
        let code = check(
            &CheckArgs { config, connect },
            &Environment::default(),
            budget,
            |_| trials,
            &mut out,
            &mut err,
        );
        let folder = format!("{}/", folder.path().display());
        let text = |bytes| String::from_utf8(bytes).unwrap().replace(&folder, "");
        (code, text(out), text(err))
    }

    #[test]
    fn good_settings_are_shown_with_what_the_budget_means() {
        let (code, out, err) = run(GOOD, false, Vec::new());
        assert_eq!(code, EXIT_DONE);
        assert!(out.starts_with("[site]\nname = \"saltmarsh\"\n"), "{out}");
        assert!(out.ends_with("\n\n# 12 alerts a year\n"), "{out}");
        let caution = "caution: the connection to broker.example is not encrypted: \
                       readings can be read and changed on the way\n";
        assert_eq!(err, caution);
    }

    #[test]
    fn problems_go_to_the_error_output_with_exit_code_2() {
        let (code, out, err) =
            run(&GOOD.replace("unit = \"bar\"", "unti = \"bar\""), true, Vec::new());
        assert_eq!((code, out.as_str()), (EXIT_WRONG_USE, ""));
        assert!(err.starts_with("asfound.toml:3: watch[1].unit: missing"), "{err}");
        assert!(
            err.contains("asfound.toml:5: watch[1].unti: unknown key, did you mean `unit`?"),
            "{err}"
        );
    }

    #[test]
    fn a_failed_trial_gives_exit_code_1_and_stays_one_line() {
        let trial = |outcome| Trial { what: "broker".to_owned(), outcome };
        let trials =
            vec![trial(Ok("connected".to_owned())), trial(Err("denied\n\u{1b}[2J".to_owned()))];
        let (code, _, err) = run(GOOD, true, trials.clone());
        assert_eq!(code, EXIT_FAILED);
        assert!(
            err.ends_with("good: broker: connected\nwrong: broker: denied\\n\\u{1b}[2J\n"),
            "{err}"
        );
        let (code, _, err) = run(GOOD, false, trials);
        assert_eq!((code, err.contains("broker: connected")), (EXIT_DONE, false));
    }

    #[test]
    fn a_missing_file_is_wrong_use() {
        let args = CheckArgs { config: "no/such/file.toml".into(), connect: false };
        let mut err = Vec::new();
        let code = check(
            &args,
            &Environment::default(),
            |_| String::new(),
            |_| Vec::new(),
            &mut Vec::new(),
            &mut err,
        );
        assert_eq!(code, EXIT_WRONG_USE);
        let err = String::from_utf8(err).unwrap();
        assert!(err.starts_with("cannot read the settings file no/such/file.toml: "), "{err}");
    }
}
