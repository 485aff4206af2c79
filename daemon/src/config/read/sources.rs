//! `[[source]]` and its channels: what all kinds share, and the log.

use std::path::Path;
use std::sync::Arc;
use std::time::Duration;

use borewake_model::units::Dimension;

use super::super::section::{At, Section};
use super::super::{
    ChannelSettings, Conversion, Instrument, LogSource, SourceConfig, SourceSettings, TopicPattern,
};
use super::instrument::{CompanionRead, instrument};
use super::quality::quality;
use super::{modbus, mqtt, sdi12, serial};
use crate::record::{ChannelId, ChannelKind, Holds, SourceName};

/// A source as written.
pub(super) struct SourceRead {
    pub(super) settings: SourceSettings,
    pub(super) channels: Vec<ChannelRead>,
    /// The serial port it holds, if any.
    pub(super) port: Option<At<String>>,
    pub(super) path: String,
}

/// A channel as written.
pub(super) struct ChannelRead {
    pub(super) id: At<String>,
    pub(super) pattern: TopicPattern,
    pub(super) settings: ChannelSettings,
    /// Channels it names.
    pub(super) companions: Vec<CompanionRead>,
    pub(super) path: String,
}

/// What a kind of source makes of its table: its settings, its channels, the port it holds.
pub(super) type KindRead = (SourceConfig, Vec<ChannelRead>, Option<At<String>>);

#[derive(Clone, Copy)]
enum Kind {
    TextLine,
    ModbusRtu,
    Mqtt,
    Log,
    ModbusTcp,
    Sdi12,
}

/// Reads every `[[source]]`.
pub(super) fn sources(root: &mut Section<'_>, folder: &Path) -> Vec<SourceRead> {
    let kinds = [
        ("text-line", Kind::TextLine),
        ("modbus-rtu", Kind::ModbusRtu),
        ("mqtt", Kind::Mqtt),
        ("log", Kind::Log),
        ("modbus-tcp", Kind::ModbusTcp),
        ("sdi-12", Kind::Sdi12),
    ];
    let mut names = Vec::new();
    let mut sources: Vec<SourceRead> = Vec::new();
    let mend = "a [[source]] with name, kind and its channels";
    let sections = root.must("source", mend, |r, k| Some(r.list(k)));
    for mut section in sections.unwrap_or_default() {
        let name = super::points::sound_name(&mut section);
        if let Some(name) = name.clone() {
            super::points::unique(&section, "source", &mut names, name);
        }
        let name = SourceName::from(name.map(|n| n.value).unwrap_or_default().as_str());
        let kind = section.must(
            "kind",
            "kind = \"modbus-rtu\", \"modbus-tcp\", \"sdi-12\", \"text-line\", \"mqtt\" or \"log\"",
            |s, k| s.word(k, &kinds),
        );
        let (config, channels, port) = match kind {
            Some(Kind::TextLine) => serial::text_line(&mut section, &name),
            Some(Kind::ModbusRtu) => modbus::rtu(&mut section, &name),
            Some(Kind::Mqtt) => mqtt::source(&mut section, &name, folder),
            Some(Kind::Log) => log(&mut section, &name, folder),
            Some(Kind::ModbusTcp) => modbus::tcp(&mut section, &name),
            Some(Kind::Sdi12) => sdi12::source(&mut section, &name),
            None => {
                sources.push(unread(section, name));
                continue;
            }
        };
        if channels.is_empty() && !section.has("channel") {
            root.report.missing(
                &section.span,
                section.whole(),
                "the source has no channel",
                "add a [[source.channel]] with id, kind and unit",
            );
        }
        let path = section.path().to_owned();
        section.close();
        sources.push(SourceRead {
            settings: SourceSettings { name, config },
            channels,
            port,
            path,
        });
    }
    sources
}

/// A source of which only the channels' names could be read, so that references to them do not dangle.
fn unread(mut section: Section<'_>, name: SourceName) -> SourceRead {
    let sections = section.list("channel");
    let channels = sections.into_iter().map(|mut s| channel(&mut s, &name));
    let channels = channels.collect();
    let path = section.path().to_owned();
    section.close_partly();
    SourceRead {
        channels,
        settings: SourceSettings {
            name,
            config: SourceConfig::Log(LogSource {
                path: None,
                channels: Vec::new(),
            }),
        },
        port: None,
        path,
    }
}

/// Reads a log source.
fn log(section: &mut Section<'_>, source: &SourceName, folder: &Path) -> KindRead {
    let path = section.text("path").map(|p| folder.join(p.value));
    let mut channels = Vec::new();
    for mut table in section.list("channel") {
        let read = channel(&mut table, source);
        plain_id(&table, &read);
        table.close();
        channels.push(read);
    }
    let config = SourceConfig::Log(LogSource {
        path,
        channels: channels.iter().map(|c| c.settings.id.clone()).collect(),
    });
    (config, channels, None)
}

