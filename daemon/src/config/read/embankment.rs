//! `[embankment]`: what an embankment dam answers to, in place of layers, edge and wells.

use borewake_model::lagged::Driver;
use borewake_model::units::WATER_WEIGHT;

use super::super::section::{At, Section};
use super::super::{ChannelSettings, DriveSettings, EmbankmentSettings};
use crate::record::{ChannelId, ChannelKind, Holds};

/// The embankment as written.
pub(super) struct EmbankmentRead {
    pub(super) settings: EmbankmentSettings,
    /// Channel of each drive, in the order of the settings, with the key that names it.
    pub(super) channels: Vec<(&'static str, At<String>)>,
}

/// Parts of a field of wells, which an embankment has not.
const OF_WELLS: [&str; 8] = [
    "layer",
    "zone",
    "edge",
    "barrier",
    "stage",
    "well",
    "neighbour",
    "penetration",
];

/// Keys of the drives.
const DRIVES: [(&str, Driver); 5] = [
    ("pool", Driver::Pool),
    ("tailwater", Driver::Tailwater),
    ("rain", Driver::Rain),
    ("temperature", Driver::Temperature),
    ("barometer", Driver::Barometer),
];

/// Kinds of channel that a drive may have.
pub(super) fn kinds(driver: Driver) -> &'static [ChannelKind] {
    match driver {
        Driver::Pool | Driver::Tailwater => &[ChannelKind::Stage, ChannelKind::Pressure],
        Driver::Rain => &[ChannelKind::Rain],
        Driver::Temperature => &[ChannelKind::Temperature],
        Driver::Barometer => &[ChannelKind::Barometer],
    }
}

/// What a drive's channel is multiplied by: levels become pressures.
pub(super) fn factor(kind: ChannelKind) -> f64 {
    if kind == ChannelKind::Stage {
        WATER_WEIGHT
    } else {
        1.0
    }
}

/// How a drive stands to its instants. A level is the one at its instant: held up to it, gauge and pool are seen together.
pub(super) fn holds(channel: &ChannelSettings) -> Holds {
    if channel.kind == ChannelKind::Rain {
        channel.holds
    } else {
        Holds::Before
    }
}

/// Reads `[embankment]`; `None` where the site is none.
pub(super) fn embankment(root: &mut Section<'_>) -> Option<EmbankmentRead> {
    let mut section = root.table("embankment")?;
    let mut channels = Vec::new();
    let mut drives = Vec::new();
    for (key, driver) in DRIVES {
        let mend = "pool = \"pool.stage\", the channel of the level behind the embankment";
        let channel = if driver == Driver::Pool {
            section.must(key, mend, |s, k| s.text(k))
        } else {
            section.text(key)
        };
        // A pool that is missing has been said; the rest is looked at with a stand-in.
        let channel = match (channel, driver) {
            (None, Driver::Pool) => At {
                value: String::new(),
                span: section.span.clone(),
            },
            (None, _) => continue,
            (Some(channel), _) => channel,
        };
        drives.push(DriveSettings {
            driver,
            channel: ChannelId::from(channel.value.as_str()),
            factor: 1.0,
            holds: Holds::After,
        });
        channels.push((key, channel));
    }
    let season = section.truth("season").is_none_or(|t| t.value);
    let ageing = section.truth("ageing").is_none_or(|t| t.value);
    section.close();
    for key in OF_WELLS {
        let what = "an embankment is a vertical section with a free surface: nothing of a field of wells describes it";
        let mend = "leave it out, or leave [embankment] out where the site is a field of wells";
        root.refused(key, what, mend);
    }
    Some(EmbankmentRead {
        settings: EmbankmentSettings {
            drives,
            season,
            ageing,
        },
        channels,
    })
}
