//! A site file in tables, for `check`.

mod json;
mod words;

use std::fmt::Write as _;

use borewake_model::ground::Seat;
use borewake_model::units::{Dimension, significant};
use serde_json::Value;

use super::table::{Align, Table};
use crate::config::{PublishSettings, Site};
pub(super) use json::summary_json;
use words::{
    azimuth_words, broker_words, edge_word, layer_name, layer_names, priority_word, reference_word,
    side_word, source_words, string_word,
};

/// The model as commissioned, for people and for programs.
#[derive(Debug, Clone)]
pub struct GroundSummary {
    /// Lines of text, each starting with two blanks.
    pub text: String,
    /// The same as JSON.
    pub json: Value,
}

/// The site in tables.
pub(super) fn summary_text(site: &Site) -> String {
    let show = |dimension, value| site.units.show(dimension, value);
    let time = |t: std::time::Duration| show(Dimension::Time, t.as_secs_f64());
    let mut text = format!("{} ({})\n", site.name, site.id);
    let watch = &site.watch;
    let _ = writeln!(
        text,
        "  store {}\n  blocks of {}, waiting {} for late readings; a missing rate is held for {}\n  one false alarm in {}",
        site.store.folder.display(),
        time(watch.block),
        time(watch.lateness),
        time(watch.hold_rate),
        show(Dimension::Time, watch.false_alarm_interval),
    );
    let parts = [
        ("Layers", layers(site)),
        ("Zones", zones(site)),
        ("Embankment", embankment(site)),
        ("Edge", edge(site)),
        ("Barriers", barriers(site)),
        ("Stages", stages(site)),
        ("Wells", wells(site)),
        ("Neighbours", neighbours(site)),
        ("Gauges", gauges(site)),
        ("Sources", sources(site)),
        ("Limits", limits(site)),
        ("Publish", publish(site)),
    ];
    for (title, part) in parts {
        if !part.is_empty() {
            let _ = write!(text, "\n{title}\n{part}");
        }
    }
    text
}

/// A heading with the unit its column is shown in.
fn head(site: &Site, name: &str, dimension: Dimension) -> String {
    let unit = site.units.unit(dimension);
    if unit.is_empty() {
        name.to_owned()
    } else {
        format!("{name} {unit}")
    }
}

/// A number in the site's unit.
fn number(site: &Site, dimension: Dimension, value: f64) -> String {
    significant(site.units.number(dimension, value), 4)
}

/// A coordinate in the site's unit, to a tenth.
fn coordinate(site: &Site, value: f64) -> String {
    let text = format!("{:.1}", site.units.number(Dimension::Length, value));
    text.strip_suffix(".0").map(str::to_owned).unwrap_or(text)
}

fn text_of(table: &Table) -> String {
    if table.is_empty() {
        String::new()
    } else {
        table.text(2)
    }
}

fn layers(site: &Site) -> String {
    let mut table = Table::new(&[
        ("name", Align::Left),
        (
            &head(site, "transmissivity", Dimension::Transmissivity),
            Align::Right,
        ),
        (
            &head(site, "storativity", Dimension::Storativity),
            Align::Right,
        ),
        ("diffusivity m2/s", Align::Right),
        ("anisotropy", Align::Left),
        (
            &head(site, "leakance below", Dimension::Leakance),
            Align::Right,
        ),
    ]);
    for layer in &site.ground.layers {
        let below = layer.leakance_below;
        table.row([
            layer.name.clone(),
            number(site, Dimension::Transmissivity, layer.transmissivity),
            number(site, Dimension::Storativity, layer.storativity),
            significant(layer.transmissivity / layer.storativity, 4),
            layer
                .anisotropy
                .map_or_else(|| "-".to_owned(), azimuth_words),
            below.map_or_else(|| "-".to_owned(), |l| number(site, Dimension::Leakance, l)),
        ]);
    }
    text_of(&table)
}

