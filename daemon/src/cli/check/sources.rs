//! What the sources said, for people and for programs.

use borewake_model::units::{Dimension, significant};
use serde_json::{Value, json};

use crate::cli::table::{Align, Table};
use crate::config::Site;
use crate::intake::probe::{ChannelProbe, SourceProbe};
use crate::record::{ChannelId, ChannelKind};

/// A table a source.
pub(super) fn text(site: &Site, probes: &[SourceProbe]) -> String {
    let mut text = String::new();
    for probe in probes {
        let kind = site.source(&probe.name).map_or("", |s| s.config.kind());
        text += &format!("{} ({kind})\n", probe.name);
        if let Some(why) = &probe.trouble {
            text += &format!("  {why}\n");
        }
        text += &channels(site, probe);
        text += &orders(probe);
        for note in &probe.notes {
            text += &format!("  {note}\n");
        }
        text += "\n";
    }
    let silent = probes.iter().filter(|p| !p.holds()).count();
    text += &match silent {
        0 => "Every channel has a value. See that each is what the instrument shows.\n".to_owned(),
        n => format!(
            "{n} of {} sources do not give all their values.\n",
            probes.len()
        ),
    };
    text
}

fn channels(site: &Site, probe: &SourceProbe) -> String {
    if probe.channels.is_empty() {
        return String::new();
    }
    let mut table = Table::new(&[
        ("channel", Align::Left),
        ("where", Align::Left),
        ("delivered", Align::Right),
        ("is", Align::Right),
        ("quality", Align::Right),
        ("", Align::Left),
    ]);
    for channel in &probe.channels {
        let quality = channel
            .reading
            .as_ref()
            .map(|r| r.quality.flag().to_string());
        table.row([
            channel.channel.clone(),
            channel.place.clone(),
            channel.raw.chars().take(40).collect(),
            shown(site, channel).unwrap_or_default(),
            quality.unwrap_or_default(),
            channel.why.clone().unwrap_or_default(),
        ]);
    }
    table.text(2)
}

/// The same registers in every order.
fn orders(probe: &SourceProbe) -> String {
    let several = |c: &&ChannelProbe| c.orders.len() > 1;
    let mut rows = probe.channels.iter().filter(several).peekable();
    let Some(first) = rows.peek() else {
        return String::new();
    };
    let mut columns = vec![("as registers read", Align::Left)];
    columns.extend(first.orders.iter().map(|(name, _)| (*name, Align::Right)));
    let mut table = Table::new(&columns);
    for channel in rows {
        let numbers = channel.orders.iter().map(|(_, n)| significant(*n, 7));
        table.row(std::iter::once(channel.channel.clone()).chain(numbers));
    }
    table.text(2)
}

/// The value in the site's units.
fn shown(site: &Site, channel: &ChannelProbe) -> Option<String> {
    let value = channel.reading.as_ref()?.value?;
    let settings = site.channel(&ChannelId::from(channel.channel.as_str()))?;
    let dimension = match settings.kind {
        ChannelKind::Pressure | ChannelKind::Barometer => Dimension::Pressure,
        ChannelKind::Rate => Dimension::Rate,
        ChannelKind::Temperature => Dimension::Temperature,
        ChannelKind::Stage => Dimension::Length,
        ChannelKind::Rain => Dimension::Rain,
    };
    Some(site.units.show(dimension, value))
}

/// One document.
pub(super) fn json(site: &Site, probes: &[SourceProbe]) -> Value {
    let channel = |c: &ChannelProbe| {
        let orders: serde_json::Map<String, Value> = c
            .orders
            .iter()
            .map(|(name, number)| ((*name).to_owned(), json!(number)))
            .collect();
        json!({
            "channel": c.channel, "where": c.place, "delivered": c.raw,
            "raw": c.reading.as_ref().and_then(|r| r.raw),
            "si_value": c.reading.as_ref().and_then(|r| r.value),
            "shown": shown(site, c),
            "quality": c.reading.as_ref().map(|r| r.quality.flag()),
            "device": c.reading.as_ref().map(|r| r.device),
            "why": c.why, "orders": orders,
        })
    };
    let source = |p: &SourceProbe| {
        json!({
            "source": p.name.to_string(), "holds": p.holds(), "trouble": p.trouble,
            "channels": p.channels.iter().map(channel).collect::<Vec<_>>(), "notes": p.notes,
        })
    };
    json!({
        "holds": probes.iter().all(SourceProbe::holds),
        "file": site.path.display().to_string(),
        "sources": probes.iter().map(source).collect::<Vec<_>>(),
    })
}
