//! Pictures of a gauge as self-contained SVG: reading, expectation with its band, departure.
//!
//! The text grows where the picture is shown narrow (a phone), by a media query on the picture's own width, and every second
//! time label goes. Colours are told apart by lightness alone too, so that they do for every eye and in grey print.

pub mod ahead;
mod axis;
mod frame;
mod loglog;
mod path;

use std::fmt::Write as _;

use borewake_model::units::UnitSystem;

use crate::record::{Expectation, Stamp};
use frame::{Frame, Scale, badge, draw, escaped, extent, text};
pub use loglog::{LogLog, log_log_plot};
use path::{Dot, area, line, runs, thin};

/// Standard deviations either side that hold 95 % of a normal distribution.
const BAND: f64 = 1.959_964;

const WIDTH: f64 = 800.0;
const LEFT: f64 = 104.0;
const RIGHT: f64 = 784.0;
/// Top and bottom of the upper and the lower panel.
const UPPER: (f64, f64) = (116.0, 330.0);
const LOWER: (f64, f64) = (380.0, 544.0);
/// Where the list of marks begins, and how far its lines are apart.
const LIST: (f64, f64) = (628.0, 30.0);
/// Height without marks.
const HEIGHT: f64 = 606.0;
/// Most ticks of the time axis.
const MOST_TIMES: i64 = 7;
/// Numbers as large as this are none: sums and bands of them would overflow.
const DRAWN: f64 = 1e300;

/// What is known of a gauge over a stretch of time.
#[derive(Debug, Clone)]
pub struct GaugePlot {
    /// Heading, such as the gauge's name and the site's.
    pub title: String,
    /// How numbers are shown.
    pub units: UnitSystem,
    /// In order of time.
    pub points: Vec<PlotPoint>,
    /// Instants to point out, each with a few words; listed below the picture in the order given.
    pub marks: Vec<(Stamp, String)>,
}

/// A gauge at one instant.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct PlotPoint {
    /// When.
    pub at: Stamp,
    /// What it showed \[Pa\].
    pub reading: Option<f64>,
    /// What it should have shown.
    pub expectation: Option<Expectation>,
}

impl PlotPoint {
    /// Reading minus expectation \[Pa\].
    fn departure(&self) -> Option<f64> {
        Some(self.reading? - self.expectation?.mean)
    }
}

/// Draws a gauge: above, its reading over the expectation and its 95 % band; below, the departure over the band about zero.
/// Not finite numbers are left out. A picture without points says so.
#[must_use]
pub fn gauge_plot(plot: &GaugePlot) -> String {
    picture(plot, &WATCHED)
}

/// Draws a gauge through the history of a fit: above, its reading over the fitted model; below, what is left.
#[must_use]
pub fn fit_plot(plot: &GaugePlot) -> String {
    picture(plot, &FITTED)
}

/// What the parts of a picture are called.
struct Words {
    expectation: &'static str,
    departure: &'static str,
}

const WATCHED: Words = Words {
    expectation: "expectation",
    departure: "departure",
};
const FITTED: Words = Words {
    expectation: "model",
    departure: "what is left",
};

fn picture(plot: &GaugePlot, words: &Words) -> String {
    let points = finite(&plot.points);
    let height = if plot.marks.is_empty() {
        HEIGHT
    } else {
        let lines = u32::try_from(plot.marks.len()).unwrap_or(u32::MAX);
        LIST.0 + LIST.1 * f64::from(lines)
    };
    let mut svg = head(&plot.title, height, words);
    match (points.first(), points.last()) {
        (Some(first), Some(last)) => {
            let frame = Frame {
                from: first.at,
                to: last.at,
                units: plot.units,
            };
            time_axis(&mut svg, &frame);
            upper(&mut svg, &frame, &points);
            lower(&mut svg, &frame, &points, words);
            marks(&mut svg, &frame, &plot.marks);
        }
        _ => text(
            &mut svg,
            "label",
            (LEFT, UPPER.0 + 40.0),
            "nothing was read in this time",
        ),
    }
    svg += "</svg>\n";
    svg
}

