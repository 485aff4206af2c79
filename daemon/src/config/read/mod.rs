//! From the file's text to a [`Site`], one file a part.

mod basics;
mod cross;
mod embankment;
mod ground;
mod instrument;
mod layer;
mod limits;
mod modbus;
mod mqtt;
mod points;
mod quality;
mod sdi12;
mod serial;
mod sources;
mod stage;
mod zone;

use std::path::Path;

use borewake_model::ground::{Ground, Point};
use borewake_model::units::WATER_WEIGHT;
use toml::de::DeTable;

use super::report::Report;
use super::section::Section;
use super::{ConfigError, Site, WaterSettings};
use crate::record::{ChannelId, ChannelKind, Holds};
use cross::WaterRead;

/// Reads the text of a site file. Nothing but the text is looked at; `path` is where relative paths start.
///
/// # Errors
/// Every mistake in the text, at once.
pub fn read(text: &str, path: &Path) -> Result<Site, ConfigError> {
    let (table, errors) = DeTable::parse_recoverable(text);
    let report = Report::new(text);
    let broken = report.syntax(&errors);
    let site = walk(&report, table.get_ref(), text, path);
    let (mistakes, notes) = report.finish(broken);
    if mistakes.is_empty() {
        Ok(Site { notes, ..site })
    } else {
        Err(ConfigError::Wrong {
            path: path.to_owned(),
            mistakes,
        })
    }
}

/// Walks the whole file. Where something is wrong a stand-in takes its place, so that the rest is looked at too.
fn walk<'s>(report: &'s Report<'s>, table: &'s DeTable<'s>, text: &str, path: &Path) -> Site {
    let folder = path.parent().unwrap_or(Path::new(""));
    let mut root = Section::root(report, table);
    let basics = basics::site(&mut root);
    let store = basics::store(&mut root, folder, &basics.id);
    let embankment = embankment::embankment(&mut root);
    let watch = basics::watch(&mut root, embankment.is_some());

    let layers = if embankment.is_some() {
        Vec::new()
    } else {
        layer::layers(&mut root)
    };
    let zones = zone::zones(&mut root, &layers);
    let edge = ground::edge(&mut root);
    let barriers = ground::barriers(&mut root);
    let neighbours = ground::neighbours(&mut root, &layers);
    let stages = stage::stages(&mut root, &layers);
    ground::not_yet(&mut root);
    let wells = points::wells(&mut root, &layers);
    let gauges = points::gauges(&mut root, &layers, &wells);

    let sources = sources::sources(&mut root, folder);
    let limits = limits::limits(&mut root, &gauges);
    let publish = limits::publish(&mut root, folder);
    let care = basics::alarms(&mut root);
    let http = basics::http(&mut root);
    root.close();

    let points: Vec<(String, Point)> = cross::points(&wells, &gauges);
    let mut waters: Vec<WaterRead> = stages
        .iter()
        .map(|s| WaterRead {
            name: s.stage.name.clone(),
            key: format!("{}: channel", s.path),
            channel: s.channel.clone(),
        })
        .collect();
    waters.extend(edge.stage.clone().map(|channel| WaterRead {
        name: "edge".to_owned(),
        key: "edge: stage".to_owned(),
        channel,
    }));
    let ground = Ground {
        edge: if embankment.is_some() {
            ground::no_edge()
        } else {
            ground::edge_of(report, edge, &layers, &zones, &points)
        },
        layers: layers.iter().map(|l| l.layer.clone()).collect(),
        zones: zones.into_iter().map(|z| z.value).collect(),
        barriers: barriers.iter().map(|b| b.value.clone()).collect(),
        stages: stages.into_iter().map(|s| s.stage).collect(),
        wells: wells.iter().map(|w| w.well.clone()).collect(),
        gauges: gauges.iter().map(|g| g.gauge.clone()).collect(),
        neighbours: neighbours.iter().map(|n| n.value.clone()).collect(),
    };
    cross::places(report, &ground, &wells, &gauges, &neighbours, &barriers);
    let channels = cross::channels(
        report,
        &sources,
        &wells,
        &gauges,
        &waters,
        embankment.as_ref(),
    );
    let mut well_settings: Vec<_> = wells.into_iter().map(|w| w.settings).collect();
    for well in &mut well_settings {
        well.holds = channels
            .named
            .get(&well.rate)
            .map_or(well.holds, |c| c.holds);
    }
    let waters = waters
        .into_iter()
        .map(|water| {
            let id = ChannelId::from(water.channel.value.as_str());
            let found = channels.named.get(&id);
            let level = found.is_some_and(|c| c.kind == ChannelKind::Stage);
            WaterSettings {
                name: water.name,
                holds: found.map_or(Holds::default(), |c| c.holds),
                weight: if level { WATER_WEIGHT } else { 1.0 },
                channel: id,
            }
        })
        .collect();
    let embankment = embankment.map(|read| {
        let mut settings = read.settings;
        for drive in &mut settings.drives {
            if let Some(channel) = channels.named.get(&drive.channel) {
                drive.holds = embankment::holds(channel);
                drive.factor = embankment::factor(channel.kind);
            }
        }
        settings
    });
    Site {
        path: path.to_owned(),
        text: text.to_owned(),
        id: basics.id,
        name: basics.name,
        units: basics.units,
        origin: basics.origin,
        store,
        ground,
        wells: well_settings,
        waters,
        gauges: gauges.into_iter().map(|g| g.settings).collect(),
        embankment,
        channels: channels.named,
        patterns: channels.patterns,
        sources: sources.into_iter().map(|s| s.settings).collect(),
        watch,
        limits,
        publish,
        care,
        http,
        notes: Vec::new(),
    }
}
