//! Brokers: as a source, and how to enter one.

use std::path::Path;

use super::super::section::{At, Section};
use super::super::{MqttChannel, MqttEndpoint, MqttSource, SecretFile, SourceConfig, TopicPattern};
use super::sources::{ChannelRead, KindRead, channel, pattern};
use crate::record::SourceName;

/// Longest topic (MQTT 3.1.1, section 1.5.3) \[bytes\].
const LONGEST_TOPIC: usize = 65_535;

/// Reads `url`, `user`, `password_file` and `client_id`.
pub(super) fn endpoint(section: &mut Section<'_>, folder: &Path) -> MqttEndpoint {
    let url = section.must("url", "url = \"mqtt://127.0.0.1:1883\"", |s, k| s.text(k));
    let address = url.as_ref().and_then(|url| match address(&url.value) {
        Ok(address) => Some(address),
        Err((what, mend)) => {
            section.wrong("url", url, what, mend);
            None
        }
    });
    if let (Some(url), Some((true, _, _))) = (&url, &address) {
        let text = "this build speaks no TLS and will not connect there";
        section.report.note(&url.span, section.key("url"), text);
    }
    let user = section.text("user");
    let password = section.text("password_file");
    if let (None, Some(password)) = (&user, &password) {
        let what = "a password without a user is never sent";
        section.wrong(
            "password_file",
            password,
            what,
            "add user = \"…\", or leave it out",
        );
    }
    section.refused(
        "password",
        "the site file holds no secret",
        "put the password in a file of its own and name it: password_file = \"broker.secret\"",
    );
    let client_id = section.text("client_id");
    let (tls, host, port) = address.unwrap_or((false, String::new(), 1883));
    MqttEndpoint {
        host,
        port,
        tls,
        user: user.map(|u| u.value),
        password: password.map(|p| SecretFile::new(folder.join(p.value))),
        client_id: client_id.map(|c| c.value),
    }
}

/// TLS or not, host and port of `mqtt://host:port`.
fn address(url: &str) -> Result<(bool, String, u16), (&'static str, &'static str)> {
    let example = "such as \"mqtt://127.0.0.1:1883\" or \"mqtts://broker.example:8883\"";
    let (tls, rest) = match url.split_once("://") {
        Some(("mqtt" | "tcp", rest)) => (false, rest),
        Some(("mqtts" | "ssl", rest)) => (true, rest),
        _ => {
            return Err((
                "the address of a broker starts with mqtt:// or mqtts://",
                example,
            ));
        }
    };
    let rest = rest.strip_suffix('/').unwrap_or(rest);
    if rest.contains('@') {
        let mend = "use `user` and `password_file`";
        return Err(("the site file holds no secret", mend));
    }
    if rest.contains(['/', '?', '#', ' ']) {
        return Err(("the address of a broker ends after the port", example));
    }
    // An IPv6 address stands in brackets.
    let (host, port) = match rest.strip_prefix('[').and_then(|r| r.split_once(']')) {
        Some((host, "")) => (host, None),
        Some((host, port)) => (host, Some(port.strip_prefix(':').unwrap_or(""))),
        None => match rest.split_once(':') {
            Some((host, port)) => (host, Some(port)),
            None => (rest, None),
        },
    };
    if host.is_empty() {
        return Err(("the address has no host", example));
    }
    let usual = if tls { 8883 } else { 1883 };
    let port = match port {
        None => usual,
        Some(text) => match text.parse() {
            Ok(port) if port > 0 => port,
            _ => return Err(("a port is a number from 1 to 65535", example)),
        },
    };
    Ok((tls, host.to_owned(), port))
}

