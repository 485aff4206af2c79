//! The answers of an embankment's gauges, for people.

use std::fmt::Write as _;

use borewake_model::lagged::{Commissioned, Driver};
use borewake_model::units::{Dimension, significant};

use crate::cli::table::{Align, Table};
use crate::config::Site;
use crate::keeper::settings::block_plan;

/// Seconds in a day.
const DAY: f64 = 86_400.0;

/// The calibration as a table.
pub(super) fn summary(site: &Site, commissioned: &Commissioned) -> String {
    let calibration = &commissioned.calibration;
    let plan = block_plan(site);
    let (first, last) = calibration.blocks;
    let mut text = format!(
        "site          {} ({})\nhistory       {} to {}, {} blocks\nmodel         {} piezometers, each by its own lagged answer; no place is claimed\n",
        site.name,
        site.id,
        plan.start_of(first),
        plan.start_of(last + 1),
        last + 1 - first,
        calibration.answers.len(),
    );
    let _ = writeln!(
        text,
        "wander        memory {}",
        site.units
            .show(Dimension::Time, calibration.stochastic.wander_memory)
    );
    let scaling = &calibration.scaling;
    let drives = commissioned.embankment.drives.iter();
    for (driver, (least, greatest)) in drives.zip(&scaling.range) {
        let show = |value: f64| match driver {
            Driver::Pool | Driver::Tailwater | Driver::Barometer => {
                site.units.show(Dimension::Pressure, value)
            }
            Driver::Rain => site.units.show(Dimension::Rain, value),
            Driver::Temperature => format!("{} degC", significant(value, 3)),
        };
        let _ = writeln!(
            text,
            "{:<13} {} to {}",
            driver.name(),
            show(*least),
            show(*greatest)
        );
    }
    let pressure = |(value, sd): (f64, f64)| {
        let show = |v: f64| significant(site.units.number(Dimension::Pressure, v), 3);
        format!("{} +- {}", show(value), show(sd))
    };
    let unit = site.units.unit(Dimension::Pressure);
    let mut table = Table::new(&[
        ("gauge", Align::Left),
        ("share of pool %", Align::Right),
        ("mean lag d", Align::Right),
        (&format!("season {unit}"), Align::Right),
        (&format!("ageing {unit}/yr"), Align::Right),
        ("explained %", Align::Right),
        ("noise Pa", Align::Right),
        ("left (1 = all)", Align::Right),
        ("lag-1 of left", Align::Right),
    ]);
    for (index, answer) in calibration.answers.iter().enumerate() {
        let gauge = site.gauges.get(index).map_or("", |g| g.name.as_str());
        let (left, lag) = calibration.left.get(index).copied().unwrap_or_default();
        table.row([
            gauge.to_owned(),
            format!(
                "{:.1} +- {:.1}",
                100.0 * answer.response.0,
                100.0 * answer.response.1
            ),
            format!("{:.1} +- {:.1}", answer.lag.0 / DAY, answer.lag.1 / DAY),
            pressure(answer.season),
            pressure(answer.ageing),
            format!("{:.2}", 100.0 * answer.explained),
            calibration
                .noise
                .get(index)
                .map_or_else(String::new, |n| format!("{n:.1}")),
            format!("{left:.2}"),
            format!("{lag:.2}"),
        ]);
    }
    let _ = write!(text, "\n{}", table.text(0));
    text += "\nBeyond the pool levels above nothing is known: there the bands widen, and further out every gauge is blind until\n\
             commissioning has seen such a pool. What was already wrong in this history is part of the calibration and cannot\n\
             be seen. The emergency action plan comes first, whatever this program says.\n";
    text
}
