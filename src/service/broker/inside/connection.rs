//! One connection of the broker inside: bytes to packets and back. The task reads, hands over all
//! packets that have arrived under one lock, and writes whatever the session has for it in batches;
//! it ends when either side ends, when another connection takes the session, or with the broker.

use std::sync::Arc;
use std::time::Duration;

use bytes::BytesMut;
use rumqttc::v5::mqttbytes::Error as PacketError;
use rumqttc::v5::mqttbytes::v5::{
    self, ConnAck, ConnectReturnCode, Disconnect, DisconnectProperties, DisconnectReasonCode,
    Packet,
};
use tokio::io::{AsyncReadExt, AsyncWriteExt};
use tokio::net::TcpStream;
use tokio::net::tcp::{OwnedReadHalf, OwnedWriteHalf};
use tokio::sync::{Notify, oneshot, watch};
use tokio::time::timeout;

use super::session::Link;
use super::state::{Admission, Fill, Who};
use super::{CONTROL_BYTES_MAX, FAREWELL_MAX, HANDSHAKE_MAX, PACKET_BYTES_MAX, Shared, lock};

const READ_BYTES: usize = 64 << 10;

/// How a connection ended.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub(super) enum End {
    /// The peer went away without a word, or a fault hook cut it.
    Lost,
    /// The client said DISCONNECT.
    Left {
        /// It asked for its will all the same.
        with_will: bool,
        /// It changed how long its session shall live; s.
        expiry_s: Option<u32>,
    },
    /// The broker ends it, for this reason.
    Ended(DisconnectReasonCode),
}

/// What the parts of one connection share.
struct Line {
    shared: Shared,
    who: Who,
    wake: Arc<Notify>,
    drained: Arc<Notify>,
    /// None: the client wants no keep-alive.
    silence_max: Option<Duration>,
}

/// Serves one accepted connection to its end.
pub(super) async fn serve(
    stream: TcpStream,
    shared: Shared,
    number: u64,
    mut stop: watch::Receiver<bool>,
) {
    // Without it batches wait for the peer's acknowledgement; a failure costs speed only.
    let _ = stream.set_nodelay(true);
    let (mut reader, mut writer) = stream.into_split();
    let mut input = BytesMut::new();
    let mut output = BytesMut::new();
    let connect = tokio::select! {
        connect = timeout(HANDSHAKE_MAX, first_packet(&mut reader, &mut input)) => connect.ok(),
        _ = stop.changed() => None,
    };
    if let Some(Some(Packet::Connect(connect, will, _))) = connect {
        let (wake, drained) = (Arc::new(Notify::new()), Arc::new(Notify::new()));
        let (kick, kicked) = oneshot::channel();
        let properties = connect.properties.as_ref();
        let link = Link {
            number,
            control: BytesMut::new(),
            wake: Arc::clone(&wake),
            drained: Arc::clone(&drained),
            kick,
            receive_maximum: properties.and_then(|p| p.receive_maximum).unwrap_or(u16::MAX).into(),
            packet_bytes_max: properties
                .and_then(|p| p.max_packet_size)
                .map_or(usize::MAX, |bytes| bytes as usize),
            will,
            cut: false,
        };
        let silence = Duration::from_millis(1500) * u32::from(connect.keep_alive);
        let silence_max = (!silence.is_zero()).then_some(silence);
        let admission = lock(&shared).connect(connect, link);
        match admission {
            Admission::Refused(code) => answer(&mut output, refusal(code)),
            Admission::Welcome(who) => {
                let line = Line { shared: Arc::clone(&shared), who, wake, drained, silence_max };
                let end = tokio::select! {
                    end = read(&line, &mut reader, &mut input) => end,
                    end = write(&line, &mut writer, &mut output) => end,
                    // An error: the session has dropped this connection without a reason.
                    reason = kicked => reason.map_or(End::Lost, End::Ended),
                    _ = stop.changed() => End::Ended(DisconnectReasonCode::ServerShuttingDown),
                };
                lock(&shared).disconnect(&line.who, end);
                if let End::Ended(reason) = end {
                    answer(&mut output, farewell(reason));
                }
            }
        }
    }
    lock(&shared).counts.connections -= 1;
    // Nothing to be done about a peer that does not take the last words.
    let _ = timeout(FAREWELL_MAX, close(reader, writer, output, input)).await;
}

/// Writes what is left, says the end, and reads the peer out: closing with unread input would make
/// the system throw away what the peer has not read yet.
async fn close(
    mut reader: OwnedReadHalf,
    mut writer: OwnedWriteHalf,
    mut output: BytesMut,
    mut input: BytesMut,
) -> std::io::Result<()> {
    writer.write_all_buf(&mut output).await?;
    writer.shutdown().await?;
    loop {
        input.clear();
        input.reserve(READ_BYTES);
        if reader.read_buf(&mut input).await? == 0 {
            return Ok(());
        }
    }
}

