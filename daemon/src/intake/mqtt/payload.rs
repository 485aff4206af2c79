//! Reads a message: which channels its topic names, and what its payload says of them. Pure.

use serde_json::Value;

pub use super::client::Message;
use crate::config::MqttChannel;
use crate::intake::Conversions;
use crate::intake::clock::ClockReading;
use crate::intake::decode::{
    Refusal, When, cut, instant, instant_of_number, missing, not_ahead, number, reading,
};
use crate::record::{ChannelId, DeviceStatus, Reading, RejectReason, Rejected, SourceName};

/// A longer payload is refused \[bytes\].
const LONGEST: usize = 64 * 1024;

/// Knows the topics of a source.
#[derive(Debug, Clone)]
pub struct Decoder {
    channels: Vec<MqttChannel>,
    filters: Vec<String>,
}

impl Decoder {
    /// For these channels.
    #[must_use]
    pub fn new(channels: &[MqttChannel]) -> Self {
        let mut filters: Vec<String> = channels.iter().map(|c| c.topic.filter()).collect();
        // A filter subscribed to twice may bring every message twice.
        filters.sort();
        filters.dedup();
        Self {
            channels: channels.to_vec(),
            filters,
        }
    }

    /// What to subscribe to.
    #[must_use]
    pub fn filters(&self) -> &[String] {
        &self.filters
    }

    /// What a message says: a reading or a refusal for every channel that its topic names.
    #[must_use]
    pub fn read(
        &self,
        message: &Message,
        known: &Conversions,
        source: &SourceName,
        now: ClockReading,
    ) -> (Vec<Reading>, Vec<Rejected>) {
        let mut readings = Vec::new();
        let mut rejected = Vec::new();
        let keep = |refusal: Refusal, id: Option<&ChannelId>| {
            refusal.keep(source, id, now.now, &message.payload)
        };
        let mut named = false;
        let json = Payload::new(&message.payload);
        for channel in &self.channels {
            let Some(values) = channel.topic.capture(&message.topic) else {
                continue;
            };
            named = true;
            let Some(id) = channel.id.fill(&values) else {
                let detail = format!(
                    "topic {} does not fill in {}",
                    cut(&message.topic, 120),
                    channel.id
                );
                rejected.push(keep(
                    Refusal::new(RejectReason::UnknownChannel, detail),
                    None,
                ));
                continue;
            };
            let id = ChannelId::from(id.as_str());
            match take(channel, &id, message, &json, known, now) {
                Ok(reading) => readings.push(reading),
                Err(refusal) => {
                    // Rejected readings are kept under channels that exist, or under none.
                    let known = (refusal.reason != RejectReason::UnknownChannel).then_some(&id);
                    rejected.push(keep(refusal, known));
                }
            }
        }
        if !named {
            let detail = format!("topic {} is no channel's", cut(&message.topic, 120));
            rejected.push(keep(
                Refusal::new(RejectReason::UnknownChannel, detail),
                None,
            ));
        }
        (readings, rejected)
    }
}

/// A payload, read as JSON at most once.
struct Payload<'m> {
    text: Result<&'m str, Refusal>,
    json: std::cell::OnceCell<Result<Value, Refusal>>,
}

impl<'m> Payload<'m> {
    fn new(bytes: &'m [u8]) -> Self {
        let wrong = |detail: String| Refusal::new(RejectReason::Payload, detail);
        let text = if bytes.len() > LONGEST {
            Err(wrong(format!(
                "the payload has {} bytes, at most {LONGEST} are read",
                bytes.len()
            )))
        } else {
            std::str::from_utf8(bytes).map_err(|_| wrong("the payload is no text".to_owned()))
        };
        Self {
            text,
            json: std::cell::OnceCell::new(),
        }
    }

    fn text(&self) -> Result<&'m str, Refusal> {
        self.text.clone()
    }

    /// What stands at a JSON Pointer.
    fn at(&self, pointer: &str) -> Result<&Value, Refusal> {
        let json = self.json.get_or_init(|| {
            let wrong = |e: serde_json::Error| {
                Refusal::new(
                    RejectReason::Payload,
                    format!("the payload is no JSON: {e}"),
                )
            };
            serde_json::from_str(self.text()?).map_err(wrong)
        });
        let json = json.as_ref().map_err(Clone::clone)?;
        json.pointer(pointer).ok_or_else(|| {
            let detail = format!("there is nothing at \"{pointer}\" in the payload");
            Refusal::new(RejectReason::Payload, detail)
        })
    }
}