/// Points with not finite numbers taken out.
fn finite(points: &[PlotPoint]) -> Vec<PlotPoint> {
    let drawn = |v: f64| v.abs() < DRAWN;
    let sound = |e: &Expectation| drawn(e.mean) && drawn(e.sd) && e.sd >= 0.0;
    points
        .iter()
        .map(|p| PlotPoint {
            at: p.at,
            reading: p.reading.filter(|r| drawn(*r)),
            expectation: p.expectation.filter(sound),
        })
        .collect()
}

/// Heading, style, legend and the clips of the two panels.
fn head(title: &str, height: f64, words: &Words) -> String {
    let title = escaped(title);
    let clip = |name: &str, panel: (f64, f64)| {
        format!(
            "<clipPath id=\"{name}\"><rect x=\"{LEFT}\" y=\"{}\" width=\"{}\" height=\"{}\"/></clipPath>",
            panel.0,
            RIGHT - LEFT,
            panel.1 - panel.0
        )
    };
    format!(
        "<svg xmlns=\"http://www.w3.org/2000/svg\" viewBox=\"0 0 {WIDTH} {height}\" role=\"img\" aria-label=\"{title}\">\n\
<title>{title}</title>\n\
<style>{STYLE}</style>\n\
<defs>{}{}</defs>\n\
<rect class=\"paper\" width=\"{WIDTH}\" height=\"{height}\"/>\n\
<text class=\"title\" x=\"16\" y=\"32\">{title}</text>\n\
<g class=\"legend\"><path class=\"reading\" d=\"M16 62h34\"/><text x=\"58\" y=\"68\">reading</text>\
<path class=\"expectation\" d=\"M210 62h34\"/><text x=\"252\" y=\"68\">{}</text>\
<rect class=\"band\" x=\"450\" y=\"52\" width=\"34\" height=\"20\"/><text x=\"492\" y=\"68\">95 % band</text></g>\n",
        clip("upper", UPPER),
        clip("lower", LOWER),
        words.expectation,
    )
}

/// Ink, blue and vermilion: apart in lightness and for every kind of colour sight.
const STYLE: &str = "\
text{font-family:system-ui,-apple-system,\"Segoe UI\",\"DejaVu Sans\",sans-serif;font-size:16px;fill:#22303c}\
.title{font-size:20px;font-weight:600}.label{font-weight:600}\
.value{text-anchor:end}.time,.number{text-anchor:middle}.number{fill:#fff;font-size:14px;font-weight:600}\
.paper{fill:#fff}.grid{stroke:#dfe4e8;stroke-width:1;fill:none}.frame{stroke:#8795a1;stroke-width:1;fill:none}\
.band{fill:#a9cbea;fill-opacity:.75}\
.expectation,.reading,.beyond{fill:none;stroke-linejoin:round;stroke-linecap:round}\
.expectation{stroke:#1f6fb5;stroke-width:2.4}.reading{stroke:#17212b;stroke-width:1.4}\
.beyond{stroke:#c8431b;stroke-width:2.4}\
.mark{stroke:#c8431b;stroke-width:1.4;stroke-dasharray:5 4;fill:none}.dot{fill:#c8431b}\
@media (max-width:560px){text{font-size:25px}.title{font-size:28px}.number{font-size:20px}.odd{display:none}\
.reading{stroke-width:2.2}.expectation{stroke-width:3.8}.beyond,.mark{stroke-width:3.4}}";

