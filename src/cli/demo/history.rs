//! The made-up site's history as the messages that its instruments would have sent.

use crate::service::settings::time::read_time;
use crate::watch::time::EventTime;
use flate2::read::GzDecoder;
use std::collections::BTreeSet;
use std::io::Read;

/// `time,channel,value`, ordered by time; the value is whatever the instrument sent.
const READINGS: &[u8] = include_bytes!("../../../demo-data/readings.csv.gz");

/// One message.
#[derive(Clone, Debug, PartialEq, Eq)]
pub struct Message {
    /// `plant/{area}/{tag}/deviation`.
    pub topic: String,
    /// `{"v":…,"ts":…}`; not always JSON, for one instrument sends garbage now and then.
    pub payload: Vec<u8>,
}

/// All messages, first to last.
#[derive(Debug)]
pub struct History {
    rows: std::vec::IntoIter<String>,
    channels: usize,
    starts: EventTime,
    ends: EventTime,
}

impl History {
    /// Unpacks the history. An error is a damaged build.
    pub fn open() -> std::io::Result<History> {
        let mut text = String::new();
        GzDecoder::new(READINGS).read_to_string(&mut text)?;
        let rows: Vec<String> = text.lines().skip(1).map(str::to_owned).collect();
        let time = |row: Option<&String>| {
            let time = row.and_then(|row| read_time(row.split(',').next()?).ok());
            time.ok_or_else(|| std::io::Error::other("the history has a row without a time"))
        };
        let (starts, ends) = (time(rows.first())?, time(rows.last())?);
        let channels: BTreeSet<&str> =
            rows.iter().filter_map(|row| row.split(',').nth(1)).collect();
        let channels = channels.len();
        Ok(History { rows: rows.into_iter(), channels, starts, ends })
    }

    /// How many messages are still to come.
    pub fn len(&self) -> usize {
        self.rows.len()
    }

    /// How many instruments send.
    pub fn channels(&self) -> usize {
        self.channels
    }

    /// Time of the first message.
    pub fn starts(&self) -> EventTime {
        self.starts
    }

    /// Time of the last message.
    pub fn ends(&self) -> EventTime {
        self.ends
    }
}

impl Iterator for History {
    type Item = Message;

    fn next(&mut self) -> Option<Message> {
        let row = self.rows.next()?;
        let mut fields = row.splitn(3, ',');
        let (time, channel, value) = (fields.next()?, fields.next()?, fields.next()?);
        let (area, tag) = channel.split_once('.')?;
        Some(Message {
            topic: format!("plant/{area}/{tag}/deviation"),
            payload: format!("{{\"v\":{value},\"ts\":\"{time}\"}}").into_bytes(),
        })
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn the_history_opens_and_every_row_becomes_a_message() {
        let history = History::open().unwrap();
        let (rows, channels) = (history.len(), history.channels());
        assert!(history.starts() < history.ends());
        assert_eq!((history.count(), channels), (rows, 15));
        let first = History::open().unwrap().next().unwrap();
        assert!(first.topic.starts_with("plant/") && first.topic.ends_with("/deviation"));
    }
}