fn take(
    channel: &MqttChannel,
    id: &ChannelId,
    message: &Message,
    payload: &Payload<'_>,
    known: &Conversions,
    now: ClockReading,
) -> Result<Reading, Refusal> {
    let meaning = known.of(id)?;
    let when = match &channel.time {
        Some(pointer) => {
            let sampled = time(payload.at(pointer)?, pointer)?;
            When::delivered(not_ahead(sampled, now.now)?, now.now)
        }
        // The broker kept it from some earlier time: stamped now, it would be old news as fresh.
        None if message.retained => {
            let detail = "a retained message without an instant of its own; publish it unretained, or give its time";
            return Err(Refusal::new(RejectReason::Time, detail));
        }
        None => When::arrival(now),
    };
    let value = match &channel.value {
        None => number(payload.text()?, meaning)?,
        Some(pointer) => match payload.at(pointer)? {
            // RFC 8259 has no NaN: null is how a device says that it has no value.
            Value::Null => return Ok(missing(id, when, DeviceStatus::Normal)),
            Value::String(text) => number(text, meaning)?,
            Value::Number(n) => n.as_f64().unwrap_or(f64::NAN),
            Value::Bool(_) | Value::Array(_) | Value::Object(_) => {
                let detail = format!("what stands at \"{pointer}\" is no number");
                return Err(Refusal::new(RejectReason::Payload, detail));
            }
        },
    };
    reading(id, when, value, meaning)
}

