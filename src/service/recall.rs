//! What was journaled lately, to know a redelivered message again.
//!
//! The broker may deliver a message twice: after a crash between commit and acknowledgement, or after
//! a broken connection. A reading with its own time is known by channel, time and value. One without
//! gets a new time at each delivery, so it is known by its message (topic, payload, packet id), and
//! only when the broker marks the delivery as a repetition.

use sha2::{Digest, Sha256};
use std::collections::{BTreeSet, VecDeque};

/// Readings remembered; older ones are told apart by the channel's window, which takes no reading
/// twice and none that is older than its newest.
pub const REMEMBERED_MAX: usize = 65_536;

/// Keys of the readings journaled last.
#[derive(Debug, Default)]
pub struct Recall {
    known: BTreeSet<i64>,
    order: VecDeque<i64>,
}

impl Recall {
    /// Whether a key is remembered.
    pub fn knows(&self, key: i64) -> bool {
        self.known.contains(&key)
    }

    /// Remembers a key; the oldest is forgotten when there are too many.
    pub fn remember(&mut self, key: i64) {
        if !self.known.insert(key) {
            return;
        }
        self.order.push_back(key);
        if self.order.len() > REMEMBERED_MAX
            && let Some(oldest) = self.order.pop_front()
        {
            self.known.remove(&oldest);
        }
    }
}

/// The key of a reading with its own time.
pub fn key_of_reading(channel: &str, time_us: i64, deviation: f64) -> i64 {
    key(&[
        b"reading",
        channel.as_bytes(),
        &time_us.to_le_bytes(),
        &deviation.to_bits().to_le_bytes(),
    ])
}

/// The key of a message whose reading has no time of its own.
pub fn key_of_message(topic: &str, payload: &[u8], packet_id: u16) -> i64 {
    key(&[b"message", topic.as_bytes(), payload, &packet_id.to_le_bytes()])
}

/// The first eight bytes of SHA-256: the chance that two of the remembered readings share a key by
/// accident is below 1e-9 over the life of the store.
fn key(parts: &[&[u8]]) -> i64 {
    let mut hash = Sha256::new();
    for part in parts {
        hash.update((part.len() as u64).to_le_bytes());
        hash.update(part);
    }
    let digest = hash.finalize();
    let mut first = [0; 8];
    first.copy_from_slice(&digest[..8]);
    i64::from_le_bytes(first)
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn a_reading_is_known_by_channel_time_and_value() {
        let mut recall = Recall::default();
        recall.remember(key_of_reading("a", 1, 0.5));
        assert!(recall.knows(key_of_reading("a", 1, 0.5)));
        assert!(!recall.knows(key_of_reading("a", 1, 0.6)));
        assert!(!recall.knows(key_of_reading("b", 1, 0.5)));
        assert!(!recall.knows(key_of_message("a", b"0.5", 1)));
    }

    #[test]
    fn memory_is_bounded_and_the_oldest_goes_first() {
        let mut recall = Recall::default();
        for k in 0..=REMEMBERED_MAX as i64 {
            recall.remember(k);
        }
        assert!(!recall.knows(0) && recall.knows(1) && recall.known.len() == REMEMBERED_MAX);
    }
}
