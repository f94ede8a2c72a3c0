//! Both ends at the broker: who publishes the readings, and who listens for alerts. A thread, a
//! client and an event loop each.

use crate::plant::{Plant, SITE};
use rumqttc::v5::mqttbytes::QoS;
use rumqttc::v5::mqttbytes::v5::{Filter, Packet, PubAckReason};
use rumqttc::v5::{AsyncClient, Event, EventLoop, MqttOptions};
use std::collections::BTreeMap;
use std::sync::atomic::{AtomicU64, Ordering};
use std::sync::{Arc, Condvar, Mutex, MutexGuard, PoisonError};
use std::thread::JoinHandle;
use std::time::{Duration, Instant};

/// Messages on their way without acknowledgement; the broker is set to the same.
const IN_FLIGHT_MAX: u16 = 1000;
/// The largest message that is taken; the client's own default is smaller than an alert may be.
const PACKET_BYTES_MAX: u32 = 256 * 1024;
/// Requests that may wait for the event loop.
const REQUESTS_MAX: usize = 256;
/// Readings are handed over in small lots, one each so often.
const PACE: Duration = Duration::from_millis(2);

fn client(name: &str, port: u16) -> (AsyncClient, EventLoop) {
    let mut options = MqttOptions::new(name, "127.0.0.1", port);
    options.set_keep_alive(Duration::from_secs(60));
    options.set_outgoing_inflight_upper_limit(IN_FLIGHT_MAX);
    options.set_max_packet_size(Some(PACKET_BYTES_MAX));
    let mut network = rumqttc::NetworkOptions::new();
    network.set_tcp_nodelay(true);
    options.set_network_options(network);
    AsyncClient::new(options, REQUESTS_MAX)
}

/// Runs one end on a thread of its own.
fn on_thread<T: Send + 'static>(
    work: impl Future<Output = Result<T, String>> + Send + 'static,
) -> JoinHandle<Result<T, String>> {
    std::thread::spawn(move || {
        let runtime = tokio::runtime::Builder::new_current_thread().enable_all().build();
        runtime.map_err(|why| why.to_string())?.block_on(work)
    })
}

/// How far the publisher is.
#[derive(Debug, Default)]
pub struct Progress {
    /// Readings that the broker has taken.
    pub taken: AtomicU64,
}

/// Publishes all readings at `rate` a second. The thread ends when the broker has taken them all, and
/// tells how long that took.
pub fn publish(
    port: u16,
    plant: &Plant,
    rate: u64,
    progress: Arc<Progress>,
) -> JoinHandle<Result<Duration, String>> {
    let plant = plant.clone();
    on_thread(async move {
        let (client, mut events) = client("load-publisher", port);
        let total = plant.total();
        let acknowledged = tokio::spawn(async move {
            while progress.taken.load(Ordering::Relaxed) < total {
                match events.poll().await.map_err(|why| format!("publisher: {why}"))? {
                    Event::Incoming(Packet::PubAck(answer))
                        if answer.reason == PubAckReason::Success =>
                    {
                        progress.taken.fetch_add(1, Ordering::Relaxed);
                    }
                    Event::Incoming(Packet::PubAck(answer)) => {
                        return Err(format!("a reading was not taken: {:?}", answer.reason));
                    }
                    _ => {}
                }
            }
            Ok(())
        });
        let mut pace = tokio::time::interval(PACE);
        let started = Instant::now();
        for (n, made) in plant.readings().enumerate() {
            while n as f64 >= started.elapsed().as_secs_f64() * rate as f64 {
                pace.tick().await;
            }
            let handed =
                client.publish(made.topic(), QoS::AtLeastOnce, false, made.payload()).await;
            if handed.is_err() {
                // The event loop has ended; it says why.
                break;
            }
        }
        acknowledged.await.map_err(|why| why.to_string())??;
        Ok(started.elapsed())
    })
}

