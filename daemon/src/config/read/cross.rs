//! What only the whole file can show: references, and places that fall together.

use std::collections::BTreeMap;

use borewake_model::ground::{Barrier, Ground, Neighbour, Point, Seat};
use borewake_model::units::nearest;

use super::super::report::Report;
use super::super::section::At;
use super::super::{ChannelSettings, PatternChannel};
use super::embankment::{EmbankmentRead, kinds};
use super::points::{GaugeRead, WellRead};
use super::sources::{ChannelRead, SourceRead};
use crate::record::{ChannelId, ChannelKind};

/// Channels of the site.
pub(super) struct Channels {
    pub(super) named: BTreeMap<ChannelId, ChannelSettings>,
    pub(super) patterns: Vec<PatternChannel>,
}

/// Open water as written: a stage, or what drives the edge.
pub(super) struct WaterRead {
    pub(super) name: String,
    /// The key of its channel, for messages.
    pub(super) key: String,
    pub(super) channel: At<String>,
}

/// Places of wells and gauges that could be read, and whose they are.
pub(super) fn points(wells: &[WellRead], gauges: &[GaugeRead]) -> Vec<(String, Point)> {
    let placed = wells.iter().filter(|w| w.placed);
    let wells = placed.flat_map(|w| {
        let all = w.well.trace.iter().copied().chain([w.well.at]);
        all.map(|at| (w.path.clone(), at))
    });
    let gauges = gauges
        .iter()
        .filter_map(|g| Some((g.path.clone(), g.place?.0)));
    wells.chain(gauges).collect()
}

/// Gathers channels and checks every reference to one.
pub(super) fn channels(
    report: &Report<'_>,
    sources: &[SourceRead],
    wells: &[WellRead],
    gauges: &[GaugeRead],
    waters: &[WaterRead],
    embankment: Option<&EmbankmentRead>,
) -> Channels {
    let all: Vec<&ChannelRead> = sources.iter().flat_map(|s| &s.channels).collect();
    let (plain, patterns): (Vec<&ChannelRead>, Vec<&ChannelRead>) =
        all.into_iter().partition(|c| c.pattern.is_plain());
    let mut channels = Channels {
        named: BTreeMap::new(),
        patterns: Vec::new(),
    };
    for read in &plain {
        let known = channels.named.get(&read.settings.id);
        if let Some(known) = known.filter(|_| !read.id.value.is_empty()) {
            let what = format!("source \"{}\" has a channel of this name", known.source);
            let mend = "give every channel a name of its own";
            report.value(&read.id.span, format!("{}: id", read.path), what, mend);
            continue;
        }
        if let Some(pattern) = patterns.iter().find(|p| p.pattern.fits(&read.id.value)) {
            let text = format!(
                "readings that fit \"{}\" of source \"{}\" are kept under this name too",
                pattern.pattern, pattern.settings.source
            );
            report.note(&read.id.span, format!("{}: id", read.path), text);
        }
        channels
            .named
            .insert(read.settings.id.clone(), read.settings.clone());
    }
    for read in &patterns {
        if let Some(same) = channels.patterns.iter().find(|p| p.id == read.pattern) {
            let what = format!(
                "source \"{}\" has channels of this name",
                same.settings.source
            );
            let mend = "give every channel a name of its own";
            report.value(&read.id.span, format!("{}: id", read.path), what, mend);
            continue;
        }
        channels.patterns.push(PatternChannel {
            id: read.pattern.clone(),
            settings: read.settings.clone(),
        });
    }
    for well in wells {
        let key = format!("{}: rate", well.path);
        channels.resolve(report, key, &well.rate, &[ChannelKind::Rate]);
    }
    for gauge in gauges {
        let key = format!("{}: channel", gauge.path);
        channels.resolve(report, key, &gauge.channel, &[ChannelKind::Pressure]);
    }
    for water in waters {
        let kinds = [ChannelKind::Stage, ChannelKind::Pressure];
        channels.resolve(report, water.key.clone(), &water.channel, &kinds);
    }
    if let Some(embankment) = embankment {
        let drives = embankment.settings.drives.iter();
        for (drive, (key, channel)) in drives.zip(&embankment.channels) {
            let key = format!("embankment: {key}");
            channels.resolve(report, key, channel, kinds(drive.driver));
        }
        taken_twice(report, embankment, gauges);
    }
    for read in sources.iter().flat_map(|s| &s.channels) {
        for companion in &read.companions {
            let key = companion.key.clone();
            channels.resolve(report, key, &companion.channel, &[companion.kind]);
        }
    }
    shares(report, wells);
    one_gauge_each(report, gauges);
    one_source_a_port(report, sources);
    unused(report, &plain, wells, gauges, waters, embankment);
    channels
}

