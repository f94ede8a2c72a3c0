//! A mosquitto of one's own: on a free loopback port, with a folder that outlives its restarts.

use std::net::{SocketAddr, TcpListener, TcpStream};
use std::path::Path;
use std::process::{Child, Command, Stdio};
use std::time::{Duration, Instant};
use tempfile::TempDir;

/// Everything that is waited for must happen within this.
pub const DEADLINE: Duration = Duration::from_secs(30);
/// From one look at something that tells nobody when it happens to the next.
pub const LOOK_AGAIN: Duration = Duration::from_millis(2);

/// Returns what `look` finds; panics with `what` when it finds nothing within the deadline.
pub fn wait_until<T>(what: &str, mut look: impl FnMut() -> Option<T>) -> T {
    let start = Instant::now();
    loop {
        if let Some(found) = look() {
            return found;
        }
        assert!(start.elapsed() < DEADLINE, "not within {DEADLINE:?}: {what}");
        std::thread::sleep(LOOK_AGAIN);
    }
}

/// The broker: runs while it is not stopped, and is killed with the value.
pub struct Broker {
    folder: TempDir,
    port: u16,
    child: Option<Child>,
}

impl Broker {
    /// A broker that accepts connections.
    pub fn running() -> Broker {
        let mut broker = Broker::not_started();
        broker.start();
        broker
    }

    /// A port and a folder, without a broker there yet.
    pub fn not_started() -> Broker {
        Broker::with("allow_anonymous true")
    }

    /// The same, with this line about who may do what.
    pub fn with(access: &str) -> Broker {
        let folder = TempDir::new().expect("a folder for the broker");
        // Whoever asks the system for a free port gets others first: this one stays free a while.
        let free = TcpListener::bind(("127.0.0.1", 0)).expect("a free port");
        let port = free.local_addr().expect("its number").port();
        let settings = format!(
            "listener {port} 127.0.0.1\n\
             {access}\n\
             persistence true\n\
             persistence_location {}/\n\
             max_queued_messages 0\n\
             user root\n", // heeded only where root starts it: else it could not write to its folder
            folder.path().display(),
        );
        std::fs::write(folder.path().join("mosquitto.conf"), settings).expect("the settings");
        Broker { folder, port, child: None }
    }

    /// Its port.
    pub fn port(&self) -> u16 {
        self.port
    }

    /// Starts it and returns once it accepts connections.
    pub fn start(&mut self) {
        assert!(self.child.is_none(), "the broker runs already");
        let child = Command::new(program())
            .arg("-c")
            .arg(self.folder.path().join("mosquitto.conf"))
            .stdin(Stdio::null())
            .stdout(Stdio::null())
            .stderr(Stdio::null())
            .spawn()
            .expect("mosquitto starts; Debian's package mosquitto has it");
        let child = self.child.insert(child);
        let address = SocketAddr::from(([127, 0, 0, 1], self.port));
        wait_until("the broker accepts connections", || {
            let ended = child.try_wait().expect("the broker's state");
            assert!(ended.is_none(), "the broker ended by itself: {ended:?}");
            TcpStream::connect(address).ok()
        });
    }

    /// Ends it in order; sessions and queued messages are in its folder then.
    pub fn stop(&mut self) {
        let mut child = self.child.take().expect("the broker runs");
        signal("TERM", child.id());
        wait_until("the broker ends", || child.try_wait().expect("the broker's state"));
    }

    /// Ends it at once: sessions, queued and retained messages are lost.
    pub fn crash(&mut self) {
        let mut child = self.child.take().expect("the broker runs");
        child.kill().expect("a process of ours");
        child.wait().expect("the broker's state");
    }
}

impl Drop for Broker {
    fn drop(&mut self) {
        if let Some(mut child) = self.child.take() {
            drop(child.kill());
            drop(child.wait());
        }
    }
}

/// Sends a signal to a process of ours.
pub fn signal(name: &str, process: u32) {
    let done = Command::new("kill").arg(format!("-{name}")).arg(process.to_string()).status();
    assert!(done.is_ok_and(|status| status.success()), "kill -{name} {process}");
}

/// Debian keeps mosquitto where not everybody's path leads.
fn program() -> &'static str {
    let debian = "/usr/sbin/mosquitto";
    if Path::new(debian).exists() { debian } else { "mosquitto" }
}