/// Reads what all channels have: `id`, `kind`, `unit`, `scale`, `offset`, `holds`.
pub(super) fn channel(table: &mut Section<'_>, source: &SourceName) -> ChannelRead {
    let id = table.must("id", "id = \"o2.pressure\"", |t, k| t.text(k));
    let id = id.unwrap_or_else(|| At {
        value: String::new(),
        span: table.span.clone(),
    });
    let pattern = pattern(table, "id", &id);
    let kinds = [
        ChannelKind::Pressure,
        ChannelKind::Rate,
        ChannelKind::Barometer,
        ChannelKind::Temperature,
        ChannelKind::Stage,
        ChannelKind::Rain,
    ]
    .map(|kind| (kind.name(), kind));
    let kind = table.must("kind", "kind = \"pressure\" or \"rate\"", |t, k| {
        t.word(k, &kinds)
    });
    let (unit, plain, si) = unit(table, kind);
    let instrument = instrument(table, kind, (si.scale, si.offset));
    let quality = quality(table, kind).map(Arc::new);
    let conversion = if instrument.instrument.is_some() {
        plain
    } else {
        Conversion {
            scale: si.scale * plain.scale,
            offset: si.to_si(plain.offset),
        }
    };
    let holds = [("after", Holds::After), ("before", Holds::Before)];
    let mut holds = table.word("holds", &holds);
    if let Some(Instrument::Totaliser(_)) = instrument.instrument.as_deref() {
        if holds == Some(Holds::After) {
            let what = "the rate of a totaliser is the mean since the count before";
            let (span, key) = (table.value_span("holds"), table.key("holds"));
            table.report.value(&span, key, what, "leave it out");
        }
        holds = Some(Holds::Before);
    }
    if holds.is_some() && kind.is_some_and(|k| !matches!(k, ChannelKind::Rate | ChannelKind::Rain))
    {
        table.noted("holds", "only a rate holds: this key changes nothing here");
    }
    ChannelRead {
        settings: ChannelSettings {
            id: ChannelId::from(id.value.as_str()),
            source: source.clone(),
            kind: kind.unwrap_or(ChannelKind::Pressure),
            unit,
            conversion,
            holds: holds.unwrap_or_default(),
            instrument: instrument.instrument,
            reference: instrument.reference,
            column: instrument.column,
            quality,
        },
        companions: instrument.companions,
        id,
        pattern,
        path: table.path().to_owned(),
    }
}

/// What a kind of channel measures.
pub(super) fn dimension(kind: ChannelKind) -> Dimension {
    match kind {
        ChannelKind::Pressure | ChannelKind::Barometer => Dimension::Pressure,
        ChannelKind::Rate => Dimension::Rate,
        ChannelKind::Temperature => Dimension::Temperature,
        ChannelKind::Stage => Dimension::Length,
        ChannelKind::Rain => Dimension::Rain,
    }
}

/// Reads `unit`, `scale` and `offset`: the unit's text, scale and offset, and what leads from the unit to SI.
fn unit(table: &mut Section<'_>, kind: Option<ChannelKind>) -> (String, Conversion, Conversion) {
    let mend = kind.map_or("unit = \"…\"".to_owned(), |k| {
        format!(
            "unit = \"{}\"",
            dimension(k).accepted().get(1).unwrap_or(&"")
        )
    });
    let unit = table.must("unit", &mend, |t, k| t.text(k));
    let scale = table.number("scale");
    let offset = table.number("offset");
    if let Some(scale) = &scale
        && scale.value == 0.0
    {
        let what = "a scale of zero makes every reading the same";
        table.wrong("scale", scale, what, "leave it out where there is none");
    }
    let scale = scale.map_or(1.0, |s| s.value);
    let offset = offset.map_or(0.0, |o| o.value);
    let mut si = Conversion {
        scale: 1.0,
        offset: 0.0,
    };
    if let (Some(unit), Some(kind)) = (&unit, kind) {
        match dimension(kind).conversion(&unit.value) {
            Ok(found) => {
                si = Conversion {
                    scale: found.scale,
                    offset: found.to_si(0.0),
                };
            }
            Err(wrong) => table.wrong("unit", unit, wrong.what(), wrong.mend()),
        }
    }
    let unit = unit.map(|u| u.value).unwrap_or_default();
    (unit, Conversion { scale, offset }, si)
}

/// Reads placeholders.
pub(super) fn pattern(table: &Section<'_>, key: &str, text: &At<String>) -> TopicPattern {
    match TopicPattern::parse(&text.value) {
        Ok(pattern) => pattern,
        Err(wrong) => {
            let mend = "such as \"{gauge}.pressure\"";
            table.wrong(key, text, wrong.to_string(), mend);
            TopicPattern::plain(&text.value)
        }
    }
}

/// Reports placeholders where no topic can fill them.
pub(super) fn plain_id(table: &Section<'_>, read: &ChannelRead) {
    if !read.pattern.is_plain() {
        let what = "placeholders are filled from the topic of an mqtt source";
        table.wrong("id", &read.id, what, "write the channel's own name");
    }
}

/// Longest time an instrument may be asked for.
pub(super) const LONGEST_SCAN: Duration = Duration::from_secs(86_400);
