//! Plain words for what brokers and networks answer.

use rumqttc::v5::mqttbytes::v5::{
    ConnectReturnCode, DisconnectReasonCode, PubAckReason, SubscribeReasonCode,
};
use rumqttc::v5::mqttbytes::{Error, QoS};
use rumqttc::v5::{ConnectionError, StateError};
use std::io::ErrorKind;

/// Why a connection could not be made or was lost.
pub fn of_connection(error: &ConnectionError) -> String {
    match error {
        ConnectionError::Io(io) => of_io(io),
        ConnectionError::Timeout(_) => "the broker does not answer".to_owned(),
        ConnectionError::ConnectionRefused(code) => of_refusal(*code),
        ConnectionError::NotConnAck(_) => {
            "what answers there is not an MQTT broker (no CONNACK)".to_owned()
        }
        ConnectionError::MqttState(state) => of_state(state),
        other => other.to_string(),
    }
}

fn of_io(error: &std::io::Error) -> String {
    match error.kind() {
        ErrorKind::ConnectionRefused => {
            "nothing listens there (connection refused): is the broker running, is the port right?"
                .to_owned()
        }
        ErrorKind::ConnectionReset | ErrorKind::BrokenPipe | ErrorKind::ConnectionAborted => {
            "the broker closed the connection".to_owned()
        }
        ErrorKind::TimedOut => "the broker does not answer".to_owned(),
        _ if error.to_string().contains("lookup") => {
            format!("the broker's name cannot be resolved ({error})")
        }
        _ => error.to_string(),
    }
}

fn of_refusal(code: ConnectReturnCode) -> String {
    use ConnectReturnCode as Code;
    match code {
        Code::RefusedProtocolVersion | Code::UnsupportedProtocolVersion => {
            "the broker does not speak MQTT 5, which is needed".to_owned()
        }
        Code::BadUserNamePassword => "user name or password is wrong".to_owned(),
        Code::NotAuthorized => "the broker does not let this user in (not authorised)".to_owned(),
        Code::BadClientId | Code::ClientIdentifierNotValid => {
            "the broker does not accept the client id".to_owned()
        }
        Code::Banned => "the broker has banned this client".to_owned(),
        other => format!("the broker refused the connection: {other:?}"),
    }
}

fn of_state(error: &StateError) -> String {
    match error {
        StateError::Io(io) | StateError::Deserialization(Error::Io(io)) => of_io(io),
        StateError::ServerDisconnect { reason_code, reason_string } => {
            let said = reason_string.as_deref().map_or(String::new(), |text| format!(" ({text})"));
            let words = match reason_code {
                DisconnectReasonCode::SessionTakenOver => {
                    "another client uses the same client id and took the session over".to_owned()
                }
                DisconnectReasonCode::NotAuthorized => "not authorised".to_owned(),
                DisconnectReasonCode::ServerShuttingDown => "it shuts down".to_owned(),
                DisconnectReasonCode::KeepAliveTimeout => "it heard nothing from us".to_owned(),
                other => format!("{other:?}"),
            };
            format!("the broker ended the connection: {words}{said}")
        }
        StateError::ConnFail { reason } => of_refusal(*reason),
        StateError::AwaitPingResp => "the broker no longer answers pings".to_owned(),
        StateError::ConnectionAborted => "the broker closed the connection".to_owned(),
        StateError::IncomingPacketTooLarge { pkt_size, max } => {
            format!("the broker sent {pkt_size} bytes at once; at most {max} are taken")
        }
        other => other.to_string(),
    }
}

/// Why a subscription was refused; None: it was granted.
pub fn of_subscription(code: SubscribeReasonCode) -> Option<String> {
    use SubscribeReasonCode as Code;
    Some(match code {
        Code::Success(QoS::AtLeastOnce | QoS::ExactlyOnce) => return None,
        Code::Success(QoS::AtMostOnce) => {
            "granted without acknowledgement (QoS 0): readings could be lost without a word"
                .to_owned()
        }
        Code::NotAuthorized => "not authorised: check the broker's access list".to_owned(),
        Code::TopicFilterInvalid => "the broker does not accept the filter".to_owned(),
        Code::QuotaExceeded => "the broker's quota is exceeded".to_owned(),
        Code::WildcardSubscriptionsNotSupported => {
            "the broker does not support wildcards".to_owned()
        }
        other => format!("{other:?}"),
    })
}

/// Why a published message was refused; None: it was taken.
pub fn of_publication(reason: PubAckReason) -> Option<String> {
    use PubAckReason as Reason;
    Some(match reason {
        // Nobody listening is no fault of the message.
        Reason::Success | Reason::NoMatchingSubscribers => return None,
        Reason::NotAuthorized => "not authorised: check the broker's access list".to_owned(),
        Reason::TopicNameInvalid => "the broker does not accept the topic".to_owned(),
        Reason::QuotaExceeded => "the broker's quota is exceeded".to_owned(),
        other => format!("{other:?}"),
    })
}
