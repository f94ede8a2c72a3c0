//! From the engine's effects to messages, log rows and lines.

use crate::service::envelope::{self, CONTENT_TYPE, Surroundings};
use crate::service::intake::topic_level;
use crate::service::line::line;
use crate::service::store::{Bundle, NewMessage};
use crate::watch::engine::{Effect, Engine};
use crate::watch::time::ShellTime;

const JSON: &str = "application/json";

/// What effects come to.
#[derive(Debug, Default)]
pub struct Told {
    /// Messages and alert rows; without states.
    pub bundle: Bundle,
    /// Channels whose alerts changed: their state must be saved in the same transaction.
    pub changed: Vec<String>,
    /// The technician's lines, in order.
    pub lines: Vec<String>,
}

/// Turns effects into what is saved, published and logged.
///
/// # Arguments
/// `own_topics` — `{topic_root}/{site}`; `now` — when the events are made.
pub fn tell(engine: &Engine, effects: Vec<Effect>, own_topics: &str, now: ShellTime) -> Told {
    let mut told = Told::default();
    for effect in effects {
        match effect {
            Effect::Finding(finding) => told.bundle.messages.push(NewMessage {
                topic: format!("{own_topics}/finding/{}", topic_level(&finding.channel)),
                payload: envelope::finding(&finding).into_bytes(),
                retained: true,
                content_type: Some(JSON.to_owned()),
                correlation: None,
                event_id: None,
            }),
            Effect::Alert { channel, event, finding } => {
                let around = Surroundings {
                    site: &engine.settings().site,
                    channel: &channel,
                    unit: engine.unit_of(&channel),
                    finding: finding.as_deref(),
                };
                let text = envelope::alert_event(&around, &event, now);
                told.lines.push(line(&channel, &event));
                told.bundle.messages.push(NewMessage {
                    topic: format!("{own_topics}/alert/{}", topic_level(&channel)),
                    payload: text.clone().into_bytes(),
                    retained: false,
                    content_type: Some(CONTENT_TYPE.to_owned()),
                    correlation: None,
                    event_id: Some(event.id.clone()),
                });
                told.bundle.alerts.push((event.id.clone(), channel.clone(), event.time.0, text));
                if told.changed.last() != Some(&channel) {
                    told.changed.push(channel);
                }
            }
            Effect::Standing { channel, open } => told.bundle.messages.push(NewMessage {
                topic: format!("{own_topics}/standing/{}", topic_level(&channel)),
                payload: envelope::standing(&open).into_bytes(),
                retained: true,
                content_type: Some(JSON.to_owned()),
                correlation: None,
                event_id: None,
            }),
            Effect::Looked { .. } => {}
        }
    }
    told
}
