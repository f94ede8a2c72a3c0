//! The one thread that owns the store: orders in, answers back, in order.

use crate::service::store::{Bundle, NewMessage, NewRow, Store, StoreError};
use std::sync::mpsc;
use tokio::sync::oneshot;

/// Orders that may wait; a further one makes the caller wait (that is the back-pressure).
const ORDERS_MAX: usize = 16;

type Job = Box<dyn FnOnce(&mut Store) + Send>;

/// The writer thread has ended; nothing can be stored any more.
#[derive(Debug, thiserror::Error)]
#[error("the store's thread has ended")]
pub struct WriterGone;

/// Handle to the thread that owns the store. Dropping it ends the thread after its last order.
#[derive(Debug)]
pub struct Writer {
    orders: Option<mpsc::SyncSender<Job>>,
    thread: Option<std::thread::JoinHandle<()>>,
}

impl Writer {
    /// Moves the store to a thread of its own.
    pub fn start(mut store: Store) -> std::io::Result<Writer> {
        let (orders, inbox) = mpsc::sync_channel::<Job>(ORDERS_MAX);
        let thread = std::thread::Builder::new().name("store".to_owned()).spawn(move || {
            while let Ok(job) = inbox.recv() {
                job(&mut store);
            }
        })?;
        Ok(Writer { orders: Some(orders), thread: Some(thread) })
    }

    /// Appends rows; the answer is the first id, once they are durable.
    pub fn append(&self, rows: Vec<NewRow>) -> oneshot::Receiver<Result<i64, StoreError>> {
        self.order(move |store| store.append(&rows))
    }

    /// Saves a bundle; the answer is how many messages did not fit.
    pub fn save(&self, bundle: Bundle) -> oneshot::Receiver<Result<u64, StoreError>> {
        self.order(move |store| store.save(&bundle))
    }

    /// Reads unsent messages.
    pub fn unsent_after(
        &self,
        after: i64,
        rows_max: i64,
    ) -> oneshot::Receiver<Result<Vec<(i64, NewMessage)>, StoreError>> {
        self.order(move |store| store.unsent_after(after, rows_max))
    }

    /// Notes that a broker has granted the subscriptions.
    pub fn note_subscribed(&self) -> oneshot::Receiver<Result<(), StoreError>> {
        self.order(Store::note_subscribed)
    }

    /// Marks messages as taken by the broker.
    pub fn sent(&self, ids: Vec<i64>) -> oneshot::Receiver<Result<(), StoreError>> {
        self.order(move |store| store.sent(&ids))
    }

    /// Hands an order over; the receiver fails only when the thread has ended.
    fn order<T: Send + 'static>(
        &self,
        job: impl FnOnce(&mut Store) -> T + Send + 'static,
    ) -> oneshot::Receiver<T> {
        let (answer, receiver) = oneshot::channel();
        let job: Job = Box::new(move |store| {
            // The asker may be gone, as at a stop; the work is done all the same.
            drop(answer.send(job(store)));
        });
        if let Some(orders) = &self.orders {
            drop(orders.send(job));
        }
        receiver
    }
}

impl Drop for Writer {
    fn drop(&mut self) {
        self.orders = None;
        if let Some(thread) = self.thread.take() {
            drop(thread.join());
        }
    }
}