fn zones(site: &Site) -> String {
    let mut table = Table::new(&[
        ("name", Align::Left),
        ("layer", Align::Left),
        ("corners", Align::Right),
        (
            &head(site, "transmissivity", Dimension::Transmissivity),
            Align::Right,
        ),
        (
            &head(site, "storativity", Dimension::Storativity),
            Align::Right,
        ),
        ("diffusivity m2/s", Align::Right),
    ]);
    for zone in &site.ground.zones {
        table.row([
            zone.name.clone(),
            layer_name(site, zone.layer),
            zone.outline.len().to_string(),
            number(site, Dimension::Transmissivity, zone.transmissivity),
            number(site, Dimension::Storativity, zone.storativity),
            significant(zone.transmissivity / zone.storativity, 4),
        ]);
    }
    text_of(&table)
}

fn embankment(site: &Site) -> String {
    let Some(embankment) = &site.embankment else {
        return String::new();
    };
    let mut table = Table::new(&[
        ("answers to", Align::Left),
        ("channel", Align::Left),
        ("as", Align::Left),
    ]);
    for drive in &embankment.drives {
        let level = drive.factor != 1.0;
        table.row([
            drive.driver.name().to_owned(),
            drive.channel.to_string(),
            if level { "level, as pressure" } else { "read" }.to_owned(),
        ]);
    }
    let own = [("season", embankment.season), ("ageing", embankment.ageing)];
    for (name, _) in own.into_iter().filter(|(_, on)| *on) {
        table.row([name, "-", "-"]);
    }
    text_of(&table)
}

fn edge(site: &Site) -> String {
    if site.embankment.is_some() {
        return String::new();
    }
    let edge = &site.ground.edge;
    let distance = site.units.show(Dimension::Length, edge.distance);
    let driven = site.waters.get(site.ground.stages.len());
    let by = driven.map_or_else(String::new, |w| format!(" ({})", w.channel));
    format!(
        "  {}{by}, {distance} from the centre\n",
        edge_word(edge.kind)
    )
}

fn stages(site: &Site) -> String {
    let mut table = Table::new(&[
        ("name", Align::Left),
        ("corners", Align::Right),
        ("layer", Align::Left),
        (
            &head(site, "conductance", Dimension::Conductance),
            Align::Right,
        ),
        ("channel", Align::Left),
    ]);
    for (stage, water) in site.ground.stages.iter().zip(&site.waters) {
        table.row([
            stage.name.clone(),
            stage.line.len().to_string(),
            layer_name(site, stage.layer),
            number(site, Dimension::Conductance, stage.conductance),
            water.channel.to_string(),
        ]);
    }
    text_of(&table)
}

fn barriers(site: &Site) -> String {
    let mut table = Table::new(&[
        ("name", Align::Left),
        ("corners", Align::Right),
        (
            &head(site, "conductance", Dimension::Conductance),
            Align::Right,
        ),
    ]);
    for barrier in &site.ground.barriers {
        table.row([
            barrier.name.clone(),
            barrier.line.len().to_string(),
            number(site, Dimension::Conductance, barrier.conductance),
        ]);
    }
    text_of(&table)
}

fn wells(site: &Site) -> String {
    let mut table = Table::new(&[
        ("name", Align::Left),
        (&head(site, "east", Dimension::Length), Align::Right),
        (&head(site, "north", Dimension::Length), Align::Right),
        ("layer", Align::Left),
        (&head(site, "radius", Dimension::Length), Align::Right),
        ("skin", Align::Right),
        ("rate", Align::Left),
        ("share %", Align::Right),
        ("meter", Align::Left),
        ("past rates", Align::Right),
    ]);
    for (well, settings) in site.ground.wells.iter().zip(&site.wells) {
        let meter = settings.meter.map_or_else(
            || "from the data".to_owned(),
            |m| {
                format!(
                    "{} % bias, {} % over {}",
                    significant(100.0 * m.bias, 3),
                    significant(100.0 * m.error, 3),
                    site.units.show(Dimension::Time, m.memory.as_secs_f64())
                )
            },
        );
        table.row([
            well.name.clone(),
            coordinate(site, well.at[0]),
            coordinate(site, well.at[1]),
            layer_names(site, well),
            number(site, Dimension::Length, well.radius),
            significant(well.skin, 3),
            settings.rate.to_string(),
            significant(100.0 * settings.share, 4),
            meter,
            settings.past.len().to_string(),
        ]);
    }
    text_of(&table)
}