impl Channels {
    /// Finds a channel that is referred to, and gives one that a pattern makes its own entry.
    fn resolve(
        &mut self,
        report: &Report<'_>,
        key: String,
        at: &At<String>,
        kinds: &[ChannelKind],
    ) {
        // What is missing or empty has been said.
        if at.value.is_empty() {
            return;
        }
        let id = ChannelId::from(at.value.as_str());
        if !self.named.contains_key(&id) {
            let pattern = self.patterns.iter().find(|p| p.id.fits(&at.value));
            let made = pattern.map(|p| ChannelSettings {
                id: id.clone(),
                ..p.settings.clone()
            });
            match made {
                Some(made) => {
                    self.named.insert(id.clone(), made);
                }
                None => {
                    let names = self.named.keys().map(|k| &*k.0);
                    let patterns = self.patterns.iter().map(|p| p.id.as_str());
                    let near = nearest(&at.value, names.chain(patterns))
                        .map(|n| format!("did you mean \"{n}\"? "))
                        .unwrap_or_default();
                    let what = "no source has a channel of this name";
                    let mend = format!("{near}add a [[source.channel]] with id = \"{}\"", at.value);
                    report.dangling(&at.span, key, what, mend);
                    return;
                }
            }
        }
        let Some(found) = self.named.get(&id) else {
            return;
        };
        if !kinds.contains(&found.kind) {
            let due: Vec<&str> = kinds.iter().map(|k| k.name()).collect();
            let what = format!(
                "a channel of kind {} is due, and this one of source \"{}\" is of kind {}",
                due.join(" or "),
                found.source,
                found.kind.name()
            );
            let mend = format!(
                "name another channel, or give it kind = \"{}\"",
                due.first().copied().unwrap_or_default()
            );
            report.value(&at.span, key, what, mend);
        }
    }
}

/// Wells on one meter take shares of it that make at most the whole.
fn shares(report: &Report<'_>, wells: &[WellRead]) {
    let mut taken: BTreeMap<&str, f64> = BTreeMap::new();
    for well in wells.iter().filter(|w| !w.rate.value.is_empty()) {
        let total = taken.entry(&well.rate.value).or_insert(0.0);
        *total += well.settings.share;
        if *total > 1.0 + 1e-9 {
            let what = "the wells on this meter take more than the whole of it";
            let mend = "write rate = { channel = \"…\", share = 0.5 } at each of them";
            report.value(&well.rate.span, format!("{}: rate", well.path), what, mend);
        }
    }
}

/// Two gauges on one channel would count one reading twice.
fn one_gauge_each(report: &Report<'_>, gauges: &[GaugeRead]) {
    let mut taken: BTreeMap<&str, &str> = BTreeMap::new();
    for gauge in gauges.iter().filter(|g| !g.channel.value.is_empty()) {
        if let Some(other) = taken.insert(&gauge.channel.value, &gauge.path) {
            let what = format!("{other} takes this channel");
            let mend = "give every gauge a channel of its own";
            let key = format!("{}: channel", gauge.path);
            report.value(&gauge.channel.span, key, what, mend);
        }
    }
}

/// What drives an embankment is no gauge of it, and drives it once.
fn taken_twice(report: &Report<'_>, embankment: &EmbankmentRead, gauges: &[GaugeRead]) {
    let mut taken: BTreeMap<&str, String> = gauges
        .iter()
        .map(|g| (g.channel.value.as_str(), g.path.clone()))
        .collect();
    for (key, channel) in &embankment.channels {
        if channel.value.is_empty() {
            continue;
        }
        if let Some(other) = taken.insert(&channel.value, format!("`{key}`")) {
            let what = format!("{other} takes this channel");
            let mend = "name the channel of another instrument";
            report.value(&channel.span, format!("embankment: {key}"), what, mend);
        }
    }
}

/// Two sources on one port would read each other's answers.
fn one_source_a_port(report: &Report<'_>, sources: &[SourceRead]) {
    let mut taken: BTreeMap<&str, &str> = BTreeMap::new();
    for source in sources {
        let Some(port) = &source.port else { continue };
        if let Some(other) = taken.insert(&port.value, &source.path) {
            let what = format!("{other} holds this port");
            let mend = "put all channels of one line under one source";
            report.value(&port.span, format!("{}: port", source.path), what, mend);
        }
    }
}