/// An instant: RFC 3339 text, or a number of seconds or milliseconds since 1970.
fn time(value: &Value, pointer: &str) -> Result<crate::record::Stamp, Refusal> {
    match value {
        Value::String(text) => instant(text),
        Value::Number(n) => instant_of_number(n.as_f64().unwrap_or(f64::NAN)),
        _ => {
            let detail = format!("what stands at \"{pointer}\" is no instant");
            Err(Refusal::new(RejectReason::Time, detail))
        }
    }
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::config::TopicPattern;
    use crate::intake::conversions::kilo;
    use crate::record::{ClockEpoch, ClockState, Quality, Stamp};
    use proptest::prelude::*;

    fn channel(id: &str, topic: &str, value: Option<&str>, time: Option<&str>) -> MqttChannel {
        MqttChannel {
            id: TopicPattern::parse(id).unwrap(),
            topic: TopicPattern::parse(topic).unwrap(),
            value: value.map(str::to_owned),
            time: time.map(str::to_owned),
        }
    }

    fn message(topic: &str, payload: &[u8]) -> Message {
        Message {
            topic: topic.to_owned(),
            payload: payload.to_vec(),
            retained: false,
            packet: Some(1),
        }
    }

    fn read(channels: &[MqttChannel], message: &Message) -> (Vec<Reading>, Vec<Rejected>) {
        let pattern = TopicPattern::parse("{g}.pressure").unwrap();
        let known = Conversions::new([("flow".into(), kilo())], [(pattern, kilo())]);
        let now = ClockReading {
            now: Stamp::parse("2031-03-01T00:00:00Z").unwrap(),
            epoch: ClockEpoch(3),
            state: ClockState::Holdover,
        };
        Decoder::new(channels).read(message, &known, &"b".into(), now)
    }

    #[test]
    fn placeholders_name_the_channel() {
        let channels = [
            channel("{gauge}.pressure", "pads/{gauge}/p", Some("/p"), Some("/t")),
            channel("flow", "pads/flow", None, None),
        ];
        assert_eq!(Decoder::new(&channels).filters(), ["pads/+/p", "pads/flow"]);
        let (readings, rejected) = read(
            &channels,
            &message("pads/o2/p", br#"{"p": 101.5, "t": "2031-02-28T23:59:00Z"}"#),
        );
        assert_eq!(rejected, []);
        assert_eq!(readings[0].channel, "o2.pressure".into());
        assert_eq!(readings[0].value, Some(101_500.0));
        assert_eq!(
            (readings[0].epoch, readings[0].clock),
            (ClockEpoch(0), ClockState::Foreign)
        );
        let (readings, _) = read(&channels, &message("pads/flow", b" 0.25\n"));
        assert_eq!(
            (readings[0].raw, readings[0].epoch),
            (Some(0.25), ClockEpoch(3))
        );
    }

    #[test]
    fn one_message_may_hold_several_channels() {
        let channels = [
            channel("a.pressure", "rig", Some("/gauges/0/p"), Some("/t")),
            channel("b.pressure", "rig", Some("/gauges/1/p"), Some("/t")),
            channel("flow", "rig", Some("/q~1h"), Some("/t")),
        ];
        let payload = br#"{"t": 1930089600000, "gauges": [{"p": 1}, {"p": null}], "q/h": "3.5"}"#;
        let (readings, rejected) = read(&channels, &message("rig", payload));
        assert_eq!(rejected, []);
        let seen: Vec<_> = readings.iter().map(|r| (r.raw, r.quality)).collect();
        assert_eq!(
            seen,
            [
                (Some(1.0), Quality::Good),
                (None, Quality::Missing),
                (Some(3.5), Quality::Good)
            ]
        );
        assert!(
            readings
                .iter()
                .all(|r| r.sampled == Stamp::parse("2031-03-01T00:00:00Z").unwrap())
        );
    }

    #[test]
    fn what_does_not_fit_is_refused_with_its_reason() {
        let channels = [channel(
            "{g}.pressure",
            "pads/{g}/p",
            Some("/p"),
            Some("/t"),
        )];
        for (payload, reason) in [
            (&b"{\"p\": 1"[..], RejectReason::Payload),
            (b"\xff\xfe", RejectReason::Payload),
            (b"{\"t\": 0}", RejectReason::Payload),
            (b"{\"p\": 1}", RejectReason::Payload),
            (b"{\"p\": [1], \"t\": 0}", RejectReason::Payload),
            (b"{\"p\": 1e999, \"t\": 0}", RejectReason::Payload),
            (b"{\"p\": \"NaN\", \"t\": 0}", RejectReason::NotANumber),
            (b"{\"p\": \"12 psi\", \"t\": 0}", RejectReason::Unit),
            (b"{\"p\": 1, \"t\": \"noon\"}", RejectReason::Time),
            (b"{\"p\": 1, \"t\": true}", RejectReason::Time),
            (b"{\"p\": 1, \"t\": 2000000000}", RejectReason::Time),
        ] {
            let (readings, rejected) = read(&channels, &message("pads/x/p", payload));
            let text = String::from_utf8_lossy(payload);
            assert!(readings.is_empty(), "{text}");
            assert_eq!(rejected[0].reason, reason, "{text}: {}", rejected[0].detail);
            assert_eq!(rejected[0].channel, Some("x.pressure".into()), "{text}");
        }
    }

    #[test]
    fn topics_and_channels_nobody_knows_are_refused() {
        let channels = [channel("{g}.level", "pads/{g}/p", None, None)];
        for topic in ["pads/x/p", "other"] {
            let (_, rejected) = read(&channels, &message(topic, b"1"));
            assert_eq!(
                (rejected[0].reason, &rejected[0].channel),
                (RejectReason::UnknownChannel, &None)
            );
        }
    }

    #[test]
    fn kept_messages_are_news_only_with_their_own_time() {
        let mut kept = message("flow", b"{\"q\": 1, \"t\": 0}");
        kept.retained = true;
        let timed = [channel("flow", "flow", Some("/q"), Some("/t"))];
        assert_eq!(read(&timed, &kept).0.len(), 1);
        let untimed = [channel("flow", "flow", Some("/q"), None)];
        assert_eq!(read(&untimed, &kept).1[0].reason, RejectReason::Time);
    }

    proptest! {
        #[test]
        fn no_payload_upsets_the_reader(bytes in prop::collection::vec(any::<u8>(), 0..80), topic in "[a-z/{}+#]{0,12}") {
            let channels = [channel("{g}.pressure", "{g}", Some("/p"), Some("/t")), channel("flow", "a", None, None)];
            let (readings, rejected) = read(&channels, &message(&topic, &bytes));
            prop_assert!(readings.len() + rejected.len() >= 1);
        }
    }
}