async fn first_packet(reader: &mut OwnedReadHalf, input: &mut BytesMut) -> Option<Packet> {
    loop {
        match next_packet(input) {
            Ok(Some(packet)) => return Some(packet),
            Ok(None) => {}
            Err(_) => return None,
        }
        input.reserve(READ_BYTES);
        if !matches!(reader.read_buf(input).await, Ok(1..)) {
            return None;
        }
    }
}

async fn read(line: &Line, reader: &mut OwnedReadHalf, input: &mut BytesMut) -> End {
    let mut packets = Vec::new();
    loop {
        let malformed = loop {
            match next_packet(input) {
                Ok(Some(packet)) => packets.push(packet),
                Ok(None) => break None,
                Err(reason) => break Some(reason),
            }
        };
        let taken = lock(&line.shared).packets(&line.who, packets.drain(..));
        if let Err(end) = taken {
            return end;
        }
        if let Some(reason) = malformed {
            return End::Ended(reason);
        }
        while lock(&line.shared).control_bytes(&line.who) > CONTROL_BYTES_MAX {
            if in_time(line.silence_max, line.drained.notified()).await.is_none() {
                return End::Ended(DisconnectReasonCode::KeepAliveTimeout);
            }
        }
        input.reserve(READ_BYTES);
        match in_time(line.silence_max, reader.read_buf(input)).await {
            None => return End::Ended(DisconnectReasonCode::KeepAliveTimeout),
            Some(Ok(1..)) => {}
            Some(_) => return End::Lost,
        }
    }
}

/// Writes batches until the connection ends. What is not written yet stays in `output`, so that a
/// last packet never lands in the middle of another.
async fn write(line: &Line, writer: &mut OwnedWriteHalf, output: &mut BytesMut) -> End {
    loop {
        let fill = lock(&line.shared).fill(&line.who, output);
        if writer.write_all_buf(output).await.is_err() || fill == Fill::Cut {
            return End::Lost;
        }
        if fill == Fill::Idle {
            line.wake.notified().await;
        }
    }
}

async fn in_time<T>(limit: Option<Duration>, work: impl Future<Output = T>) -> Option<T> {
    match limit {
        Some(limit) => timeout(limit, work).await.ok(),
        None => Some(work.await),
    }
}

/// Takes the next packet off the input; None: it is not complete. DISCONNECT is read here, as the
/// codec refuses its two short forms.
fn next_packet(input: &mut BytesMut) -> Result<Option<Packet>, DisconnectReasonCode> {
    match v5::check(input.iter(), Some(PACKET_BYTES_MAX)) {
        Ok(_) => {}
        Err(PacketError::InsufficientBytes(_)) => return Ok(None),
        Err(PacketError::PayloadSizeLimitExceeded { .. }) => {
            return Err(DisconnectReasonCode::PacketTooLarge);
        }
        Err(_) => return Err(DisconnectReasonCode::MalformedPacket),
    }
    let reason = match input[..] {
        [0xE0, 0, ..] => Some(0),
        [0xE0, 1, reason, ..] => Some(reason),
        _ => None,
    };
    if let Some(reason) = reason {
        let reason = DisconnectReasonCode::try_from(reason)
            .map_err(|_| DisconnectReasonCode::MalformedPacket)?;
        let _ = input.split_to(2 + usize::from(input[1]));
        return Ok(Some(Packet::Disconnect(Disconnect::new(reason))));
    }
    let packet = Packet::read(input, Some(PACKET_BYTES_MAX));
    packet.map(Some).map_err(|_| DisconnectReasonCode::MalformedPacket)
}

/// Appends one of the broker's own packets.
pub(super) fn answer(output: &mut BytesMut, packet: Packet) {
    packet.write(output, None).expect("the broker's own packets are short and well-formed");
}

fn refusal(code: ConnectReturnCode) -> Packet {
    Packet::ConnAck(ConnAck { session_present: false, code, properties: None })
}

/// A DISCONNECT with a property: without one the codec of rumqttc 0.25.1 writes a byte too many, with
/// empty ones it takes the packet for a normal disconnection.
fn farewell(reason_code: DisconnectReasonCode) -> Packet {
    let properties = DisconnectProperties {
        session_expiry_interval: None,
        reason_string: Some("ended by the broker".to_owned()),
        user_properties: Vec::new(),
        server_reference: None,
    };
    Packet::Disconnect(Disconnect { reason_code, properties: Some(properties) })
}