/// The reading over the expectation and its band.
fn upper(svg: &mut String, frame: &Frame, points: &[PlotPoint]) {
    let readings = points.iter().filter_map(|p| p.reading);
    let means = points.iter().filter_map(|p| Some(p.expectation?.mean));
    let Some((low, high)) = extent(readings.chain(means)) else {
        return text(
            svg,
            "label",
            (LEFT, UPPER.0 + 40.0),
            "nothing was read in this time",
        );
    };
    // The band may widen the scale, but a band far wider than all that happened must not flatten it.
    let room = 0.5 * (high - low);
    let edges = points.iter().filter_map(|p| p.expectation).flat_map(|e| {
        let half = BAND * e.sd;
        [e.mean - half, e.mean + half]
    });
    let (low, high) = extent(edges.map(|v| v.clamp(low - room, high + room)))
        .map_or((low, high), |(l, h)| (low.min(l), high.max(h)));
    let scale = Scale::over(frame.shown(low), frame.shown(high), UPPER);
    panel(svg, scale, &format!("pressure, {}", frame.unit()), 5.0);
    let dot = |at: Stamp, pascal: f64| (frame.x(at), scale.y(frame.shown(pascal)));
    *svg += "<g clip-path=\"url(#upper)\">";
    let expected = points.iter().map(|p| Some((p.at, p.expectation?)));
    let gap = gap_of(points);
    for run in runs(expected, |a, b| gap(a.0, b.0)) {
        let edge = |sign: f64| -> Vec<Dot> {
            let dots = run
                .iter()
                .map(|(at, e)| dot(*at, e.mean + sign * BAND * e.sd));
            thin(&dots.collect::<Vec<_>>())
        };
        draw(svg, "band", &area(&edge(1.0), &edge(-1.0)));
        let dots: Vec<Dot> = run.iter().map(|(at, e)| dot(*at, e.mean)).collect();
        draw(svg, "expectation", &line(&thin(&dots)));
    }
    let read = points.iter().map(|p| Some((p.at, p.reading?)));
    for run in runs(read, |a, b| gap(a.0, b.0)) {
        let dots: Vec<Dot> = run.iter().map(|(at, r)| dot(*at, *r)).collect();
        draw(svg, "reading", &line(&thin(&dots)));
    }
    *svg += "</g>\n";
}

/// The departure over the band about zero; what lies outside the band stands out.
fn lower(svg: &mut String, frame: &Frame, points: &[PlotPoint], words: &Words) {
    let departures = points.iter().filter_map(PlotPoint::departure);
    let (low, high) = extent(departures.chain([0.0])).unwrap_or((0.0, 0.0));
    let mut halves: Vec<f64> = points
        .iter()
        .filter_map(|p| Some(BAND * p.expectation?.sd))
        .collect();
    halves.sort_by(f64::total_cmp);
    let usual = halves.get(halves.len() / 2).copied().unwrap_or(0.0);
    let (low, high) = (low.min(-1.4 * usual), high.max(1.4 * usual));
    let scale = Scale::over(frame.shown(low), frame.shown(high), LOWER);
    let label = format!("{}, {}", words.departure, frame.unit());
    panel(svg, scale, &label, 5.0);
    let dot = |at: Stamp, pascal: f64| (frame.x(at), scale.y(frame.shown(pascal)));
    *svg += "<g clip-path=\"url(#lower)\">";
    let gap = gap_of(points);
    let expected = points.iter().map(|p| Some((p.at, p.expectation?.sd)));
    for run in runs(expected, |a, b| gap(a.0, b.0)) {
        let edge = |sign: f64| -> Vec<Dot> {
            let dots = run.iter().map(|(at, sd)| dot(*at, sign * BAND * sd));
            thin(&dots.collect::<Vec<_>>())
        };
        draw(svg, "band", &area(&edge(1.0), &edge(-1.0)));
    }
    let zero = scale.y(0.0);
    draw(svg, "expectation", &line(&[(LEFT, zero), (RIGHT, zero)]));
    let departures = |outside: bool| {
        points.iter().map(move |p| {
            let departure = p.departure()?;
            let beyond = departure.abs() > BAND * p.expectation?.sd;
            (beyond || !outside).then_some((p.at, departure))
        })
    };
    for (outside, class) in [(false, "reading"), (true, "beyond")] {
        for run in runs(departures(outside), |a, b| gap(a.0, b.0)) {
            let dots: Vec<Dot> = run.iter().map(|(at, d)| dot(*at, *d)).collect();
            draw(svg, class, &line(&thin(&dots)));
        }
    }
    *svg += "</g>\n";
}

