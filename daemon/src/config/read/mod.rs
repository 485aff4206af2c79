//! From the file's text to a [`Site`], one file a part.

mod basics;
mod cross;
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
mod zone;

use std::path::Path;

use borewake_model::ground::{Ground, Point};
use toml::de::DeTable;

use super::report::Report;
use super::section::Section;
use super::{ConfigError, Site};

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
    let watch = basics::watch(&mut root);

    let layers = layer::layers(&mut root);
    let zones = zone::zones(&mut root, &layers);
    let edge = ground::edge(&mut root);
    let barriers = ground::barriers(&mut root);
    let neighbours = ground::neighbours(&mut root, &layers);
    ground::not_yet(&mut root);
    let wells = points::wells(&mut root, &layers);
    let gauges = points::gauges(&mut root, &layers, &wells);

    let sources = sources::sources(&mut root, folder);
    let limits = limits::limits(&mut root, &gauges);
    let publish = limits::publish(&mut root, folder);
    let care = basics::alarms(&mut root);
    let http = basics::http(&mut root);
    root.close();

    let points: Vec<Point> = cross::points(&wells, &gauges);
    let ground = Ground {
        edge: ground::edge_of(report, edge, &layers, &zones, &points),
        layers: layers.iter().map(|l| l.layer.clone()).collect(),
        zones: zones.into_iter().map(|z| z.value).collect(),
        barriers: barriers.iter().map(|b| b.value.clone()).collect(),
        wells: wells.iter().map(|w| w.well.clone()).collect(),
        gauges: gauges.iter().map(|g| g.gauge.clone()).collect(),
        neighbours: neighbours.iter().map(|n| n.value.clone()).collect(),
    };
    cross::places(report, &ground, &wells, &gauges, &neighbours, &barriers);
    let channels = cross::channels(report, &sources, &wells, &gauges);
    let mut well_settings: Vec<_> = wells.into_iter().map(|w| w.settings).collect();
    for well in &mut well_settings {
        well.holds = channels
            .named
            .get(&well.rate)
            .map_or(well.holds, |c| c.holds);
    }
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
        gauges: gauges.into_iter().map(|g| g.settings).collect(),
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
