//! Keeps the snapshot current.

use super::KeeperSettings;
use crate::alarm::Desk;
use crate::record::{ChannelView, GaugeView, Reading, Snapshot, Stamp, Step};

/// Alarms that are normal again are shown for so long \[µs\].
const LATELY: i64 = 7 * 24 * 3600 * Stamp::SECOND;

/// The snapshot before anything has happened.
pub(super) fn empty(settings: &KeeperSettings) -> Snapshot {
    let gauges = settings
        .alarms
        .names
        .gauges
        .iter()
        .map(|name| (name.clone(), GaugeView::default()))
        .collect();
    Snapshot {
        site: settings.alarms.names.site.clone(),
        gauges,
        ..Snapshot::default()
    }
}

/// Takes in a committed reading.
pub(super) fn take(snapshot: &mut Snapshot, reading: &Reading) {
    remember(snapshot, reading).readings += 1;
}

/// Shows a reading that was committed before the start.
pub(super) fn remember<'s>(snapshot: &'s mut Snapshot, reading: &Reading) -> &'s mut ChannelView {
    let view = snapshot
        .channels
        .entry(reading.channel.to_string())
        .or_default();
    if view.sampled.is_none_or(|newest| reading.sampled >= newest) {
        view.sampled = Some(reading.sampled);
        view.value = reading.value;
    }
    view
}

/// Takes in what the watch said of a block; an older block than the newest changes nothing shown.
pub(super) fn see(snapshot: &mut Snapshot, step: &Step, names: &[String]) {
    if snapshot.block.is_some_and(|newest| step.block < newest) {
        return;
    }
    snapshot.block = Some(step.block);
    for (index, name) in names.iter().enumerate() {
        let Some(view) = snapshot.gauges.get_mut(name) else {
            continue;
        };
        view.expectation = step.expectations.get(index).copied().flatten();
        view.blind = step.blind.get(index).copied().flatten();
        let departure = step.departures.get(index).copied().flatten();
        view.reading = view.expectation.zip(departure).map(|(e, d)| e.mean + d);
    }
}

/// Puts in what is read off elsewhere at the moment of showing.
pub(super) fn finish(snapshot: &mut Snapshot, desk: &Desk, position: i64, wall: Stamp) {
    snapshot.taken = wall;
    snapshot.position = position;
    snapshot.alarms = desk.views(wall.plus(-LATELY));
}
