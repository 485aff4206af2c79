//! What the keeper is told, worked out from the site file.

use std::time::Duration;

use borewake_model::lagged::Driver;

use super::{KeeperSettings, Pace};
use crate::alarm::{AlarmSettings, Care, ChannelWatch, LimitSettings, Side, WatchAlarm};
use crate::config::{self, DriveSettings, Site};
use crate::watch::blocks::{BlockPlan, Feeds, WellFeed};

/// How blocks of a site are built.
#[must_use]
pub fn block_plan(site: &Site) -> BlockPlan {
    let wells = site
        .wells
        .iter()
        .map(|w| WellFeed {
            channel: w.rate.clone(),
            share: w.share,
            holds: w.holds,
            feeds: Feeds::Rate,
        })
        .chain(site.waters.iter().map(|w| WellFeed {
            channel: w.channel.clone(),
            share: w.weight,
            holds: w.holds,
            feeds: Feeds::Level,
        }))
        .chain(drives(site).iter().map(|d| WellFeed {
            channel: d.channel.clone(),
            share: d.factor,
            holds: d.holds,
            feeds: match d.driver {
                Driver::Pool | Driver::Tailwater => Feeds::Level,
                Driver::Rain => Feeds::Rain,
                Driver::Temperature | Driver::Barometer => Feeds::Colour,
            },
        }))
        .collect();
    BlockPlan {
        length: micros(site.watch.block).max(1),
        hold_rate: micros(site.watch.hold_rate),
        wells,
        gauges: site.gauges.iter().map(|g| g.channel.clone()).collect(),
    }
}

fn drives(site: &Site) -> &[DriveSettings] {
    site.embankment.as_ref().map_or(&[], |e| &e.drives)
}

impl KeeperSettings {
    /// Settings of a site. Events of a replay are marked as such.
    #[must_use]
    pub fn of(site: &Site, pace: Pace, replay: bool) -> Self {
        Self {
            plan: block_plan(site),
            lateness: micros(site.watch.lateness),
            alarms: alarm_settings(site),
            replay,
            pace,
            renew: site.commission_command(),
        }
    }
}

fn alarm_settings(site: &Site) -> AlarmSettings {
    let limits = site
        .limits
        .iter()
        .map(|limit| limit_settings(site, limit))
        .collect();
    let channels = site
        .channels
        .values()
        .filter_map(|channel| channel_watch(site, channel))
        .collect();
    let mut usual = AlarmSettings::new(site.names(), site.watch.block.as_secs_f64());
    if site.embankment.is_some() {
        usual.watch = WatchAlarm::of_embankment();
    }
    AlarmSettings {
        limits,
        channels,
        care: Care {
            shelve_at_most: site.care.shelve_at_most.as_secs_f64(),
            realarm: site.care.realarm.map(|d| d.as_secs_f64()),
            escalate: site.care.escalate.map(|d| d.as_secs_f64()),
        },
        ..usual
    }
}

fn limit_settings(site: &Site, limit: &config::LimitSettings) -> LimitSettings {
    let name = site.gauges.get(limit.gauge).map_or("", |g| g.name.as_str());
    let side = match limit.side {
        config::Side::Above => Side::Above,
        config::Side::Below => Side::Below,
    };
    let delay = limit.delay.as_secs_f64();
    LimitSettings {
        on_delay: delay,
        off_delay: delay,
        deadband: (limit.deadband > 0.0).then_some(limit.deadband),
        noise: site.ground.gauges.get(limit.gauge).map(|g| g.noise),
        priority: limit.priority,
        response: limit.response.clone(),
        practice: limit.practice.clone(),
        author: limit.author.clone(),
        ..LimitSettings::new(
            limit.alarm.clone(),
            name,
            limit.channel.clone(),
            side,
            limit.value,
        )
    }
}

/// A channel of wells and gauges that comes live is told of when it falls silent; a log has no silence.
fn channel_watch(site: &Site, channel: &config::ChannelSettings) -> Option<ChannelWatch> {
    let source = site.source(&channel.source)?;
    if matches!(source.config, config::SourceConfig::Log(_)) {
        return None;
    }
    let gauge = site.gauges.iter().position(|g| g.channel == channel.id);
    let fed = gauge.is_some()
        || site.wells.iter().any(|w| w.rate == channel.id)
        || site.waters.iter().any(|w| w.channel == channel.id)
        || drives(site).iter().any(|d| d.channel == channel.id);
    let silence = site.watch.hold_rate.as_secs_f64().max(1.0);
    fed.then(|| ChannelWatch {
        channel: channel.id.clone(),
        source: channel.source.clone(),
        gauge,
        silence,
    })
}

fn micros(span: Duration) -> i64 {
    i64::try_from(span.as_micros()).unwrap_or(i64::MAX)
}