/// Reads an mqtt source.
pub(super) fn source(section: &mut Section<'_>, source: &SourceName, folder: &Path) -> KindRead {
    let endpoint = endpoint(section, folder);
    let mut reads = Vec::new();
    let mut channels = Vec::new();
    for mut table in section.list("channel") {
        let read = channel(&mut table, source);
        let topic = table.must("topic", "topic = \"pads/{gauge}/p\"", |t, k| t.text(k));
        let topic = topic.and_then(|text| Some((topic_pattern(&table, &text)?, text)));
        if let Some((topic, text)) = &topic {
            same_placeholders(&table, &read, topic, text);
        }
        let value = pointer(&mut table, "value");
        let time = pointer(&mut table, "time");
        if let (None, Some(time)) = (&value, &time) {
            let what = "a payload with a time needs a pointer to its value too";
            table.wrong("time", time, what, "add value = \"/value\"");
        }
        table.close();
        channels.push(MqttChannel {
            id: read.pattern.clone(),
            topic: topic.map_or_else(|| TopicPattern::plain(""), |(topic, _)| topic),
            value: value.map(|v| v.value),
            time: time.map(|t| t.value),
        });
        reads.push(read);
    }
    let config = SourceConfig::Mqtt(MqttSource { endpoint, channels });
    (config, reads, None)
}

/// Reads a topic, in which wildcards are placeholders.
fn topic_pattern(table: &Section<'_>, text: &At<String>) -> Option<TopicPattern> {
    if text.value.contains(['+', '#']) {
        let what = "a wildcard has no name here, so one channel would mix several gauges";
        let mend =
            "put a placeholder in its place, such as pads/{gauge}/p, and the same one in `id`";
        table.wrong("topic", text, what, mend);
        return None;
    }
    if text.value.len() > LONGEST_TOPIC {
        table.wrong(
            "topic",
            text,
            "a topic has at most 65535 bytes",
            "shorten it",
        );
    }
    Some(pattern(table, "topic", text))
}

/// Reports placeholders that only one of id and topic has.
fn same_placeholders(
    table: &Section<'_>,
    read: &ChannelRead,
    topic: &TopicPattern,
    text: &At<String>,
) {
    let mut in_id: Vec<&str> = read.pattern.placeholders().collect();
    let mut in_topic: Vec<&str> = topic.placeholders().collect();
    in_id.sort_unstable();
    in_topic.sort_unstable();
    if in_id == in_topic {
        return;
    }
    if let Some(extra) = in_topic.iter().find(|p| !in_id.contains(p)) {
        let what = format!(
            "the placeholder {{{extra}}} is not in `id`, so one channel would mix several gauges"
        );
        table.wrong("topic", text, what, format!("put {{{extra}}} in `id` too"));
    } else if let Some(extra) = in_id.iter().find(|p| !in_topic.contains(p)) {
        let what = format!("the placeholder {{{extra}}} is not in `topic`, so nothing fills it");
        table.wrong(
            "id",
            &read.id,
            what,
            format!("put {{{extra}}} in `topic` too"),
        );
    }
}

/// Reads a JSON Pointer (RFC 6901).
fn pointer(table: &mut Section<'_>, key: &'static str) -> Option<At<String>> {
    let text = table.text(key)?;
    let escapes = text
        .value
        .split('~')
        .skip(1)
        .all(|s| s.starts_with(['0', '1']));
    if !text.value.starts_with('/') || !escapes {
        let what = "a JSON Pointer (RFC 6901) is due";
        let mend = format!(
            "start it with /, such as {key} = \"/{}\"",
            text.value.trim_start_matches('/')
        );
        table.wrong(key, &text, what, mend);
    }
    Some(text)
}

#[cfg(test)]
mod tests {
    use super::address;

    #[test]
    fn addresses_of_brokers() {
        for (url, tls, host, port) in [
            ("mqtt://127.0.0.1:1884", false, "127.0.0.1", 1884),
            ("mqtt://broker.example", false, "broker.example", 1883),
            ("mqtts://broker.example/", true, "broker.example", 8883),
            ("mqtt://[::1]:1885", false, "::1", 1885),
            ("tcp://[::1]", false, "::1", 1883),
        ] {
            assert_eq!(address(url), Ok((tls, host.to_owned(), port)), "{url}");
        }
        for url in [
            "127.0.0.1:1883",
            "http://x",
            "mqtt://",
            "mqtt://:1883",
            "mqtt://h:0",
            "mqtt://h:99999",
            "mqtt://h:1883/topic",
            "mqtt://user:secret@h",
            "mqtt://[::1",
            "mqtt://[::1]1883",
            "mqtt://h:",
        ] {
            assert!(address(url).is_err(), "{url}");
        }
    }
}