fn neighbours(site: &Site) -> String {
    let mut table = Table::new(&[
        ("name", Align::Left),
        (&head(site, "east", Dimension::Length), Align::Right),
        (&head(site, "north", Dimension::Length), Align::Right),
        ("layer", Align::Left),
    ]);
    for neighbour in &site.ground.neighbours {
        table.row([
            neighbour.name.clone(),
            coordinate(site, neighbour.at[0]),
            coordinate(site, neighbour.at[1]),
            layer_name(site, neighbour.layer),
        ]);
    }
    text_of(&table)
}

fn gauges(site: &Site) -> String {
    let mut table = Table::new(&[
        ("name", Align::Left),
        (&head(site, "east", Dimension::Length), Align::Right),
        (&head(site, "north", Dimension::Length), Align::Right),
        ("in well", Align::Left),
        ("layer", Align::Left),
        ("channel", Align::Left),
        ("reference", Align::Left),
        ("string", Align::Left),
        ("noise Pa", Align::Right),
        (&head(site, "drift", Dimension::Drift), Align::Right),
    ]);
    for (index, (gauge, settings)) in site.ground.gauges.iter().zip(&site.gauges).enumerate() {
        let ([x, y], layer) = site.ground.gauge_at(index).unwrap_or_default();
        let well = match gauge.seat {
            Seat::InWell(well) => site.ground.wells.get(well).map(|w| w.name.clone()),
            Seat::InGround { .. } => None,
        };
        let usual = |stated: bool| if stated { "" } else { "*" };
        table.row([
            gauge.name.clone(),
            coordinate(site, x),
            coordinate(site, y),
            well.unwrap_or_else(|| "-".to_owned()),
            layer_name(site, layer),
            settings.channel.to_string(),
            reference_word(settings.reference).to_owned(),
            string_word(settings.string).to_owned(),
            format!(
                "{}{}",
                significant(gauge.noise, 4),
                usual(settings.noise_stated)
            ),
            format!(
                "{}{}",
                number(site, Dimension::Drift, gauge.drift),
                usual(settings.drift_stated)
            ),
        ]);
    }
    let mut text = text_of(&table);
    if site
        .gauges
        .iter()
        .any(|g| !(g.noise_stated && g.drift_stated))
    {
        text += "  * not stated in the site file: a usual value to start from\n";
    }
    text
}

fn sources(site: &Site) -> String {
    let mut table = Table::new(&[
        ("name", Align::Left),
        ("kind", Align::Left),
        ("channels", Align::Right),
        ("at", Align::Left),
    ]);
    for source in &site.sources {
        table.row([
            source.name.to_string(),
            source.config.kind().to_owned(),
            source.config.channel_count().to_string(),
            source_words(&source.config),
        ]);
    }
    text_of(&table)
}

fn limits(site: &Site) -> String {
    let mut table = Table::new(&[
        ("alarm", Align::Left),
        ("side", Align::Left),
        (&head(site, "value", Dimension::Pressure), Align::Right),
        (&head(site, "deadband", Dimension::Pressure), Align::Right),
        ("delay", Align::Right),
        ("priority", Align::Left),
        ("author", Align::Left),
    ]);
    for limit in &site.limits {
        table.row([
            limit.alarm.to_string(),
            side_word(limit.side).to_owned(),
            number(site, Dimension::Pressure, limit.value),
            number(site, Dimension::Pressure, limit.deadband),
            site.units.show(Dimension::Time, limit.delay.as_secs_f64()),
            priority_word(limit.priority).to_owned(),
            limit.author.clone(),
        ]);
    }
    text_of(&table)
}

fn publish(site: &Site) -> String {
    let mut text = String::new();
    for publish in &site.publish {
        let PublishSettings::Mqtt(mqtt) = publish;
        let broker = broker_words(&mqtt.endpoint);
        let _ = writeln!(text, "  {broker}, under {}/{}/", mqtt.topic_root, site.id);
    }
    text
}