/// Whether two instants are so far apart that no line joins them: more than two and a half times the usual distance.
fn gap_of(points: &[PlotPoint]) -> impl Fn(Stamp, Stamp) -> bool + use<> {
    let mut steps: Vec<i64> = points
        .windows(2)
        .filter_map(|pair| match pair {
            [a, b] => Some(b.at.0.saturating_sub(a.at.0)),
            _ => None,
        })
        .collect();
    steps.sort_unstable();
    let usual = steps.get(steps.len() / 2).copied().unwrap_or(i64::MAX / 4);
    let most = usual.saturating_mul(5) / 2;
    move |a, b| b.0.saturating_sub(a.0) > most
}

/// Frame, grid, ticks and label of a panel.
fn panel(svg: &mut String, scale: Scale, label: &str, count: f64) {
    let (top, bottom) = scale.panel;
    text(svg, "label", (LEFT, top - 12.0), label);
    for (value, shown) in axis::values(scale.low, scale.high, count) {
        let y = scale.y(value);
        draw(svg, "grid", &line(&[(LEFT, y), (RIGHT, y)]));
        text(svg, "value", (LEFT - 8.0, y + 6.0), &shown);
    }
    let (width, height) = (RIGHT - LEFT, bottom - top);
    let _ = writeln!(
        svg,
        "<rect class=\"frame\" x=\"{LEFT}\" y=\"{top}\" width=\"{width}\" height=\"{height}\"/>"
    );
}

/// Ticks of the time axis below both panels, and what it counts.
fn time_axis(svg: &mut String, frame: &Frame) {
    for (index, (at, shown)) in axis::times(frame.from, frame.to, MOST_TIMES)
        .into_iter()
        .enumerate()
    {
        let x = frame.x(at);
        for (top, bottom) in [UPPER, LOWER] {
            draw(svg, "grid", &line(&[(x, top), (x, bottom)]));
        }
        let class = if index % 2 == 1 { "time odd" } else { "time" };
        text(svg, class, (x, LOWER.1 + 26.0), &shown);
    }
    let day = |at| axis::civil(at).map(|c| c.date().to_string());
    let (from, to) = (day(frame.from), day(frame.to));
    let caption = format!(
        "time in UTC, {} to {}",
        from.unwrap_or_default(),
        to.unwrap_or_default()
    );
    text(
        svg,
        "time",
        (f64::midpoint(LEFT, RIGHT), LOWER.1 + 54.0),
        &caption,
    );
}

/// Numbered lines through both panels, and the list that says what they are.
fn marks(svg: &mut String, frame: &Frame, marks: &[(Stamp, String)]) {
    let mut placed: Vec<Dot> = Vec::new();
    let mut list = LIST.0;
    for (index, (at, words)) in marks.iter().enumerate() {
        let number = (index + 1).to_string();
        if (frame.from..=frame.to).contains(at) {
            let x = frame.x(*at);
            for (top, bottom) in [UPPER, LOWER] {
                draw(svg, "mark", &line(&[(x, top), (x, bottom)]));
            }
            // Neighbours too close to stand side by side go one below the other.
            let mut y = UPPER.0 + 14.0;
            while placed
                .iter()
                .any(|p| (p.0 - x).abs() < 28.0 && (p.1 - y).abs() < 28.0)
                && y < UPPER.1 - 30.0
            {
                y += 28.0;
            }
            placed.push((x, y));
            badge(svg, (x, y), &number);
        }
        badge(svg, (30.0, list - 6.0), &number);
        let minute = axis::civil(*at).map(|c| c.strftime("%Y-%m-%d %H:%M").to_string());
        let words = format!("{}  {words}", minute.unwrap_or_default());
        text(svg, "item", (52.0, list), &words);
        list += LIST.1;
    }
}

#[cfg(test)]
mod tests;
