//! The processes under measurement: the broker and the daemon, started, watched and stopped.

use std::fs::{self, File};
use std::net::{Ipv4Addr, TcpListener, TcpStream};
use std::path::{Path, PathBuf};
use std::process::{Child, Command, ExitStatus, Stdio};
use std::time::{Duration, Instant};

/// Pause between two looks at something awaited.
pub const LOOK_AGAIN: Duration = Duration::from_millis(20);
/// Where the broker lies on systems whose users have no system programs in their search path.
const MOSQUITTO_ELSEWHERE: &str = "/usr/sbin/mosquitto";

/// A child process that does not outlive its handle.
#[derive(Debug)]
pub struct Process {
    child: Child,
    name: &'static str,
}

/// What the kernel says of a process.
#[derive(Clone, Copy, Debug, Default)]
pub struct Sample {
    /// Processor time so far, seconds.
    pub cpu_s: f64,
    /// Resident memory, KiB.
    pub rss_kib: u64,
    /// The most resident memory so far, KiB.
    pub peak_kib: u64,
}

/// Waits until `look` finds something; the error names what did not come.
pub fn await_event<T>(
    what: &str,
    within: Duration,
    mut look: impl FnMut() -> Result<Option<T>, String>,
) -> Result<T, String> {
    let started = Instant::now();
    loop {
        if let Some(found) = look()? {
            return Ok(found);
        }
        if started.elapsed() > within {
            return Err(format!("{what}: not within {} s", within.as_secs()));
        }
        std::thread::sleep(LOOK_AGAIN);
    }
}

impl Process {
    fn start(name: &'static str, command: &mut Command, log: &Path) -> Result<Process, String> {
        let told = |why: std::io::Error| format!("{name} cannot be started: {why}");
        let log = File::options().create(true).append(true).open(log).map_err(told)?;
        command.stdin(Stdio::null()).stdout(log.try_clone().map_err(told)?).stderr(log);
        Ok(Process { child: command.spawn().map_err(told)?, name })
    }

    /// Starts the daemon over the settings file in `folder`.
    pub fn daemon(folder: &Path) -> Result<Process, String> {
        let mut command = Command::new(env!("CARGO_BIN_EXE_asfound"));
        // Nothing of the caller's environment may override the settings.
        command.env_clear().arg("run").arg("--config").arg(folder.join("asfound.toml"));
        Process::start("asfound", &mut command, &folder.join("asfound.log"))
    }

    /// Starts a broker on a free port of this machine and waits until it answers.
    pub fn broker(folder: &Path) -> Result<(Process, u16), String> {
        let told = |why: std::io::Error| format!("the broker's folder: {why}");
        let free = TcpListener::bind((Ipv4Addr::LOCALHOST, 0)).map_err(told)?;
        let port = free.local_addr().map_err(told)?.port();
        drop(free);
        let data = folder.join("broker");
        fs::create_dir(&data).map_err(told)?;
        let settings = folder.join("mosquitto.conf");
        // As root it would become another user, who may not write here.
        let text = format!(
            "listener {port} 127.0.0.1\nuser root\nallow_anonymous true\npersistence true\n\
             persistence_location {}/\nmax_queued_messages 0\nmax_inflight_messages 1000\n",
            data.display()
        );
        fs::write(&settings, text).map_err(told)?;
        let path = std::env::var_os("PATH").unwrap_or_default();
        let program = std::env::split_paths(&path)
            .map(|folder| folder.join("mosquitto"))
            .find(|program| program.exists())
            .unwrap_or_else(|| PathBuf::from(MOSQUITTO_ELSEWHERE));
        let mut command = Command::new(program);
        command.arg("-c").arg(&settings);
        let mut broker = Process::start("mosquitto", &mut command, &folder.join("mosquitto.log"))?;
        await_event("the broker's answer", Duration::from_secs(10), || {
            broker.must_live()?;
            Ok(TcpStream::connect((Ipv4Addr::LOCALHOST, port)).ok())
        })?;
        Ok((broker, port))
    }

    /// An error when the process has ended.
    pub fn must_live(&mut self) -> Result<(), String> {
        match self.child.try_wait() {
            Ok(None) => Ok(()),
            Ok(Some(status)) => Err(format!("{} has ended by itself: {status}", self.name)),
            Err(why) => Err(format!("{}: {why}", self.name)),
        }
    }

    /// Kills it, as a power cut would, and waits for its end.
    pub fn kill(&mut self) -> Result<(), String> {
        self.child.kill().and_then(|()| self.child.wait()).map_err(|why| why.to_string())?;
        Ok(())
    }

    /// Asks it to stop (SIGTERM) and waits for its end.
    pub fn terminate(&mut self, within: Duration) -> Result<ExitStatus, String> {
        let pid = self.child.id().to_string();
        Command::new("kill").args(["-TERM", &pid]).status().map_err(|why| why.to_string())?;
        await_event("the end after SIGTERM", within, || {
            self.child.try_wait().map_err(|why| why.to_string())
        })
    }

    /// What the kernel says of it now.
    pub fn sample(&self) -> Result<Sample, String> {
        let read = |file: &str| {
            let path = format!("/proc/{}/{file}", self.child.id());
            fs::read_to_string(&path).map_err(|why| format!("{path}: {why}"))
        };
        let stat = read("stat")?;
        // proc_pid_stat(5): the second field is in brackets; fields 14 and 15 are user and system
        // time in clock ticks.
        let fields: Vec<&str> =
            stat.rsplit(')').next().unwrap_or_default().split_whitespace().collect();
        let ticks = |at: usize| fields.get(at - 3).and_then(|text| text.parse::<f64>().ok());
        let used = ticks(14).zip(ticks(15)).ok_or("a stat file without processor times")?;
        let status = read("status")?;
        Ok(Sample {
            cpu_s: (used.0 + used.1) / TICKS_PER_S,
            rss_kib: kib(&status, "VmRSS:"),
            peak_kib: kib(&status, "VmHWM:"),
        })
    }
}

/// Clock ticks a second in /proc: 100 on every Linux of today (USER_HZ).
const TICKS_PER_S: f64 = 100.0;

/// A line such as `VmRSS:  1234 kB`; 0 when it is not there.
fn kib(status: &str, key: &str) -> u64 {
    let line = status.lines().find_map(|line| line.strip_prefix(key));
    line.and_then(|rest| rest.split_whitespace().next()?.parse().ok()).unwrap_or(0)
}

impl Drop for Process {
    fn drop(&mut self) {
        // Both fail only when it has ended already.
        drop(self.child.kill());
        drop(self.child.wait());
    }
}
