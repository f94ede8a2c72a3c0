//! What `check --connect` tries: the store, the broker, the grant of each subscription. Nothing stays
//! behind: a trial store is removed, and a client of its own name leaves no session.

use crate::cli::check::Trial;
use crate::service::broker::BrokerSettings;
use crate::service::broker::guest::Guest;
use crate::service::intake::Router;
use crate::service::settings::Settings;
use crate::service::store;

/// Tries each in turn.
pub fn try_all(settings: &Settings) -> Vec<Trial> {
    let directory = &settings.store_directory;
    let mut trials = vec![Trial {
        what: format!("store {}", directory.display()),
        outcome: store::probe(directory).map_err(|error| error.to_string()),
    }];
    let link = BrokerSettings::of(&settings.broker);
    let what = format!("broker {}:{}", link.host, link.port);
    let runtime = tokio::runtime::Builder::new_current_thread().enable_all().build();
    let answer = match runtime {
        Ok(runtime) => runtime.block_on(try_broker(settings, &link)),
        Err(error) => Err(error.to_string()),
    };
    match answer {
        Ok(answers) => {
            trials.push(Trial { what, outcome: Ok("connected with MQTT 5".to_owned()) });
            trials.extend(answers);
        }
        Err(why) => trials.push(Trial { what, outcome: Err(why) }),
    }
    trials
}

async fn try_broker(settings: &Settings, link: &BrokerSettings) -> Result<Vec<Trial>, String> {
    let mut filters = Router::new(settings).filters();
    filters.push(format!("{}/request/+", settings.own_topics()));
    let (_guest, answers) = Guest::connect(link, "check", filters).await?;
    Ok(answers
        .into_iter()
        .map(|(filter, answer)| Trial {
            what: format!("subscription {filter}"),
            outcome: answer.map(|()| "granted".to_owned()),
        })
        .collect())
}
