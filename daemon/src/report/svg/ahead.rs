//! What lies ahead as one picture: a panel a gauge with what was read, the mean and its band, and limits; below them the
//! rates that are planned.

use std::fmt::Write as _;

use borewake_model::units::{Dimension, UnitSystem};

use super::axis;
use super::frame::{Frame, Scale, draw, escaped, extent, text};
use super::path::{Dot, area, line, thin};
use super::{BAND, LEFT, MOST_TIMES, RIGHT, STYLE, WIDTH, panel};
use crate::record::{Expectation, Stamp};

const TOP: f64 = 132.0;
const TALL: f64 = 150.0;
const GAP: f64 = 54.0;

/// What is drawn.
#[derive(Debug, Clone)]
pub struct AheadPlot {
    /// Heading.
    pub title: String,
    /// How numbers are shown.
    pub units: UnitSystem,
    /// Where readings end and the forecast begins.
    pub now: Stamp,
    /// One a gauge.
    pub gauges: Vec<GaugeAhead>,
    /// One a well: its name and its rate from each instant on \[m3/s\].
    pub rates: Vec<(String, Vec<(Stamp, f64)>)>,
}

/// One gauge.
#[derive(Debug, Clone)]
pub struct GaugeAhead {
    /// Its name.
    pub name: String,
    /// What it showed \[Pa\], in order of time.
    pub read: Vec<(Stamp, f64)>,
    /// What it is expected to show.
    pub expected: Vec<(Stamp, Expectation)>,
    /// Limits \[Pa\].
    pub limits: Vec<f64>,
}

/// Draws what lies ahead.
#[must_use]
pub fn ahead_plot(plot: &AheadPlot) -> String {
    let instants = plot.gauges.iter().flat_map(|g| {
        let read = g.read.iter().map(|(at, _)| *at);
        read.chain(g.expected.iter().map(|(at, _)| *at))
    });
    let (from, to) = instants.fold((plot.now, plot.now), |(a, b), at| (a.min(at), b.max(at)));
    let frame = Frame {
        from,
        to,
        units: plot.units,
    };
    let panels = plot.gauges.len() + usize::from(!plot.rates.is_empty());
    let top = |index: usize| {
        let index = u32::try_from(index).unwrap_or(u32::MAX);
        TOP + f64::from(index) * (TALL + GAP)
    };
    let bottom = top(panels) - GAP;
    let height = bottom + 74.0;
    let title = escaped(&plot.title);
    let mut svg = format!(
        "<svg xmlns=\"http://www.w3.org/2000/svg\" viewBox=\"0 0 {WIDTH} {height}\" role=\"img\" aria-label=\"{title}\">\n\
<title>{title}</title>\n<style>{STYLE}\
.limit{{stroke:#c8431b;stroke-width:1.8;stroke-dasharray:9 4;fill:none}}.now{{stroke:#22303c;stroke-width:1.2;stroke-dasharray:2 3;fill:none}}\
.well{{fill:none;stroke:#22303c;stroke-width:1.8}}.w1{{stroke:#1f6fb5;stroke-dasharray:9 3}}.w2{{stroke:#c8431b;stroke-dasharray:3 3}}.w3{{stroke:#5d7a36;stroke-dasharray:12 3 3 3}}</style>\n\
<rect class=\"paper\" width=\"{WIDTH}\" height=\"{height}\"/>\n\
<text class=\"title\" x=\"16\" y=\"32\">{title}</text>\n\
<g class=\"legend\"><path class=\"reading\" d=\"M16 62h30\"/><text x=\"52\" y=\"68\">reading</text>\
<path class=\"expectation\" d=\"M150 62h30\"/><text x=\"186\" y=\"68\">forecast</text>\
<rect class=\"band\" x=\"290\" y=\"52\" width=\"30\" height=\"20\"/><text x=\"328\" y=\"68\">95 % band</text>\
<path class=\"limit\" d=\"M444 62h30\"/><text x=\"482\" y=\"68\">limit</text>\
<path class=\"now\" d=\"M560 52v20\"/><text x=\"570\" y=\"68\">last reading</text></g>\n"
    );
    let ticks = axis::times(from, to, MOST_TIMES);
    for index in 0..panels {
        for (at, _) in &ticks {
            let x = frame.x(*at);
            draw(
                &mut svg,
                "grid",
                &line(&[(x, top(index)), (x, top(index) + TALL)]),
            );
        }
    }
    for (index, gauge) in plot.gauges.iter().enumerate() {
        let at = (top(index), top(index) + TALL);
        one(&mut svg, &frame, gauge, at, index);
    }
    if !plot.rates.is_empty() {
        let first = top(plot.gauges.len());
        rates(&mut svg, &frame, plot, (first, first + TALL));
    }
    let x = frame.x(plot.now);
    draw(&mut svg, "now", &line(&[(x, TOP), (x, bottom)]));
    for (index, (at, shown)) in ticks.iter().enumerate() {
        let class = if index % 2 == 1 { "time odd" } else { "time" };
        text(&mut svg, class, (frame.x(*at), bottom + 24.0), shown);
    }
    let day = |at| axis::civil(at).map(|c| c.date().to_string());
    let caption = format!(
        "time in UTC, {} to {}",
        day(from).unwrap_or_default(),
        day(to).unwrap_or_default()
    );
    text(
        &mut svg,
        "time",
        (f64::midpoint(LEFT, RIGHT), bottom + 52.0),
        &caption,
    );
    svg += "</svg>\n";
    svg
}

