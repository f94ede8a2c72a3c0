//! The program as a child process: its settings, what it says, its signals and how it ends.

use crate::common::broker::{DEADLINE, signal, wait_until};
use std::io::{BufRead, BufReader, Read};
use std::path::{Path, PathBuf};
use std::process::{Child, Command, Output, Stdio};
use std::sync::{Arc, Condvar, Mutex};
use std::time::Instant;
use tempfile::TempDir;

/// Settings and store of one daemon; outlives its restarts.
pub struct Site {
    folder: TempDir,
}

impl Site {
    /// A site named saltmarsh with one watch over `plant/{area}/{tag}/deviation`.
    pub fn new(broker_port: u16) -> Site {
        let payload = r#"{ format = "json", value = "/v", time = "/ts" }"#;
        Site::with_payload(broker_port, payload)
    }

    /// The same, whose payloads are to be read so.
    pub fn with_payload(broker_port: u16, payload: &str) -> Site {
        Site::with_settings(&format!(
            r#"
[site]
name = "saltmarsh"
[broker]
url = "mqtt://127.0.0.1:{broker_port}"
[store]
directory = "store"
[alerts]
false_alerts_per_year = 0.5
[[watch]]
topic = "plant/{{area}}/{{tag}}/deviation"
channel = "{{area}}.{{tag}}"
payload = {payload}
unit = "bar"
tolerance = 4.0
window = {{ span = "90d", points = 360 }}
refit_every = "1d"
look_ahead = "20d"
calibrated = "2025-01-01T00:00:00Z"
"#
        ))
    }

    /// A site with these settings, whatever they are.
    pub fn with_settings(settings: &str) -> Site {
        let folder = TempDir::new().expect("a folder for settings and store");
        std::fs::write(folder.path().join("asfound.toml"), settings).expect("the settings");
        Site { folder }
    }

    /// The settings file.
    pub fn config(&self) -> PathBuf {
        self.folder.path().join("asfound.toml")
    }

    /// The folder of the store.
    pub fn store(&self) -> PathBuf {
        self.folder.path().join("store")
    }

    /// Puts a file beside the settings.
    pub fn file(&self, name: &str, text: &str) -> PathBuf {
        let path = self.folder.path().join(name);
        std::fs::write(&path, text).expect("a file beside the settings");
        path
    }

    /// Runs the program to its end.
    pub fn run_to_end(&self, command: &str, further: &[&Path]) -> Output {
        let mut program = program(command, &self.config());
        program.args(further).output().expect("the program starts")
    }
}

fn program(command: &str, config: &Path) -> Command {
    let mut program = Command::new(env!("CARGO_BIN_EXE_asfound"));
    // The settings are the file's alone, and the log is the usual one.
    for (name, _) in std::env::vars_os() {
        if name.to_string_lossy().starts_with("ASFOUND") {
            program.env_remove(name);
        }
    }
    program.env_remove("NOTIFY_SOCKET").arg(command).arg("--config").arg(config);
    program.stdin(Stdio::null());
    program
}

/// Lines that a child process writes.
#[derive(Default)]
pub struct Lines {
    lines: Mutex<Vec<String>>,
    more: Condvar,
}

impl Lines {
    fn of(source: impl Read + Send + 'static) -> Arc<Lines> {
        let lines: Arc<Lines> = Arc::default();
        let shared = Arc::clone(&lines);
        std::thread::spawn(move || {
            for line in BufReader::new(source).split(b'\n').map_while(Result::ok) {
                let line = String::from_utf8_lossy(&line).into_owned();
                shared.lines.lock().expect("no holder panics").push(line);
                shared.more.notify_all();
            }
        });
        lines
    }

    /// All lines so far.
    pub fn all(&self) -> Vec<String> {
        self.lines.lock().expect("no holder panics").clone()
    }

    /// The first line with `part` in it, as soon as there is one.
    pub fn wait_for(&self, part: &str) -> String {
        self.wait_for_count(part, 1)
    }

    /// The `count`-th line with `part` in it, as soon as there is one.
    pub fn wait_for_count(&self, part: &str, count: usize) -> String {
        let start = Instant::now();
        let mut lines = self.lines.lock().expect("no holder panics");
        loop {
            if let Some(line) = lines.iter().filter(|line| line.contains(part)).nth(count - 1) {
                return line.clone();
            }
            let left = DEADLINE.saturating_sub(start.elapsed());
            assert!(!left.is_zero(), "{part:?} not said within {DEADLINE:?}: {lines:#?}");
            lines = self.more.wait_timeout(lines, left).expect("no holder panics").0;
        }
    }
}

/// `asfound run`; killed with the value.
pub struct Daemon {
    child: Child,
    /// The technician's lines.
    pub out: Arc<Lines>,
    /// The log.
    pub log: Arc<Lines>,
}

impl Daemon {
    /// Starts it, and does not wait for anything.
    pub fn start(site: &Site) -> Daemon {
        let mut program = program("run", &site.config());
        let mut child = program
            .stdout(Stdio::piped())
            .stderr(Stdio::piped())
            .spawn()
            .expect("the program starts");
        let out = Lines::of(child.stdout.take().expect("a pipe"));
        let log = Lines::of(child.stderr.take().expect("a pipe"));
        Daemon { child, out, log }
    }

    /// Starts it and returns once it is subscribed.
    pub fn listening(site: &Site) -> Daemon {
        let daemon = Daemon::start(site);
        daemon.log.wait_for("readings: subscribed");
        daemon
    }

    /// Its process id.
    pub fn id(&self) -> u32 {
        self.child.id()
    }

    /// SIGTERM; returns the exit code.
    pub fn terminate(mut self) -> Option<i32> {
        signal("TERM", self.child.id());
        self.code()
    }

    /// SIGKILL: the process ends in the middle of whatever it is doing.
    pub fn kill(mut self) {
        signal("KILL", self.child.id());
        self.code();
    }

    /// Waits for its end; returns the exit code, None after a signal.
    pub fn code(&mut self) -> Option<i32> {
        let child = &mut self.child;
        wait_until("the daemon ends", || child.try_wait().expect("the daemon's state")).code()
    }
}

impl Drop for Daemon {
    fn drop(&mut self) {
        drop(self.child.kill());
        drop(self.child.wait());
    }
}
