//! A small MQTT 5 broker inside the process, for the demonstration and for tests: real packets over
//! real sockets, without a second program to install. It is meant for the loopback interface and is
//! no broker for production: no authentication, no encryption, nothing on disk, one lock for all.
//!
//! It keeps the parts of MQTT 5.0 (OASIS Standard 2019) that the daemon leans on: sessions with
//! expiry, QoS 0 and 1 (QoS 2 is refused with its reason), retained messages and the options on
//! their handling, wills with delay, wildcards, the client's receive maximum and maximum packet
//! size, redelivery with DUP in order, takeover, keep-alive. Left out: topic aliases and shared
//! subscriptions (refused), message expiry (passed on, not acted on), enhanced authentication.
//!
//! All state stands behind one mutex that is never held across an await; each connection has one
//! task that reads and one buffer that is written in batches, so a client that does not read delays
//! only itself. What waits for it is bounded: see [`QUEUE_MESSAGES_MAX`].

mod connection;
mod session;
mod state;
#[cfg(test)]
mod tests;

use std::io;
use std::net::SocketAddr;
use std::sync::{Arc, Mutex, MutexGuard, PoisonError};
use std::time::Duration;

use tokio::net::TcpListener;
use tokio::sync::watch;
use tokio::task::{JoinHandle, JoinSet};

use state::State;

/// Most connections at a time; one more is closed at once and counted.
pub const CONNECTIONS_MAX: usize = 64;
/// Most sessions, connected or not; a client that would need one more is refused.
pub const SESSIONS_MAX: usize = 256;
/// Most subscriptions of one session; one more is refused in its SUBACK.
pub const SUBSCRIPTIONS_MAX: usize = 4096;
/// Most topics with a retained message; one more is passed on, not retained, and counted.
pub const RETAINED_MAX: usize = 16_384;
/// Most messages that wait for one session, and their most bytes. When either is reached a QoS 1
/// message pushes out the oldest waiting QoS 0 message; failing that the newcomer is dropped. Each
/// loss is counted in [`Counts::dropped`]. The publisher has its acknowledgement all the same.
pub const QUEUE_MESSAGES_MAX: usize = 65_536;
/// See [`QUEUE_MESSAGES_MAX`]; bytes.
pub const QUEUE_BYTES_MAX: usize = 64 << 20;
/// Most unacknowledged messages to one client, whatever its receive maximum.
pub const INFLIGHT_MAX: usize = 4096;
/// Largest packet the broker takes, announced in CONNACK; bytes.
pub const PACKET_BYTES_MAX: u32 = 1 << 20;

/// Output is gathered up to about this size before it is written; bytes.
const OUTPUT_BATCH_BYTES: usize = 64 << 10;
/// A client with more unread answers than this is not read from until it takes them; bytes.
const CONTROL_BYTES_MAX: usize = 256 << 10;
/// How long a new connection may take to say CONNECT, and a last word to be written.
const HANDSHAKE_MAX: Duration = Duration::from_secs(5);
const FAREWELL_MAX: Duration = Duration::from_secs(1);
/// Step in which the ages of sessions and delayed wills are counted.
const TICK: Duration = Duration::from_secs(1);

/// Faults the broker is to commit; for tests, not reachable from any command line.
#[derive(Clone, Debug, Default, PartialEq, Eq)]
pub struct Faults {
    /// Cuts, without a word, the connection that was given this many-th message (from 1, counted
    /// over all clients); once.
    pub cut_after_deliveries: Option<u64>,
    /// Takes and passes on this many QoS 1 messages without acknowledging them.
    pub withhold_acknowledgements: u32,
    /// This many resumptions find their session gone.
    pub forget_sessions: u32,
    /// Refuses subscriptions whose filter, read as a topic, matches this filter; as not authorized.
    pub refuse_subscriptions: Option<String>,
}

