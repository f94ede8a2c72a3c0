//! One MQTT 5 connection, packet by packet over a blocking socket.

use crate::common::broker::DEADLINE;
use bytes::BytesMut;
use rumqttc::v5::mqttbytes::Error;
use rumqttc::v5::mqttbytes::v5::{ConnAck, Connect, ConnectProperties, Packet};
use std::io::{ErrorKind, Read, Write};
use std::net::TcpStream;
use std::time::{Duration, Instant};

/// How long the broker keeps a client's session, seconds.
const SESSION_S: u32 = 600;
/// A read that brings nothing ends after this, so that a stop is noticed.
const READ_TURN: Duration = Duration::from_millis(100);

/// Why there is no packet.
pub enum Absent {
    /// Nothing came for a while.
    Yet,
    /// The connection is gone.
    Gone,
}

/// A session that the broker keeps, over one TCP connection.
pub struct Connection {
    stream: TcpStream,
    input: BytesMut,
    /// The broker still had the session.
    pub session_present: bool,
}

impl Connection {
    /// Connects; None where nobody answers.
    pub fn open(port: u16, client_id: &str) -> Option<Connection> {
        let stream = TcpStream::connect(("127.0.0.1", port)).ok()?;
        stream.set_nodelay(true).ok()?;
        stream.set_read_timeout(Some(READ_TURN)).ok()?;
        let mut connection = Connection { stream, input: BytesMut::new(), session_present: false };
        let mut properties = ConnectProperties::new();
        properties.session_expiry_interval = Some(SESSION_S);
        let connect = Connect {
            keep_alive: 0,
            client_id: client_id.to_owned(),
            clean_start: false,
            properties: Some(properties),
        };
        connection.send(Packet::Connect(connect, None, None)).ok()?;
        let start = Instant::now();
        while start.elapsed() < DEADLINE {
            match connection.receive() {
                Ok(Packet::ConnAck(ConnAck { session_present, .. })) => {
                    connection.session_present = session_present;
                    return Some(connection);
                }
                Ok(other) => panic!("CONNACK was due, not {other:?}"),
                Err(Absent::Yet) => {}
                Err(Absent::Gone) => return None,
            }
        }
        None
    }

    /// Sends a packet.
    pub fn send(&mut self, packet: Packet) -> std::io::Result<()> {
        let mut output = BytesMut::new();
        packet.write(&mut output, None).expect("a packet that can be written");
        self.stream.write_all(&output)
    }

    /// The next packet, if one comes soon.
    pub fn receive(&mut self) -> Result<Packet, Absent> {
        let mut buffer = [0; 8192];
        loop {
            match Packet::read(&mut self.input, None) {
                Ok(packet) => return Ok(packet),
                Err(Error::InsufficientBytes(_)) => {}
                Err(error) => panic!("the broker sent what is no packet: {error}"),
            }
            match self.stream.read(&mut buffer) {
                Ok(0) => return Err(Absent::Gone),
                Ok(got) => self.input.extend_from_slice(&buffer[..got]),
                Err(error)
                    if matches!(error.kind(), ErrorKind::WouldBlock | ErrorKind::TimedOut) =>
                {
                    return Err(Absent::Yet);
                }
                Err(_) => return Err(Absent::Gone),
            }
        }
    }
}