/// Notes pressures and rates that are kept but not watched.
fn unused(
    report: &Report<'_>,
    channels: &[&ChannelRead],
    wells: &[WellRead],
    gauges: &[GaugeRead],
    waters: &[WaterRead],
    embankment: Option<&EmbankmentRead>,
) {
    let drives = |id: &str| {
        let channels = embankment.map_or(&[][..], |e| &e.channels);
        channels.iter().any(|(_, c)| c.value == id)
    };
    for read in channels {
        let id = &read.id.value;
        let used = match read.settings.kind {
            ChannelKind::Pressure => {
                gauges.iter().any(|g| g.channel.value == *id)
                    || waters.iter().any(|w| w.channel.value == *id)
                    || drives(id)
            }
            // The weirs of an embankment are kept to be looked at.
            ChannelKind::Rate => embankment.is_some() || wells.iter().any(|w| w.rate.value == *id),
            _ => true,
        };
        if !used && !id.is_empty() {
            let text = "kept, but no well or gauge takes it";
            report.note(&read.id.span, read.path.clone(), text);
        }
    }
}

/// Checks that no two things that must be apart fall together.
pub(super) fn places(
    report: &Report<'_>,
    ground: &Ground,
    wells: &[WellRead],
    gauges: &[GaugeRead],
    neighbours: &[At<Neighbour>],
    barriers: &[At<Barrier>],
) {
    let placed = wells.iter().filter(|w| w.placed);
    let wells: Vec<&WellRead> = placed.filter(|w| w.well.trace.is_empty()).collect();
    for (index, well) in wells.iter().enumerate() {
        for other in wells.iter().take(index) {
            if well.well.layers().any(|l| other.well.meets(l))
                && apart(well.well.at, other.well.at) <= well.well.radius + other.well.radius
            {
                let what = format!("{} stands at the same place", other.path);
                let mend = "two wells in one layer must be apart by more than their radii";
                report.value(&well.at, format!("{}: at", well.path), what, mend);
            }
        }
        for barrier in barriers {
            if to_line(well.well.at, &barrier.value.line) <= 2.0 * well.well.radius {
                let what = format!("it stands on barrier \"{}\"", barrier.value.name);
                let mend = "move the well or the line to the side the well is on";
                report.value(&well.at, format!("{}: at", well.path), what, mend);
            }
        }
    }
    for (gauge, described) in gauges.iter().zip(&ground.gauges) {
        let (Seat::InGround { .. }, Some((at, layer))) = (described.seat, gauge.place) else {
            continue;
        };
        let near = |w: &&&WellRead| w.well.meets(layer) && apart(at, w.well.at) <= w.well.radius;
        if let Some(well) = wells.iter().find(near) {
            let what = format!("it sits inside {}", well.path);
            let mend = format!("write well = \"{}\" in place of `at`", well.well.name);
            report.value(&gauge.at, format!("{}: at", gauge.path), what, mend);
        }
    }
    for neighbour in neighbours {
        let at = neighbour.value.at;
        let near = |w: &&&WellRead| {
            w.well.meets(neighbour.value.layer) && apart(at, w.well.at) <= 2.0 * w.well.radius
        };
        if let Some(well) = wells.iter().find(near) {
            let what = format!("{} stands at the same place", well.path);
            let mend = "a well whose rate is known is no neighbour: leave one of the two out";
            let key = format!("neighbour \"{}\": at", neighbour.value.name);
            report.value(&neighbour.span, key, what, mend);
        }
    }
}

/// Distance of two places \[m\].
fn apart(a: Point, b: Point) -> f64 {
    (a[0] - b[0]).hypot(a[1] - b[1])
}

/// Distance of a place from a line \[m\].
fn to_line(at: Point, line: &[Point]) -> f64 {
    let mut least = f64::INFINITY;
    for pair in line.windows(2) {
        let [a, b] = pair else { continue };
        let (dx, dy) = (b[0] - a[0], b[1] - a[1]);
        let square = dx * dx + dy * dy;
        let along = if square > 0.0 {
            (((at[0] - a[0]) * dx + (at[1] - a[1]) * dy) / square).clamp(0.0, 1.0)
        } else {
            0.0
        };
        least = least.min(apart(at, [a[0] + along * dx, a[1] + along * dy]));
    }
    least
}