/// What the observer has seen.
#[derive(Debug, Default)]
pub struct Seen {
    /// Alert events by id, as they came first.
    pub events: BTreeMap<String, Vec<u8>>,
    /// Events that came again, byte for byte the same.
    pub repeated: u64,
    /// What should not have come: without id, or another text under a known id.
    pub wrong: Vec<String>,
    /// The daemon's own state: "online", or what is said at an end.
    state: String,
    /// How often the daemon was online.
    pub times_online: u64,
    subscribed: bool,
    failed: Option<String>,
}

/// Listens for alerts and for the daemon's own state.
#[derive(Clone, Debug, Default)]
pub struct Observer {
    shared: Arc<(Mutex<Seen>, Condvar)>,
}

impl Observer {
    /// Starts listening; returns when the broker has granted the subscription.
    pub fn start(port: u16) -> Result<Observer, String> {
        let observer = Observer::default();
        let own = observer.clone();
        // The thread ends with the process: there is nothing to wait for when all has been seen.
        drop(on_thread(async move {
            let (client, mut events) = client("load-observer", port);
            let filters = ["alert/#", "service"]
                .map(|rest| Filter::new(format!("asfound/{SITE}/{rest}"), QoS::AtLeastOnce));
            client.subscribe_many(filters).await.map_err(|why| why.to_string())?;
            loop {
                match events.poll().await {
                    Ok(Event::Incoming(Packet::Publish(message))) => {
                        own.note(&message.topic, &message.payload);
                    }
                    Ok(Event::Incoming(Packet::SubAck(_))) => own.seen().subscribed = true,
                    Ok(_) => continue,
                    Err(why) => own.seen().failed = Some(format!("observer: {why}")),
                }
                own.shared.1.notify_all();
                if own.seen().failed.is_some() {
                    return Ok(());
                }
            }
        }));
        observer.wait("the observer's subscription", Duration::from_secs(10), |s| s.subscribed)?;
        Ok(observer)
    }

    fn note(&self, topic: &[u8], payload: &[u8]) {
        let json: serde_json::Value = serde_json::from_slice(payload).unwrap_or_default();
        let text = |key: &str| json[key].as_str().unwrap_or_default().to_owned();
        let mut seen = self.seen();
        if topic.ends_with(b"/service") {
            seen.state = format!("{}: {}", text("state"), text("why"));
            seen.times_online += u64::from(text("state") == "online");
            return;
        }
        let id = text("id");
        match seen.events.get(&id) {
            _ if id.is_empty() => seen.wrong.push("an event without id".to_owned()),
            None => drop(seen.events.insert(id, payload.to_vec())),
            Some(known) if known == payload => seen.repeated += 1,
            Some(_) => seen.wrong.push(format!("{id} came again with another text")),
        }
    }

    /// What has been seen up to now.
    pub fn seen(&self) -> MutexGuard<'_, Seen> {
        self.shared.0.lock().unwrap_or_else(PoisonError::into_inner)
    }

    /// Waits until `enough` has been seen.
    pub fn wait(
        &self,
        what: &str,
        within: Duration,
        enough: impl Fn(&Seen) -> bool,
    ) -> Result<(), String> {
        let waiting = |seen: &mut Seen| !enough(seen) && seen.failed.is_none();
        let (seen, late) = self
            .shared
            .1
            .wait_timeout_while(self.seen(), within, waiting)
            .unwrap_or_else(PoisonError::into_inner);
        match &seen.failed {
            Some(why) => Err(why.clone()),
            None if late.timed_out() => {
                Err(format!("{what}: not within {} s; last: {}", within.as_secs(), seen.state))
            }
            None => Ok(()),
        }
    }

    /// Waits until the daemon has said that it is online for the `times`-th time.
    pub fn wait_online(&self, times: u64) -> Result<(), String> {
        self.wait("the daemon online", Duration::from_secs(60), |s| s.times_online >= times)
    }

    /// Waits until the daemon has said goodbye: all that it sent before has been seen by then.
    pub fn wait_stopped(&self) -> Result<(), String> {
        self.wait("the daemon's goodbye", Duration::from_secs(10), |seen| {
            seen.state == "offline: stopped"
        })
    }
}