/// What the broker has counted since its start.
#[derive(Clone, Copy, Debug, Default, PartialEq, Eq)]
pub struct Counts {
    /// Messages taken from publishers, wills included.
    pub received: u64,
    /// Messages written to subscribers, repetitions included.
    pub delivered: u64,
    /// Messages written again on a resumed session.
    pub redelivered: u64,
    /// Messages lost for a full queue, and those not retained for want of room.
    pub dropped: u64,
    /// Messages larger than their subscriber takes, not sent to it.
    pub too_large: u64,
    /// Most unacknowledged messages any one connection ever had.
    pub unacked_max: usize,
    /// Connections closed or refused for a bound.
    pub refused: u64,
    /// Connections open now.
    pub connections: usize,
}

type Shared = Arc<Mutex<State>>;

/// The lock on the state; a panic elsewhere leaves it usable, its invariants hold between calls.
fn lock(shared: &Shared) -> MutexGuard<'_, State> {
    shared.lock().unwrap_or_else(PoisonError::into_inner)
}

/// A running broker; it ends with [`InsideBroker::stop`] or when dropped.
pub struct InsideBroker {
    address: SocketAddr,
    shared: Shared,
    stop: watch::Sender<bool>,
    accepting: JoinHandle<()>,
}

impl InsideBroker {
    /// Starts a broker on the present tokio runtime; panics where there is none.
    ///
    /// # Arguments
    /// * `address` - where to listen, a loopback address; port 0 takes a free one.
    ///
    /// # Outcomes
    /// The running broker, or the error of the bind.
    pub fn start(address: SocketAddr) -> io::Result<InsideBroker> {
        InsideBroker::start_with(address, Faults::default())
    }

    /// Starts a broker that commits the given faults; see [`InsideBroker::start`].
    pub fn start_with(address: SocketAddr, faults: Faults) -> io::Result<InsideBroker> {
        let listener = std::net::TcpListener::bind(address)?;
        listener.set_nonblocking(true)?;
        let listener = TcpListener::from_std(listener)?;
        let address = listener.local_addr()?;
        let shared: Shared = Arc::new(Mutex::new(State::new(faults)));
        let (stop, stopped) = watch::channel(false);
        let accepting = tokio::spawn(accept(listener, Arc::clone(&shared), stopped));
        Ok(InsideBroker { address, shared, stop, accepting })
    }

    /// Returns where the broker listens, with the port it was given.
    pub fn address(&self) -> SocketAddr {
        self.address
    }

    /// Returns what has been counted so far.
    pub fn counts(&self) -> Counts {
        lock(&self.shared).counts
    }

    /// Ends the broker: says so to every client, closes all, and returns when the port is free.
    /// Sessions and retained messages end with it.
    pub async fn stop(self) {
        self.stop.send_replace(true);
        // An error is a panic in the accepting task; it is over either way.
        let _ = self.accepting.await;
    }
}

/// Takes connections until the broker stops or is dropped, and keeps the time of the sessions.
async fn accept(listener: TcpListener, shared: Shared, mut stop: watch::Receiver<bool>) {
    let mut connections = JoinSet::new();
    let mut ticks = tokio::time::interval(TICK);
    let mut number = 0;
    loop {
        tokio::select! {
            // Either way of ending: told so, or the handle is gone.
            _ = stop.changed() => break,
            _ = ticks.tick() => lock(&shared).tick(),
            Some(_) = connections.join_next() => {}
            accepted = listener.accept() => match accepted {
                Ok((stream, _)) if lock(&shared).admit() => {
                    number += 1;
                    let (shared, stop) = (Arc::clone(&shared), stop.clone());
                    connections.spawn(connection::serve(stream, shared, number, stop));
                }
                Ok(_) => {} // Dropping it closes it; `admit` has counted it.
                // Out of descriptors, most likely: let some go before the next attempt.
                Err(_) => tokio::time::sleep(Duration::from_millis(50)).await,
            },
        }
    }
    drop(listener);
    while connections.join_next().await.is_some() {}
}