fn one(svg: &mut String, frame: &Frame, gauge: &GaugeAhead, at: (f64, f64), index: usize) {
    let sound = |e: &Expectation| e.mean.is_finite() && e.sd.is_finite();
    let expected: Vec<_> = gauge.expected.iter().filter(|(_, e)| sound(e)).collect();
    let edges = expected
        .iter()
        .flat_map(|(_, e)| [e.mean - BAND * e.sd, e.mean + BAND * e.sd]);
    let read = gauge.read.iter().map(|(_, v)| *v);
    let Some((low, high)) = extent(edges.chain(read).filter(|v| v.is_finite())) else {
        return;
    };
    // A limit near what happens is drawn in its place; one far off is told of in words, or it would flatten all else.
    let room = (high - low).max(1.0);
    let near = |v: &f64| (low - room..=high + room).contains(v);
    let shown = gauge.limits.iter().copied().filter(near);
    let (low, high) = extent(shown.chain([low, high])).unwrap_or((low, high));
    let scale = Scale::over(frame.shown(low), frame.shown(high), at);
    let mut label = format!("{}, {}", gauge.name, frame.unit());
    for limit in gauge.limits.iter().filter(|v| !near(v)) {
        let _ = write!(
            label,
            " (limit {} lies outside this picture)",
            frame.units.show(Dimension::Pressure, *limit)
        );
    }
    panel(svg, scale, &label, 3.0);
    let _ = writeln!(
        svg,
        "<clipPath id=\"gauge{index}\"><rect x=\"{LEFT}\" y=\"{}\" width=\"{}\" height=\"{TALL}\"/></clipPath>\
<g clip-path=\"url(#gauge{index})\">",
        at.0,
        RIGHT - LEFT
    );
    let dot = |at: Stamp, pascal: f64| (frame.x(at), scale.y(frame.shown(pascal)));
    let edge = |sign: f64| -> Vec<Dot> {
        let dots = expected
            .iter()
            .map(|(at, e)| dot(*at, e.mean + sign * BAND * e.sd));
        thin(&dots.collect::<Vec<_>>())
    };
    draw(svg, "band", &area(&edge(1.0), &edge(-1.0)));
    let mean: Vec<Dot> = expected.iter().map(|(at, e)| dot(*at, e.mean)).collect();
    draw(svg, "expectation", &line(&thin(&mean)));
    let read: Vec<Dot> = gauge.read.iter().map(|(at, v)| dot(*at, *v)).collect();
    draw(svg, "reading", &line(&thin(&read)));
    for limit in gauge.limits.iter().filter(|v| near(v)) {
        let y = scale.y(frame.shown(*limit));
        draw(svg, "limit", &line(&[(LEFT, y), (RIGHT, y)]));
    }
    *svg += "</g>\n";
}

fn rates(svg: &mut String, frame: &Frame, plot: &AheadPlot, at: (f64, f64)) {
    let number = |rate: f64| plot.units.number(Dimension::Rate, rate);
    let all = plot
        .rates
        .iter()
        .flat_map(|(_, r)| r.iter().map(|(_, q)| *q));
    let Some((low, high)) = extent(all.chain([0.0])) else {
        return;
    };
    let scale = Scale::over(number(low), number(high), at);
    panel(
        svg,
        scale,
        &format!(
            "rates into the ground, {}",
            plot.units.unit(Dimension::Rate)
        ),
        3.0,
    );
    let mut x = RIGHT - 10.0;
    for (index, (name, steps)) in plot.rates.iter().enumerate().rev() {
        let class = format!("well w{}", index % 4);
        let mut dots: Vec<Dot> = Vec::new();
        for (at, rate) in steps {
            let here = (frame.x(*at), scale.y(number(*rate)));
            if let Some(&(_, y)) = dots.last() {
                dots.push((here.0, y));
            }
            dots.push(here);
        }
        if let Some(&(_, y)) = dots.last() {
            dots.push((frame.x(frame.to), y));
        }
        draw(svg, &class, &line(&dots));
        // The names stand in a row above the panel, each with its own kind of line.
        let wide = 9.0 * f64::from(u32::try_from(name.chars().count()).unwrap_or(0));
        x -= wide;
        text(svg, "key", (x, at.0 - 12.0), name);
        draw(
            svg,
            &class,
            &line(&[(x - 36.0, at.0 - 17.0), (x - 6.0, at.0 - 17.0)]),
        );
        x -= 56.0;
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn names_stay_names_and_far_limits_are_told_in_words() {
        let at = |hour: i64| Stamp(hour * 3600 * Stamp::SECOND);
        let expected = |mean: f64| Expectation { mean, sd: 1e3 };
        let plot = AheadPlot {
            title: "<Moor>".into(),
            units: UnitSystem::Metric,
            now: at(1),
            gauges: vec![GaugeAhead {
                name: "G&1".into(),
                read: vec![(at(0), 1e6), (at(1), 1.001e6)],
                expected: vec![(at(2), expected(1.002e6)), (at(3), expected(1.003e6))],
                limits: vec![1.004e6, 9e6],
            }],
            rates: vec![("W".into(), vec![(at(1), 1e-3), (at(2), 0.0)])],
        };
        let svg = ahead_plot(&plot);
        assert!(
            svg.contains("&lt;Moor&gt;") && svg.contains("G&amp;1"),
            "{svg}"
        );
        assert!(svg.contains("limit 9000 kPa lies outside"), "{svg}");
        assert_eq!(svg.matches("class=\"limit\" d=\"M104").count(), 1, "{svg}");
        assert!(!svg.contains("NaN"), "{svg}");
    }
}
